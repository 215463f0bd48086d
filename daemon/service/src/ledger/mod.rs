//! The ledger: the one thread that learns facts, has them decided, and writes both in one transaction.
//!
//! It owns the decider and the store's only read-write connection, so that the order in which facts are decided is
//! the order in which they are stored. Commands come in, replies go out. When a transaction fails the decider is ahead
//! of the disk, so the ledger stops for good: the supervisor starts the service again, and folding what is on the disk
//! gives the state that goes with it.

mod fold;
mod keeper;
mod known;
mod pen;
mod suspects;

pub use fold::Folded;

use crate::clock::Clock;
use crate::store::outbox::{Outgoing, Sending};
use crate::store::{Day, Held, Seen, StoreError, StorePath, TextKind, What};
use chrono::NaiveDate;
use ebbmark_formats::BadRow;
use ebbmark_rules::alert::Notice;
use ebbmark_rules::fact::{At, Body, Description, Source, Trouble};
use ebbmark_rules::ids::{ContentHash, PatientId, Private};
use ebbmark_rules::protocol::Protocol;
use keeper::Keeper;
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

/// What a message is made of.
#[derive(Debug, Clone, Copy)]
pub struct Post<'a> {
    /// What is to be told.
    pub notice: &'a Notice,
    /// To whom.
    pub recipient: &'a Private,
    /// The message's identity, without angle brackets.
    pub message_id: &'a str,
    /// The patient's name, if the chart has one; whether it may be shown is the site's choice.
    pub name: Option<&'a Private>,
}

/// A message to be made.
#[derive(Debug, Clone, Copy)]
pub enum Sheet<'a> {
    /// About one notice.
    Letter(Post<'a>),
    /// About many notices to one person.
    Digest(Envelope<'a>, &'a [Post<'a>]),
    /// That the service is alive, and how its day was.
    Daily(Envelope<'a>, &'a Day, Option<&'a Protocol>),
}

/// What a message that is not about one notice is called, and to whom it goes.
#[derive(Debug, Clone, Copy)]
pub struct Envelope<'a> {
    /// To whom: an address.
    pub recipient: &'a Private,
    /// The message's identity, without angle brackets.
    pub message_id: &'a str,
    /// As of when.
    pub at: At,
}

/// Makes the whole message, headers and all. Pure: the same sheet gives the same bytes.
pub type Render = Box<dyn Fn(&Sheet<'_>) -> Vec<u8> + Send>;

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
    Settle(Vec<i64>, Sending, Reply<()>),
    Hurry(Reply<usize>),
    Daily(NaiveDate, Vec<Private>, Reply<Tally>),
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

    /// Records how a claimed message ended, for each of its rows. `Sent` and `Refused` become facts in the same
    /// transaction.
    ///
    /// # Errors
    /// The message was not claimed, or the ledger has stopped or stops now.
    pub async fn settle(&self, rows: Vec<i64>, sending: Sending) -> Result<(), StoreError> {
        self.ask(|reply| Command::Settle(rows, sending, reply)).await
    }

    /// Posts the day's message to these recipients, unless it is posted already.
    ///
    /// # Errors
    /// The ledger has stopped or stops now.
    pub async fn daily(&self, day: NaiveDate, to: Vec<Private>) -> Result<Tally, StoreError> {
        self.ask(|reply| Command::Daily(day, to, reply)).await
    }

    /// Lets every message that waits go now: the server takes mail again. Gives how many.
    ///
    /// # Errors
    /// The ledger has stopped or stops now.
    pub async fn hurry(&self) -> Result<usize, StoreError> {
        self.ask(Command::Hurry).await
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
