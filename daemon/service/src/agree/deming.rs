//! Deming regression: a line through pairs where both sides err (Deming 1943; jackknife intervals as Linnet, Clin
//! Chem 1990;36:1, from memory). An ordinary regression would pull the slope towards zero and call a good engine
//! one that shortens long intervals.

use super::limits::{Estimate, student};

/// reader → machine as a straight line.
#[derive(Debug, Clone, Copy, PartialEq, serde::Serialize)]
pub struct Deming {
    /// How many pairs.
    pub n: usize,
    /// Machine ms per reader ms; 1 is agreement.
    pub slope: Estimate,
    /// Machine ms where the reader has 0.
    pub intercept: Estimate,
}

/// Fits machine on reader with equal error variances (ratio 1: two readers of a QT interval and a good engine err
/// alike, methods.md §9). Points are (reader, machine). `None` under four pairs or where the readers do not vary.
pub fn deming(points: &[(f64, f64)]) -> Option<Deming> {
    let n = points.len();
    if n < 4 {
        return None;
    }
    let (slope, intercept) = line(points.iter().copied())?;
    let mut left_out = Vec::with_capacity(n);
    for skip in 0..n {
        left_out
            .push(line(points.iter().enumerate().filter(|(i, _)| *i != skip).map(|(_, p)| *p))?);
    }
    let t = student(n as f64 - 2.0)?;
    let estimate = |value: f64, of: fn(&(f64, f64)) -> f64| {
        let pseudo: Vec<f64> =
            left_out.iter().map(|out| n as f64 * value - (n as f64 - 1.0) * of(out)).collect();
        let mean = pseudo.iter().sum::<f64>() / n as f64;
        let variance = pseudo.iter().map(|p| (p - mean).powi(2)).sum::<f64>() / (n as f64 - 1.0);
        let half = t * (variance / n as f64).sqrt();
        Estimate { value, low: value - half, high: value + half }
    };
    Some(Deming {
        n,
        slope: estimate(slope, |out| out.0),
        intercept: estimate(intercept, |out| out.1),
    })
}

/// (slope, intercept) with error-variance ratio 1.
fn line(points: impl Iterator<Item = (f64, f64)> + Clone) -> Option<(f64, f64)> {
    let n = points.clone().count() as f64;
    let (x, y) = points.clone().fold((0.0, 0.0), |sum, p| (sum.0 + p.0 / n, sum.1 + p.1 / n));
    let (xx, yy, xy) = points.fold((0.0, 0.0, 0.0), |sum, p| {
        let (dx, dy) = (p.0 - x, p.1 - y);
        (sum.0 + dx * dx, sum.1 + dy * dy, sum.2 + dx * dy)
    });
    if xx <= f64::EPSILON || xy.abs() <= f64::EPSILON {
        return None;
    }
    let difference = yy - xx;
    let slope = (difference + (difference * difference + 4.0 * xy * xy).sqrt()) / (2.0 * xy);
    Some((slope, y - slope * x))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn points_on_a_line_give_that_line() {
        let points: Vec<_> = [380.0, 410.0, 450.0, 520.0].map(|x| (x, 0.9 * x + 30.0)).to_vec();
        let found = deming(&points).unwrap();
        assert!(
            (found.slope.value - 0.9).abs() < 1e-9 && (found.intercept.value - 30.0).abs() < 1e-6
        );
        assert!(found.slope.high - found.slope.low < 1e-6, "no scatter, no doubt");
    }

    #[test]
    fn changing_the_sides_inverts_the_slope() {
        // The property that ordinary regression lacks, and the reason for this one.
        let points =
            [(400.0, 405.0), (420.0, 411.0), (450.0, 462.0), (500.0, 489.0), (540.0, 548.0)];
        let turned = points.map(|(x, y)| (y, x));
        let (there, back) = (deming(&points).unwrap(), deming(&turned).unwrap());
        assert!((there.slope.value * back.slope.value - 1.0).abs() < 1e-9);
    }

    #[test]
    fn readers_that_do_not_vary_give_no_line() {
        assert_eq!(deming(&[(400.0, 1.0), (400.0, 2.0), (400.0, 3.0), (400.0, 4.0)]), None);
    }
}
