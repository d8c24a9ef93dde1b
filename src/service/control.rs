//! The unix socket of a running daemon: one JSON line asks, one JSON line answers.
//!
//! Whoever may open the socket (owner and group) may ask for the status and for a reload; nothing
//! else can be asked.

use std::io::{self, BufRead, BufReader, Read, Write};
use std::os::unix::fs::PermissionsExt;
use std::os::unix::net::{UnixListener, UnixStream};
use std::path::Path;
use std::sync::Arc;
use std::sync::mpsc::channel;
use std::time::Duration;

use serde::{Deserialize, Serialize};

use crate::service::daemon::{Command, ReloadReport};
use crate::service::shared::{Shared, Status};

/// What can be asked.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize)]
#[serde(tag = "ask", rename_all = "lowercase")]
pub enum Question {
    /// How the daemon is.
    Status,
    /// Read the configuration again and queue what it makes stale; with `failed` also what was
    /// rejected or given up.
    Refit {
        /// Whether rejected and given-up files are tried once more.
        failed: bool,
    },
}

/// What is answered.
#[derive(Debug, Clone, Serialize, Deserialize)]
#[serde(rename_all = "lowercase")]
pub enum Answer {
    /// To [`Question::Status`].
    Status(Box<Status>),
    /// To [`Question::Refit`].
    Refit(ReloadReport),
    /// The question could not be answered, or the new configuration was refused.
    Refused(String),
}

/// Longest question, bytes.
const MAX_QUESTION: u64 = 4096;

/// Time that a peer gets for its line.
const PEER_PATIENCE: Duration = Duration::from_secs(2);

/// Time that an answer may take: a reload loads grids.
const ANSWER_PATIENCE: Duration = Duration::from_secs(120);

/// Opens the socket and answers in a thread of its own until the process ends.
///
/// # Errors
/// The socket cannot be made.
pub fn serve(path: &Path, shared: Arc<Shared>) -> io::Result<()> {
    // The ledger's lock is ours, so a socket that is left here is of a dead daemon.
    match std::fs::remove_file(path) {
        Err(error) if error.kind() != io::ErrorKind::NotFound => return Err(error),
        _ => {}
    }
    if let Some(folder) = path.parent() {
        std::fs::create_dir_all(folder)?;
    }
    let listener = UnixListener::bind(path)?;
    std::fs::set_permissions(path, std::fs::Permissions::from_mode(0o660))?;
    std::thread::Builder::new().name("control".to_owned()).spawn(move || {
        for stream in listener.incoming() {
            match stream.and_then(|stream| answer(stream, &shared)) {
                Ok(()) => {}
                Err(error) => {
                    tracing::debug!(%error, "a question on the socket came to nothing");
                    // Out of file descriptors, accept fails at once and for ever.
                    std::thread::sleep(Duration::from_millis(10));
                }
            }
        }
    })?;
    Ok(())
}

fn answer(stream: UnixStream, shared: &Shared) -> io::Result<()> {
    stream.set_read_timeout(Some(PEER_PATIENCE))?;
    stream.set_write_timeout(Some(PEER_PATIENCE))?;
    let mut line = String::new();
    BufReader::new((&stream).take(MAX_QUESTION)).read_line(&mut line)?;
    let answer = match serde_json::from_str(&line) {
        Ok(Question::Status) => match shared.status() {
            Ok(status) => Answer::Status(Box::new(status)),
            Err(fault) => Answer::Refused(fault.to_string()),
        },
        Ok(Question::Refit { failed }) => {
            let (reply, answer) = channel();
            shared.send(Command::Reload { failed, reply: Some(reply) });
            match answer.recv_timeout(ANSWER_PATIENCE) {
                Ok(Ok(report)) => Answer::Refit(report),
                Ok(Err(refusal)) => Answer::Refused(refusal),
                Err(_) => Answer::Refused("the daemon is busy or stopping".to_owned()),
            }
        }
        Err(error) => Answer::Refused(format!("cannot understand the question: {error}")),
    };
    let mut text = serde_json::to_vec(&answer)?;
    text.push(b'\n');
    (&stream).write_all(&text)
}

/// Asks the daemon at `path`.
///
/// # Errors
/// Nobody listens there, or the answer cannot be understood.
pub fn ask(path: &Path, question: Question) -> io::Result<Answer> {
    let mut stream = UnixStream::connect(path)?;
    stream.set_read_timeout(Some(ANSWER_PATIENCE))?;
    let mut text = serde_json::to_vec(&question)?;
    text.push(b'\n');
    stream.write_all(&text)?;
    let mut line = String::new();
    BufReader::new(stream).read_line(&mut line)?;
    Ok(serde_json::from_str(&line)?)
}
