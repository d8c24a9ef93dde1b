//! Absorption and scattering at every frequency and depth, with their temperature derivatives.

use ndarray::Array2;

use super::frequency::FrequencyGrid;
use crate::physics::opacity::{Continuum, HighestLevels, LineOpacity, SERIES_COUNT, rosseland_mean};
use crate::physics::planck::PLANCK_OVER_BOLTZMANN_K_S;
use crate::physics::stark::ProfileTable;
use crate::physics::state::State;

/// Relative temperature step of the derivatives at constant pressure.
const DERIVATIVE_STEP: f64 = 1e-3;

/// Line cross-sections of one depth and the place they were computed for.
struct DepthLines {
    temperature_k: f64,
    electrons_per_cm3: f64,
    cross_section_cm2: [Vec<f64>; SERIES_COUNT],
}

/// Line cross-sections kept from one Newton iteration to the next: broadening costs more than all
/// else, and settles long before the temperatures do.
#[derive(Default)]
pub struct LineStore(Vec<DepthLines>);

/// Electron densities may drift by this many times the tolerance on temperatures.
const DENSITY_LENIENCE: f64 = 3.0;

impl DepthLines {
    fn serves(&self, state: &State, tolerance: f64) -> bool {
        (state.temperature_k / self.temperature_k - 1.0).abs() <= tolerance
            && (state.electrons_per_cm3 / self.electrons_per_cm3 - 1.0).abs() <= DENSITY_LENIENCE * tolerance
    }
}

/// Opacity sources prepared for one frequency grid.
pub struct Sources<'t> {
    grid: FrequencyGrid,
    continuum: Continuum,
    lines: LineOpacity<'t>,
}

/// Opacities per gram; arrays are (frequency, depth), so that a frequency's run is contiguous.
#[derive(Debug)]
pub struct Extinction {
    /// True absorption plus scattering, cm^2 g^-1.
    pub total_cm2_g: Array2<f64>,
    /// True absorption over extinction.
    pub thermal_fraction: Array2<f64>,
    /// Derivative of `total_cm2_g` with temperature at constant pressure, cm^2 g^-1 K^-1.
    pub total_slope: Array2<f64>,
    /// Derivative of `thermal_fraction` with temperature, 1/K.
    pub thermal_slope: Array2<f64>,
    /// Rosseland mean at each depth, cm^2 g^-1.
    pub rosseland_cm2_g: Vec<f64>,
}

impl<'t> Sources<'t> {
    /// Prepares all sources on a frequency grid, with the lines up to given levels.
    pub fn new(grid: FrequencyGrid, highest: HighestLevels, profiles: &'t ProfileTable) -> Self {
        let continuum = Continuum::new(&grid.frequency_hz);
        let lines = LineOpacity::new(&grid.wave_vac_aa, highest, profiles);
        Sources { grid, continuum, lines }
    }

    /// The frequencies.
    pub fn grid(&self) -> &FrequencyGrid {
        &self.grid
    }

    /// Computes the opacities of a run of states, without derivatives.
    pub fn evaluate(&self, states: &[State]) -> Extinction {
        self.evaluate_with(states, false, &mut LineStore::default(), 0.0)
    }

    /// Computes the opacities of a run of states and their derivatives; line shapes are taken from
    /// the store where temperature (and three times as much electron density) has moved by less than
    /// `tolerance` since.
    pub fn evaluate_with_slopes(
        &self,
        states: &[State],
        store: &mut LineStore,
        tolerance: f64,
    ) -> Extinction {
        self.evaluate_with(states, true, store, tolerance)
    }

    fn evaluate_with(
        &self,
        states: &[State],
        with_slopes: bool,
        store: &mut LineStore,
        tolerance: f64,
    ) -> Extinction {
        let (frequencies, depths) = (self.grid.len(), states.len());
        let zeros = || Array2::zeros((frequencies, depths));
        let mut extinction = Extinction {
            total_cm2_g: zeros(),
            thermal_fraction: zeros(),
            total_slope: zeros(),
            thermal_slope: zeros(),
            rosseland_cm2_g: Vec::with_capacity(depths),
        };
        let slots = if with_slopes { depths } else { 1 };
        store.0.resize_with(slots, || DepthLines {
            temperature_k: f64::INFINITY,
            electrons_per_cm3: f64::INFINITY,
            cross_section_cm2: std::array::from_fn(|_| vec![0.0; frequencies]),
        });
        let column = || (vec![0.0; frequencies], vec![0.0; frequencies]);
        let (mut total, mut fraction) = column();
        let (mut shifted_total, mut shifted_fraction) = column();
        for (depth, state) in states.iter().enumerate() {
            let lines = &mut store.0[if with_slopes { depth } else { 0 }];
            if !lines.serves(state, tolerance) {
                self.lines.evaluate(state, &mut lines.cross_section_cm2);
                lines.temperature_k = state.temperature_k;
                lines.electrons_per_cm3 = state.electrons_per_cm3;
            }
            let cross_section_cm2 = &lines.cross_section_cm2;
            self.combine(state, cross_section_cm2, &mut total, &mut fraction);
            extinction.rosseland_cm2_g.push(rosseland_mean(
                &self.grid.frequency_hz,
                &self.grid.weight_hz,
                &total,
                state.temperature_k,
            ));
            extinction.total_cm2_g.column_mut(depth).assign(&ndarray::aview1(&total));
            extinction.thermal_fraction.column_mut(depth).assign(&ndarray::aview1(&fraction));
            if with_slopes {
                let step_k = state.temperature_k * DERIVATIVE_STEP;
                let shifted = State::new(state.temperature_k + step_k, state.pressure_cgs);
                // Line shapes are kept: their own temperature dependence is weak, and the Newton
                // iteration converges to the same structure without it.
                self.combine(&shifted, cross_section_cm2, &mut shifted_total, &mut shifted_fraction);
                for frequency in 0..frequencies {
                    extinction.total_slope[[frequency, depth]] =
                        (shifted_total[frequency] - total[frequency]) / step_k;
                    extinction.thermal_slope[[frequency, depth]] =
                        (shifted_fraction[frequency] - fraction[frequency]) / step_k;
                }
            }
        }
        extinction
    }

    /// Extinction per gram and thermal fraction of one state with given line cross-sections.
    fn combine(
        &self,
        state: &State,
        cross_section_cm2: &[Vec<f64>; SERIES_COUNT],
        total_cm2_g: &mut [f64],
        thermal_fraction: &mut [f64],
    ) {
        // The outputs serve as absorption and scattering until the last loop.
        self.continuum.evaluate(state, total_cm2_g, thermal_fraction);
        for (frequency, hz) in self.grid.frequency_hz.iter().enumerate() {
            let emission = 1.0 - (-PLANCK_OVER_BOLTZMANN_K_S * hz / state.temperature_k).exp();
            let lines: f64 = cross_section_cm2
                .iter()
                .zip(&state.levels_per_cm3)
                .map(|(section, population)| section[frequency] * population)
                .sum();
            let absorption = total_cm2_g[frequency] + lines * emission;
            let extinction = absorption + thermal_fraction[frequency];
            total_cm2_g[frequency] = extinction / state.density_g_cm3;
            thermal_fraction[frequency] = absorption / extinction;
        }
    }
}
