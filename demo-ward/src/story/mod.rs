//! The story: who lies on the ward, what is exported when, who answers, and which alerts are expected of it all.
//!
//! It stands in `story/*.toml`, one file a person. What happens at one time is exported together, as on a ward round: one
//! file for patients, one for medicines, one for results, and one for each tracing.

mod day;
mod export;
mod file;

pub use day::Days;
pub use export::{Export, ExportError};

use crate::synth::Sketch;
use crate::write::Label;
use chrono::{DateTime, TimeDelta, Utc};
use ebbmark_rules::fact::Sex;
use ebbmark_rules::ids::PatientId;
use export::Charts;
use file::{EventFile, Happens, OrderFile, PersonFile, TracingFile, WardFile};

/// The whole story.
#[derive(Debug)]
pub struct Story {
    /// The hospital's invented name.
    pub hospital: String,
    /// Who gives patient numbers.
    pub issuer: String,
    /// The ward.
    pub ward: String,
    /// The days and the zone that its times are told in.
    pub days: Days,
    /// When it begins.
    pub begins: DateTime<Utc>,
    /// When it ends.
    pub ends: DateTime<Utc>,
    /// Who lies there.
    pub people: Vec<Patient>,
    /// What happens, in order.
    pub steps: Vec<Step>,
    /// Which alerts are expected, and nothing else.
    pub expected: Vec<Expected>,
}

/// An invented patient.
#[derive(Debug, Clone)]
pub struct Patient {
    /// The hospital's number.
    pub id: PatientId,
    /// Bed.
    pub bed: String,
    /// Name.
    pub name: String,
}

/// Something that happens.
#[derive(Debug)]
pub struct Step {
    /// When.
    pub at: DateTime<Utc>,
    /// Sentences for whoever watches.
    pub tell: Vec<String>,
    /// What.
    pub act: Act,
}

/// What happens.
#[derive(Debug)]
pub enum Act {
    /// A file is exported.
    Export(Export),
    /// Somebody answers an alert.
    Answer {
        /// About whom.
        patient: PatientId,
        /// The alert's concern.
        concern: String,
        /// Who answers.
        by: String,
        /// What they mean to do, in one of the protocol's intents.
        intent: String,
    },
    /// A qualified reader reads the patient's latest tracing, globally and to where T meets the baseline.
    OverRead {
        /// Whose tracing.
        patient: PatientId,
        /// QT, ms.
        qt_ms: f64,
        /// Who reads.
        by: String,
        /// Why it differs.
        why: String,
    },
}

/// An alert that is expected, told in the story's own words: `2 06:55 doctor escalated`.
#[derive(Debug, Clone, PartialEq, Eq, PartialOrd, Ord)]
pub struct Expected {
    /// Which bed; empty for the service itself.
    pub bed: String,
    /// When it was raised.
    pub raised: String,
    /// What it is about.
    pub concern: String,
    /// The rule that raised it.
    pub rule: String,
    /// The tier it was raised at.
    pub tier: String,
    /// When which role was told, and why.
    pub told: Vec<String>,
    /// When its tier changed, and to what.
    pub tiers: Vec<String>,
    /// When who answered.
    pub answered: Vec<String>,
    /// When and how it ended, if it did.
    pub ended: Option<String>,
}

/// Why the story can't be told. It is compiled in, so this is a fault of ours.
#[derive(Debug, thiserror::Error)]
pub enum StoryError {
    /// A file is not what it should be.
    #[error("cannot read the story of {file}: {why}")]
    File {
        /// Which.
        file: &'static str,
        /// What is wrong.
        why: String,
    },
}

const WARD: (&str, &str) = ("ward.toml", include_str!("../../story/ward.toml"));

macro_rules! people {
    ($($file:literal),* $(,)?) => {
        [$(($file, include_str!(concat!("../../story/", $file)))),*]
    };
}

const PEOPLE: [(&str, &str); 12] = people![
    "t01-lindqvist.toml",
    "t02-okafor.toml",
    "t03-whitlock.toml",
    "t04-rennard.toml",
    "t05-achterberg.toml",
    "t06-strnad.toml",
    "t07-adeyemi.toml",
    "t08-forsyth.toml",
    "t09-fonseca.toml",
    "t10-drummond.toml",
    "t11-park.toml",
    "t12-ainsworth.toml",
];

/// A cart sends a tracing this long after it began to record.
const CART: TimeDelta = TimeDelta::minutes(4);
/// A specimen is in the laboratory this long.
const LABORATORY: TimeDelta = TimeDelta::minutes(50);

impl Story {
    /// The story that is compiled in.
    ///
    /// # Errors
    /// One of its files is wrong.
    pub fn load() -> Result<Self, StoryError> {
        let wrong = |file, why| StoryError::File { file, why };
        let ward: WardFile =
            toml::from_str(WARD.1).map_err(|why| wrong(WARD.0, why.to_string()))?;
        let days = Days::new(ward.first_day.0, &ward.zone).map_err(|why| wrong(WARD.0, why))?;
        let at = |text: &str| days.at(text);
        let mut teller = Teller {
            begins: at(&ward.begins).map_err(|why| wrong(WARD.0, why))?,
            ends: at(&ward.ends).map_err(|why| wrong(WARD.0, why))?,
            expected: ward.expect.iter().map(|expect| expect.of("")).collect(),
            ward,
            days: days.clone(),
            people: Vec::new(),
            moments: Vec::new(),
        };
        for (file, text) in PEOPLE {
            let person: PersonFile =
                toml::from_str(text).map_err(|why| wrong(file, why.to_string()))?;
            teller.person(&person).map_err(|why| wrong(file, why))?;
        }
        Ok(teller.story())
    }

    /// Whose bed a patient lies in.
    pub fn bed(&self, patient: &PatientId) -> Option<&str> {
        self.people.iter().find(|person| person.id == *patient).map(|person| &*person.bed)
    }
}

/// What is gathered before it is put in order.
struct Teller {
    ward: WardFile,
    days: Days,
    begins: DateTime<Utc>,
    ends: DateTime<Utc>,
    people: Vec<Patient>,
    moments: Vec<Moment>,
    expected: Vec<Expected>,
}

/// One event of one person, ready to be exported or done.
struct Moment {
    at: DateTime<Utc>,
    tell: Option<String>,
    is: Is,
}

enum Is {
    Rows(Charts),
    Tracing(Box<(Sketch, Label)>),
    Act(Act),
}

impl Teller {
    fn person(&mut self, person: &PersonFile) -> Result<(), String> {
        let id = PatientId::new(&self.ward.issuer, &person.number).ok_or("no number")?;
        let mut people = Patient { id, bed: person.bed.clone(), name: person.name.clone() };
        for event in &person.event {
            self.event(person, &people.id, event)?;
        }
        self.expected.extend(person.expect.iter().map(|expect| expect.of(&person.bed)));
        people.name.clone_from(&person.name);
        self.people.push(people);
        Ok(())
    }

    fn event(
        &mut self,
        person: &PersonFile,
        id: &PatientId,
        event: &EventFile,
    ) -> Result<(), String> {
        let at = self.days.at(&event.at)?;
        let time = |at: DateTime<Utc>| self.days.local(at).to_rfc3339();
        let mut charts = Charts::new(&person.number, &self.ward.issuer);
        let mut later = Vec::new();
        let is = match &event.happens {
            Happens::Admitted(true) => {
                charts.patient(&[
                    ("event", "describe"),
                    ("at", &time(at)),
                    ("sex", &person.sex),
                    ("birth_date", &person.birth_date.0.to_string()),
                    ("weight_kg", &person.weight_kg.to_string()),
                    ("name", &person.name),
                ]);
                charts.patient(&[
                    ("event", "admit"),
                    ("at", &time(at)),
                    ("ward", &self.ward.ward),
                    ("bed", &person.bed),
                ]);
                Is::Rows(charts)
            }
            Happens::Discharged(true) => {
                charts.patient(&[("event", "discharge"), ("at", &time(at))]);
                Is::Rows(charts)
            }
            Happens::Admitted(false) | Happens::Discharged(false) => {
                return Err(format!("at {}: only `true` says something", event.at));
            }
            Happens::Risk(condition) => {
                charts.patient(&[
                    ("event", "risk-recorded"),
                    ("at", &time(at)),
                    ("condition", condition),
                ]);
                Is::Rows(charts)
            }
            Happens::Result(result) => {
                let (code, unit) = result.code()?;
                let collected = match &result.collected {
                    Some(text) => self.days.at(text)?,
                    None => at - LABORATORY,
                };
                charts.result(&[
                    ("order_id", &result.id),
                    ("code_system", "LN"),
                    ("code", code),
                    ("name", &result.of),
                    ("value", &result.value),
                    ("unit", unit),
                    ("status", &result.status),
                    ("collected_at", &time(collected)),
                    ("reported_at", &time(at)),
                    ("comment", &result.comment),
                ]);
                Is::Rows(charts)
            }
            Happens::Order(order) => {
                charts.medicine(&order.row("order", &time(at), ""));
                for (number, dose) in (1..).zip(&order.doses) {
                    later.push(self.dose(person, order, number, dose)?);
                }
                Is::Rows(charts)
            }
            Happens::Stopped(which) => {
                charts.medicine(&which.row("stop", &time(at)));
                Is::Rows(charts)
            }
            Happens::Held(which) => {
                charts.medicine(&which.row("hold", &time(at)));
                Is::Rows(charts)
            }
            Happens::Tracing(tracing) => Is::Tracing(Box::new(self.tracing(person, tracing, at))),
            Happens::Answer(answer) => Is::Act(Act::Answer {
                patient: id.clone(),
                concern: answer.concern.clone(),
                by: answer.by.clone(),
                intent: answer.intent.clone(),
            }),
            Happens::OverRead(read) => Is::Act(Act::OverRead {
                patient: id.clone(),
                qt_ms: read.qt_ms,
                by: read.by.clone(),
                why: read.why.clone(),
            }),
        };
        self.moments.push(Moment { at, tell: event.tell.clone(), is });
        self.moments.extend(later);
        Ok(())
    }

    fn dose(
        &self,
        person: &PersonFile,
        order: &OrderFile,
        number: u32,
        at: &str,
    ) -> Result<Moment, String> {
        let at = self.days.at(at)?;
        let mut charts = Charts::new(&person.number, &self.ward.issuer);
        let time = self.days.local(at).to_rfc3339();
        charts.medicine(&order.row("admin", &time, &format!("{}-{number}", order.id)));
        Ok(Moment { at, tell: None, is: Is::Rows(charts) })
    }

    fn tracing(
        &self,
        person: &PersonFile,
        tracing: &TracingFile,
        at: DateTime<Utc>,
    ) -> (Sketch, Label) {
        let birth_date = tracing.birth_date.as_ref().unwrap_or(&person.birth_date).0;
        let label = Label {
            patient_id: person.number.clone(),
            issuer: self.ward.issuer.clone(),
            sex: match &*person.sex {
                "F" => Some(Sex::Female),
                "M" => Some(Sex::Male),
                _ => None,
            },
            birth_date: Some(birth_date),
            start: self.days.local(at - CART).fixed_offset(),
        };
        // Each occasion has a chance of its own: the moment.
        let seed = at.timestamp().unsigned_abs();
        (tracing.sketch(tracing.heart.unwrap_or(person.heart), seed), label)
    }

    /// Puts the moments in order and together.
    fn story(mut self) -> Story {
        self.moments.sort_by_key(|moment| moment.at);
        let mut steps: Vec<Step> = Vec::new();
        let mut tracings = 0;
        let mut rest = self.moments.into_iter().peekable();
        while let Some(first) = rest.next() {
            let at = first.at;
            let mut now = vec![first];
            while let Some(next) = rest.next_if(|next| next.at == at) {
                now.push(next);
            }
            let stamp = self.days.local(at).format("%Y%m%d-%H%M").to_string();
            let mut together = Charts::default();
            let (mut heard, mut after) = (Vec::new(), Vec::new());
            for moment in now {
                match moment.is {
                    Is::Rows(charts) => {
                        heard.extend(moment.tell);
                        together.join(charts);
                    }
                    Is::Tracing(drawn) => {
                        tracings += 1;
                        let export = Export::tracing(tracings, drawn);
                        after.push((moment.tell, Act::Export(export)));
                    }
                    Is::Act(act) => after.push((moment.tell, act)),
                }
            }
            for export in together.exports(&stamp) {
                steps.push(Step { at, tell: std::mem::take(&mut heard), act: Act::Export(export) });
            }
            steps.extend(after.into_iter().map(|(tell, act)| Step {
                at,
                tell: tell.into_iter().collect(),
                act,
            }));
        }
        self.expected.sort();
        Story {
            hospital: self.ward.hospital,
            issuer: self.ward.issuer,
            ward: self.ward.ward,
            days: self.days,
            begins: self.begins,
            ends: self.ends,
            people: self.people,
            steps,
            expected: self.expected,
        }
    }
}
