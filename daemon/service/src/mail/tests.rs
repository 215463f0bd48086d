use super::*;
use ebbmark_rules::alert::{
    Alert, AlertState, Evidence, EvidenceRow, FormulaRow, Notice, NoticeReason,
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
    Notice {
        step: 0,
        reason,
        role: Role::new("ward-pharmacist"),
        recipients: vec![Private::new("pharmacy@saltmere.example")],
        at: at(0),
        answer_by: Some(at(30)),
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
                tide: None,
            },
        },
    }
}

fn site() -> Site {
    Site {
        name: "Saltmere General".to_owned(),
        zone: chrono_tz::Europe::London,
        issuer: "saltmere".to_owned(),
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
    String::from_utf8(render(&site(), "ebbmark@saltmere.example", names, &post)).unwrap()
}

/// Undoes quoted-printable soft breaks and escapes as far as these texts need it (RFC 2045, 6.7).
fn plain(message: &str) -> String {
    message.replace("=\r\n", "").replace("\r\n", "\n").replace("=C2=B1", "±").replace("=3D", "=")
}

#[test]
fn same_notice_gives_the_same_bytes() {
    let notice = notice(NoticeReason::Raised);
    assert_eq!(message(&notice, false), message(&notice, false));
}

/// What `Every alert carries` asks for, in both bodies.
#[test]
fn both_bodies_say_everything() {
    let text = plain(&message(&notice(NoticeReason::Raised), false));
    let flat = text.split_whitespace().collect::<Vec<_>>().join(" ");
    for part in [
        "CALL: Heron ward, bed 4",
        "To do, per local protocol: call the ward doctor now; repeat the tracing",
        "QTc of 500 ms or more on a good tracing",
        "two listed medicines are active",
        "431 ms on 2 Mar; now 81 ms longer",
        "haloperidol, last given 3 h ago",
        "potassium 3.1 mmol/L, 2 h ago",
        "magnesium: never measured",
        "512 ± 9 ms",
        "limit: at least 500 ms",
        "file 3f2a90c1d4e5, tracing",
        "498 ms",
        "on the other side of the limit",
        "Saltmere example, version 1",
        "no hospital has signed this protocol",
        "it does not diagnose or prescribe",
        "No alert does not mean no risk",
    ] {
        assert_eq!(flat.matches(part).count(), 2, "{part} in:\n{text}");
    }
    assert!(text.contains("&lt;low&gt;"), "HTML is escaped");
}

#[test]
fn subject_and_headers_name_no_patient() {
    let text = message(&notice(NoticeReason::Escalated), true);
    let head = text.split("\r\n\r\n").next().unwrap();
    assert!(head.contains("Subject: Ebbmark call: not answered yet, answer by "), "{head}");
    for secret in ["4711", "Heron", "bed", "Ada", "Quill"] {
        assert!(!head.contains(secret), "{secret} in {head}");
    }
    assert!(!text.contains("4711-secret"), "a number never goes out");
}

#[test]
fn names_stand_in_the_body_only_where_the_site_says_so() {
    let notice = notice(NoticeReason::Raised);
    assert!(!message(&notice, false).contains("Quill"));
    assert!(plain(&message(&notice, true)).contains("CALL: Heron ward, bed 4 (Ada Quill)"));
}

#[test]
fn withdrawn_alert_asks_for_nothing() {
    let text = plain(&message(&notice(NoticeReason::Withdrawn), false));
    assert!(text.contains("WITHDRAWN"));
    assert!(!text.contains("To do, per local protocol"));
}

#[test]
fn no_message_says_safe_or_stop() {
    for reason in [
        NoticeReason::Raised,
        NoticeReason::Closed,
        NoticeReason::Withdrawn,
        NoticeReason::Escalated,
    ] {
        let text = plain(&message(&notice(reason), false)).to_lowercase();
        assert!(!text.contains("safe") && !text.contains("stop the"), "{text}");
    }
}
