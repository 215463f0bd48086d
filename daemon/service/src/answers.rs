//! Answers to alerts, left by `ebbmark answer` in a folder of the store and taken up by the running service: the store
//! has one writer, and a command beside it may not be a second.

use crate::ledger::{Draft, Ledger};
use ebbmark_rules::fact::{Body, Source};
use ebbmark_rules::ids::{AlertId, Person, Role};
use serde::{Deserialize, Serialize};
use std::io::Write;
use std::path::{Path, PathBuf};
use std::time::Duration;
use tokio_util::sync::CancellationToken;

/// How often the folder is looked at.
const EVERY: Duration = Duration::from_secs(1);

/// One answer.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Answer {
    /// Which alert.
    pub alert: String,
    /// By whom.
    pub by: String,
    /// What is done with it.
    pub act: Act,
}

/// What is done with an alert.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Act {
    /// Taken on, with what intent.
    Acknowledge(String),
    /// Passed to a role.
    HandOver(String),
    /// Closed, and why.
    Close(String),
}

fn folder(store: &Path) -> PathBuf {
    store.join("answers")
}

/// Leaves an answer for the service: the whole file or none.
///
/// # Errors
/// The folder can't be written.
pub fn leave(store: &Path, answer: &Answer) -> std::io::Result<()> {
    let folder = folder(store);
    std::fs::create_dir_all(&folder)?;
    let mut file = tempfile::Builder::new().prefix(".").suffix(".json").tempfile_in(&folder)?;
    file.write_all(serde_json::to_string(answer)?.as_bytes())?;
    file.as_file().sync_all()?;
    let name =
        file.path().file_name().map(|name| name.to_string_lossy().replacen('.', "answer-", 1));
    file.persist(folder.join(name.unwrap_or_default())).map_err(|error| error.error)?;
    Ok(())
}

/// Takes up answers until told to stop. An answer is removed once it is stored; a crash between stores it a second time,
/// which changes nothing.
pub(crate) async fn take_up(ledger: Ledger, store: PathBuf, stop: CancellationToken) {
    while !stop.is_cancelled() {
        for path in waiting(&store) {
            match read(&path) {
                Ok(answer) => match ledger.learn(vec![draft(answer)]).await {
                    Ok(_) => remove(&path),
                    Err(error) => {
                        tracing::error!(%error, "an answer could not be stored");
                        return; // the ledger has stopped; the answer stays for the next start
                    }
                },
                Err(error) => {
                    tracing::error!(%error, "an answer can't be understood and is set aside");
                    // Else it is met again, and said again.
                    if let Err(error) = std::fs::rename(&path, path.with_extension("wrong")) {
                        tracing::error!(%error, "an answer can't be set aside");
                    }
                }
            }
        }
        tokio::select! {
            () = tokio::time::sleep(EVERY) => {}
            () = stop.cancelled() => {}
        }
    }
}

fn waiting(store: &Path) -> Vec<PathBuf> {
    let Ok(entries) = std::fs::read_dir(folder(store)) else { return Vec::new() };
    let mut found: Vec<PathBuf> = entries
        .flatten()
        .map(|entry| entry.path())
        .filter(|path| path.extension().is_some_and(|end| end == "json"))
        .filter(|path| {
            path.file_name().is_some_and(|name| name.to_string_lossy().starts_with("answer-"))
        })
        .collect();
    found.sort();
    found
}

fn read(path: &Path) -> std::io::Result<Answer> {
    Ok(serde_json::from_slice(&std::fs::read(path)?)?)
}

fn remove(path: &Path) {
    if let Err(error) = std::fs::remove_file(path) {
        tracing::error!(%error, "an answer was stored and can't be removed");
    }
}

fn draft(answer: Answer) -> Draft {
    let (alert, by) = (AlertId::new(answer.alert), Person::new(answer.by));
    let body = match answer.act {
        Act::Acknowledge(intent) => {
            Body::Acknowledged { alert, by: by.clone(), intent: intent.into() }
        }
        Act::HandOver(role) => Body::HandedOver { alert, by: by.clone(), to: Role::new(role) },
        Act::Close(why) => Body::ClosedByPerson { alert, by: by.clone(), why: why.into() },
    };
    Draft { occurred_at: None, source: Source::Person(by), patient: None, body }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn what_is_left_is_what_is_taken_up() {
        let store = tempfile::tempdir().unwrap();
        let act = Act::Acknowledge("prescriber informed".into());
        let answer = Answer { alert: "64611870e9c5".into(), by: "ines.quill".into(), act };
        leave(store.path(), &answer).unwrap();
        let [path] = &waiting(store.path())[..] else { panic!("one answer") };
        assert_eq!(read(path).unwrap(), answer);
        assert!(matches!(draft(answer).body, Body::Acknowledged { .. }));
    }
}
