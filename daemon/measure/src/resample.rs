//! To the working rate, by windowed sinc interpolation.

#![allow(
    clippy::indexing_slicing,
    clippy::cast_possible_truncation,
    clippy::cast_sign_loss,
    clippy::cast_precision_loss,
    clippy::cast_possible_wrap,
    reason = "sample positions within checked bounds"
)]

use std::f64::consts::PI;

/// Samples to each side that count, at the slower of the two rates.
const REACH: f64 = 12.0;

/// The signal at another rate; sample 0 stays where it is. Band-limited to the slower rate's half. Ends are held.
pub(crate) fn resample(x: &[f32], from_hz: f64, to_hz: f64) -> Vec<f32> {
    if (from_hz - to_hz).abs() < 1e-9 || x.is_empty() {
        return x.to_vec();
    }
    let step = from_hz / to_hz;
    // Narrower than both halves, so that nothing folds back.
    let width = step.max(1.0) * 1.02;
    let reach = (REACH * width).ceil() as isize;
    let length = ((x.len() as f64 - 1.0) / step).floor() as usize + 1;
    let last = x.len() as isize - 1;
    (0..length)
        .map(|i| {
            let at = i as f64 * step;
            let centre = at.round() as isize;
            let (mut sum, mut weights) = (0.0, 0.0);
            for j in centre - reach..=centre + reach {
                let w = kernel((j as f64 - at) / width);
                sum += w * f64::from(x[j.clamp(0, last) as usize]);
                weights += w;
            }
            (sum / weights) as f32
        })
        .collect()
}

/// Sinc under a Hann window of `REACH` to each side.
fn kernel(t: f64) -> f64 {
    if t.abs() >= REACH {
        return 0.0;
    }
    let sinc = if t.abs() < 1e-9 { 1.0 } else { (PI * t).sin() / (PI * t) };
    sinc * 0.5 * (1.0 + (PI * t / REACH).cos())
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_sine_survives_up_and_down() {
        let sine = |hz: f64, n: usize| {
            (0..n).map(|i| (2.0 * PI * 30.0 * i as f64 / hz).sin() as f32).collect::<Vec<_>>()
        };
        for (from, to) in [(250.0, 500.0), (1000.0, 500.0), (360.0, 500.0)] {
            let found = resample(&sine(from, 2000), from, to);
            let expected = sine(to, found.len());
            let middle = 100..found.len() - 100;
            let worst = middle.map(|i| (found[i] - expected[i]).abs()).fold(0.0f32, f32::max);
            assert!(worst < 0.01, "{from} to {to}: {worst}");
        }
    }
}
