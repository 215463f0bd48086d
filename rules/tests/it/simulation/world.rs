//! A seeded ward: what becomes true, and when the service learns of it. Everything is invented.

use super::rng::Rng;
use chrono::{NaiveDate, TimeDelta, TimeZone, Utc};
use ebbmark_rules::fact::*;
use ebbmark_rules::ids::*;
use ebbmark_rules::units::{Kg, Ms, PerMinute};

pub(crate) const DAYS: i64 = 30;

/// Thirty days with a change of clocks in them: to summer time on 29 March 2026, back on 25 October 2026.
pub(crate) fn start(seed: u64) -> At {
    let (month, day) = if seed.is_multiple_of(2) { (3, 14) } else { (10, 9) };
    Utc.with_ymd_and_hms(2026, month, day, 5, 0, 0).unwrap()
}

const MEDICINES: [&str; 11] = [
    "haloperidol",
    "citalopram",
    "ondansetron",
    "sotalol",
    "amiodarone",
    "clarithromycin",
    "furosemide",
    "paracetamol",
    "methadone",
    "an invented tonic",
    "Halopéridol",
];

pub(crate) struct World {
    pub(crate) rng: Rng,
    pub(crate) facts: Vec<Fact>,
    start: At,
    end: At,
    seed: u64,
    ids: u64,
}

/// What a seed's ward is like, in the order in which it is learned.
pub(crate) fn facts(seed: u64) -> Vec<Fact> {
    let start = start(seed);
    let mut world = World {
        rng: Rng::new(seed),
        facts: Vec::new(),
        start,
        end: start + TimeDelta::days(DAYS),
        seed,
        ids: 0,
    };
    for number in 0..2 + world.rng.below(3) {
        world.patient(number);
    }
    world.service();
    let mut facts = world.facts;
    facts.retain(|fact| fact.received_at < world.end);
    facts.sort_by_key(|fact| fact.received_at); // stable: of one moment in the order written
    facts
}

impl World {
    fn id(&mut self, kind: &str) -> String {
        self.ids += 1;
        format!("{kind}-{}-{}", self.seed, self.ids)
    }

    fn add(&mut self, patient: &PatientId, occurred_at: At, received_at: At, body: Body) {
        self.facts.push(Fact {
            occurred_at,
            received_at,
            source: Source::File {
                file: ContentHash::of(received_at.to_rfc3339().as_bytes()),
                place: "row 1".into(),
                assumed_zone: None,
            },
            patient: Some(patient.clone()),
            body,
        });
    }

    /// Learned a little after it was true; sometimes much later.
    fn late(&mut self, at: At) -> At {
        if self.rng.chance(8) { self.rng.after(at, 600, 3000) } else { self.rng.after(at, 1, 90) }
    }

    fn patient(&mut self, number: u64) {
        let id = PatientId::new("sim", &format!("{}-{number}", self.seed)).unwrap();
        let mut at = self.rng.after(self.start, 0, 3 * 1440);
        let born = match self.rng.below(12) {
            0 => None,
            1 => NaiveDate::from_ymd_opt(2010, 7, 1),
            _ => NaiveDate::from_ymd_opt(1930 + self.rng.below(60) as i32, 4, 2),
        };
        let sex = *self.rng.pick(&[
            Some(Sex::Female),
            Some(Sex::Male),
            Some(Sex::Female),
            Some(Sex::Male),
            Some(Sex::Other),
            None,
        ]);
        let weight = self.rng.chance(70).then(|| Kg::new(72.0).unwrap());
        let described = Description { sex, birth_date: born, weight, ..Description::default() };
        let told = self.late(at);
        self.add(&id, at, told, Body::Described(described));
        // Some wards send no admissions.
        if self.rng.chance(85) {
            while at < self.end {
                let stay = self.rng.after(at, 2 * 1440, 25 * 1440);
                self.stay(&id, at, stay);
                at = self.rng.after(stay, 600, 6 * 1440);
            }
        } else {
            let end = self.end;
            self.chart(&id, at, end);
        }
        if self.rng.chance(20) {
            self.merge(&id, number);
        }
    }

    fn stay(&mut self, id: &PatientId, from: At, until: At) {
        let bed = |n: u64| Some(Bed::new(format!("T{n}")));
        let place = Place { ward: Ward::new("Tern"), bed: bed(1 + self.rng.below(12)) };
        let told = self.rng.after(from, 0, 60);
        self.add(id, from, told, Body::Admitted(place));
        if self.rng.chance(30) {
            let at = self.rng.after(from, 60, 2000);
            let told = self.rng.after(at, 0, 60);
            let ward = Ward::new(*self.rng.pick(&["Tern", "Plover"]));
            let bed = bed(1 + self.rng.below(12));
            self.add(id, at, told, Body::Moved(Place { ward, bed }));
            if self.rng.chance(20) {
                let undone = self.rng.after(told, 10, 600);
                self.add(id, undone, undone, Body::StayCancelled { of: at });
            }
        }
        self.chart(id, from, until);
        let told = self.late(until);
        self.add(id, until, told, Body::Discharged);
    }

    fn chart(&mut self, id: &PatientId, from: At, until: At) {
        for _ in 0..self.rng.below(4) {
            let start = self.rng.after(from, 0, 4 * 1440);
            self.course(id, start, until);
        }
        let (mut qt, drift) = (self.rng.between(370.0, 450.0), self.rng.between(-2.0, 9.0));
        let wide = self.rng.chance(15);
        let mut at = self.rng.after(from, 5, 600);
        while at < until.min(self.end) {
            qt = (qt + self.rng.between(-18.0, 18.0) + drift).clamp(330.0, 600.0);
            self.tracing(id, at, qt, wide);
            at = self.rng.after(at, 500, 3000);
        }
        let mut potassium = self.rng.between(3.4, 4.6);
        let mut at = self.rng.after(from, 5, 900);
        while at < until.min(self.end) {
            potassium = (potassium + self.rng.between(-0.6, 0.5)).clamp(2.2, 6.8);
            self.results(id, at, potassium);
            at = self.rng.after(at, 600, 3600);
        }
        for condition in [Condition::Sepsis, Condition::HeartFailure, Condition::LoopDiuretic] {
            if self.rng.chance(30) {
                let at = self.rng.after(from, 0, 5000);
                let told = self.late(at);
                let present = self.rng.chance(60);
                self.add(id, at, told, Body::Risk { condition, present });
            }
        }
    }

    fn course(&mut self, id: &PatientId, start: At, until: At) {
        let medicine =
            MedicineName { codes: Vec::new(), text: (*self.rng.pick(&MEDICINES)).into() };
        let order = OrderId::new(self.id("order"));
        let dose = |amount: &str| Some(Dose { amount: amount.into(), unit: "mg".into() });
        let route: Option<Box<str>> = Some("PO".into());
        let content = |amount: &str, id: &OrderId, starts: Option<At>| Order {
            id: id.clone(),
            medicine: medicine.clone(),
            dose: dose(amount),
            route: route.clone(),
            frequency: Some("every 12 h".into()),
            starts,
            ends: None,
        };
        let told = self.rng.after(start, 0, 120);
        let planned = self.rng.chance(20).then(|| start + TimeDelta::hours(6));
        self.add(id, start, told, Body::Ordered(content("5", &order, planned)));
        let end = self.rng.after(start, 300, 9 * 1440).min(until);
        let mut at = self.rng.after(start, 30, 700);
        let mut amount = "5";
        while at < end {
            if self.rng.chance(6) {
                amount = "10";
                let told = self.rng.after(at, 0, 30);
                self.add(id, at, told, Body::Ordered(content(amount, &order, planned)));
            }
            let administration = self.id("dose");
            let given = Administration {
                id: administration.as_str().into(),
                order: Some(order.clone()),
                medicine: medicine.clone(),
                dose: dose(amount),
                route: route.clone(),
            };
            let told = self.late(at);
            self.add(id, at, told, Body::Given(given));
            if self.rng.chance(6) {
                // The correction may come before what it corrects.
                let undone = self.rng.after(at, 1, 900);
                let administration = administration.as_str().into();
                self.add(id, undone, undone, Body::NotGiven { administration });
            }
            at = self.rng.after(at, 600, 900);
        }
        let body = match self.rng.below(6) {
            0 => Body::OrderCancelled(order),
            1 => Body::OrderHeld(order),
            2 => return, // nobody stops it: it ends with the stay
            _ => Body::OrderStopped(order),
        };
        let told = self.late(end);
        self.add(id, end, told, body);
    }

    fn tracing(&mut self, id: &PatientId, at: At, qt: f64, wide: bool) {
        let name = TracingId::new(self.id("tracing"));
        let (quality, why): (_, Vec<Box<str>>) = match self.rng.below(10) {
            0 => (Quality::None, vec!["T wave is flat".into()]),
            1 | 2 => (Quality::Doubtful, vec!["readers differ".into()]),
            _ => (Quality::Good, Vec::new()),
        };
        let rate = self.rng.between(48.0, 96.0);
        let ms = |value: f64| Ms::new(value).ok();
        let reading = |shift: f64, doubt: f64| Reading {
            qt_tangent: ms(qt + shift),
            qt_threshold: ms(qt + shift + 8.0),
            doubt: Ms::new(doubt).unwrap(),
        };
        let doubt = self.rng.between(3.0, 14.0);
        let rhythm = *self.rng.pick(&[
            Some(Rhythm::Regular),
            Some(Rhythm::Regular),
            Some(Rhythm::IrregularlyIrregular),
            None,
        ]);
        let tracing = Tracing {
            id: name.clone(),
            engine: "sim 1".into(),
            quality,
            why,
            rr: ms(60_000.0 / rate),
            rate: PerMinute::new(rate).ok(),
            rhythm,
            qrs: ms(if wide { 142.0 } else { 92.0 }),
            paced: false,
            global: (quality != Quality::None).then(|| reading(0.0, doubt)),
            leads: vec![("II".into(), reading(-20.0, doubt))],
            printed: self.rng.chance(30).then(|| Printed {
                qt: ms(qt + self.rng.between(-60.0, 60.0)),
                qtc: None,
                formula: None,
                qrs: None,
                rate: None,
            }),
        };
        // A cart whose clock runs ahead: the tracing is from a moment that has not come yet.
        let told = if self.rng.chance(5) { at - TimeDelta::minutes(20) } else { self.late(at) };
        self.add(id, at, told, Body::Tracing(tracing.clone()));
        if self.rng.chance(10) {
            let again = self.rng.after(told, 30, 3000);
            let global = tracing.global.map(|_| reading(self.rng.between(-15.0, 15.0), 6.0));
            let engine = "sim 2".into();
            self.add(id, at, again, Body::Tracing(Tracing { engine, global, ..tracing }));
        }
        match self.rng.below(12) {
            0 => {
                let read = self.rng.after(told, 20, 2000);
                let body = Body::OverRead(OverRead {
                    tracing: name,
                    by: Person::new("a.reader"),
                    qt: self.rng.chance(85).then(|| Ms::new(qt - 22.0).unwrap()),
                    qrs: None,
                    rr: None,
                    lead: None,
                    tangent: self.rng.chance(80),
                    why: "T end read earlier".into(),
                });
                self.add(id, read, read, body);
            }
            1 if self.rng.chance(40) => {
                let gone = self.rng.after(told, 20, 2000);
                self.add(id, gone, gone, Body::TracingWithdrawn(name));
            }
            2 if self.rng.chance(40) => {
                let chosen = self.rng.after(told, 20, 2000);
                self.add(id, chosen, chosen, Body::BaselineChosen(name));
            }
            _ => {}
        }
    }

    fn results(&mut self, id: &PatientId, at: At, potassium: f64) {
        let magnesium = self.rng.between(0.5, 1.0);
        for (analyte, number) in [
            (Analyte::Potassium, potassium),
            (Analyte::Magnesium, magnesium),
            (Analyte::Creatinine, 130.0),
        ] {
            if !self.rng.chance(75) {
                continue;
            }
            let name = ResultId::new(self.id("result"));
            let issued = self.rng.after(at, 20, 120);
            let haemolysed = self.rng.chance(10);
            let result = |number: Option<f64>, status, issued, haemolysed| LabResult {
                id: name.clone(),
                analyte,
                value: number.map(|number| ResultValue { number, bound: Bound::Equal }),
                as_sent: number.map_or("no value".into(), |number| format!("{number:.1}").into()),
                status,
                issued_at: Some(issued),
                specimen: Specimen { haemolysed, unreliable: false },
            };
            let told = self.late(issued);
            let first = result(Some(number), ResultStatus::Final, issued, haemolysed);
            self.add(id, at, told, Body::Result(first));
            if self.rng.chance(15) {
                // A later version, which may well arrive before the first.
                let later = self.rng.after(issued, 10, 900);
                let (number, status) = match self.rng.below(4) {
                    0 => (None, ResultStatus::Cancelled),
                    1 => (None, ResultStatus::EnteredInError),
                    _ => (Some(number + 0.9), ResultStatus::Corrected),
                };
                let told = self.rng.after(later, 0, 30);
                self.add(id, at, told, Body::Result(result(number, status, later, false)));
            }
        }
    }

    fn merge(&mut self, id: &PatientId, number: u64) {
        let other = PatientId::new("sim", &format!("{}-{number}-other", self.seed)).unwrap();
        let at = self.rng.after(self.start, 3 * 1440, 15 * 1440);
        self.tracing(&other, at, 470.0, false);
        self.results(&other, at, 3.1);
        let merged = self.rng.after(at, 100, 4000);
        self.add(&other, merged, merged, Body::Merged { into: id.clone() });
        if self.rng.chance(50) {
            let split = self.rng.after(merged, 100, 4000);
            self.add(&other, split, split, Body::Split);
        }
    }

    fn service(&mut self) {
        for trouble in [Trouble::Disk, Trouble::Mail, Trouble::Folder] {
            if self.rng.chance(30) {
                let at = self.rng.after(self.start, 600, 20 * 1440);
                let well = self.rng.after(at, 30, 3000);
                for (at, present) in [(at, true), (well, false)] {
                    self.facts.push(Fact {
                        occurred_at: at,
                        received_at: at,
                        source: Source::Service,
                        patient: None,
                        body: Body::Service { trouble, present },
                    });
                }
            }
        }
    }
}
