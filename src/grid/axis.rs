//! Wavelengths of the flux grid.

use crate::physics::hydrogen::Line;

/// Ends of the fine spectra, vacuum A.
const BALMER_RANGE_AA: (f64, f64) = (3600.0, 7000.0);
/// Step at a line's centre, A: half the thermal width of H-beta at 6 000 K.
const CORE_STEP_AA: f64 = 0.1;
/// Growth of the step with distance from the nearest centre.
const STEP_GROWTH: f64 = 0.04;
/// Largest step, A.
const LARGEST_STEP_AA: f64 = 2.0;
/// Highest upper level whose line gets fine steps; higher lines have no cores of their own.
const HIGHEST_FINE_LEVEL: u32 = 14;
/// Ends of the spectral energy distribution, A.
const SED_RANGE_AA: (f64, f64) = (900.0, 30_000.0);
/// Its points per unit of ln(wavelength).
const SED_PER_E_FOLD: f64 = 170.0;

/// Vacuum wavelengths of the fine spectra, A, ascending: finest in the Balmer cores, coarser with
/// the distance from them.
pub fn balmer_axis() -> Vec<f64> {
    let centres: Vec<f64> =
        (3..=HIGHEST_FINE_LEVEL).map(|upper| Line { lower: 2, upper }.wave_vac_aa()).collect();
    let (first, last) = BALMER_RANGE_AA;
    // From centre to centre, so that every centre is a point of the axis.
    let mut stops: Vec<f64> = centres.iter().copied().chain([first, last]).collect();
    stops.sort_by(f64::total_cmp);
    let mut axis = vec![first];
    for pair in stops.windows(2) {
        axis.extend(between(pair[0], pair[1], &centres));
    }
    axis
}

/// Points after `from` up to and including `to`, stretched so that the last one is hit exactly.
fn between(from: f64, to: f64, centres: &[f64]) -> Vec<f64> {
    let mut points = Vec::new();
    let mut at = from;
    while at < to {
        let distance = centres.iter().fold(f64::INFINITY, |least, centre| least.min((at - centre).abs()));
        // The step must also shrink towards a centre ahead.
        let step = (CORE_STEP_AA + STEP_GROWTH * distance).min(LARGEST_STEP_AA);
        at += step;
        points.push(at);
    }
    let stretch = (to - from) / (at - from);
    points.iter_mut().for_each(|point| *point = from + (*point - from) * stretch);
    points
}

/// Vacuum wavelengths of the spectral energy distribution, A, ascending: logarithmic, with both
/// sides of the series limits.
pub fn sed_axis() -> Vec<f64> {
    let (first, last) = SED_RANGE_AA;
    let count = ((last / first).ln() * SED_PER_E_FOLD).ceil() as usize;
    let mut axis: Vec<f64> =
        (0..=count).map(|i| first * (last / first).powf(i as f64 / count as f64)).collect();
    let lyman_limit_aa = 1e8 / crate::physics::constants::RYDBERG_H_PER_CM;
    for level in 1..=5 {
        let limit = lyman_limit_aa * f64::from(level * level);
        axis.extend([limit * (1.0 - 1e-6), limit * (1.0 + 1e-6)]);
    }
    axis.sort_by(f64::total_cmp);
    axis
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn verify_axes_ascend_and_are_fine_in_the_cores() {
        for axis in [balmer_axis(), sed_axis()] {
            assert!(axis.windows(2).all(|pair| pair[0] < pair[1]));
        }
        let axis = balmer_axis();
        assert!((500..6000).contains(&axis.len()), "{} points", axis.len());
        for upper in 3..=10 {
            let centre = Line { lower: 2, upper }.wave_vac_aa();
            let at = axis.partition_point(|wave| *wave < centre - 1e-9);
            assert!((axis[at] - centre).abs() < 1e-6);
            assert!(axis[at + 1] - axis[at] < 0.15 && axis[at] - axis[at - 1] < 0.3);
        }
    }
}
