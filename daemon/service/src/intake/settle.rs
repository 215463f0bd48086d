//! When a file may be opened: once it stopped changing, judged by looks at its stamp on a clock that can't be set.

use crate::store::Stamp;
use std::collections::HashMap;
use std::path::{Path, PathBuf};
use std::time::Duration;

/// Files that were seen and may still be written to.
#[derive(Debug)]
pub struct Settling {
    still_for: Duration,
    seen: HashMap<PathBuf, Look>,
}

#[derive(Debug, Clone, Copy)]
struct Look {
    stamp: Stamp,
    since: Duration,
    pass: u64,
}

impl Settling {
    /// A file settles once its stamp was the same in two looks at least `still_for` apart, with no look in between
    /// that differed.
    pub fn new(still_for: Duration) -> Self {
        Self { still_for, seen: HashMap::new() }
    }

    /// Changes for how long a file has to stay the same.
    pub fn still_for(&mut self, still_for: Duration) {
        self.still_for = still_for;
    }

    /// For how long a file has looked the way it does now; `None` where it is not being waited for.
    pub fn waited(&self, path: &Path, now: Duration) -> Option<Duration> {
        self.seen.get(path).map(|look| now.saturating_sub(look.since))
    }

    /// Whether a file looked like this for long enough; `None` where it is not being waited for.
    pub fn has_settled(&self, path: &Path, stamp: Stamp, now: Duration) -> Option<bool> {
        let look = self.seen.get(path)?;
        Some(look.stamp == stamp && now.saturating_sub(look.since) >= self.still_for)
    }

    /// Looks at a file in pass number `pass`, at `now` on a clock that only runs forward. `true` once it has settled.
    pub fn look(&mut self, path: &Path, stamp: Stamp, now: Duration, pass: u64) -> bool {
        if let Some(look) = self.seen.get_mut(path) {
            look.pass = pass;
            if look.stamp == stamp {
                return now.saturating_sub(look.since) >= self.still_for;
            }
            *look = Look { stamp, since: now, pass };
            return false;
        }
        self.seen.insert(path.to_owned(), Look { stamp, since: now, pass });
        false
    }

    /// Forgets a file whose outcome is stored.
    pub fn forget(&mut self, path: &Path) {
        self.seen.remove(path);
    }

    /// Ends a pass: files that it did not meet are gone.
    pub fn end_of_pass(&mut self, pass: u64) {
        self.seen.retain(|_, look| look.pass == pass);
    }

    /// How many files have been seen and not yet settled or been forgotten.
    pub fn len(&self) -> usize {
        self.seen.len()
    }

    /// Whether none is being waited for.
    pub fn is_empty(&self) -> bool {
        self.seen.is_empty()
    }

    /// When the next of them can settle after `now` at the earliest, on the same clock.
    pub fn next(&self, now: Duration) -> Option<Duration> {
        self.seen.values().map(|look| look.since + self.still_for).filter(|&at| at > now).min()
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    const S: fn(u64) -> Duration = Duration::from_secs;

    fn stamp(size: u64) -> Stamp {
        Stamp { size, mtime_ns: 1, ctime_ns: 1, inode: 7 }
    }

    #[test]
    fn one_look_is_never_enough() {
        let mut settling = Settling::new(Duration::ZERO);
        let path = Path::new("a");
        assert!(!settling.look(path, stamp(1), S(100), 1));
        assert!(settling.look(path, stamp(1), S(100), 2));
    }

    #[test]
    fn growing_file_does_not_settle() {
        let mut settling = Settling::new(S(2));
        let path = Path::new("a");
        for second in 0..60 {
            assert!(!settling.look(path, stamp(second), S(second), second), "at {second} s");
        }
        assert!(!settling.look(path, stamp(59), S(60), 60));
        assert!(settling.look(path, stamp(59), S(61), 61));
    }

    #[test]
    fn same_second_rewrite_of_equal_size_starts_again() {
        let mut settling = Settling::new(S(2));
        let path = Path::new("a");
        settling.look(path, stamp(5), S(0), 1);
        let rewritten = Stamp { ctime_ns: 2, ..stamp(5) };
        assert!(!settling.look(path, rewritten, S(2), 2));
        assert!(settling.look(path, rewritten, S(4), 3));
    }

    #[test]
    fn vanished_file_is_forgotten() {
        let mut settling = Settling::new(S(2));
        settling.look(Path::new("a"), stamp(1), S(0), 1);
        settling.end_of_pass(2);
        assert!(settling.is_empty());
        assert!(!settling.look(Path::new("a"), stamp(1), S(9), 3));
    }
}
