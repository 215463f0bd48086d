//! Settings: `ebbmark.toml` as written, then checked once. Past that point nothing checks them again.

mod check;
mod problems;
mod raw;

pub use problems::Problems;

use chrono::NaiveTime;
use chrono_tz::Tz;
use ebbmark_rules::codes::LocalCodes;
use ebbmark_rules::ids::Private;
use std::fmt;
use std::path::{Path, PathBuf};
use std::sync::Arc;
use std::time::Duration;

/// Checked settings.
#[derive(Debug, Clone, PartialEq)]
pub struct Settings {
    /// Who and where this is.
    pub site: Site,
    /// Where things are; absolute, or relative to the working folder as given on the command line.
    pub folders: Folders,
    /// How files are taken in.
    pub intake: Intake,
    /// How people are told.
    pub mail: Mail,
    /// The site's own codes.
    pub codes: Codes,
}

/// The site's own codes, units and words: a file of their own, read with the settings.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct Codes {
    /// The file's text, to be kept beside what was read by it; `None` where the settings name no file.
    pub text: Option<String>,
    /// What it says.
    pub codes: Arc<LocalCodes>,
}

impl Codes {
    fn read(file: &Path) -> Result<Self, Problems> {
        let text = std::fs::read_to_string(file)
            .map_err(|error| Problems::whole(file, format!("can't be read: {error}")))?;
        let codes = LocalCodes::parse(&text).map_err(|found| Problems::of(file, &found))?;
        Ok(Self { text: Some(text), codes: Arc::new(codes) })
    }
}

/// Who and where this is.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Site {
    /// The hospital's name, as it stands on messages.
    pub name: String,
    /// The zone of times that come without one, and of times that people read.
    pub zone: Tz,
    /// Who gives the patient numbers that come without an issuer.
    pub issuer: String,
}

/// Where things are.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Folders {
    /// Where exports arrive. Never written to.
    pub export: PathBuf,
    /// The database and the kept contents.
    pub store: PathBuf,
    /// The protocol.
    pub protocol: PathBuf,
    /// The medicine list.
    pub medicines: PathBuf,
    /// The site's own codes; only what is built in holds where there is none.
    pub codes: Option<PathBuf>,
    /// A file that has to be in the export folder: without it the folder is taken for an unmounted one.
    pub marker: Option<PathBuf>,
    /// Below this much free space the disk is in trouble, bytes.
    pub least_free: u64,
}

/// How files are taken in.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Intake {
    /// For how long a file has to stay the same before it is opened.
    pub settle: Duration,
    /// How often the folder is looked at when nothing seems to happen.
    pub scan_every: Duration,
    /// How long a header waits for the file that it names, and the other way round.
    pub pair_wait: Duration,
    /// Larger files are held unread, bytes.
    pub largest_file: u64,
    /// Threads that read and measure; `None` for one per core.
    pub workers: Option<usize>,
}

/// How people are told.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Mail {
    /// The sender's address.
    pub from: String,
    /// Whether mail bodies may carry patients' names.
    pub names: bool,
    /// Where messages go.
    pub by: MailBy,
    /// The hospital's own words.
    pub words: Words,
    /// Who is told each day that the service is alive, and when.
    pub daily: Option<Daily>,
}

/// The daily message.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Daily {
    /// At what time of the site's clock.
    pub at: NaiveTime,
    /// To whom: addresses.
    pub to: Vec<Private>,
}

/// What a hospital says in its own words.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Words {
    /// How to answer a message, and whom to ring.
    pub answer: String,
    /// What stands at the end of each message; may be empty.
    pub sign_off: String,
}

impl Default for Words {
    fn default() -> Self {
        Words {
            answer: "With `ebbmark answer`, the alert's number and your own name: take it on, hand it over, or close it. \
                     Opening this mail or replying to it is no answer."
                .to_owned(),
            sign_off: String::new(),
        }
    }
}

/// Where messages go.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum MailBy {
    /// To a mail server.
    Smtp(Smtp),
    /// Into a folder, one `.eml` file each.
    Folder(PathBuf),
    /// Nowhere but this process's memory: for trying things out.
    Memory,
}

/// A mail server.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Smtp {
    /// Its name, which its certificate has to carry.
    pub host: String,
    /// Its port.
    pub port: u16,
    /// How the connection is protected.
    pub tls: Tls,
    /// Certificates to trust besides the system's, PEM.
    pub ca_file: Option<PathBuf>,
    /// How we sign in.
    pub sign_in: Option<SignIn>,
    /// How long one sending may take, from connecting to the server's last word.
    pub attempt: Duration,
}

/// How a connection to a mail server is protected.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Tls {
    /// STARTTLS, and nothing is sent without it.
    StartTls,
    /// TLS from the first byte.
    Wrapped,
    /// None: only for a server on this machine.
    Plain,
}

/// How we sign in to a mail server.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct SignIn {
    /// The account.
    pub user: String,
    /// Its password.
    pub password: Secret,
}

/// A text that is never shown.
#[derive(Clone, PartialEq, Eq)]
pub struct Secret(String);

impl Secret {
    /// Hides a text.
    pub fn new(text: impl Into<String>) -> Self {
        Self(text.into())
    }

    /// The text itself, for the one who has to say it.
    pub fn expose(&self) -> &str {
        &self.0
    }
}

impl fmt::Debug for Secret {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str("(hidden)")
    }
}

impl Settings {
    /// Reads and checks a settings file and the codes that it names. Relative paths count from the file's own folder.
    ///
    /// # Errors
    /// Everything that is wrong, each with line and column.
    pub fn read(file: &Path) -> Result<Self, Problems> {
        let text = std::fs::read_to_string(file).map_err(|error| {
            Problems::whole(
                file,
                format!(
                    "can't be read: {error}\n  hint: name another settings file with `--settings`"
                ),
            )
        })?;
        let mut settings = check::check(file, &text)?;
        if let Some(file) = &settings.folders.codes {
            settings.codes = Codes::read(file)?;
        }
        Ok(settings)
    }

    /// What reading files depends on.
    pub fn reading_site(&self) -> ebbmark_formats::Site {
        ebbmark_formats::Site {
            zone: self.site.zone,
            issuer: self.site.issuer.as_str().into(),
            codes: Arc::clone(&self.codes.codes),
        }
    }

    /// The part of the sender's address after the `@`: the domain of message ids.
    pub fn mail_domain(&self) -> &str {
        self.mail.from.rsplit('@').next().unwrap_or("localhost")
    }
}
