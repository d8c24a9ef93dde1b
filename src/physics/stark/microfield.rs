//! Distribution of the slow ion microfield at a neutral atom in a hydrogen plasma.
//!
//! The cluster expansion of Baranger & Mozer (1959, Phys. Rev. 115, 521; 1960, 118, 626) to second
//! order: ln F(k) = n h1(k) + (n^2/2) h2(k), with single-ion fields screened by the electrons and the
//! linearised pair correlation g2 - 1 = -(e^2/kT)/r exp(-r/lambda_total), its angular integrals done
//! by expansion in Legendre polynomials (Pfennig & Trefftz 1966). Fields are in units of the
//! Holtsmark field F0 = e/r0^2 = 2.603 e n^(2/3), with (4/15)(2 pi)^(3/2) r0^3 n = 1; the one parameter
//! is a = r0 / electron Debye length. Only singly charged ions, of the electrons' number density.
//!
//! Domain: a from 0 (Holtsmark) to [`LARGEST_SCREENING`]; beyond about 0.8 the linearised
//! correlation is a poor approximation, and larger values are taken at the limit. Accuracy:
//! `validate_holtsmark_table` (1e-4), `validate_microfield_against_hooper_fit`.

use crate::numerics::bessel::{ModifiedPair, spherical_j};
use crate::numerics::cubic::{Spline, catmull_rom};
use std::f64::consts::PI;
use std::sync::OnceLock;

/// n r0^3 = 15 / (4 (2 pi)^(3/2)), the definition of r0.
const ION_DENSITY: f64 = 0.238_101_134_753;
/// Largest screening parameter that is computed.
pub const LARGEST_SCREENING: f64 = 1.2;
/// Grid of the tabulated distribution in ln beta: first node, step, count.
const LN_BETA_FIRST: f64 = -7.0;
const LN_BETA_STEP: f64 = 0.05;
const LN_BETA_COUNT: usize = 300;
/// Step in ln beta of [`Microfield::add_density`].
pub const COARSE_STEP: f64 = LN_BETA_STEP * COARSE_STRIDE as f64;
const COARSE_STRIDE: usize = 3;
/// Spacing of the stored distributions in the screening parameter.
const SCREENING_STEP: f64 = 0.1;

/// Holtsmark field F0 = e/r0^2, statvolt/cm.
pub fn holtsmark_field_esu(electron_density_per_cm3: f64) -> f64 {
    use crate::physics::constants::ELEMENTARY_CHARGE_ESU;
    ELEMENTARY_CHARGE_ESU * (electron_density_per_cm3 / ION_DENSITY).powf(2.0 / 3.0)
}

/// Field unit of alpha as the tabulations of Stark profiles define it, F0 = 1.25e-9 n^(2/3) statvolt/cm.
pub fn normal_field_esu(electron_density_per_cm3: f64) -> f64 {
    1.25e-9 * electron_density_per_cm3.powf(2.0 / 3.0)
}

/// Screening parameter r0 / electron Debye length.
pub fn screening(temperature_k: f64, electron_density_per_cm3: f64) -> f64 {
    let r0 = (ION_DENSITY / electron_density_per_cm3).cbrt();
    r0 / debye_length_cm(temperature_k, electron_density_per_cm3)
}

/// Electron Debye length, cm.
pub fn debye_length_cm(temperature_k: f64, electron_density_per_cm3: f64) -> f64 {
    use crate::physics::constants::{BOLTZMANN_ERG_K, ELEMENTARY_CHARGE_ESU};
    (BOLTZMANN_ERG_K * temperature_k / (4.0 * PI * electron_density_per_cm3)).sqrt() / ELEMENTARY_CHARGE_ESU
}

/// One distribution W(beta), normalised to 1 over beta from 0 to infinity.
#[derive(Debug, Clone)]
pub struct Microfield {
    ln_w: Vec<f64>,
    w: Vec<f64>,
    cumulative: Vec<f64>,
}

impl Microfield {
    /// Computes the distribution for a screening parameter.
    pub fn compute(screening: f64) -> Self {
        let a = screening.clamp(0.0, LARGEST_SCREENING);
        let transform = transform(a);
        // The sine integral is good up to here; beyond, the nearest ion decides.
        const MATCH_BETA: f64 = 25.0;
        let step = 0.004;
        let mut k_weight = Vec::new();
        for i in 1..20_000 {
            let k = f64::from(i) * step;
            let value = transform.value(k);
            if value < 1e-14 {
                break;
            }
            k_weight.push(value * k * step);
        }
        let inner = |beta: f64| {
            // sum of sin(i x) by recurrence on the angle addition.
            let x = beta * step;
            let (s1, c1) = x.sin_cos();
            let (mut s, mut c) = (s1, c1);
            let mut sum = 0.0;
            for weight in &k_weight {
                sum += weight * s;
                (s, c) = (s * c1 + c * s1, c * c1 - s * s1);
            }
            2.0 * beta / PI * sum
        };
        let at_match = inner(MATCH_BETA);
        let correction = (at_match / nearest_ion(MATCH_BETA, a) - 1.0) * MATCH_BETA.powf(1.5);
        let small = inner(0.02) / 0.02f64.powi(2);
        let ln_w: Vec<f64> = (0..LN_BETA_COUNT)
            .map(|i| {
                let beta = (LN_BETA_FIRST + LN_BETA_STEP * i as f64).exp();
                if beta < 0.02 {
                    (small * beta * beta).ln()
                } else if beta < MATCH_BETA {
                    inner(beta).max(1e-12).ln()
                } else {
                    (nearest_ion(beta, a) * (1.0 + correction * beta.powf(-1.5))).ln()
                }
            })
            .collect();
        Microfield::from_ln_w(ln_w)
    }

    fn from_ln_w(ln_w: Vec<f64>) -> Self {
        let beta = |i: usize| (LN_BETA_FIRST + LN_BETA_STEP * i as f64).exp();
        let mass = |i: usize| ln_w[i].exp() * beta(i);
        let mut cumulative = vec![mass(0) / 3.0];
        for i in 1..ln_w.len() {
            // Trapezoid with end slopes: W beta is smooth in ln beta.
            let last = ln_w.len() - 1;
            let slope = |j: usize| match j {
                0 => mass(1) - mass(0),
                j if j == last => mass(last) - mass(last - 1),
                j => 0.5 * (mass(j + 1) - mass(j - 1)),
            };
            let cell = LN_BETA_STEP * (0.5 * (mass(i) + mass(i - 1)) + (slope(i - 1) - slope(i)) / 12.0);
            cumulative.push(cumulative[i - 1] + cell);
        }
        let w = ln_w.iter().map(|value| value.exp()).collect();
        Microfield { ln_w, w, cumulative }
    }

    /// The distribution at a screening parameter, from distributions stored once per process.
    pub fn stored(screening: f64) -> Self {
        static STORE: OnceLock<Vec<Microfield>> = OnceLock::new();
        let store = STORE.get_or_init(|| {
            let count = (LARGEST_SCREENING / SCREENING_STEP).round() as usize + 1;
            (0..count).map(|i| Microfield::compute(i as f64 * SCREENING_STEP)).collect()
        });
        let at = (screening / SCREENING_STEP).clamp(0.0, (store.len() - 1) as f64);
        let cell = (at as usize).min(store.len() - 2);
        let t = at - cell as f64;
        let mix = |a: &[f64], b: &[f64]| a.iter().zip(b).map(|(a, b)| a + t * (b - a)).collect();
        Microfield {
            ln_w: mix(&store[cell].ln_w, &store[cell + 1].ln_w),
            w: mix(&store[cell].w, &store[cell + 1].w),
            cumulative: mix(&store[cell].cumulative, &store[cell + 1].cumulative),
        }
    }

    /// Probability density at a field.
    pub fn density(&self, beta: f64) -> f64 {
        if beta <= 0.0 {
            return 0.0;
        }
        self.ln_density(beta.ln()).exp()
    }

    /// ln of the density at ln of the field.
    pub fn ln_density(&self, ln_beta: f64) -> f64 {
        let at = (ln_beta - LN_BETA_FIRST) / LN_BETA_STEP;
        if at < 1.0 {
            return self.ln_w[1] + 2.0 * (at - 1.0) * LN_BETA_STEP;
        }
        let last = LN_BETA_COUNT - 2;
        if at >= last as f64 {
            return self.ln_w[last] - 2.5 * (at - last as f64) * LN_BETA_STEP;
        }
        let cell = at as usize;
        let w = &self.ln_w;
        catmull_rom([w[cell - 1], w[cell], w[cell + 1], w[cell + 2]], at - cell as f64)
    }

    /// Adds `height` times the density at the fields exp(`ln_beta_first` + i [`COARSE_STEP`]) to `sums`,
    /// the fast way to fold many components; above `beta_cut` only half is added.
    pub fn add_density(&self, ln_beta_first: f64, height: f64, beta_cut: f64, sums: &mut [f64]) {
        let at = (ln_beta_first - LN_BETA_FIRST) / LN_BETA_STEP;
        let t = at - at.floor();
        let cut = ((beta_cut.ln() - ln_beta_first) / COARSE_STEP).ceil().max(0.0) as usize;
        // All nodes share one fraction, hence one set of cubic weights.
        let weights: [f64; 4] = std::array::from_fn(|i| {
            let mut unit = [0.0; 4];
            unit[i] = height;
            catmull_rom(unit, t)
        });
        for (i, sum) in sums.iter_mut().enumerate() {
            let cell = at.floor() as isize + (COARSE_STRIDE * i) as isize;
            let value = if cell >= 1 && (cell as usize) < LN_BETA_COUNT - 2 {
                let w = &self.w[cell as usize - 1..cell as usize + 3];
                weights[0] * w[0] + weights[1] * w[1] + weights[2] * w[2] + weights[3] * w[3]
            } else {
                height * self.ln_density(ln_beta_first + COARSE_STEP * i as f64).exp()
            };
            *sum += if i >= cut { 0.5 * value } else { value };
        }
    }

    /// Probability of a field below beta.
    pub fn cumulative(&self, beta: f64) -> f64 {
        let at = (beta.max(1e-30).ln() - LN_BETA_FIRST) / LN_BETA_STEP;
        if at < 1.0 {
            return self.cumulative[1] * (3.0 * (at - 1.0) * LN_BETA_STEP).exp();
        }
        let last = LN_BETA_COUNT - 2;
        if at >= last as f64 {
            return 1.0 - (1.0 - self.cumulative[last]) * (-1.5 * (at - last as f64) * LN_BETA_STEP).exp();
        }
        let cell = at as usize;
        let c = &self.cumulative;
        catmull_rom([c[cell - 1], c[cell], c[cell + 1], c[cell + 2]], at - cell as f64)
    }
}

/// Screened field of one ion at a distance r in r0, in units of F0.
fn ion_field(r: f64, a: f64) -> f64 {
    (1.0 + a * r) * (-a * r).exp() / (r * r)
}

/// Density of the field of the nearest ion alone, without the probability that it is the nearest:
/// the asymptote of W.
fn nearest_ion(beta: f64, a: f64) -> f64 {
    // Newton for r(beta), starting from the bare field.
    let mut r = beta.powf(-0.5);
    for _ in 0..30 {
        let slope = -(2.0 + 2.0 * a * r + (a * r).powi(2)) * (-a * r).exp() / r.powi(3);
        r -= (ion_field(r, a) - beta) / slope;
    }
    let slope = (2.0 + 2.0 * a * r + (a * r).powi(2)) * (-a * r).exp() / r.powi(3);
    4.0 * PI * ION_DENSITY * r * r / slope
}

/// The characteristic function F(k): ln F / k^1.5 as a spline over sqrt(k).
struct Transform {
    exponent: Spline,
    last: f64,
}

impl Transform {
    fn value(&self, k: f64) -> f64 {
        let root = k.sqrt().min(self.last);
        (k.powf(1.5) * self.exponent.value(root)).exp()
    }
}

fn transform(a: f64) -> Transform {
    const COUNT: usize = 60;
    const ROOT_LAST: f64 = 7.0;
    let roots: Vec<f64> =
        (0..=COUNT).map(|i| 0.02 + ROOT_LAST * (i as f64 / COUNT as f64).powf(1.3)).collect();
    let exponents: Vec<f64> = roots
        .iter()
        .map(|root| {
            if a == 0.0 {
                return -1.0;
            }
            let k = root * root;
            let (first, second) = cluster_integrals(k, a);
            (first + second) / k.powf(1.5)
        })
        .collect();
    Transform { exponent: Spline::new(&roots, &exponents), last: ROOT_LAST }
}

/// Legendre components of the pair integral; the last adds less than 1e-5.
const L_COUNT: usize = 17;

/// First- and second-order terms n h1 and (n^2/2) h2 of ln F(k).
fn cluster_integrals(k: f64, a: f64) -> (f64, f64) {
    // Radii on a logarithmic grid from where the phase k E is large to where screening ends all.
    let r_first = 0.05 * k.sqrt();
    let r_last = 30.0 / a;
    let count = 700;
    let step = (r_last / r_first).ln() / count as f64;
    let radii: Vec<f64> = (0..=count).map(|i| r_first * (step * i as f64).exp()).collect();
    let phases: Vec<f64> = radii.iter().map(|r| k * ion_field(*r, a)).collect();
    // h1 = 4 pi int r^2 (sin x / x - 1) dr; inside the first radius the sine averages out.
    let mut first = -r_first.powi(3) / 3.0;
    for (r, x) in radii.iter().zip(&phases) {
        let value = if *x < 1e-3 { -x * x / 6.0 } else { x.sin() / x - 1.0 };
        first += r.powi(3) * step * value;
    }
    let x0 = phases[0];
    first -= 0.5 * step * r_first.powi(3) * (x0.sin() / x0 - 1.0);
    let first = 4.0 * PI * ION_DENSITY * first;
    // h2 by Legendre components of exp(i k E cos) - 1, namely i^l (2 l + 1) (j_l(k E) - delta_l0), and of
    // exp(-kappa r12)/r12, namely kappa (2 l + 1) i_l(kappa r_<) k_l(kappa r_>).
    let kappa = a * std::f64::consts::SQRT_2;
    let j: Vec<[f64; L_COUNT]> = phases.iter().map(|x| spherical_j(*x)).collect();
    let modified: Vec<ModifiedPair<L_COUNT>> = radii.iter().map(|r| ModifiedPair::new(kappa * r)).collect();
    let mut second = 0.0;
    for l in 0..L_COUNT {
        let (mut inner, mut sum) = (0.0, 0.0);
        for (i, r) in radii.iter().enumerate() {
            let component = if l == 0 { j[i][0] - 1.0 } else { j[i][l] };
            let weight = r.powi(3) * step * component;
            // The inner integral is kept relative to i_l at the current radius; pairs count twice.
            inner *= if i == 0 { 0.0 } else { modified[i].fall(l, &modified[i - 1]) };
            sum += weight * modified[i].product[l] * (2.0 * inner + weight);
            inner += weight;
        }
        let sign = if l % 2 == 0 { 1.0 } else { -1.0 };
        second += f64::from(2 * l as u32 + 1) * sign * sum;
    }
    (first, -2.0 * PI * ION_DENSITY * a * a * kappa * second)
}
