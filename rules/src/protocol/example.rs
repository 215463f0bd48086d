//! The examples that a protocol carries, run when it is checked: facts in a few words, and what the rule must say.

use super::{ExamplePatient, Gives, Protocol, Rule};
use crate::decide::ask;
use crate::fact::{
    Administration, Analyte, At, Body, Bound, Code, Description, Fact, LabResult, MedicineName,
    Place, Printed, Quality, Reading, ResultStatus, ResultValue, Source, Specimen, Tracing,
};
use crate::ids::{PatientId, ResultId, TracingId, Ward};
use crate::medicines::MedicineList;
use crate::patient::Patient;
use crate::units::{Kg, Ms, PerMinute};
use crate::verdict::Verdict;
use crate::view::{View, span_h};
use chrono::{Datelike, NaiveDate, TimeDelta};

/// What came of one example.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct ExampleResult {
    /// The rule.
    pub rule: String,
    /// Its place among the rule's examples, from 1.
    pub number: usize,
    /// What the protocol's author expects.
    pub expected: String,
    /// What the rule says.
    pub found: String,
}

impl ExampleResult {
    /// As expected.
    pub fn holds(&self) -> bool {
        self.expected == self.found
    }
}

/// Runs every example of every rule against a medicine list.
pub fn run_examples(protocol: &Protocol, list: &MedicineList) -> Vec<ExampleResult> {
    let mut found = Vec::new();
    for rule in &protocol.rules {
        for (index, example) in rule.examples.iter().enumerate() {
            found.push(ExampleResult {
                rule: rule.id.to_string(),
                number: index + 1,
                expected: word(example.gives).into(),
                found: says(protocol, list, rule, &example.patient),
            });
        }
    }
    found
}

fn word(gives: Gives) -> &'static str {
    match gives {
        Gives::Fired => "fired",
        Gives::Quiet => "quiet",
        Gives::CannotTell => "cannot-tell",
        Gives::Borderline => "borderline",
    }
}

fn says(protocol: &Protocol, list: &MedicineList, rule: &Rule, example: &ExamplePatient) -> String {
    let now = moment();
    let unknown: Vec<&String> = example
        .medicines
        .iter()
        .filter(|name| {
            let medicine = MedicineName { codes: Vec::new(), text: name.as_str().into() };
            list.recognise(&medicine) == crate::medicines::Recognised::No
                && !name.starts_with("unlisted")
        })
        .collect();
    if let Some(name) = unknown.first() {
        return format!("the example names `{name}`, which is not on the medicine list");
    }
    let mut patient = Patient::default();
    for fact in facts(example, now) {
        patient.take(&fact);
    }
    let view = View::new(&patient, protocol, list, now);
    let said = ask(&view).into_iter().find(|said| said.rule.id == rule.id);
    match said.map(|said| said.verdict) {
        Some(Verdict::Fired(because)) if because.borderline => "borderline".into(),
        Some(Verdict::Fired(_)) => "fired".into(),
        Some(Verdict::CannotTell(missing)) if missing.borderline => "borderline".into(),
        Some(Verdict::CannotTell(_)) => "cannot-tell".into(),
        Some(Verdict::Quiet) | None => "quiet".into(),
    }
}

/// The moment at which every example plays; which one doesn't matter.
fn moment() -> At {
    At::UNIX_EPOCH + TimeDelta::days(20_000)
}

/// The facts that an example stands for.
pub(crate) fn facts(example: &ExamplePatient, now: At) -> Vec<Fact> {
    let mut found = Vec::new();
    let mut add = |hours_ago: f64, body: Body| {
        let at = now - span_h(hours_ago);
        found.push(Fact {
            occurred_at: at,
            received_at: at,
            source: Source::Service,
            patient: PatientId::new("example", "1"),
            body,
        });
    };
    add(240.0, Body::Admitted(Place { ward: Ward::new("example"), bed: None }));
    let birth_date = example.age.and_then(|age| {
        let today = now.date_naive();
        NaiveDate::from_ymd_opt(today.year() - i32::try_from(age).unwrap_or(0), 1, 1)
    });
    let weight = example.weight_kg.and_then(|kg| Kg::new(kg).ok());
    add(
        240.0,
        Body::Described(Description {
            sex: example.sex,
            birth_date,
            weight,
            ..Description::default()
        }),
    );
    if let Some(qt) = example.baseline_qt_ms {
        add(
            48.0,
            Body::Tracing(tracing("baseline", Some(qt), 8.0, 60.0, 90.0, Quality::Good, None)),
        );
    }
    if example.qt_ms.is_some()
        || example.quality.is_some()
        || example.qrs_ms.is_some()
        || example.rate_per_min.is_some()
    {
        let quality = example.quality.unwrap_or(Quality::Good);
        let tracing = tracing(
            "latest",
            example.qt_ms,
            example.doubt_ms.unwrap_or(5.0),
            example.rate_per_min.unwrap_or(60.0),
            example.qrs_ms.unwrap_or(90.0),
            quality,
            example.printed_qt_ms,
        );
        add(example.tracing_age_h.unwrap_or(0.5), Body::Tracing(tracing));
    }
    for (index, name) in example.medicines.iter().enumerate() {
        for (dose, hours) in [(1, 26.0), (2, 2.0)] {
            let given = Administration {
                id: format!("{index}-{dose}").into(),
                order: None,
                medicine: MedicineName { codes: Vec::<Code>::new(), text: name.as_str().into() },
                dose: None,
                route: None,
            };
            add(hours, Body::Given(given));
        }
    }
    let age = example.results_age_h.unwrap_or(1.0);
    for (analyte, value) in [
        (Analyte::Potassium, example.potassium),
        (Analyte::Magnesium, example.magnesium),
        (Analyte::CalciumIonised, example.calcium_ionised),
        (Analyte::CalciumTotal, example.calcium_total),
        (Analyte::Albumin, example.albumin),
        (Analyte::Creatinine, example.creatinine),
    ] {
        if let Some(number) = value {
            let result = LabResult {
                id: ResultId::new(analyte.word()),
                analyte,
                value: Some(ResultValue { number, bound: Bound::Equal }),
                as_sent: format!("{number} {}", analyte.canonical()).into(),
                status: ResultStatus::Final,
                issued_at: None,
                specimen: Specimen { haemolysed: example.haemolysed, unreliable: false },
            };
            add(age, Body::Result(result));
        }
    }
    for (conditions, present) in [(&example.recorded, true), (&example.ruled_out, false)] {
        for condition in conditions {
            add(200.0, Body::Risk { condition: *condition, present });
        }
    }
    found
}

fn tracing(
    id: &str,
    qt: Option<f64>,
    doubt: f64,
    rate: f64,
    qrs: f64,
    quality: Quality,
    printed: Option<f64>,
) -> Tracing {
    let ms = |value: f64| Ms::new(value).ok();
    let reading = qt.zip(ms(doubt)).map(|(qt, doubt)| Reading {
        qt_tangent: ms(qt),
        qt_threshold: ms(qt),
        doubt,
    });
    Tracing {
        id: TracingId::new(id),
        engine: "example".into(),
        quality,
        why: if quality == Quality::Good { Vec::new() } else { vec!["as the example says".into()] },
        rr: ms(60_000.0 / rate),
        rate: PerMinute::new(rate).ok(),
        rhythm: None,
        qrs: ms(qrs),
        paced: false,
        global: reading,
        leads: ["I", "II", "V5"]
            .iter()
            .filter_map(|lead| Some(((*lead).into(), reading?)))
            .collect(),
        printed: printed.map(|qt| Printed {
            qt: ms(qt),
            qtc: None,
            formula: None,
            qrs: None,
            rate: None,
        }),
    }
}
