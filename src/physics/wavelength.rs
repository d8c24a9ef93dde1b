//! Air and vacuum wavelengths, and the Doppler shift.
//!
//! Air refraction follows Ciddor (1996, Applied Optics 35, 1566) for standard air (15 C,
//! 101 325 Pa, 450 ppm CO2, dry), the form of the IAU/VALD standard. Wavelengths in angstroms,
//! domain 2 000 - 100 000 A; below 2 000 A the convention is that air wavelengths do not exist and
//! values are returned unchanged.

use super::constants::LIGHT_SPEED_KM_S;

/// Below this wavelength spectra are given in vacuum by convention, A.
pub const SHORTEST_AIR_AA: f64 = 2000.0;

/// Refractive index of standard air at a vacuum wavelength.
///
/// # Reference
/// Ciddor 1996, eq. 1 (dispersion of standard air).
pub fn air_refractive_index(wave_vac_aa: f64) -> f64 {
    let sigma2 = (1e4 / wave_vac_aa).powi(2);
    1.0 + 0.057_921_05 / (238.0185 - sigma2) + 0.001_679_17 / (57.362 - sigma2)
}

/// Vacuum to standard air wavelength, A.
pub fn vacuum_to_air_aa(wave_vac_aa: f64) -> f64 {
    if wave_vac_aa < SHORTEST_AIR_AA {
        return wave_vac_aa;
    }
    wave_vac_aa / air_refractive_index(wave_vac_aa)
}

/// Standard air to vacuum wavelength, A: the exact inverse of [`vacuum_to_air_aa`] to 1e-9 A.
pub fn air_to_vacuum_aa(wave_air_aa: f64) -> f64 {
    if wave_air_aa < SHORTEST_AIR_AA {
        return wave_air_aa;
    }
    // The index varies so slowly that the fixed point gains five digits a step.
    let mut wave_vac_aa = wave_air_aa;
    for _ in 0..4 {
        wave_vac_aa = wave_air_aa * air_refractive_index(wave_vac_aa);
    }
    wave_vac_aa
}

/// Factor by which wavelengths grow for a source receding at the given radial velocity
/// (relativistic, purely radial motion).
pub fn doppler_factor(radial_velocity_km_s: f64) -> f64 {
    let beta = radial_velocity_km_s / LIGHT_SPEED_KM_S;
    ((1.0 + beta) / (1.0 - beta)).sqrt()
}
