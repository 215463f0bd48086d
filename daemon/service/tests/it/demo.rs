//! The invented ward, played through the real service: exactly the alerts that its story expects, also when it is killed.

use ebbmark::demo::{Play, Stage, record};
use ebbmark::store::Reader;
use ebbmark_demo_ward::Random;
use ebbmark_demo_ward::story::{Expected, Story};
use std::path::Path;
use std::process::{Command, Stdio};
use std::time::Duration;

/// One line for each alert, so that a difference is seen where it is.
fn lines(alerts: &[Expected]) -> String {
    alerts.iter().map(|alert| format!("{alert:?}\n")).collect()
}

fn messages(stage: &Stage) -> usize {
    let entries = std::fs::read_dir(stage.mail()).unwrap();
    let names = entries.map(|entry| entry.unwrap().file_name().into_string().unwrap());
    names.filter(|name| name.ends_with(".eml")).count()
}

/// Tier by tier and time by time; and every message of the outbox is one file.
fn check(story: &Story, stage: &Stage) {
    let reader = Reader::open(&stage.store()).unwrap();
    let found = record(story, &reader).unwrap();
    let (found, expected) = (lines(&found), lines(&story.expected));
    assert!(found == expected, "found:\n{found}\nexpected:\n{expected}");
    assert_eq!(reader.audit().unwrap().broken, None);
    let sent = reader.message_counts().unwrap();
    assert_eq!(sent.keys().collect::<Vec<_>>(), ["sent"]);
    assert_eq!(sent["sent"], messages(stage) as u64, "each message once");
    let held = reader.held().unwrap();
    assert_eq!(held.len(), 1, "the tracing with another birth date: {held:?}");
}

#[tokio::test(flavor = "multi_thread")]
async fn story_gives_exactly_the_alerts_that_it_expects() {
    let (story, folder) = (Story::load().unwrap(), tempfile::tempdir().unwrap());
    let stage = Stage::set(folder.path(), &story).unwrap();
    let mut play = Play::begin(&story, &stage).await.unwrap();
    while let Some(stop) = play.next() {
        play.go(&stop).await.unwrap();
    }
    play.end().await.unwrap();
    check(&story, &stage);
}

fn start(folder: &Path) -> Command {
    let mut demo = Command::new(env!("CARGO_BIN_EXE_ebbmark"));
    demo.args(["demo", "--speed", "0", "--folder"]).arg(folder).stdout(Stdio::null());
    demo
}

/// kill -9 of the whole program at random moments, each followed by another start in the same folder.
/// `EBBMARK_KILLS` says how often in all (12 by default; CI does 300), `EBBMARK_SEED` repeats a run.
#[test]
fn story_that_is_killed_at_random_moments_gives_the_same_alerts() {
    let number = |name: &str, otherwise: u64| {
        std::env::var(name).ok().and_then(|text| text.parse().ok()).unwrap_or(otherwise)
    };
    let kills = number("EBBMARK_KILLS", 12);
    let seed = number("EBBMARK_SEED", u64::from(std::process::id()));
    println!("{kills} kills, seed {seed}");
    let mut random = Random::new(seed);
    let story = Story::load().unwrap();
    let mut killed = 0;
    while killed < kills {
        let folder = tempfile::tempdir().unwrap();
        let stage = Stage::set(folder.path(), &story).unwrap();
        loop {
            let mut demo = start(folder.path()).spawn().unwrap();
            std::thread::sleep(Duration::from_secs_f64(random.between(0.0, 1.6)));
            if killed < kills && demo.try_wait().unwrap().is_none() {
                demo.kill().unwrap();
                demo.wait().unwrap();
                killed += 1;
                continue;
            }
            // Ended by itself, or killed often enough.
            assert!(demo.wait().unwrap().success());
            break;
        }
        check(&story, &stage);
    }
}
