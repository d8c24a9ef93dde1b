//! The program as users meet it: exit codes, what goes to stdout and what to stderr.

mod rehearse;

use std::path::Path;
use std::process::{Command, Output, Stdio};

use serde_json::Value;

use crate::support::folder;

fn emberline(arguments: &[&str]) -> Output {
    Command::new(env!("CARGO_BIN_EXE_emberline")).args(arguments).output().expect("the program starts")
}

/// The same with a temporary folder of its own.
fn emberline_in(temporary: &Path, arguments: &[&str]) -> Output {
    let mut command = Command::new(env!("CARGO_BIN_EXE_emberline"));
    command.args(arguments).env("TMPDIR", temporary).output().expect("the program starts")
}

fn exit_code(output: &Output) -> i32 {
    output.status.code().expect("not killed by a signal")
}

fn reports(output: &Output) -> Vec<Value> {
    let text = String::from_utf8(output.stdout.clone()).unwrap();
    text.lines().map(|line| serde_json::from_str(line).expect("every line of stdout is JSON")).collect()
}

fn path(path: &Path) -> &str {
    path.to_str().unwrap()
}

#[test]
fn wrong_use_exits_with_2_and_says_what_to_do() {
    for (arguments, words) in [
        (vec![], "Usage"),
        (vec!["fitt"], "similar subcommand exists: 'fit'"),
        (vec!["fit"], "<FILE>"),
        (vec!["fit", "--medium", "water", "x.fits"], "air"),
        (
            vec!["fit", "--resolution-fwhm-aa", "5", "--resolving-power", "900", "x.fits"],
            "cannot be used with",
        ),
        (vec!["fit", "--resolving-power=-3", "x.fits"], "need a number above 0"),
        (vec!["codes", "no.such-code"], "list them with"),
    ] {
        let output = emberline(&arguments);
        assert_eq!(exit_code(&output), 2, "{arguments:?}");
        assert!(output.stdout.is_empty(), "{arguments:?}");
        let words_found = String::from_utf8_lossy(&output.stderr);
        assert!(words_found.contains(words), "{arguments:?}: {words_found}");
    }
    for arguments in [["--help"], ["--version"]] {
        let output = emberline(&arguments);
        assert_eq!(exit_code(&output), 0);
        assert!(!output.stdout.is_empty());
    }
}

#[test]
fn codes_and_schema_are_printed_from_the_tables() {
    let listing = String::from_utf8(emberline(&["codes"]).stdout).unwrap();
    for code in emberline::codes::TABLE {
        assert!(listing.contains(code.id) && listing.contains(code.remedy), "{}", code.id);
    }
    let one = String::from_utf8(emberline(&["codes", "spectrum.medium-unknown"]).stdout).unwrap();
    assert_eq!(one.lines().count(), 3);
    let schema: Value = serde_json::from_slice(&emberline(&["schema"]).stdout).unwrap();
    assert_eq!(schema["title"], "Report");
}

#[test]
fn every_input_gets_one_report_in_order_and_a_failed_one_exits_with_3() {
    let folder = folder::temporary();
    let text = folder::write(&folder, "notes.txt", b"not a spectrum");
    let empty = folder::write(&folder, "empty.fits", b"");
    let star = folder::data("calspec/gd71_stisnic_002.fits.gz");
    let missing = folder.path().join("missing[1].fits");
    let output =
        emberline(&["fit", path(&text), path(folder.path()), path(&star), path(&missing), path(&empty)]);
    assert_eq!(exit_code(&output), 3);
    let reports = reports(&output);
    let codes: Vec<&str> =
        reports.iter().map(|report| report["flags"][0]["code"].as_str().unwrap_or("none")).collect();
    assert_eq!(codes[0], "file.not-fits");
    assert_eq!(codes[1], "file.not-regular");
    assert_eq!(reports[2]["object"]["name"], "GD71");
    assert_eq!(codes[3], "file.missing");
    assert_eq!(codes[4], "file.empty");
    for index in [0, 1, 3, 4] {
        let report = &reports[index];
        assert_eq!(report["verdict"], "rejected");
        assert_eq!(report["parameters"]["teff_k"]["value"], Value::Null);
        assert!(report["source"]["path"].is_string());
    }
    let summary = String::from_utf8_lossy(&output.stderr);
    assert!(summary.contains("5 objects"), "{summary}");
}

/// GD 71 (CALSPEC): a section of a configuration changes what `fit` does, and the report says so.
#[test]
fn a_configuration_named_to_fit_is_used() {
    let folder = folder::temporary();
    let star = folder::data("calspec/gd71_stisnic_002.fits.gz");
    let section = "[fit]\nexternal_log_g = 0.5\n[[instrument]]\nname = \"STIS\"\nerror_scale = 2.0\n";
    let config = format!("{section}match = {{ DESCRIP = \"* stis *\" }}");
    let config = folder::write(&folder, "own.toml", config.as_bytes());
    let plain = &reports(&emberline(&["fit", path(&star)]))[0];
    let with_config = &reports(&emberline(&["fit", "--config", path(&config), path(&star)]))[0];
    assert!(plain["source"]["instrument_section"].is_null());
    assert_eq!(with_config["source"]["instrument_section"]["error_scale"], 2.0);
    assert_eq!(with_config["parameters"]["log_g"]["err_external"], 0.5);
    let fingerprint = |report: &Value| report["provenance"]["config_fingerprint"].clone();
    assert_ne!(fingerprint(plain), fingerprint(with_config));
    let broken = folder::write(&folder, "broken.toml", b"[fit]\nouter_sigma = 3.0");
    let output = emberline(&["fit", "--config", path(&broken), path(&star)]);
    assert_eq!(exit_code(&output), 2);
    assert!(String::from_utf8_lossy(&output.stderr).contains("did you mean `fit.outlier_sigma`"));
}

#[test]
fn the_hash_in_the_report_is_that_of_the_file() {
    let star = folder::data("calspec/gd50_004.fits.gz");
    let report = &reports(&emberline(&["fit", path(&star)]))[0];
    let hash = blake3::hash(&std::fs::read(&star).unwrap()).to_hex().to_string();
    assert_eq!(report["source"]["blake3"], hash);
    assert_eq!(report["source"]["layout"], "calspec");
    assert_eq!(report["source"]["medium"], "vacuum");
}

#[test]
fn a_reader_of_stdout_that_goes_away_is_no_failure() {
    let mut child = Command::new(env!("CARGO_BIN_EXE_emberline"))
        .arg("schema")
        .stdout(Stdio::piped())
        .stderr(Stdio::piped())
        .spawn()
        .unwrap();
    drop(child.stdout.take());
    let output = child.wait_with_output().unwrap();
    assert_eq!(exit_code(&output), 0, "{}", String::from_utf8_lossy(&output.stderr));
}

/// `src/spectrum/readers/LAYOUTS.md` is what the program prints.
#[test]
fn the_table_of_layouts_is_the_documentation() {
    let printed = String::from_utf8(emberline(&["check", "--layouts"]).stdout).unwrap();
    let place = Path::new(env!("CARGO_MANIFEST_DIR")).join("src/spectrum/readers/LAYOUTS.md");
    let committed = std::fs::read_to_string(place).unwrap();
    let (_, table) = committed.split_once("\n\n").expect("a sentence above the table");
    assert_eq!(table, printed, "write the table again with `emberline check --layouts`");
    for layout in emberline::spectrum::readers::LAYOUTS {
        assert!(printed.contains(&format!("| `{}` |", layout.name)), "{}", layout.name);
    }
}
