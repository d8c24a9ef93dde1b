//! The daemon with the real analysis: `cargo bench --bench daemon -- latency [FILES]` (file closed -> report on
//! disk, idle daemon) and `cargo bench --bench daemon -- flood [FILES]` (all at once: rate, peak memory).
//! Files are invented spectra of the Kestrel Fell survey, written before the clock starts.
#![allow(missing_docs, clippy::unwrap_used, clippy::print_stdout)]

use std::fs;
use std::path::{Path, PathBuf};
use std::process::{Child, Command, Stdio};
use std::time::{Duration, Instant};

use emberline::grid::FluxGrid;
use emberline::rehearsal::{fits_table, observe};
use emberline::service::control::{self, Answer, Question};
use emberline::service::output::ReportPlace;
use emberline::service::shared::Status;

/// What was asked for, ms and MB.
const ASKED_MEDIAN_MS: f64 = 60.0;
const ASKED_99_MS: f64 = 250.0;
const ASKED_MB: f64 = 300.0;

fn main() {
    let arguments: Vec<String> = std::env::args().skip(1).filter(|word| !word.starts_with("--")).collect();
    let files = |default| arguments.get(1).map_or(default, |count| count.parse().unwrap());
    match arguments.first().map(String::as_str) {
        Some("latency") => latency(files(300)),
        Some("flood") => flood(files(10_000)),
        None => {
            latency(300);
            flood(1_000);
        }
        Some(other) => panic!("unknown benchmark {other}, need latency or flood"),
    }
}

/// A spectrum ready to be put into the inbox.
struct Staged {
    path: PathBuf,
    bytes: Vec<u8>,
    pointer: String,
}

struct Site {
    folder: tempfile::TempDir,
    daemon: Child,
}

impl Site {
    /// Starts the program on an empty folder, on the disk that the build is on.
    fn start() -> Site {
        let folder = tempfile::tempdir_in(env!("CARGO_TARGET_TMPDIR")).unwrap();
        let path = folder.path();
        fs::create_dir(path.join("inbox")).unwrap();
        fs::create_dir(path.join("staged")).unwrap();
        let config = path.join("emberline.toml");
        let text = format!(
            "inbox.folders = [{:?}]\noutput.reports = {:?}\noutput.ledger = {:?}\nlog.level = \"warn\"\n",
            path.join("inbox"),
            path.join("reports"),
            path.join("ledger.sqlite")
        );
        fs::write(&config, text).unwrap();
        let daemon = Command::new(env!("CARGO_BIN_EXE_emberline"))
            .arg("watch")
            .arg("--config")
            .arg(&config)
            .env("EMBERLINE_GRIDS", Path::new(env!("CARGO_MANIFEST_DIR")).join("grids"))
            .stdout(Stdio::null())
            .spawn()
            .unwrap();
        let site = Site { folder, daemon };
        while site.status().is_none_or(|status| status.phase != "watching") {
            std::thread::sleep(Duration::from_millis(20));
        }
        site
    }

    fn status(&self) -> Option<Status> {
        match control::ask(&self.folder.path().join("ledger.sqlite.socket"), Question::Status) {
            Ok(Answer::Status(status)) => Some(*status),
            _ => None,
        }
    }

    fn stage(&self, grid: &FluxGrid, number: u64) -> Staged {
        let sighting = observe(grid, 1, number).unwrap();
        let bytes = fits_table(&sighting);
        let hash = blake3::hash(&bytes).to_hex().to_string();
        // The pointer's name does not depend on the fingerprint.
        let pointer = ReportPlace::new(&sighting.name, &hash, 0, &hash).pointer;
        Staged { path: self.folder.path().join(format!("inbox/{number:05}.fits")), bytes, pointer }
    }

    fn peak_memory_mb(&self) -> f64 {
        let text = fs::read_to_string(format!("/proc/{}/status", self.daemon.id())).unwrap();
        let line = text.lines().find(|line| line.starts_with("VmHWM:")).unwrap();
        line.split_whitespace().nth(1).unwrap().parse::<f64>().unwrap() * 1024.0 / 1e6
    }
}

impl Drop for Site {
    fn drop(&mut self) {
        let _ = self.daemon.kill();
        let _ = self.daemon.wait();
    }
}

fn grid() -> FluxGrid {
    FluxGrid::read(&Path::new(env!("CARGO_MANIFEST_DIR")).join("grids/flux.fits")).unwrap()
}

fn verdict(found: f64, asked: f64) -> &'static str {
    if found < asked { "met" } else { "MISSED" }
}

fn latency(files: u64) {
    let (site, grid) = (Site::start(), grid());
    let mut latencies_ms: Vec<f64> = (0..files)
        .map(|number| {
            let Staged { path, bytes, pointer } = site.stage(&grid, number);
            let report = site.folder.path().join("reports").join(pointer);
            fs::write(&path, &bytes).unwrap();
            let closed = Instant::now();
            while !report.exists() {
                std::thread::sleep(Duration::from_micros(200));
            }
            let elapsed_ms = closed.elapsed().as_secs_f64() * 1e3;
            // The daemon writes its ledger and is idle again before the next file comes.
            std::thread::sleep(Duration::from_millis(30));
            elapsed_ms
        })
        .collect();
    latencies_ms.sort_by(f64::total_cmp);
    let quantile = |share: f64| latencies_ms[(share * (latencies_ms.len() - 1) as f64).round() as usize];
    let (median, most) = (quantile(0.5), quantile(0.99));
    println!(
        "file closed -> report on disk, {files} files: median {median:.1} ms (asked < {ASKED_MEDIAN_MS}: {}), \
         99 % {most:.1} ms (asked < {ASKED_99_MS}: {}), slowest {:.1} ms",
        verdict(median, ASKED_MEDIAN_MS),
        verdict(most, ASKED_99_MS),
        quantile(1.0)
    );
}

fn flood(files: u64) {
    let (site, grid) = (Site::start(), grid());
    let staged: Vec<(PathBuf, PathBuf)> = (0..files)
        .map(|number| {
            let Staged { path, bytes, .. } = site.stage(&grid, number);
            let waiting = site.folder.path().join("staged").join(path.file_name().unwrap());
            fs::write(&waiting, bytes).unwrap();
            (waiting, path)
        })
        .collect();
    let started = Instant::now();
    for (waiting, path) in &staged {
        fs::rename(waiting, path).unwrap();
    }
    while site.status().is_none_or(|status| status.jobs.done < files) {
        std::thread::sleep(Duration::from_millis(100));
    }
    let seconds = started.elapsed().as_secs_f64();
    let peak_mb = site.peak_memory_mb();
    println!(
        "{files} files at once: {:.1} per second, peak memory {peak_mb:.0} MB (asked < {ASKED_MB}: {})",
        files as f64 / seconds,
        verdict(peak_mb, ASKED_MB)
    );
}
