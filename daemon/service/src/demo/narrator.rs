//! Telling on the terminal what happens on the ward, line by line, with the ward's own time.

use super::moment;
use super::play::Stop;
use crate::store::{Reader, StoreError};
use ebbmark_demo_ward::story::Story;
use ebbmark_rules::alert::{Decision, LifeStep};
use ebbmark_rules::correction::{Formula, Qt};
use ebbmark_rules::fact::{At, Body, Fact, Quality, Tracing};
use ebbmark_rules::ids::{AlertId, PatientId, TierName};
use std::collections::BTreeMap;

/// Follows the store and says what is new in it.
pub(super) struct Narrator<'s> {
    story: &'s Story,
    facts: i64,
    decisions: i64,
    held: usize,
    /// Whose an alert is, and its tier as last told.
    alerts: BTreeMap<AlertId, (Option<PatientId>, TierName)>,
    said: Option<At>,
}

impl<'s> Narrator<'s> {
    /// Passes over what is there already.
    pub(super) fn new(story: &'s Story, reader: &Reader) -> Result<Self, StoreError> {
        let mut narrator =
            Self { story, facts: 0, decisions: 0, held: 0, alerts: BTreeMap::new(), said: None };
        narrator.news(story.begins, reader)?;
        narrator.said = None;
        Ok(narrator)
    }

    /// What the story says as something begins.
    pub(super) fn announce(&mut self, stop: &Stop<'_>) -> String {
        let told = stop.step.map(|step| step.tell.as_slice()).unwrap_or_default();
        told.iter().map(|sentence| self.line(stop.at, "", sentence)).collect()
    }

    /// What came of it.
    pub(super) fn news(&mut self, at: At, reader: &Reader) -> Result<String, StoreError> {
        let mut text = String::new();
        let mut tracings = Vec::new();
        let seen = self.facts;
        reader.facts(|seq, fact| {
            self.facts = self.facts.max(seq);
            if seq > seen && matches!(fact.body, Body::Tracing(_)) {
                tracings.push(fact);
            }
            Ok(())
        })?;
        for fact in &tracings {
            if let Body::Tracing(tracing) = &fact.body {
                text += &self.of(at, fact.patient.as_ref(), &read(fact, tracing));
            }
        }
        let held = reader.held()?;
        for file in held.iter().skip(self.held) {
            text += &self.line(at, "", &format!("Held for a person: a file {}.", file.reason));
        }
        self.held = held.len();
        loop {
            let decisions = reader.decisions_after(self.decisions)?;
            if decisions.is_empty() {
                return Ok(text);
            }
            for (seq, body) in decisions {
                self.decisions = seq;
                let decision = serde_json::from_str(&body).map_err(|error| StoreError::Row {
                    table: "decision",
                    why: format!("not the expected shape at column {}", error.column()),
                })?;
                text += &self.decision(at, &decision);
            }
        }
    }

    fn decision(&mut self, at: At, decision: &Decision) -> String {
        match decision {
            Decision::Raised(alert) => {
                self.alerts.insert(alert.id.clone(), (alert.patient.clone(), alert.tier.clone()));
                let tier = alert.tier.as_str().to_uppercase();
                let says = format!("{tier}: {}", alert.evidence.seen);
                self.of(at, alert.patient.as_ref(), &says)
            }
            Decision::Changed(alert) => {
                let known = self
                    .alerts
                    .insert(alert.id.clone(), (alert.patient.clone(), alert.tier.clone()));
                if known.is_some_and(|(_, tier)| tier == alert.tier) {
                    return String::new();
                }
                let tier = alert.tier.as_str().to_uppercase();
                let says = format!("now {tier}: {}", alert.evidence.seen);
                self.of(at, alert.patient.as_ref(), &says)
            }
            Decision::Tell(notice) => {
                let answer = notice
                    .answer_by
                    .map(|at| format!("; answer by {}", self.story.days.local(at).format("%H:%M")))
                    .unwrap_or_default();
                let says = format!("told: {}{answer}", notice.role);
                self.of(at, notice.alert.patient.as_ref(), &says)
            }
            Decision::Life { alert, step, .. } => {
                let whose = self.alerts.get(alert).and_then(|(patient, _)| patient.clone());
                match life(step) {
                    Some(says) => self.of(at, whose.as_ref(), &says),
                    None => String::new(),
                }
            }
        }
    }

    fn of(&mut self, at: At, patient: Option<&PatientId>, says: &str) -> String {
        let bed = match patient {
            Some(patient) => self.story.bed(patient).unwrap_or("?").to_owned(),
            None => "--".to_owned(),
        };
        self.line(at, &bed, says)
    }

    /// The moment stands only on its first line.
    fn line(&mut self, at: At, bed: &str, says: &str) -> String {
        let when = if self.said == Some(at) { String::new() } else { moment(self.story, at) };
        self.said = Some(at);
        if bed.is_empty() {
            format!("{when:<12} {says}\n")
        } else {
            format!("{when:<12}   {bed:<4} {says}\n")
        }
    }
}

fn life(step: &LifeStep) -> Option<String> {
    match step {
        LifeStep::Told { .. } | LifeStep::Refused { .. } => None,
        LifeStep::Acknowledged { by, intent } => Some(format!("answered by {by}: {intent}")),
        LifeStep::Snoozed { by, why, .. } => Some(format!("put off by {by}: {why}")),
        LifeStep::SnoozeEnded => Some("no longer put off".to_owned()),
        LifeStep::HandedOver { by, to } => Some(format!("handed over by {by} to {to}")),
        LifeStep::Escalated { to, .. } => Some(format!("nobody has answered: next is {to}")),
        LifeStep::ClosedByFacts { because } => Some(format!("over: {because}")),
        LifeStep::ClosedByPerson { by, why } => Some(format!("closed by {by}: {why}")),
        LifeStep::Withdrawn { because } => Some(format!("withdrawn: {because}")),
    }
}

/// A measured tracing in a line.
fn read(fact: &Fact, tracing: &Tracing) -> String {
    let why = || {
        let why: Vec<&str> = tracing.why.iter().map(|why| &**why).collect();
        if why.is_empty() { String::new() } else { format!(" ({})", why.join("; ")) }
    };
    let (Some(global), Some(rate)) = (tracing.global, tracing.rate) else {
        return format!("tracing: no QT can be told{}", why());
    };
    // The example protocol decides by where T meets the baseline.
    let Some(qt) = global.qt_threshold.filter(|_| tracing.quality != Quality::None) else {
        return format!("tracing: no QT can be told{}", why());
    };
    // Fridericia has one form for both sexes, so the chart isn't asked.
    let qtc = Formula::Fridericia.correct(Qt(qt), rate, None).map_or_else(
        |why| format!("no QTc: {why}"),
        |qtc| format!("QTc {:.0} ms (Fridericia)", qtc.value.get()),
    );
    let doubt = if tracing.quality == Quality::Doubtful { why() } else { String::new() };
    let age = fact.received_at - fact.occurred_at;
    format!(
        "tracing of {} min ago: QT {:.0} ± {:.0} ms at {:.0}/min, {qtc}{doubt}",
        age.num_minutes(),
        qt.get(),
        global.doubt.get(),
        rate.get()
    )
}
