//! Emergent spectrum of a converged atmosphere.

use super::extinction::Sources;
use super::frequency::FrequencyGrid;
use super::structure::Atmosphere;
use super::transfer::{Field, Medium, Scratch};
use crate::physics::constants::LIGHT_SPEED_CM_S;
use crate::physics::opacity::ALL_LINES;
use crate::physics::planck::planck_per_hz;
use crate::physics::stark::ProfileTable;

/// Wavelengths whose opacities are held at once: bounds the memory of a fine spectrum.
const BLOCK: usize = 8192;

/// Surface flux F_lambda, erg s^-1 cm^-2 A^-1, at ascending vacuum wavelengths (A).
pub fn emergent_flux(atmosphere: &Atmosphere, wave_vac_aa: &[f64], profiles: &ProfileTable) -> Vec<f64> {
    wave_vac_aa.chunks(BLOCK).flat_map(|block| block_flux(atmosphere, block, profiles)).collect()
}

fn block_flux(atmosphere: &Atmosphere, wave_vac_aa: &[f64], profiles: &ProfileTable) -> Vec<f64> {
    let sources = Sources::new(FrequencyGrid::from_wavelengths(wave_vac_aa), ALL_LINES, profiles);
    let extinction = sources.evaluate(&atmosphere.states);
    let depths = atmosphere.states.len();
    let mut scratch = Scratch::new(depths);
    let mut interval = vec![0.0; depths - 1];
    let mut thermal_fraction = vec![0.0; depths];
    let mut planck = vec![0.0; depths];
    let grid = sources.grid();
    let column = &atmosphere.column_g_cm2;
    (0..grid.len())
        .map(|k| {
            let hz = grid.frequency_hz[k];
            let total = extinction.total_cm2_g.row(k);
            for i in 0..depths - 1 {
                interval[i] = 0.5 * (total[i] + total[i + 1]) * (column[i + 1] - column[i]);
            }
            for (i, state) in atmosphere.states.iter().enumerate() {
                planck[i] = planck_per_hz(hz, state.temperature_k);
                thermal_fraction[i] = extinction.thermal_fraction[[k, i]];
            }
            let medium = Medium { interval: &interval, thermal_fraction: &thermal_fraction, planck: &planck };
            let mut field = Field::isotropic(&planck);
            field.solve(medium, 8, 1e-5, &mut scratch);
            // F_nu = 4 pi H_nu; per angstrom with c / lambda^2 and 1e-8 cm per A.
            let wave_cm = LIGHT_SPEED_CM_S / hz;
            4.0 * std::f64::consts::PI * field.surface_flux() * LIGHT_SPEED_CM_S / (wave_cm * wave_cm) * 1e-8
        })
        .collect()
}
