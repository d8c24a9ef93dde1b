//! Stark profiles by the unified theory: quasi-static ions, electrons from impact to static.
//!
//! I(dw) = int_0^beta_max W(beta) dbeta -(1/pi) Im d^T [dw - S(beta) - L]^-1 d over the line space of
//! `line_space`, with the field distribution of `microfield` and the electrons' operator of `electrons`.
//! The operator is taken at the detuning from the Stark-shifted pair, mean of row and column, so
//! that a component at its own position is broadened in the impact limit and the space between components
//! by nearly static electrons. The ions' field is cut at the critical field of the upper level and the
//! result normalised to 1. Neglected: fine structure, ion dynamics (it fills and broadens
//! the centres of H-alpha and Lyman alpha at low density), shifts, quadrupole terms. Accuracy:
//! `validate_against_vcs`, `validate_against_stehle`.

use super::electrons::Electrons;
use super::line_space::{Block, LineSpace};
use super::microfield::{self, Microfield};
use super::static_line::shift_rad_s_per_esu;
use crate::numerics::quadrature::panels;
use crate::physics::constants::LIGHT_SPEED_CM_S;
use crate::physics::hydrogen::Line;
use crate::physics::occupation::critical_beta;
use num_complex::Complex64;
use std::f64::consts::PI;

/// Step of the operator's table in ln detuning.
const LN_DETUNING_STEP: f64 = 0.1;
/// Fields that the uncut integral always covers; in the wing it goes on to this many resonances of the
/// weakest shift.
const LARGEST_FIELD: f64 = 300.0;
const BEYOND_RESONANCE: f64 = 30.0;
/// Scale where field nodes turn logarithmic, and nodes per unit of ln(1 + beta/scale).
const FIELD_SCALE: f64 = 0.4;
const BASE_NODES: f64 = 10.0;
/// Field nodes for the strongest component.
const COMPONENT_NODES: f64 = 16.0;

/// The unified-theory calculation for one line.
#[derive(Debug, Clone)]
pub struct UnifiedLine {
    line: Line,
    space: LineSpace,
}

impl UnifiedLine {
    /// Prepares the line space.
    pub fn new(line: Line) -> Self {
        UnifiedLine { line, space: LineSpace::new(line) }
    }

    /// S(alpha) at ascending ln alpha: the pure Stark profile in one plasma, with integral 1 over both
    /// sides; `cut` removes ion fields above the critical one of the upper level.
    pub fn profile(
        &self,
        temperature_k: f64,
        electron_density_per_cm3: f64,
        cut: bool,
        ln_alpha: &[f64],
    ) -> Vec<f64> {
        let plasma = Plasma::new(self, temperature_k, electron_density_per_cm3, cut);
        // Frequency per alpha, in the unit of `Plasma`.
        let wave_cm = self.line.wave_vac_aa() * 1e-8;
        let rad_s_per_aa = 2.0 * PI * LIGHT_SPEED_CM_S / (wave_cm * wave_cm) * 1e-8;
        let per_alpha =
            rad_s_per_aa * microfield::normal_field_esu(electron_density_per_cm3) / plasma.unit_rad_s;
        let mut workspace = Workspace::new(&self.space);
        ln_alpha
            .iter()
            .map(|ln_alpha| per_alpha * plasma.intensity(ln_alpha.exp() * per_alpha, &mut workspace))
            .collect()
    }
}

/// Everything that depends on temperature and density. Frequencies are in the shift of the unit
/// component n q - n' q' = 1 at the Holtsmark field.
struct Plasma<'a> {
    space: &'a LineSpace,
    unit_rad_s: f64,
    field: Microfield,
    field_cut: f64,
    norm: f64,
    operator: OperatorTable,
    components: Vec<Component>,
}

/// A group of pairs of one positive shift, for the choice of field nodes.
struct Component {
    shift: f64,
    width: f64,
    nodes: f64,
}

impl<'a> Plasma<'a> {
    fn new(unified: &'a UnifiedLine, temperature_k: f64, density: f64, cut: bool) -> Self {
        let space = &unified.space;
        let unit_rad_s = shift_rad_s_per_esu() * microfield::holtsmark_field_esu(density);
        let field = Microfield::compute(microfield::screening(temperature_k, density));
        let field_cut =
            if cut { critical_beta(f64::from(unified.line.upper), density) } else { f64::INFINITY };
        let norm = 1.0 / field.cumulative(field_cut);
        let operator = OperatorTable::new(&Electrons::new(temperature_k, density), &space.values, unit_rad_s);
        let components = components(space, &operator);
        Plasma { space, unit_rad_s, field, field_cut, norm, operator, components }
    }

    /// Profile per unit frequency at a positive detuning.
    fn intensity(&self, detuning: f64, workspace: &mut Workspace) -> f64 {
        let nodes = self.field_nodes(detuning);
        let sum: f64 = nodes
            .iter()
            .map(|(beta, weight)| {
                weight * self.field.density(*beta) * self.at_field(detuning, *beta, workspace)
            })
            .sum();
        self.norm * sum
    }

    fn at_field(&self, detuning: f64, beta: f64, workspace: &mut Workspace) -> f64 {
        self.space.blocks.iter().map(|block| self.resolvent(block, detuning, beta, workspace)).sum()
    }

    /// -(1/pi) Im d^T [detuning - S - L]^-1 d of one block.
    fn resolvent(&self, block: &Block, detuning: f64, beta: f64, work: &mut Workspace) -> f64 {
        let size = block.shifts.len();
        let count = self.space.values.len();
        // l_k at the detuning from each pair; equal shifts share it.
        for (i, shift) in block.shifts.iter().enumerate() {
            let slot = i * count;
            match block.shifts[..i].iter().position(|other| other == shift) {
                Some(j) => {
                    work.re.copy_within(j * count..(j + 1) * count, slot);
                    work.im.copy_within(j * count..(j + 1) * count, slot);
                }
                None => {
                    let from = detuning - f64::from(*shift) * beta;
                    self.operator.row(
                        from,
                        &mut work.re[slot..slot + count],
                        &mut work.im[slot..slot + count],
                    );
                }
            }
        }
        let Workspace { re, im, matrix, vector } = work;
        let row = |i: usize| (&re[i * count..(i + 1) * count], &im[i * count..(i + 1) * count]);
        for i in 0..size {
            let own = row(i);
            for j in 0..=i {
                let c = &block.coefficients[(i * size + j) * count..][..count];
                let mut value = -0.5 * (dot(c, own) + dot(c, row(j)));
                if i == j {
                    value += detuning - f64::from(block.shifts[i]) * beta;
                }
                matrix[i * size + j] = value;
            }
        }
        -quadratic_form_of_inverse(matrix, &block.dipoles, vector).im / PI
    }

    /// Fields and weights: uniform in a measure that gives each component's resonance a Cauchy share
    /// as wide as the electrons make it, and the rest to ln(1 + beta/scale). In that measure the
    /// integrand is smooth.
    fn field_nodes(&self, detuning: f64) -> Vec<(f64, f64)> {
        let weakest = self.components.first().map_or(1.0, |c| c.shift);
        let field_max = self.field_cut.min(LARGEST_FIELD.max(BEYOND_RESONANCE * detuning / weakest));
        let resonances: Vec<(f64, f64, f64)> = self
            .components
            .iter()
            .enumerate()
            .map(|(i, c)| {
                // Resonances that overlap need no more nodes together than one alone.
                let next = self.components.get(i + 1).map_or(f64::INFINITY, |next| next.shift);
                let (centre, width) = (detuning / c.shift, c.width / c.shift);
                let apart = (centre - detuning / next) / (2.0 * width);
                (centre, width, c.nodes * apart.clamp(0.05, 1.0))
            })
            .filter(|(centre, width, _)| centre - 30.0 * width < field_max)
            .collect();
        let measure = |beta: f64| {
            let mut value = BASE_NODES * (beta / FIELD_SCALE).ln_1p();
            let mut density = BASE_NODES / (FIELD_SCALE + beta);
            for (centre, width, nodes) in &resonances {
                let y = (beta - centre) / width;
                value += nodes / PI * (y.atan() + (centre / width).atan());
                density += nodes / PI / width / (1.0 + y * y);
            }
            (value, density)
        };
        let total = measure(field_max).0;
        let count = (total / 8.0).ceil().max(4.0) as usize;
        let mut low = 0.0;
        panels(0.0, total, count)
            .map(|(target, weight)| {
                // Bracketed Newton; targets ascend, so the last root is a lower bound.
                let (mut from, mut to) = (low, field_max);
                let mut beta: f64 = low;
                for _ in 0..60 {
                    let (value, density) = measure(beta);
                    if value < target {
                        from = beta
                    } else {
                        to = beta
                    }
                    let next = beta - (value - target) / density;
                    let next = if next > from && next < to { next } else { 0.5 * (from + to) };
                    let done = (next - beta).abs() < 1e-9 * (next + 1e-9);
                    beta = next;
                    if done {
                        break;
                    }
                }
                low = beta;
                (beta, weight / measure(beta).1)
            })
            .collect()
    }
}

/// Re and im parts of the sum of coefficients times an operator row.
fn dot(c: &[f64], (re, im): (&[f64], &[f64])) -> Complex64 {
    let count = c.len();
    let (re, im) = (&re[..count], &im[..count]);
    let (mut sum_re, mut sum_im) = ([0.0; 4], [0.0; 4]);
    let whole = count / 4 * 4;
    for start in (0..whole).step_by(4) {
        for lane in 0..4 {
            sum_re[lane] += c[start + lane] * re[start + lane];
            sum_im[lane] += c[start + lane] * im[start + lane];
        }
    }
    for i in whole..count {
        sum_re[0] += c[i] * re[i];
        sum_im[0] += c[i] * im[i];
    }
    Complex64::new(sum_re.iter().sum(), sum_im.iter().sum())
}

/// d^T A^-1 d of a complex symmetric matrix (lower triangle, overwritten) by L D L^T. No pivoting is
/// needed: the imaginary part of A is positive definite.
fn quadratic_form_of_inverse(a: &mut [Complex64], d: &[f64], y: &mut [Complex64]) -> Complex64 {
    let n = d.len();
    let mut sum = Complex64::ZERO;
    for (y, d) in y.iter_mut().zip(d) {
        *y = Complex64::from(*d);
    }
    for k in 0..n {
        let inverse = a[k * n + k].inv();
        let head = y[k];
        sum += head * head * inverse;
        for i in k + 1..n {
            let factor = a[i * n + k] * inverse;
            y[i] -= factor * head;
            for j in k + 1..=i {
                let other = a[j * n + k];
                a[i * n + j] -= factor * other;
            }
        }
    }
    sum
}

struct Workspace {
    re: Vec<f64>,
    im: Vec<f64>,
    matrix: Vec<Complex64>,
    vector: Vec<Complex64>,
}

impl Workspace {
    fn new(space: &LineSpace) -> Self {
        let size = space.blocks.iter().map(|block| block.shifts.len()).max().unwrap_or(0);
        let count = space.values.len();
        Workspace {
            re: vec![0.0; size * count],
            im: vec![0.0; size * count],
            matrix: vec![Complex64::ZERO; size * size],
            vector: vec![Complex64::ZERO; size],
        }
    }
}

/// l_k for all k of a line on a grid of ln |detuning|.
struct OperatorTable {
    ln_first: f64,
    rows: usize,
    count: usize,
    re: Vec<f64>,
    im: Vec<f64>,
}

impl OperatorTable {
    fn new(electrons: &Electrons, values: &[f64], unit_rad_s: f64) -> Self {
        // From far inside any width to beyond the largest shift of interest.
        let (ln_first, ln_last) = (1e-5f64.ln(), 1e9f64.ln());
        let rows = ((ln_last - ln_first) / LN_DETUNING_STEP) as usize + 2;
        let (mut re, mut im) = (Vec::new(), Vec::new());
        for row in 0..rows {
            let detuning = (ln_first + LN_DETUNING_STEP * row as f64).exp();
            for value in values {
                let l = electrons.operator_rad_s(1.5 * value, detuning * unit_rad_s) / unit_rad_s;
                re.push(l.re);
                im.push(l.im);
            }
        }
        OperatorTable { ln_first, rows, count: values.len(), re, im }
    }

    fn row(&self, detuning: f64, re: &mut [f64], im: &mut [f64]) {
        let at = (detuning.abs().max(1e-30).ln() - self.ln_first) / LN_DETUNING_STEP;
        let at = at.clamp(0.0, (self.rows - 2) as f64);
        let (cell, t) = (at as usize, at.fract());
        // l(-w) = -conj l(w).
        let sign = detuning.signum();
        let (a, b) = (cell * self.count, (cell + 1) * self.count);
        for k in 0..self.count {
            re[k] = sign * (self.re[a + k] + t * (self.re[b + k] - self.re[a + k]));
            im[k] = self.im[a + k] + t * (self.im[b + k] - self.im[a + k]);
        }
    }
}

fn components(space: &LineSpace, operator: &OperatorTable) -> Vec<Component> {
    let count = space.values.len();
    let (mut re, mut im) = (vec![0.0; count], vec![0.0; count]);
    operator.row(1e-5, &mut re, &mut im);
    let mut groups = std::collections::BTreeMap::<i32, (f64, f64)>::new();
    for block in &space.blocks {
        let size = block.shifts.len();
        for (i, shift) in block.shifts.iter().enumerate().filter(|(_, shift)| **shift > 0) {
            let c = &block.coefficients[(i * size + i) * count..][..count];
            let width = -dot(c, (&re, &im)).im;
            let strength = block.dipoles[i].powi(2);
            let group = groups.entry(*shift).or_default();
            group.0 += strength;
            group.1 += strength * width;
        }
    }
    groups
        .into_iter()
        .filter(|(_, (strength, _))| *strength > 1e-7)
        .map(|(shift, (strength, width))| Component {
            shift: f64::from(shift),
            width: width / strength,
            nodes: COMPONENT_NODES * (strength / 0.05).sqrt().clamp(0.35, 1.0),
        })
        .collect()
}
