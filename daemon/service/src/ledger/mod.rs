//! The ledger: the one thread that learns facts, has them decided, and writes both in one transaction.
//!
//! It owns the decider and the store's only read-write connection, so that the order in which facts are decided is
//! the order in which they are stored. Commands come in, replies go out. When a transaction fails the decider is ahead
//! of the disk, so the ledger stops for good: the supervisor starts the service again, and folding what is on the disk
//! gives the state that goes with it.

mod fold;
mod identity;

pub use fold::Folded;

use crate::clock::Clock;
use crate::store::outbox::{Outgoing, Sending, message_id};
use crate::store::{
    Held, Outcome, Seen, Store, StoreError, StorePath, Taken, TextKind, What, Writing,
};
use ebbmark_formats::BadRow;
use ebbmark_rules::alert::{Decision, Notice};
use ebbmark_rules::decide::{Decider, Texts};
use ebbmark_rules::fact::{At, Body, Description, Fact, Source, Trouble};
use ebbmark_rules::ids::{ContentHash, PatientId, Private};
use identity::Identities;
use std::collections::{BTreeMap, BTreeSet};
use std::sync::Arc;
use std::thread::JoinHandle;
use tokio::sync::{Notify, mpsc, oneshot, watch};
use tokio_util::sync::CancellationToken;

/// Something to be learned. The ledger says when it was received.
#[derive(Debug, Clone, PartialEq)]
pub struct Draft {
    /// When it was true; `None` for now.
    pub occurred_at: Option<At>,
    /// Where it came from.
    pub source: Source,
    /// Whom it is about.
    pub patient: Option<PatientId>,
    /// What is known.
    pub body: Body,
}

/// What reading a file gave.
#[derive(Debug)]
pub enum Reading {
    /// One measured tracing.
    Tracing {
        /// What the file says of the patient, to be held against the chart.
        described: Description,
        /// The fact.
        draft: Box<Draft>,
    },
    /// Chart rows.
    Chart {
        /// One for each row that was understood.
        drafts: Vec<Draft>,
        /// The others.
        bad: Vec<BadRow>,
    },
    /// Nothing that can be used.
    Held(What, Held),
    /// Content that was accepted before.
    Repeat,
}

/// A file that was read, with the files that belong to it.
#[derive(Debug)]
pub struct Arrival {
    /// The file.
    pub seen: Seen,
    /// The hash of its content, or of the list of contents where several files make one; `None` where it was not read.
    pub hash: Option<ContentHash>,
    /// The files that belong to it, each with the hash of its own content.
    pub companions: Vec<(Seen, ContentHash)>,
    /// What reading gave.
    pub reading: Reading,
}

/// How many files of a batch ended how.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub struct Tally {
    /// Facts were learned from them.
    pub accepted: usize,
    /// Content that was accepted before.
    pub repeats: usize,
    /// Waiting for a person.
    pub held: usize,
    /// Alerts that were raised.
    pub raised: usize,
    /// Messages that were put in the outbox.
    pub posted: usize,
}

/// Turns a notice into the message for one recipient, given the message's id. Pure: the same notice gives the same
/// bytes.
pub type Render = Box<dyn Fn(&Notice, &Private, &str) -> Vec<u8> + Send>;

/// What the ledger needs of the outside.
pub struct Parts {
    /// Where the store is.
    pub path: StorePath,
    /// What time it is.
    pub clock: Clock,
    /// The domain of message ids.
    pub domain: String,
    /// How messages are made.
    pub render: Render,
}

impl std::fmt::Debug for Parts {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        f.debug_struct("Parts").field("path", &self.path).finish_non_exhaustive()
    }
}

/// A handle on the ledger's thread. Clones speak to the same ledger.
#[derive(Debug, Clone)]
pub struct Ledger {
    commands: mpsc::Sender<Command>,
    due: watch::Receiver<Option<At>>,
    mail: Arc<Notify>,
    stopped: CancellationToken,
}

type Reply<T> = oneshot::Sender<Result<T, StoreError>>;

enum Command {
    Files(Vec<Arrival>, Reply<Tally>),
    Learn(Vec<Draft>, Reply<Tally>),
    Force(TextKind, String, Reply<bool>),
    Trouble(Trouble, bool, Reply<bool>),
    Advance(Reply<Tally>),
    Claim(usize, Reply<Vec<Outgoing>>),
    Settle(i64, Sending, Reply<()>),
    NextMessage(Reply<Option<At>>),
}

impl std::fmt::Debug for Command {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        f.write_str("Command")
    }
}

/// Commands that may wait; whoever has more to say waits too.
const QUEUE: usize = 64;

impl Ledger {
    /// Opens the store, folds what it holds, catches up with the deadlines that fell due meanwhile, and starts the
    /// thread. The thread ends when the last handle is dropped.
    ///
    /// # Errors
    /// The store can't be opened or read.
    pub fn start(parts: Parts) -> Result<(Ledger, Folded, JoinHandle<()>), StoreError> {
        let (commands, inbox) = mpsc::channel(QUEUE);
        let (due_in, due) = watch::channel(None);
        let mail = Arc::new(Notify::new());
        let stopped = CancellationToken::new();
        let (mut keeper, folded) = Keeper::open(parts, due_in, Arc::clone(&mail))?;
        let thread = std::thread::Builder::new()
            .name("ledger".to_owned())
            .spawn({
                let stopped = stopped.clone().drop_guard();
                move || {
                    // Cancelled also when this thread panics.
                    let _stopped = stopped;
                    keeper.run(inbox);
                }
            })
            .map_err(|source| StoreError::Io {
                doing: "start a thread for",
                path: "ledger".into(),
                source,
            })?;
        Ok((Ledger { commands, due, mail, stopped }, folded, thread))
    }

    async fn ask<T>(&self, command: impl FnOnce(Reply<T>) -> Command) -> Result<T, StoreError> {
        let (reply, answer) = oneshot::channel();
        self.commands.send(command(reply)).await.map_err(|_| StoreError::Stopped)?;
        answer.await.map_err(|_| StoreError::Stopped)?
    }

    /// Takes a batch of files in one transaction. For threads outside the async runtime.
    ///
    /// # Errors
    /// The ledger has stopped or stops now; none of the batch was taken.
    pub fn files(&self, batch: Vec<Arrival>) -> Result<Tally, StoreError> {
        let (reply, answer) = oneshot::channel();
        self.commands
            .blocking_send(Command::Files(batch, reply))
            .map_err(|_| StoreError::Stopped)?;
        answer.blocking_recv().map_err(|_| StoreError::Stopped)?
    }

    /// Learns facts that did not come from a file, in one transaction.
    ///
    /// # Errors
    /// The ledger has stopped or stops now; none was learned.
    pub async fn learn(&self, drafts: Vec<Draft>) -> Result<Tally, StoreError> {
        self.ask(|reply| Command::Learn(drafts, reply)).await
    }

    /// Stores a text and puts it in force, unless it is in force already. `true` where that changed anything.
    ///
    /// # Errors
    /// The ledger has stopped or stops now.
    pub async fn put_in_force(&self, kind: TextKind, text: String) -> Result<bool, StoreError> {
        self.ask(|reply| Command::Force(kind, text, reply)).await
    }

    /// Says that something of the service is in trouble or well; `true` where that is news.
    ///
    /// # Errors
    /// The ledger has stopped or stops now.
    pub async fn trouble(&self, trouble: Trouble, present: bool) -> Result<bool, StoreError> {
        self.ask(|reply| Command::Trouble(trouble, present, reply)).await
    }

    /// As [`Ledger::trouble`], for threads outside the async runtime.
    ///
    /// # Errors
    /// The ledger has stopped or stops now.
    pub fn trouble_blocking(&self, trouble: Trouble, present: bool) -> Result<bool, StoreError> {
        let (reply, answer) = oneshot::channel();
        self.commands
            .blocking_send(Command::Trouble(trouble, present, reply))
            .map_err(|_| StoreError::Stopped)?;
        answer.blocking_recv().map_err(|_| StoreError::Stopped)?
    }

    /// Takes the deadlines that are due by now.
    ///
    /// # Errors
    /// The ledger has stopped or stops now.
    pub async fn advance(&self) -> Result<Tally, StoreError> {
        self.ask(Command::Advance).await
    }

    /// Claims up to `limit` messages that are due; the claim is on the disk when this returns.
    ///
    /// # Errors
    /// The ledger has stopped or stops now.
    pub async fn claim(&self, limit: usize) -> Result<Vec<Outgoing>, StoreError> {
        self.ask(|reply| Command::Claim(limit, reply)).await
    }

    /// Records how a claimed message ended. `Sent` and `Refused` become facts in the same transaction.
    ///
    /// # Errors
    /// The message was not claimed, or the ledger has stopped or stops now.
    pub async fn settle(&self, id: i64, sending: Sending) -> Result<(), StoreError> {
        self.ask(|reply| Command::Settle(id, sending, reply)).await
    }

    /// When the next message is due, if any waits.
    ///
    /// # Errors
    /// The ledger has stopped.
    pub async fn next_message(&self) -> Result<Option<At>, StoreError> {
        self.ask(Command::NextMessage).await
    }

    /// Woken whenever a message was put in the outbox.
    pub fn mail(&self) -> Arc<Notify> {
        Arc::clone(&self.mail)
    }

    /// The decider's next deadline, as it changes.
    pub fn due(&self) -> watch::Receiver<Option<At>> {
        self.due.clone()
    }

    /// Cancelled once the ledger has ended, whether asked to or because the store failed.
    pub fn stopped(&self) -> CancellationToken {
        self.stopped.clone()
    }
}

/// The thread's own state.
struct Keeper {
    store: Store,
    clock: Clock,
    decider: Decider,
    identities: Identities,
    shelf: Shelf,
    in_force: BTreeMap<&'static str, ContentHash>,
    troubles: BTreeSet<Trouble>,
    domain: String,
    render: Render,
    last: At,
    due: watch::Sender<Option<At>>,
    mail: Arc<Notify>,
}

/// The texts that facts put in force.
#[derive(Debug, Default)]
struct Shelf(BTreeMap<ContentHash, String>);

impl Texts for Shelf {
    fn text(&self, hash: &ContentHash) -> Option<&str> {
        self.0.get(hash).map(String::as_str)
    }
}

impl Keeper {
    fn open(
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
            identities: Identities::default(),
            shelf: Shelf::default(),
            in_force: BTreeMap::new(),
            troubles: BTreeSet::new(),
            domain,
            render,
            last: At::UNIX_EPOCH,
            due,
            mail,
        };
        let folded = keeper.fold(&path)?;
        Ok((keeper, folded))
    }

    fn run(&mut self, mut inbox: mpsc::Receiver<Command>) {
        self.publish();
        while let Some(command) = inbox.blocking_recv() {
            let goes_on = match command {
                Command::Files(batch, reply) => self.answer(reply, |keeper| keeper.files(&batch)),
                Command::Learn(drafts, reply) => self.answer(reply, |keeper| keeper.learn(drafts)),
                Command::Force(kind, text, reply) => {
                    self.answer(reply, |keeper| keeper.put_in_force(kind, text))
                }
                Command::Trouble(trouble, present, reply) => {
                    self.answer(reply, |keeper| keeper.trouble(trouble, present))
                }
                Command::Advance(reply) => self.answer(reply, Keeper::advance),
                Command::Claim(limit, reply) => self.answer(reply, |keeper| keeper.claim(limit)),
                Command::Settle(id, sending, reply) => {
                    self.answer(reply, |keeper| keeper.settle(id, &sending))
                }
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
    fn now(&mut self) -> At {
        self.last = self.last.max(self.clock.now());
        self.last
    }

    fn files(&mut self, batch: &[Arrival]) -> Result<Tally, StoreError> {
        self.change(|pen| batch.iter().try_for_each(|arrival| pen.arrival(arrival)))
    }

    fn learn(&mut self, drafts: Vec<Draft>) -> Result<Tally, StoreError> {
        self.change(|pen| drafts.into_iter().try_for_each(|draft| pen.fact(draft, None)))
    }

    fn advance(&mut self) -> Result<Tally, StoreError> {
        if self.decider.next_due().is_none_or(|due| due > self.clock.now().max(self.last)) {
            return Ok(Tally::default());
        }
        self.change(|pen| {
            let decisions = pen.decider.advance(pen.now);
            pen.decisions(&decisions, None)
        })
    }

    fn claim(&mut self, limit: usize) -> Result<Vec<Outgoing>, StoreError> {
        let now = self.now();
        let change = self.store.write(now)?;
        let claimed = change.claim(limit)?;
        change.commit()?;
        Ok(claimed)
    }

    fn settle(&mut self, id: i64, sending: &Sending) -> Result<(), StoreError> {
        self.change(|pen| {
            let (alert, step, recipient) = pen.change.settle(id, sending)?;
            let body = match sending {
                Sending::Sent { .. } => Body::Told { alert, step, recipient },
                Sending::Refused { .. } => Body::Refused { alert, step, recipient },
                Sending::Waiting { .. } => return Ok(()),
            };
            pen.fact(
                Draft { occurred_at: None, source: Source::Service, patient: None, body },
                None,
            )
        })
        .map(|_| ())
    }

    fn put_in_force(&mut self, kind: TextKind, text: String) -> Result<bool, StoreError> {
        let hash = ContentHash::of(text.as_bytes());
        if self.in_force.get(kind.word()) == Some(&hash) {
            return Ok(false);
        }
        self.shelf.0.insert(hash.clone(), text.clone());
        self.in_force.insert(kind.word(), hash.clone());
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
        if self.troubles.contains(&trouble) == present {
            return Ok(false);
        }
        let body = Body::Service { trouble, present };
        self.learn(vec![Draft {
            occurred_at: None,
            source: Source::Service,
            patient: None,
            body,
        }])?;
        if present {
            self.troubles.insert(trouble);
        } else {
            self.troubles.remove(&trouble);
        }
        Ok(true)
    }

    /// One transaction around `work`.
    fn change(
        &mut self,
        work: impl FnOnce(&mut Pen<'_, '_>) -> Result<(), StoreError>,
    ) -> Result<Tally, StoreError> {
        let now = self.now();
        let Keeper { store, decider, identities, shelf, domain, render, mail, .. } = self;
        let change = store.write(now)?;
        let mut pen = Pen {
            change: &change,
            now,
            decider,
            identities,
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

impl Tally {
    /// Counts another batch in.
    pub fn add(&mut self, other: Tally) {
        self.accepted += other.accepted;
        self.repeats += other.repeats;
        self.held += other.held;
        self.raised += other.raised;
        self.posted += other.posted;
    }

    fn wake(&self, mail: &Notify) {
        if self.posted > 0 {
            mail.notify_one();
        }
    }
}

/// What writes within one transaction.
struct Pen<'a, 'store> {
    change: &'a Writing<'store>,
    now: At,
    decider: &'a mut Decider,
    identities: &'a mut Identities,
    shelf: &'a Shelf,
    domain: &'a str,
    render: &'a Render,
    tally: Tally,
}

impl Pen<'_, '_> {
    fn arrival(&mut self, arrival: &Arrival) -> Result<(), StoreError> {
        let known = match &arrival.hash {
            Some(hash) => self.change.is_accepted(hash)?,
            None => false,
        };
        let (outcome, drafts) = match &arrival.reading {
            Reading::Repeat => (Outcome::Repeat, [].as_slice()),
            _ if known => (Outcome::Repeat, [].as_slice()),
            Reading::Held(what, reason) => (Outcome::Held(*what, reason.clone()), [].as_slice()),
            Reading::Tracing { described, draft } => {
                match self.identities.disagree(draft.patient.as_ref(), described) {
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
    fn fact(&mut self, draft: Draft, file: Option<i64>) -> Result<(), StoreError> {
        let Draft { occurred_at, source, patient, body } = draft;
        let occurred_at = occurred_at.unwrap_or(self.now);
        let fact = Fact { occurred_at, received_at: self.now, source, patient, body };
        let Some(seq) = self.change.fact(&fact, file)? else { return Ok(()) };
        self.identities.learn(&fact);
        let decisions = self.decider.take(&fact, self.shelf);
        self.decisions(&decisions, Some(seq))
    }

    fn decisions(&mut self, decisions: &[Decision], fact: Option<i64>) -> Result<(), StoreError> {
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

    fn post(&mut self, notice: &Notice) -> Result<(), StoreError> {
        for recipient in &notice.recipients {
            let id = message_id(&notice.alert.id, notice.step, recipient, self.domain);
            let bytes = (self.render)(notice, recipient, &id);
            self.change.post(notice, recipient, &id, &bytes)?;
            self.tally.posted += 1;
        }
        Ok(())
    }
}
