//! Whether a file is whole: it was announced as closed after writing or renamed in, or its size and
//! times were still for long enough.
//!
//! Stillness is measured by the monotonic clock between two looks of our own, never from the file's
//! times, so a wall clock that jumps cannot make a growing file whole.

use std::collections::HashMap;
use std::path::{Path, PathBuf};
use std::time::{Duration, Instant};

use crate::archive::ledger::Signature;

/// Most files that are watched for stillness at once; more wait for the next scan.
pub const MAX_PENDING: usize = 20_000;

#[derive(Debug)]
struct Pending {
    signature: Signature,
    since: Instant,
}

/// Files that are there but not known to be whole.
#[derive(Debug, Default)]
pub struct Wholeness {
    pending: HashMap<PathBuf, Pending>,
}

impl Wholeness {
    /// Takes note of a look at a file; says whether it is whole, which ends the watch over it.
    pub fn observe(&mut self, path: &Path, signature: Signature, now: Instant, still_for: Duration) -> bool {
        match self.pending.get_mut(path) {
            Some(known) if known.signature == signature => {
                let is_whole = now.duration_since(known.since) >= still_for;
                if is_whole {
                    self.pending.remove(path);
                }
                is_whole
            }
            Some(known) => {
                *known = Pending { signature, since: now };
                false
            }
            None if still_for.is_zero() => true,
            None => {
                self.pending.insert(path.to_owned(), Pending { signature, since: now });
                false
            }
        }
    }

    /// Whether a file is watched for stillness already.
    pub fn contains(&self, path: &Path) -> bool {
        self.pending.contains_key(path)
    }

    /// Ends the watch over a file: it is whole, gone, or left alone.
    pub fn forget(&mut self, path: &Path) {
        self.pending.remove(path);
    }

    /// The files watched for stillness.
    pub fn paths(&self) -> Vec<PathBuf> {
        self.pending.keys().cloned().collect()
    }

    /// Their number.
    pub fn len(&self) -> usize {
        self.pending.len()
    }

    /// Whether there are none.
    pub fn is_empty(&self) -> bool {
        self.pending.is_empty()
    }

    /// Whether no more may be added.
    pub fn is_full(&self) -> bool {
        self.pending.len() >= MAX_PENDING
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn stillness_starts_again_with_every_change() {
        let mut wholeness = Wholeness::default();
        let signature = |size| Signature { size, modified_ns: 0, changed_ns: 0, inode: 1 };
        let path = Path::new("a.fits");
        let start = Instant::now();
        let still_for = Duration::from_secs(5);
        let mut look = |size, at_s| {
            wholeness.observe(path, signature(size), start + Duration::from_secs(at_s), still_for)
        };
        assert!(!look(1, 0), "a first look proves nothing");
        assert!(!look(1, 4));
        assert!(!look(2, 6), "it grew");
        assert!(!look(2, 10), "only 4 s of stillness");
        assert!(look(2, 11));
    }
}
