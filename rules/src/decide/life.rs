//! An alert's life: raised, told, acknowledged or escalated, closed or withdrawn. All times are stored deadlines, each
//! taken as of its due time.

use super::{Decider, Due, Key, Settled};
use crate::alert::{Alert, AlertState, Decision, Evidence, LifeStep, Notice, NoticeReason};
use crate::evidence;
use crate::fact::At;
use crate::ids::{AlertId, ContentHash, PatientId, Person, Private, Role, RuleId, Ward};
use crate::protocol::{Protocol, within};
use crate::verdict::Basis;
use chrono::{LocalResult, NaiveDate, NaiveTime, TimeDelta, TimeZone};
use std::collections::BTreeSet;

/// An alert that is open or acknowledged.
#[derive(Debug, Clone)]
pub(super) struct OpenAlert {
    pub alert: Alert,
    pub rank: usize,
    pub rests_on: BTreeSet<Basis>,
    /// What it says, apart from ages that change by themselves: the same again is not worth a word.
    pub signature: Signature,
    pub ward: Option<Ward>,
    /// Notices so far.
    steps: u32,
    /// Next in the tier's `then`.
    escalations: u32,
    /// When the next role is told, a snooze ends or quiet hours end.
    deadline: Option<(At, Awaits)>,
    told: Vec<(Role, Vec<Private>)>,
    /// Recipients who can't be reached.
    refused: BTreeSet<Private>,
}

/// What would be a change worth storing.
#[derive(Debug, Clone, PartialEq)]
pub(super) struct Signature {
    pub rule: RuleId,
    pub rank: usize,
    pub borderline: bool,
    pub certain: bool,
    /// What tracings and results that it rests on say now: read anew, they may say something else.
    pub says: Vec<String>,
    pub rests_on: BTreeSet<Basis>,
}

#[derive(Debug, Clone, PartialEq)]
enum Awaits {
    Answer,
    SnoozeEnd,
    QuietEnd(Vec<Role>, NoticeReason, Box<str>),
}

/// What is to be raised or changed.
pub(super) struct Outcome {
    pub rank: usize,
    pub signature: Signature,
    pub evidence: Evidence,
    pub ward: Option<Ward>,
}

impl Decider {
    fn alert_id(&self, key: &Key, at: At) -> AlertId {
        let (issuer, number) =
            key.0.as_ref().map_or(("", ""), |patient| (patient.issuer(), patient.expose()));
        let mut turn = 0;
        loop {
            // A second alert for the same concern at the same moment (withdrawn and raised again) gets the next turn.
            let text =
                format!("{issuer}\u{0}{number}\u{0}{}\u{0}{}\u{0}{turn}", key.1, at.to_rfc3339());
            let id = AlertId::new(ContentHash::of(text.as_bytes()).short());
            if !self.by_id.contains_key(&id) {
                return id;
            }
            turn += 1;
        }
    }

    /// Opens an alert and tells whom the tier names.
    pub(super) fn raise(
        &mut self,
        key: Key,
        outcome: Outcome,
        tell: Option<Vec<Role>>,
        at: At,
        out: &mut Vec<Decision>,
    ) {
        let protocol = self.book();
        let Some(tier) = protocol.tiers.get(outcome.rank) else { return };
        let alert = Alert {
            id: self.alert_id(&key, at),
            patient: key.0.clone(),
            concern: key.1.as_str().into(),
            raised_at: at,
            as_of: at,
            state: AlertState::Open,
            tier: tier.name.clone(),
            tier_rank: u32::try_from(outcome.rank).unwrap_or(u32::MAX),
            rule: outcome.signature.rule.clone(),
            evidence: outcome.evidence,
        };
        out.push(Decision::Raised(Box::new(alert.clone())));
        self.by_id.insert(alert.id.clone(), key.clone());
        let mut open = OpenAlert {
            alert,
            rank: outcome.rank,
            rests_on: outcome.signature.rests_on.clone(),
            signature: outcome.signature,
            ward: outcome.ward,
            steps: 0,
            escalations: 0,
            deadline: None,
            told: Vec::new(),
            refused: BTreeSet::new(),
        };
        let roles = tell.unwrap_or_else(|| tier.tell.clone());
        open.tell(&protocol, roles, NoticeReason::Raised, "", at, out);
        self.keep(key, open);
    }

    /// Gives an open alert its newer evidence; a risen tier is told anew.
    pub(super) fn change(&mut self, key: &Key, outcome: Outcome, at: At, out: &mut Vec<Decision>) {
        let protocol = self.book();
        let Some(mut open) = self.open.remove(key) else { return };
        self.forget_deadline(&open);
        let rose = outcome.rank > open.rank;
        let fell = outcome.rank < open.rank;
        let changed = outcome.signature != open.signature;
        open.alert.evidence = outcome.evidence;
        open.alert.as_of = at;
        open.alert.rule = outcome.signature.rule.clone();
        open.rests_on.clone_from(&outcome.signature.rests_on);
        open.signature = outcome.signature;
        open.ward = outcome.ward.or(open.ward);
        open.rank = outcome.rank;
        if let Some(tier) = protocol.tiers.get(outcome.rank) {
            open.alert.tier = tier.name.clone();
            open.alert.tier_rank = u32::try_from(outcome.rank).unwrap_or(u32::MAX);
            if rose {
                open.alert.state = AlertState::Open;
                open.escalations = 0;
                open.deadline = None;
                out.push(Decision::Changed(Box::new(open.alert.clone())));
                open.tell(&protocol, tier.tell.clone(), NoticeReason::TierRaised, "", at, out);
            } else if changed {
                out.push(Decision::Changed(Box::new(open.alert.clone())));
                match &open.deadline {
                    Some((_, Awaits::Answer)) if fell => {
                        open.deadline =
                            tier.answer_within.map(|within| (at + within, Awaits::Answer));
                    }
                    // Nobody was told yet: the lower tier's people are, in the lower tier's time.
                    Some((_, Awaits::QuietEnd(_, reason, because))) if fell => {
                        let (reason, because) = (reason.clone(), because.clone());
                        open.tell(&protocol, tier.tell.clone(), reason, &because, at, out);
                    }
                    _ => {}
                }
            }
        }
        self.keep(key.clone(), open);
    }

    /// Ends an alert because facts say so. Those who were told are told of a withdrawal, and of the end of an alert of
    /// the highest tier.
    pub(super) fn end(
        &mut self,
        key: &Key,
        withdrawn: bool,
        because: &str,
        at: At,
        out: &mut Vec<Decision>,
    ) {
        let protocol = self.book();
        let Some(mut open) = self.open.remove(key) else { return };
        self.forget_deadline(&open);
        open.alert.state = if withdrawn { AlertState::Withdrawn } else { AlertState::Closed };
        open.alert.as_of = at;
        let step = if withdrawn {
            LifeStep::Withdrawn { because: because.into() }
        } else {
            LifeStep::ClosedByFacts { because: because.into() }
        };
        open.life(at, step, out);
        let highest = open.rank + 1 == protocol.tiers.len();
        if withdrawn || highest {
            let reason = if withdrawn { NoticeReason::Withdrawn } else { NoticeReason::Closed };
            for (role, recipients) in std::mem::take(&mut open.told) {
                open.notice(&protocol, role, recipients, reason.clone(), because, None, at, out);
            }
        }
    }

    /// Ends everything open about a patient.
    pub(super) fn close_all(
        &mut self,
        patient: &PatientId,
        because: &str,
        at: At,
        out: &mut Vec<Decision>,
    ) {
        let keys: Vec<Key> = self.keys_of(patient).cloned().collect();
        for key in keys {
            self.end(&key, false, because, at, out);
        }
        self.settled.retain(|(whose, _), _| whose.as_ref() != Some(patient));
    }

    /// Opens technical trouble, unless it is open.
    pub(super) fn technical(
        &mut self,
        concern: &str,
        what: &str,
        because: &str,
        at: At,
        out: &mut Vec<Decision>,
    ) {
        let key: Key = (None, concern.to_owned());
        let protocol = self.book();
        if self.open.contains_key(&key) {
            return;
        }
        let signature = Signature {
            rule: RuleId::new("technical"),
            rank: protocol.technical.tier,
            borderline: false,
            certain: true,
            says: Vec::new(),
            rests_on: BTreeSet::new(),
        };
        let evidence = evidence::technical(&protocol, what, because);
        let outcome = Outcome { rank: protocol.technical.tier, signature, evidence, ward: None };
        self.raise(key, outcome, Some(protocol.technical.tell.clone()), at, out);
    }

    /// Ends technical trouble, if it is open.
    pub(super) fn technical_over(
        &mut self,
        concern: &str,
        because: &str,
        at: At,
        out: &mut Vec<Decision>,
    ) {
        self.end(&(None, concern.to_owned()), false, because, at, out);
    }

    /// Runs something on the alert that a fact names; one that is over stays over.
    fn with(&mut self, id: &AlertId, act: impl FnOnce(&mut OpenAlert, &Protocol)) {
        let protocol = self.book();
        let Some(key) = self.by_id.get(id).cloned() else { return };
        let current = self.open.get(&key).is_some_and(|open| open.alert.id == *id);
        if let Some(mut open) = current.then(|| self.open.remove(&key)).flatten() {
            self.forget_deadline(&open);
            act(&mut open, &protocol);
            self.keep(key, open);
        }
    }

    pub(super) fn told(
        &mut self,
        id: &AlertId,
        recipient: &Private,
        at: At,
        out: &mut Vec<Decision>,
    ) {
        self.with(id, |open, _| {
            open.refused.remove(recipient);
            open.life(at, LifeStep::Told { recipient: recipient.clone() }, out);
        });
        if self.refused.remove(recipient) && self.refused.is_empty() {
            let because = "every recipient that was refused has been reached again";
            self.technical_over("refused recipient", because, at, out);
        }
    }

    /// A recipient who can never be reached is as good as one who doesn't answer: where nobody else was reached, the
    /// next role is told at once. Past the last role its deadline goes on as for any unanswered alert.
    pub(super) fn unreachable(
        &mut self,
        id: &AlertId,
        recipient: &Private,
        at: At,
        out: &mut Vec<Decision>,
    ) {
        self.refused.insert(recipient.clone());
        self.with(id, |open, protocol| {
            open.life(at, LifeStep::Refused { recipient: recipient.clone() }, out);
            open.refused.insert(recipient.clone());
            let mut told = open.told.iter().flat_map(|(_, recipients)| recipients);
            let reached = told.any(|other| !open.refused.contains(other));
            let next = protocol.tiers.get(open.rank).is_some_and(|tier| {
                usize::try_from(open.escalations).is_ok_and(|tried| tried < tier.then.len())
            });
            if open.alert.state == AlertState::Open && !reached && next {
                open.escalate(protocol, at, out);
            }
        });
    }

    pub(super) fn acknowledged(
        &mut self,
        id: &AlertId,
        at: At,
        step: LifeStep,
        out: &mut Vec<Decision>,
    ) {
        self.with(id, |open, _| {
            open.alert.state = AlertState::Acknowledged;
            open.deadline = None;
            open.life(at, step, out);
        });
    }

    pub(super) fn snoozed(
        &mut self,
        id: &AlertId,
        until: At,
        at: At,
        step: LifeStep,
        out: &mut Vec<Decision>,
    ) {
        self.with(id, |open, _| {
            open.alert.state = AlertState::Acknowledged;
            open.deadline = Some((until.max(at), Awaits::SnoozeEnd));
            open.life(at, step, out);
        });
    }

    pub(super) fn handed_over(
        &mut self,
        id: &AlertId,
        by: &Person,
        to: &Role,
        at: At,
        out: &mut Vec<Decision>,
    ) {
        self.with(id, |open, protocol| {
            open.alert.state = AlertState::Open;
            let because = format!("handed over by {by}");
            open.life(at, LifeStep::HandedOver { by: by.as_str().into(), to: to.clone() }, out);
            // A role that the roster doesn't reach would be nobody: then the tier's own people are told.
            let nobody = protocol.recipients(to, open.ward.as_ref(), at).is_empty();
            let own = protocol.tiers.get(open.rank).map(|tier| tier.tell.clone());
            let roles = own.filter(|_| nobody).unwrap_or_else(|| vec![to.clone()]);
            open.tell(protocol, roles, NoticeReason::HandedOver, &because, at, out);
        });
    }

    pub(super) fn closed_by_person(
        &mut self,
        id: &AlertId,
        at: At,
        step: LifeStep,
        out: &mut Vec<Decision>,
    ) {
        let Some(key) = self.by_id.get(id).cloned() else { return };
        let current = self.open.get(&key).is_some_and(|open| open.alert.id == *id);
        if let Some(mut open) = current.then(|| self.open.remove(&key)).flatten() {
            self.forget_deadline(&open);
            open.alert.state = AlertState::Closed;
            open.life(at, step, out);
            let Signature { says, rests_on, .. } = open.signature;
            self.settled.insert(key, Settled { rank: open.rank, says, rests_on });
        }
    }

    /// An alert's own deadline. Who is told then reads what holds then.
    pub(super) fn alert_due(&mut self, id: &AlertId, at: At, out: &mut Vec<Decision>) {
        self.freshen(id, at);
        self.with(id, |open, protocol| match open.deadline.take() {
            Some((due, awaits)) if due <= at => match awaits {
                Awaits::Answer => open.escalate(protocol, at, out),
                Awaits::SnoozeEnd => {
                    open.alert.state = AlertState::Open;
                    open.life(at, LifeStep::SnoozeEnded, out);
                    let roles = open.told.iter().map(|(role, _)| role.clone()).collect();
                    open.tell(protocol, roles, NoticeReason::SnoozeEnded, "", at, out);
                }
                Awaits::QuietEnd(roles, reason, because) => {
                    open.tell(protocol, roles, reason, &because, at, out);
                }
            },
            other => open.deadline = other,
        });
    }

    fn freshen(&mut self, id: &AlertId, at: At) {
        let Some(key) = self.by_id.get(id).cloned() else { return };
        let Some(evidence) = self.fresh(&key, at) else { return };
        if let Some(open) = self.open.get_mut(&key).filter(|open| open.alert.id == *id) {
            open.alert.evidence = evidence;
            open.alert.as_of = at;
        }
    }

    /// Carries open alerts over to another protocol: each to the tier of the same name, else to one of its height. An
    /// alert that waits for nobody, where the new tier wants an answer, waits for one from now on.
    pub(super) fn carry_over(&mut self, at: At, out: &mut Vec<Decision>) {
        let protocol = self.book();
        let highest = protocol.tiers.len().saturating_sub(1);
        let keys: Vec<Key> = self.open.keys().cloned().collect();
        for key in keys {
            let Some(mut open) = self.open.remove(&key) else { continue };
            self.forget_deadline(&open);
            let technical = key.0.is_none().then_some(protocol.technical.tier);
            let named = protocol.tiers.iter().position(|tier| tier.name == open.alert.tier);
            open.rank = technical.or(named).unwrap_or(open.rank).min(highest);
            open.signature.rank = open.rank;
            if let Some(tier) = protocol.tiers.get(open.rank) {
                open.alert.tier = tier.name.clone();
                open.alert.tier_rank = u32::try_from(open.rank).unwrap_or(u32::MAX);
                if open.deadline.is_none() && open.alert.state == AlertState::Open {
                    open.deadline = tier.answer_within.map(|within| (at + within, Awaits::Answer));
                }
            }
            if technical.is_some() && open.told.is_empty() {
                // Raised when no protocol said whom to tell.
                let tell = protocol.technical.tell.clone();
                open.tell(&protocol, tell, NoticeReason::Raised, "", at, out);
            }
            self.keep(key, open);
        }
    }

    fn keep(&mut self, key: Key, open: OpenAlert) {
        if let Some((at, _)) = &open.deadline {
            self.due.insert((*at, Due::Alert(open.alert.id.clone())));
        }
        self.open.insert(key, open);
    }

    fn forget_deadline(&mut self, open: &OpenAlert) {
        if let Some((at, _)) = &open.deadline {
            self.due.remove(&(*at, Due::Alert(open.alert.id.clone())));
        }
    }
}

impl OpenAlert {
    fn life(&self, at: At, step: LifeStep, out: &mut Vec<Decision>) {
        out.push(Decision::Life { alert: self.alert.id.clone(), at, step });
    }

    /// Tells roles now, or at the end of the tier's quiet hours.
    fn tell(
        &mut self,
        protocol: &Protocol,
        roles: Vec<Role>,
        reason: NoticeReason,
        because: &str,
        at: At,
        out: &mut Vec<Decision>,
    ) {
        let Some(tier) = protocol.tiers.get(self.rank) else { return };
        if roles.is_empty() {
            self.deadline = None;
            return;
        }
        let local = at.with_timezone(&protocol.zone).time();
        if let Some(hours) = tier.quiet.filter(|hours| within(*hours, local)) {
            let end = quiet_end(hours.1, protocol.zone, at);
            self.deadline = Some((end, Awaits::QuietEnd(roles, reason, because.into())));
            return;
        }
        let answer_by = tier.answer_within.map(|within| at + within);
        self.deadline = answer_by.map(|by| (by, Awaits::Answer));
        for role in roles {
            let recipients = protocol.recipients(&role, self.ward.as_ref(), at);
            match self.told.iter_mut().find(|(known, _)| *known == role) {
                Some((_, known)) => {
                    for recipient in &recipients {
                        if !known.contains(recipient) {
                            known.push(recipient.clone());
                        }
                    }
                }
                None => self.told.push((role.clone(), recipients.clone())),
            }
            self.notice(protocol, role, recipients, reason.clone(), because, answer_by, at, out);
        }
    }

    /// Tells the next role; past the last, that one again, for ever, because an unanswered alert is never dropped.
    fn escalate(&mut self, protocol: &Protocol, at: At, out: &mut Vec<Decision>) {
        let Some(to) = self.next_role(protocol).cloned() else { return };
        self.escalations += 1;
        self.life(at, LifeStep::Escalated { number: self.escalations, to: to.clone() }, out);
        self.tell(protocol, vec![to], NoticeReason::Escalated, "", at, out);
    }

    /// Whom an unanswered alert goes to next.
    fn next_role<'p>(&self, protocol: &'p Protocol) -> Option<&'p Role> {
        let then = &protocol.tiers.get(self.rank)?.then;
        let index = usize::try_from(self.escalations).unwrap_or(usize::MAX);
        then.get(index.min(then.len().saturating_sub(1)))
    }

    #[allow(clippy::too_many_arguments, reason = "a notice has this many parts")]
    fn notice(
        &mut self,
        protocol: &Protocol,
        role: Role,
        recipients: Vec<Private>,
        reason: NoticeReason,
        because: &str,
        answer_by: Option<At>,
        at: At,
        out: &mut Vec<Decision>,
    ) {
        out.push(Decision::Tell(Box::new(Notice {
            step: self.steps,
            reason,
            role,
            recipients,
            at,
            answer_by,
            then: answer_by.and_then(|_| self.next_role(protocol)).cloned(),
            because: because.into(),
            alert: self.alert.clone(),
        })));
        self.steps += 1;
    }
}

/// The moment after `at` at which a wall clock of the zone first shows the end of quiet hours. Where a clock change
/// skips that time, when the clock of before would have shown it; where it shows it twice, the first that is to come.
fn quiet_end(end: NaiveTime, zone: chrono_tz::Tz, at: At) -> At {
    let today = at.with_timezone(&zone).date_naive();
    let days = [today, today + chrono::Days::new(1), today + chrono::Days::new(2)];
    let shows = |day: NaiveDate| {
        let wall = day.and_time(end);
        match zone.from_local_datetime(&wall) {
            LocalResult::Single(one) => [Some(one), None],
            LocalResult::Ambiguous(first, second) => [Some(first), Some(second)],
            LocalResult::None => [
                zone.from_local_datetime(&(wall - TimeDelta::hours(3)))
                    .earliest()
                    .map(|earlier| earlier + TimeDelta::hours(3)),
                None,
            ],
        }
    };
    let moments = days.into_iter().flat_map(shows).flatten().map(|moment| moment.to_utc());
    moments.filter(|moment| *moment > at).min().unwrap_or(at + TimeDelta::days(1))
}
