//! The ideal electron gas at any degeneracy and relativity.
//!
//! In: electron density (cm^-3) and temperature (K). Out: the Helmholtz free energy per electron
//! over kT, as a [`Jet`]; pressure, energy and entropy are its derivatives. The cold part is
//! Chandrasekhar's closed form; the thermal part comes from Fermi-Dirac integrals over momentum
//! (piecewise Gauss-Legendre, nodes from the `gauss-quad` crate), or beyond degeneracy parameter
//! 300 from the leading Sommerfeld term, and is tabulated once per process with its derivatives for
//! biquintic Hermite interpolation (the method of Timmes & Swesty 2000, ApJS 126, 501), which keeps
//! Maxwell's relations exact.
//!
//! Domain: log10 n_e 0 .. 36, log10 T 3 .. 9.4; outside it values are NaN. No positrons: below
//! 5e8 K pair creation is suppressed by exp(-2 mc^2 / kT) = 5e-11.
//! Accuracy 5e-7 in pressure and energy, 1e-5 in heat capacity (test `verif_electron_table_matches_quadrature`);
//! limits in `validate_electron_gas_limits`.

use std::f64::consts::PI;
use std::sync::{LazyLock, OnceLock};

use gauss_quad::GaussLegendre;

use super::jet::Jet;
use crate::physics::constants::{BOLTZMANN_ERG_K, ELECTRON_MASS_G, LIGHT_SPEED_CM_S, PLANCK_ERG_S};

/// Electron rest energy, erg.
pub const ELECTRON_REST_ENERGY_ERG: f64 = ELECTRON_MASS_G * LIGHT_SPEED_CM_S * LIGHT_SPEED_CM_S;
/// Electron rest energy over Boltzmann's constant, K.
pub const ELECTRON_REST_TEMPERATURE_K: f64 = ELECTRON_REST_ENERGY_ERG / BOLTZMANN_ERG_K;
/// Density at which the Fermi momentum would be mc, times 3: 8 pi (mc/h)^3, cm^-3.
pub const COMPTON_DENSITY_PER_CM3: f64 = {
    let k = ELECTRON_MASS_G * LIGHT_SPEED_CM_S / PLANCK_ERG_S;
    8.0 * PI * k * k * k
};

/// Above this degeneracy parameter the leading Sommerfeld term is used: the next one is smaller by
/// about 1 / eta^2 = 1e-5.
const SOMMERFELD_ETA: f64 = 300.0;
const LOG_DENSITY: Axis = Axis { low: 0.0, high: 36.0, count: 217 };
const LOG_TEMPERATURE: Axis = Axis { low: 3.0, high: 9.4, count: 41 };
/// Step of the central differences that give the third and fourth derivatives of the table.
const MIXED_STEP: f64 = 0.02;

struct Axis {
    low: f64,
    high: f64,
    count: usize,
}

impl Axis {
    fn step(&self) -> f64 {
        (self.high - self.low) / (self.count - 1) as f64
    }

    /// Cell and offset within it (0 .. 1), or `None` outside.
    fn locate(&self, value: f64) -> Option<(usize, f64)> {
        let position = (value - self.low) / self.step();
        if !(0.0..=(self.count - 1) as f64).contains(&position) {
            return None;
        }
        let cell = (position as usize).min(self.count - 2);
        Some((cell, position - cell as f64))
    }
}

/// Fermi momentum over mc at an electron density.
pub fn relativity_parameter(electron_density_per_cm3: f64) -> f64 {
    (3.0 * electron_density_per_cm3 / COMPTON_DENSITY_PER_CM3).cbrt()
}

/// Energy per electron (without rest mass) and pressure over density of the cold gas, both in mc^2.
///
/// # Reference
/// Chandrasekhar 1939, chapter X; power series below x = 0.05 where the closed form cancels.
pub fn cold_energy_and_pressure(x: f64) -> (f64, f64) {
    let x2 = x * x;
    let root = (1.0 + x2).sqrt();
    if x < 0.05 {
        let energy =
            x2 * (0.3 + x2 * (-3.0 / 56.0 + x2 * (1.0 / 48.0 + x2 * (-15.0 / 1408.0 + x2 * 21.0 / 3328.0))));
        let pressure =
            x2 * (0.2 + x2 * (-1.0 / 14.0 + x2 * (1.0 / 24.0 + x2 * (-5.0 / 176.0 + x2 * 35.0 / 1664.0))));
        return (energy, pressure);
    }
    let x3 = x2 * x;
    let asinh = x.asinh();
    let pressure = (x * (2.0 * x2 - 3.0) * root + 3.0 * asinh) / (8.0 * x3);
    let energy = 3.0 * (x * (1.0 + 2.0 * x2) * root - asinh) / (8.0 * x3) - 1.0;
    (energy, pressure)
}

/// Cold part of the free energy per electron over kT.
fn cold_jet(electron_density_per_cm3: f64, temperature_k: f64) -> Jet {
    let x = relativity_parameter(electron_density_per_cm3);
    let (energy, pressure) = cold_energy_and_pressure(x);
    let inverse_theta = ELECTRON_REST_TEMPERATURE_K / temperature_k;
    let stiffness = x * x / (3.0 * (1.0 + x * x).sqrt());
    let (e, p) = (energy * inverse_theta, pressure * inverse_theta);
    Jet { v: e, x: p, y: -e, xx: stiffness * inverse_theta - p, xy: -p, yy: e }
}

/// Thermal part in the leading Sommerfeld order.
fn sommerfeld_jet(x: f64, theta: f64) -> Jet {
    // phi = -(pi^2/2) theta sqrt(1+x^2)/x^2 with x ~ n^(1/3), theta ~ T.
    let x2 = x * x;
    let v = -0.5 * PI * PI * theta * (1.0 + x2).sqrt() / x2;
    let slope = x2 / (1.0 + x2) - 2.0;
    let slope_slope = 2.0 * x2 / ((1.0 + x2) * (1.0 + x2));
    Jet {
        v,
        x: v * slope / 3.0,
        y: v,
        xx: v * (slope * slope + slope_slope) / 9.0,
        xy: v * slope / 3.0,
        yy: v,
    }
}

#[derive(Default, Clone, Copy)]
struct Moments {
    number: f64,
    energy: f64,
    pressure: f64,
    /// Integrals of f (1 - f) (eps/theta)^k.
    width: [f64; 3],
}

static NODES: LazyLock<Vec<(f64, f64)>> = LazyLock::new(|| {
    let degree = std::num::NonZeroUsize::new(32).unwrap_or(std::num::NonZeroUsize::MIN);
    GaussLegendre::new(degree).iter().map(|(node, weight)| (*node, *weight)).collect()
});

/// Fermi-Dirac moments over momentum, in units of 8 pi (mc/h)^3 and mc^2.
fn moments(eta: f64, theta: f64) -> Moments {
    let mut breaks = vec![0.0];
    // Offsets from the Fermi level, in kT, between which 32 nodes resolve the step to 1e-14.
    for offset in [-150.0, -60.0, -30.0, -12.0, -4.0, 4.0, 12.0, 25.0, 45.0] {
        if eta + offset > 0.5 {
            breaks.push(eta + offset);
        }
    }
    if eta < 5.0 {
        breaks = vec![0.0, 1.0, 4.0, 10.0, 20.0, 50.0];
    }
    let mut sum = Moments::default();
    for pair in breaks.windows(2) {
        // In u = sqrt(eps/kT) the integrand is smooth at zero momentum.
        let (a, b) = (pair[0].sqrt(), pair[1].sqrt());
        for (node, weight) in NODES.iter() {
            let u = 0.5 * (a + b) + 0.5 * (b - a) * node;
            let t = u * u;
            let energy = t * theta;
            let x2 = energy * (energy + 2.0);
            let x = x2.sqrt();
            // dx = (1 + eps) deps / x, deps = 2 u theta du.
            let dx = (1.0 + energy) / x * 2.0 * u * theta * 0.5 * (b - a) * weight;
            let (f, hole) = if t > eta {
                let e = (eta - t).exp();
                (e / (1.0 + e), 1.0 / (1.0 + e))
            } else {
                let e = (t - eta).exp();
                (1.0 / (1.0 + e), e / (1.0 + e))
            };
            let g = x2 * f * dx;
            sum.number += g;
            sum.energy += energy * g;
            sum.pressure += x2 * g / (3.0 * (1.0 + energy));
            sum.width[0] += g * hole;
            sum.width[1] += g * hole * t;
            sum.width[2] += g * hole * t * t;
        }
    }
    sum
}

/// Degeneracy parameter (chemical potential without rest mass, over kT) at a density.
fn degeneracy(number: f64, theta: f64) -> (f64, Moments) {
    let x = (3.0 * number).cbrt();
    let fermi = x * x / (1.0 + (1.0 + x * x).sqrt()) / theta;
    // Non-degenerate: number = sqrt(pi/2) theta^1.5 e^eta for small theta.
    let mut eta = if fermi > 3.0 { fermi } else { (number / (1.2533 * theta.powf(1.5))).ln().min(3.0) };
    let mut m = moments(eta, theta);
    for _ in 0..60 {
        // Newton on ln(number), which is concave in eta.
        let step = ((number / m.number).ln() * m.number / m.width[0]).clamp(-20.0, 20.0);
        eta += step;
        m = moments(eta, theta);
        if step.abs() < 1e-13 * eta.abs().max(1.0) {
            break;
        }
    }
    (eta, m)
}

/// Thermal part of the free energy per electron over kT, by quadrature: slow and exact.
fn thermal_by_quadrature(log_density: f64, log_temperature: f64) -> Jet {
    let density = 10f64.powf(log_density);
    let temperature_k = 10f64.powf(log_temperature);
    let theta = temperature_k / ELECTRON_REST_TEMPERATURE_K;
    let x = relativity_parameter(density);
    let fermi = x * x / (1.0 + (1.0 + x * x).sqrt()) / theta;
    if fermi > SOMMERFELD_ETA {
        return sommerfeld_jet(x, theta);
    }
    let number = density / COMPTON_DENSITY_PER_CM3;
    let (eta, m) = degeneracy(number, theta);
    let scale = 1.0 / (number * theta);
    let (energy, pressure) = (m.energy * scale, m.pressure * scale);
    let mean = m.width[1] / m.width[0];
    let pressure_y = energy + pressure - mean;
    let energy_y = (m.width[2] - m.width[1] * mean) / number;
    // phi = eta - P/(n k T); phi_y = -E/(N k T); the derivatives below are taken of the ratios.
    let total = Jet {
        v: eta - pressure,
        x: pressure,
        y: -energy,
        xx: number / m.width[0] - pressure,
        xy: pressure_y - pressure,
        yy: -(energy_y - energy),
    };
    total - cold_jet(density, temperature_k)
}

/// Free energy per electron over kT by direct quadrature, for tests of the table.
pub fn free_energy_by_quadrature(electron_density_per_cm3: f64, temperature_k: f64) -> Jet {
    cold_jet(electron_density_per_cm3, temperature_k)
        + thermal_by_quadrature(electron_density_per_cm3.log10(), temperature_k.log10())
}

/// Values and derivatives up to second order in each direction, order f, y, yy, x, xy, xyy, xx, ...
type Node = [f64; 9];

fn node(log_density: f64, log_temperature: f64) -> Node {
    let h = MIXED_STEP;
    let d = h / std::f64::consts::LN_10;
    let at = |i: f64, j: f64| thermal_by_quadrature(log_density + i * d, log_temperature + j * d);
    let centre = at(0.0, 0.0);
    let (east, west, north, south) = (at(1.0, 0.0), at(-1.0, 0.0), at(0.0, 1.0), at(0.0, -1.0));
    let xyy = (north.xy - south.xy) / (2.0 * h);
    let xxy = (east.xy - west.xy) / (2.0 * h);
    let xxyy = (east.yy - 2.0 * centre.yy + west.yy) / (h * h);
    [centre.v, centre.y, centre.yy, centre.x, centre.xy, xyy, centre.xx, xxy, xxyy]
}

/// Quintic Hermite weights of one axis: rows = value, first, second derivative of the interpolant;
/// columns = (order of node derivative) x (left, right).
fn hermite(z: f64, h: f64) -> [[f64; 6]; 3] {
    let basis = |z: f64| {
        let (z2, z3, z4, z5) = (z * z, z.powi(3), z.powi(4), z.powi(5));
        [
            [
                1.0 - 10.0 * z3 + 15.0 * z4 - 6.0 * z5,
                z - 6.0 * z3 + 8.0 * z4 - 3.0 * z5,
                0.5 * (z2 - 3.0 * z3 + 3.0 * z4 - z5),
            ],
            [
                -30.0 * z2 + 60.0 * z3 - 30.0 * z4,
                1.0 - 18.0 * z2 + 32.0 * z3 - 15.0 * z4,
                0.5 * (2.0 * z - 9.0 * z2 + 12.0 * z3 - 5.0 * z4),
            ],
            [
                -60.0 * z + 180.0 * z2 - 120.0 * z3,
                -36.0 * z + 96.0 * z2 - 60.0 * z3,
                0.5 * (2.0 - 18.0 * z + 36.0 * z2 - 20.0 * z3),
            ],
        ]
    };
    let (left, right) = (basis(z), basis(1.0 - z));
    let mut weights = [[0.0; 6]; 3];
    for (derivative, row) in weights.iter_mut().enumerate() {
        let inner = h.powi(-(derivative as i32));
        for order in 0..3 {
            let scale = h.powi(order as i32) * inner;
            // Reflection changes the sign once per derivative taken and once per order stored.
            let sign = if (order + derivative) % 2 == 0 { 1.0 } else { -1.0 };
            row[2 * order] = left[derivative][order] * scale;
            row[2 * order + 1] = right[derivative][order] * scale * sign;
        }
    }
    weights
}

/// The tabulated electron gas.
pub struct ElectronGas {
    nodes: Vec<Node>,
}

impl ElectronGas {
    /// The table, computed at its first use (about a second).
    pub fn shared() -> &'static ElectronGas {
        static TABLE: OnceLock<ElectronGas> = OnceLock::new();
        TABLE.get_or_init(|| {
            let mut nodes = Vec::with_capacity(LOG_DENSITY.count * LOG_TEMPERATURE.count);
            for i in 0..LOG_DENSITY.count {
                for j in 0..LOG_TEMPERATURE.count {
                    nodes.push(node(
                        LOG_DENSITY.low + i as f64 * LOG_DENSITY.step(),
                        LOG_TEMPERATURE.low + j as f64 * LOG_TEMPERATURE.step(),
                    ));
                }
            }
            ElectronGas { nodes }
        })
    }

    /// Free energy per electron over kT with derivatives in ln n_e and ln T.
    pub fn free_energy(&self, electron_density_per_cm3: f64, temperature_k: f64) -> Jet {
        let cells = LOG_DENSITY
            .locate(electron_density_per_cm3.log10())
            .zip(LOG_TEMPERATURE.locate(temperature_k.log10()));
        let Some(((i, u), (j, v))) = cells else {
            return Jet::constant(f64::NAN);
        };
        let wx = hermite(u, LOG_DENSITY.step() * std::f64::consts::LN_10);
        let wy = hermite(v, LOG_TEMPERATURE.step() * std::f64::consts::LN_10);
        let mut thermal = Jet::default();
        for di in 0..2 {
            for dj in 0..2 {
                let node = &self.nodes[(i + di) * LOG_TEMPERATURE.count + j + dj];
                for order in 0..3 {
                    let column = &node[3 * order..3 * order + 3];
                    let along = |row: &[f64; 6]| {
                        column[0] * row[dj] + column[1] * row[2 + dj] + column[2] * row[4 + dj]
                    };
                    let (value, first, second) = (along(&wy[0]), along(&wy[1]), along(&wy[2]));
                    let k = 2 * order + di;
                    thermal.v += wx[0][k] * value;
                    thermal.x += wx[1][k] * value;
                    thermal.xx += wx[2][k] * value;
                    thermal.y += wx[0][k] * first;
                    thermal.xy += wx[1][k] * first;
                    thermal.yy += wx[0][k] * second;
                }
            }
        }
        thermal + cold_jet(electron_density_per_cm3, temperature_k)
    }
}
