//! Radiative transfer at one frequency in a plane-parallel atmosphere.
//!
//! Two solvers share one optical-depth scale. The *formal* one (Feautrier 1964) follows rays at
//! three Gauss angles and yields the Eddington factors; the *moment* one solves for the mean
//! intensity with those factors and coherent scattering, exactly and in one tridiagonal sweep
//! (variable Eddington factors, Auer & Mihalas 1970, MNRAS 149, 65). The moment equations are
//! differenced so that the flux at the interval midpoints is conserved to rounding where the
//! absorbed and emitted energies balance, which is what the temperature correction relies on.

/// Gauss-Legendre points on (0, 1): direction cosines and weights (Abramowitz & Stegun 1964, table
/// 25.4, n = 3, mapped from (-1, 1)).
const ANGLES: [(f64, f64); 3] =
    [(0.112_701_665_379_258_3, 5.0 / 18.0), (0.5, 8.0 / 18.0), (0.887_298_334_620_741_7, 5.0 / 18.0)];

/// Radiation field of one frequency at all depths, top first; every slice has the same length.
#[derive(Debug, Clone)]
pub struct Field {
    /// Mean intensity.
    pub mean_intensity: Vec<f64>,
    /// Variable Eddington factor K / J.
    pub eddington: Vec<f64>,
    /// H / J at the surface.
    pub surface_ratio: f64,
    /// (integral of mu u) / (integral of u) at the bottom.
    pub bottom_ratio: f64,
}

/// One frequency's run of opacity and emission with depth.
#[derive(Debug, Clone, Copy)]
pub struct Medium<'a> {
    /// Optical depth between neighbouring points; one shorter than the others.
    pub interval: &'a [f64],
    /// True absorption over extinction.
    pub thermal_fraction: &'a [f64],
    /// Planck function.
    pub planck: &'a [f64],
}

impl Medium<'_> {
    /// Slope of the Planck function with optical depth at the bottom.
    pub fn bottom_slope(&self) -> f64 {
        let last = self.planck.len() - 1;
        (self.planck[last] - self.planck[last - 1]) / self.interval[last - 1]
    }
}

/// Scratch space, so that no frequency allocates.
#[derive(Debug, Clone)]
pub struct Scratch {
    source: Vec<f64>,
    lower: Vec<f64>,
    diagonal: Vec<f64>,
    upper: Vec<f64>,
    solution: Vec<f64>,
    mean: Vec<f64>,
    second: Vec<f64>,
}

impl Scratch {
    /// Space for a given number of depths.
    pub fn new(depths: usize) -> Self {
        let zeros = || vec![0.0; depths];
        Scratch {
            source: zeros(),
            lower: zeros(),
            diagonal: zeros(),
            upper: zeros(),
            solution: zeros(),
            mean: zeros(),
            second: zeros(),
        }
    }
}

impl Field {
    /// Start: isotropic radiation in balance with the gas.
    pub fn isotropic(planck: &[f64]) -> Self {
        Field {
            mean_intensity: planck.to_vec(),
            eddington: vec![1.0 / 3.0; planck.len()],
            surface_ratio: 0.5,
            bottom_ratio: 0.5,
        }
    }

    /// Solves the moment equations and renews the Eddington factors, in turn, until the mean
    /// intensity moves by less than `tolerance` (relative) or the rounds are used up.
    pub fn solve(&mut self, medium: Medium<'_>, rounds: usize, tolerance: f64, scratch: &mut Scratch) {
        for _ in 0..rounds {
            self.solve_formal(medium, scratch);
            if self.solve_moments(medium, scratch) < tolerance {
                return;
            }
        }
    }

    /// Flux at the surface, in units of the mean intensity (first moment H).
    pub fn surface_flux(&self) -> f64 {
        self.surface_ratio * self.mean_intensity[0]
    }

    /// Tridiagonal system of the moment equations: (lower, diagonal, upper) of row i, all terms on
    /// the left, such that row(J) + emission = 0.
    pub fn moment_row(&self, medium: Medium<'_>, i: usize) -> (f64, f64, f64) {
        let last = self.eddington.len() - 1;
        let (mut lower, mut upper) = (0.0, 0.0);
        let mut diagonal = -cell_depth(medium.interval, i) * medium.thermal_fraction[i];
        if i > 0 {
            lower = self.eddington[i - 1] / medium.interval[i - 1];
            diagonal -= self.eddington[i] / medium.interval[i - 1];
        } else {
            diagonal -= self.surface_ratio;
        }
        if i < last {
            upper = self.eddington[i + 1] / medium.interval[i];
            diagonal -= self.eddington[i] / medium.interval[i];
        } else {
            diagonal -= self.bottom_ratio;
        }
        (lower, diagonal, upper)
    }

    /// Returns the largest relative change of the mean intensity.
    fn solve_moments(&mut self, medium: Medium<'_>, scratch: &mut Scratch) -> f64 {
        let depths = self.eddington.len();
        for i in 0..depths {
            let (lower, diagonal, upper) = self.moment_row(medium, i);
            scratch.lower[i] = lower;
            scratch.diagonal[i] = diagonal;
            scratch.upper[i] = upper;
            let thermal = cell_depth(medium.interval, i) * medium.thermal_fraction[i] * medium.planck[i];
            scratch.solution[i] = -thermal;
        }
        scratch.solution[depths - 1] -= medium.planck[depths - 1] / 2.0 + medium.bottom_slope() / 3.0;
        solve_tridiagonal(&scratch.lower, &mut scratch.diagonal, &scratch.upper, &mut scratch.solution);
        let mut change = 0.0_f64;
        for (old, new) in self.mean_intensity.iter_mut().zip(&scratch.solution) {
            change = change.max((new / *old - 1.0).abs());
            *old = *new;
        }
        change
    }

    fn solve_formal(&mut self, medium: Medium<'_>, scratch: &mut Scratch) {
        let depths = self.eddington.len();
        let last = depths - 1;
        for i in 0..depths {
            let thermal = medium.thermal_fraction[i];
            scratch.source[i] = thermal * medium.planck[i] + (1.0 - thermal) * self.mean_intensity[i];
        }
        scratch.mean.fill(0.0);
        scratch.second.fill(0.0);
        let (mut surface_flux, mut bottom_flux) = (0.0, 0.0);
        for (mu, weight) in ANGLES {
            for i in 0..depths {
                let cell = cell_depth(medium.interval, i) / mu;
                let above = if i > 0 { mu / medium.interval[i - 1] } else { 0.0 };
                let below = if i < last { mu / medium.interval[i] } else { 0.0 };
                let boundary = f64::from(u8::from(i == 0)) + f64::from(u8::from(i == last));
                scratch.lower[i] = above;
                scratch.upper[i] = below;
                scratch.diagonal[i] = -(above + below + cell + boundary);
                scratch.solution[i] = -cell * scratch.source[i];
            }
            scratch.solution[last] -= medium.planck[last] + mu * medium.bottom_slope();
            solve_tridiagonal(&scratch.lower, &mut scratch.diagonal, &scratch.upper, &mut scratch.solution);
            for i in 0..depths {
                scratch.mean[i] += weight * scratch.solution[i];
                scratch.second[i] += weight * mu * mu * scratch.solution[i];
            }
            surface_flux += weight * mu * scratch.solution[0];
            bottom_flux += weight * mu * scratch.solution[last];
        }
        for i in 0..depths {
            self.eddington[i] = scratch.second[i] / scratch.mean[i];
        }
        self.surface_ratio = surface_flux / scratch.mean[0];
        self.bottom_ratio = bottom_flux / scratch.mean[last];
    }
}

/// Optical depth that belongs to point i: half of each neighbouring interval.
pub fn cell_depth(interval: &[f64], i: usize) -> f64 {
    let above = if i > 0 { interval[i - 1] } else { 0.0 };
    let below = interval.get(i).copied().unwrap_or(0.0);
    0.5 * (above + below)
}

/// Thomas algorithm; the solution replaces the right-hand side, the diagonal is used up.
fn solve_tridiagonal(lower: &[f64], diagonal: &mut [f64], upper: &[f64], rhs: &mut [f64]) {
    let last = rhs.len() - 1;
    for i in 1..=last {
        let factor = lower[i] / diagonal[i - 1];
        diagonal[i] -= factor * upper[i - 1];
        rhs[i] -= factor * rhs[i - 1];
    }
    rhs[last] /= diagonal[last];
    for i in (0..last).rev() {
        rhs[i] = (rhs[i] - upper[i] * rhs[i + 1]) / diagonal[i];
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Optical depths 0, then logarithmic from 1e-5 to 1e3, and the intervals between them.
    fn scale() -> (Vec<f64>, Vec<f64>) {
        let depth: Vec<f64> =
            std::iter::once(0.0).chain((0..200).map(|i| 1e-5 * 1e8_f64.powf(f64::from(i) / 199.0))).collect();
        let interval = depth.windows(2).map(|pair| pair[1] - pair[0]).collect();
        (depth, interval)
    }

    fn solve(interval: &[f64], thermal_fraction: &[f64], planck: &[f64]) -> Field {
        let mut field = Field::isotropic(planck);
        let medium = Medium { interval, thermal_fraction, planck };
        field.solve(medium, 200, 1e-12, &mut Scratch::new(planck.len()));
        field
    }

    /// Milne's problem (conservative grey scattering): J / (3 H) - tau is Hopf's function, with
    /// q(0) = 1/sqrt(3) and q(infinity) = 0.710446 exactly (Hopf 1934; Chandrasekhar 1950,
    /// Radiative Transfer, sect. 24). Three angles reach it to 0.6 %.
    #[test]
    fn validate_milne_problem() {
        let (depth, interval) = scale();
        let last = depth.len() - 1;
        // A boundary source on the diffusion line drives unit flux through the scattering layer.
        let planck: Vec<f64> = depth.iter().map(|tau| 3.0 * (tau + 0.710_446)).collect();
        let mut thermal_fraction = vec![0.0; depth.len()];
        thermal_fraction[last] = 1.0;
        let field = solve(&interval, &thermal_fraction, &planck);
        let flux = field.surface_flux();
        for i in 0..last {
            let below = field.eddington[i + 1] * field.mean_intensity[i + 1];
            let here = field.eddington[i] * field.mean_intensity[i];
            assert!(((below - here) / interval[i] / flux - 1.0).abs() < 1e-6, "flux at {}", depth[i]);
        }
        let hopf = |i: usize| field.mean_intensity[i] / (3.0 * flux) - depth[i];
        assert!((hopf(0) / (1.0 / 3.0_f64.sqrt()) - 1.0).abs() < 6e-3, "q(0) = {}", hopf(0));
        let deep = depth.partition_point(|tau| *tau < 10.0);
        assert!((hopf(deep) / 0.710_446 - 1.0).abs() < 6e-3, "q(inf) = {}", hopf(deep));
        assert!((field.eddington[deep] - 1.0 / 3.0).abs() < 1e-4);
    }

    /// Pure absorption with a source linear in optical depth, S = a + b tau: the emergent flux is
    /// H = a/4 + b/6 exactly (Mihalas 1978, eq. 2-60, Eddington-Barbier).
    #[test]
    fn validate_linear_source() {
        let (depth, interval) = scale();
        let planck: Vec<f64> = depth.iter().map(|tau| 2.0 + 3.0 * tau).collect();
        let field = solve(&interval, &vec![1.0; depth.len()], &planck);
        let exact = 2.0 / 4.0 + 3.0 / 6.0;
        assert!((field.surface_flux() / exact - 1.0).abs() < 2e-3, "H = {}", field.surface_flux());
    }

    /// An isothermal slab deeper than light can cross is a black body: J = B inside.
    #[test]
    fn verify_isothermal_interior() {
        let (depth, interval) = scale();
        let field = solve(&interval, &vec![1.0; depth.len()], &vec![1.0; depth.len()]);
        let deep = depth.partition_point(|tau| *tau < 30.0);
        assert!((field.mean_intensity[deep] - 1.0).abs() < 1e-6);
    }
}
