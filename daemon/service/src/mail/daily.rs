//! The daily message: that the service is alive, and how its day was. Numbers only, nothing of any patient.

use super::letter::{Desk, Letter, Line, Part, Section, cautions};
use crate::store::Day;
use ebbmark_rules::fact::At;
use ebbmark_rules::protocol::Protocol;

impl Desk<'_> {
    pub(super) fn daily(&self, at: At, day: &Day, protocol: Option<&Protocol>) -> Letter {
        let open = match day.open {
            0 => "No alert waits for an answer.".to_owned(),
            1 => "1 alert waits for an answer.".to_owned(),
            more => format!("{more} alerts wait for an answer."),
        };
        let raised = match day.raised.as_slice() {
            [] => "none".to_owned(),
            tiers => {
                let tiers = tiers.iter().map(|(tier, count)| format!("{count} {tier}"));
                tiers.collect::<Vec<_>>().join(", ")
            }
        };
        let last_tracing = day.last_tracing.map_or("none yet".to_owned(), |at| self.when(at));
        let mut rules = vec![value("Program", format!("ebbmark {}", env!("CARGO_PKG_VERSION")))];
        match protocol {
            Some(protocol) => {
                let name = format!("{}, version {}", protocol.name, protocol.version);
                rules.push(value("Protocol", name));
                rules.push(value("Protocol's content", protocol.hash.as_str().to_owned()));
                rules.push(match &protocol.approved {
                    Some((who, when)) => value("Signed by", format!("{who}, {when}")),
                    None => value("Signed by", "nobody: it is an example".to_owned()),
                });
            }
            None => rules.push(value("Protocol", "none in force".to_owned())),
        }
        let keep = "Keep this message: `ebbmark audit --head` with the head above shows whether the chain still holds \
                    that row.";
        let sections = vec![
            Section::new(
                "The last 24 hours",
                vec![
                    value("Alerts raised", raised),
                    value("Files taken in", day.files.to_string()),
                    value("Files held for a person", day.held.to_string()),
                    value("Last tracing", last_tracing),
                    value("Messages sent", day.sent.to_string()),
                    value("Messages refused for good", day.refused.to_string()),
                ],
            ),
            Section::new(
                "Now",
                vec![
                    value("Alerts nobody has answered", day.open.to_string()),
                    value("Alerts taken on", day.acknowledged.to_string()),
                    value("Messages that wait for the mail server", day.waiting.to_string()),
                ],
            ),
            Section::new("By which rules", rules),
            Section::new(
                "Audit chain",
                vec![
                    value("Rows", day.audit_rows.to_string()),
                    value("Head", day.audit_head.clone()),
                    Line::Said(keep.to_owned()),
                ],
            ),
        ];
        Letter {
            subject: format!("Ebbmark daily: alive, {} open", day.open),
            urgent: false,
            front: None,
            parts: vec![Part {
                headline: format!("Ebbmark is alive, {}", self.when(at)),
                opening: vec![
                    open,
                    "The day on which this message doesn't come, look after the service."
                        .to_owned(),
                ],
                sections,
            }],
            answer: None,
            cautions: cautions([]),
            sign_off: self.sign_off(),
        }
    }
}

fn value(what: &str, value: String) -> Line {
    Line::Value { what: what.to_owned(), value, notes: Vec::new() }
}
