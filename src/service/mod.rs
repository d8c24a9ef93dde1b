//! The unattended daemon: it notices whole files, records them, has them analysed by a fixed pool of
//! threads, and puts reports on disk, through crashes, full disks and changes of configuration.
//!
//! Flow: [`inbox`] (kernel events, scans) -> ledger -> [`workers`] -> [`output`] -> ledger. The queue
//! is the ledger, so nothing is lost in memory. All parts meet in [`shared`]; [`daemon`] starts and
//! stops them. The science is behind [`analyst`].

/// The configuration file.
pub mod config;

/// The seam to the science.
pub mod analyst;

/// Reading in processes of its own.
pub mod reader_process;

/// Where the log goes.
pub mod logging;

/// Local or network.
pub mod file_system;

/// Which files are looked at.
pub mod exclusion;

/// Whether a file is whole.
pub mod wholeness;

/// Reports on disk.
pub mod output;

/// What the parts of the daemon share.
pub mod shared;

/// Finished originals leave the inbox.
pub mod finished;

/// Watched folders.
pub mod inbox;

/// The fitting threads.
pub mod workers;

/// The unix socket that `status` and `refit` talk to.
pub mod control;

/// Signals become commands.
pub mod signals;

/// Starting, supervising, reloading and stopping.
pub mod daemon;
