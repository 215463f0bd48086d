//! What is true of a synthetic tracing, by construction.

use super::heart::BeatWaves;
use super::leads::{project, twelve};
use super::wave::Wave;
use ebbmark_measure::{BeatKind, Lead, Rhythm};

/// What is true of a synthetic tracing.
///
/// Two T ends: `baseline`, where the wave itself reaches the baseline (and is exactly zero from there on), and `tangent`,
/// where the steepest tangent of the last limb of the noise-free T meets it. A U wave is no part of either.
#[derive(Debug, Clone, PartialEq)]
pub struct Truth {
    /// QRS onset to where T meets the baseline, over all leads; the mean over the beats that count, ms.
    pub qt_baseline_ms: f64,
    /// QRS onset to the latest tangent among leads whose T is at least a third of the largest, likewise.
    pub qt_tangent_ms: f64,
    /// QRS duration over all leads, ms.
    pub qrs_ms: f64,
    /// Mean of all intervals from QRS to QRS within the recording, ms.
    pub rr_ms: f64,
    /// The pattern of RR.
    pub rhythm: Rhythm,
    /// Whether there are pacing spikes.
    pub paced: bool,
    /// Each lead's own QT of a beat of mean length, in the recording's lead order.
    pub leads: Vec<TrueLead>,
    /// Beats whose QRS onset lies within the recording, in time.
    pub beats: Vec<TrueBeat>,
}

impl Truth {
    /// 60,000 / mean RR.
    pub fn rate_per_min(&self) -> f64 {
        60_000.0 / self.rr_ms
    }
}

/// One lead's own truth.
#[derive(Debug, Clone, PartialEq)]
pub struct TrueLead {
    /// Which lead.
    pub lead: Lead,
    /// To the tangent of this lead's last T limb, ms from the global QRS onset. `None` where this lead shows no T.
    pub qt_tangent_ms: Option<f64>,
    /// Signed size of the T wave's largest deflection, µV.
    pub t_uv: f64,
}

/// Where a beat's waves begin and end, in seconds from the first sample; a mark may lie beyond the last one.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct TrueBeat {
    /// Led by the atria (or the pacemaker), or from elsewhere.
    pub kind: BeatKind,
    /// QRS onset.
    pub qrs_on_s: f64,
    /// QRS end.
    pub qrs_off_s: f64,
    /// Where T meets the baseline.
    pub t_end_s: f64,
    /// Where T's last tangent meets it.
    pub t_end_tangent_s: f64,
}

/// Fine enough that the steepest tangent is found to well under a millisecond.
const STEP_S: f64 = 0.000_25;

/// Each lead's tangent end and largest deflection of one beat's T; seconds from QRS onset, mV.
pub(super) fn t_ends(waves: &BeatWaves) -> Vec<(Option<f64>, f64)> {
    let from = waves.t.iter().map(|wave| wave.from).fold(f64::MAX, f64::min);
    let to = waves.t.iter().map(|wave| wave.to).fold(0.0, f64::max);
    let mut leads: Vec<Vec<f64>> = vec![Vec::new(); 12];
    let mut t = from;
    while t <= to {
        for (lead, value) in leads.iter_mut().zip(twelve(project(dipole(&waves.t, t)))) {
            lead.push(value);
        }
        t += STEP_S;
    }
    leads.iter().map(|lead| tangent(lead, from)).collect()
}

/// The latest tangent end among leads whose T is at least a third of the largest.
pub(super) fn latest(ends: &[(Option<f64>, f64)]) -> f64 {
    let largest = ends.iter().map(|(_, size)| size.abs()).fold(0.0, f64::max);
    let counts = ends.iter().filter(|(_, size)| size.abs() >= largest / 3.0);
    counts.filter_map(|(end, _)| *end).fold(0.0, f64::max)
}

fn dipole(waves: &[Wave], t: f64) -> [f64; 3] {
    waves.iter().fold([0.0; 3], |sum, wave| {
        let share = wave.share(t);
        let mut vector = wave.vector.into_iter();
        sum.map(|component| component + share * vector.next().unwrap_or(0.0))
    })
}

fn tangent(lead: &[f64], from: f64) -> (Option<f64>, f64) {
    let largest = lead.iter().copied().fold(0.0, |a: f64, b| if b.abs() > a.abs() { b } else { a });
    // Below 20 uV there is no T that anybody would mark.
    if largest.abs() < 0.02 {
        return (None, largest);
    }
    // The last extremum that is a wave of its own: at least a tenth of the largest.
    let triples = lead.windows(3).enumerate().rev();
    let last = triples
        .filter_map(|(n, triple)| match triple {
            [a, b, c] => Some((
                n + 1,
                a.abs() <= b.abs() && b.abs() > c.abs() && b.abs() >= 0.1 * largest.abs(),
            )),
            _ => None,
        })
        .find(|(_, is_peak)| *is_peak)
        .map_or(0, |(n, _)| n);
    let limb = lead.windows(2).enumerate().skip(last).filter_map(|(n, pair)| match pair {
        [a, b] => Some((n, (a + b) / 2.0, (b - a) / STEP_S)),
        _ => None,
    });
    let steepest = limb.max_by(|(_, _, a), (_, _, b)| a.abs().total_cmp(&b.abs()));
    let end = steepest
        .filter(|(_, _, slope)| slope.abs() > 0.0)
        .map(|(n, value, slope)| from + (n as f64 + 0.5) * STEP_S - value / slope);
    (end, largest)
}
