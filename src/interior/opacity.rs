//! Rosseland mean opacity of pure hydrogen and pure helium in the envelope.
//!
//! In: layer, temperature (K), density (g/cm3). Out: opacity (cm2/g), radiative only. One function,
//! [`rosseland_cm2_g`], so that a fuller hydrogen opacity can replace it.
//! Sources: free-free with thermally averaged Born-Elwert Gaunt factors (Elwert 1939) and Pauli
//! blocking; bound-free of levels 1 .. 10 with the exact hydrogen ground state and Kramers above,
//! levels dissolved by neighbours and by the plasma field (Hummer & Mihalas 1988); H- (John 1988, A&A
//! 193, 189, coefficients from memory); Rayleigh scattering by hydrogen; Thomson scattering reduced by
//! degeneracy and the Compton effect (Paczynski 1983, ApJ 267, 315). Lines and molecules are left
//! out: at 1e4 - 1e5 K lines add some ten per cent, where convection carries the flux anyway.
//! Checked in `validate_opacity_limits` (Thomson, Kramers' law with Gaunt factors 1.0 - 1.3).

use std::f64::consts::PI;

use super::electrons::ElectronGas;
use super::layer::{Layer, LayerState, layer_state};
use crate::physics::constants::{
    BOHR_RADIUS_CM, BOLTZMANN_ERG_K, ELECTRON_MASS_G, ELECTRON_VOLT_ERG, LIGHT_SPEED_CM_S, PLANCK_ERG_S,
    THOMSON_CM2,
};

const RYDBERG_EV: f64 = 13.598;
/// Above this H- is a trace and its fits are not meant for use.
const H_MINUS_BELOW_K: f64 = 2.5e4;
const LEVELS: usize = 10;
/// Photon energies over kT: logarithmic, from 0.05 to 40; the weight outside is below 1e-5.
const PHOTONS: usize = 72;
const LOWEST_PHOTON: f64 = 0.05;
const HIGHEST_PHOTON: f64 = 40.0;

/// Free-free Gaunt factor averaged over a Maxwellian, Born's with Elwert's correction.
fn free_free_gaunt(photon: f64, gamma2: f64) -> f64 {
    // Gauss-Laguerre, 6 nodes (Abramowitz & Stegun 1972, table 25.9).
    const NODES: [(f64, f64); 6] = [
        (0.222_846_604_179, 0.458_964_673_950),
        (1.188_932_101_673, 0.417_000_830_772),
        (2.992_736_326_059, 0.113_373_382_074),
        (5.775_143_569_105, 1.039_919_745_31e-2),
        (9.837_467_418_383, 2.610_172_028_15e-4),
        (15.982_873_980_602, 8.985_479_064_30e-7),
    ];
    NODES
        .iter()
        .map(|(low, weight)| {
            let high = low + photon;
            let (eta_low, eta_high) = ((gamma2 / low).sqrt(), (gamma2 / high).sqrt());
            let (k_low, k_high) = (low.sqrt(), high.sqrt());
            let born = 3f64.sqrt() / PI * ((k_high + k_low) / (k_high - k_low)).ln();
            let elwert =
                eta_low / eta_high * (-2.0 * PI * eta_high).exp_m1() / (-2.0 * PI * eta_low).exp_m1();
            weight * born * elwert
        })
        .sum()
}

/// Bound-free cross-section of the hydrogenic ground state, cm2.
///
/// # Reference
/// Osterbrock & Ferland 2006, eq. 2.4.
fn ground_state_cm2(energy_over_threshold: f64, charge: f64) -> f64 {
    let e = (energy_over_threshold - 1.0).max(1e-8).sqrt();
    6.304e-18 / (charge * charge) * energy_over_threshold.powi(-4) * (4.0 - 4.0 * e.atan() / e).exp()
        / (-(-2.0 * PI / e).exp_m1())
}

/// H- bound-free, cm4/dyn per neutral atom and electron pressure, stimulated emission included.
fn h_minus_bound_free(wave_um: f64, temperature_k: f64) -> f64 {
    const LIMIT_UM: f64 = 1.6419;
    const C: [f64; 6] = [152.519, 49.534, -118.858, 92.536, -34.194, 4.982];
    if wave_um >= LIMIT_UM {
        return 0.0;
    }
    let wave_um = wave_um.max(0.125);
    let d = 1.0 / wave_um - 1.0 / LIMIT_UM;
    let f: f64 = C.iter().enumerate().map(|(n, c)| c * d.powf(0.5 * n as f64)).sum();
    let cross = 1e-18 * wave_um.powi(3) * d.powf(1.5) * f;
    let alpha = 1.439e4;
    0.750
        * temperature_k.powf(-2.5)
        * (alpha / (LIMIT_UM * temperature_k)).exp()
        * -(-alpha / (wave_um * temperature_k)).exp_m1()
        * cross
}

/// H- free-free, cm4/dyn per neutral atom and electron pressure; wavelengths above 0.3645 um.
fn h_minus_free_free(wave_um: f64, temperature_k: f64) -> f64 {
    const ROWS: [[f64; 6]; 5] = [
        [2483.3460, 285.8270, -2054.2910, 2827.7760, -1341.5370, 208.9520],
        [-3449.8890, -1158.3820, 8746.5230, -11485.6320, 5303.6090, -812.9390],
        [2200.0400, 2427.7190, -13651.1050, 16755.5240, -7510.4940, 1132.7380],
        [-696.2710, -1841.4000, 8624.9700, -10051.5300, 4400.0670, -655.0200],
        [88.2830, 444.5170, -1863.8640, 2095.2880, -901.7880, 132.9850],
    ];
    let l = wave_um.clamp(0.3645, 20.0);
    let theta = 5040.0 / temperature_k;
    let sum: f64 = ROWS
        .iter()
        .enumerate()
        .map(|(i, [a, b, c, d, e, f])| {
            let shape = l * l * a + b + c / l + d / l.powi(2) + e / l.powi(3) + f / l.powi(4);
            theta.powf(0.5 * (i as f64 + 3.0)) * shape
        })
        .sum();
    (1e-29 * sum).max(0.0)
}

/// Occupation probability of level n of a hydrogenic ion by plasma field and neighbours.
fn occupation(n: f64, net_charge: f64, state: &LayerState) -> f64 {
    let nuclei: f64 = state.stages_per_cm3.iter().sum();
    let neighbours =
        nuclei * 4.0 * PI / 3.0 * (BOHR_RADIUS_CM * (n * n / net_charge + 1.0 / net_charge)).powi(3);
    let k = if n > 3.0 { 16.0 / 3.0 * n / ((n + 1.0) * (n + 1.0)) } else { 1.0 };
    let electrons = state.electrons_per_cm3.max(1e-30);
    let beta = 8.57e14 * k * net_charge.powi(3) * n.powi(-4) * electrons.powf(-2.0 / 3.0);
    let a = 0.09 * electrons.powf(1.0 / 6.0) / state.matter.temperature_k.sqrt();
    let x = (1.0 + a).powf(3.15);
    let f = 0.1402 * x * beta.powi(3) / (1.0 + 0.1285 * x * beta.powf(1.5));
    (-neighbours).exp() * f / (1.0 + f)
}

/// Bound-free absorption coefficients of the levels of one hydrogen-like stage.
struct BoundLevels {
    /// (threshold eV, density per cm^3, cross-section at threshold, true for the ground state).
    levels: Vec<(f64, f64, f64, bool)>,
    net_charge: f64,
}

impl BoundLevels {
    /// `ground_ev` is the ionisation energy; levels above follow Rydberg's formula.
    fn new(state: &LayerState, density: f64, net_charge: f64, ground_ev: f64, ground_weight: f64) -> Self {
        let kt_ev = BOLTZMANN_ERG_K * state.matter.temperature_k / ELECTRON_VOLT_ERG;
        let rydberg = RYDBERG_EV * net_charge * net_charge;
        let ground_occupation = occupation(1.0, net_charge, state).max(1e-30);
        let levels = (1..=LEVELS)
            .map(|level| {
                let n = level as f64;
                let threshold = if level == 1 { ground_ev } else { rydberg / (n * n) };
                // Helium's singlets and triplets together have 4 n^2 states; hydrogenic ions 2 n^2.
                let weight = if level == 1 {
                    ground_weight
                } else if ground_weight < 1.5 {
                    4.0 * n * n
                } else {
                    2.0 * n * n
                };
                let boltzmann = weight / ground_weight * (-(ground_ev - threshold) / kt_ev).exp();
                let share = occupation(n, net_charge, state) / ground_occupation;
                let share = if level == 1 { 1.0 } else { share };
                (
                    threshold,
                    density * boltzmann * share,
                    7.906e-18 * n / (net_charge * net_charge),
                    level == 1,
                )
            })
            .collect();
        BoundLevels { levels, net_charge }
    }

    fn absorption(&self, photon_ev: f64) -> f64 {
        let helium = self.levels.first().is_some_and(|l| (l.0 - 24.587).abs() < 1.0);
        self.levels
            .iter()
            .filter(|(threshold, ..)| photon_ev >= *threshold)
            .map(|&(threshold, density, at_threshold, is_ground)| {
                let ratio = photon_ev / threshold;
                let cross = match (is_ground, helium) {
                    // Helium: 7.4 Mb at threshold, falling as E^-2 at first (Samson et al. 1994).
                    (true, true) => 7.4e-18 * ratio.powi(-2),
                    (true, false) => ground_state_cm2(ratio, self.net_charge),
                    (false, _) => at_threshold * ratio.powi(-3),
                };
                density * cross
            })
            .sum()
    }
}

/// Free electrons among ions: what every mixture shares.
struct Plasma {
    electrons_per_cm3: f64,
    density_g_cm3: f64,
    temperature_k: f64,
    degeneracy: f64,
}

impl Plasma {
    /// Rosseland mean of free-free absorption, scattering by electrons, and `other(u)`, the absorption and
    /// scattering (1/cm) of all else at photon energy u kT.
    fn rosseland_cm2_g(&self, ions: &[(f64, f64)], other: impl Fn(f64) -> f64) -> f64 {
        let (t, rho, electrons) = (self.temperature_k, self.density_g_cm3, self.electrons_per_cm3);
        let kt = BOLTZMANN_ERG_K * t;
        let kt_ev = kt / ELECTRON_VOLT_ERG;
        let wave2 = PLANCK_ERG_S * PLANCK_ERG_S / (2.0 * PI * ELECTRON_MASS_G * kt);
        // What e^eta would be in a Maxwellian gas of the same density.
        let maxwell = 0.5 * electrons * wave2 * wave2.sqrt();
        let scattering =
            THOMSON_CM2 * electrons / ((1.0 + 2.7e11 * rho / (t * t)) * (1.0 + (t / 4.5e8).powf(0.86)));
        let step = (HIGHEST_PHOTON / LOWEST_PHOTON).ln() / (PHOTONS - 1) as f64;
        let (mut weights, mut transparency) = (0.0, 0.0);
        for k in 0..PHOTONS {
            let u = LOWEST_PHOTON * (k as f64 * step).exp();
            let frequency = u * kt / PLANCK_ERG_S;
            let stimulated = -(-u).exp_m1();
            // Pauli blocking of the initial and final states of the scattered electron.
            let blocking =
                (softplus(self.degeneracy) - softplus(self.degeneracy - u)) / (stimulated * maxwell);
            let free: f64 =
                ions.iter().map(|(z, n)| z * z * n * free_free_gaunt(u, z * z * RYDBERG_EV / kt_ev)).sum();
            // Kramers: 3.692e8 cgs (Rybicki & Lightman 1979, eq. 5.18a).
            let absorption =
                3.692e8 * electrons * free / (t.sqrt() * frequency.powi(3)) * stimulated * blocking;
            let weight = u.powi(5) * (-u).exp() / (stimulated * stimulated);
            weights += weight;
            transparency += weight / (absorption + scattering + other(u));
        }
        weights / transparency / rho
    }
}

/// Rosseland mean of an already known state, cm2/g.
pub fn rosseland_of_state_cm2_g(layer: Layer, state: &LayerState) -> f64 {
    let t = state.matter.temperature_k;
    let kt = BOLTZMANN_ERG_K * t;
    let [neutral, once, twice] = state.stages_per_cm3;
    let bound: Vec<BoundLevels> = match layer {
        Layer::Hydrogen => vec![BoundLevels::new(state, neutral, 1.0, RYDBERG_EV, 2.0)],
        Layer::Helium => vec![
            BoundLevels::new(state, neutral, 1.0, 24.587, 1.0),
            BoundLevels::new(state, once, 2.0, 54.418, 2.0),
        ],
    };
    let other = |u: f64| {
        let frequency = u * kt / PLANCK_ERG_S;
        let photon_ev = u * kt / ELECTRON_VOLT_ERG;
        let mut sum = bound.iter().map(|b| b.absorption(photon_ev)).sum::<f64>() * -(-u).exp_m1();
        if layer == Layer::Hydrogen {
            let wave_um = 1e4 * LIGHT_SPEED_CM_S / frequency;
            if t < H_MINUS_BELOW_K {
                let minus = h_minus_bound_free(wave_um, t) + h_minus_free_free(wave_um, t);
                sum += minus * state.electrons_per_cm3 * kt * neutral;
            }
            let wave_aa = (1e4 * wave_um).max(1300.0);
            sum += neutral
                * (5.799e-13 / wave_aa.powi(4) + 1.422e-6 / wave_aa.powi(6) + 2.784 / wave_aa.powi(8));
        }
        sum
    };
    let plasma = Plasma {
        electrons_per_cm3: state.electrons_per_cm3,
        density_g_cm3: state.matter.density_g_cm3,
        temperature_k: t,
        degeneracy: state.degeneracy,
    };
    plasma.rosseland_cm2_g(&[(1.0, once), (2.0, twice)], other)
}

/// ln(1 + e^x).
fn softplus(x: f64) -> f64 {
    if x > 30.0 { x } else { x.exp().ln_1p() }
}

/// Rosseland mean of a fully ionised mixture, cm2/g: free-free and scattering alone.
///
/// `ions` holds (charge, density per cm3). Bound-free absorption of carbon and oxygen is left out: cores are
/// hotter than 1e6 K or conduct.
pub fn ionised_rosseland_cm2_g(
    ions: &[(f64, f64)],
    electrons_per_cm3: f64,
    density_g_cm3: f64,
    temperature_k: f64,
) -> f64 {
    let gas = ElectronGas::shared().free_energy(electrons_per_cm3, temperature_k);
    let plasma = Plasma { electrons_per_cm3, density_g_cm3, temperature_k, degeneracy: gas.v + gas.x };
    plasma.rosseland_cm2_g(ions, |_| 0.0)
}

/// Rosseland mean opacity of a layer, cm2/g.
pub fn rosseland_cm2_g(layer: Layer, temperature_k: f64, density_g_cm3: f64) -> f64 {
    rosseland_of_state_cm2_g(layer, &layer_state(layer, density_g_cm3, temperature_k))
}
