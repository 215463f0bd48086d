//! Twelve-lead tracings of known truth.
//!
//! The heart is a dipole made of smooth waves that begin and end somewhere; the leads are projections of it; noise lies on
//! the electrodes. Good for showing and for testing where a wave ends; not a model of any illness.

mod heart;
mod leads;
mod noise;
mod pace;
mod truth;
mod wave;

pub use truth::{TrueBeat, TrueLead, Truth};

use crate::random::Random;
use ebbmark_measure::{BeatKind, Lead, NotARecording, Recording, Rhythm, Signal};
use heart::{BeatWaves, Build};
use serde::Deserialize;
use wave::Wave;

/// What a synthetic tracing is to show. Everything has a usual value.
#[derive(Debug, Clone, PartialEq, Deserialize)]
#[serde(default, deny_unknown_fields)]
pub struct Sketch {
    /// QRS onset to where T meets the baseline, ms, at the mean rate.
    pub qt_ms: f64,
    /// Mean ventricular rate, per minute.
    pub rate_per_min: f64,
    /// Which beats follow which.
    pub pace: Pace,
    /// The shape of QRS.
    pub qrs: QrsShape,
    /// QRS duration, ms.
    pub qrs_ms: f64,
    /// The shape of T.
    pub t: TShape,
    /// What disturbs the tracing.
    pub noise: Noise,
    /// Samples per second.
    pub sampling_hz: f64,
    /// Length, seconds.
    pub seconds: f64,
    /// The person: same seed, same anatomy.
    pub heart: u64,
    /// The occasion: what is left to chance within one tracing.
    pub seed: u64,
}

impl Default for Sketch {
    fn default() -> Self {
        Self {
            qt_ms: 400.0,
            rate_per_min: 65.0,
            pace: Pace::default(),
            qrs: QrsShape::Narrow,
            qrs_ms: 92.0,
            t: TShape::Normal,
            noise: Noise::default(),
            sampling_hz: 500.0,
            seconds: 10.0,
            heart: 1,
            seed: 1,
        }
    }
}

/// Which beats follow which.
#[derive(Debug, Clone, Copy, PartialEq, Deserialize)]
#[serde(rename_all = "kebab-case", deny_unknown_fields)]
pub enum Pace {
    /// Led by the sinus node; RR swings with the breath by this share (0.02 is usual, 0.08 is young).
    Sinus {
        /// Half the swing, as a share of the mean RR.
        variability: f64,
    },
    /// The rate goes from the sketch's to this one within the tracing.
    Changing {
        /// The rate at the end, per minute.
        to_per_min: f64,
    },
    /// Every interval drawn for itself, no P waves, fibrillation of the baseline.
    AtrialFibrillation,
    /// Every n-th beat comes early from the ventricle, with a pause after it. 2 is bigeminy.
    Ectopics {
        /// The n of "every n-th".
        every: u32,
    },
    /// A pacemaker in the right ventricle: spikes, steady RR.
    Paced,
}

impl Default for Pace {
    fn default() -> Self {
        Pace::Sinus { variability: 0.02 }
    }
}

/// The shape of QRS.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum QrsShape {
    /// The normal way.
    Narrow,
    /// Left bundle-branch block.
    LeftBundle,
    /// Right bundle-branch block.
    RightBundle,
    /// From the apex of the right ventricle, as paced.
    Paced,
    /// Of the ventricle's own; what [`Pace::Ectopics`] draws.
    Ectopic,
}

/// The shape of T.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum TShape {
    /// Slow up, faster down.
    Normal,
    /// About 50 uV where it is largest.
    Flat,
    /// Up, then down.
    Biphasic,
    /// Two humps of one wave.
    Notched,
    /// Upside down.
    Inverted,
    /// Tall, narrow, even.
    Peaked,
    /// Normal, with a U wave after it.
    WithU,
}

/// What disturbs a tracing, on each electrode.
#[derive(Debug, Clone, PartialEq, Deserialize)]
#[serde(default, deny_unknown_fields)]
pub struct Noise {
    /// Slow wander below 0.5 Hz, µV.
    pub wander_uv: f64,
    /// Mains, µV.
    pub mains_uv: f64,
    /// Mains frequency, Hz.
    pub mains_hz: f64,
    /// Muscle between about 20 and 120 Hz, µV RMS.
    pub muscle_uv: f64,
    /// Electrodes that are off.
    pub off: Vec<Electrode>,
}

impl Default for Noise {
    /// A good tracing on a quiet ward.
    fn default() -> Self {
        Self { wander_uv: 40.0, mains_uv: 2.0, mains_hz: 50.0, muscle_uv: 4.0, off: Vec::new() }
    }
}

impl Noise {
    /// No noise at all.
    pub fn none() -> Self {
        Self { wander_uv: 0.0, mains_uv: 0.0, mains_hz: 50.0, muscle_uv: 0.0, off: Vec::new() }
    }
}

/// An electrode of the standard ten (the right leg only earths).
#[derive(Debug, Clone, Copy, PartialEq, Eq, Deserialize)]
#[serde(rename_all = "kebab-case")]
#[allow(missing_docs, reason = "the names are the trade's own")]
pub enum Electrode {
    RightArm,
    LeftArm,
    LeftLeg,
    V1,
    V2,
    V3,
    V4,
    V5,
    V6,
}

/// How QT follows the interval before it in an irregular rhythm: ms of QT for each ms of RR. Small: QT takes about a
/// minute to follow a change of rate.
const QT_PER_RR: f64 = 0.05;
/// QRS and T of a beat from the ventricle, seconds.
const ECTOPIC_QRS_S: f64 = 0.15;

/// Draws what the sketch asks for: twelve leads in µV, and what is true of them.
///
/// # Errors
/// The sketch asks for what can't be a recording, such as a sampling rate outside 100 to 4,000 Hz.
pub fn synthesise(sketch: &Sketch) -> Result<(Recording, Truth), NotARecording> {
    let (mean, qt, qrs) =
        (60.0 / sketch.rate_per_min, sketch.qt_ms / 1000.0, sketch.qrs_ms / 1000.0);
    let mut person = Random::new(sketch.heart).fork(0x4845);
    let build = Build { turn_deg: person.between(-18.0, 18.0), loud: person.between(0.85, 1.2) };
    let random = Random::new(sketch.seed).fork(sketch.heart);
    let beats = pace::beats(sketch.pace, mean, qt, sketch.seconds, &mut random.fork(1));

    // Drawn finer than sampled, then averaged over each sampling interval, as a converter does.
    let fine = (2000.0 / sketch.sampling_hz).ceil().max(1.0);
    let mut canvas = Canvas::new(sketch.sampling_hz, fine, sketch.seconds);
    let mut breath = random.fork(2);
    let (swing, phase) = (breath.between(0.02, 0.05), breath.between(0.0, 6.0));
    let mut true_beats = Vec::new();
    for beat in &beats {
        let own_qt = if beat.ectopic {
            qt
        } else {
            qt + QT_PER_RR * (beat.rr - mean) * sketch.pace.follows()
        };
        let (shape, own_qrs) =
            if beat.ectopic { (QrsShape::Ectopic, ECTOPIC_QRS_S) } else { (sketch.qrs, qrs) };
        let t = if beat.ectopic { TShape::Normal } else { sketch.t };
        let mut waves = heart::beat(shape, own_qrs, t, own_qt, build);
        if sketch.pace.has_p() && !beat.ectopic {
            // PR shortens a little as the rate rises.
            waves.before = heart::p_waves(0.115 + 0.045 * mean.min(1.2), build);
        }
        if sketch.pace == Pace::Paced {
            waves.before.push(heart::spike());
        }
        let loud = 1.0 + swing * (1.5 * beat.onset + phase).sin();
        canvas.draw(&waves, beat.onset, loud);
        if (0.0..sketch.seconds).contains(&beat.onset) {
            true_beats.push(TrueBeat {
                kind: if beat.ectopic { BeatKind::Other } else { BeatKind::Normal },
                qrs_on_s: beat.onset,
                qrs_off_s: beat.onset + own_qrs,
                t_end_s: beat.onset + own_qt,
                t_end_tangent_s: beat.onset + truth::latest(&truth::t_ends(&waves)),
            });
        }
    }
    if sketch.pace == Pace::AtrialFibrillation {
        canvas.fibrillate(&mut random.fork(3));
    }
    let mut eight = canvas.sampled(fine);
    noise::lay(&mut eight, &sketch.noise, sketch.sampling_hz, &random.fork(4));
    let recording = Recording::new(sketch.sampling_hz, twelve_leads(&eight))?;
    Ok((
        recording,
        truth_of(sketch, true_beats, &heart::beat(sketch.qrs, qrs, sketch.t, qt, build), mean),
    ))
}

impl Pace {
    /// Whether QT follows the interval before it.
    fn follows(self) -> f64 {
        if matches!(self, Pace::AtrialFibrillation) { 1.0 } else { 0.0 }
    }

    fn rhythm(self) -> Rhythm {
        match self {
            Pace::AtrialFibrillation => Rhythm::IrregularlyIrregular,
            Pace::Ectopics { .. } => Rhythm::Irregular,
            Pace::Sinus { .. } | Pace::Changing { .. } | Pace::Paced => Rhythm::Regular,
        }
    }
}

/// The dipole over time, mV, finer than it will be sampled.
struct Canvas {
    hz: f64,
    /// How much earlier than its number says a point is, so that the mean over an interval stands for its middle.
    early: f64,
    dipole: Vec<wave::Vector>,
}

impl Canvas {
    fn new(sampling_hz: f64, fine: f64, seconds: f64) -> Self {
        let hz = sampling_hz * fine;
        let points = count(sampling_hz * seconds) * count(fine);
        Self { hz, early: (fine - 1.0) / (2.0 * hz), dipole: vec![[0.0; 3]; points] }
    }

    fn draw(&mut self, waves: &BeatWaves, onset: f64, loud: f64) {
        let all = waves.before.iter().chain(&waves.qrs).chain(&waves.t).chain(&waves.u);
        for wave in all {
            self.stroke(wave, onset, loud);
        }
    }

    fn stroke(&mut self, wave: &Wave, onset: f64, loud: f64) {
        let (hz, onset) = (self.hz, onset + self.early);
        let first = count((onset + wave.from) * hz);
        let last = count((onset + wave.to) * hz) + 1;
        let [left, down, back] = wave.vector.map(|component| component * loud);
        for (n, [x, y, z]) in self.dipole.iter_mut().enumerate().take(last).skip(first) {
            let share = wave.share(n as f64 / hz - onset);
            *x += share * left;
            *y += share * down;
            *z += share * back;
        }
    }

    /// Fine waves of 5 to 7 a second in place of P, largest in V1.
    fn fibrillate(&mut self, random: &mut Random) {
        let mut phase = 0.0;
        let mut rate = 6.0;
        let hz = self.hz;
        for [x, y, z] in &mut self.dipole {
            rate += 0.02 * random.normal() + (6.0 - rate) / hz;
            phase += std::f64::consts::TAU * rate / hz;
            let wave = 0.05 * phase.sin() + 0.02 * (2.0 * phase + 0.7).sin();
            *x -= 0.2 * wave;
            *y += 0.5 * wave;
            *z -= 0.9 * wave;
        }
    }

    /// The eight independent leads, mV: each sample the mean over its own interval.
    fn sampled(&self, fine: f64) -> [Vec<f64>; 8] {
        let mut leads: [Vec<f64>; 8] = Default::default();
        for interval in self.dipole.chunks(count(fine)) {
            let mean = |axis: fn(&wave::Vector) -> f64| {
                interval.iter().map(axis).sum::<f64>() / interval.len() as f64
            };
            let dipole = [mean(|v| v[0]), mean(|v| v[1]), mean(|v| v[2])];
            for (lead, value) in leads.iter_mut().zip(leads::project(dipole)) {
                lead.push(value);
            }
        }
        leads
    }
}

#[allow(
    clippy::cast_possible_truncation,
    clippy::cast_sign_loss,
    reason = "a float cast saturates: before the first sample is the first sample"
)]
fn count(samples: f64) -> usize {
    (samples + 1e-6) as usize
}

fn twelve_leads(eight: &[Vec<f64>; 8]) -> Vec<Signal> {
    let mut signals = Lead::STANDARD.map(|lead| Signal { lead, uv: Vec::new() });
    let samples = eight.iter().map(Vec::len).min().unwrap_or(0);
    for n in 0..samples {
        let at = eight.each_ref().map(|lead| lead.get(n).copied().unwrap_or(0.0));
        for (signal, mv) in signals.iter_mut().zip(leads::twelve(at)) {
            #[allow(clippy::cast_possible_truncation, reason = "a recording holds f32")]
            signal.uv.push((1000.0 * mv) as f32);
        }
    }
    signals.into()
}

fn truth_of(sketch: &Sketch, beats: Vec<TrueBeat>, usual: &BeatWaves, mean_rr: f64) -> Truth {
    let counts = || {
        beats.iter().filter(|beat| beat.kind == BeatKind::Normal && beat.t_end_s < sketch.seconds)
    };
    let mean = |of: fn(&TrueBeat) -> f64, otherwise: f64| {
        let (sum, n) = counts().fold((0.0, 0.0), |(sum, n), beat| (sum + of(beat), n + 1.0));
        if n > 0.0 { 1000.0 * sum / n } else { otherwise }
    };
    let onsets: Vec<f64> = beats.iter().map(|beat| beat.qrs_on_s).collect();
    let rr = match (onsets.first(), onsets.last()) {
        (Some(first), Some(last)) if onsets.len() > 1 => (last - first) / (onsets.len() - 1) as f64,
        _ => mean_rr,
    };
    let ends = truth::t_ends(usual);
    Truth {
        qt_baseline_ms: mean(|beat| beat.t_end_s - beat.qrs_on_s, sketch.qt_ms),
        qt_tangent_ms: mean(
            |beat| beat.t_end_tangent_s - beat.qrs_on_s,
            1000.0 * truth::latest(&ends),
        ),
        qrs_ms: sketch.qrs_ms,
        rr_ms: 1000.0 * rr,
        rhythm: sketch.pace.rhythm(),
        paced: sketch.pace == Pace::Paced,
        leads: Lead::STANDARD
            .into_iter()
            .zip(ends)
            .map(|(lead, (end, size))| TrueLead {
                lead,
                qt_tangent_ms: end.map(|s| 1000.0 * s),
                t_uv: 1000.0 * size,
            })
            .collect(),
        beats,
    }
}
