//! Messages to a real mail server: taken, refused, away and back, protected, and a crash in the gap that SMTP leaves.

use acceptance::{Fault, Hospital, Mail, PostOffice, Security, Verb};
use chrono::TimeDelta;
use ebbmark::clock::{Clock, Manual};
use ebbmark::service::Service;
use ebbmark_rules::alert::{Decision, LifeStep};
use ebbmark_rules::fact::{At, Trouble};
use std::time::Duration;
use tokio::task::block_in_place;

const NURSES: [&str; 2] = ["nurse-in-charge@saltmarsh.example", "tern-nurse@saltmarsh.example"];
const DOCTOR: &str = "ward-doctor@saltmarsh.example";
const KEEPER: &str = "ebbmark-keeper@saltmarsh.example";

fn morning() -> At {
    "2026-03-02T09:00:00Z".parse().unwrap()
}

fn to<'a>(taken: &'a [Mail], recipient: &str) -> Vec<&'a Mail> {
    taken.iter().filter(|mail| mail.to == [recipient]).collect()
}

fn all_reached(taken: &[Mail], recipients: &[&str]) -> bool {
    recipients.iter().all(|recipient| !to(taken, recipient).is_empty())
}

async fn ward(security: Security) -> (Hospital, PostOffice, Service, Manual) {
    let hospital = Hospital::new();
    let office = PostOffice::open(security, hospital.path());
    hospital.mail_by(&office);
    let (clock, hand) = Clock::manual(morning());
    let service = hospital.start(clock).await;
    (hospital, office, service, hand)
}

#[tokio::test(flavor = "multi_thread")]
async fn taken_message_is_told_and_never_sent_again() {
    let (hospital, office, service, hand) = ward(Security::Plain).await;
    hospital.export_low_potassium(1, morning());
    block_in_place(|| {
        office.wait("both nurses' message", |taken, _| all_reached(taken, &NURSES));
        hospital.wait_outbox("all sent", |outbox| outbox.keys().eq(["sent"]));
    });
    let before = office.taken();
    for mail in &before {
        assert_eq!((mail.from.as_str(), mail.to.len()), ("ebbmark@saltmarsh.example", 1));
        assert_eq!(mail.header("To"), mail.to[0], "one recipient, and no sight of another");
    }
    hand.set(morning() + TimeDelta::minutes(5));
    service.ledger().advance().await.unwrap();
    service.stop().await.unwrap();
    // Also after a start nothing goes out twice.
    let service = hospital.start(Clock::manual(morning() + TimeDelta::minutes(6)).0).await;
    service.stop().await.unwrap();
    assert_eq!(office.taken(), before);
    let alerts = hospital.reader().alerts(true).unwrap();
    let told = alerts
        .iter()
        .flat_map(|row| &row.life)
        .filter(|decision| matches!(decision, Decision::Life { step: LifeStep::Told { .. }, .. }));
    assert_eq!(told.count(), before.len(), "what the server took is a fact about the alert");
}

#[tokio::test(flavor = "multi_thread")]
async fn message_goes_through_tls_with_sign_in() {
    for security in [Security::StartTls, Security::Wrapped] {
        let (hospital, office, service, _hand) = ward(security).await;
        hospital.export_low_potassium(1, morning());
        block_in_place(|| office.wait("messages", |taken, _| all_reached(taken, &NURSES)));
        let taken = office.taken();
        assert!(taken.iter().all(|mail| mail.user.as_deref() == Some("ebbmark")), "{security:?}");
        service.stop().await.unwrap();
    }
}

/// Neither a foreign certificate nor a server without STARTTLS gets a word of the message, and a wrong password is no
/// recipient's fault.
#[tokio::test(flavor = "multi_thread")]
async fn message_waits_where_the_line_can_not_be_trusted() {
    let stripped: fn(&Hospital, &PostOffice) = |hospital, office| {
        let settings = office.settings();
        hospital.mail(&settings.replace("\"wrapped\"", "\"starttls\""));
    };
    let foreign: fn(&Hospital, &PostOffice) = |hospital, office| {
        let elsewhere = tempfile::tempdir().unwrap();
        let other = PostOffice::open(Security::Wrapped, elsewhere.path());
        std::fs::copy(
            elsewhere.path().join("post-office.pem"),
            hospital.path().join("post-office.pem"),
        )
        .unwrap();
        hospital.mail_by(office);
        drop(other);
    };
    let password: fn(&Hospital, &PostOffice) = |hospital, office| {
        std::fs::write(hospital.path().join("mail-password"), "wrong").unwrap();
        hospital.mail_by(office);
    };
    for (name, spoil) in [("no starttls", stripped), ("foreign", foreign), ("password", password)] {
        let hospital = Hospital::new();
        let office = PostOffice::open(Security::Wrapped, hospital.path());
        spoil(&hospital, &office);
        let (clock, _hand) = Clock::manual(morning());
        let service = hospital.start(clock).await;
        service.ledger().trouble(Trouble::Settings, true).await.unwrap();
        block_in_place(|| {
            hospital.wait_outbox(name, |outbox| outbox.get("waiting") == Some(&1));
        });
        assert_eq!(office.taken(), [], "{name}");
        service.stop().await.unwrap();
    }
}

#[tokio::test(flavor = "multi_thread")]
async fn one_refused_recipient_does_not_keep_the_message_from_the_others() {
    let (hospital, office, service, _hand) = ward(Security::Plain).await;
    office.refuse(NURSES[1]);
    hospital.export_low_potassium(1, morning());
    block_in_place(|| {
        office.wait("other nurse, and the keeper", |taken, _| {
            all_reached(taken, &[NURSES[0], KEEPER])
        });
        hospital.wait_outbox("an end", |outbox| outbox.keys().eq(["refused", "sent"]));
    });
    let taken = office.taken();
    assert!(to(&taken, NURSES[1]).is_empty());
    assert!(to(&taken, DOCTOR).is_empty(), "somebody was reached: the doctor's turn comes later");
    assert_eq!(hospital.outbox()["refused"], 1);
    service.stop().await.unwrap();
}

/// Nobody of the first role can be reached: the clock stands still, and the next role is told all the same.
#[tokio::test(flavor = "multi_thread")]
async fn where_nobody_can_be_reached_the_next_role_is_told_at_once() {
    let (hospital, office, service, _hand) = ward(Security::Plain).await;
    for nurse in NURSES {
        office.refuse(nurse);
    }
    hospital.export_low_potassium(1, morning());
    block_in_place(|| {
        office.wait("doctor's message", |taken, _| all_reached(taken, &[DOCTOR, KEEPER]));
    });
    service.stop().await.unwrap();
}

#[tokio::test(flavor = "multi_thread")]
async fn server_that_went_away_gets_every_message_once_it_is_back() {
    let (hospital, mut office, service, hand) = ward(Security::Plain).await;
    office.close();
    hospital.export_low_potassium(1, morning());
    let mut now = morning();
    block_in_place(|| hospital.wait_outbox("waiting", |outbox| outbox.contains_key("waiting")));
    // Minutes without a mail server are trouble of their own.
    let is_known = || {
        let alerts = hospital.reader().alerts(true).unwrap();
        alerts.iter().any(|row| &*row.alert.concern == "mail")
    };
    let mut steps = 0;
    while !is_known() {
        steps += 1;
        assert!(steps < 600, "nobody noticed that no mail goes out");
        now += TimeDelta::seconds(20);
        hand.set(now);
        tokio::time::sleep(Duration::from_millis(50)).await;
    }
    // Long enough that every message has come to the longest pause; the first success brings the others along.
    office.reopen();
    now += TimeDelta::minutes(19);
    hand.set(now);
    block_in_place(|| {
        office.wait("every message", |taken, _| {
            all_reached(taken, &[NURSES[0], NURSES[1], DOCTOR, KEEPER])
        });
        hospital.wait_outbox("all sent", |outbox| outbox.keys().eq(["sent"]));
    });
    let taken = office.taken();
    let mut ids: Vec<String> = taken.iter().map(|mail| mail.header("Message-ID")).collect();
    ids.sort();
    let count = ids.len();
    ids.dedup();
    assert_eq!(ids.len(), count, "each message once");
    service.stop().await.unwrap();
}

/// Once a day at the hospital's own time, also over a restart; its audit head is found in the chain again.
#[tokio::test(flavor = "multi_thread")]
async fn daily_message_comes_once_a_day_with_the_audit_head() {
    let hospital = Hospital::new();
    let office = PostOffice::open(Security::Plain, hospital.path());
    let daily = format!("[mail.daily]\nat = \"07:00\"\nto = [\"{KEEPER}\"]\n");
    hospital.mail(&format!("{}{daily}", office.settings()));
    let early = morning() - TimeDelta::hours(3);
    let (clock, hand) = Clock::manual(early);
    let service = hospital.start(clock).await;
    service.ledger().advance().await.unwrap();
    assert_eq!(office.taken(), [], "not before its time");
    hand.set(early + TimeDelta::minutes(61));
    block_in_place(|| office.wait("the day's message", |taken, _| all_reached(taken, &[KEEPER])));
    block_in_place(|| hospital.wait_outbox("sent", |outbox| outbox.keys().eq(["sent"])));
    service.stop().await.unwrap();
    let (clock, hand) = Clock::manual(early + TimeDelta::hours(2));
    let service = hospital.start(clock).await;
    hand.set(early + TimeDelta::hours(26));
    // Feeds have fallen silent by then, which the same person is told of.
    let daily = |mail: &&Mail| mail.header("Subject").starts_with("Ebbmark daily: alive, ");
    block_in_place(|| {
        office.wait("the next day's", |taken, _| taken.iter().filter(daily).count() > 1);
    });
    service.stop().await.unwrap();

    let taken = office.taken();
    let days: Vec<&Mail> = taken.iter().filter(daily).collect();
    assert_eq!(days.len(), 2, "one a day");
    for mail in days {
        let text = String::from_utf8_lossy(&mail.bytes).replace("=\r\n", "");
        let head = text.split_once("- Head: ").unwrap().1.get(..64).unwrap();
        let row = hospital.reader().audit_row(head).unwrap();
        assert!(row.is_some(), "{head} stands in the chain");
    }
    assert_eq!(hospital.reader().audit_row(&"0".repeat(64)).unwrap(), None);
}

/// The server takes the message and the program dies before it hears so. Nobody can know; the message goes out again,
/// and is the same one: one row, one Message-ID, the same bytes.
#[test]
fn crash_between_the_final_dot_and_the_answer_repeats_the_same_message() {
    let hospital = Hospital::new();
    let office = PostOffice::open(Security::Plain, hospital.path());
    // Nobody looks at the deadline here: the program is dead long before.
    hospital.mail(&office.settings().replace("attempt_s = 3", "attempt_s = 600"));
    office.fault(Verb::Dot, Fault::Silence, 1);
    let program = env!("CARGO_BIN_EXE_ebbmark-under-test");
    let mut first = hospital.spawn(program);
    hospital.export_low_potassium(1, Clock::System.now());
    office.wait_faults();
    hospital.wait_outbox("others sent, one claimed", |outbox| {
        outbox.get("claimed") == Some(&1) && !outbox.contains_key("pending")
    });
    first.kill().unwrap();
    first.wait().unwrap();
    let (before, rows) = (office.taken(), hospital.outbox().values().sum::<u64>());

    let mut second = hospital.spawn(program);
    office.wait("the message again", |taken, _| taken.len() > before.len());
    hospital.wait_outbox("all sent", |outbox| outbox.keys().eq(["sent"]));
    second.kill().unwrap();
    second.wait().unwrap();
    let taken = office.taken();
    assert_eq!(taken.len(), before.len() + 1, "only the one in the gap is repeated");
    let again = taken.last().unwrap();
    assert!(before.contains(again), "the same bytes under the same Message-ID");
    assert_eq!(hospital.outbox().values().sum::<u64>(), rows, "no second row");
}
