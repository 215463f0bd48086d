//! What a message says, in the order in which a tired person needs it: what to do, what was seen, why it matters here,
//! what isn't known, what it rests on, how to answer, and what such a message can't be.
//!
//! A letter is the one layout of which plain text and HTML are made, so that they can't differ.

use super::figure::{self, Figure};
use crate::ledger::Post;
use crate::settings::{Site, Words};
use ebbmark_rules::alert::{EvidenceRow, FormulaRow, Notice, NoticeReason};
use ebbmark_rules::fact::At;
use ebbmark_rules::ids::Private;

/// One message, not laid out yet.
#[derive(Debug)]
pub(super) struct Letter {
    /// The subject: nothing in it identifies a patient.
    pub(super) subject: String,
    /// Whether a person is to look at once.
    pub(super) urgent: bool,
    /// What stands before all parts, where there is more than one.
    pub(super) front: Option<Front>,
    /// One for each alert.
    pub(super) parts: Vec<Part>,
    /// How to answer, where an answer is asked for.
    pub(super) answer: Option<String>,
    /// What such a message is and is not.
    pub(super) cautions: Vec<String>,
    /// Whose message it is.
    pub(super) sign_off: Vec<String>,
}

/// What stands before several parts.
#[derive(Debug)]
pub(super) struct Front {
    pub(super) headline: String,
    /// One line for each part, in order.
    pub(super) list: Vec<String>,
}

/// What is said about one alert.
#[derive(Debug)]
pub(super) struct Part {
    /// What stands largest: tier and whereabouts.
    pub(super) headline: String,
    /// The lines that are read first.
    pub(super) opening: Vec<String>,
    /// The rest.
    pub(super) sections: Vec<Section>,
}

/// A titled part.
#[derive(Debug)]
pub(super) struct Section {
    pub(super) title: &'static str,
    pub(super) figures: Vec<Figure>,
    pub(super) lines: Vec<Line>,
}

/// A line: said plainly, or a named value with what belongs to it.
#[derive(Debug)]
pub(super) enum Line {
    Said(String),
    Value { what: String, value: String, notes: Vec<String> },
}

impl Section {
    pub(super) fn new(title: &'static str, lines: Vec<Line>) -> Self {
        Self { title, figures: Vec::new(), lines }
    }

    fn said(title: &'static str, lines: impl IntoIterator<Item = impl ToString>) -> Self {
        Self::new(title, lines.into_iter().map(|line| Line::Said(line.to_string())).collect())
    }

    fn is_empty(&self) -> bool {
        self.lines.is_empty() && self.figures.is_empty()
    }
}

/// What such a message is and is not.
const CAUTIONS: [&str; 4] = [
    "Ebbmark measures and points; it does not diagnose or prescribe.",
    "A qualified reader confirms on the tracing. Local protocol and the licensed clinician decide.",
    "Review medicines with pharmacist and prescriber, per local protocol.",
    "No alert does not mean no risk: a medicine may be missing from the list, a result old, a tracing never exported.",
];
/// Of a message about the service itself.
const TECHNICAL_CAUTION: &str =
    "While this lasts, the silence of the service says even less about the ward than usual.";
/// A message that wants its answer within this many minutes is marked as urgent.
const URGENT_MINUTES: i64 = 30;

/// Who writes, and how times are told.
#[derive(Debug, Clone, Copy)]
pub(super) struct Desk<'a> {
    pub(super) site: &'a Site,
    pub(super) words: &'a Words,
    pub(super) names: bool,
}

impl Desk<'_> {
    /// `Mon 2 Mar 09:12`.
    pub(super) fn when(&self, at: At) -> String {
        at.with_timezone(&self.site.zone).format("%a %-d %b %H:%M").to_string()
    }

    fn clock(&self, at: At) -> String {
        at.with_timezone(&self.site.zone).format("%H:%M").to_string()
    }

    /// `09:15`, with the day where that is another than the message's.
    fn by(&self, at: At, now: At) -> String {
        let day = |at: At| at.with_timezone(&self.site.zone).date_naive();
        if day(at) == day(now) { self.clock(at) } else { self.when(at) }
    }

    pub(super) fn sign_off(&self) -> Vec<String> {
        let name = (!self.words.sign_off.is_empty()).then(|| self.words.sign_off.clone());
        let hospital = format!("Ebbmark at {}", self.site.name);
        std::iter::once(hospital).chain(name).collect()
    }

    /// The letter of one notice.
    pub(super) fn letter(&self, post: &Post<'_>) -> Letter {
        let notice = post.notice;
        Letter {
            subject: self.subject(notice),
            urgent: is_urgent(notice),
            front: None,
            parts: vec![self.part(post, true)],
            answer: asks(notice).then(|| self.words.answer.clone()),
            cautions: cautions([notice]),
            sign_off: self.sign_off(),
        }
    }

    /// One letter of many notices to one person, the most pressing first.
    pub(super) fn digest(&self, posts: &[Post<'_>]) -> Letter {
        let mut posts: Vec<&Post<'_>> = posts.iter().collect();
        posts.sort_by_key(|post| {
            let notice = post.notice;
            let by = notice.answer_by.unwrap_or(At::MAX_UTC);
            (!asks(notice), std::cmp::Reverse(notice.alert.tier_rank), by, notice.at)
        });
        let first = posts.first().map(|post| post.notice);
        let tier = first.map(|notice| notice.alert.tier.as_str()).unwrap_or_default();
        let by = first.and_then(|notice| Some(self.by(notice.answer_by?, notice.at)));
        let by = by.map(|by| format!(", first answer by {by}")).unwrap_or_default();
        let list = posts.iter().zip(1..).map(|(post, n)| self.list_line(n, post)).collect();
        Letter {
            subject: format!("Ebbmark {tier}: {} messages at once{by}", posts.len()),
            urgent: posts.iter().any(|post| is_urgent(post.notice)),
            front: Some(Front {
                headline: format!("{} messages at once, the most pressing first", posts.len()),
                list,
            }),
            parts: posts.iter().map(|post| self.part(post, false)).collect(),
            answer: posts
                .iter()
                .any(|post| asks(post.notice))
                .then(|| format!("Each of these alerts is open on its own. {}", self.words.answer)),
            cautions: cautions(posts.iter().map(|post| post.notice)),
            sign_off: self.sign_off(),
        }
    }

    fn list_line(&self, number: usize, post: &Post<'_>) -> String {
        let notice = post.notice;
        let by = notice.answer_by.map(|at| format!(" Answer by {}.", self.by(at, notice.at)));
        format!(
            "{number}. {}: {}{}",
            self.headline(post),
            notice.alert.evidence.seen,
            by.unwrap_or_default()
        )
    }

    fn subject(&self, notice: &Notice) -> String {
        let tier = notice.alert.tier.as_str();
        let what = match notice.reason {
            NoticeReason::Raised => "new alert",
            NoticeReason::TierRaised => "alert raised",
            NoticeReason::Escalated => "not answered yet",
            NoticeReason::SnoozeEnded => "no longer put off",
            NoticeReason::HandedOver => "handed over",
            NoticeReason::Withdrawn => "withdrawn",
            NoticeReason::Closed => "over",
        };
        let by = notice.answer_by.map(|at| format!(", answer by {}", self.by(at, notice.at)));
        let by = by.unwrap_or_default();
        // A technical concern (`mail`, `disk`) is nobody's patient.
        let about = match notice.alert.patient {
            Some(_) => String::new(),
            None => format!(" about the service ({})", notice.alert.concern),
        };
        format!("Ebbmark {tier}: {what}{about}{by}")
    }

    fn headline(&self, post: &Post<'_>) -> String {
        let alert = &post.notice.alert;
        let tier = alert.tier.as_str().to_uppercase();
        let name = post.name.filter(|_| self.names).map(Private::expose);
        let name = name.map(|name| format!(" ({name})")).unwrap_or_default();
        let state = match post.notice.reason {
            NoticeReason::Withdrawn => "WITHDRAWN, was ",
            NoticeReason::Closed => "OVER, was ",
            NoticeReason::Escalated => "NOT ANSWERED, ",
            NoticeReason::Raised
            | NoticeReason::TierRaised
            | NoticeReason::SnoozeEnded
            | NoticeReason::HandedOver => "",
        };
        format!("{state}{tier}: {}{name}", alert.evidence.whom)
    }

    /// `pictures`: a message about many alerts does without, so that it stays small.
    fn part(&self, post: &Post<'_>, pictures: bool) -> Part {
        let notice = post.notice;
        let sections = match (&notice.alert.patient, asks(notice)) {
            (None, _) => self.technical(notice),
            (Some(_), true) => self.clinical(notice, pictures),
            (Some(_), false) => self.past(notice),
        };
        Part {
            headline: self.headline(post),
            opening: self.opening(notice),
            sections: sections.into_iter().filter(|section| !section.is_empty()).collect(),
        }
    }

    fn opening(&self, notice: &Notice) -> Vec<String> {
        let alert = &notice.alert;
        let evidence = &alert.evidence;
        let raised = self.when(alert.raised_at);
        let because = match &*notice.because {
            "" => String::new(),
            because => format!(": {because}"),
        };
        let mut opening = Vec::new();
        let mut context = Vec::new();
        match notice.reason {
            NoticeReason::Withdrawn => context.push(format!(
                "This alert of {raised} no longer stands{because}. Nothing is asked of you for it any more."
            )),
            NoticeReason::Closed => context.push(format!(
                "This alert of {raised} is over{because}. Nothing is asked of you for it any more."
            )),
            NoticeReason::Escalated => {
                context.push(format!("Nobody has answered since {raised}. It comes to you as: {}.", notice.role));
            }
            NoticeReason::SnoozeEnded => {
                context.push(format!("This alert of {raised} was put off; that time has ended{because}."));
            }
            NoticeReason::HandedOver => {
                context.push(format!("This alert of {raised} comes to you as: {}{because}.", notice.role));
            }
            NoticeReason::TierRaised => {
                context.push(format!("Newer facts raised this alert of {raised} to {}.", alert.tier));
            }
            NoticeReason::Raised => {}
        }
        if asks(notice) {
            let whose = if alert.patient.is_some() { "Per local protocol: " } else { "" };
            opening.push(format!("{whose}{}", evidence.to_do));
        }
        if let Some(at) = notice.answer_by {
            let then = notice.then.as_ref();
            let then = then.map(|role| format!(" Then it goes to: {role}.")).unwrap_or_default();
            opening.push(format!("Answer by {}.{then}", self.by(at, notice.at)));
        }
        // What to do comes before how it came to this.
        opening.append(&mut context);
        if !evidence.protocol_signed {
            opening.push(
                "EXAMPLE PROTOCOL, signed by no hospital: nobody should act on it alone."
                    .to_owned(),
            );
        }
        opening
    }

    /// Of an alert that stands.
    fn clinical(&self, notice: &Notice, pictures: bool) -> Vec<Section> {
        let evidence = &notice.alert.evidence;
        let mut seen = Section::said("What was seen", [&evidence.seen]);
        if evidence.borderline {
            seen.lines
                .push(Line::Said("Borderline: the value's doubt crosses the limit.".to_owned()));
        }
        seen.lines.extend(evidence.values.iter().map(|row| self.value(row)));
        seen.figures.extend(evidence.tide.as_ref().map(|tide| figure::tide(tide, pictures)));
        let mut unknown = Section::said("What is not known", &evidence.unknown);
        if unknown.is_empty() {
            let nothing = "Nothing that the protocol asks for. It may not ask for everything.";
            unknown.lines.push(Line::Said(nothing.to_owned()));
        }
        // Where there is none, that is among what is not known.
        let has_baseline = !evidence.baseline.is_empty()
            && !evidence.unknown.iter().any(|line| line.contains("no baseline"));
        let baseline = has_baseline.then_some(&evidence.baseline);
        vec![
            seen,
            Section::said("Why it matters for this patient", &evidence.why),
            unknown,
            Section::said("Baseline and change", baseline),
            Section::said("Medicines on the local list", &evidence.medicines),
            Section::said("Electrolytes", &evidence.electrolytes),
            Section::new("QTc by each formula", evidence.formulas.iter().map(formula).collect()),
            self.whose(notice),
        ]
    }

    /// Of an alert that no longer stands: what it had said, so that the reader knows it again.
    fn past(&self, notice: &Notice) -> Vec<Section> {
        let evidence = &notice.alert.evidence;
        let mut said = Section::said("What it had said", [&evidence.seen]);
        said.lines.extend(evidence.values.iter().map(|row| self.value(row)));
        vec![said, self.whose(notice)]
    }

    fn technical(&self, notice: &Notice) -> Vec<Section> {
        let evidence = &notice.alert.evidence;
        let mut seen = Section::said("What was seen", [&evidence.seen]);
        seen.lines.extend(evidence.why.iter().map(|why| Line::Said(why.to_string())));
        vec![seen, self.whose(notice)]
    }

    /// Whose rule it is, and what names the alert for good.
    fn whose(&self, notice: &Notice) -> Section {
        let (alert, evidence) = (&notice.alert, &notice.alert.evidence);
        let mut lines = vec![Line::Value {
            what: "Protocol".to_owned(),
            value: format!("{}, version {}", evidence.protocol, evidence.protocol_version),
            notes: vec![
                format!("content {}", evidence.protocol_hash.short()),
                if evidence.protocol_signed {
                    "signed"
                } else {
                    "an example that nobody has signed"
                }
                .to_owned(),
            ],
        }];
        let mut value = |what: &str, value: String| {
            lines.push(Line::Value { what: what.to_owned(), value, notes: Vec::new() });
        };
        value("Rule", alert.rule.to_string());
        value("Alert", alert.id.to_string());
        if let Some(tracing) = &evidence.tracing {
            value("Tracing", tracing.to_string());
        }
        value("Sent to", format!("{}, as of {}", notice.role, self.when(notice.at)));
        Section::new("Whose rule", lines)
    }

    fn value(&self, row: &EvidenceRow) -> Line {
        let limit = (!row.limit.is_empty()).then(|| format!("limit: {}", row.limit));
        let source = (!row.source.is_empty()).then(|| row.source.to_string());
        let notes = limit.into_iter().chain(row.at.map(|at| self.when(at))).chain(source);
        Line::Value {
            what: row.what.to_string(),
            value: row.value.to_string(),
            notes: notes.collect(),
        }
    }
}

fn formula(row: &FormulaRow) -> Line {
    let value =
        row.qtc_ms.map_or_else(|| "outside its range".to_owned(), |qtc| format!("{qtc:.0} ms"));
    let mark = match (row.decided, row.split) {
        (true, _) => Some("this one decides"),
        (false, true) => Some("on the other side of the limit"),
        (false, false) => None,
    };
    Line::Value {
        what: row.formula.to_string(),
        value,
        notes: mark.map(str::to_owned).into_iter().collect(),
    }
}

/// Whether an answer is wanted.
fn asks(notice: &Notice) -> bool {
    !matches!(notice.reason, NoticeReason::Withdrawn | NoticeReason::Closed)
}

fn is_urgent(notice: &Notice) -> bool {
    notice.answer_by.is_some_and(|by| (by - notice.at).num_minutes() <= URGENT_MINUTES)
}

/// What each message says of itself; of the service's own trouble first what that means.
pub(super) fn cautions<'a>(notices: impl IntoIterator<Item = &'a Notice>) -> Vec<String> {
    let technical = notices.into_iter().any(|notice| notice.alert.patient.is_none());
    let technical = Some(TECHNICAL_CAUTION).filter(|_| technical);
    technical.into_iter().chain(CAUTIONS).map(str::to_owned).collect()
}
