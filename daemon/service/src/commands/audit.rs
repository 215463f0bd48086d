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
}

impl Audit {
    pub(super) fn run(&self) -> Ended {
        let settings = match self.place.read() {
            Ok(settings) => settings,
            Err(ended) => return ended,
        };
        match Reader::open(&StorePath::new(&settings.folders.store))
            .and_then(|reader| reader.audit())
        {
            Ok(found) => {
                let verdict = match &found.broken {
                    None => "the chain is whole".to_owned(),
                    Some(what) => format!("the chain is broken: {what}"),
                };
                say(&format!("{verdict}\nrows {}\nhead {}\n", found.rows, found.head));
                if found.broken.is_none() { Ended::Done } else { Ended::Findings }
            }
            Err(error) => broken(&error),
        }
    }
}
