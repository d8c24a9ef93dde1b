//! Physical constants in cgs, CODATA 2018 (Tiesinga et al. 2021, Rev. Mod. Phys. 93, 025010), and
//! the IAU nominal solar values (resolution B3, 2015).

/// Speed of light, cm/s (exact).
pub const LIGHT_SPEED_CM_S: f64 = 2.997_924_58e10;
/// Speed of light, km/s (exact).
pub const LIGHT_SPEED_KM_S: f64 = 299_792.458;
/// Planck constant, erg s (exact).
pub const PLANCK_ERG_S: f64 = 6.626_070_15e-27;
/// Boltzmann constant, erg/K (exact).
pub const BOLTZMANN_ERG_K: f64 = 1.380_649e-16;
/// Elementary charge, statcoulomb (exact in SI: 1.602176634e-19 C).
pub const ELEMENTARY_CHARGE_ESU: f64 = 4.803_204_712_570_263e-10;
/// Electron mass, g.
pub const ELECTRON_MASS_G: f64 = 9.109_383_701_5e-28;
/// Proton mass, g.
pub const PROTON_MASS_G: f64 = 1.672_621_923_69e-24;
/// Unified atomic mass unit, g.
pub const ATOMIC_MASS_UNIT_G: f64 = 1.660_539_066_60e-24;
/// Mass of a hydrogen atom (proton + electron), g.
pub const HYDROGEN_MASS_G: f64 = PROTON_MASS_G + ELECTRON_MASS_G;
/// Electron volt, erg (exact).
pub const ELECTRON_VOLT_ERG: f64 = 1.602_176_634e-12;
/// Bohr radius, cm.
pub const BOHR_RADIUS_CM: f64 = 5.291_772_109_03e-9;
/// Rydberg constant for infinite nuclear mass, 1/cm.
pub const RYDBERG_INF_PER_CM: f64 = 109_737.315_681_60;
/// Rydberg constant of hydrogen-1, 1/cm: the infinite-mass value reduced by the proton's motion.
pub const RYDBERG_H_PER_CM: f64 = RYDBERG_INF_PER_CM / (1.0 + ELECTRON_MASS_G / PROTON_MASS_G);
/// Thomson cross-section, cm^2.
pub const THOMSON_CM2: f64 = 6.652_458_732_1e-25;
/// Stefan-Boltzmann constant, erg cm^-2 s^-1 K^-4.
pub const STEFAN_BOLTZMANN_CGS: f64 = 5.670_374_419e-5;
/// Radiation density constant 4 sigma / c, erg cm^-3 K^-4.
pub const RADIATION_DENSITY_CGS: f64 = 4.0 * STEFAN_BOLTZMANN_CGS / LIGHT_SPEED_CM_S;
/// Gravitational constant, cm^3 g^-1 s^-2.
pub const GRAVITATION_CGS: f64 = 6.674_30e-8;
/// Nominal solar gravitational parameter GM, cm^3 s^-2 (IAU 2015 B3).
pub const SOLAR_GM_CGS: f64 = 1.327_124_4e26;
/// Solar mass, g: nominal GM over CODATA G.
pub const SOLAR_MASS_G: f64 = SOLAR_GM_CGS / GRAVITATION_CGS;
/// Nominal solar radius, cm (IAU 2015 B3).
pub const SOLAR_RADIUS_CM: f64 = 6.957e10;
/// Nominal solar luminosity, erg/s (IAU 2015 B3).
pub const SOLAR_LUMINOSITY_ERG_S: f64 = 3.828e33;
/// Julian year, s.
pub const JULIAN_YEAR_S: f64 = 3.155_76e7;
/// Parsec, cm.
pub const PARSEC_CM: f64 = 3.085_677_581_491_367e18;
