//! A tracing as a WFDB record of format 16: a header and one file of interleaved samples, 1000 units a millivolt.

use super::whole;
use chrono::NaiveDateTime;
use ebbmark_measure::Recording;
use std::fmt::Write;

/// The two files of a record.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct WfdbFiles {
    /// `NAME.hea`
    pub header: String,
    /// `NAME.dat`
    pub samples: Vec<u8>,
}

/// Missing in format 16.
const MISSING: i16 = i16::MIN;

/// The files of a record. Its header carries no patient: WFDB has no field for one.
pub fn wfdb(recording: &Recording, name: &str, start: NaiveDateTime) -> WfdbFiles {
    let leads = recording.leads();
    let mut header = String::new();
    // Writing to a String can't fail.
    let _ = writeln!(
        header,
        "{name} {} {} {} {}",
        leads.len(),
        recording.sampling().get(),
        recording.samples(),
        start.format("%H:%M:%S %d/%m/%Y")
    );
    let mut samples = Vec::with_capacity(2 * leads.len() * recording.samples());
    for signal in leads {
        let all = || signal.uv.iter().map(|uv| whole(*uv).unwrap_or(MISSING));
        let sum = all().fold(0_i16, i16::wrapping_add);
        let first = all().next().unwrap_or(0);
        let _ = writeln!(header, "{name}.dat 16 1000(0)/mV 16 0 {first} {sum} 0 {}", signal.lead);
    }
    header.push_str("# invented tracing of the Ebbmark demo\n");
    for n in 0..recording.samples() {
        for signal in leads {
            let uv = signal.uv.get(n).copied().and_then(whole).unwrap_or(MISSING);
            samples.extend(uv.to_le_bytes());
        }
    }
    WfdbFiles { header, samples }
}
