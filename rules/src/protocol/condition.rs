//! What a rule may ask: a tree of typed conditions, units in the keys. No expression strings.

use crate::correction::Formula;
use crate::fact;
use serde::Deserialize;
use toml::Spanned;

/// A condition: fired, quiet, or cannot tell.
#[derive(Debug, Clone, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum Condition {
    /// Every one of these.
    All(Vec<Condition>),
    /// At least one of these.
    Any(Vec<Condition>),
    /// Not one of these.
    None(Vec<Condition>),
    /// At least so many of these.
    AtLeast(AtLeast),

    /// QTc of the latest tracing, by the protocol's reading unless `by` says otherwise.
    Qtc(QtcIs),
    /// The change of QTc against the baseline or the tracing before.
    QtcRise(QtcRise),
    /// Raw QT on or above the adult overdose nomogram (Chan & Isbister, QJM 2007), narrow QRS only.
    QtNomogram(Reached),
    /// JT index (Zhou & Rautaharju 1992), for wide QRS.
    JtIndex(AtLeastPoints),
    /// Ventricular rate.
    Rate(RateIs),
    /// QRS duration.
    Qrs(AtLeastMs),
    /// What the latest tracing is.
    Tracing(TracingIs),
    /// The formulas that are shown fall on different sides of a limit.
    FormulasSplit(Limit),
    /// The cart's own QT differs from the measured one.
    PrintedDiffers(ByMs),

    /// How many listed medicines are active.
    Medicines(Medicines),
    /// Two active listed medicines of which one raises the other's exposure.
    Exposure(Raised),
    /// Creatinine clearance (Cockcroft and Gault) below this with an active listed medicine that the kidney clears.
    ReducedClearance(ReducedClearance),
    /// Medicines in the feed that the list doesn't know.
    NotRecognised(AtLeastOf),

    /// An electrolyte's latest trusted value.
    Electrolyte(ElectrolyteIs),
    /// How an electrolyte's latest value stands.
    ElectrolyteState(ElectrolyteStateIs),
    /// Calcium below its limit, in the best form at hand: ionised where it is as recent, else corrected for albumin.
    LowCalcium(LowCalcium),

    /// A risk condition.
    Risk(RiskIs),
    /// Tisdale score (Circ Cardiovasc Qual Outcomes 2013;6:479).
    Tisdale(AtLeastPoints),
    /// Age in full years.
    Age(AgeIs),
    /// Something that a watch asks for is overdue.
    Overdue(Overdue),
}

/// `at_least = { n = 2, of = […] }`.
#[derive(Debug, Clone, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct AtLeast {
    /// How many.
    pub n: Spanned<usize>,
    /// Of these.
    pub of: Vec<Condition>,
}

/// A limit in ms between 200 and 900: what an interval can be.
#[derive(Debug, Clone, Copy, PartialEq, Deserialize)]
#[serde(try_from = "f64")]
pub struct IntervalMs(pub f64);

impl TryFrom<f64> for IntervalMs {
    type Error = String;
    fn try_from(ms: f64) -> Result<Self, String> {
        if (200.0..=900.0).contains(&ms) {
            Ok(Self(ms))
        } else {
            Err(format!("{ms} is no QT interval; 200 to 900 ms can be asked for"))
        }
    }
}

/// A number above 0.
#[derive(Debug, Clone, Copy, PartialEq, Deserialize)]
#[serde(try_from = "f64")]
pub struct Positive(pub f64);

impl TryFrom<f64> for Positive {
    type Error = String;
    fn try_from(number: f64) -> Result<Self, String> {
        if number.is_finite() && number > 0.0 {
            Ok(Self(number))
        } else {
            Err(format!("{number} is not above 0"))
        }
    }
}

/// A fixed limit, or one of the protocol's named limits by sex and age.
#[derive(Debug, Clone, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Limit {
    /// The same for everyone.
    pub at_least_ms: Option<IntervalMs>,
    /// A name from `[limits]`.
    pub at_least: Option<Spanned<String>>,
}

/// `qtc = { at_least_ms = 500 }`, `qtc = { at_least = "prolonged", by = "any" }`, `qtc = { below_ms = 360 }`.
#[derive(Debug, Clone, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct QtcIs {
    /// The same for everyone.
    pub at_least_ms: Option<IntervalMs>,
    /// A name from `[limits]`.
    pub at_least: Option<Spanned<String>>,
    /// Short QT: below this.
    pub below_ms: Option<IntervalMs>,
    /// By which formula; the protocol's own where not said.
    pub by: Option<By>,
}

/// Which formula is asked.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum By {
    /// By at least one of the formulas that the protocol shows.
    Any,
    /// By every one of them.
    All,
    /// By this one.
    #[serde(untagged)]
    One(Formula),
}

/// `qtc_rise = { at_least_ms = 60, over = "baseline" }`.
#[derive(Debug, Clone, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct QtcRise {
    /// The rise.
    pub at_least_ms: Positive,
    /// Against what.
    pub over: Over,
}

/// What a change is measured against.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Over {
    /// The patient's baseline.
    Baseline,
    /// The tracing before.
    Last,
}

/// `qt_nomogram = "reached"`.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Deserialize)]
#[serde(rename_all = "kebab-case")]
#[allow(missing_docs, reason = "the one answer that can be asked for")]
pub enum Reached {
    Reached,
}

/// `exposure = "raised"`.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Deserialize)]
#[serde(rename_all = "kebab-case")]
#[allow(missing_docs, reason = "the one answer that can be asked for")]
pub enum Raised {
    Raised,
}

/// `{ at_least = 112 }`.
#[derive(Debug, Clone, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct AtLeastPoints {
    /// So much or more.
    pub at_least: Positive,
}

/// `{ at_least = 1 }`.
#[derive(Debug, Clone, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct AtLeastOf {
    /// So many or more.
    pub at_least: usize,
}

/// `{ at_least_ms = 120 }`.
#[derive(Debug, Clone, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct AtLeastMs {
    /// So long or longer.
    pub at_least_ms: Positive,
}

/// `{ by_ms = 40 }`.
#[derive(Debug, Clone, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct ByMs {
    /// By more than this, either way.
    pub by_ms: Positive,
}

/// `rate = { below_per_min = 50 }`, `rate = { above_per_min = 120 }`.
#[derive(Debug, Clone, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct RateIs {
    /// Slower than this.
    pub below_per_min: Option<Positive>,
    /// Faster than this.
    pub above_per_min: Option<Positive>,
}

/// `tracing = "doubtful"`.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum TracingIs {
    /// A value stands, but a person should look.
    Doubtful,
    /// No QT could be told from it.
    Unreadable,
    /// QRS at or above the protocol's `wide_qrs.from_ms`, or paced.
    WideQrs,
    /// RR irregularly irregular.
    IrregularlyIrregular,
    /// There is none in this stay.
    Missing,
}

/// `medicines = { at_least = 2, evidence = ["labels"], groups = […], substances = […], routes = ["IV"], started_within_h = 72 }`.
#[derive(Debug, Clone, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Medicines {
    /// So many different substances or more.
    pub at_least: usize,
    /// Only with this kind of evidence (keys of the list's `[evidence]`); any where empty.
    #[serde(default)]
    pub evidence: Vec<Spanned<String>>,
    /// Only of these groups.
    #[serde(default)]
    pub groups: Vec<Spanned<String>>,
    /// Only these substances.
    #[serde(default)]
    pub substances: Vec<Spanned<String>>,
    /// Only by these routes.
    #[serde(default)]
    pub routes: Vec<String>,
    /// Only those started within so many hours.
    pub started_within_h: Option<Positive>,
    /// Only those within so many half-lives of their start: not yet at steady state.
    pub within_half_lives_of_start: Option<Positive>,
}

/// `reduced_clearance = { below_ml_per_min = 50 }`.
#[derive(Debug, Clone, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct ReducedClearance {
    /// Creatinine clearance below this.
    pub below_ml_per_min: Positive,
}

/// What is asked about: an analyte, or calcium in the best form at hand.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Of {
    /// Potassium.
    Potassium,
    /// Magnesium.
    Magnesium,
    /// Total calcium corrected for albumin.
    CalciumCorrected,
    /// Ionised calcium.
    CalciumIonised,
}

impl Of {
    /// The analyte whose specimens it rests on.
    pub fn analyte(self) -> fact::Analyte {
        match self {
            Of::Potassium => fact::Analyte::Potassium,
            Of::Magnesium => fact::Analyte::Magnesium,
            Of::CalciumCorrected => fact::Analyte::CalciumTotal,
            Of::CalciumIonised => fact::Analyte::CalciumIonised,
        }
    }
}

/// `electrolyte = { of = "potassium", below_mmol_l = 3.5 }`.
#[derive(Debug, Clone, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct ElectrolyteIs {
    /// Which.
    pub of: Of,
    /// Below this.
    pub below_mmol_l: Option<Positive>,
    /// Above this.
    pub above_mmol_l: Option<Positive>,
    /// Fallen by so much …
    pub falling_by_mmol_l: Option<Positive>,
    /// … within so many hours.
    pub within_h: Option<Positive>,
}

/// `low_calcium = { ionised_below_mmol_l = 1.0, corrected_below_mmol_l = 2.0 }`.
#[derive(Debug, Clone, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct LowCalcium {
    /// Ionised calcium below this.
    pub ionised_below_mmol_l: Positive,
    /// Total calcium, corrected for albumin, below this.
    pub corrected_below_mmol_l: Positive,
}

/// `electrolyte_state = { of = "potassium", is = "stale" }`.
#[derive(Debug, Clone, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct ElectrolyteStateIs {
    /// Which.
    pub of: Of,
    /// How it stands.
    pub is: State,
}

/// How an electrolyte stands.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum State {
    /// The latest value is older than the protocol trusts.
    Stale,
    /// None in this stay.
    NeverMeasured,
    /// The latest specimen was haemolysed or otherwise unreliable.
    Haemolysed,
}

/// `risk = { condition = "sepsis", is = "recorded" }`.
#[derive(Debug, Clone, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct RiskIs {
    /// Which.
    pub condition: fact::Condition,
    /// How it stands.
    pub is: RiskState,
}

/// How a risk condition stands.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum RiskState {
    /// Recorded as present.
    Recorded,
    /// Recorded as absent.
    RuledOut,
    /// Nobody said.
    NotRecorded,
}

/// `age = { at_least_years = 68 }`.
#[derive(Debug, Clone, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct AgeIs {
    /// So old or older.
    pub at_least_years: u32,
}

/// `overdue = { watch = "first-tracing", by_h = 4 }`.
#[derive(Debug, Clone, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Overdue {
    /// A watch of this protocol.
    pub watch: Spanned<String>,
    /// Overdue by at least so many hours beyond the watch's own grace.
    #[serde(default)]
    pub by_h: f64,
}
