//! A patient as the protocol sees them at one moment: the reading that decides, the baseline, what is active, what is
//! known of the electrolytes. Everything that will change by time alone notes when, so that nobody has to ask again
//! before.

use crate::correction::{Formula, NoCorrection, Qt, Qtc};
use crate::fact::{
    Analyte, At, Bound, LabResult, MedicineName, Order, Quality, ResultValue, Sex, Source,
};
use crate::ids::{Person, ResultId, TracingId};
use crate::medicines::{Medicine, MedicineList, Recognised};
use crate::patient::{Dose, OrderNow, Patient, Recorded, ResultNow, same_amount};
use crate::protocol::condition::Of;
use crate::protocol::{Orders, Protocol, TEnd};
use crate::units::{Ms, PerMinute};
use crate::verdict::Basis;
use chrono::TimeDelta;
use std::cell::Cell;
use std::collections::BTreeMap;

/// A patient at a moment.
#[derive(Debug)]
pub struct View<'a> {
    /// The patient.
    pub patient: &'a Patient,
    /// The protocol.
    pub protocol: &'a Protocol,
    /// The hospital's list.
    pub list: &'a MedicineList,
    /// The moment.
    pub now: At,
    /// The latest tracing of this stay, whatever it is worth.
    pub latest: Option<Reading<'a>>,
    /// The tracing before that gave a QTc.
    pub before: Option<Reading<'a>>,
    /// The baseline, or why there is none.
    pub baseline: Result<Reading<'a>, NoBaseline>,
    /// Listed substances that were ever given or ordered, by their place on the list.
    pub exposures: BTreeMap<usize, Exposure<'a>>,
    /// Names in the feed that the list doesn't know, each once.
    pub not_recognised: Vec<&'a str>,
    next: Cell<Option<At>>,
}

/// A tracing read as the protocol says.
#[derive(Debug, Clone)]
pub struct Reading<'a> {
    /// The tracing.
    pub recorded: &'a Recorded,
    /// QT of the deciding reading, its doubt, by whom if over-read.
    pub qt: Option<(Qt, Ms)>,
    /// Who over-read it.
    pub over_read_by: Option<&'a Person>,
    /// An over-read that follows another definition than the protocol's reading.
    pub other_definition: bool,
    /// Rate.
    pub rate: Option<PerMinute>,
    /// QRS.
    pub qrs: Option<Ms>,
    /// How far to trust it; an over-read is good, or none where the reader said so.
    pub quality: Quality,
}

/// Why there is no baseline.
#[derive(Debug, Clone, Copy, PartialEq, Eq, thiserror::Error)]
pub enum NoBaseline {
    /// No good tracing to choose.
    #[error("no good earlier tracing")]
    None,
    /// The chosen one doesn't stand any more, or gives no QTc.
    #[error("the chosen baseline tracing gives no QTc")]
    ChosenGone,
}

/// The latest course of a listed substance. A course ends when its last dose has been gone for as long as the protocol
/// counts a medicine active; a dose after that begins a new one.
#[derive(Debug, Clone)]
pub struct Exposure<'a> {
    /// First dose of the course, or start of its first order.
    pub started: At,
    /// Until when it counts as active; `None` while an order runs.
    pub until: Option<At>,
    /// Doses of the course that were given, oldest first.
    pub doses: Vec<&'a Dose>,
    /// Running orders.
    pub orders: Vec<&'a Order>,
    /// When the dose last changed within the course.
    pub dose_changed: Option<At>,
    /// Active now, by the protocol's rule.
    pub active: bool,
    /// Routes of doses and running orders, as written.
    pub routes: Vec<&'a str>,
}

/// An electrolyte's value at a time.
#[derive(Debug, Clone)]
pub struct Electrolyte {
    /// mmol/L; corrected where it stands for corrected calcium.
    pub value: f64,
    /// How the number is to be read.
    pub bound: Bound,
    /// As the laboratory sent it.
    pub as_sent: Box<str>,
    /// When the specimen was taken.
    pub collected: At,
    /// Older than the protocol trusts.
    pub stale: bool,
    /// Haemolysed or otherwise unreliable specimen.
    pub unreliable: bool,
    /// Unreliable only in that it reads too high.
    pub reads_high: bool,
    /// Which results it rests on.
    pub rests_on: Vec<ResultId>,
    /// From where we know.
    pub source: Source,
}

impl Electrolyte {
    /// The number as reported.
    pub fn read(&self) -> ResultValue {
        ResultValue { number: self.value, bound: self.bound }
    }

    /// What the number is worth: from a specimen that reads too high it is an upper bound; from one that is unreliable
    /// in some other way it is worth nothing.
    pub fn trusted(&self) -> Option<ResultValue> {
        match (self.unreliable, self.reads_high, self.bound) {
            (false, _, _) => Some(self.read()),
            (true, true, Bound::Equal | Bound::Below) => {
                Some(ResultValue { number: self.value, bound: Bound::Below })
            }
            (true, _, _) => None,
        }
    }
}

/// How a specimen spoils a result, if it does.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
enum Spoilt {
    ReadsHigh,
    Unreliable,
}

/// Burst red cells spill potassium and, less, magnesium, of which they hold more than serum does (common practice, no
/// source); they do not move calcium enough to matter. A contaminated or clotted specimen may err either way.
fn spoilt(result: &LabResult) -> Option<Spoilt> {
    let spills = matches!(result.analyte, Analyte::Potassium | Analyte::Magnesium);
    match (result.specimen.unreliable, result.specimen.haemolysed && spills) {
        (true, _) => Some(Spoilt::Unreliable),
        (false, true) => Some(Spoilt::ReadsHigh),
        (false, false) => None,
    }
}

impl<'a> View<'a> {
    /// Looks at a patient.
    pub fn new(
        patient: &'a Patient,
        protocol: &'a Protocol,
        list: &'a MedicineList,
        now: At,
    ) -> Self {
        let mut view = Self {
            patient,
            protocol,
            list,
            now,
            latest: None,
            before: None,
            baseline: Err(NoBaseline::None),
            exposures: BTreeMap::new(),
            not_recognised: Vec::new(),
            next: Cell::new(None),
        };
        let soon = [patient.next_after(now), patient.next_birthday(now)];
        soon.into_iter().flatten().for_each(|at| view.changes_at(at));
        view.expose();
        let tracings = patient.tracings(now);
        let from = patient.stay_from(now);
        let mut of_stay = tracings
            .iter()
            .rev()
            .take_while(|recorded| from.is_none_or(|from| recorded.at >= from))
            .map(|recorded| view.read(recorded));
        let latest = of_stay.next();
        let before = of_stay.find(|read| read.qt.is_some());
        view.latest = latest;
        view.before = before;
        view.baseline = view.find_baseline(&tracings);
        view
    }

    /// Notes that something changes at a moment by time alone.
    pub fn changes_at(&self, at: At) {
        if at > self.now && self.next.get().is_none_or(|known| at < known) {
            self.next.set(Some(at));
        }
    }

    /// When something first changes by time alone.
    pub fn next_change(&self) -> Option<At> {
        self.next.get()
    }

    /// Sex, where limits may depend on it.
    pub fn sex(&self) -> Option<Sex> {
        self.patient.described.sex
    }

    /// Reads a tracing as the protocol says: an over-read supersedes the machine's.
    pub fn read(&self, recorded: &'a Recorded) -> Reading<'a> {
        let tracing = &recorded.tracing;
        let machine = match &self.protocol.reading.lead {
            None => tracing.global,
            Some(lead) => tracing
                .leads
                .iter()
                .find(|(name, _)| name.eq_ignore_ascii_case(lead))
                .map(|(_, read)| *read),
        };
        let qt = machine.and_then(|read| {
            let qt = match self.protocol.reading.t_end {
                TEnd::Tangent => read.qt_tangent,
                TEnd::Threshold => read.qt_threshold,
            };
            qt.map(|qt| (Qt(qt), read.doubt))
        });
        let rate = tracing
            .rate
            .or_else(|| tracing.rr.and_then(|rr| PerMinute::new(60_000.0 / rr.get()).ok()));
        let mut reading = Reading {
            recorded,
            qt: qt.filter(|_| tracing.quality != Quality::None),
            over_read_by: None,
            other_definition: false,
            rate,
            qrs: tracing.qrs,
            quality: tracing.quality,
        };
        if let Some((_, read)) =
            self.patient.over_read(&tracing.id).filter(|(at, _)| *at <= self.now)
        {
            let doubt = Ms::new(self.protocol.over_read_doubt_ms).ok();
            reading.qt = read.qt.zip(doubt).map(|(qt, doubt)| (Qt(qt), doubt));
            reading.over_read_by = Some(&read.by);
            let same_lead = match (&self.protocol.reading.lead, &read.lead) {
                (None, None) => true,
                (Some(ours), Some(theirs)) => ours.eq_ignore_ascii_case(theirs),
                _ => false,
            };
            let same_end = read.tangent == (self.protocol.reading.t_end == TEnd::Tangent);
            reading.other_definition = !(same_lead && same_end);
            reading.qrs = read.qrs.or(reading.qrs);
            reading.rate =
                read.rr.and_then(|rr| PerMinute::new(60_000.0 / rr.get()).ok()).or(reading.rate);
            reading.quality = if reading.qt.is_some() { Quality::Good } else { Quality::None };
        }
        reading
    }

    /// QTc of a reading by a formula, with its doubt in ms.
    pub fn qtc(&self, reading: &Reading<'_>, formula: Formula) -> Result<(Qtc, f64), NoQtc> {
        let (qt, doubt) = reading.qt.ok_or(NoQtc::NoQt)?;
        let rate = reading.rate.ok_or(NoQtc::NoRate)?;
        let qtc = formula.correct(qt, rate, self.sex()).map_err(NoQtc::Formula)?;
        Ok((qtc, doubt.get() * formula.slope(rate, self.sex())))
    }

    /// Whether a reading's QRS is wide or its beats paced.
    pub fn is_wide(&self, reading: &Reading<'_>) -> bool {
        reading.recorded.tracing.paced
            || reading.qrs.is_some_and(|qrs| qrs.get() >= self.protocol.wide_qrs_ms)
    }

    /// The person's choice; else the last good tracing before the first listed medicine of this stay and not too long
    /// before it; else the first good one that is not the latest.
    fn find_baseline(&self, tracings: &[&'a Recorded]) -> Result<Reading<'a>, NoBaseline> {
        let gives_qtc =
            |reading: &Reading<'_>| self.qtc(reading, self.protocol.reading.formula).is_ok();
        if let Some((chosen, _)) = &self.patient.baseline {
            let found = tracings
                .iter()
                .find(|recorded| recorded.tracing.id == *chosen)
                .map(|recorded| self.read(recorded));
            return found.filter(gives_qtc).ok_or(NoBaseline::ChosenGone);
        }
        let good: Vec<Reading<'a>> = tracings
            .iter()
            .map(|recorded| self.read(recorded))
            .filter(|reading| {
                reading.quality == Quality::Good && !reading.other_definition && gives_qtc(reading)
            })
            .collect();
        let from = self.patient.stay_from(self.now);
        let first_medicine = self
            .exposures
            .iter()
            .filter(|(index, _)| self.list.medicines().get(**index).is_some_and(|m| !m.indirect))
            .filter(|(_, exposure)| {
                exposure.active
                    || exposure.until.zip(from).is_some_and(|(until, from)| until >= from)
            })
            .map(|(_, exposure)| exposure.started)
            .min();
        let before = first_medicine.and_then(|start| {
            let near = |at: At| at <= start && start - at <= self.protocol.baseline_within;
            good.iter().rev().find(|reading| near(reading.recorded.at))
        });
        let latest = tracings.last().map(|recorded| &recorded.tracing.id);
        let other = |reading: &&Reading<'_>| Some(&reading.recorded.tracing.id) != latest;
        before.filter(other).or_else(|| good.iter().find(other)).cloned().ok_or(NoBaseline::None)
    }

    /// Works out exposure to listed substances, and what the list doesn't know.
    fn expose(&mut self) {
        let mut known: Vec<(&'a MedicineName, Recognised)> = Vec::new();
        let mut unknown: Vec<&'a str> = Vec::new();
        let list = self.list;
        let mut listed = |medicine: &'a MedicineName, route: Option<&str>| -> Vec<usize> {
            let place = known.iter().position(|(name, _)| *name == medicine).unwrap_or_else(|| {
                known.push((medicine, list.recognise(medicine)));
                known.len() - 1
            });
            match known.get(place).map(|(_, found)| found) {
                Some(Recognised::Listed(found)) => found
                    .iter()
                    .copied()
                    .filter(|index| {
                        list.medicines()
                            .get(*index)
                            .is_some_and(|medicine| medicine.counts_by(route))
                    })
                    .collect(),
                Some(Recognised::No) => {
                    if !unknown.contains(&&*medicine.text) {
                        unknown.push(&medicine.text);
                    }
                    Vec::new()
                }
                Some(Recognised::LeftOut) | None => Vec::new(),
            }
        };
        let mut courses: BTreeMap<usize, Vec<Piece<'a>>> = BTreeMap::new();
        for dose in self.patient.doses(self.now) {
            for index in listed(&dose.given.medicine, dose.given.route.as_deref()) {
                courses.entry(index).or_default().push(Piece::Dose(dose));
            }
        }
        for now in self.patient.orders(self.now) {
            for index in listed(&now.order.medicine, now.order.route.as_deref()) {
                if now.since > self.now {
                    self.changes_at(now.since);
                } else {
                    courses.entry(index).or_default().push(Piece::Order(now));
                }
            }
        }
        self.exposures = courses
            .into_iter()
            .filter_map(|(index, pieces)| {
                let medicine = list.medicines().get(index)?;
                Some((index, self.course(medicine, pieces)?))
            })
            .collect();
        self.not_recognised = unknown;
    }

    /// Puts doses and orders of one substance together to its latest course.
    fn course(&self, medicine: &Medicine, mut pieces: Vec<Piece<'a>>) -> Option<Exposure<'a>> {
        pieces.sort_by(|a, b| a.key().cmp(&b.key()));
        let lasts = self.half_lives(medicine, self.protocol.active_half_lives);
        let counts = self.protocol.orders == Orders::Count;
        let mut course: Option<Exposure<'a>> = None;
        let mut earlier_order = None;
        for piece in &pieces {
            let (from, until) = match piece {
                Piece::Dose(dose) => (dose.at, Some(dose.at + lasts)),
                Piece::Order(now) if counts => (now.since, now.until.map(|until| until + lasts)),
                Piece::Order(_) => continue,
            };
            if course.as_ref().is_none_or(|course| course.until.is_some_and(|end| end < from)) {
                course = Some(Exposure::since(from));
                earlier_order = None;
            }
            let Some(going) = &mut course else { continue };
            going.until = going.until.zip(until).map(|(one, other)| one.max(other));
            going.add(piece, &mut earlier_order);
        }
        let mut course = course?;
        for piece in &pieces {
            if let Piece::Order(now) = piece
                && now.until.is_none()
            {
                course.orders.push(now.order);
                course.note_route(now.order.route.as_deref());
                if let Some(end) = now.order.ends {
                    self.changes_at(end);
                }
            }
        }
        course.active = course.until.is_none_or(|until| self.now < until);
        if let Some(until) = course.until {
            self.changes_at(until);
        }
        Some(course)
    }

    /// So many half-lives of a substance; the protocol's assumed one where the list gives none.
    pub fn half_lives(&self, medicine: &Medicine, number: f64) -> TimeDelta {
        let one =
            medicine.half_life.map_or(self.protocol.unknown_half_life, |hours| span_h(hours.get()));
        span_h(one.num_milliseconds() as f64 / 3_600_000.0 * number)
    }

    /// Active listed substances.
    pub fn active(&self) -> impl Iterator<Item = (&'a Medicine, &Exposure<'a>)> {
        let list: &'a MedicineList = self.list;
        self.exposures
            .iter()
            .filter(|(_, exposure)| exposure.active)
            .filter_map(move |(index, exposure)| Some((list.medicines().get(*index)?, exposure)))
    }

    /// Active listed substances that prolong QT themselves.
    pub fn prolonging(&self) -> impl Iterator<Item = (&'a Medicine, &Exposure<'a>)> {
        self.active().filter(|(medicine, _)| !medicine.indirect)
    }

    /// Results of an analyte in this stay, specimens up to a moment, oldest first.
    fn results_of(&self, analyte: Analyte, before: At) -> Vec<ResultNow<'a>> {
        let from = self.patient.stay_from(self.now);
        let mut found: Vec<_> = self
            .patient
            .results(self.now)
            .filter(|now| {
                now.result.analyte == analyte
                    && now.collected <= before
                    && from.is_none_or(|from| now.collected >= from)
            })
            .collect();
        found.sort_by(|a, b| (a.collected, &a.result.id).cmp(&(b.collected, &b.result.id)));
        found
    }

    /// The latest result of an analyte that has a number.
    fn latest_result(&self, analyte: Analyte) -> Option<ResultNow<'a>> {
        let found = self.results_of(analyte, self.now);
        found.into_iter().rev().find(|now| now.result.value.is_some())
    }

    /// When specimens of an electrolyte that gave a reliable number were taken, in this stay.
    pub fn collected(&self, of: Of) -> Vec<At> {
        self.results_of(of.analyte(), self.now)
            .into_iter()
            .filter(|now| now.result.value.is_some() && spoilt(now.result).is_none())
            .map(|now| now.collected)
            .collect()
    }

    /// The latest result of an electrolyte, where its specimen was spoilt, whether or not a number came of it.
    pub fn spoiled(&self, of: Of) -> Option<ResultNow<'a>> {
        let latest = self.results_of(of.analyte(), self.now).into_iter().next_back();
        latest.filter(|now| spoilt(now.result).is_some())
    }

    /// The latest total calcium, uncorrected.
    pub fn total_calcium(&self) -> Option<ResultNow<'a>> {
        self.latest_result(Analyte::CalciumTotal)
    }

    /// An electrolyte's latest value; corrected calcium where both total calcium and an albumin near it are known.
    pub fn electrolyte(&self, of: Of) -> Option<Electrolyte> {
        self.known(of, self.latest_result(of.analyte())?)
    }

    /// Its values from specimens from one moment up to, and without, another; oldest first.
    pub fn electrolytes_between(&self, of: Of, from: At, until: At) -> Vec<Electrolyte> {
        self.results_of(of.analyte(), until)
            .into_iter()
            .filter(|now| from <= now.collected && now.collected < until)
            .filter_map(|now| self.known(of, now))
            .collect()
    }

    fn known(&self, of: Of, now: ResultNow<'a>) -> Option<Electrolyte> {
        let value = now.result.value?;
        let stale_from = now.collected + self.protocol.stale_after;
        self.changes_at(stale_from);
        let mut spoilt_by = spoilt(now.result);
        let mut number = value.number;
        let mut rests_on = vec![now.result.id.clone()];
        if of == Of::CalciumCorrected {
            let (albumin, g_per_l) = self.albumin_near(now.collected)?;
            number = crate::electrolytes::corrected_calcium(number, g_per_l);
            spoilt_by = spoilt_by.or(spoilt(albumin));
            rests_on.push(albumin.id.clone());
        }
        Some(Electrolyte {
            value: number,
            bound: value.bound,
            as_sent: now.result.as_sent.clone(),
            collected: now.collected,
            stale: self.now >= stale_from,
            unreliable: spoilt_by.is_some(),
            reads_high: spoilt_by == Some(Spoilt::ReadsHigh),
            rests_on,
            source: now.source.clone(),
        })
    }

    /// The albumin taken nearest to a moment, if it is near enough; of two, the earlier.
    fn albumin_near(&self, at: At) -> Option<(&'a LabResult, f64)> {
        self.results_of(Analyte::Albumin, self.now)
            .into_iter()
            .filter_map(|now| {
                let value = now.result.value.filter(|value| value.bound == Bound::Equal)?;
                Some(((now.collected - at).abs(), now.result, value.number))
            })
            .filter(|(apart, _, _)| *apart <= self.protocol.albumin_within)
            .min_by_key(|(apart, _, _)| *apart)
            .map(|(_, result, number)| (result, number))
    }

    /// Calcium in the best form at hand: ionised, unless only the corrected one is fresh and reliable.
    pub fn best_calcium(&self) -> Of {
        let worth = |of| match self.electrolyte(of) {
            Some(found) if !found.stale && !found.unreliable => 2,
            Some(_) => 1,
            None => 0,
        };
        if worth(Of::CalciumIonised) >= worth(Of::CalciumCorrected) {
            Of::CalciumIonised
        } else {
            Of::CalciumCorrected
        }
    }

    /// The latest creatinine of this stay, µmol/L.
    pub fn creatinine(&self) -> Option<(f64, At, &'a ResultId)> {
        let now = self.latest_result(Analyte::Creatinine)?;
        Some((now.result.value?.number, now.collected, &now.result.id))
    }

    /// What a tracing or a result says as it holds now, so that a reading anew is seen to be another one.
    pub fn says(&self, basis: &Basis) -> Option<String> {
        match basis {
            Basis::Tracing(id) => {
                let reading = self.read(self.patient.tracing(id)?);
                let by =
                    reading.over_read_by.map_or(&*reading.recorded.tracing.engine, Person::as_str);
                Some(format!("{:?} {:?} {:?} {by}", reading.qt, reading.rate, reading.quality))
            }
            Basis::Result(id) => {
                let now = self.patient.results(self.now).find(|now| now.result.id == *id)?;
                Some(format!("{:?} {:?}", now.result.value, now.result.specimen))
            }
            Basis::Dose(_)
            | Basis::Order(_)
            | Basis::Medicine(_)
            | Basis::Due(..)
            | Basis::Said(_) => None,
        }
    }

    /// The latest tracing's identity.
    pub fn tracing_id(&self) -> Option<&'a TracingId> {
        self.latest.as_ref().map(|reading| &reading.recorded.tracing.id)
    }
}

/// So many hours; at most some thirty thousand years, so that no moment runs out of the calendar.
#[allow(clippy::cast_possible_truncation, reason = "clamped to what a TimeDelta holds")]
pub(crate) fn span_h(hours: f64) -> TimeDelta {
    TimeDelta::milliseconds((hours * 3_600_000.0).clamp(-1e15, 1e15) as i64)
}

/// A dose or an order of one substance.
enum Piece<'a> {
    Dose(&'a Dose),
    Order(OrderNow<'a>),
}

impl Piece<'_> {
    fn key(&self) -> (At, &str) {
        match self {
            Piece::Dose(dose) => (dose.at, &dose.given.id),
            Piece::Order(now) => (now.since, now.order.id.as_str()),
        }
    }
}

impl<'a> Exposure<'a> {
    fn since(at: At) -> Self {
        Self {
            started: at,
            until: Some(at),
            doses: Vec::new(),
            orders: Vec::new(),
            dose_changed: None,
            active: false,
            routes: Vec::new(),
        }
    }

    /// Adds a piece of the course, in the order of time.
    fn add(&mut self, piece: &Piece<'a>, earlier_order: &mut Option<&'a Order>) {
        match piece {
            Piece::Dose(dose) => {
                let other = |last: &&Dose| {
                    (&last.given.dose, &last.given.route) != (&dose.given.dose, &dose.given.route)
                };
                if self.doses.last().is_some_and(other) {
                    self.dose_changed = self.dose_changed.max(Some(dose.at));
                }
                self.note_route(dose.given.route.as_deref());
                self.doses.push(dose);
            }
            Piece::Order(now) => {
                // A change of dose comes as new content of the order, or as another order after it.
                if earlier_order.is_some_and(|before| !same_amount(before, now.order)) {
                    self.dose_changed = self.dose_changed.max(Some(now.since));
                }
                self.dose_changed = self.dose_changed.max(now.changed.filter(|at| *at > now.since));
                *earlier_order = Some(now.order);
            }
        }
    }

    fn note_route(&mut self, route: Option<&'a str>) {
        if let Some(route) = route.map(str::trim).filter(|route| !route.is_empty())
            && !self.routes.iter().any(|known| known.eq_ignore_ascii_case(route))
        {
            self.routes.push(route);
        }
    }
}

/// Why there is no QTc.
#[derive(Debug, Clone, Copy, PartialEq, thiserror::Error)]
pub enum NoQtc {
    /// No QT.
    #[error("no QT could be told")]
    NoQt,
    /// No rate.
    #[error("no rate is known")]
    NoRate,
    /// The formula says no.
    #[error("{0}")]
    Formula(NoCorrection),
}
