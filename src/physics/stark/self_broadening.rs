//! Broadening of hydrogen lines by neutral hydrogen atoms: a Lorentz half width.
//!
//! H-alpha, H-beta, H-gamma: Barklem, Piskunov & O'Mara (2000, A&A 363, 1091), whose widths include
//! resonance and dispersion; the numbers are read from the wings of their published profile grid at
//! 1e17 atoms per cm^3. All other lines: resonance broadening alone (Ali & Griem 1965, Phys. Rev. 140,
//! A1044, corrected 1966, 144, 366), each fine component l' - l having the width of its p states,
//! averaged with the components' strengths. Resonance alone gives an eighth of the Barklem width
//! at H-gamma, so H-delta and above are probably too narrow by that order; where it matters (below about
//! 9 000 K) neutral hydrogen also dissolves those levels. Checked by `validate_self_broadening`.

use crate::physics::hydrogen::{Line, PerLine, radial_integral};

/// Temperatures of the Barklem grid, K.
const GRID_TEMPERATURE_K: [f64; 4] = [2500.0, 5000.0, 10_000.0, 20_000.0];
/// Half widths at half maximum per atom, 1e-20 A cm^3, for upper levels 3, 4 and 5 (from
/// the wings at 100 A of the grid `bpo_self.grid.INTEL` of the package pysme-astro 1.2.0).
const GRID_WIDTH: [[f64; 4]; 3] = [
    [6.8737, 7.9668, 9.2782, 10.8614],
    [7.2082, 8.9662, 11.1842, 13.9922],
    [12.4912, 15.6294, 19.4619, 24.1465],
];
/// 3.84 pi / 2 times the classical electron radius over 4 pi^2, in A: the half width of a resonance
/// line is this times sqrt(g_lower/g_upper) wave^2 wave_resonance f n (Ali & Griem 1965; half of the
/// 8.6e-30 of the usual full-width formula).
const RESONANCE_HALF_WIDTH: f64 = 4.30e-30;

/// Half width at half maximum from collisions with hydrogen atoms in the ground state, A.
pub fn self_broadening_hwhm_aa(line: Line, temperature_k: f64, n_h_ground_per_cm3: f64) -> f64 {
    if line.lower == 2 && line.upper <= 5 {
        let widths = &GRID_WIDTH[line.upper as usize - 3];
        // A power law between neighbours, continued beyond the ends.
        let cell = GRID_TEMPERATURE_K.partition_point(|t| *t <= temperature_k).clamp(1, 3) - 1;
        let (t0, t1) = (GRID_TEMPERATURE_K[cell], GRID_TEMPERATURE_K[cell + 1]);
        let slope = (widths[cell + 1] / widths[cell]).ln() / (t1 / t0).ln();
        return 1e-20 * widths[cell] * (temperature_k / t0).powf(slope) * n_h_ground_per_cm3;
    }
    static STORE: PerLine = PerLine::new();
    n_h_ground_per_cm3 * STORE.get_or_compute(line, resonance_hwhm_aa)
}

/// Strength-weighted resonance width per atom of the ground state, A cm^3.
pub fn resonance_hwhm_aa(line: Line) -> f64 {
    let p_width = |n: u32| {
        if n == 1 {
            return 0.0;
        }
        let resonance = Line::new(1, n);
        resonance.wave_vac_aa() * resonance.oscillator_strength() / 3f64.sqrt()
    };
    let (mut sum, mut total) = (0.0, 0.0);
    for l in 0..line.lower {
        for l_upper in [l.wrapping_sub(1), l + 1] {
            if l_upper < line.upper {
                let strength =
                    f64::from(l.max(l_upper)) * radial_integral(line.upper, l_upper, line.lower, l).powi(2);
                let width = if l_upper == 1 { p_width(line.upper) } else { 0.0 }
                    + if l == 1 { p_width(line.lower) } else { 0.0 };
                sum += strength * width;
                total += strength;
            }
        }
    }
    RESONANCE_HALF_WIDTH * line.wave_vac_aa().powi(2) * sum / total
}
