//! Mutated files: whatever happens to the bytes, reading ends with observations or with codes.
//!
//! A panic fails the test; a signal inside the C library would kill the whole test binary, which is
//! seen as well. The number of mutants is bounded so that the test takes seconds.

use std::collections::BTreeMap;
use std::io::Read;

use emberline::codes;
use rand::{Rng, RngExt, SeedableRng};
use rand_chacha::ChaCha8Rng;

use super::{lenient, ramp, read_bytes, table_file};
use crate::support::fits_bytes::{Column, FitsBytes};
use crate::support::folder;

/// Mutants per seed file and kind in the ordinary run.
const MUTANTS: usize = 80;
/// Mutants per seed file and kind in the long run: more than 100 000 in all.
const MANY_MUTANTS: usize = 2400;
const HOSTILE: &[&str] = &[
    "-1",
    "0",
    "1",
    "2",
    "7",
    "8",
    "-64",
    "999",
    "65536",
    "2147483647",
    "2147483648",
    "-2147483648",
    "9223372036854775807",
    "99999999999999999999",
    "1E308",
    "-1E-308",
    "NaN",
    "T",
    "F",
    "'8A0     '",
    "'0D'",
    "'1PD(999999999)'",
    "'1QB(9)'",
    "'1M'",
    "'99999999999999999999D'",
    "'32X'",
    "''",
    "'",
    "'\u{ff}\u{fe}'",
    "",
    "/",
    "'TABLE   '",
    "'IMAGE   '",
];

fn seeds() -> Vec<(String, Vec<u8>)> {
    let (wave, flux, sigma) = ramp();
    let cards = ["CRVAL1  =               4000.0", "CDELT1  =                  5.0", "CUNIT1  = 'Angstrom'"];
    let image =
        FitsBytes::image(&cards, &[200], &flux).and_image(&["EXTNAME = 'ERR'"], &[200], &sigma).bytes();
    let vectors = FitsBytes::empty_primary(&["VACUUM  =                    T"])
        .and_table(
            &[
                "TSCAL2  =                  2.0",
                "TZERO2  =                  1.0",
                "TNULL4  =                   -1",
            ],
            &[
                Column::f64("wave", &wave).unit("Angstrom").per_cell(100),
                Column::f32("flux", &flux).per_cell(100),
                Column::f32("err", &sigma).per_cell(100),
                Column::i32("mask", &[0; 200]).per_cell(100),
                Column::text("name", &["one", "second"]),
            ],
        )
        .bytes();
    let mut seeds = vec![
        ("table".to_owned(), table_file(&wave, &flux, &sigma).bytes()),
        ("image".to_owned(), image),
        ("vectors".to_owned(), vectors),
    ];
    let mut packed_files = vec![folder::data("calspec/gd71_stisnic_002.fits.gz")];
    for entry in std::fs::read_dir(folder::data("layouts")).unwrap() {
        packed_files.push(entry.unwrap().path());
    }
    packed_files.retain(|path| path.extension().is_some_and(|extension| extension == "gz"));
    packed_files.sort();
    for path in packed_files {
        let packed = std::fs::read(&path).unwrap();
        let mut plain = Vec::new();
        flate2::read::GzDecoder::new(packed.as_slice()).read_to_end(&mut plain).unwrap();
        seeds.push((path.file_name().unwrap().to_string_lossy().into_owned(), plain));
        if seeds.len() == 5 {
            seeds.push(("packed".to_owned(), packed));
        }
    }
    seeds
}

/// Flips up to eight bits, most of them in headers.
fn flip_bits(bytes: &mut [u8], random: &mut ChaCha8Rng) {
    for _ in 0..random.random_range(1..=8) {
        let reach = if random.random_bool(0.7) { bytes.len().min(2 * 2880) } else { bytes.len() };
        let at = random.random_range(0..reach);
        bytes[at] ^= 1 << random.random_range(0..8);
    }
}

/// Gives up to three cards hostile values.
fn lie(bytes: &mut [u8], random: &mut ChaCha8Rng) {
    let cards: Vec<usize> =
        (0..bytes.len() / 80).filter(|card| bytes[card * 80 + 8..].starts_with(b"= ")).collect();
    for _ in 0..random.random_range(1..=3) {
        let Some(card) = cards.get(random.random_range(0..cards.len().max(1))) else { return };
        let value = HOSTILE[random.random_range(0..HOSTILE.len())];
        let field = format!(" {value:69}");
        let field = field.as_bytes();
        let length = field.len().min(70);
        bytes[card * 80 + 10..card * 80 + 10 + length].copy_from_slice(&field[..length]);
    }
}

/// Cuts, doubles or moves a stretch of blocks or bytes.
fn cut(bytes: &mut Vec<u8>, random: &mut ChaCha8Rng) {
    let (from, to) = (random.random_range(0..=bytes.len()), random.random_range(0..=bytes.len()));
    let (from, to) = (from.min(to), from.max(to));
    match random.random_range(0..4) {
        0 => bytes.truncate(from),
        1 => drop(bytes.drain(from..to)),
        2 => {
            let stretch = bytes[from..to].to_vec();
            bytes.splice(from..from, stretch);
        }
        _ => random.fill_bytes(&mut bytes[from..to]),
    }
}

#[test]
fn thousands_of_mutants_are_all_accounted_for() {
    read_mutants(MUTANTS);
}

#[test]
#[ignore = "some minutes; run: cargo test --release -- --ignored mutants"]
fn a_hundred_thousand_mutants_are_all_accounted_for() {
    assert!(read_mutants(MANY_MUTANTS) >= 100_000);
}

/// Reads this many mutants per seed and kind; returns how many that were.
fn read_mutants(per_seed_and_kind: usize) -> usize {
    let mut random = ChaCha8Rng::seed_from_u64(20_261_201);
    let mut tally: BTreeMap<&str, usize> = BTreeMap::new();
    let (mut mutants, mut objects) = (0, 0);
    for (name, seed) in seeds() {
        for kind in 0..3 {
            for _ in 0..per_seed_and_kind {
                let mut bytes = seed.clone();
                match kind {
                    0 => flip_bits(&mut bytes, &mut random),
                    1 => lie(&mut bytes, &mut random),
                    _ => cut(&mut bytes, &mut random),
                }
                mutants += 1;
                let outcomes = read_bytes(bytes, &lenient());
                assert!(!outcomes.is_empty(), "{name}: a file vanished without a code");
                for outcome in outcomes {
                    objects += 1;
                    *tally.entry(outcome.map_or_else(|code| code, |_| "read")).or_default() += 1;
                }
            }
        }
    }
    println!("{mutants} mutants, {objects} objects, 0 crashes: {tally:?}");
    // The mutations must bite, and must not only break the first bytes.
    assert!(tally.len() > 12, "too few kinds of outcome: {tally:?}");
    assert!(tally.keys().all(|code| *code == "read" || codes::find(code).is_some()));
    assert!(tally["read"] > objects / 20 && tally["read"] < objects, "{tally:?}");
    mutants
}
