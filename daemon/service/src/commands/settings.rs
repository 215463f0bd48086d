//! The settings of a command.

use super::Ended;
use crate::settings::Settings;
use clap::Args;
use std::path::PathBuf;

/// Which settings hold.
#[derive(Debug, Args)]
pub(super) struct Where {
    /// The settings file
    #[arg(long, value_name = "FILE", default_value = "ebbmark.toml")]
    pub(super) settings: PathBuf,
}

impl Where {
    /// Reads and checks them; says what is wrong.
    pub(super) fn read(&self) -> Result<Settings, Ended> {
        Settings::read(&self.settings).map_err(|problems| {
            eprintln!("error: {problems}");
            Ended::WrongUse
        })
    }
}
