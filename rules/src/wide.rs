//! Wide QRS (120 ms or more): estimates that take the depolarisation out of QT, each from a small study. Shown as
//! estimates, never alone a reason for the highest tier, never a reason to silence a raw QTc of 500 ms. And the QT
//! nomogram, which holds for narrow QRS only.

use crate::correction::{Formula, Qt};
use crate::fact::Sex;
use crate::units::{Ms, PerMinute};

/// QRS from which it is wide, ms.
pub const WIDE_FROM_MS: f64 = 120.0;

/// QTm = QT − 0.485·QRS, then to be corrected for rate (Bogossian, Heart Rhythm 2014;11:2273, 60 patients). `None` for
/// narrow QRS.
pub fn bogossian(qt_ms: f64, qrs_ms: f64) -> Option<f64> {
    (qrs_ms >= WIDE_FROM_MS).then_some(qt_ms - 0.485 * qrs_ms)
}

/// QT − (0.86·QRS − 71) (Wang 2017, doi 10.1111/jce.13203). `None` for narrow QRS.
pub fn wang(qt_ms: f64, qrs_ms: f64) -> Option<f64> {
    (qrs_ms >= WIDE_FROM_MS).then_some(qt_ms - (0.86 * qrs_ms - 71.0))
}

/// QTc − QRS + 88 (women) / 95 (men) (Yankelson, J Electrocardiol 2018;51:481, n = 48). `None` for narrow QRS or where
/// the sex is not known.
pub fn yankelson(qtc_ms: f64, qrs_ms: f64, sex: Option<Sex>) -> Option<f64> {
    let typical = match sex? {
        Sex::Female => 88.0,
        Sex::Male => 95.0,
        Sex::Other => return None,
    };
    (qrs_ms >= WIDE_FROM_MS).then_some(qtc_ms - qrs_ms + typical)
}

/// JT·(HR + 100)/518; 112 or more is prolonged (Zhou & Rautaharju 1992). For wide QRS; `None` for narrow.
pub fn jt_index(qt_ms: f64, qrs_ms: f64, rate_per_min: f64) -> Option<f64> {
    (qrs_ms >= WIDE_FROM_MS).then_some((qt_ms - qrs_ms) * (rate_per_min + 100.0) / 518.0)
}

/// JT: QT − QRS, from the end of depolarisation. Corrected for rate as QTc − QRS it keeps across a new left bundle-branch
/// block (Yankelson, same paper: 328.9 to 327.3 ms). `None` for narrow QRS.
pub fn jtc(qtc_ms: f64, qrs_ms: f64) -> Option<f64> {
    (qrs_ms >= WIDE_FROM_MS).then_some(qtc_ms - qrs_ms)
}

/// Every estimate that can be made for a wide QRS, with its name; in ms, but for the JT index. Bogossian and Wang are
/// corrected by `formula`, and so is the QTc of Yankelson and of JTc. Empty for narrow QRS.
pub fn estimates(
    qt: Qt,
    qrs: Ms,
    rate: PerMinute,
    formula: Formula,
    sex: Option<Sex>,
) -> Vec<(&'static str, f64)> {
    let corrected =
        |qt_ms: f64| Some(formula.correct(Qt(Ms::new(qt_ms).ok()?), rate, sex).ok()?.value.get());
    let (qt, qrs) = (qt.0.get(), qrs.get());
    [
        ("Bogossian", bogossian(qt, qrs).and_then(corrected)),
        ("Wang", wang(qt, qrs).and_then(corrected)),
        ("Yankelson", corrected(qt).and_then(|qtc| yankelson(qtc, qrs, sex))),
        ("JTc", corrected(qt).and_then(|qtc| jtc(qtc, qrs))),
        ("JT index", jt_index(qt, qrs, rate.get())),
    ]
    .into_iter()
    .filter_map(|(name, value)| Some((name, value?)))
    .collect()
}

/// The raw QT, ms, from which the adult overdose nomogram marks risk at a rate (Chan, Isbister et al., QJM 2007;100:609;
/// the line read second-hand): 480 to 60/min, then sloping. `None` outside 40 to 150/min.
pub fn nomogram_ms(rate_per_min: f64) -> Option<f64> {
    match rate_per_min {
        hr if !(40.0..=150.0).contains(&hr) => None,
        hr if hr <= 60.0 => Some(480.0),
        hr if hr <= 110.0 => Some(480.0 - 1.6 * (hr - 60.0)),
        hr if hr <= 145.0 => Some(400.0 - 2.0 * (hr - 110.0)),
        hr => Some(330.0 - 1.6 * (hr - 145.0)),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn near(found: Option<f64>, expected: f64) {
        assert!((found.unwrap() - expected).abs() < 0.05, "{found:?} is not {expected}");
    }

    /// methods.md §3 [A]: QT 460, QRS 150, HR 70; the nomogram's joints [S].
    #[test]
    fn vectors() {
        near(bogossian(460.0, 150.0), 387.25);
        near(wang(460.0, 150.0), 402.0);
        near(jt_index(460.0, 150.0, 70.0), 101.7);
        near(yankelson(480.0, 150.0, Some(Sex::Female)), 418.0);
        near(bogossian(460.0, 150.0).map(|qtm| qtm / (60.0f64 / 70.0).cbrt()), 407.7);
        for (hr, line) in
            [(40.0, 480.0), (60.0, 480.0), (110.0, 400.0), (145.0, 330.0), (150.0, 322.0)]
        {
            near(nomogram_ms(hr), line);
        }
    }

    #[test]
    fn estimates_are_made_for_wide_qrs_only_and_without_sex_there_are_fewer() {
        let at = |qrs: f64, sex| {
            let ms = |value| Ms::new(value).unwrap();
            let rate = PerMinute::new(70.0).unwrap();
            estimates(Qt(ms(460.0)), ms(qrs), rate, Formula::Fridericia, sex)
        };
        let found = at(150.0, Some(Sex::Male));
        let names: Vec<_> = found.iter().map(|(name, _)| *name).collect();
        assert_eq!(names, ["Bogossian", "Wang", "Yankelson", "JTc", "JT index"]);
        near(Some(found[0].1), 407.7);
        // QTc by Fridericia is 484.25; less QRS 150, it is 334.25, and with a man's usual 95 it is 429.25 [A].
        near(Some(found[3].1), 334.25);
        near(Some(found[2].1), 429.25);
        assert_eq!(at(150.0, None).len(), 4);
        assert!(at(119.9, Some(Sex::Male)).is_empty());
    }

    #[test]
    fn narrow_qrs_and_far_rates_give_nothing() {
        assert_eq!(bogossian(400.0, 119.0), None);
        assert_eq!(jt_index(400.0, 90.0, 70.0), None);
        assert_eq!(yankelson(480.0, 150.0, None), None);
        assert_eq!((nomogram_ms(39.0), nomogram_ms(151.0)), (None, None));
    }
}
