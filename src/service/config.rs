//! The configuration: one TOML file, defaults for every key, unknown keys refused.
//!
//! `config/emberline.toml` holds every key with its default (test
//! `the_sample_equals_the_defaults`). The known keys are those of the structs below, read through
//! their JSON schema, so a key is defined once. Paths may be overridden from the environment.
//! [`Config::answer_fingerprint`] covers only what can change an answer.

use std::path::{Path, PathBuf};
use std::time::Duration;

use schemars::JsonSchema;
use serde::{Deserialize, Serialize};

use crate::fit::{FitSettings, WINDOWS};
use crate::spectrum::{Exposures, Instrument, InstrumentFault};

/// Where the daemon looks when `--config` is not given.
pub const PLACES: [&str; 2] = ["config/emberline.toml", "/etc/emberline/emberline.toml"];

/// The configuration could not be used.
#[derive(Debug, thiserror::Error)]
pub enum ConfigError {
    /// No file was named and none stands at the usual places.
    #[error("cannot find a configuration: looked at {} (name one with --config)", PLACES.join(", "))]
    NotFound,
    /// The file could not be read.
    #[error("cannot read the configuration {}", path.display())]
    Unreadable {
        /// The file.
        path: PathBuf,
        /// Why.
        source: std::io::Error,
    },
    /// The text is not TOML, or a value has the wrong type.
    #[error("cannot use the configuration {}", path.display())]
    Syntax {
        /// The file.
        path: PathBuf,
        /// Where and why.
        source: toml::de::Error,
    },
    /// A key that means nothing.
    #[error("cannot use the configuration: unknown key `{key}`{}", suggestion(nearest))]
    UnknownKey {
        /// Full name of the key.
        key: String,
        /// The known key that is spelled most alike.
        nearest: Option<String>,
    },
    /// A section about an instrument that makes no sense.
    #[error("cannot use the configuration")]
    Instrument(#[from] InstrumentFault),
    /// A value outside of what makes sense.
    #[error("cannot use the configuration: `{key}` is {found}, need {need}")]
    OutOfRange {
        /// Full name of the key.
        key: &'static str,
        /// The value.
        found: String,
        /// What would do.
        need: &'static str,
    },
}

fn suggestion(nearest: &Option<String>) -> String {
    nearest.as_ref().map(|name| format!(" (did you mean `{name}`?)")).unwrap_or_default()
}

/// Everything that can be configured. Field documentation: `config/emberline.toml`.
#[derive(Debug, Clone, PartialEq, Default, Serialize, Deserialize, JsonSchema)]
#[serde(default)]
pub struct Config {
    /// What is watched.
    pub inbox: InboxConfig,
    /// Where results go.
    pub output: OutputConfig,
    /// The processes that read files.
    pub reader: ReaderConfig,
    /// The fitting threads.
    pub workers: WorkersConfig,
    /// What happens to faults that may pass.
    pub retry: RetryConfig,
    /// The running daemon.
    pub service: ServiceConfig,
    /// What is told.
    pub log: LogConfig,
    /// How spectra are fitted.
    pub fit: FitSettings,
    /// What is known of instruments, in order of precedence.
    pub instrument: Vec<Instrument>,
}

/// What is watched, and when a file counts as whole.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, JsonSchema)]
#[serde(default)]
pub struct InboxConfig {
    /// Folders to watch.
    pub folders: Vec<PathBuf>,
    /// Whether folders inside them are watched too.
    pub recursive: bool,
    /// Patterns, relative to the folder, one of which must match.
    pub include: Vec<String>,
    /// Patterns of what is left alone.
    pub exclude: Vec<String>,
    /// Kernel events or polling.
    pub polling: Polling,
    /// Seconds between looks at a polled folder.
    pub poll_interval_s: f64,
    /// Seconds between full scans of folders with events.
    pub rescan_interval_s: f64,
    /// Seconds of stillness that make an unannounced file whole.
    pub still_s: f64,
    /// Largest file, in 1e6 bytes.
    pub max_file_mb: f64,
}

impl Default for InboxConfig {
    fn default() -> Self {
        InboxConfig {
            folders: Vec::new(),
            recursive: true,
            include: vec!["**".to_owned()],
            exclude: Vec::new(),
            polling: Polling::Auto,
            poll_interval_s: 10.0,
            rescan_interval_s: 300.0,
            still_s: 5.0,
            max_file_mb: 1000.0,
        }
    }
}

/// Kernel events or polling.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize, JsonSchema)]
#[serde(rename_all = "lowercase")]
pub enum Polling {
    /// By the type of the file system.
    Auto,
    /// Everywhere.
    Always,
    /// Nowhere.
    Never,
}

/// Where results go.
#[derive(Debug, Clone, PartialEq, Default, Serialize, Deserialize, JsonSchema)]
#[serde(default)]
pub struct OutputConfig {
    /// Folder of the reports.
    pub reports: PathBuf,
    /// The ledger file.
    pub ledger: PathBuf,
    /// The catalogue; empty means beside the ledger.
    pub catalogue: PathBuf,
    /// Folder that originals are moved to when they are finished; empty leaves them where they are.
    pub move_finished_to: PathBuf,
}

/// The processes that read files.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, JsonSchema)]
#[serde(default)]
pub struct ReaderConfig {
    /// Number of processes; 0 means one per fitting thread.
    pub processes: usize,
    /// Address space of each, in 1e6 bytes.
    pub memory_mb: f64,
    /// Seconds that reading one file may take.
    pub time_limit_s: f64,
    /// What is done with several exposures of one object in one file.
    pub exposures: Exposures,
}

impl Default for ReaderConfig {
    fn default() -> Self {
        // Packed, unpacked and decoded, the largest file takes four times its size.
        ReaderConfig { processes: 0, memory_mb: 1500.0, time_limit_s: 30.0, exposures: Exposures::Apart }
    }
}

/// The fitting threads.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, JsonSchema)]
#[serde(default)]
pub struct WorkersConfig {
    /// Number of threads; 0 means one per core.
    pub threads: usize,
    /// Seconds that one file may take.
    pub time_limit_s: f64,
    /// Given-up threads that are replaced.
    pub max_abandoned: usize,
}

impl Default for WorkersConfig {
    fn default() -> Self {
        WorkersConfig { threads: 0, time_limit_s: 120.0, max_abandoned: 8 }
    }
}

impl WorkersConfig {
    /// The number of threads that `threads` means on this machine.
    pub fn thread_count(&self) -> usize {
        match self.threads {
            0 => std::thread::available_parallelism().map_or(1, usize::from),
            count => count,
        }
    }
}

/// What happens to faults that may pass.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, JsonSchema)]
#[serde(default)]
pub struct RetryConfig {
    /// Attempts in all.
    pub attempts: u32,
    /// Seconds before the second attempt.
    pub first_delay_s: f64,
    /// Longest wait, in seconds.
    pub max_delay_s: f64,
    /// Deaths of the daemon that one file may be present at.
    pub interruptions: u32,
}

impl Default for RetryConfig {
    fn default() -> Self {
        RetryConfig { attempts: 5, first_delay_s: 10.0, max_delay_s: 3600.0, interruptions: 20 }
    }
}

impl RetryConfig {
    /// Seconds to wait after so many failed attempts: doubling, up to the longest.
    pub fn delay_s(&self, failed_attempts: u32) -> f64 {
        let doublings = failed_attempts.saturating_sub(1).min(60);
        (self.first_delay_s * 2f64.powi(doublings as i32)).min(self.max_delay_s)
    }
}

/// The running daemon.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, JsonSchema)]
#[serde(default)]
pub struct ServiceConfig {
    /// Unix socket; empty means beside the ledger.
    pub socket: PathBuf,
    /// Seconds that running fits get at the end.
    pub drain_deadline_s: f64,
}

impl Default for ServiceConfig {
    fn default() -> Self {
        ServiceConfig { socket: PathBuf::new(), drain_deadline_s: 60.0 }
    }
}

/// What is told.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, JsonSchema)]
#[serde(default)]
pub struct LogConfig {
    /// Level or filter.
    pub level: String,
    /// Journal or stderr.
    pub destination: LogDestination,
    /// Text or JSON.
    pub format: LogFormat,
}

impl Default for LogConfig {
    fn default() -> Self {
        LogConfig { level: "info".to_owned(), destination: LogDestination::Auto, format: LogFormat::Text }
    }
}

/// Where the log goes.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize, JsonSchema)]
#[serde(rename_all = "lowercase")]
pub enum LogDestination {
    /// The journal when systemd listens there, else stderr.
    Auto,
    /// The systemd journal.
    Journal,
    /// Standard error.
    Stderr,
}

/// How the log is written to stderr.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize, JsonSchema)]
#[serde(rename_all = "lowercase")]
pub enum LogFormat {
    /// Lines for people.
    Text,
    /// One JSON object per line.
    Json,
}

impl Config {
    /// Reads the file named on the command line, or the first at the usual places, and applies the
    /// overrides of the environment.
    ///
    /// # Errors
    /// No file, an unreadable file, or one that [`Config::parse`] refuses.
    pub fn read(named: Option<&Path>) -> Result<(PathBuf, Config), ConfigError> {
        let path = match named {
            Some(path) => path.to_owned(),
            None => PLACES.iter().map(PathBuf::from).find(|p| p.exists()).ok_or(ConfigError::NotFound)?,
        };
        let text = std::fs::read_to_string(&path)
            .map_err(|source| ConfigError::Unreadable { path: path.clone(), source })?;
        let config = Config::parse(&text, &path, |name| std::env::var(name).ok())?;
        Ok((path, config))
    }

    /// Parses and checks a configuration; `environment` looks up the overrides, `path` is for messages.
    ///
    /// # Errors
    /// Not TOML, a wrong type, an unknown key, or a value out of range.
    pub fn parse(
        text: &str,
        path: &Path,
        environment: impl Fn(&str) -> Option<String>,
    ) -> Result<Config, ConfigError> {
        let syntax = |source| ConfigError::Syntax { path: path.to_owned(), source };
        let table: toml::Table = toml::from_str(text).map_err(syntax)?;
        check_keys(&table)?;
        // From the text again, not from the table, because only then errors carry line and column.
        let mut config: Config = toml::from_str(text).map_err(syntax)?;
        config.override_paths(environment);
        config.check()?;
        Ok(config)
    }

    fn override_paths(&mut self, environment: impl Fn(&str) -> Option<String>) {
        if let Some(folders) = environment("EMBERLINE_INBOX_FOLDERS") {
            self.inbox.folders = std::env::split_paths(&folders).collect();
        }
        for (name, path) in [
            ("EMBERLINE_OUTPUT_REPORTS", &mut self.output.reports),
            ("EMBERLINE_OUTPUT_LEDGER", &mut self.output.ledger),
            ("EMBERLINE_OUTPUT_MOVE_FINISHED_TO", &mut self.output.move_finished_to),
            ("EMBERLINE_SERVICE_SOCKET", &mut self.service.socket),
        ] {
            if let Some(value) = environment(name) {
                *path = PathBuf::from(value);
            }
        }
    }

    fn check(&self) -> Result<(), ConfigError> {
        let in_range = |key, value: f64, low: f64, high: f64, need| {
            // Written so that NaN is refused.
            if value >= low && value <= high {
                Ok(())
            } else {
                Err(ConfigError::OutOfRange { key, found: value.to_string(), need })
            }
        };
        const YEAR_S: f64 = 3.2e7;
        let inbox = &self.inbox;
        in_range("inbox.poll_interval_s", inbox.poll_interval_s, 0.05, YEAR_S, "0.05 s to a year")?;
        in_range("inbox.rescan_interval_s", inbox.rescan_interval_s, 0.05, YEAR_S, "0.05 s to a year")?;
        in_range("inbox.still_s", inbox.still_s, 0.0, 86400.0, "0 s to a day")?;
        in_range("inbox.max_file_mb", inbox.max_file_mb, 1e-6, 1e6, "up to 1e6 MB, above 0")?;
        let reader = &self.reader;
        in_range("reader.processes", reader.processes as f64, 0.0, 1024.0, "0 to 1024")?;
        in_range("reader.memory_mb", reader.memory_mb, 200.0, 1e6, "200 to 1e6 MB")?;
        in_range("reader.time_limit_s", reader.time_limit_s, 0.01, 86400.0, "0.01 s to a day")?;
        in_range("workers.threads", self.workers.threads as f64, 0.0, 1024.0, "0 to 1024")?;
        in_range("workers.time_limit_s", self.workers.time_limit_s, 0.01, 86400.0, "0.01 s to a day")?;
        in_range("retry.attempts", self.retry.attempts.into(), 1.0, 1000.0, "1 to 1000")?;
        in_range("retry.first_delay_s", self.retry.first_delay_s, 0.0, YEAR_S, "0 s to a year")?;
        in_range("retry.max_delay_s", self.retry.max_delay_s, 0.0, YEAR_S, "0 s to a year")?;
        in_range("retry.interruptions", self.retry.interruptions.into(), 1.0, 1e6, "1 to 1e6")?;
        in_range("service.drain_deadline_s", self.service.drain_deadline_s, 0.0, 86400.0, "0 s to a day")?;
        let fit = &self.fit;
        let lines = fit.lines.len() as f64;
        in_range("fit.lines (their number)", lines, 1.0, WINDOWS.len() as f64, "at least one line")?;
        if (1..fit.lines.len()).any(|i| fit.lines[..i].contains(&fit.lines[i])) {
            let found = "a list with one line twice".to_owned();
            return Err(ConfigError::OutOfRange { key: "fit.lines", found, need: "each line once" });
        }
        let need = "1 to the number of lines";
        in_range("fit.fewest_windows", fit.fewest_windows as f64, 1.0, lines, need)?;
        in_range("fit.core_mask_half_width_aa", fit.core_mask_half_width_aa, 0.0, 20.0, "0 to 20 A")?;
        in_range("fit.largest_velocity_km_s", fit.largest_velocity_km_s, 100.0, 1500.0, "100 to 1500 km/s")?;
        in_range("fit.outlier_sigma", fit.outlier_sigma, 3.0, 1e6, "at least 3")?;
        in_range("fit.tilt_sigma", fit.tilt_sigma, 0.005, 100.0, "0.005 to 100")?;
        in_range("fit.external_teff_relative", fit.external_teff_relative, 0.0, 0.5, "0 to 0.5")?;
        in_range("fit.external_log_g", fit.external_log_g, 0.0, 1.0, "0 to 1 dex")?;
        for (key, patterns) in
            [("inbox.include", &self.inbox.include), ("inbox.exclude", &self.inbox.exclude)]
        {
            for pattern in patterns {
                if globset::Glob::new(pattern).is_err() {
                    let need = "a pattern such as \"night-*/**\"";
                    return Err(ConfigError::OutOfRange { key, found: format!("{pattern:?}"), need });
                }
            }
        }
        if tracing_subscriber::EnvFilter::try_new(&self.log.level).is_err() {
            let need = "a level such as \"info\" or a filter such as \"info,emberline::fit=debug\"";
            return Err(ConfigError::OutOfRange {
                key: "log.level",
                found: format!("{:?}", self.log.level),
                need,
            });
        }
        self.instrument.iter().try_for_each(Instrument::check)?;
        Ok(())
    }

    /// Refuses a configuration that a daemon cannot run with.
    ///
    /// # Errors
    /// A path that a daemon needs is missing.
    pub fn check_for_daemon(&self) -> Result<(), ConfigError> {
        let missing = |key, need| Err(ConfigError::OutOfRange { key, found: "empty".to_owned(), need });
        if self.inbox.folders.is_empty() {
            return missing("inbox.folders", "at least one folder to watch");
        }
        if self.output.reports.as_os_str().is_empty() {
            return missing("output.reports", "a folder for the reports");
        }
        if self.output.ledger.as_os_str().is_empty() {
            return missing("output.ledger", "a file for the ledger");
        }
        let moved = &self.output.move_finished_to;
        let is_within = |inner: &Path, outer: &Path| real(inner).starts_with(real(outer));
        let meets = |folder: &PathBuf| is_within(moved, folder) || is_within(folder, moved);
        if !moved.as_os_str().is_empty() && self.inbox.folders.iter().any(meets) {
            return Err(ConfigError::OutOfRange {
                key: "output.move_finished_to",
                found: format!("{} (meets a watched folder)", moved.display()),
                need: "a folder apart from those of inbox.folders",
            });
        }
        Ok(())
    }

    /// Names everything in this configuration that can change an answer, as 64 hex digits.
    pub fn answer_fingerprint(&self) -> String {
        // Serialising structs of strings and finite numbers cannot fail; an empty text would only
        // make all configurations look the same, which the tests would see.
        let text =
            serde_json::to_string(&(&self.fit, &self.instrument, self.reader.exposures)).unwrap_or_default();
        blake3::hash(text.as_bytes()).to_hex().to_string()
    }

    /// The catalogue's database.
    pub fn catalogue_path(&self) -> PathBuf {
        if self.output.catalogue.as_os_str().is_empty() {
            beside(&self.output.ledger, ".catalogue")
        } else {
            self.output.catalogue.clone()
        }
    }

    /// The socket of the running daemon.
    pub fn socket_path(&self) -> PathBuf {
        if self.service.socket.as_os_str().is_empty() {
            beside(&self.output.ledger, ".socket")
        } else {
            self.service.socket.clone()
        }
    }
}

/// The path absolute and, as far as it exists, without links.
fn real(path: &Path) -> PathBuf {
    let named = std::path::absolute(path).unwrap_or_else(|_| path.to_owned());
    let is_there = named.ancestors().find_map(|above| Some((above, std::fs::canonicalize(above).ok()?)));
    match is_there {
        Some((above, real)) => named.strip_prefix(above).map_or(named.clone(), |rest| real.join(rest)),
        None => named,
    }
}

/// `path` with `suffix` appended to its file name.
pub fn beside(path: &Path, suffix: &str) -> PathBuf {
    let mut name = path.as_os_str().to_owned();
    name.push(suffix);
    PathBuf::from(name)
}

/// The full names of all keys, such as `inbox.still_s` and `instrument.medium`, sorted.
pub fn known_keys() -> Vec<String> {
    let schema = schemars::schema_for!(Config).to_value();
    let mut keys = Vec::new();
    collect_keys(&schema, &schema, "", &mut keys);
    keys.sort();
    keys
}

fn collect_keys(root: &serde_json::Value, node: &serde_json::Value, prefix: &str, keys: &mut Vec<String>) {
    let node = match node.get("$ref").and_then(|reference| reference.as_str()) {
        Some(reference) => root.pointer(reference.trim_start_matches('#')).unwrap_or(node),
        None => node.get("items").unwrap_or(node),
    };
    if let Some(reference) = node.get("$ref") {
        let wrapped = serde_json::json!({ "$ref": reference });
        return collect_keys(root, &wrapped, prefix, keys);
    }
    let Some(properties) = node.get("properties").and_then(|p| p.as_object()) else { return };
    for (name, child) in properties {
        let key = if prefix.is_empty() { name.clone() } else { format!("{prefix}.{name}") };
        collect_keys(root, child, &key, keys);
        keys.push(key);
    }
}

fn check_keys(table: &toml::Table) -> Result<(), ConfigError> {
    let known = known_keys();
    let mut found = Vec::new();
    list_keys(table, "", &known, &mut found);
    match found.into_iter().find(|key| !known.contains(key)) {
        None => Ok(()),
        Some(key) => {
            let nearest = known
                .iter()
                .map(|candidate| (strsim::jaro_winkler(candidate, &key), candidate))
                // Common practice: below 0.8 a suggestion puzzles more than it helps.
                .filter(|(likeness, _)| *likeness > 0.8)
                .max_by(|a, b| a.0.total_cmp(&b.0))
                .map(|(_, candidate)| candidate.clone());
            Err(ConfigError::UnknownKey { key, nearest })
        }
    }
}

fn list_keys(table: &toml::Table, prefix: &str, known: &[String], found: &mut Vec<String>) {
    for (name, value) in table {
        let key = if prefix.is_empty() { name.clone() } else { format!("{prefix}.{name}") };
        // `instrument.match` holds header keywords, not keys of ours.
        let is_free = !known.iter().any(|candidate| candidate.starts_with(&format!("{key}.")));
        found.push(key.clone());
        match value {
            toml::Value::Table(inner) if !is_free => list_keys(inner, &key, known, found),
            toml::Value::Array(items) if !is_free => {
                for item in items {
                    if let toml::Value::Table(inner) = item {
                        list_keys(inner, &key, known, found);
                    }
                }
            }
            _ => {}
        }
    }
}

/// Seconds as a [`Duration`]; the value was checked when the configuration was parsed.
pub fn seconds(value_s: f64) -> Duration {
    Duration::try_from_secs_f64(value_s).unwrap_or(Duration::MAX)
}
