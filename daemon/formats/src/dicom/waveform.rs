//! The rhythm group's channels in microvolts (PS3.3 C.10.9):
//! value = (sample × sensitivity × correction + baseline) in the channel's stated unit.

#![allow(
    clippy::cast_possible_truncation,
    clippy::cast_sign_loss,
    reason = "counts that DICOM writes as numbers or text, checked against what is there; samples kept as f32"
)]

use super::{code, hold, items, number, text};
use crate::{Error, Site};
use dicom_object::{InMemDicomObject, Tag};
use ebbmark_measure::{Lead, Signal};

/// How a sample lies in the data.
#[derive(Debug, Clone, Copy)]
enum Sample {
    I8,
    U8,
    I16,
    U16,
    I32,
    U32,
}

impl Sample {
    fn of(interpretation: &str, bits: u16) -> Option<Self> {
        Some(match (interpretation, bits) {
            ("SB", 8) => Sample::I8,
            ("UB", 8) => Sample::U8,
            ("SS", 16) => Sample::I16,
            ("US", 16) => Sample::U16,
            ("SL", 32) => Sample::I32,
            ("UL", 32) => Sample::U32,
            _ => return None,
        })
    }

    fn width(self) -> usize {
        match self {
            Sample::I8 | Sample::U8 => 1,
            Sample::I16 | Sample::U16 => 2,
            Sample::I32 | Sample::U32 => 4,
        }
    }

    /// The number, and whether it is the type's least: carts use that for "missing" without saying so.
    fn read(self, bytes: &[u8]) -> (f64, bool) {
        let fixed = |n: usize| bytes.get(..n).unwrap_or(&[0; 4]);
        match (self, fixed(self.width())) {
            (Sample::I8, &[a, ..]) => (f64::from(a.cast_signed()), a.cast_signed() == i8::MIN),
            (Sample::U8, &[a, ..]) => (f64::from(a), false),
            (Sample::I16, &[a, b, ..]) => {
                let value = i16::from_le_bytes([a, b]);
                (f64::from(value), value == i16::MIN)
            }
            (Sample::U16, &[a, b, ..]) => (f64::from(u16::from_le_bytes([a, b])), false),
            (Sample::I32, &[a, b, c, d, ..]) => {
                let value = i32::from_le_bytes([a, b, c, d]);
                (f64::from(value), value == i32::MIN)
            }
            (Sample::U32, &[a, b, c, d, ..]) => {
                (f64::from(u32::from_le_bytes([a, b, c, d])), false)
            }
            _ => (f64::NAN, true),
        }
    }
}

/// Rate and leads of the original group with the most samples.
pub(super) fn rhythm(
    object: &InMemDicomObject,
    site: &Site,
    warnings: &mut Vec<Box<str>>,
) -> Result<(f64, Vec<Signal>), Error> {
    let groups = items(object, Tag(0x5400, 0x0100));
    let original =
        |group: &&InMemDicomObject| text(group, Tag(0x003a, 0x0004)).as_deref() != Some("DERIVED");
    let samples =
        |group: &&InMemDicomObject| number(group, Tag(0x003a, 0x0010)).unwrap_or(0.0) as u64;
    let group = groups
        .iter()
        .filter(original)
        .max_by_key(samples)
        .ok_or_else(|| hold("it holds no original waveform"))?;
    let hz = number(group, Tag(0x003a, 0x001a))
        .ok_or_else(|| hold("the sampling frequency is missing"))?;
    let bits = number(group, Tag(0x5400, 0x1004)).unwrap_or(0.0) as u16;
    let interpretation = text(group, Tag(0x5400, 0x1006)).unwrap_or_default();
    let sample = Sample::of(&interpretation, bits)
        .ok_or_else(|| hold(format!("samples of {bits} bits and the type given are not read")))?;
    let definitions = items(group, Tag(0x003a, 0x0200));
    let count = definitions.len();
    let stated = number(group, Tag(0x003a, 0x0005)).unwrap_or(0.0) as usize;
    if count == 0 || count != stated {
        return Err(hold(format!("{stated} channels are stated and {count} described")));
    }
    let frames = usize::try_from(samples(&group)).map_err(|_| hold("too many samples"))?;
    let data = group.get(Tag(0x5400, 0x1010)).and_then(|element| element.to_bytes().ok());
    let data = data.ok_or_else(|| hold("the waveform data is missing"))?;
    let needed = frames
        .checked_mul(count)
        .and_then(|n| n.checked_mul(sample.width()))
        .ok_or_else(|| hold("too many samples"))?;
    if data.len() != needed && data.len() != needed + needed % 2 {
        return Err(hold(format!(
            "{needed} bytes of waveform are stated and {} are there",
            data.len()
        )));
    }
    let padding = group
        .get(Tag(0x5400, 0x100a))
        .and_then(|element| element.to_bytes().ok())
        .filter(|bytes| bytes.len() >= sample.width())
        .map(|bytes| sample.read(&bytes).0)
        // Carts write 0 here, and 0 is what a heart's own baseline gives: taking it as missing would tear holes.
        .filter(|padding| *padding != 0.0);
    let mut leads = Vec::with_capacity(count);
    for (index, definition) in definitions.iter().enumerate() {
        let (lead, scale) = channel(definition, site, warnings)?;
        let width = sample.width();
        let uv = data
            .chunks_exact(width * count)
            .map(|frame| {
                let (value, least) = sample.read(frame.get(index * width..).unwrap_or(&[]));
                // No physical sample equals the padding value, so comparing exactly is right.
                #[allow(clippy::float_cmp, reason = "both are whole numbers of the sample's type")]
                let missing = least || padding == Some(value);
                if missing { f32::NAN } else { scale.microvolts(value) }
            })
            .collect();
        leads.push(Signal { lead, uv });
    }
    Ok((hz, leads))
}

/// From a sample's number to microvolts.
struct Scale {
    sensitivity: f64,
    baseline: f64,
    to_uv: f64,
}

impl Scale {
    fn microvolts(&self, sample: f64) -> f32 {
        ((sample * self.sensitivity + self.baseline) * self.to_uv) as f32
    }
}

fn channel(
    definition: &InMemDicomObject,
    site: &Site,
    warnings: &mut Vec<Box<str>>,
) -> Result<(Lead, Scale), Error> {
    if !items(definition, Tag(0x003a, 0x0209)).is_empty() {
        return Err(hold("a channel is a difference of two electrodes that is no standard lead"));
    }
    let lead = lead(definition, site);
    let sensitivity = number(definition, Tag(0x003a, 0x0210));
    let sensitivity = sensitivity
        .filter(|s| *s != 0.0)
        .ok_or_else(|| hold(format!("the sensitivity of {lead} is missing")))?;
    let unit = code(definition, Tag(0x003a, 0x0211)).map(|(_, unit)| unit);
    let to_uv = match unit.as_deref() {
        Some("uV" | "µV" | "μV") => 1.0,
        Some("mV") => 1000.0,
        Some("V") => 1e6,
        Some("nV") => 1e-3,
        Some(_) => return Err(hold(format!("the unit of {lead} is no voltage that is known"))),
        None => return Err(hold(format!("the unit of {lead} is missing"))),
    };
    let skew = number(definition, Tag(0x003a, 0x0214)).unwrap_or(0.0);
    if skew.abs() > 0.001 {
        warnings
            .push(format!("{lead} is skewed by {:.1} ms against the others", skew * 1000.0).into());
    }
    let correction = number(definition, Tag(0x003a, 0x0212)).unwrap_or(1.0);
    let baseline = number(definition, Tag(0x003a, 0x0213)).unwrap_or(0.0);
    Ok((lead, Scale { sensitivity: sensitivity * correction, baseline, to_uv }))
}

/// The lead by its code, in either scheme; else by its label.
fn lead(definition: &InMemDicomObject, site: &Site) -> Lead {
    let coded = code(definition, Tag(0x003a, 0x0208)).and_then(|(scheme, code)| {
        let number = match scheme.as_str() {
            "SCPECG" => code.strip_prefix("5.6.3-9-"),
            "MDC" => code.strip_prefix("2:"),
            _ => None,
        }?;
        Some(match number.trim() {
            "1" => Lead::I,
            "2" => Lead::II,
            "3" => Lead::V1,
            "4" => Lead::V2,
            "5" => Lead::V3,
            "6" => Lead::V4,
            "7" => Lead::V5,
            "8" => Lead::V6,
            "61" => Lead::III,
            "62" => Lead::Avr,
            "63" => Lead::Avl,
            "64" => Lead::Avf,
            _ => return None,
        })
    });
    coded.unwrap_or_else(|| {
        let source = items(definition, Tag(0x003a, 0x0208)).first();
        let meaning = source.and_then(|item| text(item, Tag(0x0008, 0x0104)));
        let label = text(definition, Tag(0x003a, 0x0203)).filter(|label| !label.is_empty());
        site.lead(&label.or(meaning).unwrap_or_else(|| "unnamed".into()))
    })
}
