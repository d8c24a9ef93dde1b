//! Inject and recover on the toy grid: bias, pulls, coverage, invariance, refusals.

use std::sync::OnceLock;

use emberline::fit::line_spread::{LineSpread, Pixel, model_range};
use emberline::fit::{Branch, Fit, FitSettings, Fitter, Solution};
use emberline::grid::FluxGrid;
use emberline::spectrum::{Resolution, Spectrum};
use rand::SeedableRng;
use rand_chacha::ChaCha8Rng;
use rand_distr::{Distribution, Normal};

use crate::support::toy_grid::toy_grid;

fn grid() -> &'static FluxGrid {
    static GRID: OnceLock<FluxGrid> = OnceLock::new();
    GRID.get_or_init(toy_grid)
}

fn fitter() -> &'static Fitter<'static> {
    static FITTER: OnceLock<Fitter<'static>> = OnceLock::new();
    FITTER.get_or_init(|| Fitter::new(grid(), FitSettings::default()))
}

fn pixels() -> Vec<Pixel> {
    (0..900)
        .map(|i| Pixel { wave_vac_aa: 3790.0 + 1.5 * f64::from(i), width_aa: 1.5, fwhm_aa: 4.0 })
        .collect()
}

/// The toy star through the instrument, without noise.
fn clean(teff_k: f64, log_g: f64, velocity_km_s: f64) -> Vec<f64> {
    let pixels = pixels();
    let range =
        model_range(&grid().wave_vac_aa, pixels[0], pixels[pixels.len() - 1], velocity_km_s.abs()).unwrap();
    let stencil = grid().stencil(teff_k, log_g).unwrap();
    let mut model = vec![0.0; range.len()];
    grid().interpolate(&stencil, range.clone(), &mut model);
    let mut seen = vec![0.0; pixels.len()];
    LineSpread::new(&pixels, &grid().wave_vac_aa[range], velocity_km_s).apply(&model, &mut seen);
    seen
}

fn spectrum(flux: Vec<f64>, sigma: Vec<f64>, calibrated: bool) -> Spectrum {
    let waves = pixels().iter().map(|pixel| pixel.wave_vac_aa).collect();
    let good = vec![true; flux.len()];
    Spectrum::new(waves, flux, sigma, good, Resolution::FwhmAa(4.0), calibrated).unwrap()
}

fn noisy(clean: &[f64], snr: f64, seed: u64, calibrated: bool) -> Spectrum {
    let mut random = ChaCha8Rng::seed_from_u64(seed);
    let normal = Normal::new(0.0, 1.0).unwrap();
    let sigma: Vec<f64> = clean.iter().map(|flux| flux.abs() / snr).collect();
    let flux =
        clean.iter().zip(&sigma).map(|(flux, sigma)| flux + sigma * normal.sample(&mut random)).collect();
    spectrum(flux, sigma, calibrated)
}

fn codes(fit: &Fit) -> Vec<&str> {
    fit.flags.iter().map(|flag| flag.code.as_str()).collect()
}

#[test]
fn verify_noiseless_spectra_come_back_exactly() {
    for (teff_k, log_g, velocity) in
        [(9100.0, 8.1, 0.0), (17_300.0, 7.8, 45.0), (31_000.0, 8.6, -210.0), (50_000.0, 7.4, 400.0)]
    {
        let flux = clean(teff_k, log_g, velocity);
        let sigma = flux.iter().map(|flux| flux / 100.0).collect();
        let fit = fitter().fit(&spectrum(flux, sigma, true)).unwrap();
        let chosen = fit.chosen();
        assert!((chosen.teff_k / teff_k - 1.0).abs() < 1e-4, "Teff {} for {teff_k}", chosen.teff_k);
        assert!((chosen.log_g - log_g).abs() < 1e-3, "log g {} for {log_g}", chosen.log_g);
        assert!((chosen.radial_velocity_km_s - velocity).abs() < 0.2, "{}", chosen.radial_velocity_km_s);
        assert!(chosen.is_converged);
    }
}

/// Pulls of 240 noisy spectra away from the ridge: means and widths of a unit Gaussian within three
/// standard errors (0.19 and 0.14), and the shares within one and two sigma.
#[test]
fn verify_errors_are_honest() {
    let cases = [(9000.0, 8.0), (18_000.0, 8.3), (28_000.0, 7.7)];
    let mut pulls: [Vec<f64>; 3] = Default::default();
    for seed in 0..240_u64 {
        let (teff_k, log_g) = cases[seed as usize % cases.len()];
        let velocity = 30.0;
        let fit = fitter().fit(&noisy(&clean(teff_k, log_g, velocity), 40.0, seed, true)).unwrap();
        let chosen = fit.chosen();
        let difference =
            [chosen.teff_k - teff_k, chosen.log_g - log_g, chosen.radial_velocity_km_s - velocity];
        for k in 0..3 {
            pulls[k].push(difference[k] / chosen.sigma(k));
        }
    }
    for (name, pulls) in ["Teff", "log g", "velocity"].iter().zip(&pulls) {
        let count = pulls.len() as f64;
        let mean = pulls.iter().sum::<f64>() / count;
        let width = (pulls.iter().map(|pull| (pull - mean).powi(2)).sum::<f64>() / (count - 1.0)).sqrt();
        let within = |limit: f64| pulls.iter().filter(|pull| pull.abs() < limit).count() as f64 / count;
        println!(
            "{name}: mean {mean:+.3}, width {width:.3}, 68 % {:.3}, 95 % {:.3}",
            within(1.0),
            within(2.0)
        );
        assert!(mean.abs() < 3.0 / count.sqrt(), "{name}: mean pull {mean}");
        assert!((width - 1.0).abs() < 3.0 / (2.0 * count).sqrt(), "{name}: pull width {width}");
        assert!(
            (within(1.0) - 0.683).abs() < 0.09 && (within(2.0) - 0.954).abs() < 0.045,
            "{name}: coverage"
        );
    }
}

/// Close to the ridge, where chi-square is no parabola: the chosen solution's error covers the truth as often
/// as it says, unless the choice is flagged as weak; then one of the solutions covers it. True temperatures are
/// spread over the ridge, because the estimate of a flat-floored minimum is drawn to its middle and covers the
/// truth only on average over it. On the toy grid both sides of the ridge have the same lines, so that many
/// choices must be weak. Limits: three standard errors.
#[test]
fn verify_errors_cover_the_truth_near_the_ridge() {
    let log_g = 8.1;
    let (mut clear, mut weak) = (Vec::new(), Vec::new());
    for seed in 0..300_u64 {
        // Evenly over the logarithm (golden-ratio sequence).
        let teff_k = 9500.0 * (18_000.0_f64 / 9500.0).powf((seed as f64 * 0.618_034).fract());
        let fit = fitter().fit(&noisy(&clean(teff_k, log_g, 0.0), 30.0, 1000 + seed, true)).unwrap();
        let pull = |solution: &Solution| ((solution.teff_k - teff_k) / solution.sigma(0)).abs();
        if codes(&fit).contains(&"fit.weak-choice") {
            weak.push(fit.solutions.iter().map(pull).fold(f64::INFINITY, f64::min));
        } else {
            clear.push(pull(fit.chosen()));
        }
    }
    for (name, pulls) in [("clear", clear), ("weak", weak)] {
        let count = pulls.len() as f64;
        let within = |limit: f64| pulls.iter().filter(|pull| **pull < limit).count() as f64 / count;
        println!("{name}: {count} fits, {:.3} within 1 sigma, {:.3} within 1.96", within(1.0), within(1.96));
        let limit = |share: f64| share - 3.0 * (share * (1.0 - share) / count).sqrt();
        assert!(count > 20.0, "{name}: {count} fits");
        assert!(within(1.0) > limit(0.683) && within(1.96) > limit(0.95), "{name}: truth not covered");
    }
}

#[test]
fn verify_scale_of_the_flux_does_not_matter() {
    let flux = clean(20_000.0, 8.0, 10.0);
    let fit_scaled = |scale: f64| {
        let noisy = noisy(&flux, 30.0, 7, true);
        let scaled = noisy.flux().iter().map(|value| value * scale).collect();
        let sigma = noisy.sigma().iter().map(|value| value * scale).collect();
        fitter().fit(&spectrum(scaled, sigma, true)).unwrap().chosen().vector()
    };
    let (plain, scaled) = (fit_scaled(1.0), fit_scaled(1e-17));
    assert!((plain[0] / scaled[0] - 1.0).abs() < 1e-6 && (plain[1] - scaled[1]).abs() < 1e-6);
}

/// Both sides of the ridge are kept, and the slope of calibrated flux decides between them.
#[test]
fn verify_hot_and_cold_are_both_kept() {
    let truth = 17_000.0;
    let fit = fitter().fit(&noisy(&clean(truth, 8.0, 0.0), 20.0, 3, true)).unwrap();
    assert_eq!(fit.chosen().branch, Branch::Hot);
    assert!((fit.chosen().teff_k / truth - 1.0).abs() < 0.05);
    assert!(fit.solutions.iter().any(|solution| solution.branch == Branch::Cold), "{:?}", fit.solutions);
    let total: f64 = fit.solutions.iter().map(|solution| solution.probability).sum();
    assert!((total - 1.0).abs() < 1e-9);
}

#[test]
fn verify_cosmic_rays_are_set_aside_and_counted() {
    let flux = clean(15_000.0, 8.0, 0.0);
    let with_rays = {
        let noisy = noisy(&flux, 50.0, 11, true);
        let mut values = noisy.flux().to_vec();
        for pixel in [120, 395, 396, 700] {
            values[pixel] *= 3.0;
        }
        spectrum(values, noisy.sigma().to_vec(), true)
    };
    let fit = fitter().fit(&with_rays).unwrap();
    assert!(codes(&fit).contains(&"fit.pixels-set-aside"), "{:?}", fit.flags);
    assert!((fit.chosen().teff_k / 15_000.0 - 1.0).abs() < 0.03, "{}", fit.chosen().teff_k);
    assert!((fit.chosen().log_g - 8.0).abs() < 0.1);
}

/// Noise alone, a smooth continuum, emission and narrow lines are no white dwarfs.
#[test]
fn verify_what_is_no_da_is_refused() {
    let waves: Vec<f64> = pixels().iter().map(|pixel| pixel.wave_vac_aa).collect();
    let lines = |depth: f64, sigma_aa: f64| -> Vec<f64> {
        waves
            .iter()
            .map(|wave| {
                let sum: f64 = [4862.7, 4341.7, 4102.9, 3971.2, 3890.2]
                    .iter()
                    .map(|centre| (-0.5 * ((wave - centre) / sigma_aa).powi(2)).exp())
                    .sum();
                1.0 - depth * sum
            })
            .collect()
    };
    for (name, flux, expected) in [
        ("continuum", lines(0.0, 1.0), "screen.no-balmer-lines"),
        ("emission", lines(-0.8, 6.0), "screen.emission"),
        ("narrow", lines(0.6, 4.0), "screen.n"),
    ] {
        let fit = fitter().fit(&noisy(&flux, 40.0, 5, true)).unwrap();
        assert!(
            codes(&fit).iter().any(|code| code.starts_with(expected) || *code == "screen.not-explained"),
            "{name}: {:?}",
            fit.flags
        );
    }
    let mut random = ChaCha8Rng::seed_from_u64(9);
    let normal = Normal::new(0.0, 1.0).unwrap();
    let noise: Vec<f64> = waves.iter().map(|_| normal.sample(&mut random)).collect();
    let fit = fitter().fit(&spectrum(noise, vec![1.0; waves.len()], false)).unwrap();
    assert!(codes(&fit).contains(&"fit.too-noisy"), "{:?}", fit.flags);
}

#[test]
fn verify_a_spectrum_without_balmer_windows_is_a_fault() {
    let waves: Vec<f64> = (0..500).map(|i| 7000.0 + f64::from(i)).collect();
    let flux = vec![1.0; 500];
    let red =
        Spectrum::new(waves, flux.clone(), flux, vec![true; 500], Resolution::FwhmAa(4.0), true).unwrap();
    let fault = fitter().fit(&red).unwrap_err();
    assert_eq!(fault.code().id, "fit.too-few-lines");
}
