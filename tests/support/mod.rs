//! What several tests share.

/// A stand-in for the science that does what the file says.
pub mod analyst;
pub mod fits_bytes;
pub mod folder;
pub mod published;
/// A site with folders and configuration, and daemons that run on it.
pub mod site;
pub mod toy_grid;

use std::time::{Duration, Instant};

/// Waits until a condition holds; panics with `what` at the deadline.
pub fn wait_until(what: &str, deadline: Duration, mut condition: impl FnMut() -> bool) {
    let start = Instant::now();
    while !condition() {
        assert!(start.elapsed() < deadline, "waited {deadline:?} in vain until {what}");
        std::thread::sleep(Duration::from_millis(3));
    }
}

/// Ample for anything that is not measured, on a loaded machine.
pub const AMPLE: Duration = Duration::from_secs(60);
