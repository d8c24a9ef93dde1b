//! Fuzzing: every reader, the opening of files and the configuration, on mutated seeds.
//!
//! Each target takes bytes and must return; a panic, a hang or a signal is the finding. Readers are called directly,
//! also on files that they do not recognise, so that nothing relies on `identify`. Seeds are the files of
//! `tests/data` and small generated ones, for the configuration the sample. Mutations are those of
//! `spectrum::mutants` and splices of two seeds; there is no feedback from coverage. A run for as long as one likes,
//! with another seed each time:
//!
//! ```text
//! EMBERLINE_FUZZ_S=600 EMBERLINE_FUZZ_SEED=7 cargo test -- --ignored --nocapture fuzz_for_long
//! ```
//!
//! The input at hand is kept in `target/tmp/fuzz-<run>-<target>`, so that a finding can be looked at.

use std::fs;
use std::path::{Path, PathBuf};
use std::time::{Duration, Instant};

use emberline::service::config::Config;
use emberline::spectrum::fits::FitsFile;
use emberline::spectrum::read_unpacked;
use emberline::spectrum::readers::{LAYOUTS, Reader};
use rand::{Rng, RngExt, SeedableRng};
use rand_chacha::ChaCha8Rng;

use crate::spectrum::lenient;
use crate::spectrum::mutants::{mutate, seeds};

/// Inputs per target in the ordinary run.
const FEW: usize = 150;
/// No input of this size may take longer, in an unoptimised build on a loaded machine.
const LONGEST: Duration = Duration::from_secs(20);

struct Target {
    name: String,
    seeds: Vec<Vec<u8>>,
    run: Box<dyn Fn(Vec<u8>)>,
}

fn targets() -> Vec<Target> {
    let files: Vec<Vec<u8>> = seeds().into_iter().map(|(_, bytes)| bytes).collect();
    let mut targets = Vec::new();
    for layout in LAYOUTS {
        let run: Box<dyn Fn(Vec<u8>)> = match layout.reader {
            Reader::Fits { identify, read } => Box::new(move |bytes| {
                if let Ok(fits) = FitsFile::parse(bytes, 30_000_000) {
                    identify(&fits);
                    // Whatever it is: the reader must not rely on having recognised it.
                    let _ = read(&fits);
                }
            }),
            Reader::Text { identify, read } => Box::new(move |bytes| {
                identify(&bytes);
                let _ = read(&bytes);
            }),
        };
        targets.push(Target { name: layout.name.to_owned(), seeds: files.clone(), run });
    }
    let settings = lenient();
    targets.push(Target {
        name: "whole-path".to_owned(),
        seeds: files,
        run: Box::new(move |bytes| {
            assert!(!read_unpacked(bytes, String::new(), String::new(), &settings).is_empty());
        }),
    });
    let sample = fs::read(Path::new(env!("CARGO_MANIFEST_DIR")).join("config/emberline.toml")).unwrap();
    let live: String = String::from_utf8(sample.clone())
        .unwrap()
        .lines()
        .map(|line| {
            line.strip_prefix("# ")
                .filter(|rest| rest.contains(" = ") || rest.starts_with('['))
                .unwrap_or(line)
        })
        .flat_map(|line| [line, "\n"])
        .collect();
    targets.push(Target {
        name: "configuration".to_owned(),
        seeds: vec![sample, live.into_bytes(), b"[inbox]\nfolders = [\"a\"]".to_vec()],
        run: Box::new(|bytes| {
            let text = String::from_utf8_lossy(&bytes);
            if let Ok(config) = Config::parse(&text, Path::new("fuzz"), |_| None) {
                // What is shown as in effect means the same.
                let shown = toml::to_string(&config).unwrap();
                assert_eq!(Config::parse(&shown, Path::new("shown"), |_| None).unwrap(), config);
            }
        }),
    });
    targets
}

/// One input: a mutant of one seed, or of the start of one and the end of another.
fn input(seeds: &[Vec<u8>], random: &mut ChaCha8Rng) -> Vec<u8> {
    let mut bytes = seeds[random.random_range(0..seeds.len())].clone();
    if random.random_bool(0.2) {
        let other = &seeds[random.random_range(0..seeds.len())];
        let (keep, from) = (random.random_range(0..=bytes.len()), random.random_range(0..=other.len()));
        bytes.truncate(keep);
        bytes.extend_from_slice(&other[from..]);
    }
    for _ in 0..random.random_range(1..=3) {
        if !bytes.is_empty() {
            mutate(&mut bytes, random);
        }
    }
    bytes
}

fn kept(run: &str, target: &Target) -> PathBuf {
    Path::new(env!("CARGO_TARGET_TMPDIR")).join(format!("fuzz-{run}-{}", target.name))
}

/// Runs a target on one input, which is kept until it has passed.
fn try_one(run: &str, target: &Target, bytes: Vec<u8>) {
    let path = kept(run, target);
    fs::write(&path, &bytes).unwrap();
    let started = Instant::now();
    (target.run)(bytes);
    assert!(started.elapsed() < LONGEST, "{}: {:?}, see {}", target.name, started.elapsed(), path.display());
    fs::remove_file(&path).unwrap();
}

#[test]
fn every_reader_survives_every_seed() {
    for target in targets() {
        for seed in &target.seeds {
            try_one("seeds", &target, seed.clone());
        }
    }
}

#[test]
fn fuzz_each_target_briefly() {
    let mut random = ChaCha8Rng::seed_from_u64(20_261_202);
    for target in targets() {
        for _ in 0..FEW {
            try_one("brief", &target, input(&target.seeds, &mut random));
        }
    }
}

#[test]
#[ignore = "as long as EMBERLINE_FUZZ_S says; run: EMBERLINE_FUZZ_S=600 cargo test -- --ignored --nocapture fuzz_for_long"]
fn fuzz_for_long() {
    let number = |name: &str| std::env::var(name).ok().and_then(|value| value.parse::<u64>().ok());
    let seconds = number("EMBERLINE_FUZZ_S").expect("EMBERLINE_FUZZ_S says how many seconds");
    let seed = number("EMBERLINE_FUZZ_SEED").unwrap_or_else(|| rand::rng().next_u64());
    println!("EMBERLINE_FUZZ_SEED={seed}");
    let mut random = ChaCha8Rng::seed_from_u64(seed);
    let targets = targets();
    let (started, mut inputs) = (Instant::now(), 0);
    while started.elapsed() < Duration::from_secs(seconds) {
        for target in &targets {
            try_one("long", target, input(&target.seeds, &mut random));
            inputs += 1;
        }
    }
    println!("{inputs} inputs over {} targets, no finding", targets.len());
}
