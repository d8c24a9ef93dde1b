//! Spherical Bessel functions, ordinary and modified (Abramowitz & Stegun 1972, chapter 10): statrs has none.
//! Accuracy: `bessel_functions_match_closed_forms`.

/// Spherical Bessel functions j_0 .. j_(N-1) at x >= 0: upward recurrence where it is stable, Miller's
/// downward one elsewhere.
pub fn spherical_j<const N: usize>(x: f64) -> [f64; N] {
    let mut j = [0.0; N];
    if x < 1e-8 {
        j[0] = 1.0;
        return j;
    }
    let j0 = x.sin() / x;
    if x > N as f64 {
        j[0] = j0;
        j[1] = x.sin() / (x * x) - x.cos() / x;
        for l in 1..N - 1 {
            j[l + 1] = (2 * l + 1) as f64 / x * j[l] - j[l - 1];
        }
        return j;
    }
    // Miller's method, normalised on sum (2l+1) j_l^2 = 1.
    let (mut above, mut here) = (0.0, 1e-120_f64);
    let start = N + 25;
    let mut norm = 0.0;
    for l in (0..start).rev() {
        let below = (2 * l + 3) as f64 / x * here - above;
        (above, here) = (here, below);
        norm += (2 * l + 1) as f64 * here * here;
        if l < N {
            j[l] = here;
        }
        if here.abs() > 1e100 {
            above *= 1e-100;
            here *= 1e-100;
            norm *= 1e-200;
            for value in j.iter_mut() {
                *value *= 1e-100;
            }
        }
    }
    let scale = 1.0 / norm.sqrt();
    let scale = if (j[0] > 0.0) == (j0 > 0.0) { scale } else { -scale };
    j.map(|value| value * scale)
}

/// Modified spherical Bessel functions at one argument: the product i_l k_l, and ln i_l to form
/// ratios i_l(x1)/i_l(x2) without overflow.
#[derive(Debug, Clone)]
pub struct ModifiedPair<const N: usize> {
    /// i_l k_l, with k_0 = exp(-x)/x.
    pub product: [f64; N],
    ln_i: [f64; N],
}

impl<const N: usize> ModifiedPair<N> {
    /// i_l(previous) / i_l(this).
    pub fn fall(&self, l: usize, previous: &Self) -> f64 {
        (previous.ln_i[l] - self.ln_i[l]).exp()
    }

    /// Evaluates at x > 0.
    pub fn new(x: f64) -> Self {
        // Ratios i_(l+1)/i_l by the continued fraction from above; i_0 = sinh x / x.
        let mut ratio = [0.0; N];
        let mut r = 0.0;
        let start = N + 20 + x as usize;
        for l in (0..start).rev() {
            r = 1.0 / ((2 * l + 3) as f64 / x + r);
            if l < N {
                ratio[l] = r;
            }
        }
        let mut ln_i = [0.0; N];
        ln_i[0] = x + (-(-2.0 * x).exp_m1() / (2.0 * x)).ln();
        for l in 1..N {
            ln_i[l] = ln_i[l - 1] + ratio[l - 1].ln();
        }
        // k_0 = exp(-x)/x; ratios upward are stable.
        let mut ln_k = -x - x.ln();
        let mut k_ratio = 1.0 + 1.0 / x;
        let mut product = [0.0; N];
        for l in 0..N {
            product[l] = (ln_i[l] + ln_k).exp();
            ln_k += k_ratio.ln();
            k_ratio = (2 * l + 3) as f64 / x + 1.0 / k_ratio;
        }
        ModifiedPair { product, ln_i }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn bessel_functions_match_closed_forms() {
        for x in [0.01f64, 0.7, 3.0, 9.0, 25.0] {
            let j: [f64; 17] = spherical_j(x);
            let j2 = (3.0 / (x * x) - 1.0) * x.sin() / x - 3.0 * x.cos() / (x * x);
            assert!((j[0] - x.sin() / x).abs() < 1e-12 && (x < 0.1 || (j[2] - j2).abs() < 1e-12), "{x}");
            let pair = ModifiedPair::<3>::new(x);
            // i_0 k_0 and i_1 k_1 with i_1 = (x cosh x - sinh x)/x^2, k_1 = exp(-x) (1 + 1/x)/x.
            let zero = x.sinh() / x * (-x).exp() / x;
            let one = (x * x.cosh() - x.sinh()) / (x * x) * (-x).exp() * (1.0 + 1.0 / x) / x;
            assert!((pair.product[0] / zero - 1.0).abs() < 1e-12);
            assert!(x < 0.1 || (pair.product[1] / one - 1.0).abs() < 1e-10, "{x}");
        }
    }
}
