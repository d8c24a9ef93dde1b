//! Tabulated pure Stark profiles, and their interpolation to a plasma.
//!
//! ln S(alpha) per line on nodes of log10 temperature, log10 electron density and ln alpha, with alpha =
//! |detuning| / F0 in A per statvolt/cm and F0 = 1.25e-9 n_e^(2/3). Between nodes: four-point Lagrange
//! in log T and log n_e, cubic in ln alpha. Outside the nodes T and n_e are taken at the edge while F0
//! stays that of the true density: below the table's densities the Doppler profile rules, above them the
//! levels are dissolved. Heat is folded in at use, because a Doppler core at fixed alpha moves
//! with the density and would interpolate badly.

use super::broadened::{Broadened, StarkProfile};
use super::microfield::normal_field_esu;
use crate::numerics::cubic::lagrange_stencil;
use crate::physics::hydrogen::Line;

/// Nodes shared by all lines of a table.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct TableNodes {
    /// log10 of the temperatures in K, ascending.
    pub log_temperature: Vec<f64>,
    /// log10 of the electron densities per cm^3, ascending.
    pub log_density: Vec<f64>,
    /// ln of the first alpha.
    pub ln_alpha_first: f64,
    /// Step in ln alpha.
    pub ln_alpha_step: f64,
    /// Number of alpha nodes.
    pub alpha_count: usize,
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
        let ln_field = normal_field_esu(electron_density_per_cm3).ln();
        // S is per unit of alpha: per A it is divided by F0.
        let mut ln_s = vec![-ln_field; count];
        for (i, t_weight) in t_weights.iter().enumerate().filter(|(_, w)| **w != 0.0) {
            for (j, d_weight) in d_weights.iter().enumerate().filter(|(_, w)| **w != 0.0) {
                let start = ((t_first + i) * nodes.log_density.len() + d_first + j) * count;
                let weight = t_weight * d_weight;
                for (sum, value) in ln_s.iter_mut().zip(&self.ln_s[start..start + count]) {
                    *sum += weight * f64::from(*value);
                }
            }
        }
        StarkProfile {
            ln_detuning_first: nodes.ln_alpha_first + ln_field,
            ln_detuning_step: nodes.ln_alpha_step,
            ln_s,
            centre: 0.0,
        }
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
}
