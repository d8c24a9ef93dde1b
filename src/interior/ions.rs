//! Free energy of the ions of one species in a uniform electron background, from gas to crystal.
//!
//! In: the coupling parameter Gamma = (Z e)^2 / (a k T) and the quantum parameter
//! eta = T_plasma / T as [`Jet`]s. Out: Helmholtz free energy per ion over kT, including the kinetic
//! part. Liquid: ideal gas + the classical one-component-plasma fit of Potekhin & Chabrier (2000,
//! Phys. Rev. E 62, 8554, eq. 16), valid from the Debye-Hueckel limit to Gamma = 200; quantum
//! corrections as one oscillator with the exact second moment of the spectrum, whose high-temperature
//! limit is Wigner-Kirkwood's eta^2/24. Solid: harmonic bcc crystal (Baiko, Potekhin & Yakovlev
//! 2001, Phys. Rev. E 64, 057402, eqs 11-13) and the anharmonic terms of Farouki & Hamaguchi (1993,
//! Phys. Rev. E 47, 4330), damped in the quantum regime (Potekhin & Chabrier 2010).
//! The coefficients were written from memory; what they must reproduce is tested: the
//! Debye-Hueckel limit, the classical crystal constant -2.49389, the Debye T^3 law of a bcc
//! crystal (209.32), melting at Gamma = 175 +- 5 and a latent heat of 0.77 kT per ion
//! (`validate_ion_plasma`).

use super::jet::Jet;

/// Coupling parameter at which the classical one-component plasma freezes (Potekhin & Chabrier 2000).
pub const MELTING_GAMMA: f64 = 175.0;

/// Classical excess free energy over kT and its derivative u = d f / d ln Gamma.
pub fn liquid_excess(gamma: f64) -> (f64, f64) {
    let jet = liquid_excess_jet(Jet::linear(gamma, 1.0, 0.0));
    (jet.v, jet.x * gamma)
}

fn liquid_excess_jet(gamma: Jet) -> Jet {
    const A1: f64 = -0.907_347;
    const A2: f64 = 0.628_49;
    const B1: f64 = 4.50e-3;
    const B2: f64 = 170.0;
    const B3: f64 = -8.4e-5;
    const B4: f64 = 3.70e-3;
    // A3 makes the weak coupling limit Debye-Hueckel's: f = -Gamma^1.5 / sqrt 3.
    let a3 = -(3f64.sqrt()) / 2.0 - A1 / A2.sqrt();
    let root = gamma.sqrt();
    let first = (gamma * (gamma + A2)).sqrt()
        - ((gamma * (1.0 / A2)).sqrt() + (gamma * (1.0 / A2) + 1.0).sqrt()).ln() * A2;
    let second = (root - root.atan()) * (2.0 * a3);
    let third = (gamma - (gamma * (1.0 / B2) + 1.0).ln() * B2) * B1;
    let fourth = (gamma * gamma * (1.0 / B4) + 1.0).ln() * (0.5 * B3);
    first * A1 + second + third + fourth
}

/// ln(sinh z / z), well behaved at both ends.
fn ln_sinh_ratio(z: Jet) -> Jet {
    let q = z.v;
    if q < 1e-2 {
        let q2 = q * q;
        return z.apply(q2 / 6.0 - q2 * q2 / 180.0, q / 3.0 - q2 * q / 45.0, 1.0 / 3.0 - q2 / 15.0);
    }
    let decay = (-2.0 * q).exp();
    let coth = (1.0 + decay) / (1.0 - decay);
    z.apply(
        q + (-decay).ln_1p() - std::f64::consts::LN_2 - q.ln(),
        coth - 1.0 / q,
        1.0 - coth * coth + 1.0 / (q * q),
    )
}

/// Liquid: excess over the ideal classical gas.
pub fn liquid_interaction(gamma: Jet, eta: Jet) -> Jet {
    // One oscillator per direction at omega_p / sqrt 3: its second moment is the plasma's sum rule.
    let quantum = ln_sinh_ratio(eta * (0.5 / 3f64.sqrt())) * 3.0;
    liquid_excess_jet(gamma) + quantum
}

/// Solid: lattice, phonons and anharmonicity; it replaces ideal gas and excess together.
pub fn solid(gamma: Jet, eta: Jet) -> Jet {
    const MADELUNG: f64 = -0.895_929_255_682;
    const FIRST_MOMENT: f64 = 0.511_387_5;
    const ALPHA: [f64; 3] = [0.932_446, 0.334_547, 0.265_764];
    const ALPHA_6: f64 = 4.757_014e-3;
    const ALPHA_8: f64 = 4.777_093_5e-3;
    const A: [(i32, f64); 6] =
        [(1, 0.1839), (2, 0.593_586), (3, 5.4814e-3), (4, 5.018_13e-4), (6, 3.9247e-7), (8, 5.8356e-11)];
    const B: [(i32, f64); 7] = [
        (2, 7.079_97),
        (4, 0.040_948_4),
        (5, 3.973_55e-4),
        (6, 5.111_48e-5),
        (7, 2.197_49e-6),
        (9, ALPHA_6 * 3.9247e-7),
        (11, ALPHA_8 * 5.8356e-11),
    ];
    const B0: f64 = 261.66;
    const ANHARMONIC: [f64; 3] = [10.9, 247.0, 1.765e5];

    let mut phonons = Jet::default();
    for alpha in ALPHA {
        // ln(1 - e^-z), with its derivatives from n = 1 / (e^z - 1).
        let z = eta * alpha;
        let n = 1.0 / z.v.exp_m1();
        phonons = phonons + z.apply((-(-z.v).exp()).ln_1p(), n, -n * (1.0 + n));
    }
    // Beyond this the ratio is far below rounding of the zero-point term, and the powers overflow.
    let cubic = if eta.v < 1e6 {
        let a = A.iter().fold(Jet::constant(1.0), |sum, (n, c)| sum + eta.powi(*n) * *c);
        let b = B.iter().fold(Jet::constant(B0), |sum, (n, c)| sum + eta.powi(*n) * *c);
        a * b.recip()
    } else {
        Jet::default()
    };
    let mut anharmonic = Jet::default();
    for (k, a) in ANHARMONIC.iter().enumerate() {
        let j = k as i32 + 1;
        anharmonic = anharmonic + gamma.powi(-j) * (-a / f64::from(j));
    }
    let damped = anharmonic * (eta * eta * -0.0112).exp();
    gamma * MADELUNG + eta * (1.5 * FIRST_MOMENT) + phonons - cubic + damped
}

/// Exchange energy of the electron gas, free energy per electron over kT.
///
/// Cold and relativistic: Salpeter 1961 (ApJ 134, 669, eq. 22 ff.); its fading with temperature is
/// the non-relativistic fit of Perrot & Dharma-wardana 1984 (Phys. Rev. A 30, 2619), from memory;
/// both limits are tested in `validate_electron_exchange`.
pub fn exchange(relativity: Jet, temperature_over_fermi: Jet, inverse_theta: Jet) -> Jet {
    use crate::physics::constants::{ELEMENTARY_CHARGE_ESU, LIGHT_SPEED_CM_S, PLANCK_ERG_S};
    let alpha = 2.0 * std::f64::consts::PI * ELEMENTARY_CHARGE_ESU * ELEMENTARY_CHARGE_ESU
        / (PLANCK_ERG_S * LIGHT_SPEED_CM_S);
    let x = relativity;
    let shape = if x.v < 0.1 {
        // The closed form cancels to x^4; this is its expansion (next term 0.2 x^8).
        Jet::constant(1.0) - x.powi(2) * (2.0 / 3.0) + x.powi(4) * 0.4 - x.powi(6) * 0.274_286
    } else {
        let beta = x + (x * x + 1.0).sqrt();
        let (b2, l) = (beta * beta, beta.ln());
        let b2i = b2.recip();
        (Jet::constant(2.25) + (b2 - b2i) * l * 3.0
            - l * l * 6.0
            - (b2 + b2i)
            - (b2 * b2 + b2i * b2i) * 0.125)
            * x.powi(-4)
            * 0.25
    };
    let t = temperature_over_fermi;
    let t2 = t * t;
    let e = (t.recip() * -2.0).exp();
    // tanh(1/t) = (1 - e) / (1 + e)
    let tanh = (Jet::constant(1.0) - e) * (e + 1.0).recip();
    let fade = tanh
        * (t2 * 4.058_17 - t2 * t * 0.123_03 + t2 * t2 * 2.271_33 + 1.0)
        * (t2 * 8.310_51 + t2 * t2 * 5.1105 + 1.0).recip();
    x * shape * fade * inverse_theta * (-0.75 * alpha / std::f64::consts::PI)
}

#[cfg(test)]
mod tests {
    use super::*;

    /// The exchange shape must be continuous where series and closed form meet.
    #[test]
    fn exchange_series_meets_closed_form() {
        let cold = Jet::constant(1e-3);
        let one = Jet::constant(1.0);
        let below = exchange(Jet::linear(0.099_999_99, 0.1, 0.0), cold, one);
        let above = exchange(Jet::linear(0.100_000_01, 0.1, 0.0), cold, one);
        assert!((below.v / above.v - 1.0).abs() < 1e-5, "{below:?} {above:?}");
        assert!((below.x / above.x - 1.0).abs() < 1e-4, "{below:?} {above:?}");
    }
}
