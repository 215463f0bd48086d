//! Where messages go: a mail server, a folder, or this process's memory.

use super::smtp;
use crate::settings::{MailBy, Settings, Smtp};
use crate::store::outbox::Outgoing;
use std::io;
use std::path::{Path, PathBuf};
use std::sync::{Arc, Mutex, PoisonError};

/// A way for messages to go.
#[derive(Debug, Clone)]
pub enum Mailer {
    /// To a mail server: its settings, and the sender's address.
    Smtp(Arc<Smtp>, Arc<str>),
    /// Into a folder.
    Folder(Arc<Path>),
    /// Into memory, in the order in which they went.
    Memory(Arc<Mutex<Vec<Vec<u8>>>>),
}

/// What became of one attempt.
#[derive(Debug, Clone, PartialEq, Eq)]
pub(super) enum Answer {
    /// Taken: the server's words.
    Sent { reply: String },
    /// This recipient will never get it.
    Refused { verb: &'static str, reply: String },
    /// Nothing is known, or later may go better.
    NotNow { verb: &'static str, why: String },
}

impl Mailer {
    /// By these settings.
    pub fn new(settings: &Settings) -> Self {
        match &settings.mail.by {
            MailBy::Smtp(smtp) => {
                Mailer::Smtp(Arc::new(smtp.clone()), settings.mail.from.as_str().into())
            }
            MailBy::Folder(folder) => Mailer::Folder(folder.as_path().into()),
            MailBy::Memory => Mailer::Memory(Arc::default()),
        }
    }

    pub(super) async fn send(&self, message: &Outgoing) -> Answer {
        match self {
            Mailer::Smtp(smtp, from) => smtp::send(smtp, from, message).await,
            Mailer::Folder(folder) => {
                let (folder, message) = (PathBuf::from(&**folder), message.clone());
                let written = tokio::task::spawn_blocking(move || write(&folder, &message)).await;
                match written {
                    Ok(Ok(())) => Answer::Sent { reply: "written".to_owned() },
                    Ok(Err(error)) => Answer::NotNow { verb: "write", why: error.to_string() },
                    Err(error) => Answer::NotNow { verb: "write", why: error.to_string() },
                }
            }
            Mailer::Memory(messages) => {
                messages
                    .lock()
                    .unwrap_or_else(PoisonError::into_inner)
                    .push(message.bytes.0.clone());
                Answer::Sent { reply: "kept".to_owned() }
            }
        }
    }
}

/// Writes a message under a name made of its time and id: written twice, it is still one file.
fn write(folder: &Path, message: &Outgoing) -> io::Result<()> {
    std::fs::create_dir_all(folder)?;
    let time = message.created_at.format("%Y%m%dT%H%M%S%.3fZ");
    let id = message.message_id.get(..12).unwrap_or(&message.message_id);
    let path = folder.join(format!("{time}-{id}.eml"));
    let draft = folder.join(format!(".{time}-{id}"));
    std::fs::write(&draft, &message.bytes.0)?;
    std::fs::File::open(&draft)?.sync_all()?;
    std::fs::rename(draft, path)
}
