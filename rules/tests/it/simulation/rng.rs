//! SplitMix64 (Steele, Lea and Flood, OOPSLA 2014): small, seeded, the same on every machine.

use chrono::TimeDelta;
use ebbmark_rules::fact::At;

#[derive(Clone)]
pub(crate) struct Rng(u64);

impl Rng {
    pub(crate) fn new(seed: u64) -> Self {
        Self(seed.wrapping_mul(0x2545_f491_4f6c_dd1d) ^ 0x9e37_79b9_7f4a_7c15)
    }

    pub(crate) fn next(&mut self) -> u64 {
        self.0 = self.0.wrapping_add(0x9e37_79b9_7f4a_7c15);
        let mut z = self.0;
        z = (z ^ (z >> 30)).wrapping_mul(0xbf58_476d_1ce4_e5b9);
        z = (z ^ (z >> 27)).wrapping_mul(0x94d0_49bb_1331_11eb);
        z ^ (z >> 31)
    }

    /// From 0 up to, and without, `n`.
    pub(crate) fn below(&mut self, n: u64) -> u64 {
        self.next() % n.max(1)
    }

    pub(crate) fn chance(&mut self, percent: u64) -> bool {
        self.below(100) < percent
    }

    pub(crate) fn pick<'a, T>(&mut self, from: &'a [T]) -> &'a T {
        &from[self.below(from.len() as u64) as usize]
    }

    pub(crate) fn between(&mut self, low: f64, high: f64) -> f64 {
        low + (high - low) * (self.below(1 << 20) as f64 / (1u64 << 20) as f64)
    }

    /// A moment within a stretch of minutes after another.
    pub(crate) fn after(&mut self, at: At, from_min: i64, to_min: i64) -> At {
        let span = (to_min - from_min).max(1) as u64 * 60;
        at + TimeDelta::seconds(from_min * 60 + self.below(span) as i64)
    }
}
