//! A patient as the protocol sees them at one moment: the reading that decides, the baseline, what is active, what is
//! known of the electrolytes. Everything that will change by time alone notes when, so that nobody has to ask again
//! before.

use crate::correction::{Formula, NoCorrection, Qt, Qtc};
use crate::fact::{Analyte, At, Bound, LabResult, Quality, ResultValue, Sex, Source};
use crate::ids::{Person, ResultId, TracingId};
use crate::medicines::{Medicine, MedicineList, Recognised};
use crate::patient::{Patient, Recorded, ResultNow};
use crate::protocol::condition::Of;
use crate::protocol::{Orders, Protocol, TEnd};
use crate::units::{Ms, PerMinute};
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
    /// The latest tracing, whatever it is worth.
    pub latest: Option<Reading<'a>>,
    /// The tracing before that gave a QTc.
    pub before: Option<Reading<'a>>,
    /// The baseline, or why there is none.
    pub baseline: Result<Reading<'a>, NoBaseline>,
    /// Listed substances that were ever given or ordered, by their place on the list.
    pub exposures: BTreeMap<usize, Exposure>,
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

/// A listed substance's story.
#[derive(Debug, Clone)]
pub struct Exposure {
    /// First dose or start of the first order.
    pub started: At,
    /// Times of doses that were given, oldest first, with dose and route as written.
    pub doses: Vec<(At, String)>,
    /// Running orders, as written.
    pub orders: Vec<String>,
    /// When the dose as written last changed.
    pub dose_changed: Option<At>,
    /// Active now, by the protocol's rule.
    pub active: bool,
    /// Routes of doses and running orders, as written.
    pub routes: Vec<String>,
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
        view.expose();
        let tracings = patient.tracings(now);
        view.latest = tracings.last().map(|recorded| view.read(recorded));
        view.before = tracings
            .iter()
            .rev()
            .skip(1)
            .map(|recorded| view.read(recorded))
            .find(|read| read.qt.is_some());
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

    /// The person's choice; else the last good tracing before the first listed medicine and not too long before it;
    /// else the first good one that is not the latest.
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
        let first_medicine = self.exposures.values().map(|exposure| exposure.started).min();
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
        let mut exposures: BTreeMap<usize, Exposure> = BTreeMap::new();
        let mut unknown: Vec<&'a str> = Vec::new();
        let mut doses: Vec<_> = self.patient.doses(self.now).collect();
        doses.sort_by_key(|dose| dose.at);
        let written = |dose: Option<&crate::fact::Dose>, route: Option<&str>| {
            let dose = dose.map(|dose| format!("{} {}", dose.amount, dose.unit));
            [dose, route.map(str::to_owned)].into_iter().flatten().collect::<Vec<_>>().join(" ")
        };
        let recognise =
            |medicine: &'a crate::fact::MedicineName, unknown: &mut Vec<&'a str>| match self
                .list
                .recognise(medicine)
            {
                Recognised::Listed(found) => found,
                Recognised::LeftOut => Vec::new(),
                Recognised::No => {
                    if !unknown.contains(&&*medicine.text) {
                        unknown.push(&medicine.text);
                    }
                    Vec::new()
                }
            };
        for dose in doses {
            let route = dose.given.route.as_deref();
            for index in recognise(&dose.given.medicine, &mut unknown) {
                if !self
                    .list
                    .medicines()
                    .get(index)
                    .is_some_and(|medicine| medicine.counts_by(route))
                {
                    continue;
                }
                let text = written(dose.given.dose.as_ref(), route);
                let exposure = exposures.entry(index).or_insert_with(|| Exposure::since(dose.at));
                if exposure.doses.last().is_some_and(|(_, last)| *last != text) {
                    exposure.dose_changed = Some(dose.at);
                }
                exposure.started = exposure.started.min(dose.at);
                exposure.doses.push((dose.at, text));
                exposure.note_route(route);
            }
        }
        for now in self.patient.orders(self.now) {
            let route = now.order.route.as_deref();
            for index in recognise(&now.order.medicine, &mut unknown) {
                if !self
                    .list
                    .medicines()
                    .get(index)
                    .is_some_and(|medicine| medicine.counts_by(route))
                {
                    continue;
                }
                if now.since > self.now {
                    self.changes_at(now.since);
                    continue;
                }
                let counts = self.protocol.orders == Orders::Count;
                if !counts && !exposures.contains_key(&index) {
                    continue;
                }
                let exposure = exposures.entry(index).or_insert_with(|| Exposure::since(now.since));
                if counts {
                    exposure.started = exposure.started.min(now.since);
                    if now.changed > now.since {
                        exposure.dose_changed = exposure.dose_changed.max(Some(now.changed));
                    }
                }
                if now.running {
                    let frequency =
                        now.order.frequency.as_deref().map(|f| format!(" {f}")).unwrap_or_default();
                    exposure
                        .orders
                        .push(format!("{}{frequency}", written(now.order.dose.as_ref(), route)));
                    exposure.note_route(route);
                    exposure.active |= counts;
                    if let Some(end) = now.order.ends {
                        self.changes_at(end);
                    }
                }
            }
        }
        for (index, exposure) in &mut exposures {
            if let (Some((last, _)), Some(medicine)) =
                (exposure.doses.last(), self.list.medicines().get(*index))
            {
                let gone = *last + self.half_lives(medicine, self.protocol.active_half_lives);
                exposure.active |= self.now < gone;
                self.changes_at(gone);
            }
        }
        self.exposures = exposures;
        self.not_recognised = unknown;
    }

    /// So many half-lives of a substance; the protocol's assumed one where the list gives none.
    pub fn half_lives(&self, medicine: &Medicine, number: f64) -> TimeDelta {
        let one = medicine.half_life.map_or(self.protocol.unknown_half_life, |hours| {
            TimeDelta::milliseconds((hours.get() * 3_600_000.0) as i64)
        });
        TimeDelta::milliseconds((one.num_milliseconds() as f64 * number) as i64)
    }

    /// Active listed substances.
    pub fn active(&self) -> impl Iterator<Item = (&'a Medicine, &Exposure)> {
        let list: &'a MedicineList = self.list;
        self.exposures
            .iter()
            .filter(|(_, exposure)| exposure.active)
            .filter_map(move |(index, exposure)| Some((list.medicines().get(*index)?, exposure)))
    }

    /// Results of an analyte, specimens up to a moment, oldest first.
    fn results_of(&self, analyte: Analyte, before: At) -> Vec<ResultNow<'a>> {
        let mut found: Vec<_> = self
            .patient
            .results(self.now)
            .filter(|now| now.result.analyte == analyte && now.collected <= before)
            .collect();
        found.sort_by(|a, b| (a.collected, &a.result.id).cmp(&(b.collected, &b.result.id)));
        found
    }

    /// The latest result of an analyte that has a number.
    fn latest_result(&self, analyte: Analyte) -> Option<ResultNow<'a>> {
        let found = self.results_of(analyte, self.now);
        found.into_iter().rev().find(|now| now.result.value.is_some())
    }

    /// When specimens of an electrolyte that gave a reliable number were taken.
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

    /// The latest creatinine, µmol/L.
    pub fn creatinine(&self) -> Option<(f64, At)> {
        let now = self.latest_result(Analyte::Creatinine)?;
        Some((now.result.value?.number, now.collected))
    }

    /// The latest tracing's identity.
    pub fn tracing_id(&self) -> Option<&'a TracingId> {
        self.latest.as_ref().map(|reading| &reading.recorded.tracing.id)
    }
}

impl Exposure {
    fn since(at: At) -> Self {
        Self {
            started: at,
            doses: Vec::new(),
            orders: Vec::new(),
            dose_changed: None,
            active: false,
            routes: Vec::new(),
        }
    }

    fn note_route(&mut self, route: Option<&str>) {
        if let Some(route) = route.map(str::trim).filter(|route| !route.is_empty()) {
            if !self.routes.iter().any(|known| known.eq_ignore_ascii_case(route)) {
                self.routes.push(route.to_owned());
            }
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
