//! Reading in processes of its own, so that no file can bring the daemon down.
//!
//! The daemon opens a file read only and hands the open descriptor to a child (the same binary,
//! started through `/proc/self/exe` with a hidden command), which has given up everything but memory
//! and that one socket: it can open nothing for writing, reach no network, start nothing, and has a
//! limit of memory ([`sandbox`]). Back come checked messages ([`message`]). A child that dies, hangs
//! or answers nonsense costs the file that it was at; the next file gets a new child ([`pool`]).
//!
//! What the hop costs is measured by the benchmark `reading::calspec_plain_in_a_reader_process`.

mod child;
mod message;
mod pool;
mod sandbox;

pub use child::{COMMAND, run};
pub use message::{Containment, Limits};
pub use pool::{PoolCounts, ReaderPool};
