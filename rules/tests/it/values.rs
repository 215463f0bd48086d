//! Values as conditions see them: bounds, spoilt specimens, calcium in its best form, medicines whose route nobody
//! knows. Each condition is written as in a protocol and asked of a patient made of facts.

#![allow(clippy::unwrap_used, reason = "a test whose patient can't be made fails")]

use crate::config::{MEDICINES, PROTOCOL};
use chrono::{NaiveDate, TimeDelta};
use ebbmark_rules::evaluate::{evaluate, tisdale_of};
use ebbmark_rules::evidence::electrolytes;
use ebbmark_rules::fact::{
    Administration, Analyte, At, Body, Bound, Description, Fact, LabResult, MedicineName, Place,
    ResultStatus, ResultValue, Sex, Source, Specimen,
};
use ebbmark_rules::ids::{PatientId, ResultId, Ward};
use ebbmark_rules::medicines::MedicineList;
use ebbmark_rules::patient::Patient;
use ebbmark_rules::protocol::Protocol;
use ebbmark_rules::protocol::condition::Condition;
use ebbmark_rules::verdict::Verdict;
use ebbmark_rules::view::View;

const FIRM: Specimen = Specimen { haemolysed: false, unreliable: false };
const HAEMOLYSED: Specimen = Specimen { haemolysed: true, unreliable: false };
const UNRELIABLE: Specimen = Specimen { haemolysed: false, unreliable: true };

/// A patient made of facts, seen at noon of one day.
struct Chart {
    patient: Patient,
    facts: usize,
}

fn noon() -> At {
    NaiveDate::from_ymd_opt(2027, 3, 2).unwrap().and_hms_opt(12, 0, 0).unwrap().and_utc()
}

impl Chart {
    fn new() -> Self {
        let mut chart = Self { patient: Patient::default(), facts: 0 };
        chart.add(240, Body::Admitted(Place { ward: Ward::new("Tern"), bed: None }));
        let birth_date = NaiveDate::from_ymd_opt(1957, 1, 1);
        let described =
            Description { sex: Some(Sex::Female), birth_date, ..Description::default() };
        chart.add(240, Body::Described(described));
        chart
    }

    fn add(&mut self, hours_ago: i64, body: Body) {
        let at = noon() - TimeDelta::hours(hours_ago);
        self.facts += 1;
        self.patient.take(&Fact {
            occurred_at: at,
            received_at: at,
            source: Source::Service,
            patient: PatientId::new("test", "1"),
            body,
        });
    }

    fn result(
        mut self,
        hours_ago: i64,
        analyte: Analyte,
        value: Option<(f64, Bound)>,
        specimen: Specimen,
    ) -> Self {
        let id = ResultId::new(format!("r{}", self.facts));
        let value = value.map(|(number, bound)| ResultValue { number, bound });
        let as_sent = value.map_or(String::new(), |value| format!("{} mmol/L", value.number));
        self.add(
            hours_ago,
            Body::Result(LabResult {
                id,
                analyte,
                value,
                as_sent: as_sent.into(),
                status: ResultStatus::Final,
                issued_at: None,
                specimen,
            }),
        );
        self
    }

    fn known(self, hours_ago: i64, analyte: Analyte, number: f64) -> Self {
        self.result(hours_ago, analyte, Some((number, Bound::Equal)), FIRM)
    }

    fn given(mut self, hours_ago: i64, name: &str, route: Option<&str>) -> Self {
        let given = Administration {
            id: format!("a{}", self.facts).into(),
            order: None,
            medicine: MedicineName { codes: Vec::new(), text: name.into() },
            dose: None,
            route: route.map(Into::into),
        };
        self.add(hours_ago, Body::Given(given));
        self
    }

    fn see<T>(&self, look: impl FnOnce(&View<'_>) -> T) -> T {
        let protocol = Protocol::parse(PROTOCOL).unwrap();
        let list = MedicineList::parse(MEDICINES).unwrap();
        look(&View::new(&self.patient, &protocol, &list, noon()))
    }

    /// `fired`, `quiet`, or why it can't be told.
    fn says(&self, condition: &str) -> String {
        #[derive(serde::Deserialize)]
        struct When {
            when: Condition,
        }
        let When { when } = toml::from_str(&format!("when = {condition}")).unwrap();
        match self.see(|view| evaluate(&when, view)) {
            Verdict::Fired(_) => "fired".into(),
            Verdict::Quiet => "quiet".into(),
            Verdict::CannotTell(missing) => missing.what.join("; "),
        }
    }
}

use Analyte::{Albumin, CalciumIonised, CalciumTotal, Magnesium, Potassium};

const LOW: &str = r#"{ electrolyte = { of = "potassium", below_mmol_l = 3.5 } }"#;
const HIGH: &str = r#"{ electrolyte = { of = "potassium", above_mmol_l = 6.0 } }"#;
const FALLS: &str =
    r#"{ electrolyte = { of = "potassium", falling_by_mmol_l = 1.0, within_h = 24 } }"#;
const CALCIUM: &str =
    "{ low_calcium = { ionised_below_mmol_l = 1.0, corrected_below_mmol_l = 2.0 } }";

fn potassium(number: f64, bound: Bound, specimen: Specimen) -> Chart {
    Chart::new().result(1, Potassium, Some((number, bound)), specimen)
}

#[test]
fn a_bound_answers_only_what_it_can() {
    for (number, bound, low, high) in [
        (3.4, Bound::Equal, "fired", "quiet"),
        (3.5, Bound::Equal, "quiet", "quiet"),
        (6.0, Bound::Equal, "quiet", "quiet"),
        (6.1, Bound::Equal, "quiet", "fired"),
        (3.5, Bound::Below, "fired", "quiet"),
        (4.0, Bound::Below, "potassium is only known to be below 4.00 mmol/L", "quiet"),
        (6.0, Bound::Above, "quiet", "fired"),
        (
            3.0,
            Bound::Above,
            "potassium is only known to be above 3.00 mmol/L",
            "potassium is only known to be above 3.00 mmol/L",
        ),
    ] {
        let chart = potassium(number, bound, FIRM);
        assert_eq!((chart.says(LOW).as_str(), chart.says(HIGH).as_str()), (low, high), "{number}");
    }
}

#[test]
fn a_haemolysed_specimen_may_hide_a_low_value_and_invent_a_high_one() {
    let says = |number| {
        let chart = potassium(number, Bound::Equal, HAEMOLYSED);
        (chart.says(LOW), chart.says(HIGH))
    };
    let (low, high) = says(4.1);
    assert!(low.contains("potassium is not reliable") && low.contains("haemolysed"), "{low}");
    assert_eq!(high, "quiet", "the true value is lower still");
    assert_eq!(says(3.2).0, "fired", "low though it reads too high");
    assert!(says(6.4).1.contains("not reliable"));
    let contaminated = potassium(4.1, Bound::Equal, UNRELIABLE);
    assert!(contaminated.says(LOW).contains("may be another"));
    assert!(contaminated.says(HIGH).contains("not reliable"));
    let calcium = Chart::new().result(1, CalciumIonised, Some((1.2, Bound::Equal)), HAEMOLYSED);
    assert_eq!(calcium.says(CALCIUM), "quiet", "burst red cells do not move calcium");
    let magnesium = Chart::new().result(1, Magnesium, Some((0.8, Bound::Equal)), HAEMOLYSED);
    let low = r#"{ electrolyte = { of = "magnesium", below_mmol_l = 0.6 } }"#;
    assert!(magnesium.says(low).contains("not reliable"));
}

#[test]
fn a_spoilt_specimen_without_a_number_is_seen() {
    let spoilt = r#"{ electrolyte_state = { of = "potassium", is = "haemolysed" } }"#;
    let earlier = Chart::new().known(6, Potassium, 4.0);
    assert_eq!(earlier.says(spoilt), "quiet");
    let chart = earlier.result(1, Potassium, None, HAEMOLYSED);
    assert_eq!(chart.says(spoilt), "fired");
    assert_eq!(chart.says(LOW), "quiet", "the earlier value still holds");
    assert_eq!(chart.known(0, Potassium, 4.1).says(spoilt), "quiet", "taken again");
}

#[test]
fn a_fall_is_counted_from_the_highest_value_of_the_hours_before() {
    let steps = Chart::new().known(20, Potassium, 4.6).known(10, Potassium, 4.1);
    assert_eq!(steps.known(1, Potassium, 3.6).says(FALLS), "fired");
    let earlier = Chart::new().known(27, Potassium, 4.6).known(10, Potassium, 4.1);
    assert_eq!(earlier.known(1, Potassium, 3.6).says(FALLS), "quiet", "26 h before");
    let spoilt = Chart::new().result(20, Potassium, Some((4.9, Bound::Equal)), HAEMOLYSED);
    assert!(spoilt.known(1, Potassium, 3.6).says(FALLS).contains("no reliable potassium"));
    let bounded = Chart::new().result(20, Potassium, Some((4.9, Bound::Below)), FIRM);
    assert!(bounded.known(1, Potassium, 3.6).says(FALLS).contains("only bounded"));
    let bounded = Chart::new().result(20, Potassium, Some((4.9, Bound::Above)), FIRM);
    assert_eq!(bounded.known(1, Potassium, 3.6).says(FALLS), "fired", "at least so far");
}

#[test]
fn a_stale_value_is_shown_and_not_trusted() {
    let chart = Chart::new().known(25, Potassium, 4.1);
    assert!(chart.says(LOW).contains("potassium is stale"));
    let shown = chart.see(|view| electrolytes(view).join("; "));
    assert!(shown.contains("4.10 mmol/L") && shown.contains("stale"), "{shown}");
    assert_eq!(Chart::new().known(23, Potassium, 4.1).says(LOW), "quiet");
}

#[test]
fn ionised_calcium_wins_and_a_total_one_wants_an_albumin_near_it() {
    let total = || Chart::new().known(1, CalciumTotal, 1.85);
    let corrected = total().known(3, Albumin, 40.0);
    assert_eq!(corrected.says(CALCIUM), "fired");
    assert_eq!(corrected.known(2, CalciumIonised, 1.15).says(CALCIUM), "quiet");
    let low = total().known(3, Albumin, 26.0).known(2, CalciumIonised, 0.95);
    assert_eq!(low.says(CALCIUM), "fired", "ionised low, corrected 2.13");
    let stale = total().known(3, Albumin, 40.0).known(30, CalciumIonised, 1.15);
    assert_eq!(stale.says(CALCIUM), "fired", "a stale ionised one does not win");
    let alone = total();
    assert_eq!(alone.says(CALCIUM), "ionised calcium: none in this stay");
    let shown = alone.see(|view| electrolytes(view).join("; "));
    assert!(
        shown.contains("total calcium 1.85 mmol/L of 2 Mar 11:00 without an albumin"),
        "{shown}"
    );
    let far = total().known(80, Albumin, 40.0);
    let only = r#"{ electrolyte = { of = "calcium-corrected", below_mmol_l = 2.0 } }"#;
    assert!(far.says(only).contains("without an albumin near it"));
}

#[test]
fn grades_are_shown_where_they_do_not_hang_on_the_laboratory() {
    let shown = |number| {
        let chart = Chart::new().known(1, Potassium, number);
        chart.see(|view| electrolytes(view).join("; "))
    };
    assert!(shown(2.9).contains("CTCAE v5 grade 3"));
    assert!(shown(2.4).contains("CTCAE v5 grade 4"));
    assert!(!shown(3.0).contains("CTCAE"));
}

#[test]
fn an_indirect_agent_counts_only_where_it_is_named() {
    let one = "{ medicines = { at_least = 1 } }";
    let loops = r#"{ medicines = { at_least = 1, groups = ["loop-diuretic"] } }"#;
    let water = Chart::new().given(2, "furosemide", Some("PO"));
    assert_eq!((water.says(one).as_str(), water.says(loops).as_str()), ("quiet", "fired"));
    assert_eq!(water.given(2, "sotalol", Some("PO")).says(one), "fired");
}

#[test]
fn a_route_that_nobody_knows_can_not_be_told() {
    let iv = r#"{ medicines = { at_least = 1, substances = ["haloperidol"], routes = ["IV"] } }"#;
    let by = |route| Chart::new().given(2, "haloperidol", route).says(iv);
    assert_eq!(by(Some("pump 3")), "the route of haloperidol is not known");
    assert_eq!(by(Some("i.v. push")), "fired");
    assert_eq!(by(Some("by mouth")), "quiet");
    assert_eq!(by(None), "the route of haloperidol is not known");
}

#[test]
fn what_nobody_recognised_widens_the_risk_score() {
    let range = |chart: Chart| {
        chart.see(|view| {
            let score = tisdale_of(view);
            (score.low, score.high, score.missing.contains(&"medicines"))
        })
    };
    let known = || Chart::new().given(2, "sotalol", None).known(1, Potassium, 4.2);
    // 70 years and a woman: 1 + 1; one medicine: 3. Not known: QTc 2, infarction 2, sepsis 3, heart failure 3.
    assert_eq!(range(known()), (5, 15, false));
    // A loop diuretic or another QT-prolonging one may hide behind the name: 1 + 3 more.
    assert_eq!(range(known().given(2, "Unheardof 5 mg", None)), (5, 19, true));
    assert_eq!(range(known().given(2, "furosemide", None)), (6, 16, false));
}
