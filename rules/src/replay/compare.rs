//! A candidate protocol beside what happened.
#![allow(clippy::wildcard_enum_match_arm, reason = "only tracings and over-reads are looked at")]

use super::{Episode, Episodes, Period, With};
use crate::decide::{Decider, Texts, ask};
use crate::fact::{At, Body, Fact};
use crate::finding::Finding;
use crate::ids::{ContentHash, PatientId, Role, TierName, TracingId};
use crate::protocol::Protocol;
use crate::verdict::{Basis, Verdict};
use serde::Serialize;
use std::collections::{BTreeMap, BTreeSet};

/// One protocol's figures over the period.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Side {
    /// The protocol's name and version.
    pub protocol: String,
    /// Its hash.
    pub hash: ContentHash,
    /// Alerts about patients, by the highest tier they reached.
    pub alerts: BTreeMap<TierName, u64>,
    /// Messages that went out before anybody had the chance to answer, by role.
    pub told: BTreeMap<Role, u64>,
    /// Alerts that a correction disproved.
    pub withdrawn: u64,
}

impl Side {
    /// Alerts of every tier.
    pub fn total(&self) -> u64 {
        self.alerts.values().sum()
    }
}

/// One concern that both protocols raised.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Pair {
    /// As it was.
    pub was: Episode,
    /// As it would have been.
    pub would: Episode,
}

/// A tracing that the two protocols put in different tiers.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct TracingMoved {
    /// Which, to look at.
    pub tracing: TracingId,
    /// When it was recorded, or read anew.
    pub at: At,
    /// The tier of rules that rest on it, as it was; `None`: none fired.
    pub was: Option<TierName>,
    /// As it would have been.
    pub would: Option<TierName>,
}

/// What a candidate would have done otherwise.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Comparison {
    /// The period over which alerts are counted: those raised in it.
    pub period: Period,
    /// Days that patients spent on a ward in it, summed; patients of whom no feed told an admission are not in it.
    pub patient_days: f64,
    /// Patients of whom something was known in it and no admission.
    pub without_stay: u64,
    /// What happened.
    pub was: Side,
    /// What would have happened.
    pub would: Side,
    /// Alerts that would not have been.
    pub gone: Vec<Episode>,
    /// Alerts that would have been besides.
    pub new: Vec<Episode>,
    /// Alerts that would have reached another tier.
    pub other_tier: Vec<Pair>,
    /// Alerts of which somebody would have been told earlier.
    pub earlier: Vec<Pair>,
    /// Alerts of which somebody would have been told later, or nobody any more.
    pub later: Vec<Pair>,
    /// Tracings that change side.
    pub tracings: Vec<TracingMoved>,
}

/// Decides the same facts twice: as they were, and with the candidate in force whenever a protocol was. Answers that
/// people gave reach an alert of the candidate only where it was raised at the same moment for the same concern.
///
/// # Errors
/// What is wrong with the candidate's text.
pub fn compare<'f>(
    facts: impl IntoIterator<Item = &'f Fact>,
    texts: &dyn Texts,
    candidate: &str,
    period: Period,
) -> Result<Comparison, Vec<Finding>> {
    let protocol = Protocol::parse(candidate)?;
    let with = With::new(texts, candidate);
    let (mut was, mut would) = (Run::default(), Run::default());
    let mut seen: BTreeSet<PatientId> = BTreeSet::new();
    let mut tracings: BTreeMap<TracingId, TracingMoved> = BTreeMap::new();
    for fact in facts.into_iter().take_while(|fact| fact.received_at < period.until) {
        was.take(fact, texts);
        match with.instead(fact) {
            Some(other) => would.take(&other, &with),
            None => would.take(fact, &with),
        }
        let Some(patient) = &fact.patient else { continue };
        if !period.holds(fact.received_at) {
            continue;
        }
        seen.insert(patient.clone());
        let tracing = match &fact.body {
            Body::Tracing(tracing) => &tracing.id,
            Body::OverRead(read) => &read.tracing,
            _ => continue,
        };
        let moved = TracingMoved {
            tracing: tracing.clone(),
            at: fact.occurred_at,
            was: was.tier_of(patient, tracing, fact.received_at),
            would: would.tier_of(patient, tracing, fact.received_at),
        };
        tracings.insert(tracing.clone(), moved); // read anew, the later reading counts
    }
    was.end(period.until);
    would.end(period.until);
    let stays: Vec<Option<f64>> =
        seen.iter().map(|patient| was.decider.days_here(patient, period)).collect();
    let was_protocol = was
        .decider
        .protocol()
        .map_or_else(|| ("none in force".to_owned(), ContentHash::of(b"")), name);
    let (was, would) = (was.episodes(period), would.episodes(period));
    let mut found = Comparison {
        period,
        patient_days: stays.iter().flatten().sum(),
        without_stay: stays.iter().filter(|days| days.is_none()).count() as u64,
        was: side(was_protocol, &was),
        would: side(name(&protocol), &would),
        gone: Vec::new(),
        new: Vec::new(),
        other_tier: Vec::new(),
        earlier: Vec::new(),
        later: Vec::new(),
        tracings: tracings.into_values().filter(|moved| moved.was != moved.would).collect(),
    };
    found.tracings.sort_by(|a, b| (a.at, &a.tracing).cmp(&(b.at, &b.tracing)));
    found.pair(was, would);
    Ok(found)
}

fn name(protocol: &Protocol) -> (String, ContentHash) {
    (format!("{}, version {}", protocol.name, protocol.version), protocol.hash.clone())
}

fn side((protocol, hash): (String, ContentHash), episodes: &[Episode]) -> Side {
    let mut side = Side {
        protocol,
        hash,
        alerts: BTreeMap::new(),
        told: BTreeMap::new(),
        withdrawn: episodes.iter().filter(|episode| episode.withdrawn).count() as u64,
    };
    for episode in episodes {
        *side.alerts.entry(episode.tier.clone()).or_default() += 1;
        for (role, _) in &episode.told {
            *side.told.entry(role.clone()).or_default() += 1;
        }
    }
    side
}

impl Comparison {
    /// Puts together what is about the same concern at times that meet; each episode is taken once, oldest first.
    fn pair(&mut self, was: Vec<Episode>, would: Vec<Episode>) {
        let mut rest: Vec<Option<Episode>> = would.into_iter().map(Some).collect();
        for was in was {
            let met = rest.iter_mut().find(|one| one.as_ref().is_some_and(|one| one.meets(&was)));
            let Some(would) = met.and_then(Option::take) else {
                self.gone.push(was);
                continue;
            };
            let first = |episode: &Episode| episode.told.iter().map(|(_, at)| *at).min();
            let pair = Pair { was, would };
            match (first(&pair.was), first(&pair.would)) {
                (Some(then), Some(now)) if now < then => self.earlier.push(pair.clone()),
                (None, Some(_)) => self.earlier.push(pair.clone()),
                (Some(then), Some(now)) if now > then => self.later.push(pair.clone()),
                (Some(_), None) => self.later.push(pair.clone()),
                _ => {}
            }
            if pair.was.tier != pair.would.tier {
                self.other_tier.push(pair);
            }
        }
        self.new.extend(rest.into_iter().flatten());
    }

    /// So many per 100 patient-days; `None` where nobody was there.
    pub fn per_100_days(&self, number: u64) -> Option<f64> {
        (self.patient_days > 0.0).then(|| number as f64 * 100.0 / self.patient_days)
    }
}

/// One side as it is decided.
#[derive(Default)]
struct Run {
    decider: Decider,
    episodes: Episodes,
}

impl Run {
    fn take(&mut self, fact: &Fact, texts: &dyn Texts) {
        self.decider.take(fact, texts).iter().for_each(|decision| self.episodes.take(decision));
    }

    fn end(&mut self, until: At) {
        self.decider.advance(until).iter().for_each(|decision| self.episodes.take(decision));
    }

    /// The highest tier of a rule that fired, or could not be told, and rests on the tracing.
    fn tier_of(&self, patient: &PatientId, tracing: &TracingId, now: At) -> Option<TierName> {
        let basis = Basis::Tracing(tracing.clone());
        let rank = self.decider.view(patient, now, |view| {
            let rests = |verdict: &Verdict| match verdict {
                Verdict::Fired(because) => because.rests_on.contains(&basis),
                Verdict::CannotTell(missing) => missing.because.rests_on.contains(&basis),
                Verdict::Quiet => false,
            };
            ask(view).into_iter().filter(|said| rests(&said.verdict)).filter_map(|s| s.rank).max()
        })??;
        self.decider.protocol()?.tiers.get(rank).map(|tier| tier.name.clone())
    }

    fn episodes(self, period: Period) -> Vec<Episode> {
        let of_patient = |episode: &Episode| episode.patient.is_some();
        let all = self.episodes.all().into_iter();
        all.filter(of_patient).filter(|episode| period.holds(episode.raised_at)).collect()
    }
}
