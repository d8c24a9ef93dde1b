//! Physical constants against the CODATA 2022 adjustment, as the `scipy.constants` module of SciPy
//! 1.17.1 gives it (Mohr et al. 2025), and against the relations among them.

use std::f64::consts::PI;

use emberline::physics::constants::*;

/// Constants that the SI defines, or that follow from such: no tolerance but rounding.
const EXACT: f64 = 1e-14;
/// Between the adjustments of 2018 and 2022 the measured constants moved by up to 1.4e-9 (masses).
const ADJUSTED: f64 = 2e-9;

#[test]
fn validate_constants_against_codata_2022() {
    for (name, found, published, tolerance) in [
        ("speed of light, cm/s", LIGHT_SPEED_CM_S, 29_979_245_800.0, EXACT),
        ("speed of light, km/s", LIGHT_SPEED_KM_S, 299_792.458, EXACT),
        ("Planck, erg s", PLANCK_ERG_S, 6.626_070_15e-27, EXACT),
        ("Boltzmann, erg/K", BOLTZMANN_ERG_K, 1.380_649e-16, EXACT),
        ("electron volt, erg", ELECTRON_VOLT_ERG, 1.602_176_634e-12, EXACT),
        // 1.602176634e-19 C times c/10 in cgs.
        ("elementary charge, esu", ELEMENTARY_CHARGE_ESU, 1.602_176_634e-20 * 2.997_924_58e10, EXACT),
        ("Stefan-Boltzmann", STEFAN_BOLTZMANN_CGS, 5.670_374_419_184_431_4e-5, 1e-9),
        ("electron mass, g", ELECTRON_MASS_G, 9.109_383_713_9e-28, ADJUSTED),
        ("proton mass, g", PROTON_MASS_G, 1.672_621_925_95e-24, ADJUSTED),
        ("atomic mass unit, g", ATOMIC_MASS_UNIT_G, 1.660_539_068_92e-24, ADJUSTED),
        ("Bohr radius, cm", BOHR_RADIUS_CM, 5.291_772_105_44e-9, ADJUSTED),
        ("Rydberg, 1/cm", RYDBERG_INF_PER_CM, 109_737.315_681_57, 1e-12),
        ("Thomson, cm^2", THOMSON_CM2, 6.652_458_705_1e-25, 5e-9),
        ("gravitation", GRAVITATION_CGS, 6.674_3e-8, EXACT),
        ("parsec, cm", PARSEC_CM, 3.085_677_581_491_367e18, EXACT),
        ("Julian year, s", JULIAN_YEAR_S, 31_557_600.0, EXACT),
        // IAU 2015 resolution B3: nominal values, exact by definition.
        ("solar GM", SOLAR_GM_CGS, 1.327_124_4e26, EXACT),
        ("solar radius, cm", SOLAR_RADIUS_CM, 6.957e10, EXACT),
        ("solar luminosity, erg/s", SOLAR_LUMINOSITY_ERG_S, 3.828e33, EXACT),
    ] {
        let difference = (found / published - 1.0).abs();
        assert!(
            difference <= tolerance,
            "{name}: {found:e}, published {published:e}, differ by {difference:e}"
        );
    }
}

/// The relations hold to the accuracy of the least known constant in them.
const RELATION: f64 = 2e-9;

#[test]
fn verif_constants_agree_with_one_another() {
    let reduced_planck = PLANCK_ERG_S / (2.0 * PI);
    let charge2 = ELEMENTARY_CHARGE_ESU.powi(2);
    let light2 = LIGHT_SPEED_CM_S.powi(2);
    let fine_structure = charge2 / (reduced_planck * LIGHT_SPEED_CM_S);
    let rest_energy = ELECTRON_MASS_G * light2;
    for (name, found, expected) in [
        ("Bohr radius", BOHR_RADIUS_CM, reduced_planck.powi(2) / (ELECTRON_MASS_G * charge2)),
        (
            "Rydberg",
            RYDBERG_INF_PER_CM,
            fine_structure.powi(2) * ELECTRON_MASS_G * LIGHT_SPEED_CM_S / (2.0 * PLANCK_ERG_S),
        ),
        ("Thomson", THOMSON_CM2, 8.0 * PI / 3.0 * (charge2 / rest_energy).powi(2)),
        (
            "Stefan-Boltzmann",
            STEFAN_BOLTZMANN_CGS,
            2.0 * PI.powi(5) * BOLTZMANN_ERG_K.powi(4) / (15.0 * PLANCK_ERG_S.powi(3) * light2),
        ),
        // Inverse fine-structure constant, CODATA 2022.
        ("fine structure", 1.0 / fine_structure, 137.035_999_177),
        // Proton-electron mass ratio, CODATA 2022.
        ("mass ratio", PROTON_MASS_G / ELECTRON_MASS_G, 1_836.152_673_426),
    ] {
        let difference = (found / expected - 1.0).abs();
        assert!(difference < RELATION, "{name}: {found:e}, expected {expected:e}, differ by {difference:e}");
    }
}
