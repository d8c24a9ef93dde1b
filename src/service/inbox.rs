//! The inbox: finds whole files in the watched folders and has them recorded.
//!
//! Kernel events make it quick, full scans make it true: an event may be lost (queue overflow, a
//! folder made and filled at once, a network file system), a scan may not. One thread does it all in
//! small steps, so that a scan of a large archive does not delay a file that was just closed. What was
//! announced last is read first.

use std::fs;
use std::os::unix::fs::MetadataExt;
use std::path::{Path, PathBuf};
use std::sync::Arc;
use std::sync::atomic::{AtomicBool, Ordering};
use std::sync::mpsc::{Receiver, RecvTimeoutError, SyncSender, TrySendError, sync_channel};
use std::time::{Duration, Instant};

use notify::event::{AccessKind, AccessMode, CreateKind, ModifyKind, RenameMode};
use notify::{Event, EventKind, RecommendedWatcher, RecursiveMode, Watcher};
use walkdir::{DirEntry, WalkDir};

use crate::service::analyst::Fault;
use crate::service::config::{InboxConfig, Polling, seconds};
use crate::service::exclusion::{ExclusionCounts, Look, Reason, Rules, hash_file};
use crate::service::file_system::is_on_network;
use crate::service::finished;
use crate::service::logging::printable;
use crate::service::shared::{FolderStatus, Shared};
use crate::service::wholeness::Wholeness;

/// Events that may wait for the intake. When they are more, a full scan finds what they told.
const MAX_EVENTS: usize = 16_384;

/// Announced files that may wait to be read; more are left to a full scan.
const MAX_READY: usize = 50_000;

/// Entries of a scan that are looked at between two looks at the events.
const SCAN_STEP: usize = 64;

/// Time between two checks that the watched folders are still the same folders.
const FOLDER_CHECK: Duration = Duration::from_millis(500);

/// What an event says of a path.
#[derive(Debug)]
enum News {
    /// Closed after writing, or renamed in: whole.
    Announced(PathBuf),
    /// Something happened: look, and wait for stillness.
    Touched(PathBuf),
    /// Events were lost.
    Lost,
}

struct Folder {
    /// As configured, absolute.
    named: PathBuf,
    /// Where that leads, links resolved: the kernel tells nothing of a watched link's target.
    path: PathBuf,
    /// Device and inode of what is watched; `None` while it is missing.
    identity: Option<(u64, u64)>,
    is_polled: bool,
}

struct Scan {
    root: PathBuf,
    entries: Box<dyn Iterator<Item = walkdir::Result<DirEntry>> + Send>,
}

/// The inbox, run by one thread.
pub struct Inbox {
    shared: Arc<Shared>,
    config: InboxConfig,
    rules: Rules,
    folders: Vec<Folder>,
    real_roots: Vec<PathBuf>,
    watcher: Option<RecommendedWatcher>,
    news: Receiver<News>,
    has_lost_events: Arc<AtomicBool>,
    wholeness: Wholeness,
    /// Files that are whole, with their numbers in the order of arrival.
    ready: Vec<(u64, PathBuf)>,
    scans: Vec<Scan>,
    is_full_scan: bool,
    needs_full_scan: bool,
    next_full_scan: Instant,
    next_poll: Instant,
    next_folder_check: Instant,
    next_stillness_check: Instant,
    counts: ExclusionCounts,
    counts_of_scan: ExclusionCounts,
}

impl Inbox {
    /// Sets up the watches of the configuration in force.
    pub fn new(shared: Arc<Shared>) -> Inbox {
        let config = shared.settings().config.inbox.clone();
        let now = Instant::now();
        let (_, news) = sync_channel(1);
        let mut inbox = Inbox {
            rules: Rules::new(&config),
            shared,
            config,
            folders: Vec::new(),
            real_roots: Vec::new(),
            watcher: None,
            news,
            has_lost_events: Arc::default(),
            wholeness: Wholeness::default(),
            ready: Vec::new(),
            scans: Vec::new(),
            is_full_scan: false,
            needs_full_scan: true,
            next_full_scan: now,
            next_poll: now,
            next_folder_check: now,
            next_stillness_check: now,
            counts: ExclusionCounts::default(),
            counts_of_scan: ExclusionCounts::default(),
        };
        inbox.watch_all();
        inbox
    }

    /// Works until the daemon stops.
    ///
    /// # Errors
    /// The ledger cannot be used.
    pub fn run(mut self) -> Result<(), Fault> {
        while !self.shared.is_stopping() {
            self.shared.beat_inbox();
            let settings = self.shared.settings();
            if settings.config.inbox != self.config {
                self.config = settings.config.inbox.clone();
                self.rules = Rules::new(&self.config);
                self.watch_all();
            }
            let heard_nothing = self.hear()?;
            self.read_ready()?;
            self.check_folders();
            self.check_stillness()?;
            self.begin_scans();
            self.step_scan()?;
            self.tell(heard_nothing);
        }
        Ok(())
    }

    fn watch_all(&mut self) {
        let (sender, news) = sync_channel(MAX_EVENTS);
        let has_lost_events = Arc::new(AtomicBool::new(false));
        let handler = {
            let has_lost_events = has_lost_events.clone();
            move |event| forward(event, &sender, &has_lost_events)
        };
        // Links to folders are not followed: they may lead out, or in a circle.
        let options = notify::Config::default().with_follow_symlinks(false);
        self.watcher = match RecommendedWatcher::new(handler, options) {
            Ok(watcher) => Some(watcher),
            Err(error) => {
                tracing::warn!(%error, "no kernel events, all folders are polled");
                None
            }
        };
        self.news = news;
        self.has_lost_events = has_lost_events;
        self.wholeness = Wholeness::default();
        self.ready.clear();
        self.scans.clear();
        self.is_full_scan = false;
        self.folders = self
            .config
            .folders
            .iter()
            .map(|path| {
                let named = std::path::absolute(path).unwrap_or_else(|_| path.clone());
                Folder { path: named.clone(), named, identity: None, is_polled: false }
            })
            .collect();
        (0..self.folders.len()).for_each(|index| self.watch(index));
        self.needs_full_scan = true;
    }

    /// Watches a folder that is new, or is no longer what it was.
    fn watch(&mut self, index: usize) {
        let folder = &mut self.folders[index];
        folder.identity = identity(&folder.named);
        folder.path = fs::canonicalize(&folder.named).unwrap_or_else(|_| folder.named.clone());
        if folder.identity.is_some() {
            folder.is_polled = match self.config.polling {
                Polling::Always => true,
                Polling::Never => false,
                Polling::Auto => is_on_network(&folder.path),
            };
            if !folder.is_polled {
                let mode = if self.config.recursive {
                    RecursiveMode::Recursive
                } else {
                    RecursiveMode::NonRecursive
                };
                let watched = self.watcher.as_mut().map(|watcher| watcher.watch(&folder.path, mode));
                if !matches!(watched, Some(Ok(()))) {
                    tracing::warn!(folder = %folder.path.display(), ?watched, "no kernel events here, polling it");
                    folder.is_polled = true;
                }
            }
            tracing::info!(folder = %folder.path.display(), polled = folder.is_polled, "watching");
        } else {
            tracing::warn!(folder = %folder.path.display(), "cannot watch: no folder there, waiting for it");
        }
        self.real_roots = self.folders.iter().map(|folder| folder.path.clone()).collect();
    }

    /// Takes in what the kernel told; waits a little when there is nothing else to do. Says whether
    /// there was nothing.
    fn hear(&mut self) -> Result<bool, Fault> {
        let is_busy = !self.ready.is_empty() || !self.scans.is_empty() || self.wants_full_scan();
        let now = Instant::now();
        let mut wait = self.next_folder_check.min(self.next_full_scan).saturating_duration_since(now);
        if !self.wholeness.is_empty() {
            wait = wait.min(self.next_stillness_check.saturating_duration_since(now));
        }
        if self.folders.iter().any(|folder| folder.is_polled) {
            wait = wait.min(self.next_poll.saturating_duration_since(now));
        }
        // The stop is noticed after at most this.
        wait = if is_busy { Duration::ZERO } else { wait.min(Duration::from_millis(100)) };
        let mut heard_nothing = true;
        loop {
            let news = match self.news.recv_timeout(wait) {
                Ok(news) => news,
                Err(RecvTimeoutError::Timeout) => break,
                Err(RecvTimeoutError::Disconnected) => {
                    // No watcher, everything is polled.
                    std::thread::sleep(wait);
                    break;
                }
            };
            wait = Duration::ZERO;
            heard_nothing = false;
            match news {
                News::Lost => self.has_lost_events.store(true, Ordering::Relaxed),
                News::Announced(path) => {
                    self.wholeness.forget(&path);
                    if self.ready.len() < MAX_READY {
                        self.ready.push((self.shared.next_arrival(), path));
                    } else {
                        self.needs_full_scan = true;
                    }
                }
                News::Touched(path) if self.wholeness.contains(&path) => {}
                News::Touched(path) => {
                    if let Some(root) = self.root_of(&path) {
                        self.look_at(&root, &path)?;
                    }
                }
            }
        }
        if self.has_lost_events.swap(false, Ordering::Relaxed) {
            tracing::warn!("kernel events were lost, scanning all folders");
            self.shared.update_inbox(|status| status.lost_events += 1);
            self.needs_full_scan = true;
        }
        Ok(heard_nothing)
    }

    /// Looks at a path that nobody announced as whole.
    fn look_at(&mut self, root: &Path, path: &Path) -> Result<(), Fault> {
        match self.rules.look(root, &self.real_roots, path) {
            Look::File(signature) => {
                if self.shared.is_known(path, &signature)? {
                    self.wholeness.forget(path);
                    finished::move_if_finished(&self.shared, path)?;
                } else if self.wholeness.is_full() && !self.wholeness.contains(path) {
                    self.needs_full_scan = true;
                } else if self.wholeness.observe(
                    path,
                    signature,
                    Instant::now(),
                    seconds(self.config.still_s),
                ) {
                    self.ready.push((self.shared.next_arrival(), path.to_owned()));
                }
            }
            Look::Folder => {}
            Look::Excluded(reason) => self.leave_alone(path, reason),
            Look::Vanished => self.wholeness.forget(path),
        }
        Ok(())
    }

    fn leave_alone(&mut self, path: &Path, reason: Reason) {
        self.wholeness.forget(path);
        self.counts.add(path, reason);
        self.counts_of_scan.add(path, reason);
    }

    /// Reads the files that are whole, the last announced first.
    fn read_ready(&mut self) -> Result<(), Fault> {
        // Now and then the news come first.
        const STEP: usize = 16;
        for _ in 0..STEP {
            let Some((arrival, path)) = self.ready.pop() else { break };
            let Some(root) = self.root_of(&path) else { continue };
            let signature = match self.rules.look(&root, &self.real_roots, &path) {
                Look::File(signature) => signature,
                Look::Folder => {
                    // Moved in with all that is in it, of which the kernel tells nothing.
                    self.scan(root, &path);
                    continue;
                }
                Look::Excluded(reason) => {
                    self.leave_alone(&path, reason);
                    continue;
                }
                Look::Vanished => continue,
            };
            if self.shared.is_known(&path, &signature)? {
                finished::move_if_finished(&self.shared, &path)?;
                continue;
            }
            match hash_file(&path, &signature, || self.shared.beat_inbox()) {
                Ok(Some(blake3)) => {
                    self.shared.record_file(&path, &signature, &blake3, arrival)?;
                    // A copy of what is finished already makes no job.
                    finished::move_if_finished(&self.shared, &path)?;
                }
                Ok(None) => self.look_at(&root, &path)?,
                Err(error) if error.kind() == std::io::ErrorKind::NotFound => {}
                Err(error) => {
                    tracing::warn!(path = %printable(&path), %error, "cannot read, left alone until the next scan");
                    self.leave_alone(&path, Reason::Unreadable);
                }
            }
        }
        Ok(())
    }

    fn root_of(&self, path: &Path) -> Option<PathBuf> {
        self.folders.iter().find(|folder| path.starts_with(&folder.path)).map(|folder| folder.path.clone())
    }

    /// A folder that was removed and made again, or had something mounted on it, is another folder
    /// under the same name, and the kernel tells nothing of it until it is watched anew.
    fn check_folders(&mut self) {
        if Instant::now() < self.next_folder_check {
            return;
        }
        self.next_folder_check = Instant::now() + FOLDER_CHECK;
        for index in 0..self.folders.len() {
            let present = identity(&self.folders[index].named);
            if present == self.folders[index].identity {
                continue;
            }
            if let (Some(watcher), Some(_)) = (&mut self.watcher, self.folders[index].identity) {
                // The watch may have gone with the folder; either way it is none of ours any more.
                let _ = watcher.unwatch(&self.folders[index].path);
            }
            self.watch(index);
            self.needs_full_scan = true;
        }
    }

    fn check_stillness(&mut self) -> Result<(), Fault> {
        if Instant::now() < self.next_stillness_check || self.wholeness.is_empty() {
            return Ok(());
        }
        let period =
            seconds(self.config.still_s / 4.0).clamp(Duration::from_millis(20), Duration::from_secs(1));
        for path in self.wholeness.paths() {
            match self.root_of(&path) {
                Some(root) => self.look_at(&root, &path)?,
                None => self.wholeness.forget(&path),
            }
        }
        self.next_stillness_check = Instant::now() + period;
        Ok(())
    }

    /// While as many files as may be are watched for stillness a scan could add none.
    fn wants_full_scan(&self) -> bool {
        self.needs_full_scan && !self.wholeness.is_full()
    }

    fn begin_scans(&mut self) {
        let now = Instant::now();
        if self.is_full_scan || !self.scans.is_empty() {
            return;
        }
        if self.wants_full_scan() || now >= self.next_full_scan {
            self.needs_full_scan = false;
            self.is_full_scan = true;
            self.counts_of_scan = ExclusionCounts::default();
            self.next_full_scan = now + seconds(self.config.rescan_interval_s);
            self.next_poll = now + seconds(self.config.poll_interval_s);
            self.scan_folders(|_| true);
        } else if now >= self.next_poll {
            self.next_poll = now + seconds(self.config.poll_interval_s);
            self.scan_folders(|folder| folder.is_polled);
        }
    }

    fn scan_folders(&mut self, is_wanted: impl Fn(&Folder) -> bool) {
        let wanted = self.folders.iter().filter(|f| f.identity.is_some() && is_wanted(f));
        let paths: Vec<PathBuf> = wanted.map(|folder| folder.path.clone()).collect();
        for path in paths {
            self.scan(path.clone(), &path);
        }
    }

    fn scan(&mut self, root: PathBuf, from: &Path) {
        if !self.config.recursive && root != from {
            return;
        }
        let depth = if self.config.recursive { usize::MAX } else { 1 };
        let walk = WalkDir::new(from).min_depth(1).max_depth(depth).follow_links(false);
        let is_hidden = |entry: &DirEntry| entry.file_name().as_encoded_bytes().starts_with(b".");
        let entries = walk
            .into_iter()
            .filter_entry(move |e| e.depth() == 0 || !(e.file_type().is_dir() && is_hidden(e)));
        self.scans.push(Scan { root, entries: Box::new(entries) });
    }

    fn step_scan(&mut self) -> Result<(), Fault> {
        for _ in 0..SCAN_STEP {
            let Some(scan) = self.scans.last_mut() else { break };
            match scan.entries.next() {
                None => {
                    self.scans.pop();
                }
                Some(Ok(entry)) if !entry.file_type().is_dir() => {
                    let root = scan.root.clone();
                    self.look_at(&root, entry.path())?;
                }
                Some(Ok(_)) => {}
                Some(Err(error)) => {
                    let is_missing =
                        error.io_error().is_some_and(|e| e.kind() == std::io::ErrorKind::NotFound);
                    if let (Some(path), false) = (error.path(), is_missing) {
                        self.leave_alone(path, Reason::Unreadable);
                    }
                }
            }
        }
        if self.is_full_scan && self.scans.is_empty() {
            self.is_full_scan = false;
            self.counts = std::mem::take(&mut self.counts_of_scan);
            self.shared.update_inbox(|status| status.full_scans += 1);
        }
        Ok(())
    }

    fn tell(&self, heard_nothing: bool) {
        let folders = self
            .folders
            .iter()
            .map(|folder| FolderStatus {
                path: folder.named.display().to_string(),
                mode: match (folder.identity, folder.is_polled) {
                    (None, _) => "missing",
                    (Some(_), true) => "polling",
                    (Some(_), false) => "events",
                }
                .to_owned(),
            })
            .collect();
        self.shared.update_inbox(|status| {
            status.folders = folders;
            status.not_yet_whole = self.wholeness.len();
            status.left_alone = self.counts.tally();
            status.is_settled = heard_nothing
                && status.full_scans > 0
                && !self.is_full_scan
                && !self.needs_full_scan
                && self.scans.is_empty()
                && self.ready.is_empty()
                && self.wholeness.is_empty();
        });
    }
}

/// Called by the watcher's thread, so it only sorts and forwards.
fn forward(event: notify::Result<Event>, sender: &SyncSender<News>, has_lost_events: &AtomicBool) {
    let event = match event {
        Ok(event) if event.need_rescan() => return has_lost_events.store(true, Ordering::Relaxed),
        Ok(event) => event,
        Err(_) => return has_lost_events.store(true, Ordering::Relaxed),
    };
    let Some(path) = event.paths.into_iter().next_back() else { return };
    let news = match event.kind {
        EventKind::Access(AccessKind::Close(AccessMode::Write)) => News::Announced(path),
        EventKind::Modify(ModifyKind::Name(RenameMode::To)) => News::Announced(path),
        // A new folder is announced too, so that what was put into it before it was watched is found.
        EventKind::Create(CreateKind::Folder) => News::Announced(path),
        EventKind::Create(_) => News::Touched(path),
        // Both halves of a rename inside the folder were told one by one.
        EventKind::Modify(ModifyKind::Name(_)) => return,
        EventKind::Modify(_) => News::Touched(path),
        EventKind::Access(_) | EventKind::Remove(_) => return,
        EventKind::Any | EventKind::Other => News::Lost,
    };
    if let Err(TrySendError::Full(_)) = sender.try_send(news) {
        has_lost_events.store(true, Ordering::Relaxed);
    }
}

fn identity(path: &Path) -> Option<(u64, u64)> {
    let metadata = fs::metadata(path).ok().filter(fs::Metadata::is_dir)?;
    Some((metadata.dev(), metadata.ino()))
}
