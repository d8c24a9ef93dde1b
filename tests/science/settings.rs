//! The `[fit]` section of the configuration reaches the fit: seen on a real star.

use emberline::codes::Flag;
use emberline::fit::{Fit, FitSettings, Fitter};
use emberline::report::{Analyse, Analysis};
use emberline::spectrum::{ReadSettings, read_file};

use crate::support::folder;
use crate::support::published::{bundled_grid, bundled_tracks, read_one};

fn fit(settings: FitSettings) -> Fit {
    let spectrum = read_one("tests/data/calspec/gd71_stisnic_002.fits.gz", &ReadSettings::default());
    Fitter::new(bundled_grid(), settings).fit(&spectrum).unwrap()
}

#[test]
fn verif_masked_cores_lose_pixels_and_keep_the_answer() {
    let plain = fit(FitSettings::default());
    let half_width_aa = 8.0;
    let masked = fit(FitSettings { core_mask_half_width_aa: half_width_aa, ..FitSettings::default() });
    for (before, after) in plain.lines.iter().zip(&masked.lines) {
        let centre = after.rest_wave_vac_aa;
        assert!(after.pixels < before.pixels, "{}", after.name);
        let window = masked.lines.iter().position(|line| line.name == after.name).unwrap();
        // The star moves by less than half an angstrom.
        let nearest = masked.wave_vac_aa[window].iter().map(|wave| (wave - centre).abs()).fold(1e9, f64::min);
        assert!(nearest > half_width_aa - 0.5, "{}: {nearest}", after.name);
    }
    let (a, b) = (plain.chosen(), masked.chosen());
    println!("{:.0} K {:.3} with the cores, {:.0} K {:.3} without", a.teff_k, a.log_g, b.teff_k, b.log_g);
    // The wings alone say the same within 5 % and 0.15 dex, if the models are right about both.
    assert!((b.teff_k / a.teff_k - 1.0).abs() < 0.05 && (b.log_g - a.log_g).abs() < 0.15);
}

#[test]
fn verif_lines_velocity_and_outliers_follow_the_settings() {
    let lines = |settings: FitSettings| fit(settings).lines.iter().map(|line| line.name).collect::<Vec<_>>();
    let wanted = |names: &[&str]| FitSettings {
        lines: emberline::fit::WINDOWS.into_iter().filter(|window| names.contains(&window.name)).collect(),
        ..FitSettings::default()
    };
    assert_eq!(lines(wanted(&["H-beta", "H9"])), ["H-beta", "H9"]);
    let strict = fit(FitSettings { outlier_sigma: 3.0, ..FitSettings::default() });
    let lax = fit(FitSettings { outlier_sigma: 1e6, ..FitSettings::default() });
    assert_eq!(lax.rejected_pixels, 0);
    assert!(strict.rejected_pixels >= lax.rejected_pixels);
    let slow = fit(FitSettings { largest_velocity_km_s: 100.0, ..FitSettings::default() });
    assert!(slow.solutions.iter().all(|solution| solution.radial_velocity_km_s.abs() <= 100.0));
}

#[test]
fn external_errors_go_into_the_report() {
    let observation = read_file(&folder::data("calspec/gd71_stisnic_002.fits.gz"), &ReadSettings::default())
        .remove(0)
        .unwrap();
    let findings = |settings: FitSettings| {
        Analysis::new(bundled_grid(), bundled_tracks(), &settings).analyse(&observation)
    };
    let none = FitSettings { external_teff_relative: 0.0, external_log_g: 0.0, ..FitSettings::default() };
    let large = FitSettings { external_teff_relative: 0.05, external_log_g: 0.2, ..FitSettings::default() };
    let (none, large) = (findings(none), findings(large));
    let parameters = large.parameters.unwrap();
    assert_eq!(parameters.teff_k[2], 0.05 * parameters.teff_k[0]);
    assert_eq!(parameters.log_g[2], 0.2);
    assert_eq!(none.parameters.unwrap().teff_k[2], 0.0);
    let width = |star: Option<emberline::star::Star>| {
        let mass = star.unwrap().mass_msun;
        mass.err_minus.unwrap() + mass.err_plus.unwrap()
    };
    let codes = |flags: &[Flag]| flags.iter().map(|flag| flag.code.clone()).collect::<Vec<_>>();
    println!("{:?}", codes(&none.flags));
    assert!(width(large.star) > 3.0 * width(none.star), "the star's errors follow");
}
