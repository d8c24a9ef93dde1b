//! Hydrogen lines against atomic data bases.

use emberline::physics::hydrogen::{Line, decay_rate_per_s, energy_level_per_cm};

/// Multiplet-averaged wavelengths: NIST ASD, vacuum, A (H-alpha .. H-delta, Ly-alpha, Pa-alpha),
/// averaged over fine structure there.
/// f values: Wiese & Fuhr 2009 (J. Phys. Chem. Ref. Data 38, 565), multiplet means.
const LINES: [(u32, u32, f64, f64); 8] = [
    (1, 2, 1215.670, 0.41641),
    (1, 3, 1025.722, 0.079142),
    (1, 4, 972.537, 0.029006),
    (2, 3, 6564.60, 0.64108),
    (2, 4, 4862.69, 0.11938),
    (2, 5, 4341.69, 0.044694),
    (2, 6, 4102.90, 0.022105),
    (3, 4, 18756.1, 0.84254),
];

#[test]
fn validate_hydrogen_lines() {
    for (lower, upper, wave_vac_aa, f) in LINES {
        let line = Line::new(lower, upper);
        // 4e-6 in wavelength: Lamb shifts, and means with other weights. 1e-3 in f: the reduced mass.
        assert!(
            (line.wave_vac_aa() / wave_vac_aa - 1.0).abs() < 4e-6,
            "{lower}-{upper} {}",
            line.wave_vac_aa()
        );
        assert!(
            (line.oscillator_strength() / f - 1.0).abs() < 1e-3,
            "{lower}-{upper} {}",
            line.oscillator_strength()
        );
    }
    assert!((energy_level_per_cm(2) - 82_259.1).abs() < 0.3);
    // Wiese & Fuhr 2009: A(2p-1s) = 6.2649e8/s; level 2 averages 2p (12 of 16 states).
    assert!((decay_rate_per_s(2) / (6.2649e8 * 0.75) - 1.0).abs() < 2e-3, "{}", decay_rate_per_s(2));
}

/// f for n' -> infinity follows the Kramers formula times a Gaunt factor near 1 (Menzel & Pekeris 1935).
#[test]
fn verify_high_lines_follow_kramers() {
    for (lower, upper) in [(2, 40), (3, 60), (5, 60)] {
        let (n, u) = (f64::from(lower), f64::from(upper));
        let kramers = 32.0 / (3.0 * std::f64::consts::PI * 3f64.sqrt())
            * (1.0 / (n * n) - 1.0 / (u * u)).powi(-3)
            / (n.powi(5) * u.powi(3));
        let gaunt = Line::new(lower, upper).oscillator_strength() / kramers;
        assert!((0.85..1.0).contains(&gaunt), "{lower}-{upper} gaunt {gaunt}");
    }
}
