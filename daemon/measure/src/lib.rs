//! A [`Recording`] in, a [`Measurement`] out: where the T wave ebbs back to the baseline, and how far to
//! believe it. Depends on nothing of ours; does no I/O; owns no clock.

#[allow(dead_code, reason = "the fusion of readers calls it")]
mod learned;
mod measurement;
mod recording;
mod units;

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

/// For the scripts that train the learned reader, see `examples/training_windows.rs`. Not for measuring.
#[doc(hidden)]
pub fn training_windows(leads: &[&[f32]], hz: f32, r: &[usize]) -> Vec<f32> {
    learned::training_windows(leads, hz, r)
}

/// Measures one recording. Never fails: what cannot be told is [`Answer::None`] with its reasons.
pub fn measure(recording: &Recording, options: &Options) -> Measurement {
    let _ = (recording, options);
    Measurement {
        answer: Answer::None(vec![Reason::NoUsableLead]),
        remarks: Vec::new(),
        rr: None,
        rate: None,
        rhythm: None,
        intervals: None,
        qrs: None,
        paced: false,
        per_lead: Vec::new(),
        beats: Vec::new(),
        median: None,
    }
}
