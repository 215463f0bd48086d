//! Measurements as a table for a person.

use crate::qtc;
use ebbmark_formats::TracingFile;
use ebbmark_measure::Measurement;
use ebbmark_rules::correction::Formula;
use std::fmt::Write;
use std::path::Path;

/// What stands under the table.
pub(super) const FOOT: &str = "\nQT is the global reading over all leads used, ± its doubt; QTc by Fridericia and by Bazett.\n\
    Measured by a program: a qualified reader confirms on the tracing. No finding does not mean no risk.\n";

/// The columns.
pub(super) fn head() -> String {
    let (rate, qrs, qt) = ("rate/min", "QRS ms", "QT ms");
    format!(
        "{:<28} {:<8} {rate:>8} {:<21} {qrs:>6} {qt:>10} {:>9} {:>6}\n",
        "file", "answer", "rhythm", "QTc Frid.", "Baz."
    )
}

/// One file: a row, and a line for each reason.
pub(super) fn rows<E: std::fmt::Display>(
    path: &Path,
    result: &Result<(Box<TracingFile>, Measurement), E>,
) -> String {
    let name =
        path.file_name().map_or_else(String::new, |name| name.to_string_lossy().into_owned());
    let mut text = format!("{} ", shortened(&name, 28));
    let measurement = match result {
        Ok((_, measurement)) => measurement,
        Err(error) => {
            // Writing to a String can't fail, here and below.
            let _ = writeln!(text, "unread\n    {error}");
            return text;
        }
    };
    let whole =
        |value: Option<f64>| value.map_or_else(|| "-".to_owned(), |value| format!("{value:.0}"));
    let intervals = measurement.intervals.as_ref();
    let qt = intervals.map_or_else(
        || "-".to_owned(),
        |found| format!("{:.0} ± {:.0}", found.qt.get(), found.qt_doubt.get()),
    );
    let qrs = intervals.map(|found| found.qrs).or(measurement.qrs);
    let _ = writeln!(
        text,
        "{:<8} {:>8} {:<21} {:>6} {qt:>10} {:>9} {:>6}",
        measurement.answer.word(),
        whole(measurement.rate.map(|rate| rate.get())),
        measurement.rhythm.map_or("-", ebbmark_measure::Rhythm::word),
        whole(qrs.map(|qrs| qrs.get())),
        whole(qtc::of(measurement, Formula::Fridericia)),
        whole(qtc::of(measurement, Formula::Bazett)),
    );
    for reason in measurement.answer.why().iter().chain(&measurement.remarks) {
        let _ = writeln!(text, "    {reason}");
    }
    text
}

/// The end of a long name tells files apart better than its start.
fn shortened(name: &str, width: usize) -> String {
    let length = name.chars().count();
    if length <= width {
        return format!("{name:<width$}");
    }
    std::iter::once('…').chain(name.chars().skip(length + 1 - width)).collect()
}
