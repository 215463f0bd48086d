//! What happened to the alerts, in the words in which the story expects it.

use crate::store::{AlertRow, Reader, StoreError};
use ebbmark_demo_ward::story::{Expected, Story};
use ebbmark_rules::alert::{Decision, LifeStep, NoticeReason};
use std::collections::BTreeSet;
use std::fmt::Write;

/// Every alert that was raised, with its life, sorted as the story's expectations are.
///
/// # Errors
/// The store can't be read.
pub fn record(story: &Story, reader: &Reader) -> Result<Vec<Expected>, StoreError> {
    let mut found: Vec<Expected> = reader.alerts(true)?.iter().map(|row| one(story, row)).collect();
    found.sort();
    Ok(found)
}

fn one(story: &Story, row: &AlertRow) -> Expected {
    let told = |at| story.days.told(at);
    let alert = &row.alert;
    let bed = alert.patient.as_ref().and_then(|patient| story.bed(patient)).unwrap_or_default();
    let mut found = Expected {
        bed: bed.to_owned(),
        raised: told(alert.raised_at),
        concern: alert.concern.to_string(),
        rule: alert.rule.to_string(),
        tier: alert.tier.to_string(),
        told: Vec::new(),
        tiers: Vec::new(),
        answered: Vec::new(),
        ended: None,
    };
    let mut tier = alert.tier.clone();
    for decision in &row.life {
        match decision {
            Decision::Raised(raised) => {
                found.rule = raised.rule.to_string();
                found.tier = raised.tier.to_string();
                tier = raised.tier.clone();
            }
            Decision::Changed(changed) => {
                if changed.tier != tier {
                    tier = changed.tier.clone();
                    found.tiers.push(format!("{} {tier}", told(changed.as_of)));
                }
            }
            Decision::Tell(notice) => found.told.push(format!(
                "{} {} {}",
                told(notice.at),
                notice.role,
                reason(&notice.reason)
            )),
            Decision::Life { at, step, .. } => match step {
                LifeStep::Acknowledged { by, .. } => {
                    found.answered.push(format!("{} {by}", told(*at)));
                }
                LifeStep::ClosedByFacts { .. } | LifeStep::ClosedByPerson { .. } => {
                    found.ended = Some(format!("{} closed", told(*at)));
                }
                LifeStep::Withdrawn { .. } => {
                    found.ended = Some(format!("{} withdrawn", told(*at)));
                }
                LifeStep::Told { .. }
                | LifeStep::Refused { .. }
                | LifeStep::Snoozed { .. }
                | LifeStep::SnoozeEnded
                | LifeStep::HandedOver { .. }
                | LifeStep::Escalated { .. } => {}
            },
        }
    }
    found
}

fn reason(reason: &NoticeReason) -> &'static str {
    match reason {
        NoticeReason::Raised => "raised",
        NoticeReason::TierRaised => "tier-raised",
        NoticeReason::Escalated => "escalated",
        NoticeReason::SnoozeEnded => "snooze-ended",
        NoticeReason::HandedOver => "handed-over",
        NoticeReason::Withdrawn => "withdrawn",
        NoticeReason::Closed => "closed",
    }
}

/// Who was told what, and when, in short.
///
/// # Errors
/// The store can't be read.
pub fn summary(story: &Story, reader: &Reader) -> Result<String, StoreError> {
    let alerts = record(story, reader)?;
    let mut text = format!(
        "\nIn short: ward {} (invented), {} patients, {} alerts. Times are day and hour.\n\n",
        story.ward,
        story.people.len(),
        alerts.len()
    );
    let mut beds: BTreeSet<&str> = BTreeSet::new();
    for alert in &alerts {
        beds.insert(&alert.bed);
        let whom = if alert.bed.is_empty() { "the service" } else { &alert.bed };
        // Writing to a String can't fail, here and below.
        let _ = writeln!(
            text,
            "{whom}: {}, {} {} by rule {}{}{}",
            alert.concern,
            alert.tier,
            alert.raised,
            alert.rule,
            alert.tiers.iter().map(|tier| format!(", {tier}")).collect::<String>(),
            match &alert.ended {
                Some(ended) => format!(", {ended}"),
                None => ", still open".to_owned(),
            }
        );
        if alert.told.is_empty() {
            text.push_str("      told: nobody; `ebbmark alerts` showed it\n");
        } else {
            let _ = writeln!(text, "      told: {}", alert.told.join("; "));
        }
        if !alert.answered.is_empty() {
            let _ = writeln!(text, "      answered: {}", alert.answered.join("; "));
        }
    }
    for held in reader.held()? {
        let _ = writeln!(text, "held for a person: a file that {}", held.reason);
    }
    let quiet: Vec<String> = story
        .people
        .iter()
        .filter(|person| !beds.contains(&*person.bed))
        .map(|person| format!("{} ({})", person.name, person.bed))
        .collect();
    let _ = writeln!(text, "nothing was said about {}", quiet.join(", "));
    let messages: u64 = reader.message_counts()?.get("sent").copied().unwrap_or(0);
    let _ = writeln!(text, "{messages} messages went out");
    Ok(text)
}
