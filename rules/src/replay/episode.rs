//! Alerts as a committee counts them: from the decision that raised one to the one that ended it.

use crate::alert::{Alert, Decision, LifeStep, NoticeReason};
use crate::fact::At;
use crate::ids::{AlertId, PatientId, Role, RuleId, TierName, TracingId};
use serde::Serialize;
use std::collections::BTreeMap;

/// A stretch of time, its end not in it.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize)]
pub struct Period {
    /// From.
    pub from: At,
    /// Until.
    pub until: At,
}

impl Period {
    /// Whether a moment lies in it.
    pub fn holds(&self, at: At) -> bool {
        self.from <= at && at < self.until
    }
}

/// One alert, from raised to over. It names nobody: ward and bed are in `whom`, as they stood.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Episode {
    /// Which.
    pub alert: AlertId,
    #[serde(skip)]
    pub(super) patient: Option<PatientId>,
    /// How people found the patient.
    pub whom: Box<str>,
    /// What it was about.
    pub concern: Box<str>,
    /// The rule that gave it its highest tier.
    pub rule: RuleId,
    /// What was seen then.
    pub seen: Box<str>,
    /// Its highest tier.
    pub tier: TierName,
    #[serde(skip)]
    pub(super) rank: u32,
    /// When it was raised.
    pub raised_at: At,
    /// When it reached its highest tier.
    pub highest_at: At,
    /// When it was over, if it was.
    pub over_at: Option<At>,
    /// A correction disproved it.
    pub withdrawn: bool,
    /// The latest tracing then, to look at.
    pub tracing: Option<TracingId>,
    /// Roles that were told of it before anybody had the chance to answer, each with its first moment. Escalations are
    /// not among them: whether somebody would have answered can't be told afterwards.
    pub told: Vec<(Role, At)>,
}

impl Episode {
    fn of(alert: &Alert) -> Self {
        Self {
            alert: alert.id.clone(),
            patient: alert.patient.clone(),
            whom: alert.evidence.whom.clone(),
            concern: alert.concern.clone(),
            rule: alert.rule.clone(),
            seen: alert.evidence.seen.clone(),
            tier: alert.tier.clone(),
            rank: alert.tier_rank,
            raised_at: alert.raised_at,
            highest_at: alert.as_of,
            over_at: None,
            withdrawn: false,
            tracing: alert.evidence.tracing.clone(),
            told: Vec::new(),
        }
    }

    /// Whether two episodes are about the same concern of the same patient, at times that meet.
    pub(super) fn meets(&self, other: &Episode) -> bool {
        let before =
            |one: &Episode, two: &Episode| one.over_at.is_some_and(|over| over < two.raised_at);
        self.patient == other.patient
            && self.concern == other.concern
            && !before(self, other)
            && !before(other, self)
    }
}

/// Gathers episodes from decisions as they go by.
#[derive(Debug, Default)]
pub struct Episodes {
    open: BTreeMap<AlertId, Episode>,
    over: Vec<Episode>,
}

impl Episodes {
    /// Takes the next decision.
    pub fn take(&mut self, decision: &Decision) {
        match decision {
            Decision::Raised(alert) => {
                self.open.insert(alert.id.clone(), Episode::of(alert));
            }
            Decision::Changed(alert) => {
                let Some(known) = self.open.get_mut(&alert.id) else { return };
                if alert.tier_rank > known.rank {
                    let (raised_at, told) = (known.raised_at, std::mem::take(&mut known.told));
                    *known = Episode { raised_at, told, ..Episode::of(alert) };
                }
            }
            Decision::Tell(notice) => {
                let first = match notice.reason {
                    NoticeReason::Raised | NoticeReason::TierRaised => true,
                    NoticeReason::Escalated
                    | NoticeReason::SnoozeEnded
                    | NoticeReason::HandedOver
                    | NoticeReason::Withdrawn
                    | NoticeReason::Closed => false,
                };
                if let Some(known) = self.open.get_mut(&notice.alert.id)
                    && first
                    && !known.told.iter().any(|(role, _)| *role == notice.role)
                {
                    known.told.push((notice.role.clone(), notice.at));
                }
            }
            Decision::Life { alert, at, step } => {
                let withdrawn = match step {
                    LifeStep::Withdrawn { .. } => true,
                    LifeStep::ClosedByFacts { .. } | LifeStep::ClosedByPerson { .. } => false,
                    LifeStep::Told { .. }
                    | LifeStep::Refused { .. }
                    | LifeStep::Acknowledged { .. }
                    | LifeStep::Snoozed { .. }
                    | LifeStep::SnoozeEnded
                    | LifeStep::HandedOver { .. }
                    | LifeStep::Escalated { .. } => return,
                };
                if let Some(known) = self.open.remove(alert) {
                    self.over.push(Episode { over_at: Some(*at), withdrawn, ..known });
                }
            }
        }
    }

    /// All of them, oldest first, those that are still open among them.
    pub fn all(self) -> Vec<Episode> {
        let mut all = self.over;
        all.extend(self.open.into_values());
        all.sort_by(|a, b| (a.raised_at, &a.alert).cmp(&(b.raised_at, &b.alert)));
        all
    }
}
