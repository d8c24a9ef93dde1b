//! Reading in processes of its own: same values as in process, and every way in which a reader can fail.

use std::fs;
use std::io::Write;
use std::path::{Path, PathBuf};

use emberline::codes;
use emberline::service::reader_process::{Limits, ReaderPool};
use emberline::spectrum::{Outcomes, ReadSettings, read_file};

use crate::spectrum::lenient;
use crate::support::{AMPLE, folder, wait_until};

/// Ample for every file of the tests; the program itself takes about 50 MB of address space.
pub const LIMITS: Limits = Limits { memory_bytes: 400_000_000, time_s: 20.0 };

pub fn pool_with(settings: &ReadSettings, limits: Limits) -> ReaderPool {
    ReaderPool::start(env!("CARGO_BIN_EXE_emberline"), settings, limits, 1).unwrap()
}

/// The code of a file that was refused as a whole.
pub fn only_code(outcomes: &Outcomes) -> &'static str {
    match outcomes.as_slice() {
        [Err(refusal)] => refusal.fault.code().id,
        other => panic!("{other:?}"),
    }
}

fn standard() -> PathBuf {
    folder::data("calspec/gd71_stisnic_002.fits.gz")
}

/// What `/proc` says about a process, under `key`.
fn status_of(process: u32, key: &str) -> String {
    let status = fs::read_to_string(format!("/proc/{process}/status")).unwrap();
    let line =
        status.lines().find(|line| line.starts_with(key)).unwrap_or_else(|| panic!("no {key}: {status}"));
    line.split_once(':').unwrap().1.trim().to_owned()
}

fn signal(process: u32, signal: rustix::process::Signal) {
    let process = rustix::process::Pid::from_raw(process.try_into().unwrap()).unwrap();
    rustix::process::kill_process(process, signal).unwrap();
}

#[test]
fn values_through_a_reader_are_those_read_in_process() {
    let settings = lenient();
    let pool = pool_with(&settings, LIMITS);
    let mut objects = 0;
    for part in ["layouts", "calspec", "not_da"] {
        for entry in fs::read_dir(folder::data(part)).unwrap() {
            let path = entry.unwrap().path();
            let (found, expected) = (pool.read(&path), read_file(&path, &settings));
            assert_eq!(found.len(), expected.len(), "{}", path.display());
            for (found, expected) in found.iter().zip(&expected) {
                objects += 1;
                match (found, expected) {
                    (Ok(found), Ok(expected)) => assert_eq!(found, expected),
                    (Err(found), Err(expected)) => {
                        assert_eq!(found.fault.code().id, expected.fault.code().id);
                        assert_eq!(found.fault.disposition(), expected.fault.disposition());
                        assert_eq!((&found.object, &found.source), (&expected.object, &expected.source));
                    }
                    other => panic!("{}: {other:?}", path.display()),
                }
            }
        }
    }
    assert!(objects > 40, "{objects}");
    assert_eq!(pool.counts().started, 1);
}

#[test]
fn a_reader_is_locked_in() {
    let _open = fs::File::open(standard()).unwrap();
    let pool = pool_with(&lenient(), LIMITS);
    let [process] = pool.idle_process_ids()[..] else { panic!("no reader") };
    assert_eq!(status_of(process, "Seccomp"), "2");
    assert_eq!(status_of(process, "NoNewPrivs"), "1");
    let limits = fs::read_to_string(format!("/proc/{process}/limits")).unwrap();
    let memory = limits.lines().find(|line| line.starts_with("Max address space")).unwrap();
    assert!(memory.contains("400000000"), "{memory}");
    // What the daemon has open is not passed on.
    for entry in fs::read_dir(format!("/proc/{process}/fd")).unwrap() {
        assert_ne!(fs::read_link(entry.unwrap().path()).unwrap(), standard());
    }
}

#[test]
fn files_that_cannot_be_opened_have_their_own_codes() {
    let pool = pool_with(&lenient(), LIMITS);
    assert_eq!(only_code(&pool.read(Path::new("/nowhere/at/all.fits"))), codes::FILE_MISSING.id);
    assert_eq!(only_code(&pool.read(Path::new("/tmp"))), codes::FILE_NOT_REGULAR.id);
    assert_eq!(only_code(&pool.read(Path::new("/dev/zero"))), codes::FILE_NOT_REGULAR.id);
}

#[test]
fn a_reader_that_died_while_idle_costs_nothing() {
    let pool = pool_with(&lenient(), LIMITS);
    let [first] = pool.idle_process_ids()[..] else { panic!("no reader") };
    signal(first, rustix::process::Signal::KILL);
    let gone = || fs::read_to_string(format!("/proc/{first}/stat")).is_ok_and(|stat| stat.contains(") Z"));
    wait_until("the reader is dead", AMPLE, gone);
    assert!(pool.read(&standard())[0].is_ok());
    assert_eq!((pool.counts().started, pool.counts().crashed), (2, 0));
}

#[test]
fn a_reader_that_dies_over_a_file_costs_this_file() {
    let pool = pool_with(&lenient(), LIMITS);
    let [process] = pool.idle_process_ids()[..] else { panic!("no reader") };
    // Stopped, so that it is at the file for certain when it is killed.
    signal(process, rustix::process::Signal::STOP);
    std::thread::scope(|scope| {
        let reading = scope.spawn(|| pool.read(&standard()));
        wait_until("the reader is at work", AMPLE, || pool.idle_process_ids().is_empty());
        signal(process, rustix::process::Signal::KILL);
        let outcomes = reading.join().unwrap();
        assert_eq!(only_code(&outcomes), codes::READER_CRASHED.id);
        let Err(refusal) = &outcomes[0] else { panic!() };
        assert!(refusal.fault.to_string().contains("signal: 9"), "{}", refusal.fault);
    });
    assert!(pool.read(&standard())[0].is_ok());
    assert_eq!((pool.counts().started, pool.counts().crashed), (2, 1));
}

#[test]
fn a_reader_that_hangs_costs_this_file() {
    let pool = pool_with(&lenient(), Limits { time_s: 0.3, ..LIMITS });
    let [process] = pool.idle_process_ids()[..] else { panic!("no reader") };
    signal(process, rustix::process::Signal::STOP);
    assert_eq!(only_code(&pool.read(&standard())), codes::READER_TIME_LIMIT.id);
    assert_eq!(pool.counts().over_time, 1);
    assert!(!Path::new(&format!("/proc/{process}")).exists(), "the hanging reader is still there");
}

/// Packs zeros behind `start`, a megabyte at a time.
fn pack_zeros(path: &Path, start: &[u8], megabytes: usize) {
    let file = fs::File::create(path).unwrap();
    let mut packer = flate2::write::GzEncoder::new(file, flate2::Compression::fast());
    packer.write_all(start).unwrap();
    for _ in 0..megabytes {
        packer.write_all(&vec![0; 1_000_000]).unwrap();
    }
    packer.finish().unwrap();
}

#[test]
fn a_file_that_wants_too_much_memory_costs_this_file() {
    let settings = ReadSettings { largest_file_mb: 2000, ..lenient() };
    let pool = pool_with(&settings, Limits { memory_bytes: 300_000_000, ..LIMITS });
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("bomb.fits.gz");
    // 600 MB in 3 MB, allowed by the limit on files but not by the limit on memory: told by the reader.
    pack_zeros(&path, b"", 600);
    assert_eq!(only_code(&pool.read(&path)), codes::READER_MEMORY.id);
    assert_eq!(pool.counts().over_memory, 0);
    // An image of 19 million bytes, which takes 152 MB each for wavelengths and fluxes: this one aborts.
    let cards = [
        "SIMPLE  =                    T",
        "BITPIX  =                    8",
        "NAXIS   =                    1",
        "NAXIS1  =             19000000",
        "CRVAL1  =               4000.0",
        "CDELT1  =                 1E-4",
        "END",
    ];
    let header: String = cards.iter().map(|card| format!("{card:80}")).collect();
    pack_zeros(&path, format!("{header:2880}").as_bytes(), 20);
    assert_eq!(only_code(&pool.read(&path)), codes::READER_MEMORY.id);
    assert_eq!((pool.counts().over_memory, pool.counts().crashed), (1, 0));
    assert!(pool.read(&standard())[0].is_ok());
}

#[test]
fn something_else_than_a_reader_is_not_started() {
    let settings = lenient();
    for program in ["/bin/true", "/bin/cat", "/nowhere/emberline"] {
        let limits = Limits { time_s: 1.0, ..LIMITS };
        assert!(ReaderPool::start(program, &settings, limits, 1).is_err(), "{program}");
    }
}

#[test]
fn readers_end_with_their_pool() {
    let pool = pool_with(&lenient(), LIMITS);
    let [process] = pool.idle_process_ids()[..] else { panic!("no reader") };
    drop(pool);
    assert!(!Path::new(&format!("/proc/{process}")).exists());
}

#[test]
fn many_threads_share_few_readers() {
    let pool = ReaderPool::start(env!("CARGO_BIN_EXE_emberline"), &lenient(), LIMITS, 2).unwrap();
    std::thread::scope(|scope| {
        for _ in 0..6 {
            scope.spawn(|| {
                for _ in 0..5 {
                    assert!(pool.read(&standard())[0].is_ok());
                }
            });
        }
    });
    assert!(pool.counts().started <= 2);
}
