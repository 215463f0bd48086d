//! Reading: a read-only connection that lives as long as one question, because an idle open reader makes the
//! write-ahead log grow without end.

use super::audit::{self, AuditCheck};
use super::write::{Seen, VERSION};
use super::{StoreError, StorePath, moment, resolved};
use ebbmark_rules::alert::{Alert, Decision};
use ebbmark_rules::fact::{At, Fact};
use ebbmark_rules::ids::ContentHash;
use rusqlite::{Connection, OpenFlags, OptionalExtension, params};
use serde::de::DeserializeOwned;
use std::collections::BTreeMap;
use std::path::PathBuf;

/// A read-only view of the store. Keep it for one question or one scan, not longer.
#[derive(Debug)]
pub struct Reader {
    connection: Connection,
}

/// A file's outcome as stored.
#[derive(Debug)]
pub struct FileRow {
    /// Its row.
    pub id: i64,
    /// Relative to the export folder; may identify a patient.
    pub path: PathBuf,
    /// Bytes.
    pub size: u64,
    /// Content hash, where it was read.
    pub hash: Option<ContentHash>,
    /// `accepted`, `repeat` or `held`.
    pub outcome: String,
    /// `tracing`, `chart` or `unknown`.
    pub what: String,
    /// Why it is held, or empty.
    pub reason: String,
    /// When the outcome was reached.
    pub at: At,
    /// Rows of it that could not be used: place and why.
    pub bad: Vec<(String, String)>,
}

/// An alert as it stands.
#[derive(Debug)]
pub struct AlertRow {
    /// As last raised or changed, with its present state.
    pub alert: Alert,
    /// Everything that happened to it, in order.
    pub life: Vec<Decision>,
}

impl Reader {
    /// Opens the store for reading.
    ///
    /// # Errors
    /// There is no store, or it can't be read.
    pub fn open(path: &StorePath) -> Result<Self, StoreError> {
        let flags = OpenFlags::SQLITE_OPEN_READ_ONLY | OpenFlags::SQLITE_OPEN_NO_MUTEX;
        let database = resolved(&path.database()).join("ebbmark.sqlite");
        let connection =
            Connection::open_with_flags(database, flags).map_err(StoreError::sql("open"))?;
        connection.busy_timeout(super::BUSY).map_err(StoreError::sql("set up"))?;
        connection
            .execute_batch("PRAGMA query_only = ON; PRAGMA trusted_schema = OFF;")
            .map_err(StoreError::sql("set up"))?;
        Ok(Self { connection })
    }

    /// Whether this very look at a file ended in an outcome already. What an older program held deserves another look.
    pub fn is_known(&self, seen: &Seen) -> Result<bool, StoreError> {
        let stamp = seen.stamp;
        self.connection
            .prepare_cached(
                "SELECT 1 FROM file WHERE path = ? AND size = ? AND mtime_ns = ? AND ctime_ns = ? AND inode = ?
                 AND (outcome <> 'held' OR version = ?)",
            )
            .and_then(|mut query| {
                query.exists(params![
                    seen.key(),
                    stamp.size.cast_signed(),
                    stamp.mtime_ns,
                    stamp.ctime_ns,
                    stamp.inode.cast_signed(),
                    VERSION
                ])
            })
            .map_err(StoreError::sql("look a file up in"))
    }

    /// Whether this content was accepted before.
    pub fn is_accepted(&self, hash: &ContentHash) -> Result<bool, StoreError> {
        self.connection
            .prepare_cached("SELECT 1 FROM file WHERE hash = ? AND outcome = 'accepted'")
            .and_then(|mut query| query.exists([hash.as_str()]))
            .map_err(StoreError::sql("look a content up in"))
    }

    /// Files that stand as held, and accepted ones with rows that could not be used, oldest first. A file that was
    /// exported again under the same name stands as its last version does.
    pub fn held(&self) -> Result<Vec<FileRow>, StoreError> {
        let fail = || StoreError::sql("list held files of");
        let mut query = self
            .connection
            .prepare(
                "SELECT id, path, size, hash, outcome, what, reason, at_us FROM file
                 WHERE (outcome = 'held' OR id IN (SELECT file FROM bad_row))
                 AND NOT EXISTS (SELECT 1 FROM file AS later WHERE later.path = file.path AND later.id > file.id)
                 ORDER BY id",
            )
            .map_err(fail())?;
        let mut rows = query
            .query_map([], |row| {
                Ok(FileRow {
                    id: row.get(0)?,
                    path: Seen::path_of(row.get(1)?),
                    size: row.get::<_, i64>(2)?.cast_unsigned(),
                    hash: row.get::<_, Option<String>>(3)?.map(ContentHash::new),
                    outcome: row.get(4)?,
                    what: row.get(5)?,
                    reason: row.get(6)?,
                    at: moment(row.get(7)?),
                    bad: Vec::new(),
                })
            })
            .and_then(Iterator::collect::<Result<Vec<_>, _>>)
            .map_err(fail())?;
        let mut bad = self
            .connection
            .prepare("SELECT place, why FROM bad_row WHERE file = ? ORDER BY id")
            .map_err(fail())?;
        for file in &mut rows {
            file.bad = bad
                .query_map([file.id], |row| Ok((row.get(0)?, row.get(1)?)))
                .and_then(Iterator::collect::<Result<Vec<_>, _>>)
                .map_err(fail())?;
        }
        Ok(rows)
    }

    /// How many files ended how: accepted, repeat, held.
    pub fn file_counts(&self) -> Result<BTreeMap<String, u64>, StoreError> {
        self.connection
            .prepare("SELECT outcome, count(*) FROM file GROUP BY outcome")
            .and_then(|mut query| {
                query
                    .query_map([], |row| Ok((row.get(0)?, row.get::<_, i64>(1)?.cast_unsigned())))?
                    .collect()
            })
            .map_err(StoreError::sql("count files of"))
    }

    /// Alerts with their life, in the order in which they were raised; only those still open or acknowledged, or all.
    pub fn alerts(&self, all: bool) -> Result<Vec<AlertRow>, StoreError> {
        let fail = || StoreError::sql("list alerts of");
        let rows = self
            .connection
            .prepare(
                "SELECT id, state, body FROM alert WHERE ?1 OR state IN ('open', 'acknowledged') ORDER BY raised_us, id",
            )
            .and_then(|mut query| {
                query
                    .query_map([all], |row| Ok((row.get(0)?, row.get(1)?, row.get(2)?)))?
                    .collect::<Result<Vec<(String, String, String)>, _>>()
            })
            .map_err(fail())?;
        let mut life = self
            .connection
            .prepare("SELECT body FROM decision WHERE alert = ? ORDER BY seq")
            .map_err(fail())?;
        let mut alerts = Vec::with_capacity(rows.len());
        for (id, state, body) in rows {
            let mut alert: Alert = parse("alert", &body)?;
            alert.state = parse("alert", &format!("\"{state}\""))?;
            let steps = life
                .query_map([&id], |row| row.get::<_, String>(0))
                .and_then(Iterator::collect::<Result<Vec<_>, _>>)
                .map_err(fail())?;
            let life =
                steps.iter().map(|body| parse("decision", body)).collect::<Result<_, _>>()?;
            alerts.push(AlertRow { alert, life });
        }
        Ok(alerts)
    }

    /// How many messages stand in which state.
    pub fn message_counts(&self) -> Result<BTreeMap<String, u64>, StoreError> {
        self.connection
            .prepare("SELECT state, count(*) FROM outbox GROUP BY state")
            .and_then(|mut query| {
                query
                    .query_map([], |row| Ok((row.get(0)?, row.get::<_, i64>(1)?.cast_unsigned())))?
                    .collect()
            })
            .map_err(StoreError::sql("count messages of"))
    }

    /// All texts that facts may put in force.
    pub fn texts(&self) -> Result<BTreeMap<ContentHash, String>, StoreError> {
        self.connection
            .prepare("SELECT hash, body FROM text")
            .and_then(|mut query| {
                query
                    .query_map([], |row| {
                        Ok((ContentHash::new(row.get::<_, String>(0)?), row.get(1)?))
                    })?
                    .collect()
            })
            .map_err(StoreError::sql("read the texts of"))
    }

    /// Hands every fact, in the order in which it was learned, to `each`, with its number.
    pub fn facts(
        &self,
        mut each: impl FnMut(i64, Fact) -> Result<(), StoreError>,
    ) -> Result<(), StoreError> {
        let fail = || StoreError::sql("read the facts of");
        let mut query =
            self.connection.prepare("SELECT seq, body FROM fact ORDER BY seq").map_err(fail())?;
        let mut rows = query.query([]).map_err(fail())?;
        while let Some(row) = rows.next().map_err(fail())? {
            let body = row.get_ref(1).and_then(|body| Ok(body.as_str()?)).map_err(fail())?;
            each(row.get(0).map_err(fail())?, parse("fact", body)?)?;
        }
        Ok(())
    }

    /// Up to a thousand decisions after number `seq`, in order, as JSON.
    pub fn decisions_after(&self, seq: i64) -> Result<Vec<(i64, String)>, StoreError> {
        self.connection
            .prepare_cached("SELECT seq, body FROM decision WHERE seq > ? ORDER BY seq LIMIT 1000")
            .and_then(|mut query| {
                query.query_map([seq], |row| Ok((row.get(0)?, row.get(1)?)))?.collect()
            })
            .map_err(StoreError::sql("read the decisions of"))
    }

    /// As of when the last decision was taken.
    pub fn last_decision(&self) -> Result<Option<At>, StoreError> {
        let last: Option<i64> = self
            .connection
            .query_row(
                "SELECT max(at_us) FROM (SELECT at_us FROM decision ORDER BY seq DESC LIMIT 1000)",
                [],
                |row| row.get(0),
            )
            .map_err(StoreError::sql("read the last moment of"))?;
        Ok(last.map(moment))
    }

    /// The hash of the last audit row.
    pub fn audit_head(&self) -> Result<String, StoreError> {
        audit::head(&self.connection)
    }

    /// The number of the audit row with this hash, if the chain has one.
    pub fn audit_row(&self, hash: &str) -> Result<Option<u64>, StoreError> {
        self.connection
            .prepare("SELECT seq FROM audit WHERE hash = ?")
            .and_then(|mut query| query.query_row([hash], |row| row.get::<_, i64>(0)).optional())
            .map(|row| row.map(i64::cast_unsigned))
            .map_err(StoreError::sql("look an audit row up in"))
    }

    /// Checks the whole audit chain against itself and against the rows that it speaks of.
    pub fn audit(&self) -> Result<AuditCheck, StoreError> {
        audit::check(&self.connection)
    }
}

pub(super) fn parse<T: DeserializeOwned>(table: &'static str, body: &str) -> Result<T, StoreError> {
    // serde's own message may quote the text, which may be a patient's: say only where it broke.
    serde_json::from_str(body).map_err(|error| StoreError::Row {
        table,
        why: format!("not the expected shape at column {}", error.column()),
    })
}
