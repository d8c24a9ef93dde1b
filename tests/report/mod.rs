//! The report document: verdicts, nulls, bytes, and writing whole or not at all.

use std::fs;

use emberline::codes::{self, Effect, Flag};
use emberline::report::{
    Analyse, Findings, FittedParameters, LineRow, Provenance, Report, SCHEMA_VERSION, SolutionRow, Verdict,
    report_file, schema, write_atomically,
};
use emberline::spectrum::{ObjectRecord, Observation, ReadSettings, SourceRecord};
use emberline::star::{AbsoluteMagnitudes, Star, StarValue};

use crate::support::folder;

fn object() -> ObjectRecord {
    ObjectRecord { name: Some("KF 0412+11".to_owned()), ra_deg: Some(63.2), ..ObjectRecord::default() }
}

fn star() -> Star {
    let value = |value: f64| StarValue { value: Some(value), err_minus: Some(0.01), err_plus: Some(0.02) };
    Star {
        mass_msun: value(0.6),
        radius_rsun: value(0.0128),
        luminosity_lsun: value(0.05),
        gravitational_redshift_km_s: value(29.8),
        cooling_age_gyr: value(0.2),
        progenitor_mass_msun: value(1.7),
        mean_density_g_cm3: value(4e5),
        absolute_magnitude: AbsoluteMagnitudes { gaia_g: value(11.3), ..AbsoluteMagnitudes::default() },
        distance_pc: value(40.0),
    }
}

fn findings() -> Findings {
    let solution = |branch: &str, is_chosen| SolutionRow {
        branch: branch.to_owned(),
        is_chosen,
        teff_k: Some(15_000.0),
        log_g: Some(8.0),
        radial_velocity_km_s: Some(-12.5),
        teff_3d_k: None,
        log_g_3d: None,
        covariance: Some([[1e4, 1.0, 0.0], [1.0, 4e-4, 0.0], [0.0, 0.0, 9.0]]),
        chi2: Some(812.3),
        dof: 800,
        probability: Some(if is_chosen { 0.9 } else { 0.1 }),
    };
    Findings {
        parameters: Some(FittedParameters {
            teff_k: [15_000.0, 30.0, 40.0],
            log_g: [8.0, 0.03, 0.04],
            radial_velocity_km_s: [-12.5, 3.0, 0.0],
        }),
        solutions: vec![solution("hot", true), solution("cold", false)],
        lines: vec![LineRow {
            line: "H-beta".to_owned(),
            rest_wave_vac_aa: 4862.68,
            pixels: 80,
            bad_pixels: 2,
            chi2: Some(79.0),
            rms_residual: Some(0.01),
            equivalent_width_aa: Some(40.0),
        }],
        star: Some(star()),
        provenance: Provenance::of_this_program(),
        ..Findings::default()
    }
}

fn assemble(findings: Findings) -> Report {
    Report::assemble(object(), SourceRecord::default(), findings)
}

fn code_with(effect: Effect) -> &'static codes::Code {
    codes::TABLE.iter().find(|code| code.effect == effect).expect("every effect is in use")
}

#[test]
fn a_whole_result_is_accepted_and_errors_add_in_quadrature() {
    let report = assemble(findings());
    assert_eq!(report.verdict, Verdict::Accepted);
    assert_eq!(report.schema_version, SCHEMA_VERSION);
    assert!(report.flags.is_empty());
    assert_eq!(report.parameters.teff_k.value, Some(15_000.0));
    // 3-4-5.
    assert_eq!(report.parameters.teff_k.err_total, Some(50.0));
    assert!((report.parameters.log_g.err_total.unwrap() - 0.05).abs() < 1e-15);
}

#[test]
fn the_worst_flag_decides() {
    for (effect, expected) in [
        (Effect::Note, Verdict::Accepted),
        (Effect::Review, Verdict::Review),
        (Effect::Reject, Verdict::Rejected),
    ] {
        let note = Flag::new(code_with(Effect::Note), "1 of 2");
        let worst = Flag::new(code_with(effect), "2 of 2");
        let report = assemble(Findings { flags: vec![worst, note], ..findings() });
        assert_eq!(report.verdict, expected);
    }
    let unknown = Flag { code: "made.up".to_owned(), detail: String::new() };
    assert_eq!(assemble(Findings { flags: vec![unknown], ..findings() }).verdict, Verdict::Rejected);
}

#[test]
fn what_could_not_be_had_is_null_with_a_flag() {
    let mut without_age = findings();
    without_age.star = Some(Star { cooling_age_gyr: StarValue::default(), ..star() });
    let report = assemble(without_age);
    assert_eq!(report.verdict, Verdict::Review);
    assert_eq!(report.flags[0].code, "report.values-missing");
    assert_eq!(report.flags[0].detail, "cooling_age_gyr");

    // A flag about the star explains what is missing there, with the effect that it has.
    let mut explained = findings();
    explained.star = Some(Star { cooling_age_gyr: StarValue::default(), ..star() });
    explained.flags = vec![Flag { code: "star.not-a-code-yet".to_owned(), detail: "why".to_owned() }];
    assert_eq!(assemble(explained).flags.len(), 1);

    let mut not_finite = findings();
    not_finite.parameters = Some(FittedParameters {
        teff_k: [f64::NAN, 1.0, 1.0],
        log_g: [8.0, f64::INFINITY, 0.0],
        radial_velocity_km_s: [0.0, 1.0, 0.0],
    });
    let report = assemble(not_finite);
    assert_eq!(report.verdict, Verdict::Rejected);
    assert_eq!(report.flags[0].code, "report.no-parameters");
    assert_eq!((report.parameters.teff_k.value, report.parameters.log_g.err_stat), (None, None));

    // A rejected object has its reason already.
    let refused =
        Findings { flags: vec![Flag::new(code_with(Effect::Reject), "why")], ..Findings::default() };
    assert_eq!(assemble(refused).flags.len(), 1);
}

#[test]
fn equal_findings_give_equal_bytes_that_read_back() {
    let text = serde_json::to_string(&assemble(findings())).unwrap();
    assert_eq!(text, serde_json::to_string(&assemble(findings())).unwrap());
    assert!(!text.contains("NaN"));
    let back: Report = serde_json::from_str(&text).unwrap();
    assert_eq!(back, assemble(findings()));
    // Keys stand in the order that the design gives them.
    let keys = [
        "schema_version",
        "object",
        "source",
        "verdict",
        "flags",
        "parameters",
        "solutions",
        "lines",
        "star",
        "provenance",
        "timing_ms",
    ];
    let places: Vec<usize> = keys.iter().map(|key| text.find(&format!("\"{key}\":")).unwrap()).collect();
    assert!(places.windows(2).all(|pair| pair[0] < pair[1]), "{places:?}");
    let schema = serde_json::to_value(schema()).unwrap();
    let mut required: Vec<&str> =
        schema["required"].as_array().unwrap().iter().map(|key| key.as_str().unwrap()).collect();
    let mut expected = keys.to_vec();
    required.sort_unstable();
    expected.sort_unstable();
    assert_eq!(required, expected);
}

#[test]
fn files_are_written_whole_or_not_at_all() {
    let folder = folder::temporary();
    let path = folder.path().join("report.json");
    write_atomically(&path, b"first").unwrap();
    write_atomically(&path, b"second").unwrap();
    assert_eq!(fs::read(&path).unwrap(), b"second");

    // A left-over of a crash is overwritten and does not stay.
    fs::write(folder.path().join("report.json.partial"), b"half").unwrap();
    write_atomically(&path, b"third").unwrap();
    assert_eq!(fs::read(&path).unwrap(), b"third");
    assert_eq!(fs::read_dir(folder.path()).unwrap().count(), 1);

    // The target is a folder: the rename fails, nothing changes, nothing is left.
    let taken = folder.path().join("taken");
    fs::create_dir(&taken).unwrap();
    fs::write(taken.join("inside"), b"kept").unwrap();
    let fault = write_atomically(&taken, b"fourth").unwrap_err();
    assert_eq!(fault.code().id, "report.not-written");
    assert!(fault.to_string().starts_with("cannot rename to "), "{fault}");
    assert_eq!(fs::read(taken.join("inside")).unwrap(), b"kept");
    assert!(!folder.path().join("taken.partial").exists());

    let nowhere = folder.path().join("absent/report.json");
    assert!(write_atomically(&nowhere, b"fifth").is_err());
    // Full disks look like this everywhere on Linux.
    assert!(write_atomically(std::path::Path::new("/dev/full/report.json"), b"sixth").is_err());
}

/// An analysis that breaks on every object but those with this many pixels.
struct Fragile {
    pixels: usize,
}

impl Analyse for Fragile {
    fn analyse(&self, observation: &Observation) -> Findings {
        assert_eq!(observation.spectrum.wave_vac_aa().len(), self.pixels, "a broken invariant");
        findings()
    }
}

#[test]
fn a_panic_costs_one_object_and_reading_faults_become_reports() {
    let settings = ReadSettings::default();
    let star = folder::data("calspec/gd71_stisnic_002.fits.gz");
    let good = report_file(&star, &settings, &Fragile { pixels: 4105 });
    assert_eq!(good.len(), 1);
    // Nothing in this file says who the observer is; a note, and no reason to reject.
    assert_eq!(good[0].flags[0].code, "spectrum.velocity-frame-unknown");
    assert_eq!(good[0].verdict, Verdict::Accepted);
    assert_eq!(good[0].object.name.as_deref(), Some("GD71"));
    assert!(good[0].timing_ms["read"] > 0.0);

    let broken = report_file(&star, &settings, &Fragile { pixels: 1 });
    assert_eq!((broken[0].verdict, broken[0].flags[0].code.as_str()), (Verdict::Rejected, "internal.panic"));
    assert_eq!(broken[0].object.name.as_deref(), Some("GD71"));

    let missing = report_file(&star.with_extension("absent"), &settings, &Fragile { pixels: 1 });
    assert_eq!((missing[0].verdict, missing[0].flags[0].code.as_str()), (Verdict::Rejected, "file.missing"));
}
