//! A tracing as CSV: `#key=value` lines, a row of lead names, then whole microvolts.

use super::{Label, letter, whole};
use ebbmark_measure::Recording;
use std::fmt::Write;

/// The text of the file.
pub fn csv_tracing(recording: &Recording, label: &Label) -> String {
    let mut text = String::new();
    let mut key = |name: &str, value: &str| {
        if !value.is_empty() {
            text.extend(["#", name, "=", value, "\n"]);
        }
    };
    key("ecgcsv", "1");
    key("patient_id", &label.patient_id);
    key("patient_issuer", &label.issuer);
    key("sex", letter(label.sex));
    key("birth_date", &label.birth_date.map(|date| date.to_string()).unwrap_or_default());
    key("start", &label.start.to_rfc3339());
    key("fs_hz", &recording.sampling().get().to_string());
    key("unit", "uV");
    key("lsb", "1");
    key("samples", &recording.samples().to_string());
    key("highpass_hz", "0.05");
    key("lowpass_hz", "150");
    key("device", "invented tracing of the Ebbmark demo");
    let names: Vec<&str> = recording.leads().iter().map(|signal| signal.lead.name()).collect();
    text.push_str(&names.join(","));
    text.push('\n');
    for n in 0..recording.samples() {
        for (column, signal) in recording.leads().iter().enumerate() {
            if column > 0 {
                text.push(',');
            }
            if let Some(uv) = signal.uv.get(n).copied().and_then(whole) {
                // Writing to a String can't fail.
                let _ = write!(text, "{uv}");
            }
        }
        text.push('\n');
    }
    text
}
