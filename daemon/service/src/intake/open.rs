//! Opening one file of the export folder: a regular file, not through a link, no larger than the cap, and the same
//! file before and after it was read. Nothing is ever written there.

use crate::store::Stamp;
use rustix::fs::{FileType, Mode, OFlags, fstat, open};
use rustix::io::Errno;
use std::fs::File;
use std::io::{self, Read};
use std::path::Path;

/// Why a file was not read. `Display` gives a sentence for a person, without the file's name.
#[derive(Debug, thiserror::Error)]
pub enum NotRead {
    /// A link; what it points at may lie anywhere.
    #[error("is a link to another file; export the file itself")]
    Link,
    /// A folder, a pipe, a socket or a device.
    #[error("is {0}, not a file")]
    NotAFile(&'static str),
    /// More than is ever read into memory.
    #[error("holds {} MiB; files up to {} MiB are read (`largest_file_mib` in the settings)", size.div_ceil(MIB), cap / MIB)]
    TooLarge {
        /// Its size in bytes.
        size: u64,
        /// The cap in bytes.
        cap: u64,
    },
    /// It changed while it was read: look again later.
    #[error("changed while it was read")]
    Changed,
    /// It is no longer there: whoever wrote it took it away again.
    #[error("is gone")]
    Gone,
    /// The service may not read it.
    #[error("may not be read by the service; give it the right to")]
    Forbidden,
    /// The disk or the network failed.
    #[error("can't be read: {0}")]
    Failed(io::Error),
}

const MIB: u64 = 1 << 20;

impl NotRead {
    /// Whether it is worth another look without anybody's doing.
    pub fn is_passing(&self) -> bool {
        matches!(self, NotRead::Changed | NotRead::Gone | NotRead::Failed(_))
    }

    fn from_errno(errno: Errno) -> Self {
        match errno {
            Errno::LOOP => NotRead::Link,
            Errno::NOENT | Errno::NOTDIR => NotRead::Gone,
            Errno::ACCESS | Errno::PERM => NotRead::Forbidden,
            Errno::NXIO => NotRead::NotAFile("a socket or a pipe"),
            other => NotRead::Failed(other.into()),
        }
    }
}

/// Reads a file whole, with the stamp that it had before and after.
///
/// # Errors
/// See [`NotRead`].
pub fn read(path: &Path, cap: u64) -> Result<(Vec<u8>, Stamp), NotRead> {
    // NONBLOCK: opening a pipe must not wait for a writer. It means nothing for a regular file.
    let flags =
        OFlags::RDONLY | OFlags::NOFOLLOW | OFlags::NONBLOCK | OFlags::CLOEXEC | OFlags::NOCTTY;
    let mut file = File::from(open(path, flags, Mode::empty()).map_err(NotRead::from_errno)?);
    let before = stamp(&file)?;
    if before.size > cap {
        return Err(NotRead::TooLarge { size: before.size, cap });
    }
    // One byte more than expected shows growth without reading a file that grows for ever.
    let mut bytes = Vec::new();
    bytes
        .try_reserve_exact(usize::try_from(before.size).unwrap_or(usize::MAX).saturating_add(1))
        .map_err(|_| {
        NotRead::Failed(io::Error::new(io::ErrorKind::OutOfMemory, "no memory for it now"))
    })?;
    let count = Read::by_ref(&mut file)
        .take(before.size + 1)
        .read_to_end(&mut bytes)
        .map_err(NotRead::Failed)?;
    if count as u64 != before.size || stamp(&file)? != before {
        return Err(NotRead::Changed);
    }
    Ok((bytes, before))
}

fn stamp(file: &File) -> Result<Stamp, NotRead> {
    let stat = fstat(file).map_err(NotRead::from_errno)?;
    let file_type = FileType::from_raw_mode(stat.st_mode);
    if file_type.is_file() { Ok(stamp_of(&stat)) } else { Err(NotRead::NotAFile(kind(file_type))) }
}

/// What kind of thing stands where a file should, in words.
pub(super) fn kind(file_type: FileType) -> &'static str {
    match file_type {
        FileType::Directory => "a folder",
        FileType::Fifo => "a pipe",
        FileType::Socket => "a socket",
        FileType::CharacterDevice | FileType::BlockDevice => "a device",
        FileType::Symlink => "a link",
        FileType::RegularFile | FileType::Unknown => "something unknown",
    }
}

#[allow(clippy::unnecessary_cast, reason = "the fields' widths differ between systems")]
pub(super) fn stamp_of(stat: &rustix::fs::Stat) -> Stamp {
    let ns = |seconds: i64, ns: i64| seconds.saturating_mul(1_000_000_000).saturating_add(ns);
    Stamp {
        size: u64::try_from(stat.st_size).unwrap_or(0),
        mtime_ns: ns(stat.st_mtime as i64, stat.st_mtime_nsec as i64),
        ctime_ns: ns(stat.st_ctime as i64, stat.st_ctime_nsec as i64),
        inode: stat.st_ino as u64,
    }
}
