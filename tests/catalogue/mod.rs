//! The catalogue: columns against the report, rows, exports against other people's readers, reports loaded back.

use std::fs;
use std::path::{Path, PathBuf};
use std::process::Command;

use emberline::archive::catalogue::{Catalogue, CatalogueError, Filter};
use emberline::archive::column::{Cell, Origin, columns, row};
use emberline::archive::export::{ExportError, Format, export};
use emberline::fit::FitSettings;
use emberline::grid::track_table::TrackTable;
use emberline::report::{Analysis, SCHEMA_VERSION, report_file};
use emberline::spectrum::ReadSettings;
use serde_json::{Value, json};

use crate::support::folder;
use crate::support::published::{bundled_grid, root};

/// A real report.
fn real_report() -> Value {
    let tracks = TrackTable::read(&root().join("grids/tracks.fits")).unwrap();
    let analysis = Analysis::new(bundled_grid(), &tracks, &FitSettings::default());
    let path = root().join("tests/data/calspec/gd71_stisnic_002.fits.gz");
    serde_json::to_value(report_file(&path, &ReadSettings::default(), &analysis).remove(0)).unwrap()
}

/// A report with an awkward name, and with holes.
fn invented(number: usize, name: &str) -> Value {
    json!({
        "schema_version": SCHEMA_VERSION,
        "object": { "name": name, "ra_deg": 12.5 * number as f64 % 360.0, "dec_deg": -40.0 + number as f64 % 80.0 },
        "source": { "path": "night/one.fits", "blake3": format!("{number:064x}"), "hdu": number },
        "verdict": if number.is_multiple_of(3) { "review" } else { "accepted" },
        "flags": [{ "code": "fit.low-snr" }, { "code": "star.instability-strip" }],
        "parameters": { "teff_k": { "value": 12_000.1 + number as f64, "err_total": null } },
        "star": { "mass_msun": { "value": 0.6 / 7.0, "err_minus": 1e-3 } },
        "provenance": { "config_fingerprint": "feed0123", "fitted_at": format!("2026-03-0{}T10:00:00Z", 1 + number % 9) },
    })
}

const NAMES: [&str; 8] = [
    "KF 0412+11",
    "Robert'); DROP TABLE results;--",
    "<b>&\"quoted\", with comma</b>",
    "\u{3b1} Cet \u{2603}",
    "two\nlines\r\tand a tab",
    "nul\0inside",
    "",
    "bell\u{7}",
];

fn put_invented(catalogue: &mut Catalogue) {
    let rows: Vec<Vec<Cell>> = NAMES
        .iter()
        .enumerate()
        .map(|(i, name)| {
            row(&invented(i, name), &format!("o{i}/s.f.json"), &format!("o{i}/s.current.json"), true)
        })
        .collect();
    catalogue.put(&rows).unwrap();
}

fn open(folder: &Path) -> (Catalogue, PathBuf) {
    let path = folder.join("catalogue.sqlite");
    (Catalogue::open(&path).unwrap(), path)
}

fn cell<'a>(cells: &'a [Cell], name: &str) -> &'a Cell {
    &cells[columns().iter().position(|column| column.name == name).unwrap()]
}

fn all_rows(catalogue: &Catalogue, filter: &Filter) -> Vec<Vec<Cell>> {
    let mut rows = Vec::new();
    let keep = |cells: &[Cell]| {
        rows.push(cells.to_vec());
        Ok::<(), CatalogueError>(())
    };
    catalogue.for_each(filter, keep).unwrap();
    rows
}

/// Every column that comes from the report names a place that a report has.
#[test]
fn columns_name_places_of_the_report() {
    let report = real_report();
    for column in columns() {
        if let Origin::Report(place) = &column.origin {
            assert!(report.pointer(place).is_some(), "{}: no {place} in the report", column.name);
        }
        assert!(!column.description.is_empty() && column.description.len() <= 68, "{}", column.name);
    }
    let mut names: Vec<&str> = columns().iter().map(|column| column.name.as_str()).collect();
    names.sort_unstable();
    names.dedup();
    assert_eq!(names.len(), columns().len(), "names are unique");
}

/// The keys of a report are those of its schema version. A key that goes away or changes its meaning needs a
/// higher `SCHEMA_VERSION`; a new one does not. In either case the list is written anew, by
/// `EMBERLINE_WRITE_KEYS=1 cargo test --locked -- keys_of_the_report`.
#[test]
fn keys_of_the_report_change_with_its_version() {
    fn gather(value: &Value, place: &str, keys: &mut Vec<String>) {
        match value {
            Value::Object(map) if !map.is_empty() => {
                map.iter().for_each(|(key, value)| gather(value, &format!("{place}/{key}"), keys));
            }
            Value::Array(list) if place != "/solutions/0/covariance" && !list.is_empty() => {
                gather(&list[0], &format!("{place}/0"), keys);
            }
            _ => keys.push(place.to_owned()),
        }
    }
    let mut keys = vec![format!("schema_version {SCHEMA_VERSION}")];
    gather(&real_report(), "", &mut keys);
    keys[1..].sort();
    let path = root().join("tests/data/report_keys.txt");
    if std::env::var_os("EMBERLINE_WRITE_KEYS").is_some() {
        fs::write(&path, keys.join("\n") + "\n").unwrap();
    }
    let kept = fs::read_to_string(path).unwrap();
    let kept: Vec<&str> = kept.lines().collect();
    let gone: Vec<&&str> = kept.iter().filter(|key| !keys.iter().any(|found| found == **key)).collect();
    assert!(gone.is_empty(), "keys went away without a step of SCHEMA_VERSION: {gone:?}");
    assert_eq!(keys, kept, "new keys: write the list anew");
}

/// What is said twice changes nothing, what is superseded stays, and one row per spectrum is in force.
#[test]
fn rows_are_kept_once_and_superseded() {
    let folder = folder::temporary();
    let (mut catalogue, _) = open(folder.path());
    let of = |report: &str, value: f64| {
        let report_json = json!({ "parameters": { "teff_k": { "value": value } } });
        row(&report_json, report, "a/s.current.json", true)
    };
    for _ in 0..2 {
        catalogue.put(&[of("a/s.old.json", 1.0)]).unwrap();
    }
    catalogue.put(&[of("a/s.new.json", 2.0)]).unwrap();
    assert_eq!(catalogue.standing("a/s.old.json").unwrap(), Some(false));
    assert_eq!(catalogue.standing("a/s.new.json").unwrap(), Some(true));
    assert_eq!(catalogue.standing("a/never.json").unwrap(), None);
    let every = Filter { with_superseded: true, ..Filter::default() };
    assert_eq!((catalogue.count(&Filter::default()).unwrap(), catalogue.count(&every).unwrap()), (1, 2));
    catalogue.retire("a/s.current.json").unwrap();
    assert_eq!((catalogue.count(&Filter::default()).unwrap(), catalogue.count(&every).unwrap()), (0, 2));
}

#[test]
fn filters_and_awkward_names() {
    let folder = folder::temporary();
    let (mut catalogue, _) = open(folder.path());
    put_invented(&mut catalogue);
    let rows = all_rows(&catalogue, &Filter::default());
    assert_eq!(rows.len(), NAMES.len());
    for (i, name) in NAMES.iter().enumerate() {
        let kept = name.replace(['\0', '\u{7}', '\r'], "\u{fffd}");
        assert_eq!(cell(&rows[i], "object_name"), &Cell::Text(kept));
        assert!(matches!(cell(&rows[i], "healpix_18"), Cell::Integer(cell) if *cell >= 0));
        assert_eq!(cell(&rows[i], "teff_k_err_total"), &Cell::Null);
    }
    let count = |filter| catalogue.count(&filter).unwrap();
    assert_eq!(count(Filter { verdict: Some("review".to_owned()), ..Filter::default() }), 3);
    assert_eq!(count(Filter { since: Some("2026-03-05".to_owned()), ..Filter::default() }), 4);
    assert_eq!(count(Filter { run: Some("feed".to_owned()), ..Filter::default() }), 8);
    assert_eq!(count(Filter { run: Some("' OR 1=1 --".to_owned()), ..Filter::default() }), 0);
}

/// HEALPix of known places, nested: the first cell of base pixel 4 begins at (0, 0)'s south (Gorski et al. 2005);
/// order 0 of three positions by hand, scaled down from order 18.
#[test]
fn healpix_cells_lie_in_the_right_base_pixels() {
    for (ra_deg, dec_deg, base) in [(45.0, 89.0, 0), (135.0, 80.0, 1), (0.0, 0.1, 4), (45.0, -80.0, 8)] {
        let report = json!({ "object": { "ra_deg": ra_deg, "dec_deg": dec_deg } });
        let cells = row(&report, "r", "p", true);
        let Cell::Integer(found) = cell(&cells, "healpix_18") else { panic!("no cell") };
        assert_eq!(found >> 36, base, "{ra_deg} {dec_deg}");
    }
}

/// Every export against the catalogue itself, read by astropy, pyarrow and Python's csv and sqlite3. Skipped where
/// they are missing, unless EMBERLINE_TEST_PYTHON names an interpreter, as `.ci/run` does.
#[test]
fn exports_agree_with_the_catalogue() {
    let folder = folder::temporary();
    let (mut catalogue, path) = open(folder.path());
    catalogue.put(&[row(&real_report(), "GD71/s.f.json", "GD71/s.current.json", true)]).unwrap();
    put_invented(&mut catalogue);
    for (format, name) in [
        (Format::Fits, "export.fits"),
        (Format::Votable, "export.vot"),
        (Format::Parquet, "export.parquet"),
        (Format::Ecsv, "export.ecsv"),
        (Format::Csv, "export.csv"),
    ] {
        let count =
            export(&catalogue, &Filter::default(), format, &folder.path().join(name), &|| {}).unwrap();
        assert_eq!(count, 1 + NAMES.len() as u64);
    }
    let named = std::env::var_os("EMBERLINE_TEST_PYTHON");
    let python = named.clone().unwrap_or_else(|| "python3".into());
    let ready = Command::new(&python).args(["-c", "import astropy, pyarrow"]).output();
    if named.is_none() && !ready.is_ok_and(|output| output.status.success()) {
        println!("SKIPPED: python3 with astropy and pyarrow is not here");
        return;
    }
    let script = root().join("tests/data/check_exports.py");
    let output = Command::new(python).arg(script).arg(&path).arg(folder.path()).output().unwrap();
    let said =
        String::from_utf8_lossy(&output.stdout).into_owned() + &String::from_utf8_lossy(&output.stderr);
    println!("{said}");
    assert!(output.status.success(), "{said}");
}

/// A failed export leaves nothing behind, and an older export untouched.
#[test]
fn a_failed_export_changes_nothing() {
    let folder = folder::temporary();
    let (catalogue, _) = open(folder.path());
    let missing = folder.path().join("no/such/folder/export.csv");
    let fault = export(&catalogue, &Filter::default(), Format::Csv, &missing, &|| {}).unwrap_err();
    assert!(matches!(fault, ExportError::Write { .. }), "{fault}");
    assert!(fault.to_string().contains("no/such/folder"));
}

#[test]
fn a_catalogue_of_a_newer_program_is_refused() {
    let folder = folder::temporary();
    let (catalogue, path) = open(folder.path());
    drop(catalogue);
    rusqlite::Connection::open(&path).unwrap().pragma_update(None, "user_version", 99).unwrap();
    let fault = Catalogue::open(&path).err().unwrap().to_string();
    assert!(fault.contains("99") && fault.contains("newer"), "{fault}");
}

/// `catalogue load` makes of a folder of reports what the daemon would have made, and `export` writes it.
#[test]
fn reports_are_loaded_back() {
    let folder = folder::temporary();
    let object = folder.path().join("reports/KF_0412+11");
    fs::create_dir_all(&object).unwrap();
    for (name, teff_k) in [("a1.0ld.json", 11_000.0), ("a1.new.json", 12_000.0)] {
        // The first version of the document, without what came later.
        let report = json!({ "schema_version": 1, "parameters": { "teff_k": { "value": teff_k } } });
        fs::write(object.join(name), report.to_string()).unwrap();
    }
    std::os::unix::fs::symlink("a1.new.json", object.join("a1.current.json")).unwrap();
    fs::write(object.join("torn.x.json"), "{").unwrap();
    let catalogue = folder.path().join("catalogue.sqlite");
    let run = |arguments: &[&str]| {
        let mut command = Command::new(env!("CARGO_BIN_EXE_emberline"));
        command.arg("catalogue").args(arguments).arg("--catalogue").arg(&catalogue).output().unwrap()
    };
    let loaded = run(&["load", folder.path().join("reports").to_str().unwrap()]);
    assert_eq!(loaded.status.code(), Some(3), "one report is torn: {loaded:?}");
    assert!(String::from_utf8_lossy(&loaded.stderr).contains("torn.x.json"));
    let file = folder.path().join("out.csv");
    let exported = run(&["export", "--format", "csv", file.to_str().unwrap()]);
    assert_eq!(exported.status.code(), Some(0), "{exported:?}");
    let text = fs::read_to_string(file).unwrap();
    assert_eq!(text.lines().count(), 2, "{text}");
    assert!(text.contains("12000") && !text.contains("11000"), "{text}");
}
