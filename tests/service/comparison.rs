//! `compare`: shifts, outliers, verdict changes, and the figure.

use std::fs;

use emberline::archive::comparison::{compare, render_figure, render_text};
use emberline::cli::compare::read_run;
use serde_json::{Value, json};

fn report(index: usize, teff_k: f64, verdict: &str) -> Value {
    json!({
        "object": { "name": format!("KF-{index}") },
        "source": { "blake3": format!("hash-{index}") },
        "verdict": verdict,
        "parameters": { "teff_k": { "value": teff_k }, "log_g": { "value": 8.0 } },
        "star": { "mass_msun": { "value": null } },
    })
}

/// Shifts of 20 + {-2, -1, 0, 1, 2} K, known median and median absolute deviation.
fn runs() -> (Vec<Value>, Vec<Value>) {
    let old: Vec<Value> =
        (0..50).map(|index| report(index, 10_000.0 + 100.0 * index as f64, "accepted")).collect();
    let new = (0..50)
        .map(|index| {
            let shift_k = 20.0 + (index % 5) as f64 - 2.0;
            report(index, 10_000.0 + 100.0 * index as f64 + shift_k, "accepted")
        })
        .collect();
    (old, new)
}

#[test]
fn median_scatter_outliers_and_verdict_changes_are_found() {
    let (mut old, mut new) = runs();
    old.push(report(98, 9_000.0, "accepted"));
    new.push(report(99, 9_000.0, "accepted"));
    new[7] = report(7, 10_700.0 - 500.0, "review");
    let comparison = compare(&old, &new);
    assert_eq!((comparison.paired, comparison.only_old.as_slice()), (50, ["KF-98".to_owned()].as_slice()));
    assert_eq!(comparison.only_new, ["KF-99"]);
    let teff = &comparison.shifts[0];
    assert_eq!(teff.median, Some(20.0));
    // The deviations are 0, 1, 1, 2, 2 in turn: their median is 1.
    assert!((teff.scatter.unwrap() - 1.482_602_218_505_602).abs() < 1e-12);
    assert_eq!(teff.outliers, [("KF-7".to_owned(), -500.0)]);
    assert_eq!(comparison.verdict_changes, [("KF-7".to_owned(), "accepted".to_owned(), "review".to_owned())]);
    let log_g = &comparison.shifts[1];
    assert_eq!((log_g.median, log_g.scatter, log_g.outliers.len()), (Some(0.0), Some(0.0), 0));
    assert_eq!(comparison.shifts[2].median, None, "no masses, no shift");
    let text = render_text(&comparison);
    assert!(
        text.contains("teff_k     median shift +20.0 K, scatter 1.48260 (50 spectra, 1 outliers)"),
        "{text}"
    );
    assert!(text.contains("outlier  KF-7: -500.0 K") && text.contains("KF-7: accepted -> review"), "{text}");
}

#[test]
fn the_figure_has_a_point_for_each_spectrum_and_escapes_names() {
    let (old, mut new) = runs();
    new[3]["object"]["name"] = json!("<script>");
    let mut old = old;
    old[3]["object"]["name"] = json!("<script>");
    let figure = render_figure(&compare(&old, &new), "a", "b").unwrap();
    assert_eq!(figure.matches("<circle").count(), 2 * 50, "two panels with values");
    assert!(!figure.contains("<script>"));
}

#[test]
fn runs_are_found_by_folder_and_by_fingerprint() {
    let folder = tempfile::tempdir().unwrap();
    let reports = folder.path();
    fs::create_dir(reports.join("KF-1")).unwrap();
    let write = |name: &str, teff_k| {
        let text = report(1, teff_k, "accepted").to_string();
        fs::write(reports.join("KF-1").join(name), text).unwrap();
    };
    write("0123456789abcdef.aaaa000000000000.json", 1.0);
    write("0123456789abcdef.aaab000000000000.json", 2.0);
    write("0123456789abcdef.bbbb000000000000.json", 3.0);
    write("0123456789abcdef.current.json", 3.0);
    let teff =
        |run: &str| read_run(reports, run).map(|found| found[0]["parameters"]["teff_k"]["value"].clone());
    assert_eq!(teff("b").unwrap(), 3.0);
    assert_eq!(teff("aaab0000000000001234").unwrap(), 2.0, "a whole fingerprint does too");
    assert_eq!(teff(&reports.to_string_lossy()).unwrap(), 3.0);
    assert!(teff("aaa").unwrap_err().to_string().contains("need more characters"));
    assert!(teff("c").unwrap_err().to_string().contains("found no reports of c"));
}
