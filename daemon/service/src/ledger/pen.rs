//! Writing within one transaction: files, facts, what is decided on them, and who is to be told.

use super::keeper::Shelf;
use super::known::Known;
use super::{Arrival, Draft, Envelope, Post, Reading, Render, Sheet, Tally};
use crate::store::outbox::{Crowd, daily_id, digest_id, message_id};
use crate::store::{Held, Outcome, StoreError, Taken, TextKind, What, Writing};
use chrono::NaiveDate;
use ebbmark_rules::alert::{Decision, Notice};
use ebbmark_rules::decide::{Decider, Texts};
use ebbmark_rules::fact::{At, Fact};
use ebbmark_rules::ids::Private;
use ebbmark_rules::protocol::Protocol;
use std::panic::{AssertUnwindSafe, catch_unwind};

/// What writes within one transaction.
pub(super) struct Pen<'a, 'store> {
    pub(super) change: &'a Writing<'store>,
    pub(super) now: At,
    pub(super) decider: &'a mut Decider,
    pub(super) known: &'a mut Known,
    pub(super) shelf: &'a Shelf,
    pub(super) domain: &'a str,
    pub(super) render: &'a Render,
    pub(super) tally: Tally,
}

impl Pen<'_, '_> {
    pub(super) fn arrival(&mut self, arrival: &Arrival) -> Result<(), StoreError> {
        let known = match &arrival.hash {
            Some(hash) => self.change.is_accepted(hash)?,
            None => false,
        };
        let (outcome, drafts) = match &arrival.reading {
            Reading::Repeat => (Outcome::Repeat, [].as_slice()),
            _ if known => (Outcome::Repeat, [].as_slice()),
            Reading::Held(what, reason) => (Outcome::Held(*what, reason.clone()), [].as_slice()),
            Reading::Tracing { described, draft } => {
                match self.known.disagree(draft.patient.as_ref(), described) {
                    Some(reason) => (Outcome::Held(What::Tracing, reason), [].as_slice()),
                    None => (
                        Outcome::Accepted { what: What::Tracing, bad: Vec::new() },
                        std::slice::from_ref(draft.as_ref()),
                    ),
                }
            }
            Reading::Chart { drafts, bad } => {
                (Outcome::Accepted { what: What::Chart, bad: bad.clone() }, drafts.as_slice())
            }
        };
        match &outcome {
            Outcome::Accepted { .. } => self.tally.accepted += 1,
            Outcome::Repeat => self.tally.repeats += 1,
            Outcome::Held(..) => self.tally.held += 1,
        }
        for (seen, hash) in &arrival.companions {
            let outcome = match &outcome {
                Outcome::Held(what, _) => {
                    Outcome::Held(*what, Held("belongs to a header that is held".to_owned()))
                }
                Outcome::Accepted { .. } | Outcome::Repeat if self.change.is_accepted(hash)? => {
                    Outcome::Repeat
                }
                Outcome::Accepted { .. } | Outcome::Repeat => {
                    Outcome::Accepted { what: What::Tracing, bad: Vec::new() }
                }
            };
            self.change.file(&Taken { seen: seen.clone(), hash: Some(hash.clone()), outcome })?;
        }
        let file = self.change.file(&Taken {
            seen: arrival.seen.clone(),
            hash: arrival.hash.clone(),
            outcome,
        })?;
        drafts.iter().try_for_each(|draft| self.fact(draft.clone(), Some(file)))
    }

    /// Learns one fact and writes what it leads to. A row that says what an earlier row said is not learned again.
    pub(super) fn fact(&mut self, draft: Draft, file: Option<i64>) -> Result<(), StoreError> {
        let Draft { occurred_at, source, patient, body } = draft;
        let occurred_at = occurred_at.unwrap_or(self.now);
        let fact = Fact { occurred_at, received_at: self.now, source, patient, body };
        let Some(seq) = self.change.fact(&fact, file)? else { return Ok(()) };
        self.known.learn(&fact);
        let decisions = self.decider.take(&fact, self.shelf);
        self.decisions(&decisions, Some(seq))
    }

    pub(super) fn decisions(
        &mut self,
        decisions: &[Decision],
        fact: Option<i64>,
    ) -> Result<(), StoreError> {
        for decision in decisions {
            self.change.decision(decision, fact)?;
            match decision {
                Decision::Raised(_) => self.tally.raised += 1,
                Decision::Tell(notice) => self.post(notice)?,
                Decision::Changed(_) | Decision::Life { .. } => {}
            }
        }
        Ok(())
    }

    pub(super) fn post(&mut self, notice: &Notice) -> Result<(), StoreError> {
        for recipient in &notice.recipients {
            let id = message_id(&notice.alert.id, notice.step, recipient, self.domain);
            let name = notice.alert.patient.as_ref().and_then(|patient| self.known.name(patient));
            let bytes =
                (self.render)(&Sheet::Letter(Post { notice, recipient, message_id: &id, name }));
            self.change.post(notice, recipient, &id, &bytes)?;
            self.tally.posted += 1;
        }
        Ok(())
    }

    /// One message in place of many.
    pub(super) fn digest(&mut self, crowd: &Crowd) -> Result<(), StoreError> {
        let mut notices = Vec::with_capacity(crowd.messages.len());
        for message in &crowd.messages {
            let Some(notice) = self.change.notice(&message.alert, message.step)? else {
                // Each goes out on its own: nothing is lost.
                tracing::error!(message = message.row, "a message has no decision behind it");
                return Ok(());
            };
            notices.push((message, notice));
        }
        let posts: Vec<Post<'_>> = notices
            .iter()
            .map(|(message, notice)| Post {
                notice,
                recipient: &crowd.recipient,
                message_id: &message.message_id,
                name: notice.alert.patient.as_ref().and_then(|patient| self.known.name(patient)),
            })
            .collect();
        let id = digest_id(crowd, self.domain);
        let envelope = Envelope { recipient: &crowd.recipient, message_id: &id, at: self.now };
        // The letters are made already; where one of them all fails, they go out as they are.
        let work = AssertUnwindSafe(|| (self.render)(&Sheet::Digest(envelope, &posts)));
        match catch_unwind(work) {
            Ok(bytes) => self.change.gather(crowd, &id, &bytes),
            Err(_) => {
                tracing::error!("laying out a digest failed in a way that it should not");
                Ok(())
            }
        }
    }

    /// The day's message.
    pub(super) fn daily(&mut self, day: NaiveDate, to: &[Private]) -> Result<(), StoreError> {
        let figures = self.change.day()?;
        let text = self.known.in_force(TextKind::Protocol).and_then(|hash| self.shelf.text(hash));
        let protocol = text.and_then(|text| Protocol::parse(text).ok());
        for recipient in to {
            let id = daily_id(day, recipient, self.domain);
            let envelope = Envelope { recipient, message_id: &id, at: self.now };
            let bytes = (self.render)(&Sheet::Daily(envelope, &figures, protocol.as_ref()));
            if self.change.post_daily(recipient, &id, &bytes)? {
                self.tally.posted += 1;
            }
        }
        Ok(())
    }
}
