//! From what a file holds to what is learned from it. The one place where a measurement becomes a fact.

use crate::ledger::{Draft, Reading};
use crate::store::{Held, What};
use chrono::TimeDelta;
use ebbmark_formats::{Chart, TracingFile};
use ebbmark_measure::{
    Answer, ENGINE, Intervals, LeadReading, Measurement, MedianLead, TEndMethod,
};
use ebbmark_rules::fact::{self, At, Body, Quality, Source, Tracing};
use ebbmark_rules::ids::{ContentHash, TracingId};
use ebbmark_rules::units::{Ms, PerMinute};

/// A cart's clock may be a little ahead of ours; a tracing from tomorrow has a wrong date.
const AHEAD: TimeDelta = TimeDelta::hours(24);

/// A measured tracing as a fact, or the reason why it can't be one.
pub(super) fn tracing(
    file: TracingFile,
    measurement: &Measurement,
    hash: &ContentHash,
    now: At,
) -> Reading {
    let Some(recorded_at) = file.recorded_at else {
        return held("carries no time of recording, so it can't be set beside anything else");
    };
    if recorded_at > now + AHEAD {
        return held(
            "carries a time of recording that is still to come; set the cart's clock and export it again",
        );
    }
    let why = measurement
        .answer
        .why()
        .iter()
        .chain(&measurement.remarks)
        .map(|reason| reason.to_string().into());
    let intervals = measurement.intervals.as_ref();
    let tracing = Tracing {
        id: file.id.unwrap_or_else(|| TracingId::new(hash.as_str())),
        engine: ENGINE.into(),
        quality: match measurement.answer {
            Answer::Good => Quality::Good,
            Answer::Doubtful(_) => Quality::Doubtful,
            Answer::None(_) => Quality::None,
        },
        why: why.chain(file.warnings).collect(),
        rr: measurement.rr.and_then(ms),
        rate: measurement.rate.and_then(|rate| PerMinute::new(rate.get()).ok()),
        rhythm: measurement.rhythm.map(|rhythm| match rhythm {
            ebbmark_measure::Rhythm::Regular => fact::Rhythm::Regular,
            ebbmark_measure::Rhythm::Irregular => fact::Rhythm::Irregular,
            ebbmark_measure::Rhythm::IrregularlyIrregular => fact::Rhythm::IrregularlyIrregular,
        }),
        qrs: intervals.map(|found| found.qrs).or(measurement.qrs).and_then(ms),
        paced: measurement.paced,
        global: intervals.and_then(global),
        leads: intervals.map_or_else(Vec::new, |found| leads(measurement, found)),
        printed: file.printed,
    };
    let draft = Draft {
        occurred_at: Some(recorded_at),
        source: Source::File {
            file: hash.clone(),
            place: "tracing".into(),
            assumed_zone: file.assumed_zone,
        },
        patient: file.patient,
        body: Body::Tracing(tracing),
    };
    Reading::Tracing { described: file.described, draft: Box::new(draft) }
}

/// Chart rows as facts. A file of which no row can be used is held; else its bad rows are reported beside the good.
pub(super) fn chart(chart: Chart, hash: &ContentHash) -> Reading {
    let Chart { rows, bad, left_out } = chart;
    if rows.is_empty() && left_out == 0 {
        let reason = match bad.first() {
            Some(first) => format!(
                "none of its {} rows can be used; {}: {}",
                bad.len(),
                first.place,
                first.why
            ),
            None => "holds no rows".to_owned(),
        };
        return Reading::Held(What::Chart, Held(reason));
    }
    let drafts = rows.into_iter().map(|row| Draft {
        occurred_at: Some(row.occurred_at),
        source: Source::File {
            file: hash.clone(),
            place: row.place,
            assumed_zone: row.assumed_zone,
        },
        patient: Some(row.patient),
        body: row.body,
    });
    Reading::Chart { drafts: drafts.collect(), bad }
}

fn held(reason: &str) -> Reading {
    Reading::Held(What::Tracing, Held(reason.to_owned()))
}

fn ms(value: ebbmark_measure::Ms) -> Option<Ms> {
    Ms::new(value.get()).ok()
}

fn global(found: &Intervals) -> Option<fact::Reading> {
    Some(fact::Reading {
        qt_tangent: found.qt_tangent.and_then(ms),
        qt_threshold: found.qt_threshold.and_then(ms),
        doubt: ms(found.qt_doubt)?,
    })
}

/// Each lead's own reading. The engine reads a lead by the method of the global value; the other method's QT differs
/// from it by what lies between the two T ends on that lead's median beat.
fn leads(measurement: &Measurement, found: &Intervals) -> Vec<(Box<str>, fact::Reading)> {
    let median = |reading: &LeadReading| {
        measurement.median.as_ref()?.leads.iter().find(|median| median.lead == reading.lead)
    };
    let one = |reading: &LeadReading| {
        let qt = reading.qt?;
        let apart = median(reading).and_then(between);
        let (tangent, threshold) = match found.t_end_method {
            TEndMethod::Tangent => (Some(qt.get()), apart.map(|apart| qt.get() + apart)),
            TEndMethod::Threshold => (apart.map(|apart| qt.get() - apart), Some(qt.get())),
        };
        let read = |value: Option<f64>| value.and_then(|value| Ms::new(value).ok());
        let doubt = ms(found.qt_doubt)?;
        Some((
            reading.lead.name().into(),
            fact::Reading { qt_tangent: read(tangent), qt_threshold: read(threshold), doubt },
        ))
    };
    measurement.per_lead.iter().filter_map(one).collect()
}

/// From the tangent's T end to the threshold's, ms.
fn between(lead: &MedianLead) -> Option<f64> {
    Some(lead.t_end_threshold?.get() - lead.t_end_tangent?.get())
}
