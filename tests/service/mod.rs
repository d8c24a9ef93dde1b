//! The daemon as a process: what arrives, what goes wrong, what is left behind.

mod comparison;
mod config;
mod failures;
mod flood;
mod hostile;
mod inbox;
mod kill;
mod ledger;
mod moving;
mod readers;
mod real;
mod running;

use crate::support::site;

/// Not a test by itself: the other tests start this binary with this name to have a daemon.
#[test]
fn become_a_daemon_if_asked() {
    site::run_as_daemon_if_asked();
}
