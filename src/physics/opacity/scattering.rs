//! Coherent scattering: Rayleigh by H and H2 (Thomson is a constant).

use crate::physics::constants::THOMSON_CM2;

/// Shortest wavelength, A, at which scattering by H is followed up the Lyman-alpha resonance:
/// closer in, the line's own profile takes over.
const SHORTEST_AA: f64 = 1_300.0;

/// Wavelength of a photon of one hartree, A: half the inverse Rydberg constant.
const HARTREE_AA: f64 = 455.633_5;

/// Oscillators of ground-state hydrogen: strength and squared energy in hartree. Lyman alpha and
/// beta as they are, all else as one whose strength and place make the Cauchy moments S(-2) = 9/2
/// and S(-4) = 319/12 exact.
const OSCILLATORS: [(f64, f64); 3] =
    [(0.416_20, 0.375 * 0.375), (0.079_10, 16.0 / 81.0), (0.370_21, 0.324_78)];

/// Rayleigh cross-section of ground-state hydrogen, cm^2; constant shortward of 1 300 A.
///
/// # Reference
/// Dispersion formula (Kramers & Heisenberg 1925): sigma_T (sum f w^2 / (w_n^2 - w^2))^2. The usual
/// three-term series in 1 / lambda^2 is 11 % too low at 2 000 A and half of this at 1 500 A.
pub fn rayleigh_h_cm2(wave_vac_aa: f64) -> f64 {
    let energy2 = (HARTREE_AA / wave_vac_aa.max(SHORTEST_AA)).powi(2);
    let amplitude: f64 =
        OSCILLATORS.iter().map(|(strength, place2)| strength * energy2 / (place2 - energy2)).sum();
    THOMSON_CM2 * amplitude * amplitude
}

/// Rayleigh cross-section of H2, cm^2, held constant shortward of 1 217 A.
///
/// # Reference
/// Dalgarno & Williams 1962, ApJ 136, 690, eq. 3.
pub fn rayleigh_h2_cm2(wave_vac_aa: f64) -> f64 {
    let inverse2 = wave_vac_aa.max(1217.0).powi(-2);
    inverse2.powi(2) * (8.14e-13 + inverse2 * (1.28e-6 + inverse2 * 1.61))
}
