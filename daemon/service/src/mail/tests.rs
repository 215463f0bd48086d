use super::*;
use ebbmark_rules::alert::{
    Alert, AlertState, Evidence, EvidenceRow, FormulaRow, Notice, NoticeReason, Tide,
};
use ebbmark_rules::ids::{AlertId, PatientId, Role, RuleId, TierName};

fn at(minute: i64) -> At {
    At::from_timestamp(1_790_000_000 + minute * 60, 0).unwrap()
}

fn notice(reason: NoticeReason) -> Notice {
    let row = EvidenceRow {
        what: "QTc (Fridericia, global, tangent)".into(),
        value: "512 ± 9 ms".into(),
        limit: "at least 500 ms".into(),
        at: Some(at(-3)),
        source: "file 3f2a90c1d4e5, tracing".into(),
    };
    let formula = |name: &str, qtc_ms, decided, split| FormulaRow {
        formula: name.into(),
        qtc_ms,
        decided,
        split,
    };
    let is_past = matches!(reason, NoticeReason::Withdrawn | NoticeReason::Closed);
    let because = if is_past { "the result that it rested on was corrected" } else { "" };
    Notice {
        step: 0,
        reason,
        role: Role::new("ward-pharmacist"),
        recipients: vec![Private::new("pharmacy@saltmere.example")],
        at: at(0),
        answer_by: (!is_past).then(|| at(30)),
        then: (!is_past).then(|| Role::new("ward-doctor")),
        because: because.into(),
        alert: Alert {
            id: AlertId::new("alert-77"),
            patient: PatientId::new("saltmere", "4711-secret"),
            concern: "qtc".into(),
            raised_at: at(0),
            as_of: at(0),
            state: AlertState::Open,
            tier: TierName::new("call"),
            tier_rank: 2,
            rule: RuleId::new("qtc-500"),
            evidence: Evidence {
                whom: "Heron ward, bed 4".into(),
                seen: "QTc of 500 ms or more on a good tracing".into(),
                to_do: "call the ward doctor now; repeat the tracing".into(),
                why: vec!["two listed medicines are active".into()],
                values: vec![row],
                formulas: vec![
                    formula("Fridericia", Some(512.0), true, false),
                    formula("Bazett", Some(498.4), false, true),
                ],
                tracing: None,
                medicines: vec!["haloperidol, last given 3 h ago".into()],
                electrolytes: vec!["potassium 3.1 mmol/L, 2 h ago <low>".into()],
                baseline: "431 ms on 2 Mar; now 81 ms longer".into(),
                unknown: vec!["magnesium: never measured".into()],
                borderline: false,
                protocol: "Saltmere example".into(),
                protocol_version: "1".into(),
                protocol_hash: ContentHash::of(b"protocol"),
                protocol_signed: false,
                tide: Some(Tide {
                    limits: vec![(500.0, TierName::new("call"))],
                    baseline: Some(431.0),
                    value: 512.0,
                    doubt: 9.0,
                }),
            },
        },
    }
}

fn press(names: bool) -> Press {
    Press {
        site: Site {
            name: "Saltmere General".to_owned(),
            zone: chrono_tz::Europe::London,
            issuer: "saltmere".to_owned(),
        },
        from: "ebbmark@saltmere.example".to_owned(),
        names,
        words: Words { sign_off: "Ward pharmacy, extension 4417".to_owned(), ..Words::default() },
    }
}

fn message(notice: &Notice, names: bool) -> String {
    let name = Private::new("Ada Quill");
    let post = Post {
        notice,
        recipient: &notice.recipients[0],
        message_id: "0123456789abcdef@saltmere.example",
        name: Some(&name),
    };
    String::from_utf8(press(names).print(&Sheet::Letter(post))).unwrap()
}

/// Both bodies as a mail program shows them, read by a parser that others wrote.
fn bodies(message: &str) -> (String, String) {
    let parsed = mail_parser::MessageParser::default().parse(message.as_bytes()).unwrap();
    let text = parsed.body_text(0).unwrap().replace("\r\n", "\n");
    (text, parsed.body_html(0).unwrap().into_owned())
}

/// What stands in HTML as text: no tags, the five escapes undone, white space as one space.
fn words(html: &str) -> String {
    let body = html.split_once("<body").unwrap().1.split_once('>').unwrap().1;
    let mut text = String::new();
    let mut inside = false;
    for letter in body.chars() {
        match letter {
            '<' => inside = true,
            // A tag ends a word, except within a line.
            '>' => inside = false,
            letter if !inside => text.push(letter),
            _ => {}
        }
    }
    let text = text.replace("&lt;", "<").replace("&gt;", ">").replace("&quot;", "\"");
    text.replace("&amp;", "&")
}

fn flat(text: &str) -> String {
    text.split_whitespace().collect::<Vec<_>>().join(" ")
}

const REASONS: [NoticeReason; 7] = [
    NoticeReason::Raised,
    NoticeReason::TierRaised,
    NoticeReason::Escalated,
    NoticeReason::SnoozeEnded,
    NoticeReason::HandedOver,
    NoticeReason::Withdrawn,
    NoticeReason::Closed,
];

#[test]
fn same_notice_gives_the_same_bytes() {
    let notice = notice(NoticeReason::Raised);
    assert_eq!(message(&notice, false), message(&notice, false));
}

/// What `Every alert carries` asks for, in both bodies.
#[test]
fn both_bodies_say_everything() {
    let (text, html) = bodies(&message(&notice(NoticeReason::Raised), false));
    for body in [flat(&text), flat(&words(&html))] {
        for part in [
            "CALL: Heron ward, bed 4",
            "Per local protocol: call the ward doctor now; repeat the tracing",
            "Then it goes to: ward-doctor.",
            "QTc of 500 ms or more on a good tracing",
            "two listed medicines are active",
            "431 ms on 2 Mar; now 81 ms longer",
            "haloperidol, last given 3 h ago",
            "potassium 3.1 mmol/L, 2 h ago <low>",
            "magnesium: never measured",
            "512 ± 9 ms",
            "limit: at least 500 ms",
            "file 3f2a90c1d4e5, tracing",
            "498 ms",
            "on the other side of the limit",
            "Saltmere example, version 1",
            "EXAMPLE PROTOCOL, signed by no hospital",
            "QTc now 512 ± 9 ms; baseline 431; call from 500",
            "Opening this mail or replying to it is no answer.",
            "it does not diagnose or prescribe",
            "No alert does not mean no risk",
            "Ward pharmacy, extension 4417",
        ] {
            assert!(body.contains(part), "{part} in:\n{body}");
        }
    }
    assert!(html.contains("&lt;low&gt;"), "HTML is escaped");
}

/// Every word of the text stands in the HTML, in the same order, but for the scale in letters, marks and capitals.
#[test]
fn plain_text_and_html_say_the_same() {
    for reason in REASONS {
        let (text, html) = bodies(&message(&notice(reason), false));
        let lines = text.lines().filter(|line| !line.contains("....") && !line.starts_with("---"));
        let letters = |text: &str| -> String {
            text.chars()
                .filter(|letter| letter.is_alphanumeric())
                .collect::<String>()
                .to_lowercase()
        };
        let text = letters(&lines.collect::<Vec<_>>().join("\n"));
        assert_eq!(text, letters(&words(&html)));
    }
}

#[test]
fn lines_are_no_longer_than_78_characters() {
    for reason in REASONS {
        let message = message(&notice(reason), false);
        assert!(message.lines().all(|line| line.chars().count() <= 78), "as sent");
        let (text, _) = bodies(&message);
        let long = text.lines().find(|line| line.chars().count() > 78);
        assert_eq!(long, None);
    }
}

#[test]
fn subject_and_headers_name_no_patient() {
    for reason in REASONS {
        let text = message(&notice(reason), true);
        let head = text.split("\r\n\r\n").next().unwrap();
        assert!(head.contains("Subject: Ebbmark call: "), "{head}");
        for secret in ["4711", "Heron", "bed", "Ada", "Quill"] {
            assert!(!head.contains(secret), "{secret} in {head}");
        }
        assert!(!text.contains("4711-secret"), "a number never goes out");
    }
}

#[test]
fn names_stand_in_the_body_only_where_the_site_says_so() {
    let notice = notice(NoticeReason::Raised);
    assert!(!message(&notice, false).contains("Quill"));
    let (text, html) = bodies(&message(&notice, true));
    assert!(text.starts_with("CALL: Heron ward, bed 4 (Ada Quill)"), "{text}");
    assert!(words(&html).contains("CALL: Heron ward, bed 4 (Ada Quill)"));
}

#[test]
fn picture_is_within_the_message_and_named_by_the_html() {
    let message = message(&notice(NoticeReason::Raised), false);
    let parsed = mail_parser::MessageParser::default().parse(message.as_bytes()).unwrap();
    let pictures: Vec<_> = parsed.attachments().collect();
    assert_eq!(pictures.len(), 1);
    assert!(pictures[0].contents().starts_with(b"\x89PNG"));
    use mail_parser::MimeHeaders;
    assert_eq!(pictures[0].content_id(), Some("tide"));
    assert!(parsed.body_html(0).unwrap().contains("src=\"cid:tide\""));
}

#[test]
fn withdrawn_alert_asks_for_nothing() {
    let (text, _) = bodies(&message(&notice(NoticeReason::Withdrawn), false));
    assert!(text.starts_with("WITHDRAWN, was CALL: Heron ward, bed 4"), "{text}");
    assert!(!text.contains("Per local protocol:") && !text.contains("Answer by"), "{text}");
}

#[test]
fn no_message_says_safe_or_stop() {
    for reason in REASONS {
        let (text, html) = bodies(&message(&notice(reason), false));
        for body in [text.to_lowercase(), html.to_lowercase()] {
            assert!(!body.contains("safe") && !body.contains("stop the"), "{body}");
        }
    }
}

#[test]
fn trouble_of_the_service_speaks_of_no_patient() {
    let mut notice = notice(NoticeReason::Raised);
    notice.alert.patient = None;
    notice.alert.concern = "disk".into();
    let message = message(&notice, false);
    assert!(message.contains("Subject: Ebbmark call: new alert about the service (disk)"));
    let (text, _) = bodies(&message);
    assert!(!text.contains("WHY IT MATTERS FOR THIS PATIENT"), "{text}");
}

#[test]
fn digest_puts_the_most_pressing_first_and_keeps_every_part_whole() {
    let withdrawn = notice(NoticeReason::Withdrawn);
    let mut later = notice(NoticeReason::Raised);
    later.answer_by = Some(at(45));
    later.alert.evidence.whom = "Heron ward, bed 9".into();
    let first = notice(NoticeReason::Raised);
    let recipient = Private::new("pharmacy@saltmere.example");
    let posts: Vec<Post<'_>> = [&withdrawn, &later, &first]
        .into_iter()
        .map(|notice| Post { notice, recipient: &recipient, message_id: "m@x.example", name: None })
        .collect();
    let envelope = Envelope { recipient: &recipient, message_id: "d@x.example", at: at(1) };
    let message = String::from_utf8(press(false).print(&Sheet::Digest(envelope, &posts))).unwrap();
    assert!(message.contains("Subject: Ebbmark call: 3 messages at once, first answer by "));
    let (text, html) = bodies(&message);
    insta::assert_snapshot!("digest", text);
    for part in ["1. CALL: Heron ward, bed 4", "2. CALL: Heron ward, bed 9", "3. WITHDRAWN"] {
        assert!(text.contains(part) && words(&html).contains(part), "{part} in {text}");
    }
    assert_eq!(text.matches("What was seen".to_uppercase().as_str()).count(), 2);
    assert!(!html.contains("cid:"), "a digest does without pictures");
}

#[test]
fn daily_message_carries_figures_and_the_whole_audit_head() {
    let day = crate::store::Day {
        raised: vec![("call".to_owned(), 2), ("review".to_owned(), 5)],
        open: 3,
        audit_rows: 4711,
        audit_head: "ab".repeat(32),
        ..Default::default()
    };
    let recipient = Private::new("keeper@saltmere.example");
    let envelope = Envelope { recipient: &recipient, message_id: "d@x.example", at: at(1) };
    let bytes = press(false).print(&Sheet::Daily(envelope, &day, None));
    let message = String::from_utf8(bytes).unwrap();
    assert!(message.contains("Subject: Ebbmark daily: alive, 3 open"));
    let (text, html) = bodies(&message);
    for body in [flat(&text), flat(&words(&html))] {
        let head = "ab".repeat(32);
        for part in
            ["3 alerts wait for an answer.", "2 call, 5 review", "4711", &head, "none in force"]
        {
            assert!(body.contains(part), "{part} in {body}");
        }
    }
}

/// Wording and layout as people get them; what they must say is checked above.
#[test]
fn wording_is_as_last_read_by_a_person() {
    for (name, reason) in [
        ("raised", NoticeReason::Raised),
        ("escalated", NoticeReason::Escalated),
        ("withdrawn", NoticeReason::Withdrawn),
    ] {
        insta::assert_snapshot!(name, bodies(&message(&notice(reason), false)).0);
    }
}
