//! Every kind of bad input has its own code.

use std::os::unix::fs::symlink;
use std::path::Path;

use emberline::codes::Disposition;
use emberline::spectrum::{ReadSettings, read_file};

use super::{assuming, lenient, ramp, read_bytes, table_file};
use crate::support::fits_bytes::{Column, FitsBytes, gzip};
use crate::support::folder;

fn code_of(path: &Path, settings: &ReadSettings) -> &'static str {
    let outcomes = read_file(path, settings);
    assert_eq!(outcomes.len(), 1);
    match &outcomes[0] {
        Ok(_) => "read",
        Err(refusal) => {
            assert_eq!(refusal.source.path, path.display().to_string());
            refusal.fault.code().id
        }
    }
}

#[test]
fn a_good_table_reads() {
    let (wave, flux, sigma) = ramp();
    let outcomes = read_bytes(table_file(&wave, &flux, &sigma).bytes(), &ReadSettings::default());
    assert!(outcomes[0].is_ok(), "{outcomes:?}");
}

#[test]
fn paths_that_are_not_ordinary_files_are_refused_at_once() {
    let folder = folder::temporary();
    let settings = lenient();
    assert_eq!(code_of(&folder.path().join("absent.fits"), &settings), "file.missing");
    assert_eq!(code_of(folder.path(), &settings), "file.not-regular");
    assert_eq!(code_of(Path::new("/dev/zero"), &settings), "file.not-regular");

    // A pipe that nobody writes to would block a careless open for ever.
    let pipe = folder.path().join("pipe.fits");
    let status = std::process::Command::new("mkfifo").arg(&pipe).status().unwrap();
    assert!(status.success());
    assert_eq!(code_of(&pipe, &settings), "file.not-regular");

    let socket = folder.path().join("socket.fits");
    let _listener = std::os::unix::net::UnixListener::bind(&socket).unwrap();
    assert_eq!(code_of(&socket, &settings), "file.not-regular");

    let dangling = folder.path().join("dangling.fits");
    symlink("nowhere", &dangling).unwrap();
    assert_eq!(code_of(&dangling, &settings), "file.missing");
}

#[test]
fn bytes_that_are_not_fits_are_refused() {
    let settings = lenient();
    let code = |bytes: &[u8]| read_bytes(bytes.to_vec(), &settings)[0].clone().unwrap_err();
    assert_eq!(code(b""), "file.empty");
    assert_eq!(code(b"wave,flux\n4000,1\n"), "file.not-fits");
    assert_eq!(code(&[0x89, b'P', b'N', b'G']), "file.not-fits");
    assert_eq!(code(&gzip(b"hello")), "file.not-fits");
    assert_eq!(code(&[0x1f, 0x8b, 8, 0, 0, 1, 2, 3]), "file.bad-gzip");
    assert_eq!(code(&gzip(b"")), "file.empty");
}

#[test]
fn a_file_cut_anywhere_is_refused_and_may_be_tried_again() {
    let (wave, flux, sigma) = ramp();
    let whole = table_file(&wave, &flux, &sigma).bytes();
    let data_end = 2 * 2880 + 200 * 24;
    for length in [1, 100, 2879, 2880, 2881, 5759, 5760, 5761, data_end - 1] {
        let code = read_bytes(whole[..length].to_vec(), &lenient())[0].clone().unwrap_err();
        let expected = match length {
            1 => "file.not-fits",
            // A cut between two units, or in the padding of the first, looks like a file without a spectrum.
            2879 | 2880 => "spectrum.layout-unknown",
            _ => "file.truncated",
        };
        assert_eq!(code, expected, "cut at {length}");
    }
    // All data are there and only the padding of the last block is missing: nothing is lost.
    assert!(read_bytes(whole[..data_end].to_vec(), &lenient())[0].is_ok());

    let folder = folder::temporary();
    let path = folder::write(&folder, "cut.fits.gz", &gzip(&whole)[..500]);
    let outcomes = read_file(&path, &lenient());
    let refusal = outcomes[0].as_ref().unwrap_err();
    assert_eq!(refusal.fault.code().id, "file.bad-gzip");
    assert_eq!(refusal.fault.disposition(), Disposition::Retry, "it may still be growing");
}

#[test]
fn a_file_that_announces_more_extensions_than_it_has_may_be_cut() {
    let (wave, flux, sigma) = ramp();
    let primary = FitsBytes::empty_primary(&["NEXTEND =                    2"]);
    assert_eq!(read_bytes(primary.bytes(), &lenient())[0].clone().unwrap_err(), "file.truncated");
    // With a spectrum in it the keyword may be left over from the file's origin: read it, and tell.
    let columns = [Column::f64("wave", &wave), Column::f64("flux", &flux), Column::f64("err", &sigma)];
    let observation = read_bytes(primary.and_table(&[], &columns).bytes(), &lenient()).remove(0).unwrap();
    assert!(observation.flags.iter().any(|flag| flag.code == "file.extensions-missing"));
}

#[test]
fn a_gzip_bomb_costs_no_more_than_the_limit() {
    let settings = ReadSettings { largest_file_mb: 1, ..lenient() };
    let bomb = gzip(&vec![0; 50_000_000]);
    assert!(bomb.len() < 300_000, "packed to {} bytes", bomb.len());
    assert_eq!(read_bytes(bomb, &settings)[0].clone().unwrap_err(), "file.too-large");
    let folder = folder::temporary();
    let path = folder::write(&folder, "large.fits", &vec![b' '; 1_000_001]);
    assert_eq!(code_of(&path, &settings), "file.too-large");
}

#[test]
fn names_are_names_and_never_commands() {
    let (wave, flux, sigma) = ramp();
    let bytes = table_file(&wave, &flux, &sigma).bytes();
    let folder = folder::temporary();
    let settings = ReadSettings::default();
    // The extended file-name syntax of the C library: output files, filters, home folders, commands.
    for name in [
        "a.fits(out.fits)",
        "b.fits[1][#row<3]",
        "~nouser.fits",
        "!c.fits",
        "d|e.fits",
        "f\n.fits",
        "g.fits+1",
    ] {
        let path = folder::write(&folder, name, &bytes);
        assert_eq!(code_of(&path, &settings), "read", "{name:?}");
        assert_eq!(code_of(&folder.path().join(format!("no{name}")), &settings), "file.missing", "{name:?}");
    }
    // A missing x.fits is not x.fits.gz.
    folder::write(&folder, "x.fits.gz", &gzip(&bytes));
    assert_eq!(code_of(&folder.path().join("x.fits"), &settings), "file.missing");
    assert_eq!(std::fs::read_dir(folder.path()).unwrap().count(), 8, "a file was created");
}

#[test]
fn values_that_the_fit_may_not_trust_are_refused() {
    let (wave, flux, sigma) = ramp();
    let code = |wave: &[f64], flux: &[f64], sigma: &[f64]| match &read_bytes(
        table_file(wave, flux, sigma).bytes(),
        &ReadSettings::default(),
    )[0]
    {
        Ok(_) => "read",
        Err(code) => code,
    };
    let changed = |values: &[f64], change: &dyn Fn(&mut Vec<f64>)| {
        let mut values = values.to_vec();
        change(&mut values);
        values
    };
    let repeated = changed(&wave, &|wave| wave[100] = wave[99]);
    assert_eq!(code(&repeated, &flux, &sigma), "spectrum.wavelength-not-ascending");
    let turned = changed(&wave, &|wave| wave.swap(50, 51));
    assert_eq!(code(&turned, &flux, &sigma), "spectrum.wavelength-not-ascending");
    let holed = changed(&wave, &|wave| wave[100] = f64::NAN);
    assert_eq!(code(&holed, &flux, &sigma), "spectrum.wavelength-not-finite");
    let endless = changed(&wave, &|wave| wave[199] = f64::INFINITY);
    assert_eq!(code(&endless, &flux, &sigma), "spectrum.wavelength-not-finite");
    let tiny = changed(&wave, &|wave| wave.iter_mut().for_each(|wave| *wave *= 1e-10));
    assert_eq!(code(&tiny, &flux, &sigma), "spectrum.wavelength-implausible");
    let absent = vec![f64::NAN; 200];
    assert_eq!(code(&wave, &absent, &sigma), "spectrum.too-few-good-pixels");
    assert_eq!(code(&wave, &vec![f64::INFINITY; 200], &sigma), "spectrum.too-few-good-pixels");
    assert_eq!(code(&wave, &vec![1e38; 200], &sigma), "spectrum.too-few-good-pixels");
    assert_eq!(code(&wave, &flux, &vec![0.0; 200]), "spectrum.too-few-good-pixels");
    assert_eq!(code(&wave, &flux, &vec![-1.0; 200]), "spectrum.too-few-good-pixels");
    assert_eq!(code(&wave, &vec![0.0; 200], &sigma), "spectrum.flux-all-zero");
    assert_eq!(code(&wave[..49], &flux[..49], &sigma[..49]), "spectrum.too-short");
    assert_eq!(code(&wave[..50], &flux[..50], &sigma[..50]), "read");
    assert_eq!(code(&[], &[], &[]), "spectrum.too-short");
}

#[test]
fn what_a_file_leaves_open_is_refused_with_the_key_to_set() {
    let (wave, flux, sigma) = ramp();
    let columns = |wave_unit: &str, flux_unit: &str, error: &str| {
        vec![
            Column::f64("wave", &wave).unit(wave_unit),
            Column::f64("flux", &flux).unit(flux_unit),
            Column::f64(error, &sigma),
        ]
    };
    let code = |cards: &[&str], columns: &[Column], settings: &ReadSettings| {
        let bytes = FitsBytes::empty_primary(cards).and_table(&[], columns).bytes();
        match &read_bytes(bytes, settings)[0] {
            Ok(_) => "read",
            Err(code) => code,
        }
    };
    let all = ["VACUUM  =                    T", "SPEC_RES=               1000.0"];
    let none = ReadSettings::default();
    let good = columns("Angstrom", "FLAM", "err");
    assert_eq!(code(&all, &good, &none), "read");
    assert_eq!(code(&all[1..], &good, &none), "spectrum.medium-unknown");
    assert_eq!(code(&all[..1], &good, &none), "spectrum.resolution-unknown");
    assert_eq!(code(&all, &columns("Hz", "FLAM", "err"), &none), "spectrum.wavelength-unit-unknown");
    assert_eq!(code(&all, &columns("km/s", "FLAM", "err"), &none), "spectrum.wavelength-unit-unknown");
    assert_eq!(code(&all, &columns("Angstrom", "Jy", "err"), &none), "spectrum.flux-unit-unknown");
    assert_eq!(code(&all, &columns("Angstrom", "K", "err"), &none), "spectrum.flux-unit-unknown");
    assert_eq!(code(&all, &columns("Angstrom", "FLAM", "other"), &none), "spectrum.errors-missing");
    assert_eq!(code(&all, &columns("Angstrom", "FLAM", "weight"), &none), "spectrum.error-kind-unknown");
    // A wrong unit: 4 000 nm is no Balmer spectrum, but it is a spectrum; the fit will find no line in it.
    assert_eq!(code(&all, &columns("um", "FLAM", "err"), &none), "spectrum.wavelength-implausible");

    use emberline::spectrum::{ErrorKind, FluxScale, Medium, WaveUnit};
    assert_eq!(code(&all[1..], &good, &assuming(|s| s.medium = Some(Medium::Air))), "read");
    assert_eq!(code(&all[..1], &good, &assuming(|s| s.resolution_fwhm_aa = Some(3.0))), "read");
    assert_eq!(code(&all[..1], &good, &assuming(|s| s.resolving_power = Some(1800.0))), "read");
    let in_hz = columns("Hz", "FLAM", "err");
    assert_eq!(code(&all, &in_hz, &assuming(|s| s.wave_unit = Some(WaveUnit::Angstrom))), "read");
    let in_kelvin = columns("Angstrom", "K", "err");
    assert_eq!(code(&all, &in_kelvin, &assuming(|s| s.flux_scale = Some(FluxScale::Relative))), "read");
    let no_errors = columns("Angstrom", "FLAM", "other");
    assert_eq!(code(&all, &no_errors, &assuming(|s| s.assume_snr = Some(30.0))), "read");
    let weights = columns("Angstrom", "FLAM", "weight");
    assert_eq!(code(&all, &weights, &assuming(|s| s.error_kind = Some(ErrorKind::InverseVariance))), "read");
    assert_eq!(
        code(&all, &good, &ReadSettings { row: Some(1), ..ReadSettings::default() }),
        "spectrum.no-such-row"
    );
    assert_eq!(code(&all, &good, &ReadSettings { row: Some(0), ..ReadSettings::default() }), "read");
}

#[test]
fn headers_that_lie_about_sizes_are_refused() {
    let (wave, flux, sigma) = ramp();
    let whole = table_file(&wave, &flux, &sigma).bytes();
    let edit = |from: &str, to: &str| {
        assert_eq!(from.len(), to.len());
        let at = whole.windows(from.len()).position(|window| window == from.as_bytes()).unwrap();
        let mut bytes = whole.clone();
        bytes[at..at + to.len()].copy_from_slice(to.as_bytes());
        match &read_bytes(bytes, &lenient())[0] {
            Ok(_) => "read",
            Err(code) => code,
        }
    };
    assert_eq!(edit("NAXIS2  =                  200", "NAXIS2  =          10000000000"), "file.truncated");
    assert_eq!(edit("NAXIS2  =                  200", "NAXIS2  =  9223372036854775807"), "file.bad-header");
    assert_eq!(edit("NAXIS2  =                  200", "NAXIS2  =                 -200"), "file.bad-header");
    assert_eq!(edit("NAXIS2  =                  200", "NAXIS2  =              'plenty"), "file.bad-header");
    assert_eq!(edit("NAXIS   =                    2", "NAXIS   =                  999"), "file.bad-header");
    assert_eq!(edit("BITPIX  =                    8", "BITPIX  =                    7"), "file.bad-header");
    assert_eq!(
        edit("TFIELDS =                    3", "TFIELDS =                  999"),
        "spectrum.layout-unknown"
    );
    assert_eq!(edit("TFORM1  = '1D'", "TFORM1  = '0D'"), "spectrum.layout-unknown");
    assert_eq!(edit("TFORM1  = '1D'", "TFORM1  = '8A'"), "spectrum.layout-unknown");
    assert_eq!(edit("TFORM1  = '1D'", "TFORM1  = '1C'"), "spectrum.layout-unknown");
    assert_eq!(edit("TFORM1  = '1D'", "TFORM1  = '1P'"), "spectrum.layout-unknown");
}
