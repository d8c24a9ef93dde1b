//! Thousands of files at once: all are fitted, memory stays flat, and a late arrival does not wait for them.

use std::fs;
use std::time::{Duration, Instant};

use crate::support::site::Site;
use crate::support::wait_until;

const LATE: usize = 5;
const MAX_MEMORY_MB: f64 = 300.0;

#[test]
#[ignore = "3 minutes on a slow disk; run: cargo test --release -- --ignored --nocapture ten_thousand_files"]
fn ten_thousand_files_at_once_are_fitted_within_memory_and_late_arrivals_go_first() {
    flood(10_000);
}

#[test]
fn a_thousand_files_at_once_are_fitted_within_memory_and_late_arrivals_go_first() {
    flood(1_000);
}

fn flood(files: usize) {
    let site = Site::new();
    // More threads than cores: they wait for the disk most of the time.
    site.configure("workers.threads = 6");
    let staging = site.folder.path().join("staged");
    fs::create_dir(&staging).unwrap();
    for index in 0..files {
        let text = format!("object KF-{:03}\n# {index} {}\nEND\n", index % 500, "spectrum ".repeat(100));
        fs::write(staging.join(format!("{index:05}.fits")), text).unwrap();
    }
    let mut daemon = site.start();
    let started = Instant::now();
    for index in 0..files {
        let name = format!("{index:05}.fits");
        fs::rename(staging.join(&name), site.inbox.join(&name)).unwrap();
    }
    let mut overtaken = Vec::new();
    let mut latencies_ms = Vec::new();
    for late in 0..LATE {
        let name = format!("late-{late}");
        let dropped = Instant::now();
        site.drop_file(&format!("{name}.fits"), &format!("object {name}"));
        site.wait_for_report(&name);
        latencies_ms.push(dropped.elapsed().as_millis());
        overtaken.push(files as u64 - daemon.status().jobs.done.min(files as u64));
    }
    let mut last_done = 0;
    wait_until("all are done", Duration::from_secs(300), || {
        last_done = daemon.try_status().map_or(last_done, |status| status.jobs.done);
        last_done == (files + LATE) as u64
    });
    let elapsed_s = started.elapsed().as_secs_f64();
    let peak_mb = daemon.peak_memory_mb();
    println!(
        "{files} files in {elapsed_s:.1} s: {:.0} per second, peak memory {peak_mb:.0} MB; late arrivals took \
         {latencies_ms:?} ms and overtook {overtaken:?} files; events were lost {} times",
        files as f64 / elapsed_s,
        daemon.status().inbox.lost_events
    );
    assert!(peak_mb < MAX_MEMORY_MB);
    // Not a matter of time: had they waited for their turn, nothing would have been left to overtake.
    assert!(overtaken.iter().all(|left| *left > files as u64 / 10), "{overtaken:?}");
    assert_eq!(site.all_reports().len(), 2 * (files + LATE));
    assert_eq!(daemon.stop(), 0);
}
