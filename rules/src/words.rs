//! Sentences and parts of sentences that messages share, so that mail, page and report say a thing the same way.

use crate::correction::Formula;
use crate::electrolytes::low_grade;
use crate::evaluate::of_word;
use crate::fact::{At, Bound, Condition, Dose, Source};
use crate::medicines::Medicine;
use crate::patient::ResultNow;
use crate::protocol::condition::Of;
use crate::view::{Electrolyte, Exposure, Reading, View};

/// `a, b and c`.
pub fn list<T: AsRef<str>>(items: impl IntoIterator<Item = T>) -> String {
    let items: Vec<T> = items.into_iter().collect();
    match items.as_slice() {
        [] => String::new(),
        [one] => one.as_ref().to_owned(),
        [first @ .., last] => {
            let first: Vec<&str> = first.iter().map(AsRef::as_ref).collect();
            format!("{} and {}", first.join(", "), last.as_ref())
        }
    }
}

/// Local time in the protocol's zone: `2 Mar 03:10`.
pub fn time(view: &View<'_>, at: At) -> String {
    at.with_timezone(&view.protocol.zone).format("%-d %b %H:%M").to_string()
}

/// How long ago, in the largest unit that says enough: `40 min`, `26 h`, `5 days`.
pub fn ago(view: &View<'_>, at: At) -> String {
    let minutes = (view.now - at).num_minutes().max(0);
    match minutes {
        0..=89 => format!("{minutes} min ago"),
        90..=4319 => format!("{} h ago", (minutes + 30) / 60),
        _ => format!("{} days ago", minutes / 1440),
    }
}

/// Where a fact came from.
pub fn source(source: &Source) -> String {
    match source {
        Source::File { file, place, .. } => format!("file {}, {place}", file.short()),
        Source::Person(person) => format!("entered by hand by {person}"),
        Source::Service => "the service".into(),
    }
}

/// Where a reading came from.
pub fn of_reading(reading: &Reading<'_>) -> String {
    match reading.over_read_by {
        Some(person) => format!("over-read by {person}"),
        None => source(&reading.recorded.source),
    }
}

/// `QTc (Fridericia, global, tangent)`.
pub fn qtc_name(view: &View<'_>, formula: Formula) -> String {
    let rule = &view.protocol.reading;
    format!("QTc ({})", rule.words().replacen(rule.formula.name(), formula.name(), 1))
}

/// A result as sent, converted where the unit was another.
pub fn amount(found: &Electrolyte) -> String {
    let sign = match found.bound {
        Bound::Equal => "",
        Bound::Below => "< ",
        Bound::Above => "> ",
    };
    let own = format!("{sign}{:.2} mmol/L", found.value);
    if found.as_sent.contains("mmol/L") {
        own
    } else {
        format!("{own} (sent as {})", found.as_sent)
    }
}

/// `potassium 3.10 mmol/L, 2 Mar 06:00 (4 h ago), stale, haemolysed specimen: …`.
pub fn electrolyte(view: &View<'_>, name: &str, found: &Electrolyte) -> String {
    let mut text = format!(
        "{name} {}, {} ({})",
        amount(found),
        time(view, found.collected),
        ago(view, found.collected)
    );
    if found.stale {
        text.push_str(", stale");
    }
    text.push_str(specimen(found));
    text
}

/// The CTCAE v5 grade of a trusted low value, from where grades have limits of their own; those below depend on the
/// laboratory's lower normal limit, which no result carries.
pub fn ctcae(of: Of, found: &Electrolyte) -> String {
    let lowest_own = match of {
        Of::Potassium => 3.0,
        Of::Magnesium => 0.5,
        Of::CalciumCorrected => 2.0,
        Of::CalciumIonised => 1.0,
    };
    let exact = found.trusted().filter(|value| value.bound == Bound::Equal && !found.stale);
    match exact.and_then(|value| low_grade(of.analyte(), value.number, lowest_own)) {
        Some(grade) => format!(", CTCAE v5 grade {}", grade.0),
        None => String::new(),
    }
}

/// `Bogossian 408 ms, JT index 102`: the estimates for a wide QRS; empty where none can be made.
pub fn wide(view: &View<'_>, reading: &Reading<'_>) -> String {
    let (Some((qt, _)), Some(qrs), Some(rate)) = (reading.qt, reading.qrs, reading.rate) else {
        return String::new();
    };
    let formula = view.protocol.reading.formula;
    let unit = |name: &str| if name == "JT index" { "" } else { " ms" };
    crate::wide::estimates(qt, qrs, rate, formula, view.sex())
        .into_iter()
        .map(|(name, value)| format!("{name} {value:.0}{}", unit(name)))
        .collect::<Vec<_>>()
        .join(", ")
}

/// What is to be said of the specimen.
pub fn specimen(found: &Electrolyte) -> &'static str {
    match (found.unreliable, found.reads_high) {
        (true, true) => ", haemolysed specimen: the true value may be lower",
        (true, false) => ", unreliable specimen: the true value may be another",
        (false, _) => "",
    }
}

/// A result of a spoilt specimen: `potassium 4.1 mmol/L, haemolysed specimen of 2 Mar 06:00 (4 h ago)`.
pub fn spoiled(view: &View<'_>, name: &str, now: ResultNow<'_>) -> String {
    let how = if now.result.specimen.unreliable { "unreliable" } else { "haemolysed" };
    let value = if now.result.value.is_some() { &*now.result.as_sent } else { "without a value" };
    format!(
        "{name} {value}, {how} specimen of {} ({})",
        time(view, now.collected),
        ago(view, now.collected)
    )
}

/// What is missing where an electrolyte has no value. A total calcium that can't be corrected is told.
pub fn no_electrolyte(view: &View<'_>, of: Of) -> String {
    let name = of_word(of);
    match view.total_calcium().filter(|_| of == Of::CalciumCorrected) {
        Some(total) => format!(
            "{name}: total calcium {} of {} without an albumin near it",
            total.result.as_sent,
            time(view, total.collected)
        ),
        None => format!("{name}: none in this stay"),
    }
}

/// `5 mg IV`, as far as written.
fn written(dose: Option<&Dose>, route: Option<&str>) -> String {
    let dose = dose.map(|dose| format!("{} {}", dose.amount, dose.unit));
    [dose, route.map(str::to_owned)].into_iter().flatten().collect::<Vec<_>>().join(" ")
}

/// A listed medicine with its evidence, dose and last administration.
pub fn medicine(view: &View<'_>, medicine: &Medicine, exposure: &Exposure<'_>) -> String {
    let mut parts = vec![medicine.substance.clone()];
    if let Some(dose) = exposure.doses.last() {
        let amount = written(dose.given.dose.as_ref(), dose.given.route.as_deref());
        let amount = if amount.is_empty() { amount } else { format!("{amount}, ") };
        parts.push(format!("last dose {amount}{} ({})", time(view, dose.at), ago(view, dose.at)));
    } else {
        let order = if exposure.orders.is_empty() { "was ordered" } else { "ordered" };
        parts.push(format!("{order}, no administration known"));
    }
    let orders: Vec<String> = exposure
        .orders
        .iter()
        .map(|order| {
            let amount = written(order.dose.as_ref(), order.route.as_deref());
            [amount.as_str(), order.frequency.as_deref().unwrap_or("")].join(" ").trim().to_owned()
        })
        .filter(|order| !order.is_empty())
        .collect();
    if !orders.is_empty() {
        parts.push(format!("order: {}", orders.join("; ")));
    }
    parts.push(format!("since {}", time(view, exposure.started)));
    if let Some(evidence) = view.list.evidence.get(&medicine.evidence) {
        let detail = &medicine.evidence_detail;
        parts.push(if detail.is_empty() {
            evidence.clone()
        } else {
            format!("{evidence} ({detail})")
        });
    }
    parts.join("; ")
}

/// A condition's name as people say it.
pub fn condition(condition: Condition) -> &'static str {
    match condition {
        Condition::HeartFailure => "heart failure with reduced ejection fraction",
        Condition::AcuteMyocardialInfarction => "acute myocardial infarction",
        Condition::Sepsis => "sepsis",
        Condition::InheritedLongQt => "inherited long QT syndrome",
        Condition::EarlierTorsades => "earlier torsades de pointes",
        Condition::BundleBranchBlock => "bundle-branch block",
        Condition::Pacemaker => "pacemaker",
        Condition::LoopDiuretic => "loop diuretic",
        Condition::LiverFailure => "liver failure",
        Condition::EatingDisorder => "eating disorder or starvation",
    }
}
