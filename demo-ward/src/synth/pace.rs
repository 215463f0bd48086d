//! When the heart beats: RR intervals of several rhythms.

use super::Pace;
use crate::random::Random;
use std::f64::consts::TAU;

/// One beat to be drawn.
#[derive(Debug, Clone, Copy)]
pub(super) struct Beat {
    /// QRS onset, seconds from the first sample; may lie before it.
    pub(super) onset: f64,
    /// The interval before it, seconds.
    pub(super) rr: f64,
    /// Began in the ventricle, ahead of its time.
    pub(super) ectopic: bool,
}

/// The shortest RR of an irregular rhythm: the next beat comes after T has ended.
const AFTER_T: f64 = 0.05;

/// Beats from one before the recording begins to one after it ends.
pub(super) fn beats(
    pace: Pace,
    mean: f64,
    qt: f64,
    seconds: f64,
    random: &mut Random,
) -> Vec<Beat> {
    let mut beats = Vec::new();
    let breath = random.between(0.20, 0.28);
    let phase = random.between(0.0, TAU);
    let mut onset = -random.between(0.15, 0.95) * mean;
    let mut rr = mean;
    let mut count: u32 = 0;
    let mut pause = 0.0;
    while onset < seconds + 0.5 {
        let ectopic = pace.is_ectopic(count);
        beats.push(Beat { onset, rr, ectopic });
        count += 1;
        let sinus = |share: f64, random: &mut Random| {
            mean * (1.0 + share * (TAU * breath * onset + phase).sin() + 0.004 * random.normal())
        };
        rr = match pace {
            Pace::Sinus { variability } => sinus(variability, random),
            Pace::Paced => mean,
            Pace::Changing { to_per_min } => {
                let way = (onset / seconds).clamp(0.0, 1.0);
                let to = 60.0 / to_per_min;
                sinus(0.01, random) * (1.0 - way + way * to / mean)
            }
            Pace::AtrialFibrillation => {
                // Each interval is drawn for itself; skewed to the long side, as the AV node lets pass.
                let drawn = mean * (0.22 * random.normal() - 0.02).exp();
                drawn.max(0.6 * mean).max(qt + AFTER_T)
            }
            Pace::Ectopics { .. } => {
                let sinus = sinus(0.015, random);
                if pace.is_ectopic(count) {
                    // Early by as much as the pause after it is long, so that the mean keeps.
                    let early = (sinus - (qt + 0.03).max(0.62 * sinus)).max(0.0);
                    pause = early;
                    sinus - early
                } else {
                    sinus + std::mem::take(&mut pause)
                }
            }
        };
        onset += rr;
    }
    beats
}

impl Pace {
    fn is_ectopic(self, count: u32) -> bool {
        match self {
            Pace::Ectopics { every } => every > 0 && count % every == every - 1,
            Pace::Sinus { .. } | Pace::Changing { .. } | Pace::AtrialFibrillation | Pace::Paced => {
                false
            }
        }
    }

    /// Whether atria lead each beat with a P wave.
    pub(super) fn has_p(self) -> bool {
        !matches!(self, Pace::AtrialFibrillation | Pace::Paced)
    }
}
