//! Machine against local readers: how far a hospital's own over-reads and the engine agree, so that it can be
//! tested on the hospital's own tracings before it goes live.
//!
//! Differences are always machine minus reader, in ms.

#![allow(
    clippy::cast_possible_truncation,
    clippy::cast_sign_loss,
    reason = "places among a list's own values"
)]

mod deming;
mod limits;
mod pairs;
mod share;

pub use deming::{Deming, deming};
pub use limits::{Estimate, Limits, limits};
pub use pairs::{BadPair, Pair, pairs};
pub use share::{Share, share};

/// The middle value, and the value below which 90 % lie (linear between neighbours, as spreadsheets do).
/// `None` for no values.
pub fn centile(values: &[f64], share: f64) -> Option<f64> {
    let mut sorted: Vec<f64> = values.iter().copied().filter(|value| value.is_finite()).collect();
    sorted.sort_by(f64::total_cmp);
    let last = sorted.len().checked_sub(1)?;
    let place = share.clamp(0.0, 1.0) * last as f64;
    let below = sorted.get(place.floor() as usize)?;
    let above = sorted.get((place.ceil() as usize).min(last))?;
    Some(below + (above - below) * place.fract())
}

#[cfg(test)]
mod tests {
    use super::centile;

    #[test]
    fn centiles_as_numpy_gives_them() {
        // numpy 1.26: percentile([7, 1, 5, 11], 90) = 9.8; median = 6. [A]
        let values = [7.0, 1.0, 5.0, 11.0];
        assert_eq!(centile(&values, 0.5), Some(6.0));
        assert!((centile(&values, 0.9).unwrap() - 9.8).abs() < 1e-12);
        assert_eq!(centile(&[], 0.5), None);
        assert_eq!(centile(&[f64::NAN, 3.0], 0.9), Some(3.0));
    }
}
