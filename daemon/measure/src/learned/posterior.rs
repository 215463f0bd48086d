//! What a net believes about the place of one mark: a probability for each point of time.

#![allow(
    clippy::indexing_slicing,
    clippy::cast_precision_loss,
    clippy::cast_possible_truncation,
    clippy::cast_sign_loss,
    reason = "positions on a grid of at most a few hundred points"
)]

use super::features::Grid;

/// Probabilities over a grid of time relative to the R peak, summing to 1.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct Posterior {
    grid: Grid,
    p: Vec<f32>,
}

impl Posterior {
    /// The log mean of several nets' answers: what they agree on counts, what one alone believes does not.
    pub(crate) fn pooled(grid: Grid, logits: &[Vec<f32>]) -> Self {
        let mut mean = vec![0.0f32; grid.points];
        for one in logits {
            let top = one.iter().copied().fold(f32::MIN, f32::max);
            let total: f32 = one.iter().map(|v| (v - top).exp()).sum();
            let norm = top + total.ln();
            for (m, v) in mean.iter_mut().zip(one) {
                *m += (v - norm) / logits.len() as f32;
            }
        }
        let top = mean.iter().copied().fold(f32::MIN, f32::max);
        let mut p: Vec<f32> = mean.iter().map(|v| (v - top).exp()).collect();
        let total: f32 = p.iter().sum();
        p.iter_mut().for_each(|v| *v /= total);
        Self { grid, p }
    }

    #[cfg(test)]
    pub(crate) fn probabilities(&self) -> &[f32] {
        &self.p
    }

    /// The log mean of this belief and that of the others together, each half.
    pub(crate) fn and_as_much(&self, others: &[Posterior]) -> Self {
        if others.is_empty() {
            return self.clone();
        }
        let share = 0.5 / others.len() as f32;
        let log = |p: f32| p.max(f32::MIN_POSITIVE).ln();
        let row = (0..self.p.len())
            .map(|i| 0.5 * log(self.p[i]) + others.iter().map(|o| share * log(o.p[i])).sum::<f32>())
            .collect();
        Self::pooled(self.grid, &[row])
    }

    /// Centre of the heaviest five neighbouring points, as an index.
    fn mode(&self) -> usize {
        let weight = |i: usize| -> f32 {
            let last = (i + 3).min(self.p.len());
            self.p[i.saturating_sub(2)..last].iter().sum()
        };
        (0..self.p.len())
            .max_by(|&a, &b| weight(a).total_cmp(&weight(b)).then(b.cmp(&a)))
            .unwrap_or(0)
    }

    fn around(&self, half: usize) -> (usize, &[f32]) {
        let mode = self.mode();
        let first = mode.saturating_sub(half);
        (first, &self.p[first..(mode + half + 1).min(self.p.len())])
    }

    fn ms(&self, index: f32) -> f32 {
        self.grid.start + self.grid.step * index
    }

    /// Mean over the points within `half` of the mode, ms after the R peak.
    pub(crate) fn mean_near_mode(&self, half: usize) -> f32 {
        let (first, p) = self.around(half);
        let total: f32 = p.iter().sum();
        let moment: f32 = p.iter().enumerate().map(|(i, p)| i as f32 * p).sum();
        self.ms(first as f32 + moment / total.max(f32::MIN_POSITIVE))
    }

    /// The quantile `q` of the mass within `half` points of the mode, ms after the R peak.
    pub(crate) fn quantile_near_mode(&self, q: f32, half: usize) -> f32 {
        let (first, p) = self.around(half);
        let wanted = q * p.iter().sum::<f32>();
        let mut below = 0.0;
        for (i, &p) in p.iter().enumerate() {
            if below + p >= wanted {
                let part = (wanted - below) / p.max(f32::MIN_POSITIVE);
                return self.ms((first + i) as f32 - 0.5 + part);
            }
            below += p;
        }
        self.ms((first + p.len()) as f32)
    }

    /// How much is believed to lie within `ms` of the mode, 0 to 1: the best single sign of whether the mark
    /// is right (on the development records, where 0.9 or more was claimed, 98 % were within 30 ms).
    pub(crate) fn mass_near_mode(&self, ms: f32) -> f32 {
        self.around((ms / self.grid.step) as usize).1.iter().sum()
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    const GRID: Grid = Grid { start: 0.0, step: 8.0, points: 100 };

    fn bell(at: f32) -> Vec<f32> {
        (0..100).map(|i| -0.5 * ((i as f32 * 8.0 - at) / 16.0).powi(2)).collect()
    }

    #[test]
    fn a_symmetric_belief_is_placed_at_its_middle() {
        let p = Posterior::pooled(GRID, &[bell(300.0), bell(300.0)]);
        assert!((p.mean_near_mode(8) - 300.0).abs() < 0.1);
        assert!((p.quantile_near_mode(0.5, 12) - 300.0).abs() < 0.5);
        assert!(p.quantile_near_mode(0.6, 12) > 302.0);
        assert!(p.mass_near_mode(40.0) > 0.97);
    }

    #[test]
    fn two_nets_that_disagree_are_believed_less() {
        let agreed = Posterior::pooled(GRID, &[bell(300.0), bell(300.0)]);
        let mut far = bell(300.0);
        for (a, b) in far.iter_mut().zip(bell(460.0)) {
            *a = a.max(b);
        }
        let torn = Posterior::pooled(GRID, &[far.clone(), far]);
        assert!(torn.mass_near_mode(32.0) < 0.6 * agreed.mass_near_mode(32.0));
    }
}
