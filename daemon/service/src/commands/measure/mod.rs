//! `ebbmark measure`: tracings in, a table or JSON lines out. A plain filter that touches no settings and no store.

mod line;
mod table;

use super::{Ended, say};
use crate::reading::{self, Unread};
use clap::Args;
use ebbmark_formats::{Content, Site, TracingFile};
use ebbmark_measure::{Measurement, Options, Seconds};
use rayon::prelude::*;
use std::path::{Path, PathBuf};

/// Measure tracings, and print a table or JSON lines
///
/// A WFDB header finds its sample files beside it. Values that can't be told are left out (null in JSON). QTc is given by
/// several published formulas. Exit code 1 says that a file could not be read.
#[derive(Debug, Args)]
pub(super) struct Measure {
    /// Tracings: DICOM, WFDB headers, CSV
    #[arg(required = true)]
    files: Vec<PathBuf>,
    /// One JSON object a line instead of a table
    #[arg(long)]
    json: bool,
    /// Every beat with its marks, in seconds from the first sample of the file
    #[arg(long, requires = "json")]
    beats: bool,
    /// Measure from this second of each file
    #[arg(long, value_name = "S", value_parser = second, allow_negative_numbers = true)]
    from: Option<f64>,
    /// Measure to this second of each file
    #[arg(long, value_name = "S", value_parser = second, allow_negative_numbers = true)]
    to: Option<f64>,
    /// Leave the learned reader out, to compare with it
    #[arg(long)]
    classical: bool,
    /// Zone of times that a file gives without one
    #[arg(long, value_name = "ZONE", default_value = "UTC")]
    zone: chrono_tz::Tz,
}

fn second(text: &str) -> Result<f64, String> {
    match text.parse::<f64>() {
        Ok(second) if second.is_finite() && second >= 0.0 => Ok(second),
        _ => Err("a number of seconds from 0 is expected".to_owned()),
    }
}

/// A file and what came of it.
type Measured<'a> = (&'a Path, Result<(Box<TracingFile>, Measurement), Unread>);

impl Measure {
    pub(super) fn run(&self) -> Ended {
        if let (Some(from), Some(to)) = (self.from, self.to)
            && from >= to
        {
            eprintln!("error: `--from {from}` is not before `--to {to}`");
            return Ended::WrongUse;
        }
        let options = Options {
            from: self.from.and_then(Seconds::new),
            to: self.to.and_then(Seconds::new),
            classical_only: self.classical,
        };
        // Patient numbers are never printed here, so whose they are doesn't matter.
        let site = Site { zone: self.zone, issuer: "".into(), codes: Default::default() };
        let mut ended = Ended::Done;
        if !self.json && !say(&table::head()) {
            return ended;
        }
        // In portions, so that an archive of any length takes the memory of one portion.
        for portion in self.files.chunks(4 * rayon::current_num_threads()) {
            let measured: Vec<Measured<'_>> = portion
                .par_iter()
                .map(|path| (path.as_path(), measure(path, &site, &options)))
                .collect();
            for (path, result) in &measured {
                if let Err(unread) = result {
                    ended = Ended::Findings;
                    // The table says it in its own row.
                    if self.json {
                        eprintln!("error: {}: {unread}", path.display());
                    }
                }
                let text = if self.json {
                    line::line(path, result, self.beats)
                } else {
                    table::rows(path, result)
                };
                if !say(&text) {
                    return ended;
                }
            }
        }
        if !self.json {
            say(table::FOOT);
        }
        ended
    }
}

fn measure(
    path: &Path,
    site: &Site,
    options: &Options,
) -> Result<(Box<TracingFile>, Measurement), Unread> {
    match reading::file(path, site)? {
        Content::Tracing(tracing) => {
            let measurement = reading::measured(&tracing, options)?;
            Ok((tracing, measurement))
        }
        Content::Chart(_) => Err(Unread::NotATracing),
    }
}
