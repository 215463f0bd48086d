//! What the nets see of an averaged beat. No rate, no interval and no age is told; how long the beat lasts
//! shows only in where the averaged lead is held constant, and that is stretched with it in training.
//!
//! The training scripts compute the same from the same averages; a test compares the two.

#![allow(
    clippy::indexing_slicing,
    clippy::cast_precision_loss,
    clippy::cast_possible_truncation,
    clippy::cast_sign_loss,
    reason = "fixed grids of a few hundred points"
)]

use super::average::Average;

/// Points of time on which a net looks and answers, relative to the R peak.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(crate) struct Grid {
    /// First point, ms.
    pub(crate) start: f32,
    /// Distance between points, ms.
    pub(crate) step: f32,
    /// Number of points.
    pub(crate) points: usize,
}

/// For the T end.
pub(crate) const T_GRID: Grid = Grid { start: -280.0, step: 8.0, points: 160 };

/// For QRS onset and end.
pub(crate) const QRS_GRID: Grid = Grid { start: -240.0, step: 4.0, points: 96 };

/// Input channels of either net.
pub(crate) const CHANNELS: usize = 7;

/// Ms before the next R peak at which the T net's view is held constant.
const HOLD_BEFORE_NEXT: f32 = 60.0;

/// Inputs of the T net, one array per lead: the lead against its own and against the common size, its slope,
/// three summaries over the leads, and where the view is held.
pub(crate) fn for_t(average: &Average) -> Vec<Vec<f32>> {
    let Grid { start, step, points } = T_GRID;
    let hold = (average.rr_ms - HOLD_BEFORE_NEXT).clamp(300.0, 1000.0);
    let at = |ms: f32| ((ms - start) / step).clamp(0.0, points as f32 - 1.0) as usize;
    let until = (0.75 * (hold + HOLD_BEFORE_NEXT)).min(600.0);
    let window: Vec<usize> =
        (0..40).map(|i| at(100.0 + (until - 100.0) * i as f32 / 39.0)).collect();
    let before_hold: Vec<usize> = (0..15)
        .map(|i| ((hold - start) / step - i as f32).clamp(0.0, points as f32 - 1.0) as usize)
        .collect();
    let high = |x: &[f32]| ranked(window.iter().map(|&i| x[i].abs()), 38);

    let leads: Vec<Vec<f32>> = average
        .low
        .iter()
        .map(|lead| {
            let mut x: Vec<f32> =
                (0..points).map(|i| lead.at((start + step * i as f32).min(hold))).collect();
            let baseline = ranked(before_hold.iter().map(|&i| x[i]), 7);
            x.iter_mut().for_each(|v| *v -= baseline);
            x
        })
        .collect();
    let slopes: Vec<Vec<f32>> = leads.iter().map(|x| gradient(x)).collect();
    let slope_size: Vec<f32> = slopes.iter().map(|s| high(s) + 0.5).collect();
    let rms = root_mean_square(&leads, &vec![1.0; leads.len()], points);
    let rms_slope = root_mean_square(&slopes, &vec![1.0; leads.len()], points);
    let rms_even = root_mean_square(&slopes, &slope_size, points);
    let (size, slope, even) = (high(&rms) + 5.0, high(&rms_slope) + 0.5, high(&rms_even) + 0.02);
    leads
        .iter()
        .zip(&slopes)
        .zip(&slope_size)
        .map(|((x, s), own_slope)| {
            let own = high(x) + 5.0;
            (0..points)
                .flat_map(|i| {
                    [
                        (0.7 * x[i] / own).tanh(),
                        (0.7 * s[i] / own_slope).tanh(),
                        (0.7 * x[i] / size).tanh(),
                        (0.7 * rms[i] / size).tanh(),
                        (0.7 * rms_slope[i] / slope).tanh(),
                        (0.7 * rms_even[i] / even).tanh(),
                        if start + step * i as f32 > hold { 1.0 } else { 0.0 },
                    ]
                })
                .collect()
        })
        .collect()
}

/// Inputs of the QRS net, one array per lead: the lead against its own and the common size, and slopes on a
/// logarithmic scale, where a faint beginning still shows.
pub(crate) fn for_qrs(average: &Average) -> Vec<Vec<f32>> {
    let Grid { start, step, points } = QRS_GRID;
    let high = |x: &[f32]| ranked(x.iter().map(|v| v.abs()), 92);
    let log = |ratio: f32| (ratio + 0.01).ln() * 0.4 + 0.9;
    let leads: Vec<Vec<f32>> = average
        .wide
        .iter()
        .map(|lead| (0..points).map(|i| lead.at(start + step * i as f32)).collect())
        .collect();
    let slopes: Vec<Vec<f32>> = leads.iter().map(|x| gradient(x)).collect();
    let slope_size: Vec<f32> = slopes.iter().map(|s| high(s) + 1.0).collect();
    let rms = root_mean_square(&leads, &vec![1.0; leads.len()], points);
    let rms_slope = root_mean_square(&slopes, &vec![1.0; leads.len()], points);
    let rms_even = root_mean_square(&slopes, &slope_size, points);
    let (size, slope, even) = (high(&rms) + 10.0, high(&rms_slope) + 1.0, high(&rms_even) + 0.02);
    leads
        .iter()
        .zip(&slopes)
        .zip(&slope_size)
        .map(|((x, s), own_slope)| {
            let own = high(x) + 10.0;
            (0..points)
                .flat_map(|i| {
                    [
                        (2.0 * x[i] / own).tanh(),
                        (2.0 * x[i] / size).tanh(),
                        log(s[i].abs() / own_slope),
                        log(s[i].abs() / slope),
                        log(rms_slope[i] / slope),
                        log(rms_even[i] / even),
                        (2.0 * rms[i] / size).tanh(),
                    ]
                })
                .collect()
        })
        .collect()
}

/// Central differences, one-sided at the ends; per grid step.
fn gradient(x: &[f32]) -> Vec<f32> {
    let last = x.len().saturating_sub(1);
    (0..x.len())
        .map(|i| match i {
            0 => x[1.min(last)] - x[0],
            _ if i == last => x[last] - x[last - 1],
            _ => (x[i + 1] - x[i - 1]) / 2.0,
        })
        .collect()
}

/// Over the leads, each divided by its size first.
fn root_mean_square(leads: &[Vec<f32>], sizes: &[f32], points: usize) -> Vec<f32> {
    let n = leads.len().max(1) as f32;
    (0..points)
        .map(|i| {
            let sum: f32 =
                leads.iter().zip(sizes).map(|(x, size)| (x[i] / size) * (x[i] / size)).sum();
            (sum / n + 1e-6).sqrt()
        })
        .collect()
}

/// The value of the given rank, counted from the smallest.
fn ranked(values: impl Iterator<Item = f32>, rank: usize) -> f32 {
    let mut sorted: Vec<f32> = values.collect();
    let rank = rank.min(sorted.len().saturating_sub(1));
    if sorted.is_empty() {
        return 0.0;
    }
    *sorted.select_nth_unstable_by(rank, f32::total_cmp).1
}
