//! Electrolytes: one canonical unit per analyte, corrected calcium, CTCAE grades. A value is never rescaled to look
//! plausible: what is implausible is held for a person.

use crate::fact::{Analyte, Bound, ResultValue};
use serde::{Deserialize, Serialize};
use std::fmt;

/// Why a number with a unit is not taken.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum NotConverted {
    /// The unit is missing.
    #[error("the unit of {0} is not stated")]
    NoUnit(Analyte),
    /// The unit is not one that is known for this analyte.
    #[error("`{unit}` is not a unit for {analyte}; known are {known}")]
    Unit {
        /// The analyte.
        analyte: Analyte,
        /// The unit as sent.
        unit: String,
        /// What would have been taken.
        known: &'static str,
    },
    /// The converted number can't be a living person's.
    #[error(
        "{analyte} of {value:.2} {canonical} is outside {low} to {high}; a unit or a decimal point may be wrong"
    )]
    Implausible {
        /// The analyte.
        analyte: Analyte,
        /// The converted value.
        value: f64,
        /// Its unit.
        canonical: &'static str,
        /// Lowest taken.
        low: f64,
        /// Highest taken.
        high: f64,
    },
}

impl Analyte {
    /// All of them.
    pub const ALL: [Analyte; 6] = [
        Analyte::Potassium,
        Analyte::Magnesium,
        Analyte::CalciumTotal,
        Analyte::CalciumIonised,
        Analyte::Albumin,
        Analyte::Creatinine,
    ];

    /// The unit in which facts hold it.
    pub fn canonical(self) -> &'static str {
        match self {
            Analyte::Albumin => "g/L",
            Analyte::Creatinine => "umol/L",
            Analyte::Potassium
            | Analyte::Magnesium
            | Analyte::CalciumTotal
            | Analyte::CalciumIonised => "mmol/L",
        }
    }

    /// The word on a page.
    pub fn word(self) -> &'static str {
        match self {
            Analyte::Potassium => "potassium",
            Analyte::Magnesium => "magnesium",
            Analyte::CalciumTotal => "total calcium",
            Analyte::CalciumIonised => "ionised calcium",
            Analyte::Albumin => "albumin",
            Analyte::Creatinine => "creatinine",
        }
    }

    /// What a living person's value lies within, in the canonical unit (methods and formats notes; common practice).
    fn plausible(self) -> (f64, f64) {
        match self {
            Analyte::Potassium => (1.0, 12.0),
            Analyte::Magnesium => (0.1, 6.0),
            Analyte::CalciumTotal => (0.8, 5.0),
            Analyte::CalciumIonised => (0.3, 3.0),
            Analyte::Albumin => (5.0, 80.0),
            Analyte::Creatinine => (5.0, 3000.0),
        }
    }

    /// mmol/L in one mg/dL: 10 / molar mass. K 39.098, Mg 24.305, Ca 40.078; creatinine 88.42 umol/L in one mg/dL.
    fn per_mg_dl(self) -> Option<f64> {
        match self {
            Analyte::Potassium => Some(10.0 / 39.098),
            Analyte::Magnesium => Some(10.0 / 24.305),
            Analyte::CalciumTotal | Analyte::CalciumIonised => Some(10.0 / 40.078),
            Analyte::Creatinine => Some(88.42),
            Analyte::Albumin => None,
        }
    }

    /// mmol/L in one mEq/L: 1 / charge.
    fn per_meq(self) -> Option<f64> {
        match self {
            Analyte::Potassium => Some(1.0),
            Analyte::Magnesium | Analyte::CalciumTotal | Analyte::CalciumIonised => Some(0.5),
            Analyte::Albumin | Analyte::Creatinine => None,
        }
    }

    fn known_units(self) -> &'static str {
        match self {
            Analyte::Albumin => "g/L, g/dL",
            Analyte::Creatinine => "umol/L, mg/dL, mg/L",
            Analyte::Potassium
            | Analyte::Magnesium
            | Analyte::CalciumTotal
            | Analyte::CalciumIonised => "mmol/L, mEq/L, mg/dL, mg/L",
        }
    }

    /// What a number in this unit is multiplied with to come to the canonical one. Units are known by their exact
    /// spelling, upper and lower case: `mg` and `Mg` are different things.
    ///
    /// # Errors
    /// The unit is missing or not known for this analyte.
    pub fn factor(self, unit: &str) -> Result<f64, NotConverted> {
        let unit = unit.trim();
        let factor = match unit {
            "" => return Err(NotConverted::NoUnit(self)),
            "mmol/L" | "mmol/l" => self.per_meq().map(|_| 1.0),
            "meq/L" | "mEq/L" | "mEq/l" | "meq/l" | "mval/L" => self.per_meq(),
            "mg/dL" | "mg/dl" => self.per_mg_dl(),
            "mg/L" | "mg/l" => self.per_mg_dl().map(|factor| factor / 10.0),
            "umol/L" | "umol/l" | "µmol/L" | "μmol/L" | "µmol/l" | "μmol/l" => {
                (self == Analyte::Creatinine).then_some(1.0)
            }
            "g/L" | "g/l" => (self == Analyte::Albumin).then_some(1.0),
            "g/dL" | "g/dl" => (self == Analyte::Albumin).then_some(10.0),
            _ => None,
        };
        factor.ok_or_else(|| NotConverted::Unit {
            analyte: self,
            unit: unit.chars().take(16).collect(),
            known: self.known_units(),
        })
    }

    /// A number with its unit, in the canonical unit. Worked: magnesium 1.5 mEq/L is 0.75 mmol/L; calcium 8.0 mg/dL is
    /// 1.996 mmol/L.
    ///
    /// # Errors
    /// The unit is missing or unknown for this analyte, or the value is implausible once converted.
    pub fn convert(self, number: f64, unit: &str) -> Result<f64, NotConverted> {
        let value = number * self.factor(unit)?;
        let (low, high) = self.plausible();
        if !(low..=high).contains(&value) {
            return Err(NotConverted::Implausible {
                analyte: self,
                value,
                canonical: self.canonical(),
                low,
                high,
            });
        }
        Ok(value)
    }
}

impl fmt::Display for Analyte {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(self.word())
    }
}

impl ResultValue {
    /// Whether the true value lies below a limit; `None` where a number that is only a bound can't tell.
    pub fn is_below(self, limit: f64) -> Option<bool> {
        match self.bound {
            Bound::Equal => Some(self.number < limit),
            Bound::Below => (self.number <= limit).then_some(true),
            Bound::Above => (self.number >= limit).then_some(false),
        }
    }

    /// Whether the true value lies above a limit; `None` where a number that is only a bound can't tell.
    pub fn is_above(self, limit: f64) -> Option<bool> {
        match self.bound {
            Bound::Equal => Some(self.number > limit),
            Bound::Below => (self.number <= limit).then_some(false),
            Bound::Above => (self.number >= limit).then_some(true),
        }
    }
}

/// Calcium corrected for albumin, mmol/L: Ca + 0.02·(40 − albumin g/L) (Payne, BMJ 1973;4:643). A stand-in where no
/// ionised calcium was measured; poor in critical illness and kidney failure.
pub fn corrected_calcium(total_mmol_l: f64, albumin_g_l: f64) -> f64 {
    total_mmol_l + 0.02 * (40.0 - albumin_g_l)
}

/// Severity by CTCAE v5, 1 to 4.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, Serialize, Deserialize)]
#[serde(transparent)]
pub struct Grade(pub u8);

/// The CTCAE v5 grade of a low value; `lower_normal` is the laboratory's lower limit. `None` where it is not low.
/// Calcium total is to be albumin-corrected first. Grade 1 and 2 of potassium differ by symptoms only: 1 is given.
/// Potassium and calcium [P], magnesium from memory.
pub fn low_grade(analyte: Analyte, value: f64, lower_normal: f64) -> Option<Grade> {
    let limits: &[f64] = match analyte {
        Analyte::Potassium => &[3.0, 2.5],
        Analyte::Magnesium => &[0.5, 0.4, 0.3],
        Analyte::CalciumTotal => &[2.0, 1.75, 1.5],
        Analyte::CalciumIonised => &[1.0, 0.9, 0.8],
        Analyte::Albumin | Analyte::Creatinine => return None,
    };
    if value >= lower_normal {
        return None;
    }
    let below = limits.iter().filter(|limit| value < **limit).count();
    let first = if analyte == Analyte::Potassium && below > 0 { 2 } else { 1 };
    u8::try_from(first + below).ok().map(Grade)
}

#[cfg(test)]
mod tests {
    use super::*;

    fn near(a: f64, b: f64, tolerance: f64) {
        assert!((a - b).abs() <= tolerance, "{a} is not {b}");
    }

    /// Factors of methods.md §7: 1 mmol/L = 1 mEq/L of K, 2 mEq/L of Mg and Ca; 2.43 mg/dL of Mg, 4.008 of Ca. The
    /// tolerance is the table's rounding.
    #[test]
    fn one_millimole_in_every_unit() {
        near(Analyte::Potassium.convert(4.1, "mEq/L").unwrap(), 4.1, 1e-12);
        near(Analyte::Magnesium.convert(2.0, "mEq/L").unwrap(), 1.0, 1e-12);
        near(Analyte::Magnesium.convert(2.43, "mg/dL").unwrap(), 1.0, 1e-3);
        near(Analyte::CalciumTotal.convert(4.0, "meq/L").unwrap(), 2.0, 1e-12);
        near(Analyte::CalciumTotal.convert(8.016, "mg/dL").unwrap(), 2.0, 1e-3);
        near(Analyte::CalciumIonised.convert(4.65, "mg/dL").unwrap(), 1.16, 1e-3);
        near(Analyte::Albumin.convert(2.5, "g/dL").unwrap(), 25.0, 1e-12);
        near(Analyte::Creatinine.convert(1.0, "mg/dL").unwrap(), 88.42, 1e-9);
    }

    #[test]
    fn a_wrong_or_missing_unit_is_never_guessed() {
        assert_eq!(
            Analyte::Potassium.convert(4.1, " "),
            Err(NotConverted::NoUnit(Analyte::Potassium))
        );
        assert!(Analyte::Potassium.convert(4.1, "g/L").is_err());
        assert!(Analyte::Creatinine.convert(80.0, "mmol/L").is_err());
        let why = Analyte::Magnesium.convert(19.0, "mmol/L").unwrap_err().to_string();
        assert!(why.contains("outside 0.1 to 6") && why.contains("may be wrong"), "{why}");
    }

    /// Vectors [A] of methods.md §7; the third is 7.5 mg/dL with 2.5 g/dL giving 8.7 mg/dL.
    #[test]
    fn payne() {
        near(corrected_calcium(1.83, 26.0), 2.11, 1e-9);
        near(corrected_calcium(2.00, 30.0), 2.20, 1e-9);
        let total = Analyte::CalciumTotal.convert(7.5, "mg/dL").unwrap();
        // Payne's 0.02 mmol/L per g/L is 0.8 mg/dL per g/dL only to rounding: 0.02 mmol/L = 0.0802 mg/dL.
        near(corrected_calcium(total, 25.0) * 4.0078, 8.7, 0.005);
    }

    /// CTCAE v5 at each boundary: K and Ca [P], Mg [M].
    #[test]
    fn ctcae_grades_at_each_boundary() {
        let grade = |analyte, value, lln| low_grade(analyte, value, lln).map(|g| g.0);
        use Analyte::*;
        for (analyte, value, lln, expected) in [
            (Potassium, 3.5, 3.5, None),
            (Potassium, 3.49, 3.5, Some(1)),
            (Potassium, 3.0, 3.5, Some(1)),
            (Potassium, 2.99, 3.5, Some(3)),
            (Potassium, 2.5, 3.5, Some(3)),
            (Potassium, 2.49, 3.5, Some(4)),
            (Magnesium, 0.69, 0.7, Some(1)),
            (Magnesium, 0.49, 0.7, Some(2)),
            (Magnesium, 0.39, 0.7, Some(3)),
            (Magnesium, 0.29, 0.7, Some(4)),
            (CalciumTotal, 2.0, 2.1, Some(1)),
            (CalciumTotal, 1.99, 2.1, Some(2)),
            (CalciumTotal, 1.74, 2.1, Some(3)),
            (CalciumTotal, 1.49, 2.1, Some(4)),
            (CalciumIonised, 0.99, 1.1, Some(2)),
            (CalciumIonised, 0.89, 1.1, Some(3)),
            (CalciumIonised, 0.79, 1.1, Some(4)),
        ] {
            assert_eq!(grade(analyte, value, lln), expected, "{analyte} {value}");
        }
    }
}
