//! The ledger by itself.

use std::path::{Path, PathBuf};

use emberline::archive::ledger::{DocumentRecord, Ledger, LedgerError, Recorded, Signature};
use rusqlite::Connection;

const DAY_S: f64 = 86_400.0;
const YEAR_S: f64 = 365.0 * DAY_S;

fn open() -> (tempfile::TempDir, PathBuf, Ledger) {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("ledger.sqlite");
    let ledger = Ledger::open(&path).unwrap();
    (folder, path, ledger)
}

fn signature(inode: u64) -> Signature {
    Signature { size: 1, modified_ns: 2, changed_ns: 3, inode }
}

fn record(ledger: &mut Ledger, path: &str, blake3: &str, fingerprint: &str) -> Recorded {
    let arrival = ledger.last_arrival().unwrap() + 1;
    ledger.record_file(Path::new(path), &signature(1), blake3, fingerprint, arrival, 100.0).unwrap()
}

fn document(pointer: &str) -> DocumentRecord {
    DocumentRecord {
        object_name: "KF-1".to_owned(),
        verdict: "accepted".to_owned(),
        report: format!("{pointer}.report"),
        pointer: pointer.to_owned(),
        catalogue_row: "null".to_owned(),
    }
}

#[test]
fn the_same_content_under_two_names_is_one_job() {
    let (_folder, _, mut ledger) = open();
    assert_eq!(record(&mut ledger, "/a.fits", "c1", "f1"), Recorded::Queued);
    assert_eq!(record(&mut ledger, "/b.fits", "c1", "f1"), Recorded::Known);
    assert!(ledger.claim("f1", 100.0, DAY_S).unwrap().is_some());
    assert!(ledger.claim("f1", 100.0, DAY_S).unwrap().is_none());
}

#[test]
fn new_files_go_before_refits_and_the_newest_first() {
    let (_folder, _, mut ledger) = open();
    record(&mut ledger, "/old.fits", "old", "f1");
    let job = ledger.claim("f1", 0.0, DAY_S).unwrap().unwrap();
    ledger.finish(&job, &[document("old")], 0.0).unwrap();
    record(&mut ledger, "/waiting.fits", "waiting", "f1");
    assert_eq!(ledger.queue_stale("f2", 0.0).unwrap(), 2);
    record(&mut ledger, "/late1.fits", "late1", "f2");
    record(&mut ledger, "/late2.fits", "late2", "f2");
    let mut order = Vec::new();
    while let Some(job) = ledger.claim("f2", 0.0, DAY_S).unwrap() {
        order.push((job.blake3, job.is_refit));
    }
    let expected = [("late2", false), ("late1", false), ("waiting", false), ("old", true)];
    assert_eq!(order, expected.map(|(name, is_refit)| (name.to_owned(), is_refit)));
}

#[test]
fn a_clock_set_back_delays_no_retry() {
    let (_folder, _, mut ledger) = open();
    record(&mut ledger, "/a.fits", "c1", "f1");
    let now_s = 10.0 * YEAR_S;
    let job = ledger.claim("f1", now_s, DAY_S).unwrap().unwrap();
    ledger.retry(&job, ("test.fault", "detail"), now_s + 60.0).unwrap();
    assert!(ledger.claim("f1", now_s, DAY_S).unwrap().is_none(), "not due yet");
    assert_eq!(ledger.next_due_in_s("f1", now_s, DAY_S).unwrap(), Some(60.0));
    let set_back_s = now_s - YEAR_S;
    assert_eq!(ledger.next_due_in_s("f1", set_back_s, DAY_S).unwrap(), Some(0.0));
    assert_eq!(ledger.claim("f1", set_back_s, DAY_S).unwrap().unwrap().attempts, 2);
}

#[test]
fn a_job_at_which_the_daemon_dies_is_resumed_and_at_last_given_up() {
    let (_folder, path, mut ledger) = open();
    record(&mut ledger, "/a.fits", "c1", "f1");
    for death in 1..=3 {
        let job = ledger.claim("f1", 0.0, DAY_S).unwrap().unwrap();
        assert_eq!(job.attempts, 1, "an interruption is not a failed attempt");
        drop(ledger);
        ledger = Ledger::open(&path).unwrap();
        let expected = if death < 3 { (1, 0) } else { (0, 1) };
        assert_eq!(ledger.recover(3, "service.interrupted-too-often", 0.0).unwrap(), expected);
    }
    assert!(ledger.claim("f1", 0.0, DAY_S).unwrap().is_none());
    assert_eq!(ledger.counts("f1").unwrap().failed, 1);
    assert_eq!(ledger.queue_failed("f1").unwrap(), 1);
    assert!(ledger.claim("f1", 0.0, DAY_S).unwrap().is_some());
}

#[test]
fn content_that_is_replaced_hands_over_its_pointer_even_through_a_chain() {
    let (_folder, _, mut ledger) = open();
    record(&mut ledger, "/a.fits", "first", "f1");
    let job = ledger.claim("f1", 0.0, DAY_S).unwrap().unwrap();
    ledger.finish(&job, &[document("first")], 0.0).unwrap();
    record(&mut ledger, "/a.fits", "second", "f1");
    let second = ledger.claim("f1", 0.0, DAY_S).unwrap().unwrap();
    record(&mut ledger, "/a.fits", "third", "f1");
    ledger.lose(&second, 0.0).unwrap();
    assert!(!ledger.is_in_force("second").unwrap());
    let third = ledger.claim("f1", 0.0, DAY_S).unwrap().unwrap();
    assert_eq!(ledger.superseded_pointers("third").unwrap(), ["first"]);
    ledger.finish(&third, &[document("third")], 0.0).unwrap();
    // Back to the first content: it must be answered again, to win its pointer back.
    assert_eq!(record(&mut ledger, "/a.fits", "first", "f1"), Recorded::Queued);
    assert_eq!(ledger.superseded_pointers("first").unwrap(), ["first", "third"]);
}

#[test]
fn content_that_stands_elsewhere_keeps_its_pointer() {
    let (_folder, _, mut ledger) = open();
    record(&mut ledger, "/a.fits", "first", "f1");
    record(&mut ledger, "/copy.fits", "first", "f1");
    let job = ledger.claim("f1", 0.0, DAY_S).unwrap().unwrap();
    ledger.finish(&job, &[document("first")], 0.0).unwrap();
    record(&mut ledger, "/a.fits", "second", "f1");
    assert!(ledger.superseded_pointers("second").unwrap().is_empty());
}

#[test]
fn a_ledger_of_a_newer_program_is_refused() {
    let (_folder, path, ledger) = open();
    drop(ledger);
    Connection::open(&path).unwrap().pragma_update(None, "user_version", 99).unwrap();
    let error = Ledger::open(&path).unwrap_err();
    assert!(matches!(error, LedgerError::TooNew { found: 99, .. }), "{error}");
}

#[test]
fn a_second_owner_is_refused_until_the_first_is_gone() {
    let (_folder, path, ledger) = open();
    assert!(matches!(Ledger::open(&path), Err(LedgerError::InUse { .. })));
    drop(ledger);
    Ledger::open(&path).unwrap();
}
