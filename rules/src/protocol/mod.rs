//! The hospital's protocol: tiers, limits, rules, who is told and when. A file that a committee can read; checked once,
//! and past that point never again.

mod check;
pub mod condition;
mod example;
mod explain;
mod file;
mod together;

pub use example::{ExampleResult, run_examples};
pub use explain::explain;
pub use file::{
    AsksFor, EachDose, ExampleIs, ExamplePatient, Gives, LimitBySex, LimitFrom, Orders, TEnd,
};
pub use together::{Books, check_together};

use crate::correction::Formula;
use crate::finding::Finding;
use crate::ids::{ContentHash, Private, Role, RuleId, TierName, Ward};
use crate::medicines::MedicineList;
use chrono::{NaiveDate, NaiveTime, TimeDelta};
use condition::Condition;
use std::collections::BTreeMap;
use toml::Spanned;

/// A checked protocol.
#[derive(Debug, Clone)]
pub struct Protocol {
    /// Its name.
    pub name: String,
    /// Its version.
    pub version: String,
    /// Hash of its text.
    pub hash: ContentHash,
    /// Who signed it and when; `None` for an example.
    pub approved: Option<(String, NaiveDate)>,
    /// The zone in which its hours hold.
    pub zone: chrono_tz::Tz,
    /// Which reading decides.
    pub reading: ReadingRule,
    /// Named limits by sex.
    pub limits: BTreeMap<String, LimitBySex>,
    /// How long before the first listed medicine a baseline may lie.
    pub baseline_within: TimeDelta,
    /// A medicine is active this many half-lives after its last dose.
    pub active_half_lives: f64,
    /// The half-life assumed where the list gives none.
    pub unknown_half_life: TimeDelta,
    /// Whether running orders count.
    pub orders: Orders,
    /// A result older than this is stale.
    pub stale_after: TimeDelta,
    /// An albumin corrects a calcium taken at most this far from it.
    pub albumin_within: TimeDelta,
    /// How the Tisdale score's boundaries are read.
    pub tisdale: crate::score::Readings,
    /// QRS from which it is wide, ms.
    pub wide_qrs_ms: f64,
    /// The highest tier that a wide-QRS value reaches alone.
    pub wide_qrs_tier: usize,
    /// Doubt of an over-read, ms.
    pub over_read_doubt_ms: f64,
    /// A feed from which nothing came for this long is silent; one that is not named may be.
    pub silent_after: BTreeMap<crate::fact::Feed, TimeDelta>,
    /// How technical trouble is told.
    pub technical: TechnicalTier,
    /// Tiers, lowest first.
    pub tiers: Vec<Tier>,
    /// What somebody who acknowledges may intend.
    pub intents: Vec<String>,
    /// Who is reached where and when.
    pub roster: Vec<RosterEntry>,
    /// What is asked for, and when.
    pub watches: Vec<Watch>,
    /// Rules, in the file's order.
    pub rules: Vec<Rule>,
}

/// Which reading decides.
#[derive(Debug, Clone)]
pub struct ReadingRule {
    /// The formula that decides.
    pub formula: Formula,
    /// The T end that decides.
    pub t_end: TEnd,
    /// `None` for the global reading, else a lead's name.
    pub lead: Option<String>,
    /// The formulas that are shown, the deciding one first.
    pub shown: Vec<Formula>,
}

impl ReadingRule {
    /// `Fridericia, global, tangent`.
    pub fn words(&self) -> String {
        let lead = self.lead.as_deref().map_or("global".to_owned(), |lead| format!("lead {lead}"));
        let t_end = match self.t_end {
            TEnd::Tangent => "tangent",
            TEnd::Threshold => "threshold",
        };
        format!("{}, {lead}, {t_end}", self.formula)
    }
}

/// A tier.
#[derive(Debug, Clone)]
pub struct Tier {
    /// Its name.
    pub name: TierName,
    /// The hospital's words on what to do.
    pub to_do: String,
    /// Roles told at once.
    pub tell: Vec<Role>,
    /// Unanswered for this long, the next role is told; never where `None`.
    pub answer_within: Option<TimeDelta>,
    /// Roles told one after the other while nobody answers; the last again and again.
    pub then: Vec<Role>,
    /// Hours in which messages of this tier wait.
    pub quiet: Option<(NaiveTime, NaiveTime)>,
}

/// How technical trouble is told.
#[derive(Debug, Clone)]
pub struct TechnicalTier {
    /// Index into [`Protocol::tiers`]: answer times are that tier's.
    pub tier: usize,
    /// Roles told.
    pub tell: Vec<Role>,
    /// What to do.
    pub to_do: String,
}

/// Who is reached where and when.
#[derive(Debug, Clone)]
pub struct RosterEntry {
    /// The role.
    pub role: Role,
    /// On these wards; on all where empty.
    pub wards: Vec<Ward>,
    /// Within these hours of the protocol's zone; always where `None`.
    pub hours: Option<(NaiveTime, NaiveTime)>,
    /// Addresses.
    pub mail: Vec<Private>,
}

/// Something that a protocol asks for at stated times while a medicine is active.
#[derive(Debug, Clone)]
pub struct Watch {
    /// Its id.
    pub id: String,
    /// What it asks for.
    pub asks_for: AsksFor,
    /// For medicines with this kind of evidence, …
    pub evidence: Vec<Spanned<String>>,
    /// … of these groups, …
    pub groups: Vec<Spanned<String>>,
    /// … or these substances; for every listed medicine where all three are empty.
    pub substances: Vec<Spanned<String>>,
    /// Wanted before the first dose, not older than this.
    pub before_first_dose: Option<TimeDelta>,
    /// Wanted so long after the start.
    pub after_start: Vec<TimeDelta>,
    /// Wanted so long after a change of dose.
    pub after_dose_change: Vec<TimeDelta>,
    /// Wanted after each of the first doses.
    pub after_doses: Option<(usize, TimeDelta)>,
    /// Wanted at five half-lives.
    pub at_steady_state: bool,
    /// Wanted again this long after the last one.
    pub then_every: Option<TimeDelta>,
    /// Overdue only this long after it was due.
    pub grace: TimeDelta,
}

/// A rule.
#[derive(Debug, Clone)]
pub struct Rule {
    /// Its id.
    pub id: RuleId,
    /// What it is about: rules of one concern share one alert.
    pub concern: String,
    /// Index into [`Protocol::tiers`].
    pub tier: usize,
    /// What was seen, as a sentence.
    pub says: String,
    /// What to do, instead of the tier's words.
    pub to_do: Option<String>,
    /// Asked only of patients for whom this fires.
    pub only_if: Option<Condition>,
    /// The condition.
    pub when: Condition,
    /// The tier where a value's doubt crosses its limit from below; shown only where `None`.
    pub borderline: Option<usize>,
    /// The tier where it can't be told; shown only where `None`.
    pub cannot_tell: Option<usize>,
    /// Its examples.
    pub examples: Vec<ExampleIs>,
}

impl Protocol {
    /// Reads and checks a protocol's text.
    ///
    /// # Errors
    /// Every mistake found, each with its place.
    pub fn parse(text: &str) -> Result<Self, Vec<Finding>> {
        let file: file::File =
            toml::from_str(text).map_err(|error| vec![Finding::of_toml(text, &error)])?;
        check::checked(text, file)
    }

    /// The protocol before any came in force: one tier that tells nobody, and no rule.
    pub(crate) fn none() -> Self {
        Self {
            name: "none in force".into(),
            version: String::new(),
            hash: ContentHash::of(b""),
            approved: None,
            zone: chrono_tz::UTC,
            reading: ReadingRule {
                formula: Formula::Fridericia,
                t_end: TEnd::Tangent,
                lead: None,
                shown: vec![Formula::Fridericia],
            },
            limits: BTreeMap::new(),
            baseline_within: TimeDelta::zero(),
            active_half_lives: 5.0,
            unknown_half_life: TimeDelta::hours(24),
            orders: Orders::Count,
            stale_after: TimeDelta::hours(24),
            albumin_within: TimeDelta::zero(),
            tisdale: crate::score::Readings::default(),
            wide_qrs_ms: crate::wide::WIDE_FROM_MS,
            wide_qrs_tier: 0,
            over_read_doubt_ms: 0.0,
            silent_after: BTreeMap::new(),
            technical: TechnicalTier { tier: 0, tell: Vec::new(), to_do: String::new() },
            tiers: vec![Tier {
                name: TierName::new("technical"),
                to_do: String::new(),
                tell: Vec::new(),
                answer_within: None,
                then: Vec::new(),
                quiet: None,
            }],
            intents: Vec::new(),
            roster: Vec::new(),
            watches: Vec::new(),
            rules: Vec::new(),
        }
    }

    /// What the protocol names and a medicine list doesn't know: such a rule never fires. The places are left to
    /// [`check_together`].
    pub fn not_on(&self, list: &MedicineList) -> Vec<Finding> {
        together::strangers("", self, list)
    }

    /// The addresses of a role for a ward at a moment, each once, in the file's order.
    pub fn recipients(
        &self,
        role: &Role,
        ward: Option<&Ward>,
        at: crate::fact::At,
    ) -> Vec<Private> {
        let time = at.with_timezone(&self.zone).time();
        let mut found: Vec<Private> = Vec::new();
        for entry in self.roster.iter().filter(|entry| entry.role == *role) {
            let here =
                entry.wards.is_empty() || ward.is_some_and(|ward| entry.wards.contains(ward));
            if here && entry.hours.is_none_or(|hours| within(hours, time)) {
                for mail in &entry.mail {
                    if !found.contains(mail) {
                        found.push(mail.clone());
                    }
                }
            }
        }
        found
    }
}

/// Whether a time of day lies within hours that may run over midnight.
pub(crate) fn within((from, to): (NaiveTime, NaiveTime), time: NaiveTime) -> bool {
    if from <= to { from <= time && time < to } else { from <= time || time < to }
}
