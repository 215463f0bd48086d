//! Who lay where and for how long: the denominator of every rate.

use super::Period;
use ebbmark_rules::fact::{At, Body, Fact};
use ebbmark_rules::ids::{PatientId, Ward};
use std::collections::BTreeMap;

/// Stays by patient, folded from facts in any order of receipt.
#[derive(Debug, Clone, Default)]
pub struct Stays {
    by_patient: BTreeMap<PatientId, Vec<(At, Option<Ward>)>>,
}

/// Days that patients spent, 24 h each.
#[derive(Debug, Clone, Default, PartialEq)]
pub struct PatientDays {
    /// On all wards.
    pub all: f64,
    /// By ward.
    pub by_ward: BTreeMap<Ward, f64>,
}

impl Stays {
    /// Takes one fact; what is no coming, moving or going is passed over.
    pub fn take(&mut self, fact: &Fact) {
        let Some(patient) = &fact.patient else { return };
        let ward = match &fact.body {
            Body::Admitted(place) | Body::Moved(place) => Some(place.ward.clone()),
            Body::Discharged => None,
            Body::StayCancelled { of } => {
                if let Some(steps) = self.by_patient.get_mut(patient) {
                    steps.retain(|(at, _)| at != of);
                }
                return;
            }
            _ => return,
        };
        let steps = self.by_patient.entry(patient.clone()).or_default();
        let place = steps.partition_point(|(at, _)| *at <= fact.occurred_at);
        steps.insert(place, (fact.occurred_at, ward));
    }

    /// The ward on which a patient lay at a moment.
    pub fn ward_at(&self, patient: &PatientId, at: At) -> Option<&Ward> {
        let steps = self.by_patient.get(patient)?;
        let before = steps.partition_point(|(since, _)| *since <= at);
        steps.get(before.checked_sub(1)?)?.1.as_ref()
    }

    /// Patient-days within a period; a stay without an end counts to the period's end.
    pub fn days(&self, period: Period) -> PatientDays {
        let mut days = PatientDays::default();
        for steps in self.by_patient.values() {
            let ends = steps.iter().skip(1).map(|(at, _)| *at).chain([period.to]);
            for ((since, ward), until) in steps.iter().zip(ends) {
                let Some(ward) = ward else { continue };
                let (since, until) = ((*since).max(period.from), until.min(period.to));
                if since < until {
                    let spent = (until - since).num_milliseconds() as f64 / 86_400_000.0;
                    days.all += spent;
                    *days.by_ward.entry(ward.clone()).or_default() += spent;
                }
            }
        }
        days
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use chrono::TimeDelta;
    use ebbmark_rules::fact::{Place, Source};

    fn at(hour: i64) -> At {
        At::UNIX_EPOCH + TimeDelta::hours(hour)
    }

    fn fact(hour: i64, body: Body) -> Fact {
        Fact {
            occurred_at: at(hour),
            received_at: at(hour),
            source: Source::Service,
            patient: PatientId::new("SALT", "1001"),
            body,
        }
    }

    fn place(ward: &str) -> Place {
        Place { ward: Ward::new(ward), bed: None }
    }

    #[test]
    fn a_day_on_each_of_two_wards() {
        let mut stays = Stays::default();
        // The discharge is learned before the move: facts may come late.
        for f in [
            fact(0, Body::Admitted(place("Tern"))),
            fact(48, Body::Discharged),
            fact(24, Body::Moved(place("Heron"))),
        ] {
            stays.take(&f);
        }
        let patient = PatientId::new("SALT", "1001").unwrap();
        let days = stays.days(Period { from: at(0), to: at(96) });
        assert!(
            (days.all - 2.0).abs() < 1e-9 && (days.by_ward[&Ward::new("Heron")] - 1.0).abs() < 1e-9
        );
        assert_eq!(stays.ward_at(&patient, at(30)), Some(&Ward::new("Heron")));
        assert_eq!(stays.ward_at(&patient, at(50)), None);
        let half = stays.days(Period { from: at(12), to: at(24) });
        assert!((half.all - 0.5).abs() < 1e-9);
    }

    #[test]
    fn a_cancelled_admission_counts_for_nothing() {
        let mut stays = Stays::default();
        stays.take(&fact(0, Body::Admitted(place("Tern"))));
        stays.take(&fact(1, Body::StayCancelled { of: at(0) }));
        assert!(stays.days(Period { from: at(0), to: at(24) }).all.abs() < 1e-9);
    }
}
