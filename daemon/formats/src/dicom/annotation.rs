//! The cart's own intervals: a second opinion.

use super::{code, items, number};
use dicom_object::{InMemDicomObject, Tag};
use ebbmark_rules::fact::Printed;
use ebbmark_rules::units::{Ms, PerMinute};

/// Global intervals among the annotations, in either code scheme. Zero and less mean "not measured".
pub(super) fn printed(object: &InMemDicomObject) -> Option<Printed> {
    let (mut qt, mut qtc, mut formula, mut qrs, mut rate) = (None, None, None, None, None);
    for item in items(object, Tag(0x0040, 0xb020)) {
        let Some((scheme, concept)) = code(item, Tag(0x0040, 0xa043)) else { continue };
        let Some(value) = number(item, Tag(0x0040, 0xa30a)).filter(|value| *value > 0.0) else {
            continue;
        };
        let ms = || Ms::new(value).ok();
        match (scheme.as_str(), concept.as_str()) {
            ("MDC", "2:16160") | ("SCPECG", "5.13.5-11") => qt = ms(),
            ("MDC", "2:16156") | ("SCPECG", "5.13.5-9") => qrs = ms(),
            ("MDC", "2:15876") | ("SCPECG", "5.10.2.5-5") => qtc = qtc.or_else(ms),
            ("MDC", "2:15880") => (qtc, formula) = (ms(), Some("Bazett".into())),
            ("MDC", "2:15892") => (qtc, formula) = (ms(), Some("Fridericia".into())),
            ("MDC", "2:16770") | ("SCPECG", "5.10.2.5-1") => rate = PerMinute::new(value).ok(),
            _ => {}
        }
    }
    let any = qt.is_some() || qtc.is_some() || qrs.is_some() || rate.is_some();
    any.then_some(Printed { qt, qtc, formula, qrs, rate })
}
