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
use crate::support::fits_bytes::{Column, FitsBytes, gzip};
use crate::support::folder;

/// Mutants per seed file and kind in the ordinary run.
const MUTANTS: usize = 50;
/// Mutants per seed file and kind in the long run: more than 100 000 in all.
pub const MANY_MUTANTS: usize = 1400;
/// Kinds of mutation: bits, cards, cuts, huge sizes, packing.
const KINDS: usize = 5;
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

/// Names and bytes of the files that mutants are made of.
pub fn seeds() -> Vec<(String, Vec<u8>)> {
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

/// Declares data of gigabytes and more.
fn inflate(bytes: &mut [u8], random: &mut ChaCha8Rng) {
    const SIZES: [&str; 6] =
        ["1250000000", "10000000000", "4294967296", "9223372036854775807", "100000", "2147483647"];
    let is_size = |card: &[u8]| {
        [b"NAXIS".as_slice(), b"PCOUNT", b"GCOUNT", b"TFIELDS", b"TFORM"]
            .iter()
            .any(|key| card.starts_with(key))
    };
    let cards: Vec<usize> = (0..bytes.len() / 80).filter(|card| is_size(&bytes[card * 80..])).collect();
    for _ in 0..random.random_range(1..=2) {
        let Some(card) = cards.get(random.random_range(0..cards.len().max(1))) else { return };
        let size = SIZES[random.random_range(0..SIZES.len())];
        let is_form = bytes[card * 80..].starts_with(b"TFORM");
        let value = if is_form { format!("'{size}D'") } else { format!("{size:>20}") };
        bytes[card * 80 + 10..card * 80 + 80].copy_from_slice(format!("{value:<70}").as_bytes());
    }
}

/// Packs the file, badly: as a bomb, twice, cut, with bits flipped, or with another file behind it.
fn pack(bytes: &mut Vec<u8>, random: &mut ChaCha8Rng) {
    let choice = random.random_range(0..6);
    if choice == 0 {
        // Zeros behind the file: 300 MB from 300 kB would take too long for each; 20 MB show the same.
        bytes.resize(bytes.len() + 20_000_000, 0);
    }
    let mut packed = gzip(bytes);
    match choice {
        1 => packed = gzip(&packed),
        2 => packed.truncate(random.random_range(0..packed.len())),
        3 => flip_bits(&mut packed, random),
        4 => packed.extend_from_slice(&gzip(bytes)),
        _ => {}
    }
    *bytes = packed;
}

/// Mutates bytes that are not empty in one of all ways, except packing.
pub fn mutate(bytes: &mut Vec<u8>, random: &mut ChaCha8Rng) {
    match random.random_range(0..KINDS - 1) {
        0 => flip_bits(bytes, random),
        1 => lie(bytes, random),
        2 => cut(bytes, random),
        _ => inflate(bytes, random),
    }
}

/// Gives this many mutants of every seed and kind to `visit`, with the name of the seed.
pub fn for_each_mutant(per_seed_and_kind: usize, mut visit: impl FnMut(&str, Vec<u8>)) {
    let mut random = ChaCha8Rng::seed_from_u64(20_261_201);
    for (name, seed) in seeds() {
        for kind in 0..KINDS {
            // Packing takes far longer than all else.
            let count = if kind == KINDS - 1 { per_seed_and_kind.div_ceil(5) } else { per_seed_and_kind };
            for _ in 0..count {
                let mut bytes = seed.clone();
                match kind {
                    0 => flip_bits(&mut bytes, &mut random),
                    1 => lie(&mut bytes, &mut random),
                    2 => cut(&mut bytes, &mut random),
                    3 => inflate(&mut bytes, &mut random),
                    _ => pack(&mut bytes, &mut random),
                }
                visit(&name, bytes);
            }
        }
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
    let mut tally: BTreeMap<&str, usize> = BTreeMap::new();
    let (mut mutants, mut objects) = (0, 0);
    for_each_mutant(per_seed_and_kind, |name, bytes| {
        mutants += 1;
        let outcomes = read_bytes(bytes, &lenient());
        assert!(!outcomes.is_empty(), "{name}: a file vanished without a code");
        for outcome in outcomes {
            objects += 1;
            *tally.entry(outcome.map_or_else(|code| code, |_| "read")).or_default() += 1;
        }
    });
    println!("{mutants} mutants, {objects} objects, 0 crashes: {tally:?}");
    // The mutations must bite, and must not only break the first bytes.
    assert!(tally.len() > 12, "too few kinds of outcome: {tally:?}");
    assert!(tally.keys().all(|code| *code == "read" || codes::find(code).is_some()));
    assert!(tally["read"] > objects / 20 && tally["read"] < objects, "{tally:?}");
    mutants
}
