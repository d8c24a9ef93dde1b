//! Quadrature: composite Gauss-Legendre panels over the `gauss-quad` rules.

use gauss_quad::GaussLegendre;
use std::num::NonZeroUsize;

/// Nodes of one panel; eight integrate a polynomial of degree 15 exactly.
const NODES_PER_PANEL: NonZeroUsize = NonZeroUsize::new(8).unwrap();

/// Nodes and weights of the Gauss-Legendre rule of a degree on [-1, 1].
pub fn gauss_legendre(degree: NonZeroUsize) -> Vec<(f64, f64)> {
    GaussLegendre::new(degree).as_node_weight_pairs().to_vec()
}

/// Nodes and weights of `count` equal panels with eight Gauss-Legendre nodes each over [from, to].
pub fn panels(from: f64, to: f64, count: usize) -> impl Iterator<Item = (f64, f64)> {
    let half = 0.5 * (to - from) / count as f64;
    let rule = gauss_legendre(NODES_PER_PANEL);
    (0..count).flat_map(move |panel| {
        let middle = from + half * (2 * panel + 1) as f64;
        rule.clone().into_iter().map(move |(node, weight)| (middle + half * node, half * weight))
    })
}
