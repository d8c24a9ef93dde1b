//! Originals that are moved when they are finished: nothing is lost, written over, or forgotten by a re-fit.

use std::fs;
use std::os::unix::fs::MetadataExt;
use std::path::{Path, PathBuf};
use std::time::Duration;

use emberline::archive::ledger::Ledger;
use emberline::archive::ledger_moves::PlannedMove;
use emberline::service::config::Config;
use emberline::service::finished;
use rand::{RngExt, SeedableRng};
use rand_chacha::ChaCha8Rng;

use crate::support::site::Site;
use crate::support::{AMPLE, wait_until};

const INSTRUMENT: &str = "[[instrument]]\nname = \"changed\"\nmatch = { X = \"1\" }";

fn finished_folder(site: &Site) -> PathBuf {
    site.folder.path().join("finished")
}

fn configure(site: &Site, folder: &Path, more: &str) {
    site.configure(&format!("output.move_finished_to = {folder:?}\n{more}"));
}

/// Every file below a folder with its text, sorted by name.
fn files(folder: &Path) -> Vec<(String, String)> {
    let mut found: Vec<_> = walkdir::WalkDir::new(folder)
        .into_iter()
        .filter_map(Result::ok)
        .filter(|entry| !entry.file_type().is_dir())
        .map(|entry| {
            let name = entry.path().strip_prefix(folder).unwrap().display().to_string();
            (name, fs::read_to_string(entry.path()).unwrap())
        })
        .collect();
    found.sort();
    found
}

fn names(folder: &Path) -> Vec<String> {
    files(folder).into_iter().map(|(name, _)| name).collect()
}

#[test]
fn finished_files_are_moved_and_a_refit_finds_them() {
    let site = Site::new();
    let folder = finished_folder(&site);
    configure(&site, &folder, "");
    fs::create_dir_all(site.inbox.join("night-1")).unwrap();
    let mut daemon = site.start();
    site.drop_file("night-1/a.fits.gz", "object KF-1");
    site.drop_file("bad.fits", "fault reject");
    wait_until("both are moved", AMPLE, || names(&folder).len() == 2);
    assert_eq!(names(&folder), ["bad.fits", "night-1/a.fits.gz"]);
    assert_eq!(files(&folder)[1].1, "object KF-1\nEND\n");
    assert!(names(&site.inbox).is_empty());
    let before = site.current_report("KF-1").unwrap();
    configure(&site, &folder, INSTRUMENT);
    assert_eq!(daemon.refit(false).unwrap().queued, 2);
    let status = daemon.wait_until_idle();
    assert_eq!((status.jobs.done, status.jobs.rejected, status.jobs.gone), (1, 1, 0), "{}", site.log());
    let after = site.current_report("KF-1").unwrap();
    assert_ne!(before["provenance"]["config_fingerprint"], after["provenance"]["config_fingerprint"]);
    assert_eq!(names(&folder), ["bad.fits", "night-1/a.fits.gz"], "what was moved stays there");
    assert_eq!(daemon.refit(true).unwrap().queued, 1, "the rejected one is found as well");
    daemon.wait_until_idle();
    assert_eq!(daemon.stop(), 0);
}

#[test]
fn a_taken_name_is_never_written_over_and_a_new_reduction_replaces_the_old() {
    let site = Site::new();
    let folder = finished_folder(&site);
    configure(&site, &folder, "");
    fs::create_dir_all(&folder).unwrap();
    fs::write(folder.join("a.fits.gz"), "somebody else's").unwrap();
    let mut daemon = site.start();
    let first = site.drop_file("a.fits.gz", "object KF-1");
    wait_until("moved", AMPLE, || names(&folder).len() == 2);
    let hash = |text: &str| blake3::hash(format!("{text}\nEND\n").as_bytes()).to_hex()[..16].to_owned();
    let own = format!("a.{}.fits.gz", hash("object KF-1"));
    assert!(names(&folder).contains(&own), "{:?}", names(&folder));
    assert_eq!(fs::read_to_string(folder.join("a.fits.gz")).unwrap(), "somebody else's");
    // The same content once more: one more name, no other report.
    site.drop_file("a.fits.gz", "object KF-1");
    wait_until("moved", AMPLE, || names(&folder).len() == 3);
    assert!(names(&folder).contains(&format!("a.{}-2.fits.gz", hash("object KF-1"))), "{:?}", names(&folder));
    assert!(!first.exists());
    assert!(site.current_report("KF-1").is_some());
    // Another content under the old name: the pointer of the old one goes, both files stay.
    site.drop_file("a.fits.gz", "object KF-2");
    wait_until("moved", AMPLE, || names(&folder).len() == 4);
    assert!(site.current_report("KF-2").is_some());
    assert!(site.current_report("KF-1").is_none(), "replaced, though it was moved");
    // And the old content again.
    site.drop_file("a.fits.gz", "object KF-1");
    wait_until("in force again", AMPLE, || site.current_report("KF-1").is_some());
    wait_until("moved", AMPLE, || names(&folder).len() == 5);
    assert!(site.current_report("KF-2").is_none());
    assert_eq!(daemon.stop(), 0);
}

#[test]
fn links_stay_and_a_folder_that_cannot_be_written_stops_nothing() {
    let site = Site::new();
    let folder = finished_folder(&site);
    // A file where the folder should be: nothing can be moved there.
    fs::write(&folder, "in the way").unwrap();
    configure(&site, &folder, "inbox.rescan_interval_s = 0.2");
    let target = site.inbox.join("kept/real.fits");
    fs::create_dir_all(target.parent().unwrap()).unwrap();
    let mut daemon = site.start();
    site.drop_file("kept/real.fits", "object KF-1");
    site.wait_for_report("KF-1");
    std::os::unix::fs::symlink("kept/real.fits", site.inbox.join("link.fits")).unwrap();
    site.drop_file("b.fits", "object KF-2");
    site.wait_for_report("KF-2");
    assert_eq!(names(&site.inbox), ["b.fits", "kept/real.fits", "link.fits"]);
    wait_until("the log says so", AMPLE, || site.log().contains("original not moved"));
    // The obstacle goes, and the next full scan moves what was left.
    fs::remove_file(&folder).unwrap();
    wait_until("moved", AMPLE, || folder.join("b.fits").exists() && folder.join("kept/real.fits").exists());
    assert!(fs::symlink_metadata(site.inbox.join("link.fits")).unwrap().is_symlink());
    assert_eq!(daemon.stop(), 0);
}

#[test]
fn files_are_moved_across_file_systems() {
    let site = Site::new();
    let Ok(other) = tempfile::tempdir_in("/dev/shm") else {
        return println!("no other file system to be had here");
    };
    if fs::metadata(other.path()).unwrap().dev() == fs::metadata(&site.inbox).unwrap().dev() {
        return println!("no other file system to be had here");
    }
    let folder = other.path().join("finished");
    configure(&site, &folder, "");
    let mut daemon = site.start();
    let path = site.drop_file("a.fits", "object KF-1");
    wait_until("moved", AMPLE, || folder.join("a.fits").exists() && !path.exists());
    assert_eq!(files(&folder), [("a.fits".to_owned(), "object KF-1\nEND\n".to_owned())]);
    configure(&site, &folder, INSTRUMENT);
    assert_eq!(daemon.refit(false).unwrap().queued, 1);
    assert_eq!(daemon.wait_until_idle().jobs.done, 1, "{}", site.log());
    assert_eq!(daemon.stop(), 0);
}

/// The three states in which a crash can leave a planned move.
#[test]
fn a_move_that_a_crash_interrupted_is_settled_at_the_next_start() {
    for state in ["planned", "copied", "moved"] {
        let site = Site::new();
        let path = site.drop_file("a.fits", "object KF-1");
        assert_eq!(site.drain(), 0);
        let folder = finished_folder(&site);
        fs::create_dir_all(&folder).unwrap();
        let blake3 = blake3::hash(&fs::read(&path).unwrap()).to_hex().to_string();
        let planned = PlannedMove { origin: path.clone(), target: folder.join("a.fits"), blake3 };
        {
            let mut ledger = Ledger::open(&site.ledger).unwrap();
            ledger.plan_move(&planned).unwrap();
            match state {
                "copied" => drop(fs::copy(&path, &planned.target).unwrap()),
                "moved" => fs::rename(&path, &planned.target).unwrap(),
                _ => {}
            }
            finished::resume(&mut ledger).unwrap();
            assert!(ledger.unfinished_moves().unwrap().is_empty());
        }
        let is_moved = state != "planned";
        assert_eq!((path.exists(), planned.target.exists()), (!is_moved, is_moved), "{state}");
        // Either way the daemon finds the file for a re-fit.
        site.configure(INSTRUMENT);
        // Processes that other tests start at this moment may still hold a copy of this one's lock.
        wait_until("the lock is free", AMPLE, || site.drain() == 0);
        let report = site.current_report("KF-1").unwrap();
        let config: Config = site.config();
        let fingerprint =
            blake3::hash(format!("test {}", config.answer_fingerprint()).as_bytes()).to_hex().to_string();
        assert_eq!(report["provenance"]["config_fingerprint"], fingerprint, "{state}: {}", site.log());
    }
}

#[test]
fn killed_at_random_moments_every_file_is_at_one_place_and_has_one_report() {
    const FILES: usize = 300;
    const KILLS: usize = 30;
    let site = Site::new();
    let folder = finished_folder(&site);
    configure(&site, &folder, "workers.threads = 4");
    let mut random = ChaCha8Rng::seed_from_u64(20_261_202);
    for kill in 0..KILLS {
        let mut daemon = site.spawn();
        for index in (0..FILES).filter(|index| index % KILLS == kill) {
            site.drop_file(&format!("spec-{index:03}.fits"), &format!("object KF-{index:03}"));
        }
        std::thread::sleep(Duration::from_millis(random.random_range(5..150)));
        daemon.kill();
    }
    assert_eq!(site.drain(), 0, "{}", site.log());
    assert!(names(&site.inbox).is_empty(), "{:?}", names(&site.inbox));
    let moved = files(&folder);
    assert_eq!(moved.len(), FILES, "{:?}", names(&folder));
    for (index, (name, text)) in moved.iter().enumerate() {
        assert_eq!(
            (name.as_str(), text.as_str()),
            (&*format!("spec-{index:03}.fits"), &*format!("object KF-{index:03}\nEND\n"))
        );
        assert!(site.current_report(&format!("KF-{index:03}")).is_some());
    }
}

#[test]
fn a_folder_that_meets_a_watched_one_is_refused() {
    let site = Site::new();
    for folder in [site.inbox.clone(), site.inbox.join("done"), site.folder.path().to_owned()] {
        configure(&site, &folder, "");
        let refusal = site.config().check_for_daemon().unwrap_err().to_string();
        assert!(
            refusal.contains("`output.move_finished_to`") && refusal.contains("meets a watched folder"),
            "{refusal}"
        );
    }
    configure(&site, &finished_folder(&site), "");
    site.config().check_for_daemon().unwrap();
}
