//! RR series: which beats count, and the pattern of their intervals.

#![allow(
    clippy::indexing_slicing,
    clippy::cast_precision_loss,
    reason = "positions within checked bounds"
)]

use crate::measurement::Rhythm;

/// What the RR intervals say.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct Series {
    /// Mean RR, ms, over the intervals that count.
    pub mean_ms: f64,
    /// The pattern.
    pub rhythm: Rhythm,
    /// The rate changed from the first to the last third of the recording.
    pub drifts: bool,
}

/// Judges intervals (ms; not a number across a hole) between neighbouring beats; `of_shape[i]` says whether beat i is of the dominant shape.
/// `None` under two beats. A regular rhythm varies by less than 10 % about its median (common practice, no source);
/// without a pattern is what keeps varying from beat to beat even among beats of one shape.
pub(crate) fn series(rr_ms: &[f64], of_shape: &[bool]) -> Option<Series> {
    let known: Vec<f64> = rr_ms.iter().copied().filter(|rr| rr.is_finite()).collect();
    if known.is_empty() {
        return None;
    }
    let middle = median(&known);
    // Intervals between beats of the dominant shape, neither early nor the pause after an early one.
    let own: Vec<f64> = rr_ms
        .iter()
        .enumerate()
        .filter(|(i, _)| of_shape.get(*i) == Some(&true) && of_shape.get(i + 1) == Some(&true))
        .map(|(_, rr)| *rr)
        .filter(|rr| rr.is_finite())
        .collect();
    let counted = if own.len() >= 2 { &own } else { &known };
    let mean = known.iter().sum::<f64>() / known.len() as f64;
    let off = known.iter().filter(|rr| (*rr - middle).abs() > 0.1 * middle).count() as f64
        / known.len() as f64;
    let steps: Vec<f64> = counted.windows(2).map(|w| (w[1] - w[0]).abs() / middle).collect();
    let jumpy =
        steps.iter().filter(|step| **step > 0.08).count() as f64 / steps.len().max(1) as f64;
    let rhythm = if off <= 0.1 {
        Rhythm::Regular
    } else if steps.len() >= 4 && jumpy >= 0.5 && !alternates(counted) {
        Rhythm::IrregularlyIrregular
    } else {
        Rhythm::Irregular
    };
    let third = counted.len() / 3;
    let drifts = third >= 2 && {
        let (first, last) = (median(&counted[..third]), median(&counted[counted.len() - third..]));
        (first - last).abs() > 0.12 * middle && rhythm != Rhythm::IrregularlyIrregular
    };
    Some(Series { mean_ms: mean, rhythm, drifts })
}

/// Long and short in turn, as in bigeminy: a pattern.
fn alternates(rr: &[f64]) -> bool {
    let turns = rr.windows(3).filter(|w| (w[1] - w[0]) * (w[2] - w[1]) < 0.0).count();
    let alike = rr.windows(3).filter(|w| (w[2] - w[0]).abs() < 0.08 * w[0]).count();
    let n = rr.len().saturating_sub(2).max(1);
    turns as f64 / n as f64 > 0.8 && alike as f64 / n as f64 > 0.7
}

/// The middle value.
pub(crate) fn median(x: &[f64]) -> f64 {
    let mut sorted = x.to_vec();
    sorted.sort_by(f64::total_cmp);
    let n = sorted.len();
    if n == 0 { 0.0 } else { (sorted[(n - 1) / 2] + sorted[n / 2]) / 2.0 }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn says(rr: &[f64]) -> Rhythm {
        series(rr, &vec![true; rr.len() + 1]).unwrap().rhythm
    }

    #[test]
    fn patterns_are_told_apart() {
        assert_eq!(says(&[800.0, 810.0, 790.0, 805.0, 800.0]), Rhythm::Regular);
        assert_eq!(
            says(&[800.0, 500.0, 1100.0, 800.0, 810.0, 790.0, 800.0, 805.0]),
            Rhythm::Irregular
        );
        assert_eq!(
            says(&[620.0, 910.0, 540.0, 780.0, 1010.0, 600.0, 870.0, 690.0]),
            Rhythm::IrregularlyIrregular
        );
        assert_eq!(says(&[500.0, 1000.0, 510.0, 990.0, 505.0, 1005.0, 500.0]), Rhythm::Irregular);
    }

    #[test]
    fn a_hole_is_no_interval() {
        let found = series(&[800.0, 810.0, f64::NAN, 790.0, 800.0], &[true; 6]).unwrap();
        assert!((found.mean_ms - 800.0).abs() < 1e-9);
        assert_eq!(found.rhythm, Rhythm::Regular);
        assert_eq!(series(&[f64::NAN], &[true; 2]), None);
    }

    #[test]
    fn a_rate_that_jumps_within_the_recording_is_noticed() {
        let rr: Vec<f64> = (0..6).map(|_| 1000.0).chain((0..8).map(|_| 700.0)).collect();
        assert!(series(&rr, &[true; 15]).unwrap().drifts);
        assert!(!series(&[800.0; 12], &[true; 13]).unwrap().drifts);
    }
}
