//! Hostile files through the reader processes and through the whole daemon: whatever a file is, and
//! whatever it is called, it ends with spectra or with a code, and the daemon lives.

use std::collections::{BTreeMap, BTreeSet};
use std::fs;
use std::io::Write;
use std::path::{Path, PathBuf};
use std::process::Command;

use emberline::codes;
use emberline::service::reader_process::Limits;
use emberline::spectrum::ReadSettings;
use serde_json::Value;

use super::readers::{LIMITS, pool_with};
use crate::spectrum::lenient;
use crate::spectrum::mutants::{MANY_MUTANTS, for_each_mutant};
use crate::support::folder;
use crate::support::site::Site;

/// Names that mean something to a C library, a shell, or a careless log.
const NAMES: &[&str] = &[
    "plain.fits",
    "a[1].fits",
    "a.fits[1][#row<3].fits",
    "b(out.fits).fits",
    "| touch hacked; .fits",
    "!overwrite.fits",
    "two\nlines.fits",
    "~nouser.fits",
    "ftp:__x.fits",
    "- -rf.fits",
    "mem:__.fits",
    "%s%n%d.fits",
    "\u{1b}[2Jred.fits",
    "stdin-.fits",
    "{brace,two}.fits",
    "ünïcode \u{202e}.fits",
    "'quote\".fits",
    "back\\slash.fits",
    "$(id).fits",
    "a;b&c.fits",
];

/// Mutants per seed and kind in the ordinary run.
const FEW_MUTANTS: usize = 12;

/// Peak memory of a process from `/proc`, bytes: address space and resident.
fn peaks(process: &str) -> Option<(u64, u64)> {
    let status = fs::read_to_string(format!("/proc/{process}/status")).ok()?;
    let value = |key: &str| {
        let line = status.lines().find(|line| line.starts_with(key))?;
        Some(line.split_whitespace().nth(1)?.parse::<u64>().ok()? * 1024)
    };
    Some((value("VmPeak:")?, value("VmHWM:")?))
}

/// Has this many mutants per seed and kind read by a reader process; returns how many files that were.
fn read_mutants(per_seed_and_kind: usize) -> usize {
    // Bombs reach the limit on files at 30 MB unpacked; the limit on memory holds whatever is in a file.
    let settings = ReadSettings { largest_file_mb: 30, ..lenient() };
    let limits = Limits { memory_bytes: 300_000_000, ..LIMITS };
    let pool = pool_with(&settings, limits);
    let folder = tempfile::tempdir().unwrap();
    let mut tally: BTreeMap<&str, usize> = BTreeMap::new();
    let (mut files, mut objects, mut highest) = (0, 0, (0, 0));
    for_each_mutant(per_seed_and_kind, |seed, bytes| {
        let path = folder.path().join(NAMES[files % NAMES.len()]);
        fs::write(&path, bytes).unwrap();
        files += 1;
        let outcomes = pool.read(&path);
        assert!(!outcomes.is_empty(), "{seed}: a file vanished without a code");
        for outcome in outcomes {
            objects += 1;
            let code = match outcome {
                Ok(_) => "read",
                Err(refusal) => refusal.fault.code().id,
            };
            *tally.entry(code).or_default() += 1;
        }
        if files % 100 == 0
            && let Some(found) = pool.idle_process_ids().first().and_then(|id| peaks(&id.to_string()))
        {
            highest = (highest.0.max(found.0), highest.1.max(found.1));
        }
    });
    let counts = pool.counts();
    let own = peaks("self").unwrap();
    println!("{files} files, {objects} objects: {tally:?}");
    println!(
        "readers: {counts:?}; peak {} MB of address space (limit {} MB), {} MB resident; this process {} MB",
        highest.0 / 1_000_000,
        limits.memory_bytes / 1_000_000,
        highest.1 / 1_000_000,
        own.1 / 1_000_000
    );
    assert!(tally.keys().all(|code| *code == "read" || codes::find(code).is_some()));
    assert!(tally.len() > 12, "too few kinds of outcome: {tally:?}");
    assert!(highest.0 > 0 && highest.0 <= limits.memory_bytes);
    let lost = counts.crashed + counts.over_memory + counts.over_time + counts.bad_answers;
    assert_eq!(counts.started, 1 + lost);
    assert_eq!(counts.crashed, 0, "a reader crashed: {tally:?}");
    // The names were only names.
    let left: Vec<PathBuf> =
        fs::read_dir(folder.path()).unwrap().map(|entry| entry.unwrap().path()).collect();
    assert!(left.iter().all(|path| NAMES.iter().any(|name| path == &folder.path().join(name))), "{left:?}");
    files
}

#[test]
fn mutants_cost_no_reader() {
    read_mutants(FEW_MUTANTS);
}

#[test]
#[ignore = "20 minutes; run: nice cargo test -- --ignored --nocapture a_hundred_thousand_mutants_cost_no_reader"]
fn a_hundred_thousand_mutants_cost_no_reader() {
    assert!(read_mutants(MANY_MUTANTS) >= 100_000);
}

/// The real daemon over an inbox of hostile names and contents.
#[test]
fn the_daemon_outlives_hostile_files() {
    let site = Site::new();
    let plain = fs::read(folder::data("layouts/sdss_spec.fits.gz")).unwrap();
    let mut contents: Vec<Vec<u8>> = vec![plain.clone(), b"SIMPLE  =".to_vec(), plain[..900].to_vec()];
    // 300 MB of zeros, more than the largest file that is read.
    let mut bomb = flate2::write::GzEncoder::new(Vec::new(), flate2::Compression::fast());
    for _ in 0..300 {
        bomb.write_all(&vec![0; 1_000_000]).unwrap();
    }
    contents.push(bomb.finish().unwrap());
    for_each_mutant(1, |_, bytes| contents.push(bytes));
    // Equal bytes are one job, which has one report under one of the names.
    let mut seen = BTreeSet::new();
    // Empty files are left alone and counted; see `service::inbox`.
    contents.retain(|bytes| !bytes.is_empty() && seen.insert(bytes.clone()));
    let mut placed = BTreeSet::new();
    for (number, bytes) in contents.iter().enumerate() {
        let name = format!("{number} {}", NAMES[number % NAMES.len()]);
        let path = site.inbox.join(name);
        fs::write(&path, bytes).unwrap();
        placed.insert(path);
    }
    site.configure("inbox.still_s = 0.0\nretry.attempts = 1");
    let output = Command::new(env!("CARGO_BIN_EXE_emberline"))
        .args(["watch", "--drain", "--config"])
        .arg(&site.config_path)
        .env("EMBERLINE_GRIDS", Path::new(env!("CARGO_MANIFEST_DIR")).join("grids"))
        .output()
        .unwrap();
    let log = String::from_utf8_lossy(&output.stderr);
    assert_eq!(output.status.code(), Some(0), "{log}");
    assert!(!log.contains("reader lost"), "{log}");
    // Names do not write into the log: one line is one event, and terminals are not told anything.
    assert!(log.lines().all(|line| line.is_empty() || line.starts_with("20")), "{log}");
    assert!(!log.contains('\u{1b}'), "{log}");
    let mut reported = BTreeSet::new();
    let mut tally: BTreeMap<String, usize> = BTreeMap::new();
    for entry in walkdir::WalkDir::new(&site.reports) {
        let path = entry.unwrap().into_path();
        if !path.to_string_lossy().ends_with(".current.json") {
            continue;
        }
        let report: Value = serde_json::from_slice(&fs::read(&path).unwrap()).unwrap();
        reported.insert(PathBuf::from(report["source"]["path"].as_str().unwrap()));
        let flags = report["flags"].as_array().unwrap();
        assert!(report["verdict"] == "accepted" || !flags.is_empty(), "{report}");
        *tally.entry(report["verdict"].as_str().unwrap().to_owned()).or_default() += 1;
    }
    println!("{} files: {tally:?}", placed.len());
    let missing: Vec<&PathBuf> = placed.difference(&reported).collect();
    assert!(missing.is_empty(), "no report of {missing:?}\n{log}");
}
