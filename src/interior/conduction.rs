//! Heat conduction by electrons in fully ionised matter, as an opacity.
//!
//! In: ion charge and mass, electron density (cm^-3), temperature (K). Out: conductive opacity
//! (cm2/g) for the diffusion law F = -16 sigma T^3/(3 kappa rho) dT/dr.
//! Electron-ion collisions: the effective Coulomb logarithm of Potekhin, Baiko, Haensel & Yakovlev
//! (1999, A&A 346, 345, eqs 6-19) with its structure-factor and non-Born corrections; electron-electron
//! collisions: their eqs 30-33 where electrons are degenerate, limited to Spitzer's ratio where not.
//! The relaxation time is averaged over the Fermi-Dirac distribution with the thermoelectric term,
//! which reaches Spitzer's non-degenerate limit. Formulas written from memory; limits checked in
//! `validate_conduction_limits` (degenerate liquid carbon against the printed Coulomb logarithm of
//! order one, Spitzer & Harm 1953 when hot and thin).
//! Domain: liquid or gaseous ions (band structure of the crystal is left out: it matters only below a
//! third of the ion plasma temperature).

use std::f64::consts::PI;
use std::sync::LazyLock;

use gauss_quad::GaussLegendre;

use super::electrons::{ELECTRON_REST_ENERGY_ERG, ElectronGas, relativity_parameter};
use super::matter::electron_coupling;
use crate::physics::constants::{
    ATOMIC_MASS_UNIT_G, BOLTZMANN_ERG_K, ELECTRON_MASS_G, ELEMENTARY_CHARGE_ESU, LIGHT_SPEED_CM_S,
    PLANCK_ERG_S, STEFAN_BOLTZMANN_CGS,
};

const HBAR_ERG_S: f64 = PLANCK_ERG_S / (2.0 * PI);
const FINE_STRUCTURE: f64 = ELEMENTARY_CHARGE_ESU * ELEMENTARY_CHARGE_ESU / (HBAR_ERG_S * LIGHT_SPEED_CM_S);
/// Mean squared ion displacement of a bcc crystal, in classical units.
const U_MINUS_2: f64 = 13.0;
/// Electron-electron over electron-ion collision rate times Z in a hot thin gas, from the conductivities of
/// Spitzer & Harm (1953, Phys. Rev. 89, 977): 0.0943 of a Lorentz gas's 0.4 for Z = 1, 0.146 for Z = 2.
const SPITZER_ELECTRON_SHARE: f64 = 3.3;

static NODES: LazyLock<Vec<(f64, f64)>> = LazyLock::new(|| {
    let degree = std::num::NonZeroUsize::new(20).unwrap_or(std::num::NonZeroUsize::MIN);
    GaussLegendre::new(degree).iter().map(|(node, weight)| (*node, *weight)).collect()
});

/// e^x E1(x).
fn scaled_e1(x: f64) -> f64 {
    if x < 40.0 {
        return statrs::function::exponential::integral(x, 1).map_or(0.0, |e1| x.exp() * e1);
    }
    let r = 1.0 / x;
    r * (1.0 - r * (1.0 - r * (2.0 - r * (6.0 - r * 24.0))))
}

/// Effective Coulomb logarithm at scaled screening `s` and structure parameter `w`.
fn coulomb_logarithm(s: f64, w: f64, velocity_over_c: f64) -> f64 {
    let decay = (-w).exp();
    let e1 = scaled_e1(s * w) - decay * scaled_e1(s * w + w);
    let log = (1.0 / s).ln_1p();
    let one = 0.5 * (log + s / (s + 1.0) * (1.0 - decay) - (1.0 + s * w) * e1);
    let first = if w > 1e-3 { (decay - 1.0 + w) / w } else { 0.5 * w };
    let two = 0.5 * (first - s * s / (s + 1.0) * (1.0 - decay) - 2.0 * s * log + s * (2.0 + s * w) * e1);
    (one - velocity_over_c * velocity_over_c * two).max(1e-3)
}

/// Electron-electron collision rate of degenerate electrons, 1/s.
fn degenerate_electron_rate(x: f64, electron_plasma_k: f64, temperature_k: f64) -> f64 {
    let beta2 = x * x / (1.0 + x * x);
    let y = 3f64.sqrt() * electron_plasma_k / temperature_k;
    let screen = (y / (1.0 + 0.074_14 * y)).powi(3) / 3.0 * (2.810 / y - 0.810 * beta2 / y).ln_1p()
        + PI.powi(5) / 6.0 * (y / (13.91 + y)).powi(4);
    let j = (1.0 + 6.0 / (5.0 * x * x) + 2.0 / (5.0 * x.powi(4))) * screen;
    let kt = BOLTZMANN_ERG_K * temperature_k;
    // (2 k_F / k_TF)^3 = (pi beta / alpha)^(3/2).
    let screening = (PI * beta2.sqrt() / FINE_STRUCTURE).powf(1.5);
    let mass = ELECTRON_REST_ENERGY_ERG * (1.0 + x * x).sqrt();
    3.0 * FINE_STRUCTURE.powi(2) / (2.0 * PI.powi(3)) * kt * kt / (HBAR_ERG_S * mass) * screening * j
}

/// Thermal conductivity of electrons, erg/s/cm/K.
///
/// # Domain
/// One ion species of charge >= 1; NaN outside the electron table.
pub fn thermal_conductivity_cgs(
    charge: f64,
    mass_u: f64,
    electron_density_per_cm3: f64,
    temperature_k: f64,
) -> f64 {
    let gas = ElectronGas::shared().free_energy(electron_density_per_cm3, temperature_k);
    let degeneracy = gas.v + gas.x;
    let stiffness = gas.x + gas.xx;
    let kt = BOLTZMANN_ERG_K * temperature_k;
    let ions = electron_density_per_cm3 / charge;
    let e2 = ELEMENTARY_CHARGE_ESU * ELEMENTARY_CHARGE_ESU;
    let debye = 4.0 * PI * charge * charge * e2 * ions / kt;
    let coupling = electron_coupling(electron_density_per_cm3, temperature_k) * charge.powf(5.0 / 3.0);
    // Strongly coupled ions do not screen each other: their order is in `w` instead.
    let screen_ions = debye * (1.0 + 0.06 * coupling) * (-coupling.sqrt()).exp();
    let screen_electrons = 4.0 * PI * e2 * electron_density_per_cm3 / (kt * stiffness);
    let x_fermi = relativity_parameter(electron_density_per_cm3);
    let plasma =
        |density: f64, mass: f64| HBAR_ERG_S * (4.0 * PI * e2 * density / mass).sqrt() / BOLTZMANN_ERG_K;
    let electron_plasma_k =
        plasma(electron_density_per_cm3, ELECTRON_MASS_G * (1.0 + x_fermi * x_fermi).sqrt());
    let quantum = temperature_k / plasma(charge * charge * ions, mass_u * ATOMIC_MASS_UNIT_G);
    let rate_ee = degenerate_electron_rate(x_fermi, electron_plasma_k, temperature_k);

    let theta = kt / ELECTRON_REST_ENERGY_ERG;
    let inverse_time = |t: f64| {
        let energy = t * theta;
        let momentum2 = energy * (energy + 2.0);
        let momentum = momentum2.sqrt();
        let beta = momentum / (1.0 + energy);
        let double_wave = 2.0 * momentum * ELECTRON_MASS_G * LIGHT_SPEED_CM_S / HBAR_ERG_S;
        let born = PI * FINE_STRUCTURE * charge * beta;
        let s = (screen_ions + screen_electrons) * (-born).exp() / (double_wave * double_wave);
        let w = U_MINUS_2 * double_wave * double_wave / debye * (1.0 + born / 3.0);
        let freeze = quantum / (quantum * quantum + 0.19 * 0.19 / charge.cbrt()).sqrt()
            * (1.0 + 0.122 * born * born)
            + 0.0105 * (1.0 - 1.0 / charge) * (1.0 + beta.powi(3) * born) * quantum
                / (quantum * quantum + 0.0081).powf(1.5);
        let p = momentum * ELECTRON_MASS_G * LIGHT_SPEED_CM_S;
        let ei = 4.0 * PI * charge * charge * e2 * e2 * ions / (p * p * beta * LIGHT_SPEED_CM_S)
            * coulomb_logarithm(s, w, beta)
            * freeze;
        let ee = 1.0 / (1.0 / rate_ee + charge / (SPITZER_ELECTRON_SHARE * ei));
        (ei + ee, p * p * beta * LIGHT_SPEED_CM_S)
    };
    let low = (degeneracy - 25.0).max(0.0);
    let high = degeneracy.max(0.0) + 28.0;
    let middle = if degeneracy > 0.0 { degeneracy } else { 7.0 };
    let mut k = [0.0f64; 3];
    for (a, b) in [(low, middle), (middle, high)] {
        for (node, weight) in NODES.iter() {
            let t = 0.5 * (a + b) + 0.5 * (b - a) * node;
            let e = (-(t - degeneracy).abs()).exp();
            let (rate, transport) = inverse_time(t);
            let g = 0.5 * (b - a) * weight * e / ((1.0 + e) * (1.0 + e)) * transport / rate;
            let d = t - degeneracy;
            k[0] += g;
            k[1] += g * d;
            k[2] += g * d * d;
        }
    }
    8.0 * PI / (3.0 * PLANCK_ERG_S.powi(3)) * kt * kt / temperature_k * (k[2] - k[1] * k[1] / k[0])
}

/// Conductive opacity, cm2/g.
pub fn conductive_opacity_cm2_g(
    charge: f64,
    mass_u: f64,
    electron_density_per_cm3: f64,
    temperature_k: f64,
    density_g_cm3: f64,
) -> f64 {
    let conductivity = thermal_conductivity_cgs(charge, mass_u, electron_density_per_cm3, temperature_k);
    16.0 * STEFAN_BOLTZMANN_CGS * temperature_k.powi(3) / (3.0 * density_g_cm3 * conductivity)
}
