//! The Tisdale score (Circ Cardiovasc Qual Outcomes 2013;6:479; points from memory): context beside the QTc, not a gate.
//! It travels badly between hospitals. Where an item is not recorded the score is a range.

/// What the score asks. `None`: not recorded.
#[derive(Debug, Clone, Copy, PartialEq, Default)]
pub struct Items {
    /// Age in years: 68 or more is 1 point.
    pub age: Option<u32>,
    /// 1 point.
    pub female: Option<bool>,
    /// 1 point.
    pub loop_diuretic: Option<bool>,
    /// Potassium, mmol/L: 3.5 or less is 2 points.
    pub potassium: Option<f64>,
    /// QTc at admission, ms: 450 or more is 2 points.
    pub admission_qtc_ms: Option<f64>,
    /// 2 points.
    pub acute_infarction: Option<bool>,
    /// 3 points.
    pub sepsis: Option<bool>,
    /// Heart failure with reduced ejection fraction: 3 points.
    pub heart_failure: Option<bool>,
    /// QT-prolonging medicines: one is 3 points, two or more 6.
    pub medicines: Option<usize>,
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
}

/// Adds up. Between 0 and 21.
pub fn tisdale(items: &Items) -> Score {
    let mut score = Score { low: 0, high: 0, missing: Vec::new() };
    let mut item = |name, points: u8, present: Option<bool>| match present {
        Some(true) => {
            score.low += points;
            score.high += points;
        }
        Some(false) => {}
        None => {
            score.high += points;
            score.missing.push(name);
        }
    };
    item("age", 1, items.age.map(|age| age >= 68));
    item("sex", 1, items.female);
    item("loop diuretic", 1, items.loop_diuretic);
    item("potassium", 2, items.potassium.map(|k| k <= 3.5));
    item("QTc at admission", 2, items.admission_qtc_ms.map(|qtc| qtc >= 450.0));
    item("acute myocardial infarction", 2, items.acute_infarction);
    item("sepsis", 3, items.sepsis);
    item("heart failure", 3, items.heart_failure);
    item("medicines", 3, items.medicines.map(|n| n >= 1));
    if items.medicines != Some(0) {
        let second = items.medicines.map(|n| n >= 2);
        score.low += if second == Some(true) { 3 } else { 0 };
        score.high += if second == Some(false) { 0 } else { 3 };
    }
    score
}

#[cfg(test)]
mod tests {
    use super::*;

    fn nothing() -> Items {
        Items {
            age: Some(67),
            female: Some(false),
            loop_diuretic: Some(false),
            potassium: Some(3.51),
            admission_qtc_ms: Some(449.0),
            acute_infarction: Some(false),
            sepsis: Some(false),
            heart_failure: Some(false),
            medicines: Some(0),
        }
    }

    /// Each item at its boundary; points of methods.md §6 [M].
    #[test]
    fn every_item_at_its_boundary() {
        assert_eq!(tisdale(&nothing()).low, 0);
        let one = |change: fn(&mut Items)| {
            let mut items = nothing();
            change(&mut items);
            let score = tisdale(&items);
            assert_eq!(score.low, score.high);
            score.low
        };
        assert_eq!(one(|i| i.age = Some(68)), 1);
        assert_eq!(one(|i| i.female = Some(true)), 1);
        assert_eq!(one(|i| i.loop_diuretic = Some(true)), 1);
        assert_eq!(one(|i| i.potassium = Some(3.5)), 2);
        assert_eq!(one(|i| i.admission_qtc_ms = Some(450.0)), 2);
        assert_eq!(one(|i| i.acute_infarction = Some(true)), 2);
        assert_eq!(one(|i| i.sepsis = Some(true)), 3);
        assert_eq!(one(|i| i.heart_failure = Some(true)), 3);
        assert_eq!(one(|i| i.medicines = Some(1)), 3);
        assert_eq!(one(|i| i.medicines = Some(2)), 6);
        assert_eq!(one(|i| i.medicines = Some(5)), 6);
    }

    #[test]
    fn all_present_is_21_and_nothing_known_is_0_to_21() {
        let all = Items {
            age: Some(80),
            female: Some(true),
            loop_diuretic: Some(true),
            potassium: Some(3.0),
            admission_qtc_ms: Some(470.0),
            acute_infarction: Some(true),
            sepsis: Some(true),
            heart_failure: Some(true),
            medicines: Some(2),
        };
        assert_eq!(tisdale(&all).words(), "21");
        let unknown = tisdale(&Items::default());
        assert_eq!((unknown.words().as_str(), unknown.missing.len()), ("0 to 21", 9));
    }
}
