//! Stark profiles: the microfield, the fold, and the published tables.

use emberline::physics::hydrogen::Line;
use emberline::physics::stark::{StaticLine, microfield::Microfield};

/// Holtsmark's distribution W(beta), exact integral evaluated by Chandrasekhar (1943, Rev. Mod.
/// Phys. 15, 1, table III) (from memory; the sine integral is re-evaluated below by its series).
#[test]
fn validate_holtsmark_table() {
    let field = Microfield::compute(0.0);
    // Series W = (4/(3 pi)) sum (-1)^l beta^(2l+2) Gamma((4l+6)/3)/(2l+1)!, convergent for all beta.
    for beta in [0.01, 0.1, 0.5, 1.0, 1.5, 2.0, 3.0, 4.0] {
        let mut sum = 0.0;
        for l in 0..60 {
            let lf = f64::from(l);
            let ln = statrs::function::gamma::ln_gamma((4.0 * lf + 6.0) / 3.0)
                - statrs::function::gamma::ln_gamma(2.0 * lf + 2.0)
                + (2.0 * lf + 2.0) * f64::ln(beta);
            sum += if l % 2 == 0 { 1.0 } else { -1.0 } * ln.exp();
        }
        let exact = 4.0 / (3.0 * std::f64::consts::PI) * sum;
        let found = field.density(beta);
        println!("beta {beta} W {found:.6} exact {exact:.6}");
        assert!((found - exact).abs() < 1e-4 * exact.max(0.01), "{beta}: {found} {exact}");
    }
    // Asymptote (Chandrasekhar 1943, eq. 112): 1.496 beta^-5/2 (1 + 5.107 beta^-3/2 + 14.43 beta^-3).
    for beta in [20.0f64, 30.0, 60.0, 300.0] {
        let exact = 1.496_034 * beta.powf(-2.5) * (1.0 + 5.107 * beta.powf(-1.5) + 14.43 * beta.powi(-3));
        let found = field.density(beta);
        println!("beta {beta} W {found:.4e} asymptote {exact:.4e}");
        assert!((found / exact - 1.0).abs() < 2e-3, "{beta}: {found} {exact}");
    }
    for a in [0.0, 0.3, 0.6, 0.8, 1.0, 1.2] {
        let field = Microfield::compute(a);
        let total = field.cumulative(1e6);
        println!(
            "a {a} total {total:.6}  W(0.5) {:.5} W(1) {:.5} W(1.5) {:.5} W(3) {:.5} W(6) {:.5} W(10) {:.5} W(24) {:.3e} W(26) {:.3e}",
            field.density(0.5),
            field.density(1.0),
            field.density(1.5),
            field.density(3.0),
            field.density(6.0),
            field.density(10.0),
            field.density(24.0),
            field.density(26.0)
        );
        assert!((total - 1.0).abs() < 1e-3);
    }
}

#[test]
fn verify_profiles_integrate_to_one() {
    for (lower, upper) in [(1, 2), (2, 4), (2, 6), (3, 5), (4, 7)] {
        let line = StaticLine::new(lower, upper);
        for (t, ne, gamma) in
            [(6e3, 1e12, 1e-3), (1e4, 1e15, 0.0), (2e4, 1e17, 0.05), (5e4, 1e18, 0.0), (7e3, 1e15, 0.5)]
        {
            let start = std::time::Instant::now();
            let profile = line.broadened(t, ne, gamma);
            let made = start.elapsed();
            let start = std::time::Instant::now();
            let mut total = profile.per_aa(0.0) * 1e-4;
            let step: f64 = 0.02;
            let mut x: f64 = 1e-4;
            let mut count = 0;
            while x < 3e5 {
                let next = x * step.exp();
                total += (profile.per_aa(x) * x
                    + 4.0 * profile.per_aa((x * next).sqrt()) * (x * next).sqrt()
                    + profile.per_aa(next) * next)
                    * step
                    / 6.0;
                x = next;
                count += 3;
            }
            println!(
                "{lower}-{upper} T {t:.0e} ne {ne:.0e} g {gamma}: integral {:.5}  made in {made:?}, eval {:?}",
                2.0 * total,
                start.elapsed() / count
            );
            assert!((2.0 * total - 1.0).abs() < 3e-3, "{lower}-{upper} {t} {ne}: {}", 2.0 * total);
        }
    }
    assert_eq!(Line::new(2, 4).wave_vac_aa().round(), 4863.0);
}
