//! kill -9 at random moments, then a start: what was taken in stays, nothing is lost, nobody has two open alerts.
//!
//! `EBBMARK_KILLS` says how often (12 by default; CI runs more), `EBBMARK_SEED` repeats a run.

use crate::files::{haloperidol, patient, potassium};
use crate::house::House;
use ebbmark::clock::Clock;
use ebbmark::store::Reader;
use std::collections::BTreeMap;
use std::process::{Child, Command, Stdio};
use std::time::{Duration, Instant};

const PATIENTS: usize = 60;

/// A small generator (Knuth's MMIX constants): the moments only have to be scattered and repeatable.
struct Lot(u64);

impl Lot {
    fn below(&mut self, bound: u64) -> u64 {
        self.0 =
            self.0.wrapping_mul(6_364_136_223_846_793_005).wrapping_add(1_442_695_040_888_963_407);
        (self.0 >> 33) % bound
    }
}

fn start(house: &House) -> Child {
    let log =
        std::fs::File::options().create(true).append(true).open(house.path().join("log")).unwrap();
    Command::new(env!("CARGO_BIN_EXE_ebbmark"))
        .args(["watch", "--log-json"])
        .current_dir(house.path())
        .stdout(Stdio::null())
        .stderr(log)
        .spawn()
        .unwrap()
}

fn from_environment(name: &str, otherwise: u64) -> u64 {
    std::env::var(name).ok().and_then(|text| text.parse().ok()).unwrap_or(otherwise)
}

#[test]
fn killed_at_any_moment_it_loses_nothing_and_tells_nothing_twice() {
    let kills = from_environment("EBBMARK_KILLS", 12);
    let seed = from_environment("EBBMARK_SEED", u64::from(std::process::id()));
    println!("{kills} kills, seed {seed}");
    let mut lot = Lot(seed);
    let house = House::new();
    let now = Clock::System.now();
    let mut exported = 0;
    let mut export = |count: usize| {
        // Three files a patient, so that each patient ends with one alert about a low potassium.
        for _ in 0..count {
            let (number, which) = (exported / 3, exported % 3);
            if number == PATIENTS {
                return;
            }
            match which {
                0 => house.export_file(&format!("p{number}.csv"), patient(number, now)),
                1 => house.export_file(&format!("m{number}.csv"), haloperidol(number, now)),
                _ => house
                    .export_file(&format!("r{number}.csv"), potassium(number, "2.7", "F", now, 20)),
            }
            exported += 1;
        }
    };
    let share = (3 * PATIENTS).div_ceil(usize::try_from(kills).unwrap());
    for _ in 0..kills {
        let mut service = start(&house);
        std::thread::sleep(Duration::from_millis(lot.below(250)));
        export(share);
        std::thread::sleep(Duration::from_millis(lot.below(600)));
        service.kill().unwrap();
        service.wait().unwrap();
    }

    let log = || std::fs::read_to_string(house.path().join("log")).unwrap();
    let before = log().len();
    let mut service = start(&house);
    export(3 * PATIENTS);
    house.wait("accepted", 3 * PATIENTS as u64);
    let until = Instant::now() + Duration::from_secs(60);
    let messages = || Reader::open(&house.store()).unwrap().message_counts().unwrap();
    while messages().keys().any(|state| state != "sent") || messages().is_empty() {
        assert!(Instant::now() < until, "{:?}", messages());
        std::thread::sleep(Duration::from_millis(20));
    }
    // Everything may have been done before this start; a signal that comes before it listens for signals ends it bare.
    while !log()[before..].contains("watching") {
        assert!(Instant::now() < until, "it does not come up");
        std::thread::sleep(Duration::from_millis(20));
    }
    rustix::process::kill_process(
        rustix::process::Pid::from_raw(i32::try_from(service.id()).unwrap()).unwrap(),
        rustix::process::Signal::TERM,
    )
    .unwrap();
    assert!(service.wait().unwrap().success(), "SIGTERM ends it with 0");

    let log = log();
    assert!(!log.contains("\"level\":\"ERROR\""), "{log}");
    let reader = Reader::open(&house.store()).unwrap();
    assert_eq!(reader.audit().unwrap().broken, None);
    assert_eq!(
        reader.file_counts().unwrap(),
        BTreeMap::from([("accepted".to_owned(), 3 * PATIENTS as u64)])
    );
    let mut facts = 0;
    reader
        .facts(|_, fact| {
            facts += usize::from(fact.patient.is_some());
            Ok(())
        })
        .unwrap();
    assert_eq!(facts, 4 * PATIENTS, "each row once");
    let mut calls: Vec<_> = reader
        .alerts(false)
        .unwrap()
        .into_iter()
        .filter(|row| row.alert.tier.as_str() == "call")
        .map(|row| row.alert.patient.unwrap().expose().to_owned())
        .collect();
    calls.sort();
    let mut expected: Vec<_> = (0..PATIENTS).map(|number| number.to_string()).collect();
    expected.sort();
    assert_eq!(calls, expected, "one call for each patient");
    // A message sent twice is the same file again; two files are two messages. Those in a digest are one.
    let sent: u32 = rusqlite::Connection::open(house.store().database())
        .and_then(|store| {
            store.query_row("SELECT count(DISTINCT coalesce(-digest, id)) FROM outbox", [], |row| {
                row.get(0)
            })
        })
        .unwrap();
    assert_eq!(house.mails().len(), sent as usize);
}
