//! One transaction of the writer: what happened to files, what was learned, what was decided, what is to be told,
//! and the audit of all of it. It commits whole or not at all.

use super::{Store, StoreError, audit, micros};
use ebbmark_formats::BadRow;
use ebbmark_rules::alert::{Alert, AlertState, Decision, LifeStep};
use ebbmark_rules::fact::{At, Fact, Source};
use ebbmark_rules::ids::{AlertId, ContentHash};
use rusqlite::{Transaction, TransactionBehavior, params};
use serde::Serialize;
use std::collections::BTreeSet;
use std::ffi::OsString;
use std::os::unix::ffi::OsStrExt;
use std::path::PathBuf;

/// The program's version, stored with each file's outcome: what an older program held is looked at again.
pub(crate) const VERSION: &str = env!("CARGO_PKG_VERSION");

/// What a directory listing says of a file. Two equal stamps of one path are taken for one content only as a short
/// cut; the hash decides.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub struct Stamp {
    /// Bytes.
    pub size: u64,
    /// Last change of the content, ns since 1970, as the file system says.
    pub mtime_ns: i64,
    /// Last change of anything, ns since 1970; can't be set back by hand.
    pub ctime_ns: i64,
    /// The file's number in its file system.
    pub inode: u64,
}

/// A file as it was seen. The path is relative to the export folder.
#[derive(Clone, PartialEq, Eq)]
pub struct Seen {
    /// Relative to the export folder; may carry a patient's name or number, so `Debug` hides it.
    pub path: PathBuf,
    /// Its stamp.
    pub stamp: Stamp,
}

impl std::fmt::Debug for Seen {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        f.debug_struct("Seen").field("stamp", &self.stamp).finish_non_exhaustive()
    }
}

impl Seen {
    /// The path as stored.
    pub(super) fn key(&self) -> &[u8] {
        self.path.as_os_str().as_bytes()
    }

    pub(super) fn path_of(key: Vec<u8>) -> PathBuf {
        use std::os::unix::ffi::OsStringExt;
        OsString::from_vec(key).into()
    }
}

/// What a file held, as far as it could be told.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum What {
    /// A tracing.
    Tracing,
    /// Chart rows.
    Chart,
    /// Could not be told.
    Unknown,
}

impl What {
    pub(super) fn word(self) -> &'static str {
        match self {
            What::Tracing => "tracing",
            What::Chart => "chart",
            What::Unknown => "unknown",
        }
    }
}

/// A reason to hold a file, in words that a person can act on and without patient text.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Held(pub String);

/// How a file ended.
#[derive(Debug)]
pub enum Outcome {
    /// Its facts were learned.
    Accepted {
        /// What it held.
        what: What,
        /// Rows that could not be used.
        bad: Vec<BadRow>,
    },
    /// Its content was accepted before.
    Repeat,
    /// It waits for a person.
    Held(What, Held),
}

/// A file with its outcome.
#[derive(Debug)]
pub struct Taken {
    /// Which file.
    pub seen: Seen,
    /// Its content hash; `None` where it was not read.
    pub hash: Option<ContentHash>,
    /// How it ended.
    pub outcome: Outcome,
}

/// A transaction of the writer.
#[derive(Debug)]
pub struct Writing<'store> {
    change: Transaction<'store>,
    at: At,
}

impl Store {
    /// Begins a transaction as of `at`. Dropped without [`Writing::commit`], nothing of it stays.
    ///
    /// # Errors
    /// Another writer holds the store.
    pub fn write(&mut self, at: At) -> Result<Writing<'_>, StoreError> {
        let change = self
            .connection
            .transaction_with_behavior(TransactionBehavior::Immediate)
            .map_err(StoreError::sql("begin a change to"))?;
        Ok(Writing { change, at })
    }
}

impl Writing<'_> {
    /// Makes it last. On the disk when this returns.
    ///
    /// # Errors
    /// The disk is full or failed; nothing of it stays, and the writer must not go on.
    pub fn commit(self) -> Result<(), StoreError> {
        self.change.commit().map_err(StoreError::sql("commit to"))
    }

    /// The transaction, for the other parts of the store.
    pub(super) fn sql(&self) -> &Transaction<'_> {
        &self.change
    }

    /// As of when.
    pub(super) fn at(&self) -> At {
        self.at
    }

    /// Whether this content was accepted before, in this transaction or an earlier one.
    pub fn is_accepted(&self, hash: &ContentHash) -> Result<bool, StoreError> {
        self.change
            .prepare_cached("SELECT 1 FROM file WHERE hash = ? AND outcome = 'accepted'")
            .and_then(|mut query| query.exists([hash.as_str()]))
            .map_err(StoreError::sql("look a content up in"))
    }

    /// Remembers how a file ended; gives its row.
    pub fn file(&self, taken: &Taken) -> Result<i64, StoreError> {
        let (outcome, what, reason) = match &taken.outcome {
            Outcome::Accepted { what, .. } => ("accepted", *what, ""),
            Outcome::Repeat => ("repeat", What::Unknown, ""),
            Outcome::Held(what, Held(reason)) => ("held", *what, reason.as_str()),
        };
        let hash = taken.hash.as_ref().map(ContentHash::as_str);
        let Stamp { size, mtime_ns, ctime_ns, inode } = taken.seen.stamp;
        self.change
            .prepare_cached(
                "INSERT INTO file (path, size, mtime_ns, ctime_ns, inode, hash, outcome, what, reason, at_us, version)
                 VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?)",
            )
            .and_then(|mut insert| {
                insert.insert(params![
                    taken.seen.key(),
                    size.cast_signed(),
                    mtime_ns,
                    ctime_ns,
                    inode.cast_signed(),
                    hash,
                    outcome,
                    what.word(),
                    reason,
                    micros(self.at),
                    VERSION
                ])
            })
            .map_err(StoreError::sql("add a file to"))?;
        let id = self.change.last_insert_rowid();
        if let Outcome::Accepted { bad, .. } = &taken.outcome {
            for BadRow { place, why } in bad {
                self.change
                    .prepare_cached("INSERT INTO bad_row (file, place, why) VALUES (?, ?, ?)")
                    .and_then(|mut insert| insert.execute(params![id, place, why]))
                    .map_err(StoreError::sql("add a bad row to"))?;
            }
        }
        let text = format!("{outcome} {} {reason}", hash.unwrap_or_default());
        audit::append(&self.change, self.at, &format!("file {id}"), &text)?;
        Ok(id)
    }

    /// Remembers a fact; gives its number, or `None` where the same row of a file said the same before.
    pub fn fact(&self, fact: &Fact, file: Option<i64>) -> Result<Option<i64>, StoreError> {
        let body = json("fact", fact)?;
        let says = match &fact.source {
            Source::File { .. } => Some(says(fact)?),
            Source::Person(_) | Source::Service => None,
        };
        let known = match &says {
            Some(says) => self
                .change
                .prepare_cached("SELECT 1 FROM fact WHERE says = ?")
                .and_then(|mut query| query.exists([says]))
                .map_err(StoreError::sql("look a fact up in"))?,
            None => false,
        };
        if known {
            return Ok(None);
        }
        let kind = tag("fact", &fact.body, "kind")?;
        self.change
            .prepare_cached(
                "INSERT INTO fact (received_us, occurred_us, file, issuer, number, kind, says, body)
                 VALUES (?, ?, ?, ?, ?, ?, ?, ?)",
            )
            .and_then(|mut insert| {
                insert.execute(params![
                    micros(fact.received_at),
                    micros(fact.occurred_at),
                    file,
                    fact.patient.as_ref().map(|patient| patient.issuer()),
                    fact.patient.as_ref().map(|patient| patient.expose()),
                    kind,
                    says,
                    body
                ])
            })
            .map_err(StoreError::sql("add a fact to"))?;
        let seq = self.change.last_insert_rowid();
        audit::append(&self.change, self.at, &format!("fact {seq}"), &body)?;
        Ok(Some(seq))
    }

    /// Remembers a decision and folds it into the alert that it is about. A `Tell` becomes messages only through
    /// [`Writing::post`].
    pub fn decision(&self, decision: &Decision, fact: Option<i64>) -> Result<(), StoreError> {
        let (kind, alert, at) = match decision {
            Decision::Raised(alert) => ("raised", &alert.id, alert.as_of),
            Decision::Changed(alert) => ("changed", &alert.id, alert.as_of),
            Decision::Life { alert, at, .. } => ("life", alert, *at),
            Decision::Tell(notice) => ("tell", &notice.alert.id, notice.at),
        };
        match decision {
            Decision::Raised(alert) | Decision::Changed(alert) => self.alert(alert)?,
            Decision::Life { alert, step, .. } => self.life(alert, step)?,
            Decision::Tell(_) => {}
        }
        let body = json("decision", decision)?;
        self.change
            .prepare_cached(
                "INSERT INTO decision (at_us, fact, alert, kind, body) VALUES (?, ?, ?, ?, ?)",
            )
            .and_then(|mut insert| {
                insert.execute(params![micros(at), fact, alert.as_str(), kind, body])
            })
            .map_err(StoreError::sql("add a decision to"))?;
        let seq = self.change.last_insert_rowid();
        audit::append(&self.change, self.at, &format!("decision {seq}"), &body)
    }

    fn alert(&self, alert: &Alert) -> Result<(), StoreError> {
        self.change
            .prepare_cached(
                "INSERT INTO alert (id, issuer, number, concern, raised_us, as_of_us, state, tier, tier_rank, rule, body)
                 VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?)
                 ON CONFLICT (id) DO UPDATE SET as_of_us = excluded.as_of_us, state = excluded.state,
                     tier = excluded.tier, tier_rank = excluded.tier_rank, rule = excluded.rule, body = excluded.body",
            )
            .and_then(|mut upsert| {
                upsert.execute(params![
                    alert.id.as_str(),
                    alert.patient.as_ref().map(|patient| patient.issuer()),
                    alert.patient.as_ref().map(|patient| patient.expose()),
                    alert.concern,
                    micros(alert.raised_at),
                    micros(alert.as_of),
                    state_word(alert.state),
                    alert.tier.as_str(),
                    alert.tier_rank,
                    alert.rule.as_str(),
                    json("alert", alert)
                        .map_err(|error| rusqlite::Error::ToSqlConversionFailure(Box::new(error)))?
                ])
            })
            .map_err(StoreError::sql("add an alert to"))?;
        Ok(())
    }

    fn life(&self, alert: &AlertId, step: &LifeStep) -> Result<(), StoreError> {
        let state = match step {
            LifeStep::Acknowledged { .. } => AlertState::Acknowledged,
            LifeStep::ClosedByFacts { .. } | LifeStep::ClosedByPerson { .. } => AlertState::Closed,
            LifeStep::Withdrawn { .. } => AlertState::Withdrawn,
            LifeStep::Told { .. }
            | LifeStep::Refused { .. }
            | LifeStep::Snoozed { .. }
            | LifeStep::SnoozeEnded
            | LifeStep::HandedOver { .. }
            | LifeStep::Escalated { .. } => return Ok(()),
        };
        self.change
            .prepare_cached("UPDATE alert SET state = ? WHERE id = ?")
            .and_then(|mut update| update.execute(params![state_word(state), alert.as_str()]))
            .map_err(StoreError::sql("change an alert in"))?;
        self.moot(alert)
    }

    /// Remembers a text under its hash; a text that is there already stays.
    pub fn text(&self, kind: TextKind, body: &str) -> Result<ContentHash, StoreError> {
        let hash = ContentHash::of(body.as_bytes());
        let new = self
            .change
            .prepare_cached("INSERT INTO text (hash, kind, body, stored_us) VALUES (?, ?, ?, ?) ON CONFLICT DO NOTHING")
            .and_then(|mut insert| insert.execute(params![hash.as_str(), kind.word(), body, micros(self.at)]))
            .map_err(StoreError::sql("add a text to"))?;
        if new > 0 {
            audit::append(&self.change, self.at, &format!("text {}", hash.as_str()), body)?;
        }
        Ok(hash)
    }

    /// Closes every open alert but these: what folding no longer gives is not left open with nobody to close it.
    pub fn close_all_but<'a>(
        &self,
        standing: impl Iterator<Item = &'a AlertId>,
    ) -> Result<(), StoreError> {
        let standing: BTreeSet<&str> = standing.map(AlertId::as_str).collect();
        let open = self
            .change
            .prepare("SELECT id FROM alert WHERE state IN ('open', 'acknowledged')")
            .and_then(|mut query| {
                query.query_map([], |row| row.get(0))?.collect::<Result<Vec<String>, _>>()
            })
            .map_err(StoreError::sql("list alerts of"))?;
        for id in open.iter().filter(|id| !standing.contains(id.as_str())) {
            self.change
                .execute("UPDATE alert SET state = 'closed' WHERE id = ?", [id])
                .map_err(StoreError::sql("change an alert in"))?;
            audit::append(
                &self.change,
                self.at,
                &format!("alert {id}"),
                "closed: folding no longer gives it",
            )?;
        }
        Ok(())
    }

    /// Writes an alert as it stands, with an audit row and without a decision.
    pub fn stand(&self, alert: &Alert) -> Result<(), StoreError> {
        self.alert(alert)?;
        audit::append(&self.change, self.at, &format!("alert {}", alert.id), &json("alert", alert)?)
    }
}

/// Which kind of text is stored by hash.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord)]
pub enum TextKind {
    /// A protocol.
    Protocol,
    /// A medicine list.
    Medicines,
    /// A site's own codes.
    Codes,
}

impl TextKind {
    /// As stored.
    pub fn word(self) -> &'static str {
        match self {
            TextKind::Protocol => "protocol",
            TextKind::Medicines => "medicines",
            TextKind::Codes => "codes",
        }
    }
}

/// What a row of a file says, hashed: whom it is about, when it was true, and what. Not when or from which file we
/// learned it.
fn says(fact: &Fact) -> Result<String, StoreError> {
    let text = json("fact", &(&fact.patient, fact.occurred_at, &fact.body))?;
    Ok(ContentHash::of(text.as_bytes()).as_str().to_owned())
}

pub(super) fn json(table: &'static str, value: &impl Serialize) -> Result<String, StoreError> {
    serde_json::to_string(value).map_err(|error| StoreError::Row { table, why: error.to_string() })
}

/// A tagged type's own word for its variant.
fn tag(table: &'static str, value: &impl Serialize, field: &str) -> Result<String, StoreError> {
    let value = serde_json::to_value(value)
        .map_err(|error| StoreError::Row { table, why: error.to_string() })?;
    let word = value.get(field).and_then(|word| word.as_str());
    word.map(str::to_owned)
        .ok_or_else(|| StoreError::Row { table, why: format!("it has no `{field}`") })
}

pub(super) fn state_word(state: AlertState) -> &'static str {
    match state {
        AlertState::Open => "open",
        AlertState::Acknowledged => "acknowledged",
        AlertState::Closed => "closed",
        AlertState::Withdrawn => "withdrawn",
    }
}
