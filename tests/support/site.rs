//! A site with folders and configuration, and daemons that run on it as processes of their own:
//! the test binary starts itself again, with an environment variable that makes
//! [`run_as_daemon_if_asked`] run `emberline watch` with the stand-in for the science.

use std::fs::{self, File};
use std::io::Write;
use std::os::unix::process::CommandExt;
use std::path::{Path, PathBuf};
use std::process::{Child, Command, ExitCode, Stdio};
use std::time::Duration;

use emberline::cli::watch::{self, WatchArgs};
use emberline::service::config::Config;
use emberline::service::control::{self, Answer, Question};
use emberline::service::daemon::{ReloadReport, StartError, chain};
use emberline::service::shared::Status;
use tempfile::TempDir;

use super::{AMPLE, analyst, wait_until};

const CONFIG_VARIABLE: &str = "EMBERLINE_TEST_DAEMON_CONFIG";
const DRAIN_VARIABLE: &str = "EMBERLINE_TEST_DAEMON_DRAIN";

/// The name by which the test binary is asked to become a daemon.
const ENTRY: &str = "service::become_a_daemon_if_asked";

/// Runs the daemon and ends the process, if the environment says so.
pub fn run_as_daemon_if_asked() {
    let Some(config) = std::env::var_os(CONFIG_VARIABLE) else { return };
    let args = WatchArgs { config: Some(config.into()), drain: std::env::var_os(DRAIN_VARIABLE).is_some() };
    let code = match watch::run(&args, analyst::factory()) {
        Ok(code) => (0..=255).find(|n| ExitCode::from(*n) == code).unwrap(),
        Err(error) => {
            eprintln!("{}", chain(&error));
            if matches!(error, StartError::Config(_)) { 2 } else { 1 }
        }
    };
    std::process::exit(code.into());
}

/// A folder with an inbox, a place for reports, a ledger and a configuration.
pub struct Site {
    pub folder: TempDir,
    pub inbox: PathBuf,
    pub reports: PathBuf,
    pub ledger: PathBuf,
    pub config_path: PathBuf,
}

impl Site {
    /// On the disk that the build is on: never a memory file system, where syncs cost nothing.
    pub fn new() -> Site {
        Site::below(Path::new(env!("CARGO_TARGET_TMPDIR")))
    }

    pub fn below(parent: &Path) -> Site {
        fs::create_dir_all(parent).unwrap();
        let folder = tempfile::tempdir_in(parent).unwrap();
        let path = folder.path().to_owned();
        let site = Site {
            inbox: path.join("inbox"),
            reports: path.join("out/reports"),
            ledger: path.join("out/ledger.sqlite"),
            config_path: path.join("emberline.toml"),
            folder,
        };
        fs::create_dir_all(&site.inbox).unwrap();
        fs::create_dir_all(&site.reports).unwrap();
        site.configure("");
        site
    }

    /// Writes the configuration: quick settings, with `keys` (lines such as `inbox.still_s = 3.0`) above them.
    pub fn configure(&self, keys: &str) {
        let mut lines = vec![
            format!("inbox.folders = [{:?}]", self.inbox),
            format!("output.reports = {:?}", self.reports),
            format!("output.ledger = {:?}", self.ledger),
            "inbox.still_s = 0.05".to_owned(),
            "workers.threads = 2".to_owned(),
            "retry.first_delay_s = 0.02".to_owned(),
            "service.drain_deadline_s = 20.0".to_owned(),
            "log.destination = \"stderr\"".to_owned(),
        ];
        for own in keys.lines() {
            let key = own.split('=').next().unwrap().trim().to_owned();
            lines.retain(|line| line.split('=').next().unwrap().trim() != key);
        }
        // Sections, such as [[instrument]], must come after all plain keys.
        let text = format!("{}\n{keys}\n", lines.join("\n"));
        fs::write(&self.config_path, text).unwrap();
    }

    pub fn config(&self) -> Config {
        Config::read(Some(&self.config_path)).unwrap().1
    }

    /// Puts a file into the inbox in one step.
    pub fn drop_file(&self, name: &str, lines: &str) -> PathBuf {
        let path = self.inbox.join(name);
        let staging = self.folder.path().join("staging");
        fs::write(&staging, format!("{lines}\nEND\n")).unwrap();
        fs::rename(&staging, &path).unwrap();
        path
    }

    fn command(&self) -> Command {
        let mut command = Command::new(std::env::current_exe().unwrap());
        command.args(["--exact", ENTRY, "--nocapture", "--test-threads=1"]);
        command.env(CONFIG_VARIABLE, &self.config_path);
        command.env_remove("NOTIFY_SOCKET").stdout(Stdio::null());
        command
    }

    /// Starts a daemon without waiting for it.
    pub fn spawn_with(&self, adapt: impl FnOnce(&mut Command)) -> DaemonProcess {
        let log = self.folder.path().join("log");
        let mut command = self.command();
        command.stderr(self.log_file());
        adapt(&mut command);
        let socket = emberline::service::config::beside(&self.ledger, ".socket");
        DaemonProcess { child: command.spawn().unwrap(), socket, log }
    }

    pub fn spawn(&self) -> DaemonProcess {
        self.spawn_with(|_| {})
    }

    /// Starts the program itself, with the real analysis, and waits until it watches.
    pub fn start_real(&self) -> DaemonProcess {
        let mut daemon = self.spawn_with(|command| {
            *command = Command::new(env!("CARGO_BIN_EXE_emberline"));
            command.arg("watch").arg("--config").arg(&self.config_path).stdout(Stdio::null());
            command.env("EMBERLINE_GRIDS", Path::new(env!("CARGO_MANIFEST_DIR")).join("grids"));
            command.env_remove("NOTIFY_SOCKET").stderr(self.log_file());
        });
        daemon.wait_until_watching();
        daemon
    }

    fn log_file(&self) -> File {
        File::options().create(true).append(true).open(self.folder.path().join("log")).unwrap()
    }

    /// Starts a daemon and waits until it watches.
    pub fn start(&self) -> DaemonProcess {
        let mut daemon = self.spawn();
        daemon.wait_until_watching();
        daemon
    }

    /// Runs `watch --drain` and returns its exit code.
    pub fn drain(&self) -> i32 {
        self.spawn_with(|command| {
            command.env(DRAIN_VARIABLE, "1");
        })
        .wait()
    }

    /// The report in force of the only spectrum of an object, if there is one.
    pub fn current_report(&self, object: &str) -> Option<serde_json::Value> {
        let mut pointers: Vec<PathBuf> = fs::read_dir(self.reports.join(object))
            .ok()?
            .map(|entry| entry.unwrap().path())
            .filter(|path| path.to_string_lossy().ends_with(".current.json"))
            .filter(|path| !path.file_name().unwrap().to_string_lossy().starts_with('.'))
            .collect();
        assert!(pointers.len() <= 1, "{object} has {pointers:?}");
        serde_json::from_slice(&fs::read(pointers.pop()?).unwrap()).unwrap()
    }

    /// All files below the reports.
    pub fn all_reports(&self) -> Vec<PathBuf> {
        walkdir::WalkDir::new(&self.reports)
            .into_iter()
            .map(|entry| entry.unwrap())
            .filter(|entry| !entry.file_type().is_dir())
            .map(|entry| entry.into_path())
            .collect()
    }

    pub fn log(&self) -> String {
        fs::read_to_string(self.folder.path().join("log")).unwrap_or_default()
    }

    /// Waits until the object has a report in force.
    pub fn wait_for_report(&self, object: &str) {
        wait_until(&format!("{object} has a report\n{}", self.log()), AMPLE, || {
            self.current_report(object).is_some()
        });
    }
}

/// A daemon in a process of its own; killed when dropped.
pub struct DaemonProcess {
    child: Child,
    socket: PathBuf,
    log: PathBuf,
}

impl DaemonProcess {
    pub fn pid(&self) -> u32 {
        self.child.id()
    }

    pub fn try_status(&self) -> Option<Status> {
        match control::ask(&self.socket, Question::Status) {
            Ok(Answer::Status(status)) if status.pid == self.pid() => Some(*status),
            _ => None,
        }
    }

    pub fn status(&self) -> Status {
        self.try_status()
            .unwrap_or_else(|| panic!("no status; log:\n{}", fs::read_to_string(&self.log).unwrap()))
    }

    pub fn refit(&self, failed: bool) -> Result<ReloadReport, String> {
        match control::ask(&self.socket, Question::Refit { failed }).unwrap() {
            Answer::Refit(report) => Ok(report),
            Answer::Refused(refusal) => Err(refusal),
            other => panic!("{other:?}"),
        }
    }

    pub fn wait_until_watching(&mut self) {
        let log = self.log.clone();
        wait_until("the daemon watches", AMPLE, || {
            let ended = self.child.try_wait().unwrap();
            assert!(ended.is_none(), "ended with {ended:?}:\n{}", fs::read_to_string(&log).unwrap());
            self.try_status().is_some_and(|status| status.phase == "watching")
        });
    }

    /// Waits until the daemon has nothing to do.
    pub fn wait_until_idle(&self) -> Status {
        let mut last = None;
        wait_until("the daemon is idle", AMPLE, || {
            last = self.try_status();
            last.as_ref().is_some_and(|status| {
                let jobs = &status.jobs;
                status.inbox.is_settled && jobs.queued_new + jobs.queued_refit + jobs.running == 0
            })
        });
        last.unwrap()
    }

    pub fn signal(&self, signal: rustix::process::Signal) {
        let pid = rustix::process::Pid::from_child(&self.child);
        rustix::process::kill_process(pid, signal).unwrap();
    }

    pub fn kill(&mut self) {
        self.child.kill().unwrap();
        self.child.wait().unwrap();
    }

    /// Waits for the end of the process and returns its exit code.
    pub fn wait(&mut self) -> i32 {
        let mut code = None;
        wait_until("the daemon ends", Duration::from_secs(180), || {
            code = self.child.try_wait().unwrap().map(|status| status.code().unwrap_or(-1));
            code.is_some()
        });
        code.unwrap()
    }

    /// Sends SIGTERM and returns the exit code.
    pub fn stop(&mut self) -> i32 {
        self.signal(rustix::process::Signal::TERM);
        self.wait()
    }

    /// Largest memory that the process had, MB of 1e6 bytes.
    pub fn peak_memory_mb(&self) -> f64 {
        let text = fs::read_to_string(format!("/proc/{}/status", self.pid())).unwrap();
        let line = text.lines().find(|line| line.starts_with("VmHWM:")).unwrap();
        let kib: f64 = line.split_whitespace().nth(1).unwrap().parse().unwrap();
        kib * 1024.0 / 1e6
    }
}

impl Drop for DaemonProcess {
    fn drop(&mut self) {
        let _ = self.child.kill();
        let _ = self.child.wait();
    }
}

/// Makes a command run as the user `nobody`, whom permissions bind.
pub fn as_nobody(command: &mut Command) {
    command.uid(65534).gid(65534);
}

/// Whether the tests may mount and change users.
pub fn is_root() -> bool {
    rustix::process::geteuid().is_root()
}

/// Writes a file slowly under its final name, in pieces, closing it only at the end.
pub fn write_in_pieces(path: &Path, text: &str, pieces: usize, mut between: impl FnMut()) {
    let mut file = File::create(path).unwrap();
    for piece in text.as_bytes().chunks(text.len().div_ceil(pieces)) {
        file.write_all(piece).unwrap();
        between();
    }
}
