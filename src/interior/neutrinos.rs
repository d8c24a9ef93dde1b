//! Energy lost to neutrinos, erg/g/s.
//!
//! In: ion charge and mass, mean mass per electron, density, temperature. Plasmon decay: Haft, Raffelt & Weiss (1994, ApJ
//! 425, 222), as adopted by Itoh et al. (1996, ApJS 102, 411). Photoneutrinos: the fit of Itoh &
//! collaborators for 1e8 K and below in the form of Munakata, Kohyama & Itoh (1985, ApJ 296, 197).
//! Bremsstrahlung: the partially degenerate fit of Itoh et al. (1996, section 5), used also in the liquid, where it
//! is up to a factor 2 too strong; there plasmons are ten times stronger until photons have taken
//! over. Pairs are left out: below 2e8 K they are suppressed by exp(-2 mc^2/kT) < 1e-25.
//! All coefficients from memory; checked are the known peak ratio and scaling
//! (`validate_neutrino_scalings`). Three flavours, sin^2 theta_W = 0.2319.

const SIN2_WEINBERG: f64 = 0.2319;
const VECTOR: f64 = 0.5 + 2.0 * SIN2_WEINBERG;
const AXIAL: f64 = 0.5;
const EXTRA_FLAVOURS: f64 = 2.0;

/// Sum of squared couplings over flavours: (vector, vector + axial, vector - axial).
fn couplings() -> (f64, f64, f64) {
    let (v, a) = (VECTOR * VECTOR, AXIAL * AXIAL);
    let (v2, a2) = ((1.0 - VECTOR).powi(2), (1.0 - AXIAL).powi(2));
    (v + EXTRA_FLAVOURS * v2, v + a + EXTRA_FLAVOURS * (v2 + a2), v - a + EXTRA_FLAVOURS * (v2 - a2))
}

/// Plasmon decay, erg/cm3/s, at density per electron mass rho/mu_e.
pub fn plasmon_erg_cm3_s(density_per_electron_g_cm3: f64, temperature_k: f64) -> f64 {
    let d = density_per_electron_g_cm3;
    let lambda = temperature_k / 5.9302e9;
    let gamma2 = 1.1095e11 * d / (temperature_k.powi(2) * (1.0 + (1.019e-6 * d).powf(2.0 / 3.0)).sqrt());
    let gamma = gamma2.sqrt();
    let transverse = 2.4 + 0.6 * gamma.sqrt() + 0.51 * gamma + 1.25 * gamma.powf(1.5);
    let longitudinal = (8.6 * gamma2 + 1.35 * gamma.powf(3.5)) / (225.0 - 17.0 * gamma + gamma2);
    let x = (17.5 + (2.0 * d).log10() - 3.0 * temperature_k.log10()) / 6.0;
    let y = (-24.5 + (2.0 * d).log10() + 3.0 * temperature_k.log10()) / 6.0;
    let shape = if x.abs() > 0.7 || y < 0.0 {
        1.0
    } else {
        let fall = ((y - 1.6 + 1.25 * x).min(0.0) / (0.57 - 0.25 * x)).powi(2);
        1.05 + (0.39 - 1.25 * x - 0.35 * (4.5 * x).sin() - 0.3 * (-(4.5 * x + 0.9).powi(2)).exp())
            * (-fall).exp()
    };
    couplings().0
        * 3.00e21
        * lambda.powi(9)
        * gamma.powi(6)
        * (-gamma).exp()
        * (transverse + longitudinal)
        * shape
}

/// Photoneutrinos, erg/cm3/s.
pub fn photo_erg_cm3_s(density_per_electron_g_cm3: f64, temperature_k: f64) -> f64 {
    let d = density_per_electron_g_cm3;
    let lambda = temperature_k / 5.9302e9;
    let xi = (d / 1e9).cbrt() / lambda;
    let fit = (4.886e10 + 7.580e10 * xi + 6.023e10 * xi * xi) * (-1.5654 * xi).exp()
        / (xi.powi(3) + 6.290e-3 / lambda + 7.483e-3 / lambda.powi(2) + 3.061e-4 / lambda.powi(3));
    let (_, plus, minus) = couplings();
    let q = 0.666 * (1.0 + 2.045 * lambda).powf(-2.066)
        / (1.0
            + d / (1.875e8 * lambda + 1.653e8 * lambda.powi(2) + 8.499e8 * lambda.powi(3)
                - 1.604e8 * lambda.powi(4)));
    (0.5 * (plus - minus * q) * d * lambda.powi(5) * fit).max(0.0)
}

/// Bremsstrahlung on ions, erg/cm3/s.
pub fn bremsstrahlung_erg_cm3_s(charge2_per_mass: f64, density_g_cm3: f64, temperature_k: f64) -> f64 {
    let t8 = temperature_k / 1e8;
    let rho = density_g_cm3;
    let eta = rho / (7.05e6 * t8.powf(1.5) + 5.12e4 * t8.powi(3));
    let f = 1.0 / (23.5 + 6.83e4 / t8.powi(2) + 7.81e8 / t8.powi(5))
        + 1.26 * (1.0 + 1.0 / eta) / (1.0 + 1.47 / eta + 3.29e-2 / (eta * eta));
    let g = 1.0 / ((1.0 + 1e-9 * rho) * (230.0 + 6.70e5 / t8.powi(2) + 7.66e9 / t8.powi(5)))
        + 1.0
            / ((7.75e5 * t8.powf(1.5) + 247.0 * t8.powf(3.85)) / rho
                + (4.07 + 0.0240 * t8.powf(1.40))
                + 4.59e-5 * t8.powf(-0.110) * rho.powf(0.656));
    let (_, plus, minus) = couplings();
    (0.5738 * charge2_per_mass * t8.powi(6) * rho * 0.5 * (plus * f - minus * g)).max(0.0)
}

/// All losses, erg/g/s.
pub fn neutrino_loss_erg_g_s(
    mass_per_electron_u: f64,
    charge2_per_mass: f64,
    density_g_cm3: f64,
    temperature_k: f64,
) -> f64 {
    let d = density_g_cm3 / mass_per_electron_u;
    (plasmon_erg_cm3_s(d, temperature_k)
        + photo_erg_cm3_s(d, temperature_k)
        + bremsstrahlung_erg_cm3_s(charge2_per_mass, density_g_cm3, temperature_k))
        / density_g_cm3
}
