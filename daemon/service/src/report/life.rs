//! One alert's life as times: raised, told, answered, over.

use ebbmark_rules::alert::{Alert, Decision, LifeStep};
use ebbmark_rules::fact::At;
use ebbmark_rules::ids::AlertId;
use std::collections::BTreeMap;

/// An alert and when what happened to it. Times are those of the decisions, so that replay gives the same.
#[derive(Debug, Clone)]
pub struct AlertLife {
    /// As it was raised: the first wording.
    pub raised: Alert,
    /// As it stands.
    pub last: Alert,
    /// The highest tier's rank that it ever had, and the tier's name.
    pub highest: (u32, Box<str>),
    /// When the first message of it was taken by the mail server.
    pub told: Option<At>,
    /// When somebody first answered (acknowledged, put off, handed over or closed it).
    pub answered: Option<At>,
    /// When it was over.
    pub closed: Option<At>,
    /// How many messages were to go out, the first included.
    pub messages: usize,
    /// How many times it went on because nobody answered.
    pub escalations: usize,
    /// How many times somebody put it off.
    pub snoozes: usize,
    /// A correction disproved it.
    pub withdrawn: bool,
}

/// Folds decisions, in their order, into lives in the order in which they were raised.
pub fn lives<'a>(decisions: impl IntoIterator<Item = &'a Decision>) -> Vec<AlertLife> {
    let mut lives: Vec<AlertLife> = Vec::new();
    let mut place: BTreeMap<AlertId, usize> = BTreeMap::new();
    for decision in decisions {
        let id = match decision {
            Decision::Raised(alert) => {
                place.insert(alert.id.clone(), lives.len());
                lives.push(AlertLife::new(alert));
                continue;
            }
            Decision::Changed(alert) => &alert.id,
            Decision::Life { alert, .. } => alert,
            Decision::Tell(notice) => &notice.alert.id,
        };
        // An alert that was raised before the first decision at hand can't be told of: it belongs to an earlier period.
        if let Some(life) = place.get(id).and_then(|n| lives.get_mut(*n)) {
            life.take(decision);
        }
    }
    lives
}

impl AlertLife {
    fn new(alert: &Alert) -> Self {
        Self {
            raised: alert.clone(),
            last: alert.clone(),
            highest: (alert.tier_rank, alert.tier.as_str().into()),
            told: None,
            answered: None,
            closed: None,
            messages: 0,
            escalations: 0,
            snoozes: 0,
            withdrawn: false,
        }
    }

    fn take(&mut self, decision: &Decision) {
        match decision {
            Decision::Raised(_) => {}
            Decision::Changed(alert) => {
                if alert.tier_rank > self.highest.0 {
                    self.highest = (alert.tier_rank, alert.tier.as_str().into());
                }
                self.last = (**alert).clone();
            }
            Decision::Tell(_) => self.messages += 1,
            Decision::Life { at, step, .. } => {
                let first = |moment: &mut Option<At>| {
                    moment.get_or_insert(*at);
                };
                match step {
                    LifeStep::Told { .. } => first(&mut self.told),
                    LifeStep::Acknowledged { .. } | LifeStep::HandedOver { .. } => {
                        first(&mut self.answered)
                    }
                    LifeStep::Snoozed { .. } => {
                        first(&mut self.answered);
                        self.snoozes += 1;
                    }
                    LifeStep::Escalated { .. } => self.escalations += 1,
                    LifeStep::ClosedByPerson { .. } => {
                        first(&mut self.answered);
                        self.closed = Some(*at);
                    }
                    LifeStep::ClosedByFacts { .. } => self.closed = Some(*at),
                    LifeStep::Withdrawn { .. } => {
                        self.closed = Some(*at);
                        self.withdrawn = true;
                    }
                    LifeStep::Refused { .. } | LifeStep::SnoozeEnded => {}
                }
            }
        }
    }
}
