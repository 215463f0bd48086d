//! What a condition answers about a patient at a moment.

mod electrolyte;
mod tisdale;

pub(crate) use electrolyte::of_word;
pub use tisdale::tisdale_of;

use crate::alert::EvidenceRow;
use crate::correction::Formula;
use crate::fact::{At, Quality, Rhythm, Sex};
use crate::medicines::Medicine;
use crate::protocol::condition::{
    By, Condition, IntervalMs, Limit, Medicines, Over, QtcIs, QtcRise, RateIs, RiskIs, RiskState,
    TracingIs,
};
use crate::protocol::{LimitBySex, LimitFrom};
use crate::verdict::{Basis, Because, Missing, Verdict};
use crate::view::{Exposure, Reading, View, span_h};
use crate::{kidney, routes, watch, wide, words};
use chrono::TimeDelta;
use std::collections::BTreeSet;
use toml::Spanned;

/// Under this age a tracing is measured and not graded.
pub const ADULT: u32 = 18;

/// Asks one condition.
pub fn evaluate(condition: &Condition, view: &View<'_>) -> Verdict {
    let each = |of: &[Condition]| of.iter().map(|part| evaluate(part, view)).collect::<Vec<_>>();
    match condition {
        Condition::All(of) => Verdict::all(each(of)),
        Condition::Any(of) => Verdict::at_least(1, each(of)),
        Condition::None(of) => Verdict::none(each(of)),
        Condition::AtLeast(few) => Verdict::at_least(*few.n.as_ref(), each(&few.of)),
        Condition::Qtc(is) => graded(view, |reading| qtc(view, reading, is)),
        Condition::QtcRise(rise) => graded(view, |reading| qtc_rise(view, reading, rise)),
        Condition::QtNomogram(_) => graded(view, |reading| nomogram(view, reading)),
        Condition::JtIndex(is) => graded(view, |reading| jt_index(view, reading, is.at_least.0)),
        Condition::FormulasSplit(limit) => graded(view, |reading| split(view, reading, limit)),
        Condition::Rate(is) => with_tracing(view, |reading| rate(view, reading, is)),
        Condition::Qrs(is) => with_tracing(view, |reading| match reading.qrs {
            Some(qrs) => above(view, reading, "QRS", qrs.get(), 0.0, is.at_least_ms.0, "ms"),
            None => Verdict::cannot_tell("QRS duration is not known"),
        }),
        Condition::Tracing(TracingIs::Missing) => match &view.latest {
            Some(_) => Verdict::Quiet,
            None => Verdict::fired(row("tracing", "none in this stay", "", None, ""), []),
        },
        Condition::Tracing(is) => with_tracing(view, |reading| tracing(view, reading, *is)),
        Condition::PrintedDiffers(is) => {
            with_tracing(view, |reading| printed(view, reading, is.by_ms.0))
        }
        Condition::Medicines(is) => medicines(view, is),
        Condition::Exposure(_) => exposure(view),
        Condition::ReducedClearance(is) => clearance(view, is.below_ml_per_min.0),
        Condition::NotRecognised(is) => {
            let found = &view.not_recognised;
            let names = found.join(", ");
            yes(
                found.len() >= is.at_least,
                || row("not on the medicine list", &names, "", None, "medicine feed"),
                found.iter().map(|name| Basis::Said((*name).into())),
            )
        }
        Condition::Electrolyte(is) => electrolyte::limit(view, is),
        Condition::ElectrolyteState(is) => electrolyte::state(view, is),
        Condition::LowCalcium(is) => electrolyte::low_calcium(view, is),
        Condition::Risk(is) => risk(view, is),
        Condition::Tisdale(is) => tisdale::at_least(view, is.at_least.0),
        Condition::Age(is) => match view.patient.age(view.now) {
            Some(age) => {
                let limit = format!("at least {} years", is.at_least_years);
                yes(
                    age >= is.at_least_years,
                    || row("age", &format!("{age} years"), &limit, None, "chart"),
                    [],
                )
            }
            None => Verdict::cannot_tell("age is not known"),
        },
        Condition::Overdue(is) => watch::overdue(view, is.watch.as_ref(), is.by_h),
    }
}

fn row(what: &str, value: &str, limit: &str, at: Option<At>, source: &str) -> EvidenceRow {
    EvidenceRow {
        what: what.into(),
        value: value.into(),
        limit: limit.into(),
        at,
        source: source.into(),
    }
}

fn yes(
    holds: bool,
    row: impl FnOnce() -> EvidenceRow,
    rests_on: impl IntoIterator<Item = Basis>,
) -> Verdict {
    if holds { Verdict::fired(row(), rests_on) } else { Verdict::Quiet }
}

fn with_tracing(view: &View<'_>, ask: impl FnOnce(&Reading<'_>) -> Verdict) -> Verdict {
    match &view.latest {
        Some(reading) => ask(reading),
        None => Verdict::cannot_tell("no tracing in this stay"),
    }
}

/// Conditions that grade a QT: adults only, and only where there is one.
fn graded(view: &View<'_>, ask: impl FnOnce(&Reading<'_>) -> Verdict) -> Verdict {
    if view.patient.age(view.now).is_some_and(|age| age < ADULT) {
        return Verdict::cannot_tell("under 18: measured, not graded");
    }
    with_tracing(view, |reading| {
        if reading.qt.is_none() {
            let why = words::list(reading.recorded.tracing.why.iter().map(|why| &**why));
            let why =
                if why.is_empty() { "the reading that decides is missing".to_owned() } else { why };
            return Verdict::cannot_tell(format!(
                "no QT could be told from the latest tracing ({why})"
            ));
        }
        ask(reading)
    })
}

fn basis(reading: &Reading<'_>) -> [Basis; 1] {
    [Basis::Tracing(reading.recorded.tracing.id.clone())]
}

/// A value from a tracing against a lower limit, with its doubt.
fn above(
    view: &View<'_>,
    reading: &Reading<'_>,
    what: &str,
    value: f64,
    doubt: f64,
    limit: f64,
    unit: &str,
) -> Verdict {
    let text = if doubt > 0.0 {
        format!("{value:.0} ± {doubt:.0} {unit}")
    } else {
        format!("{value:.0} {unit}")
    };
    let row = row(
        what,
        &text,
        &format!("at least {limit:.0} {unit}"),
        Some(reading.recorded.at),
        &words::of_reading(reading),
    );
    let because = Because {
        rows: vec![row],
        borderline: false,
        wide: view.is_wide(reading) && reading.over_read_by.is_none(),
        rests_on: basis(reading).into(),
        ..Because::default()
    };
    if value >= limit {
        Verdict::Fired(Because { borderline: value - doubt < limit, ..because })
    } else if value + doubt >= limit {
        let what = format!("{what} of {text} lies below {limit:.0} {unit} by less than its doubt");
        Verdict::CannotTell(Missing { what: vec![what.into()], borderline: true, because })
    } else {
        Verdict::Quiet
    }
}

/// The limit that holds for this patient: the strictest that may be theirs where sex or age is not known.
pub(crate) fn limit_for(view: &View<'_>, limit: &LimitBySex) -> f64 {
    let of_sex = |female: IntervalMs, male: IntervalMs| match view.sex() {
        Some(Sex::Female) => female.0,
        Some(Sex::Male) => male.0,
        Some(Sex::Other) | None => female.0.min(male.0),
    };
    let youngest = of_sex(limit.female_ms, limit.male_ms);
    let older = |from: &LimitFrom| of_sex(from.female_ms, from.male_ms);
    match view.patient.age(view.now) {
        Some(age) => {
            let reached = limit.older.iter().filter(|from| from.from_years <= age);
            reached.max_by_key(|from| from.from_years).map_or(youngest, older)
        }
        None => limit.older.iter().map(older).fold(youngest, f64::min),
    }
}

fn limit(
    view: &View<'_>,
    fixed: Option<f64>,
    name: Option<&Spanned<String>>,
) -> Option<(f64, Option<Formula>)> {
    let named = name.and_then(|name| view.protocol.limits.get(name.as_ref()));
    fixed
        .map(|ms| (ms, None))
        .or_else(|| named.map(|limit| (limit_for(view, limit), limit.formula)))
}

fn qtc(view: &View<'_>, reading: &Reading<'_>, is: &QtcIs) -> Verdict {
    if let Some(below) = is.below_ms {
        return by_formula(view, reading, view.protocol.reading.formula, |what, qtc, doubt| {
            let text = format!("{qtc:.0} ± {doubt:.0} ms");
            let row = row(
                what,
                &text,
                &format!("below {:.0} ms", below.0),
                Some(reading.recorded.at),
                &words::of_reading(reading),
            );
            let because =
                Because { rows: vec![row], rests_on: basis(reading).into(), ..Because::default() };
            if qtc < below.0 {
                Verdict::Fired(Because { borderline: qtc + doubt >= below.0, ..because })
            } else if qtc - doubt < below.0 {
                let what =
                    format!("{what} of {text} lies above {:.0} ms by less than its doubt", below.0);
                Verdict::CannotTell(Missing { what: vec![what.into()], borderline: true, because })
            } else {
                Verdict::Quiet
            }
        });
    }
    let Some((ms, only)) = limit(view, is.at_least_ms.map(|ms| ms.0), is.at_least.as_ref()) else {
        return Verdict::cannot_tell("the limit is not in the protocol");
    };
    let ask = |formula| {
        let verdict = by_formula(view, reading, formula, |what, qtc, doubt| {
            above(view, reading, what, qtc, doubt, ms, "ms")
        });
        with_limit(verdict, ms)
    };
    let shown =
        || view.protocol.reading.shown.iter().map(|formula| ask(*formula)).collect::<Vec<_>>();
    match is.by {
        Some(By::Any) => Verdict::at_least(1, shown()),
        Some(By::All) => Verdict::all(shown()),
        Some(By::One(formula)) => ask(formula),
        None => ask(only.unwrap_or(view.protocol.reading.formula)),
    }
}

/// Notes the limit that was asked for, for marking the formulas that fall on its other side.
fn with_limit(mut verdict: Verdict, ms: f64) -> Verdict {
    match &mut verdict {
        Verdict::Fired(because) => because.limit_ms = Some(ms),
        Verdict::CannotTell(missing) => missing.because.limit_ms = Some(ms),
        Verdict::Quiet => {}
    }
    verdict
}

fn by_formula(
    view: &View<'_>,
    reading: &Reading<'_>,
    formula: Formula,
    ask: impl FnOnce(&str, f64, f64) -> Verdict,
) -> Verdict {
    match view.qtc(reading, formula) {
        Ok((qtc, doubt)) => ask(&words::qtc_name(view, formula), qtc.value.get(), doubt),
        Err(why) => Verdict::cannot_tell(format!("no QTc by {formula}: {why}")),
    }
}

fn qtc_rise(view: &View<'_>, reading: &Reading<'_>, rise: &QtcRise) -> Verdict {
    let (earlier, name) = match rise.over {
        Over::Baseline => match &view.baseline {
            Ok(baseline) => (baseline, "baseline"),
            Err(why) => return Verdict::cannot_tell(format!("no baseline to compare with: {why}")),
        },
        Over::Last => match &view.before {
            Some(before) => (before, "the tracing before"),
            None => return Verdict::cannot_tell("no earlier tracing to compare with"),
        },
    };
    if reading.other_definition != earlier.other_definition {
        return Verdict::cannot_tell(format!(
            "not comparable with {name}: the two follow different definitions of QT"
        ));
    }
    let formula = view.protocol.reading.formula;
    match (view.qtc(reading, formula), view.qtc(earlier, formula)) {
        (Ok((now, doubt)), Ok((then, then_doubt))) => {
            let change = now.value.get() - then.value.get();
            let what = format!("rise of {} over {name}", words::qtc_name(view, formula));
            let verdict = above(
                view,
                reading,
                &what,
                change,
                doubt.hypot(then_doubt),
                rise.at_least_ms.0,
                "ms",
            );
            rest_also(verdict, Basis::Tracing(earlier.recorded.tracing.id.clone()))
        }
        (Err(why), _) | (_, Err(why)) => {
            Verdict::cannot_tell(format!("no change over {name}: {why}"))
        }
    }
}

fn rest_also(mut verdict: Verdict, basis: Basis) -> Verdict {
    match &mut verdict {
        Verdict::Fired(because) => {
            because.rests_on.insert(basis);
        }
        Verdict::CannotTell(missing) => {
            missing.because.rests_on.insert(basis);
        }
        Verdict::Quiet => {}
    }
    verdict
}

fn nomogram(view: &View<'_>, reading: &Reading<'_>) -> Verdict {
    let (Some((qt, doubt)), Some(rate)) = (reading.qt, reading.rate) else {
        return Verdict::cannot_tell("the QT nomogram needs a rate");
    };
    if view.is_wide(reading) {
        return Verdict::cannot_tell("the QT nomogram holds for narrow QRS only");
    }
    match wide::nomogram_ms(rate.get()) {
        Some(line) => {
            above(view, reading, "QT against the nomogram", qt.0.get(), doubt.get(), line, "ms")
        }
        None => Verdict::cannot_tell(format!(
            "the QT nomogram holds for 40 to 150/min; the rate is {rate}"
        )),
    }
}

fn jt_index(view: &View<'_>, reading: &Reading<'_>, at_least: f64) -> Verdict {
    let (Some((qt, _)), Some(rate), Some(qrs)) = (reading.qt, reading.rate, reading.qrs) else {
        return Verdict::cannot_tell("the JT index needs rate and QRS");
    };
    match wide::jt_index(qt.0.get(), qrs.get(), rate.get()) {
        Some(index) => above(view, reading, "JT index (an estimate)", index, 0.0, at_least, ""),
        None => Verdict::Quiet,
    }
}

fn split(view: &View<'_>, reading: &Reading<'_>, is: &Limit) -> Verdict {
    let Some((ms, _)) = limit(view, is.at_least_ms.map(|ms| ms.0), is.at_least.as_ref()) else {
        return Verdict::cannot_tell("the limit is not in the protocol");
    };
    let found: Vec<(Formula, f64)> = view
        .protocol
        .reading
        .shown
        .iter()
        .filter_map(|formula| Some((*formula, view.qtc(reading, *formula).ok()?.0.value.get())))
        .collect();
    let over = found.iter().filter(|(_, qtc)| *qtc >= ms).count();
    let text = words::list(found.iter().map(|(formula, qtc)| format!("{formula} {qtc:.0}")));
    let limit = format!("different sides of {ms:.0} ms");
    yes(
        over > 0 && over < found.len(),
        || row("formulas", &text, &limit, Some(reading.recorded.at), &words::of_reading(reading)),
        basis(reading),
    )
}

fn rate(view: &View<'_>, reading: &Reading<'_>, is: &RateIs) -> Verdict {
    let Some(rate) = reading.rate else { return Verdict::cannot_tell("no rate is known") };
    let _ = view;
    let holds = |limit: Option<f64>, outside: fn(f64, f64) -> bool| {
        limit.filter(|limit| outside(rate.get(), *limit))
    };
    let limit = holds(is.below_per_min.map(|l| l.0), |r, l| r < l)
        .map(|limit| format!("below {limit:.0}/min"))
        .or_else(|| {
            holds(is.above_per_min.map(|l| l.0), |r, l| r > l)
                .map(|limit| format!("above {limit:.0}/min"))
        });
    match limit {
        Some(limit) => Verdict::fired(
            row(
                "rate",
                &format!("{:.0}/min", rate.get()),
                &limit,
                Some(reading.recorded.at),
                &words::of_reading(reading),
            ),
            basis(reading),
        ),
        None => Verdict::Quiet,
    }
}

fn tracing(view: &View<'_>, reading: &Reading<'_>, is: TracingIs) -> Verdict {
    let tracing = &reading.recorded.tracing;
    let why = words::list(tracing.why.iter().map(|why| &**why));
    let (holds, value) = match is {
        TracingIs::Doubtful => (reading.quality == Quality::Doubtful, format!("doubtful: {why}")),
        TracingIs::Unreadable => {
            (reading.quality == Quality::None, format!("no QT could be told: {why}"))
        }
        TracingIs::WideQrs => {
            let qrs = reading.qrs.map_or("paced".to_owned(), |qrs| format!("QRS {qrs}"));
            (view.is_wide(reading), qrs)
        }
        TracingIs::IrregularlyIrregular => (
            tracing.rhythm == Some(Rhythm::IrregularlyIrregular),
            "RR irregularly irregular".to_owned(),
        ),
        TracingIs::Missing => (false, String::new()),
    };
    yes(
        holds,
        || {
            row(
                "latest tracing",
                &value,
                "",
                Some(reading.recorded.at),
                &words::of_reading(reading),
            )
        },
        basis(reading),
    )
}

fn printed(view: &View<'_>, reading: &Reading<'_>, by_ms: f64) -> Verdict {
    let _ = view;
    let printed = reading.recorded.tracing.printed.as_ref().and_then(|printed| printed.qt);
    match (printed, reading.qt) {
        (Some(printed), Some((qt, _))) => {
            let gap = (printed.get() - qt.0.get()).abs();
            let value = format!("cart {:.0} ms, measured {:.0} ms", printed.get(), qt.0.get());
            let limit = format!("more than {by_ms:.0} ms apart");
            yes(
                gap > by_ms,
                || {
                    row(
                        "QT of the cart",
                        &value,
                        &limit,
                        Some(reading.recorded.at),
                        &words::of_reading(reading),
                    )
                },
                basis(reading),
            )
        }
        // A cart that prints nothing disagrees with nobody.
        _ => Verdict::Quiet,
    }
}

fn medicines(view: &View<'_>, is: &Medicines) -> Verdict {
    let mut because = Because::default();
    let mut maybe = Vec::new();
    for (medicine, exposure) in view.active() {
        match asked_for(view, is, medicine, exposure) {
            Some(true) => {}
            Some(false) => continue,
            None => {
                maybe.push(format!("the route of {} is not known", medicine.substance).into());
                continue;
            }
        }
        let last = exposure.doses.last().map(|dose| dose.at);
        because.rows.push(row(
            "listed medicine",
            &words::medicine(view, medicine, exposure),
            "",
            last,
            "medicine chart",
        ));
        because.rests_on.insert(Basis::Medicine(medicine.substance.as_str().into()));
    }
    if because.rows.len() >= is.at_least {
        Verdict::Fired(because)
    } else if because.rows.len() + maybe.len() >= is.at_least {
        Verdict::CannotTell(Missing { what: maybe, because, ..Missing::default() })
    } else {
        Verdict::Quiet
    }
}

/// Whether an active medicine is one of those that are asked for; `None` where that hangs on a route that isn't known.
fn asked_for(
    view: &View<'_>,
    is: &Medicines,
    medicine: &Medicine,
    exposure: &Exposure<'_>,
) -> Option<bool> {
    let among = |asked: &[Spanned<String>], has: &[String]| {
        asked.is_empty()
            || asked
                .iter()
                .any(|name| has.iter().any(|own| own.eq_ignore_ascii_case(name.as_ref())))
    };
    let still = |since: TimeDelta| {
        view.changes_at(exposure.started + since);
        view.now < exposure.started + since
    };
    let named = !(is.evidence.is_empty() && is.groups.is_empty() && is.substances.is_empty());
    let meant = (named || !medicine.indirect)
        && among(&is.evidence, std::slice::from_ref(&medicine.evidence))
        && among(&is.groups, &medicine.groups)
        && among(&is.substances, std::slice::from_ref(&medicine.substance))
        && is.started_within_h.is_none_or(|h| still(span_h(h.0)))
        && is.within_half_lives_of_start.is_none_or(|n| still(view.half_lives(medicine, n.0)));
    if !meant {
        return Some(false);
    }
    let by = |route: &String| {
        let found = exposure.routes.iter().map(|own| routes::same(own, route));
        found.max_by_key(|same| match same {
            Some(true) => 2,
            None => 1,
            Some(false) => 0,
        })
    };
    let mut routes = is.routes.iter().map(|route| by(route).flatten());
    match (is.routes.is_empty(), exposure.routes.is_empty()) {
        (true, _) => Some(true),
        (false, true) => None,
        (false, false) if routes.clone().any(|same| same == Some(true)) => Some(true),
        (false, false) if routes.any(|same| same.is_none()) => None,
        (false, false) => Some(false),
    }
}

fn exposure(view: &View<'_>) -> Verdict {
    let active: Vec<&Medicine> = view.active().map(|(medicine, _)| medicine).collect();
    let (mut rows, mut rests_on) = (Vec::new(), BTreeSet::new());
    for one in &active {
        for other in &active {
            if let Some(path) = one.raises(other) {
                rests_on.insert(Basis::Medicine(one.substance.as_str().into()));
                rests_on.insert(Basis::Medicine(other.substance.as_str().into()));
                let value = format!(
                    "{} can raise the exposure to {} (by {path})",
                    one.substance, other.substance
                );
                rows.push(row("two listed medicines", &value, "", None, "medicine list"));
            }
        }
    }
    if rows.is_empty() {
        Verdict::Quiet
    } else {
        Verdict::Fired(Because { rows, rests_on, ..Because::default() })
    }
}

fn clearance(view: &View<'_>, below: f64) -> Verdict {
    let renal: Vec<&str> = view
        .prolonging()
        .filter(|(medicine, _)| medicine.cleared_by.iter().any(|path| path == "renal"))
        .map(|(medicine, _)| medicine.substance.as_str())
        .collect();
    if renal.is_empty() {
        return Verdict::Quiet;
    }
    let described = &view.patient.described;
    let sex = described.sex.filter(|sex| *sex != Sex::Other);
    let (Some((creatinine, at, id)), Some(age), Some(weight), Some(sex)) =
        (view.creatinine(), view.patient.age(view.now), described.weight, sex)
    else {
        return Verdict::cannot_tell(format!(
            "creatinine clearance needs creatinine, age, weight and sex{}",
            filtration(view)
        ));
    };
    match kidney::cockcroft_gault(age, weight.get(), creatinine, sex) {
        Some(ml) => yes(
            ml < below,
            || {
                let value = format!("{ml:.0} mL/min with {}", words::list(renal.iter()));
                row(
                    "creatinine clearance (Cockcroft and Gault)",
                    &value,
                    &format!("below {below:.0} mL/min"),
                    Some(at),
                    "results",
                )
            },
            renal
                .iter()
                .map(|name| Basis::Medicine((*name).into()))
                .chain([Basis::Result(id.clone())]),
        ),
        None => Verdict::cannot_tell("creatinine clearance could not be worked out"),
    }
}

/// What can be said of the kidney without a weight.
fn filtration(view: &View<'_>) -> String {
    let sex = view.sex().filter(|sex| *sex != Sex::Other);
    let (Some((creatinine, at, _)), Some(age), Some(sex)) =
        (view.creatinine(), view.patient.age(view.now), sex)
    else {
        return String::new();
    };
    kidney::ckd_epi(age, creatinine, sex).map_or(String::new(), |ml| {
        format!(
            "; the filtration by CKD-EPI 2021 is {ml:.0} mL/min/1.73 m² ({})",
            words::ago(view, at)
        )
    })
}

fn risk(view: &View<'_>, is: &RiskIs) -> Verdict {
    let known = view.patient.conditions.get(&is.condition);
    let name = words::condition(is.condition);
    let (holds, value) = match (is.is, known) {
        (RiskState::Recorded, Some((true, _))) => (true, "recorded"),
        (RiskState::RuledOut, Some((false, _))) => (true, "ruled out"),
        (RiskState::NotRecorded, None) => (true, "not recorded either way"),
        (RiskState::Recorded | RiskState::RuledOut, None) => {
            return Verdict::cannot_tell(format!("{name}: not recorded either way"));
        }
        _ => (false, ""),
    };
    let said = Basis::Said(format!("{name} {value}").into());
    yes(holds, || row(name, value, "", known.map(|(_, at)| *at), "chart"), [said])
}
