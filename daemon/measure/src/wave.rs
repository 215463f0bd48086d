//! The classical readers: edges of QRS and T on one averaged lead. Sharp once they are on the right wave; a gate says
//! where to look.

#![allow(
    clippy::indexing_slicing,
    clippy::cast_possible_truncation,
    clippy::cast_sign_loss,
    clippy::cast_precision_loss,
    reason = "sample positions within checked bounds"
)]

/// One averaged lead on an even grid, put to zero on the PR segment. Times are ms from the R peak.
#[derive(Debug, Clone)]
pub(crate) struct Wave<'a> {
    /// µV.
    pub uv: &'a [f32],
    /// Ms of the first sample.
    pub start: f32,
    /// Ms between samples.
    pub step: f32,
}

/// A T wave as read on one lead.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(crate) struct TWave {
    /// Its end where the steepest tangent of the last limb meets the baseline.
    pub tangent: f32,
    /// Its end where the wave itself meets the baseline.
    pub threshold: f32,
    /// Height or depth at its last peak against the baseline, µV, signed.
    pub amplitude: f32,
}

impl Wave<'_> {
    fn index(&self, ms: f32) -> usize {
        (((ms - self.start) / self.step).round().max(0.0) as usize)
            .min(self.uv.len().saturating_sub(1))
    }

    fn ms(&self, index: f32) -> f32 {
        self.start + self.step * index
    }

    /// Median of a stretch.
    fn level(&self, from: f32, to: f32) -> Option<f32> {
        let mut part: Vec<f32> = self.uv.get(self.index(from)..self.index(to))?.to_vec();
        if part.is_empty() {
            return None;
        }
        part.sort_by(f32::total_cmp);
        Some(part[part.len() / 2])
    }

    /// Reads the T wave whose end lies near `gate`, at the earliest at `first`; the next beat's P wave begins after
    /// `last`. Tangent after Lepeschkin & Surawicz (Circulation 1952;6:378): the steepest part of the last limb,
    /// carried on to the baseline. The baseline is the PR segment; where the stretch after T has room, the quieter of
    /// the two. Stops being valid where T runs into P.
    pub(crate) fn t_wave(&self, gate: f32, first: f32, last: f32) -> Option<TWave> {
        const BEFORE: f32 = 130.0;
        const AFTER: f32 = 28.0;
        let (from, to) =
            (self.index((gate - BEFORE).max(first)), self.index((gate + AFTER).min(last)));
        if to < from + 5 {
            return None;
        }
        let slope = |i: usize| {
            (self.uv[(i + 1).min(self.uv.len() - 1)] - self.uv[i.saturating_sub(1)]) / 2.0
        };
        // The last limb is the steepest one near the gate; what lies far before it is the wave's other side.
        let weighed = |i: usize| {
            let away = (self.ms(i as f32) - (gate - 25.0)) / 70.0;
            slope(i).abs() * (-0.5 * away * away).exp()
        };
        let steepest = (from..=to).max_by(|a, b| weighed(*a).total_cmp(&weighed(*b)))?;
        let s = slope(steepest);
        if s.abs() < 1e-3 {
            return None;
        }
        // The peak before: back to where the slope turns.
        let mut peak = steepest;
        while peak > from && slope(peak - 1) * s > 0.0 {
            peak -= 1;
        }
        let room = (gate + 40.0, (gate + 120.0).min(last));
        let after = (room.1 - room.0 > 40.0).then(|| self.level(room.0, room.1)).flatten();
        let height = self.uv[peak];
        // A wave ends on a level on the far side of its limb; a level beyond its own peak is another wave's.
        let toward = |level: f32| (height - level) * -s.signum() > 0.0;
        let base =
            after.filter(|level| toward(*level) && level.abs() < 0.5 * height.abs()).unwrap_or(0.0);
        let amplitude = height - base;
        let tangent = self.ms(steepest as f32) + (base - self.uv[steepest]) / s * self.step;
        let near = (0.06 * amplitude.abs()).max(6.0);
        let end = (steepest..self.uv.len()).find(|&i| {
            let rest = (self.uv[i] - base) * amplitude.signum();
            rest <= near || self.ms(i as f32) > gate + 90.0
        })?;
        let sane = |ms: f32| (ms - gate).abs() < 160.0;
        let (tangent, threshold) = (tangent, self.ms(end as f32).max(tangent));
        (sane(tangent) && sane(threshold)).then_some(TWave { tangent, threshold, amplitude })
    }
}

/// Where QRS begins and ends on the summed slope of all leads: the first and the last time that the slope keeps above
/// a share of its peak (common practice, no source). Ms from the R peak.
pub(crate) fn qrs_edges(slope: &Wave<'_>) -> Option<(f32, f32)> {
    const SHARE_ON: f32 = 0.07;
    const SHARE_OFF: f32 = 0.10;
    let (from, to) = (slope.index(-160.0), slope.index(200.0));
    let peak = (slope.index(-90.0)..slope.index(90.0))
        .max_by(|a, b| slope.uv[*a].total_cmp(&slope.uv[*b]))?;
    let top = slope.uv[peak];
    let quiet = (14.0 / slope.step) as usize;
    let still = |i: usize, share: f32| slope.uv[i] < share * top;
    let on =
        (from..peak).rev().find(|&i| i >= quiet && (i - quiet..=i).all(|j| still(j, SHARE_ON)))?;
    let off = (peak..to)
        .find(|&i| (i..=(i + quiet).min(slope.uv.len() - 1)).all(|j| still(j, SHARE_OFF)))?;
    Some((slope.ms(on as f32 + 1.0), slope.ms(off as f32)))
}

/// Root mean square over leads of the slopes, µV per sample.
pub(crate) fn summed_slope(leads: &[&[f32]]) -> Vec<f32> {
    let length = leads.iter().map(|lead| lead.len()).min().unwrap_or(0);
    (0..length)
        .map(|i| {
            let (a, b) = (i.saturating_sub(1), (i + 1).min(length - 1));
            let sum: f32 = leads.iter().map(|lead| ((lead[b] - lead[a]) / 2.0).powi(2)).sum();
            (sum / leads.len() as f32).sqrt()
        })
        .collect()
}

/// A first guess of the T end over all leads where no other reader says where to look: the tangent at the steepest
/// fall of the root mean square over leads after its highest point behind the QRS.
pub(crate) fn gate_on_rms(
    leads: &[&[f32]],
    start: f32,
    step: f32,
    first: f32,
    last: f32,
) -> Option<f32> {
    let length = leads.iter().map(|lead| lead.len()).min()?;
    let index =
        |ms: f32| (((ms - start) / step).round().max(0.0) as usize).min(length.saturating_sub(1));
    let (from, to) = (index(first), index(last));
    if to < from + 10 {
        return None;
    }
    let level: Vec<f32> = leads
        .iter()
        .map(|lead| {
            let mut tail: Vec<f32> = lead[to.saturating_sub(15)..=to].to_vec();
            tail.sort_by(f32::total_cmp);
            tail[tail.len() / 2]
        })
        .collect();
    let rms: Vec<f32> = (0..length)
        .map(|i| {
            let sum: f32 =
                leads.iter().zip(&level).map(|(lead, base)| (lead[i] - base).powi(2)).sum();
            (sum / leads.len() as f32).sqrt()
        })
        .collect();
    let peak = (from..to).max_by(|a, b| rms[*a].total_cmp(&rms[*b]))?;
    let steepest =
        (peak..to).min_by(|a, b| (rms[a + 1] - rms[*a]).total_cmp(&(rms[b + 1] - rms[*b])))?;
    let fall = rms[steepest + 1] - rms[steepest];
    (fall < 0.0).then(|| start + step * (steepest as f32 - rms[steepest] / fall))
}

#[cfg(test)]
mod tests {
    use super::*;

    const STEP: f32 = 4.0;
    const START: f32 = -300.0;

    /// A raised cosine from 200 to 400 ms, and a small P at 700.
    fn wave(height: f32) -> Vec<f32> {
        (0..350)
            .map(|i| {
                let ms = START + STEP * i as f32;
                let hump = |from: f32, to: f32| {
                    let t = (ms - from) / (to - from);
                    if (0.0..=1.0).contains(&t) {
                        0.5 - 0.5 * (2.0 * std::f32::consts::PI * t).cos()
                    } else {
                        0.0
                    }
                };
                height * hump(200.0, 400.0) + 40.0 * hump(700.0, 780.0)
            })
            .collect()
    }

    /// The steepest tangent of a raised cosine of width w meets its base w/2·(1/2 − 1/π) before its end [A].
    #[test]
    fn tangent_and_threshold_of_a_raised_cosine() {
        for height in [300.0, -300.0] {
            let uv = wave(height);
            let found =
                Wave { uv: &uv, start: START, step: STEP }.t_wave(395.0, 150.0, 690.0).unwrap();
            let expected = 400.0 - 100.0 * (0.5 - 1.0 / std::f32::consts::PI);
            assert!((found.tangent - expected).abs() < 2.0, "{found:?}");
            assert!((found.threshold - 400.0).abs() < 24.0 && found.threshold > found.tangent);
            assert!((found.amplitude - height).abs() < 6.0);
        }
    }

    #[test]
    fn a_flat_line_has_no_t_end() {
        let uv = vec![0.0; 350];
        assert_eq!(Wave { uv: &uv, start: START, step: STEP }.t_wave(380.0, 150.0, 690.0), None);
    }
}
