//! Coherent scattering: Rayleigh by H and H2 (Thomson is a constant).

/// Rayleigh cross-section of ground-state hydrogen, cm^2; constant shortward of Lyman alpha,
/// where the resonance lines themselves take over.
///
/// # Reference
/// Dalgarno (1962), in the expansion used by Kurucz 1970 (from memory).
pub fn rayleigh_h_cm2(wave_vac_aa: f64) -> f64 {
    let inverse2 = wave_vac_aa.max(1217.0).powi(-2);
    inverse2.powi(2) * (5.799e-13 + inverse2 * (1.422e-6 + inverse2 * 2.784))
}

/// Rayleigh cross-section of H2, cm^2, held constant shortward of 1 217 A.
///
/// # Reference
/// Dalgarno & Williams 1962, ApJ 136, 690, eq. 3.
pub fn rayleigh_h2_cm2(wave_vac_aa: f64) -> f64 {
    let inverse2 = wave_vac_aa.max(1217.0).powi(-2);
    inverse2.powi(2) * (8.14e-13 + inverse2 * (1.28e-6 + inverse2 * 1.61))
}
