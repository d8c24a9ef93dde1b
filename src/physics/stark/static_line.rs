//! The quasi-static profile of any line: its exact Stark pattern folded with the field distribution.
//!
//! Ions and electrons both count as standing still: the Holtsmark field is that of twice the density
//! (factor 2^(2/3)), so that the far wing is twice the ions' Holtsmark wing, as in the unified theory. The
//! ions' half of the distribution is cut at the critical field of the upper level, where the level is
//! dissolved; the electrons' half goes on, again as in the unified tables. Components without a linear
//! shift stay at the centre and are broadened by heat and the Lorentz width only, so line centres
//! are sharper than real ones: meant for lines whose centre is blended or unimportant (Paschen,
//! Brackett, and lines near the series limit). Both the pattern and the field are exact; the error is in the
//! static electrons: `verify_static_against_unified` measures it.

use super::broadened::{Broadened, StarkProfile};
use super::microfield::{self, Microfield};
use super::shell::Pattern;
use crate::physics::constants::{BOHR_RADIUS_CM, ELEMENTARY_CHARGE_ESU, LIGHT_SPEED_CM_S, PLANCK_ERG_S};
use crate::physics::hydrogen::Line;
use crate::physics::occupation::critical_beta;
use std::f64::consts::PI;

/// Field of both species together over that of the ions alone.
const BOTH_SPECIES: f64 = 1.587_401_051_968_199_4; // 2^(2/3)
/// Grid of the profile in ln of detuning over the shift of the lowest unit component at beta = 1.
const LN_FIRST: f64 = -5.0;
const LN_STEP: f64 = microfield::COARSE_STEP;

/// Angular-frequency shift of a component per unit of n q - n' q' and per statvolt/cm, rad/s.
pub fn shift_rad_s_per_esu() -> f64 {
    1.5 * ELEMENTARY_CHARGE_ESU * BOHR_RADIUS_CM * 2.0 * PI / PLANCK_ERG_S
}

/// Wavelength shift of a component per unit of n q - n' q' and per statvolt/cm, A.
pub fn shift_aa_per_esu(line: Line) -> f64 {
    let wave_aa = line.wave_vac_aa();
    shift_rad_s_per_esu() * wave_aa * wave_aa * 1e-8 / (2.0 * PI * LIGHT_SPEED_CM_S)
}

/// A line broadened by standing charges.
#[derive(Debug, Clone)]
pub struct StaticLine {
    line: Line,
    pattern: Pattern,
}

impl StaticLine {
    /// Computes the Stark pattern of a line.
    pub fn new(lower: u32, upper: u32) -> Self {
        let line = Line::new(lower, upper);
        StaticLine { line, pattern: Pattern::new(line) }
    }

    /// The line.
    pub fn line(&self) -> Line {
        self.line
    }

    /// Profile in a plasma, with the half width of an additional Lorentz profile (natural width,
    /// collisions with atoms).
    pub fn broadened(
        &self,
        temperature_k: f64,
        electron_density_per_cm3: f64,
        extra_lorentz_hwhm_aa: f64,
    ) -> Broadened {
        let stark = self.stark(temperature_k, electron_density_per_cm3, true);
        Broadened::new(self.line, &stark, temperature_k, extra_lorentz_hwhm_aa)
    }

    /// The pure Stark profile, with or without the cut at the critical field.
    pub fn stark(&self, temperature_k: f64, electron_density_per_cm3: f64, cut: bool) -> StarkProfile {
        let field = Microfield::stored(microfield::screening(temperature_k, electron_density_per_cm3));
        let unit_aa = shift_aa_per_esu(self.line)
            * BOTH_SPECIES
            * microfield::holtsmark_field_esu(electron_density_per_cm3);
        let beta_cut = if cut {
            critical_beta(f64::from(self.line.upper), electron_density_per_cm3) / BOTH_SPECIES
        } else {
            f64::INFINITY
        };
        let kept = if cut { 0.5 + 0.5 * field.cumulative(beta_cut) } else { 1.0 };
        let largest = f64::from(self.pattern.shifts.last().copied().unwrap_or(1));
        let count = ((largest.ln() + 5.5 - LN_FIRST) / LN_STEP) as usize;
        let mut sums = vec![0.0; count];
        for (shift, share) in self.pattern.shifts.iter().zip(&self.pattern.shares) {
            if *shift > 0 {
                let shift = f64::from(*shift);
                // Half of each shift's intensity lies on either side.
                field.add_density(LN_FIRST - shift.ln(), 0.5 * share / shift, beta_cut, &mut sums);
            }
        }
        let ln_s = sums.iter().map(|sum| (sum / (kept * unit_aa)).max(f64::MIN_POSITIVE).ln()).collect();
        let centre = match self.pattern.shifts.first() {
            Some(0) => self.pattern.shares[0],
            _ => 0.0,
        };
        let mut profile = StarkProfile {
            ln_detuning_first: LN_FIRST + unit_aa.ln(),
            ln_detuning_step: LN_STEP,
            ln_s,
            lorentz_hwhm: 0.0,
            centre,
        };
        // The steps at the cut fall between nodes: half a percent of the strength may go wrong there.
        let ln_norm = ((profile.integral() - centre) / (1.0 - centre)).ln();
        profile.ln_s.iter_mut().for_each(|value| *value -= ln_norm);
        profile
    }
}
