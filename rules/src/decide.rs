//! The decider: facts in the order of `received_at` and its own deadlines, decisions out.

use crate::alert::Decision;
use crate::fact::{At, Fact};
use crate::ids::ContentHash;

/// Texts by content hash, so that a decider can put in force what a fact names.
pub trait Texts {
    /// The stored text, if it is there.
    fn text(&self, hash: &ContentHash) -> Option<&str>;
}

/// Everything known, and everything open. A fold over facts; nothing is read from anywhere else.
#[derive(Debug, Clone, Default)]
pub struct Decider {}

impl Decider {
    /// A decider that knows nothing.
    pub fn new() -> Self {
        Self::default()
    }

    /// Takes one fact. Deadlines due at or before its `received_at` must have been taken with
    /// [`Decider::advance`] first; [`Decider::take`] does both.
    pub fn apply(&mut self, fact: &Fact, texts: &dyn Texts) -> Vec<Decision> {
        let _ = (fact, texts);
        Vec::new()
    }

    /// The next moment at which something is due, whether or not a fact comes.
    pub fn next_due(&self) -> Option<At> {
        None
    }

    /// Takes every deadline due at or before `now`, each as of its own due time, in order.
    pub fn advance(&mut self, now: At) -> Vec<Decision> {
        let _ = now;
        Vec::new()
    }

    /// Deadlines up to the fact's `received_at`, then the fact: the one way in for live, restart and replay.
    pub fn take(&mut self, fact: &Fact, texts: &dyn Texts) -> Vec<Decision> {
        let mut decisions = self.advance(fact.received_at);
        decisions.extend(self.apply(fact, texts));
        decisions
    }
}
