//! One step in the cooling of a star: structure and heat flow of the core after a given time.
//!
//! In: a model and a time step. Out: the model after it. Implicit in time: the energy each shell gives up,
//! -T ds/dt less neutrinos, feeds the luminosity that conduction must carry. Relaxation after
//! Henyey, Forbes & Gould (1964, ApJ 139, 306): difference equations between mass shells for radius,
//! density, temperature and luminosity, linearised and eliminated block by block, with the integrated envelope
//! as the outer boundary (so radius and Teff are unknowns too). Convergence: corrections below 1e-6.
//! The heat of the envelope itself (outer 1 % of the mass) is not in this step's flow, only in the ages.

use std::f64::consts::PI;

use nalgebra::{Matrix4, SMatrix, Vector2, Vector4};

use super::cold::Gravity;
use super::core::{Core, CoreMaterial, Shell};
use super::matter::{MatterState, freezing_state};
use super::structure::{HydrogenLayer, StarModel, envelope_of};
use crate::physics::constants::{GRAVITATION_CGS, STEFAN_BOLTZMANN_CGS};

const DELTA: f64 = 1e-5;
const TOLERANCE: f64 = 1e-6;
const MOST_ITERATIONS: usize = 25;
/// Longest correction of a logarithm in one iteration.
const LONGEST: f64 = 0.15;

/// Unknowns of a shell: ln r, luminosity (in units of the star's), ln rho, ln T.
type Unknowns = Vector4<f64>;

/// Everything the difference equations need of one shell.
#[derive(Clone, Copy)]
struct Local {
    cubed_radius: f64,
    inverse_density: f64,
    ln_pressure: f64,
    ln_temperature: f64,
    luminosity: f64,
    /// d ln P / d(m^(2/3)).
    pressure_slope: f64,
    gradient: f64,
    /// Energy given up, erg/g/s over the luminosity unit.
    heat: f64,
}

/// The step being solved.
struct Step<'a> {
    material: &'a CoreMaterial,
    old: &'a [Shell],
    duration_s: f64,
    luminosity_unit: f64,
}

impl Step<'_> {
    fn state(&self, u: &Unknowns) -> MatterState {
        freezing_state(&self.material.composition, u[2].exp(), u[3].exp())
    }

    /// `state` must be that of the same unknowns.
    fn local(&self, shell: usize, u: &Unknowns, state: MatterState) -> Option<Local> {
        let old = &self.old[shell];
        let (r, rho, t) = (u[0].exp(), u[2].exp(), u[3].exp());
        let m = old.mass_g;
        let pull = Gravity::Einstein.factor(state.pressure_cgs, rho, state.energy_erg_g, r, m);
        let pressure_slope =
            -1.5 * m.cbrt() * GRAVITATION_CGS * m / (4.0 * PI * r.powi(4) * state.pressure_cgs) * pull;
        let opacity = self.material.ln_opacity(u[2], u[3])?.exp();
        let gradient = 3.0 * opacity * state.pressure_cgs * u[1] * self.luminosity_unit
            / (64.0 * PI * STEFAN_BOLTZMANN_CGS * GRAVITATION_CGS * m * t.powi(4) * pull);
        // Temperature in the middle of the step: T ds to second order.
        let released =
            0.5 * (t + old.matter.temperature_k) * (old.matter.entropy_erg_g_k - state.entropy_erg_g_k);
        let heat = released / self.duration_s - self.material.neutrinos_erg_g_s(rho, t);
        Some(Local {
            cubed_radius: r.powi(3),
            inverse_density: 1.0 / rho,
            ln_pressure: state.pressure_cgs.ln(),
            ln_temperature: u[3],
            luminosity: u[1],
            pressure_slope,
            gradient,
            heat: heat / self.luminosity_unit,
        })
    }

    /// The shell's quantities at its unknowns and at each unknown moved by [`DELTA`].
    fn locals(&self, shell: usize, u: &Unknowns) -> Option<[Local; 5]> {
        let state = self.state(u);
        let here = self.local(shell, u, state)?;
        let mut all = [here; 5];
        for k in 0..4 {
            let mut moved = *u;
            moved[k] += DELTA;
            // Radius and luminosity do not enter the equation of state.
            let state = if k < 2 { state } else { self.state(&moved) };
            all[k + 1] = self.local(shell, &moved, state)?;
        }
        Some(all)
    }

    /// Residuals of the four equations between neighbouring shells.
    fn between(&self, inner: usize, a: &Local, b: &Local) -> Vector4<f64> {
        let (m_a, m_b) = (self.old[inner].mass_g, self.old[inner + 1].mass_g);
        let dm = m_b - m_a;
        let dz = m_b.powf(2.0 / 3.0) - m_a.powf(2.0 / 3.0);
        let inverse_density = 0.5 * (a.inverse_density + b.inverse_density);
        Vector4::new(
            (b.cubed_radius - a.cubed_radius) * 4.0 * PI / (3.0 * dm * inverse_density) - 1.0,
            b.luminosity - a.luminosity - 0.5 * dm * (a.heat + b.heat),
            b.ln_pressure - a.ln_pressure - 0.5 * dz * (a.pressure_slope + b.pressure_slope),
            b.ln_temperature
                - a.ln_temperature
                - 0.5 * (a.gradient + b.gradient) * (b.ln_pressure - a.ln_pressure),
        )
    }

    /// Residuals of the two conditions at the innermost shell: a uniform ball.
    fn centre(&self, u: &Unknowns, local: &Local) -> Vector2<f64> {
        let m = self.old[0].mass_g;
        let ball = (3.0 * m / (4.0 * PI) * local.inverse_density).ln() / 3.0;
        Vector2::new(u[0] - ball, u[1] - m * local.heat)
    }
}

/// Base of an envelope: ln r, luminosity, ln P, ln T.
fn envelope_base(
    mass_msun: f64,
    surface: &Vector2<f64>,
    layer: HydrogenLayer,
    luminosity_unit: f64,
) -> Option<Vector4<f64>> {
    let points = envelope_of(mass_msun, surface[0], surface[1], layer)?;
    let base = points.last()?;
    let luminosity = super::envelope::luminosity_erg_s(surface[0].exp(), surface[1].exp());
    Some(Vector4::new(
        base.radius_cm.ln(),
        luminosity / luminosity_unit,
        base.ln_pressure,
        base.ln_temperature,
    ))
}

/// Evolves a star by a time step; `None` if the iteration fails (try a shorter step).
pub fn evolve(model: &StarModel, layer: HydrogenLayer, core: Core, duration_s: f64) -> Option<StarModel> {
    let material = CoreMaterial::shared(core)?;
    let step = Step { material, old: &model.core, duration_s, luminosity_unit: model.luminosity_erg_s };
    let last = model.core.len() - 1;
    let mut shells: Vec<Unknowns> = model
        .core
        .iter()
        .map(|s| {
            let flow = s.luminosity_erg_s / step.luminosity_unit;
            Vector4::new(s.radius_cm.ln(), flow, s.matter.density_g_cm3.ln(), s.matter.temperature_k.ln())
        })
        .collect();
    let mut surface = Vector2::new(model.radius_cm.ln(), model.teff_k.ln());
    let mut known_slopes = None;
    for iteration in 0..MOST_ITERATIONS {
        let base = |s: &Vector2<f64>| envelope_base(model.mass_msun, s, layer, step.luminosity_unit);
        let outer = base(&surface)?;
        // Envelopes are the dear part and nearly linear over a step: their slopes are taken once, and
        // again only where convergence is slow.
        let outer_slopes = match known_slopes {
            Some(slopes) if iteration % 6 != 0 => slopes,
            _ => [
                (base(&(surface + Vector2::new(DELTA, 0.0)))? - outer) / DELTA,
                (base(&(surface + Vector2::new(0.0, DELTA)))? - outer) / DELTA,
            ],
        };
        known_slopes = Some(outer_slopes);
        let locals: Vec<[Local; 5]> =
            shells.iter().enumerate().map(|(i, u)| step.locals(i, u)).collect::<Option<_>>()?;

        // Corrections of (ln r, L) of each shell as an affine function of those of (ln rho, ln T):
        // rows of `relation`: (constant, by ln rho, by ln T).
        let mut relation = {
            let here = step.centre(&shells[0], &locals[0][0]);
            let mut slopes = SMatrix::<f64, 2, 4>::zeros();
            for k in 0..4 {
                let mut moved = shells[0];
                moved[k] += DELTA;
                slopes.set_column(k, &((step.centre(&moved, &locals[0][k + 1]) - here) / DELTA));
            }
            // d(residual)/d(ln r, L) is solved for; the residual must vanish.
            let own = slopes.fixed_columns::<2>(0).into_owned().lu();
            let mut right = SMatrix::<f64, 2, 3>::zeros();
            right.set_column(0, &-here);
            right.set_column(1, &(-slopes.column(2)));
            right.set_column(2, &(-slopes.column(3)));
            own.solve(&right)?
        };
        // For the way back: corrections of (ln rho, ln T) of each shell from those of the next.
        let mut back: Vec<SMatrix<f64, 2, 3>> = Vec::with_capacity(last);
        let mut relations = vec![relation];
        for inner in 0..last {
            let (a, b) = (&locals[inner], &locals[inner + 1]);
            let here = step.between(inner, &a[0], &b[0]);
            let column = |f: Vector4<f64>| (f - here) / DELTA;
            let by_a: [Vector4<f64>; 4] =
                std::array::from_fn(|k| column(step.between(inner, &a[k + 1], &b[0])));
            let by_b: [Vector4<f64>; 4] =
                std::array::from_fn(|k| column(step.between(inner, &a[0], &b[k + 1])));
            let replaced = |k: usize| by_a[0] * relation[(0, k)] + by_a[1] * relation[(1, k)];
            let left =
                Matrix4::from_columns(&[by_a[2] + replaced(1), by_a[3] + replaced(2), by_b[0], by_b[1]]);
            let mut right = SMatrix::<f64, 4, 3>::zeros();
            right.set_column(0, &-(here + replaced(0)));
            right.set_column(1, &-by_b[2]);
            right.set_column(2, &-by_b[3]);
            let solved = left.lu().solve(&right)?;
            back.push(solved.fixed_rows::<2>(0).into_owned());
            relation = solved.fixed_rows::<2>(2).into_owned();
            relations.push(relation);
        }
        // Outer boundary: the last shell equals the envelope's base.
        let top = &locals[last];
        let value = |l: &Local, u: &Unknowns| Vector4::new(u[0], u[1], l.ln_pressure, l.ln_temperature);
        let here = value(&top[0], &shells[last]);
        let by: [Vector4<f64>; 4] = std::array::from_fn(|k| {
            let mut moved = shells[last];
            moved[k] += DELTA;
            (value(&top[k + 1], &moved) - here) / DELTA
        });
        let replaced = |k: usize| by[0] * relation[(0, k)] + by[1] * relation[(1, k)];
        let left = Matrix4::from_columns(&[
            by[2] + replaced(1),
            by[3] + replaced(2),
            -outer_slopes[0],
            -outer_slopes[1],
        ]);
        let solved = left.lu().solve(&(outer - here - replaced(0)))?;

        let mut corrections = vec![Vector4::zeros(); last + 1];
        let mut thermal = Vector2::new(solved[0], solved[1]);
        let affine = |m: &SMatrix<f64, 2, 3>, v: &Vector2<f64>| {
            Vector2::new(
                m[(0, 0)] + m[(0, 1)] * v[0] + m[(0, 2)] * v[1],
                m[(1, 0)] + m[(1, 1)] * v[0] + m[(1, 2)] * v[1],
            )
        };
        for shell in (0..=last).rev() {
            if shell < last {
                thermal = affine(&back[shell], &thermal);
            }
            let mechanical = affine(&relations[shell], &thermal);
            corrections[shell] = Vector4::new(mechanical[0], mechanical[1], thermal[0], thermal[1]);
        }

        let size = corrections
            .iter()
            .flat_map(|c| [c[0].abs(), c[2].abs(), c[3].abs()])
            .chain([solved[2].abs(), solved[3].abs()])
            .fold(0.0, f64::max);
        if !size.is_finite() {
            return None;
        }
        let damping = (LONGEST / size).min(1.0);
        for (u, c) in shells.iter_mut().zip(&corrections) {
            *u += c * damping;
        }
        surface += Vector2::new(solved[2], solved[3]) * damping;
        if size < TOLERANCE {
            return finish(model, layer, material, &step, &shells, &surface);
        }
    }
    None
}

fn finish(
    model: &StarModel,
    layer: HydrogenLayer,
    material: &CoreMaterial,
    step: &Step,
    shells: &[Unknowns],
    surface: &Vector2<f64>,
) -> Option<StarModel> {
    let core = shells
        .iter()
        .zip(&model.core)
        .map(|(u, old)| Shell {
            mass_g: old.mass_g,
            radius_cm: u[0].exp(),
            luminosity_erg_s: u[1] * step.luminosity_unit,
            matter: step.state(u),
        })
        .collect();
    let envelope = envelope_of(model.mass_msun, surface[0], surface[1], layer)?;
    StarModel::assemble(model.mass_msun, surface[1].exp(), surface[0].exp(), core, envelope, material)
}
