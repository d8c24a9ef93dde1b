//! Pixels that no model explains: cosmic rays, sky residuals, defects.
//!
//! The worst go first: one strong cosmic ray bends the fit and makes its neighbours look bad, so that each
//! round takes only what is comparable with the worst, and the next round starts from a better fit.

use super::objective::{Objective, Seen};

/// A pixel is set aside when it misses the model by this many standard deviations, scaled by the scatter of
/// all pixels, unless the configuration says otherwise.
pub const OUTLIER_SIGMA: f64 = 5.0;
/// Pixels beside an outlier follow it from here on, if they miss to the same side.
const NEIGHBOUR_SIGMA: f64 = 3.0;
/// A round takes what misses by at least this share of the worst.
const SHARE_OF_WORST: f64 = 0.4;
/// At most this share of the pixels is set aside; more is a poor model, not bad pixels.
const MOST_OUTLIERS: f64 = 0.03;
/// Median of |x| of a unit Gaussian.
const MEDIAN_OF_GAUSSIAN: f64 = 0.674_49;

/// Takes the weight of the worst pixels of a model's views; returns how many, 0 where none is bad or so many
/// are that the model must be.
pub fn set_worst_aside(objective: &mut Objective<'_>, views: &[Seen], outlier_sigma: f64) -> usize {
    let used = |data: &super::objective::WindowData, seen: &Seen| -> Vec<f64> {
        let sizes = seen.residual.iter().zip(&data.inverse_sigma);
        sizes.filter(|(_, weight)| **weight > 0.0).map(|(residual, _)| residual.abs()).collect()
    };
    let mut sizes: Vec<f64> =
        objective.windows.iter().zip(views).flat_map(|(data, seen)| used(data, seen)).collect();
    let worst = sizes.iter().copied().fold(0.0, f64::max);
    let count = sizes.len();
    if count == 0 {
        return 0;
    }
    let median = *sizes.select_nth_unstable_by(count / 2, f64::total_cmp).1;
    let scatter = (median / MEDIAN_OF_GAUSSIAN).max(1.0);
    let limit = (outlier_sigma * scatter).max(SHARE_OF_WORST * worst);
    let mut bad: Vec<(usize, usize)> = Vec::new();
    for (window, seen) in views.iter().enumerate() {
        let residual = &seen.residual;
        let is_out = |i: usize| residual[i].abs() > limit;
        let follows = |i: usize, beside: Option<usize>| {
            residual[i].abs() > NEIGHBOUR_SIGMA * scatter
                && beside.is_some_and(|b| b < residual.len() && is_out(b) && residual[b] * residual[i] > 0.0)
        };
        let taken = |i: &usize| is_out(*i) || follows(*i, i.checked_sub(1)) || follows(*i, Some(*i + 1));
        bad.extend((0..residual.len()).filter(taken).map(|i| (window, i)));
    }
    let all = count + objective.set_aside();
    if (bad.len() + objective.set_aside()) as f64 > MOST_OUTLIERS * all as f64 {
        return 0;
    }
    for (window, i) in &bad {
        objective.windows[*window].inverse_sigma[*i] = 0.0;
    }
    bad.len()
}
