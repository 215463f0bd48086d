//! Electrolytes against limits. A number that is only a bound, a spoiled specimen or a stale result never counts as
//! calm: what can't be told says so.

use super::{row, yes};
use crate::fact::Bound;
use crate::protocol::condition::{ElectrolyteIs, ElectrolyteStateIs, LowCalcium, Of, State};
use crate::verdict::{Basis, Verdict};
use crate::view::{Electrolyte, View, span_h};
use crate::words;

/// The name on a page.
pub(crate) fn of_word(of: Of) -> &'static str {
    match of {
        Of::Potassium => "potassium",
        Of::Magnesium => "magnesium",
        Of::CalciumCorrected => "calcium corrected for albumin",
        Of::CalciumIonised => "ionised calcium",
    }
}

/// One electrolyte against one limit.
pub(super) fn limit(view: &View<'_>, is: &ElectrolyteIs) -> Verdict {
    match (is.below_mmol_l, is.above_mmol_l, is.falling_by_mmol_l, is.within_h) {
        (Some(limit), _, _, _) => trusted(view, is.of, |found| below(view, is.of, found, limit.0)),
        (_, Some(limit), _, _) => trusted(view, is.of, |found| above(view, is.of, found, limit.0)),
        (_, _, Some(by), Some(within)) => {
            trusted(view, is.of, |found| falling(view, is.of, found, by.0, within.0))
        }
        _ => Verdict::Quiet,
    }
}

/// Calcium in the best form at hand. Ionised wins unless a corrected value is at hand that is fresh while it is stale.
pub(super) fn low_calcium(view: &View<'_>, is: &LowCalcium) -> Verdict {
    let of = view.best_calcium();
    let limit = match of {
        Of::CalciumIonised => is.ionised_below_mmol_l,
        Of::CalciumCorrected | Of::Potassium | Of::Magnesium => is.corrected_below_mmol_l,
    };
    trusted(view, of, |found| below(view, of, found, limit.0))
}

/// Asks only where there is a value that is not stale.
fn trusted(view: &View<'_>, of: Of, ask: impl FnOnce(&Electrolyte) -> Verdict) -> Verdict {
    let name = of_word(of);
    match view.electrolyte(of) {
        None => Verdict::cannot_tell(words::no_electrolyte(view, of)),
        Some(found) if found.stale => Verdict::cannot_tell(format!(
            "{name} is stale: {}",
            words::electrolyte(view, name, &found)
        )),
        Some(found) => ask(&found),
    }
}

fn fired(name: &str, found: &Electrolyte, limit: &str) -> Verdict {
    let value = format!("{}{}", words::amount(found), words::specimen(found));
    let source = words::source(&found.source);
    let row = row(name, &value, limit, Some(found.collected), &source);
    Verdict::fired(row, found.rests_on.iter().cloned().map(Basis::Result))
}

/// Why a value that is there does not answer.
fn hidden(view: &View<'_>, name: &str, found: &Electrolyte) -> Verdict {
    if found.unreliable {
        let words = words::electrolyte(view, name, found);
        return Verdict::cannot_tell(format!("{name} is not reliable: {words}"));
    }
    let side = if found.bound == Bound::Above { "above" } else { "below" };
    Verdict::cannot_tell(format!("{name} is only known to be {side} {:.2} mmol/L", found.value))
}

fn below(view: &View<'_>, of: Of, found: &Electrolyte, limit: f64) -> Verdict {
    let name = of_word(of);
    // A low value counts whatever the specimen: the message says what the laboratory said of it.
    let low = found.read().is_below(limit) == Some(true);
    match found.trusted().and_then(|value| value.is_below(limit)) {
        Some(false) => Verdict::Quiet,
        Some(true) => fired(name, found, &format!("below {limit} mmol/L")),
        None if low => fired(name, found, &format!("below {limit} mmol/L")),
        None => hidden(view, name, found),
    }
}

fn above(view: &View<'_>, of: Of, found: &Electrolyte, limit: f64) -> Verdict {
    let name = of_word(of);
    match found.trusted().and_then(|value| value.is_above(limit)) {
        Some(false) => Verdict::Quiet,
        Some(true) => fired(name, found, &format!("above {limit} mmol/L")),
        None => hidden(view, name, found),
    }
}

/// The fall from the highest reliable value within the hours before the latest. What a bound leaves open can't be told.
fn falling(view: &View<'_>, of: Of, now: &Electrolyte, by: f64, within_h: f64) -> Verdict {
    let name = of_word(of);
    if now.unreliable {
        return hidden(view, name, now);
    }
    let earliest = now.collected - span_h(within_h);
    let earlier = view.electrolytes_between(of, earliest, now.collected);
    let reliable = earlier.into_iter().filter(|then| !then.unreliable);
    let Some(then) = reliable.max_by(|a, b| a.value.total_cmp(&b.value)) else {
        return Verdict::cannot_tell(format!(
            "no reliable {name} within {within_h:.0} h before the latest"
        ));
    };
    let value = format!("{} to {}", words::amount(&then), words::amount(now));
    let limit = format!("a fall of {by} mmol/L within {within_h:.0} h");
    // Laboratories report to 0.01; without this, 4.0 - 3.5 in floating point is not a fall of 0.5.
    let fell = then.value - now.value >= by - 1e-9;
    let at_least = then.bound != Bound::Below && now.bound != Bound::Above;
    let at_most = then.bound != Bound::Above && now.bound != Bound::Below;
    if (fell && !at_least) || (!fell && !at_most) {
        return Verdict::cannot_tell(format!("the change of {name} is only bounded: {value}"));
    }
    let source = words::source(&now.source);
    let rests_on = now.rests_on.iter().chain(&then.rests_on).cloned().map(Basis::Result);
    yes(fell, || row(name, &value, &limit, Some(now.collected), &source), rests_on)
}

/// How an electrolyte stands.
pub(super) fn state(view: &View<'_>, is: &ElectrolyteStateIs) -> Verdict {
    let name = of_word(is.of);
    match is.is {
        State::NeverMeasured => yes(
            view.electrolyte(is.of).is_none(),
            || row(name, &words::no_electrolyte(view, is.of), "", None, ""),
            [],
        ),
        State::Stale => match view.electrolyte(is.of).filter(|found| found.stale) {
            Some(found) => {
                let text = words::electrolyte(view, name, &found);
                let row =
                    row(name, &text, "", Some(found.collected), &words::source(&found.source));
                Verdict::fired(row, found.rests_on.into_iter().map(Basis::Result))
            }
            None => Verdict::Quiet,
        },
        State::Haemolysed => match view.spoiled(is.of) {
            Some(spoiled) => {
                let text = words::spoiled(view, name, spoiled);
                let source = words::source(spoiled.source);
                let row = row(name, &text, "", Some(spoiled.collected), &source);
                Verdict::fired(row, [Basis::Result(spoiled.result.id.clone())])
            }
            None => Verdict::Quiet,
        },
    }
}
