//! A comparison in words and columns, for a terminal and for paper.

use super::{Comparison, Episode};
use crate::ids::{Role, TierName};
use std::collections::BTreeSet;
use std::fmt::Write;

impl Comparison {
    /// Side by side. Times are UTC.
    pub fn words(&self) -> String {
        let mut text = String::new();
        let mut say = |line: String| {
            let _ = writeln!(text, "{line}"); // a String can't fail
        };
        say(format!(
            "{} to {}, {:.1} patient-days{}",
            self.period.from.format("%Y-%m-%d"),
            self.period.until.format("%Y-%m-%d"),
            self.patient_days,
            match self.without_stay {
                0 => String::new(),
                n => format!("; {n} patients without a known admission are not in the days"),
            }
        ));
        say(format!("as it was: {} ({})", self.was.protocol, self.was.hash.short()));
        say(format!("candidate: {} ({})", self.would.protocol, self.would.hash.short()));
        say(String::new());
        let row = |what: &str, was: u64, would: u64| {
            let per = |n| self.per_100_days(n).map_or("-".into(), |per| format!("{per:.1}"));
            format!("{what:<28} {was:>7} {would:>9}   {:>8} {:>9}", per(was), per(would))
        };
        say(format!(
            "{:<28} {:>7} {:>9}   {:>8} {:>9}",
            "", "was", "candidate", "was/100d", "cand/100d"
        ));
        let tiers: BTreeSet<&TierName> =
            self.was.alerts.keys().chain(self.would.alerts.keys()).collect();
        for tier in tiers {
            let of = |side: &super::Side| side.alerts.get(tier).copied().unwrap_or(0);
            say(row(&format!("alerts that reached {tier}"), of(&self.was), of(&self.would)));
        }
        say(row("alerts in all", self.was.total(), self.would.total()));
        let roles: BTreeSet<&Role> = self.was.told.keys().chain(self.would.told.keys()).collect();
        for role in roles {
            let of = |side: &super::Side| side.told.get(role).copied().unwrap_or(0);
            say(row(&format!("first messages to {role}"), of(&self.was), of(&self.would)));
        }
        say(row("withdrawn", self.was.withdrawn, self.would.withdrawn));
        for (title, episodes) in
            [("would not have been", &self.gone), ("would have been besides", &self.new)]
        {
            say(String::new());
            say(format!("{title}: {}", episodes.len()));
            episodes.iter().for_each(|episode| say(format!("  {}", line(episode))));
        }
        say(String::new());
        say(format!("another tier: {}", self.other_tier.len()));
        for pair in &self.other_tier {
            say(format!("  {} -> {}: {}", pair.was.tier, pair.would.tier, line(&pair.would)));
        }
        say(format!(
            "told earlier: {}; told later, or nobody: {}",
            self.earlier.len(),
            self.later.len()
        ));
        say(String::new());
        say(format!("tracings that change side, to be looked at: {}", self.tracings.len()));
        for moved in &self.tracings {
            let word = |tier: &Option<TierName>| {
                tier.as_ref().map_or("nothing".to_owned(), ToString::to_string)
            };
            say(format!(
                "  {} of {}: {} -> {}",
                moved.tracing,
                moved.at.format("%Y-%m-%d %H:%M"),
                word(&moved.was),
                word(&moved.would)
            ));
        }
        text
    }
}

fn line(episode: &Episode) -> String {
    format!(
        "{} {}, {}: {} ({}, rule {})",
        episode.raised_at.format("%Y-%m-%d %H:%M"),
        episode.whom,
        episode.concern,
        episode.seen,
        episode.tier,
        episode.rule
    )
}
