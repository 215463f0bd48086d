//! `ebbmark agree`: the engine against a hospital's own readers, on the hospital's own tracings.

use super::{Ended, say};
use crate::agree::{Deming, Limits, Pair, deming, limits, pairs, share};
use crate::reading::{self, Unread};
use clap::Args;
use ebbmark_formats::{Content, Site};
use ebbmark_measure::{Answer, Measurement, Options, Rhythm};
use rayon::prelude::*;
use std::fmt::Write;
use std::path::{Path, PathBuf};

/// Compare the engine with local readings of the same tracings
///
/// TABLE is a CSV file with the columns `file` (relative to the table), `qt_ms`, and where they are known `lead` (empty
/// or `global` for a reading over all leads) and `qrs_ms`. Bias and limits of agreement are machine minus reader, with
/// 95 % intervals. A lead's reading is compared with that lead's own: it is about 20 ms shorter than a global one.
/// Exit code 1 says that a row or a file could not be used.
#[derive(Debug, Args)]
pub(super) struct Agree {
    /// The readers' table
    table: PathBuf,
    /// Zone of times that a file gives without one
    #[arg(long, value_name = "ZONE", default_value = "UTC")]
    zone: chrono_tz::Tz,
}

/// One tracing read by both.
struct Both {
    pair: Pair,
    machine_ms: f64,
    rhythm: Option<Rhythm>,
    wide: bool,
    good: bool,
}

/// How many are named for a second look.
const WORST: usize = 10;

/// Whether a tracing belongs to a group.
type Belongs = fn(&Both) -> bool;

impl Agree {
    pub(super) fn run(&self) -> Ended {
        let read = std::fs::read(&self.table).map_err(|error| error.to_string());
        let table = read.and_then(|bytes| pairs(&bytes).map_err(|error| error.to_string()));
        let (rows, bad) = match table {
            Ok(table) => table,
            Err(why) => {
                eprintln!("error: cannot read the table `{}`: {why}", self.table.display());
                return Ended::WrongUse;
            }
        };
        for row in &bad {
            eprintln!("error: line {} of the table: {}", row.line, row.why);
        }
        let folder = self.table.parent().unwrap_or(Path::new(""));
        let site = Site { zone: self.zone, issuer: "".into(), codes: Default::default() };
        let (count, answers): (usize, Vec<_>) = (
            rows.len(),
            rows.into_par_iter()
                .map(|pair| {
                    let found = measure(&folder.join(&pair.file), &site);
                    (pair, found)
                })
                .collect(),
        );
        let (mut both, mut unread, mut silent) = (Vec::new(), 0, 0);
        for (pair, found) in answers {
            match found {
                Err(why) => {
                    unread += 1;
                    eprintln!("error: {}: {why}", pair.file.display());
                }
                Ok(found) => match compared(pair, &found) {
                    Some(one) => both.push(one),
                    None => silent += 1,
                },
            }
        }
        say(&text(&mut both, count, silent));
        if bad.is_empty() && unread == 0 { Ended::Done } else { Ended::Findings }
    }
}

fn measure(path: &Path, site: &Site) -> Result<Measurement, Unread> {
    match reading::file(path, site)? {
        Content::Tracing(tracing) => reading::measured(&tracing, &Options::default()),
        Content::Chart(_) => Err(Unread::NotATracing),
    }
}

/// `None` where the engine gave no QT, or none for the lead that the reader read.
fn compared(pair: Pair, found: &Measurement) -> Option<Both> {
    let intervals = found.intervals.as_ref()?;
    let machine_ms = match &pair.lead {
        None => intervals.qt.get(),
        Some(lead) => {
            let own = found.per_lead.iter().find(|own| own.lead.name().eq_ignore_ascii_case(lead));
            own?.qt?.get()
        }
    };
    let wide = pair.qrs_ms.unwrap_or(intervals.qrs.get()) >= 120.0;
    Some(Both { pair, machine_ms, rhythm: found.rhythm, wide, good: found.answer == Answer::Good })
}

fn difference(both: &Both) -> f64 {
    both.machine_ms - both.pair.qt_ms
}

fn text(both: &mut [Both], count: usize, silent: usize) -> String {
    let mut text = format!(
        "{count} tracings with a local reading; no QT told by the engine on {silent} of them\n\n"
    );
    let groups: [(&str, Belongs); 6] = [
        ("all", |_| true),
        ("answered `good`", |one| one.good),
        ("regular rhythm", |one| one.rhythm == Some(Rhythm::Regular)),
        ("irregularly irregular", |one| one.rhythm == Some(Rhythm::IrregularlyIrregular)),
        ("QRS below 120 ms", |one| !one.wide),
        ("QRS from 120 ms", |one| one.wide),
    ];
    for (name, belongs) in groups {
        let members: Vec<&Both> = both.iter().filter(|one| belongs(one)).collect();
        let differences: Vec<f64> = members.iter().map(|one| difference(one)).collect();
        let near = share(differences.iter().filter(|d| d.abs() <= 30.0).count(), differences.len());
        let _ = writeln!(text, "{name}: {}", in_words(members.len(), limits(&differences))); // a String can't fail
        if let Some(near) = near {
            let (low, high) = (near.low * 100.0, near.high * 100.0);
            let _ = writeln!(
                text,
                "  within 30 ms: {:.0} % ({low:.0} to {high:.0})",
                near.value() * 100.0
            );
        }
    }
    let points: Vec<(f64, f64)> = both.iter().map(|one| (one.pair.qt_ms, one.machine_ms)).collect();
    if let Some(Deming { slope, intercept, .. }) = deming(&points) {
        let _ = writeln!(
            text,
            "\nDeming line, machine on reader: slope {:.2} ({:.2} to {:.2}), intercept {:.0} ms ({:.0} to {:.0})",
            slope.value, slope.low, slope.high, intercept.value, intercept.low, intercept.high
        );
    }
    both.sort_by(|a, b| difference(b).abs().total_cmp(&difference(a).abs()));
    text.push_str("\nLook at these first:\n");
    for one in both.iter().take(WORST) {
        let (file, reader, machine) = (one.pair.file.display(), one.pair.qt_ms, one.machine_ms);
        let _ = writeln!(
            text,
            "  {file}  reader {reader:.0}, machine {machine:.0} ({:+.0})",
            difference(one)
        );
    }
    text.push_str(
        "\nIt measures and points; it does not diagnose. Agreement on these tracings says little about others.\n",
    );
    text
}

fn in_words(n: usize, limits: Option<Limits>) -> String {
    let Some(limits) = limits else { return format!("{n}; too few to say how well they agree") };
    format!(
        "{n}; bias {:+.1} ms ({:+.1} to {:+.1}), limits of agreement {:+.0} to {:+.0} ms (outer ends {:+.0} and {:+.0})",
        limits.bias.value,
        limits.bias.low,
        limits.bias.high,
        limits.lower.value,
        limits.upper.value,
        limits.lower.low,
        limits.upper.high
    )
}
