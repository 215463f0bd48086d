//! The original bytes, by content hash: what a tracing is shown from, read again from and measured again from.
//!
//! Plain files beside the database, as they came, so that anyone can check one with a SHA-256 tool. A content is on
//! the disk before the transaction that speaks of it commits; a crash in between leaves an extra file, never a missing
//! one.

use super::StoreError;
use ebbmark_rules::ids::ContentHash;
use std::fs::{self, File, OpenOptions};
use std::io::{self, Write};
use std::path::{Path, PathBuf};
use std::sync::atomic::{AtomicU64, Ordering};

/// The folder of kept contents.
#[derive(Debug, Clone)]
pub struct Contents {
    folder: PathBuf,
}

impl Contents {
    /// Contents in this folder, which is made when the first one is kept.
    pub fn new(folder: PathBuf) -> Self {
        Self { folder }
    }

    /// Keeps bytes under their hash. Returns once they are on the disk.
    ///
    /// # Errors
    /// The folder can't be written, or the disk is full.
    pub fn keep(&self, hash: &ContentHash, bytes: &[u8]) -> Result<(), StoreError> {
        let path = self.place(hash);
        if fs::metadata(&path).is_ok_and(|there| there.len() == bytes.len() as u64) {
            return Ok(());
        }
        write(&path, bytes).map_err(|source| StoreError::Io {
            doing: "keep a file's content as",
            path,
            source,
        })
    }

    /// The bytes kept under this hash, if they are there and still are what was kept.
    ///
    /// # Errors
    /// The file can't be read, or its bytes no longer have this hash.
    pub fn get(&self, hash: &ContentHash) -> Result<Option<Vec<u8>>, StoreError> {
        let path = self.place(hash);
        let fail =
            |source| StoreError::Io { doing: "read the kept content", path: path.clone(), source };
        let bytes = match fs::read(&path) {
            Ok(bytes) => bytes,
            Err(error) if error.kind() == io::ErrorKind::NotFound => return Ok(None),
            Err(error) => return Err(fail(error)),
        };
        if ContentHash::of(&bytes) == *hash {
            Ok(Some(bytes))
        } else {
            Err(fail(io::Error::new(
                io::ErrorKind::InvalidData,
                "its bytes changed since they were kept",
            )))
        }
    }

    fn place(&self, hash: &ContentHash) -> PathBuf {
        let text = hash.as_str();
        self.folder.join(text.get(..2).unwrap_or("xx")).join(text)
    }
}

fn write(path: &Path, bytes: &[u8]) -> io::Result<()> {
    static NEXT: AtomicU64 = AtomicU64::new(0);
    let folder = path.parent().unwrap_or(Path::new("."));
    if !folder.is_dir() {
        fs::create_dir_all(folder)?;
        if let Some(above) = folder.parent() {
            File::open(above)?.sync_all()?;
        }
    }
    let draft =
        folder.join(format!(".{}-{}", std::process::id(), NEXT.fetch_add(1, Ordering::Relaxed)));
    let written = OpenOptions::new().write(true).create(true).truncate(true).open(&draft).and_then(
        |mut file| {
            file.write_all(bytes)?;
            file.sync_all()
        },
    );
    if let Err(error) = written.and_then(|()| fs::rename(&draft, path)) {
        // The error that matters is the first one.
        let _ = fs::remove_file(&draft);
        return Err(error);
    }
    File::open(folder)?.sync_all()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn content_that_changed_on_disk_is_not_given_back() {
        let folder = tempfile::tempdir().unwrap();
        let contents = Contents::new(folder.path().join("content"));
        let hash = ContentHash::of(b"a tracing");
        assert_eq!(contents.get(&hash).unwrap(), None);
        contents.keep(&hash, b"a tracing").unwrap();
        assert_eq!(contents.get(&hash).unwrap().as_deref(), Some(b"a tracing".as_slice()));
        fs::write(contents.place(&hash), b"a trasing").unwrap();
        assert!(contents.get(&hash).is_err());
    }
}
