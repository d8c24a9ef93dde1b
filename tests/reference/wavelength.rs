//! Air and vacuum wavelengths against published pairs and against an independent dispersion formula.

use emberline::physics::wavelength::{
    air_refractive_index, air_to_vacuum_aa, doppler_factor, vacuum_to_air_aa,
};

/// Air and vacuum wavelengths of the same lines, A: NIST Atomic Spectra Database (Ritz values, air
/// by its own index of refraction after Peck & Reeder 1972), written down from memory to the digits
/// given; a wrong digit would show, since the pairs were not computed with our formula.
const PAIRS_AA: &[(&str, f64, f64)] = &[
    ("Ca II K", 3933.663, 3934.777),
    ("Ca II H", 3968.469, 3969.591),
    ("Na I D2", 5889.951, 5891.583),
    ("Na I D1", 5895.924, 5897.558),
];

/// The pairs are given to 0.001 A; each member may be rounded by half of that.
const PAIR_TOLERANCE_AA: f64 = 0.0011;

#[test]
fn validate_air_and_vacuum_against_published_pairs() {
    for (line, air_aa, vacuum_aa) in PAIRS_AA {
        let found_aa = vacuum_to_air_aa(*vacuum_aa);
        assert!((found_aa - air_aa).abs() < PAIR_TOLERANCE_AA, "{line}: {found_aa} A, published {air_aa} A");
        let found_aa = air_to_vacuum_aa(*air_aa);
        assert!(
            (found_aa - vacuum_aa).abs() < PAIR_TOLERANCE_AA,
            "{line}: {found_aa} A, published {vacuum_aa} A"
        );
    }
}

/// Refractivity of standard air after Edlen (1966, Metrologia 2, 71) as recommended by Morton (2000,
/// ApJS 130, 403, eq. 8): a fit to other measurements than Ciddor's.
fn edlen_1966_refractive_index(wave_vac_aa: f64) -> f64 {
    let sigma2 = (1e4 / wave_vac_aa).powi(2);
    1.0 + 8.342_54e-5 + 2.406_147e-2 / (130.0 - sigma2) + 1.599_8e-4 / (38.9 - sigma2)
}

/// The two formulae differ by up to 8e-9 in the optical (2.4 m/s), which is the measurement itself.
const INDEX_TOLERANCE: f64 = 1e-8;

#[test]
fn validate_refractive_index_against_edlen_1966() {
    for wave_aa in (3000..=10_000).step_by(100).map(f64::from) {
        let difference = air_refractive_index(wave_aa) - edlen_1966_refractive_index(wave_aa);
        assert!(difference.abs() < INDEX_TOLERANCE, "{wave_aa} A: {difference:e}");
    }
}

#[test]
fn verif_conversions_are_inverse_to_each_other() {
    for wave_aa in (2001..12_000).step_by(37).map(f64::from) {
        let there_and_back = air_to_vacuum_aa(vacuum_to_air_aa(wave_aa));
        assert!((there_and_back - wave_aa).abs() < 1e-9, "{wave_aa} A: {there_and_back} A");
    }
    assert_eq!(vacuum_to_air_aa(1999.0), 1999.0);
    assert_eq!(air_to_vacuum_aa(1999.0), 1999.0);
}

#[test]
fn verif_doppler_factors_multiply_to_one_and_start_with_beta() {
    assert_eq!(doppler_factor(0.0), 1.0);
    for velocity_km_s in [1.0, 300.0, 30_000.0] {
        let product = doppler_factor(velocity_km_s) * doppler_factor(-velocity_km_s);
        assert!((product - 1.0).abs() < 1e-15);
    }
    // 100 km/s over c = 299 792.458 km/s, first order, with the second-order term beta^2 / 2.
    let beta: f64 = 100.0 / 299_792.458;
    assert!((doppler_factor(100.0) - (1.0 + beta + beta * beta / 2.0)).abs() < beta.powi(3));
}
