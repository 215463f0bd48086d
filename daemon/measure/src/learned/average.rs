//! Averages of beats that look alike: the nets' raw material.
//!
//! An average keeps what repeats and loses what does not (muscle, mains, the end of a wander). Beats are
//! averaged only when their shape over all leads correlates and the beat lasts about as long, so that the
//! next P wave and the T wave fall on their likes.

#![allow(
    clippy::indexing_slicing,
    clippy::cast_precision_loss,
    clippy::cast_possible_truncation,
    clippy::cast_sign_loss,
    reason = "sample positions within checked windows"
)]

/// What an average spans, ms before and after the R peak.
pub(crate) const BEFORE: f32 = 300.0;
const AFTER: f32 = 1100.0;
/// Where it is put to zero, ms before the R peak: the PR segment.
const ZERO: (f32, f32) = (100.0, 40.0);
/// Room for the low-pass filter to settle at both ends, ms.
const MARGIN: f32 = 40.0;
/// Least correlation of two beats that are averaged, from R - 60 ms to 80 ms before the next R.
const ALIKE: f32 = 0.9;
/// How far the lengths of two beats that are averaged may differ, as a share.
const SAME_LENGTH: f32 = 0.13;
/// The same where the rhythm is so irregular that hardly two beats would be averaged.
const LENGTH_OF_IRREGULAR: f32 = 0.35;
/// Beats are grouped within stretches of this many, so that a slow change of shape is followed.
const STRETCH: usize = 16;
/// More groups than this in a stretch, and beats of less equal length are averaged together.
const MANY_GROUPS: usize = 1;
/// Low-pass limits for the T wave and for the QRS, Hz.
const LOW_HZ: f32 = 35.0;
const WIDE_HZ: f32 = 90.0;

/// Cleaned leads at one rate with the R peaks found in them.
#[derive(Debug, Clone, Copy)]
pub(crate) struct Beats<'a> {
    /// Leads without baseline wander, µV, all of the same length.
    pub(crate) leads: &'a [&'a [f32]],
    /// Sampling rate, Hz.
    pub(crate) hz: f32,
    /// R peaks, as samples, in order.
    pub(crate) r: &'a [usize],
}

/// The average of some beats.
#[derive(Debug, Clone)]
pub(crate) struct Average {
    /// From this beat's R peak to the next, ms: the shortest among those averaged.
    pub(crate) rr_ms: f32,
    /// Each lead below 35 Hz, every 4 ms.
    pub(crate) low: Vec<Track>,
    /// Each lead below 90 Hz, every 2 ms, to shortly after the QRS.
    pub(crate) wide: Vec<Track>,
}

impl Average {
    /// One lead of it.
    pub(crate) fn only(&self, lead: usize) -> Self {
        Self {
            rr_ms: self.rr_ms,
            low: vec![self.low[lead].clone()],
            wide: vec![self.wide[lead].clone()],
        }
    }
}

/// One averaged lead on an even grid of time.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct Track {
    /// Distance between samples, ms.
    step: f32,
    /// Samples from `BEFORE` ms before the R peak, µV.
    pub(crate) uv: Vec<f32>,
}

impl Track {
    /// Points of the slow track and of the fast one.
    pub(crate) const LOW: (f32, usize) = (4.0, 350);
    pub(crate) const WIDE: (f32, usize) = (2.0, 275);

    #[cfg(test)]
    pub(crate) fn low(uv: Vec<f32>) -> Self {
        let step = Self::LOW.0;
        Self { step, uv }
    }

    #[cfg(test)]
    pub(crate) fn wide(uv: Vec<f32>) -> Self {
        let step = Self::WIDE.0;
        Self { step, uv }
    }

    /// The value `ms` after the R peak, by cubic interpolation; held near the ends.
    pub(crate) fn at(&self, ms: f32) -> f32 {
        cubic(&self.uv, (ms + BEFORE) / self.step)
    }
}

/// Catmull–Rom interpolation at a fractional sample, the position kept inside by a sample or two.
fn cubic(x: &[f32], at: f32) -> f32 {
    if x.len() < 5 {
        return x.first().copied().unwrap_or(0.0);
    }
    let at = at.clamp(1.0, x.len() as f32 - 3.001);
    let i = at as usize;
    let f = at - i as f32;
    let (a, b, c, d) = (x[i - 1], x[i], x[i + 1], x[i + 2]);
    b + 0.5 * f * (c - a + f * (2.0 * a - 5.0 * b + 4.0 * c - d + f * (3.0 * (b - c) + d - a)))
}

impl Beats<'_> {
    /// From a beat's R peak to the next, ms; for the last beat the median of the others, else a second.
    pub(crate) fn rr_ms(&self, beat: usize) -> f32 {
        let length = |i: usize| (self.r[i + 1] - self.r[i]) as f32 * 1000.0 / self.hz;
        if beat + 1 < self.r.len() {
            return length(beat);
        }
        let mut all: Vec<f32> = (0..self.r.len().saturating_sub(1)).map(length).collect();
        all.sort_by(f32::total_cmp);
        all.get(all.len() / 2).copied().unwrap_or(1000.0)
    }

    /// Every beat of the recording in a group of like beats, each group to be averaged.
    pub(crate) fn all_groups(&self) -> Vec<Vec<usize>> {
        let mut all = Vec::new();
        for from in (0..self.r.len()).step_by(STRETCH) {
            let to = (from + STRETCH).min(self.r.len());
            let mut groups = self.groups(from, to, SAME_LENGTH);
            if groups.len() > MANY_GROUPS {
                groups = self.groups(from, to, LENGTH_OF_IRREGULAR);
            }
            all.extend(groups);
        }
        all
    }

    /// Sorts beats `from..to` into groups that may be averaged, largest first: alike in shape, and in length
    /// within the given share.
    fn groups(&self, from: usize, to: usize, length: f32) -> Vec<Vec<usize>> {
        let n = to.saturating_sub(from);
        let shapes: Vec<Shape> = (from..to).map(|i| self.shape(i)).collect();
        let alike: Vec<Vec<usize>> = (0..n)
            .map(|i| {
                (0..n)
                    .filter(|&j| {
                        i == j
                            || same_length(shapes[i].rr_ms, shapes[j].rr_ms, length)
                                && shapes[i].correlation(&shapes[j]) > ALIKE
                    })
                    .collect()
            })
            .collect();
        let mut left: Vec<usize> = (0..n).collect();
        let mut groups = Vec::new();
        while !left.is_empty() {
            let free = |i: usize| alike[i].iter().filter(|j| left.contains(j)).count();
            let Some(&seed) = left.iter().max_by_key(|&&i| (free(i), usize::MAX - i)) else {
                break;
            };
            let group: Vec<usize> =
                alike[seed].iter().copied().filter(|j| left.contains(j)).collect();
            left.retain(|i| !group.contains(i));
            groups.push(group.iter().map(|i| i + from).collect());
        }
        groups
    }

    /// A beat and the `most` others within `reach` beats that resemble it most: what training averages.
    pub(crate) fn neighbours(&self, beat: usize, reach: usize, most: usize) -> Vec<usize> {
        let own = self.shape(beat);
        let last = (beat + reach + 1).min(self.r.len());
        let mut like: Vec<(f32, usize)> = (beat.saturating_sub(reach)..last)
            .filter(|&j| j != beat && same_length(own.rr_ms, self.rr_ms(j), SAME_LENGTH))
            .map(|j| (own.correlation(&self.shape(j)), j))
            .filter(|&(c, _)| c > ALIKE)
            .collect();
        like.sort_by(|a, b| b.0.total_cmp(&a.0));
        let others = like.into_iter().take(most).map(|(_, j)| j);
        std::iter::once(beat).chain(others).collect()
    }

    /// Averages the given beats. Past either end of the recording its first or last sample is held.
    pub(crate) fn average(&self, beats: &[usize]) -> Average {
        let samples = |ms: f32| (ms * self.hz / 1000.0).round() as usize;
        let before = samples(BEFORE + MARGIN);
        let length = before + samples(AFTER + MARGIN);
        let zero = before - samples(ZERO.0)..before - samples(ZERO.1);
        let share = 1.0 / beats.len().max(1) as f32;
        let mut average = Average {
            rr_ms: beats.iter().map(|&i| self.rr_ms(i)).fold(f32::MAX, f32::min),
            low: Vec::new(),
            wide: Vec::new(),
        };
        for lead in self.leads {
            let mut sum = vec![0.0f32; length];
            for &beat in beats {
                let first = self.r[beat] as isize - before as isize;
                add(&mut sum, lead, first, share);
            }
            let track = |limit: f32, (step, points): (f32, usize)| {
                let mut x = low_pass(&sum, self.hz, limit);
                let level = x[zero.clone()].iter().sum::<f32>() / zero.len().max(1) as f32;
                x.iter_mut().for_each(|v| *v -= level);
                let at = |i: usize| before as f32 + (i as f32 * step - BEFORE) * self.hz / 1000.0;
                let uv = (0..points).map(|i| cubic(&x, at(i))).collect();
                Track { step, uv }
            };
            average.low.push(track(LOW_HZ, Track::LOW));
            average.wide.push(track(WIDE_HZ, Track::WIDE));
        }
        average
    }

    /// A coarse copy of one beat over all leads, for comparing beats.
    fn shape(&self, beat: usize) -> Shape {
        const EVERY_MS: f32 = 8.0;
        let rr_ms = self.rr_ms(beat);
        let until = (rr_ms - 80.0).clamp(240.0, AFTER);
        let points = ((until + 60.0) / EVERY_MS) as usize;
        let at = |lead: &[f32], ms: f32| {
            let i = self.r[beat] as f32 + ms * self.hz / 1000.0;
            lead[(i.max(0.0) as usize).min(lead.len() - 1)]
        };
        let leads = self
            .leads
            .iter()
            .filter(|lead| !lead.is_empty())
            .map(|lead| {
                let level =
                    (0..8).map(|i| at(lead, -ZERO.0 + EVERY_MS * i as f32)).sum::<f32>() / 8.0;
                (0..points).map(|i| at(lead, EVERY_MS * i as f32 - 60.0) - level).collect()
            })
            .collect();
        Shape { rr_ms, leads }
    }
}

fn same_length(a: f32, b: f32, share: f32) -> bool {
    (a - b).abs() <= share * a.min(b)
}

/// Adds `share` of the samples from `first` on, holding the ends.
fn add(sum: &mut [f32], lead: &[f32], first: isize, share: f32) {
    let Some(last) = lead.len().checked_sub(1) else {
        return;
    };
    for (i, v) in sum.iter_mut().enumerate() {
        let at = (first + i as isize).clamp(0, last as isize) as usize;
        *v += share * lead[at];
    }
}

#[derive(Debug)]
struct Shape {
    rr_ms: f32,
    leads: Vec<Vec<f32>>,
}

impl Shape {
    /// Pearson correlation over all leads laid end to end, as far as the shorter beat goes.
    fn correlation(&self, other: &Shape) -> f32 {
        let (mut n, mut a, mut b, mut aa, mut bb, mut ab) = (0.0, 0.0, 0.0, 0.0, 0.0, 0.0);
        for (x, y) in self.leads.iter().zip(&other.leads) {
            for (x, y) in x.iter().zip(y) {
                n += 1.0;
                a += x;
                b += y;
                aa += x * x;
                bb += y * y;
                ab += x * y;
            }
        }
        let spread = (aa - a * a / n) * (bb - b * b / n);
        if n > 1.0 && spread > 0.0 { (ab - a * b / n) / spread.sqrt() } else { 0.0 }
    }
}

/// Butterworth, order 2, forwards and backwards: no shift in time. Unchanged where the limit is beyond what
/// the rate can hold.
fn low_pass(x: &[f32], hz: f32, limit: f32) -> Vec<f32> {
    if limit * 2.2 > hz {
        return x.to_vec();
    }
    let k = (std::f32::consts::PI * limit / hz).tan();
    let norm = 1.0 / (1.0 + std::f32::consts::SQRT_2 * k + k * k);
    let b = k * k * norm;
    let a1 = 2.0 * (k * k - 1.0) * norm;
    let a2 = (1.0 - std::f32::consts::SQRT_2 * k + k * k) * norm;
    let pass = |x: &mut dyn Iterator<Item = &mut f32>| {
        let mut state: Option<(f32, f32)> = None;
        for v in x {
            // Started as if the first value had always been there.
            let (s1, s2) = state.unwrap_or((*v * (1.0 - b), *v * (b - a2)));
            let y = b * *v + s1;
            state = Some((2.0 * b * *v - a1 * y + s2, b * *v - a2 * y));
            *v = y;
        }
    };
    let mut y = x.to_vec();
    pass(&mut y.iter_mut());
    pass(&mut y.iter_mut().rev());
    y
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Beats of a QRS, a T and a P of Gaussian shape, at the given peaks.
    fn made(
        hz: f32,
        seconds: f32,
        peaks_s: &[f32],
        t_gain: impl Fn(usize) -> f32,
    ) -> (Vec<f32>, Vec<usize>) {
        let bell = |t: f32, at: f32, width: f32| (-0.5 * ((t - at) / width).powi(2)).exp();
        let x = (0..(seconds * hz) as usize)
            .map(|i| {
                let t = i as f32 / hz;
                let beat = |(k, &r): (usize, &f32)| {
                    1000.0 * bell(t, r, 0.012)
                        + t_gain(k) * bell(t, r + 0.28, 0.04)
                        + 80.0 * bell(t, r - 0.16, 0.02)
                };
                peaks_s.iter().enumerate().map(beat).sum()
            })
            .collect();
        (x, peaks_s.iter().map(|r| (r * hz).round() as usize).collect())
    }

    const EVEN: [f32; 6] = [1.0, 1.8, 2.6, 3.4, 4.2, 5.0];

    #[test]
    fn an_average_is_the_same_at_any_rate() {
        let at = |hz: f32| {
            let (x, r) = made(hz, 6.5, &EVEN, |_| 250.0);
            Beats { leads: &[&x], hz, r: &r }.average(&[0, 1, 2, 3, 4])
        };
        let (a, b) = (at(250.0), at(1000.0));
        assert!((a.rr_ms - 800.0).abs() < 1.0);
        // Within 2 % of the T wave's height where the T wave is, and of the R wave's where that is.
        for ms in [150.0, 220.0, 280.0, 350.0, 450.0] {
            assert!((a.low[0].at(ms) - b.low[0].at(ms)).abs() < 5.0, "{ms}");
        }
        for ms in [-40.0, -12.0, 0.0, 12.0, 40.0] {
            assert!((a.wide[0].at(ms) - b.wide[0].at(ms)).abs() < 20.0, "{ms}");
        }
    }

    #[test]
    fn beats_of_another_shape_make_a_group_of_their_own() {
        let (x, r) = made(500.0, 6.5, &EVEN, |k| if k == 3 { -900.0 } else { 250.0 });
        let beats = Beats { leads: &[&x], hz: 500.0, r: &r };
        assert_eq!(beats.groups(0, 6, SAME_LENGTH), vec![vec![0, 1, 2, 4, 5], vec![3]]);
        assert_eq!(beats.neighbours(0, 15, 2).len(), 3);
    }

    #[test]
    fn one_beat_or_a_peak_at_the_very_edge_is_still_averaged() {
        let (x, _) = made(500.0, 1.0, &[0.0], |_| 250.0);
        let beats = Beats { leads: &[&x], hz: 500.0, r: &[0] };
        assert_eq!(beats.groups(0, 1, SAME_LENGTH), vec![vec![0]]);
        let average = beats.average(&[0]);
        assert!(average.low[0].uv.iter().chain(&average.wide[0].uv).all(|v| v.is_finite()));
    }
}
