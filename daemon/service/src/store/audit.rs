//! The audit chain: a row for each row that was written, each hashing the one before, so that a change or a cut shows.

use super::{StoreError, micros};
use ebbmark_rules::fact::At;
use ebbmark_rules::ids::ContentHash;
use rusqlite::{Connection, OptionalExtension, params};

/// What stands before the first row.
const START: &str = "0000000000000000000000000000000000000000000000000000000000000000";

/// Adds a row about `subject` (`fact 17`), whose text is `content`.
pub(super) fn append(
    connection: &Connection,
    at: At,
    subject: &str,
    content: &str,
) -> Result<(), StoreError> {
    let previous = head(connection)?;
    let content = ContentHash::of(content.as_bytes());
    let hash = link(&previous, at, subject, content.as_str());
    connection
        .prepare_cached(
            "INSERT INTO audit (at_us, subject, content, previous, hash) VALUES (?, ?, ?, ?, ?)",
        )
        .and_then(|mut insert| {
            insert.execute(params![micros(at), subject, content.as_str(), previous, hash])
        })
        .map_err(StoreError::sql("add an audit row to"))?;
    Ok(())
}

/// The last row's hash: what goes out in the daily mail.
pub(super) fn head(connection: &Connection) -> Result<String, StoreError> {
    let head: Option<String> = connection
        .prepare_cached("SELECT hash FROM audit ORDER BY seq DESC LIMIT 1")
        .and_then(|mut query| query.query_row([], |row| row.get(0)).optional())
        .map_err(StoreError::sql("read the audit head of"))?;
    Ok(head.unwrap_or_else(|| START.to_owned()))
}

fn link(previous: &str, at: At, subject: &str, content: &str) -> String {
    ContentHash::of(format!("{previous}\n{}\n{subject}\n{content}", micros(at)).as_bytes())
        .as_str()
        .to_owned()
}

/// What checking the chain found.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct AuditCheck {
    /// Rows checked.
    pub rows: u64,
    /// The last row's hash.
    pub head: String,
    /// The first break, if there is one, in words.
    pub broken: Option<String>,
}

/// Walks the whole chain, and holds every fact, decision and file outcome against its audit row.
pub(super) fn check(connection: &Connection) -> Result<AuditCheck, StoreError> {
    let read = StoreError::sql;
    let mut query = connection
        .prepare("SELECT seq, at_us, subject, content, previous, hash FROM audit ORDER BY seq")
        .map_err(read("read the audit of"))?;
    let mut rows = query.query([]).map_err(read("read the audit of"))?;
    let mut found = AuditCheck { rows: 0, head: START.to_owned(), broken: None };
    while let Some(row) = rows.next().map_err(read("read the audit of"))? {
        let get = |column: usize| {
            row.get::<_, String>(column).map_err(StoreError::sql("read the audit of"))
        };
        let seq: i64 = row.get(0).map_err(read("read the audit of"))?;
        let at = super::moment(row.get(1).map_err(read("read the audit of"))?);
        let (subject, content, previous, hash) = (get(2)?, get(3)?, get(4)?, get(5)?);
        if previous != found.head {
            found.broken = Some(format!("row {seq} does not follow the row before it"));
        } else if hash != link(&previous, at, &subject, &content) {
            found.broken = Some(format!("row {seq} was changed"));
        } else if let Some(text) = text_of(connection, &subject)?
            && ContentHash::of(text.as_bytes()).as_str() != content
        {
            found.broken = Some(format!("{subject} is not what was written (audit row {seq})"));
        }
        if found.broken.is_some() {
            return Ok(found);
        }
        found.rows += 1;
        found.head = hash;
    }
    Ok(found)
}

/// The text that an audit row of a kept row stands for. A missing row reads as empty, and so shows as changed.
fn text_of(connection: &Connection, subject: &str) -> Result<Option<String>, StoreError> {
    let query = match subject.split_once(' ') {
        Some(("fact", _)) => "SELECT body FROM fact WHERE seq = ?",
        Some(("decision", _)) => "SELECT body FROM decision WHERE seq = ?",
        Some(("file", _)) => {
            "SELECT outcome || ' ' || coalesce(hash, '') || ' ' || reason FROM file WHERE id = ?"
        }
        _ => return Ok(None),
    };
    let id: i64 = subject.split_once(' ').and_then(|(_, id)| id.parse().ok()).unwrap_or(-1);
    let text: Option<String> = connection
        .prepare_cached(query)
        .and_then(|mut query| query.query_row([id], |row| row.get(0)).optional())
        .map_err(StoreError::sql("check the audit of"))?;
    Ok(Some(text.unwrap_or_default()))
}
