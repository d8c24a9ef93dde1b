//! Published model spectra against the bundled grid.

use emberline::fit::line_spread::{LineSpread, Pixel};
use emberline::fit::{FitSettings, Fitter, WINDOWS, Window};
use emberline::spectrum::Medium;

use crate::support::published::{bundled_grid, read_model};

/// Resolution at which profiles are compared, A.
const FWHM_AA: f64 = 5.0;
/// Largest root mean square difference of a normalised profile for Teff up to 54 000 K, in units of the
/// continuum: what the first grid is asked for.
const LARGEST_RMS: f64 = 0.03;

/// Model, Teff (K) and log g by the model's name (rounded there: t327g76n), from CALSPEC headers.
const NLTE_MODELS: [(&str, f64, f64); 6] = [
    ("gd71", 32_700.0, 7.6),
    ("gd153", 38_600.0, 7.6),
    ("wd1057_719", 41_400.0, 7.8),
    ("hz43", 50_800.0, 7.9),
    ("wd1657_343", 53_000.0, 7.7),
    ("g191b2b", 61_100.0, 7.4),
];

/// X-shooter standards of Moehler et al. (2014, A&A 568, A9) with the parameters of their models (from
/// memory, rounded): printed, and compared as fits.
const XSHOOTER_MODELS: [(&str, f64, f64); 5] = [
    ("ltt3218_air", 9_300.0, 8.0),
    ("ltt7987_air", 16_100.0, 8.0),
    ("eg274_air", 26_000.0, 8.0),
    ("gd71_air", 33_600.0, 7.9),
    ("gd153_air", 40_300.0, 7.9),
];

fn pixels(window: &Window) -> Vec<Pixel> {
    let (blue, red) = window.range_vac_aa;
    (0..(red - blue) as usize)
        .map(|i| Pixel { wave_vac_aa: blue + i as f64, width_aa: 1.0, fwhm_aa: FWHM_AA })
        .collect()
}

/// Folded to the comparison's resolution and divided by the line through the window's ends.
fn profile(window: &Window, waves: &[f64], flux: &[f64]) -> Vec<f64> {
    let pixels = pixels(window);
    let mut seen = vec![0.0; pixels.len()];
    LineSpread::new(&pixels, waves, 0.0).apply(flux, &mut seen);
    let last = seen.len() - 1;
    let (blue, red) = (seen[0], seen[last]);
    (0..=last).map(|i| seen[i] / (blue + (red - blue) * i as f64 / last as f64)).collect()
}

#[test]
fn validate_nlte_models() {
    let grid = bundled_grid();
    println!(
        "{:>12} {:>8} {:>5}  rms and largest difference of the profile outside the core, %",
        "model", "Teff", "log g"
    );
    for (name, teff_k, log_g) in NLTE_MODELS {
        let published = read_model(name, Medium::Vacuum, FWHM_AA);
        let mut flux = vec![0.0; grid.wave_vac_aa.len()];
        grid.interpolate(&grid.stencil(teff_k, log_g).unwrap(), 0..flux.len(), &mut flux);
        let mut row = format!("{name:>12} {teff_k:>8} {log_g:>5}");
        for window in WINDOWS.iter().filter(|window| window.is_default) {
            let ours = profile(window, &grid.wave_vac_aa, &flux);
            let theirs = profile(window, published.wave_vac_aa(), published.flux());
            let differences: Vec<f64> = pixels(window)
                .iter()
                .zip(ours.iter().zip(&theirs))
                .filter(|(pixel, _)| (pixel.wave_vac_aa - window.centre_vac_aa()).abs() > 3.0)
                .map(|(_, (a, b))| a - b)
                .collect();
            let rms = (differences.iter().map(|d| d * d).sum::<f64>() / differences.len() as f64).sqrt();
            let largest = differences.iter().fold(0.0_f64, |largest, d| largest.max(d.abs()));
            row += &format!("  {} {:.2} {:.2}", window.name, 100.0 * rms, 100.0 * largest);
            if teff_k <= 54_000.0 {
                assert!(rms < LARGEST_RMS, "{name} {}: rms {rms}", window.name);
            }
        }
        println!("{row}");
    }
}

/// Fits of published models: what our scale makes of other people's.
///
/// The X-shooter models are recent and use line profiles of the same theory as ours: they must agree. The
/// CALSPEC models are NLTE and older; LTE fits of them come out hotter (0.4 % at 33 000 K, 5 % at 61 000 K:
/// physics.md), and profiles without dissolution inside the line give lower temperatures and gravities
/// (Tremblay & Bergeron 2009, ApJ 696, 1755). They are bounded, not matched.
#[test]
fn validate_fits_of_published_models() {
    let fitter = Fitter::new(bundled_grid(), FitSettings::default());
    println!("{:>12} {:>18} {:>20}", "model", "published", "fitted here");
    let nlte = NLTE_MODELS.iter().map(|model| (model, Medium::Vacuum, 0.09, 0.25));
    let xshooter = XSHOOTER_MODELS.iter().map(|model| (model, Medium::Air, 0.03, 0.13));
    let mut off = Vec::new();
    for ((name, teff_k, log_g), medium, largest_teff, largest_log_g) in nlte.chain(xshooter) {
        let fit = fitter.fit(&read_model(name, medium, 0.3)).unwrap();
        let chosen = fit.chosen();
        let (dteff, dlog_g) = (chosen.teff_k / teff_k - 1.0, chosen.log_g - log_g);
        let rms: Vec<String> =
            fit.lines.iter().map(|line| format!("{:.2}", 100.0 * line.rms_residual)).collect();
        println!(
            "{name:>12} {teff_k:>10} {log_g:>7} {:>12.0} {:>7.3}  ({:+.1} %, {dlog_g:+.3})  rms per line, %: {}",
            chosen.teff_k,
            chosen.log_g,
            100.0 * dteff,
            rms.join(" ")
        );
        if !(dteff.abs() < largest_teff && dlog_g.abs() < largest_log_g) {
            off.push(*name);
        }
    }
    assert!(off.is_empty(), "off: {off:?}");
}
