//! Watches: what a protocol asks for while a medicine is active, and what has not been seen.

use crate::alert::EvidenceRow;
use crate::fact::At;
use crate::protocol::condition::Of;
use crate::protocol::{AsksFor, Watch};
use crate::verdict::{Basis, Because, Verdict};
use crate::view::{View, span_h};
use crate::words;
use chrono::TimeDelta;

/// One thing asked for at one time.
#[derive(Debug, Clone, PartialEq)]
pub struct Asked {
    /// The watch.
    pub watch: String,
    /// What.
    pub asks_for: AsksFor,
    /// For which substance.
    pub substance: String,
    /// Why then: `before the first dose`, `24 h after the start`.
    pub why: String,
    /// When it is due.
    pub due: At,
    /// From when it is overdue.
    pub overdue_from: At,
    /// When it was done, if it was.
    pub done: Option<At>,
}

/// Everything that the protocol's watches ask for of this patient, soonest first.
pub fn asked(view: &View<'_>) -> Vec<Asked> {
    let mut found: Vec<Asked> =
        view.protocol.watches.iter().flat_map(|watch| of_watch(view, watch)).collect();
    found.sort_by(|a, b| (a.due, &a.watch, &a.substance).cmp(&(b.due, &b.watch, &b.substance)));
    found
}

/// What "overdue" answers for one watch.
pub(crate) fn overdue(view: &View<'_>, id: &str, by_h: f64) -> Verdict {
    let Some(watch) = view.protocol.watches.iter().find(|watch| watch.id == id) else {
        return Verdict::cannot_tell("the watch is not in the protocol");
    };
    let by = span_h(by_h);
    let mut because = Because::default();
    for asked in of_watch(view, watch).into_iter().filter(|asked| asked.done.is_none()) {
        let from = asked.overdue_from + by;
        view.changes_at(from);
        if from <= view.now {
            because.rows.push(EvidenceRow {
                what: format!("{} overdue", word(asked.asks_for)).into(),
                value: format!("{} for {}", asked.why, asked.substance).into(),
                limit: format!("due {}", words::time(view, asked.due)).into(),
                at: Some(asked.due),
                source: format!("watch {id}").into(),
            });
            because.rests_on.insert(Basis::Due(asked.substance.as_str().into(), asked.due));
        }
    }
    if because.rows.is_empty() { Verdict::Quiet } else { Verdict::Fired(because) }
}

/// The word for what is asked for.
pub fn word(asks_for: AsksFor) -> &'static str {
    match asks_for {
        AsksFor::Tracing => "tracing",
        AsksFor::Potassium => "potassium",
        AsksFor::Magnesium => "magnesium",
        AsksFor::Calcium => "calcium",
    }
}

/// One point of a schedule: due then, counted as done by anything seen from `from` on.
struct Point {
    from: At,
    due: At,
    why: String,
}

fn of_watch(view: &View<'_>, watch: &Watch) -> Vec<Asked> {
    let among = |names: &[toml::Spanned<String>], own: &[String]| {
        names.iter().any(|name| own.iter().any(|own| own.eq_ignore_ascii_case(name.as_ref())))
    };
    let seen = seen(view, watch.asks_for);
    let mut found = Vec::new();
    for (medicine, exposure) in view.active() {
        let all =
            watch.evidence.is_empty() && watch.groups.is_empty() && watch.substances.is_empty();
        let meant = (all && !medicine.indirect)
            || among(&watch.evidence, std::slice::from_ref(&medicine.evidence))
            || among(&watch.groups, &medicine.groups)
            || among(&watch.substances, std::slice::from_ref(&medicine.substance));
        if !meant {
            continue;
        }
        let start = exposure.started;
        let mut points = Vec::new();
        if let Some(within) = watch.before_first_dose {
            points.push(Point {
                from: start - within,
                due: start,
                why: "wanted before the first dose".into(),
            });
        }
        for after in &watch.after_start {
            points.push(Point {
                from: start + *after / 2,
                due: start + *after,
                why: format!("wanted {} h after the start", after.num_hours()),
            });
        }
        if let Some(changed) = exposure.dose_changed {
            for after in &watch.after_dose_change {
                points.push(Point {
                    from: changed,
                    due: changed + *after,
                    why: format!("wanted {} h after the change of dose", after.num_hours()),
                });
            }
        }
        if let Some((n, after)) = watch.after_doses {
            for (number, dose) in exposure.doses.iter().take(n).enumerate() {
                points.push(Point {
                    from: dose.at,
                    due: dose.at + after,
                    why: format!("wanted after dose {}", number + 1),
                });
            }
        }
        if watch.at_steady_state {
            let steady = view.half_lives(medicine, 5.0);
            points.push(Point {
                from: start + steady,
                due: start + steady,
                why: "wanted at steady state (5 half-lives)".into(),
            });
        }
        if let Some(every) = watch.then_every {
            let last = seen.last().copied().filter(|at| *at > start).unwrap_or(start);
            points.push(Point {
                from: last + TimeDelta::seconds(1),
                due: last + every,
                why: format!("wanted every {} h", every.num_hours()),
            });
        }
        for point in points {
            let done = seen.iter().find(|at| **at >= point.from).copied();
            found.push(Asked {
                watch: watch.id.clone(),
                asks_for: watch.asks_for,
                substance: medicine.substance.clone(),
                why: point.why,
                due: point.due,
                overdue_from: point.due + watch.grace,
                done,
            });
        }
    }
    found
}

/// When what is asked for was seen, oldest first. An unreadable tracing was not seen; nor was a result without a number.
fn seen(view: &View<'_>, asks_for: AsksFor) -> Vec<At> {
    let of = match asks_for {
        AsksFor::Tracing => {
            let read =
                view.patient.tracings(view.now).into_iter().map(|recorded| view.read(recorded));
            return read
                .filter(|reading| reading.qt.is_some())
                .map(|reading| reading.recorded.at)
                .collect();
        }
        AsksFor::Potassium => vec![Of::Potassium],
        AsksFor::Magnesium => vec![Of::Magnesium],
        AsksFor::Calcium => vec![Of::CalciumIonised, Of::CalciumCorrected],
    };
    let mut found: Vec<At> = of.into_iter().flat_map(|of| view.collected(of)).collect();
    found.sort();
    found
}
