//! Line opacity: Lyman, Balmer, Paschen and Brackett series.

use crate::physics::constants::{ELECTRON_MASS_G, ELEMENTARY_CHARGE_ESU, LIGHT_SPEED_CM_S};
use crate::physics::hydrogen::Line;
use crate::physics::stark::{Broadened, LineTable, ProfileTable, StaticLine, self_broadening_hwhm_aa};
use crate::physics::state::State;

/// Number of series, from lower level 1.
pub const SERIES_COUNT: usize = 4;

/// Highest upper level followed in the series of lower level 1, 2, 3, 4.
pub type HighestLevels = [u32; SERIES_COUNT];

/// For a spectrum: until the lines have merged with the pseudo-continuum in any photosphere.
pub const ALL_LINES: HighestLevels = [24, 30, 22, 18];

/// How far from its centre a line is followed, relative to its wavelength, per series. The Lyman
/// lines reach far to the red, where they shape the ultraviolet.
const REACH: [f64; SERIES_COUNT] = [1.0, 0.35, 0.3, 0.3];

/// Lines whose upper level is dissolved beyond this are left out.
const LEAST_OCCUPATION: f64 = 1e-6;

/// pi e^2 / (m_e c), cm^2 Hz.
const CROSS_SECTION_CM2_HZ: f64 = std::f64::consts::PI * ELEMENTARY_CHARGE_ESU * ELEMENTARY_CHARGE_ESU
    / (ELECTRON_MASS_G * LIGHT_SPEED_CM_S);

/// Lines on a fixed set of wavelengths.
#[derive(Debug)]
pub struct LineOpacity<'t> {
    wave_vac_aa: Vec<f64>,
    transitions: Vec<Transition<'t>>,
}

#[derive(Debug)]
struct Transition<'t> {
    line: Line,
    /// Absorption cross-section times detuning, cm^2 A: pi e^2/(m c) f lambda0^2 / c.
    strength_cm2_aa: f64,
    series: usize,
    profile: Profile<'t>,
    /// Indices of the wavelengths within reach.
    first: usize,
    end: usize,
}

#[derive(Debug)]
enum Profile<'t> {
    Unified(&'t LineTable),
    Static(StaticLine),
}

impl<'t> LineOpacity<'t> {
    /// Prepares the lines that reach into ascending vacuum wavelengths, A.
    pub fn new(wave_vac_aa: &[f64], highest: HighestLevels, profiles: &'t ProfileTable) -> Self {
        let mut transitions = Vec::new();
        for (series, highest) in highest.into_iter().enumerate() {
            let lower = series as u32 + 1;
            for upper in lower + 1..=highest {
                let line = Line { lower, upper };
                // Detunings are proportional to frequency: 1/Hz is lambda0^2 / c times 1/A.
                let centre = line.wave_vac_aa();
                let first = wave_vac_aa.partition_point(|wave| *wave < centre * (1.0 - REACH[series]));
                let end = wave_vac_aa.partition_point(|wave| *wave < centre * (1.0 + REACH[series]));
                if first < end {
                    let profile = profiles
                        .line(lower, upper)
                        .map_or_else(|| Profile::Static(StaticLine::new(lower, upper)), Profile::Unified);
                    let strength_cm2_aa =
                        CROSS_SECTION_CM2_HZ * line.oscillator_strength() * centre * centre * 1e-8
                            / LIGHT_SPEED_CM_S;
                    transitions.push(Transition { line, strength_cm2_aa, series, profile, first, end });
                }
            }
        }
        LineOpacity { wave_vac_aa: wave_vac_aa.to_vec(), transitions }
    }

    /// Adds up, per series, the cross-section of one atom in the series' lower level, cm^2,
    /// without stimulated emission; `cross_section[series]` is as long as the wavelengths.
    pub fn evaluate(&self, state: &State, cross_section_cm2: &mut [Vec<f64>; SERIES_COUNT]) {
        for series in cross_section_cm2.iter_mut() {
            series.fill(0.0);
        }
        for transition in &self.transitions {
            let lower_index = transition.line.lower as usize - 1;
            let survival = state.occupation[transition.line.upper as usize - 1];
            if survival < LEAST_OCCUPATION {
                continue;
            }
            let broadened = transition.broadened(state);
            let line = transition.line;
            let strength = transition.strength_cm2_aa * survival / state.occupation[lower_index];
            let range = transition.first..transition.end;
            let output = &mut cross_section_cm2[transition.series][range.clone()];
            for (sum, wave) in output.iter_mut().zip(&self.wave_vac_aa[range]) {
                *sum += strength * broadened.per_aa(line.detuning_aa(*wave));
            }
        }
    }
}

impl Transition<'_> {
    fn broadened(&self, state: &State) -> Broadened {
        let hwhm_aa = self_broadening_hwhm_aa(self.line, state.temperature_k, state.levels_per_cm3[0]);
        match &self.profile {
            Profile::Unified(table) => table.broadened(state.temperature_k, state.electrons_per_cm3, hwhm_aa),
            Profile::Static(line) => line.broadened(state.temperature_k, state.electrons_per_cm3, hwhm_aa),
        }
    }
}
