//! `emberline rehearse`: what it writes, prints and leaves behind.

use std::fs;

use emberline::rehearsal::{fits_table, observe};
use emberline::spectrum::fits::FitsFile;
use emberline::spectrum::{ReadSettings, SourceRecord, VelocityFrame, read_fits};
use serde_json::Value;

use super::{emberline_in, exit_code, path};
use crate::support::folder;
use crate::support::published::bundled_grid;

#[test]
fn what_a_rehearsal_writes_is_read_back_bit_by_bit() {
    for number in 0..12 {
        let sighting = observe(bundled_grid(), 5, number).unwrap();
        let fits = FitsFile::parse(fits_table(&sighting), 100_000_000).unwrap();
        let mut outcomes = read_fits(&fits, SourceRecord::default(), &ReadSettings::default()).unwrap();
        assert_eq!(outcomes.len(), 1);
        let observation = outcomes.remove(0).unwrap();
        assert!(observation.flags.is_empty(), "nothing is left open: {:?}", observation.flags);
        assert_eq!(observation.object.name.as_deref(), Some(sighting.name.as_str()));
        assert_eq!(observation.source.velocity_frame, Some(VelocityFrame::Barycentric));
        let (read, made) = (&observation.spectrum, &sighting.spectrum);
        assert_eq!(read.wave_vac_aa(), made.wave_vac_aa());
        assert_eq!(read.flux(), made.flux());
        assert_eq!(read.sigma(), made.sigma());
        assert_eq!(read.is_good(), made.is_good());
        assert_eq!(read.is_flux_calibrated(), made.is_flux_calibrated());
        for (pixel, wave) in made.wave_vac_aa().iter().enumerate() {
            assert_eq!(read.resolution().fwhm_aa(pixel, *wave), made.resolution().fwhm_aa(pixel, *wave));
        }
    }
}

#[test]
fn a_rehearsal_runs_the_daemon_and_keeps_what_it_is_told_to_keep() {
    let site = folder::temporary();
    let temporary = site.path().join("tmp");
    fs::create_dir(&temporary).unwrap();
    let into = site.path().join("a night");
    let run = |seed: &str| {
        let arguments = ["rehearse", "--stars", "12", "--seed", seed, "--json", "--into", path(&into)];
        emberline_in(&temporary, &arguments)
    };
    let output = run("3");
    assert_eq!(exit_code(&output), 0, "{}", String::from_utf8_lossy(&output.stderr));
    let text = String::from_utf8(output.stdout).unwrap();
    let last: Value = serde_json::from_str(text.lines().next_back().unwrap()).unwrap();
    let summary = &last["summary"];
    assert_eq!(summary["stars"], 12);
    for key in [
        "pull_mean_teff",
        "pull_width_teff",
        "pull_mean_log_g",
        "pull_width_log_g",
        "pull_mean_radial_velocity",
        "pull_width_radial_velocity",
        "wrong_solution_fraction",
        "contaminants_accepted_fraction",
        "good_not_accepted_fraction",
        "spectra_per_s",
    ] {
        assert!(summary[key].is_number(), "{key}: {summary}");
    }
    let count = |folder: &str, ending: &str| {
        walkdir::WalkDir::new(into.join(folder))
            .into_iter()
            .filter(|entry| entry.as_ref().unwrap().path().to_string_lossy().ends_with(ending))
            .count()
    };
    assert_eq!((count("inbox", ".fits"), count("reports", ".current.json")), (12, 12));
    assert_eq!(fs::read_to_string(into.join("truth.csv")).unwrap().lines().count(), 13);
    let page = fs::read_to_string(into.join("index.html")).unwrap();
    assert_eq!(page.matches("</svg>").count(), 9);
    assert!(page.contains("Pulls of log g") && page.contains("Completeness") && page.contains("Purity"));
    assert!(page.contains("KF 0003-000"), "points are told by name");
    let outside = page.replace("http://www.w3.org/2000/svg", "");
    assert!(!outside.contains("://") && !outside.contains("<script"), "nothing comes from elsewhere");
    assert_eq!(fs::read_dir(&temporary).unwrap().count(), 0, "nothing is left in the temporary folder");
    // The same again would mix two nights.
    let again = run("4");
    assert_eq!(exit_code(&again), 2);
    assert!(String::from_utf8_lossy(&again.stderr).contains("name another folder"));
}
