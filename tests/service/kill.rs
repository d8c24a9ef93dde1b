//! kill -9 at random moments while files arrive: nothing is lost, nothing is torn, ledger and disk agree.

use std::collections::{BTreeMap, BTreeSet};
use std::fs;
use std::sync::atomic::{AtomicUsize, Ordering};
use std::time::{Duration, Instant};

use rand::{RngExt, SeedableRng};
use rand_chacha::ChaCha8Rng;
use rusqlite::Connection;

use crate::support::site::{Site, write_in_pieces};
use crate::support::{AMPLE, wait_until};

const KILLS: usize = 200;
const FILES: usize = 2_000;

/// Longest life of a daemon: start-up takes a part of it, so both are hit.
const MAX_LIFE_MS: u64 = 150;

/// Fewest jobs that must have been in work at a kill for the test to mean anything.
const LEAST_INTERRUPTED: i64 = 20;

/// Several spectra of each object, as surveys have them.
fn object(index: usize) -> String {
    format!("KF-{:03}", index % 200)
}

fn content(index: usize) -> String {
    format!("object {}\nsleep_ms {}\n# {index} {}\nEND\n", object(index), index % 4, "spectrum ".repeat(200))
}

/// One file, by one of the three ways in which pipelines put files into folders.
fn deliver(site: &Site, index: usize) {
    let path = site.inbox.join(format!("spec-{index:04}.fits"));
    let text = content(index);
    match index % 3 {
        0 => {
            let staging = site.folder.path().join(format!("staging-{index}"));
            fs::write(&staging, text).unwrap();
            fs::rename(staging, path).unwrap();
        }
        // The pauses are what makes it slow; nothing is waited for.
        1 => write_in_pieces(&path, &text, 4, || std::thread::sleep(Duration::from_millis(3))),
        _ => {
            let source = site.folder.path().join(format!("source-{index}"));
            fs::write(&source, text).unwrap();
            fs::copy(&source, path).unwrap();
        }
    }
}

#[test]
fn killed_at_200_random_moments_while_2000_files_arrive_nothing_is_lost_or_torn() {
    let site = Site::new();
    // More threads than cores: they wait for the disk most of the time.
    site.configure("workers.threads = 6");
    let kills = AtomicUsize::new(0);
    let started = Instant::now();
    std::thread::scope(|scope| {
        for feeder in 0..3 {
            let (site, kills) = (&site, &kills);
            scope.spawn(move || {
                for index in (0..FILES).filter(|index| index % 3 == feeder) {
                    // In step with the kills, so that files arrive all the time.
                    wait_until("enough kills", AMPLE, || {
                        kills.load(Ordering::Relaxed) * FILES >= index * KILLS
                    });
                    deliver(site, index);
                }
            });
        }
        let mut random = ChaCha8Rng::seed_from_u64(20_261_201);
        for _ in 0..KILLS {
            let mut daemon = site.spawn();
            // The random moment itself.
            std::thread::sleep(Duration::from_millis(random.random_range(5..MAX_LIFE_MS)));
            daemon.kill();
            kills.fetch_add(1, Ordering::Relaxed);
        }
        // The last files are delivered after the last kill; the drain below finds them.
        kills.fetch_add(1, Ordering::Relaxed);
    });
    let killing_s = started.elapsed().as_secs_f64();
    let done_before_drain = site.all_reports().len();
    assert_eq!(site.drain(), 0, "{}", site.log());

    let database = Connection::open(&site.ledger).unwrap();
    let number = |query: &str| database.query_row(query, [], |row| row.get::<_, i64>(0)).unwrap();
    let interrupted = number("SELECT sum(interruptions) FROM jobs");
    println!(
        "{KILLS} kills in {killing_s:.1} s hit {interrupted} jobs in work; {} of {} files in the reports before the \
         last start; {:.1} s in all",
        done_before_drain,
        2 * FILES,
        started.elapsed().as_secs_f64()
    );
    assert!(interrupted >= LEAST_INTERRUPTED, "only {interrupted} jobs were in work at a kill");

    // Disk: each file has exactly one pointer, it leads to a whole report on this very content.
    let mut reports_by_content: BTreeMap<String, Vec<serde_json::Value>> = BTreeMap::new();
    let mut on_disk = BTreeSet::new();
    for path in site.all_reports() {
        let relative = path.strip_prefix(&site.reports).unwrap().to_string_lossy().into_owned();
        assert!(!relative.contains(".tmp"), "left behind: {relative}");
        let report: serde_json::Value = serde_json::from_slice(&fs::read(&path).unwrap())
            .unwrap_or_else(|error| panic!("{relative} is torn: {error}"));
        if relative.ends_with(".current.json") {
            let content = report["source"]["blake3"].as_str().unwrap().to_owned();
            reports_by_content.entry(content).or_default().push(report);
        }
        on_disk.insert(relative);
    }
    for index in 0..FILES {
        let hash = blake3::hash(content(index).as_bytes()).to_hex().to_string();
        let found = reports_by_content.remove(&hash).unwrap_or_default();
        assert_eq!(found.len(), 1, "file {index} has {} reports in force", found.len());
        assert_eq!(found[0]["object"]["name"], object(index));
    }
    assert!(reports_by_content.is_empty(), "reports in force on no file: {:?}", reports_by_content.keys());

    // Ledger: every file is done, and it names exactly what is on disk.
    assert_eq!(number("SELECT count(*) FROM files"), FILES as i64);
    assert_eq!(
        number("SELECT count(*) FROM files JOIN jobs USING (blake3) WHERE state = 'done'"),
        FILES as i64
    );
    assert_eq!(number("SELECT count(*) FROM jobs WHERE state IN ('queued', 'running')"), 0);
    let mut query =
        database.prepare("SELECT report FROM documents UNION SELECT pointer FROM documents").unwrap();
    let in_ledger: BTreeSet<String> =
        query.query_map([], |row| row.get(0)).unwrap().map(Result::unwrap).collect();
    let unknown: Vec<_> = on_disk.difference(&in_ledger).collect();
    assert!(unknown.is_empty(), "on disk but not in the ledger: {unknown:?}");
    // A slowly written file may have been taken in pieces: those answers stay, without a pointer.
    let missing: Vec<_> =
        in_ledger.difference(&on_disk).filter(|name| !name.ends_with(".current.json")).collect();
    assert!(missing.is_empty(), "in the ledger but not on disk: {missing:?}");
}
