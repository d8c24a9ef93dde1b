//! Where the log goes: the journal or stderr, as text or JSON; the level can change while running.

use std::io::{self, Write};
use std::path::Path;
use std::sync::{Mutex, PoisonError};

use indicatif::ProgressBar;
use tracing_subscriber::layer::SubscriberExt;
use tracing_subscriber::util::SubscriberInitExt;
use tracing_subscriber::{EnvFilter, Layer, Registry, fmt, reload};

use crate::service::config::{LogConfig, LogDestination, LogFormat};

/// Changes the level of the running log.
#[derive(Debug, Clone)]
pub struct LogHandle {
    filter: reload::Handle<EnvFilter, Registry>,
}

impl LogHandle {
    /// Puts another level or filter in force; it was checked when the configuration was parsed.
    pub fn set_level(&self, level: &str) {
        if let Ok(filter) = EnvFilter::try_new(level) {
            // Fails only when the subscriber is gone, and then nothing is told anyway.
            let _ = self.filter.reload(filter);
        }
    }
}

/// The bar that is on the terminal, if there is one.
static BAR: Mutex<Option<ProgressBar>> = Mutex::new(None);

/// From now on lines of the log are written above this bar instead of through it.
pub fn keep_clear_of(bar: ProgressBar) {
    *BAR.lock().unwrap_or_else(PoisonError::into_inner) = Some(bar);
}

/// Standard error, with the bar out of the way.
struct ClearStderr;

impl Write for ClearStderr {
    fn write(&mut self, bytes: &[u8]) -> io::Result<usize> {
        let bar = BAR.lock().unwrap_or_else(PoisonError::into_inner);
        let write = || io::stderr().write(bytes);
        bar.as_ref().map_or_else(write, |bar| bar.suspend(write))
    }

    fn flush(&mut self) -> io::Result<()> {
        io::stderr().flush()
    }
}

/// Starts the log of this process and sends panics there too.
pub fn start(config: &LogConfig) -> LogHandle {
    let (filter, handle) =
        reload::Layer::new(EnvFilter::try_new(&config.level).unwrap_or_else(|_| EnvFilter::new("info")));
    let wants_journal = match config.destination {
        LogDestination::Journal => true,
        LogDestination::Stderr => false,
        // systemd sets it when stderr already goes to the journal.
        LogDestination::Auto => std::env::var_os("JOURNAL_STREAM").is_some(),
    };
    let to_stderr = fmt::layer().with_writer(|| ClearStderr).with_ansi(false);
    let sink: Box<dyn Layer<_> + Send + Sync> =
        match (wants_journal.then(tracing_journald::layer), config.format) {
            (Some(Ok(journal)), _) => Box::new(journal),
            (_, LogFormat::Text) => Box::new(to_stderr),
            (_, LogFormat::Json) => Box::new(to_stderr.json()),
        };
    // A second start in one process (tests) keeps the first log.
    let _ = tracing_subscriber::registry().with(filter).with(sink).try_init();
    std::panic::set_hook(Box::new(|panic| tracing::error!("{panic}")));
    LogHandle { filter: handle }
}

/// A path for the log, where line breaks and control characters in a name must not write.
pub fn printable(path: &Path) -> String {
    let escape = |c: char| if c.is_control() { c.escape_default().to_string() } else { c.to_string() };
    path.to_string_lossy().chars().map(escape).collect()
}
