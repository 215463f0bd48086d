//! The figures themselves.

use super::{AlertLife, Period, Stays};
use crate::agree::{Share, centile, share};
use ebbmark_rules::fact::{At, Body, Fact, Quality, Rhythm, Tracing};
use ebbmark_rules::ids::{ContentHash, TracingId};
use serde::Serialize;
use std::collections::{BTreeMap, BTreeSet};

/// Middle and 90th centile of some times, minutes.
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
pub struct Spread {
    /// How many there were.
    pub n: usize,
    /// Half took at most this long.
    pub median_min: f64,
    /// Nine of ten took at most this long.
    pub centile_90_min: f64,
}

/// Alerts of one kind.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Count {
    /// How many.
    pub alerts: usize,
    /// Per 100 patient-days of the same ward or of all; `None` without a patient-day.
    pub per_100_patient_days: Option<f64>,
}

/// What a period's alerts were worth. No patient's identity is in it.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Figures {
    /// First moment of the period.
    pub from: At,
    /// First moment after it.
    pub to: At,
    /// Patient-days.
    pub patient_days: f64,
    /// All alerts about patients.
    pub alerts: Count,
    /// By the highest tier that each reached.
    pub by_tier: BTreeMap<String, Count>,
    /// By ward, per 100 patient-days of that ward.
    pub by_ward: BTreeMap<String, Count>,
    /// By the rule that set the tier.
    pub by_rule: BTreeMap<String, Count>,
    /// Alerts about the service itself.
    pub technical: usize,
    /// Raised to the first message taken by the mail server.
    pub to_told: Option<Spread>,
    /// Raised to the first answer.
    pub to_answered: Option<Spread>,
    /// Raised to over.
    pub to_closed: Option<Spread>,
    /// Never answered in the period and asking for an answer.
    pub unanswered: usize,
    /// Messages beyond the first, all alerts together.
    pub repeats: usize,
    /// Times that nobody answered and it went on.
    pub escalations: usize,
    /// Times that somebody put one off.
    pub snoozes: usize,
    /// Alerts that a correction disproved.
    pub withdrawn: usize,
    /// Alerts resting on a tracing that was over-read afterwards: the share that was not withdrawn.
    pub confirmed: Option<Share>,
    /// The same by rule.
    pub confirmed_by_rule: BTreeMap<String, Share>,
    /// Tracings measured.
    pub tracings: usize,
    /// Share on which no QT could be told.
    pub unreadable: Option<Share>,
    /// Share that a person should look at.
    pub doubtful: Option<Share>,
    /// Share with QRS of 120 ms or more, or paced.
    pub wide_qrs: Option<Share>,
    /// Share with RR irregularly irregular.
    pub irregularly_irregular: Option<Share>,
    /// Share of alerts with a QTc on which the formulas fell on different sides of the limit.
    pub formula_split: Option<Share>,
    /// Protocols that came into force, in time.
    pub protocols: Vec<(At, ContentHash)>,
}

/// Computes the figures of a period from all facts up to its end and the lives of all alerts.
pub fn figures<'a>(
    period: Period,
    facts: impl IntoIterator<Item = &'a Fact>,
    lives: &[AlertLife],
) -> Figures {
    let mut stays = Stays::default();
    let mut tracings: BTreeMap<&TracingId, &Tracing> = BTreeMap::new();
    let mut over_read: BTreeSet<&TracingId> = BTreeSet::new();
    let mut protocols = Vec::new();
    for fact in facts.into_iter().filter(|fact| fact.received_at < period.to) {
        stays.take(fact);
        match &fact.body {
            Body::Tracing(tracing) if period.holds(fact.received_at) => {
                tracings.insert(&tracing.id, tracing);
            }
            Body::TracingWithdrawn(id) => {
                tracings.remove(id);
            }
            Body::OverRead(read) => {
                over_read.insert(&read.tracing);
            }
            Body::ProtocolInForce(hash) if period.holds(fact.received_at) => {
                protocols.push((fact.received_at, hash.clone()));
            }
            _ => {}
        }
    }
    let days = stays.days(period);
    let all: Vec<&AlertLife> =
        lives.iter().filter(|life| period.holds(life.raised.raised_at)).collect();
    let (mine, technical): (Vec<&AlertLife>, Vec<&AlertLife>) =
        all.iter().partition(|life| life.raised.patient.is_some());
    let ward = |life: &AlertLife| {
        let patient = life.raised.patient.as_ref()?;
        stays.ward_at(patient, life.raised.raised_at).cloned()
    };
    let by = |key: &dyn Fn(&AlertLife) -> String, denominator: &dyn Fn(&str) -> f64| {
        let mut counts: BTreeMap<String, usize> = BTreeMap::new();
        for life in &mine {
            *counts.entry(key(life)).or_default() += 1;
        }
        counts
            .into_iter()
            .map(|(name, n)| (name.clone(), count(n, denominator(&name))))
            .collect::<BTreeMap<_, _>>()
    };
    let of_all = |_: &str| days.all;
    let of_ward = |name: &str| {
        days.by_ward.iter().find(|(ward, _)| ward.as_str() == name).map_or(0.0, |(_, days)| *days)
    };
    let minutes = |end: &dyn Fn(&AlertLife) -> Option<At>| {
        let taken: Vec<f64> = mine
            .iter()
            .filter_map(|life| {
                Some((end(life)? - life.raised.raised_at).num_milliseconds() as f64 / 60_000.0)
            })
            .collect();
        Some(Spread {
            n: taken.len(),
            median_min: centile(&taken, 0.5)?,
            centile_90_min: centile(&taken, 0.9)?,
        })
    };
    let checked: Vec<&&AlertLife> = mine
        .iter()
        .filter(|life| life.last.evidence.tracing.as_ref().is_some_and(|id| over_read.contains(id)))
        .collect();
    let confirmed = |lives: &[&&AlertLife]| {
        share(lives.iter().filter(|life| !life.withdrawn).count(), lives.len())
    };
    let mut checked_by_rule: BTreeMap<String, Vec<&&AlertLife>> = BTreeMap::new();
    for life in &checked {
        checked_by_rule.entry(life.raised.rule.as_str().to_owned()).or_default().push(life);
    }
    let of_tracings = |is: &dyn Fn(&Tracing) -> bool| {
        share(tracings.values().filter(|tracing| is(tracing)).count(), tracings.len())
    };
    let with_qtc: Vec<&&AlertLife> =
        mine.iter().filter(|life| !life.raised.evidence.formulas.is_empty()).collect();
    let split = |life: &AlertLife| life.raised.evidence.formulas.iter().any(|row| row.split);
    Figures {
        from: period.from,
        to: period.to,
        patient_days: days.all,
        alerts: count(mine.len(), days.all),
        by_tier: by(&|life| life.highest.1.to_string(), &of_all),
        by_ward: by(
            &|life| ward(life).map_or("no ward recorded".into(), |ward| ward.to_string()),
            &of_ward,
        ),
        by_rule: by(&|life| life.raised.rule.to_string(), &of_all),
        technical: technical.len(),
        to_told: minutes(&|life| life.told),
        to_answered: minutes(&|life| life.answered),
        to_closed: minutes(&|life| life.closed),
        unanswered: mine
            .iter()
            .filter(|life| life.messages > 0 && life.answered.is_none() && life.closed.is_none())
            .count(),
        repeats: mine.iter().map(|life| life.messages.saturating_sub(1)).sum(),
        escalations: mine.iter().map(|life| life.escalations).sum(),
        snoozes: mine.iter().map(|life| life.snoozes).sum(),
        withdrawn: mine.iter().filter(|life| life.withdrawn).count(),
        confirmed: confirmed(&checked),
        confirmed_by_rule: checked_by_rule
            .into_iter()
            .filter_map(|(rule, lives)| Some((rule, confirmed(&lives)?)))
            .collect(),
        tracings: tracings.len(),
        unreadable: of_tracings(&|tracing| tracing.quality == Quality::None),
        doubtful: of_tracings(&|tracing| tracing.quality == Quality::Doubtful),
        wide_qrs: of_tracings(&|tracing| {
            tracing.paced || tracing.qrs.is_some_and(|qrs| qrs.get() >= 120.0)
        }),
        irregularly_irregular: of_tracings(&|tracing| {
            tracing.rhythm == Some(Rhythm::IrregularlyIrregular)
        }),
        formula_split: share(with_qtc.iter().filter(|life| split(life)).count(), with_qtc.len()),
        protocols,
    }
}

fn count(alerts: usize, days: f64) -> Count {
    Count { alerts, per_100_patient_days: (days > 0.0).then(|| alerts as f64 / days * 100.0) }
}
