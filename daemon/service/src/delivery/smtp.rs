//! One message over one connection of its own, verb by verb.
//!
//! Only the verb tells whom a refusal is about. A 5xx to RCPT, or to the message itself, is about this recipient, who
//! will not get it however long we wait. A 5xx to the greeting, EHLO, STARTTLS, AUTH or MAIL is between the server and
//! us: everybody's message would be refused, so nobody's is given up, and the mail itself is in trouble.

use super::mailer::Answer;
use crate::mail::mailbox;
use crate::settings::{SignIn, Smtp, Tls};
use crate::store::outbox::Outgoing;
use lettre::Address;
use lettre::message::Mailbox;
use lettre::transport::smtp::authentication::{Credentials, Mechanism};
use lettre::transport::smtp::client::{AsyncSmtpConnection, Certificate, TlsParameters};
use lettre::transport::smtp::commands::{Data, Mail, Rcpt};
use lettre::transport::smtp::extension::{ClientId, Extension, MailParameter};
use lettre::transport::smtp::response::Response;
use lettre::transport::smtp::{Error, extension::MailBodyParameter};
use std::time::Duration;

/// For how long the goodbye may take. The server's 250 stands, whatever becomes of QUIT.
const GOODBYE: Duration = Duration::from_secs(5);

/// Why an attempt ended early: at which verb, and what was said.
struct Halt {
    verb: &'static str,
    why: String,
    permanent: bool,
}

/// Sends one message within the settings' deadline.
pub(super) async fn send(smtp: &Smtp, from: &str, message: &Outgoing) -> Answer {
    let (Ok(from), Some(to)) = (from.parse::<Mailbox>(), mailbox(&message.recipient)) else {
        return Answer::Refused { verb: "address", reply: "no mail address".to_owned() };
    };
    match tokio::time::timeout(smtp.attempt, attempt(smtp, from.email, to.email, message)).await {
        Ok(answer) => answer,
        Err(_) => Answer::NotNow {
            verb: "deadline",
            why: format!("no answer within {} s", smtp.attempt.as_secs()),
        },
    }
}

async fn attempt(smtp: &Smtp, from: Address, to: Address, message: &Outgoing) -> Answer {
    let mut line = match connect(smtp).await {
        Ok(line) => line,
        Err(Halt { verb, why, .. }) => return Answer::NotNow { verb, why },
    };
    let answer = match converse(&mut line, from, to, &message.bytes.0).await {
        Ok(reply) => Answer::Sent { reply },
        Err(Halt { verb, why, permanent: true }) => Answer::Refused { verb, reply: why },
        Err(Halt { verb, why, permanent: false }) => Answer::NotNow { verb, why },
    };
    // On its own, so that the answer is on the disk before the goodbye ends; whatever becomes of that changes nothing.
    tokio::spawn(async move { tokio::time::timeout(GOODBYE, line.abort()).await });
    answer
}

/// Connects, encrypts and signs in. Nothing that goes wrong here is about the recipient.
async fn connect(smtp: &Smtp) -> Result<AsyncSmtpConnection, Halt> {
    let us = ClientId::default();
    let not_now = |verb| move |why: String| Halt { verb, why, permanent: false };
    let wrapped = match smtp.tls {
        Tls::Wrapped => Some(parameters(smtp).map_err(not_now("tls"))?),
        Tls::StartTls | Tls::Plain => None,
    };
    let server = (smtp.host.as_str(), smtp.port);
    let mut line =
        AsyncSmtpConnection::connect_tokio1(server, Some(smtp.attempt), &us, wrapped, None)
            .await
            .map_err(|error| not_now("connect")(chain(&error)))?;
    if smtp.tls == Tls::StartTls {
        let tls = parameters(smtp).map_err(not_now("tls"))?;
        line.starttls(tls, &us).await.map_err(|error| not_now("starttls")(chain(&error)))?;
    }
    if let Some(SignIn { user, password }) = &smtp.sign_in {
        let credentials = Credentials::new(user.clone(), password.expose().to_owned());
        line.auth(&[Mechanism::Plain, Mechanism::Login], &credentials)
            .await
            .map_err(|error| not_now("auth")(chain(&error)))?;
    }
    Ok(line)
}

/// Hands one message over. Every reply has to be the one that its verb asks for: an answer that belongs to another verb
/// must never pass for "taken".
async fn converse(
    line: &mut AsyncSmtpConnection,
    from: Address,
    to: Address,
    message: &[u8],
) -> Result<String, Halt> {
    let mut options = Vec::new();
    if !message.is_ascii() {
        options.push(MailParameter::Body(MailBodyParameter::EightBitMime));
    }
    let plain = |address: &Address| AsRef::<str>::as_ref(address).is_ascii();
    if !plain(&to) || !plain(&from) {
        if !line.server_info().supports_feature(Extension::SmtpUtfEight) {
            let why = "the server takes no address with letters beyond ASCII".to_owned();
            return Err(Halt { verb: "rcpt", why, permanent: true });
        }
        options.push(MailParameter::SmtpUtfEight);
    }
    expect("mail", line.command(Mail::new(Some(from), options)).await, &[250], false)?;
    expect("rcpt", line.command(Rcpt::new(to, Vec::new())).await, &[250, 251], true)?;
    expect("data", line.command(Data).await, &[354], true)?;
    expect("message", line.message(message).await, &[250], true)
}

fn expect(
    verb: &'static str,
    answer: Result<Response, Error>,
    codes: &[u16],
    about_recipient: bool,
) -> Result<String, Halt> {
    match answer {
        Ok(reply) if codes.iter().any(|code| reply.has_code(*code)) => {
            Ok(format!("{} {}", reply.code(), reply.first_line().unwrap_or_default()))
        }
        Ok(reply) => {
            let why = format!("{} is no answer to {verb}", reply.code());
            Err(Halt { verb, why, permanent: false })
        }
        Err(error) => {
            let permanent = about_recipient && error.is_permanent();
            Err(Halt { verb, why: chain(&error), permanent })
        }
    }
}

/// An error with what lies behind it: "Connection error" alone helps nobody.
fn chain(error: &Error) -> String {
    let mut text = error.to_string();
    let mut source = std::error::Error::source(error);
    while let Some(inner) = source {
        let inner_text = inner.to_string();
        if !text.ends_with(&inner_text) {
            text.push_str(": ");
            text.push_str(&inner_text);
        }
        source = inner.source();
    }
    text
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
