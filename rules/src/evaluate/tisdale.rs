//! The Tisdale score of a patient as seen now, from what is on the chart.

use super::row;
use crate::fact::{Condition, Sex};
use crate::protocol::condition::Of;
use crate::score::{Items, Score, tisdale};
use crate::verdict::{Basis, Verdict};
use crate::view::View;
use crate::words;

/// The score, as a range where an item is not known.
pub fn tisdale_of(view: &View<'_>) -> Score {
    let recorded = |condition| view.patient.conditions.get(&condition).map(|(present, _)| *present);
    let from = view.patient.stay_from(view.now);
    let first = view
        .patient
        .tracings(view.now)
        .into_iter()
        .filter(|recorded| from.is_none_or(|from| recorded.at >= from))
        .map(|recorded| view.read(recorded))
        .find_map(|reading| view.qtc(&reading, view.protocol.reading.formula).ok());
    let in_group = |name: &str| {
        view.active().filter(|(medicine, _)| medicine.groups.iter().any(|g| g == name)).count()
    };
    // A medicine that nobody has recognised may be a loop diuretic, or one more that prolongs QT.
    let all_recognised = view.not_recognised.is_empty();
    let loop_diuretic = match (in_group("loop-diuretic"), recorded(Condition::LoopDiuretic)) {
        (1.., _) => Some(true),
        (0, Some(recorded)) => Some(recorded),
        (0, None) => all_recognised.then_some(false),
    };
    let potassium = view.electrolyte(Of::Potassium).filter(|k| !k.stale);
    tisdale(
        &Items {
            age: view.patient.age(view.now),
            female: match view.sex() {
                Some(Sex::Female) => Some(true),
                Some(Sex::Male) => Some(false),
                Some(Sex::Other) | None => None,
            },
            loop_diuretic,
            potassium: potassium.and_then(|found| found.trusted()),
            admission_qtc_ms: first.map(|(qtc, doubt)| (qtc.value.get(), doubt)),
            acute_infarction: recorded(Condition::AcuteMyocardialInfarction),
            sepsis: recorded(Condition::Sepsis),
            heart_failure: recorded(Condition::HeartFailure),
            medicines: Some(view.prolonging().count()),
            more_medicines: !all_recognised,
        },
        view.protocol.tisdale,
    )
}

pub(super) fn at_least(view: &View<'_>, points: f64) -> Verdict {
    let found = tisdale_of(view);
    let row =
        || row("Tisdale score", &found.words(), &format!("at least {points:.0}"), None, "chart");
    if f64::from(found.low) >= points {
        Verdict::fired(row(), [Basis::Said(format!("Tisdale score {}", found.words()).into())])
    } else if f64::from(found.high) >= points {
        Verdict::cannot_tell(format!(
            "Tisdale score is {}: not known are {}",
            found.words(),
            words::list(found.missing.iter())
        ))
    } else {
        Verdict::Quiet
    }
}
