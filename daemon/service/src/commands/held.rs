//! `ebbmark held`: files that wait for a person, and rows that could not be used.

use super::settings::Where;
use super::{Ended, broken, say};
use crate::store::{FileRow, Reader, StorePath};
use clap::Args;
use serde_json::json;
use std::fmt::Write;

/// List files that are held, and rows that could not be used, with the reason
///
/// Exit code 1 says that there are some.
#[derive(Debug, Args)]
pub(super) struct Held {
    #[command(flatten)]
    place: Where,
    /// One JSON object a line instead of a table
    #[arg(long)]
    json: bool,
}

impl Held {
    pub(super) fn run(&self) -> Ended {
        let settings = match self.place.read() {
            Ok(settings) => settings,
            Err(ended) => return ended,
        };
        let held =
            Reader::open(&StorePath::new(&settings.folders.store)).and_then(|reader| reader.held());
        let held = match held {
            Ok(held) => held,
            Err(error) => return broken(&error),
        };
        let text: String = if self.json {
            held.iter().map(line).collect()
        } else if held.is_empty() {
            "nothing is held\n".to_owned()
        } else {
            held.iter().map(|file| entry(file, settings.site.zone)).collect()
        };
        say(&text);
        if held.is_empty() { Ended::Done } else { Ended::Findings }
    }
}

fn line(file: &FileRow) -> String {
    let bad: Vec<_> =
        file.bad.iter().map(|(place, why)| json!({"place": place, "why": why})).collect();
    let line = json!({
        "file": file.path.to_string_lossy(),
        "outcome": file.outcome,
        "what": file.what,
        "reason": (!file.reason.is_empty()).then_some(&file.reason),
        "at": file.at,
        "size": file.size,
        "hash": file.hash,
        "bad_rows": bad,
    });
    line.to_string() + "\n"
}

fn entry(file: &FileRow, zone: chrono_tz::Tz) -> String {
    let at = file.at.with_timezone(&zone).format("%Y-%m-%d %H:%M");
    let mut text = format!("{at}  {}\n", file.path.display());
    // Writing to a String can't fail.
    if !file.reason.is_empty() {
        let _ = writeln!(text, "    held: {}", file.reason);
    }
    for (place, why) in &file.bad {
        let _ = writeln!(text, "    {place} not used: {why}");
    }
    text
}
