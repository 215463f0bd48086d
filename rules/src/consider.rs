//! What if: a pharmacist's question before a medicine is started, answered by the same rules and remembered by nobody.

use crate::alert::EvidenceRow;
use crate::decide::{Decider, RuleSays, ask, by_concern, unknown};
use crate::evidence;
use crate::fact::{
    Administration, Analyte, At, Body, Bound, Dose, Fact, LabResult, MedicineName, ResultStatus,
    ResultValue, Source, Specimen,
};
use crate::ids::{PatientId, ResultId, RuleId, TierName};
use crate::medicines::Recognised;
use crate::verdict::Verdict;
use crate::view::View;
use crate::watch::{self, Asked};
use crate::words;
use serde::Serialize;

/// Something supposed.
#[derive(Debug, Clone, PartialEq)]
pub enum Suppose {
    /// A dose of a medicine is given now.
    Given {
        /// What.
        medicine: MedicineName,
        /// How much; for the words only.
        dose: Option<Dose>,
        /// By which route; a list may count a substance by some routes only.
        route: Option<Box<str>>,
    },
    /// A result comes now, in the analyte's canonical unit, from a sound specimen.
    Result(Analyte, f64),
}

/// What one rule would say.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Line {
    /// What it is about.
    pub concern: String,
    /// The rule that speaks for the concern.
    pub rule: RuleId,
    /// The tier it deserves.
    pub tier: TierName,
    /// What was seen, or can't be told.
    pub seen: String,
    /// The values it rests on.
    #[serde(skip)]
    pub values: Vec<EvidenceRow>,
}

/// How a patient stands, or would stand.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Outlook {
    /// What rules say, the highest tier first.
    pub lines: Vec<Line>,
    /// Active listed medicines.
    pub medicines: Vec<Box<str>>,
    /// Pairs of them of which one can raise the other's exposure.
    pub exposure: Vec<String>,
    /// The Tisdale score, as context.
    pub tisdale: String,
    /// What is not known.
    pub unknown: Vec<Box<str>>,
    /// What watches ask for and has not been seen, soonest first.
    #[serde(skip)]
    pub asked: Vec<Asked>,
}

/// The answer. It measures and points; whether to start anything is for prescriber and pharmacist, per local protocol.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Considered {
    /// How it stands.
    pub now: Outlook,
    /// How it would stand.
    pub then: Outlook,
    /// What can't be answered at all: a medicine that the list doesn't know.
    pub not_answered: Vec<String>,
}

impl Considered {
    /// What would be said besides, or at a higher tier than now.
    pub fn worse(&self) -> Vec<&Line> {
        self.then.lines.iter().filter(|line| !self.now.lines.contains(line)).collect()
    }
}

/// Supposes something of a patient as of a moment. The decider stays as it is. `None` where no protocol is in force or
/// nothing is known of the patient.
pub fn consider(
    decider: &Decider,
    patient: &PatientId,
    suppose: &[Suppose],
    now: At,
) -> Option<Considered> {
    let facts: Vec<Fact> =
        suppose.iter().enumerate().map(|(place, what)| fact(patient, place, what, now)).collect();
    let list = decider.medicines();
    let not_answered = suppose
        .iter()
        .filter_map(|what| match what {
            Suppose::Given { medicine, .. } => Some(medicine),
            Suppose::Result(..) => None,
        })
        .filter(|medicine| list.recognise(medicine) == Recognised::No)
        .map(|medicine| {
            format!(
                "\"{}\" is not on the medicine list, neither as listed nor as left out: nothing can be said of it",
                medicine.text
            )
        })
        .collect();
    Some(Considered {
        now: decider.suppose(patient, &[], now, outlook)?,
        then: decider.suppose(patient, &facts, now, outlook)?,
        not_answered,
    })
}

fn fact(patient: &PatientId, place: usize, what: &Suppose, now: At) -> Fact {
    let body = match what {
        Suppose::Given { medicine, dose, route } => Body::Given(Administration {
            id: format!("supposed {place}").into(),
            order: None,
            medicine: medicine.clone(),
            dose: dose.clone(),
            route: route.clone(),
        }),
        Suppose::Result(analyte, number) => Body::Result(LabResult {
            // Later than any real specimen of this moment: what is supposed counts.
            id: ResultId::new(format!("\u{10ffff} supposed {place}")),
            analyte: *analyte,
            value: Some(ResultValue { number: *number, bound: Bound::Equal }),
            as_sent: format!("{number} {} (supposed)", analyte.canonical()).into(),
            status: ResultStatus::Final,
            issued_at: Some(now),
            specimen: Specimen::default(),
        }),
    };
    Fact {
        occurred_at: now,
        received_at: now,
        source: Source::Service,
        patient: Some(patient.clone()),
        body,
    }
}

fn outlook(view: &View<'_>) -> Outlook {
    let says = ask(view);
    let mut lines: Vec<(usize, Line)> =
        by_concern(&says).into_values().filter_map(|said| line(view, said)).collect();
    lines.sort_by(|a, b| b.0.cmp(&a.0).then_with(|| a.1.concern.cmp(&b.1.concern)));
    let active: Vec<_> = view.active().map(|(medicine, _)| medicine).collect();
    let pairs = active.iter().flat_map(|one| active.iter().map(move |other| (one, other)));
    Outlook {
        lines: lines.into_iter().map(|(_, line)| line).collect(),
        medicines: view
            .active()
            .map(|(medicine, exposure)| words::medicine(view, medicine, exposure).into())
            .collect(),
        exposure: pairs
            .filter_map(|(one, other)| {
                let path = one.raises(other)?;
                let (one, other) = (&one.substance, &other.substance);
                Some(format!("{one} can raise the exposure to {other} (by {path})"))
            })
            .collect(),
        tisdale: crate::evaluate::tisdale_of(view).words(),
        unknown: evidence::all_unknown(view, &unknown(&says)),
        asked: watch::asked(view).into_iter().filter(|asked| asked.done.is_none()).collect(),
    }
}

fn line(view: &View<'_>, said: &RuleSays<'_>) -> Option<(usize, Line)> {
    let rank = said.rank?;
    let tier = view.protocol.tiers.get(rank)?.name.clone();
    let (seen, values) = match &said.verdict {
        Verdict::Fired(because) => (said.rule.says.clone(), because.rows.clone()),
        Verdict::CannotTell(missing) => {
            let what = words::list(missing.what.iter().map(|what| &**what));
            let word = if missing.borderline { "borderline" } else { "can't be told" };
            (format!("{word}: {} ({what})", said.rule.says), missing.because.rows.clone())
        }
        Verdict::Quiet => return None,
    };
    let concern = said.rule.concern.clone();
    Some((rank, Line { concern, rule: said.rule.id.clone(), tier, seen, values }))
}
