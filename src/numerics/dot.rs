//! The inner product, in the form that compilers turn into vector instructions.

/// Running sums kept side by side: a single one would chain every addition to the one before.
const LANES: usize = 8;

/// Sum of products of the entries that both slices have.
pub fn dot(a: &[f64], b: &[f64]) -> f64 {
    let count = a.len().min(b.len());
    let (a_lanes, a_rest) = a[..count].as_chunks::<LANES>();
    let (b_lanes, b_rest) = b[..count].as_chunks::<LANES>();
    let mut sums = [0.0; LANES];
    for (a, b) in a_lanes.iter().zip(b_lanes) {
        for lane in 0..LANES {
            sums[lane] += a[lane] * b[lane];
        }
    }
    let rest: f64 = a_rest.iter().zip(b_rest).map(|(a, b)| a * b).sum();
    sums.iter().sum::<f64>() + rest
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn verify_every_length_and_the_shorter_slice() {
        let values: Vec<f64> = (1..=40).map(f64::from).collect();
        for count in 0..=values.len() {
            let n = count as f64;
            let squares = n * (n + 1.0) * (2.0 * n + 1.0) / 6.0;
            assert_eq!(dot(&values[..count], &values), squares);
        }
    }
}
