//! One look at the whole export folder. It only lists; it opens no file.

use super::open::stamp_of;
use crate::store::{Seen, Stamp};
use std::cmp::Ordering;
use std::collections::BinaryHeap;
use std::ffi::OsStr;
use std::io;
use std::os::unix::ffi::OsStrExt;
use std::path::{Path, PathBuf};

/// Folders within folders are followed this deep.
pub const DEEPEST: usize = 8;

/// Names that a writer uses until a file is whole: patterns of copying tools and editors (common practice).
const UNFINISHED_ENDS: &[&str] =
    &["~", ".tmp", ".temp", ".part", ".partial", ".filepart", ".crdownload", ".swp", ".lock"];
const UNFINISHED_STARTS: &[&str] = &[".", "~$", "#"];

/// What one look found.
#[derive(Debug, Default)]
pub struct Scan {
    /// The oldest entries that `is_new` let through, oldest first, at most as many as were asked for.
    pub found: Vec<Seen>,
    /// How many more there are.
    pub more: u64,
    /// Folders that could not be listed, or were too deep.
    pub unread: Vec<io::Error>,
}

/// An entry in the heap of the oldest: the youngest on top, to be thrown out first.
struct Oldest(Seen);

impl Oldest {
    fn key(&self) -> (i64, &Path) {
        (self.0.stamp.mtime_ns, &self.0.path)
    }
}
impl Ord for Oldest {
    fn cmp(&self, other: &Self) -> Ordering {
        self.key().cmp(&other.key())
    }
}
impl PartialOrd for Oldest {
    fn partial_cmp(&self, other: &Self) -> Option<Ordering> {
        Some(self.cmp(other))
    }
}
impl PartialEq for Oldest {
    fn eq(&self, other: &Self) -> bool {
        self.key() == other.key()
    }
}
impl Eq for Oldest {}

/// Lists `root` and the folders within it, and keeps the `most` oldest entries for which `is_new` says so. Memory grows
/// with `most`, not with the folder.
///
/// Links are not followed; they are entries like any other, and so are pipes and the like: opening tells what they are.
///
/// # Errors
/// The root itself can't be listed, or `is_new` failed.
pub fn scan<E: From<io::Error>>(
    root: &Path,
    most: usize,
    mut is_new: impl FnMut(&Seen) -> Result<bool, E>,
) -> Result<Scan, E> {
    let mut scan = Scan::default();
    let mut oldest = BinaryHeap::new();
    let mut folders = vec![(PathBuf::new(), 0)];
    while let Some((folder, depth)) = folders.pop() {
        let entries = match std::fs::read_dir(root.join(&folder)) {
            Ok(entries) => entries,
            Err(error) if depth == 0 => return Err(error.into()),
            Err(error) if error.kind() == io::ErrorKind::NotFound => continue,
            Err(error) => {
                scan.unread.push(error);
                continue;
            }
        };
        for entry in entries {
            let entry = match entry {
                Ok(entry) => entry,
                Err(error) => {
                    scan.unread.push(error);
                    break;
                }
            };
            let name = entry.file_name();
            if is_unfinished(&name) {
                continue;
            }
            let path = folder.join(&name);
            let Some((stamp, is_folder)) = look(&root.join(&path)) else { continue };
            if is_folder && !is_named_like_a_file(&name) {
                if depth + 1 < DEEPEST {
                    folders.push((path, depth + 1));
                } else {
                    scan.unread
                        .push(io::Error::other(format!("folders are followed {DEEPEST} deep")));
                }
                continue;
            }
            let seen = Seen { path, stamp };
            if is_new(&seen)? {
                oldest.push(Oldest(seen));
                if oldest.len() > most {
                    oldest.pop();
                    scan.more += 1;
                }
            }
        }
    }
    scan.found = oldest.into_sorted_vec().into_iter().map(|Oldest(seen)| seen).collect();
    Ok(scan)
}

/// The stamp of an entry and whether it is a folder; `None` where it is gone by now.
pub(super) fn look(path: &Path) -> Option<(Stamp, bool)> {
    let stat = rustix::fs::lstat(path).ok()?;
    let is_folder = rustix::fs::FileType::from_raw_mode(stat.st_mode).is_dir();
    Some((stamp_of(&stat), is_folder))
}

/// A name under which a file is still being written, or that is none of our business.
fn is_unfinished(name: &OsStr) -> bool {
    let lower = name.as_bytes().to_ascii_lowercase();
    UNFINISHED_STARTS.iter().any(|start| lower.starts_with(start.as_bytes()))
        || UNFINISHED_ENDS.iter().any(|end| lower.ends_with(end.as_bytes()))
}

/// A folder with the name of a file is more likely a broken export than a place to look in, so a person is told.
fn is_named_like_a_file(name: &OsStr) -> bool {
    const ENDS: &[&str] = &["dcm", "hea", "dat", "csv", "xml", "edf", "scp", "hl7", "json"];
    let end = Path::new(name).extension().map(|end| end.as_bytes().to_ascii_lowercase());
    end.is_some_and(|end| ENDS.iter().any(|known| known.as_bytes() == end))
}

#[cfg(test)]
mod tests {
    use super::*;
    use std::fs;

    fn names(scan: &Scan) -> Vec<String> {
        scan.found.iter().map(|seen| seen.path.display().to_string()).collect()
    }

    fn age(path: &Path, seconds: u64) {
        let time = std::time::UNIX_EPOCH + std::time::Duration::from_secs(seconds);
        fs::File::options().append(true).open(path).unwrap().set_modified(time).unwrap();
    }

    #[test]
    fn oldest_come_first_and_the_rest_are_counted() {
        let folder = tempfile::tempdir().unwrap();
        for (name, seconds) in [("c", 300), ("a", 100), ("d", 400), ("b", 200)] {
            let path = folder.path().join(name);
            fs::write(&path, name).unwrap();
            age(&path, seconds);
        }
        let scan = scan::<io::Error>(folder.path(), 3, |_| Ok(true)).unwrap();
        assert_eq!(names(&scan), ["a", "b", "c"]);
        assert_eq!(scan.more, 1);
    }

    #[test]
    fn nested_files_are_found_and_unfinished_ones_are_not() {
        let folder = tempfile::tempdir().unwrap();
        fs::create_dir_all(folder.path().join("ward/bed")).unwrap();
        for name in ["ward/bed/x.dcm", ".hidden", "y.dcm.part", "~$z.csv", "w.TMP", "ward/.nested"]
        {
            fs::write(folder.path().join(name), "x").unwrap();
        }
        fs::create_dir(folder.path().join("folder.dcm")).unwrap();
        let mut found = names(&scan::<io::Error>(folder.path(), 10, |_| Ok(true)).unwrap());
        found.sort();
        assert_eq!(found, ["folder.dcm", "ward/bed/x.dcm"]);
    }

    #[test]
    fn link_to_a_folder_is_not_followed() {
        let folder = tempfile::tempdir().unwrap();
        std::os::unix::fs::symlink("/", folder.path().join("everything")).unwrap();
        assert_eq!(
            names(&scan::<io::Error>(folder.path(), 10, |_| Ok(true)).unwrap()),
            ["everything"]
        );
    }

    #[test]
    fn missing_root_is_an_error() {
        assert!(scan::<io::Error>(Path::new("does/not/exist"), 10, |_| Ok(true)).is_err());
    }
}
