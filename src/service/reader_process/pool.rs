//! The pool of readers: starts them, hands them files, ends and replaces those that fail.
//!
//! A caller takes an idle reader, or starts one while there are fewer than allowed, or waits. Whatever
//! a reader does, the caller gets outcomes: those of the file, or one refusal with a code that says how the
//! reader failed. A reader that failed is ended; the next caller starts a new one.

use std::io::{self, Read};
use std::net::Shutdown;
use std::os::fd::OwnedFd;
use std::os::unix::net::UnixStream;
use std::os::unix::process::{CommandExt, ExitStatusExt};
use std::path::{Path, PathBuf};
use std::process::{Child, Command, ExitStatus, Stdio};
use std::sync::{Condvar, Mutex};
use std::time::{Duration, Instant};

use serde::Serialize;

use super::child::{COMMAND, send};
use super::message::{self, Containment, Limits, Orders, Reply, Request};
use crate::codes::{self, Code, Disposition};
use crate::service::shared::lock;
use crate::spectrum::fits::open_regular_file;
use crate::spectrum::{Outcomes, ReadFault, ReadSettings, Refusal};

/// Time that a new reader gets until it is locked in. Starting takes milliseconds; a loaded machine more.
const START_LIMIT: Duration = Duration::from_secs(30);
/// Most of a dead reader's last words that go into a report.
const MOST_LAST_WORDS: u64 = 4096;

/// Readers, shared by all fitting threads.
pub struct ReaderPool {
    program: PathBuf,
    orders: Orders,
    most: usize,
    state: Mutex<State>,
    freed: Condvar,
}

#[derive(Default)]
struct State {
    idle: Vec<Reader>,
    in_use: usize,
    counts: PoolCounts,
}

/// What became of the readers so far.
#[derive(Debug, Clone, Copy, Default, PartialEq, Eq, Serialize)]
pub struct PoolCounts {
    /// Readers started.
    pub started: u64,
    /// Readers that died over a file.
    pub crashed: u64,
    /// Readers that wanted more memory than allowed.
    pub over_memory: u64,
    /// Readers ended because a file took too long.
    pub over_time: u64,
    /// Readers ended because of a wrong answer.
    pub bad_answers: u64,
}

impl ReaderPool {
    /// Starts one reader, to see that it can be done, and tells the log where it could not lock
    /// itself in. `program` is this program, usually `/proc/self/exe`, which is the same binary even
    /// after an upgrade has replaced the file.
    ///
    /// # Errors
    /// No reader can be started.
    pub fn start(
        program: impl Into<PathBuf>,
        settings: &ReadSettings,
        limits: Limits,
        most: usize,
    ) -> io::Result<ReaderPool> {
        let orders = Orders::new(settings, limits)?;
        let pool = ReaderPool {
            program: program.into(),
            orders,
            most: most.max(1),
            state: Mutex::default(),
            freed: Condvar::new(),
        };
        let (reader, containment) = Reader::start(&pool.program, &pool.orders)?;
        for missing in &containment.missing {
            tracing::warn!("readers run without a part of their sandbox: {missing}");
        }
        let mut state = lock(&pool.state);
        state.idle.push(reader);
        state.counts.started += 1;
        drop(state);
        Ok(pool)
    }

    /// Reads every object of a file; never empty.
    pub fn read(&self, path: &Path) -> Outcomes {
        let shown_path = path.display().to_string();
        let refuse = |fault: ReadFault| vec![Err(Refusal::of_file(shown_path.clone(), fault))];
        let file = match open_regular_file(path) {
            Ok(file) => file,
            Err(fault) => return refuse(fault.into()),
        };
        let mut reader = match self.take() {
            Ok(reader) => reader,
            Err(error) => {
                let detail = format!("cannot start a reader: {error}");
                let code = &codes::READER_NOT_STARTED;
                return refuse(ReadFault::Told { code, disposition: Disposition::Retry, detail });
            }
        };
        let request = Request { shown_path: shown_path.clone() };
        match reader.read(&request, &file, self.orders.limits) {
            Ok(outcomes) => {
                self.put_back(Some(reader), None);
                outcomes
            }
            Err(error) => {
                let (code, detail) = reader.post_mortem(&error, self.orders.limits);
                tracing::error!(path = shown_path, code = code.id, "reader lost: {detail}");
                self.put_back(None, Some(code));
                refuse(ReadFault::Told { code, disposition: Disposition::Reject, detail })
            }
        }
    }

    /// What became of the readers so far.
    pub fn counts(&self) -> PoolCounts {
        lock(&self.state).counts
    }

    /// Process ids of the readers that are not at work.
    pub fn idle_process_ids(&self) -> Vec<u32> {
        lock(&self.state).idle.iter().map(|reader| reader.process.id()).collect()
    }

    fn take(&self) -> io::Result<Reader> {
        let mut state = lock(&self.state);
        loop {
            while let Some(mut reader) = state.idle.pop() {
                if reader.is_alive() {
                    state.in_use += 1;
                    return Ok(reader);
                }
            }
            if state.in_use < self.most {
                break;
            }
            state = self.freed.wait(state).unwrap_or_else(|poisoned| poisoned.into_inner());
        }
        state.in_use += 1;
        state.counts.started += 1;
        drop(state);
        Reader::start(&self.program, &self.orders).map(|(reader, _)| reader).inspect_err(|_| {
            let mut state = lock(&self.state);
            state.in_use -= 1;
            state.counts.started -= 1;
            self.freed.notify_one();
        })
    }

    fn put_back(&self, reader: Option<Reader>, failed_by: Option<&'static Code>) {
        let mut state = lock(&self.state);
        state.in_use -= 1;
        state.idle.extend(reader);
        if let Some(code) = failed_by {
            let counts = &mut state.counts;
            let count = match code.id {
                id if id == codes::READER_MEMORY.id => &mut counts.over_memory,
                id if id == codes::READER_TIME_LIMIT.id => &mut counts.over_time,
                id if id == codes::READER_BAD_ANSWER.id => &mut counts.bad_answers,
                _ => &mut counts.crashed,
            };
            *count += 1;
        }
        self.freed.notify_one();
    }
}

/// One child process.
struct Reader {
    process: Child,
    socket: UnixStream,
}

impl Reader {
    fn start(program: &Path, orders: &Orders) -> io::Result<(Reader, Containment)> {
        let (socket, theirs) = UnixStream::pair()?;
        let process = Command::new(program)
            .arg0("emberline")
            .arg(COMMAND)
            .env_clear()
            .current_dir("/")
            // A group of its own: Ctrl-C on a terminal is for the daemon, which lets its readers finish.
            .process_group(0)
            .stdin(OwnedFd::from(theirs))
            .stdout(Stdio::null())
            .stderr(Stdio::piped())
            .spawn()?;
        let mut reader = Reader { process, socket };
        message::write(&mut reader.socket, orders)?;
        let deadline = Instant::now() + START_LIMIT;
        match reader.next_reply(deadline, message::LONGEST_REQUEST_BYTES) {
            Ok((Reply::Ready(containment), _)) => Ok((reader, containment)),
            Ok(_) => Err(io::Error::other("found another first message than `ready`")),
            Err(error) => {
                let (_, detail) = reader.post_mortem(&error, orders.limits);
                Err(io::Error::new(error.kind(), detail))
            }
        }
    }

    fn is_alive(&mut self) -> bool {
        matches!(self.process.try_wait(), Ok(None))
    }

    fn read(&mut self, request: &Request, file: &std::fs::File, limits: Limits) -> io::Result<Outcomes> {
        let allowed = Duration::try_from_secs_f64(limits.time_s).unwrap_or(START_LIMIT);
        let deadline = Instant::now() + allowed;
        self.socket.set_write_timeout(Some(allowed))?;
        send(&mut self.socket, request, file)?;
        let mut outcomes = Vec::new();
        // All outcomes of a file are in the reader's memory at once, so they cannot be more than that.
        let mut left_bytes = limits.memory_bytes;
        loop {
            let (reply, bytes) = self.next_reply(deadline, left_bytes)?;
            left_bytes -= bytes;
            match reply {
                Reply::Read(observation) => outcomes.push(Ok(*observation)),
                Reply::Refused(refused) => outcomes.push(Err(refused.into_refusal()?)),
                Reply::Done if !outcomes.is_empty() => return Ok(outcomes),
                Reply::Done | Reply::Ready(_) => {
                    return Err(io::Error::new(io::ErrorKind::InvalidData, "found no outcome in the answer"));
                }
            }
        }
    }

    fn next_reply(&mut self, deadline: Instant, longest_bytes: u64) -> io::Result<(Reply, u64)> {
        message::read(&mut UntilDeadline { socket: &self.socket, deadline }, longest_bytes)
    }

    /// Ends the process and says which code its failure has, and why.
    fn post_mortem(mut self, error: &io::Error, limits: Limits) -> (&'static Code, String) {
        let _ = self.socket.shutdown(Shutdown::Both);
        // Does nothing to one that is dying already: what it dies of is settled.
        let _ = self.process.kill();
        let status = self.process.wait();
        match error.kind() {
            io::ErrorKind::WouldBlock | io::ErrorKind::TimedOut => {
                (&codes::READER_TIME_LIMIT, format!("no answer after {} s", limits.time_s))
            }
            io::ErrorKind::InvalidData => (&codes::READER_BAD_ANSWER, error.to_string()),
            _ => self.cause_of_death(status.ok(), limits),
        }
    }

    fn cause_of_death(&mut self, status: Option<ExitStatus>, limits: Limits) -> (&'static Code, String) {
        let mut words = Vec::new();
        if let Some(stderr) = &mut self.process.stderr {
            // Its other end closed when the process ended, so this does not wait.
            let _ = stderr.take(MOST_LAST_WORDS).read_to_end(&mut words);
        }
        let words = String::from_utf8_lossy(&words);
        let words: Vec<&str> = words.split_whitespace().collect();
        let words = words.join(" ");
        let how = status.map_or_else(|| "unknown end".to_owned(), |status| status.to_string());
        let signal = status.and_then(|status| status.signal());
        // The words of the standard library when an allocation fails.
        if words.contains("memory allocation of") || signal == Some(libc::SIGXFSZ) {
            let megabytes = limits.memory_bytes / 1_000_000;
            return (&codes::READER_MEMORY, format!("more than {megabytes} MB: {how}: {words}"));
        }
        if signal == Some(libc::SIGXCPU) {
            return (&codes::READER_TIME_LIMIT, format!("no answer after {} s", limits.time_s));
        }
        (&codes::READER_CRASHED, if words.is_empty() { how } else { format!("{how}: {words}") })
    }
}

impl Drop for Reader {
    fn drop(&mut self) {
        let _ = self.process.kill();
        let _ = self.process.wait();
    }
}

/// A socket that stops giving at a point in time, however slowly its bytes come.
struct UntilDeadline<'a> {
    socket: &'a UnixStream,
    deadline: Instant,
}

impl Read for UntilDeadline<'_> {
    fn read(&mut self, bytes: &mut [u8]) -> io::Result<usize> {
        let left = self.deadline.saturating_duration_since(Instant::now());
        if left.is_zero() {
            return Err(io::ErrorKind::TimedOut.into());
        }
        self.socket.set_read_timeout(Some(left))?;
        let mut socket = self.socket;
        socket.read(bytes)
    }
}
