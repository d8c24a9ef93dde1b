//! The non-degenerate outer layers: from the atmosphere inward to the base of the helium layer.
//!
//! In: mass, radius, effective temperature, layer masses. Out: radius, pressure and temperature at
//! the base, and the profile of temperature and entropy against the mass outside. Grey atmosphere
//! (Eddington's T^4 = 3/4 Teff^4 (tau + 2/3)) down to tau = 2/3, then diffusion by photons and
//! electrons, or ML2 convection; constant luminosity. Fourth order Runge-Kutta in ln P.
//! Domain: that of [`MaterialTable`]. Step error below 1e-4 in base temperature
//! (`verif_envelope_step_size`).

use std::f64::consts::PI;

use super::cold::Gravity;
use super::convection::{LocalState, temperature_gradient};
use super::layer::Layer;
use super::material::{Material, MaterialTable};
use crate::physics::constants::{GRAVITATION_CGS, RADIATION_DENSITY_CGS, STEFAN_BOLTZMANN_CGS};

/// Helium layer and everything above it, over the stellar mass.
pub const HELIUM_FRACTION: f64 = 1e-2;
/// Optical depth where grey temperature stratification hands over to diffusion.
const PHOTOSPHERE: f64 = 2.0 / 3.0;
/// Optical depth of the outermost point.
const OUTERMOST: f64 = 1e-3;

/// What an envelope is computed for.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct EnvelopeInput {
    /// Stellar mass, g.
    pub mass_g: f64,
    /// Photospheric radius, cm.
    pub radius_cm: f64,
    /// Effective temperature, K.
    pub teff_k: f64,
    /// Mass of the hydrogen layer over the stellar mass.
    pub hydrogen_fraction: f64,
    /// Mass outside the core over the stellar mass.
    pub envelope_fraction: f64,
    /// Law of gravity.
    pub gravity: Gravity,
    /// Longest step in ln P.
    pub step: f64,
}

/// One point of the envelope.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct EnvelopePoint {
    /// ln of the mass outside over the stellar mass.
    pub ln_outer_fraction: f64,
    /// ln pressure, dyn/cm2.
    pub ln_pressure: f64,
    /// ln temperature, K.
    pub ln_temperature: f64,
    /// ln density, g/cm3.
    pub ln_density: f64,
    /// Entropy, erg/g/K.
    pub entropy_erg_g_k: f64,
    /// Radius, cm.
    pub radius_cm: f64,
    /// True where the gradient is convective.
    pub is_convective: bool,
}

#[derive(Clone, Copy)]
struct Vector {
    ln_temperature: f64,
    ln_density: f64,
    radius_cm: f64,
    /// ln of the mass outside, g.
    ln_outer_g: f64,
    optical_depth: f64,
}

impl Vector {
    fn plus(&self, d: &Vector, h: f64) -> Vector {
        Vector {
            ln_temperature: self.ln_temperature + h * d.ln_temperature,
            ln_density: self.ln_density + h * d.ln_density,
            radius_cm: self.radius_cm + h * d.radius_cm,
            ln_outer_g: self.ln_outer_g + h * d.ln_outer_g,
            optical_depth: self.optical_depth + h * d.optical_depth,
        }
    }
}

/// Derivatives with respect to ln P, with the local material and whether convection carries flux.
fn derivative(
    input: &EnvelopeInput,
    table: &MaterialTable,
    ln_pressure: f64,
    at: &Vector,
) -> Option<(Vector, Material, bool)> {
    let m = table.at(at.ln_density, at.ln_temperature)?;
    let pressure = ln_pressure.exp();
    let (rho, t, r) = (at.ln_density.exp(), at.ln_temperature.exp(), at.radius_cm);
    let outer = at.ln_outer_g.exp();
    let inner = input.mass_g - outer;
    let gravity = GRAVITATION_CGS * inner / (r * r) * input.gravity.factor(pressure, rho, 0.0, r, inner);
    let opacity = m.ln_opacity.exp();
    let depth_slope = pressure * opacity / gravity;
    let (gradient, is_convective) = if at.optical_depth < PHOTOSPHERE {
        (0.25 * depth_slope / (at.optical_depth + PHOTOSPHERE), false)
    } else {
        // Constant luminosity: the flux grows inward as 1 / r^2.
        let flux_over_sigma = input.teff_k.powi(4) * (input.radius_cm / r).powi(2);
        let radiative = 3.0 / 16.0 * depth_slope * flux_over_sigma / t.powi(4);
        let state = LocalState {
            pressure_cgs: pressure,
            temperature_k: t,
            density_g_cm3: rho,
            opacity_cm2_g: opacity,
            heat_capacity_p_erg_g_k: m.heat_capacity_p_erg_g_k,
            expansion: m.chi_temperature / m.chi_density,
            adiabatic_gradient: m.adiabatic_gradient,
            gravity_cgs: gravity,
        };
        (temperature_gradient(&state, radiative), radiative > m.adiabatic_gradient)
    };
    let slope = Vector {
        ln_temperature: gradient,
        ln_density: (1.0 - m.chi_temperature * gradient) / m.chi_density,
        radius_cm: -pressure / (rho * gravity),
        ln_outer_g: 4.0 * PI * r * r * pressure / (gravity * outer),
        optical_depth: depth_slope,
    };
    Some((slope, m, is_convective))
}

/// Integrates an envelope inward; `None` where it leaves the material tables.
pub fn integrate_envelope(input: &EnvelopeInput) -> Option<Vec<EnvelopePoint>> {
    let mut table = MaterialTable::shared(Layer::Hydrogen)?;
    let surface_gravity = GRAVITATION_CGS * input.mass_g / input.radius_cm.powi(2);

    let ln_temperature = (0.75 * input.teff_k.powi(4) * (OUTERMOST + PHOTOSPHERE)).ln() * 0.25;
    let radiation = RADIATION_DENSITY_CGS * (4.0 * ln_temperature).exp() / 3.0;
    // Outermost gas pressure from tau = kappa P / g; the opacity depends on it, a few passes settle it.
    let mut ln_density = -8.0 * std::f64::consts::LN_10;
    let mut gas_pressure = 0.0;
    for _ in 0..60 {
        let m = table.at(ln_density, ln_temperature)?;
        gas_pressure = (m.ln_pressure.exp() - radiation).max(1e-12);
        let wanted = surface_gravity * OUTERMOST / m.ln_opacity.exp();
        let step = (wanted / gas_pressure).ln();
        ln_density += step.clamp(-1.0, 1.0) * 0.7;
        if step.abs() < 1e-4 {
            break;
        }
    }
    let mut ln_pressure = (gas_pressure + radiation).ln();
    let outer = 4.0 * PI * input.radius_cm.powi(2) * gas_pressure / surface_gravity;
    let mut at = Vector {
        ln_temperature,
        ln_density,
        radius_cm: input.radius_cm,
        ln_outer_g: outer.ln(),
        optical_depth: OUTERMOST,
    };

    let ln_mass = input.mass_g.ln();
    let base = input.envelope_fraction.ln() + ln_mass;
    let interface = input.hydrogen_fraction.ln() + ln_mass;
    let mut boundary = interface.min(base);
    let mut points = Vec::with_capacity(600);
    for _ in 0..5000 {
        let (k1, m, is_convective) = derivative(input, table, ln_pressure, &at)?;
        points.push(EnvelopePoint {
            ln_outer_fraction: at.ln_outer_g - ln_mass,
            ln_pressure,
            ln_temperature: at.ln_temperature,
            ln_density: at.ln_density,
            entropy_erg_g_k: m.entropy_erg_g_k,
            radius_cm: at.radius_cm,
            is_convective,
        });
        let left = boundary - at.ln_outer_g;
        if left < 1e-9 {
            if boundary >= base - 1e-9 {
                return Some(points);
            }
            // Pressure and temperature pass through the interface, the density jumps.
            table = MaterialTable::shared(Layer::Helium)?;
            at.ln_density = table.at_pressure(ln_pressure, at.ln_temperature, at.ln_density)?.0;
            boundary = base;
            continue;
        }
        // Short steps where the temperature changes fast, and a landing on the boundary.
        let h =
            input.step.min(0.4 * input.step / k1.ln_temperature.abs().max(1e-3)).min(left / k1.ln_outer_g);
        let (k2, ..) = derivative(input, table, ln_pressure + 0.5 * h, &at.plus(&k1, 0.5 * h))?;
        let (k3, ..) = derivative(input, table, ln_pressure + 0.5 * h, &at.plus(&k2, 0.5 * h))?;
        let (k4, ..) = derivative(input, table, ln_pressure + h, &at.plus(&k3, h))?;
        at = at.plus(&k1, h / 6.0).plus(&k2, h / 3.0).plus(&k3, h / 3.0).plus(&k4, h / 6.0);
        ln_pressure += h;
        if !(at.radius_cm > 0.0 && at.ln_temperature.is_finite()) {
            return None;
        }
    }
    None
}

/// Luminosity of a sphere, erg/s.
pub fn luminosity_erg_s(radius_cm: f64, teff_k: f64) -> f64 {
    4.0 * PI * radius_cm * radius_cm * STEFAN_BOLTZMANN_CGS * teff_k.powi(4)
}
