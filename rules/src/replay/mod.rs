//! Replay: stored facts decided again, in the order in which they were received. The code is the decider's own; there is
//! no second one. Under the texts that were in force it gives every decision again; with a candidate protocol it says
//! what would have been otherwise.

mod compare;
mod episode;
mod words;

pub use compare::{Comparison, Pair, Side, TracingMoved, compare};
pub use episode::{Episode, Episodes, Period};

use crate::alert::Decision;
use crate::decide::{Decider, Texts};
use crate::fact::{At, Body, Fact};
use crate::ids::ContentHash;

/// Decides facts again, and then the deadlines up to `until`; `each` sees every decision in order. Facts come in the
/// order of `received_at`, of one moment in the order in which they were stored.
pub fn run<'f>(
    facts: impl IntoIterator<Item = &'f Fact>,
    texts: &dyn Texts,
    until: At,
    mut each: impl FnMut(Decision),
) -> Decider {
    let mut decider = Decider::new();
    for fact in facts.into_iter().take_while(|fact| fact.received_at <= until) {
        decider.take(fact, texts).into_iter().for_each(&mut each);
    }
    decider.advance(until).into_iter().for_each(&mut each);
    decider
}

/// The first place at which decisions taken again differ from those that were stored, counted from 0; `None` where they
/// are the same.
pub fn first_difference(stored: &[Decision], again: &[Decision]) -> Option<usize> {
    let same = stored.iter().zip(again).take_while(|(one, other)| one == other).count();
    (same < stored.len().max(again.len())).then_some(same)
}

/// Stored texts with one more: a candidate that was never in force.
pub(crate) struct With<'t> {
    texts: &'t dyn Texts,
    hash: ContentHash,
    text: &'t str,
}

impl<'t> With<'t> {
    pub(crate) fn new(texts: &'t dyn Texts, text: &'t str) -> Self {
        Self { texts, hash: ContentHash::of(text.as_bytes()), text }
    }

    /// The fact as it would have been, had the candidate been in force whenever a protocol was.
    pub(crate) fn instead(&self, fact: &Fact) -> Option<Fact> {
        matches!(fact.body, Body::ProtocolInForce(_))
            .then(|| Fact { body: Body::ProtocolInForce(self.hash.clone()), ..fact.clone() })
    }
}

impl Texts for With<'_> {
    fn text(&self, hash: &ContentHash) -> Option<&str> {
        if *hash == self.hash { Some(self.text) } else { self.texts.text(hash) }
    }
}
