//! What time it is. The only place that asks the machine; everything else asks a [`Clock`].

use ebbmark_rules::fact::At;
use std::sync::Arc;
use std::time::Duration;
use tokio::sync::watch;

/// Where time comes from.
#[derive(Debug, Clone)]
pub enum Clock {
    /// The machine's own.
    System,
    /// Set by hand: tests and the demo ward.
    Manual(Manual),
}

/// A clock that stands still until it is set.
#[derive(Debug, Clone)]
pub struct Manual {
    now: Arc<watch::Sender<At>>,
}

/// A wall clock may be set while we sleep, so no sleep is longer than this without looking again.
const LONGEST_NAP: Duration = Duration::from_secs(15);

impl Clock {
    /// A clock that shows `at` until it is told otherwise, and the handle that sets it.
    pub fn manual(at: At) -> (Clock, Manual) {
        let manual = Manual { now: Arc::new(watch::Sender::new(whole_micros(at))) };
        (Clock::Manual(manual.clone()), manual)
    }

    /// Now, UTC, in whole microseconds: what the store can hold, so that a fact read back is the same fact.
    pub fn now(&self) -> At {
        match self {
            Clock::System => whole_micros(system_now()),
            Clock::Manual(manual) => *manual.now.borrow(),
        }
    }

    /// Returns once the clock shows `at` or later.
    pub async fn until(&self, at: At) {
        match self {
            Clock::System => loop {
                let Ok(wait) = (at - self.now()).to_std() else { return };
                if wait.is_zero() {
                    return;
                }
                tokio::time::sleep(wait.min(LONGEST_NAP)).await;
            },
            Clock::Manual(manual) => {
                let mut now = manual.now.subscribe();
                // The sender lives in `self`, so the channel can't close while this waits.
                let _ = now.wait_for(|now| *now >= at).await;
            }
        }
    }
}

impl Manual {
    /// Sets the time and wakes everyone who waits for it.
    pub fn set(&self, at: At) {
        self.now.send_replace(whole_micros(at));
    }
}

#[allow(clippy::disallowed_methods, reason = "the one place where the machine's clock is read")]
fn system_now() -> At {
    chrono::Utc::now()
}

fn whole_micros(at: At) -> At {
    At::from_timestamp_micros(at.timestamp_micros()).unwrap_or(at)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[tokio::test]
    async fn manual_clock_wakes_who_waits_for_it() {
        let start = At::from_timestamp_micros(0).unwrap();
        let (clock, hand) = Clock::manual(start);
        let due = start + chrono::TimeDelta::hours(3);
        let waiting = tokio::spawn({
            let clock = clock.clone();
            async move { clock.until(due).await }
        });
        hand.set(due);
        tokio::time::timeout(Duration::from_secs(5), waiting).await.unwrap().unwrap();
        assert_eq!(clock.now(), due);
    }
}
