//! A measurement as one JSON object: a contract that other programs rely on.

use crate::qtc;
use ebbmark_formats::TracingFile;
use ebbmark_measure::{Beat, LeadReading, Marks, Measurement, Ms, Seconds};
use ebbmark_rules::correction::Formula;
use serde::Serialize;
use std::collections::BTreeMap;
use std::path::Path;

#[derive(Debug, Default, Serialize)]
struct Line<'a> {
    file: String,
    sampling_hz: Option<f64>,
    duration_s: Option<f64>,
    leads: Vec<&'a str>,
    recorded_at: Option<String>,
    answer: &'a str,
    why: Vec<String>,
    rr_ms: Option<f64>,
    rate_bpm: Option<f64>,
    rhythm: Option<&'a str>,
    qrs_ms: Option<f64>,
    qt_ms: Option<f64>,
    qt_doubt_ms: Option<f64>,
    jt_ms: Option<f64>,
    t_end_method: Option<&'a str>,
    qt_by_method_ms: ByMethod,
    qtc_ms: ByFormula,
    per_lead: Vec<PerLead<'a>>,
    #[serde(skip_serializing_if = "Option::is_none")]
    beats: Option<Vec<BeatLine<'a>>>,
}

#[derive(Debug, Default, Serialize)]
struct ByMethod {
    tangent: Option<f64>,
    threshold: Option<f64>,
}

#[derive(Debug, Default, Serialize)]
struct ByFormula {
    bazett: Option<f64>,
    fridericia: Option<f64>,
    framingham: Option<f64>,
    hodges: Option<f64>,
    rautaharju: Option<f64>,
    dmitrienko: Option<f64>,
}

#[derive(Debug, Serialize)]
struct PerLead<'a> {
    lead: &'a str,
    qt_ms: Option<f64>,
    qrs_ms: Option<f64>,
    t_amplitude_uv: Option<f64>,
    used: bool,
}

#[derive(Debug, Serialize)]
struct BeatLine<'a> {
    r_s: f64,
    kind: &'a str,
    global: MarksLine,
    leads: BTreeMap<&'a str, MarksLine>,
}

#[derive(Debug, Serialize)]
struct MarksLine {
    qrs_on_s: Option<f64>,
    qrs_off_s: Option<f64>,
    t_end_s: Option<f64>,
}

/// One line, with its line end. A file that could not be read is a line too, whose answer is `none`.
pub(super) fn line<E: std::fmt::Display>(
    path: &Path,
    result: &Result<(Box<TracingFile>, Measurement), E>,
    beats: bool,
) -> String {
    let file = path.display().to_string();
    let line = match result {
        Ok((tracing, measurement)) => measured(file, tracing, measurement, beats),
        Err(error) => {
            Line { file, answer: "none", why: vec![error.to_string()], ..Line::default() }
        }
    };
    // Plain strings and finite numbers always have a JSON form.
    serde_json::to_string(&line).unwrap_or_default() + "\n"
}

fn measured<'a>(
    file: String,
    tracing: &'a TracingFile,
    measurement: &'a Measurement,
    beats: bool,
) -> Line<'a> {
    let intervals = measurement.intervals.as_ref();
    let qtc = |formula| qtc::of(measurement, formula).map(tenth);
    let leads: Vec<&str> =
        tracing.recording.leads().iter().map(|signal| signal.lead.name()).collect();
    Line {
        file,
        sampling_hz: Some(tracing.recording.sampling().get()),
        duration_s: Some(tracing.recording.duration_s()),
        recorded_at: tracing
            .recorded_at
            .map(|at| at.to_rfc3339_opts(chrono::SecondsFormat::AutoSi, true)),
        answer: measurement.answer.word(),
        why: measurement.answer.why().iter().map(ToString::to_string).collect(),
        rr_ms: ms(measurement.rr),
        rate_bpm: measurement.rate.map(|rate| tenth(rate.get())),
        rhythm: measurement.rhythm.map(ebbmark_measure::Rhythm::word),
        qrs_ms: ms(intervals.map(|found| found.qrs).or(measurement.qrs)),
        qt_ms: ms(intervals.map(|found| found.qt)),
        qt_doubt_ms: ms(intervals.map(|found| found.qt_doubt)),
        jt_ms: ms(intervals.map(|found| found.jt)),
        t_end_method: intervals.map(|found| found.t_end_method.word()),
        qt_by_method_ms: ByMethod {
            tangent: ms(intervals.and_then(|found| found.qt_tangent)),
            threshold: ms(intervals.and_then(|found| found.qt_threshold)),
        },
        qtc_ms: ByFormula {
            bazett: qtc(Formula::Bazett),
            fridericia: qtc(Formula::Fridericia),
            framingham: qtc(Formula::Framingham),
            hodges: qtc(Formula::Hodges),
            rautaharju: qtc(Formula::Rautaharju),
            dmitrienko: qtc(Formula::Dmitrienko),
        },
        per_lead: measurement.per_lead.iter().map(per_lead).collect(),
        beats: beats
            .then(|| measurement.beats.iter().map(|beat| beat_line(beat, &leads)).collect()),
        leads,
    }
}

fn per_lead(reading: &LeadReading) -> PerLead<'_> {
    PerLead {
        lead: reading.lead.name(),
        qt_ms: ms(reading.qt),
        qrs_ms: ms(reading.qrs),
        t_amplitude_uv: reading.t_amplitude.map(|uv| uv.get().round()),
        used: reading.used,
    }
}

fn beat_line<'a>(beat: &'a Beat, leads: &[&'a str]) -> BeatLine<'a> {
    BeatLine {
        r_s: microsecond(beat.r),
        kind: match beat.kind {
            ebbmark_measure::BeatKind::Normal => "normal",
            ebbmark_measure::BeatKind::Other => "other",
        },
        global: marks(beat.global),
        leads: leads.iter().copied().zip(beat.leads.iter().copied().map(marks)).collect(),
    }
}

fn marks(marks: Marks) -> MarksLine {
    MarksLine {
        qrs_on_s: marks.qrs_on.map(microsecond),
        qrs_off_s: marks.qrs_off.map(microsecond),
        t_end_s: marks.t_end.map(microsecond),
    }
}

fn ms(value: Option<Ms>) -> Option<f64> {
    value.map(|ms| tenth(ms.get()))
}

/// Tenths of a millisecond are finer than any reading is sure of.
fn tenth(value: f64) -> f64 {
    (value * 10.0).round() / 10.0
}

/// Microseconds are finer than any sampling interval that is read.
fn microsecond(at: Seconds) -> f64 {
    (at.get() * 1e6).round() / 1e6
}
