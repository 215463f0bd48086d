//! Rate correction: QT to QTc by the published formulas. An alert always names the formula that decided.

use crate::fact::Sex;
use crate::units::{Ms, PerMinute};
use serde::{Deserialize, Serialize};
use std::fmt;

/// A QT interval as measured. Not comparable with a [`Qtc`]: the types do not allow it.
#[derive(Debug, Clone, Copy, PartialEq, PartialOrd, Serialize, Deserialize)]
#[serde(transparent)]
pub struct Qt(pub Ms);

/// A QT corrected for rate, with the formula that did it. Two of different formulas are different quantities:
/// [`Qtc::since`] refuses to subtract them.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct Qtc {
    /// The corrected interval.
    pub value: Ms,
    /// The formula.
    pub formula: Formula,
}

impl Qtc {
    /// The change since an earlier one by the same formula; `None` when the formulas differ.
    pub fn since(self, earlier: Qtc) -> Option<Ms> {
        (self.formula == earlier.formula)
            .then(|| Ms::new(self.value.get() - earlier.value.get()).ok())
            .flatten()
    }
}

/// A published rate correction.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, PartialOrd, Ord, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Formula {
    /// QT / RR^(1/2). Bazett, Heart 1920;7:353. Over-corrects fast rates, under-corrects slow ones.
    Bazett,
    /// QT / RR^(1/3). Fridericia, Acta Med Scand 1920;53:469. Under-corrects fast rates.
    Fridericia,
    /// QT + 154·(1 − RR). Sagie, Am J Cardiol 1992;70:797. Linear; fails at extreme rates.
    Framingham,
    /// QT + 1.75·(HR − 60). Hodges, JACC 1983;1:694.
    Hodges,
    /// QTcMod: QT·(120 + HR)/180. Rautaharju, Int J Cardiol 2014;174:535. Has limits of its own.
    Rautaharju,
    /// QT / RR^0.37 (men), QT / RR^0.38 (women). Same paper. Needs the sex.
    RautaharjuLogLinear,
    /// QT / RR^0.413. Dmitrienko, Drug Inf J 2005;39:395 (exponent from memory).
    Dmitrienko,
    /// Slopes of Karjalainen, JACC 1994;23:1547, joined continuously (the joining is our own); 40 to 120/min only.
    AfterKarjalainen,
}

/// Why a formula gives no value.
#[derive(Debug, Clone, Copy, PartialEq, thiserror::Error)]
pub enum NoCorrection {
    /// The rate is outside the range in which the formula means something.
    #[error("{formula} holds for {low:.0} to {high:.0}/min; the rate is {rate}")]
    Rate {
        /// The formula.
        formula: Formula,
        /// The rate.
        rate: PerMinute,
        /// Lowest rate.
        low: f64,
        /// Highest rate.
        high: f64,
    },
    /// The formula needs the sex.
    #[error("{0} needs the patient's sex")]
    Sex(Formula),
}

impl Formula {
    /// All, in the order in which they are shown.
    pub const ALL: [Formula; 8] = [
        Formula::Fridericia,
        Formula::Bazett,
        Formula::Framingham,
        Formula::Hodges,
        Formula::Rautaharju,
        Formula::RautaharjuLogLinear,
        Formula::Dmitrienko,
        Formula::AfterKarjalainen,
    ];

    /// The formula's name as people say it.
    pub fn name(self) -> &'static str {
        match self {
            Formula::Bazett => "Bazett",
            Formula::Fridericia => "Fridericia",
            Formula::Framingham => "Framingham",
            Formula::Hodges => "Hodges",
            Formula::Rautaharju => "Rautaharju QTcMod",
            Formula::RautaharjuLogLinear => "Rautaharju log-linear",
            Formula::Dmitrienko => "Dmitrienko",
            Formula::AfterKarjalainen => "after Karjalainen",
        }
    }

    /// The rates, per minute, within which the formula is computed. 30 to 180 is where any correction still means
    /// something (common practice, no source); "after Karjalainen" states its own 40 to 120.
    pub fn domain(self) -> (f64, f64) {
        match self {
            Formula::AfterKarjalainen => (40.0, 120.0),
            Formula::Bazett
            | Formula::Fridericia
            | Formula::Framingham
            | Formula::Hodges
            | Formula::Rautaharju
            | Formula::RautaharjuLogLinear
            | Formula::Dmitrienko => (30.0, 180.0),
        }
    }

    /// Corrects a QT. Worked: QT 380 ms at 75/min gives Fridericia 409.3 ms, Bazett 424.9 ms.
    ///
    /// # Errors
    /// The rate is outside the formula's domain, or the formula needs a sex that is not known.
    pub fn correct(self, qt: Qt, rate: PerMinute, sex: Option<Sex>) -> Result<Qtc, NoCorrection> {
        let (low, high) = self.domain();
        let hr = rate.get();
        if !(low..=high).contains(&hr) {
            return Err(NoCorrection::Rate { formula: self, rate, low, high });
        }
        let (qt, rr) = (qt.0.get(), 60.0 / hr);
        let value = match self {
            Formula::Bazett => qt / rr.sqrt(),
            Formula::Fridericia => qt / rr.cbrt(),
            Formula::Framingham => qt + 154.0 * (1.0 - rr),
            Formula::Hodges => qt + 1.75 * (hr - 60.0),
            Formula::Rautaharju => qt * (120.0 + hr) / 180.0,
            Formula::RautaharjuLogLinear => match sex {
                Some(Sex::Male) => qt / rr.powf(0.37),
                Some(Sex::Female) => qt / rr.powf(0.38),
                Some(Sex::Other) | None => return Err(NoCorrection::Sex(self)),
            },
            Formula::Dmitrienko => qt / rr.powf(0.413),
            Formula::AfterKarjalainen if hr < 60.0 => qt + 116.0 * (1.0 - rr),
            Formula::AfterKarjalainen if hr <= 100.0 => qt + 156.0 * (1.0 - rr),
            Formula::AfterKarjalainen => qt + 62.4 + 384.0 * (0.6 - rr),
        };
        let value =
            Ms::new(value).map_err(|_| NoCorrection::Rate { formula: self, rate, low, high })?;
        Ok(Qtc { value, formula: self })
    }

    /// How much one millisecond of QT is worth in QTc at this rate: what a doubt of QT is to be multiplied with.
    pub fn slope(self, rate: PerMinute, sex: Option<Sex>) -> f64 {
        let rr = 60.0 / rate.get().max(1.0);
        match self {
            Formula::Bazett => 1.0 / rr.sqrt(),
            Formula::Fridericia => 1.0 / rr.cbrt(),
            Formula::Rautaharju => (120.0 + rate.get()) / 180.0,
            Formula::RautaharjuLogLinear if sex == Some(Sex::Male) => 1.0 / rr.powf(0.37),
            Formula::RautaharjuLogLinear => 1.0 / rr.powf(0.38),
            Formula::Dmitrienko => 1.0 / rr.powf(0.413),
            Formula::Framingham | Formula::Hodges | Formula::AfterKarjalainen => 1.0,
        }
    }
}

impl fmt::Display for Formula {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(self.name())
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    fn qtc(formula: Formula, qt: f64, hr: f64, sex: Sex) -> f64 {
        let (qt, hr) = (Qt(Ms::new(qt).unwrap()), PerMinute::new(hr).unwrap());
        formula.correct(qt, hr, Some(sex)).unwrap().value.get()
    }

    /// Andršová et al., Sci Rep 2021;11:14269, Fig. 1 [P]. 0.5 ms: the paper rounds HR to 0.1/min.
    #[test]
    fn published_vectors() {
        for (qt, hr, bazett, fridericia) in
            [(405.0, 52.7, 379.4, 387.7), (405.0, 52.6, 379.2, 387.6), (395.0, 85.9, 472.7, 445.2)]
        {
            assert!((qtc(Formula::Bazett, qt, hr, Sex::Male) - bazett).abs() < 0.5);
            assert!((qtc(Formula::Fridericia, qt, hr, Sex::Male) - fridericia).abs() < 0.5);
        }
    }

    /// The same figure's rises from A to C [P]. 1.5 ms: the paper rounds QT and HR.
    #[test]
    fn published_rises_of_a_motionless_man() {
        for (formula, rise) in [
            (Formula::Bazett, 92.0),
            (Formula::Fridericia, 58.0),
            (Formula::Dmitrienko, 74.0),
            (Formula::Framingham, 58.0),
            (Formula::Hodges, 48.0),
            (Formula::Rautaharju, 62.0),
        ] {
            let found = qtc(formula, 395.0, 85.9, Sex::Male) - qtc(formula, 405.0, 52.7, Sex::Male);
            assert!((found - rise).abs() < 1.5, "{formula}: {found}");
        }
    }

    /// Plain arithmetic from the stated formulas [A]; 0.05 ms is their rounding.
    #[test]
    fn self_made_vectors() {
        #[rustfmt::skip]
        let table = [
            (400.0,  60.0, [400.0, 400.0, 400.0, 400.0, 400.0, 400.0, 400.0, 400.0, 400.0]),
            (480.0,  40.0, [391.9, 419.3, 403.0, 445.0, 426.7, 413.1, 411.5, 406.0, 422.0]),
            (440.0,  50.0, [401.7, 414.1, 409.2, 422.5, 415.6, 411.3, 410.5, 408.1, 416.8]),
            (380.0,  75.0, [424.9, 409.3, 410.8, 406.2, 411.7, 412.7, 413.6, 416.7, 411.2]),
            (460.0,  80.0, [531.2, 506.3, 498.5, 495.0, 511.1, 511.7, 513.1, 518.0, 499.0]),
            (350.0, 100.0, [451.8, 415.0, 411.6, 420.0, 427.8, 422.8, 425.0, 432.2, 412.4]),
            (320.0, 120.0, [452.5, 403.2, 397.0, 425.0, 426.7, 413.6, 416.4, 426.1, 420.8]),
        ];
        use Formula::*;
        let columns = [
            (Bazett, Sex::Male),
            (Fridericia, Sex::Male),
            (Framingham, Sex::Male),
            (Hodges, Sex::Male),
            (Rautaharju, Sex::Male),
            (RautaharjuLogLinear, Sex::Male),
            (RautaharjuLogLinear, Sex::Female),
            (Dmitrienko, Sex::Male),
            (AfterKarjalainen, Sex::Male),
        ];
        for (qt, hr, expected) in table {
            for ((formula, sex), expected) in columns.into_iter().zip(expected) {
                let found = qtc(formula, qt, hr, sex);
                assert!((found - expected).abs() <= 0.051, "{formula} at {qt}/{hr}: {found}");
            }
        }
    }

    #[test]
    fn outside_its_domain_a_formula_says_why() {
        let at = |formula: Formula, hr: f64, sex| {
            formula.correct(Qt(Ms::new(400.0).unwrap()), PerMinute::new(hr).unwrap(), sex)
        };
        let why = at(Formula::AfterKarjalainen, 130.0, None).unwrap_err().to_string();
        assert_eq!(why, "after Karjalainen holds for 40 to 120/min; the rate is 130 /min");
        assert_eq!(
            at(Formula::RautaharjuLogLinear, 70.0, None),
            Err(NoCorrection::Sex(Formula::RautaharjuLogLinear))
        );
        assert!(at(Formula::Bazett, 20.0, None).is_err());
    }

    #[test]
    fn different_formulas_have_no_difference() {
        let of = |formula| Qtc { value: Ms::new(450.0).unwrap(), formula };
        assert_eq!(of(Formula::Bazett).since(of(Formula::Fridericia)), None);
        assert_eq!(of(Formula::Bazett).since(of(Formula::Bazett)), Ms::new(0.0).ok());
    }

    proptest! {
        /// methods.md §1, "Properties".
        #[test]
        fn order_and_direction(qt in 250.0..650.0f64, hr in 61.0..120.0f64, slow in 40.0..59.0f64) {
            let f = |formula, sex| qtc(formula, qt, hr, sex);
            prop_assert!(f(Formula::Bazett, Sex::Male) > f(Formula::Dmitrienko, Sex::Male));
            prop_assert!(f(Formula::Dmitrienko, Sex::Male) > f(Formula::RautaharjuLogLinear, Sex::Female));
            prop_assert!(f(Formula::RautaharjuLogLinear, Sex::Female) > f(Formula::RautaharjuLogLinear, Sex::Male));
            prop_assert!(f(Formula::RautaharjuLogLinear, Sex::Male) > f(Formula::Fridericia, Sex::Male));
            for formula in Formula::ALL {
                prop_assert!(f(formula, Sex::Male) > qt, "{} must lengthen above 60/min", formula);
                let slow = qtc(formula, qt, slow, Sex::Male);
                prop_assert!(slow < qt, "{} must shorten below 60/min", formula);
                prop_assert!(qtc(formula, qt + 1.0, hr, Sex::Male) > f(formula, Sex::Male));
                let step = qtc(formula, qt + 1.0, hr, Sex::Male) - f(formula, Sex::Male);
                let slope = formula.slope(PerMinute::new(hr).unwrap(), Some(Sex::Male));
                prop_assert!((step - slope).abs() < 1e-6, "{}", formula);
            }
        }
    }
}
