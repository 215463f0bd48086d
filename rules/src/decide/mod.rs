//! The decider: facts in the order of `received_at` and its own deadlines, decisions out.
//!
//! It never asks what time it is. Live, restart and replay feed it the same facts and get the same decisions.

#![allow(clippy::wildcard_enum_match_arm, reason = "most facts say nothing to the part that asks")]

mod concern;
mod life;

pub use concern::{RuleSays, ask, by_concern, unknown};

use crate::alert::{Decision, LifeStep};
use crate::fact::{At, Body, Fact, Feed};
use crate::finding::Finding;
use crate::ids::{AlertId, ContentHash, PatientId, Private};
use crate::medicines::{MedicineList, Recognised};
use crate::patient::Patient;
use crate::protocol::Protocol;
use crate::verdict::Basis;
use crate::view::View;
use life::{OpenAlert, Signature};
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
    list_in_force: bool,
    patients: BTreeMap<PatientId, Patient>,
    /// A merged number and the one that goes on.
    merged: BTreeMap<PatientId, PatientId>,
    open: BTreeMap<Key, OpenAlert>,
    by_id: BTreeMap<AlertId, Key>,
    /// What a person closed: the same facts don't open it again.
    settled: BTreeMap<Key, Settled>,
    /// Whom to look at again when nothing but time has passed.
    look: BTreeMap<PatientId, At>,
    /// When each feed was last heard, or first expected.
    heard: BTreeMap<Feed, At>,
    /// When a feed will have been silent for too long.
    feed_due: BTreeMap<Feed, At>,
    /// Recipients whom no message reaches.
    refused: BTreeSet<Private>,
    due: BTreeSet<(At, Due)>,
}

#[derive(Debug, Clone)]
struct Settled {
    rank: usize,
    says: Vec<String>,
    rests_on: BTreeSet<Basis>,
}

impl Settled {
    /// Whether this is no more than what the person knew who closed it.
    fn covers(&self, now: &Signature) -> bool {
        now.rank <= self.rank
            && now.rests_on.is_subset(&self.rests_on)
            && now.says.iter().all(|says| self.says.contains(says))
    }
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
                if let Some(protocol) =
                    self.book_of("protocol", hash, texts, at, &mut out, Protocol::parse)
                {
                    self.protocol = Some(Arc::new(protocol));
                    self.technical_over("protocol", "a good one is in force", at, &mut out);
                    self.carry_over(at, &mut out);
                    self.expect_feeds(at);
                    self.look_at_all(at, &mut out);
                }
            }
            Body::MedicinesInForce(hash) => {
                if let Some(list) =
                    self.book_of("medicine list", hash, texts, at, &mut out, MedicineList::parse)
                {
                    self.list = Arc::new(list);
                    self.list_in_force = true;
                    self.technical_over("medicine list", "a good one is in force", at, &mut out);
                    self.look_at_all(at, &mut out);
                }
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
            Body::NotGiven { administration } => {
                let dose = known.dose(administration)?;
                self.substance(&dose.given.medicine)
            }
            Body::OrderCancelled(id) => self.substance(&known.order(id)?.medicine),
            _ => None,
        }
    }

    fn substance(&self, medicine: &crate::fact::MedicineName) -> Option<Basis> {
        match self.list.recognise(medicine) {
            Recognised::Listed(found) => {
                let medicine = self.list.medicines().get(*found.first()?)?;
                Some(Basis::Medicine(medicine.substance.as_str().into()))
            }
            Recognised::No => Some(Basis::Said(medicine.text.clone())),
            Recognised::LeftOut => None,
        }
    }

    /// Open alerts of one patient.
    fn keys_of(&self, patient: &PatientId) -> impl Iterator<Item = &Key> {
        let first: Key = (Some(patient.clone()), String::new());
        let of = patient.clone();
        self.open
            .range(first..)
            .map(|(key, _)| key)
            .take_while(move |(whose, _)| whose.as_ref() == Some(&of))
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
        self.suppose(patient, &[], now, look)
    }

    /// The same, had these facts come too. Nothing is remembered.
    pub fn suppose<T>(
        &self,
        patient: &PatientId,
        facts: &[Fact],
        now: At,
        look: impl FnOnce(&View<'_>) -> T,
    ) -> Option<T> {
        let protocol = self.protocol.as_ref()?;
        let mut whole = self.whole(&self.root(patient))?;
        if !facts.is_empty() {
            let whole = whole.to_mut();
            facts.iter().for_each(|fact| whole.take(fact));
        }
        Some(look(&View::new(&whole, protocol, &self.list, now)))
    }

    /// Days that a patient spent on a ward within a period; `None` where no feed told of an admission.
    pub fn days_here(&self, patient: &PatientId, period: crate::replay::Period) -> Option<f64> {
        self.patients.get(patient)?.days_here(period.from, period.until)
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

    /// Reads a text that is to come in force, or says that it can't be; the last good one stays.
    fn book_of<T>(
        &mut self,
        what: &str,
        hash: &ContentHash,
        texts: &dyn Texts,
        at: At,
        out: &mut Vec<Decision>,
        parse: impl FnOnce(&str) -> Result<T, Vec<Finding>>,
    ) -> Option<T> {
        let why = match texts.text(hash).map(parse) {
            Some(Ok(book)) => return Some(book),
            None => format!("the text {} is not in the store", hash.short()),
            Some(Err(found)) => match found.first() {
                Some(first) => {
                    format!(
                        "the text {} has {} mistakes; the first: {first}",
                        hash.short(),
                        found.len()
                    )
                }
                None => format!("the text {} can't be read", hash.short()),
            },
        };
        let seen = format!("A new {what} could not be put in force; the last good one stays.");
        self.technical(what, &seen, &why, at, out);
        None
    }

    /// What changes for everyone: another protocol or list. What the one names and the other doesn't know is said.
    fn look_at_all(&mut self, at: At, out: &mut Vec<Decision>) {
        if let Some(protocol) = self.protocol.clone().filter(|_| self.list_in_force) {
            let strangers = protocol.not_on(&self.list);
            let names: Vec<String> = strangers.iter().map(|found| found.message.clone()).collect();
            if names.is_empty() {
                self.technical_over("rule books", "protocol and list agree again", at, out);
            } else {
                let seen = "The protocol names something that the medicine list doesn't know: a rule may never fire.";
                self.technical("rule books", seen, &names.join("; "), at, out);
            }
        }
        let everyone: Vec<PatientId> = self.patients().cloned().collect();
        for patient in everyone {
            self.look_at(&patient, at, None, out);
        }
    }

    /// The protocol in force, or one that knows no rule, no role and no time, so that trouble is seen before the first
    /// protocol came.
    fn book(&self) -> Arc<Protocol> {
        self.protocol.clone().unwrap_or_else(|| Arc::new(Protocol::none()))
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
        self.expect(feed, at);
    }

    /// From the day a protocol asks for a feed, its silence counts, also if it was never heard.
    fn expect_feeds(&mut self, at: At) {
        for feed in [Feed::Tracings, Feed::Results, Feed::Medicines] {
            let asked = |protocol: &Arc<Protocol>| protocol.silent_after.contains_key(&feed);
            if self.protocol.as_ref().is_some_and(asked) {
                self.heard.entry(feed).or_insert(at);
            }
            self.expect(feed, at);
        }
    }

    /// Sets the moment at which a feed will have been silent for too long, which may be now.
    fn expect(&mut self, feed: Feed, now: At) {
        if let Some(known) = self.feed_due.remove(&feed) {
            self.due.remove(&(known, Due::Feed(feed)));
        }
        let after = self.protocol.as_ref().and_then(|protocol| protocol.silent_after.get(&feed));
        if let (Some(heard), Some(after)) = (self.heard.get(&feed), after) {
            let at = (*heard + *after).max(now);
            self.feed_due.insert(feed, at);
            self.due.insert((at, Due::Feed(feed)));
        }
    }

    fn feed_due(&mut self, feed: Feed, at: At, out: &mut Vec<Decision>) {
        self.feed_due.remove(&feed);
        self.feed_is(feed, true, at, out);
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
