//! The states of one hydrogen shell in an electric field along z, and the dipole between shells.
//!
//! Parabolic states are found as eigenvectors of z within the shell for each magnetic number m, so
//! that their phases agree with the spherical functions (Condon-Shortley angles, radial functions
//! positive near the nucleus) that carry the dipole. The eigenvalues are (3/2) n q Bohr radii with
//! electric quantum number q = n1 - n2 (Bethe & Salpeter 1957, section 51), which the construction
//! checks: `parabolic_eigenvalues_are_exact`.

use crate::physics::hydrogen::{Line, radial_integral};
use nalgebra::DMatrix;

/// Parabolic states of one shell with one |m|.
#[derive(Debug, Clone)]
pub struct Sublevel {
    /// Electric quantum numbers, one per state, ascending.
    pub electric: Vec<i32>,
    /// Amplitudes: column s holds state s over l = |m|, |m|+1, ..., n-1.
    pub amplitudes: DMatrix<f64>,
}

/// All parabolic states of a shell, by |m|.
#[derive(Debug, Clone)]
pub struct Shell {
    /// Principal quantum number.
    pub n: u32,
    /// States by |m| = 0 ..= n - 1.
    pub by_m: Vec<Sublevel>,
}

impl Shell {
    /// Builds the states of a shell.
    pub fn new(n: u32) -> Self {
        Shell { n, by_m: (0..n).map(|m| sublevel(n, m)).collect() }
    }
}

fn sublevel(n: u32, m: u32) -> Sublevel {
    let size = (n - m) as usize;
    let nf = f64::from(n);
    let mut z = DMatrix::zeros(size, size);
    for i in 0..size - 1 {
        let l = m as i32 + i as i32;
        let radial = -1.5 * nf * (nf * nf - f64::from(l + 1).powi(2)).sqrt();
        let element = radial * angular_z(l, m as i32);
        z[(i, i + 1)] = element;
        z[(i + 1, i)] = element;
    }
    let eigen = z.symmetric_eigen();
    let mut order: Vec<usize> = (0..size).collect();
    order.sort_by(|a, b| eigen.eigenvalues[*a].total_cmp(&eigen.eigenvalues[*b]));
    let mut amplitudes = DMatrix::zeros(size, size);
    for (column, source) in order.iter().enumerate() {
        amplitudes.set_column(column, &eigen.eigenvectors.column(*source));
    }
    // q runs over n - |m| - 1, n - |m| - 3, ..., -(n - |m| - 1).
    let electric = (0..size as i32).map(|i| 2 * i - (size as i32 - 1)).collect();
    Sublevel { electric, amplitudes }
}

/// Angular factor <l+1, m| cos(theta) |l, m>.
fn angular_z(l: i32, m: i32) -> f64 {
    let (lf, mf) = (f64::from(l), f64::from(m));
    (((lf + 1.0).powi(2) - mf * mf) / ((2.0 * lf + 1.0) * (2.0 * lf + 3.0))).sqrt()
}

/// Angular factor <l2, m2| r_q / r |l, m> of the spherical dipole component q = m2 - m, 0 or 1.
pub fn angular_dipole(l2: i32, m2: i32, l: i32, m: i32) -> f64 {
    let (lf, mf) = (f64::from(l), f64::from(m));
    match (m2 - m, l2 - l) {
        (0, 1) => angular_z(l, m),
        (0, -1) => angular_z(l2, m),
        (1, 1) => ((lf + mf + 1.0) * (lf + mf + 2.0) / (2.0 * (2.0 * lf + 1.0) * (2.0 * lf + 3.0))).sqrt(),
        (1, -1) => -((lf - mf) * (lf - mf - 1.0) / (2.0 * (2.0 * lf - 1.0) * (2.0 * lf + 1.0))).sqrt(),
        _ => 0.0,
    }
}

/// One pair of parabolic states, an upper and a lower one.
#[derive(Debug, Clone, Copy)]
pub struct Pair {
    /// Magnetic number and position in [`Sublevel::electric`] of the upper state.
    pub upper: (i32, usize),
    /// The same of the lower state.
    pub lower: (i32, usize),
    /// n q - n' q': the shift is (3/2) of it times the field, in atomic units.
    pub shift: i32,
}

/// All pairs of a line with m - m' = `change`.
pub fn pairs(upper: &Shell, lower: &Shell, change: i32) -> Vec<Pair> {
    let mut found = Vec::new();
    for m_lower in -(lower.n as i32 - 1)..lower.n as i32 {
        let m_upper = m_lower + change;
        if m_upper.unsigned_abs() >= upper.n {
            continue;
        }
        for (i, q) in upper.by_m[m_upper.unsigned_abs() as usize].electric.iter().enumerate() {
            for (j, q_lower) in lower.by_m[m_lower.unsigned_abs() as usize].electric.iter().enumerate() {
                found.push(Pair {
                    upper: (m_upper, i),
                    lower: (m_lower, j),
                    shift: upper.n as i32 * q - lower.n as i32 * q_lower,
                });
            }
        }
    }
    found
}

/// Dipole amplitude <upper| r_change |lower> of each pair, Bohr radii; `change` is 0 or 1.
pub fn dipoles(upper: &Shell, lower: &Shell, change: i32, of: &[Pair]) -> Vec<f64> {
    let radial = radial_table(upper.n, lower.n);
    of.iter()
        .map(|pair| {
            let (m_upper, i) = pair.upper;
            let (m_lower, j) = pair.lower;
            debug_assert_eq!(m_upper - m_lower, change);
            let (up, low) =
                (&upper.by_m[m_upper.unsigned_abs() as usize], &lower.by_m[m_lower.unsigned_abs() as usize]);
            let mut sum = 0.0;
            for (row, amplitude_low) in low.amplitudes.column(j).iter().enumerate() {
                let l_low = m_lower.abs() + row as i32;
                for (row, amplitude_up) in up.amplitudes.column(i).iter().enumerate() {
                    let l_up = m_upper.abs() + row as i32;
                    if (l_up - l_low).abs() == 1 {
                        sum += amplitude_low
                            * amplitude_up
                            * angular_dipole(l_up, m_upper, l_low, m_lower)
                            * radial[(l_up as usize, l_low as usize)];
                    }
                }
            }
            sum
        })
        .collect()
}

fn radial_table(n_upper: u32, n_lower: u32) -> DMatrix<f64> {
    DMatrix::from_fn(n_upper as usize, n_lower as usize, |l_up, l_low| {
        if l_up.abs_diff(l_low) == 1 {
            radial_integral(n_upper, l_up as u32, n_lower, l_low as u32)
        } else {
            0.0
        }
    })
}

/// The Stark pattern of a line: positive and zero shifts |n q - n' q'| with their share of the
/// intensity, averaged over directions (one part pi, two parts sigma). Shares sum to 1; a non-zero
/// shift stands for both signs.
#[derive(Debug, Clone)]
pub struct Pattern {
    /// |n q - n' q'|, ascending.
    pub shifts: Vec<i32>,
    /// Share of the intensity, same length.
    pub shares: Vec<f64>,
}

impl Pattern {
    /// Computes the pattern of a line.
    pub fn new(line: Line) -> Self {
        let (upper, lower) = (Shell::new(line.upper), Shell::new(line.lower));
        let mut sums = std::collections::BTreeMap::new();
        for (change, weight) in [(0, 1.0), (1, 2.0)] {
            let of = pairs(&upper, &lower, change);
            for (pair, dipole) in of.iter().zip(dipoles(&upper, &lower, change, &of)) {
                *sums.entry(pair.shift.abs()).or_insert(0.0) += weight * dipole * dipole;
            }
        }
        let total: f64 = sums.values().sum();
        sums.retain(|_, share| {
            *share /= total;
            *share > 1e-9
        });
        Pattern { shifts: sums.keys().copied().collect(), shares: sums.values().copied().collect() }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn parabolic_eigenvalues_are_exact() {
        for n in [2, 5, 10, 30] {
            for m in [0, 1, n - 1] {
                let made = sublevel(n, m);
                let size = (n - m) as usize;
                for s in 0..size {
                    // Expectation of z within the state must be (3/2) n q.
                    let c = made.amplitudes.column(s);
                    let mut z = 0.0;
                    for i in 0..size - 1 {
                        let l = (m as usize + i) as i32;
                        let nf = f64::from(n);
                        let radial = -1.5 * nf * (nf * nf - f64::from(l + 1).powi(2)).sqrt();
                        z += 2.0 * c[i] * c[i + 1] * radial * angular_z(l, m as i32);
                    }
                    assert!((z - 1.5 * f64::from(n) * f64::from(made.electric[s])).abs() < 1e-8);
                }
            }
        }
    }
}
