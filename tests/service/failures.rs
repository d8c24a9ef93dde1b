//! What goes wrong, and what the daemon does about it.

use std::fs;
use std::os::unix::fs::PermissionsExt;
use std::path::{Path, PathBuf};
use std::process::Command;
use std::sync::Arc;
use std::sync::atomic::{AtomicU64, Ordering};
use std::time::{Duration, SystemTime, UNIX_EPOCH};

use emberline::service::daemon;
use rusqlite::Connection;

use crate::support::site::{Site, as_nobody, is_root};
use crate::support::{AMPLE, analyst, wait_until};

fn flags_of(report: &serde_json::Value) -> &str {
    report["flags"][0]["code"].as_str().unwrap()
}

#[test]
fn a_panic_in_one_object_costs_one_object() {
    let site = Site::new();
    let mut daemon = site.start();
    site.drop_file("bad.fits", "object bad\npanic");
    site.drop_file("good.fits", "object good");
    site.wait_for_report("good");
    site.wait_for_report("bad");
    let status = daemon.wait_until_idle();
    assert_eq!((status.jobs.done, status.jobs.rejected), (1, 1));
    assert_eq!(flags_of(&site.current_report("bad").unwrap()), "internal.panic");
    assert_eq!(status.workers.threads, 2);
    assert_eq!(daemon.stop(), 0);
}

#[test]
fn a_hang_costs_one_object_and_its_thread_is_replaced() {
    let site = Site::new();
    site.configure("workers.time_limit_s = 0.3\nworkers.max_abandoned = 2");
    let mut daemon = site.start();
    site.drop_file("hang-1.fits", "object hang\nhang\n# 1");
    site.drop_file("hang-2.fits", "object hang\nhang\n# 2");
    site.wait_for_report("hang-1");
    site.wait_for_report("hang-2");
    site.drop_file("good.fits", "object good");
    site.wait_for_report("good");
    let status = daemon.wait_until_idle();
    assert_eq!(flags_of(&site.current_report("hang-1").unwrap()), "service.time-limit");
    assert_eq!((status.workers.threads, status.workers.abandoned), (2, 2));
    assert_eq!(status.faults, [("service.time-limit".to_owned(), 2)].into());
    assert_eq!(daemon.stop(), 0, "given-up threads do not hold up the stop");
}

#[test]
fn a_thread_that_was_given_up_and_comes_back_may_no_longer_write() {
    let site = Site::new();
    site.configure("workers.time_limit_s = 0.2");
    let gate = site.folder.path().join("gate");
    let daemon = site.start();
    site.drop_file("slow.fits", &format!("object too-late\nuntil {}", gate.display()));
    site.wait_for_report("slow");
    fs::write(gate, "").unwrap();
    wait_until("the thread comes back", AMPLE, || site.log().contains("its answer is dropped"));
    assert!(site.current_report("too-late").is_none());
    assert_eq!(daemon.wait_until_idle().jobs.rejected, 1);
}

#[test]
fn when_every_thread_hangs_the_daemon_stops_with_an_error() {
    let site = Site::new();
    site.configure(
        "workers.threads = 1\nworkers.time_limit_s = 0.1\nworkers.max_abandoned = 0\nservice.drain_deadline_s = 0.2",
    );
    let mut daemon = site.start();
    site.drop_file("hang.fits", "hang");
    assert_eq!(daemon.wait(), 1);
    assert!(site.log().contains("service.no-workers-left"), "{}", site.log());
}

#[test]
fn what_may_pass_is_tried_again_and_at_last_given_up() {
    let site = Site::new();
    site.configure("retry.attempts = 3");
    let daemon = site.start();
    site.drop_file("flaky.fits", "object flaky\nflaky 2");
    site.drop_file("never.fits", "fault retry");
    site.drop_file("wrong.fits", "fault reject");
    site.wait_for_report("flaky");
    site.wait_for_report("never");
    let status = daemon.wait_until_idle();
    assert_eq!((status.jobs.done, status.jobs.failed, status.jobs.rejected), (1, 1, 1));
    let attempts = |object: &str| {
        let query = "SELECT attempts FROM jobs WHERE path LIKE ?1";
        let database = Connection::open(&site.ledger).unwrap();
        database.query_row(query, [format!("%{object}.fits")], |row| row.get::<_, u32>(0)).unwrap()
    };
    assert_eq!([attempts("flaky"), attempts("never"), attempts("wrong")], [3, 3, 1]);
    // Asked for, all that failed is tried once more.
    assert_eq!(daemon.refit(true).unwrap().queued, 2);
    let status = daemon.wait_until_idle();
    assert_eq!((status.jobs.done, status.jobs.failed, status.jobs.rejected), (1, 1, 1));
}

#[test]
fn a_fault_that_makes_going_on_pointless_stops_the_daemon_and_loses_nothing() {
    let site = Site::new();
    let mut daemon = site.start();
    let path = site.drop_file("stop.fits", "fault stop");
    assert_eq!(daemon.wait(), 1);
    assert!(site.log().contains("test.fault"));
    fs::remove_file(path).unwrap();
    site.drop_file("good.fits", "object good");
    assert_eq!(site.drain(), 0);
    site.wait_for_report("good");
}

#[test]
fn a_file_that_kills_the_daemon_is_given_up_after_so_many_deaths() {
    let site = Site::new();
    site.configure("retry.interruptions = 2\nworkers.threads = 1");
    site.drop_file("good.fits", "object good");
    site.drop_file("crash.fits", "crash");
    assert_eq!(site.drain(), -1, "aborted");
    assert_eq!(site.drain(), -1, "aborted again");
    assert_eq!(site.drain(), 0);
    site.wait_for_report("good");
    let database = Connection::open(&site.ledger).unwrap();
    let code: String = database
        .query_row("SELECT last_code FROM jobs WHERE state = 'failed'", [], |row| row.get(0))
        .unwrap();
    assert_eq!(code, "service.interrupted-too-often");
}

/// A small file system in memory, unmounted when dropped.
struct SmallDisk {
    path: PathBuf,
}

impl SmallDisk {
    fn mount(path: &Path) -> SmallDisk {
        fs::create_dir_all(path).unwrap();
        let status =
            Command::new("mount").args(["-t", "tmpfs", "-o", "size=16m", "none"]).arg(path).status().unwrap();
        assert!(status.success());
        SmallDisk { path: path.to_owned() }
    }

    fn fill(&self) -> PathBuf {
        let ballast = self.path.join("ballast");
        // Ends with an error when the disk is full, as it must.
        let _ = fs::write(&ballast, vec![0; 32 << 20]);
        ballast
    }
}

impl Drop for SmallDisk {
    fn drop(&mut self) {
        let _ = Command::new("umount").args(["-l"]).arg(&self.path).status();
    }
}

fn survives_a_full_disk(site: &Site, folder: &Path, code: &str) {
    if !is_root() {
        println!("not run: mounting needs root");
        return;
    }
    let disk = SmallDisk::mount(folder);
    let mut daemon = site.start();
    site.drop_file("before.fits", "object before");
    site.wait_for_report("before");
    let ballast = disk.fill();
    for index in 0..20 {
        site.drop_file(&format!("{index}.fits"), &format!("object KF-{index}"));
    }
    assert_eq!(daemon.wait(), 1, "{}", site.log());
    assert!(site.log().contains(code), "{}", site.log());
    fs::remove_file(ballast).unwrap();
    assert_eq!(site.drain(), 0, "{}", site.log());
    for index in 0..20 {
        assert!(site.current_report(&format!("KF-{index}")).is_some());
    }
    let mut left = site.all_reports();
    left.retain(|path| path.extension().is_some_and(|extension| extension == "tmp"));
    assert!(left.is_empty(), "left behind: {left:?}");
}

#[test]
fn a_full_disk_under_the_reports_stops_the_daemon_and_loses_nothing() {
    let site = Site::new();
    survives_a_full_disk(&site, &site.reports, "service.cannot-write-output");
}

#[test]
fn a_full_disk_under_the_ledger_stops_the_daemon_and_loses_nothing() {
    let mut site = Site::new();
    site.ledger = site.folder.path().join("small/ledger.sqlite");
    site.configure("");
    survives_a_full_disk(&site, &site.folder.path().join("small"), "service.cannot-use-ledger");
}

/// A site whose daemon runs as a user whom permissions bind; `None` where that cannot be had.
fn bound_site() -> Option<Site> {
    let site = Site::below(&std::env::temp_dir());
    if is_root() {
        for path in [
            site.folder.path(),
            &site.inbox,
            &site.reports,
            site.reports.parent().unwrap(),
            &site.config_path,
        ] {
            std::os::unix::fs::chown(path, Some(65534), Some(65534)).unwrap();
        }
        let mut probe = Command::new(std::env::current_exe().unwrap());
        as_nobody(probe.arg("--list").stdout(std::process::Stdio::null()));
        if !probe.status().is_ok_and(|status| status.success()) {
            println!("not run: the test binary stands where other users cannot start it");
            return None;
        }
    }
    Some(site)
}

fn spawn_bound(site: &Site) -> crate::support::site::DaemonProcess {
    site.spawn_with(|command| {
        if is_root() {
            as_nobody(command);
        }
    })
}

fn set_mode(path: &Path, mode: u32) {
    fs::set_permissions(path, fs::Permissions::from_mode(mode)).unwrap();
}

#[test]
fn a_read_only_output_is_noticed_at_the_start_and_while_running() {
    let Some(site) = bound_site() else { return };
    set_mode(&site.reports, 0o555);
    assert_eq!(spawn_bound(&site).wait(), 1);
    assert!(site.log().contains("writing to"), "{}", site.log());
    set_mode(&site.reports, 0o755);
    let mut daemon = spawn_bound(&site);
    daemon.wait_until_watching();
    set_mode(&site.reports, 0o555);
    site.drop_file("a.fits", "object KF-1");
    assert_eq!(daemon.wait(), 1);
    assert!(site.log().contains("service.cannot-write-output"), "{}", site.log());
    set_mode(&site.reports, 0o755);
    let daemon = spawn_bound(&site);
    site.wait_for_report("KF-1");
    assert_eq!(daemon.wait_until_idle().jobs.done, 1);
}

#[test]
fn a_file_that_may_not_be_read_is_left_alone_until_it_may() {
    let Some(site) = bound_site() else { return };
    let path = site.drop_file("secret.fits", "object secret");
    set_mode(&path, 0o000);
    let mut daemon = spawn_bound(&site);
    daemon.wait_until_watching();
    wait_until("the file is counted", AMPLE, || {
        daemon.status().inbox.left_alone.get("unreadable") == Some(&1)
    });
    assert!(site.current_report("secret").is_none());
    set_mode(&path, 0o644);
    site.wait_for_report("secret");
}

#[test]
fn a_watched_folder_that_is_removed_and_made_again_is_watched_again() {
    let site = Site::new();
    let daemon = site.start();
    site.drop_file("before.fits", "object before");
    site.wait_for_report("before");
    fs::remove_dir_all(&site.inbox).unwrap();
    wait_until("the loss is told", AMPLE, || daemon.status().inbox.folders[0].mode == "missing");
    fs::create_dir(&site.inbox).unwrap();
    site.drop_file("after.fits", "object after");
    site.wait_for_report("after");
    wait_until("events again", AMPLE, || daemon.status().inbox.folders[0].mode == "events");
    site.drop_file("later.fits", "object later");
    site.wait_for_report("later");
}

#[test]
fn a_folder_that_is_not_there_at_the_start_is_waited_for() {
    let site = Site::new();
    fs::remove_dir(&site.inbox).unwrap();
    let daemon = site.start();
    assert_eq!(daemon.status().inbox.folders[0].mode, "missing");
    fs::create_dir(&site.inbox).unwrap();
    site.drop_file("a.fits", "object KF-1");
    site.wait_for_report("KF-1");
}

#[test]
fn a_clock_set_back_and_files_from_the_future_delay_nothing() {
    let site = Site::new();
    site.configure("retry.first_delay_s = 600.0\nretry.max_delay_s = 600.0");
    let now_s = Arc::new(AtomicU64::new(2_000_000_000));
    let clock = now_s.clone();
    let config = site.config();
    let (daemon, commands) = daemon::Daemon::start(daemon::Options {
        config: Box::new(move || Ok(config.clone())),
        analysts: analyst::factory(),
        clock: Arc::new(move || UNIX_EPOCH + Duration::from_secs(clock.load(Ordering::Relaxed))),
        is_drain: false,
        log: None,
    })
    .unwrap();
    let shared = daemon.shared();
    let running = std::thread::spawn(move || daemon.run().exit_code);
    site.drop_file("flaky.fits", "object flaky\nflaky 1");
    wait_until("the first attempt failed", AMPLE, || shared.status().unwrap().jobs.waiting_for_retry == 1);
    assert!(site.current_report("flaky").is_none());
    now_s.store(1_500_000_000, Ordering::Relaxed);
    site.wait_for_report("flaky");
    // Never announced, from the future: stillness is measured, not read from the file.
    let staging = site.folder.path().join("future");
    fs::write(&staging, "object future\nEND\n").unwrap();
    let file = fs::File::options().write(true).open(&staging).unwrap();
    file.set_modified(SystemTime::now() + Duration::from_secs(1_000_000_000)).unwrap();
    drop(file);
    fs::hard_link(&staging, site.inbox.join("future.fits")).unwrap();
    site.wait_for_report("future");
    commands.send(daemon::Command::Drain).unwrap();
    assert_eq!(running.join().unwrap(), 0);
}

#[test]
fn a_second_daemon_on_one_ledger_refuses_and_the_first_goes_on() {
    let site = Site::new();
    let mut first = site.start();
    assert_eq!(site.spawn().wait(), 1);
    assert!(site.log().contains("another emberline works with it (stop that one first)"), "{}", site.log());
    site.drop_file("a.fits", "object KF-1");
    site.wait_for_report("KF-1");
    assert_eq!(first.wait_until_idle().jobs.done, 1, "its socket is still there");
    assert_eq!(first.stop(), 0);
}

#[test]
fn a_lost_ledger_is_made_again_from_the_folders_and_changes_no_report() {
    let site = Site::new();
    for index in 0..5 {
        site.drop_file(&format!("{index}.fits"), &format!("object KF-{index}"));
    }
    assert_eq!(site.drain(), 0);
    let written = |path: &PathBuf| fs::symlink_metadata(path).unwrap().modified().unwrap();
    let before: Vec<_> = site.all_reports().iter().map(|path| (path.clone(), written(path))).collect();
    for suffix in ["", "-wal", "-shm"] {
        let _ = fs::remove_file(emberline::service::config::beside(&site.ledger, suffix));
    }
    assert_eq!(site.drain(), 0);
    let after: Vec<_> = site.all_reports().iter().map(|path| (path.clone(), written(path))).collect();
    assert_eq!(after, before, "nothing was written anew");
    let database = Connection::open(&site.ledger).unwrap();
    let done: i64 =
        database.query_row("SELECT count(*) FROM jobs WHERE state = 'done'", [], |row| row.get(0)).unwrap();
    assert_eq!(done, 5);
}

#[test]
fn a_mistake_in_the_configuration_ends_with_exit_code_2() {
    let site = Site::new();
    site.configure("inbox.foldrs = []");
    assert_eq!(site.spawn().wait(), 2);
    assert!(site.log().contains("did you mean `inbox.folders`?"), "{}", site.log());
}
