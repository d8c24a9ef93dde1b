//! The Planck function and the hydrogen gas against laws and textbook values.

use emberline::physics::constants::{BOLTZMANN_ERG_K, STEFAN_BOLTZMANN_CGS};
use emberline::physics::planck::{planck_per_hz, planck_slope_per_hz};
use emberline::physics::state::{State, Thermodynamics};

/// Stefan-Boltzmann law: the integral of B_nu is sigma T^4 / pi, that of its slope 4 sigma T^3 / pi.
#[test]
fn validate_planck_integral() {
    for temperature_k in [6000.0_f64, 25_000.0] {
        let (mut flux, mut slope) = (0.0, 0.0);
        let step: f64 = 1e-3;
        for i in 0..14_000 {
            let hz = 2.08e10 * temperature_k * 1e-4 * (step * f64::from(i)).exp();
            flux += step * hz * planck_per_hz(hz, temperature_k);
            slope += step * hz * planck_slope_per_hz(hz, temperature_k);
        }
        let exact = STEFAN_BOLTZMANN_CGS * temperature_k.powi(4) / std::f64::consts::PI;
        assert!((flux / exact - 1.0).abs() < 1e-6, "{flux:e} against {exact:e}");
        assert!((slope / (4.0 * exact / temperature_k) - 1.0).abs() < 1e-6);
    }
}

/// Textbook: hydrogen at an electron pressure of 200 dyn/cm^2 is half ionised near 9 600 K (Carroll &
/// Ostlie 1996, fig. 8.8; common practice).
#[test]
fn validate_half_ionisation() {
    let state = State::new(9600.0, 600.0);
    let ionised = state.protons_per_cm3 / (state.protons_per_cm3 + state.neutrals_per_cm3);
    assert!((ionised - 0.5).abs() < 0.05, "{ionised}");
}

#[test]
fn validate_limits_of_ionisation() {
    let hot = State::new(60_000.0, 1e3);
    let half = 1e3 / (2.0 * BOLTZMANN_ERG_K * 60_000.0);
    assert!((hot.electrons_per_cm3 / half - 1.0).abs() < 1e-3);
    let cold = State::new(4000.0, 1e4);
    assert!(cold.electrons_per_cm3 / cold.neutrals_per_cm3 < 1e-6);
    // Pure hydrogen below 5 000 K and this pressure is partly molecular.
    assert!(cold.h2_per_cm3 > 1e-4 * cold.neutrals_per_cm3);
}

/// A monatomic gas without internal states: the adiabatic gradient is 2/5 on both sides of the
/// ionisation zone, and falls below 0.15 within it (Cox & Giuli 1968; common practice).
#[test]
fn validate_adiabatic_gradient() {
    let gradient = |t: f64, p: f64| Thermodynamics::new(t, p).adiabatic_gradient;
    assert!((gradient(200_000.0, 1e4) - 0.4).abs() < 0.005, "{}", gradient(200_000.0, 1e4));
    assert!((gradient(5500.0, 1e4) - 0.4).abs() < 0.03, "{}", gradient(5500.0, 1e4));
    assert!(gradient(13_000.0, 1e5) < 0.15, "{}", gradient(13_000.0, 1e5));
}

#[test]
fn verify_charge_particles_and_positivity() {
    for temperature_k in [2000.0, 6000.0, 10_000.0, 20_000.0, 24_999.0, 100_000.0] {
        for log_p in -1..12 {
            let pressure = 10f64.powi(log_p);
            let state = State::new(temperature_k, pressure);
            let positive = state.protons_per_cm3 + state.h2_plus_per_cm3;
            let negative = state.electrons_per_cm3 + state.h_minus_per_cm3;
            assert!((positive / negative - 1.0).abs() < 1e-9, "charge at {temperature_k} K, {pressure:e}");
            let particles = positive + negative + state.neutrals_per_cm3 + state.h2_per_cm3;
            let wanted = pressure / (BOLTZMANN_ERG_K * temperature_k);
            assert!((particles / wanted - 1.0).abs() < 1e-9, "particles at {temperature_k} K, {pressure:e}");
            assert!(state.levels_per_cm3.iter().all(|population| *population >= 0.0));
            assert!(state.occupation.windows(2).all(|pair| pair[1] <= pair[0]));
        }
    }
}
