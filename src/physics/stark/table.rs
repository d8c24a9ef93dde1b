//! Tabulated pure Stark profiles, and their interpolation to a plasma.
//!
//! ln S(alpha) per line on nodes of log10 temperature, log10 electron density and ln alpha, with alpha =
//! |detuning| / F0 in A per statvolt/cm and F0 = 1.25e-9 n_e^(2/3). Between nodes: four-point Lagrange
//! in log T and log n_e at fixed detuning, cubic in ln detuning. Fixed detuning and not fixed alpha, because
//! the cut at the critical field of the upper level is an edge at fixed detuning; the steps are chosen so that
//! F0 moves by whole alpha nodes from one density to the next. Outside the nodes T and n_e are taken at
//! the edge while F0 stays that of the true density: below the table's densities the Doppler profile
//! rules, above them the levels are dissolved. Heat is folded in at use, because a Doppler core moves
//! through the nodes with the density and would interpolate badly. Accuracy: `verify_table_interpolation`.

use super::broadened::{Broadened, StarkProfile, WING_SLOPE};
use super::microfield::normal_field_esu;
use crate::numerics::cubic::lagrange_stencil;
use crate::physics::hydrogen::Line;

/// Nodes of a line's table.
#[derive(Debug, Clone, PartialEq)]
pub struct TableNodes {
    /// log10 of the temperatures in K, ascending.
    pub log_temperature: Vec<f64>,
    /// log10 of the electron densities per cm^3, ascending by [`DENSITY_STEP`].
    pub log_density: Vec<f64>,
    /// ln of the first alpha; the step is [`LN_ALPHA_STEP`].
    pub ln_alpha_first: f64,
    /// Number of alpha nodes.
    pub alpha_count: usize,
}

/// Step of the densities, dex.
pub const DENSITY_STEP: f64 = 0.25;
/// Alpha nodes by which F0 moves from one density to the next.
const ALPHA_PER_DENSITY: usize = 3;
/// Step in ln alpha: eighteen nodes a decade.
pub const LN_ALPHA_STEP: f64 = DENSITY_STEP * 2.0 / 3.0 * std::f64::consts::LN_10 / ALPHA_PER_DENSITY as f64;

impl TableNodes {
    /// ln of the alphas.
    pub fn ln_alpha(&self) -> Vec<f64> {
        (0..self.alpha_count).map(|i| self.ln_alpha_first + LN_ALPHA_STEP * i as f64).collect()
    }
}

/// Stark profiles of one line.
#[derive(Debug, Clone)]
pub struct LineTable {
    line: Line,
    nodes: TableNodes,
    ln_s: Vec<f32>,
}

impl LineTable {
    /// Joins nodes and values; `ln_s` runs fastest over alpha, then density, then temperature.
    ///
    /// # Panics
    /// If the number of values does not belong to the nodes.
    pub fn new(line: Line, nodes: TableNodes, ln_s: Vec<f32>) -> Self {
        assert_eq!(
            ln_s.len(),
            nodes.log_temperature.len() * nodes.log_density.len() * nodes.alpha_count,
            "values of a Stark table must fill its nodes"
        );
        LineTable { line, nodes, ln_s }
    }

    /// The line.
    pub fn line(&self) -> Line {
        self.line
    }

    /// The nodes.
    pub fn nodes(&self) -> &TableNodes {
        &self.nodes
    }

    /// All values, fastest over alpha, then density, then temperature.
    pub fn ln_s(&self) -> &[f32] {
        &self.ln_s
    }

    /// The pure Stark profile in a plasma.
    pub fn stark(&self, temperature_k: f64, electron_density_per_cm3: f64) -> StarkProfile {
        let nodes = &self.nodes;
        let (t_first, t_weights) = lagrange_stencil(&nodes.log_temperature, temperature_k.log10());
        let (d_first, d_weights) = lagrange_stencil(&nodes.log_density, electron_density_per_cm3.log10());
        let count = nodes.alpha_count;
        let stencil = t_weights.len().min(nodes.log_temperature.len());
        let d_stencil = d_weights.len().min(nodes.log_density.len());
        // The grid of detunings is that of the stencil's second density. Relative to it the first one's
        // values lie at higher, the later ones' at lower alpha nodes.
        let anchor = d_first + 1;
        let mut ln_s = vec![0.0; count];
        for (j, d_weight) in d_weights.iter().enumerate().take(d_stencil) {
            let density = d_first + j;
            let offset = ALPHA_PER_DENSITY as isize * (anchor as isize - density as isize);
            let mut own = vec![0.0; count];
            for (i, t_weight) in t_weights.iter().enumerate().take(stencil) {
                let start = ((t_first + i) * nodes.log_density.len() + density) * count;
                for (sum, value) in own.iter_mut().zip(&self.ln_s[start..start + count]) {
                    *sum += t_weight * f64::from(*value);
                }
            }
            let ln_field = normal_field_esu(10f64.powf(nodes.log_density[density])).ln();
            for (i, sum) in ln_s.iter_mut().enumerate() {
                // Flat before the first node, the -5/2 wing after the last.
                let at = i as isize + offset;
                let inside = at.clamp(0, count as isize - 1);
                let wing = WING_SLOPE * LN_ALPHA_STEP * (at - inside).max(0) as f64;
                *sum += d_weight * (own[inside as usize] + wing - ln_field);
            }
        }
        // Outside the densities of the table the profile keeps its shape in alpha.
        let nearest = electron_density_per_cm3
            .log10()
            .clamp(nodes.log_density[0], nodes.log_density[nodes.log_density.len() - 1]);
        let beyond =
            (normal_field_esu(electron_density_per_cm3) / normal_field_esu(10f64.powf(nearest))).ln();
        let anchor_field =
            normal_field_esu(10f64.powf(nodes.log_density[anchor.min(nodes.log_density.len() - 1)]));
        ln_s.iter_mut().for_each(|value| *value -= beyond);
        let mut profile = StarkProfile {
            ln_detuning_first: nodes.ln_alpha_first + anchor_field.ln() + beyond,
            ln_detuning_step: LN_ALPHA_STEP,
            ln_s,
            lorentz_hwhm: 0.0,
            centre: 0.0,
        };
        // Lyman alpha's core may be narrower than the first node: what is missing lies there.
        let integral = profile.integral();
        if integral < 1.0 {
            profile.centre = 1.0 - integral;
        } else {
            profile.ln_s.iter_mut().for_each(|value| *value -= integral.ln());
        }
        profile
    }

    /// Profile in a plasma, with the half width of an additional Lorentz profile (natural width,
    /// collisions with atoms).
    pub fn broadened(
        &self,
        temperature_k: f64,
        electron_density_per_cm3: f64,
        extra_lorentz_hwhm_aa: f64,
    ) -> Broadened {
        let stark = self.stark(temperature_k, electron_density_per_cm3);
        Broadened::new(self.line, &stark, temperature_k, extra_lorentz_hwhm_aa)
    }
}

/// Stark profiles of several lines.
#[derive(Debug, Clone, Default)]
pub struct ProfileTable {
    /// One table per line.
    pub lines: Vec<LineTable>,
}

impl ProfileTable {
    /// The table of a line, if it is tabulated.
    pub fn line(&self, lower: u32, upper: u32) -> Option<&LineTable> {
        self.lines.iter().find(|table| table.line == Line { lower, upper })
    }

    /// Names the content: number of unified lines and the hash of their values.
    pub fn fingerprint(&self) -> String {
        let mut hasher = blake3::Hasher::new();
        for table in &self.lines {
            let bytes: Vec<u8> = table.ln_s.iter().flat_map(|value| value.to_le_bytes()).collect();
            hasher.update(&bytes);
        }
        format!("{} lines unified, table {}", self.lines.len(), &hasher.finalize().to_hex()[..16])
    }
}
