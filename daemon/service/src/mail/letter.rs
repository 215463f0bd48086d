//! What a message says, in the order in which a tired person needs it: what to do, what was seen, why it matters here,
//! what isn't known, what it rests on, and what such a message can't be.

use crate::settings::Site;
use ebbmark_rules::alert::{EvidenceRow, FormulaRow, Notice, NoticeReason};
use ebbmark_rules::fact::At;
use ebbmark_rules::ids::Private;

/// One message, not laid out yet.
#[derive(Debug)]
pub(super) struct Letter {
    /// The subject: nothing in it identifies a patient.
    pub(super) subject: String,
    /// What stands largest: tier and whereabouts.
    pub(super) headline: String,
    /// The lines that are read first.
    pub(super) opening: Vec<String>,
    /// The rest.
    pub(super) sections: Vec<Section>,
    /// What such a message is and is not.
    pub(super) cautions: Vec<String>,
}

/// A titled part.
#[derive(Debug)]
pub(super) struct Section {
    pub(super) title: &'static str,
    pub(super) lines: Vec<String>,
    pub(super) table: Vec<Vec<String>>,
}

impl Section {
    fn lines(title: &'static str, lines: Vec<String>) -> Self {
        Self { title, lines, table: Vec::new() }
    }

    fn table(title: &'static str, table: Vec<Vec<String>>) -> Self {
        Self { title, lines: Vec::new(), table }
    }

    fn is_empty(&self) -> bool {
        self.lines.is_empty() && self.table.is_empty()
    }
}

const CAUTIONS: [&str; 4] = [
    "Ebbmark measures and points; it does not diagnose or prescribe.",
    "A qualified reader confirms on the tracing. Local protocol and the licensed clinician decide.",
    "Review medicines with pharmacist and prescriber, per local protocol.",
    "No alert does not mean no risk: a medicine may be missing from the list, a result old, a tracing never exported.",
];

impl Letter {
    pub(super) fn of(site: &Site, notice: &Notice, name: Option<&Private>) -> Self {
        let alert = &notice.alert;
        let evidence = &alert.evidence;
        let when = |at: At| at.with_timezone(&site.zone).format("%a %-d %b %Y %H:%M").to_string();
        let clock = |at: At| at.with_timezone(&site.zone).format("%H:%M").to_string();
        let answer =
            notice.answer_by.map(|at| format!(", answer by {}", clock(at))).unwrap_or_default();
        let tier = alert.tier.as_str();
        let subject = format!("Ebbmark {tier}: {}{answer}", reason(&notice.reason));

        let whom = match name {
            Some(name) => format!("{} ({})", evidence.whom, name.expose()),
            None => evidence.whom.to_string(),
        };
        let is_over = matches!(notice.reason, NoticeReason::Withdrawn | NoticeReason::Closed);
        let mut opening = Vec::new();
        match notice.reason {
            NoticeReason::Withdrawn => opening.push(format!(
                "WITHDRAWN: a correction disproved the alert of {}. You were told of it; it no longer stands.",
                when(alert.raised_at)
            )),
            NoticeReason::Closed => {
                opening.push(format!("OVER: newer facts ended the alert of {}.", when(alert.raised_at)));
            }
            NoticeReason::Escalated => {
                opening.push(format!("Nobody has answered this alert, raised {}.", when(alert.raised_at)));
            }
            NoticeReason::SnoozeEnded => {
                opening.push(format!("It was put off, and that time has ended. Raised {}.", when(alert.raised_at)));
            }
            NoticeReason::HandedOver => {
                opening.push(format!("A colleague handed this alert over to {}.", notice.role));
            }
            NoticeReason::TierRaised => opening.push(format!("Newer facts raised this alert to {tier}.")),
            NoticeReason::Raised => {}
        }
        if !is_over {
            opening.push(format!("To do, per local protocol: {}", evidence.to_do));
            if let Some(at) = notice.answer_by {
                opening.push(format!(
                    "Please answer by {}; after that the next role is told.",
                    when(at)
                ));
            }
        }

        let mut seen = vec![evidence.seen.to_string()];
        if evidence.borderline {
            seen.push("Borderline: the doubt of the value crosses the limit.".to_owned());
        }
        let mut why: Vec<String> = owned(&evidence.why);
        if !evidence.baseline.is_empty() {
            why.push(format!("Baseline: {}", evidence.baseline));
        }
        let unknown = if evidence.unknown.is_empty() {
            vec![
                "Nothing that the protocol asks for is missing. It may not ask for everything."
                    .to_owned(),
            ]
        } else {
            owned(&evidence.unknown)
        };
        let values = evidence.values.iter().map(|row| value(row, &when)).collect();
        let formulas = evidence.formulas.iter().map(formula).collect();
        let mut protocol = vec![format!(
            "{}, version {}, content {}; rule {}; alert {}",
            evidence.protocol,
            evidence.protocol_version,
            evidence.protocol_hash.short(),
            alert.rule,
            alert.id,
        )];
        if !evidence.protocol_signed {
            protocol.push(
                "EXAMPLE: no hospital has signed this protocol. Nobody should act on it alone."
                    .to_owned(),
            );
        }
        if let Some(tracing) = &evidence.tracing {
            protocol.push(format!("Tracing {tracing}"));
        }
        protocol.push(format!("{}, to {}, as of {}", site.name, notice.role, when(notice.at)));

        let sections = [
            Section::lines("What was seen", seen),
            Section::lines("Why it matters for this patient", why),
            Section::lines("Medicines on the local list", owned(&evidence.medicines)),
            Section::lines("Electrolytes", owned(&evidence.electrolytes)),
            Section::lines("What is not known", unknown),
            Section::table("What it rests on", values),
            Section::table("QTc by each formula", formulas),
            Section::lines("Whose rule", protocol),
        ];
        Self {
            subject,
            headline: format!("{}: {whom}", tier.to_uppercase()),
            opening,
            sections: sections.into_iter().filter(|section| !section.is_empty()).collect(),
            cautions: CAUTIONS.map(str::to_owned).to_vec(),
        }
    }
}

fn reason(reason: &NoticeReason) -> &'static str {
    match reason {
        NoticeReason::Raised => "new alert",
        NoticeReason::TierRaised => "alert raised",
        NoticeReason::Escalated => "not answered yet",
        NoticeReason::SnoozeEnded => "no longer put off",
        NoticeReason::HandedOver => "handed over",
        NoticeReason::Withdrawn => "withdrawn",
        NoticeReason::Closed => "over",
    }
}

fn owned(lines: &[Box<str>]) -> Vec<String> {
    lines.iter().map(ToString::to_string).collect()
}

fn value(row: &EvidenceRow, when: &impl Fn(At) -> String) -> Vec<String> {
    let limit = if row.limit.is_empty() { String::new() } else { format!("limit: {}", row.limit) };
    vec![
        row.what.to_string(),
        row.value.to_string(),
        limit,
        row.at.map(when).unwrap_or_default(),
        row.source.to_string(),
    ]
}

fn formula(row: &FormulaRow) -> Vec<String> {
    let value =
        row.qtc_ms.map_or_else(|| "outside its range".to_owned(), |qtc| format!("{qtc:.0} ms"));
    let mark = match (row.decided, row.split) {
        (true, _) => "decided",
        (false, true) => "on the other side of the limit",
        (false, false) => "",
    };
    vec![row.formula.to_string(), value, mark.to_owned()]
}
