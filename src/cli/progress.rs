//! Progress bars on standard error, hidden where that is no terminal.

use std::sync::atomic::{AtomicBool, Ordering};
use std::time::Duration;

use indicatif::{ProgressBar, ProgressStyle};

use crate::service::daemon::{Daemon, Ending};
use crate::service::logging;

/// Time between two looks at a daemon's progress.
const LOOK_PERIOD: Duration = Duration::from_millis(200);

/// A bar with rate and time left; `doing` is said before it, `things` behind the numbers.
pub fn bar(total: u64, doing: &'static str, things: &str) -> ProgressBar {
    let bar = ProgressBar::new(total).with_message(doing);
    let template = format!("{{msg}} [{{bar:40}}] {{pos}}/{{len}} {things}, {{per_sec}}, {{eta}} left");
    bar.with_style(ProgressStyle::with_template(&template).unwrap_or_else(|_| ProgressStyle::default_bar()))
}

/// Runs a daemon that drains to its end, and shows how far it is.
pub fn run_daemon(daemon: Daemon, bar: &ProgressBar) -> Ending {
    if bar.is_hidden() {
        return daemon.run();
    }
    logging::keep_clear_of(bar.clone());
    let shared = daemon.shared();
    let has_ended = AtomicBool::new(false);
    let ending = std::thread::scope(|scope| {
        scope.spawn(|| {
            while !has_ended.load(Ordering::Acquire) {
                if let Ok(status) = shared.status() {
                    let left = status.jobs.queued_new + status.jobs.queued_refit + status.jobs.running;
                    // Files are found while others are done, so the total may grow.
                    bar.set_length(bar.length().unwrap_or(0).max(status.ended_since_start + left));
                    bar.set_position(status.ended_since_start);
                }
                std::thread::sleep(LOOK_PERIOD);
            }
        });
        let ending = daemon.run();
        has_ended.store(true, Ordering::Release);
        ending
    });
    bar.finish_and_clear();
    ending
}
