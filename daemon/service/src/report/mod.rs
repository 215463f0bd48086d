//! The committee's evening: what the alerts of a period were worth. Figures are a pure function of stored facts and
//! decisions; HTML, CSV and JSON lines lay out the same figures.

#![allow(
    clippy::wildcard_enum_match_arm,
    reason = "a report asks about few kinds of facts and passes over the rest"
)]

mod days;
mod figures;
mod life;

pub use days::{PatientDays, Stays};
pub use figures::{Figures, Spread, figures};
pub use life::{AlertLife, lives};

use ebbmark_rules::fact::At;

/// From (inclusive) to (exclusive).
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Period {
    /// First moment inside.
    pub from: At,
    /// First moment after.
    pub to: At,
}

impl Period {
    /// Whether a moment lies inside.
    pub fn holds(&self, at: At) -> bool {
        self.from <= at && at < self.to
    }
}
