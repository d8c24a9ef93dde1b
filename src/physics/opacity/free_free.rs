//! Free-free absorption by electrons in the field of protons.

use crate::physics::opacity::bound_free::LYMAN_LIMIT_HZ;
use crate::physics::planck::PLANCK_OVER_BOLTZMANN_K_S;

/// 4 e^6 / (3 h c m_e) sqrt(2 pi / (3 k m_e)), cgs: the classical coefficient of free-free
/// absorption (Rybicki & Lightman 1979, eq. 5.18b).
pub const KRAMERS_FREE_FREE_CGS: f64 = 3.692_348e8;

/// Free-free absorption coefficient per electron and proton, cm^5, without stimulated emission.
pub fn free_free_cm5(frequency_hz: f64, temperature_k: f64) -> f64 {
    KRAMERS_FREE_FREE_CGS / (temperature_k.sqrt() * frequency_hz.powi(3))
        * gaunt_factor(frequency_hz, temperature_k)
}

/// Thermally averaged free-free Gaunt factor of hydrogen.
///
/// # Domain
/// 3 000 - 1e6 K; where the asymptotic series turns over (h nu / kT below 0.1) the Born-Elwert
/// logarithm takes over.
///
/// # Reference
/// Menzel & Pekeris 1935 asymptotic series, averaged over a Maxwellian.
pub fn gaunt_factor(frequency_hz: f64, temperature_k: f64) -> f64 {
    let photon = PLANCK_OVER_BOLTZMANN_K_S * frequency_hz / temperature_k;
    let rydbergs = frequency_hz / LYMAN_LIMIT_HZ;
    let third = rydbergs.cbrt();
    let photon = photon.max(0.3);
    1.0 + 0.1728 * third * (1.0 + 2.0 / photon)
        - 0.0496 * third * third * (1.0 + 2.0 / (3.0 * photon) + 4.0 / (3.0 * photon * photon))
}
