//! Reading one spectrum: open, check, decode, settle.

use std::path::Path;

use emberline::service::reader_process::{Limits, ReaderPool};
use emberline::spectrum::{ReadSettings, read_file};

/// 4 105 pixels, packed.
#[divan::bench]
fn calspec_packed() {
    read("calspec/gd71_stisnic_002.fits.gz");
}

/// 3 698 pixels, packed.
#[divan::bench]
fn calspec_packed_second() {
    read("calspec/g191b2b_stisnic_002.fits.gz");
}

/// The same 4 105 pixels, packed, through a reader process.
#[divan::bench]
fn calspec_in_a_reader_process(bencher: divan::Bencher) {
    let pool = pool();
    let path = data("calspec/gd71_stisnic_002.fits.gz");
    bencher.bench_local(|| assert!(divan::black_box(pool.read(&path))[0].is_ok()));
}

/// The same 4 105 pixels, not packed.
#[divan::bench]
fn calspec_plain(bencher: divan::Bencher) {
    let file = plain();
    bencher.bench_local(|| assert!(read_file(file.path(), &ReadSettings::default())[0].is_ok()));
}

/// The same 4 105 pixels, not packed, through a reader process.
#[divan::bench]
fn calspec_plain_in_a_reader_process(bencher: divan::Bencher) {
    let (pool, file) = (pool(), plain());
    bencher.bench_local(|| assert!(divan::black_box(pool.read(file.path()))[0].is_ok()));
}

fn pool() -> ReaderPool {
    let limits = Limits { memory_bytes: 1_500_000_000, time_s: 30.0 };
    ReaderPool::start(env!("CARGO_BIN_EXE_emberline"), &ReadSettings::default(), limits, 1).unwrap()
}

fn plain() -> tempfile::NamedTempFile {
    let packed = std::fs::File::open(data("calspec/gd71_stisnic_002.fits.gz")).unwrap();
    let mut file = tempfile::NamedTempFile::new().unwrap();
    std::io::copy(&mut flate2::read::GzDecoder::new(packed), &mut file).unwrap();
    file
}

fn data(name: &str) -> std::path::PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/data").join(name)
}

fn read(name: &str) {
    let path = data(name);
    assert!(divan::black_box(read_file(&path, &ReadSettings::default()))[0].is_ok());
}
