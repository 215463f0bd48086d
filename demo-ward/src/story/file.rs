//! The shape of the story's files.

use super::Expected;
use crate::synth::{Noise, Pace, QrsShape, Sketch, TShape};
use chrono::NaiveDate;
use serde::{Deserialize, Deserializer};

#[derive(Debug, Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct WardFile {
    pub(super) hospital: String,
    pub(super) issuer: String,
    pub(super) ward: String,
    pub(super) zone: String,
    pub(super) first_day: Date,
    pub(super) begins: String,
    pub(super) ends: String,
    pub(super) expect: Vec<ExpectFile>,
}

#[derive(Debug, Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct PersonFile {
    pub(super) bed: String,
    pub(super) number: String,
    pub(super) name: String,
    pub(super) sex: String,
    pub(super) birth_date: Date,
    pub(super) weight_kg: f64,
    /// Same number, same anatomy.
    pub(super) heart: u64,
    pub(super) event: Vec<EventFile>,
    #[serde(default)]
    pub(super) expect: Vec<ExpectFile>,
}

/// A TOML date.
#[derive(Debug)]
pub(super) struct Date(pub(super) NaiveDate);

impl<'de> Deserialize<'de> for Date {
    fn deserialize<D: Deserializer<'de>>(from: D) -> Result<Self, D::Error> {
        let date = toml::value::Datetime::deserialize(from)?;
        date.to_string().parse().map(Date).map_err(serde::de::Error::custom)
    }
}

#[derive(Debug, Deserialize)]
pub(super) struct EventFile {
    pub(super) at: String,
    pub(super) tell: Option<String>,
    #[serde(flatten)]
    pub(super) happens: Happens,
}

#[derive(Debug, Deserialize)]
#[serde(rename_all = "snake_case")]
pub(super) enum Happens {
    Admitted(bool),
    Discharged(bool),
    Risk(String),
    Result(ResultFile),
    Order(OrderFile),
    Stopped(WhichOrder),
    Held(WhichOrder),
    Tracing(TracingFile),
    Answer(AnswerFile),
    OverRead(OverReadFile),
}

#[derive(Debug, Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct ResultFile {
    pub(super) of: String,
    pub(super) value: String,
    pub(super) id: String,
    #[serde(default = "last_word")]
    pub(super) status: String,
    pub(super) collected: Option<String>,
    #[serde(default)]
    pub(super) comment: String,
}

fn last_word() -> String {
    "F".to_owned()
}

impl ResultFile {
    /// LOINC code and unit.
    pub(super) fn code(&self) -> Result<(&'static str, &'static str), String> {
        match &*self.of {
            "potassium" => Ok(("2823-3", "mmol/L")),
            "magnesium" => Ok(("2601-3", "mmol/L")),
            "creatinine" => Ok(("14682-9", "umol/L")),
            other => Err(format!("the laboratory of the story has no `{other}`")),
        }
    }
}

#[derive(Debug, Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct OrderFile {
    pub(super) id: String,
    name: String,
    #[serde(default)]
    code: String,
    dose: String,
    unit: String,
    route: String,
    frequency: String,
    /// When it is given.
    pub(super) doses: Vec<String>,
}

impl OrderFile {
    pub(super) fn row<'a>(
        &'a self,
        event: &'a str,
        time: &'a str,
        admin: &'a str,
    ) -> [(&'static str, &'a str); 12] {
        [
            ("event", event),
            ("order_id", &self.id),
            ("admin_id", admin),
            ("code_system", if self.code.is_empty() { "" } else { "ATC" }),
            ("code", &self.code),
            ("name", &self.name),
            ("dose", &self.dose),
            ("dose_unit", &self.unit),
            ("route", &self.route),
            ("frequency", if event == "order" { &self.frequency } else { "" }),
            ("start", time),
            ("recorded_at", time),
        ]
    }
}

#[derive(Debug, Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct WhichOrder {
    order: String,
}

impl WhichOrder {
    pub(super) fn row<'a>(&'a self, event: &'a str, time: &'a str) -> [(&'static str, &'a str); 4] {
        [("event", event), ("order_id", &self.order), ("name", "see order"), ("recorded_at", time)]
    }
}

#[derive(Debug, Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct TracingFile {
    qt_ms: f64,
    rate_per_min: f64,
    #[serde(default)]
    pace: Pace,
    qrs: Option<QrsShape>,
    qrs_ms: Option<f64>,
    t: Option<TShape>,
    #[serde(default)]
    noise: Noise,
    /// Where it is another person's.
    pub(super) heart: Option<u64>,
    pub(super) birth_date: Option<Date>,
}

impl TracingFile {
    pub(super) fn sketch(&self, heart: u64, seed: u64) -> Sketch {
        let usual = Sketch::default();
        Sketch {
            qt_ms: self.qt_ms,
            rate_per_min: self.rate_per_min,
            pace: self.pace,
            qrs: self.qrs.unwrap_or(usual.qrs),
            qrs_ms: self.qrs_ms.unwrap_or(usual.qrs_ms),
            t: self.t.unwrap_or(usual.t),
            noise: self.noise.clone(),
            heart,
            seed,
            ..usual
        }
    }
}

#[derive(Debug, Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct AnswerFile {
    pub(super) concern: String,
    pub(super) by: String,
    pub(super) intent: String,
}

#[derive(Debug, Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct OverReadFile {
    pub(super) qt_ms: f64,
    pub(super) by: String,
    pub(super) why: String,
}

#[derive(Debug, Deserialize)]
#[serde(deny_unknown_fields)]
pub(super) struct ExpectFile {
    concern: String,
    rule: String,
    tier: String,
    raised: String,
    #[serde(default)]
    told: Vec<String>,
    #[serde(default)]
    tiers: Vec<String>,
    #[serde(default)]
    answered: Vec<String>,
    ended: Option<String>,
}

impl ExpectFile {
    pub(super) fn of(&self, bed: &str) -> Expected {
        Expected {
            bed: bed.to_owned(),
            raised: self.raised.clone(),
            concern: self.concern.clone(),
            rule: self.rule.clone(),
            tier: self.tier.clone(),
            told: self.told.clone(),
            tiers: self.tiers.clone(),
            answered: self.answered.clone(),
            ended: self.ended.clone(),
        }
    }
}
