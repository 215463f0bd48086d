//! A copy of the store that can be started from: the database as of one moment, and every content that it speaks of.

use super::{StoreError, StorePath};
use rusqlite::{Connection, OpenFlags};
use std::fs::{self, File};
use std::io;
use std::path::{Path, PathBuf};

/// What was copied.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub struct Copied {
    /// Contents that were not in the copy yet.
    pub contents: u64,
    /// Contents that were.
    pub there: u64,
}

/// Copies a store into a folder, also while the service runs. Contents that an earlier copy left there are not copied
/// again. The database comes first: every content that it speaks of was kept before, so none is missed.
///
/// # Errors
/// The store can't be read, or the folder can't be written.
pub fn backup(from: &StorePath, to: &StorePath) -> Result<Copied, StoreError> {
    make(to.folder())?;
    let draft = to.folder().join(".ebbmark.sqlite.draft");
    remove(&draft)?;
    let source = Connection::open_with_flags(from.database(), OpenFlags::SQLITE_OPEN_READ_ONLY)
        .map_err(StoreError::sql("open"))?;
    source.busy_timeout(super::BUSY).map_err(StoreError::sql("set up"))?;
    source
        .execute("VACUUM INTO ?", [draft.to_string_lossy().as_ref()])
        .map_err(StoreError::sql("copy the database of"))?;
    sync(&draft)?;
    fs::rename(&draft, to.database()).map_err(io("name the copy", &to.database()))?;
    // A log left by a service that once ran on the copy would be taken for the new database's own.
    for end in ["-wal", "-shm"] {
        let mut name = to.database().into_os_string();
        name.push(end);
        remove(Path::new(&name))?;
    }
    sync(to.folder())?;

    let mut copied = Copied::default();
    let contents = from.folder().join("content");
    for shelf in folders(&contents)? {
        let target = to.folder().join("content").join(shelf.file_name().unwrap_or_default());
        make(&target)?;
        for file in entries(&shelf)? {
            let name = file.file_name().unwrap_or_default();
            if name.as_encoded_bytes().starts_with(b".") {
                continue;
            }
            let place = target.join(name);
            if place.exists() {
                copied.there += 1;
                continue;
            }
            let draft = target.join(".draft");
            fs::copy(&file, &draft).map_err(io("copy", &file))?;
            sync(&draft)?;
            fs::rename(&draft, &place).map_err(io("name the copy", &place))?;
            copied.contents += 1;
        }
        sync(&target)?;
    }
    Ok(copied)
}

fn io(doing: &'static str, path: &Path) -> impl FnOnce(io::Error) -> StoreError {
    let path = path.to_owned();
    move |source| StoreError::Io { doing, path, source }
}

fn make(folder: &Path) -> Result<(), StoreError> {
    fs::create_dir_all(folder).map_err(io("make the folder", folder))
}

fn sync(path: &Path) -> Result<(), StoreError> {
    File::open(path).and_then(|file| file.sync_all()).map_err(io("write to the disk", path))
}

fn remove(path: &Path) -> Result<(), StoreError> {
    match fs::remove_file(path) {
        Err(error) if error.kind() != io::ErrorKind::NotFound => Err(io("replace", path)(error)),
        _ => Ok(()),
    }
}

fn entries(folder: &Path) -> Result<Vec<PathBuf>, StoreError> {
    let listed =
        fs::read_dir(folder).and_then(|entries| entries.map(|entry| Ok(entry?.path())).collect());
    listed.map_err(io("list", folder))
}

/// The folders within a folder; none where it was never made.
fn folders(folder: &Path) -> Result<Vec<PathBuf>, StoreError> {
    if !folder.exists() {
        return Ok(Vec::new());
    }
    Ok(entries(folder)?.into_iter().filter(|path| path.is_dir()).collect())
}
