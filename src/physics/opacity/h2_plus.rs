//! Absorption by H2+: bound-free and free-free together, from proton-atom pairs.
//!
//! Polynomial fit of Kurucz (1970, SAO Special Report 309) to the calculation of Bates (1952):
//! absorption = n(1) n(p) exp(-E(nu)/kT + F(nu)), with E in eV. Valid below the Lyman limit.

use super::bound_free::LYMAN_LIMIT_HZ;
use crate::physics::constants::{BOLTZMANN_ERG_K, ELECTRON_VOLT_ERG};

/// The two polynomials at one frequency.
#[derive(Debug, Clone, Copy)]
pub struct H2Plus {
    energy_ev: f64,
    log_strength: f64,
}

impl H2Plus {
    /// Evaluates the fit; `None` above the Lyman limit.
    pub fn at(frequency_hz: f64) -> Option<Self> {
        if frequency_hz > LYMAN_LIMIT_HZ {
            return None;
        }
        let log_frequency = frequency_hz.ln();
        let units = frequency_hz / 1e15;
        let polynomial =
            |coefficients: &[f64], x: f64| coefficients.iter().rev().fold(0.0, |sum, c| sum * x + c);
        Some(H2Plus {
            log_strength: polynomial(
                &[-3.0233e3, 3.7797e2, -1.82496e1, 3.9207e-1, -3.1672e-3],
                log_frequency,
            ),
            energy_ev: polynomial(&[-7.342e-3, -2.409, 1.028, -0.4230, 0.1224, -1.351e-2], units),
        })
    }

    /// Absorption per ground-state atom and proton, cm^5, without stimulated emission.
    pub fn cm5(&self, temperature_k: f64) -> f64 {
        let thermal_ev = BOLTZMANN_ERG_K * temperature_k / ELECTRON_VOLT_ERG;
        (self.log_strength - self.energy_ev / thermal_ev).exp()
    }
}
