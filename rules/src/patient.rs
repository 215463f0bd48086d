//! One patient's state: a fold over facts, in whatever order they arrive. Everything that may be corrected keeps its
//! versions, and what holds is worked out from them; so a correction that comes before what it corrects ends in the
//! same state.

use crate::fact::{
    Administration, At, Body, Condition, Description, Fact, LabResult, Order, OverRead, Place,
    ResultStatus, Source, Tracing,
};
use crate::ids::{OrderId, Person, ResultId, TracingId};
use chrono::TimeDelta;
use std::collections::{BTreeMap, BTreeSet};
use std::ops::Bound;

/// Everything known about one patient number.
#[derive(Debug, Clone, Default)]
pub struct Patient {
    /// Comings, moves and goings, by when they were true.
    stays: Vec<(At, Option<Place>)>,
    cancelled_stays: BTreeSet<At>,
    /// Sex, birth date and the like.
    pub described: Description,
    orders: BTreeMap<OrderId, OrderStory>,
    doses: BTreeMap<Box<str>, Dose>,
    not_given: BTreeSet<Box<str>>,
    results: BTreeMap<ResultId, Vec<Version>>,
    tracings: BTreeMap<TracingId, Recorded>,
    over_reads: BTreeMap<TracingId, (At, OverRead)>,
    withdrawn: BTreeSet<TracingId>,
    /// Conditions recorded (`true`) or ruled out (`false`), and since when.
    pub conditions: BTreeMap<Condition, (bool, At)>,
    /// The tracing that a person chose to compare with.
    pub baseline: Option<(TracingId, Option<Person>)>,
    /// Moments ahead of the one at which we learned of them: a cart's clock that runs fast, a planned admission.
    ahead: BTreeSet<At>,
}

/// Tracings and results from so long before an admission belong to the stay: an emergency department's.
const BEFORE_ADMISSION: TimeDelta = TimeDelta::hours(24);

#[derive(Debug, Clone, Default)]
struct OrderStory {
    /// The order's contents by when they were true; of one moment the last received stands.
    contents: BTreeMap<At, Order>,
    steps: Vec<(At, OrderStep)>,
}

#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord)]
enum OrderStep {
    Resumed,
    Held,
    Stopped,
    Cancelled,
}

/// An order and how it stands.
#[derive(Debug, Clone, Copy)]
pub struct OrderNow<'a> {
    /// The order's latest content.
    pub order: &'a Order,
    /// From when it runs.
    pub since: At,
    /// When its dose, route or frequency last changed, if it ever did. The same content sent again is no change.
    pub changed: Option<At>,
    /// When it was held, stopped or over; `None` while it runs.
    pub until: Option<At>,
}

/// A dose that was given.
#[derive(Debug, Clone)]
pub struct Dose {
    /// When.
    pub at: At,
    /// What.
    pub given: Administration,
    /// From where we know.
    pub source: Source,
}

#[derive(Debug, Clone)]
struct Version {
    collected: At,
    received: At,
    result: LabResult,
    source: Source,
}

/// A result as it holds.
#[derive(Debug, Clone, Copy)]
pub struct ResultNow<'a> {
    /// When the specimen was taken.
    pub collected: At,
    /// The version that holds.
    pub result: &'a LabResult,
    /// From where we know.
    pub source: &'a Source,
}

/// A tracing as measured.
#[derive(Debug, Clone)]
pub struct Recorded {
    /// When it was recorded.
    pub at: At,
    /// When its latest measurement was learned.
    pub received: At,
    /// The measurement.
    pub tracing: Tracing,
    /// From where we know.
    pub source: Source,
}

impl Patient {
    /// Folds one fact. Facts about alerts, texts and the service are passed over.
    pub fn take(&mut self, fact: &Fact) {
        let at = fact.occurred_at;
        if at > fact.received_at {
            self.ahead.insert(at);
        }
        match &fact.body {
            Body::Admitted(place) | Body::Moved(place) => self.stay(at, Some(place.clone())),
            Body::Discharged => self.stay(at, None),
            Body::StayCancelled { of } => {
                self.cancelled_stays.insert(*of);
            }
            Body::Described(new) => self.describe(new),
            Body::Ordered(order) => {
                let story = self.orders.entry(order.id.clone()).or_default();
                story.contents.insert(at, order.clone());
            }
            Body::OrderHeld(id) => self.order_step(id, at, OrderStep::Held),
            Body::OrderResumed(id) => self.order_step(id, at, OrderStep::Resumed),
            Body::OrderStopped(id) => self.order_step(id, at, OrderStep::Stopped),
            Body::OrderCancelled(id) => self.order_step(id, at, OrderStep::Cancelled),
            Body::Given(given) => {
                let dose = Dose { at, given: given.clone(), source: fact.source.clone() };
                self.doses.insert(given.id.clone(), dose);
            }
            Body::NotGiven { administration } => {
                self.not_given.insert(administration.clone());
            }
            Body::Result(result) => {
                self.results.entry(result.id.clone()).or_default().push(Version {
                    collected: at,
                    received: fact.received_at,
                    result: result.clone(),
                    source: fact.source.clone(),
                })
            }
            Body::Tracing(tracing) => {
                let recorded = Recorded {
                    at,
                    received: fact.received_at,
                    tracing: tracing.clone(),
                    source: fact.source.clone(),
                };
                self.tracings.insert(tracing.id.clone(), recorded);
            }
            Body::TracingWithdrawn(id) => {
                self.withdrawn.insert(id.clone());
            }
            Body::OverRead(read) => {
                let newer =
                    self.over_reads.get(&read.tracing).is_none_or(|(known, _)| *known <= at);
                if newer {
                    self.over_reads.insert(read.tracing.clone(), (at, read.clone()));
                }
            }
            Body::BaselineChosen(id) => {
                let by = match &fact.source {
                    Source::Person(person) => Some(person.clone()),
                    Source::File { .. } | Source::Service => None,
                };
                self.baseline = Some((id.clone(), by));
            }
            Body::Risk { condition, present } => {
                let newer = self.conditions.get(condition).is_none_or(|(_, known)| *known <= at);
                if newer {
                    self.conditions.insert(*condition, (*present, at));
                }
            }
            Body::Merged { .. }
            | Body::Split
            | Body::Acknowledged { .. }
            | Body::Snoozed { .. }
            | Body::HandedOver { .. }
            | Body::ClosedByPerson { .. }
            | Body::Told { .. }
            | Body::Refused { .. }
            | Body::ProtocolInForce(_)
            | Body::MedicinesInForce(_)
            | Body::CodesInForce(_)
            | Body::Feed { .. }
            | Body::Service { .. } => {}
        }
    }

    /// Adds what is known under another number of the same person. Used to look at merged records together; the
    /// records themselves stay apart, so that a merge by mistake can be undone.
    pub fn absorb(&mut self, other: &Patient) {
        self.stays.extend(other.stays.iter().cloned());
        self.stays.sort_by_key(|(at, _)| *at);
        self.cancelled_stays.extend(&other.cancelled_stays);
        let own = std::mem::replace(&mut self.described, other.described.clone());
        self.describe(&own);
        for (id, story) in &other.orders {
            self.orders.entry(id.clone()).or_insert_with(|| story.clone());
        }
        for (id, dose) in &other.doses {
            self.doses.entry(id.clone()).or_insert_with(|| dose.clone());
        }
        self.not_given.extend(other.not_given.iter().cloned());
        for (id, versions) in &other.results {
            self.results.entry(id.clone()).or_default().extend(versions.iter().cloned());
        }
        for (id, recorded) in &other.tracings {
            self.tracings.entry(id.clone()).or_insert_with(|| recorded.clone());
        }
        for (id, read) in &other.over_reads {
            self.over_reads.entry(id.clone()).or_insert_with(|| read.clone());
        }
        self.withdrawn.extend(other.withdrawn.iter().cloned());
        for (condition, state) in &other.conditions {
            self.conditions.entry(*condition).or_insert(*state);
        }
        if self.baseline.is_none() {
            self.baseline = other.baseline.clone();
        }
        self.ahead.extend(&other.ahead);
    }

    /// The first moment after this one at which something that is known already becomes true.
    pub fn next_after(&self, now: At) -> Option<At> {
        self.ahead.range((Bound::Excluded(now), Bound::Unbounded)).next().copied()
    }

    fn stay(&mut self, at: At, place: Option<Place>) {
        let index = self.stays.partition_point(|(known, _)| *known <= at);
        self.stays.insert(index, (at, place));
    }

    fn describe(&mut self, new: &Description) {
        let known = &mut self.described;
        known.sex = new.sex.or(known.sex);
        known.birth_date = new.birth_date.or(known.birth_date);
        known.weight = new.weight.or(known.weight);
        if new.name.is_some() {
            known.name.clone_from(&new.name);
        }
        if new.pseudonym.is_some() {
            known.pseudonym.clone_from(&new.pseudonym);
        }
    }

    fn order_step(&mut self, id: &OrderId, at: At, step: OrderStep) {
        let steps = &mut self.orders.entry(id.clone()).or_default().steps;
        // Two steps at one moment: the one that ends more wins, whichever arrived first.
        let index = steps.partition_point(|known| *known <= (at, step));
        steps.insert(index, (at, step));
    }

    /// Where the patient lies at a moment; `None` before admission and after discharge.
    pub fn place(&self, now: At) -> Option<&Place> {
        self.stays
            .iter()
            .rev()
            .find(|(at, _)| *at <= now && !self.cancelled_stays.contains(at))
            .and_then(|(_, place)| place.as_ref())
    }

    /// Whether the patient was here and is no longer. A patient who was never admitted by any feed is not gone.
    pub fn gone(&self, now: At) -> bool {
        let known =
            self.stays.iter().any(|(at, _)| *at <= now && !self.cancelled_stays.contains(at));
        known && self.place(now).is_none()
    }

    /// When the present stay began.
    pub fn admitted(&self, now: At) -> Option<At> {
        let held =
            self.stays.iter().filter(|(at, _)| *at <= now && !self.cancelled_stays.contains(at));
        let mut since = None;
        for (at, place) in held {
            since = place.as_ref().map(|_| since.unwrap_or(*at));
        }
        since
    }

    /// From when on tracings and results belong to the present stay; `None` where no feed tells of admissions, and then
    /// all of them do.
    pub fn stay_from(&self, now: At) -> Option<At> {
        self.admitted(now).map(|since| since - BEFORE_ADMISSION)
    }

    /// When the patient last left, up to a moment.
    fn left(&self, now: At) -> Option<At> {
        let mut stays = self.stays.iter().rev();
        stays
            .find(|(at, place)| *at <= now && place.is_none() && !self.cancelled_stays.contains(at))
            .map(|(at, _)| *at)
    }

    /// Days spent on a ward between two moments; `None` where no admission is known.
    pub fn days_here(&self, from: At, until: At) -> Option<f64> {
        let held: Vec<_> = self
            .stays
            .iter()
            .filter(|(at, _)| *at < until && !self.cancelled_stays.contains(at))
            .collect();
        held.first()?;
        let ends = held.iter().skip(1).map(|(at, _)| *at).chain([until]);
        let here = held.iter().zip(ends).filter(|((_, place), _)| place.is_some());
        let time = here.map(|((start, _), end)| (end - (*start).max(from)).max(TimeDelta::zero()));
        Some(time.sum::<TimeDelta>().num_seconds() as f64 / 86_400.0)
    }

    /// Full years at a moment.
    pub fn age(&self, now: At) -> Option<u32> {
        now.date_naive().years_since(self.described.birth_date?)
    }

    /// The next birthday after a moment, at which limits by age may change.
    pub fn next_birthday(&self, now: At) -> Option<At> {
        let born = self.described.birth_date?;
        let years = self.age(now)? + 1;
        let day = born.checked_add_months(chrono::Months::new(years.checked_mul(12)?))?;
        let midnight = day.and_hms_opt(0, 0, 0)?.and_utc();
        // Born on 29 February: a year counts from 1 March where there is no such day.
        Some(if midnight > now { midnight } else { midnight + TimeDelta::days(1) })
    }

    /// Orders that were meant, with their standing at a moment. An order of an earlier stay ended when the patient left.
    pub fn orders(&self, now: At) -> impl Iterator<Item = OrderNow<'_>> {
        let left = self.left(now);
        self.orders.values().filter_map(move |story| {
            let (told, order) = story.contents.range(..=now).next_back()?;
            let (first, _) = story.contents.first_key_value()?;
            let last = story.steps.iter().rev().find(|(at, _)| *at <= now);
            if last.is_some_and(|(_, step)| *step == OrderStep::Cancelled) {
                return None;
            }
            let since = order.starts.unwrap_or(*first);
            let stopped = last
                .filter(|(_, step)| matches!(step, OrderStep::Held | OrderStep::Stopped))
                .map(|(at, _)| *at);
            let ended = order.ends.filter(|end| *end <= now);
            let resumed = last.map_or(*told, |(at, _)| (*at).max(*told));
            let left = left.filter(|left| resumed.max(since) <= *left);
            let until = [stopped, ended, left].into_iter().flatten().min();
            let changed = story
                .contents
                .range(..=now)
                .zip(story.contents.range(..=now).skip(1))
                .filter(|((_, before), (_, after))| !same_amount(before, after))
                .map(|(_, (at, _))| *at)
                .last();
            Some(OrderNow { order, since, changed, until })
        })
    }

    /// Doses that were given up to a moment.
    pub fn doses(&self, now: At) -> impl Iterator<Item = &Dose> {
        self.doses
            .values()
            .filter(move |dose| dose.at <= now && !self.not_given.contains(&dose.given.id))
    }

    /// A dose by its own number, whether or not it was given after all.
    pub fn dose(&self, administration: &str) -> Option<&Dose> {
        self.doses.get(administration)
    }

    /// An order's latest content, whether or not it was meant.
    pub fn order(&self, id: &OrderId) -> Option<&Order> {
        self.orders.get(id)?.contents.last_key_value().map(|(_, order)| order)
    }

    /// Results as they hold, specimens up to a moment, in no particular order. A cancelled one, or one that was
    /// somebody else's, is not among them.
    pub fn results(&self, now: At) -> impl Iterator<Item = ResultNow<'_>> {
        self.results
            .values()
            .filter_map(|versions| holds(versions))
            .filter(move |version| version.collected <= now)
            .filter(|version| {
                !matches!(
                    version.result.status,
                    ResultStatus::Cancelled | ResultStatus::EnteredInError
                )
            })
            .map(|version| ResultNow {
                collected: version.collected,
                result: &version.result,
                source: &version.source,
            })
    }

    /// Whether any version of a result is known.
    pub fn knows_result(&self, id: &ResultId) -> bool {
        self.results.contains_key(id)
    }

    /// Tracings that stand, of whichever stay, oldest first.
    pub fn tracings(&self, now: At) -> Vec<&Recorded> {
        let mut found: Vec<&Recorded> = self
            .tracings
            .values()
            .filter(|recorded| recorded.at <= now && !self.withdrawn.contains(&recorded.tracing.id))
            .collect();
        found.sort_by(|a, b| (a.at, &a.tracing.id).cmp(&(b.at, &b.tracing.id)));
        found
    }

    /// The tracing's own record, if it stands.
    pub fn tracing(&self, id: &TracingId) -> Option<&Recorded> {
        self.tracings.get(id).filter(|_| !self.withdrawn.contains(id))
    }

    /// A qualified reader's reading of a tracing.
    pub fn over_read(&self, id: &TracingId) -> Option<&(At, OverRead)> {
        self.over_reads.get(id)
    }
}

/// Whether two contents ask for the same amount in the same way.
pub fn same_amount(one: &Order, other: &Order) -> bool {
    (&one.dose, &one.route, &one.frequency) == (&other.dose, &other.route, &other.frequency)
}

/// The version that holds: a preliminary one never replaces a verified one; among the rest the one issued last, at
/// the same moment the one of higher standing, and only then the one received last.
fn holds(versions: &[Version]) -> Option<&Version> {
    let verified =
        versions.iter().any(|version| version.result.status != ResultStatus::Preliminary);
    versions
        .iter()
        .filter(|version| !verified || version.result.status != ResultStatus::Preliminary)
        .max_by_key(|version| (version.result.issued_at, version.result.status, version.received))
}
