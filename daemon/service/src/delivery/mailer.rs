//! Where messages go: a mail server, a folder, or this process's memory.

use crate::mail::mailbox;
use crate::settings::{MailBy, Settings, Smtp, Tls};
use crate::store::outbox::Outgoing;
use lettre::address::Envelope;
use lettre::message::Mailbox;
use lettre::transport::smtp::authentication::Credentials;
use lettre::transport::smtp::client::{Certificate, Tls as Encryption, TlsParameters};
use lettre::{AsyncSmtpTransport, AsyncTransport, Tokio1Executor};
use std::io;
use std::path::{Path, PathBuf};
use std::sync::{Arc, Mutex, PoisonError};
use std::time::Duration;

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
    Sent(String),
    Refused(String),
    NotNow(String),
}

/// One command's answer; the whole attempt has its own deadline.
const COMMAND: Duration = Duration::from_secs(30);

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
            Mailer::Smtp(smtp, from) => send_by_smtp(smtp, from, message).await,
            Mailer::Folder(folder) => {
                let (folder, message) = (PathBuf::from(&**folder), message.clone());
                let written = tokio::task::spawn_blocking(move || write(&folder, &message)).await;
                match written {
                    Ok(Ok(())) => Answer::Sent("written".to_owned()),
                    Ok(Err(error)) => Answer::NotNow(error.to_string()),
                    Err(error) => Answer::NotNow(error.to_string()),
                }
            }
            Mailer::Memory(messages) => {
                messages
                    .lock()
                    .unwrap_or_else(PoisonError::into_inner)
                    .push(message.bytes.0.clone());
                Answer::Sent("kept".to_owned())
            }
        }
    }
}

async fn send_by_smtp(smtp: &Smtp, from: &str, message: &Outgoing) -> Answer {
    let (Ok(from), Some(to)) = (from.parse::<Mailbox>(), mailbox(&message.recipient)) else {
        return Answer::Refused("the recipient is no mail address".to_owned());
    };
    let envelope = match Envelope::new(Some(from.email), vec![to.email]) {
        Ok(envelope) => envelope,
        Err(error) => return Answer::Refused(error.to_string()),
    };
    let transport = match transport(smtp) {
        Ok(transport) => transport,
        Err(why) => return Answer::NotNow(why),
    };
    match transport.send_raw(&envelope, &message.bytes.0).await {
        Ok(response) if response.has_code(250) => {
            Answer::Sent(response.first_line().unwrap_or_default().to_owned())
        }
        Ok(response) => {
            Answer::NotNow(format!("the server answered {} in the end", response.code()))
        }
        Err(error) if error.is_permanent() && !is_about_us(&error) => {
            Answer::Refused(error.to_string())
        }
        Err(error) => Answer::NotNow(error.to_string()),
    }
}

/// Signing in and encryption (530 to 538, RFC 4954) are between the server and us, and say nothing of the recipient.
fn is_about_us(error: &lettre::transport::smtp::Error) -> bool {
    error.status().is_some_and(|code| (530..=538).contains(&u16::from(code)))
}

/// A transport for one message: a connection that served another may still hold that one's answer.
fn transport(smtp: &Smtp) -> Result<AsyncSmtpTransport<Tokio1Executor>, String> {
    let mut builder = AsyncSmtpTransport::<Tokio1Executor>::builder_dangerous(&smtp.host)
        .port(smtp.port)
        .timeout(Some(COMMAND))
        .tls(match smtp.tls {
            Tls::StartTls => Encryption::Required(parameters(smtp)?),
            Tls::Wrapped => Encryption::Wrapper(parameters(smtp)?),
            Tls::Plain => Encryption::None,
        });
    if let Some(sign_in) = &smtp.sign_in {
        builder = builder.credentials(Credentials::new(
            sign_in.user.clone(),
            sign_in.password.expose().to_owned(),
        ));
    }
    Ok(builder.build())
}

fn parameters(smtp: &Smtp) -> Result<TlsParameters, String> {
    let mut builder = TlsParameters::builder(smtp.host.clone());
    if let Some(file) = &smtp.ca_file {
        let pem = std::fs::read(file)
            .map_err(|error| format!("the certificates in `ca_file` can't be read: {error}"))?;
        let certificate = Certificate::from_pem(&pem).map_err(|error| error.to_string())?;
        builder = builder.add_root_certificate(certificate);
    }
    builder.build().map_err(|error| error.to_string())
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
