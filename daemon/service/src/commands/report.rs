//! `ebbmark report`: what a period's alerts were worth, for the safety committee.

use super::settings::Where;
use super::{Ended, broken, say};
use crate::report::{Figures, Period, Spread, figures, lives};
use crate::store::{Reader, StoreError, StorePath};
use chrono::{NaiveDate, NaiveTime, TimeZone};
use clap::Args;
use ebbmark_rules::alert::Decision;
use ebbmark_rules::fact::{At, Fact};
use std::fmt::Write;

/// Say what the alerts of a period were worth, without any patient's identity
///
/// Days are the site's own; `--to` is the first day that no longer counts.
#[derive(Debug, Args)]
pub(super) struct Report {
    #[command(flatten)]
    place: Where,
    /// First day, as 2027-01-01
    #[arg(long, value_name = "DAY")]
    from: NaiveDate,
    /// First day after the period
    #[arg(long, value_name = "DAY")]
    to: NaiveDate,
    /// One JSON object instead of text
    #[arg(long)]
    json: bool,
}

impl Report {
    pub(super) fn run(&self) -> Ended {
        let settings = match self.place.read() {
            Ok(settings) => settings,
            Err(ended) => return ended,
        };
        if self.from >= self.to {
            eprintln!("error: `--from {}` is not before `--to {}`", self.from, self.to);
            return Ended::WrongUse;
        }
        let midnight = |day: NaiveDate| -> At {
            let local = day.and_time(NaiveTime::MIN);
            let zone = settings.site.zone;
            // A zone whose clocks change at midnight has no such moment on that day: the UTC one is near enough.
            zone.from_local_datetime(&local).earliest().map_or(local.and_utc(), |at| at.to_utc())
        };
        let period = Period { from: midnight(self.from), to: midnight(self.to) };
        let figures = match gathered(&StorePath::new(&settings.folders.store), period) {
            Ok(figures) => figures,
            Err(error) => return broken(&error),
        };
        if self.json {
            match serde_json::to_string(&figures) {
                Ok(line) => say(&(line + "\n")),
                Err(error) => return broken(&error),
            };
        } else {
            say(&text(&figures));
        }
        Ended::Done
    }
}

fn gathered(store: &StorePath, period: Period) -> Result<Figures, StoreError> {
    let reader = Reader::open(store)?;
    let mut facts: Vec<Fact> = Vec::new();
    reader.facts(|_, fact| {
        facts.push(fact);
        Ok(())
    })?;
    let decisions: Vec<Decision> =
        reader.alerts(true)?.into_iter().flat_map(|row| row.life).collect();
    Ok(figures(period, &facts, &lives(&decisions)))
}

fn text(found: &Figures) -> String {
    let mut text = String::new();
    let mut line = |name: &str, value: String| {
        let _ = writeln!(text, "{name:<34} {value}"); // a String can't fail
    };
    let rate = |per: Option<f64>| {
        per.map_or(String::new(), |per| format!(" ({per:.1} per 100 patient-days)"))
    };
    line("patient-days", format!("{:.1}", found.patient_days));
    line(
        "alerts about patients",
        format!("{}{}", found.alerts.alerts, rate(found.alerts.per_100_patient_days)),
    );
    for (what, counts) in
        [("tier", &found.by_tier), ("ward", &found.by_ward), ("rule", &found.by_rule)]
    {
        for (name, count) in counts {
            line(
                &format!("  {what} {name}"),
                format!("{}{}", count.alerts, rate(count.per_100_patient_days)),
            );
        }
    }
    line("alerts about the service", found.technical.to_string());
    let spread = |spread: &Option<Spread>| match spread {
        Some(s) => format!(
            "{:.0} min in the middle, {:.0} min for nine of ten (n = {})",
            s.median_min, s.centile_90_min, s.n
        ),
        None => "none".into(),
    };
    line("raised to told", spread(&found.to_told));
    line("raised to answered", spread(&found.to_answered));
    line("raised to over", spread(&found.to_closed));
    line("never answered", found.unanswered.to_string());
    line("messages beyond the first", found.repeats.to_string());
    line("went on unanswered", found.escalations.to_string());
    line("put off", found.snoozes.to_string());
    line("withdrawn by a correction", found.withdrawn.to_string());
    let share = |share: &Option<crate::agree::Share>| match share {
        Some(s) => format!(
            "{} of {} ({:.0} %, {:.0} to {:.0})",
            s.of,
            s.n,
            s.value() * 100.0,
            s.low * 100.0,
            s.high * 100.0
        ),
        None => "none".into(),
    };
    line("over-read and confirmed", share(&found.confirmed));
    for (rule, of) in &found.confirmed_by_rule {
        line(&format!("  rule {rule}"), share(&Some(*of)));
    }
    line("tracings measured", found.tracings.to_string());
    line("  no QT could be told", share(&found.unreadable));
    line("  doubtful", share(&found.doubtful));
    line("  QRS wide or paced", share(&found.wide_qrs));
    line("  irregularly irregular", share(&found.irregularly_irregular));
    line("alerts whose formulas disagree", share(&found.formula_split));
    for (at, hash) in &found.protocols {
        line(
            "protocol in force from",
            format!("{} ({})", at.format("%Y-%m-%d %H:%M UTC"), hash.short()),
        );
    }
    text.push_str("\nShares with their 95 % intervals. Few cases say little; no alert does not mean no risk.\n");
    text
}
