//! From facts to people: alerts, messages, answers, escalation, restarts. On the shipped example protocol.

use crate::house::House;
use chrono::TimeDelta;
use ebbmark::clock::{Clock, Manual};
use ebbmark::ledger::Draft;
use ebbmark::service::Service;
use ebbmark::store::Reader;
use ebbmark_rules::alert::{AlertState, Decision, LifeStep};
use ebbmark_rules::fact::{
    At, Body, Description, MedicineName, Order, Place, Quality, Reading, Rhythm, Sex, Source,
    Tracing,
};
use ebbmark_rules::ids::{ContentHash, OrderId, PatientId, Person, TracingId, Ward};
use ebbmark_rules::units::{Ms, PerMinute};

fn start() -> At {
    "2026-03-02T09:00:00Z".parse().unwrap()
}

fn draft(body: Body) -> Draft {
    let source = Source::File {
        file: ContentHash::of(b"a file"),
        place: "row 1".into(),
        assumed_zone: None,
    };
    Draft { occurred_at: Some(start()), source, patient: PatientId::new("saltmarsh", "4711"), body }
}

/// A woman on haloperidol with a good tracing at 60/min, where every formula gives QTc = QT.
fn admitted_with_qt(qt_ms: f64) -> Vec<Draft> {
    let described = Description {
        sex: Some(Sex::Female),
        birth_date: "1950-01-01".parse().ok(),
        ..Description::default()
    };
    let order = Order {
        id: OrderId::new("o1"),
        medicine: MedicineName { codes: vec![], text: "haloperidol".into() },
        dose: None,
        route: None,
        frequency: None,
        starts: Some(start() - TimeDelta::days(2)),
        ends: None,
    };
    vec![
        draft(Body::Admitted(Place { ward: Ward::new("Tern"), bed: None })),
        draft(Body::Described(described)),
        draft(Body::Ordered(order)),
        draft(Body::Tracing(tracing("t1", qt_ms))),
    ]
}

fn tracing(id: &str, qt_ms: f64) -> Tracing {
    let ms = |value| Ms::new(value).unwrap();
    let reading =
        Reading { qt_tangent: Some(ms(qt_ms)), qt_threshold: Some(ms(qt_ms)), doubt: ms(5.0) };
    Tracing {
        id: TracingId::new(id),
        engine: "test".into(),
        quality: Quality::Good,
        why: vec![],
        rr: Some(ms(1000.0)),
        rate: PerMinute::new(60.0).ok(),
        rhythm: Some(Rhythm::Regular),
        qrs: Some(ms(90.0)),
        paced: false,
        global: Some(reading),
        leads: vec![],
        printed: None,
    }
}

async fn ward(house: &House) -> (Service, Manual) {
    let (clock, hand) = Clock::manual(start());
    (house.start_at(clock).await, hand)
}

/// The open alert of the highest tier.
fn call(house: &House) -> ebbmark::store::AlertRow {
    let alerts = Reader::open(&house.store()).unwrap().alerts(true).unwrap();
    alerts.into_iter().max_by_key(|row| row.alert.tier_rank).unwrap()
}

/// Waits for the first messages: two addresses of the nurse role about QTc, the pharmacist about electrolytes that were
/// never measured.
fn wait_first(house: &House) {
    tokio::task::block_in_place(|| {
        for recipient in ["tern-nurse", "nurse-in-charge", "tern-pharmacist"] {
            house.wait_mails_to(recipient, 1);
        }
    });
}

fn wait_doctor(house: &House) {
    tokio::task::block_in_place(|| house.wait_mails_to("ward-doctor", 1));
}

#[tokio::test(flavor = "multi_thread")]
async fn unanswered_alert_goes_to_the_next_role_and_an_answer_ends_that() {
    let house = House::new();
    let (service, hand) = ward(&house).await;
    service.ledger().learn(admitted_with_qt(520.0)).await.unwrap();
    wait_first(&house);
    let first = call(&house);
    assert_eq!(first.alert.tier.as_str(), "call");

    hand.set(start() + TimeDelta::minutes(14));
    service.ledger().advance().await.unwrap();
    assert_eq!(house.mails_to("ward-doctor"), 0, "not early");
    hand.set(start() + TimeDelta::minutes(16));
    wait_doctor(&house);
    assert_eq!((house.mails_to("tern-nurse"), house.mails_to("ward-doctor")), (1, 1));

    let answer = Body::Acknowledged {
        alert: first.alert.id.clone(),
        by: Person::new("ines"),
        intent: "prescriber informed".into(),
    };
    let answer = Draft {
        occurred_at: None,
        source: Source::Person(Person::new("ines")),
        patient: None,
        body: answer,
    };
    service.ledger().learn(vec![answer]).await.unwrap();
    assert_eq!(call(&house).alert.state, AlertState::Acknowledged);
    hand.set(start() + TimeDelta::minutes(60));
    service.ledger().advance().await.unwrap();
    assert_eq!(house.mails_to("ward-doctor"), 1, "answered: nobody further is told");
    service.stop().await.unwrap();
}

/// Many alerts in one moment are one message to a person, and each of them is told.
#[tokio::test(flavor = "multi_thread")]
async fn many_alerts_at_once_are_one_message_and_each_is_told() {
    let house = House::new();
    let (service, _hand) = ward(&house).await;
    let patients = 12;
    let drafts = (0..patients).flat_map(|number: usize| {
        let patient = PatientId::new("saltmarsh", &number.to_string());
        admitted_with_qt(520.0).into_iter().map(move |draft| Draft {
            patient: patient.clone(),
            source: Source::File {
                file: ContentHash::of(b"a file"),
                place: format!("row {number}").into(),
                assumed_zone: None,
            },
            ..draft
        })
    });
    service.ledger().learn(drafts.collect()).await.unwrap();
    tokio::task::block_in_place(|| house.wait_mails_to("tern-nurse", 1));
    let told = || {
        let alerts = Reader::open(&house.store()).unwrap().alerts(true).unwrap();
        let is_told = |decision: &Decision| {
            matches!(decision, Decision::Life { step: LifeStep::Told { recipient }, .. }
                if recipient.expose().starts_with("tern-nurse"))
        };
        alerts.iter().filter(|row| row.life.iter().any(is_told)).count()
    };
    let until = std::time::Instant::now() + std::time::Duration::from_secs(60);
    while told() < patients {
        assert!(std::time::Instant::now() < until, "{} of {patients} told", told());
        tokio::time::sleep(std::time::Duration::from_millis(20)).await;
    }
    assert_eq!(house.mails_to("tern-nurse"), 1);
    let mail = house.mails().into_iter().find(|mail| mail.contains("To: tern-nurse")).unwrap();
    assert!(mail.contains("Subject: Ebbmark call: 12 messages at once, first answer by"), "{mail}");
    assert_eq!(Reader::open(&house.store()).unwrap().audit().unwrap().broken, None);
    service.stop().await.unwrap();
}

#[tokio::test(flavor = "multi_thread")]
async fn restart_gives_the_same_decisions_and_tells_nobody_again() {
    let house = House::new();
    let (service, hand) = ward(&house).await;
    service.ledger().learn(admitted_with_qt(520.0)).await.unwrap();
    wait_first(&house);
    hand.set(start() + TimeDelta::minutes(16));
    wait_doctor(&house);
    service.stop().await.unwrap();
    let before = Reader::open(&house.store()).unwrap().decisions_after(0).unwrap();
    let mails = house.mails();

    let (clock, _hand) = Clock::manual(start() + TimeDelta::minutes(17));
    let service = house.start_at(clock).await;
    let folded = service.folded();
    assert_eq!((folded.different, folded.unclaimed), (0, 0), "{folded:?}");
    assert_eq!(usize::try_from(folded.stored).unwrap(), before.len());
    service.stop().await.unwrap();
    let after = Reader::open(&house.store()).unwrap().decisions_after(0).unwrap();
    assert_eq!(before, after);
    assert_eq!(mails, house.mails());
}

/// A deadline that fell due while the service was down is caught up as of its own due time.
#[tokio::test(flavor = "multi_thread")]
async fn deadline_missed_while_down_is_caught_up_as_of_its_due_time() {
    let house = House::new();
    let (service, _hand) = ward(&house).await;
    service.ledger().learn(admitted_with_qt(520.0)).await.unwrap();
    wait_first(&house);
    service.stop().await.unwrap();

    let (clock, _hand) = Clock::manual(start() + TimeDelta::minutes(25));
    let service = house.start_at(clock).await;
    wait_doctor(&house);
    let escalated = call(&house).life.into_iter().find_map(|decision| match decision {
        Decision::Life { at, step: LifeStep::Escalated { .. }, .. } => Some(at),
        Decision::Raised(_) | Decision::Changed(_) | Decision::Life { .. } | Decision::Tell(_) => {
            None
        }
    });
    assert_eq!(escalated, Some(start() + TimeDelta::minutes(15)));
    service.stop().await.unwrap();
}

#[tokio::test(flavor = "multi_thread")]
async fn same_row_again_is_not_learned_again() {
    let house = House::new();
    let (service, hand) = ward(&house).await;
    service.ledger().learn(admitted_with_qt(520.0)).await.unwrap();
    let count = || {
        let mut count = 0;
        let reader = Reader::open(&house.store()).unwrap();
        reader
            .facts(|_, fact| {
                count += usize::from(matches!(fact.source, Source::File { .. }));
                Ok(())
            })
            .unwrap();
        count
    };
    assert_eq!(count(), 4);
    hand.set(start() + TimeDelta::minutes(1));
    let again = service.ledger().learn(admitted_with_qt(520.0)).await.unwrap();
    assert_eq!((count(), again.raised), (4, 0));
    service.stop().await.unwrap();
}

/// What another version of the program would have decided otherwise: people are told what they were not, and the
/// difference is a technical alert. Here the stored decisions are made to differ by hand.
#[tokio::test(flavor = "multi_thread")]
async fn history_that_folds_otherwise_is_told_and_does_not_stop_the_service() {
    let house = House::new();
    let (service, _hand) = ward(&house).await;
    service.ledger().learn(admitted_with_qt(520.0)).await.unwrap();
    wait_first(&house);
    service.stop().await.unwrap();
    let meddler = rusqlite::Connection::open(house.store().database()).unwrap();
    meddler
        .execute_batch(
            "DROP TRIGGER decision_keeps; DROP TRIGGER outbox_keeps; DELETE FROM outbox; DELETE FROM decision; DELETE FROM alert;",
        )
        .unwrap();
    drop(meddler);

    let (clock, _hand) = Clock::manual(start() + TimeDelta::minutes(1));
    let service = house.start_at(clock).await;
    assert!(service.folded().different > 0);
    assert_eq!(service.folded().stored, 0);
    tokio::task::block_in_place(|| house.wait_mails_to("ebbmark-keeper", 1));
    let alerts = Reader::open(&house.store()).unwrap().alerts(false).unwrap();
    assert!(alerts.iter().any(|row| row.alert.patient.is_none()), "a technical alert");
    assert!(
        alerts.iter().any(|row| row.alert.tier.as_str() == "call"),
        "the patient's alert stands again"
    );
    service.stop().await.unwrap();
}

#[tokio::test(flavor = "multi_thread")]
async fn bad_protocol_leaves_the_last_good_one_in_force_and_says_so() {
    let house = House::new();
    let (service, _hand) = ward(&house).await;
    let in_force = || Reader::open(&house.store()).unwrap().texts().unwrap().len();
    let before = in_force();
    let good = std::fs::read_to_string(house.path().join("protocol.toml")).unwrap();
    house.write(
        "protocol.toml",
        good.replace("answer_within_min = 15", "answer_within_min = \"soon\""),
    );
    service.reload().await.unwrap();
    assert_eq!(in_force(), before);
    let alerts = Reader::open(&house.store()).unwrap().alerts(false).unwrap();
    assert_eq!(alerts.len(), 1, "one technical alert");

    house.write("protocol.toml", good.replace("answer_within_min = 15", "answer_within_min = 20"));
    service.reload().await.unwrap();
    assert_eq!(in_force(), before + 1);
    assert!(Reader::open(&house.store()).unwrap().alerts(false).unwrap().is_empty(), "well again");
    service.stop().await.unwrap();
}

#[tokio::test(flavor = "multi_thread")]
async fn without_any_good_protocol_nothing_starts() {
    let house = House::new();
    house.write("protocol.toml", "tier = 3");
    let settings = ebbmark::settings::Settings::read(&house.settings_file()).unwrap();
    let render = ebbmark::mail::renderer(&settings);
    let setup = ebbmark::service::Setup {
        settings,
        settings_file: house.settings_file(),
        clock: Clock::System,
        render,
    };
    let error = Service::start(setup).await.unwrap_err().to_string();
    assert!(error.contains("protocol.toml, line 1, column "), "{error}");
}

/// The way that a person has: `ebbmark answer` beside the running service.
#[tokio::test(flavor = "multi_thread")]
async fn answer_from_the_command_line_is_taken_up_and_ends_the_waiting() {
    let house = House::new();
    let (service, hand) = ward(&house).await;
    service.ledger().learn(admitted_with_qt(520.0)).await.unwrap();
    wait_first(&house);
    let alert = call(&house).alert.id;
    let answer = |act: [&str; 2]| {
        let settings = house.settings_file();
        let output = std::process::Command::new(env!("CARGO_BIN_EXE_ebbmark"))
            .args(["answer", alert.as_str(), "--by", "ines.quill", act[0], act[1], "--settings"])
            .arg(settings)
            .output()
            .unwrap();
        output.status.code().unwrap()
    };
    assert_eq!(answer(["--hand-over", "night porter"]), 2, "a role that reaches nobody");
    assert_eq!(answer(["--acknowledge", "fine"]), 2, "no intent of the protocol");
    assert_eq!(answer(["--acknowledge", "prescriber informed"]), 0);
    let until = std::time::Instant::now() + std::time::Duration::from_secs(20);
    while call(&house).alert.state != AlertState::Acknowledged {
        assert!(std::time::Instant::now() < until, "the answer was not taken up");
        tokio::time::sleep(std::time::Duration::from_millis(20)).await;
    }
    hand.set(start() + TimeDelta::minutes(40));
    service.ledger().advance().await.unwrap();
    assert_eq!(house.mails_to("ward-doctor"), 0, "an answered alert does not go on");
    service.stop().await.unwrap();
}
