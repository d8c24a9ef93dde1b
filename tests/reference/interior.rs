//! The degenerate-star models against printed limits and published values.

use emberline::interior::cold::{
    ColdPressure, Gravity, cold_star, cold_star_of_mass, nauenberg_radius_rsun,
};
use emberline::interior::electrons::{
    COMPTON_DENSITY_PER_CM3, ELECTRON_REST_TEMPERATURE_K, ElectronGas, free_energy_by_quadrature,
};
use emberline::interior::ions;
use emberline::interior::jet::Jet;
use emberline::interior::matter::{Composition, matter_state};

/// Electrons: ideal gas, cold non-relativistic and cold ultra-relativistic pressures.
#[test]
fn validate_electron_gas_limits() {
    let gas = ElectronGas::shared();
    // Ideal: P = n k T, E = 3/2 N k T; first degeneracy correction n lambda^3 / 2^(7/2) / ... < 1e-6.
    let ideal = gas.free_energy(1e12, 1e5);
    assert!((ideal.x - 1.0).abs() < 1e-6, "{}", ideal.x);
    assert!((-ideal.y - 1.5).abs() < 1e-4, "{}", -ideal.y);
    // Sackur-Tetrode with two spin states: ln(n lambda^3 / 2) - 1.
    let wave = 6.626_070_15e-27f64.powi(2)
        / (2.0 * std::f64::consts::PI * 9.109_383_7015e-28 * 1.380_649e-16 * 1e5);
    assert!((ideal.v - ((1e12 * wave.powf(1.5) / 2.0).ln() - 1.0)).abs() < 1e-4);

    // Cold, non-relativistic: P = (2/5) n E_F (gamma 5/3), with the T^2 term 5 pi^2/12 (T/T_F)^2.
    let x = 0.01f64;
    let density = COMPTON_DENSITY_PER_CM3 * x.powi(3) / 3.0;
    let fermi_k = 0.5 * x * x * ELECTRON_REST_TEMPERATURE_K;
    let temperature_k = fermi_k / 100.0;
    let cold = gas.free_energy(density, temperature_k);
    let expected = 0.4 * 100.0 * (1.0 + 5.0 * std::f64::consts::PI.powi(2) / 12.0 * 1e-4);
    assert!((cold.x / expected - 1.0).abs() < 1e-4, "{} {}", cold.x, expected);
    // Heat capacity pi^2/2 T/T_F.
    let heat = -cold.y - cold.yy;
    assert!((heat / (std::f64::consts::PI.powi(2) / 200.0) - 1.0).abs() < 2e-3, "{heat}");

    // Cold, ultra-relativistic: P = n E_F / 4, heat capacity pi^2 T/T_F.
    let x = 60f64;
    let density = COMPTON_DENSITY_PER_CM3 * x.powi(3) / 3.0;
    let temperature_k = 1e9;
    let cold = gas.free_energy(density, temperature_k);
    let fermi = x * ELECTRON_REST_TEMPERATURE_K / temperature_k;
    // Tolerances: the rest mass counts as 1/x^2 = 3e-4 here, the next Sommerfeld term as 3 pi^2/12 (T/T_F)^2 ~ 2e-3.
    let thermal = 1.0 + 2.0 * std::f64::consts::PI.powi(2) / (3.0 * fermi * fermi);
    assert!((cold.x / (0.25 * fermi * thermal) - 1.0).abs() < 5e-4, "{}", cold.x / (0.25 * fermi));
    let heat = -cold.y - cold.yy;
    assert!((heat * fermi / std::f64::consts::PI.powi(2) - 1.0).abs() < 2e-2, "{}", heat * fermi);
}

/// The table against the quadrature it was made from, between its nodes.
#[test]
fn verif_electron_table_matches_quadrature() {
    // Relative to the thermal scale 1 (units of kT per electron) in the partially degenerate range.
    const TOLERANCE: f64 = 2e-5;
    let gas = ElectronGas::shared();
    let mut worst = [0.0f64; 4];
    for i in 0..25 {
        for j in 0..12 {
            let density = 10f64.powf(20.03 + 0.51 * f64::from(i));
            let temperature = 10f64.powf(4.07 + 0.43 * f64::from(j));
            let (a, b) = (gas.free_energy(density, temperature), free_energy_by_quadrature(density, temperature));
            let scale = b.v.abs().max(1.0);
            for (k, (p, q)) in [(a.v, b.v), (a.x, b.x), (a.y, b.y), (a.y + a.yy, b.y + b.yy)].into_iter().enumerate() {
                worst[k] = worst[k].max((p - q).abs() / scale);
            }
        }
    }
    println!("electron table, worst: F {:.1e} P {:.1e} E {:.1e} Cv {:.1e}", worst[0], worst[1], worst[2], worst[3]);
    assert!(worst[..3].iter().all(|w| *w < TOLERANCE), "{worst:?}");
    assert!(worst[3] < 20.0 * TOLERANCE, "{worst:?}");
}

/// Plasma of ions: limits that the recalled coefficients must meet.
#[test]
fn validate_ion_plasma() {
    // Debye-Hueckel: f = -Gamma^1.5 / sqrt 3.
    let gamma = 1e-4;
    let (f, u) = ions::liquid_excess(gamma);
    assert!((f / (-gamma.powf(1.5) / 3f64.sqrt()) - 1.0).abs() < 0.01);
    assert!((u / (-gamma.powf(1.5) * 3f64.sqrt() / 2.0) - 1.0).abs() < 0.01);

    // Classical harmonic crystal: F = -0.895929 Gamma + 3 ln eta - 2.49389.
    let (gamma, eta) = (1e8, 1e-4);
    let solid = ions::solid(Jet::constant(gamma), Jet::constant(eta)).v + 0.895_929_255_682 * gamma;
    assert!((solid - (3.0 * eta.ln() - 2.49389)).abs() < 2e-4, "{solid}");

    // Debye law of a bcc crystal: thermal energy 3 * 209.3233 eta^-3, heat capacity four times it.
    let eta = 400.0;
    let cold = ions::solid(Jet::power_law(1e5, 0.0, -1.0), Jet::power_law(eta, 0.0, -1.0));
    let heat = -cold.y - cold.yy;
    let debye = 12.0 * 209.3233 / eta.powi(3);
    println!("Debye law: heat capacity ratio {:.4}", heat / debye);
    assert!((heat / debye - 1.0).abs() < 0.03, "{heat} {debye}");

    // Melting: the free energies cross at 175.0 +- 0.4 (Potekhin & Chabrier 2000); latent heat 0.77 kT.
    let difference = |gamma: f64| {
        let eta = 1e-3;
        // n lambda^3 written in Gamma and eta.
        let wave2 = 2.0 * std::f64::consts::PI * eta * eta / (3.0 * gamma);
        let ideal = (3.0 / (4.0 * std::f64::consts::PI) * wave2.powf(1.5)).ln() - 1.0;
        let g = Jet::power_law(gamma, 0.0, -1.0);
        let e = Jet::power_law(eta, 0.0, -1.0);
        Jet::linear(ideal, 0.0, -1.5) + ions::liquid_interaction(g, e) - ions::solid(g, e)
    };
    let (mut low, mut high) = (100.0, 300.0);
    for _ in 0..60 {
        let middle = 0.5 * (low + high);
        if difference(middle).v < 0.0 { low = middle } else { high = middle }
    }
    let latent = -difference(low).y;
    println!("melting at Gamma = {low:.2} (published 175.0), latent heat {latent:.3} kT (common practice 0.77)");
    assert!((low - 175.0).abs() < 0.5, "{low}");
    assert!((latent - 0.77).abs() < 0.05, "{latent}");
}

/// Exchange energy: -0.458 e^2/r_s cold and non-relativistic (Wigner), vanishing when hot.
#[test]
fn validate_electron_exchange() {
    let density = 1e24;
    let bohr_spheres = (4.0 * std::f64::consts::PI * density / 3.0f64).cbrt();
    let kt = 1.380_649e-16 * 1e3;
    let cold = emberline::interior::matter::exchange_jet(density, 1e3).v;
    let expected = -0.458_165 * 4.803_204_7e-10f64.powi(2) * bohr_spheres / kt;
    assert!((cold / expected - 1.0).abs() < 1e-3, "{}", cold / expected);
    // High temperature (Debye-like limit of exchange): -(pi/2) n e^2 lambda_T^2 / (2 pi) / kT per electron.
    let t: f64 = 1e9;
    let hot = emberline::interior::matter::exchange_jet(density, t).v;
    let lambda2 = 6.626_070_15e-27f64.powi(2)
        / (2.0 * std::f64::consts::PI * 9.109_383_7e-28 * 1.380_649e-16 * t);
    let expected = -0.25 * density * 4.803_204_7e-10f64.powi(2) * lambda2 / (1.380_649e-16 * t);
    println!("hot exchange ratio {:.4}", hot / expected);
    assert!(hot.abs() < 1e-3 * cold.abs());
}

/// Matter: ideal gas with radiation, and energy / pressure / entropy derivatives against differences.
#[test]
fn verif_thermodynamic_identities() {
    for (mixture, density, temperature) in [
        (Composition::carbon_oxygen(), 1e6, 3e7),
        (Composition::carbon_oxygen(), 1e6, 2e6),
        (Composition::helium(), 1e3, 1e7),
        (Composition::hydrogen(), 1.0, 1e6),
        (Composition::oxygen_neon(), 3e8, 5e6),
    ] {
        let at = |lr: f64, lt: f64| matter_state(&mixture, density * lr.exp(), temperature * lt.exp());
        let (s, h) = (at(0.0, 0.0), 1e-3);
        let (east, west, north, south) = (at(h, 0.0), at(-h, 0.0), at(0.0, h), at(0.0, -h));
        let chi_t = (north.pressure_cgs / south.pressure_cgs).ln() / (2.0 * h);
        let chi_r = (east.pressure_cgs / west.pressure_cgs).ln() / (2.0 * h);
        // Maxwell: (dS/d ln rho)_T = -(dP/d ln T)_rho / (rho T).
        let entropy_r = (east.entropy_erg_g_k - west.entropy_erg_g_k) / (2.0 * h);
        let maxwell = -s.pressure_cgs * chi_t / (density * temperature);
        // First law: (dE/d ln rho)_T = P/rho (1 - chi_T); T dS/dT = dE/dT = Cv.
        let energy_r = (east.energy_erg_g - west.energy_erg_g) / (2.0 * h);
        let first_law = s.pressure_cgs / density * (1.0 - chi_t);
        let cv_e = (north.energy_erg_g - south.energy_erg_g) / (2.0 * h * temperature);
        let cv_s = (north.entropy_erg_g_k - south.entropy_erg_g_k) / (2.0 * h);
        assert!((chi_t - s.chi_temperature).abs() < 1e-4 * s.chi_density, "{mixture:?}");
        assert!((chi_r - s.chi_density).abs() < 1e-5, "{mixture:?}");
        assert!((entropy_r / maxwell - 1.0).abs() < 2e-4, "{mixture:?} {entropy_r} {maxwell}");
        assert!((energy_r / first_law - 1.0).abs() < 1e-5, "{mixture:?}");
        assert!((cv_e / s.heat_capacity_v_erg_g_k - 1.0).abs() < 1e-4, "{mixture:?}");
        assert!((cv_s / s.heat_capacity_v_erg_g_k - 1.0).abs() < 1e-4, "{mixture:?}");
        // Adiabat: entropy unchanged along (ln rho, ln T) with the stated gradient.
        let dlnp = 1e-3;
        let dlnt = s.adiabatic_gradient * dlnp;
        let dlnr = (dlnp - s.chi_temperature * dlnt) / s.chi_density;
        let moved = at(dlnr, dlnt);
        let change = (moved.entropy_erg_g_k - s.entropy_erg_g_k).abs();
        assert!(change < 1e-5 * s.heat_capacity_p_erg_g_k, "{mixture:?} {change}");
    }
}

/// Zero-temperature stars: polytropes, Chandrasekhar's and Hamada & Salpeter's limits, Nauenberg.
#[test]
fn validate_cold_limits() {
    let carbon = Composition::carbon();
    // n = 3/2 polytrope: R = K / (0.42422 G M^(1/3)) (Chandrasekhar 1939, table 4), K = 1.0036e13 / mu_e^(5/3):
    // 0.01276 Rsun for mu_e = 2; often rounded to 0.0126.
    let small = cold_star(0.08, &carbon, ColdPressure::Ideal, Gravity::Newton);
    let constant = small.radius_rsun * small.mass_msun.cbrt();
    println!("R M^1/3 = {constant:.5} (polytrope 0.01276), at {:.5} Msun", small.mass_msun);
    assert!((constant / 0.01276 - 1.0).abs() < 0.003, "{constant}");
    // Ultra-relativistic: M -> 5.836 / mu_e^2 (Chandrasekhar 1939).
    let limit = cold_star(3000.0, &carbon, ColdPressure::Ideal, Gravity::Newton);
    println!("Chandrasekhar {:.4} (1.4575 = 5.83/4)", limit.mass_msun);
    assert!((limit.mass_msun / (5.83 / 4.0) - 1.0).abs() < 0.002, "{}", limit.mass_msun);
    // Coulomb terms lower it: carbon 1.396 Msun (Hamada & Salpeter 1961, at neutronisation density).
    let coulomb = cold_star(24.0, &carbon, ColdPressure::Coulomb, Gravity::Newton);
    println!(
        "carbon with Coulomb terms {:.4} (1.396) at {:.2e} g/cm3",
        coulomb.mass_msun, coulomb.central_density_g_cm3
    );
    assert!((coulomb.mass_msun - 1.396).abs() < 0.005, "{}", coulomb.mass_msun);
    for mass in [0.3, 0.5, 0.7, 0.9, 1.1, 1.3] {
        let star = cold_star_of_mass(mass, &carbon, ColdPressure::Ideal, Gravity::Newton).unwrap();
        let nauenberg = nauenberg_radius_rsun(mass, 2.0);
        println!("cold {mass:.1} Msun: {:.5} Rsun, Nauenberg {nauenberg:.5}", star.radius_rsun);
        assert!((star.radius_rsun / nauenberg - 1.0).abs() < 0.02, "{mass}");
    }
}

#[test]
fn scratch_track() {
    use emberline::interior::{core::*, structure::*};
    use emberline::interior::cooling::*;
    for mass in [0.3, 0.15, 0.21, 1.36, 0.65] {
        let t0 = std::time::Instant::now();
        let Some(t) = cooling_track(mass, 4000.0, HydrogenLayer::Thick, Core::of_mass(mass)) else { println!("{mass}: none"); continue };
        println!("{mass}: {} models, {:?}", t.models.len(), t0.elapsed());
        for (m, a) in t.models.iter().zip(&t.age_s) {
            println!("  {:.0} logg {:.4} age {:.4e} Gyr Tc {:.3e} Tb {:.3e} L {:.3e} Lnu {:.2e} solid {:.2}", m.teff_k, m.log_g(), a / 3.15576e16, m.central_temperature_k, m.core.last().unwrap().matter.temperature_k, m.luminosity_erg_s / 3.828e33, m.neutrino_luminosity_erg_s / 3.828e33, m.crystallised_fraction);
        }
    }
}
