//! Corrections of parameters fitted with one-dimensional convective models to three-dimensional ones.
//!
//! In: Teff and log g of a fit with ML2/alpha = 0.8 models. Out: what to add to them. The analytic
//! fits of Tremblay et al. (2013, A&A 559, A104, appendix, pure hydrogen), written from memory. Their coefficients were
//! accepted because the function has the published properties, none of which it was built from here:
//! at log g 8 it lowers log g by 0.12 - 0.27 dex between 7 500 and 11 000 K, most near 9 000 K, vanishes
//! above 14 000 K, and shifts its end to hotter stars at higher gravity (test `validate_three_d_corrections`).
//! Domain: 6 000 - 15 000 K, log g 7 - 9; hotter stars need no correction.

const TEFF: [f64; 8] = [
    1.094_733_5e-3,
    -1.871_623_1e-1,
    1.935_000_9e-2,
    6.482_161_3e-1,
    -2.286_318_7e-1,
    5.869_923_2e-1,
    -1.072_987_1e-1,
    1.100_907_0e-1,
];
const LOG_G: [f64; 12] = [
    7.520_986_8e-4,
    -9.208_661_9e-1,
    3.125_374_6e-1,
    -1.034_817_6e1,
    6.585_471_6e-1,
    4.284_986_2e-1,
    -8.898_287_3e-2,
    1.019_971_8e1,
    4.927_788_3e-2,
    -8.654_347_7e-1,
    3.623_275_6e-3,
    -5.872_935_4e-2,
];
/// Coolest temperature of the simulations behind the fit, K.
pub const COOLEST_K: f64 = 6000.0;
/// Above this temperature atmospheres are one-dimensional enough, K.
pub const HOTTEST_K: f64 = 15_000.0;
/// Gravities of the simulations.
pub const LOG_G_RANGE: (f64, f64) = (7.0, 9.0);

/// What to add to (Teff in K, log g) of a one-dimensional fit; zero above [`HOTTEST_K`].
///
/// # Domain
/// `None` below [`COOLEST_K`], and outside [`LOG_G_RANGE`] where a correction would be needed.
pub fn correct_3d(teff_k: f64, log_g: f64) -> Option<(f64, f64)> {
    if teff_k > HOTTEST_K && log_g.is_finite() {
        return Some((0.0, 0.0));
    }
    if !(teff_k >= COOLEST_K && (LOG_G_RANGE.0..=LOG_G_RANGE.1).contains(&log_g)) {
        return None;
    }
    let t = (teff_k - 10_000.0) / 1000.0;
    let g = log_g - 8.0;
    let a = &TEFF;
    let dteff_k = 1000.0
        * (a[0]
            + (a[1] + a[6] * t + a[7] * g)
                * (-(a[2] + a[4] * t + a[5] * g).powi(2) * (t - a[3]).powi(2)).exp());
    let b = &LOG_G;
    let inner = (-(b[8] + b[10] * t + b[11] * g).powi(2) * (t - b[9]).powi(2)).exp();
    let dlog_g = b[0]
        + b[4] * (-b[5] * (t - b[6]).powi(2)).exp()
        + b[1] * (-b[2] * (t - (b[3] + b[7] * inner)).powi(2)).exp();
    Some((dteff_k, dlog_g))
}
