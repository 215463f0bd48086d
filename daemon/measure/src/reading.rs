//! One group of like beats, read by every reader: the learned one finds the wave, the classical ones read its edges.

use crate::learned::{Average, Reader, Track};
use crate::wave::{TWave, Wave, gate_on_rms, qrs_edges, summed_slope};

/// Marks in ms after the R peak, with what the readers think of them.
#[derive(Debug, Clone)]
pub(crate) struct GroupRead {
    /// QRS onset and end, T end over all leads.
    pub on: f32,
    pub off: f32,
    pub t_end: Option<f32>,
    /// T end by the two classical definitions over all leads: each the 80th centile of the leads that show a T.
    pub tangent: Option<f32>,
    pub threshold: Option<f32>,
    /// What the learned reader believes to lie within 32 ms of its mark, 0 to 1; `None` without it.
    pub mass: Option<f32>,
    /// Half the width of the middle two thirds of that belief, ms.
    pub width: Option<f32>,
    /// Per lead that went in.
    pub leads: Vec<LeadRead>,
    /// The next P wave begins about here: a T end beyond runs into it.
    pub last: f32,
}

/// One lead's own marks.
#[derive(Debug, Clone, Copy)]
pub(crate) struct LeadRead {
    pub on: f32,
    pub off: f32,
    pub t_end: Option<f32>,
    pub wave: Option<TWave>,
}

/// Smallest T wave whose edges mean something, µV.
const LEAST_T: f32 = 40.0;
/// Where on the leads' own ends the classical global end lies: late, but not the latest one's whim.
const LATE: f32 = 0.8;
/// Shortest JT that is looked for, ms after the QRS end.
const LEAST_JT: f32 = 70.0;

/// Reads an average of like beats.
pub(crate) fn read(average: &Average, learned: Option<&Reader>) -> GroupRead {
    let start = -crate::learned::BEFORE;
    let (low_step, wide_step) = (Track::LOW.0, Track::WIDE.0);
    let wide: Vec<&[f32]> = average.wide.iter().map(|track| track.uv.as_slice()).collect();
    let low: Vec<&[f32]> = average.low.iter().map(|track| track.uv.as_slice()).collect();
    let slope = summed_slope(&wide);
    let edges = qrs_edges(&Wave { uv: &slope, start, step: wide_step }).unwrap_or((-45.0, 50.0));
    let nets = learned.map(|reader| reader.read(average));
    let (on, off) =
        nets.as_ref().map_or(edges, |nets| (nets.global.qrs_on_ms(), nets.global.qrs_off_ms()));
    let first = off.max(edges.1.min(off + 60.0)) + LEAST_JT;
    let last = (average.rr_ms - 90.0).min(1050.0);
    let gate = match &nets {
        Some(nets) => Some(nets.t_end_ms()),
        None => gate_on_rms(
            &low,
            start,
            low_step,
            first,
            last.min(0.75 * average.rr_ms + 60.0).max(first + 60.0),
        ),
    };
    let leads: Vec<LeadRead> = low
        .iter()
        .enumerate()
        .map(|(i, uv)| {
            let own = nets.as_ref().and_then(|nets| nets.leads.get(i));
            let t_end = own.map(|own| own.t_end_ms());
            let wave = t_end.or(gate).and_then(|gate| {
                Wave { uv, start, step: low_step }.t_wave(gate, first, last + 60.0)
            });
            let (on, off) = own.map_or((on, off), |own| (own.qrs_on_ms(), own.qrs_off_ms()));
            LeadRead { on, off, t_end: t_end.or(wave.map(|wave| wave.threshold)), wave }
        })
        .collect();
    let late = |pick: fn(&TWave) -> f32| {
        let clear = leads
            .iter()
            .filter_map(|lead| lead.wave)
            .filter(|wave| wave.amplitude.abs() >= LEAST_T);
        let mut ends: Vec<f32> = clear.map(|wave| pick(&wave)).collect();
        ends.sort_by(f32::total_cmp);
        interpolated(&ends, LATE)
    };
    let (tangent, threshold) = (late(|wave| wave.tangent), late(|wave| wave.threshold));
    GroupRead {
        on,
        off,
        t_end: if nets.is_some() { gate } else { threshold.or(gate) },
        tangent,
        threshold,
        mass: nets.as_ref().map(|nets| nets.global.t_end.mass_near_mode(32.0)),
        width: nets.as_ref().map(|nets| {
            let belief = &nets.global.t_end;
            (1..16)
                .map(|n| 8.0 * n as f32)
                .find(|ms| belief.mass_near_mode(*ms) >= 0.68)
                .unwrap_or(128.0)
        }),
        leads,
        last,
    }
}

/// A centile of sorted values, between neighbours.
#[allow(
    clippy::cast_possible_truncation,
    clippy::cast_sign_loss,
    clippy::cast_precision_loss,
    reason = "positions among at most a few leads"
)]
fn interpolated(sorted: &[f32], share: f32) -> Option<f32> {
    let last = sorted.len().checked_sub(1)?;
    let place = share * last as f32;
    let (low, high) = (sorted.get(place as usize)?, sorted.get((place as usize + 1).min(last))?);
    Some(low + (high - low) * place.fract())
}
