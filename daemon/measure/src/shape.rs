//! Which beats are of the dominant shape: their QRS over all leads correlates with that of most others.

#![allow(
    clippy::indexing_slicing,
    clippy::cast_possible_truncation,
    clippy::cast_sign_loss,
    clippy::cast_precision_loss,
    reason = "sample positions within checked bounds"
)]

use crate::clean::HZ;

/// Least correlation of two beats of one shape, over QRS and its surroundings.
const ALIKE: f32 = 0.85;
/// Beats that vote on which shape is the dominant one.
const VOTERS: usize = 60;

/// For each beat, whether it is of the dominant shape.
pub(crate) fn dominant(leads: &[&[f32]], r: &[usize]) -> Vec<bool> {
    let shapes: Vec<Vec<f32>> = r.iter().map(|peak| shape(leads, *peak)).collect();
    let every = shapes.len().div_ceil(VOTERS).max(1);
    let voters: Vec<&Vec<f32>> = shapes.iter().step_by(every).collect();
    let votes =
        |one: &Vec<f32>| voters.iter().filter(|other| correlation(one, other) > ALIKE).count();
    let Some(seed) = voters.iter().max_by_key(|one| votes(one)) else { return Vec::new() };
    shapes.iter().map(|one| correlation(one, seed) > ALIKE).collect()
}

/// All leads from 80 ms before to 120 ms after the R peak, every 8 ms, each without its mean.
fn shape(leads: &[&[f32]], peak: usize) -> Vec<f32> {
    let (before, after, every) =
        ((0.08 * HZ) as usize, (0.12 * HZ) as usize, (0.008 * HZ) as usize);
    let mut all = Vec::with_capacity(leads.len() * (before + after) / every);
    for lead in leads {
        let own: Vec<f32> = (0..before + after)
            .step_by(every)
            .map(|i| lead[(peak + i).saturating_sub(before).min(lead.len() - 1)])
            .collect();
        let mean = own.iter().sum::<f32>() / own.len() as f32;
        all.extend(own.into_iter().map(|v| v - mean));
    }
    all
}

fn correlation(a: &[f32], b: &[f32]) -> f32 {
    let dot = |a: &[f32], b: &[f32]| a.iter().zip(b).map(|(a, b)| a * b).sum::<f32>();
    dot(a, b) / (dot(a, a) * dot(b, b)).sqrt().max(f32::MIN_POSITIVE)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_beat_of_another_shape_stands_out() {
        let mut lead = vec![0.0f32; 3000];
        let r = [300, 700, 1100, 1500, 1900];
        for (n, peak) in r.iter().enumerate() {
            for i in 0..60 {
                let x = (i as f32 - 30.0) / if n == 2 { 25.0 } else { 6.0 };
                lead[peak + i - 30] = if n == 2 { -800.0 } else { 1000.0 } * (-x * x).exp();
            }
        }
        assert_eq!(dominant(&[&lead], &r), [true, true, false, true, true]);
    }
}
