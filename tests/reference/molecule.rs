//! Molecules against published dissociation constants and level energies.

use emberline::physics::constants::{BOLTZMANN_ERG_K, ELECTRON_VOLT_ERG};
use emberline::physics::molecule::{h2_equilibrium, h2_plus_equilibrium};
use emberline::physics::state::State;

const BAR_CGS: f64 = 1e6;
const ATMOSPHERE_CGS: f64 = 1.013_25e6;

/// ln of the equilibrium constant of H2 = 2 H at a standard pressure of 1 bar: JANAF tables as
/// reprinted in thermodynamics textbooks (from memory).
#[test]
fn validate_h2_dissociation_constant() {
    const TOLERANCE: f64 = 0.02; // rigid-rotor corrections beyond the constants used
    for (temperature_k, published) in [
        (1_000.0, -39.803),
        (2_000.0, -12.840),
        (3_000.0, -3.685),
        (4_000.0, 0.934),
        (5_000.0, 3.725),
        (6_000.0, 5.590),
    ] {
        let association = h2_equilibrium(temperature_k).association_cm3;
        let found = (BOLTZMANN_ERG_K * temperature_k / association / BAR_CGS).ln();
        println!("{temperature_k} K: ln K {found:.4}, JANAF {published}");
        assert!((found - published).abs() < TOLERANCE, "{temperature_k} K: {found} for {published}");
    }
}

/// The same constant by the polynomial of Kurucz (1970, SAO Special Report 309) (from memory).
#[test]
fn validate_h2_association_against_kurucz() {
    const TOLERANCE: f64 = 0.02; // as for the tables that the polynomial was fitted to
    for temperature_k in [2_000.0_f64, 3_000.0, 4_000.0, 5_000.0, 6_000.0] {
        let polynomial = [1.63660e-3, -4.93992e-7, 1.11822e-10, -1.49567e-14, 1.06206e-18, -3.08720e-23]
            .iter()
            .rev()
            .fold(0.0, |sum, factor| (sum + factor) * temperature_k);
        let thermal_ev = BOLTZMANN_ERG_K * temperature_k / ELECTRON_VOLT_ERG;
        let published = 4.478 / thermal_ev - 46.4584 + polynomial - 1.5 * temperature_k.ln();
        let found = h2_equilibrium(temperature_k).association_cm3.ln();
        println!("{temperature_k} K: {found:.4}, Kurucz {published:.4}");
        assert!((found - published).abs() < TOLERANCE, "{temperature_k} K: {found} for {published}");
    }
}

/// Degree of dissociation of hydrogen at 3 000 K and 1 atm: 0.079 (Langmuir's experiments as
/// analysed with JANAF constants; textbooks print 7.85 - 8 %).
#[test]
fn validate_dissociation_at_3000_k() {
    let state = State::new(3_000.0, ATMOSPHERE_CGS);
    let degree = state.neutrals_per_cm3 / (state.neutrals_per_cm3 + 2.0 * state.h2_per_cm3);
    assert!((degree - 0.079).abs() < 0.001, "degree {degree}");
}

/// Mean internal energy: a rotor with kT far above its spacing and below its vibration has kT
/// minus a third of its rotational constant (Mulholland 1928), H2 with B = 59.3 1/cm.
#[test]
fn validate_h2_internal_energy() {
    const CM_PER_KELVIN: f64 = 0.695_034_8; // k / hc, CODATA 2018
    let temperature_k = 1_000.0;
    let found = h2_equilibrium(temperature_k).internal_energy_erg / BOLTZMANN_ERG_K * CM_PER_KELVIN;
    let rotation = CM_PER_KELVIN * temperature_k - 59.3 / 3.0;
    // One vibrational quantum of 4 161.2 1/cm (Huber & Herzberg 1979).
    let vibration = 4161.2 / ((4161.2 / (CM_PER_KELVIN * temperature_k)).exp() - 1.0);
    // Stretching adds 2 D/B^2 (kT)^2 = 0.0263 kT.
    let stretching = 2.0 * 0.0460 / 59.3_f64.powi(2) * (CM_PER_KELVIN * temperature_k).powi(2);
    let expected = rotation + vibration + stretching;
    assert!((found / expected - 1.0).abs() < 0.005, "{found} for {expected} 1/cm");
}

/// H2+ stays a bound trace: its association constant falls with temperature with the slope that
/// van 't Hoff demands, d ln K / dT = -(D0 + 3/2 kT - E_int) / kT^2 for n-based constants.
#[test]
fn verif_association_constants_obey_van_t_hoff() {
    const TOLERANCE: f64 = 1e-6; // of central differences
    for equilibrium in [h2_equilibrium, h2_plus_equilibrium] {
        for temperature_k in [2_000.0_f64, 5_000.0, 12_000.0] {
            let step = 1e-4 * temperature_k;
            let ln = |t: f64| equilibrium(t).association_cm3.ln();
            let slope = (ln(temperature_k + step) - ln(temperature_k - step)) / (2.0 * step);
            let here = equilibrium(temperature_k);
            let thermal = BOLTZMANN_ERG_K * temperature_k;
            let energy = here.dissociation_energy_erg + 1.5 * thermal - here.internal_energy_erg;
            let expected = -energy / (thermal * temperature_k);
            assert!((slope / expected - 1.0).abs() < TOLERANCE, "{temperature_k} K: {slope} {expected}");
        }
    }
}
