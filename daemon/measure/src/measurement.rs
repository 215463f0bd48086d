//! What comes out: intervals with their doubt, and the reasons in words.

use crate::recording::Lead;
use crate::units::{Microvolts, Ms, PerMinute, Seconds};
use std::fmt;

/// How far a measurement may be trusted. "Cannot tell" is a full answer, not a missing one.
#[derive(Debug, Clone, PartialEq)]
pub enum Answer {
    /// The readers agree.
    Good,
    /// A value stands, but a person should look, and why.
    Doubtful(Vec<Reason>),
    /// No QT can be told, and why.
    None(Vec<Reason>),
}

impl Answer {
    /// The reasons, empty for [`Answer::Good`].
    pub fn why(&self) -> &[Reason] {
        match self {
            Answer::Good => &[],
            Answer::Doubtful(why) | Answer::None(why) => why,
        }
    }

    /// `good`, `doubtful` or `none`.
    pub fn word(&self) -> &'static str {
        match self {
            Answer::Good => "good",
            Answer::Doubtful(_) => "doubtful",
            Answer::None(_) => "none",
        }
    }
}

/// Why a measurement is doubted or absent. `Display` gives the words that a person reads.
#[derive(Debug, Clone, PartialEq)]
pub enum Reason {
    /// Shorter than can hold enough beats.
    TooShort(Seconds),
    /// Fewer beats of the dominant shape than a median beat needs.
    FewBeats(usize),
    /// No lead carries a usable signal.
    NoUsableLead,
    /// Fewer usable leads than a global reading deserves.
    FewLeads(usize),
    /// The T wave is too flat to have an end.
    FlatT(Microvolts),
    /// Noise against the T wave.
    Noise,
    /// The T wave runs into the next P wave.
    TpFused,
    /// A later wave (U) may have been taken for T, or the reverse.
    LateWave,
    /// Pacing spikes were found.
    Paced,
    /// QRS of 120 ms or more: QT holds depolarisation too.
    WideQrs(Ms),
    /// Ventricular rate outside what the method was checked on.
    Rate(PerMinute),
    /// RR varies without pattern; the value is a mean over beats.
    IrregularlyIrregular,
    /// RR varies.
    Irregular,
    /// The rate changed within the tracing; QT lags a change of rate by about a minute.
    RateNotSteady,
    /// The T-end readers disagree by this much.
    ReadersDisagree(Ms),
    /// The leads disagree by this much.
    LeadsDisagree(Ms),
    /// Amplitude below 0.5 mV in limb leads or 1 mV in chest leads.
    LowVoltage,
    /// A lead is off, constant or clipped.
    LeadOff(Lead),
    /// The arm electrodes look swapped.
    ArmSwap,
    /// Samples are missing.
    MissingSamples,
    /// Sampled too slowly for the stated doubt.
    SlowSampling,
}

impl fmt::Display for Reason {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self {
            Reason::TooShort(s) => write!(f, "recording of {:.1} s is too short", s.get()),
            Reason::FewBeats(n) => write!(f, "only {n} beats of the dominant shape"),
            Reason::NoUsableLead => write!(f, "no lead carries a usable signal"),
            Reason::FewLeads(n) => write!(f, "only {n} usable leads"),
            Reason::FlatT(uv) => write!(f, "T wave is flat ({:.0} uV)", uv.get()),
            Reason::Noise => write!(f, "noise covers the T wave"),
            Reason::TpFused => write!(f, "T wave runs into the next P wave"),
            Reason::LateWave => {
                write!(f, "it is not clear which wave ends T; a U wave may follow")
            }
            Reason::Paced => write!(f, "pacing spikes found"),
            Reason::WideQrs(ms) => {
                write!(f, "QRS is wide ({:.0} ms); QT holds depolarisation too", ms.get())
            }
            Reason::Rate(bpm) => {
                write!(f, "rate of {:.0}/min is outside the range checked", bpm.get())
            }
            Reason::IrregularlyIrregular => {
                write!(f, "rhythm is irregularly irregular; the value is a mean over beats")
            }
            Reason::Irregular => write!(f, "rhythm is irregular"),
            Reason::RateNotSteady => write!(f, "rate may not be steady; QT lags a change of rate"),
            Reason::ReadersDisagree(ms) => write!(f, "T-end readers differ by {:.0} ms", ms.get()),
            Reason::LeadsDisagree(ms) => write!(f, "leads differ by {:.0} ms", ms.get()),
            Reason::LowVoltage => write!(f, "low voltage"),
            Reason::LeadOff(lead) => write!(f, "lead {lead} is off, constant or clipped"),
            Reason::ArmSwap => write!(f, "arm electrodes may be swapped"),
            Reason::MissingSamples => write!(f, "samples are missing"),
            Reason::SlowSampling => write!(f, "sampled below 250 Hz"),
        }
    }
}

/// The pattern of RR intervals.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Rhythm {
    /// RR steady.
    Regular,
    /// RR varies, with a pattern or with ectopic beats.
    Irregular,
    /// RR varies without a pattern, as in atrial fibrillation. A pattern, not a diagnosis.
    IrregularlyIrregular,
}

impl Rhythm {
    /// `regular`, `irregular` or `irregularly-irregular`.
    pub fn word(self) -> &'static str {
        match self {
            Rhythm::Regular => "regular",
            Rhythm::Irregular => "irregular",
            Rhythm::IrregularlyIrregular => "irregularly-irregular",
        }
    }
}

/// How a T end is defined.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum TEndMethod {
    /// The steepest tangent of the last T limb meets the baseline (Lepeschkin & Surawicz 1952).
    Tangent,
    /// The T wave itself meets the baseline.
    Threshold,
}

impl TEndMethod {
    /// `tangent` or `threshold`.
    pub fn word(self) -> &'static str {
        match self {
            TEndMethod::Tangent => "tangent",
            TEndMethod::Threshold => "threshold",
        }
    }
}

/// The intervals of one tracing. Global: earliest onset to latest end over the leads used.
#[derive(Debug, Clone, PartialEq)]
pub struct Intervals {
    /// QRS duration.
    pub qrs: Ms,
    /// QT, by [`Intervals::t_end_method`].
    pub qt: Ms,
    /// One-sigma-like doubt of QT: the truth is expected inside `qt ± doubt` in 60 to 80 % of good tracings.
    pub qt_doubt: Ms,
    /// QT − QRS.
    pub jt: Ms,
    /// Which definition `qt` follows.
    pub t_end_method: TEndMethod,
    /// QT by the tangent method, where it could be read.
    pub qt_tangent: Option<Ms>,
    /// QT by the threshold method, where it could be read.
    pub qt_threshold: Option<Ms>,
}

/// One lead's own reading, on its median beat. About 20 ms shorter than the global one by definition.
#[derive(Debug, Clone, PartialEq)]
pub struct LeadReading {
    /// Which lead.
    pub lead: Lead,
    /// This lead's QT.
    pub qt: Option<Ms>,
    /// This lead's QRS duration.
    pub qrs: Option<Ms>,
    /// Signed size of the T wave against the baseline.
    pub t_amplitude: Option<Microvolts>,
    /// Whether it counted towards the global reading.
    pub used: bool,
}

/// Where a beat's waves begin and end, in seconds from the first sample of the file.
#[derive(Debug, Clone, Copy, PartialEq, Default)]
pub struct Marks {
    /// QRS onset.
    pub qrs_on: Option<Seconds>,
    /// QRS end.
    pub qrs_off: Option<Seconds>,
    /// T end.
    pub t_end: Option<Seconds>,
}

/// Whether a beat belongs to the dominant shape.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum BeatKind {
    /// Of the dominant shape.
    Normal,
    /// Of another shape, or premature.
    Other,
}

/// One beat with its marks.
#[derive(Debug, Clone, PartialEq)]
pub struct Beat {
    /// The QRS peak over all leads, in seconds from the first sample of the file.
    pub r: Seconds,
    /// Dominant shape or not.
    pub kind: BeatKind,
    /// Marks over all leads.
    pub global: Marks,
    /// Marks per lead, in the recording's lead order.
    pub leads: Vec<Marks>,
}

/// The median beat of one lead, for drawing and for over-read.
#[derive(Debug, Clone, PartialEq)]
pub struct MedianLead {
    /// Which lead.
    pub lead: Lead,
    /// Samples in µV at [`MedianBeat::sampling_hz`].
    pub uv: Vec<f32>,
    /// This lead's own T end by tangent, ms from the first sample of the median beat.
    pub t_end_tangent: Option<Ms>,
    /// This lead's own T end by threshold, ms from the first sample of the median beat.
    pub t_end_threshold: Option<Ms>,
}

/// The median beats of all leads on one time axis; marks in ms from its first sample.
#[derive(Debug, Clone, PartialEq)]
pub struct MedianBeat {
    /// Sampling rate of the median beats.
    pub sampling_hz: f64,
    /// Global QRS onset.
    pub qrs_on: Ms,
    /// Global QRS end.
    pub qrs_off: Ms,
    /// Global T end, where it could be told.
    pub t_end: Option<Ms>,
    /// Per lead, in the recording's order.
    pub leads: Vec<MedianLead>,
}

/// Everything measured on one recording.
#[derive(Debug, Clone, PartialEq)]
pub struct Measurement {
    /// How far to trust it.
    pub answer: Answer,
    /// Things worth saying that do not lower the answer (a swapped pair in leads that were not used).
    pub remarks: Vec<Reason>,
    /// Mean RR over all intervals, those of ectopic beats too: the ventricular rate. Not across a hole.
    pub rr: Option<Ms>,
    /// 60,000 / mean RR.
    pub rate: Option<PerMinute>,
    /// The pattern of RR.
    pub rhythm: Option<Rhythm>,
    /// QT and its companions; `None` with [`Answer::None`].
    pub intervals: Option<Intervals>,
    /// QRS duration, which may be known where QT is not.
    pub qrs: Option<Ms>,
    /// Whether pacing spikes were found.
    pub paced: bool,
    /// One per lead, in the recording's order.
    pub per_lead: Vec<LeadReading>,
    /// All beats, in time.
    pub beats: Vec<Beat>,
    /// The median beats, where any could be made.
    pub median: Option<MedianBeat>,
}

/// The engine's name and version, stored with every measurement, so that measuring again is a new fact.
pub const ENGINE: &str = concat!("ebbmark-measure ", env!("CARGO_PKG_VERSION"));
