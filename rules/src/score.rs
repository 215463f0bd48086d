//! The Tisdale score (Circ Cardiovasc Qual Outcomes 2013;6:479; points from memory): context beside the QTc, not a gate.
//! It travels badly between hospitals. Where an item is not known the score is a range.

use crate::fact::ResultValue;
use serde::Deserialize;

/// What the score asks. `None`: not known.
#[derive(Debug, Clone, Copy, PartialEq, Default)]
pub struct Items {
    /// Age in years: 1 point from 68.
    pub age: Option<u32>,
    /// 1 point.
    pub female: Option<bool>,
    /// 1 point.
    pub loop_diuretic: Option<bool>,
    /// Potassium, mmol/L, possibly only bounded: 2 points up to 3.5.
    pub potassium: Option<ResultValue>,
    /// QTc at admission and its doubt, ms: 2 points from 450. Within its doubt of 450 it is not known.
    pub admission_qtc_ms: Option<(f64, f64)>,
    /// 2 points.
    pub acute_infarction: Option<bool>,
    /// 3 points.
    pub sepsis: Option<bool>,
    /// Heart failure with reduced ejection fraction: 3 points.
    pub heart_failure: Option<bool>,
    /// QT-prolonging medicines known of: one is 3 points, two or more 6.
    pub medicines: Option<usize>,
    /// There may be more than those.
    pub more_medicines: bool,
}

/// Descriptions of the score differ in what they make of the boundary itself. A protocol may name its reading.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default, Deserialize)]
#[serde(deny_unknown_fields, default)]
pub struct Readings {
    /// Of age.
    pub age: AgeReading,
    /// Of potassium.
    pub potassium: PotassiumReading,
    /// Of QTc at admission.
    pub qtc: QtcReading,
}

/// From which age the point is given.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default, Deserialize)]
pub enum AgeReading {
    /// 68 counts.
    #[default]
    #[serde(rename = "at-least-68")]
    AtLeast68,
    /// 68 does not count.
    #[serde(rename = "above-68")]
    Above68,
}

/// Up to which potassium, in mmol/L, the points are given.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default, Deserialize)]
pub enum PotassiumReading {
    /// 3.5 counts.
    #[default]
    #[serde(rename = "at-most-3.5")]
    AtMost3_5,
    /// 3.5 does not count.
    #[serde(rename = "below-3.5")]
    Below3_5,
}

/// From which QTc, in ms, the points are given.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default, Deserialize)]
pub enum QtcReading {
    /// 450 counts.
    #[default]
    #[serde(rename = "at-least-450")]
    AtLeast450,
    /// 450 does not count.
    #[serde(rename = "above-450")]
    Above450,
}

/// The score as far as it can be told.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Score {
    /// With everything missing counted as absent.
    pub low: u8,
    /// With everything missing counted as present.
    pub high: u8,
    /// What is missing.
    pub missing: Vec<&'static str>,
}

impl Score {
    /// `7` or `7 to 12`.
    pub fn words(&self) -> String {
        if self.low == self.high {
            self.low.to_string()
        } else {
            format!("{} to {}", self.low, self.high)
        }
    }

    fn item(&mut self, name: &'static str, points: u8, present: Option<bool>) {
        if present == Some(true) {
            self.low += points;
        }
        if present != Some(false) {
            self.high += points;
        }
        if present.is_none() && !self.missing.contains(&name) {
            self.missing.push(name);
        }
    }
}

/// Adds up. Between 0 and 21.
pub fn tisdale(items: &Items, readings: Readings) -> Score {
    let old = |age: u32| match readings.age {
        AgeReading::AtLeast68 => age >= 68,
        AgeReading::Above68 => age > 68,
    };
    let low = |potassium: ResultValue| match readings.potassium {
        PotassiumReading::AtMost3_5 => potassium.is_above(3.5).map(|above| !above),
        PotassiumReading::Below3_5 => potassium.is_below(3.5),
    };
    let long = |qtc: f64| match readings.qtc {
        QtcReading::AtLeast450 => qtc >= 450.0,
        QtcReading::Above450 => qtc > 450.0,
    };
    let surely_long = |(qtc, doubt): (f64, f64)| {
        let (least, most) = (long(qtc - doubt), long(qtc + doubt));
        (least == most).then_some(least)
    };
    let known = items.medicines;
    let at_least = |n: usize| match known {
        Some(known) if known >= n => Some(true),
        Some(_) if !items.more_medicines => Some(false),
        Some(_) | None => None,
    };
    let mut score = Score { low: 0, high: 0, missing: Vec::new() };
    score.item("age", 1, items.age.map(old));
    score.item("sex", 1, items.female);
    score.item("loop diuretic", 1, items.loop_diuretic);
    score.item("potassium", 2, items.potassium.and_then(low));
    score.item("QTc at admission", 2, items.admission_qtc_ms.and_then(surely_long));
    score.item("acute myocardial infarction", 2, items.acute_infarction);
    score.item("sepsis", 3, items.sepsis);
    score.item("heart failure", 3, items.heart_failure);
    score.item("medicines", 3, at_least(1));
    score.item("medicines", 3, at_least(2));
    score
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::fact::Bound;
    use proptest::prelude::*;

    fn exactly(number: f64) -> Option<ResultValue> {
        Some(ResultValue { number, bound: Bound::Equal })
    }

    fn nothing() -> Items {
        Items {
            age: Some(67),
            female: Some(false),
            loop_diuretic: Some(false),
            potassium: exactly(3.51),
            admission_qtc_ms: Some((449.0, 0.0)),
            acute_infarction: Some(false),
            sepsis: Some(false),
            heart_failure: Some(false),
            medicines: Some(0),
            more_medicines: false,
        }
    }

    fn everything() -> Items {
        Items {
            age: Some(80),
            female: Some(true),
            loop_diuretic: Some(true),
            potassium: exactly(3.0),
            admission_qtc_ms: Some((470.0, 8.0)),
            acute_infarction: Some(true),
            sepsis: Some(true),
            heart_failure: Some(true),
            medicines: Some(2),
            more_medicines: false,
        }
    }

    fn points(items: &Items, readings: Readings) -> u8 {
        let score = tisdale(items, readings);
        assert_eq!((score.low, &score.missing), (score.high, &vec![]));
        score.low
    }

    fn one(change: impl FnOnce(&mut Items)) -> u8 {
        let mut items = nothing();
        change(&mut items);
        points(&items, Readings::default())
    }

    /// Each item on both sides of its boundary; points of methods.md §6 [M].
    #[test]
    fn every_item_at_its_boundary() {
        assert_eq!(points(&nothing(), Readings::default()), 0);
        assert_eq!(one(|i| i.age = Some(68)), 1);
        assert_eq!(one(|i| i.female = Some(true)), 1);
        assert_eq!(one(|i| i.loop_diuretic = Some(true)), 1);
        assert_eq!(one(|i| i.potassium = exactly(3.5)), 2);
        assert_eq!(one(|i| i.admission_qtc_ms = Some((450.0, 0.0))), 2);
        assert_eq!(one(|i| i.acute_infarction = Some(true)), 2);
        assert_eq!(one(|i| i.sepsis = Some(true)), 3);
        assert_eq!(one(|i| i.heart_failure = Some(true)), 3);
        assert_eq!(one(|i| i.medicines = Some(1)), 3);
        assert_eq!(one(|i| i.medicines = Some(2)), 6);
        assert_eq!(one(|i| i.medicines = Some(5)), 6);
    }

    #[test]
    fn a_protocol_may_leave_the_boundary_itself_out() {
        let strict = Readings {
            age: AgeReading::Above68,
            potassium: PotassiumReading::Below3_5,
            qtc: QtcReading::Above450,
        };
        let at = |age, k, qtc| Items {
            age: Some(age),
            potassium: exactly(k),
            admission_qtc_ms: Some((qtc, 0.0)),
            ..nothing()
        };
        assert_eq!(points(&at(68, 3.5, 450.0), Readings::default()), 5);
        assert_eq!(points(&at(68, 3.5, 450.0), strict), 0);
        assert_eq!(points(&at(69, 3.49, 451.0), strict), 5);
    }

    /// The published maximum is 21 (methods.md §6 [M]).
    #[test]
    fn all_present_is_21_and_nothing_known_is_0_to_21() {
        assert_eq!(points(&everything(), Readings::default()), 21);
        let unknown = tisdale(&Items::default(), Readings::default());
        assert_eq!((unknown.words().as_str(), unknown.missing.len()), ("0 to 21", 9));
    }

    #[test]
    fn what_only_may_be_so_widens_the_range() {
        let range = |items: Items| {
            let score = tisdale(&items, Readings::default());
            (score.low, score.high, score.missing)
        };
        let only = |number, bound| Some(ResultValue { number, bound });
        let qtc = Items { admission_qtc_ms: Some((445.0, 8.0)), ..nothing() };
        assert_eq!(range(qtc), (0, 2, vec!["QTc at admission"]));
        let bounded = Items { potassium: only(4.0, Bound::Below), ..nothing() };
        assert_eq!(range(bounded), (0, 2, vec!["potassium"]));
        let surely = Items { potassium: only(3.5, Bound::Below), ..nothing() };
        assert_eq!(range(surely), (2, 2, vec![]));
        let one_more = Items { medicines: Some(1), more_medicines: true, ..nothing() };
        assert_eq!(range(one_more), (3, 6, vec!["medicines"]));
        let unnamed = Items { medicines: Some(0), more_medicines: true, ..nothing() };
        assert_eq!(range(unnamed), (0, 6, vec!["medicines"]));
    }

    proptest! {
        /// Whatever is hidden, the true score lies within the range, and the range is a point only when nothing is.
        #[test]
        fn the_range_holds_the_score(hide in prop::collection::vec(any::<bool>(), 9), all in any::<bool>()) {
            let full = if all { everything() } else { nothing() };
            let truth = points(&full, Readings::default());
            let mut items = full;
            let mut hidden = hide.iter().copied();
            let mut gone = || hidden.next().unwrap();
            if gone() { items.age = None; }
            if gone() { items.female = None; }
            if gone() { items.loop_diuretic = None; }
            if gone() { items.potassium = None; }
            if gone() { items.admission_qtc_ms = None; }
            if gone() { items.acute_infarction = None; }
            if gone() { items.sepsis = None; }
            if gone() { items.heart_failure = None; }
            if gone() { items.medicines = None; }
            let score = tisdale(&items, Readings::default());
            prop_assert!(score.low <= truth && truth <= score.high && score.high <= 21);
            prop_assert_eq!(score.missing.len(), hide.iter().filter(|hidden| **hidden).count());
            prop_assert_eq!(score.low == score.high, score.missing.is_empty());
        }
    }
}
