//! Signals, reloads, systemd.

use std::fs;
use std::os::unix::net::UnixDatagram;
use std::process::{Command, ExitCode};
use std::time::{Duration, Instant};

use emberline::cli::refit::{self, RefitArgs};
use emberline::cli::status::render;
use rusqlite::Connection;
use rustix::process::Signal;

use crate::support::site::Site;
use crate::support::{AMPLE, analyst, wait_until};

const INSTRUMENT: &str = "[[instrument]]\nname = \"KFS\"\nmatch = { INSTRUME = \"KFS\" }\nresolving_power = ";

#[test]
fn a_stop_signal_lets_running_fits_end_and_begins_no_other() {
    for signal in [Signal::TERM, Signal::INT] {
        let site = Site::new();
        site.configure("workers.threads = 1");
        let gate = site.folder.path().join("gate");
        let mut daemon = site.start();
        site.drop_file("first.fits", &format!("object first\nuntil {}", gate.display()));
        wait_until("the first is in work", AMPLE, || daemon.status().jobs.running == 1);
        site.drop_file("second.fits", "object second");
        wait_until("the second waits", AMPLE, || daemon.status().jobs.queued_new == 1);
        daemon.signal(signal);
        wait_until("the stop begins", AMPLE, || daemon.status().phase == "stopping");
        fs::write(gate, "").unwrap();
        assert_eq!(daemon.wait(), 0);
        assert!(site.current_report("first").is_some() && site.current_report("second").is_none());
        assert_eq!(site.drain(), 0);
        assert!(site.current_report("second").is_some());
    }
}

#[test]
fn past_the_deadline_the_daemon_gives_up_with_an_error_and_the_job_is_kept() {
    let site = Site::new();
    site.configure("service.drain_deadline_s = 0.2");
    let mut daemon = site.start();
    site.drop_file("hang.fits", "hang");
    wait_until("it is in work", AMPLE, || daemon.status().jobs.running == 1);
    assert_eq!(daemon.stop(), 1);
    let database = Connection::open(&site.ledger).unwrap();
    let row = database.query_row("SELECT state, attempts FROM jobs", [], |row| {
        Ok((row.get::<_, String>(0)?, row.get::<_, u32>(1)?))
    });
    assert_eq!(row.unwrap(), ("queued".to_owned(), 0));
}

#[test]
fn a_second_stop_signal_ends_the_wait() {
    let site = Site::new();
    site.configure("service.drain_deadline_s = 3600.0");
    let mut daemon = site.start();
    site.drop_file("hang.fits", "hang");
    wait_until("it is in work", AMPLE, || daemon.status().jobs.running == 1);
    daemon.signal(Signal::TERM);
    wait_until("the stop begins", AMPLE, || daemon.status().phase == "stopping");
    assert_eq!(daemon.stop(), 1);
}

fn reload_by_signal(daemon: &crate::support::site::DaemonProcess, outcome: &str) {
    daemon.signal(Signal::HUP);
    wait_until(outcome, AMPLE, || daemon.status().last_reload.contains(outcome));
}

#[test]
fn a_reload_makes_stale_only_what_the_change_can_change() {
    let site = Site::new();
    let objects = ["KF-1", "KF-2", "KF-3"];
    let mut daemon = site.start();
    for object in objects {
        site.drop_file(&format!("{object}.fits"), &format!("object {object}"));
    }
    for object in objects {
        site.wait_for_report(object);
    }
    let before = daemon.wait_until_idle();
    let old = objects.map(|object| site.current_report(object).unwrap());

    site.configure("log.level = \"debug\"\nworkers.threads = 3");
    reload_by_signal(&daemon, "taken over, 0 queued");
    let status = daemon.wait_until_idle();
    assert_eq!((status.fingerprint, status.jobs.done), (before.fingerprint.clone(), 3));
    wait_until("the pool has grown", AMPLE, || daemon.status().workers.threads == 3);

    site.configure(&format!("{INSTRUMENT}1800.0"));
    reload_by_signal(&daemon, "taken over, 3 queued");
    let after = daemon.wait_until_idle();
    assert_ne!(after.fingerprint, before.fingerprint);
    assert_eq!(after.jobs.done, 3);
    for (object, old) in objects.iter().zip(&old) {
        let new = site.current_report(object).unwrap();
        assert_eq!(new["provenance"]["config_fingerprint"], after.fingerprint);
        assert_eq!(new["source"], old["source"]);
    }
    assert_eq!(site.all_reports().len(), 9, "old reports are kept");

    // Back again: the answers are there already, only the pointers move.
    site.configure("");
    reload_by_signal(&daemon, "taken over, 0 queued");
    assert_eq!(objects.map(|object| site.current_report(object).unwrap()), old);
    assert_eq!(daemon.stop(), 0);
}

#[test]
fn a_refused_configuration_leaves_the_old_one_running() {
    let site = Site::new();
    let daemon = site.start();
    let before = daemon.status().fingerprint;
    site.configure("workers.thread = 3");
    reload_by_signal(&daemon, "refused: cannot use the configuration: unknown key `workers.thread`");
    fs::write(&site.config_path, "inbox = 3").unwrap();
    let refusal = daemon.refit(false).unwrap_err();
    assert!(refusal.contains("cannot use the configuration"), "{refusal}");
    site.configure("output.reports = \"/elsewhere\"");
    let refusal = daemon.refit(false).unwrap_err();
    assert_eq!(refusal, "cannot take over `output.reports` while running (restart the daemon)");
    site.drop_file("a.fits", "object KF-1");
    site.wait_for_report("KF-1");
    assert_eq!(daemon.status().fingerprint, before);
}

#[test]
fn a_changed_inbox_is_watched_after_a_reload() {
    let site = Site::new();
    let daemon = site.start();
    let other = site.folder.path().join("other");
    fs::create_dir(&other).unwrap();
    fs::write(other.join("a.fits"), "object other\nEND\n").unwrap();
    site.configure(&format!("inbox.folders = [{:?}, {:?}]", site.inbox, other));
    reload_by_signal(&daemon, "taken over");
    site.wait_for_report("other");
}

#[test]
fn a_configuration_that_changed_while_no_daemon_ran_is_noticed_at_the_start() {
    let site = Site::new();
    site.drop_file("a.fits", "object KF-1");
    assert_eq!(site.drain(), 0);
    let old = site.current_report("KF-1").unwrap();
    site.configure(&format!("{INSTRUMENT}1800.0"));
    assert_eq!(site.drain(), 0);
    assert_ne!(site.current_report("KF-1").unwrap(), old);
}

#[test]
fn the_refit_command_waits_for_the_daemon() {
    let site = Site::new();
    for index in 0..20 {
        site.drop_file(&format!("{index}.fits"), &format!("object KF-{index}\nsleep_ms 10"));
    }
    let daemon = site.start();
    assert_eq!(daemon.wait_until_idle().jobs.done, 20);
    site.configure(&format!("{INSTRUMENT}1800.0"));
    let args = RefitArgs { config: Some(site.config_path.clone()), failed: false, no_wait: false };
    assert_eq!(refit::run(&args, analyst::factory()).unwrap(), ExitCode::SUCCESS);
    let status = daemon.status();
    assert_eq!((status.jobs.done, status.jobs.queued_refit), (20, 0));
    let text = render(&status);
    assert!(text.contains("20 done, 0 rejected") && text.contains("(events)"), "{text}");
}

#[test]
fn a_drain_that_leaves_files_for_a_later_try_says_so() {
    let site = Site::new();
    site.configure("retry.first_delay_s = 3600.0");
    site.drop_file("never.fits", "fault retry");
    site.drop_file("good.fits", "object good");
    assert_eq!(site.drain(), 3);
    assert!(site.current_report("good").is_some());
}

#[test]
fn the_log_can_be_json_with_one_span_per_object() {
    let site = Site::new();
    site.configure("log.format = \"json\"");
    let path = site.drop_file("a.fits", "object KF-1");
    assert_eq!(site.drain(), 0);
    let lines: Vec<serde_json::Value> =
        site.log().lines().map(|line| serde_json::from_str(line).unwrap()).collect();
    let done: Vec<_> = lines.iter().filter(|line| line["span"]["name"] == "object").collect();
    assert_eq!(done.len(), 1, "{lines:?}");
    assert_eq!(done[0]["span"]["path"], path.canonicalize().unwrap().to_string_lossy().as_ref());
    assert_eq!(done[0]["fields"]["message"], "done");
}

/// The socket that systemd gives to its services.
struct Manager {
    socket: UnixDatagram,
    path: std::path::PathBuf,
}

impl Manager {
    fn new(site: &Site) -> Manager {
        let path = site.folder.path().join("notify");
        let socket = UnixDatagram::bind(&path).unwrap();
        socket.set_read_timeout(Some(AMPLE)).unwrap();
        Manager { socket, path }
    }

    fn next(&self) -> Option<String> {
        let mut buffer = [0; 4096];
        let count = self.socket.recv(&mut buffer).ok()?;
        Some(String::from_utf8_lossy(&buffer[..count]).into_owned())
    }

    fn wait_for(&self, line: &str) -> String {
        let start = Instant::now();
        loop {
            let message = self.next().unwrap_or_else(|| panic!("no {line}"));
            if message.lines().any(|found| found.starts_with(line)) {
                return message;
            }
            assert!(start.elapsed() < AMPLE, "no {line}");
        }
    }
}

#[test]
fn systemd_is_told_everything_it_wants_to_know() {
    let site = Site::new();
    let manager = Manager::new(&site);
    let mut daemon = site.spawn_with(|command| {
        command.env("NOTIFY_SOCKET", &manager.path).env("WATCHDOG_USEC", "150000");
    });
    manager.wait_for("READY=1");
    manager.wait_for("STATUS=0 new and 0 to refit waiting");
    manager.wait_for("WATCHDOG=1");
    manager.wait_for("WATCHDOG=1");
    daemon.signal(Signal::HUP);
    assert!(manager.wait_for("RELOADING=1").contains("MONOTONIC_USEC="));
    manager.wait_for("READY=1");
    daemon.signal(Signal::TERM);
    manager.wait_for("STOPPING=1");
    assert_eq!(daemon.wait(), 0);
}

#[test]
fn the_watchdog_is_fed_no_more_when_the_workers_hang() {
    const PERIOD: Duration = Duration::from_millis(100);
    let site = Site::new();
    site.configure(
        "workers.threads = 1\nworkers.time_limit_s = 0.1\nworkers.max_abandoned = 0\nservice.drain_deadline_s = 3600.0",
    );
    let manager = Manager::new(&site);
    let daemon = site.spawn_with(|command| {
        let period_us = (PERIOD * 3).as_micros().to_string();
        command.env("NOTIFY_SOCKET", &manager.path).env("WATCHDOG_USEC", period_us);
    });
    manager.wait_for("WATCHDOG=1");
    site.drop_file("hang.fits", "hang");
    wait_until("no thread is left", AMPLE, || daemon.try_status().is_some_and(|s| s.workers.threads == 0));
    // Take what was sent before; then ten periods without a ping, which only time can show.
    manager.socket.set_nonblocking(true).unwrap();
    while manager.next().is_some() {}
    std::thread::sleep(PERIOD * 10);
    while let Some(message) = manager.next() {
        assert!(!message.contains("WATCHDOG=1"), "{message}");
    }
}

/// The unit as it is, but with a program that exists on this machine.
fn unit_for_this_machine(site: &Site) -> std::path::PathBuf {
    let unit = include_str!("../../systemd/emberline.service");
    let path = site.folder.path().join("emberline.service");
    let here = std::env::current_exe().unwrap();
    fs::write(&path, unit.replace("/usr/bin/emberline", &here.to_string_lossy())).unwrap();
    path
}

#[test]
fn the_unit_is_valid_and_rated_safe() {
    const WORST_RATING: f64 = 2.0;
    if Command::new("systemd-analyze").arg("--version").output().is_err() {
        println!("not run: there is no systemd-analyze");
        return;
    }
    let site = Site::new();
    let unit = unit_for_this_machine(&site);
    let verify = Command::new("systemd-analyze").args(["verify", "--man=no"]).arg(&unit).output().unwrap();
    let complaints = String::from_utf8_lossy(&verify.stderr).into_owned();
    assert!(verify.status.success() && !complaints.contains("emberline.service"), "{complaints}");
    let security = Command::new("systemd-analyze")
        .args(["security", "--offline=true", "--no-pager"])
        .arg(&unit)
        .output()
        .unwrap();
    let text = String::from_utf8_lossy(&security.stdout).into_owned();
    let rating =
        text.lines().find_map(|line| line.split_once("Overall exposure level for emberline.service: "));
    let rating: f64 =
        rating.unwrap_or_else(|| panic!("{text}")).1.split(' ').next().unwrap().parse().unwrap();
    println!("exposure {rating}");
    assert!(rating < WORST_RATING);
}

#[test]
#[ignore = "a measurement, on an idle machine; run: cargo test --release -- --ignored --nocapture latency"]
fn latency_from_closed_file_to_report_of_an_idle_daemon() {
    const FILES: usize = 500;
    let site = Site::new();
    let daemon = site.start();
    daemon.wait_until_idle();
    let mut latencies_ms: Vec<f64> = (0..FILES)
        .map(|index| {
            let object = format!("KF-{index}");
            let text = format!("object {object}\n# {}\nEND\n", "spectrum ".repeat(20_000));
            fs::write(site.inbox.join(format!("{object}.fits")), text).unwrap();
            let closed = Instant::now();
            site.wait_for_report(&object);
            closed.elapsed().as_secs_f64() * 1e3
        })
        .collect();
    latencies_ms.sort_by(f64::total_cmp);
    let quantile = |q: f64| latencies_ms[((FILES - 1) as f64 * q) as usize];
    println!(
        "file closed to report on disk, looked for every 3 ms: median {:.1} ms, 90 % {:.1} ms, 99 % {:.1} ms",
        quantile(0.5),
        quantile(0.9),
        quantile(0.99)
    );
}
