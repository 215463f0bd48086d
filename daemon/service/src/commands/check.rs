//! `ebbmark check`: whether settings, protocol and medicine list are right, before they are put in force.

use super::settings::Where;
use super::{Ended, say};
use crate::rulebooks::Rulebooks;
use clap::Args;
use ebbmark_rules::protocol::explain;

/// Check settings, protocol and medicine list, and tell the protocol back in plain sentences
///
/// Runs every example in the protocol. Says of each mistake where it stands; exit code 2 says that there are some.
#[derive(Debug, Args)]
pub(super) struct Check {
    #[command(flatten)]
    place: Where,
}

impl Check {
    pub(super) fn run(&self) -> Ended {
        let settings = match self.place.read() {
            Ok(settings) => settings,
            Err(ended) => return ended,
        };
        match Rulebooks::read(&settings.folders) {
            Ok(books) => {
                say(&format!(
                    "{}\nSettings, protocol and medicine list are right; all {} examples hold.\n",
                    explain(&books.protocol).trim_end(),
                    books.examples
                ));
                Ended::Done
            }
            Err(problems) => {
                for problem in problems {
                    eprintln!("error: {problem}");
                }
                Ended::WrongUse
            }
        }
    }
}
