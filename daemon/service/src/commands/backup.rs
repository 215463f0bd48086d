//! `ebbmark backup`: a copy of the store, also while the service runs.

use super::settings::Where;
use super::{Ended, broken, say};
use crate::store::{StorePath, backup};
use clap::Args;
use std::path::PathBuf;

/// Copy the store into a folder, also while the service runs
///
/// Copying into the same folder again copies only what is new. To go back to a copy, stop the service and put the copy
/// in the store's place.
#[derive(Debug, Args)]
pub(super) struct Backup {
    #[command(flatten)]
    place: Where,
    /// Where the copy goes
    folder: PathBuf,
}

impl Backup {
    pub(super) fn run(&self) -> Ended {
        let settings = match self.place.read() {
            Ok(settings) => settings,
            Err(ended) => return ended,
        };
        let inside = |a: &PathBuf, b: &PathBuf| a.starts_with(b) || b.starts_with(a);
        if inside(&self.folder, &settings.folders.store)
            || inside(&self.folder, &settings.folders.export)
        {
            eprintln!(
                "error: the copy needs a folder of its own, outside the store and the export folder"
            );
            return Ended::WrongUse;
        }
        match backup(&StorePath::new(&settings.folders.store), &StorePath::new(&self.folder)) {
            Ok(copied) => {
                say(&format!(
                    "the database and {} contents were copied, {} were there already\n",
                    copied.contents, copied.there
                ));
                Ended::Done
            }
            Err(error) => broken(&error),
        }
    }
}
