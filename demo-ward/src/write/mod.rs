//! Files as hospitals export them: tracings as CSV, WFDB and DICOM; charts as CSV.

pub mod chart;
mod csv_tracing;
mod dicom;
mod wfdb;

pub use csv_tracing::csv_tracing;
pub use dicom::dicom;
pub use wfdb::{WfdbFiles, wfdb};

use chrono::{DateTime, FixedOffset, NaiveDate};
use ebbmark_rules::fact::Sex;

/// What a cart puts on a tracing about the patient and the moment. Invented, so it may be shown.
#[derive(Debug, Clone, PartialEq)]
pub struct Label {
    /// The hospital's number of the patient.
    pub patient_id: String,
    /// Who gives such numbers.
    pub issuer: String,
    /// As entered on the cart.
    pub sex: Option<Sex>,
    /// As entered on the cart.
    pub birth_date: Option<NaiveDate>,
    /// When the recording began.
    pub start: DateTime<FixedOffset>,
}

fn letter(sex: Option<Sex>) -> &'static str {
    match sex {
        Some(Sex::Female) => "F",
        Some(Sex::Male) => "M",
        Some(Sex::Other) => "O",
        None => "",
    }
}

/// One sample in whole microvolts; `None` where it is missing. What a 16-bit file can't hold is clipped, as a converter
/// clips it.
#[allow(clippy::cast_possible_truncation, reason = "clamped to the range first")]
fn whole(uv: f32) -> Option<i16> {
    uv.is_finite().then(|| uv.round().clamp(-32_767.0, 32_767.0) as i16)
}
