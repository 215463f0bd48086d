//! Filters that shift nothing in time: each runs forwards and backwards.

#![allow(
    clippy::cast_possible_truncation,
    clippy::indexing_slicing,
    reason = "coefficients are computed in f64 and applied in f32; four lanes"
)]

use std::f64::consts::{PI, SQRT_2};

/// A second-order section.
#[derive(Debug, Clone, Copy)]
pub(crate) struct Section {
    b: [f32; 3],
    a: [f32; 2],
}

impl Section {
    /// Butterworth low-pass, order 2. `None` where the limit is beyond what the rate can hold.
    pub(crate) fn low_pass(hz: f64, limit: f64) -> Option<Self> {
        let k = corner(hz, limit)?;
        let norm = 1.0 / (1.0 + SQRT_2 * k + k * k);
        Some(Self::new([k * k, 2.0 * k * k, k * k], norm, k))
    }

    /// Butterworth high-pass, order 2.
    pub(crate) fn high_pass(hz: f64, limit: f64) -> Option<Self> {
        let k = corner(hz, limit)?;
        let norm = 1.0 / (1.0 + SQRT_2 * k + k * k);
        Some(Self::new([1.0, -2.0, 1.0], norm, k))
    }

    /// A notch of about 2 Hz at the mains frequency.
    pub(crate) fn notch(hz: f64, mains: f64) -> Option<Self> {
        corner(hz, mains)?;
        let w = 2.0 * PI * mains / hz;
        let alpha = w.sin() / (2.0 * mains / 2.0);
        let norm = 1.0 / (1.0 + alpha);
        let b = [norm, -2.0 * w.cos() * norm, norm].map(|v| v as f32);
        Some(Self { b, a: [-2.0 * w.cos() * norm, (1.0 - alpha) * norm].map(|v| v as f32) })
    }

    fn new(b: [f64; 3], norm: f64, k: f64) -> Self {
        let a1 = 2.0 * (k * k - 1.0) * norm;
        let a2 = (1.0 - SQRT_2 * k + k * k) * norm;
        Self { b: b.map(|v| (v * norm) as f32), a: [a1 as f32, a2 as f32] }
    }

    /// Filters in place, forwards and backwards, each time as if the first sample had always been there.
    pub(crate) fn both_ways(self, x: &mut [f32]) {
        self.pass(x.iter_mut());
        self.pass(x.iter_mut().rev());
    }

    fn pass_four<'x>(self, x: impl Iterator<Item = &'x mut [f32; 4]>) {
        let ([b0, b1, b2], [a1, a2]) = (self.b, self.a);
        let gain = (b0 + b1 + b2) / (1.0 + a1 + a2);
        let mut state: Option<([f32; 4], [f32; 4])> = None;
        for v in x {
            let (s1, s2) = state.unwrap_or_else(|| {
                let s2 = v.map(|v| b2 * v - a2 * gain * v);
                (std::array::from_fn(|k| b1 * v[k] - a1 * gain * v[k] + s2[k]), s2)
            });
            let y: [f32; 4] = std::array::from_fn(|k| b0 * v[k] + s1[k]);
            state = Some((
                std::array::from_fn(|k| b1 * v[k] - a1 * y[k] + s2[k]),
                std::array::from_fn(|k| b2 * v[k] - a2 * y[k]),
            ));
            *v = y;
        }
    }

    fn pass<'x>(self, x: impl Iterator<Item = &'x mut f32>) {
        let ([b0, b1, b2], [a1, a2]) = (self.b, self.a);
        let mut state: Option<(f32, f32)> = None;
        for v in x {
            let (s1, s2) = state.unwrap_or_else(|| {
                // The steady state for a constant input.
                let gain = (b0 + b1 + b2) / (1.0 + a1 + a2);
                let s2 = b2 * *v - a2 * gain * *v;
                (b1 * *v - a1 * gain * *v + s2, s2)
            });
            let y = b0 * *v + s1;
            state = Some((b1 * *v - a1 * y + s2, b2 * *v - a2 * y));
            *v = y;
        }
    }
}

/// Copies of the leads with every section run over them both ways. Four leads go at a time: each sample waits for the
/// one before it, and a processor can wait for four as well as for one.
pub(crate) fn filtered(sections: &[Section], leads: &[&[f32]]) -> Vec<Vec<f32>> {
    let mut all = Vec::with_capacity(leads.len());
    for four in leads.chunks(4) {
        let length = four.iter().map(|lead| lead.len()).max().unwrap_or(0);
        let at =
            |lead: usize, i: usize| four.get(lead).and_then(|x| x.get(i)).copied().unwrap_or(0.0);
        let mut x: Vec<[f32; 4]> =
            (0..length).map(|i| [0, 1, 2, 3].map(|lead| at(lead, i))).collect();
        for section in sections {
            section.pass_four(x.iter_mut());
            section.pass_four(x.iter_mut().rev());
        }
        all.extend(four.iter().enumerate().map(|(lead, from)| {
            x.iter().take(from.len()).filter_map(|v| v.get(lead)).copied().collect::<Vec<f32>>()
        }));
    }
    all
}

fn corner(hz: f64, limit: f64) -> Option<f64> {
    (limit * 2.2 < hz).then(|| (PI * limit / hz).tan())
}

#[cfg(test)]
mod tests {
    use super::*;

    fn sine(hz: f64, at: f64) -> Vec<f32> {
        (0..4000).map(|i| (2.0 * PI * at * f64::from(i) / hz).sin() as f32).collect()
    }

    fn gain(section: Section, at: f64) -> f32 {
        let mut x = sine(500.0, at);
        section.both_ways(&mut x);
        x[1500..2500].iter().fold(0.0f32, |m, v| m.max(v.abs()))
    }

    /// A Butterworth section lets half the power through at its corner, so both ways half the amplitude.
    #[test]
    fn corners_are_where_they_are_said_to_be() {
        let low = Section::low_pass(500.0, 35.0).unwrap();
        assert!(
            (gain(low, 35.0) - 0.5).abs() < 0.01
                && gain(low, 3.0) > 0.99
                && gain(low, 150.0) < 0.01
        );
        let high = Section::high_pass(500.0, 0.5).unwrap();
        assert!((gain(high, 0.5) - 0.5).abs() < 0.05 && gain(high, 10.0) > 0.99);
        let notch = Section::notch(500.0, 50.0).unwrap();
        assert!(gain(notch, 50.0) < 0.05 && gain(notch, 40.0) > 0.95 && gain(notch, 60.0) > 0.95);
    }

    #[test]
    fn leads_filtered_together_are_as_filtered_alone() {
        let leads: Vec<Vec<f32>> = (0..5).map(|n| sine(500.0, 3.0 + f64::from(n))).collect();
        let section = Section::low_pass(500.0, 20.0).unwrap();
        let together = filtered(&[section], &leads.iter().map(Vec::as_slice).collect::<Vec<_>>());
        for (mut alone, together) in leads.into_iter().zip(together) {
            section.both_ways(&mut alone);
            assert_eq!(alone, together);
        }
    }

    #[test]
    fn nothing_is_shifted_in_time() {
        let mut x: Vec<f32> =
            (0..1000).map(|i| (-((i as f32 - 500.0) / 12.0).powi(2)).exp()).collect();
        Section::low_pass(500.0, 20.0).unwrap().both_ways(&mut x);
        let peak = x.iter().enumerate().max_by(|a, b| a.1.total_cmp(b.1)).unwrap().0;
        assert_eq!(peak, 500);
    }

    #[test]
    fn a_constant_goes_through_a_low_pass_unchanged() {
        let mut x = vec![7.0f32; 300];
        Section::low_pass(250.0, 35.0).unwrap().both_ways(&mut x);
        assert!(x.iter().all(|v| (v - 7.0).abs() < 1e-3));
        assert!(Section::low_pass(100.0, 90.0).is_none());
    }
}
