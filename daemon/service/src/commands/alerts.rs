//! `ebbmark alerts`: what is open, or everything that was ever raised.

use super::settings::Where;
use super::{Ended, broken, say};
use crate::store::{AlertRow, Reader, StorePath};
use clap::Args;
use ebbmark_rules::alert::{AlertState, Decision, LifeStep};
use serde_json::json;
use std::fmt::Write;

/// List open alerts, each with what happened to it
///
/// Exit code 1 says that there are open ones.
#[derive(Debug, Args)]
pub(super) struct Alerts {
    #[command(flatten)]
    place: Where,
    /// Those that are over, too
    #[arg(long)]
    all: bool,
    /// One JSON object a line instead of a table
    #[arg(long)]
    json: bool,
}

impl Alerts {
    pub(super) fn run(&self) -> Ended {
        let settings = match self.place.read() {
            Ok(settings) => settings,
            Err(ended) => return ended,
        };
        let alerts = Reader::open(&StorePath::new(&settings.folders.store))
            .and_then(|reader| reader.alerts(self.all));
        let alerts = match alerts {
            Ok(alerts) => alerts,
            Err(error) => return broken(&error),
        };
        let text: String = if self.json {
            alerts
                .iter()
                .map(|row| json!({"alert": row.alert, "life": row.life}).to_string() + "\n")
                .collect()
        } else if alerts.is_empty() {
            "no alert is open; that does not mean that there is no risk\n".to_owned()
        } else {
            alerts.iter().map(|row| entry(row, settings.site.zone)).collect()
        };
        say(&text);
        let is_open =
            |row: &AlertRow| matches!(row.alert.state, AlertState::Open | AlertState::Acknowledged);
        if alerts.iter().any(is_open) { Ended::Findings } else { Ended::Done }
    }
}

fn entry(row: &AlertRow, zone: chrono_tz::Tz) -> String {
    let when =
        |at: ebbmark_rules::fact::At| at.with_timezone(&zone).format("%Y-%m-%d %H:%M").to_string();
    let alert = &row.alert;
    let state = match alert.state {
        AlertState::Open => "open",
        AlertState::Acknowledged => "acknowledged",
        AlertState::Closed => "closed",
        AlertState::Withdrawn => "withdrawn",
    };
    let evidence = &alert.evidence;
    let mut text =
        format!("{}  {}, {state}: {}\n", when(alert.raised_at), alert.tier, evidence.whom);
    // Writing to a String can't fail, here and below.
    let _ = writeln!(text, "    {}\n    {}", evidence.seen, evidence.to_do);
    for decision in &row.life {
        let (at, what) = match decision {
            Decision::Raised(alert) => (alert.as_of, format!("raised as {}", alert.tier)),
            Decision::Changed(alert) => (alert.as_of, format!("changed; now {}", alert.tier)),
            Decision::Life { at, step, .. } => (*at, words(step, &when)),
            Decision::Tell(notice) => (
                notice.at,
                format!("{} to be told ({} addresses)", notice.role, notice.recipients.len()),
            ),
        };
        let _ = writeln!(text, "        {}  {what}", when(at));
    }
    text
}

fn words(step: &LifeStep, when: &impl Fn(ebbmark_rules::fact::At) -> String) -> String {
    match step {
        LifeStep::Told { recipient } => format!("told {}", recipient.expose()),
        LifeStep::Refused { recipient } => format!("{} can't be reached", recipient.expose()),
        LifeStep::Acknowledged { by, intent } => format!("acknowledged by {by}: {intent}"),
        LifeStep::Snoozed { by, until, why } => {
            format!("put off by {by} until {}: {why}", when(*until))
        }
        LifeStep::SnoozeEnded => "no longer put off".to_owned(),
        LifeStep::HandedOver { by, to } => format!("handed over by {by} to {to}"),
        LifeStep::Escalated { number, to } => format!("nobody answered; step {number}, to {to}"),
        LifeStep::ClosedByFacts { because } => format!("closed: {because}"),
        LifeStep::ClosedByPerson { by, why } => format!("closed by {by}: {why}"),
        LifeStep::Withdrawn { because } => format!("withdrawn: {because}"),
    }
}
