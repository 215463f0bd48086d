//! What is remembered: one SQLite file with one writer, and the original bytes beside it by content hash.

mod audit;
mod backup;
mod content;
mod day;
pub mod outbox;
mod read;
mod schema;
mod write;

pub use audit::AuditCheck;
pub use backup::{Copied, backup};
pub use content::Contents;
pub use day::Day;
pub use read::{AlertRow, FileRow, Reader};
pub use write::{Held, Outcome, Seen, Stamp, Taken, TextKind, What, Writing};

use ebbmark_rules::fact::At;
use rusqlite::{Connection, OpenFlags};
use std::fs::File;
use std::path::{Path, PathBuf};
use std::time::Duration;

/// Why the store can't do what was asked.
#[derive(Debug, thiserror::Error)]
pub enum StoreError {
    /// SQLite refused or failed.
    #[error("cannot {doing} the store: {source}")]
    Sql {
        /// What was tried.
        doing: &'static str,
        /// SQLite's own words.
        source: rusqlite::Error,
    },
    /// A file beside the database could not be read or written.
    #[error("cannot {doing} {}", path.display())]
    Io {
        /// What was tried.
        doing: &'static str,
        /// Where.
        path: PathBuf,
        /// The system's own words.
        source: std::io::Error,
    },
    /// A newer program made it.
    #[error(
        "the store has version {found}, and this program knows up to {known}; start the newer program again"
    )]
    FromTheFuture {
        /// The store's version.
        found: i64,
        /// The last one known.
        known: i64,
    },
    /// A row is not what this program wrote.
    #[error("a row of `{table}` can't be read back: {why}")]
    Row {
        /// Which table.
        table: &'static str,
        /// What is wrong, without patient text.
        why: String,
    },
    /// A message moved in a way that its state does not allow: it was claimed by nobody, or settled twice.
    #[error("message {id} is not `{expected}`, so it can't be moved on")]
    NotThere {
        /// The message's row.
        id: i64,
        /// The state that was expected.
        expected: &'static str,
    },
    /// Another process writes to it.
    #[error("another service runs on the store in {}; stop that one first", folder.display())]
    Taken {
        /// The store's folder.
        folder: PathBuf,
    },
    /// An earlier failure stopped the writer.
    #[error("the store stopped after an earlier failure; the service has to start again")]
    Stopped,
}

impl StoreError {
    /// Whether the disk failed or is full, and not what was to be written.
    pub fn is_the_disk(&self) -> bool {
        use rusqlite::ErrorCode as Code;
        match self {
            StoreError::Sql { source, .. } => matches!(
                source.sqlite_error_code(),
                Some(
                    Code::DiskFull
                        | Code::SystemIoFailure
                        | Code::CannotOpen
                        | Code::ReadOnly
                        | Code::DatabaseBusy
                )
            ),
            StoreError::Io { .. } => true,
            StoreError::FromTheFuture { .. }
            | StoreError::Row { .. }
            | StoreError::NotThere { .. }
            | StoreError::Taken { .. }
            | StoreError::Stopped => false,
        }
    }

    fn sql(doing: &'static str) -> impl FnOnce(rusqlite::Error) -> StoreError {
        move |source| StoreError::Sql { doing, source }
    }
}

/// Where a store lives: a folder with the database and the kept contents.
#[derive(Debug, Clone)]
pub struct StorePath {
    folder: PathBuf,
}

impl StorePath {
    /// A store in this folder.
    pub fn new(folder: impl Into<PathBuf>) -> Self {
        Self { folder: folder.into() }
    }

    /// The folder itself.
    pub fn folder(&self) -> &Path {
        &self.folder
    }

    /// The database file.
    pub fn database(&self) -> PathBuf {
        self.folder.join("ebbmark.sqlite")
    }

    /// The folder of kept contents.
    pub fn contents(&self) -> Contents {
        Contents::new(self.folder.join("content"))
    }
}

/// The one read-write connection.
#[derive(Debug)]
pub struct Store {
    connection: Connection,
    /// Held for as long as this process lives: two deciders on one store would each tell people their own story.
    _lock: File,
}

/// How long a statement waits for a lock that only a backup or a foreign tool could hold.
const BUSY: Duration = Duration::from_secs(10);

impl Store {
    /// Opens or makes the store, and brings it to this program's version.
    ///
    /// # Errors
    /// The folder can't be made, another process has the store, the file is no database, or it comes from a newer
    /// program.
    pub fn open(path: &StorePath) -> Result<Self, StoreError> {
        std::fs::create_dir_all(path.folder()).map_err(|source| StoreError::Io {
            doing: "make the folder",
            path: path.folder().to_owned(),
            source,
        })?;
        let lock = lock(path.folder())?;
        let flags = OpenFlags::SQLITE_OPEN_READ_WRITE
            | OpenFlags::SQLITE_OPEN_CREATE
            | OpenFlags::SQLITE_OPEN_NO_MUTEX
            | OpenFlags::SQLITE_OPEN_NOFOLLOW;
        let database = path.database();
        let database = resolved(&database).join("ebbmark.sqlite");
        let mut connection =
            Connection::open_with_flags(database, flags).map_err(StoreError::sql("open"))?;
        connection.busy_timeout(BUSY).map_err(StoreError::sql("set up"))?;
        // FULL, not NORMAL: in simulated power cuts NORMAL lost commits that had been acknowledged.
        connection
            .execute_batch(
                "PRAGMA journal_mode = WAL; PRAGMA synchronous = FULL; PRAGMA foreign_keys = ON;
                 PRAGMA trusted_schema = OFF; PRAGMA secure_delete = ON;",
            )
            .map_err(StoreError::sql("set up"))?;
        schema::migrate(&mut connection)?;
        Ok(Self { connection, _lock: lock })
    }
}

fn lock(folder: &Path) -> Result<File, StoreError> {
    let path = folder.join("lock");
    let fail = |source| StoreError::Io { doing: "lock", path: path.clone(), source };
    let file =
        File::options().write(true).create(true).truncate(false).open(&path).map_err(fail)?;
    match file.try_lock() {
        Ok(()) => Ok(file),
        Err(std::fs::TryLockError::WouldBlock) => {
            Err(StoreError::Taken { folder: folder.to_owned() })
        }
        Err(std::fs::TryLockError::Error(source)) => Err(fail(source)),
    }
}

/// `SQLITE_OPEN_NOFOLLOW` refuses a link anywhere in the path; only the file itself must not be one.
fn resolved(database: &Path) -> PathBuf {
    let folder = database.parent().unwrap_or(Path::new("."));
    folder.canonicalize().unwrap_or_else(|_| folder.to_owned())
}

fn micros(at: At) -> i64 {
    at.timestamp_micros()
}

fn moment(micros: i64) -> At {
    At::from_timestamp_micros(micros).unwrap_or(At::UNIX_EPOCH)
}
