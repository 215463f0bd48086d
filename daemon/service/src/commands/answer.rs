//! `ebbmark answer`: somebody takes an alert on, passes it on or closes it.

use super::settings::Where;
use super::{Ended, broken, say};
use crate::answers::{Act, Answer, leave};
use crate::store::{AlertRow, Reader, StorePath};
use clap::Args;
use ebbmark_rules::alert::AlertState;
use ebbmark_rules::protocol::Protocol;
use ebbmark_rules::words;
use std::collections::BTreeSet;

/// Answer an alert: take it on, hand it over, or close it
///
/// The running service stores the answer within a second or two; until then the alert stands as it was. `ebbmark alerts`
/// shows the alerts with their numbers.
#[derive(Debug, Args)]
#[command(group = clap::ArgGroup::new("act").required(true))]
pub(super) struct AnswerTo {
    /// The alert's number, as it stands in the message
    alert: String,
    /// Whose answer it is: the name stands beside it for good
    #[arg(long, value_name = "NAME")]
    by: String,
    /// Take it on, with what intent: one of the protocol's own
    #[arg(long, value_name = "INTENT", group = "act")]
    acknowledge: Option<String>,
    /// Pass it to another role of the protocol
    #[arg(long, value_name = "ROLE", group = "act")]
    hand_over: Option<String>,
    /// Close it, and why
    #[arg(long, value_name = "WHY", group = "act")]
    close: Option<String>,
    #[command(flatten)]
    place: Where,
}

impl AnswerTo {
    pub(super) fn run(&self) -> Ended {
        let settings = match self.place.read() {
            Ok(settings) => settings,
            Err(ended) => return ended,
        };
        let act = match (&self.acknowledge, &self.hand_over, &self.close) {
            (Some(intent), _, _) => Act::Acknowledge(intent.clone()),
            (_, Some(role), _) => Act::HandOver(role.clone()),
            (_, _, Some(why)) => Act::Close(why.clone()),
            (None, None, None) => return Ended::WrongUse, // the command line asks for one of them
        };
        if self.by.trim().is_empty() {
            eprintln!("error: an answer needs a name; `--by` is empty");
            return Ended::WrongUse;
        }
        let asked = Reader::open(&StorePath::new(&settings.folders.store))
            .and_then(|reader| Ok((reader.alerts(true)?, reader.texts()?)));
        let (rows, texts) = match asked {
            Ok(asked) => asked,
            Err(error) => return broken(&error),
        };
        let Some(AlertRow { alert, .. }) =
            rows.iter().find(|row| row.alert.id.as_str() == self.alert)
        else {
            eprintln!(
                "error: there is no alert `{}`; `ebbmark alerts --all` lists them",
                self.alert
            );
            return Ended::WrongUse;
        };
        if !matches!(alert.state, AlertState::Open | AlertState::Acknowledged) {
            say("this alert is over; nothing is to be answered\n");
            return Ended::Findings;
        }
        // The protocol that decided on it; its text was checked before it came into force.
        let protocol =
            texts.get(&alert.evidence.protocol_hash).and_then(|text| Protocol::parse(text).ok());
        if let Some(why) = protocol.and_then(|protocol| unknown(&act, &protocol)) {
            eprintln!("error: {why}");
            return Ended::WrongUse;
        }
        let answer = Answer { alert: self.alert.clone(), by: self.by.clone(), act };
        if let Err(error) = leave(&settings.folders.store, &answer) {
            return broken(&error);
        }
        say(
            "left for the service, which stores it within a second or two; `ebbmark alerts` shows when it has\n",
        );
        Ended::Done
    }
}

/// An alert passed to a role that reaches nobody would wait in silence, and an intent of one's own can't be counted.
fn unknown(act: &Act, protocol: &Protocol) -> Option<String> {
    match act {
        Act::HandOver(role) => {
            let roles: BTreeSet<&str> =
                protocol.roster.iter().map(|entry| entry.role.as_str()).collect();
            let known = roles.contains(role.as_str());
            (!known).then(|| {
                format!("the protocol reaches no role `{role}`; it reaches {}", words::list(roles))
            })
        }
        Act::Acknowledge(intent) => {
            let known = protocol.intents.is_empty() || protocol.intents.contains(intent);
            (!known).then(|| {
                format!(
                    "`{intent}` is no intent of the protocol; its own are: {}",
                    protocol.intents.join("; ")
                )
            })
        }
        Act::Close(why) => {
            why.trim().is_empty().then(|| "closing an alert needs a reason".to_owned())
        }
    }
}
