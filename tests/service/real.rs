//! The program itself with the real analysis: real stars, stars of other kinds, and hostile files.

use std::collections::BTreeMap;
use std::fs;
use std::path::{Path, PathBuf};
use std::process::Command;

use serde_json::Value;

use crate::support::folder;
use crate::support::site::Site;
use crate::support::{AMPLE, wait_until};

/// Real DA white dwarfs of CALSPEC; see `tests/data/SOURCES.md`.
const DA: [&str; 5] = [
    "calspec/gd71_stisnic_002.fits.gz",
    "calspec/gd153_stisnic_002.fits.gz",
    "calspec/grw_70d5824_stisnic_002.fits.gz",
    "calspec/hz2_005.fits.gz",
    "calspec/wd1057_719_stisnic_002.fits.gz",
];

/// Real stars that are none, and a code of which their reports must speak.
const NOT_DA: [(&str, &str); 4] = [
    ("not_da/feige34_stis_001.fits.gz", "screen.helium-lines"),
    ("not_da/lds749b_stisnic_002.fits.gz", "screen.no-balmer-lines"),
    ("not_da/hz21_stis_001.fits.gz", "screen.helium-lines"),
    ("not_da/bd_17d4708_stisnic_002.fits.gz", "screen.narrow-lines"),
];

/// Changes only what is read of GD 71.
const SECTION: &str = r#"
[[instrument]]
name = "GD 71 as read anew"
match = { TARGETID = "gd71*", DBTABLE = "CRSPECTRUM" }
masks_vac_aa = [[4855.0, 4870.0]]
error_scale = 1.5
"#;

fn deliver(site: &Site, name: &str, bytes: &[u8]) -> PathBuf {
    let staging = site.folder.path().join("staging");
    fs::write(&staging, bytes).unwrap();
    let path = site.inbox.join(name);
    fs::rename(&staging, &path).unwrap();
    path
}

fn hash(bytes: &[u8]) -> String {
    blake3::hash(bytes).to_hex().to_string()
}

/// The reports in force by the hash of their input; more than one per input is an error.
fn reports_in_force(reports: &Path) -> BTreeMap<String, Value> {
    let mut found = BTreeMap::new();
    for entry in walkdir::WalkDir::new(reports).into_iter().filter_map(Result::ok) {
        if entry.path().to_string_lossy().ends_with(".current.json") {
            let report: Value = serde_json::from_slice(&fs::read(entry.path()).unwrap()).unwrap();
            let source = report["source"]["blake3"].as_str().unwrap().to_owned();
            assert!(found.insert(source, report).is_none(), "two reports on {}", entry.path().display());
        }
    }
    found
}

fn codes(report: &Value) -> Vec<&str> {
    report["flags"].as_array().unwrap().iter().map(|flag| flag["code"].as_str().unwrap()).collect()
}

/// Files that must cost nothing but a report: name, bytes, code.
fn hostile() -> Vec<(&'static str, Vec<u8>, &'static str)> {
    let star = fs::read(folder::data(DA[0])).unwrap();
    let mut torn = star.clone();
    torn.truncate(star.len() / 2);
    let block = |cards: &[&str]| {
        let mut text: String = cards.iter().chain(&["END"]).map(|card| format!("{card:80}")).collect();
        text.extend(std::iter::repeat_n(' ', text.len().next_multiple_of(2880) - text.len()));
        text.into_bytes()
    };
    let primary = [
        "SIMPLE  =                    T",
        "BITPIX  =                    8",
        "NAXIS   =                    0",
    ];
    let table = |rows: &str, form: &str| {
        let rows = format!("NAXIS2  = {rows:>20}");
        let form = format!("TFORM1  = '{form}'");
        let cards = [
            "XTENSION= 'BINTABLE'",
            "BITPIX  =                    8",
            "NAXIS   =                    2",
            "NAXIS1  =                    8",
            &rows,
            "PCOUNT  =                    0",
            "GCOUNT  =                    1",
            "TFIELDS =                    1",
            "TTYPE1  = 'WAVELENGTH'",
            &form,
        ];
        [block(&primary), block(&cards)].concat()
    };
    vec![
        ("notes.fits", b"not a spectrum at all".to_vec(), "file.not-fits"),
        ("torn.fits.gz", torn, "file.bad-gzip"),
        ("long.fits", table("9000000", "1D"), "file.truncated"),
        ("endless.fits", table("9000000000000000000", "1D"), "file.bad-header"),
        ("a(out.fits)[1][#row<3].fits", block(&primary), "spectrum.layout-unknown"),
    ]
}

#[test]
fn real_stars_other_stars_and_hostile_files_get_one_right_report_each() {
    let site = Site::new();
    site.configure("inbox.still_s = 0.2");
    let mut daemon = site.start_real();
    let mut expected: BTreeMap<String, (&str, Option<&str>)> = BTreeMap::new();
    for file in DA {
        let bytes = fs::read(folder::data(file)).unwrap();
        expected.insert(hash(&bytes), ("accepted", None));
        deliver(&site, Path::new(file).file_name().unwrap().to_str().unwrap(), &bytes);
    }
    for (file, code) in NOT_DA {
        let bytes = fs::read(folder::data(file)).unwrap();
        expected.insert(hash(&bytes), ("not accepted", Some(code)));
        deliver(&site, Path::new(file).file_name().unwrap().to_str().unwrap(), &bytes);
    }
    for (name, bytes, code) in hostile() {
        expected.insert(hash(&bytes), ("rejected", Some(code)));
        deliver(&site, name, &bytes);
    }
    // Left alone: nothing in it, still being written, a link that leads out, no spectrum by its name.
    deliver(&site, "empty.fits", b"");
    deliver(&site, "growing.fits.part", b"SIMPLE");
    deliver(&site, "README.txt", b"read me");
    std::os::unix::fs::symlink("/etc/hostname", site.inbox.join("out.fits")).unwrap();
    // The same star under a second name makes no second report.
    deliver(&site, "copy.fits.gz", &fs::read(folder::data(DA[0])).unwrap());

    // Idle may also mean that the kernel has not told of the files yet.
    wait_until("all are noticed", AMPLE, || {
        let status = daemon.status();
        status.jobs.done == expected.len() as u64 && status.inbox.left_alone.values().sum::<u64>() == 4
    });
    let status = daemon.wait_until_idle();
    let reports = reports_in_force(&site.reports);
    for (source, (verdict, code)) in &expected {
        let report =
            reports.get(source).unwrap_or_else(|| panic!("no report: {verdict} {code:?}\n{}", site.log()));
        let (name, found) = (&report["object"]["name"], report["verdict"].as_str().unwrap());
        println!("{name:>16} {found:>9} {}", codes(report).join(" "));
        match *verdict {
            "not accepted" => assert_ne!(found, "accepted", "{name}"),
            _ => assert_eq!(found, *verdict, "{name}: {:?}", codes(report)),
        }
        assert!(
            code.is_none_or(|code| codes(report).contains(&code)),
            "{name}: {:?}, need {code:?}",
            codes(report)
        );
        assert_eq!(report["provenance"]["config_fingerprint"], status.fingerprint.as_str());
    }
    assert_eq!(reports.len(), expected.len());
    assert!(!Path::new("out.fits").exists() && !site.inbox.join("out.fits)").exists(), "no name was parsed");
    let jobs = &status.jobs;
    assert_eq!((jobs.done, jobs.rejected, jobs.failed, jobs.gone), (expected.len() as u64, 0, 0, 0));
    assert_eq!(status.ended_since_start, expected.len() as u64);
    for reason in ["empty", "temporary-name", "other-ending", "link-leaves-folder"] {
        assert_eq!(status.inbox.left_alone.get(reason), Some(&1), "{reason}: {:?}", status.inbox.left_alone);
    }

    // A report that somebody removed must be made again, whatever its answer key says.
    let removed = fs::read_dir(site.reports.join("GD153")).unwrap().map(|entry| entry.unwrap().path());
    removed
        .filter(|path| !path.to_string_lossy().ends_with(".current.json"))
        .for_each(|path| fs::remove_file(path).unwrap());

    // A section about one star makes the report on that star stale, and no other.
    site.configure(&format!("inbox.still_s = 0.2\n{SECTION}"));
    daemon.refit(false).unwrap();
    let after = daemon.wait_until_idle();
    assert_ne!(after.fingerprint, status.fingerprint);
    // GD 71, the removed report, and two torn files, whose faults may pass: everything else is left as it is.
    let is_torn =
        |report: &Value| codes(report).iter().any(|code| ["file.bad-gzip", "file.truncated"].contains(code));
    assert_eq!(after.unchanged_since_start as usize, reports.len() - 4, "{}", site.log());
    assert_eq!(after.jobs.done, expected.len() as u64);
    let refitted = reports_in_force(&site.reports);
    assert_eq!(refitted.len(), reports.len());
    for (source, report) in &refitted {
        let is_star = report["object"]["name"] == "GD71";
        let section = &report["source"]["instrument_section"];
        assert_eq!(section.is_object(), is_star);
        if is_star {
            assert_eq!(section["name"], "GD 71 as read anew");
            assert_eq!(section["error_scale"], 1.5);
            assert!(section["masked_pixels"].as_u64().unwrap() > 2);
        } else if report["object"]["name"] != "GD153" && !is_torn(report) {
            assert_eq!(report, &reports[source], "the very same report");
        }
    }
    // The removed report is not there to be compared with.
    compare(&site, &status.fingerprint, &after.fingerprint, reports.len() - 1);
    // A section that asks for nonsense is refused, and the daemon runs on.
    site.configure(&format!("inbox.still_s = 0.2\n{}", SECTION.replace("1.5", "-1.5")));
    assert!(daemon.refit(false).unwrap_err().contains("`error_scale` is -1.5"));
    assert_eq!(daemon.status().fingerprint, after.fingerprint);
    assert_eq!(daemon.stop(), 0);
}

fn compare(site: &Site, old: &str, new: &str, spectra: usize) {
    let figure = site.folder.path().join("shifts.svg");
    let output = Command::new(env!("CARGO_BIN_EXE_emberline"))
        .args(["compare", old, new, "--config"])
        .arg(&site.config_path)
        .arg("--figure")
        .arg(&figure)
        .output()
        .unwrap();
    let text = String::from_utf8(output.stdout).unwrap();
    println!("{text}");
    assert!(output.status.success(), "{}", String::from_utf8_lossy(&output.stderr));
    let both = format!("{spectra} spectra in both, 0 only in the old run, 1 only in the new one");
    assert!(text.contains(&both), "{text}");
    assert!(text.contains("teff_k     median shift +0.00000 K"), "{text}");
    assert!(text.contains("GD71"), "the one that shifted is told by name: {text}");
    let svg = fs::read_to_string(figure).unwrap();
    assert!(svg.starts_with("<svg") && svg.contains("<title>GD71") && svg.matches("<circle").count() > 9);
}
