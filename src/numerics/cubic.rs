//! Cubic interpolation: natural-slope splines on any nodes, and four-point Lagrange stencils.

/// A cubic spline through (x, y) with not-a-knot-like ends (end slopes from the end parabolas).
#[derive(Debug, Clone)]
pub struct Spline {
    x: Vec<f64>,
    y: Vec<f64>,
    second: Vec<f64>,
}

impl Spline {
    /// Fits a spline.
    ///
    /// # Panics
    /// If the slices differ in length, are shorter than 3 or x does not ascend.
    pub fn new(x: &[f64], y: &[f64]) -> Self {
        let n = x.len();
        assert!(n == y.len() && n >= 3 && x.windows(2).all(|w| w[0] < w[1]), "spline nodes must ascend");
        let slope_at = |a: usize, b: usize, c: usize| {
            let (ab, bc) = ((y[b] - y[a]) / (x[b] - x[a]), (y[c] - y[b]) / (x[c] - x[b]));
            ab - (bc - ab) / (x[c] - x[a]) * (x[b] - x[a])
        };
        let (first_slope, last_slope) = (slope_at(0, 1, 2), slope_at(n - 1, n - 2, n - 3));
        // Clamped spline, Thomas algorithm on the second derivatives.
        let (mut upper, mut second) = (vec![0.0; n], vec![0.0; n]);
        upper[0] = 0.5;
        let h0 = x[1] - x[0];
        second[0] = 3.0 / h0 * ((y[1] - y[0]) / h0 - first_slope);
        for i in 1..n - 1 {
            let (left, right) = (x[i] - x[i - 1], x[i + 1] - x[i]);
            let share = left / (left + right);
            let pivot = 2.0 + share * (-upper[i - 1]);
            let rhs = 6.0 * ((y[i + 1] - y[i]) / right - (y[i] - y[i - 1]) / left) / (left + right);
            upper[i] = (1.0 - share) / pivot;
            second[i] = (rhs - share * second[i - 1]) / pivot;
        }
        let h = x[n - 1] - x[n - 2];
        let rhs = 6.0 / h * (last_slope - (y[n - 1] - y[n - 2]) / h);
        second[n - 1] = (rhs - second[n - 2]) / (2.0 - upper[n - 2]);
        for i in (0..n - 1).rev() {
            second[i] -= upper[i] * second[i + 1];
        }
        Spline { x: x.to_vec(), y: y.to_vec(), second }
    }

    fn cell(&self, at: f64) -> usize {
        self.x.partition_point(|x| *x <= at).clamp(1, self.x.len() - 1) - 1
    }

    /// Value; outside the nodes the end cubic continues.
    pub fn value(&self, at: f64) -> f64 {
        let i = self.cell(at);
        let h = self.x[i + 1] - self.x[i];
        let b = (at - self.x[i]) / h;
        let a = 1.0 - b;
        a * self.y[i]
            + b * self.y[i + 1]
            + ((a * a * a - a) * self.second[i] + (b * b * b - b) * self.second[i + 1]) * h * h / 6.0
    }

    /// First derivative.
    pub fn slope(&self, at: f64) -> f64 {
        let i = self.cell(at);
        let h = self.x[i + 1] - self.x[i];
        let b = (at - self.x[i]) / h;
        let a = 1.0 - b;
        (self.y[i + 1] - self.y[i]) / h
            + ((3.0 * b * b - 1.0) * self.second[i + 1] - (3.0 * a * a - 1.0) * self.second[i]) * h / 6.0
    }

    /// Second derivative.
    pub fn second_derivative(&self, at: f64) -> f64 {
        let i = self.cell(at);
        let b = (at - self.x[i]) / (self.x[i + 1] - self.x[i]);
        (1.0 - b) * self.second[i] + b * self.second[i + 1]
    }
}

/// First node and weights of the four-point Lagrange interpolation at a position on ascending
/// nodes; fewer points where there are fewer nodes. Positions outside are moved to the end.
pub fn lagrange_stencil(nodes: &[f64], at: f64) -> (usize, [f64; 4]) {
    let at = at.clamp(nodes[0], nodes[nodes.len() - 1]);
    let size = nodes.len().min(4);
    let cell = nodes.partition_point(|x| *x <= at);
    let first = cell.saturating_sub(2).min(nodes.len() - size);
    let mut weights = [0.0; 4];
    for i in 0..size {
        weights[i] = (0..size)
            .filter(|j| *j != i)
            .map(|j| (at - nodes[first + j]) / (nodes[first + i] - nodes[first + j]))
            .product();
    }
    (first, weights)
}

/// Cubic interpolation (Catmull-Rom) of four equidistant values at fraction `t` between the second
/// and the third.
pub fn catmull_rom(values: [f64; 4], t: f64) -> f64 {
    let [a, b, c, d] = values;
    b + 0.5 * t * (c - a + t * (2.0 * a - 5.0 * b + 4.0 * c - d + t * (3.0 * (b - c) + d - a)))
}
