//! Reading one spectrum: open, check, decode, settle.

use std::path::Path;

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

fn read(name: &str) {
    let path = Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/data").join(name);
    assert!(divan::black_box(read_file(&path, &ReadSettings::default()))[0].is_ok());
}
