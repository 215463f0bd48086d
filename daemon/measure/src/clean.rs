//! Leads made ready: gaps bridged, unusable leads set aside, wander and mains removed, pacing spikes found, all at one
//! working rate.

#![allow(
    clippy::indexing_slicing,
    clippy::cast_possible_truncation,
    clippy::cast_sign_loss,
    clippy::cast_precision_loss,
    reason = "sample positions within checked bounds"
)]

use crate::filter::Section;
use crate::measurement::Reason;
use crate::recording::{Lead, Recording, Signal};
use crate::resample::resample;

/// The working rate, Hz.
pub(crate) const HZ: f64 = 500.0;
/// High-pass that takes out wander; zero phase, within the limit that AHA 2007 allows for zero phase (0.67 Hz, from
/// memory).
const WANDER_HZ: f64 = 0.5;
/// A lead that never moves by more than this is off or constant, µV.
const STILL_UV: f32 = 20.0;
/// Share of missing or clipped samples from which a lead is not used.
const SPOILT: f64 = 0.2;

/// One lead ready for measuring.
#[derive(Debug, Clone)]
pub(crate) struct Clean {
    /// Which lead, and its place in the recording.
    pub lead: Lead,
    pub place: usize,
    /// Without wander and mains, µV at [`HZ`].
    pub uv: Vec<f32>,
}

/// All leads ready for measuring.
#[derive(Debug, Clone, Default)]
pub(crate) struct Cleaned {
    pub leads: Vec<Clean>,
    /// What a person should know about the signal.
    pub remarks: Vec<Reason>,
    /// Times of pacing spikes, as samples at [`HZ`].
    pub spikes: Vec<usize>,
}

/// Makes `from..to` (samples of the recording) ready.
pub(crate) fn clean(recording: &Recording, from: usize, to: usize) -> Cleaned {
    let hz = recording.sampling().get();
    let mut cleaned = Cleaned::default();
    let mut missing = false;
    let mut spike_votes: Vec<usize> = Vec::new();
    for (place, signal) in recording.leads().iter().enumerate() {
        let raw = signal.uv.get(from..to.min(signal.uv.len())).unwrap_or(&[]);
        match usable(raw) {
            Usable::No => cleaned.remarks.push(Reason::LeadOff(signal.lead.clone())),
            Usable::Yes { gaps } => {
                missing |= gaps;
                let mut uv = bridged(raw);
                spike_votes.extend(blank_spikes(&mut uv, hz));
                cleaned.leads.push(ready(signal, place, &uv, hz));
            }
        }
    }
    if missing {
        cleaned.remarks.push(Reason::MissingSamples);
    }
    if hz < 250.0 {
        cleaned.remarks.push(Reason::SlowSampling);
    }
    cleaned.spikes = agreed(spike_votes, cleaned.leads.len(), hz);
    cleaned
}

fn ready(signal: &Signal, place: usize, uv: &[f32], hz: f64) -> Clean {
    let mut uv = resample(uv, hz, HZ);
    if let Some(section) = Section::high_pass(HZ, WANDER_HZ) {
        section.both_ways(&mut uv);
    }
    for mains in [50.0, 60.0] {
        if let Some(section) = Section::notch(HZ, mains).filter(|_| hums(&uv, mains)) {
            section.both_ways(&mut uv);
        }
    }
    Clean { lead: signal.lead.clone(), place, uv }
}

enum Usable {
    Yes { gaps: bool },
    No,
}

/// Off, constant, clipped or mostly missing is not usable.
fn usable(raw: &[f32]) -> Usable {
    let known: Vec<f32> = raw.iter().copied().filter(|v| v.is_finite()).collect();
    let (low, high) = known.iter().fold((f32::MAX, f32::MIN), |(l, h), v| (l.min(*v), h.max(*v)));
    let missing = raw.len() - known.len();
    let share = |n: usize| n as f64 / raw.len().max(1) as f64;
    // Clipping leaves many samples in a row at the very rail; a peak touches it for one or two.
    let railed = raw
        .windows(4)
        .filter(|w| {
            w.iter().all(|v| v.to_bits() == w[0].to_bits()) && (w[0] >= high || w[0] <= low)
        })
        .count();
    if known.is_empty()
        || high - low < STILL_UV
        || share(missing) > SPOILT
        || share(railed) > SPOILT
    {
        Usable::No
    } else {
        Usable::Yes { gaps: missing > 0 }
    }
}

/// Missing samples replaced by the straight line between their neighbours.
fn bridged(raw: &[f32]) -> Vec<f32> {
    let mut uv = raw.to_vec();
    let mut i = 0;
    while i < uv.len() {
        if uv[i].is_finite() {
            i += 1;
            continue;
        }
        let end = (i..uv.len()).find(|&j| uv[j].is_finite());
        let before = i.checked_sub(1).map(|j| uv[j]);
        let after = end.map(|j| uv[j]);
        let (a, b) = (before.or(after).unwrap_or(0.0), after.or(before).unwrap_or(0.0));
        let end = end.unwrap_or(uv.len());
        let length = (end - i + 1) as f32;
        for (n, v) in uv[i..end].iter_mut().enumerate() {
            *v = a + (b - a) * (n + 1) as f32 / length;
        }
        i = end;
    }
    uv
}

/// Finds needle-like deflections (a pacemaker's pulse lasts under 2 ms and a cart leaves a few samples of it) and
/// flattens them, so that neither beats nor onsets are read from them. Returns their samples.
fn blank_spikes(uv: &mut [f32], hz: f64) -> Vec<usize> {
    let half = ((0.004 * hz).ceil() as usize).max(1);
    if uv.len() < 8 * half {
        return Vec::new();
    }
    // Against the median slope of the lead's own steepest parts: a QRS is steep for longer than a spike.
    let mut steep: Vec<f32> = uv.windows(2).map(|w| (w[1] - w[0]).abs()).collect();
    let at = steep.len() * 995 / 1000;
    let (_, typical, _) = steep.select_nth_unstable_by(at, f32::total_cmp);
    let needed = (*typical * 2.5).max(150.0);
    let mut found = Vec::new();
    let mut i = half;
    while i + half < uv.len() {
        let (left, right) = (uv[i - half], uv[i + half]);
        let out = (uv[i] - left).abs().min((uv[i] - right).abs());
        let same_side = (uv[i] - left).signum() * (uv[i] - right).signum() > 0.0;
        if same_side && out > needed && (left - right).abs() < 0.3 * out {
            found.push(i);
            for j in 1..2 * half {
                uv[i - half + j] = left + (right - left) * j as f32 / (2 * half) as f32;
            }
            i += 2 * half;
        } else {
            i += 1;
        }
    }
    found
}

/// Spikes that at least a third of the leads show within 10 ms, as samples at the working rate.
fn agreed(mut votes: Vec<usize>, leads: usize, hz: f64) -> Vec<usize> {
    votes.sort_unstable();
    let near = (0.01 * hz) as usize;
    let needed = (leads / 3).max(if leads > 1 { 2 } else { 1 });
    let mut found: Vec<usize> = Vec::new();
    let mut i = 0;
    while i < votes.len() {
        let group = votes[i..].iter().take_while(|v| **v <= votes[i] + near).count();
        if group >= needed {
            found.push((votes[i] as f64 * HZ / hz) as usize);
        }
        i += group;
    }
    found
}

/// Whether the mains frequency stands out against its neighbours.
fn hums(uv: &[f32], mains: f64) -> bool {
    let piece = &uv[..uv.len().min(5000)];
    let [at, beside @ ..] = powers(piece, [0.0, -6.0, -4.0, 4.0, 6.0].map(|d| mains + d));
    let beside = beside.iter().sum::<f64>() / 4.0;
    at > 8.0 * beside && at.sqrt() > 4.0
}

/// Squared amplitudes at some frequencies (Goertzel), all in one go over the samples.
fn powers<const N: usize>(x: &[f32], hz: [f64; N]) -> [f64; N] {
    let coefficient = hz.map(|hz| 2.0 * (2.0 * std::f64::consts::PI * hz / HZ).cos());
    let (mut s1, mut s2) = ([0.0; N], [0.0; N]);
    for v in x {
        for k in 0..N {
            let s = f64::from(*v) + coefficient[k] * s1[k] - s2[k];
            (s2[k], s1[k]) = (s1[k], s);
        }
    }
    let scale = 4.0 / (x.len().max(1) as f64).powi(2);
    std::array::from_fn(|k| {
        (s1[k] * s1[k] + s2[k] * s2[k] - coefficient[k] * s1[k] * s2[k]) * scale
    })
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn gaps_are_bridged_by_straight_lines() {
        let nan = f32::NAN;
        assert_eq!(bridged(&[1.0, nan, nan, 4.0, nan]), [1.0, 2.0, 3.0, 4.0, 4.0]);
        assert_eq!(bridged(&[nan, 2.0]), [2.0, 2.0]);
    }

    #[test]
    fn mains_is_noticed_and_a_quiet_lead_left_alone() {
        let wave = |amplitude: f32| -> Vec<f32> {
            (0..5000)
                .map(|i| {
                    let t = i as f32 / 500.0;
                    (t * 6.0).sin() * 300.0
                        + amplitude * (2.0 * std::f32::consts::PI * 50.0 * t).sin()
                })
                .collect()
        };
        assert!(hums(&wave(20.0), 50.0) && !hums(&wave(0.0), 50.0) && !hums(&wave(20.0), 60.0));
    }

    #[test]
    fn a_spike_is_found_and_flattened() {
        let mut uv: Vec<f32> = (0..1000).map(|i| (i as f32 / 40.0).sin() * 100.0).collect();
        uv[300] += 2000.0;
        assert_eq!(blank_spikes(&mut uv, 500.0), [300]);
        assert!(uv[300].abs() < 150.0);
    }
}
