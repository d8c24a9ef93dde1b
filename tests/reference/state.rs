//! The equation of state and its occupation probabilities: limits, conservation, consistency.

use emberline::physics::constants::{
    BOHR_RADIUS_CM, BOLTZMANN_ERG_K, ELECTRON_VOLT_ERG, ELEMENTARY_CHARGE_ESU, HYDROGEN_MASS_G,
};
use emberline::physics::occupation::{Surroundings, critical_beta};
use emberline::physics::state::{IONISATION_ERG, State, Thermodynamics};

/// Temperatures (K) and pressures (dyn cm^-2) of white-dwarf photospheres and their surroundings.
fn photospheres() -> impl Iterator<Item = (f64, f64)> {
    let temperatures = (0..25).map(|i| 3_000.0 * (100.0_f64 / 3.0).powf(f64::from(i) / 24.0));
    temperatures.flat_map(|t| (0..25).map(move |i| (t, 10.0_f64.powf(f64::from(i) * 10.0 / 24.0))))
}

/// Saha's equation with weights only: at 1 dyn cm^-2 excited levels below n = 10 are a trace, and
/// log n_e n_p / n_1 = 1.5 log T - 5039.8 I / T + 15.3829 (numerical form of the textbooks: 2.4147e15
/// cm^-3 K^(-3/2); I in eV; weights 2 x 1 / 2).
#[test]
fn validate_saha_textbook_form() {
    const TOLERANCE_DEX: f64 = 2e-4; // of the printed constants
    for temperature_k in [6_000.0_f64, 8_000.0, 12_000.0] {
        let state = State::new(temperature_k, 1.0);
        let found = (state.electrons_per_cm3 * state.protons_per_cm3 / state.levels_per_cm3[0]).log10();
        let ionisation_ev = IONISATION_ERG / ELECTRON_VOLT_ERG;
        let expected = 1.5 * temperature_k.log10() - 5_039.8 * ionisation_ev / temperature_k + 15.3829;
        let expected = expected + (state.occupation[0]).log10();
        assert!((found - expected).abs() < TOLERANCE_DEX, "{temperature_k} K: {found} for {expected}");
    }
}

/// The affinity of hydrogen in the same form: log n_1 n_e / n(H-) with weights 2 x 2 / 1; at
/// theta = 5039.8 / T: log n(H-) / (n_1 P_e) = 0.1248 - 2.5 log T + 0.7542 theta (Gray 2005, eq. 8.13,
/// gives 0.4158e-9 theta^5/2 10^(0.754 theta), from memory).
#[test]
fn validate_h_minus_population() {
    const TOLERANCE: f64 = 2e-3; // of Gray's constant and of the affinity's third digit
    for temperature_k in [5_040.0_f64, 6_300.0, 8_400.0] {
        let state = State::new(temperature_k, 1e5);
        let theta = 5_039.8 / temperature_k;
        let electron_pressure = state.electrons_per_cm3 * BOLTZMANN_ERG_K * temperature_k;
        let found = state.h_minus_per_cm3 / (state.levels_per_cm3[0] * electron_pressure);
        let expected = 4.158e-10 * theta.powf(2.5) * 10.0_f64.powf(0.7542 * theta);
        assert!((found / expected - 1.0).abs() < TOLERANCE, "{temperature_k} K: {found:e} {expected:e}");
    }
}

/// Charge, pressure, levels and nuclei add up.
#[test]
fn verif_conservation() {
    const TOLERANCE: f64 = 1e-12; // Newton stops at rounding
    for (temperature_k, pressure_cgs) in photospheres() {
        let s = State::new(temperature_k, pressure_cgs);
        let positive = s.protons_per_cm3 + s.h2_plus_per_cm3;
        let charge = (s.electrons_per_cm3 + s.h_minus_per_cm3) / positive - 1.0;
        let neutral = s.neutrals_per_cm3 + s.h2_per_cm3;
        let particles = s.electrons_per_cm3 + s.h_minus_per_cm3 + positive + neutral;
        let pressure = particles * BOLTZMANN_ERG_K * temperature_k / pressure_cgs - 1.0;
        let levels = s.levels_per_cm3.iter().sum::<f64>() / s.neutrals_per_cm3 - 1.0;
        let nuclei = s.protons_per_cm3
            + s.neutrals_per_cm3
            + s.h_minus_per_cm3
            + 2.0 * (s.h2_per_cm3 + s.h2_plus_per_cm3);
        let mass = nuclei * HYDROGEN_MASS_G / s.density_g_cm3 - 1.0;
        for (name, value) in [("charge", charge), ("pressure", pressure), ("levels", levels), ("mass", mass)]
        {
            assert!(value.abs() < TOLERANCE, "{temperature_k} K, {pressure_cgs:e}: {name} off by {value:e}");
        }
    }
}

/// The occupation probabilities are those of the densities that they led to.
#[test]
fn verif_state_is_self_consistent() {
    const TOLERANCE: f64 = 1e-11; // the iteration stops at 1e-13 in the densities
    for (temperature_k, pressure_cgs) in photospheres() {
        let state = State::new(temperature_k, pressure_cgs);
        let perturbers = state.neutrals_per_cm3 + state.h2_per_cm3;
        let surroundings = Surroundings::new(temperature_k, state.electrons_per_cm3, perturbers);
        for (index, kept) in state.occupation.iter().enumerate() {
            let again = surroundings.occupation((index + 1) as f64);
            assert!(
                (again - kept).abs() < TOLERANCE,
                "{temperature_k} K, {pressure_cgs:e}: n = {}",
                index + 1
            );
        }
    }
}

/// Nothing is NaN or negative from 1 500 K to 3e6 K and from 1e-2 to 1e17 dyn cm^-2.
#[test]
fn verif_state_at_extremes() {
    for i in 0..40 {
        let temperature_k = 1_500.0 * 2_000.0_f64.powf(f64::from(i) / 39.0);
        for k in 0..40 {
            let pressure_cgs = 10.0_f64.powf(-2.0 + 19.0 * f64::from(k) / 39.0);
            let s = State::new(temperature_k, pressure_cgs);
            let all = [
                s.density_g_cm3,
                s.electrons_per_cm3,
                s.protons_per_cm3,
                s.neutrals_per_cm3,
                s.h_minus_per_cm3,
                s.h2_per_cm3,
                s.h2_plus_per_cm3,
            ];
            let place = format!("{temperature_k} K, {pressure_cgs:e}: {all:?}, {}", s.energy_erg_g);
            assert!(all.iter().all(|value| value.is_finite() && *value >= 0.0), "{place}");
            assert!(s.density_g_cm3 > 0.0 && s.energy_erg_g.is_finite(), "{place}");
            let levels = s.levels_per_cm3.iter().chain(&s.occupation);
            assert!(levels.clone().all(|value| value.is_finite() && *value >= 0.0), "{place}");
            let range = 0.5 * HYDROGEN_MASS_G * pressure_cgs / (BOLTZMANN_ERG_K * temperature_k);
            // Between fully ionised and fully molecular.
            assert!((0.999..4.001).contains(&(s.density_g_cm3 / range)), "{place}");
        }
    }
}

/// Adiabatic gradient: 0.4 for a monatomic gas, neutral or ionised; the classical minimum of partly
/// ionised hydrogen is 0.07 - 0.15 (Unsoeld 1938; Cox & Giuli 1968).
#[test]
fn validate_adiabatic_gradient_limits() {
    // Neutral atoms: too warm for molecules, too cool for ions.
    let neutral = Thermodynamics::new(4_000.0, 1e2).adiabatic_gradient;
    assert!((neutral - 0.4).abs() < 0.02, "neutral {neutral}");
    let ionised = Thermodynamics::new(3e5, 1e5).adiabatic_gradient;
    assert!((ionised - 0.4).abs() < 2e-3, "ionised {ionised}");
    let least = (0..60)
        .map(|i| Thermodynamics::new(8_000.0 + 400.0 * f64::from(i), 1e5).adiabatic_gradient)
        .fold(f64::INFINITY, f64::min);
    println!("neutral {neutral:.4}, ionised {ionised:.4}, least {least:.4}");
    assert!((0.07..0.15).contains(&least), "least {least}");
}

/// Analytic thermodynamics of ideal ionising hydrogen without excitation (Kippenhahn & Weigert
/// 1990, eqs 14.20-14.24): with x the ionised fraction and phi = 5/2 + chi / kT,
/// expansion = 1 + phi x (1 - x) / 2, c_p m_H / k = (1 + x)(5/2 + phi^2 x (1 - x) / 2).
#[test]
fn validate_thermodynamics_of_ionisation() {
    const TOLERANCE: f64 = 3e-3; // excited levels, occupation probabilities, H- and molecules
    for temperature_k in [11_000.0, 13_000.0, 16_000.0, 20_000.0] {
        let pressure_cgs = 1e3;
        let state = State::new(temperature_k, pressure_cgs);
        let x = state.protons_per_cm3 / (state.protons_per_cm3 + state.neutrals_per_cm3);
        let phi = 2.5 + IONISATION_ERG / (BOLTZMANN_ERG_K * temperature_k);
        let expansion = 1.0 + 0.5 * phi * x * (1.0 - x);
        let heat = BOLTZMANN_ERG_K / HYDROGEN_MASS_G * (1.0 + x) * (2.5 + 0.5 * phi * phi * x * (1.0 - x));
        let gradient = expansion / (2.5 + 0.5 * phi * phi * x * (1.0 - x));
        let found = Thermodynamics::new(temperature_k, pressure_cgs);
        println!(
            "{temperature_k} K x {x:.4}: expansion {:.5}/{expansion:.5} cp {:.4e}/{heat:.4e} ad {:.5}/{gradient:.5}",
            found.expansion, found.heat_capacity_erg_g_k, found.adiabatic_gradient
        );
        assert!((found.expansion / expansion - 1.0).abs() < TOLERANCE);
        assert!((found.heat_capacity_erg_g_k / heat - 1.0).abs() < TOLERANCE);
        assert!((found.adiabatic_gradient / gradient - 1.0).abs() < TOLERANCE);
    }
}

/// Derivatives by differences are smooth: along a run of temperatures 1e-3 apart, the third
/// difference of the adiabatic gradient, which is pure noise, stays at the level of the solver.
#[test]
fn verif_derivatives_are_not_noisy() {
    const NOISE: f64 = 2e-6; // absolute, of gradients of 0.1 - 0.4
    for pressure_cgs in [1e3, 1e6, 1e9] {
        for start_k in [5_000.0, 9_000.0, 14_000.0, 24_900.0, 40_000.0] {
            let gradient: Vec<f64> = (0..8)
                .map(|i| {
                    let temperature_k = start_k * (1.0 + 1e-3 * f64::from(i));
                    Thermodynamics::new(temperature_k, pressure_cgs).adiabatic_gradient
                })
                .collect();
            for four in gradient.windows(4) {
                let third = four[3] - 3.0 * four[2] + 3.0 * four[1] - four[0];
                assert!(third.abs() < NOISE, "{start_k} K, {pressure_cgs:e}: {third:e}");
            }
        }
    }
}

/// (dh/dP)_T = (1 - expansion) / rho must hold if energy and pressure come from one free energy.
/// Without non-ideal terms it does; the occupation probabilities, which change populations but not
/// the pressure, break it. Units of P / rho: the measure of the approximation.
#[test]
fn verif_energy_and_pressure_belong_together() {
    let violation = |temperature_k: f64, pressure_cgs: f64| {
        let step = 1e-3_f64;
        let above = State::new(temperature_k, pressure_cgs * step.exp());
        let below = State::new(temperature_k, pressure_cgs * (-step).exp());
        let slope = (above.enthalpy_erg_g() - below.enthalpy_erg_g()) / (2.0 * step);
        let volume_work = pressure_cgs / State::new(temperature_k, pressure_cgs).density_g_cm3;
        let expansion = Thermodynamics::new(temperature_k, pressure_cgs).expansion;
        slope / volume_work - (1.0 - expansion)
    };
    for (temperature_k, pressure_cgs, largest) in LARGEST_VIOLATION {
        let found = violation(temperature_k, pressure_cgs);
        println!("{temperature_k} K, {pressure_cgs:e}: {found:.2e}");
        assert!(found.abs() < largest, "{temperature_k} K, {pressure_cgs:e}: {found}");
    }
    // The rest of the plane up to 1e10 dyn cm^-2.
    let (worst, place) = photospheres()
        .map(|(t, p)| (violation(t, p).abs(), (t, p)))
        .fold((0.0, (0.0, 0.0)), |worst, next| if next.0 > worst.0 { next } else { worst });
    println!("worst {worst:.3} at {place:?}");
    assert!(worst < 0.1, "{worst} at {place:?}");
}

/// K, dyn cm^-2, and the largest violation in units of P / rho that is accepted: differences alone in
/// thin gas, 0.1 % in photospheres, more where convection reaches deep.
const LARGEST_VIOLATION: [(f64, f64, f64); 11] = [
    (4_000.0, 1.0, 1e-6),
    (7_000.0, 1.0, 1e-4),
    (15_000.0, 1.0, 1e-4),
    (30_000.0, 1.0, 1e-4),
    (6_000.0, 1e8, 1e-3),
    (8_000.0, 1e7, 1e-3),
    (12_000.0, 1e6, 1e-3),
    (20_000.0, 1e6, 1e-3),
    (40_000.0, 1e6, 1e-3),
    (20_000.0, 1e8, 0.05),
    (30_000.0, 1e10, 0.5),
];

/// Holtsmark's distribution of the microfield: the charged factor without correlation is the
/// probability that the field is below critical, (2 / pi) int exp(-y^1.5) (sin by - by cos by) / y dy.
/// The fit of Hubeny, Hummer & Lanz (1994) is meant to be good to a few per cent.
#[test]
fn validate_occupation_is_cumulative_holtsmark() {
    const TOLERANCE: f64 = 0.025; // absolute
    let cumulative = |beta: f64| {
        const STEPS: usize = 40_000;
        let step = 16.0 / STEPS as f64;
        let sum: f64 = (0..STEPS)
            .map(|i| {
                let y = step * (i as f64 + 0.5);
                (-y.powf(1.5)).exp() * ((beta * y).sin() - beta * y * (beta * y).cos()) / y
            })
            .sum();
        2.0 / std::f64::consts::PI * sum * step
    };
    // So hot that the correlation parameter vanishes.
    let (temperature_k, electrons, level) = (1e12, 1e16, 8.0);
    for factor in [0.25, 0.5, 1.0, 2.0, 4.0, 8.0, 16.0] {
        let density = electrons * f64::powf(factor, 1.5);
        let beta = critical_beta(level, density);
        let found = Surroundings::new(temperature_k, density, 0.0).occupation(level);
        let exact = cumulative(beta);
        println!("beta {beta:.3}: w {found:.4}, Holtsmark {exact:.4}");
        assert!((found - exact).abs() < TOLERANCE, "beta {beta}: {found} for {exact}");
    }
}

/// Critical fields in units of 2.603 e n_e^(2/3): the saddle e / (16 a0^2 n^4) up to n = 3, and above it the
/// crossing of neighbouring Stark manifolds, (2 n + 1) / (6 n^4 (n + 1)^2) e / a0^2.
#[test]
fn validate_critical_field() {
    const TOLERANCE: f64 = 2e-3; // 8.57e14 has three digits
    let electrons = 1e17_f64;
    let holtsmark = 2.603 * ELEMENTARY_CHARGE_ESU * electrons.powf(2.0 / 3.0);
    for (level, quantum_factor) in [(2.0_f64, 1.0), (3.0, 1.0), (4.0, 0.96), (9.0, 152.0 / 300.0)] {
        let field = quantum_factor * ELEMENTARY_CHARGE_ESU / (16.0 * BOHR_RADIUS_CM.powi(2) * level.powi(4));
        let found = critical_beta(level, electrons);
        assert!((found / (field / holtsmark) - 1.0).abs() < TOLERANCE, "n = {level}: {found}");
    }
}

/// Inglis & Teller (1939): the last visible Balmer line has log n_e = 23.26 - 7.5 log n_max; levels
/// are half gone near there.
#[test]
fn validate_inglis_teller() {
    for log_electrons in [14.0, 15.0, 16.0, 17.0] {
        let last_level = 10.0_f64.powf((23.26 - log_electrons) / 7.5);
        let surroundings = Surroundings::new(15_000.0, 10.0_f64.powf(log_electrons), 0.0);
        let half = (10..400)
            .map(|tenths| f64::from(tenths) / 10.0)
            .find(|level| surroundings.occupation(*level) < 0.5)
            .expect("high levels are gone");
        println!("log n_e {log_electrons}: Inglis-Teller {last_level:.1}, half gone {half:.1}");
        assert!((0.75..1.25).contains(&(half / last_level)), "{half} for {last_level}");
    }
}

/// Occupation goes to 1 in thin gas, falls with level and density, and neutrals alone act as hard
/// spheres of half an orbital radius: exp(-4 pi / 3 n (a0 / 2)^3 (n^2 + 1)^3).
#[test]
fn verif_occupation_limits() {
    let thin = Surroundings::new(10_000.0, 1.0, 1.0);
    assert!((1..=40).all(|level| 1.0 - thin.occupation(f64::from(level)) < 1e-6));
    let dense = Surroundings::new(10_000.0, 1e17, 1e19);
    for level in 1..40 {
        let (lower, upper) = (f64::from(level), f64::from(level + 1));
        assert!(dense.occupation(upper) <= dense.occupation(lower), "n = {level}");
    }
    let neutral = Surroundings::new(10_000.0, 1e-10, 1e19).occupation(5.0);
    let spheres = 4.0 * std::f64::consts::PI / 3.0 * 1e19 * (0.5 * BOHR_RADIUS_CM * 26.0).powi(3);
    assert!((neutral / (-spheres).exp() - 1.0).abs() < 1e-9, "{neutral}");
}
