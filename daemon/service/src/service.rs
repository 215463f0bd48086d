//! The running service: its parts, how they start, and how they stop in phases.
//!
//! ```text
//! intake thread ---> ledger thread <--- delivery
//!                      ^      ^
//!                 deadlines  watch over disk and liveness
//! ```

use crate::clock::Clock;
use crate::delivery;
use crate::intake::{Intake, Pass, Waker, wakes};
use crate::ledger::{Folded, Ledger, Parts, Render};
use crate::rulebooks::Rulebooks;
use crate::settings::{Problems, Settings};
use crate::store::{StoreError, StorePath};
use ebbmark_rules::fact::Trouble;
use std::path::PathBuf;
use std::sync::Arc;
use std::sync::atomic::{AtomicU64, Ordering};
use std::thread::JoinHandle;
use std::time::{Duration, Instant};
use tokio::sync::watch;
use tokio_util::sync::CancellationToken;
use tokio_util::task::TaskTracker;

/// What a service is started with.
pub struct Setup {
    /// Checked settings.
    pub settings: Settings,
    /// The file that they came from, to be read again when asked.
    pub settings_file: PathBuf,
    /// What time it is.
    pub clock: Clock,
    /// How messages are made.
    pub render: Render,
}

impl std::fmt::Debug for Setup {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        f.debug_struct("Setup").field("settings_file", &self.settings_file).finish_non_exhaustive()
    }
}

/// Why a service did not start.
#[derive(Debug, thiserror::Error)]
pub enum StartError {
    /// No protocol or medicine list is in force, and what is on the disk is wrong.
    #[error("{}", .0.iter().map(ToString::to_string).collect::<Vec<_>>().join("\n"))]
    Rulebooks(Vec<Problems>),
    /// The store can't be opened or written.
    #[error(transparent)]
    Store(#[from] StoreError),
    /// A thread can't be started.
    #[error("cannot start the reading threads: {0}")]
    Threads(String),
}

/// A running service.
#[derive(Debug)]
pub struct Service {
    ledger: Ledger,
    ledger_thread: JoinHandle<()>,
    intake_thread: JoinHandle<Result<(), StoreError>>,
    settings: watch::Sender<Arc<Settings>>,
    settings_file: PathBuf,
    waker: Waker,
    tasks: TaskTracker,
    /// Phase one: nothing new is taken in, no message is claimed.
    stop: CancellationToken,
    intake_ended: CancellationToken,
    folded: Folded,
    pulse: Arc<Pulse>,
}

/// Signs of life of the intake.
#[derive(Debug)]
pub struct Pulse {
    started: Instant,
    last_ms: AtomicU64,
    passes: watch::Sender<(u64, Pass)>,
}

impl Pulse {
    fn beat(&self, pass: Pass) {
        let now = u64::try_from(self.started.elapsed().as_millis()).unwrap_or(u64::MAX);
        self.last_ms.store(now, Ordering::Relaxed);
        self.passes.send_modify(|(count, last)| {
            *count += 1;
            *last = pass;
        });
    }

    /// How long ago the intake last ended a pass.
    pub fn age(&self) -> Duration {
        self.started
            .elapsed()
            .saturating_sub(Duration::from_millis(self.last_ms.load(Ordering::Relaxed)))
    }

    /// The number of passes so far and what the last one did, as they end.
    pub fn passes(&self) -> watch::Receiver<(u64, Pass)> {
        self.passes.subscribe()
    }
}

/// How often disk and liveness are looked at.
const LOOK_EVERY: Duration = Duration::from_secs(20);
/// A pass over a large folder with a full portion takes seconds; without one for this long the intake hangs.
const DEAF_AFTER: Duration = Duration::from_secs(300);
/// How long the parts may take to end what they are at.
const STOP_WITHIN: Duration = Duration::from_secs(100);

impl Service {
    /// Starts all parts: folds the store, puts the rulebooks in force, then looks at the folder.
    ///
    /// # Errors
    /// The store can't be used, or there are no rules to decide by.
    pub async fn start(setup: Setup) -> Result<Service, StartError> {
        let Setup { settings, settings_file, clock, render } = setup;
        let path = StorePath::new(&settings.folders.store);
        let parts = Parts {
            path: path.clone(),
            clock: clock.clone(),
            domain: settings.mail_domain().to_owned(),
            render,
        };
        let (ledger, folded, ledger_thread) =
            tokio::task::spawn_blocking(move || Ledger::start(parts))
                .await
                .unwrap_or(Err(StoreError::Stopped))?;
        log_fold(&folded);
        match Rulebooks::read(&settings.folders) {
            Ok(books) => {
                books.put_in_force(&ledger, &settings.codes).await?;
                ledger.trouble(Trouble::Settings, false).await?;
            }
            Err(problems) if folded.protocol && folded.medicines => {
                log_problems(&problems);
                ledger.trouble(Trouble::Settings, true).await?;
            }
            Err(problems) => return Err(StartError::Rulebooks(problems)),
        }

        let (settings, settings_out) = watch::channel(Arc::new(settings));
        let (waker, wakes) = wakes();
        let stop = CancellationToken::new();
        let intake_ended = CancellationToken::new();
        let pulse = Arc::new(Pulse {
            started: Instant::now(),
            last_ms: AtomicU64::new(0),
            passes: watch::Sender::new((0, Pass::default())),
        });
        let mut intake =
            Intake::new(settings_out.clone(), ledger.clone(), path, clock.clone(), waker.clone())
                .map_err(|error| StartError::Threads(error.to_string()))?;
        let intake_thread = std::thread::Builder::new()
            .name("intake".to_owned())
            .spawn({
                let (stop, pulse) = (stop.clone(), Arc::clone(&pulse));
                let ended = intake_ended.clone().drop_guard();
                move || {
                    // Cancelled also when this thread panics.
                    let _ended = ended;
                    let result = intake.run(&wakes, &stop, &|pass| pulse.beat(pass));
                    if let Err(error) = &result {
                        tracing::error!(%error, "the intake stopped");
                    }
                    result
                }
            })
            .map_err(|error| StartError::Threads(error.to_string()))?;

        let tasks = TaskTracker::new();
        tasks.spawn(deadlines(ledger.clone(), clock.clone(), stop.clone()));
        tasks.spawn(deliver(ledger.clone(), settings_out.clone(), clock.clone(), stop.clone()));
        tasks.spawn(say_daily(ledger.clone(), settings_out.clone(), clock, stop.clone()));
        let store = settings_out.borrow().folders.store.clone();
        tasks.spawn(crate::answers::take_up(ledger.clone(), store, stop.clone()));
        tasks.spawn(look_after(ledger.clone(), settings_out, stop.clone()));
        tasks.close();
        Ok(Service {
            ledger,
            ledger_thread,
            intake_thread,
            settings,
            settings_file,
            waker,
            tasks,
            stop,
            intake_ended,
            folded,
            pulse,
        })
    }

    /// The ledger, for whoever has something to say to it.
    pub fn ledger(&self) -> &Ledger {
        &self.ledger
    }

    /// What the start found in the store.
    pub fn folded(&self) -> Folded {
        self.folded
    }

    /// Signs of life of the intake.
    pub fn pulse(&self) -> &Pulse {
        &self.pulse
    }

    /// Wakes the intake, as an event in the folder would.
    pub fn look(&self) {
        self.waker.wake();
    }

    /// Whether every loop still turns: what the watchdog of the supervisor is told of.
    pub async fn is_alive(&self) -> bool {
        let answers = tokio::time::timeout(DEAF_AFTER, self.ledger.advance()).await;
        matches!(answers, Ok(Ok(_)))
            && !self.intake_thread.is_finished()
            && self.pulse.age() < DEAF_AFTER
    }

    /// Reads settings and rulebooks again. What is wrong is logged and raised as a technical alert, and the last good
    /// ones go on. The store's place, the mail sender's domain and the number of readers need a new start.
    ///
    /// # Errors
    /// The store failed.
    pub async fn reload(&self) -> Result<(), StoreError> {
        let read = Settings::read(&self.settings_file).map_err(|problems| vec![problems]);
        let books = read.and_then(|settings| Ok((Rulebooks::read(&settings.folders)?, settings)));
        match books {
            Ok((books, settings)) => {
                if settings.folders.store != self.settings.borrow().folders.store {
                    tracing::warn!(
                        "the store's folder changed in the settings; this takes a new start"
                    );
                }
                let codes = settings.codes.clone();
                self.settings.send_replace(Arc::new(settings));
                books.put_in_force(&self.ledger, &codes).await?;
                self.ledger.trouble(Trouble::Settings, false).await?;
                tracing::info!("settings were read again");
                self.look();
            }
            Err(problems) => {
                log_problems(&problems);
                self.ledger.trouble(Trouble::Settings, true).await?;
            }
        }
        Ok(())
    }

    /// Returns once a part ended by itself, which only happens when the store failed.
    pub async fn failed(&self) {
        tokio::select! {
            () = self.ledger.stopped().cancelled_owned() => {}
            () = self.intake_ended.cancelled() => {}
        }
    }

    /// Stops in phases: the intake ends its portion and messages under way are settled; then the ledger closes the
    /// store.
    ///
    /// # Errors
    /// A part failed earlier, or did not end in time.
    pub async fn stop(self) -> Result<(), StoreError> {
        self.stop.cancel();
        self.waker.wake();
        let deadline = tokio::time::Instant::now() + STOP_WITHIN;
        let intake = self.intake_thread;
        let intake = tokio::task::spawn_blocking(move || intake.join());
        let ended = tokio::time::timeout_at(deadline, async {
            self.tasks.wait().await;
            intake.await
        });
        let result = match ended.await {
            Ok(Ok(Ok(result))) => result,
            Ok(_) => Err(StoreError::Stopped),
            Err(_) => {
                tracing::error!(
                    wait_s = STOP_WITHIN.as_secs(),
                    "a part of the service did not end in time"
                );
                return Err(StoreError::Stopped);
            }
        };
        drop(self.ledger);
        let thread = self.ledger_thread;
        let joined = tokio::task::spawn_blocking(move || thread.join());
        match tokio::time::timeout_at(deadline, joined).await {
            Ok(Ok(Ok(()))) => result,
            _ => Err(StoreError::Stopped),
        }
    }
}

fn log_fold(folded: &Folded) {
    let Folded { facts, stored, folded: again, different, unclaimed, caught_up, .. } = *folded;
    tracing::info!(
        facts,
        decisions = stored,
        unclaimed,
        raised = caught_up.raised,
        posted = caught_up.posted,
        "the store was read"
    );
    if different > 0 {
        tracing::error!(
            stored,
            again,
            different,
            "folding the facts gave other decisions than those that were stored"
        );
    }
}

fn log_problems(problems: &[Problems]) {
    for problem in problems {
        tracing::error!(%problem, "a file is wrong; the last good one goes on");
    }
}

/// Takes deadlines as they fall due.
async fn deadlines(ledger: Ledger, clock: Clock, stop: CancellationToken) {
    let mut due = ledger.due();
    loop {
        let next = *due.borrow_and_update();
        let until = async {
            match next {
                Some(at) => clock.until(at).await,
                None => std::future::pending().await,
            }
        };
        tokio::select! {
            () = stop.cancelled() => return,
            changed = due.changed() => {
                if changed.is_err() {
                    return;
                }
            }
            () = until => match ledger.advance().await {
                Ok(tally) if tally.raised + tally.posted > 0 => {
                    tracing::info!(raised = tally.raised, posted = tally.posted, "deadlines were taken");
                }
                Ok(_) => {}
                // The ledger has logged it and is gone.
                Err(_) => return,
            }
        }
    }
}

/// Delivers, and logs why it ended where it should not have.
async fn deliver(
    ledger: Ledger,
    settings: watch::Receiver<Arc<Settings>>,
    clock: Clock,
    stop: CancellationToken,
) {
    if let Err(error) = delivery::run(ledger, settings, clock, stop).await {
        tracing::error!(%error, "delivery stopped");
    }
}

/// Posts the daily message, and logs why it ended where it should not have.
async fn say_daily(
    ledger: Ledger,
    settings: watch::Receiver<Arc<Settings>>,
    clock: Clock,
    stop: CancellationToken,
) {
    if let Err(error) = delivery::daily::run(ledger, settings, clock, stop).await {
        tracing::error!(%error, "the daily message stopped");
    }
}

/// Watches over the disk.
async fn look_after(
    ledger: Ledger,
    settings: watch::Receiver<Arc<Settings>>,
    stop: CancellationToken,
) {
    loop {
        let folders = settings.borrow().folders.clone();
        match rustix::fs::statvfs(&folders.store) {
            Ok(disk) => {
                let free = disk.f_bavail.saturating_mul(disk.f_frsize);
                let is_low = free < folders.least_free;
                match ledger.trouble(Trouble::Disk, is_low).await {
                    Ok(true) if is_low => {
                        tracing::error!(free_mib = free >> 20, "the disk is nearly full")
                    }
                    Ok(true) => tracing::info!(free_mib = free >> 20, "the disk has room again"),
                    Ok(false) => {}
                    Err(_) => return,
                }
            }
            Err(error) => tracing::warn!(%error, "the disk can't be asked how full it is"),
        }
        tokio::select! {
            () = stop.cancelled() => return,
            () = tokio::time::sleep(LOOK_EVERY) => {}
        }
    }
}
