//! `ebbmark check`: whether settings, protocol and medicine list are right, before they are put in force.

use super::settings::Where;
use super::{Ended, say};
use crate::rulebooks::Rulebooks;
use clap::Args;

/// Check settings, protocol and medicine list, with the examples that they carry
///
/// Says of each mistake where it stands. Exit code 2 says that there are some.
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
            Ok(_) => {
                say("settings, protocol and medicine list are right\n");
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
