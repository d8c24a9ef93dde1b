//! The electrons' unified broadening operator, reduced to one universal complex function.
//!
//! One electron on a straight path rho, v acts on a hydrogen shell through the dipole r = (3/2) n a0 A
//! (A the Runge-Lenz vector). Without time ordering, the action between two times is along one vector,
//! kappa/(rho v) 2 sin(dtheta/2) with kappa = hbar/m_e and dtheta the angle swept as seen from the atom; on a
//! pair of parabolic states quantised along that vector it is a phase k kappa/(rho v) 2 sin(dtheta/2),
//! k = (3/2)|n q - n' q'|. With g_k(t) the mean over paths and Maxwellian speeds of the volume integral of
//! cos(phase) - 1, the operator of the unified theory (Vidal, Cooper & Smith 1970, JQSRT 10, 1011; 1971,
//! 11, 263) is L(w) = sum_k C_k l_k(w) with constant matrices C_k (see `line_space`) and
//! l_k(w) = i n_e int_0^inf exp(i w t) g_k''(t) dt: impact theory for small w, the static Holtsmark
//! wing for large w. In the units rho_W = k kappa/v_th, tau = rho_W/v_th, v_th = sqrt(2 k T/m), all k, T and
//! n_e share one function K(w tau; rho_max/rho_W) = int exp(i x t) g''(t) dt, tabulated once per process.
//!
//! Paths beyond rho_max = 2 exp(-gamma - 1/2) Debye lengths = 0.681 are left out: that radius gives the
//! same second-order impact integral as the full, screened interaction, since int x K1(x)^2 dx from eps is
//! ln(2/eps) - gamma - 1/2 and the unscreened one cut at x_max is ln(x_max/eps) (Chappell, Cooper & Smith
//! 1969). Accuracy: `verify_electrons_impact_limit`, `verify_electrons_static_limit` (1 %).

use super::microfield::debye_length_cm;
use crate::numerics::cubic::{Spline, catmull_rom};
use crate::physics::constants::{BOLTZMANN_ERG_K, ELECTRON_MASS_G, PLANCK_ERG_S};
use num_complex::Complex64;
use rayon::prelude::*;
use std::f64::consts::PI;
use std::sync::OnceLock;

/// Largest impact parameter over the electron Debye length.
pub const LARGEST_IMPACT_DEBYE: f64 = 0.681_085; // 2 exp(-gamma - 1/2)
/// hbar / electron mass, cm^2/s.
const KAPPA_CM2_S: f64 = PLANCK_ERG_S / (2.0 * PI * ELECTRON_MASS_G);

/// Electrons of one plasma.
#[derive(Debug, Clone, Copy)]
pub struct Electrons {
    density_per_cm3: f64,
    thermal_speed_cm_s: f64,
    largest_impact_cm: f64,
}

impl Electrons {
    /// Electrons at a temperature and density.
    pub fn new(temperature_k: f64, density_per_cm3: f64) -> Self {
        Electrons {
            density_per_cm3,
            thermal_speed_cm_s: (2.0 * BOLTZMANN_ERG_K * temperature_k / ELECTRON_MASS_G).sqrt(),
            largest_impact_cm: LARGEST_IMPACT_DEBYE * debye_length_cm(temperature_k, density_per_cm3),
        }
    }

    /// l_k at an angular-frequency detuning of either sign, rad/s; its imaginary part is negative.
    pub fn operator_rad_s(&self, k: f64, detuning_rad_s: f64) -> Complex64 {
        if k == 0.0 {
            return Complex64::ZERO;
        }
        let radius = k * KAPPA_CM2_S / self.thermal_speed_cm_s;
        let x = detuning_rad_s.abs() * radius / self.thermal_speed_cm_s;
        let kernel = universal().at(x, self.largest_impact_cm / radius);
        let kernel = if detuning_rad_s < 0.0 { kernel.conj() } else { kernel };
        Complex64::I * kernel * (self.density_per_cm3 * radius * radius * self.thermal_speed_cm_s)
    }
}

/// Equidistant nodes in the logarithm of an argument.
#[derive(Debug, Clone, Copy)]
struct LogAxis {
    first: f64,
    step: f64,
    count: usize,
}

impl LogAxis {
    fn node(self, i: usize) -> f64 {
        (self.first + self.step * i as f64).exp()
    }

    /// Cell and fraction of a position, kept within the cells that have two neighbours.
    fn locate(self, ln_at: f64) -> (usize, f64) {
        let at = ((ln_at - self.first) / self.step).clamp(1.0, (self.count - 2) as f64 - 1e-9);
        (at as usize, at.fract())
    }
}

/// Time over rho_v/v, rho_v = k kappa/v, of the single-speed integrals.
const S_AXIS: LogAxis = LogAxis { first: -13.5, step: 0.25, count: 125 };
/// Impact parameter over rho_v.
const P_AXIS: LogAxis = LogAxis { first: -10.5, step: 0.1, count: 260 };
/// Detuning times tau, and largest impact parameter over rho_W, of the universal function.
const X_AXIS: LogAxis = LogAxis { first: -18.5, step: 0.25, count: 120 };
const R_AXIS: LogAxis = LogAxis { first: -5.5, step: 0.25, count: 78 };
/// Steps of the speed average in ln v and of the time integral in ln t.
const SPEED_AXIS: LogAxis = LogAxis { first: -3.6, step: 0.12, count: 44 };
const T_AXIS: LogAxis = LogAxis { first: -14.0, step: 0.06, count: 560 };

/// K on its axes, x running fastest; scaled by (1 + x)^(1/2) to be flat.
struct Universal {
    values: Vec<Complex64>,
}

impl Universal {
    fn at(&self, x: f64, largest_impact: f64) -> Complex64 {
        let (i, t) = X_AXIS.locate(x.max(1e-30).ln());
        let (j, u) = R_AXIS.locate(largest_impact.ln());
        let row = |j: usize| {
            let v = &self.values[j * X_AXIS.count + i - 1..][..4];
            Complex64::new(
                catmull_rom([v[0].re, v[1].re, v[2].re, v[3].re], t),
                catmull_rom([v[0].im, v[1].im, v[2].im, v[3].im], t),
            )
        };
        let v = [row(j - 1), row(j), row(j + 1), row(j + 2)];
        Complex64::new(
            catmull_rom([v[0].re, v[1].re, v[2].re, v[3].re], u),
            catmull_rom([v[0].im, v[1].im, v[2].im, v[3].im], u),
        ) / (1.0 + x).sqrt()
    }
}

fn universal() -> &'static Universal {
    static STORE: OnceLock<Universal> = OnceLock::new();
    STORE.get_or_init(|| {
        let paths = SingleSpeed::compute();
        let values = (0..R_AXIS.count)
            .into_par_iter()
            .flat_map_iter(|j| kernel_row(&paths, R_AXIS.node(j)).into_iter())
            .collect();
        Universal { values }
    })
}

/// ln(-G(s; P)): volume integral of cos(phase) - 1 for one speed, in units of rho_v, over impact
/// parameters below P.
struct SingleSpeed {
    ln_g: Vec<f64>,
}

impl SingleSpeed {
    fn compute() -> Self {
        let ln_g = (0..S_AXIS.count)
            .into_par_iter()
            .flat_map_iter(|i| {
                let s = S_AXIS.node(i);
                // Within the first impact parameter the cosine averages out: -1 over the swept length.
                let mut running = 0.0;
                let mut previous = 0.0;
                (0..P_AXIS.count)
                    .map(|j| {
                        let rho = P_AXIS.node(j);
                        let ring = 2.0 * PI * rho * rho * path_integral(rho, s);
                        running += if j == 0 { 0.5 * ring } else { 0.5 * P_AXIS.step * (ring + previous) };
                        previous = ring;
                        running.ln()
                    })
                    .collect::<Vec<_>>()
            })
            .collect();
        SingleSpeed { ln_g }
    }

    /// -G at any argument: static law below, linear law above the tabulated times.
    fn minus_g(&self, s: f64, largest: f64) -> f64 {
        let (ln_s, ln_p) = (s.ln(), largest.ln());
        let (i, t) = S_AXIS.locate(ln_s);
        let (j, u) = P_AXIS.locate(ln_p);
        let row = |i: usize| {
            let v = &self.ln_g[i * P_AXIS.count + j - 1..][..4];
            catmull_rom([v[0], v[1], v[2], v[3]], u)
        };
        let inside = catmull_rom([row(i - 1), row(i), row(i + 1), row(i + 2)], t);
        let reached = S_AXIS.first + S_AXIS.step * (i as f64 + t);
        let slope = if ln_s < reached { 1.5 } else { 1.0 };
        (inside + slope * (ln_s - reached)).exp()
    }
}

/// Integral of 1 - cos(phase) along a path of impact parameter rho, both in units of rho_v.
fn path_integral(rho: f64, s: f64) -> f64 {
    // y runs from the middle of the swept stretch; its end, at s/2, is an edge of width rho.
    const STEP: f64 = 0.1;
    let edge = 0.5 * s / rho;
    let from = -edge.asinh();
    let reach = (30.0 * (1.0 + edge + s.sqrt() / rho)).asinh();
    let count = ((reach - from) / STEP).ceil();
    let step = (reach - from) / count;
    let mut sum = 0.0;
    let mut last_phase = None;
    for i in 0..count as usize {
        let u = from + step * (i as f64 + 0.5);
        let y = u.sinh();
        let (front, back) = (y + 2.0 * edge, y);
        // dtheta from the difference of arctangents, without cancellation far out.
        let swept = (2.0 * edge).atan2(1.0 + front * back);
        let phase = 2.0 / rho * (0.5 * swept).sin();
        // A cell over which the phase turns much averages the cosine: sinc of half its change.
        let change: f64 = last_phase.map_or(0.0, |last: f64| phase - last);
        last_phase = Some(phase);
        let spread = 0.5 * change.hypot(phase * P_AXIS.step);
        let average = if spread < 1e-3 {
            1.0
        } else if spread < PI {
            spread.sin() / spread
        } else {
            0.0
        };
        let value = if phase < 1e-3 { 0.5 * phase * phase } else { 1.0 - average * phase.cos() };
        sum += u.cosh() * value;
    }
    2.0 * rho * step * sum
}

/// K(x; R) for all x at one R.
fn kernel_row(paths: &SingleSpeed, largest_impact: f64) -> Vec<Complex64> {
    let ln_t: Vec<f64> = (0..T_AXIS.count).map(|i| T_AXIS.first + T_AXIS.step * i as f64).collect();
    let ln_g: Vec<f64> = ln_t
        .iter()
        .map(|ln_t| {
            let sum: f64 = (0..SPEED_AXIS.count)
                .map(|i| {
                    let v = SPEED_AXIS.node(i);
                    let weight = 4.0 / PI.sqrt() * (-v * v).exp();
                    weight * paths.minus_g(ln_t.exp() * v * v, largest_impact * v) * SPEED_AXIS.step
                })
                .sum();
            sum.ln()
        })
        .collect();
    let spline = Spline::new(&ln_t, &ln_g);
    let second: Vec<f64> = (0..ln_t.len())
        .map(|i| {
            let (y1, y2) = (spline.slope(ln_t[i]), spline.second_derivative(ln_t[i]));
            -(ln_g[i] - 2.0 * ln_t[i]).exp() * (y2 + y1 * y1 - y1)
        })
        .collect();
    (0..X_AXIS.count)
        .map(|i| {
            let x = X_AXIS.node(i);
            fourier(&ln_t, &second, x) * (1.0 + x).sqrt()
        })
        .collect()
}

/// Integral of exp(i x t) f(t) dt, f linear between nodes and t^(-1/2) before the first.
fn fourier(ln_t: &[f64], f: &[f64], x: f64) -> Complex64 {
    let t0 = ln_t[0].exp();
    let mut sum = Complex64::new(2.0 * t0 * f[0], 2.0 / 3.0 * x * t0 * t0 * f[0]);
    let mut from = t0;
    for i in 1..ln_t.len() {
        let to = ln_t[i].exp();
        let (mean, half_rise) = (0.5 * (f[i] + f[i - 1]), 0.5 * (f[i] - f[i - 1]));
        let theta = 0.5 * x * (to - from);
        let (sin, cos) = theta.sin_cos();
        let (even, odd) = if theta < 1e-2 {
            (1.0 - theta * theta / 6.0, theta / 3.0)
        } else {
            (sin / theta, (sin - theta * cos) / (theta * theta))
        };
        let turn = Complex64::cis(0.5 * x * (to + from));
        sum += turn * Complex64::new(mean * even, half_rise * odd) * (to - from);
        from = to;
    }
    sum
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Impact limit: -K(0) = <v rho_v^2 4 pi [ln(P/2) + 3/2 - gamma]> in universal units, from
    /// int rho (1 - cos(2/rho)) drho to P = 2 [ln(P/2) + 3/2 - gamma] for P >> 1.
    #[test]
    fn verify_electrons_impact_limit() {
        for largest in [30.0, 1e3, 1e5f64] {
            let found = -universal().at(1e-8, largest).re;
            let step = 0.001;
            let exact: f64 = (1..6000)
                .map(|i| {
                    let v = step * f64::from(i);
                    let log = (largest * v / 2.0).ln() + 1.5 - 0.577_215_66;
                    4.0 / PI.sqrt() * v * v * (-v * v).exp() * step / v * 4.0 * PI * log
                })
                .sum();
            assert!((found / exact - 1.0).abs() < 0.01);
        }
    }

    /// Static limit: g = int 4 pi R^2 (cos(t/R^2) - 1) dR = -(2/3)(2 pi)^(3/2) t^(3/2), so that
    /// K -> -(1/2)(2 pi)^(3/2) Gamma(1/2) x^(-1/2) exp(i pi/4).
    #[test]
    fn verify_electrons_static_limit() {
        for x in [30.0, 100.0, 1000.0, 5000.0] {
            let found = universal().at(x, 1e3);
            let exact = -(2.0 * PI).powf(1.5) / 2.0 * (PI / x).sqrt() * Complex64::cis(PI / 4.0);
            assert!((found / exact - 1.0).norm() < 0.01);
        }
    }
}
