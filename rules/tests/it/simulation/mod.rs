//! Simulated wards: thirty days of admissions, medicines, late and corrected results, doubtful tracings, staff who answer
//! or don't, restarts, and a change of clocks, with everything that the decider promises held against it at every step.
//!
//! `EBBMARK_SIM_SEEDS` asks for more wards than the 500 of every run.

mod board;
mod rng;
mod world;

use crate::config::{MEDICINES, PROTOCOL};
use board::Board;
use chrono::TimeDelta;
use ebbmark_rules::alert::{Decision, Notice, NoticeReason};
use ebbmark_rules::decide::{Decider, Texts, ask};
use ebbmark_rules::fact::{At, Body, Fact, Source};
use ebbmark_rules::ids::{ContentHash, Person, Role};
use ebbmark_rules::medicines::MedicineList;
use ebbmark_rules::patient::Patient;
use ebbmark_rules::protocol::Protocol;
use ebbmark_rules::replay;
use ebbmark_rules::view::View;
use rng::Rng;
use std::collections::{BTreeMap, BTreeSet};

pub(crate) struct Shelf(pub(crate) BTreeMap<ContentHash, String>);

impl Texts for Shelf {
    fn text(&self, hash: &ContentHash) -> Option<&str> {
        self.0.get(hash).map(String::as_str)
    }
}

pub(crate) fn shelf() -> (Shelf, Vec<ContentHash>) {
    // A second protocol for a change in the middle, and one that can't be put in force.
    let second = PROTOCOL
        .replace("at_least_ms = 500", "at_least_ms = 490")
        .replace("answer_within_min = 240", "answer_within_min = 90")
        .replace("version = \"1\"", "version = \"2\"");
    let broken = PROTOCOL.replace("tier = \"call\"", "tier = \"shout\"");
    let texts = [MEDICINES.to_owned(), PROTOCOL.to_owned(), second, broken];
    let hashes: Vec<_> = texts.iter().map(|text| ContentHash::of(text.as_bytes())).collect();
    (Shelf(hashes.iter().cloned().zip(texts).collect()), hashes)
}

pub(crate) fn of_service(at: At, body: Body) -> Fact {
    Fact { occurred_at: at, received_at: at, source: Source::Service, patient: None, body }
}

/// What is still to come: facts of the chart, answers of people, ticks of the clock.
enum Event {
    Fact(Box<Fact>),
    Tick,
}

/// One ward as it was lived.
pub(crate) struct Lived {
    pub(crate) facts: Vec<Fact>,
    pub(crate) decisions: Vec<Decision>,
    pub(crate) until: At,
    board: Board,
    told: u64,
}

struct Live<'t> {
    rng: Rng,
    texts: &'t Shelf,
    queue: BTreeMap<(At, u64), Event>,
    number: u64,
    decider: Decider,
    lived: Lived,
}

impl Live<'_> {
    fn plan(&mut self, at: At, event: Event) {
        self.number += 1;
        self.queue.insert((at, self.number), event);
    }

    fn step(&mut self, now: At, event: Event) -> Result<(), String> {
        let mut about = None;
        let decisions = match event {
            Event::Tick => self.decider.advance(now),
            Event::Fact(mut fact) => {
                fact.received_at = now;
                about = fact.patient.clone();
                // Time first, fact second: the book is held against each.
                let before = self.decider.advance(now);
                self.book(&before, now)?;
                let decisions = self.decider.apply(&fact, self.texts);
                self.lived.facts.push(*fact);
                self.book(&decisions, now)?;
                self.decider.advance(now) // what the fact made due at once
            }
        };
        self.book(&decisions, now)?;
        if self.decider.next_due().is_some_and(|due| due <= now) {
            return Err("something is due and was not taken".into());
        }
        if let Some(protocol) = self.decider.protocol() {
            self.lived.board.nothing_dropped(protocol, now)?;
        }
        let everyone: Vec<_> = match about {
            Some(patient) => {
                self.decider.patients().filter(|known| **known == patient).cloned().collect()
            }
            None => self.decider.patients().cloned().collect(),
        };
        everyone.iter().try_for_each(|patient| self.lived.board.agrees(&self.decider, patient, now))
    }

    fn book(&mut self, decisions: &[Decision], now: At) -> Result<(), String> {
        self.lived.board.take(decisions, self.decider.protocol(), now)?;
        for decision in decisions {
            if let Decision::Tell(notice) = decision {
                self.lived.told += 1;
                self.people(notice, now);
            }
        }
        self.lived.decisions.extend_from_slice(decisions);
        Ok(())
    }

    /// The mail server and the people behind it.
    fn people(&mut self, notice: &Notice, now: At) {
        let alert = notice.alert.id.clone();
        let patient = notice.alert.patient.clone();
        let answer = |at: At, by: Source, body: Body| {
            Event::Fact(Box::new(Fact {
                occurred_at: at,
                received_at: at,
                source: by,
                patient: patient.clone(),
                body,
            }))
        };
        for recipient in &notice.recipients {
            let (at, step) = (self.rng.after(now, 0, 3), notice.step);
            let (alert, recipient) = (alert.clone(), recipient.clone());
            let body = match self.rng.below(100) {
                0..=3 => Body::Refused { alert, step, recipient },
                4..=8 => continue, // on its way for ever
                _ => Body::Told { alert, step, recipient },
            };
            self.plan(at, answer(at, Source::Service, body));
        }
        if matches!(notice.reason, NoticeReason::Withdrawn | NoticeReason::Closed) {
            return;
        }
        let by = Person::new(*self.rng.pick(&["a.nurse", "b.pharmacist", "c.doctor"]));
        let at = self.rng.after(now, 1, 400);
        let why = "as the simulation has it".into();
        let body = match self.rng.below(100) {
            0..=44 => Body::Acknowledged { alert, by: by.clone(), intent: why },
            45..=54 => {
                Body::Snoozed { alert, by: by.clone(), until: self.rng.after(at, 10, 900), why }
            }
            55..=62 => {
                let to = Role::new(*self.rng.pick(&["doctor", "nurse", "a role nobody has"]));
                Body::HandedOver { alert, by: by.clone(), to }
            }
            63..=72 => Body::ClosedByPerson { alert, by: by.clone(), why },
            _ => return, // nobody answers
        };
        self.plan(at, answer(at, Source::Person(by), body));
    }

    /// A restart: everything decided so far comes again from the facts alone, and the new decider goes on.
    fn restart(&mut self, now: At) -> Result<(), String> {
        let mut again = Vec::new();
        let decider =
            replay::run(&self.lived.facts, self.texts, now, |decision| again.push(decision));
        if let Some(place) = replay::first_difference(&self.lived.decisions, &again) {
            return Err(format!(
                "replay differs at decision {place}: {:?} is now {:?}",
                self.lived.decisions.get(place),
                again.get(place)
            ));
        }
        if decider.next_due() != self.decider.next_due() {
            return Err("after a restart something else is due next".into());
        }
        self.decider = decider;
        Ok(())
    }
}

pub(crate) fn live(seed: u64, shelf: &Shelf, hashes: &[ContentHash]) -> Result<Lived, String> {
    let start = world::start(seed);
    let until = start + TimeDelta::days(world::DAYS);
    let lived =
        Lived { facts: Vec::new(), decisions: Vec::new(), until, board: Board::default(), told: 0 };
    let mut live = Live {
        rng: Rng::new(seed ^ 0x5eed),
        texts: shelf,
        queue: BTreeMap::new(),
        number: 0,
        decider: Decider::new(),
        lived,
    };
    let early = start - TimeDelta::hours(1);
    live.plan(
        early,
        Event::Fact(Box::new(of_service(early, Body::MedicinesInForce(hashes[0].clone())))),
    );
    live.plan(
        early,
        Event::Fact(Box::new(of_service(early, Body::ProtocolInForce(hashes[1].clone())))),
    );
    for (percent, hash) in [(30, &hashes[3]), (40, &hashes[2])] {
        if live.rng.chance(percent) {
            let at = live.rng.after(start, 5 * 1440, 25 * 1440);
            live.plan(
                at,
                Event::Fact(Box::new(of_service(at, Body::ProtocolInForce(hash.clone())))),
            );
        }
    }
    for fact in world::facts(seed) {
        live.plan(fact.received_at, Event::Fact(Box::new(fact)));
    }
    let mut tick = start;
    while tick < until {
        live.plan(tick, Event::Tick);
        tick = live.rng.after(tick, 30, 1440);
    }
    let mut restarts = 2;
    while let Some(((now, _), event)) = live.queue.pop_first().filter(|((at, _), _)| *at < until) {
        live.step(now, event).map_err(|why| format!("seed {seed}, {now}: {why}"))?;
        if restarts > 0 && live.rng.below(400) == 0 {
            restarts -= 1;
            live.restart(now).map_err(|why| format!("seed {seed}, restart at {now}: {why}"))?;
        }
    }
    live.step(until, Event::Tick).map_err(|why| format!("seed {seed}, at the end: {why}"))?;
    live.restart(until).map_err(|why| format!("seed {seed}, at the end: {why}"))?;
    Ok(live.lived)
}

/// Verdicts of every rule about every number, folded in a given order.
fn verdicts<'f>(facts: impl IntoIterator<Item = &'f Fact>, now: At) -> Vec<String> {
    let (protocol, list) =
        (Protocol::parse(PROTOCOL).unwrap(), MedicineList::parse(MEDICINES).unwrap());
    let mut patients: BTreeMap<_, Patient> = BTreeMap::new();
    for fact in facts {
        if let Some(id) = &fact.patient {
            patients.entry(id.clone()).or_default().take(fact);
        }
    }
    patients
        .values()
        .flat_map(|patient| {
            let view = View::new(patient, &protocol, &list, now);
            ask(&view)
                .into_iter()
                .map(|said| format!("{} {:?}", said.rule.id, said.verdict))
                .collect::<Vec<_>>()
        })
        .collect()
}

/// Whether the latest one received stands for good, so that order means something.
fn in_order_of_receipt(fact: &Fact) -> bool {
    matches!(fact.body, Body::Tracing(_) | Body::Described(_) | Body::BaselineChosen(_))
}

/// The same facts in another order of arrival end in the same state.
fn any_order(seed: u64, facts: &[Fact], now: At) -> Result<(), String> {
    let mut rng = Rng::new(seed ^ 0x0de4);
    let (kept, mut shuffled): (Vec<&Fact>, Vec<&Fact>) =
        facts.iter().partition(|fact| in_order_of_receipt(fact));
    for place in (1..shuffled.len()).rev() {
        shuffled.swap(place, rng.below(place as u64 + 1) as usize);
    }
    let (one, other) = (verdicts(facts, now), verdicts(kept.into_iter().chain(shuffled), now));
    match one.iter().zip(&other).find(|(one, other)| one != other) {
        Some((one, other)) => Err(format!("seed {seed}: {one} becomes {other} in another order")),
        None => Ok(()),
    }
}

/// Knowing nothing of potassium is never as good as knowing that it is well.
fn not_known_is_not_calm(seed: u64, facts: &[Fact], now: At) -> Result<(), String> {
    let (protocol, list) =
        (Protocol::parse(PROTOCOL).unwrap(), MedicineList::parse(MEDICINES).unwrap());
    let numbers: BTreeSet<_> = facts.iter().filter_map(|fact| fact.patient.as_ref()).collect();
    for number in numbers {
        let mut patient = Patient::default();
        let known = facts.iter().filter(|fact| fact.patient.as_ref() == Some(number));
        known
            .filter(|fact| {
                !matches!(fact.body, Body::Result(_) | Body::Tracing(_) | Body::OverRead(_))
            })
            .for_each(|fact| patient.take(fact));
        let view = View::new(&patient, &protocol, &list, now);
        for said in ask(&view) {
            let unguarded = said.rule.only_if.is_none();
            let asks = ["qtc-500", "qtc-prolonged", "qtc-short", "high-potassium"];
            let quiet = matches!(said.verdict, ebbmark_rules::verdict::Verdict::Quiet);
            if unguarded && asks.contains(&said.rule.id.as_str()) && quiet {
                return Err(format!("seed {seed}: {} is quiet without any data", said.rule.id));
            }
        }
    }
    Ok(())
}

fn seeds() -> u64 {
    std::env::var("EBBMARK_SIM_SEEDS").ok().and_then(|text| text.parse().ok()).unwrap_or(500)
}

#[test]
fn wards_of_thirty_days_keep_every_promise() {
    let seeds = seeds();
    let threads = 2;
    let totals: Vec<_> = std::thread::scope(|scope| {
        let workers: Vec<_> = (0..threads)
            .map(|part| {
                scope.spawn(move || {
                    let (shelf, hashes) = shelf();
                    let mut totals = [0u64; 6];
                    for seed in (0..seeds).filter(|seed| seed % threads == part) {
                        let lived = live(seed, &shelf, &hashes)?;
                        any_order(seed, &lived.facts, lived.until)?;
                        not_known_is_not_calm(seed, &lived.facts, lived.until)?;
                        let board = &lived.board;
                        let found = [
                            lived.facts.len() as u64,
                            lived.decisions.len() as u64,
                            board.raised,
                            board.escalated,
                            board.withdrawn,
                            lived.told,
                        ];
                        totals.iter_mut().zip(found).for_each(|(total, n)| *total += n);
                    }
                    Ok::<_, String>(totals)
                })
            })
            .collect();
        workers.into_iter().map(|worker| worker.join().unwrap()).collect()
    });
    let mut sum = [0u64; 6];
    for totals in totals {
        let totals = totals.unwrap_or_else(|why| panic!("{why}"));
        sum.iter_mut().zip(totals).for_each(|(total, n)| *total += n);
    }
    let [facts, decisions, raised, escalated, withdrawn, told] = sum;
    println!(
        "{seeds} wards: {facts} facts, {decisions} decisions, {raised} alerts, {escalated} escalations, {withdrawn} withdrawn, {told} messages"
    );
    // A simulation in which nothing happens proves nothing.
    assert!(raised > seeds * 5 && escalated > seeds * 3 && withdrawn > seeds / 20, "{sum:?}");
}

/// Negative controls: the book must go red where a decider would have failed.
#[test]
fn the_book_notices_what_is_wrong() {
    let (shelf, hashes) = shelf();
    let lived = live(3, &shelf, &hashes).unwrap();
    let protocol = Protocol::parse(PROTOCOL).unwrap();
    let replayed = |decisions: &[Decision], now: At| {
        let mut board = Board::default();
        board.take(decisions, Some(&protocol), now)?;
        board.nothing_dropped(&protocol, now)
    };
    let raised = |decision: &&Decision| match decision {
        Decision::Raised(alert) => alert.tier.as_str() == "call",
        _ => false,
    };
    let first = lived.decisions.iter().find(raised).cloned().unwrap();
    let Decision::Raised(alert) = &first else { panic!() };
    let at = alert.raised_at;
    let tell = lived
        .decisions
        .iter()
        .find(|decision| matches!(decision, Decision::Tell(notice) if notice.alert.id == alert.id));
    let Some(Decision::Tell(notice)) = tell.cloned() else { panic!("the alert was told") };
    let by = notice.answer_by.unwrap();
    let told = Decision::Tell(notice);
    assert!(replayed(&[first.clone(), told.clone()], at).is_ok());
    let twice = replayed(&[first.clone(), told.clone(), first.clone()], at).unwrap_err();
    assert!(twice.contains("second open alert"), "{twice}");
    let untold = replayed(std::slice::from_ref(&first), at).unwrap_err();
    assert!(untold.contains("nobody was told"), "{untold}");
    let dropped = replayed(&[first.clone(), told.clone()], by).unwrap_err();
    assert!(dropped.contains("an answer was due"), "{dropped}");
    let early = Decision::Life {
        alert: alert.id.clone(),
        at: by - TimeDelta::minutes(1),
        step: ebbmark_rules::alert::LifeStep::Escalated { number: 1, to: Role::new("doctor") },
    };
    let early = replayed(&[first, told, early], by).unwrap_err();
    assert!(early.contains("escalated"), "{early}");
}
