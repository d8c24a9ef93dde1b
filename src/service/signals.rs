//! Signals become commands: SIGTERM and SIGINT drain (a second one aborts), SIGHUP reloads.

use std::io;
use std::sync::mpsc::Sender;

use tokio::runtime::Runtime;
use tokio::signal::unix::{Signal, SignalKind, signal};

use crate::service::daemon::Command;

/// The signals, caught but not yet told to anybody.
pub struct Caught {
    runtime: Runtime,
    terminate: Signal,
    interrupt: Signal,
    hang_up: Signal,
}

/// Catches the signals from now on. Before the daemon answers on its socket: whoever learns from there that
/// it runs may send one at once, and uncaught it would end the process.
///
/// # Errors
/// The handlers cannot be installed.
pub fn catch() -> io::Result<Caught> {
    let runtime = tokio::runtime::Builder::new_current_thread().enable_io().build()?;
    let guard = runtime.enter();
    let (terminate, interrupt, hang_up) =
        (signal(SignalKind::terminate())?, signal(SignalKind::interrupt())?, signal(SignalKind::hangup())?);
    drop(guard);
    Ok(Caught { runtime, terminate, interrupt, hang_up })
}

impl Caught {
    /// Forwards what was and will be caught until the process ends.
    ///
    /// # Errors
    /// The system gives no thread.
    pub fn forward(self, commands: Sender<Command>) -> io::Result<()> {
        let Caught { runtime, mut terminate, mut interrupt, mut hang_up } = self;
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
}
