//! Absorption by the negative hydrogen ion.
//!
//! Fits of John (1988, A&A 193, 189) to the bound-free calculation of Wishart (1979) and the
//! free-free calculation of Bell & Berrington (1987).

/// Photodetachment threshold, micrometres.
const THRESHOLD_UM: f64 = 1.6419;

/// Photodetachment cross-section, cm^2 per H- ion, without stimulated emission.
///
/// # Reference
/// John 1988, eqs 4-5; domain 0.125 - 1.6419 micrometres, clamped at the short end.
pub fn bound_free_cm2(wave_vac_aa: f64) -> f64 {
    const COEFFICIENTS: [f64; 6] = [152.519, 49.534, -118.858, 92.536, -34.194, 4.982];
    let wave_um = (wave_vac_aa * 1e-4).max(0.125);
    if wave_um >= THRESHOLD_UM {
        return 0.0;
    }
    let excess = 1.0 / wave_um - 1.0 / THRESHOLD_UM;
    let series = COEFFICIENTS.iter().rev().fold(0.0, |sum, coefficient| sum * excess.sqrt() + coefficient);
    1e-18 * wave_um.powi(3) * excess.powf(1.5) * series
}

/// Coefficients A..F for n = 1..6 at wavelengths above 0.3645 micrometres (John 1988, table 3a).
const LONG: [[f64; 6]; 6] = [
    [0.0, 0.0, 0.0, 0.0, 0.0, 0.0],
    [2483.346, 285.827, -2054.291, 2827.776, -1341.537, 208.952],
    [-3449.889, -1158.382, 8746.523, -11_485.632, 5303.609, -812.939],
    [2200.040, 2427.719, -13_651.105, 16_755.524, -7510.494, 1132.738],
    [-696.271, -1841.400, 8624.970, -10_051.530, 4400.067, -655.020],
    [88.283, 444.517, -1863.864, 2095.288, -901.788, 132.985],
];

/// The same between 0.1823 and 0.3645 micrometres (John 1988, table 3b).
const SHORT: [[f64; 6]; 6] = [
    [518.1021, -734.8666, 1021.1775, -479.0721, 93.1373, -6.4285],
    [473.2636, 1443.4137, -1977.3395, 922.3575, -178.9275, 12.3600],
    [-482.2089, -737.1616, 1096.8827, -521.1341, 101.7963, -7.0571],
    [115.5291, 169.6374, -245.6490, 114.2430, -21.9972, 1.5097],
    [0.0, 0.0, 0.0, 0.0, 0.0, 0.0],
    [0.0, 0.0, 0.0, 0.0, 0.0, 0.0],
];

/// Free-free coefficients of one wavelength: polynomial in theta^(1/2) left to evaluate.
#[derive(Debug, Clone, Copy)]
pub struct FreeFree([f64; 6]);

impl FreeFree {
    /// Takes the wavelength part of John 1988, eq. 6; clamped below 0.1823 micrometres.
    pub fn at(wave_vac_aa: f64) -> Self {
        let wave_um = (wave_vac_aa * 1e-4).max(0.1823);
        let table = if wave_um > 0.3645 { &LONG } else { &SHORT };
        FreeFree(std::array::from_fn(|n| {
            let [a, b, c, d, e, f] = table[n];
            let inverse = 1.0 / wave_um;
            wave_um * wave_um * a + b + inverse * (c + inverse * (d + inverse * (e + inverse * f)))
        }))
    }

    /// Absorption per neutral atom and unit electron pressure, cm^4 dyn^-1, stimulated emission
    /// included; domain 1 400 - 10 080 K, used up to where H- is a trace.
    pub fn cm4_per_dyn(&self, temperature_k: f64) -> f64 {
        let root = (5040.0 / temperature_k).sqrt();
        // Powers (n + 1) / 2 for n = 1 .. 6.
        let series = self.0.iter().rev().fold(0.0, |sum, coefficient| sum * root + coefficient);
        (1e-29 * series * root * root).max(0.0)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Maximum of Wishart (1979): 4.00e-17 cm^2 near 0.85 micrometres (from memory); zero beyond threshold.
    #[test]
    fn validate_photodetachment_maximum() {
        let peak = (4000..16_000).step_by(10).map(|wave| (bound_free_cm2(f64::from(wave)), wave));
        let (height, wave) = peak.max_by(|a, b| a.0.total_cmp(&b.0)).unwrap_or_default();
        assert!((height / 4.00e-17 - 1.0).abs() < 0.02, "{height:e}");
        assert!((8200..8800).contains(&wave), "{wave}");
        assert_eq!(bound_free_cm2(16_420.0), 0.0);
    }

    /// The two tables of the free-free fit meet at 0.3645 micrometres.
    #[test]
    fn verify_free_free_tables_join() {
        for temperature_k in [5000.0, 7000.0, 10_000.0] {
            let at = |wave: f64| FreeFree::at(wave).cm4_per_dyn(temperature_k);
            assert!((at(3644.9) / at(3645.1) - 1.0).abs() < 0.02, "{} {}", at(3644.9), at(3645.1));
        }
    }
}
