//! What people read: one letter for each notice, laid out as plain text and as HTML from the same lines.
//!
//! A message is a pure function of the notice, the recipient and the site, so that one made twice is the same message,
//! to the byte. Nothing in a subject identifies a patient.

mod daily;
mod figure;
mod html;
mod letter;
mod text;

use crate::ledger::{Envelope, Post, Render, Sheet};
use crate::settings::{Settings, Site, Words};
use ebbmark_rules::fact::At;
use ebbmark_rules::ids::{ContentHash, Private};
use letter::{Desk, Letter};
use lettre::Message;
use lettre::message::header::{ContentType, Header, HeaderName, HeaderValue};
use lettre::message::{Attachment, Mailbox, MultiPart, SinglePart};
use std::time::{Duration, SystemTime};

/// Makes messages.
#[derive(Debug, Clone)]
struct Press {
    site: Site,
    from: String,
    names: bool,
    words: Words,
}

/// Makes messages by these settings.
pub fn renderer(settings: &Settings) -> Render {
    let press = Press {
        site: settings.site.clone(),
        from: settings.mail.from.clone(),
        names: settings.mail.names,
        words: settings.mail.words.clone(),
    };
    Box::new(move |sheet| press.print(sheet))
}

impl Press {
    /// The whole message, headers and all.
    fn print(&self, sheet: &Sheet<'_>) -> Vec<u8> {
        let desk = Desk { site: &self.site, words: &self.words, names: self.names };
        match *sheet {
            Sheet::Letter(post) => {
                let Post { notice, recipient, message_id, .. } = post;
                let envelope = Envelope { recipient, message_id, at: notice.at };
                // Messages about one alert belong together; a mail program shows them as one thread.
                let domain = message_id.rsplit('@').next().unwrap_or("localhost");
                let thread = format!("<{}@{domain}>", notice.alert.id);
                self.message(envelope, Some(thread), &desk.letter(&post))
            }
            Sheet::Daily(envelope, day, protocol) => {
                self.message(envelope, None, &desk.daily(envelope.at, day, protocol))
            }
            Sheet::Digest(envelope, posts) => self.message(envelope, None, &desk.digest(posts)),
        }
    }

    fn message(&self, envelope: Envelope<'_>, thread: Option<String>, letter: &Letter) -> Vec<u8> {
        let Envelope { recipient, message_id, at } = envelope;
        let mut message = Message::builder()
            .message_id(Some(format!("<{message_id}>")))
            .date(system_time(at))
            .subject(&letter.subject)
            .header(Automatic);
        if let Some(thread) = thread {
            message = message.references(thread);
        }
        if letter.urgent {
            message = message.header(Importance);
        }
        if let Ok(from) = self.from.parse::<Mailbox>() {
            message = message.from(from);
        }
        if let Some(to) = mailbox(recipient) {
            message = message.to(to);
        }
        match message.multipart(body(message_id, letter)) {
            Ok(message) => message.formatted(),
            // Only a sender or recipient that is no address leads here; the mailer refuses it, and the next role is told.
            Err(error) => format!(
                "Message-ID: <{message_id}>\r\n\r\nthis message could not be addressed: {error}\r\n"
            )
            .into_bytes(),
        }
    }
}

fn body(message_id: &str, letter: &Letter) -> MultiPart {
    // A boundary drawn by lot would make the same message another one.
    let lot = ContentHash::of(message_id.as_bytes());
    let html = SinglePart::html(html::lay_out(letter));
    let figures: Vec<_> = letter
        .parts
        .iter()
        .flat_map(|part| &part.sections)
        .flat_map(|section| &section.figures)
        .filter_map(|figure| Some((figure.name, figure.png.as_ref()?)))
        .collect();
    let both = MultiPart::alternative()
        .boundary(format!("both-{}", lot.short()))
        .singlepart(SinglePart::plain(text::lay_out(letter)));
    if figures.is_empty() {
        return both.singlepart(html);
    }
    let png = ContentType::parse("image/png").unwrap_or(ContentType::TEXT_PLAIN);
    let mut related =
        MultiPart::related().boundary(format!("with-{}", lot.short())).singlepart(html);
    for (name, bytes) in figures {
        let picture = Attachment::new_inline(name.to_owned());
        related = related.singlepart(picture.body(bytes.clone(), png.clone()));
    }
    both.multipart(related)
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

/// A mail program shows such a message above others (RFC 4021, 2.1.54).
#[derive(Debug, Clone)]
struct Importance;

impl Header for Importance {
    fn name() -> HeaderName {
        HeaderName::new_from_ascii_str("Importance")
    }
    fn parse(_: &str) -> Result<Self, Box<dyn std::error::Error + Send + Sync>> {
        Ok(Importance)
    }
    fn display(&self) -> HeaderValue {
        HeaderValue::new(Self::name(), "high".to_owned())
    }
}

#[cfg(test)]
mod tests;
