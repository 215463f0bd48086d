//! How far to trust a reading: its doubt, its grade, and the reasons in words.

#![allow(clippy::cast_precision_loss, reason = "counts of beats")]

use crate::engine::Read;
use crate::measurement::{Answer, Reason, Rhythm};
use crate::reading::GroupRead;
use crate::series::median;
use crate::units::{Microvolts, Ms, PerMinute};

/// A judged reading, ms.
#[derive(Debug)]
pub(crate) struct Verdict {
    pub answer: Answer,
    pub remarks: Vec<Reason>,
    pub qt: Option<f64>,
    pub qrs: Option<f64>,
    pub tangent: Option<f64>,
    pub doubt: f64,
    mean: bool,
}

/// Below this belief the answer is none; below that it is doubtful. On the development records, cross-validated: see
/// ACCURACY.md, "How the answers are ordered".
const NONE_BELOW: f64 = 0.30;
const DOUBTFUL_BELOW: f64 = 0.70;
/// Readers further apart than this are a reason for a person to look, ms.
const APART_MS: f64 = 45.0;
/// With too few leads for a consensus, T ends further apart than this leave open which one counts, ms.
const LEADS_APART_MS: f64 = 50.0;
const FEW_LEADS: usize = 3;
/// A T wave below this on every lead has no end to speak of, µV.
const FLAT_UV: f64 = 30.0;
const WIDE_MS: f64 = 120.0;
/// Rates on which the engine was checked, per minute.
const RATES: (f64, f64) = (30.0, 180.0);
/// The doubt never falls below this, ms: the experts' own marks scatter by it (ACCURACY.md).
const LEAST_DOUBT_MS: f64 = 6.0;

impl Verdict {
    /// A value over the beats that count: their median, or their mean where the rhythm has no pattern, because there QT
    /// follows RR from beat to beat.
    pub(crate) fn over_beats(
        &self,
        read: &Read,
        pick: &dyn Fn(&GroupRead) -> Option<f32>,
    ) -> Option<f64> {
        over(read, self.mean, pick)
    }
}

fn over(read: &Read, mean: bool, pick: &dyn Fn(&GroupRead) -> Option<f32>) -> Option<f64> {
    let values: Vec<f64> = read
        .beats
        .iter()
        .filter(|beat| beat.normal)
        .filter_map(|beat| pick(read.groups.get(beat.group)?).map(f64::from))
        .collect();
    match values.len() {
        0 => None,
        n if mean => Some(values.iter().sum::<f64>() / n as f64),
        _ => Some(median(&values)),
    }
}

/// Judges everything read.
pub(crate) fn judge(read: &Read) -> Verdict {
    let mean =
        read.series.as_ref().is_some_and(|series| series.rhythm == Rhythm::IrregularlyIrregular);
    let value = |pick: &dyn Fn(&GroupRead) -> Option<f32>| over(read, mean, pick);
    let qt = value(&|group| Some(group.t_end? - group.on));
    let qrs = value(&|group| Some(group.off - group.on));
    let tangent = value(&|group| Some(group.tangent? - group.on));
    let classical = value(&|group| Some(group.threshold? - group.on));
    let mass = value(&|group| group.mass);
    let width = value(&|group| group.width);
    let apart = qt.zip(classical).map(|(a, b)| (a - b).abs());
    let counted = read.beats.iter().filter(|beat| beat.normal).count();
    let highest_t = value(&|group| {
        let size = |lead: &crate::reading::LeadRead| lead.wave.map(|wave| wave.amplitude.abs());
        group.leads.iter().filter_map(size).reduce(f32::max)
    });
    let scatter = scatter(read, qt);
    let doubt = doubt(width, apart, scatter, mean, counted);
    let mut verdict =
        Verdict { answer: Answer::Good, remarks: Vec::new(), qt, qrs, tangent, doubt, mean };
    let mut fatal: Vec<Reason> = Vec::new();
    let mut doubts: Vec<Reason> = Vec::new();
    if counted < 2 {
        fatal.push(Reason::FewBeats(counted));
    }
    if qt.is_none() {
        fatal.push(Reason::Noise);
    }
    match highest_t {
        Some(uv) if uv < FLAT_UV => fatal.extend(Microvolts::new(uv).map(Reason::FlatT)),
        None if qt.is_some() && mass.is_none_or(|mass| mass < DOUBTFUL_BELOW) => {
            fatal.push(Reason::Noise)
        }
        _ => {}
    }
    let rate = read.series.as_ref().map(|series| 60_000.0 / series.mean_ms);
    if let Some(rate) = rate.filter(|rate| !(RATES.0..=RATES.1).contains(rate)) {
        fatal.extend(PerMinute::new(rate).map(Reason::Rate));
    }
    match mass {
        Some(mass) if mass < NONE_BELOW => fatal.push(Reason::Noise),
        Some(mass) if mass < DOUBTFUL_BELOW => doubts.push(Reason::LateWave),
        _ => {}
    }
    if let Some(apart) = apart.filter(|apart| *apart > APART_MS) {
        doubts.extend(Ms::new(apart).map(Reason::ReadersDisagree));
    }
    let spread = value(&|group| spread(group)).filter(|_| read.used.len() <= FEW_LEADS);
    if let Some(spread) = spread.filter(|spread| *spread > LEADS_APART_MS) {
        doubts.extend(Ms::new(spread).map(Reason::LeadsDisagree));
    }
    if read.paced {
        doubts.push(Reason::Paced);
    }
    if counted < 4 {
        doubts.push(Reason::FewBeats(counted));
    }
    if value(&|group| Some(group.t_end? - group.last)).is_some_and(|beyond| beyond > 0.0) {
        doubts.push(Reason::TpFused);
    }
    // Across a hole beats may be missing, and with them the rate; a lead that is off only leaves the others.
    let (holes, other): (Vec<_>, Vec<_>) =
        read.remarks.iter().cloned().partition(|remark| *remark == Reason::MissingSamples);
    doubts.extend(holes);
    let remarks = &mut verdict.remarks;
    remarks.extend(other);
    if let Some(wide) = qrs.filter(|qrs| *qrs >= WIDE_MS).and_then(Ms::new) {
        remarks.push(Reason::WideQrs(wide));
    }
    if let Some(series) = &read.series {
        match series.rhythm {
            Rhythm::IrregularlyIrregular => remarks.push(Reason::IrregularlyIrregular),
            Rhythm::Irregular => remarks.push(Reason::Irregular),
            Rhythm::Regular => {}
        }
        if series.drifts {
            remarks.push(Reason::RateNotSteady);
        }
    }
    if !fatal.is_empty() {
        verdict.answer = Answer::None(fatal);
    } else if !doubts.is_empty() {
        verdict.answer = Answer::Doubtful(doubts);
    }
    verdict
}

/// From the first lead's T end to the last one's, ms.
fn spread(group: &GroupRead) -> Option<f32> {
    let ends = || group.leads.iter().filter_map(|lead| lead.t_end);
    Some(ends().reduce(f32::max)? - ends().reduce(f32::min)?)
}

/// Median absolute deviation of the groups' QT, ms, scaled to a normal's SD.
fn scatter(read: &Read, qt: Option<f64>) -> f64 {
    let Some(qt) = qt else { return 0.0 };
    let off: Vec<f64> = read
        .beats
        .iter()
        .filter(|beat| beat.normal)
        .filter_map(|beat| {
            let group = read.groups.get(beat.group)?;
            Some((f64::from(group.t_end? - group.on) - qt).abs())
        })
        .collect();
    1.4826 * median(&off)
}

/// The doubt of QT: what the learned reader's belief spreads over, how far the classical reader is away, and how the
/// beats scatter.
fn doubt(width: Option<f64>, apart: Option<f64>, scatter: f64, mean: bool, counted: usize) -> f64 {
    const WIDTH: f64 = 0.50;
    const APART: f64 = 0.30;
    let belief = width.unwrap_or(24.0) * WIDTH;
    let disagree = apart.unwrap_or(20.0) * APART;
    let beats = if mean { scatter / (counted.max(1) as f64).sqrt() } else { scatter * 0.5 };
    LEAST_DOUBT_MS.hypot(belief).hypot(disagree).hypot(beats)
}
