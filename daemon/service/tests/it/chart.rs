//! From files to people, on the shipped example protocol.

use crate::files::{haloperidol, morning, patient, potassium, tracing};
use crate::house::House;
use ebbmark::clock::Clock;
use ebbmark::store::Reader;
use ebbmark_rules::alert::AlertState;
use std::fs;

fn states(house: &House, concern: &str) -> Vec<AlertState> {
    let alerts = Reader::open(&house.store()).unwrap().alerts(true).unwrap();
    alerts.iter().filter(|row| &*row.alert.concern == concern).map(|row| row.alert.state).collect()
}

#[tokio::test(flavor = "multi_thread")]
async fn low_potassium_calls_the_nurse_and_its_correction_withdraws_that() {
    let house = House::new();
    let service = house.start_at(Clock::manual(morning()).0).await;
    house.export_file("p.csv", patient(1, morning()));
    house.export_file("m.csv", haloperidol(1, morning()));
    tokio::task::block_in_place(|| house.wait("accepted", 2));
    house.export_file("r1.csv", potassium(1, "2.7", "F", morning(), 20));
    tokio::task::block_in_place(|| {
        house.wait_mails_to("tern-nurse", 1);
        house.wait_mails_to("nurse-in-charge", 1);
    });
    house.export_file("r2.csv", potassium(1, "4.7", "C", morning(), 0));
    tokio::task::block_in_place(|| house.wait_mails_to("tern-nurse", 2));
    let withdrawn =
        house.mails().into_iter().rfind(|mail| mail.contains("To: tern-nurse")).unwrap();
    assert!(withdrawn.contains("Subject: Ebbmark call: withdrawn"), "{withdrawn}");
    assert!(states(&house, "electrolytes").contains(&AlertState::Withdrawn));
    service.stop().await.unwrap();
}

#[tokio::test(flavor = "multi_thread")]
async fn content_under_another_name_is_a_repeat() {
    let house = House::new();
    let service = house.start_at(Clock::manual(morning()).0).await;
    house.export_file("p.csv", patient(1, morning()));
    tokio::task::block_in_place(|| house.wait("accepted", 1));
    house.export_file("again.csv", patient(1, morning()));
    house.export_file("touched.csv", patient(1, morning()));
    tokio::task::block_in_place(|| house.wait("repeat", 2));
    assert_eq!(house.count("accepted"), 1);
    service.stop().await.unwrap();
}

#[tokio::test(flavor = "multi_thread")]
async fn good_rows_are_learned_and_bad_ones_are_named() {
    let house = House::new();
    let text = patient(1, morning())
        + "m3,1,discharge,yesterday,,,,\nm4,,discharge,2026-03-02T10:00:00Z,,,,\n";
    house.export_file("p.csv", text);
    let service = house.start_at(Clock::manual(morning()).0).await;
    tokio::task::block_in_place(|| house.wait("accepted", 1));
    let held = Reader::open(&house.store()).unwrap().held().unwrap();
    assert_eq!(held.len(), 1);
    let places: Vec<&str> = held[0].bad.iter().map(|(place, _)| place.as_str()).collect();
    assert_eq!(places, ["row 4", "row 5"]);
    assert!(held[0].bad.iter().all(|(_, why)| why.contains("column `")), "{:?}", held[0].bad);
    service.stop().await.unwrap();
}

#[tokio::test(flavor = "multi_thread")]
async fn tracing_with_another_birth_date_is_held_for_a_person() {
    let house = House::new();
    let service = house.start_at(Clock::manual(morning()).0).await;
    house.export_file("p.csv", patient(1, morning()));
    tokio::task::block_in_place(|| house.wait("accepted", 1));
    house.export_file("t.csv", tracing(1, "1951-02-03", morning()));
    house.export_file("u.csv", tracing(1, "1950-02-03", morning()));
    tokio::task::block_in_place(|| {
        house.wait("held", 1);
        house.wait("accepted", 2);
    });
    let held = house.held();
    assert_eq!(held[0].0, "t.csv");
    assert!(
        held[0].1.starts_with("carries another birth date than the chart has"),
        "{}",
        held[0].1
    );
    service.stop().await.unwrap();
}

/// Cut off in the middle: waited for, then held; whole again later: accepted.
#[tokio::test(flavor = "multi_thread")]
async fn truncated_tracing_is_held_until_it_comes_whole() {
    let house = House::new();
    let whole = tracing(1, "1950-02-03", morning());
    fs::write(house.export().join("t.csv"), &whole[..whole.len() / 2]).unwrap();
    let service = house.start_at(Clock::manual(morning()).0).await;
    tokio::task::block_in_place(|| house.wait("held", 1));
    assert_eq!(house.held()[0].0, "t.csv");
    fs::write(house.export().join("t.csv"), &whole).unwrap();
    tokio::task::block_in_place(|| house.wait("accepted", 1));
    assert_eq!(house.held(), []);
    service.stop().await.unwrap();
}

/// A fault of the program that one file brings out: the others go on, and the file is held after the second stop.
#[tokio::test(flavor = "multi_thread")]
async fn file_that_makes_the_ledger_fail_is_held_in_the_end() {
    let house = House::new();
    house.export_file("p1.csv", patient(1, morning()));
    house.export_file("p2.csv", patient(2, morning()));
    house.export_file("m1.csv", haloperidol(1, morning()));
    house.export_file("m2.csv", haloperidol(2, morning()));
    house.export_file("r1.csv", potassium(1, "2.7", "F", morning(), 20));
    house.export_file("r2.csv", potassium(2, "2.8", "F", morning(), 20));
    let fails = || {
        let settings = ebbmark::settings::Settings::read(&house.settings_file()).unwrap();
        let render = ebbmark::mail::renderer(&settings);
        let faulty: ebbmark::ledger::Render = Box::new(move |sheet| {
            let ebbmark::ledger::Sheet::Letter(post) = sheet else { return render(sheet) };
            assert!(!post.notice.alert.evidence.whom.contains("bed 1"), "a fault in laying out");
            render(sheet)
        });
        (settings, faulty)
    };
    for start in 1..=3 {
        let (settings, render) = fails();
        let setup = ebbmark::service::Setup {
            settings,
            settings_file: house.settings_file(),
            clock: Clock::manual(morning()).0,
            render,
        };
        let service = ebbmark::service::Service::start(setup).await.unwrap();
        if start < 3 {
            tokio::time::timeout(std::time::Duration::from_secs(30), service.failed())
                .await
                .unwrap();
            assert!(service.stop().await.is_err());
        } else {
            tokio::task::block_in_place(|| house.wait("held", 1));
            tokio::task::block_in_place(|| house.wait("accepted", 5));
            service.stop().await.unwrap();
        }
    }
    assert!(house.held()[0].1.contains("made the service stop twice"), "{:?}", house.held());
    assert!(house.mails_to("tern-nurse") > 0, "the neighbour's alert went out");
}
