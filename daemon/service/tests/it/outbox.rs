//! The outbox and the audit: what can't happen to a message, and what shows when somebody changed the past.

use ebbmark::store::outbox::{Sending, message_id};
use ebbmark::store::{Reader, Store, StoreError, StorePath, Writing};
use ebbmark_rules::alert::{Alert, AlertState, Decision, Evidence, LifeStep, Notice, NoticeReason};
use ebbmark_rules::fact::At;
use ebbmark_rules::ids::{AlertId, ContentHash, PatientId, Private, Role, RuleId, TierName};

fn at(second: i64) -> At {
    At::from_timestamp_micros(1_790_000_000_000_000 + second * 1_000_000).unwrap()
}

fn alert(id: &str) -> Alert {
    Alert {
        id: AlertId::new(id),
        patient: PatientId::new("saltmere", "4711"),
        concern: "qtc".into(),
        raised_at: at(0),
        as_of: at(0),
        state: AlertState::Open,
        tier: TierName::new("call"),
        tier_rank: 2,
        rule: RuleId::new("qtc-500"),
        evidence: Evidence {
            whom: "ward 3, bed 2".into(),
            seen: "QTc is 512 ms".into(),
            to_do: "call the ward doctor".into(),
            why: vec![],
            values: vec![],
            formulas: vec![],
            tracing: None,
            medicines: vec![],
            electrolytes: vec![],
            baseline: "none".into(),
            unknown: vec![],
            borderline: false,
            protocol: "example".into(),
            protocol_version: "1".into(),
            protocol_hash: ContentHash::of(b""),
            protocol_signed: false,
            tide: None,
        },
    }
}

fn notice(id: &str, step: u32, reason: NoticeReason) -> Notice {
    Notice {
        step,
        reason,
        role: Role::new("nurse"),
        recipients: vec![Private::new("nurse@saltmere.example")],
        at: at(0),
        answer_by: None,
        then: None,
        because: "".into(),
        alert: alert(id),
    }
}

fn post(change: &Writing<'_>, notice: &Notice) {
    change.decision(&Decision::Tell(Box::new(notice.clone())), None).unwrap();
    for recipient in &notice.recipients {
        let id = message_id(&notice.alert.id, notice.step, recipient, "saltmere.example");
        change.post(notice, recipient, &id, id.as_bytes()).unwrap();
    }
}

/// A store with one alert raised and its message posted at second 0.
fn posted() -> (tempfile::TempDir, StorePath, Store) {
    let folder = tempfile::tempdir().unwrap();
    let path = StorePath::new(folder.path().join("store"));
    let mut store = Store::open(&path).unwrap();
    let change = store.write(at(0)).unwrap();
    change.decision(&Decision::Raised(Box::new(alert("a"))), None).unwrap();
    post(&change, &notice("a", 0, NoticeReason::Raised));
    change.commit().unwrap();
    (folder, path, store)
}

fn claim(store: &mut Store, second: i64) -> Vec<ebbmark::store::outbox::Outgoing> {
    let change = store.write(at(second)).unwrap();
    let claimed = change.claim(10).unwrap();
    change.commit().unwrap();
    claimed
}

fn settle(store: &mut Store, second: i64, id: i64, sending: &Sending) -> Result<(), StoreError> {
    let change = store.write(at(second)).unwrap();
    change.settle(id, sending)?;
    change.commit()
}

fn counts(path: &StorePath) -> Vec<(String, u64)> {
    Reader::open(path).unwrap().message_counts().unwrap().into_iter().collect()
}

#[test]
fn message_is_claimed_once_and_sent_once() {
    let (_folder, path, mut store) = posted();
    let claimed = claim(&mut store, 1);
    assert_eq!(claimed.len(), 1);
    assert!(claim(&mut store, 1).is_empty());
    let id = claimed[0].id;
    settle(&mut store, 2, id, &Sending::Sent { reply: "250 ok".to_owned() }).unwrap();
    let again = settle(&mut store, 3, id, &Sending::Sent { reply: "250 ok".to_owned() });
    assert!(matches!(again, Err(StoreError::NotThere { .. })), "{again:?}");
    assert_eq!(counts(&path), [("sent".to_owned(), 1)]);
}

#[test]
fn waiting_message_keeps_its_bytes_and_its_id() {
    let (_folder, _path, mut store) = posted();
    let first = claim(&mut store, 1);
    let waiting = Sending::Waiting { next_try: at(30), why: "421 come back".to_owned() };
    settle(&mut store, 2, first[0].id, &waiting).unwrap();
    assert_eq!(store.next_message().unwrap(), Some(at(30)));
    assert!(claim(&mut store, 29).is_empty());
    let second = claim(&mut store, 30);
    assert_eq!((&second[0].bytes, &second[0].message_id), (&first[0].bytes, &first[0].message_id));
    assert_eq!(second[0].attempts, 1);
}

/// Messages in a digest move together, keep its bytes and id over a crash, and can't be put into another.
#[test]
fn digest_moves_as_one_and_stays_the_same() {
    let (_folder, path, mut store) = posted();
    let change = store.write(at(0)).unwrap();
    for (step, reason) in [(1, NoticeReason::Escalated), (2, NoticeReason::TierRaised)] {
        post(&change, &notice("a", step, reason));
    }
    change.commit().unwrap();
    let change = store.write(at(1)).unwrap();
    assert_eq!(change.crowded(4).unwrap(), []);
    let crowds = change.crowded(3).unwrap();
    assert_eq!(crowds.len(), 1);
    change.gather(&crowds[0], "digest@saltmarsh.example", b"all three").unwrap();
    assert!(change.gather(&crowds[0], "other@saltmarsh.example", b"again").is_err());
    drop(change);
    let change = store.write(at(1)).unwrap();
    change.gather(&crowds[0], "digest@saltmarsh.example", b"all three").unwrap();
    change.commit().unwrap();

    let first = claim(&mut store, 1);
    assert_eq!((first.len(), first[0].rows.len()), (1, 3));
    assert_eq!(first[0].bytes.0, b"all three");
    drop(store);
    let mut store = Store::open(&path).unwrap();
    let change = store.write(at(60)).unwrap();
    assert_eq!(change.unclaim().unwrap(), 3);
    change.commit().unwrap();
    let again = claim(&mut store, 60);
    assert_eq!(again.len(), 1);
    assert_eq!((&again[0].bytes, &again[0].message_id), (&first[0].bytes, &first[0].message_id));
    for row in &again[0].rows {
        settle(&mut store, 61, *row, &Sending::Sent { reply: "250 ok".to_owned() }).unwrap();
    }
    assert_eq!(counts(&path), [("sent".to_owned(), 3)]);
}

#[test]
fn message_claimed_when_the_service_died_goes_out_again() {
    let (_folder, path, mut store) = posted();
    let first = claim(&mut store, 1);
    drop(store);
    let mut store = Store::open(&path).unwrap();
    let change = store.write(at(60)).unwrap();
    assert_eq!(change.unclaim().unwrap(), 1);
    change.commit().unwrap();
    assert_eq!(claim(&mut store, 60)[0].bytes, first[0].bytes);
}

#[test]
fn retries_end_once_somebody_answered_but_a_withdrawal_still_goes_out() {
    let (_folder, path, mut store) = posted();
    let waiting = |next| Sending::Waiting { next_try: at(next), why: "no route".to_owned() };
    let first = claim(&mut store, 1);
    settle(&mut store, 2, first[0].id, &waiting(30)).unwrap();
    let change = store.write(at(10)).unwrap();
    let step = LifeStep::Withdrawn { because: "the result was corrected".into() };
    change.decision(&Decision::Life { alert: AlertId::new("a"), at: at(10), step }, None).unwrap();
    post(&change, &notice("a", 1, NoticeReason::Withdrawn));
    change.commit().unwrap();
    assert_eq!(counts(&path), [("moot".to_owned(), 1), ("pending".to_owned(), 1)]);
    let withdrawal = claim(&mut store, 11);
    settle(&mut store, 12, withdrawal[0].id, &waiting(40)).unwrap();
    assert_eq!(counts(&path), [("moot".to_owned(), 1), ("waiting".to_owned(), 1)]);
}

#[test]
fn message_that_fails_after_the_answer_is_not_tried_again() {
    let (_folder, path, mut store) = posted();
    let first = claim(&mut store, 1);
    let change = store.write(at(2)).unwrap();
    let step = LifeStep::Acknowledged { by: "ines".into(), intent: "repeat tracing".into() };
    change.decision(&Decision::Life { alert: AlertId::new("a"), at: at(2), step }, None).unwrap();
    change.commit().unwrap();
    settle(
        &mut store,
        3,
        first[0].id,
        &Sending::Waiting { next_try: at(30), why: "reset".to_owned() },
    )
    .unwrap();
    assert_eq!(counts(&path), [("moot".to_owned(), 1)]);
}

#[test]
fn same_notice_twice_is_refused_by_the_tables() {
    let (_folder, _path, mut store) = posted();
    let change = store.write(at(1)).unwrap();
    let notice = notice("a", 0, NoticeReason::Raised);
    let again = change.post(&notice, &notice.recipients[0], "another@id", b"x");
    assert!(matches!(again, Err(StoreError::Sql { .. })));
}

#[test]
fn second_open_alert_for_one_concern_is_refused_by_the_tables() {
    let (_folder, _path, mut store) = posted();
    let change = store.write(at(1)).unwrap();
    assert!(change.decision(&Decision::Raised(Box::new(alert("b"))), None).is_err());
    drop(change);
    let change = store.write(at(2)).unwrap();
    let step = LifeStep::ClosedByFacts { because: "QTc is back".into() };
    change.decision(&Decision::Life { alert: AlertId::new("a"), at: at(2), step }, None).unwrap();
    change.decision(&Decision::Raised(Box::new(alert("b"))), None).unwrap();
}

#[test]
fn transaction_that_is_not_committed_leaves_nothing() {
    let (_folder, path, mut store) = posted();
    let change = store.write(at(1)).unwrap();
    post(&change, &notice("a", 1, NoticeReason::Escalated));
    drop(change);
    assert_eq!(counts(&path), [("pending".to_owned(), 1)]);
}

#[test]
fn second_service_on_one_store_is_refused() {
    let (_folder, path, _store) = posted();
    assert!(matches!(Store::open(&path), Err(StoreError::Taken { .. })));
}

/// Whoever can write the file can drop the triggers; the chain shows what they did.
#[test]
fn changed_past_shows_in_the_audit() {
    let (_folder, path, store) = posted();
    drop(store);
    let whole = Reader::open(&path).unwrap().audit().unwrap();
    assert_eq!((whole.rows, whole.broken), (2 + 1, None));

    let meddler = rusqlite::Connection::open(path.database()).unwrap();
    let change = "UPDATE decision SET body = replace(body, '512', '412')";
    assert!(meddler.execute(change, []).is_err(), "the trigger stands in the way");
    meddler.execute_batch(&format!("DROP TRIGGER decision_only_grows; {change};")).unwrap();
    let broken = Reader::open(&path).unwrap().audit().unwrap().broken.unwrap();
    assert!(broken.starts_with("decision 1 is not what was written"), "{broken}");

    meddler
        .execute_batch(
            "DROP TRIGGER audit_only_grows; UPDATE audit SET at_us = at_us + 1 WHERE seq = 1;",
        )
        .unwrap();
    let broken = Reader::open(&path).unwrap().audit().unwrap().broken.unwrap();
    assert_eq!(broken, "row 1 was changed");
}
