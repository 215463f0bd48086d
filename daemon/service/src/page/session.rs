//! Who is signed in. Sessions live in memory: a restart asks everyone to sign in again, and nothing that opens a
//! door lies on the disk.

use crate::people::Post;
use chrono::{DateTime, TimeDelta, Utc};
use ebbmark_rules::ids::Person;
use std::collections::BTreeMap;
use std::sync::{Mutex, MutexGuard};

/// A session ends this long after its last use: a shift's coffee, not a shift.
pub const IDLE: TimeDelta = TimeDelta::minutes(30);
/// A session ends this long after sign-in, used or not.
pub const LONGEST: TimeDelta = TimeDelta::hours(12);
/// So many wrong passwords for one name …
const WRONG: u32 = 5;
/// … shut it for this long.
const SHUT: TimeDelta = TimeDelta::minutes(5);

/// One signed-in person.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Session {
    /// Sign-in name.
    pub person: Person,
    /// The name that stands beside what they do.
    pub shown_as: String,
    /// What they are.
    pub post: Post,
    /// The token that every form of this session carries.
    pub form_token: String,
    since: DateTime<Utc>,
    used: DateTime<Utc>,
}

/// All sessions, and the names that are shut for a while.
#[derive(Debug, Default)]
pub struct Sessions {
    inner: Mutex<Inner>,
}

#[derive(Debug, Default)]
struct Inner {
    by_token: BTreeMap<String, Session>,
    wrong: BTreeMap<String, (u32, DateTime<Utc>)>,
}

impl Sessions {
    fn lock(&self) -> MutexGuard<'_, Inner> {
        // A panic elsewhere can't leave these maps half changed, so a poisoned lock is still good.
        self.inner.lock().unwrap_or_else(std::sync::PoisonError::into_inner)
    }

    /// Opens a session and returns its cookie token.
    pub fn open(
        &self,
        person: Person,
        shown_as: &str,
        post: Post,
        now: DateTime<Utc>,
    ) -> Result<String, getrandom::Error> {
        let (token, form_token) = (token()?, token()?);
        let mut inner = self.lock();
        inner.wrong.remove(person.as_str());
        inner.by_token.retain(|_, session| session.lives(now));
        let session = Session {
            person,
            shown_as: shown_as.to_owned(),
            post,
            form_token,
            since: now,
            used: now,
        };
        inner.by_token.insert(token.clone(), session);
        Ok(token)
    }

    /// The session of a cookie token, if it still lives; using it keeps it alive.
    pub fn of(&self, token: &str, now: DateTime<Utc>) -> Option<Session> {
        let mut inner = self.lock();
        let session = inner.by_token.get_mut(token)?;
        if !session.lives(now) {
            inner.by_token.remove(token);
            return None;
        }
        session.used = now;
        Some(session.clone())
    }

    /// Ends a session.
    pub fn close(&self, token: &str) {
        self.lock().by_token.remove(token);
    }

    /// Whether a name is shut because of wrong passwords.
    pub fn shut(&self, name: &str, now: DateTime<Utc>) -> bool {
        self.lock()
            .wrong
            .get(name)
            .is_some_and(|(count, last)| *count >= WRONG && now - *last < SHUT)
    }

    /// Notes a wrong password.
    pub fn note_wrong(&self, name: &str, now: DateTime<Utc>) {
        let mut inner = self.lock();
        inner.wrong.retain(|_, (_, last)| now - *last < SHUT);
        // A flood of invented names must not fill the memory.
        if inner.wrong.len() < 10_000 || inner.wrong.contains_key(name) {
            let entry = inner.wrong.entry(name.to_owned()).or_insert((0, now));
            *entry = (entry.0 + 1, now);
        }
    }
}

impl Session {
    fn lives(&self, now: DateTime<Utc>) -> bool {
        now - self.used < IDLE && now - self.since < LONGEST
    }
}

/// 256 bits from the system, in hex.
fn token() -> Result<String, getrandom::Error> {
    use std::fmt::Write;
    let mut bytes = [0u8; 32];
    getrandom::fill(&mut bytes)?;
    let mut text = String::with_capacity(64);
    for byte in bytes {
        let _ = write!(text, "{byte:02x}"); // a String can't fail
    }
    Ok(text)
}

#[cfg(test)]
mod tests {
    use super::*;

    fn at(minute: i64) -> DateTime<Utc> {
        DateTime::UNIX_EPOCH + TimeDelta::minutes(minute)
    }

    fn open(sessions: &Sessions) -> String {
        sessions.open(Person::new("m.okafor"), "M. Okafor", Post::Nurse, at(0)).unwrap()
    }

    #[test]
    fn a_session_ends_when_idle_and_after_the_longest_shift() {
        let sessions = Sessions::default();
        let token = open(&sessions);
        assert!(sessions.of(&token, at(29)).is_some());
        assert!(sessions.of(&token, at(58)).is_some(), "use keeps it alive");
        assert!(sessions.of(&token, at(88)).is_none(), "idle for half an hour");
        let token = open(&sessions);
        for minute in (0..720).step_by(20) {
            assert!(sessions.of(&token, at(minute)).is_some());
        }
        assert!(sessions.of(&token, at(721)).is_none());
    }

    #[test]
    fn five_wrong_passwords_shut_a_name_for_a_while() {
        let sessions = Sessions::default();
        for _ in 0..4 {
            sessions.note_wrong("m.okafor", at(0));
        }
        assert!(!sessions.shut("m.okafor", at(0)));
        sessions.note_wrong("m.okafor", at(1));
        assert!(sessions.shut("m.okafor", at(5)) && !sessions.shut("j.sato", at(5)));
        assert!(!sessions.shut("m.okafor", at(6)));
    }

    #[test]
    fn closing_ends_it_and_tokens_differ() {
        let sessions = Sessions::default();
        let (first, second) = (open(&sessions), open(&sessions));
        assert_ne!(first, second);
        sessions.close(&first);
        assert!(sessions.of(&first, at(1)).is_none() && sessions.of(&second, at(1)).is_some());
    }
}
