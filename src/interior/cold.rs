//! Stars of zero temperature: the cold limit of the mass-radius relation and its maximum mass.
//!
//! In: central relativity parameter (Fermi momentum over mc) and composition. Out: mass and radius.
//! Chandrasekhar's electron pressure, on request with the Coulomb energy of the lattice and electron
//! exchange (the terms of Salpeter 1961 that Hamada & Salpeter 1961, ApJ 134, 683, used; theirs also
//! has the Thomas-Fermi term and inverse beta decay, which are left out), on request with general
//! relativity (Tolman-Oppenheimer-Volkoff). Fourth order Runge-Kutta in sqrt(1 - x/x_c), regular at
//! the centre. Accuracy 1e-4, test `validate_cold_limits`.

use std::f64::consts::PI;

use super::electrons::{COMPTON_DENSITY_PER_CM3, ELECTRON_REST_ENERGY_ERG, cold_energy_and_pressure};
use super::matter::Composition;
use crate::physics::constants::{
    ATOMIC_MASS_UNIT_G, ELEMENTARY_CHARGE_ESU, GRAVITATION_CGS, LIGHT_SPEED_CM_S, SOLAR_MASS_G,
    SOLAR_RADIUS_CM,
};

/// Which terms of the pressure count.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum ColdPressure {
    /// Ideal electrons alone.
    Ideal,
    /// Electrons, their exchange, and the Coulomb energy of the ion lattice.
    Coulomb,
}

/// Law of gravity.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Gravity {
    /// Newton.
    Newton,
    /// General relativity.
    Einstein,
}

impl Gravity {
    /// Factor on the Newtonian pressure gradient -G m rho / r^2, rho the density of rest mass.
    pub fn factor(
        self,
        pressure_cgs: f64,
        density_g_cm3: f64,
        energy_erg_g: f64,
        radius_cm: f64,
        mass_g: f64,
    ) -> f64 {
        const C2: f64 = LIGHT_SPEED_CM_S * LIGHT_SPEED_CM_S;
        match self {
            Gravity::Newton => 1.0,
            Gravity::Einstein => {
                (1.0 + (energy_erg_g + pressure_cgs / density_g_cm3) / C2)
                    * (1.0 + 4.0 * PI * radius_cm.powi(3) * pressure_cgs / (mass_g * C2))
                    / (1.0 - 2.0 * GRAVITATION_CGS * mass_g / (radius_cm * C2))
            }
        }
    }
}

/// Mass and radius of a cold star.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct ColdStar {
    /// Mass, solar.
    pub mass_msun: f64,
    /// Radius, solar.
    pub radius_rsun: f64,
    /// Central density, g/cm3.
    pub central_density_g_cm3: f64,
}

const STEPS: usize = 600;

/// Pressure of cold matter at relativity parameter x, dyn/cm2.
fn cold_pressure(x: f64, composition: &Composition, terms: ColdPressure) -> f64 {
    let electrons = COMPTON_DENSITY_PER_CM3 * x.powi(3) / 3.0;
    let ideal = electrons * ELECTRON_REST_ENERGY_ERG * cold_energy_and_pressure(x).1;
    if terms == ColdPressure::Ideal {
        return ideal;
    }
    const MADELUNG: f64 = 0.895_929;
    let per_electron = composition.mean_charge_5_3() * composition.mass_per_electron_u()
        / (composition.mean_mass_g() / ATOMIC_MASS_UNIT_G);
    let sphere = (4.0 * PI * electrons / 3.0).cbrt();
    let lattice = -MADELUNG * per_electron * ELEMENTARY_CHARGE_ESU.powi(2) * sphere * electrons / 3.0;
    // Any temperature far below the Fermi energy gives the cold exchange term.
    let temperature_k = 1e3;
    let exchange = super::matter::exchange_jet(electrons, temperature_k).x
        * electrons
        * crate::physics::constants::BOLTZMANN_ERG_K
        * temperature_k;
    ideal + lattice + exchange
}

/// Builds the star with the given central relativity parameter (above about 0.05).
pub fn cold_star(
    central_x: f64,
    composition: &Composition,
    terms: ColdPressure,
    gravity: Gravity,
) -> ColdStar {
    let mass_per_electron_g = composition.mass_per_electron_u() * ATOMIC_MASS_UNIT_G;
    let density_unit = COMPTON_DENSITY_PER_CM3 / 3.0 * mass_per_electron_g;
    let pressure = |x: f64| cold_pressure(x, composition, terms);
    // Right-hand side in w, x = x_c (1 - w^2): (r, m).
    let slope = |w: f64, r: f64, m: f64| -> Option<(f64, f64)> {
        let x = central_x * (1.0 - w * w);
        if x <= 1e-6 * central_x {
            return None;
        }
        let h = 1e-4 * x;
        let p = pressure(x);
        let stiffness = (pressure(x + h) - pressure(x - h)) / (2.0 * h);
        if p <= 0.0 || stiffness <= 0.0 {
            return None;
        }
        let density = density_unit * x.powi(3);
        // Of the ideal electrons: Coulomb energy is a hundredth of it.
        let energy_erg_g = cold_energy_and_pressure(x).0 * ELECTRON_REST_ENERGY_ERG / mass_per_electron_g;
        let pull = GRAVITATION_CGS * m * density / (r * r) * gravity.factor(p, density, energy_erg_g, r, m);
        let dr = stiffness * 2.0 * central_x * w / pull;
        // In Newton's theory energy has no weight.
        let weight = match gravity {
            Gravity::Newton => 1.0,
            Gravity::Einstein => 1.0 + energy_erg_g / (LIGHT_SPEED_CM_S * LIGHT_SPEED_CM_S),
        };
        Some((dr, 4.0 * PI * r * r * density * weight * dr))
    };
    let h = 1.0 / STEPS as f64;
    // Uniform ball for the first step: 2 pi G rho^2 r^2 / 3 = P_c - P.
    let density = density_unit * central_x.powi(3);
    let drop = pressure(central_x) - pressure(central_x * (1.0 - h * h));
    let mut r = (3.0 * drop / (2.0 * PI * GRAVITATION_CGS * density * density)).sqrt();
    let mut m = 4.0 * PI / 3.0 * r.powi(3) * density;
    for step in 1..STEPS {
        let w = step as f64 * h;
        let next = (|| {
            let k1 = slope(w, r, m)?;
            let k2 = slope(w + 0.5 * h, r + 0.5 * h * k1.0, m + 0.5 * h * k1.1)?;
            let k3 = slope(w + 0.5 * h, r + 0.5 * h * k2.0, m + 0.5 * h * k2.1)?;
            let k4 = slope(w + h, r + h * k3.0, m + h * k3.1)?;
            Some((
                r + h / 6.0 * (k1.0 + 2.0 * k2.0 + 2.0 * k3.0 + k4.0),
                m + h / 6.0 * (k1.1 + 2.0 * k2.1 + 2.0 * k3.1 + k4.1),
            ))
        })();
        // The last step meets the surface, where the density of cold matter ends.
        let Some((r_next, m_next)) = next else { break };
        (r, m) = (r_next, m_next);
    }
    ColdStar { mass_msun: m / SOLAR_MASS_G, radius_rsun: r / SOLAR_RADIUS_CM, central_density_g_cm3: density }
}

/// Nauenberg's analytic mass-radius relation, solar radii.
///
/// # Reference
/// Nauenberg 1972, ApJ 175, 417: R = 0.0225/mu (1 - (M/M3)^(4/3))^(1/2) / (M/M3)^(1/3), M3 = 5.816/mu^2.
pub fn nauenberg_radius_rsun(mass_msun: f64, mass_per_electron_u: f64) -> f64 {
    let ratio = mass_msun * mass_per_electron_u * mass_per_electron_u / 5.816;
    0.0225 / mass_per_electron_u * (1.0 - ratio.powf(4.0 / 3.0)).max(0.0).sqrt() / ratio.cbrt()
}

/// The cold star of a given mass, by bisection in the central density.
///
/// Returns `None` above the maximum mass.
pub fn cold_star_of_mass(
    mass_msun: f64,
    composition: &Composition,
    terms: ColdPressure,
    gravity: Gravity,
) -> Option<ColdStar> {
    let build = |ln_x: f64| cold_star(ln_x.exp(), composition, terms, gravity);
    let (mut low, mut high) = (0.1f64.ln(), 3.0);
    if build(high).mass_msun < mass_msun || build(low).mass_msun > mass_msun {
        return None;
    }
    for _ in 0..50 {
        let middle = 0.5 * (low + high);
        if build(middle).mass_msun < mass_msun {
            low = middle;
        } else {
            high = middle;
        }
    }
    Some(build(0.5 * (low + high)))
}
