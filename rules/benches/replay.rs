//! How long a million facts take on one core, and how much of it is parsing texts (none: that happens once).
//!
//! `cargo bench -p ebbmark-rules` prints the figures; `EBBMARK_BENCH_FACTS` asks for another number of facts.
#![allow(
    clippy::unwrap_used,
    clippy::indexing_slicing,
    clippy::cast_possible_truncation,
    clippy::cast_sign_loss,
    clippy::disallowed_methods,
    missing_docs,
    reason = "a benchmark measures time and may fail loudly"
)]

#[path = "../tests/it/simulation/rng.rs"]
mod rng;
#[path = "../tests/it/simulation/world.rs"]
mod world;

use chrono::TimeDelta;
use ebbmark_rules::alert::Decision;
use ebbmark_rules::decide::{Decider, Texts};
use ebbmark_rules::fact::{At, Body, Fact, Source};
use ebbmark_rules::ids::{ContentHash, Person};
use ebbmark_rules::replay;
use std::collections::BTreeMap;
use std::time::Instant;

struct Shelf(BTreeMap<ContentHash, String>);

impl Texts for Shelf {
    fn text(&self, hash: &ContentHash) -> Option<&str> {
        self.0.get(hash).map(String::as_str)
    }
}

fn main() {
    let wanted = std::env::var("EBBMARK_BENCH_FACTS").ok().and_then(|text| text.parse().ok());
    let wanted: usize = wanted.unwrap_or(1_000_000);
    let mut chart = Vec::new();
    let mut seed = 0;
    while chart.len() < wanted {
        chart.extend(world::facts(seed));
        seed += 2; // even ones play in the same month
    }
    chart.sort_by_key(|fact| fact.received_at);
    let texts =
        [include_str!("../../config/medicines.toml"), include_str!("../../config/protocol.toml")];
    let hashes = texts.map(|text| ContentHash::of(text.as_bytes()));
    let shelf = Shelf(hashes.iter().cloned().zip(texts.map(str::to_owned)).collect());
    let start = world::start(0) - TimeDelta::hours(1);
    let until = world::start(0) + TimeDelta::days(world::DAYS);
    let mut queue: BTreeMap<(At, usize), Fact> = BTreeMap::new();
    let of_service = |body| Fact {
        occurred_at: start,
        received_at: start,
        source: Source::Service,
        patient: None,
        body,
    };
    queue.insert((start, 0), of_service(Body::MedicinesInForce(hashes[0].clone())));
    queue.insert((start, 1), of_service(Body::ProtocolInForce(hashes[1].clone())));
    for fact in chart {
        queue.insert((fact.received_at, queue.len()), fact);
    }
    let (facts, lived) = answered(queue, wanted, &shelf);
    let until = facts.last().map_or(until, |fact| fact.received_at);
    let mut decisions = 0u64;
    let clock = Instant::now();
    let decider = replay::run(&facts, &shelf, until, |_| decisions += 1);
    let taken = clock.elapsed();
    assert_eq!(decisions, lived, "replay takes the decisions that were taken");
    println!(
        "{} facts of {} patients, {decisions} decisions: {:.2} s, {:.1} us a fact",
        facts.len(),
        decider.patients().count(),
        taken.as_secs_f64(),
        taken.as_secs_f64() * 1e6 / facts.len() as f64
    );
}

/// Plays the facts with people who answer within ten minutes, as a ward must, and gives all facts in order.
fn answered(
    mut queue: BTreeMap<(At, usize), Fact>,
    wanted: usize,
    shelf: &Shelf,
) -> (Vec<Fact>, u64) {
    let mut decider = Decider::new();
    let (mut facts, mut decisions, mut number) = (Vec::new(), 0, queue.len());
    while let Some((_, fact)) = queue.pop_first() {
        let taken = decider.take(&fact, shelf);
        decisions += taken.len() as u64;
        for decision in taken {
            let Decision::Tell(notice) = decision else { continue };
            let mut learn = |at: At, body| {
                number += 1;
                let patient = notice.alert.patient.clone();
                let source = Source::Service;
                let at = at.max(fact.received_at);
                let fact = Fact { occurred_at: at, received_at: at, source, patient, body };
                queue.insert((at, number), fact);
            };
            for recipient in &notice.recipients {
                let (alert, recipient) = (notice.alert.id.clone(), recipient.clone());
                let body = Body::Told { alert, step: notice.step, recipient };
                learn(notice.at + TimeDelta::seconds(2), body);
            }
            let alert = notice.alert.id.clone();
            let (by, intent) = (Person::new("a.nurse"), "prescriber informed".into());
            learn(notice.at + TimeDelta::minutes(10), Body::Acknowledged { alert, by, intent });
        }
        facts.push(fact);
        if facts.len() >= wanted {
            break;
        }
    }
    (facts, decisions)
}
