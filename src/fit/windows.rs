//! The wavelength windows in which Balmer lines are fitted.

use crate::physics::hydrogen::Line;

/// One Balmer line's window.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Window {
    /// Name as astronomers write it.
    pub name: &'static str,
    /// Upper level of the line.
    pub upper: u32,
    /// Window in the star's rest frame, vacuum A: from half way to the neighbours at most.
    pub range_vac_aa: (f64, f64),
    /// Coefficients of the normalising polynomial: 3 where continuum is seen on both sides, 2 where
    /// neighbouring lines overlap and a curvature would eat the line.
    pub coefficients: usize,
    /// Whether the window is fitted unless the configuration says otherwise.
    pub is_default: bool,
}

/// All windows, redmost first. H-alpha is off by default: it forms highest, where departures from LTE
/// begin, and many spectrographs cut it or mix it with sky. H9 is off by
/// default: it says little that H8 does not, and it is where flux calibrations end.
pub const WINDOWS: [Window; 7] = [
    Window { name: "H-alpha", upper: 3, range_vac_aa: (6414.0, 6714.0), coefficients: 3, is_default: false },
    Window { name: "H-beta", upper: 4, range_vac_aa: (4712.0, 5013.0), coefficients: 3, is_default: true },
    Window { name: "H-gamma", upper: 5, range_vac_aa: (4222.0, 4462.0), coefficients: 3, is_default: true },
    Window { name: "H-delta", upper: 6, range_vac_aa: (4020.0, 4186.0), coefficients: 2, is_default: true },
    Window { name: "H-epsilon", upper: 7, range_vac_aa: (3926.0, 4018.0), coefficients: 2, is_default: true },
    Window { name: "H8", upper: 8, range_vac_aa: (3862.0, 3924.0), coefficients: 2, is_default: true },
    Window { name: "H9", upper: 9, range_vac_aa: (3818.0, 3861.0), coefficients: 2, is_default: false },
];

impl Window {
    /// Rest wavelength of the line, vacuum A.
    pub fn centre_vac_aa(&self) -> f64 {
        Line { lower: 2, upper: self.upper }.wave_vac_aa()
    }
}
