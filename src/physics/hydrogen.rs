//! Hydrogen-1: levels, radial functions, line wavelengths and absorption oscillator strengths.
//!
//! Levels have the reduced-mass Rydberg constant and the relativistic shift averaged over the fine
//! structure of the level (without it H-alpha is 0.09 A = 4 km/s off); the splitting itself (0.37 1/cm in
//! n = 2) and the Lamb shift are neglected. Oscillator strengths are averages over the fine structure, from exact radial functions
//! integrated numerically; the reduced mass cancels to 5e-4. Accuracy: `validate_hydrogen_lines`
//! (wavelengths and f values against atomic data bases).

use std::sync::OnceLock;

use super::constants::RYDBERG_H_PER_CM;
use crate::numerics::quadrature::panels;
use statrs::function::gamma::ln_gamma;

/// Fine-structure constant (CODATA 2018).
const FINE_STRUCTURE: f64 = 7.297_352_569_3e-3;

/// A line of hydrogen, named by the principal quantum numbers of its levels.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, PartialOrd, Ord)]
pub struct Line {
    /// Principal quantum number of the lower level, at least 1.
    pub lower: u32,
    /// Principal quantum number of the upper level, above `lower`.
    pub upper: u32,
}

impl Line {
    /// Names a line.
    ///
    /// # Panics
    /// If not `1 <= lower < upper`.
    pub fn new(lower: u32, upper: u32) -> Self {
        assert!(1 <= lower && lower < upper, "no hydrogen line from level {lower} to {upper}");
        Line { lower, upper }
    }

    /// Vacuum wavelength of the line's centre, A.
    pub fn wave_vac_aa(self) -> f64 {
        1e8 / (energy_level_per_cm(self.upper) - energy_level_per_cm(self.lower))
    }

    /// Detuning of a vacuum wavelength, A, on a scale proportional to frequency:
    /// `wave0 (wave - wave0) / wave`. Stark profiles are symmetric on this scale and not in
    /// wavelength; the two agree near the centre.
    pub fn detuning_aa(self, wave_vac_aa: f64) -> f64 {
        let centre = self.wave_vac_aa();
        centre * (wave_vac_aa - centre) / wave_vac_aa
    }

    /// Absorption oscillator strength, averaged over the sublevels of the lower level.
    ///
    /// # Reference
    /// Bethe & Salpeter 1957, section 60: f = (1/3) dE max(l, l')/(2 l + 1) R^2 per sublevel, dE in Rydberg.
    pub fn oscillator_strength(self) -> f64 {
        static STORE: PerLine = PerLine::new();
        STORE.get_or_compute(self, Self::compute_oscillator_strength)
    }

    fn compute_oscillator_strength(self) -> f64 {
        let (n, u) = (f64::from(self.lower), f64::from(self.upper));
        let energy_ry = 1.0 / (n * n) - 1.0 / (u * u);
        let mut strength = 0.0;
        for l in 0..self.lower {
            for l_upper in [l.wrapping_sub(1), l + 1] {
                if l_upper < self.upper {
                    let integral = radial_integral(self.upper, l_upper, self.lower, l);
                    strength += f64::from(l.max(l_upper)) * integral * integral;
                }
            }
        }
        energy_ry * strength / (3.0 * n * n)
    }

    /// Natural (radiative) half width at half maximum of the line, A: half the sum of the mean
    /// decay rates of both levels.
    pub fn natural_hwhm_aa(self) -> f64 {
        let wave = self.wave_vac_aa();
        let rate = decay_rate_per_s(self.upper) + decay_rate_per_s(self.lower);
        rate * wave * wave * 1e-8 / (4.0 * std::f64::consts::PI * super::constants::LIGHT_SPEED_CM_S)
    }
}

/// A property of lines, computed at first use: the radial integrals behind it cost milliseconds.
pub struct PerLine([[OnceLock<f64>; PerLine::LEVELS]; PerLine::LEVELS]);

impl PerLine {
    /// Lines between levels up to 40 are kept; others are computed each time.
    const LEVELS: usize = 41;

    /// An empty store.
    #[allow(clippy::new_without_default)]
    pub const fn new() -> Self {
        PerLine([const { [const { OnceLock::new() }; PerLine::LEVELS] }; PerLine::LEVELS])
    }

    /// The kept value, or the computed one.
    pub fn get_or_compute(&self, line: Line, compute: impl Fn(Line) -> f64) -> f64 {
        match self.0.get(line.lower as usize).and_then(|row| row.get(line.upper as usize)) {
            Some(slot) => *slot.get_or_init(|| compute(line)),
            None => compute(line),
        }
    }
}

/// Energy of a level above the ground state, 1/cm, averaged over the states of both levels.
///
/// # Reference
/// Bethe & Salpeter 1957, eq. 17.1: the shift alpha^2 R/n^3 (1/(j + 1/2) - 3/(4 n)), whose mean over the
/// 2 n^2 states has (2 n - 1)/n^2 for 1/(j + 1/2).
pub fn energy_level_per_cm(n: u32) -> f64 {
    let binding = |n: f64| {
        let relativistic = FINE_STRUCTURE.powi(2) / n.powi(3) * ((2.0 * n - 1.0) / (n * n) - 0.75 / n);
        1.0 / (n * n) + relativistic
    };
    RYDBERG_H_PER_CM * (binding(1.0) - binding(f64::from(n)))
}

/// Spontaneous decay rate of a level, averaged over its sublevels, 1/s.
pub fn decay_rate_per_s(n: u32) -> f64 {
    // A = 8 pi^2 e^2/(m c) f (g_low/g_up) / wave^2 = 0.667025 cm^2/s ... (CODATA).
    const CLASSICAL_CM2_PER_S: f64 = 0.667_025_3;
    let up = f64::from(n);
    (1..n)
        .map(|lower| {
            let line = Line::new(lower, n);
            let wave_cm = line.wave_vac_aa() * 1e-8;
            let weight = (f64::from(lower) / up).powi(2);
            CLASSICAL_CM2_PER_S * weight * line.oscillator_strength() / (wave_cm * wave_cm)
        })
        .sum()
}

/// Dipole integral of r between two radial functions, Bohr radii; both functions are positive near
/// the nucleus, which fixes its sign.
pub fn radial_integral(n: u32, l: u32, n2: u32, l2: u32) -> f64 {
    // The more compact state limits the range; r = y^2 evens out the oscillations.
    let compact = f64::from(n.min(n2));
    let y_max = (2.0 * compact * compact + 45.0 * compact).sqrt();
    let count = 20 + 4 * n.max(n2) as usize;
    panels(0.0, y_max, count)
        .map(|(y, weight)| {
            let r = y * y;
            weight * 2.0 * y * r * r * r * radial_function(n, l, r) * radial_function(n2, l2, r)
        })
        .sum()
}

/// Normalised radial function R_nl at a radius in Bohr radii.
fn radial_function(n: u32, l: u32, radius: f64) -> f64 {
    let (nf, lf) = (f64::from(n), f64::from(l));
    let x = 2.0 * radius / nf;
    let order = 2.0 * lf + 1.0;
    // Laguerre polynomials by upward recurrence.
    let (mut previous, mut current) = (0.0, 1.0);
    for k in 0..(n - l - 1) {
        let k = f64::from(k);
        let next = ((2.0 * k + 1.0 + order - x) * current - (k + order) * previous) / (k + 1.0);
        (previous, current) = (current, next);
    }
    let ln_norm =
        0.5 * (3.0 * (2.0 / nf).ln() + ln_gamma(nf - lf) - (2.0 * nf).ln() - ln_gamma(nf + lf + 1.0));
    (ln_norm + lf * x.max(f64::MIN_POSITIVE).ln() - 0.5 * x).exp() * current
}
