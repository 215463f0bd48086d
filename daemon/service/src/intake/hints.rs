//! Events of the file system, taken as hints only: they wake a scan, and nothing depends on any of them.

use notify::event::{AccessKind, AccessMode};
use notify::{Config, Event, EventKind, RecommendedWatcher, RecursiveMode, Watcher};
use std::path::Path;
use std::sync::mpsc::{Receiver, RecvTimeoutError, SyncSender, sync_channel};
use std::time::Duration;

/// Wakes whoever waits on the other end; waking twice before it looked is waking once.
#[derive(Debug, Clone)]
pub struct Waker(SyncSender<()>);

impl Waker {
    /// Wakes the intake.
    pub fn wake(&self) {
        // Full: it is awake already. Closed: it has ended.
        let _ = self.0.try_send(());
    }
}

/// The end on which the intake waits.
#[derive(Debug)]
pub struct Wakes(Receiver<()>);

impl Wakes {
    /// Waits until woken, or for as long as `most`. `false` once nobody can wake it any more.
    pub fn wait(&self, most: Duration) -> bool {
        !matches!(self.0.recv_timeout(most), Err(RecvTimeoutError::Disconnected))
    }
}

/// A pair of ends.
pub fn wakes() -> (Waker, Wakes) {
    let (sender, receiver) = sync_channel(1);
    (Waker(sender), Wakes(receiver))
}

/// Watches the folder for as long as what it gives is kept. `None` where the system won't: scans go on by the clock.
pub(super) fn watch(folder: &Path, waker: &Waker) -> Option<RecommendedWatcher> {
    let waker = waker.clone();
    let hear = move |event: notify::Result<Event>| {
        // An error, an overflow and an event of an unknown kind all mean: look.
        if event.map_or(true, |event| matters(&event)) {
            waker.wake();
        }
    };
    let watcher = RecommendedWatcher::new(hear, Config::default()).and_then(|mut watcher| {
        watcher.watch(folder, RecursiveMode::Recursive)?;
        Ok(watcher)
    });
    watcher
        .inspect_err(|error| tracing::warn!(kind = ?error.kind, "the export folder can't be watched; it is looked at by the clock"))
        .ok()
}

/// Our own reading makes access events; they must not wake us, or each look would lead to the next.
fn matters(event: &Event) -> bool {
    match event.kind {
        EventKind::Access(kind) => kind == AccessKind::Close(AccessMode::Write),
        EventKind::Any
        | EventKind::Create(_)
        | EventKind::Modify(_)
        | EventKind::Remove(_)
        | EventKind::Other => true,
    }
}
