//! The decider: facts in the order of `received_at` and its own deadlines, decisions out.
//!
//! It never asks what time it is. Live, restart and replay feed it the same facts and get the same decisions.

mod concern;
mod life;

pub use concern::{RuleSays, ask, unknown};

use crate::alert::{Decision, LifeStep};
use crate::fact::{At, Body, Fact, Feed};
use crate::ids::{AlertId, ContentHash, PatientId, Private};
use crate::medicines::MedicineList;
use crate::patient::Patient;
use crate::protocol::Protocol;
use crate::verdict::Basis;
use crate::view::View;
use life::OpenAlert;
use std::collections::{BTreeMap, BTreeSet};
use std::sync::Arc;

/// Texts by content hash, so that a decider can put in force what a fact names.
pub trait Texts {
    /// The stored text, if it is there.
    fn text(&self, hash: &ContentHash) -> Option<&str>;
}

/// Whose alert, and about what. Technical alerts have no patient.
type Key = (Option<PatientId>, String);

/// Everything known, and everything open. A fold over facts; nothing is read from anywhere else.
#[derive(Debug, Clone, Default)]
pub struct Decider {
    protocol: Option<Arc<Protocol>>,
    list: Arc<MedicineList>,
    patients: BTreeMap<PatientId, Patient>,
    /// A merged number and the one that goes on.
    merged: BTreeMap<PatientId, PatientId>,
    open: BTreeMap<Key, OpenAlert>,
    by_id: BTreeMap<AlertId, Key>,
    /// What a person closed: the same facts don't open it again.
    settled: BTreeMap<Key, Settled>,
    /// Whom to look at again when nothing but time has passed.
    look: BTreeMap<PatientId, At>,
    heard: BTreeMap<Feed, At>,
    due: BTreeSet<(At, Due)>,
}

#[derive(Debug, Clone)]
struct Settled {
    rank: usize,
    rests_on: BTreeSet<Basis>,
}

/// What is due.
#[derive(Debug, Clone, PartialEq, Eq, PartialOrd, Ord)]
enum Due {
    Alert(AlertId),
    Look(PatientId),
    Feed(Feed),
}

impl Decider {
    /// A decider that knows nothing. Until a protocol and a medicine list are in force it remembers and decides nothing.
    pub fn new() -> Self {
        Self::default()
    }

    /// Deadlines up to the fact's `received_at`, then the fact: the one way in for live, restart and replay.
    pub fn take(&mut self, fact: &Fact, texts: &dyn Texts) -> Vec<Decision> {
        let mut decisions = self.advance(fact.received_at);
        decisions.extend(self.apply(fact, texts));
        decisions
    }

    /// The next moment at which something is due, whether or not a fact comes.
    pub fn next_due(&self) -> Option<At> {
        self.due.first().map(|(at, _)| *at)
    }

    /// Takes every deadline due at or before `now`, each as of its own due time, in order.
    pub fn advance(&mut self, now: At) -> Vec<Decision> {
        let mut out = Vec::new();
        while let Some((at, due)) = self.due.first().filter(|(at, _)| *at <= now).cloned() {
            self.due.remove(&(at, due.clone()));
            match due {
                Due::Alert(id) => self.alert_due(&id, at, &mut out),
                Due::Look(patient) => {
                    if self.look.get(&patient) == Some(&at) {
                        self.look.remove(&patient);
                        self.look_at(&patient, at, None, &mut out);
                    }
                }
                Due::Feed(feed) => self.feed_due(feed, at, &mut out),
            }
        }
        out
    }

    /// Takes one fact. Deadlines due at or before its `received_at` must have been taken with [`Decider::advance`]
    /// first; [`Decider::take`] does both.
    pub fn apply(&mut self, fact: &Fact, texts: &dyn Texts) -> Vec<Decision> {
        let mut out = Vec::new();
        let at = fact.received_at;
        self.hear(fact, at, &mut out);
        match &fact.body {
            Body::ProtocolInForce(hash) => {
                self.put_in_force(hash, texts, at, &mut out, |decider, text| {
                    decider.protocol =
                        Some(Arc::new(Protocol::parse(text).map_err(|found| found.len())?));
                    Ok(())
                })
            }
            Body::MedicinesInForce(hash) => {
                self.put_in_force(hash, texts, at, &mut out, |decider, text| {
                    decider.list =
                        Arc::new(MedicineList::parse(text).map_err(|found| found.len())?);
                    Ok(())
                })
            }
            // Local codes were applied when a file was read; the fact records which ones.
            Body::CodesInForce(_) => {}
            Body::Feed { feed, silent } => self.feed_is(*feed, *silent, at, &mut out),
            Body::Service { trouble, present } => self.trouble(*trouble, *present, at, &mut out),
            Body::Told { alert, recipient, .. } => self.told(alert, recipient, at, &mut out),
            Body::Refused { alert, recipient, .. } => self.refused(alert, recipient, at, &mut out),
            Body::Acknowledged { alert, by, intent } => {
                self.acknowledged(
                    alert,
                    at,
                    LifeStep::Acknowledged { by: by.as_str().into(), intent: intent.clone() },
                    &mut out,
                );
            }
            Body::Snoozed { alert, by, until, why } => {
                let step =
                    LifeStep::Snoozed { by: by.as_str().into(), until: *until, why: why.clone() };
                self.snoozed(alert, *until, at, step, &mut out);
            }
            Body::HandedOver { alert, by, to } => self.handed_over(alert, by, to, at, &mut out),
            Body::ClosedByPerson { alert, by, why } => {
                let step = LifeStep::ClosedByPerson { by: by.as_str().into(), why: why.clone() };
                self.closed_by_person(alert, at, step, &mut out);
            }
            Body::Merged { into } => self.merge(fact, into, at, &mut out),
            Body::Split => self.split(fact, at, &mut out),
            _ => {
                if let Some(patient) = &fact.patient {
                    let corrects = self.corrects(patient, fact);
                    self.patients.entry(patient.clone()).or_default().take(fact);
                    let root = self.root(patient);
                    self.look_at(&root, at, corrects.as_ref(), &mut out);
                }
            }
        }
        out
    }

    /// What a fact corrects, if it does: something of the same identity was known before.
    fn corrects(&self, patient: &PatientId, fact: &Fact) -> Option<Basis> {
        let known = self.patients.get(patient)?;
        match &fact.body {
            Body::Result(result) => {
                known.knows_result(&result.id).then(|| Basis::Result(result.id.clone()))
            }
            Body::Tracing(tracing) => {
                known.tracing(&tracing.id).map(|_| Basis::Tracing(tracing.id.clone()))
            }
            Body::OverRead(read) => Some(Basis::Tracing(read.tracing.clone())),
            Body::TracingWithdrawn(id) => Some(Basis::Tracing(id.clone())),
            _ => None,
        }
    }

    /// The number under which a merged record goes on.
    fn root(&self, patient: &PatientId) -> PatientId {
        let mut root = patient;
        let mut steps = 0;
        while let Some(next) = self.merged.get(root) {
            root = next;
            steps += 1;
            if steps > self.merged.len() {
                break; // a ring of merges: any of them will do, as long as it is always the same
            }
        }
        root.clone()
    }

    /// The patient with everything known under merged numbers.
    fn whole(&self, root: &PatientId) -> Option<std::borrow::Cow<'_, Patient>> {
        use std::borrow::Cow;
        let mut whole = self.patients.get(root).map(Cow::Borrowed);
        for other in self.merged.keys().filter(|other| *other != root && self.root(other) == *root)
        {
            if let Some(more) = self.patients.get(other) {
                whole.get_or_insert_with(|| Cow::Owned(Patient::default())).to_mut().absorb(more);
            }
        }
        whole
    }

    /// Looks at a patient as the protocol sees them at a moment, without deciding anything.
    pub fn view<T>(
        &self,
        patient: &PatientId,
        now: At,
        look: impl FnOnce(&View<'_>) -> T,
    ) -> Option<T> {
        let protocol = self.protocol.as_ref()?;
        let whole = self.whole(&self.root(patient))?;
        Some(look(&View::new(&whole, protocol, &self.list, now)))
    }

    /// Everyone known, by the number that goes on.
    pub fn patients(&self) -> impl Iterator<Item = &PatientId> {
        self.patients.keys().filter(|patient| !self.merged.contains_key(*patient))
    }

    /// The protocol in force.
    pub fn protocol(&self) -> Option<&Protocol> {
        self.protocol.as_deref()
    }

    /// The medicine list in force.
    pub fn medicines(&self) -> &MedicineList {
        &self.list
    }

    fn merge(&mut self, fact: &Fact, into: &PatientId, at: At, out: &mut Vec<Decision>) {
        let Some(patient) = &fact.patient else { return };
        if patient == into || self.root(into) == *patient {
            return; // merging a number into itself says nothing
        }
        self.merged.insert(patient.clone(), into.clone());
        self.close_all(patient, "the record goes on under another number", at, out);
        self.look.remove(patient);
        let root = self.root(patient);
        self.look_at(&root, at, None, out);
    }

    fn split(&mut self, fact: &Fact, at: At, out: &mut Vec<Decision>) {
        let Some(patient) = &fact.patient else { return };
        let root = self.root(patient);
        if self.merged.remove(patient).is_some() {
            self.look_at(&root, at, None, out);
            self.look_at(patient, at, None, out);
        }
    }

    /// Puts a text in force, or says that it can't be; the last good one stays.
    fn put_in_force(
        &mut self,
        hash: &ContentHash,
        texts: &dyn Texts,
        at: At,
        out: &mut Vec<Decision>,
        take: impl FnOnce(&mut Self, &str) -> Result<(), usize>,
    ) {
        let refused = match texts.text(hash) {
            None => Some(format!("the text {} is not in the store", hash.short())),
            Some(text) => match take(self, text) {
                Ok(()) => None,
                Err(mistakes) => Some(format!("the text {} has {mistakes} mistakes", hash.short())),
            },
        };
        match refused {
            Some(why) => self.technical(
                "rule books",
                "A protocol or medicine list could not be put in force; the last good one stays.",
                &why,
                at,
                out,
            ),
            None => {
                self.technical_over("rule books", "a good one is in force", at, out);
                let everyone: Vec<PatientId> = self.patients().cloned().collect();
                for patient in everyone {
                    self.look_at(&patient, at, None, out);
                }
            }
        }
    }

    /// A feed is heard when a fact of its kind comes out of a file.
    fn hear(&mut self, fact: &Fact, at: At, out: &mut Vec<Decision>) {
        let feed = match &fact.body {
            Body::Tracing(_) => Feed::Tracings,
            Body::Result(_) => Feed::Results,
            Body::Ordered(_) | Body::Given(_) | Body::OrderStopped(_) | Body::OrderHeld(_) => {
                Feed::Medicines
            }
            _ => return,
        };
        self.heard.insert(feed, at);
        self.feed_is(feed, false, at, out);
        if let Some(after) =
            self.protocol.as_ref().and_then(|protocol| protocol.silent_after.get(&feed))
        {
            self.due.insert((at + *after, Due::Feed(feed)));
        }
    }

    fn feed_due(&mut self, feed: Feed, at: At, out: &mut Vec<Decision>) {
        let after =
            self.protocol.as_ref().and_then(|protocol| protocol.silent_after.get(&feed)).copied();
        if let (Some(after), Some(heard)) = (after, self.heard.get(&feed).copied()) {
            if heard + after <= at {
                self.feed_is(feed, true, at, out);
            }
        }
    }

    fn feed_is(&mut self, feed: Feed, silent: bool, at: At, out: &mut Vec<Decision>) {
        let (concern, what) = match feed {
            Feed::Tracings => {
                ("tracing feed", "No tracing has come for longer than the protocol expects.")
            }
            Feed::Results => {
                ("result feed", "No result has come for longer than the protocol expects.")
            }
            Feed::Medicines => {
                ("medicine feed", "No medicine row has come for longer than the protocol expects.")
            }
        };
        if silent {
            self.technical(
                concern,
                what,
                "a silent feed and a calm ward look the same from here",
                at,
                out,
            );
        } else {
            self.technical_over(concern, "it is heard again", at, out);
        }
    }

    fn trouble(
        &mut self,
        trouble: crate::fact::Trouble,
        present: bool,
        at: At,
        out: &mut Vec<Decision>,
    ) {
        use crate::fact::Trouble;
        let (concern, what) = match trouble {
            Trouble::Disk => ("disk", "The disk that holds the store is nearly full."),
            Trouble::Mail => ("mail", "The mail server can't be reached or refuses everything."),
            Trouble::Folder => {
                ("export folder", "The export folder is gone, was replaced, or can't be read.")
            }
            Trouble::Settings => (
                "settings",
                "A changed settings, protocol or medicine file was refused; the last good one holds.",
            ),
            Trouble::History => (
                "history",
                "Stored facts folded again gave other decisions than those that were stored.",
            ),
        };
        if present {
            self.technical(concern, what, "noticed by the service itself", at, out);
        } else {
            self.technical_over(concern, "it is well again", at, out);
        }
    }

    fn refused(&mut self, alert: &AlertId, recipient: &Private, at: At, out: &mut Vec<Decision>) {
        self.unreachable(alert, recipient, at, out);
        let what = "A mail server refuses a recipient for good.";
        self.technical(
            "refused recipient",
            what,
            "see the messages of the service for which one",
            at,
            out,
        );
    }
}
