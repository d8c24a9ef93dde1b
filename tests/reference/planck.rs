//! The Planck function against its integral laws.

use emberline::physics::constants::{BOLTZMANN_ERG_K, PLANCK_ERG_S, STEFAN_BOLTZMANN_CGS};
use emberline::physics::planck::{planck_per_hz, planck_slope_per_hz};

/// Trapezoids in ln(nu) over everything that carries energy, 1e-6 < h nu / kT < 200.
fn integrate(temperature_k: f64, function: impl Fn(f64, f64) -> f64) -> f64 {
    const STEPS: usize = 2000;
    let (low, high) = (1e-6_f64.ln(), 200.0_f64.ln());
    let step = (high - low) / STEPS as f64;
    (0..=STEPS)
        .map(|i| {
            let photon = (low + step * i as f64).exp();
            let frequency_hz = photon * BOLTZMANN_ERG_K * temperature_k / PLANCK_ERG_S;
            function(frequency_hz, temperature_k) * frequency_hz * step
        })
        .sum()
}

/// Stefan and Boltzmann: the integral is sigma T^4 / pi, its slope 4 sigma T^3 / pi (CODATA 2018
/// gives sigma to 10 digits).
#[test]
fn validate_planck_integral() {
    const TOLERANCE: f64 = 1e-9; // of sigma's last printed digit
    for temperature_k in [1_500.0_f64, 5_772.0, 12_000.0, 80_000.0, 3e6] {
        let exact = STEFAN_BOLTZMANN_CGS * temperature_k.powi(4) / std::f64::consts::PI;
        let found = integrate(temperature_k, planck_per_hz);
        assert!((found / exact - 1.0).abs() < TOLERANCE, "{temperature_k} K: {found:e}, {exact:e}");
        let slope = integrate(temperature_k, planck_slope_per_hz);
        let exact_slope = 4.0 * exact / temperature_k;
        assert!((slope / exact_slope - 1.0).abs() < TOLERANCE, "{temperature_k} K: {slope:e}");
    }
}

/// Wien's displacement in frequency: the maximum is at h nu / kT = 2.821 439 372.
#[test]
fn validate_wien_displacement() {
    let temperature_k = 10_000.0;
    let peak_hz = 2.821_439_372 * BOLTZMANN_ERG_K * temperature_k / PLANCK_ERG_S;
    let peak = planck_per_hz(peak_hz, temperature_k);
    assert!(peak > planck_per_hz(peak_hz * 1.0001, temperature_k));
    assert!(peak > planck_per_hz(peak_hz * 0.9999, temperature_k));
}

/// Far in the Wien tail nothing overflows.
#[test]
fn verif_planck_tail_is_finite() {
    for (function, name) in [(planck_per_hz as fn(f64, f64) -> f64, "B"), (planck_slope_per_hz, "dB/dT")] {
        let value = function(1e20, 1_500.0);
        assert!(value == 0.0, "{name} = {value}");
    }
}
