//! A mail server at its worst, at every verb.

use acceptance::{Fault, Hospital, PostOffice, Security, Verb};
use chrono::TimeDelta;
use ebbmark::clock::Clock;
use ebbmark_rules::fact::{At, Trouble};
use std::collections::BTreeMap;
use std::time::Duration;
use tokio::task::block_in_place;

/// What becomes of a message after one fault.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
enum Fate {
    /// Repeated, and taken once.
    Once,
    /// Taken twice, the same both times: nobody could know.
    Twice,
    /// Taken at the first attempt.
    AtOnce,
    /// Given up for this recipient.
    GivenUp,
}

fn fate(verb: Verb, fault: &Fault) -> Fate {
    match (verb, fault) {
        // The 250 stands, whatever becomes of the goodbye.
        (Verb::Quit, _) => Fate::AtOnce,
        (_, Fault::Late(wait)) if *wait < Duration::from_secs(1) => Fate::AtOnce,
        (Verb::Dot, Fault::Drops | Fault::Silence | Fault::Late(_)) => Fate::Twice,
        // RFC 5321, 4.2.1: 5 for good, 4 for now. About the recipient from RCPT on, about us before.
        (Verb::Rcpt | Verb::Data | Verb::Dot, Fault::Says(words)) if words.starts_with('5') => {
            Fate::GivenUp
        }
        _ => Fate::Once,
    }
}

fn morning() -> At {
    "2026-03-02T09:00:00Z".parse().unwrap()
}

#[tokio::test(flavor = "multi_thread")]
async fn each_fault_at_each_verb_leads_where_it_should() {
    let hospital = Hospital::new();
    let office = PostOffice::open(Security::StartTls, hospital.path());
    hospital.mail(&office.settings().replace("attempt_s = 3", "attempt_s = 2"));
    let (clock, hand) = Clock::manual(morning());
    let service = hospital.start(clock).await;
    let mut now = morning();
    let faults = [
        Fault::Says("451 4.3.0 come back later"),
        Fault::Says("550 5.7.1 not here"),
        Fault::Says("250 ok"),
        Fault::Says("\u{1}\u{2} this is no SMTP"),
        Fault::Drops,
        Fault::Silence,
        Fault::Late(Duration::from_millis(300)),
        Fault::Late(Duration::from_millis(3000)),
    ];
    let mut wrong = Vec::new();
    for verb in Verb::ALL {
        for fault in &faults {
            // A 250 where one belongs is no fault; in the middle of STARTTLS or AUTH it is one of its own kind.
            let is_right = matches!(fault, Fault::Says("250 ok"))
                && !matches!(verb, Verb::Data | Verb::Connect);
            // A late or missing goodbye would only make the test slow.
            if is_right || (verb == Verb::Quit && matches!(fault, Fault::Silence | Fault::Late(_)))
            {
                continue;
            }
            let expected = fate(verb, fault);
            let (taken, sent) = (office.taken().len(), hospital.outbox());
            let count = |state: &str| hospital.outbox().get(state).copied().unwrap_or(0);
            let was = |state: &str| sent.get(state).copied().unwrap_or(0);
            office.fault(verb, fault.clone(), 1);
            service.ledger().trouble(Trouble::Settings, true).await.unwrap();
            block_in_place(|| {
                hospital.wait_outbox("an outcome", |outbox| {
                    !outbox.contains_key("claimed") && !outbox.contains_key("pending")
                });
            });
            let gave_up = count("refused") > was("refused");
            let at_once = count("sent") > was("sent") && !gave_up;
            // Those who are told of a refusal are told now; what waits goes out after its pause.
            now += TimeDelta::seconds(20);
            hand.set(now);
            block_in_place(|| {
                hospital.wait_outbox("an end", |outbox| {
                    outbox.keys().all(|state| state == "sent" || state == "refused")
                });
            });
            let new = office.taken().split_off(taken);
            let mut ids: BTreeMap<String, Vec<_>> = BTreeMap::new();
            for mail in &new {
                ids.entry(mail.header("Message-ID")).or_default().push(&mail.bytes);
            }
            let same = ids.values().all(|bytes| bytes.iter().all(|other| *other == bytes[0]));
            let most = ids.values().map(Vec::len).max().unwrap_or(0);
            let found = match (gave_up, at_once, most) {
                (true, ..) => Fate::GivenUp,
                (_, true, 1) => Fate::AtOnce,
                (_, false, 1) => Fate::Once,
                _ => Fate::Twice,
            };
            if found != expected || !same {
                wrong.push(format!("{verb:?} {fault:?}: {found:?}, expected {expected:?}"));
            }
            service.ledger().trouble(Trouble::Settings, false).await.unwrap();
        }
    }
    assert!(wrong.is_empty(), "{}", wrong.join("\n"));
    service.stop().await.unwrap();
}
