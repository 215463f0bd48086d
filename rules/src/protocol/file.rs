//! The protocol file as written, before it is checked.

use super::condition::{Condition, IntervalMs, Positive};
use crate::correction::Formula;
use serde::Deserialize;
use std::collections::BTreeMap;
use toml::Spanned;
use toml::value::Datetime;

#[derive(Debug, Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct File {
    pub protocol: Head,
    pub reading: ReadingIs,
    #[serde(default)]
    pub limits: BTreeMap<String, LimitBySex>,
    pub baseline: BaselineIs,
    pub medicines: MedicinesAre,
    pub results: ResultsAre,
    pub wide_qrs: WideQrs,
    #[serde(default)]
    pub tisdale: crate::score::Readings,
    pub over_read: OverReadIs,
    #[serde(default)]
    pub feeds: BTreeMap<crate::fact::Feed, FeedIs>,
    pub technical: Technical,
    pub tier: Vec<Spanned<TierIs>>,
    #[serde(default)]
    pub intents: Vec<String>,
    #[serde(default)]
    pub roster: Vec<Spanned<RosterRow>>,
    #[serde(default)]
    pub watch: Vec<Spanned<WatchIs>>,
    pub rule: Vec<Spanned<RuleIs>>,
}

#[derive(Debug, Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct Head {
    pub name: String,
    pub version: String,
    pub zone: Spanned<String>,
    #[serde(default)]
    pub approved_by: Option<Spanned<String>>,
    pub approved_on: Option<Spanned<Datetime>>,
}

#[derive(Debug, Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct ReadingIs {
    pub formula: Formula,
    pub t_end: TEnd,
    pub lead: Spanned<String>,
    #[serde(default)]
    pub shown: Vec<Formula>,
}

/// Which T end decides.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Deserialize)]
#[serde(rename_all = "kebab-case")]
#[allow(missing_docs, reason = "the trade's own words")]
pub enum TEnd {
    Tangent,
    Threshold,
}

/// A limit that depends on sex, and, where a method has limits of its own, on age.
#[derive(Debug, Clone, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct LimitBySex {
    /// For women.
    pub female_ms: IntervalMs,
    /// For men.
    pub male_ms: IntervalMs,
    /// The only formula that this limit was made for; any where not said.
    pub formula: Option<Formula>,
    /// Other limits from some age on: `older = [{ from_years = 40, female_ms = 450, male_ms = 440 }]`.
    #[serde(default)]
    pub older: Vec<LimitFrom>,
}

/// A limit from some age on.
#[derive(Debug, Clone, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct LimitFrom {
    /// From this age in full years.
    pub from_years: u32,
    /// For women.
    pub female_ms: IntervalMs,
    /// For men.
    pub male_ms: IntervalMs,
}

#[derive(Debug, Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct BaselineIs {
    pub before_first_medicine_within_days: Positive,
}

#[derive(Debug, Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct MedicinesAre {
    pub active_half_lives: Positive,
    pub unknown_half_life_h: Positive,
    pub orders: Orders,
}

/// Whether a running order counts as if its doses were given.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Orders {
    /// An order alone makes a medicine active: for feeds that send no administrations.
    Count,
    /// Only doses that were given count.
    Ignore,
}

#[derive(Debug, Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct ResultsAre {
    pub stale_after_h: Positive,
    #[serde(default = "three_days")]
    pub albumin_within_h: Positive,
}

/// Albumin moves slowly, but by a third in days of acute illness (common practice, no source).
fn three_days() -> Positive {
    Positive(72.0)
}

#[derive(Debug, Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct WideQrs {
    pub from_ms: Positive,
    pub highest_tier: Spanned<String>,
}

#[derive(Debug, Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct OverReadIs {
    pub doubt_ms: Positive,
}

#[derive(Debug, Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct FeedIs {
    pub silent_after_h: Positive,
}

#[derive(Debug, Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct Technical {
    pub tier: Spanned<String>,
    pub tell: Vec<Spanned<String>>,
    #[serde(default)]
    pub to_do: String,
}

#[derive(Debug, Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct TierIs {
    pub name: Spanned<String>,
    pub to_do: String,
    #[serde(default)]
    pub tell: Vec<Spanned<String>>,
    pub answer_within_min: Option<Positive>,
    #[serde(default)]
    pub then: Vec<Spanned<String>>,
    pub quiet: Option<Spanned<QuietIs>>,
}

#[derive(Debug, Clone, Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct QuietIs {
    pub from: Spanned<String>,
    pub to: Spanned<String>,
}

#[derive(Debug, Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct RosterRow {
    pub role: Spanned<String>,
    #[serde(default)]
    pub wards: Vec<String>,
    pub from: Option<Spanned<String>>,
    pub to: Option<Spanned<String>>,
    pub mail: Vec<Spanned<String>>,
}

#[derive(Debug, Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct WatchIs {
    pub id: Spanned<String>,
    pub asks_for: AsksFor,
    #[serde(default)]
    pub evidence: Vec<Spanned<String>>,
    #[serde(default)]
    pub groups: Vec<Spanned<String>>,
    #[serde(default)]
    pub substances: Vec<Spanned<String>>,
    pub before_first_dose_within_h: Option<Positive>,
    #[serde(default)]
    pub after_start_h: Vec<Positive>,
    #[serde(default)]
    pub after_dose_change_h: Vec<Positive>,
    #[serde(default)]
    pub after_each_of_first_doses: Option<EachDose>,
    #[serde(default)]
    pub at_steady_state: bool,
    pub then_every_h: Option<Positive>,
    pub grace_h: Positive,
}

/// `after_each_of_first_doses = { n = 5, h = 2 }`.
#[derive(Debug, Clone, Copy, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct EachDose {
    /// So many doses.
    pub n: usize,
    /// So many hours after each.
    pub h: Positive,
}

/// What a watch asks for.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Deserialize)]
#[serde(rename_all = "kebab-case")]
#[allow(missing_docs, reason = "the trade's own words")]
pub enum AsksFor {
    Tracing,
    Potassium,
    Magnesium,
    Calcium,
}

#[derive(Debug, Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct RuleIs {
    pub id: Spanned<String>,
    pub concern: Spanned<String>,
    pub tier: Spanned<String>,
    pub says: String,
    pub to_do: Option<String>,
    pub only_if: Option<Condition>,
    pub when: Condition,
    pub borderline: Option<Spanned<String>>,
    pub cannot_tell: Option<Spanned<String>>,
    #[serde(default)]
    pub example: Vec<Spanned<ExampleIs>>,
}

/// An example that a rule carries: a patient in a few words, and what the rule must say of them.
#[derive(Debug, Clone, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct ExampleIs {
    /// What is known, in the protocol's own short form.
    pub patient: ExamplePatient,
    /// What the rule must answer.
    pub gives: Gives,
}

/// What a rule must answer in an example.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Deserialize)]
#[serde(rename_all = "kebab-case")]
#[allow(missing_docs, reason = "the three answers, and borderline")]
pub enum Gives {
    Fired,
    Quiet,
    CannotTell,
    Borderline,
}

/// A patient in a few words. Everything is as of one moment; ages are hours before it.
#[derive(Debug, Clone, Default, Deserialize)]
#[serde(deny_unknown_fields, default)]
pub struct ExamplePatient {
    /// Sex.
    pub sex: Option<crate::fact::Sex>,
    /// Age in years.
    pub age: Option<u32>,
    /// QT of the latest tracing.
    pub qt_ms: Option<f64>,
    /// Its doubt.
    pub doubt_ms: Option<f64>,
    /// Rate.
    pub rate_per_min: Option<f64>,
    /// QRS.
    pub qrs_ms: Option<f64>,
    /// How old that tracing is.
    pub tracing_age_h: Option<f64>,
    /// Its quality.
    pub quality: Option<crate::fact::Quality>,
    /// QT of an earlier good tracing at 60/min, two days before: the baseline.
    pub baseline_qt_ms: Option<f64>,
    /// QT that the cart printed.
    pub printed_qt_ms: Option<f64>,
    /// Medicines given two hours ago, first a day ago, by their names on the list.
    pub medicines: Vec<String>,
    /// Potassium, mmol/L, an hour ago.
    pub potassium: Option<f64>,
    /// Magnesium, mmol/L, an hour ago.
    pub magnesium: Option<f64>,
    /// Ionised calcium, mmol/L, an hour ago.
    pub calcium_ionised: Option<f64>,
    /// Total calcium, mmol/L, an hour ago.
    pub calcium_total: Option<f64>,
    /// Albumin, g/L, an hour ago.
    pub albumin: Option<f64>,
    /// Creatinine, umol/L, an hour ago.
    pub creatinine: Option<f64>,
    /// Weight.
    pub weight_kg: Option<f64>,
    /// How old those results are.
    pub results_age_h: Option<f64>,
    /// Those specimens were haemolysed.
    pub haemolysed: bool,
    /// Risk conditions recorded.
    pub recorded: Vec<crate::fact::Condition>,
    /// Risk conditions ruled out.
    pub ruled_out: Vec<crate::fact::Condition>,
}
