//! The Rosseland mean.

use crate::physics::planck::planck_slope_per_hz;

/// Harmonic mean of a total extinction (any unit) weighted by dB/dT; slices of equal length, with
/// quadrature weights in Hz.
pub fn rosseland_mean(
    frequency_hz: &[f64],
    weight_hz: &[f64],
    extinction: &[f64],
    temperature_k: f64,
) -> f64 {
    let (mut norm, mut transparency) = (0.0, 0.0);
    for ((frequency, weight), extinction) in frequency_hz.iter().zip(weight_hz).zip(extinction) {
        let slope = weight * planck_slope_per_hz(*frequency, temperature_k);
        norm += slope;
        transparency += slope / extinction;
    }
    norm / transparency
}
