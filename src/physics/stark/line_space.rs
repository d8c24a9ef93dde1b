//! The line space of two shells: pairs of an upper and a lower parabolic state, and in it the
//! constant matrices C_k of the electrons' operator.
//!
//! Quantised along the direction of an electron's action the operator is diagonal: on a pair it is a
//! function of |n q - n' q'|, so projectors P_k on equal values span it. Averaging over directions keeps
//! the scalar part: in pairs coupled to |(l l') L M>, blocks diagonal in L and equal for all M. C_k is that
//! average of P_k, turned back to parabolic pairs along the ions' field. Pairs of fixed M = m - m' (0 and
//! 1, for the pi and sigma dipole) suffice; for M = 0 mirror images are joined. Sum rule: the C_k sum to
//! the unit matrix, `projectors_sum_to_one`.

use super::shell::{Pair, Shell, dipoles, pairs};
use crate::numerics::angular::clebsch_gordan;
use crate::physics::hydrogen::Line;
use nalgebra::DMatrix;

/// One block of the line space, of fixed M.
#[derive(Debug, Clone)]
pub struct Block {
    /// n q - n' q' of each pair.
    pub shifts: Vec<i32>,
    /// Dipole amplitude of each pair; squares sum to the block's share of the intensity.
    pub dipoles: Vec<f64>,
    /// One matrix per entry of [`LineSpace::values`], row by row, the value running fastest: C_k, or its share in
    /// the interpolation nodes.
    pub coefficients: Vec<f64>,
}

/// Nodes in ln k for the electrons' operator: l_k/k^2 runs so smoothly from impact (ln k) to static (k^(-1/2))
/// that a polynomial through eight is good to 0.5 % at worst (`interpolation_in_k_is_exact`), at a
/// quarter of the cost for high lines.
const NODE_COUNT: usize = 8;

/// The blocks of a line.
#[derive(Debug, Clone)]
pub struct LineSpace {
    /// Non-zero |n q - n' q'| at which the electrons' operator is needed, ascending: all there are, or
    /// [`NODE_COUNT`] between which it is interpolated.
    pub values: Vec<f64>,
    /// Blocks M = 0 and M = 1; the latter stands for -1 too.
    pub blocks: [Block; 2],
}

impl LineSpace {
    /// Builds the line space of a line.
    pub fn new(line: Line) -> Self {
        let (upper, lower) = (Shell::new(line.upper), Shell::new(line.lower));
        let largest = (line.upper + line.lower) as i32 - 2;
        let frames: Vec<Frame> = (0..=largest).map(|m| Frame::new(&upper, &lower, m)).collect();
        let mut values: Vec<i32> =
            frames.iter().flat_map(|frame| frame.pairs.iter().map(|pair| pair.shift.abs())).collect();
        values.sort_unstable();
        values.dedup();
        values.retain(|value| *value != 0);
        let projectors: Vec<DMatrix<f64>> = values.iter().map(|value| scalar_part(&frames, *value)).collect();
        let (values, averages) = onto_nodes(&values, projectors);
        let mut blocks = [0, 1].map(|m| block(&upper, &lower, &frames[m], &averages, m as i32));
        let strength = |block: &Block| block.dipoles.iter().map(|d| d * d).sum::<f64>();
        let total = strength(&blocks[0]) + 2.0 * strength(&blocks[1]);
        for (block, weight) in blocks.iter_mut().zip([1.0f64, 2.0]) {
            let scale = (weight / total).sqrt();
            block.dipoles.iter_mut().for_each(|d| *d *= scale);
        }
        LineSpace { values, blocks }
    }
}

/// Moves the matrices of many values onto few interpolation nodes, if there are more values.
fn onto_nodes(values: &[i32], projectors: Vec<DMatrix<f64>>) -> (Vec<f64>, Vec<DMatrix<f64>>) {
    let exact: Vec<f64> = values.iter().map(|value| f64::from(*value)).collect();
    if exact.len() <= NODE_COUNT {
        return (exact, projectors);
    }
    let nodes = chebyshev_nodes(exact[0], exact[exact.len() - 1]);
    let mut shared = vec![DMatrix::zeros(projectors[0].nrows(), projectors[0].ncols()); NODE_COUNT];
    for (value, projector) in exact.iter().zip(&projectors) {
        for (sum, weight) in shared.iter_mut().zip(node_weights(&nodes, *value)) {
            *sum += projector * weight;
        }
    }
    (nodes, shared)
}

fn chebyshev_nodes(from: f64, to: f64) -> Vec<f64> {
    let (middle, half) = (0.5 * (to.ln() + from.ln()), 0.5 * (to.ln() - from.ln()));
    (0..NODE_COUNT)
        .rev()
        .map(|i| {
            let angle = std::f64::consts::PI * (i as f64 + 0.5) / NODE_COUNT as f64;
            (middle + half * angle.cos()).exp()
        })
        .collect()
}

/// Weights with which l at the nodes makes l at a value: Lagrange in ln k of l/k^2.
fn node_weights(nodes: &[f64], value: f64) -> Vec<f64> {
    (0..nodes.len())
        .map(|i| {
            let lagrange: f64 = (0..nodes.len())
                .filter(|j| *j != i)
                .map(|j| (value / nodes[j]).ln() / (nodes[i] / nodes[j]).ln())
                .product();
            lagrange * (value / nodes[i]).powi(2)
        })
        .collect()
}

/// Pairs of one M and the transformation to coupled states.
struct Frame {
    pairs: Vec<Pair>,
    /// (L, l, l') of each row.
    coupled: Vec<(i32, i32, i32)>,
    transform: DMatrix<f64>,
}

impl Frame {
    fn new(upper: &Shell, lower: &Shell, m: i32) -> Self {
        let pairs = pairs(upper, lower, m);
        let mut coupled = Vec::new();
        for l in 0..upper.n as i32 {
            for l_low in 0..lower.n as i32 {
                for total in (l - l_low).abs().max(m)..=l + l_low {
                    coupled.push((total, l, l_low));
                }
            }
        }
        let transform = DMatrix::from_fn(coupled.len(), pairs.len(), |row, column| {
            let (total, l, l_low) = coupled[row];
            let Pair { upper: (m_up, i), lower: (m_low, j), .. } = pairs[column];
            if l < m_up.abs() || l_low < m_low.abs() {
                return 0.0;
            }
            let up = upper.by_m[m_up.unsigned_abs() as usize].amplitudes[((l - m_up.abs()) as usize, i)];
            let low =
                lower.by_m[m_low.unsigned_abs() as usize].amplitudes[((l_low - m_low.abs()) as usize, j)];
            // The lower state enters conjugated: |l' m'>* transforms as (-1)^(l'-m') |l' -m'>.
            let sign = if (l_low - m_low) % 2 == 0 { 1.0 } else { -1.0 };
            sign * clebsch_gordan(l, m_up, l_low, -m_low, total, m) * up * low
        });
        Frame { pairs, coupled, transform }
    }
}

/// Rotational average of the projector on pairs of one |n q - n' q'|, over the coupled states of M = 0.
fn scalar_part(frames: &[Frame], value: i32) -> DMatrix<f64> {
    let base = &frames[0].coupled;
    let mut average = DMatrix::zeros(base.len(), base.len());
    for (m, frame) in frames.iter().enumerate() {
        // M and -M give the same.
        let copies = if m == 0 { 1.0 } else { 2.0 };
        let place: Vec<usize> = frame
            .coupled
            .iter()
            .map(|state| base.iter().position(|other| other == state).unwrap_or(usize::MAX))
            .collect();
        for (a, state_a) in frame.coupled.iter().enumerate() {
            for (b, state_b) in frame.coupled.iter().enumerate() {
                if state_a.0 != state_b.0 {
                    continue;
                }
                let sum: f64 = (0..frame.pairs.len())
                    .filter(|p| frame.pairs[*p].shift.abs() == value)
                    .map(|p| frame.transform[(a, p)] * frame.transform[(b, p)])
                    .sum();
                average[(place[a], place[b])] += copies * sum / f64::from(2 * state_a.0 + 1);
            }
        }
    }
    average
}

fn block(upper: &Shell, lower: &Shell, frame: &Frame, averages: &[DMatrix<f64>], m: i32) -> Block {
    let amplitudes = dipoles(upper, lower, m, &frame.pairs);
    // Combinations of pairs that are kept: mirror images joined for M = 0, all as they are for M = 1.
    let kept: Vec<(usize, Option<usize>)> = (0..frame.pairs.len())
        .filter(|p| m != 0 || frame.pairs[*p].lower.0 >= 0)
        .map(|p| {
            let pair = frame.pairs[p];
            let mirror = (m == 0 && pair.lower.0 > 0).then(|| {
                frame.pairs.iter().position(|other| {
                    other.upper == (-pair.upper.0, pair.upper.1)
                        && other.lower == (-pair.lower.0, pair.lower.1)
                })
            });
            (p, mirror.flatten())
        })
        .collect();
    let size = kept.len();
    let transform = DMatrix::from_fn(frame.coupled.len(), size, |row, column| match kept[column] {
        (p, None) => frame.transform[(row, p)],
        (p, Some(q)) => (frame.transform[(row, p)] + frame.transform[(row, q)]) / 2f64.sqrt(),
    });
    // The averages are indexed by the coupled states of M = 0; states with L < M do not exist here.
    let base = coupled_base(upper, lower);
    let place: Vec<usize> = frame
        .coupled
        .iter()
        .map(|state| base.iter().position(|other| other == state).unwrap_or(usize::MAX))
        .collect();
    let mut coefficients = vec![0.0; size * size * averages.len()];
    for (k, average) in averages.iter().enumerate() {
        let own = DMatrix::from_fn(place.len(), place.len(), |a, b| average[(place[a], place[b])]);
        let turned = transform.transpose() * own * &transform;
        for row in 0..size {
            for column in 0..size {
                coefficients[(row * size + column) * averages.len() + k] = turned[(row, column)];
            }
        }
    }
    Block {
        shifts: kept.iter().map(|(p, _)| frame.pairs[*p].shift).collect(),
        dipoles: kept
            .iter()
            .map(|(p, mirror)| match mirror {
                None => amplitudes[*p],
                Some(q) => (amplitudes[*p] + amplitudes[*q]) / 2f64.sqrt(),
            })
            .collect(),
        coefficients,
    }
}

fn coupled_base(upper: &Shell, lower: &Shell) -> Vec<(i32, i32, i32)> {
    Frame::new(upper, lower, 0).coupled
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn projectors_sum_to_one() {
        for (lower, upper) in [(1, 2), (1, 4), (2, 3), (2, 6)] {
            let line = Line::new(lower, upper);
            let space = LineSpace::new(line);
            let (n, n_low) = (upper as usize, lower as usize);
            if lower == 2 {
                assert_eq!(space.blocks[0].shifts.len(), 3 * n - 1);
                assert_eq!(space.blocks[1].shifts.len(), 4 * n - 4);
            }
            // The rotational average of all projectors, the one of zero shift included, is one.
            let (up, low) = (Shell::new(upper), Shell::new(lower));
            let frames: Vec<Frame> = (0..(n + n_low - 1) as i32).map(|m| Frame::new(&up, &low, m)).collect();
            let mut all: DMatrix<f64> = scalar_part(&frames, 0);
            for value in 1..=((n + n_low - 2) * (n + n_low)) as i32 {
                all += scalar_part(&frames, value);
            }
            let size = all.nrows();
            assert!((all - DMatrix::<f64>::identity(size, size)).abs().max() < 1e-10);
            // The dipole has L = 1 only: coupling and phases agree with those of the shells.
            for m in [0usize, 1] {
                let d = dipoles(&up, &low, m as i32, &frames[m].pairs);
                let coupled = &frames[m].transform * nalgebra::DVector::from_vec(d);
                for (state, amplitude) in frames[m].coupled.iter().zip(coupled.iter()) {
                    assert!(state.0 == 1 || amplitude.abs() < 1e-9, "L {} amplitude {amplitude}", state.0);
                }
            }
        }
    }

    #[test]
    fn interpolation_in_k_is_exact() {
        use crate::physics::stark::electrons::Electrons;
        let nodes = chebyshev_nodes(1.0, 100.0);
        for (t, density) in [(5e3, 1e12), (1e4, 1e16), (1e5, 1e19)] {
            let electrons = Electrons::new(t, density);
            for detuning in [1e8, 1e11, 1e13, 1e14] {
                for value in [1.5, 7.0, 33.0, 88.0] {
                    let exact = electrons.operator_rad_s(1.5 * value, detuning);
                    let found: num_complex::Complex64 = nodes
                        .iter()
                        .zip(node_weights(&nodes, value))
                        .map(|(node, weight)| electrons.operator_rad_s(1.5 * node, detuning) * weight)
                        .sum();
                    let error = ((found - exact) / exact).norm();
                    assert!(error < 5e-3, "T {t} n_e {density} w {detuning} k {value}: {error}");
                }
            }
        }
    }
}
