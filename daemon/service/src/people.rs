//! Accounts: who may sign in to the page, and what each role may do. An acknowledgement needs a name, so accounts are
//! personal. They live in a file of their own (`people.toml` in the state folder, readable by the service alone),
//! written only by `ebbmark people` and read anew at each sign-in.

use argon2::Argon2;
use argon2::password_hash::phc::PasswordHash;
use argon2::password_hash::{PasswordHasher, PasswordVerifier};
use ebbmark_rules::ids::Person;
use serde::{Deserialize, Serialize};
use std::collections::BTreeMap;
use std::io::Write;
use std::path::{Path, PathBuf};

/// What somebody is on this ward. The protocol's own roles say who is told; these say who may do what on the page.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize, clap::ValueEnum)]
#[serde(rename_all = "kebab-case")]
#[allow(missing_docs, reason = "the trade's own words")]
pub enum Post {
    Nurse,
    Pharmacist,
    Doctor,
    /// Reads the history; changes nothing.
    Committee,
    /// Looks after the program: sees the service, not the patients.
    Keeper,
}

/// Something that a post may or may not do.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum May {
    /// See patients, tracings and alerts.
    SeePatients,
    /// Acknowledge, put off, hand over and close an alert.
    Answer,
    /// Move the marks of a tracing.
    OverRead,
    /// Enter by hand what came on paper; choose a baseline.
    Enter,
    /// See held files and what the service itself is doing.
    SeeService,
    /// See the figures of the committee's report.
    SeeReport,
}

impl Post {
    /// Whether this post may do that.
    pub fn may(self, what: May) -> bool {
        match what {
            May::SeePatients => self != Post::Keeper,
            May::Answer => matches!(self, Post::Nurse | Post::Pharmacist | Post::Doctor),
            May::OverRead => matches!(self, Post::Pharmacist | Post::Doctor),
            May::Enter => matches!(self, Post::Nurse | Post::Pharmacist | Post::Doctor),
            May::SeeService => self != Post::Committee,
            May::SeeReport => matches!(self, Post::Pharmacist | Post::Doctor | Post::Committee),
        }
    }

    /// The word on the page.
    pub fn word(self) -> &'static str {
        match self {
            Post::Nurse => "nurse",
            Post::Pharmacist => "pharmacist",
            Post::Doctor => "doctor",
            Post::Committee => "committee",
            Post::Keeper => "keeper",
        }
    }
}

/// One account. The password is kept as an Argon2id hash.
#[derive(Clone, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Account {
    /// The name that stands beside what they do.
    pub shown_as: String,
    /// What they are.
    pub post: Post,
    password: String,
    /// May sign in.
    pub active: bool,
}

impl std::fmt::Debug for Account {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        f.debug_struct("Account")
            .field("post", &self.post)
            .field("active", &self.active)
            .finish_non_exhaustive()
    }
}

/// All accounts, by sign-in name.
#[derive(Debug)]
pub struct People {
    path: PathBuf,
    accounts: BTreeMap<String, Account>,
}

/// Why accounts could not be read or changed.
#[derive(Debug, thiserror::Error)]
pub enum PeopleError {
    /// The file can't be read or written.
    #[error("cannot {attempt} the accounts in `{}`", path.display())]
    File {
        /// `read` or `write`.
        attempt: &'static str,
        /// Which file.
        path: PathBuf,
        /// Why.
        source: std::io::Error,
    },
    /// The file is not what `ebbmark people` writes.
    #[error("cannot understand the accounts in `{}`: {message}", path.display())]
    Content {
        /// Which file.
        path: PathBuf,
        /// Where and what, without any account's content.
        message: String,
    },
    /// The name is taken.
    #[error(
        "there is an account `{0}` already; `ebbmark people password {0}` gives it a new password"
    )]
    Taken(String),
    /// No such account.
    #[error("there is no account `{0}`; `ebbmark people list` shows all")]
    Unknown(String),
    /// The name can't be used.
    #[error("`{0}` can't be a sign-in name: 2 to 40 of a-z, 0-9, `.` and `-`")]
    Name(String),
    /// The password is too short.
    #[error("the password is too short: at least {MIN_PASSWORD} characters")]
    Password,
    /// The hash could not be made.
    #[error("cannot protect the password: {0}")]
    Hash(String),
}

const MIN_PASSWORD: usize = 10;

/// What a password is checked against where there is no account: no password fits it.
const NOBODY: &str =
    "$argon2id$v=19$m=19456,t=2,p=1$c2FsdG1hcnNoc2FsdA$JYqVHvBkXjRvKfY1mE0c3kq5pYbK1m8oZ8rJm3m1xgk";

impl People {
    /// Reads the accounts; none where the file doesn't exist yet.
    pub fn load(state: &Path) -> Result<Self, PeopleError> {
        let path = state.join("people.toml");
        let accounts = match std::fs::read_to_string(&path) {
            Ok(text) => toml::from_str(&text).map_err(|error| PeopleError::Content {
                path: path.clone(),
                message: error.message().to_owned(),
            })?,
            Err(error) if error.kind() == std::io::ErrorKind::NotFound => BTreeMap::new(),
            Err(source) => return Err(PeopleError::File { attempt: "read", path, source }),
        };
        Ok(Self { path, accounts })
    }

    /// All accounts, by sign-in name.
    pub fn all(&self) -> impl Iterator<Item = (&str, &Account)> {
        self.accounts.iter().map(|(name, account)| (name.as_str(), account))
    }

    /// Adds an account.
    pub fn add(
        &mut self,
        name: &str,
        shown_as: &str,
        post: Post,
        password: &str,
    ) -> Result<(), PeopleError> {
        let allowed =
            |c: char| c.is_ascii_lowercase() || c.is_ascii_digit() || c == '.' || c == '-';
        if !(2..=40).contains(&name.len()) || !name.chars().all(allowed) {
            return Err(PeopleError::Name(name.to_owned()));
        }
        if self.accounts.contains_key(name) {
            return Err(PeopleError::Taken(name.to_owned()));
        }
        let account = Account {
            shown_as: shown_as.to_owned(),
            post,
            password: protected(password)?,
            active: true,
        };
        self.accounts.insert(name.to_owned(), account);
        self.save()
    }

    /// Gives an account a new password.
    pub fn set_password(&mut self, name: &str, password: &str) -> Result<(), PeopleError> {
        let hash = protected(password)?;
        self.account(name)?.password = hash;
        self.save()
    }

    /// Lets an account sign in, or no longer.
    pub fn set_active(&mut self, name: &str, active: bool) -> Result<(), PeopleError> {
        self.account(name)?.active = active;
        self.save()
    }

    fn account(&mut self, name: &str) -> Result<&mut Account, PeopleError> {
        self.accounts.get_mut(name).ok_or_else(|| PeopleError::Unknown(name.to_owned()))
    }

    /// Checks a password. The answer takes as long for a name that doesn't exist, so that names can't be guessed by time.
    pub fn verify(&self, name: &str, password: &str) -> Option<(Person, &Account)> {
        let account = self.accounts.get(name).filter(|account| account.active);
        let stored = account.map_or(NOBODY, |account| account.password.as_str());
        let right = PasswordHash::new(stored).is_ok_and(|hash| {
            Argon2::default().verify_password(password.as_bytes(), &hash).is_ok()
        });
        account.filter(|_| right).map(|account| (Person::new(name), account))
    }

    /// Replaces the file as a whole, so that a crash leaves the old one or the new one.
    fn save(&self) -> Result<(), PeopleError> {
        let failed =
            |source| PeopleError::File { attempt: "write", path: self.path.clone(), source };
        let text = toml::to_string(&self.accounts).map_err(|error| PeopleError::Content {
            path: self.path.clone(),
            message: error.to_string(),
        })?;
        let folder = self.path.parent().unwrap_or(Path::new("."));
        let mut file = tempfile::NamedTempFile::new_in(folder).map_err(failed)?;
        file.write_all(text.as_bytes()).map_err(failed)?;
        file.as_file().sync_all().map_err(failed)?;
        file.persist(&self.path).map_err(|error| failed(error.error))?;
        Ok(())
    }
}

fn protected(password: &str) -> Result<String, PeopleError> {
    if password.chars().count() < MIN_PASSWORD {
        return Err(PeopleError::Password);
    }
    let hash = Argon2::default()
        .hash_password(password.as_bytes())
        .map_err(|e| PeopleError::Hash(e.to_string()))?;
    Ok(hash.to_string())
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn an_account_survives_the_file_and_only_its_password_opens_it() {
        let state = tempfile::tempdir().unwrap();
        let mut people = People::load(state.path()).unwrap();
        people.add("m.okafor", "M. Okafor", Post::Nurse, "tide tables 7").unwrap();
        let again = People::load(state.path()).unwrap();
        assert_eq!(again.verify("m.okafor", "tide tables 7").unwrap().1.post, Post::Nurse);
        assert!(again.verify("m.okafor", "tide tables 8").is_none());
        assert!(again.verify("nobody", "tide tables 7").is_none());
        let text = std::fs::read_to_string(state.path().join("people.toml")).unwrap();
        assert!(text.contains("$argon2id$") && !text.contains("tide tables"));
    }

    #[test]
    fn the_file_is_for_the_service_alone() {
        use std::os::unix::fs::PermissionsExt;
        let state = tempfile::tempdir().unwrap();
        People::load(state.path()).unwrap().add("ab", "A", Post::Keeper, "long enough").unwrap();
        let mode =
            std::fs::metadata(state.path().join("people.toml")).unwrap().permissions().mode();
        assert_eq!(mode & 0o077, 0);
    }

    #[test]
    fn an_account_put_aside_can_not_sign_in() {
        let state = tempfile::tempdir().unwrap();
        let mut people = People::load(state.path()).unwrap();
        people.add("j.sato", "J. Sato", Post::Doctor, "tide tables 7").unwrap();
        people.set_active("j.sato", false).unwrap();
        assert!(people.verify("j.sato", "tide tables 7").is_none());
        assert!(matches!(
            people.add("j.sato", "", Post::Doctor, "tide tables 7"),
            Err(PeopleError::Taken(_))
        ));
        assert!(matches!(
            people.add("J", "", Post::Doctor, "tide tables 7"),
            Err(PeopleError::Name(_))
        ));
        assert!(matches!(people.set_password("j.sato", "short"), Err(PeopleError::Password)));
    }

    #[test]
    fn the_stand_in_for_nobody_is_a_real_hash_of_the_same_cost() {
        // Else the time of an answer would tell which names exist.
        let nobody = PasswordHash::new(NOBODY).unwrap();
        let ours = protected("tide tables 7").unwrap();
        let ours = PasswordHash::new(&ours).unwrap();
        assert_eq!((nobody.algorithm, nobody.params), (ours.algorithm, ours.params));
    }
}
