//! The outbox: one message to one recipient about one step of one alert.
//!
//! ```text
//! pending --claim--> claimed --sent-----> sent      (250 after the final dot, and only then)
//!                      |  ^   --refused--> refused  (5xx on the recipient)
//!                 wait |  | claim
//!                      v  |
//!                     waiting -----------> moot     (somebody answered the alert while it waited)
//! ```
//!
//! Several messages that are due to one recipient at once are gathered into a digest, which goes out in their place: they
//! move together from then on, and each still settles for its own alert.
//!
//! A claim is committed before anyone connects. A message found claimed at a start fell into the gap in which nobody
//! knows whether the server took it: it waits and goes out again, the same bytes under the same Message-ID.

use super::write::Writing;
use super::{Store, StoreError, audit, micros, moment};
use chrono::NaiveDate;
use ebbmark_rules::alert::{Decision, Notice, NoticeReason};
use ebbmark_rules::fact::At;
use ebbmark_rules::ids::{AlertId, ContentHash, Private};
use rusqlite::{OptionalExtension, params};

/// A message on its way out.
#[derive(Debug, Clone, PartialEq)]
pub struct Outgoing {
    /// Its row; a digest's first.
    pub id: i64,
    /// All rows that it settles: one, or those of a digest.
    pub rows: Vec<i64>,
    /// About which alert; none for the daily message.
    pub alert: Option<AlertId>,
    /// About which notice of it.
    pub step: u32,
    /// To whom: an address.
    pub recipient: Private,
    /// Its identity for good, without the angle brackets.
    pub message_id: String,
    /// The whole message, rendered once. Hidden from `Debug` by its type's owner: never log it.
    pub bytes: Bytes,
    /// How often it was claimed before this time.
    pub attempts: u32,
    /// When it was put in the outbox.
    pub created_at: At,
}

/// Messages that are due to one recipient at once.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Crowd {
    /// Who would get them all.
    pub recipient: Private,
    /// The messages, in the order in which they were posted.
    pub messages: Vec<Crowded>,
}

/// One of them.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Crowded {
    /// Its row.
    pub row: i64,
    /// About which alert.
    pub alert: AlertId,
    /// About which notice of it.
    pub step: u32,
    /// Its identity.
    pub message_id: String,
}

/// More messages than this make a second digest: nobody reads longer ones.
const DIGEST_MOST: i64 = 20;

/// A message's bytes; `Debug` says only how many.
#[derive(Clone, PartialEq, Eq)]
pub struct Bytes(pub Vec<u8>);

impl std::fmt::Debug for Bytes {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        write!(f, "{} bytes", self.0.len())
    }
}

/// How a claimed message ended.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum Sending {
    /// The server answered 250 after the final dot.
    Sent {
        /// Its words.
        reply: String,
    },
    /// The server refuses this recipient for good.
    Refused {
        /// Its words.
        reply: String,
    },
    /// Not now.
    Waiting {
        /// When to try again.
        next_try: At,
        /// Why, in the server's or the system's words.
        why: String,
    },
}

/// A message's identity: a function of alert, step and recipient, so that nothing can make a second one.
pub fn message_id(alert: &AlertId, step: u32, recipient: &Private, domain: &str) -> String {
    let name = format!("{}\n{step}\n{}", alert.as_str(), recipient.expose());
    let hash = ContentHash::of(name.as_bytes());
    format!("{}@{domain}", hash.as_str().get(..40).unwrap_or_default())
}

/// A day's message's identity: a function of day and recipient.
pub fn daily_id(day: NaiveDate, recipient: &Private, domain: &str) -> String {
    let hash = ContentHash::of(format!("daily\n{day}\n{}", recipient.expose()).as_bytes());
    format!("{}@{domain}", hash.as_str().get(..40).unwrap_or_default())
}

/// A digest's identity: a function of the messages in whose place it goes.
pub fn digest_id(crowd: &Crowd, domain: &str) -> String {
    let ids: Vec<&str> = crowd.messages.iter().map(|message| message.message_id.as_str()).collect();
    let hash = ContentHash::of(format!("digest\n{}", ids.join("\n")).as_bytes());
    format!("{}@{domain}", hash.as_str().get(..40).unwrap_or_default())
}

fn asks(reason: &NoticeReason) -> bool {
    match reason {
        NoticeReason::Raised
        | NoticeReason::TierRaised
        | NoticeReason::Escalated
        | NoticeReason::SnoozeEnded
        | NoticeReason::HandedOver => true,
        NoticeReason::Withdrawn | NoticeReason::Closed => false,
    }
}

impl Writing<'_> {
    /// Puts a rendered message in the outbox.
    ///
    /// # Errors
    /// The same message is there already (the decider gave one notice twice), or the store failed.
    pub fn post(
        &self,
        notice: &Notice,
        recipient: &Private,
        message_id: &str,
        bytes: &[u8],
    ) -> Result<(), StoreError> {
        let now = micros(self.at());
        self.sql()
            .prepare_cached(
                "INSERT INTO outbox (alert, step, recipient, role, asks, message_id, bytes, state, created_us, next_try_us)
                 VALUES (?, ?, ?, ?, ?, ?, ?, 'pending', ?, ?)",
            )
            .and_then(|mut insert| {
                insert.execute(params![
                    notice.alert.id.as_str(),
                    notice.step,
                    recipient.expose(),
                    notice.role.as_str(),
                    asks(&notice.reason),
                    message_id,
                    bytes,
                    now,
                    now
                ])
            })
            .map_err(StoreError::sql("add a message to"))?;
        let id = self.sql().last_insert_rowid();
        let text = format!("pending {}", ContentHash::of(bytes).as_str());
        audit::append(self.sql(), self.at(), &format!("message {id}"), &text)
    }

    /// Puts a day's message in the outbox; `false` where it is there already.
    pub fn post_daily(
        &self,
        recipient: &Private,
        message_id: &str,
        bytes: &[u8],
    ) -> Result<bool, StoreError> {
        let now = micros(self.at());
        let added = self
            .sql()
            .prepare_cached(
                "INSERT INTO outbox (alert, step, recipient, role, asks, message_id, bytes, state, created_us, next_try_us)
                 VALUES (NULL, 0, ?, '', 0, ?, ?, 'pending', ?, ?) ON CONFLICT (message_id) DO NOTHING",
            )
            .and_then(|mut insert| {
                insert.execute(params![recipient.expose(), message_id, bytes, now, now])
            })
            .map_err(StoreError::sql("add a daily message to"))?;
        if added > 0 {
            let id = self.sql().last_insert_rowid();
            let text = format!("pending {}", ContentHash::of(bytes).as_str());
            audit::append(self.sql(), self.at(), &format!("message {id}"), &text)?;
        }
        Ok(added > 0)
    }

    /// Whether a message about this step of this alert was put in the outbox.
    pub fn is_posted(&self, alert: &AlertId, step: u32) -> Result<bool, StoreError> {
        self.sql()
            .prepare_cached("SELECT 1 FROM outbox WHERE alert = ? AND step = ?")
            .and_then(|mut query| query.exists(params![alert.as_str(), step]))
            .map_err(StoreError::sql("look a message up in"))
    }

    /// The first attempts that are due, by recipient, where one has at least `least` of them: what a digest is made of.
    pub fn crowded(&self, least: usize) -> Result<Vec<Crowd>, StoreError> {
        let read = || StoreError::sql("look for a digest in");
        let now = micros(self.at());
        let recipients = self
            .sql()
            .prepare_cached(
                "SELECT recipient FROM outbox WHERE state = 'pending' AND next_try_us <= ? AND digest IS NULL AND alert IS NOT NULL
                 GROUP BY recipient HAVING count(*) >= ? ORDER BY recipient",
            )
            .and_then(|mut query| {
                query
                    .query_map(params![now, i64::try_from(least).unwrap_or(i64::MAX)], |row| row.get(0))?
                    .collect::<Result<Vec<String>, _>>()
            })
            .map_err(read())?;
        let mut query = self
            .sql()
            .prepare_cached(
                "SELECT id, alert, step, message_id FROM outbox
                 WHERE recipient = ? AND state = 'pending' AND next_try_us <= ? AND digest IS NULL AND alert IS NOT NULL
                 ORDER BY id LIMIT ?",
            )
            .map_err(read())?;
        let mut crowds = Vec::new();
        for recipient in recipients {
            let messages = query
                .query_map(params![recipient, now, DIGEST_MOST], |row| {
                    let alert = AlertId::new(row.get::<_, String>(1)?);
                    Ok(Crowded {
                        row: row.get(0)?,
                        alert,
                        step: row.get(2)?,
                        message_id: row.get(3)?,
                    })
                })
                .and_then(Iterator::collect::<Result<Vec<_>, _>>)
                .map_err(read())?;
            crowds.push(Crowd { recipient: Private::new(recipient), messages });
        }
        Ok(crowds)
    }

    /// Puts a digest in the place of messages that were never tried.
    ///
    /// # Errors
    /// One of them was tried or is in a digest, or the store failed.
    pub fn gather(&self, crowd: &Crowd, message_id: &str, bytes: &[u8]) -> Result<(), StoreError> {
        let fail = || StoreError::sql("gather a digest in");
        self.sql()
            .prepare_cached("INSERT INTO digest (message_id, bytes, created_us) VALUES (?, ?, ?)")
            .and_then(|mut insert| insert.execute(params![message_id, bytes, micros(self.at())]))
            .map_err(fail())?;
        let digest = self.sql().last_insert_rowid();
        for message in &crowd.messages {
            self.sql()
                .prepare_cached("UPDATE outbox SET digest = ? WHERE id = ?")
                .and_then(|mut update| update.execute([digest, message.row]))
                .map_err(fail())?;
            let text = format!("in digest {digest} {}", ContentHash::of(bytes).as_str());
            audit::append(self.sql(), self.at(), &format!("message {}", message.row), &text)?;
        }
        Ok(())
    }

    /// The notice that a message is about.
    pub fn notice(&self, alert: &AlertId, step: u32) -> Result<Option<Notice>, StoreError> {
        let bodies = self
            .sql()
            .prepare_cached(
                "SELECT body FROM decision WHERE alert = ? AND kind = 'tell' ORDER BY seq",
            )
            .and_then(|mut query| {
                query
                    .query_map([alert.as_str()], |row| row.get(0))?
                    .collect::<Result<Vec<String>, _>>()
            })
            .map_err(StoreError::sql("look a notice up in"))?;
        for body in bodies {
            if let Decision::Tell(notice) = super::read::parse("decision", &body)?
                && notice.step == step
            {
                return Ok(Some(*notice));
            }
        }
        Ok(None)
    }

    /// Claims up to `limit` messages that are due: the highest tier first, within it the one that has waited longest.
    /// Commit before connecting.
    pub fn claim(&self, limit: usize) -> Result<Vec<Outgoing>, StoreError> {
        let read = || StoreError::sql("claim messages in");
        let now = micros(self.at());
        // The messages of a digest count as one. Beside `min(id)` the plain columns are those of that row.
        let mut query = self
            .sql()
            .prepare_cached(
                "SELECT min(outbox.id), alert.id, step, recipient, coalesce(digest.message_id, outbox.message_id),
                        coalesce(digest.bytes, outbox.bytes), attempts, coalesce(digest.created_us, outbox.created_us),
                        digest.id
                 FROM outbox LEFT JOIN alert ON alert.id = outbox.alert LEFT JOIN digest ON digest.id = outbox.digest
                 WHERE outbox.state IN ('pending', 'waiting') AND next_try_us <= ?
                 GROUP BY coalesce(-digest.id, outbox.id)
                 ORDER BY alert.tier_rank DESC, next_try_us, outbox.id LIMIT ?",
            )
            .map_err(read())?;
        let mut due = query
            .query_map(params![now, i64::try_from(limit).unwrap_or(i64::MAX)], |row| {
                let message = Outgoing {
                    id: row.get(0)?,
                    rows: vec![row.get(0)?],
                    alert: row.get::<_, Option<String>>(1)?.map(AlertId::new),
                    step: row.get(2)?,
                    recipient: Private::new(row.get::<_, String>(3)?),
                    message_id: row.get(4)?,
                    bytes: Bytes(row.get(5)?),
                    attempts: row.get(6)?,
                    created_at: moment(row.get(7)?),
                };
                Ok((message, row.get::<_, Option<i64>>(8)?))
            })
            .and_then(Iterator::collect::<Result<Vec<_>, _>>)
            .map_err(read())?;
        for (message, digest) in &mut due {
            if let Some(digest) = digest {
                message.rows = self
                    .sql()
                    .prepare_cached(
                        "SELECT id FROM outbox WHERE digest = ? AND state IN ('pending', 'waiting') ORDER BY id",
                    )
                    .and_then(|mut query| query.query_map([*digest], |row| row.get(0))?.collect())
                    .map_err(read())?;
            }
            for row in &message.rows {
                self.sql()
                    .prepare_cached(
                        "UPDATE outbox SET state = 'claimed', attempts = attempts + 1 WHERE id = ?",
                    )
                    .and_then(|mut update| update.execute([row]))
                    .map_err(read())?;
                audit::append(self.sql(), self.at(), &format!("message {row}"), "claimed")?;
            }
        }
        Ok(due.into_iter().map(|(message, _)| message).collect())
    }

    /// Messages that wait are tried now: the server is back.
    pub fn hurry(&self) -> Result<usize, StoreError> {
        self.sql()
            .execute(
                "UPDATE outbox SET next_try_us = ?1 WHERE state = 'waiting' AND next_try_us > ?1",
                [micros(self.at())],
            )
            .map_err(StoreError::sql("hurry messages in"))
    }

    /// Records how a claimed message ended; gives what it was about.
    ///
    /// # Errors
    /// It was not claimed.
    pub fn settle(
        &self,
        id: i64,
        sending: &Sending,
    ) -> Result<(Option<AlertId>, u32, Private), StoreError> {
        let (state, settled, next_try, reply) = match sending {
            Sending::Sent { reply } => ("sent", Some(micros(self.at())), None, reply),
            Sending::Refused { reply } => ("refused", Some(micros(self.at())), None, reply),
            Sending::Waiting { next_try, why } => ("waiting", None, Some(micros(*next_try)), why),
        };
        let about = self
            .sql()
            .prepare_cached(
                "UPDATE outbox SET state = ?2, settled_us = ?3, next_try_us = coalesce(?4, next_try_us), reply = ?5
                 WHERE id = ?1 AND state = 'claimed' RETURNING alert, step, recipient",
            )
            .and_then(|mut update| {
                update
                    .query_row(params![id, state, settled, next_try, reply], |row| {
                        let (alert, recipient): (Option<String>, String) = (row.get(0)?, row.get(2)?);
                        Ok((alert.map(AlertId::new), row.get(1)?, Private::new(recipient)))
                    })
                    .optional()
            })
            .map_err(StoreError::sql("settle a message in"))?
            .ok_or(StoreError::NotThere { id, expected: "claimed" })?;
        audit::append(
            self.sql(),
            self.at(),
            &format!("message {id}"),
            &format!("{state} {reply}"),
        )?;
        if let Some(alert) = &about.0
            && self
                .sql()
                .prepare_cached("SELECT 1 FROM alert WHERE id = ? AND state <> 'open'")
                .and_then(|mut query| query.exists([alert.as_str()]))
                .map_err(StoreError::sql("settle a message in"))?
        {
            self.moot(alert)?;
        }
        Ok(about)
    }

    /// Ends the retries of messages about an alert that somebody answered, or that facts ended: the first attempt at
    /// a message is always made, and repeated while nobody answered.
    pub(super) fn moot(&self, alert: &AlertId) -> Result<(), StoreError> {
        let ended = self
            .sql()
            .prepare_cached(
                "UPDATE outbox SET state = 'moot', settled_us = ? WHERE alert = ? AND state = 'waiting' AND asks = 1 RETURNING id",
            )
            .and_then(|mut update| {
                update
                    .query_map(params![micros(self.at()), alert.as_str()], |row| row.get::<_, i64>(0))?
                    .collect::<Result<Vec<_>, _>>()
            })
            .map_err(StoreError::sql("end messages in"))?;
        for id in ended {
            audit::append(self.sql(), self.at(), &format!("message {id}"), "moot")?;
        }
        Ok(())
    }

    /// At a start: messages that were claimed when the last run ended go back to waiting, due now. Gives how many.
    pub fn unclaim(&self) -> Result<usize, StoreError> {
        let gap = self
            .sql()
            .prepare("SELECT id FROM outbox WHERE state = 'claimed' ORDER BY id")
            .and_then(|mut query| {
                query.query_map([], |row| row.get(0))?.collect::<Result<Vec<i64>, _>>()
            })
            .map_err(StoreError::sql("find claimed messages in"))?;
        for &id in &gap {
            self.settle(
                id,
                &Sending::Waiting {
                    next_try: self.at(),
                    why: "the service stopped while sending".to_owned(),
                },
            )?;
        }
        Ok(gap.len())
    }
}

impl Store {
    /// When the next message is due, if any waits.
    pub fn next_message(&self) -> Result<Option<At>, StoreError> {
        let next: Option<i64> = self
            .connection
            .prepare_cached(
                "SELECT min(next_try_us) FROM outbox WHERE state IN ('pending', 'waiting')",
            )
            .and_then(|mut query| query.query_row([], |row| row.get(0)))
            .map_err(StoreError::sql("find the next message of"))?;
        Ok(next.map(moment))
    }
}
