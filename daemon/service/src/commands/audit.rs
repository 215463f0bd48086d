//! `ebbmark audit`: whether the store still says what was written.

use super::settings::Where;
use super::{Ended, broken, say};
use crate::store::{Reader, StorePath};
use clap::Args;

/// Check the audit chain, and every fact, decision and file outcome against it
///
/// Prints the chain's head, which the daily mail carries: a tail that was cut off shows when the two are compared.
#[derive(Debug, Args)]
pub(super) struct Audit {
    #[command(flatten)]
    place: Where,
    /// A head that an earlier daily message carried: is that row still in the chain?
    #[arg(long, value_name = "HASH")]
    head: Option<String>,
}

impl Audit {
    pub(super) fn run(&self) -> Ended {
        let settings = match self.place.read() {
            Ok(settings) => settings,
            Err(ended) => return ended,
        };
        let reader = Reader::open(&StorePath::new(&settings.folders.store));
        let looked = reader.and_then(|reader| {
            let known = self.head.as_ref().map(|head| reader.audit_row(head)).transpose()?;
            Ok((reader.audit()?, known))
        });
        match looked {
            Ok((found, known)) => {
                let verdict = match &found.broken {
                    None => "the chain is whole".to_owned(),
                    Some(what) => format!("the chain is broken: {what}"),
                };
                say(&format!("{verdict}\nrows {}\nhead {}\n", found.rows, found.head));
                match known {
                    Some(Some(row)) => {
                        say(&format!("the head that you gave stands at row {row}\n"));
                    }
                    Some(None) => {
                        say(
                            "the head that you gave is not in the chain: rows were cut off or changed\n",
                        );
                    }
                    None => {}
                }
                let is_whole = found.broken.is_none() && known != Some(None);
                if is_whole { Ended::Done } else { Ended::Findings }
            }
            Err(error) => broken(&error),
        }
    }
}
