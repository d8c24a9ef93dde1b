//! The grid of emergent spectra: what it holds, and its interpolation.
//!
//! Surface fluxes of every node as natural logarithms, interpolated by cubic Hermite polynomials in
//! ln Teff and log g whose node slopes come from the parabola through three neighbours
//! (Catmull-Rom on uneven nodes): continuous first derivatives, exact for quadratics, 16 nodes per
//! point. Nothing is ever extrapolated. Measured accuracy: `grid check` prints the leave-one-out
//! error per line.

use std::ops::Range;

use ndarray::Array3;

/// How one node converged.
#[derive(Debug, Clone, PartialEq)]
pub struct NodeRecord {
    /// Effective temperature, K.
    pub teff_k: f64,
    /// log10 of gravity in cm s^-2.
    pub log_g: f64,
    /// Newton iterations of the atmosphere.
    pub iterations: u32,
    /// Largest relative departure of the total flux from sigma Teff^4 at any depth.
    pub flux_error_max: f64,
    /// The same at the surface.
    pub flux_error_surface: f64,
    /// Last largest relative temperature change.
    pub temperature_change: f64,
    /// Largest fraction of the flux that convection carries.
    pub convective_flux_max_fraction: f64,
}

/// Where a grid comes from.
#[derive(Debug, Clone, PartialEq)]
pub struct GridHeader {
    /// Version of the file layout.
    pub format_version: u32,
    /// Version of the physics that made the fluxes.
    pub physics_version: u32,
    /// The exact physics, as FITS keyword and value.
    pub physics: Vec<(String, String)>,
    /// Version of the program that made it.
    pub program_version: String,
    /// When it was made, UTC, ISO 8601.
    pub built_at: String,
    /// blake3 hash of axes, fluxes and node records, hexadecimal.
    pub blake3: String,
}

/// Emergent spectra on nodes of effective temperature and gravity.
#[derive(Debug, Clone)]
pub struct FluxGrid {
    /// Effective temperatures of the nodes, K, ascending.
    pub teff_k: Vec<f64>,
    /// log10 gravities of the nodes (cm s^-2), ascending.
    pub log_g: Vec<f64>,
    /// Vacuum wavelengths of the fine spectra, A, ascending.
    pub wave_vac_aa: Vec<f64>,
    /// ln of surface flux F_lambda, erg s^-1 cm^-2 A^-1; axes Teff, log g, wavelength.
    pub ln_flux: Array3<f32>,
    /// Vacuum wavelengths of the energy distributions, A, ascending.
    pub sed_wave_vac_aa: Vec<f64>,
    /// ln of surface flux on `sed_wave_vac_aa`; axes Teff, log g, wavelength.
    pub ln_sed: Array3<f32>,
    /// Convergence of every node, log g running fastest.
    pub nodes: Vec<NodeRecord>,
    /// Where it comes from.
    pub header: GridHeader,
}

/// Parameters outside the grid.
#[derive(Debug, Clone, Copy, PartialEq, thiserror::Error)]
#[error(
    "cannot interpolate at Teff {teff_k} K, log g {log_g}: the grid spans {teff_first_k} - {teff_last_k} K and log g \
     {log_g_first} - {log_g_last}"
)]
pub struct OutsideGrid {
    /// Effective temperature asked for, K.
    pub teff_k: f64,
    /// log10 gravity asked for.
    pub log_g: f64,
    /// Coolest node, K.
    pub teff_first_k: f64,
    /// Hottest node, K.
    pub teff_last_k: f64,
    /// Lowest gravity node.
    pub log_g_first: f64,
    /// Highest gravity node.
    pub log_g_last: f64,
}

/// The nodes and weights of one interpolation, for values and for both derivatives.
#[derive(Debug, Clone, Copy)]
pub struct Stencil {
    teff: AxisStencil,
    log_g: AxisStencil,
    teff_k: f64,
}

#[derive(Debug, Clone, Copy)]
struct AxisStencil {
    first: usize,
    count: usize,
    weight: [f64; 4],
    slope: [f64; 4],
}

impl FluxGrid {
    /// Range of effective temperatures, K.
    pub fn teff_range_k(&self) -> (f64, f64) {
        (self.teff_k[0], self.teff_k[self.teff_k.len() - 1])
    }

    /// Range of log10 gravities.
    pub fn log_g_range(&self) -> (f64, f64) {
        (self.log_g[0], self.log_g[self.log_g.len() - 1])
    }

    /// Nodes and weights of a point.
    ///
    /// # Errors
    /// [`OutsideGrid`] for points outside the nodes, or not finite.
    pub fn stencil(&self, teff_k: f64, log_g: f64) -> Result<Stencil, OutsideGrid> {
        Stencil::new(&self.teff_k, &self.log_g, teff_k, log_g).ok_or_else(|| {
            let (teff_first_k, teff_last_k) = self.teff_range_k();
            let (log_g_first, log_g_last) = self.log_g_range();
            OutsideGrid { teff_k, log_g, teff_first_k, teff_last_k, log_g_first, log_g_last }
        })
    }

    /// Surface flux on a range of the fine wavelengths, erg s^-1 cm^-2 A^-1.
    ///
    /// # Panics
    /// If `flux` is not as long as the range.
    pub fn interpolate(&self, stencil: &Stencil, range: Range<usize>, flux: &mut [f64]) {
        interpolate_ln(&self.ln_flux, stencil, range, flux);
        flux.iter_mut().for_each(|value| *value = value.exp());
    }

    /// Surface flux and its derivatives with Teff (per K) and log g on a range of the fine
    /// wavelengths.
    ///
    /// # Panics
    /// If the outputs are not as long as the range.
    pub fn interpolate_with_slopes(
        &self,
        stencil: &Stencil,
        range: Range<usize>,
        flux: &mut [f64],
        per_kelvin: &mut [f64],
        per_log_g: &mut [f64],
    ) {
        for output in [&mut *flux, &mut *per_kelvin, &mut *per_log_g] {
            assert_eq!(output.len(), range.len(), "outputs must fit the range");
            output.fill(0.0);
        }
        for (i, j, weight, slope_teff, slope_log_g) in stencil.terms() {
            let row = self.ln_flux.slice(ndarray::s![i, j, range.clone()]);
            // Rows of a standard-layout array are contiguous.
            for (k, value) in row.as_slice().unwrap_or_default().iter().enumerate() {
                let value = f64::from(*value);
                flux[k] += weight * value;
                per_kelvin[k] += slope_teff * value;
                per_log_g[k] += slope_log_g * value;
            }
        }
        for ((value, kelvin), gravity) in flux.iter_mut().zip(per_kelvin).zip(per_log_g) {
            *value = value.exp();
            *kelvin *= *value / stencil.teff_k;
            *gravity *= *value;
        }
    }

    /// Surface flux of the energy distribution, erg s^-1 cm^-2 A^-1, on all its wavelengths.
    pub fn interpolate_sed(&self, stencil: &Stencil) -> Vec<f64> {
        let mut flux = vec![0.0; self.sed_wave_vac_aa.len()];
        interpolate_ln(&self.ln_sed, stencil, 0..self.sed_wave_vac_aa.len(), &mut flux);
        flux.iter_mut().for_each(|value| *value = value.exp());
        flux
    }
}

fn interpolate_ln(values: &Array3<f32>, stencil: &Stencil, range: Range<usize>, output: &mut [f64]) {
    assert_eq!(output.len(), range.len(), "output must fit the range");
    output.fill(0.0);
    for (i, j, weight, ..) in stencil.terms() {
        let row = values.slice(ndarray::s![i, j, range.clone()]);
        for (sum, value) in output.iter_mut().zip(row.as_slice().unwrap_or_default()) {
            *sum += weight * f64::from(*value);
        }
    }
}

impl Stencil {
    /// Nodes and weights of a point between ascending nodes; `None` outside, or if not finite.
    pub(super) fn new(teffs_k: &[f64], log_gs: &[f64], teff_k: f64, log_g: f64) -> Option<Self> {
        let holds = |nodes: &[f64], at: f64| (nodes[0]..=nodes[nodes.len() - 1]).contains(&at);
        (holds(teffs_k, teff_k) && holds(log_gs, log_g)).then(|| Stencil {
            teff: AxisStencil::new(teffs_k, teff_k, f64::ln),
            log_g: AxisStencil::new(log_gs, log_g, |value| value),
            teff_k,
        })
    }

    /// Node indices with the weight of the value, of d/d ln Teff and of d/d log g.
    pub(super) fn terms(&self) -> impl Iterator<Item = (usize, usize, f64, f64, f64)> + '_ {
        let (t, g) = (&self.teff, &self.log_g);
        (0..t.count).flat_map(move |a| {
            (0..g.count).map(move |b| {
                let node = (t.first + a, g.first + b);
                let value = t.weight[a] * g.weight[b];
                (node.0, node.1, value, t.slope[a] * g.weight[b], t.weight[a] * g.slope[b])
            })
        })
    }
}

impl AxisStencil {
    fn new(nodes: &[f64], at: f64, scale: impl Fn(f64) -> f64) -> Self {
        let cell = nodes.partition_point(|node| *node <= at).clamp(1, nodes.len() - 1) - 1;
        let first = cell.saturating_sub(1);
        let count = (cell + 3).min(nodes.len()) - first;
        let x: Vec<f64> = nodes[first..first + count].iter().map(|node| scale(*node)).collect();
        let at = scale(at);
        let here = cell - first;
        let width = x[here + 1] - x[here];
        let t = (at - x[here]) / width;
        let (t2, t3) = (t * t, t * t * t);
        let mut weight = [0.0; 4];
        let mut slope = [0.0; 4];
        // Hermite basis: values at both ends ...
        weight[here] = 2.0 * t3 - 3.0 * t2 + 1.0;
        weight[here + 1] = -2.0 * t3 + 3.0 * t2;
        slope[here] = (6.0 * t2 - 6.0 * t) / width;
        slope[here + 1] = -slope[here];
        // ... and slopes, each a combination of three node values.
        let ends =
            [(here, t3 - 2.0 * t2 + t, 3.0 * t2 - 4.0 * t + 1.0), (here + 1, t3 - t2, 3.0 * t2 - 2.0 * t)];
        for (node, basis, basis_slope) in ends {
            for (index, share) in parabola_slope(&x, node) {
                weight[index] += basis * width * share;
                slope[index] += basis_slope * share;
            }
        }
        AxisStencil { first, count, weight, slope }
    }
}

/// Derivative at a node of the parabola through it and its neighbours (through the three nearest
/// nodes at an end), as weights of node values.
fn parabola_slope(x: &[f64], node: usize) -> [(usize, f64); 3] {
    if x.len() == 2 {
        let inverse = 1.0 / (x[1] - x[0]);
        return [(0, -inverse), (1, inverse), (0, 0.0)];
    }
    let middle = node.clamp(1, x.len() - 2);
    let (a, b, c) = (middle - 1, middle, middle + 1);
    let at = x[node];
    [
        (a, (2.0 * at - x[b] - x[c]) / ((x[a] - x[b]) * (x[a] - x[c]))),
        (b, (2.0 * at - x[a] - x[c]) / ((x[b] - x[a]) * (x[b] - x[c]))),
        (c, (2.0 * at - x[a] - x[b]) / ((x[c] - x[a]) * (x[c] - x[b]))),
    ]
}

/// How well one node's normalised profile is reproduced from its neighbours.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct LeftOut {
    /// Effective temperature of the node, K.
    pub teff_k: f64,
    /// log10 gravity of the node.
    pub log_g: f64,
    /// Root mean square difference, in units of the continuum.
    pub rms: f64,
}

impl FluxGrid {
    /// Leaves out every interior node in turn, interpolates it from the others along each axis, and
    /// compares profiles over a wavelength range (vacuum A), both divided by the line through their
    /// ends; the worse of the two axes counts. Twice the node spacing makes this an upper limit.
    pub fn leave_one_out(&self, range_vac_aa: (f64, f64)) -> Vec<LeftOut> {
        let first = self.wave_vac_aa.partition_point(|wave| *wave < range_vac_aa.0);
        let end = self.wave_vac_aa.partition_point(|wave| *wave < range_vac_aa.1);
        let waves = &self.wave_vac_aa[first..end];
        let profile = |terms: &[(usize, usize, f64)]| {
            let mut sums = vec![0.0; waves.len()];
            for (i, j, weight) in terms {
                let row = self.ln_flux.slice(ndarray::s![*i, *j, first..end]);
                sums.iter_mut().zip(row).for_each(|(sum, value)| *sum += weight * f64::from(*value));
            }
            sums.iter_mut().for_each(|sum| *sum = sum.exp());
            divide_by_chord(waves, &mut sums);
            sums
        };
        let without = |axis: &[f64], left_out: usize, scale: fn(f64) -> f64| -> Vec<(usize, f64)> {
            let others: Vec<f64> = (0..axis.len()).filter(|i| *i != left_out).map(|i| axis[i]).collect();
            let stencil = AxisStencil::new(&others, axis[left_out], scale);
            let original = |i: usize| if i < left_out { i } else { i + 1 };
            (0..stencil.count).map(|k| (original(stencil.first + k), stencil.weight[k])).collect()
        };
        let mut errors = Vec::new();
        for i in 1..self.teff_k.len() - 1 {
            for j in 1..self.log_g.len() - 1 {
                let exact = profile(&[(i, j, 1.0)]);
                let rms = |terms: Vec<(usize, usize, f64)>| {
                    let squares: f64 = profile(&terms).iter().zip(&exact).map(|(a, b)| (a - b).powi(2)).sum();
                    (squares / waves.len() as f64).sqrt()
                };
                let along_teff = without(&self.teff_k, i, f64::ln);
                let along_log_g = without(&self.log_g, j, |value| value);
                let rms = rms(along_teff.iter().map(|(a, weight)| (*a, j, *weight)).collect())
                    .max(rms(along_log_g.iter().map(|(b, weight)| (i, *b, *weight)).collect()));
                errors.push(LeftOut { teff_k: self.teff_k[i], log_g: self.log_g[j], rms });
            }
        }
        errors
    }
}

fn divide_by_chord(waves: &[f64], flux: &mut [f64]) {
    let last = flux.len() - 1;
    let (blue, red) = (flux[0], flux[last]);
    let slope = (red - blue) / (waves[last] - waves[0]);
    for (value, wave) in flux.iter_mut().zip(waves) {
        *value /= blue + slope * (wave - waves[0]);
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn verify_stencil_is_exact_for_quadratics() {
        let nodes = [1.0, 1.5, 2.5, 4.0, 4.5, 7.0];
        let quadratic = |x: f64| 3.0 - 2.0 * x + 0.7 * x * x;
        for at in [1.0, 1.2, 1.5, 2.0, 3.3, 4.2, 5.0, 6.9, 7.0] {
            let stencil = AxisStencil::new(&nodes, at, |x| x);
            let combine = |weights: &[f64; 4]| {
                (0..stencil.count).map(|i| weights[i] * quadratic(nodes[stencil.first + i])).sum::<f64>()
            };
            assert!((combine(&stencil.weight) - quadratic(at)).abs() < 1e-12, "value at {at}");
            assert!((combine(&stencil.slope) - (1.4 * at - 2.0)).abs() < 1e-12, "slope at {at}");
        }
    }

    #[test]
    fn verify_slopes_are_continuous_across_nodes() {
        let nodes = [1.0, 1.5, 2.5, 4.0, 4.5, 7.0];
        let values = [0.0, 1.0, -1.0, 2.0, 0.5, 3.0];
        let slope = |at: f64| {
            let stencil = AxisStencil::new(&nodes, at, |x| x);
            (0..stencil.count).map(|i| stencil.slope[i] * values[stencil.first + i]).sum::<f64>()
        };
        for node in &nodes[1..5] {
            assert!((slope(node - 1e-9) - slope(node + 1e-9)).abs() < 1e-6);
        }
    }
}
