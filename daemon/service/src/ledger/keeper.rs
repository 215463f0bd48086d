//! The ledger's thread: one command at a time, each in one transaction.

use super::known::Known;
use super::pen::Pen;
use super::suspects::Suspects;
use super::{Arrival, Command, Draft, Folded, Parts, Render, Reply, Tally};
use crate::clock::Clock;
use crate::store::outbox::{Outgoing, Sending};
use crate::store::{Store, StoreError, TextKind};
use ebbmark_rules::decide::{Decider, Texts};
use ebbmark_rules::fact::{At, Body, Source, Trouble};
use ebbmark_rules::ids::ContentHash;
use std::collections::BTreeMap;
use std::panic::{AssertUnwindSafe, catch_unwind};
use std::sync::Arc;
use tokio::sync::{Notify, mpsc, watch};

/// So many messages due to one person at once become one.
const DIGEST_FROM: usize = 5;

/// The thread's own state.
pub(super) struct Keeper {
    pub(super) store: Store,
    pub(super) clock: Clock,
    pub(super) decider: Decider,
    pub(super) known: Known,
    suspects: Suspects,
    pub(super) shelf: Shelf,
    pub(super) domain: String,
    pub(super) render: Render,
    pub(super) last: At,
    due: watch::Sender<Option<At>>,
    pub(super) mail: Arc<Notify>,
}

/// The texts that facts put in force.
#[derive(Debug, Default)]
pub(super) struct Shelf(pub(super) BTreeMap<ContentHash, String>);

impl Texts for Shelf {
    fn text(&self, hash: &ContentHash) -> Option<&str> {
        self.0.get(hash).map(String::as_str)
    }
}

impl Keeper {
    pub(super) fn open(
        parts: Parts,
        due: watch::Sender<Option<At>>,
        mail: Arc<Notify>,
    ) -> Result<(Self, Folded), StoreError> {
        let Parts { path, clock, domain, render } = parts;
        let store = Store::open(&path)?;
        let mut keeper = Keeper {
            store,
            clock,
            decider: Decider::new(),
            known: Known::default(),
            suspects: Suspects::load(path.folder().join("suspects.json")),
            shelf: Shelf::default(),
            domain,
            render,
            last: At::UNIX_EPOCH,
            due,
            mail,
        };
        let folded = keeper.fold(&path)?;
        Ok((keeper, folded))
    }

    pub(super) fn run(&mut self, mut inbox: mpsc::Receiver<Command>) {
        self.publish();
        while let Some(command) = inbox.blocking_recv() {
            let goes_on = match command {
                Command::Files(batch, reply) => self.answer(reply, |keeper| keeper.files(batch)),
                Command::Learn(drafts, reply) => self.answer(reply, |keeper| keeper.learn(drafts)),
                Command::Force(kind, text, reply) => {
                    self.answer(reply, |keeper| keeper.put_in_force(kind, text))
                }
                Command::Trouble(trouble, present, reply) => {
                    self.answer(reply, |keeper| keeper.trouble(trouble, present))
                }
                Command::Advance(reply) => self.answer(reply, Keeper::advance),
                Command::Claim(limit, reply) => self.answer(reply, |keeper| keeper.claim(limit)),
                Command::Settle(rows, sending, reply) => {
                    self.answer(reply, |keeper| keeper.settle(&rows, &sending))
                }
                Command::Daily(day, to, reply) => {
                    self.answer(reply, |keeper| keeper.change(|pen| pen.daily(day, &to)))
                }
                Command::Hurry(reply) => self.answer(reply, Keeper::hurry),
                Command::NextMessage(reply) => {
                    self.answer(reply, |keeper| keeper.store.next_message())
                }
            };
            if !goes_on {
                return;
            }
            self.publish();
        }
    }

    /// Does one command. `false` where the store failed and the thread has to end.
    fn answer<T>(
        &mut self,
        reply: Reply<T>,
        work: impl FnOnce(&mut Self) -> Result<T, StoreError>,
    ) -> bool {
        let result = work(self);
        let goes_on = match &result {
            Ok(_) | Err(StoreError::NotThere { .. }) => true,
            Err(error) => {
                tracing::error!(%error, "the store failed; the service stops so that it can start afresh");
                false
            }
        };
        // Whoever asked may have gone; what was asked is done either way.
        let _ = reply.send(result);
        goes_on
    }

    fn publish(&mut self) {
        let next = self.decider.next_due();
        self.due.send_if_modified(|due| std::mem::replace(due, next) != next);
    }

    /// Now, never before anything that was learned or decided: the wall clock may have been set back.
    pub(super) fn now(&mut self) -> At {
        self.last = self.last.max(self.clock.now());
        self.last
    }

    /// Takes a batch in one transaction; files that the ledger failed on before, each in its own.
    fn files(&mut self, mut batch: Vec<Arrival>) -> Result<Tally, StoreError> {
        if !self.suspects.any(&batch) {
            return self.portion(&batch);
        }
        let mut tally = Tally::default();
        for arrival in &mut batch {
            self.suspects.judge(arrival);
            tally.add(self.portion(std::slice::from_ref(arrival))?);
        }
        self.suspects.clear(&batch)?;
        Ok(tally)
    }

    fn portion(&mut self, batch: &[Arrival]) -> Result<Tally, StoreError> {
        let work = AssertUnwindSafe(|| {
            self.change(|pen| batch.iter().try_for_each(|arrival| pen.arrival(arrival)))
        });
        // What a panic leaves behind is never used again: the ledger stops.
        let result = catch_unwind(work).unwrap_or(Err(StoreError::Stopped));
        match &result {
            Ok(_) => {}
            Err(error) if error.is_the_disk() => {}
            Err(_) => self.suspects.blame(batch)?,
        }
        result
    }

    fn learn(&mut self, drafts: Vec<Draft>) -> Result<Tally, StoreError> {
        self.change(|pen| drafts.into_iter().try_for_each(|draft| pen.fact(draft, None)))
    }

    pub(super) fn advance(&mut self) -> Result<Tally, StoreError> {
        if self.decider.next_due().is_none_or(|due| due > self.clock.now().max(self.last)) {
            return Ok(Tally::default());
        }
        self.change(|pen| {
            let decisions = pen.decider.advance(pen.now);
            pen.decisions(&decisions, None)
        })
    }

    /// Gathers digests where one person would get many messages at once, then claims.
    fn claim(&mut self, limit: usize) -> Result<Vec<Outgoing>, StoreError> {
        let mut claimed = Vec::new();
        self.change(|pen| {
            for crowd in pen.change.crowded(DIGEST_FROM)? {
                pen.digest(&crowd)?;
            }
            claimed = pen.change.claim(limit)?;
            Ok(())
        })?;
        Ok(claimed)
    }

    fn settle(&mut self, rows: &[i64], sending: &Sending) -> Result<(), StoreError> {
        self.change(|pen| {
            for &row in rows {
                let (alert, step, recipient) = pen.change.settle(row, sending)?;
                let Some(alert) = alert else { continue };
                let body = match sending {
                    Sending::Sent { .. } => Body::Told { alert, step, recipient },
                    Sending::Refused { .. } => Body::Refused { alert, step, recipient },
                    Sending::Waiting { .. } => continue,
                };
                let source = Source::Service;
                pen.fact(Draft { occurred_at: None, source, patient: None, body }, None)?;
            }
            Ok(())
        })
        .map(|_| ())
    }

    fn hurry(&mut self) -> Result<usize, StoreError> {
        let now = self.now();
        let change = self.store.write(now)?;
        let hurried = change.hurry()?;
        change.commit()?;
        Ok(hurried)
    }

    fn put_in_force(&mut self, kind: TextKind, text: String) -> Result<bool, StoreError> {
        let hash = ContentHash::of(text.as_bytes());
        if self.known.in_force(kind) == Some(&hash) {
            return Ok(false);
        }
        self.shelf.0.insert(hash.clone(), text.clone());
        let body = match kind {
            TextKind::Protocol => Body::ProtocolInForce(hash),
            TextKind::Medicines => Body::MedicinesInForce(hash),
            TextKind::Codes => Body::CodesInForce(hash),
        };
        self.change(|pen| {
            pen.change.text(kind, &text)?;
            pen.fact(
                Draft { occurred_at: None, source: Source::Service, patient: None, body },
                None,
            )
        })?;
        Ok(true)
    }

    fn trouble(&mut self, trouble: Trouble, present: bool) -> Result<bool, StoreError> {
        if self.known.is_in_trouble(trouble) == present {
            return Ok(false);
        }
        let body = Body::Service { trouble, present };
        self.learn(vec![Draft {
            occurred_at: None,
            source: Source::Service,
            patient: None,
            body,
        }])?;
        Ok(true)
    }

    /// One transaction around `work`.
    pub(super) fn change(
        &mut self,
        work: impl FnOnce(&mut Pen<'_, '_>) -> Result<(), StoreError>,
    ) -> Result<Tally, StoreError> {
        let now = self.now();
        let Keeper { store, decider, known, shelf, domain, render, mail, .. } = self;
        let change = store.write(now)?;
        let mut pen = Pen {
            change: &change,
            now,
            decider,
            known,
            shelf,
            domain,
            render,
            tally: Tally::default(),
        };
        work(&mut pen)?;
        let tally = pen.tally;
        change.commit()?;
        tally.wake(mail);
        Ok(tally)
    }
}
