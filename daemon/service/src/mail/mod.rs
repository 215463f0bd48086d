//! What people read: one letter for each notice, laid out as plain text and as HTML from the same lines.
//!
//! A letter is a pure function of the notice, the recipient and the site, so that a message made twice is the same
//! message, to the byte. Nothing in a subject identifies a patient.

mod html;
mod letter;
mod text;

use crate::ledger::{Post, Render};
use crate::settings::{Settings, Site};
use ebbmark_rules::fact::At;
use ebbmark_rules::ids::{ContentHash, Private};
use letter::Letter;
use lettre::Message;
use lettre::message::header::{Header, HeaderName, HeaderValue};
use lettre::message::{Mailbox, MultiPart, SinglePart};
use std::time::{Duration, SystemTime};

/// Makes messages by these settings.
pub fn renderer(settings: &Settings) -> Render {
    let (site, from, names) =
        (settings.site.clone(), settings.mail.from.clone(), settings.mail.names);
    Box::new(move |post| render(&site, &from, names, post))
}

/// The whole message, headers and all.
pub fn render(site: &Site, from: &str, names: bool, post: &Post<'_>) -> Vec<u8> {
    let letter = Letter::of(site, post.notice, post.name.filter(|_| names));
    let Post { notice, recipient, message_id, .. } = post;
    // A boundary drawn by lot would make the same message another one.
    let boundary = format!("part-{}", ContentHash::of(message_id.as_bytes()).short());
    let body = MultiPart::alternative()
        .boundary(boundary)
        .singlepart(SinglePart::plain(text::lay_out(&letter)))
        .singlepart(SinglePart::html(html::lay_out(&letter)));
    let mut message = Message::builder()
        .message_id(Some(format!("<{message_id}>")))
        .date(system_time(notice.at))
        .subject(&letter.subject)
        .header(Automatic);
    if let Ok(from) = from.parse::<Mailbox>() {
        message = message.from(from);
    }
    if let Some(to) = mailbox(recipient) {
        message = message.to(to);
    }
    match message.multipart(body) {
        Ok(message) => message.formatted(),
        // Only a sender or recipient that is no address leads here; the mailer refuses it, and the next role is told.
        Err(error) => format!(
            "Message-ID: <{message_id}>\r\n\r\nthis message could not be addressed: {error}\r\n"
        )
        .into_bytes(),
    }
}

/// A recipient as a mail address; `None` where it is none.
pub(crate) fn mailbox(recipient: &Private) -> Option<Mailbox> {
    recipient.expose().parse().ok()
}

fn system_time(at: At) -> SystemTime {
    let seconds = u64::try_from(at.timestamp()).unwrap_or(0);
    SystemTime::UNIX_EPOCH + Duration::from_secs(seconds)
}

/// Asks out-of-office responders not to answer (RFC 3834).
#[derive(Debug, Clone)]
struct Automatic;

impl Header for Automatic {
    fn name() -> HeaderName {
        HeaderName::new_from_ascii_str("Auto-Submitted")
    }
    fn parse(_: &str) -> Result<Self, Box<dyn std::error::Error + Send + Sync>> {
        Ok(Automatic)
    }
    fn display(&self) -> HeaderValue {
        HeaderValue::new(Self::name(), "auto-generated".to_owned())
    }
}

#[cfg(test)]
mod tests;
