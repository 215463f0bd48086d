//! Everything that an alert rests on, as sentences and rows.

use crate::alert::{Evidence, FormulaRow, Tide};
use crate::evaluate::{limit_for, of_word, tisdale_of};
use crate::fact::{Quality, Sex};
use crate::ids::TierName;
use crate::protocol::condition::{Condition, Of};
use crate::protocol::{Protocol, Rule};
use crate::verdict::Because;
use crate::view::{Reading, View};
use crate::words;

/// The evidence of a rule that holds (or can't be told) for a patient.
pub(crate) fn of_rule(
    view: &View<'_>,
    rule: &Rule,
    because: &Because,
    rank: usize,
    told_not: &[Box<str>],
    unknown: &[Box<str>],
) -> Evidence {
    let protocol = view.protocol;
    let tier = protocol.tiers.get(rank);
    let capped = because.wide && rank < rule.tier;
    let mut to_do =
        rule.to_do.clone().or_else(|| tier.map(|tier| tier.to_do.clone())).unwrap_or_default();
    if capped {
        to_do.push_str(" The value is an estimate (wide QRS or paced): ask a qualified reader for an over-read.");
    }
    let seen = if because.borderline && !told_not.is_empty() {
        format!("Borderline: {}", words::list(told_not.iter().map(|what| &**what)))
    } else if !told_not.is_empty() {
        format!(
            "Can't be told: {} ({})",
            rule.says,
            words::list(told_not.iter().map(|what| &**what))
        )
    } else {
        rule.says.clone()
    };
    Evidence {
        whom: whom(view).into(),
        seen: seen.into(),
        to_do: to_do.into(),
        why: why(view),
        values: because.rows.clone(),
        formulas: formulas(view, because.limit_ms),
        tracing: view.tracing_id().cloned(),
        medicines: view
            .active()
            .map(|(medicine, exposure)| words::medicine(view, medicine, exposure).into())
            .collect(),
        electrolytes: electrolytes(view),
        baseline: baseline(view).into(),
        unknown: all_unknown(view, unknown),
        borderline: because.borderline,
        protocol: protocol.name.as_str().into(),
        protocol_version: protocol.version.as_str().into(),
        protocol_hash: protocol.hash.clone(),
        protocol_signed: protocol.approved.is_some(),
        tide: tide(view),
    }
}

/// The evidence of technical trouble: nobody's patient, so nothing clinical.
pub(crate) fn technical(protocol: &Protocol, seen: &str, because: &str) -> Evidence {
    Evidence {
        whom: "the service itself".into(),
        seen: seen.into(),
        to_do: if protocol.technical.to_do.is_empty() {
            "Look after the service: until this is mended, its silence says nothing about the ward."
                .into()
        } else {
            protocol.technical.to_do.as_str().into()
        },
        why: vec![because.into()],
        values: Vec::new(),
        formulas: Vec::new(),
        tracing: None,
        medicines: Vec::new(),
        electrolytes: Vec::new(),
        baseline: "".into(),
        unknown: Vec::new(),
        borderline: false,
        protocol: protocol.name.as_str().into(),
        protocol_version: protocol.version.as_str().into(),
        protocol_hash: protocol.hash.clone(),
        protocol_signed: protocol.approved.is_some(),
        tide: None,
    }
}

/// How people find the patient: ward and bed, else the local pseudonym.
pub fn whom(view: &View<'_>) -> String {
    let pseudonym = view.patient.described.pseudonym.as_deref();
    match (view.patient.place(view.now), pseudonym) {
        (Some(place), _) => match &place.bed {
            Some(bed) => format!("ward {}, bed {bed}", place.ward),
            None => match pseudonym {
                Some(pseudonym) => format!("ward {}, {pseudonym}", place.ward),
                None => format!("ward {}, bed not known", place.ward),
            },
        },
        (None, Some(pseudonym)) => pseudonym.to_owned(),
        (None, None) => "a patient whose ward is not known".to_owned(),
    }
}

fn why(view: &View<'_>) -> Vec<Box<str>> {
    let mut lines: Vec<Box<str>> = Vec::new();
    let mut add = |line: String| lines.push(line.into());
    let sex = match view.sex() {
        Some(Sex::Female) => "female",
        Some(Sex::Male) => "male",
        Some(Sex::Other) | None => "sex not known",
    };
    match view.patient.age(view.now) {
        Some(age) => add(format!("{age} years, {sex}")),
        None => add(format!("age not known, {sex}")),
    }
    match view.prolonging().count() {
        0 => {}
        1 => add("one listed medicine is active".into()),
        n => add(format!("{n} listed medicines are active")),
    }
    if let Some(reading) = &view.latest {
        if let Some(rate) = reading.rate {
            add(format!("rate {:.0}/min", rate.get()));
        }
        if view.is_wide(reading) {
            add("QRS is wide or paced: QT holds depolarisation too, so QTc is an estimate".into());
            let estimates = words::wide(view, reading);
            if !estimates.is_empty() {
                add(format!("estimates without depolarisation, from small studies: {estimates}"));
            }
        }
        if reading.recorded.tracing.rhythm == Some(crate::fact::Rhythm::IrregularlyIrregular) {
            add("RR is irregularly irregular: QT is a mean over beats".into());
        }
    }
    let recorded: Vec<&str> = view
        .patient
        .conditions
        .iter()
        .filter(|(_, (present, _))| *present)
        .map(|(c, _)| words::condition(*c))
        .collect();
    if !recorded.is_empty() {
        add(format!("recorded: {}", words::list(recorded)));
    }
    add(format!("Tisdale score {} (context, not a gate)", tisdale_of(view).words()));
    lines
}

fn formulas(view: &View<'_>, limit_ms: Option<f64>) -> Vec<FormulaRow> {
    let Some(reading) = &view.latest else { return Vec::new() };
    if reading.qt.is_none() {
        return Vec::new();
    }
    let of = |formula| view.qtc(reading, formula).ok().map(|(qtc, _)| qtc.value.get());
    let deciding = of(view.protocol.reading.formula);
    let side = |qtc: Option<f64>| qtc.zip(limit_ms).map(|(qtc, limit)| qtc >= limit);
    view.protocol
        .reading
        .shown
        .iter()
        .map(|formula| {
            let qtc_ms = of(*formula);
            FormulaRow {
                formula: formula.name().into(),
                qtc_ms,
                decided: *formula == view.protocol.reading.formula,
                split: side(qtc_ms).is_some() && side(qtc_ms) != side(deciding),
            }
        })
        .collect()
}

/// The electrolytes as known, each with its age and marks; what was never measured is said too.
pub fn electrolytes(view: &View<'_>) -> Vec<Box<str>> {
    let calcium = match view.best_calcium() {
        // With no calcium at all, what is known of total calcium is said.
        Of::CalciumIonised if view.electrolyte(Of::CalciumIonised).is_some() => Of::CalciumIonised,
        Of::CalciumIonised | Of::CalciumCorrected | Of::Potassium | Of::Magnesium => {
            Of::CalciumCorrected
        }
    };
    [Of::Potassium, Of::Magnesium, calcium]
        .into_iter()
        .map(|of| match view.electrolyte(of) {
            Some(found) => {
                let grade = words::ctcae(of, &found);
                format!("{}{grade}", words::electrolyte(view, of_word(of), &found)).into()
            }
            None => words::no_electrolyte(view, of).into(),
        })
        .collect()
}

/// The baseline and the change since, or why there is none.
pub fn baseline(view: &View<'_>) -> String {
    let formula = view.protocol.reading.formula;
    let baseline = match &view.baseline {
        Ok(baseline) => baseline,
        Err(why) => return format!("no baseline: {why}"),
    };
    let Ok((then, doubt)) = view.qtc(baseline, formula) else {
        return "no baseline: it gives no QTc".into();
    };
    let doubtful = if baseline.quality == Quality::Doubtful { ", itself doubtful" } else { "" };
    let chosen = match &view.patient.baseline {
        Some((_, Some(person))) => format!(", chosen by {person}"),
        _ => String::new(),
    };
    let at = words::time(view, baseline.recorded.at);
    let mut text = format!("QTc {:.0} ± {doubt:.0} ms on {at}{doubtful}{chosen}", then.value.get());
    let comparable = |reading: &&Reading<'_>| reading.other_definition == baseline.other_definition;
    match view.latest.as_ref().filter(comparable).map(|reading| view.qtc(reading, formula)) {
        Some(Ok((now, now_doubt))) => {
            let change = now.value.get() - then.value.get();
            text.push_str(&format!("; change {change:+.0} ± {:.0} ms", doubt.hypot(now_doubt)));
        }
        _ => text.push_str("; change not comparable"),
    }
    text
}

/// Everything that is not known, each once.
pub(crate) fn all_unknown(view: &View<'_>, unknown: &[Box<str>]) -> Vec<Box<str>> {
    let mut found: Vec<Box<str>> = unknown.to_vec();
    let mut add = |line: String| {
        if !found.iter().any(|known| **known == *line) {
            found.push(line.into());
        }
    };
    if !matches!(view.sex(), Some(Sex::Female | Sex::Male)) {
        add("sex is not known: the stricter limit holds".into());
    }
    if view.patient.described.birth_date.is_none() {
        add("birth date is not known".into());
    }
    if !view.not_recognised.is_empty() {
        add(format!(
            "not on the medicine list, neither as listed nor as left out: {}",
            words::list(&view.not_recognised)
        ));
    }
    let today = view.now.with_timezone(&view.protocol.zone).date_naive();
    view.list.doubts(today).into_iter().for_each(&mut add);
    if let Some(reading) = &view.latest {
        if reading.quality == Quality::Doubtful {
            let why = words::list(reading.recorded.tracing.why.iter().map(|why| &**why));
            add(format!("the tracing is doubtful: {why}"));
        }
        if reading.other_definition {
            add("the over-read follows another definition of QT than the protocol's reading".into());
        }
    }
    let is_said = unknown.iter().any(|line| line.starts_with("no baseline"));
    if let Err(why) = &view.baseline
        && !is_said
    {
        add(format!("no baseline: {why}"));
    }
    found
}

/// Numbers for the tide line: the limits that apply to this patient, the baseline, the value now.
pub fn tide(view: &View<'_>) -> Option<Tide> {
    let formula = view.protocol.reading.formula;
    let (now, doubt) = view.qtc(view.latest.as_ref()?, formula).ok()?;
    let mut limits: Vec<(f64, TierName)> = Vec::new();
    for rule in &view.protocol.rules {
        if let Some(tier) = view.protocol.tiers.get(rule.tier) {
            shores(view, &rule.when, tier.name.as_str(), &mut limits);
        }
    }
    limits.sort_by(|a, b| a.0.total_cmp(&b.0));
    limits.dedup_by(|later, first| (later.0 - first.0).abs() < 0.5);
    let baseline =
        view.baseline.as_ref().ok().and_then(|baseline| view.qtc(baseline, formula).ok());
    Some(Tide {
        limits,
        baseline: baseline.map(|(qtc, _)| qtc.value.get()),
        value: now.value.get(),
        doubt,
    })
}

/// Lower limits of the deciding formula that are enough by themselves. One that counts only together with something else
/// is no shore: `call from 460` on a rule that also asks for a rise of 60 ms would mislead.
fn shores(view: &View<'_>, condition: &Condition, tier: &str, found: &mut Vec<(f64, TierName)>) {
    let parts: &[Condition] = if let Condition::Any(parts) = condition {
        parts
    } else if let Condition::All(parts) = condition
        && parts.len() == 1
    {
        parts
    } else {
        &[]
    };
    parts.iter().for_each(|part| shores(view, part, tier, found));
    if let Condition::Qtc(is) = condition
        && is.by.is_none()
    {
        let named = is.at_least.as_ref().and_then(|name| view.protocol.limits.get(name.as_ref()));
        let ms =
            is.at_least_ms.map(|ms| ms.0).or_else(|| named.map(|limit| limit_for(view, limit)));
        found.extend(ms.map(|ms| (ms, TierName::new(tier))));
    }
}
