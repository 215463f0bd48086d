//! What a careful person with a pencil would hold against the decider: its own book of open alerts, kept from decisions
//! alone, and what must hold in it at every step.

use chrono::{NaiveTime, Timelike};
use ebbmark_rules::alert::{Alert, AlertState, Decision, LifeStep, Notice, NoticeReason};
use ebbmark_rules::decide::{Decider, ask};
use ebbmark_rules::fact::At;
use ebbmark_rules::ids::{AlertId, PatientId};
use ebbmark_rules::protocol::Protocol;
use std::collections::{BTreeMap, BTreeSet};

type Key = (Option<PatientId>, Box<str>);

struct Open {
    alert: Alert,
    notices: u32,
    escalations: u32,
    answer_by: Option<At>,
    snoozed_until: Option<At>,
    refused_at: Option<At>,
}

#[derive(Default)]
pub(crate) struct Board {
    open: BTreeMap<AlertId, Open>,
    keys: BTreeMap<Key, AlertId>,
    ever: BTreeSet<AlertId>,
    closed_by_person: BTreeSet<Key>,
    last: Option<At>,
    pub(crate) raised: u64,
    pub(crate) escalated: u64,
    pub(crate) withdrawn: u64,
}

fn wrong<T>(what: impl Into<String>) -> Result<T, String> {
    Err(what.into())
}

impl Board {
    /// Takes what one fact, or one passing of time up to `now`, led to.
    pub(crate) fn take(
        &mut self,
        decisions: &[Decision],
        protocol: Option<&Protocol>,
        now: At,
    ) -> Result<(), String> {
        let mut urgent = BTreeSet::new();
        for decision in decisions {
            self.one(decision, protocol, now, &mut urgent)?;
        }
        match urgent.into_iter().find(|id| self.open.get(id).is_some_and(|open| open.notices == 0))
        {
            Some(id) => wrong(format!("{id}: of the highest tier and nobody was told at once")),
            None => Ok(()),
        }
    }

    fn in_order(&mut self, at: At, now: At) -> Result<(), String> {
        if at > now {
            return wrong(format!("a decision of {at} was taken at {now}, before its time"));
        }
        if self.last.is_some_and(|last| at < last) {
            return wrong(format!("a decision of {at} came after one of {:?}", self.last));
        }
        self.last = Some(at);
        Ok(())
    }

    fn one(
        &mut self,
        decision: &Decision,
        protocol: Option<&Protocol>,
        now: At,
        urgent: &mut BTreeSet<AlertId>,
    ) -> Result<(), String> {
        let highest = |alert: &Alert| {
            protocol.is_some_and(|protocol| alert.tier_rank as usize + 1 == protocol.tiers.len())
        };
        match decision {
            Decision::Raised(alert) => {
                self.in_order(alert.raised_at, now)?;
                let key: Key = (alert.patient.clone(), alert.concern.clone());
                if self.keys.contains_key(&key) {
                    return wrong(format!("a second open alert for {}", key.1));
                }
                if !self.ever.insert(alert.id.clone()) {
                    return wrong(format!("{} was used before", alert.id));
                }
                let known = protocol.is_some_and(|protocol| {
                    protocol.rules.iter().any(|rule| rule.id == alert.rule)
                });
                if !known && alert.patient.is_some() {
                    return wrong(format!("an alert of no rule: {}", alert.rule));
                }
                if alert.evidence.whom.is_empty() || alert.evidence.seen.is_empty() {
                    return wrong("an alert that does not say whom or what");
                }
                if highest(alert) {
                    urgent.insert(alert.id.clone());
                }
                self.raised += 1;
                self.closed_by_person.remove(&key);
                self.keys.insert(key, alert.id.clone());
                self.open.insert(
                    alert.id.clone(),
                    Open {
                        alert: (**alert).clone(),
                        notices: 0,
                        escalations: 0,
                        answer_by: None,
                        snoozed_until: None,
                        refused_at: None,
                    },
                );
            }
            Decision::Changed(alert) => {
                self.in_order(alert.as_of, now)?;
                let Some(open) = self.open.get_mut(&alert.id) else {
                    return wrong(format!("{} changed and is not open", alert.id));
                };
                if alert.tier_rank > open.alert.tier_rank {
                    open.escalations = 0;
                    open.snoozed_until = None;
                    open.answer_by = None;
                }
                if alert.tier_rank < open.alert.tier_rank {
                    // A lower tier's time to answer is counted from now on.
                    let tier = protocol.and_then(|p| p.tiers.get(alert.tier_rank as usize));
                    let within = tier.and_then(|tier| tier.answer_within);
                    if open.answer_by.is_some() {
                        open.answer_by = within.map(|within| alert.as_of + within);
                    }
                }
                open.alert = (**alert).clone();
            }
            Decision::Life { alert, at, step } => {
                self.in_order(*at, now)?;
                self.step(alert, *at, step)?;
            }
            Decision::Tell(notice) => {
                self.in_order(notice.at, now)?;
                self.told(notice, protocol)?;
            }
        }
        Ok(())
    }

    fn step(&mut self, id: &AlertId, at: At, step: &LifeStep) -> Result<(), String> {
        let Some(open) = self.open.get_mut(id) else {
            return wrong(format!("{id}: {step:?} of an alert that is not open"));
        };
        match step {
            LifeStep::Told { .. } => {}
            LifeStep::Refused { .. } => open.refused_at = Some(at),
            LifeStep::Acknowledged { .. } => {
                open.alert.state = AlertState::Acknowledged;
                open.answer_by = None;
                open.snoozed_until = None;
            }
            LifeStep::Snoozed { until, .. } => {
                open.alert.state = AlertState::Acknowledged;
                open.answer_by = None;
                open.snoozed_until = Some((*until).max(at));
            }
            LifeStep::SnoozeEnded => {
                if open.snoozed_until != Some(at) {
                    return wrong(format!(
                        "{id}: a snooze until {:?} ended at {at}",
                        open.snoozed_until
                    ));
                }
                open.snoozed_until = None;
                open.alert.state = AlertState::Open;
            }
            LifeStep::HandedOver { .. } => {
                open.alert.state = AlertState::Open;
                open.answer_by = None;
                open.snoozed_until = None;
            }
            LifeStep::Escalated { number, .. } => {
                let refused = open.refused_at == Some(at);
                if open.answer_by != Some(at) && !refused {
                    return wrong(format!("{id}: due {:?}, escalated {at}", open.answer_by));
                }
                if *number != open.escalations + 1 {
                    return wrong(format!("{id}: escalation {number} after {}", open.escalations));
                }
                if open.alert.state != AlertState::Open {
                    return wrong(format!("{id}: escalated although somebody took it on"));
                }
                open.escalations += 1;
                open.answer_by = None;
                self.escalated += 1;
            }
            LifeStep::ClosedByFacts { .. }
            | LifeStep::ClosedByPerson { .. }
            | LifeStep::Withdrawn { .. } => {
                let key: Key = (open.alert.patient.clone(), open.alert.concern.clone());
                if matches!(step, LifeStep::ClosedByPerson { .. }) {
                    self.closed_by_person.insert(key.clone());
                }
                self.withdrawn += u64::from(matches!(step, LifeStep::Withdrawn { .. }));
                self.keys.remove(&key);
                self.open.remove(id);
            }
        }
        Ok(())
    }

    fn told(&mut self, notice: &Notice, protocol: Option<&Protocol>) -> Result<(), String> {
        let ends = matches!(notice.reason, NoticeReason::Withdrawn | NoticeReason::Closed);
        if notice.recipients.is_empty() {
            return wrong(format!("{}: told to nobody as {}", notice.alert.id, notice.role));
        }
        let tier =
            protocol.and_then(|p| p.tiers.iter().find(|tier| tier.name == notice.alert.tier));
        let quiet = tier.zip(protocol).is_some_and(|(tier, protocol)| {
            let local = notice.at.with_timezone(&protocol.zone).time();
            tier.quiet.is_some_and(|hours| lies_within(hours, local))
        });
        if quiet && !ends {
            return wrong(format!("{}: told in its tier's quiet hours", notice.alert.id));
        }
        match self.open.get_mut(&notice.alert.id) {
            Some(open) => {
                if notice.step != open.notices {
                    return wrong(format!(
                        "{}: message {} after {}",
                        notice.alert.id, notice.step, open.notices
                    ));
                }
                open.notices += 1;
                open.answer_by = notice.answer_by;
            }
            None if ends => {}
            None => return wrong(format!("{}: told of an alert that is over", notice.alert.id)),
        }
        Ok(())
    }

    /// What must hold of every open alert once everything due up to `now` has been taken.
    pub(crate) fn nothing_dropped(&self, protocol: &Protocol, now: At) -> Result<(), String> {
        for (id, open) in self.open.iter().filter(|(_, open)| open.alert.state == AlertState::Open)
        {
            let tier = protocol.tiers.iter().find(|tier| tier.name == open.alert.tier);
            let Some(tier) = tier else { continue };
            match open.answer_by {
                Some(by) if by <= now => {
                    return wrong(format!("{id}: an answer was due {by}, now is {now}"));
                }
                Some(_) => {}
                None if tier.answer_within.is_none() => {}
                None => {
                    let local = now.with_timezone(&protocol.zone).time();
                    if !tier.quiet.is_some_and(|hours| lies_within(hours, local)) {
                        return wrong(format!("{id}: nobody answered and nobody is waited for"));
                    }
                }
            }
        }
        match self.open.values().find(|open| open.snoozed_until.is_some_and(|until| until <= now)) {
            Some(open) => wrong(format!("{}: a snooze is over", open.alert.id)),
            None => Ok(()),
        }
    }

    /// Open alerts are exactly those that the rules ask for, tier by tier.
    pub(crate) fn agrees(
        &self,
        decider: &Decider,
        patient: &PatientId,
        now: At,
    ) -> Result<(), String> {
        let Some(protocol) = decider.protocol() else { return Ok(()) };
        let asked = decider.view(patient, now, |view| {
            let mut asked: BTreeMap<String, usize> = BTreeMap::new();
            if !view.patient.gone(now) {
                for said in ask(view) {
                    if let Some(rank) = said.rank {
                        let known = asked.entry(said.rule.concern.clone()).or_insert(rank);
                        *known = rank.max(*known);
                    }
                }
            }
            asked
        });
        let asked = asked.unwrap_or_default();
        for (concern, rank) in &asked {
            let key: Key = (Some(patient.clone()), concern.as_str().into());
            match self.keys.get(&key).and_then(|id| self.open.get(id)) {
                Some(open) if open.alert.tier_rank as usize == *rank => {}
                Some(open) => {
                    return wrong(format!(
                        "{concern} asks for tier {} and its alert has {}",
                        protocol.tiers[*rank].name, open.alert.tier
                    ));
                }
                None if self.closed_by_person.contains(&key) => {}
                None => return wrong(format!("{concern} fires and has no alert")),
            }
        }
        let stray = self.keys.iter().find(|((whose, concern), _)| {
            whose.as_ref() == Some(patient) && !asked.contains_key(&**concern)
        });
        match stray {
            Some(((_, concern), id)) => wrong(format!("{id} is open and {concern} does not fire")),
            None => Ok(()),
        }
    }
}

fn lies_within((from, to): (NaiveTime, NaiveTime), time: NaiveTime) -> bool {
    let minute = |time: NaiveTime| time.num_seconds_from_midnight();
    let (from, to, time) = (minute(from), minute(to), minute(time));
    if from <= to { (from..to).contains(&time) } else { !(to..from).contains(&time) }
}
