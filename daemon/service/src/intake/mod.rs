//! Intake: what lies in the export folder is found, left to settle, read once, and handed to the ledger.
//!
//! Events wake, scans decide: a start, a tick and an event run the same pass. The folder is never written to. A file
//! ends as accepted, as a repeat or as held; one that can't be read yet is looked at again in a later pass.

mod facts;
mod hints;
pub mod open;
mod pairs;
mod portion;
pub mod scan;
pub mod settle;

pub use hints::{Waker, Wakes, wakes};

use crate::clock::Clock;
use crate::ledger::{Ledger, Tally};
use crate::settings::Settings;
use crate::store::{Reader, StoreError, StorePath};
use ebbmark_rules::fact::Trouble;
use notify::RecommendedWatcher;
use rayon::{ThreadPool, ThreadPoolBuildError, ThreadPoolBuilder};
use scan::scan;
use settle::Settling;
use std::io;
use std::sync::Arc;
use std::time::{Duration, Instant};
use tokio::sync::watch;
use tokio_util::sync::CancellationToken;

/// The most files of one pass; the rest comes in the next, which follows at once. Bounds memory.
const MOST: usize = 4_096;

/// The shortest time from one look to the next: a storm of events is not a storm of scans.
const BREATH: Duration = Duration::from_millis(50);

/// The intake's state from pass to pass.
#[derive(Debug)]
pub struct Intake {
    settings: watch::Receiver<Arc<Settings>>,
    ledger: Ledger,
    store: StorePath,
    clock: Clock,
    settling: Settling,
    workers: ThreadPool,
    started: Instant,
    passes: u64,
    root: Option<Root>,
    waker: Waker,
}

/// The folder that is being watched, by its number: another one under the same name is another folder.
#[derive(Debug)]
struct Root {
    inode: u64,
    device: u64,
    _watcher: Option<RecommendedWatcher>,
}

/// What one pass did.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub struct Pass {
    /// What became of the files that were taken.
    pub tally: Tally,
    /// Files that are waited for.
    pub waiting: usize,
    /// Files that were not looked at yet.
    pub more: u64,
    /// The folder could not be looked at.
    pub blind: bool,
}

/// Why a pass ended early.
#[derive(Debug, thiserror::Error)]
enum Ends {
    #[error(transparent)]
    Store(#[from] StoreError),
    #[error(transparent)]
    Folder(#[from] io::Error),
}

impl Intake {
    /// An intake that has seen nothing yet.
    ///
    /// # Errors
    /// The threads that read and measure can't be started.
    pub fn new(
        settings: watch::Receiver<Arc<Settings>>,
        ledger: Ledger,
        store: StorePath,
        clock: Clock,
        waker: Waker,
    ) -> Result<Self, ThreadPoolBuildError> {
        let now = settings.borrow().intake.clone();
        let workers = ThreadPoolBuilder::new()
            .num_threads(now.workers.unwrap_or(0))
            .thread_name(|number| format!("reader-{number}"))
            .build()?;
        Ok(Self {
            settings,
            ledger,
            store,
            clock,
            settling: Settling::new(now.settle),
            workers,
            started: Instant::now(),
            passes: 0,
            root: None,
            waker,
        })
    }

    /// Passes until asked to stop; a pass that has begun ends with the portion that it is in.
    ///
    /// # Errors
    /// The store failed.
    pub fn run(
        &mut self,
        wakes: &Wakes,
        stop: &CancellationToken,
        pulse: &dyn Fn(Pass),
    ) -> Result<(), StoreError> {
        while !stop.is_cancelled() {
            let pass = self.pass(stop)?;
            pulse(pass);
            if stop.is_cancelled() {
                break;
            }
            std::thread::sleep(BREATH);
            let wait = if pass.more > 0 && pass.tally != Tally::default() {
                Duration::ZERO
            } else {
                self.wait()
            };
            if !wakes.wait(wait) {
                break;
            }
        }
        Ok(())
    }

    /// How long nothing needs to be looked at.
    fn wait(&self) -> Duration {
        let now = self.started.elapsed();
        let every = self.settings.borrow().intake.scan_every;
        self.settling.next(now).map_or(every, |next| every.min(next.saturating_sub(now)))
    }

    /// One look at the whole folder, and everything that has settled taken in.
    ///
    /// # Errors
    /// The store failed.
    pub fn pass(&mut self, stop: &CancellationToken) -> Result<Pass, StoreError> {
        self.passes += 1;
        let settings = Arc::clone(&self.settings.borrow());
        self.settling.still_for(settings.intake.settle);
        match self.look(&settings, stop) {
            Ok(pass) => {
                if self.ledger.trouble_blocking(Trouble::Folder, false)? {
                    tracing::info!("the export folder is there again");
                }
                Ok(pass)
            }
            Err(Ends::Folder(error)) => {
                self.root = None;
                if self.ledger.trouble_blocking(Trouble::Folder, true)? {
                    tracing::error!(kind = %error.kind(), "the export folder can't be looked at");
                }
                Ok(Pass { blind: true, ..Pass::default() })
            }
            Err(Ends::Store(error)) => Err(error),
        }
    }

    fn look(&mut self, settings: &Settings, stop: &CancellationToken) -> Result<Pass, Ends> {
        let root = &settings.folders.export;
        if let Some(marker) = &settings.folders.marker {
            // Without its marker this is the empty place where a share ought to be.
            std::fs::symlink_metadata(root.join(marker))?;
        }
        self.watch(settings)?;

        let reader = Reader::open(&self.store)?;
        let marker = settings.folders.marker.as_deref();
        let found = scan::<Ends>(root, MOST, |seen| {
            Ok(Some(seen.path.as_path()) != marker && !reader.is_known(seen)?)
        })?;
        drop(reader);
        if !found.unread.is_empty() {
            tracing::warn!(
                folders = found.unread.len(),
                "some folders within the export folder can't be listed"
            );
        }

        let now = self.started.elapsed();
        let (settling, pass) = (&mut self.settling, self.passes);
        let settled = found
            .found
            .into_iter()
            .filter(|seen| settling.look(&seen.path, seen.stamp, now, pass))
            .collect();
        self.settling.end_of_pass(pass);
        let jobs = pairs::plan(root, settled, &self.settling, now, settings.intake.pair_wait);
        let tally = self.take(settings, jobs, now, stop)?;
        if tally != Tally::default() {
            let Tally { accepted, repeats, held, raised, posted } = tally;
            tracing::info!(
                accepted,
                repeats,
                held,
                raised,
                posted,
                more = found.more,
                "files were taken in"
            );
        }
        Ok(Pass { tally, waiting: self.settling.len(), more: found.more, blind: false })
    }

    /// Watches the folder that is there now; a folder that replaced another is watched anew.
    fn watch(&mut self, settings: &Settings) -> io::Result<()> {
        use std::os::unix::fs::MetadataExt;
        let there = std::fs::metadata(&settings.folders.export)?;
        let same = self
            .root
            .as_ref()
            .is_some_and(|root| (root.inode, root.device) == (there.ino(), there.dev()));
        if !same {
            if self.root.is_some() {
                tracing::warn!("the export folder was replaced by another");
            }
            let watcher = hints::watch(&settings.folders.export, &self.waker);
            self.root = Some(Root { inode: there.ino(), device: there.dev(), _watcher: watcher });
        }
        Ok(())
    }
}
