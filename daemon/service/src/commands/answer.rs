//! `ebbmark answer`: somebody takes an alert on, passes it on or closes it.

use super::settings::Where;
use super::{Ended, broken, say};
use crate::answers::{Act, Answer, leave};
use crate::store::{Reader, StorePath};
use clap::Args;
use ebbmark_rules::alert::AlertState;

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
    /// Take it on, with what intent
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
        let rows = match Reader::open(&StorePath::new(&settings.folders.store))
            .and_then(|reader| reader.alerts(true))
        {
            Ok(rows) => rows,
            Err(error) => return broken(&error),
        };
        let open = |state| matches!(state, AlertState::Open | AlertState::Acknowledged);
        match rows.iter().find(|row| row.alert.id.as_str() == self.alert) {
            None => {
                eprintln!(
                    "error: there is no alert `{}`; `ebbmark alerts --all` lists them",
                    self.alert
                );
                return Ended::WrongUse;
            }
            Some(row) if !open(row.alert.state) => {
                say("this alert is over; nothing is to be answered\n");
                return Ended::Findings;
            }
            Some(_) => {}
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
