//! A line profile at one depth: Stark profile, folded with a Lorentz and a thermal Doppler profile.
//!
//! In: a pure Stark profile on a logarithmic grid of detunings (A). Out: ln of the profile per A on another
//! logarithmic grid, so that evaluation is one logarithm, one cubic and one exponential. The Lorentz fold
//! subtracts the value at the target before it sums, which keeps narrow Lorentz profiles exact between
//! nodes; the Gaussian is summed near the centre over nodes fine enough for it, and by seven-point
//! Gauss-Hermite where the profile is smooth over its width. Accuracy: `verify_broadened_against_direct_sum`
//! (2e-3), `verify_profiles_integrate_to_one` (1e-3).

use crate::numerics::cubic::catmull_rom;
use crate::physics::constants::{BOLTZMANN_ERG_K, HYDROGEN_MASS_G, LIGHT_SPEED_CM_S};
use crate::physics::hydrogen::Line;
use std::f64::consts::PI;
use std::sync::OnceLock;

/// Logarithmic slope of every Stark wing.
pub const WING_SLOPE: f64 = -2.5;
/// Grid step of the result in ln detuning.
const LN_STEP: f64 = 0.12;
/// First node of the result, in Gaussian sigmas.
const FIRST_SIGMA: f64 = 0.15;
/// Out to here, in sigmas, the Gaussian is summed directly.
const NEAR_SIGMA: f64 = 8.0;
/// Beyond this, in sigmas, three points do what seven do nearer in.
const FAR_SIGMA: f64 = 40.0;
/// Seven-point Gauss-Hermite rule for the unit normal distribution (Abramowitz & Stegun 1972, table
/// 25.10, abscissae times sqrt 2, weights over sqrt pi): central weight, then (abscissa, weight).
const HERMITE_CENTRE: f64 = 0.457_142_857_142_857_1;
const HERMITE: [(f64, f64); 3] = [
    (1.154_405_394_739_968_1, 0.240_123_178_605_012_7),
    (2.366_759_410_734_541, 0.030_757_123_967_586_5),
    (3.750_439_717_725_742_3, 5.482_688_559_722_179e-4),
];

/// A pure Stark profile, symmetric, on a logarithmic grid of detunings.
#[derive(Debug, Clone)]
pub struct StarkProfile {
    /// ln of the first detuning, A; nearer to the centre the profile is flat.
    pub ln_detuning_first: f64,
    /// Step in ln detuning.
    pub ln_detuning_step: f64,
    /// ln of the profile per A; beyond the last node it falls as detuning^(-5/2).
    pub ln_s: Vec<f64>,
    /// Half width of a Lorentz profile already folded in, A: its wing is added to the -5/2 wing.
    pub lorentz_hwhm: f64,
    /// Share of the intensity that is not broadened at all and stays at the centre.
    pub centre: f64,
}

impl StarkProfile {
    /// ln of the profile per A at ln of a detuning, A.
    pub fn ln_value(&self, ln_detuning: f64) -> f64 {
        let at = (ln_detuning - self.ln_detuning_first) / self.ln_detuning_step;
        let s = &self.ln_s;
        let last = s.len() - 1;
        if at <= 0.0 {
            return s[0];
        }
        if at >= last as f64 {
            let ln_beyond = (at - last as f64) * self.ln_detuning_step;
            if self.lorentz_hwhm == 0.0 {
                return s[last] + WING_SLOPE * ln_beyond;
            }
            let lorentz = |ln_x: f64| self.lorentz_hwhm / PI * (-2.0 * ln_x).exp();
            let stark = (s[last].exp() - lorentz(ln_detuning - ln_beyond)).max(0.0);
            return (stark * (WING_SLOPE * ln_beyond).exp() + lorentz(ln_detuning)).ln();
        }
        let i = at as usize;
        let after = if i + 2 <= last { s[i + 2] } else { s[last] + WING_SLOPE * self.ln_detuning_step };
        catmull_rom([s[i.saturating_sub(1)], s[i], s[i + 1], after], at - i as f64)
    }

    /// Integral over all detunings, with the unbroadened share.
    pub fn integral(&self) -> f64 {
        let u = |i: usize| (self.ln_detuning_first + self.ln_detuning_step * i as f64).exp();
        let last = self.ln_s.len() - 1;
        let mut sum = self.ln_s[0].exp() * u(0);
        for i in 0..=last {
            let end = if i == 0 || i == last { 0.5 } else { 1.0 };
            sum += end * self.ln_detuning_step * u(i) * self.ln_s[i].exp();
        }
        // End corrections of the trapezoid: the integrand rises as u at the first node, falls as u^-1.5
        // at the last.
        let h2 = self.ln_detuning_step * self.ln_detuning_step / 12.0;
        sum += h2 * u(0) * self.ln_s[0].exp();
        sum += u(last) * self.ln_s[last].exp() * (1.0 / 1.5 + 1.5 * h2);
        2.0 * sum + self.centre
    }

    /// Whether a Lorentz profile of a half width (A) changes the profile by less than 1e-4: narrow
    /// against the heat's sigma, and lost in the wing as far as the wing is tabulated.
    fn is_blind_to(&self, hwhm: f64, sigma: f64) -> bool {
        let last = self.ln_s.len() - 1;
        let last_detuning = (self.ln_detuning_first + self.ln_detuning_step * last as f64).exp();
        let lorentz_wing = hwhm / (PI * last_detuning * last_detuning);
        hwhm < 1e-4 * sigma && lorentz_wing < 1e-4 * self.ln_s[last].exp()
    }

    /// Folds with a Lorentz profile of a half width at half maximum, A.
    fn with_lorentz(&self, hwhm: f64) -> StarkProfile {
        let step = self.ln_detuning_step;
        // The Lorentz core must be on the grid if there is unbroadened intensity.
        let first = if self.centre > 0.0 {
            self.ln_detuning_first.min((0.2 * hwhm).ln())
        } else {
            self.ln_detuning_first
        };
        // Beyond the grid the two wings simply add, if that is far out for both.
        let stark_last = self.ln_detuning_first + step * (self.ln_s.len() - 1) as f64;
        let last = stark_last.max((600.0 * hwhm).ln());
        let count = ((last - first) / step).ceil() as usize + 1;
        let u: Vec<f64> = (0..count).map(|i| (first + step * i as f64).exp()).collect();
        let s: Vec<f64> = u.iter().map(|u| self.ln_value(u.ln()).exp()).collect();
        // Trapezoid in ln u; the first node also stands for the flat core, and the ends count half.
        let mut weights: Vec<f64> = u.iter().map(|u| step * u).collect();
        weights[0] *= 0.5;
        weights[count - 1] *= 0.5;
        let square = hwhm * hwhm;
        let lorentz = |x: f64| hwhm / PI / (x * x + square);
        let ln_s = u
            .iter()
            .zip(&s)
            .map(|(x, own)| {
                let sum = lorentz_sum(*x, *own, square, &u, &s, &weights);
                let core = 2.0 * u[0] * (s[0] - own) * lorentz(*x);
                (own + core + hwhm / PI * sum + self.centre * lorentz(*x)).max(f64::MIN_POSITIVE).ln()
            })
            .collect();
        StarkProfile {
            ln_detuning_first: first,
            ln_detuning_step: step,
            ln_s,
            lorentz_hwhm: hwhm,
            centre: 0.0,
        }
    }
}

/// Sum of weight (s - own) [1/((x-u)^2 + square) + 1/((x+u)^2 + square)] over the nodes, with one
/// division each, in lanes that the compiler can keep in vector registers.
fn lorentz_sum(x: f64, own: f64, square: f64, u: &[f64], s: &[f64], weights: &[f64]) -> f64 {
    const LANES: usize = 4;
    let term = |u: f64, s: f64, weight: f64| {
        let (near, far) = ((x - u) * (x - u) + square, (x + u) * (x + u) + square);
        weight * (s - own) * (near + far) / (near * far)
    };
    let mut lanes = [0.0; LANES];
    let chunks = u.chunks_exact(LANES).zip(s.chunks_exact(LANES).zip(weights.chunks_exact(LANES)));
    for (u, (s, weight)) in chunks {
        for lane in 0..LANES {
            lanes[lane] += term(u[lane], s[lane], weight[lane]);
        }
    }
    let done = u.len() / LANES * LANES;
    let rest: f64 = (done..u.len()).map(|i| term(u[i], s[i], weights[i])).sum();
    lanes.iter().sum::<f64>() + rest
}

/// A profile ready for evaluation: per A of detuning, with integral 1.
#[derive(Debug, Clone)]
pub struct Broadened {
    ln_first: f64,
    inverse_step: f64,
    ln_s: Vec<f64>,
    last_slope: f64,
    centre: f64,
}

impl Broadened {
    /// Folds a Stark profile with heat and a Lorentz profile.
    pub fn new(line: Line, stark: &StarkProfile, temperature_k: f64, lorentz_hwhm_aa: f64) -> Self {
        let thermal = (BOLTZMANN_ERG_K * temperature_k / HYDROGEN_MASS_G).sqrt() / LIGHT_SPEED_CM_S;
        let wave_aa = line.wave_vac_aa();
        let sigma = wave_aa * thermal;
        let folded;
        let profile = if stark.is_blind_to(lorentz_hwhm_aa, sigma) {
            stark
        } else {
            folded = stark.with_lorentz(lorentz_hwhm_aa);
            &folded
        };
        let ln_first = (FIRST_SIGMA * sigma).ln();
        // To where the Stark wing is a pure power law, or a whole wavelength away.
        let ln_wing = profile.ln_detuning_first + profile.ln_detuning_step * profile.ln_s.len() as f64;
        let count = ((wave_aa.ln().max(ln_wing) - ln_first) / LN_STEP).ceil() as usize;
        let kernel = near_kernel();
        let near = kernel.masses(profile, sigma);
        let far = (kernel.rows.len()..count).map(|i| {
            let x = (ln_first + LN_STEP * i as f64).exp();
            hermite(profile, x, sigma)
        });
        let ln_s: Vec<f64> = kernel
            .rows
            .iter()
            .map(|row| near.folded(row) / sigma)
            .chain(far)
            .map(|value| value.max(f64::MIN_POSITIVE).ln())
            .collect();
        let last_slope = (ln_s[count - 1] - ln_s[count - 2]) / LN_STEP;
        let centre = near.folded(&kernel.centre) / sigma;
        Broadened { ln_first, inverse_step: 1.0 / LN_STEP, ln_s, last_slope, centre }
    }

    /// Profile per A at a detuning, A, of either sign.
    pub fn per_aa(&self, detuning_aa: f64) -> f64 {
        let x = detuning_aa.abs();
        let at = (x.max(1e-30).ln() - self.ln_first) * self.inverse_step;
        let s = &self.ln_s;
        let last = s.len() - 1;
        if at < 1.0 {
            // Parabola through the centre and the second node.
            let second = s[1].exp();
            let share = x / (self.ln_first + LN_STEP).exp();
            return self.centre + (second - self.centre) * share * share;
        }
        if at >= (last - 1) as f64 {
            return (s[last] + self.last_slope * (at - last as f64) * LN_STEP).exp();
        }
        let i = at as usize;
        catmull_rom([s[i - 1], s[i], s[i + 1], s[i + 2]], at - i as f64).exp()
    }
}

/// The profile folded with the Gaussian where it is smooth over a sigma.
fn hermite(profile: &StarkProfile, x: f64, sigma: f64) -> f64 {
    let at = |u: f64| profile.ln_value(u.ln()).exp();
    if x > FAR_SIGMA * sigma {
        // Three points: a power law's error is below 1e-6 here.
        let node = 3f64.sqrt() * sigma;
        return 2.0 / 3.0 * at(x) + (at(x + node) + at(x - node)) / 6.0;
    }
    let mut sum = HERMITE_CENTRE * at(x);
    for (node, weight) in HERMITE {
        sum += weight * (at(x + node * sigma) + at(x - node * sigma));
    }
    sum
}

/// Sum with the Gaussian near the centre, everything in units of its sigma: which detunings of the
/// Stark profile enter, and with which weight at each node of the result. The same for every line.
struct NearKernel {
    /// Detunings of the Stark profile, and the half widths of their cells.
    nodes: Vec<(f64, f64)>,
    /// Weights of the core's mass and of the nodes' masses at the first nodes of the result.
    rows: Vec<Vec<f64>>,
    /// The same at the line's centre.
    centre: Vec<f64>,
}

/// What lies within so many sigmas of the centre counts as being at it.
const CORE_SIGMA: f64 = 0.06;

fn near_kernel() -> &'static NearKernel {
    static KERNEL: OnceLock<NearKernel> = OnceLock::new();
    KERNEL.get_or_init(|| {
        const GROWTH: f64 = 1.4;
        const LARGEST_CELL: f64 = 0.6;
        let mut nodes = Vec::new();
        let mut from = CORE_SIGMA;
        while from < NEAR_SIGMA + 6.0 {
            let to = (from * GROWTH).min(from + LARGEST_CELL);
            let (middle, half) = (0.5 * (from + to), 0.5 * (to - from));
            nodes.extend([-GAUSS_NODE, GAUSS_NODE].map(|node| (middle + node * half, half)));
            from = to;
        }
        let gauss = |d: f64| (-0.5 * d * d).exp() / (2.0 * PI).sqrt();
        let row = |x: f64| -> Vec<f64> {
            let both_sides = nodes.iter().map(|(u, _)| gauss(x - u) + gauss(x + u));
            std::iter::once(gauss(x)).chain(both_sides).collect()
        };
        let count = ((NEAR_SIGMA / FIRST_SIGMA).ln() / LN_STEP).ceil() as usize;
        let rows = (0..count).map(|i| row(FIRST_SIGMA * (LN_STEP * i as f64).exp())).collect();
        let centre = row(0.0);
        NearKernel { nodes, rows, centre }
    })
}

/// Two-point Gauss-Legendre rule on (-1, 1): both weights are 1.
const GAUSS_NODE: f64 = 0.577_350_269_189_625_8; // 1/sqrt(3)

impl NearKernel {
    /// Masses that belong to the weights of a row.
    fn masses(&self, profile: &StarkProfile, sigma: f64) -> NearMasses {
        let core = CORE_SIGMA * sigma;
        let first = profile.ln_detuning_first.exp().min(core);
        let mut core_mass = first * profile.ln_s[0].exp();
        let ln_ratio = (core / first).ln();
        let cells = (ln_ratio / 0.3).ceil() as usize;
        for cell in 0..cells {
            let half = 0.5 * ln_ratio / cells as f64;
            let middle = first.ln() + half * (2 * cell + 1) as f64;
            for node in [-GAUSS_NODE, GAUSS_NODE] {
                let ln_u = middle + node * half;
                core_mass += half * (ln_u + profile.ln_value(ln_u)).exp();
            }
        }
        let own = self.nodes.iter().map(|(u, half)| half * sigma * profile.ln_value((u * sigma).ln()).exp());
        NearMasses(std::iter::once(2.0 * core_mass + profile.centre).chain(own).collect())
    }
}

/// Mass of the core, then of one side's nodes.
struct NearMasses(Vec<f64>);

impl NearMasses {
    fn folded(&self, row: &[f64]) -> f64 {
        self.0.iter().zip(row).map(|(mass, weight)| mass * weight).sum()
    }
}
