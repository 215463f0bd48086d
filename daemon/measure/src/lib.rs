//! A [`Recording`] in, a [`Measurement`] out: where the T wave ebbs back to the baseline, and how far to
//! believe it. Depends on nothing of ours; does no I/O; owns no clock.

mod beats;
mod clean;
mod engine;
mod filter;
mod learned;
mod measurement;
mod reading;
mod recording;
mod resample;
mod series;
mod shape;
mod units;
mod verdict;
mod wave;

pub use measurement::{
    Answer, Beat, BeatKind, ENGINE, Intervals, LeadReading, Marks, Measurement, MedianBeat,
    MedianLead, Reason, Rhythm, TEndMethod,
};
pub use recording::{Lead, NotARecording, Recording, Signal};
pub use units::{Hz, Microvolts, Ms, PerMinute, Seconds};

/// What to measure, and with which readers.
#[derive(Debug, Clone, Default, PartialEq)]
pub struct Options {
    /// Measure only from this second of the recording (0 when `None`). Marks stay relative to the file's start.
    pub from: Option<Seconds>,
    /// Measure only to this second (its end when `None`).
    pub to: Option<Seconds>,
    /// Leave the learned reader out (for comparison and benchmarks).
    pub classical_only: bool,
}

/// Measures one recording. Never fails: what cannot be told is [`Answer::None`] with its reasons.
pub fn measure(recording: &Recording, options: &Options) -> Measurement {
    let shipped = if options.classical_only { None } else { learned::Reader::shipped().ok() };
    engine::measure(recording, options, shipped)
}

/// For the scripts in `training/`, by way of `examples/training.rs`. Not for measuring.
#[doc(hidden)]
pub mod training {
    use crate::{Measurement, Options, Recording, beats, clean, engine, learned};

    /// What the nets see of every beat: its R peak in seconds, the ms to the next, then for every lead the slow
    /// track and for every lead the fast one, each beat averaged with up to eight that resemble it.
    #[allow(clippy::cast_possible_truncation, reason = "the working rate is a small whole number")]
    pub fn windows(recording: &Recording) -> Vec<Vec<f32>> {
        let cleaned = clean::clean(recording, 0, recording.samples());
        let r = beats::r_peaks(&cleaned.leads);
        let leads: Vec<&[f32]> = cleaned.leads.iter().map(|lead| lead.uv.as_slice()).collect();
        learned::training_windows(&leads, clean::HZ as f32, &r)
    }

    /// Measures with other nets than those that ship, such as those of a fold of cross-validation.
    ///
    /// # Errors
    /// When the text is not a weights file.
    pub fn measure_with(
        recording: &Recording,
        options: &Options,
        weights: &str,
    ) -> Result<Measurement, Box<dyn std::error::Error>> {
        let reader = learned::Reader::parse(weights)?;
        Ok(engine::measure(recording, options, Some(&reader)))
    }
}
