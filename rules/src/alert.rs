//! What a decision says: an alert with everything it rests on, and who is told of it.

use crate::fact::At;
use crate::ids::{AlertId, ContentHash, PatientId, Private, Role, RuleId, TierName, TracingId};
use serde::{Deserialize, Serialize};

/// One decision, in the order in which it was taken. The store keeps them, delivery carries out the
/// [`Notice`]s, replay compares them.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[serde(tag = "decision", rename_all = "kebab-case")]
pub enum Decision {
    /// A concern opened.
    Raised(Box<Alert>),
    /// An open alert's tier, evidence or wording changed because of newer facts.
    Changed(Box<Alert>),
    /// A step of its life: told, acknowledged, snoozed, handed over, escalated, closed, withdrawn.
    Life {
        /// Which alert.
        alert: AlertId,
        /// As of when.
        at: At,
        /// What happened.
        step: LifeStep,
    },
    /// Somebody is to be told.
    Tell(Box<Notice>),
}

/// A step in an alert's life.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, Deserialize)]
#[serde(tag = "step", rename_all = "kebab-case")]
#[allow(missing_docs, reason = "the fields say what the variants' lines say")]
pub enum LifeStep {
    /// The mail server took the message for this recipient.
    Told { recipient: Private },
    /// A recipient can't be reached.
    Refused { recipient: Private },
    /// Taken on by a person.
    Acknowledged { by: Box<str>, intent: Box<str> },
    /// Put off by a person.
    Snoozed { by: Box<str>, until: At, why: Box<str> },
    /// The time for which it was put off has ended.
    SnoozeEnded,
    /// Passed to another role.
    HandedOver { by: Box<str>, to: Role },
    /// Nobody answered in time: the next role is told.
    Escalated { number: u32, to: Role },
    /// Over, because newer facts ended it.
    ClosedByFacts { because: Box<str> },
    /// Over, because a person said so.
    ClosedByPerson { by: Box<str>, why: Box<str> },
    /// A correction disproved it.
    Withdrawn { because: Box<str> },
}

/// How an alert stands.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum AlertState {
    /// Nobody has answered.
    Open,
    /// Somebody has taken it on.
    Acknowledged,
    /// Over.
    Closed,
    /// Disproved by a correction.
    Withdrawn,
}

/// One concern about one patient (or, without a patient, about the service itself).
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Alert {
    /// Identity.
    pub id: AlertId,
    /// Whom it is about; `None` for a technical alert.
    pub patient: Option<PatientId>,
    /// What it is about: rules that share a concern share an alert.
    pub concern: Box<str>,
    /// When it was raised.
    pub raised_at: At,
    /// As of when this wording holds.
    pub as_of: At,
    /// How it stands.
    pub state: AlertState,
    /// Its tier.
    pub tier: TierName,
    /// The tier's rank in its protocol, lowest 0.
    pub tier_rank: u32,
    /// The rule that set the tier.
    pub rule: RuleId,
    /// All that is said, ready to be laid out.
    pub evidence: Evidence,
}

/// Everything an alert rests on, in sentences and rows that mail, page and report lay out alike.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Evidence {
    /// Ward and bed, or pseudonym: how people find the patient without a name.
    pub whom: Box<str>,
    /// The rule's sentence: what was seen.
    pub seen: Box<str>,
    /// What the local protocol says to do, in the tier's or the rule's own words.
    pub to_do: Box<str>,
    /// Why it matters for this patient: one line each.
    pub why: Vec<Box<str>>,
    /// The values that the rule rests on, with limit, time and source.
    pub values: Vec<EvidenceRow>,
    /// QTc by every formula, with a mark on the one that decided.
    pub formulas: Vec<FormulaRow>,
    /// The tracing that it rests on.
    pub tracing: Option<TracingId>,
    /// Listed medicines that are active, each with its last dose.
    pub medicines: Vec<Box<str>>,
    /// Electrolytes with age and marks.
    pub electrolytes: Vec<Box<str>>,
    /// The baseline and the change, or why there is none.
    pub baseline: Box<str>,
    /// What is not known: missing, stale, doubtful, not comparable, not recognised.
    pub unknown: Vec<Box<str>>,
    /// The value's doubt crosses its limit.
    pub borderline: bool,
    /// Name of the protocol that decided.
    pub protocol: Box<str>,
    /// Its version.
    pub protocol_version: Box<str>,
    /// Its content hash.
    pub protocol_hash: ContentHash,
    /// Whether a hospital has signed it; an unsigned one says so in every message.
    pub protocol_signed: bool,
    /// Numbers for drawing (the tide line).
    pub tide: Option<Tide>,
}

/// One value with its limit.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct EvidenceRow {
    /// `QTc (Fridericia, global, tangent)`.
    pub what: Box<str>,
    /// `512 ± 9 ms`.
    pub value: Box<str>,
    /// `at least 500 ms`, or empty.
    pub limit: Box<str>,
    /// When it was true.
    pub at: Option<At>,
    /// The file and place, or the person.
    pub source: Box<str>,
}

/// QTc by one formula.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct FormulaRow {
    /// The formula's name.
    pub formula: Box<str>,
    /// QTc in ms; `None` outside the formula's domain.
    pub qtc_ms: Option<f64>,
    /// It decided.
    pub decided: bool,
    /// It falls on the other side of the limit than the one that decided.
    pub split: bool,
}

/// The tide line: a horizontal QTc scale with limits as shores, the baseline as a notch, the value as a mark as
/// wide as its doubt. All in ms.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Tide {
    /// The protocol's limits that apply to this patient, ascending, with their tier names.
    pub limits: Vec<(f64, TierName)>,
    /// Baseline QTc.
    pub baseline: Option<f64>,
    /// QTc now.
    pub value: f64,
    /// Its doubt.
    pub doubt: f64,
}

/// A message to one role about one alert; delivery makes one mail per recipient of it.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Notice {
    /// The alert's number of notices before this one, from 0: with the alert and the recipient it names a message for good.
    pub step: u32,
    /// Why it goes out.
    pub reason: NoticeReason,
    /// To whom: a role of the protocol.
    pub role: Role,
    /// The addresses that the protocol's roster gives for this role, ward and hour.
    pub recipients: Vec<Private>,
    /// As of when (a deadline's due time also when the service was down).
    pub at: At,
    /// When an unanswered message goes to the next role, so that the reader knows.
    pub answer_by: Option<At>,
    /// Which role that is.
    pub then: Option<Role>,
    /// What led to this message, where the reason alone does not say it: what ended the alert, who handed it over.
    pub because: Box<str>,
    /// The alert as it stood.
    pub alert: Alert,
}

/// Why a message goes out.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum NoticeReason {
    /// A new alert.
    Raised,
    /// Its tier rose.
    TierRaised,
    /// Nobody answered: another role, or the same again.
    Escalated,
    /// The time for which it was put off has ended.
    SnoozeEnded,
    /// Passed on by a person.
    HandedOver,
    /// A correction disproved it: those who were told are told.
    Withdrawn,
    /// Newer facts ended it: those who were told at the highest tier are told.
    Closed,
}
