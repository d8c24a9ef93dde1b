//! Signals become commands: SIGTERM and SIGINT drain (a second one aborts), SIGHUP reloads.

use std::io;
use std::sync::mpsc::Sender;

use tokio::signal::unix::{SignalKind, signal};

use crate::service::daemon::Command;

/// Catches the signals from now on, and forwards them until the process ends.
///
/// # Errors
/// The handlers cannot be installed.
pub fn forward(commands: Sender<Command>) -> io::Result<()> {
    let runtime = tokio::runtime::Builder::new_current_thread().enable_io().build()?;
    let (mut terminate, mut interrupt, mut hang_up) = {
        let _guard = runtime.enter();
        (signal(SignalKind::terminate())?, signal(SignalKind::interrupt())?, signal(SignalKind::hangup())?)
    };
    std::thread::Builder::new().name("signals".to_owned()).spawn(move || {
        runtime.block_on(async move {
            loop {
                let command = tokio::select! {
                    _ = terminate.recv() => Command::Drain,
                    _ = interrupt.recv() => Command::Drain,
                    _ = hang_up.recv() => Command::Reload { failed: false, reply: None },
                };
                if commands.send(command).is_err() {
                    break;
                }
            }
        });
    })?;
    Ok(())
}
