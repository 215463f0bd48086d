//! Where measuring meets deciding: the QTc of a measurement, by the formulas of the rules.

use ebbmark_measure::Measurement;
use ebbmark_rules::correction::{Formula, Qt};
use ebbmark_rules::units::{Ms, PerMinute};

/// The QTc of a measurement in ms; `None` where QT or rate can't be told, or outside the formula's domain.
pub fn of(measurement: &Measurement, formula: Formula) -> Option<f64> {
    let qt = Qt(Ms::new(measurement.intervals.as_ref()?.qt.get()).ok()?);
    let rate = PerMinute::new(measurement.rate?.get()).ok()?;
    formula.correct(qt, rate, None).ok().map(|qtc| qtc.value.get())
}
