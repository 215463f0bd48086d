//! A tracing as a DICOM 12-lead ECG, Explicit VR Little Endian: the least that is valid (PS3.3 A.34.3, from memory).

use super::{Label, letter, whole};
use crate::random::Random;
use ebbmark_measure::{Lead, Recording};

const TWELVE_LEAD_ECG: &str = "1.2.840.10008.5.1.4.1.1.9.1.1";
const EXPLICIT_LITTLE: &str = "1.2.840.10008.1.2.1";
/// Missing samples carry this, and the padding value says so.
const MISSING: i16 = i16::MIN;

/// The bytes of the file. Readers of this kind of file expect 200 to 1,000 Hz and at most 16,384 samples a channel.
pub fn dicom(recording: &Recording, label: &Label) -> Vec<u8> {
    let own = |purpose| uid(label, purpose);
    let mut meta = Elements::default();
    meta.put(0x0002, 0x0001, "OB", &[0, 1]);
    meta.text(0x0002, 0x0002, "UI", TWELVE_LEAD_ECG);
    meta.text(0x0002, 0x0003, "UI", &own(1));
    meta.text(0x0002, 0x0010, "UI", EXPLICIT_LITTLE);
    meta.text(0x0002, 0x0012, "UI", &uid_of(0x0EBB_0001, 0x0EBB_0002));
    let mut length = Elements::default();
    length.put(0x0002, 0x0000, "UL", &size(meta.0.len()).to_le_bytes());

    let (date, time) =
        (label.start.format("%Y%m%d").to_string(), label.start.format("%H%M%S").to_string());
    let mut set = Elements::default();
    set.text(0x0008, 0x0005, "CS", "ISO_IR 192");
    set.text(0x0008, 0x0016, "UI", TWELVE_LEAD_ECG);
    set.text(0x0008, 0x0018, "UI", &own(1));
    set.text(0x0008, 0x0020, "DA", &date);
    set.text(0x0008, 0x0023, "DA", &date);
    set.text(0x0008, 0x002A, "DT", &label.start.format("%Y%m%d%H%M%S%z").to_string());
    set.text(0x0008, 0x0030, "TM", &time);
    set.text(0x0008, 0x0033, "TM", &time);
    set.text(0x0008, 0x0050, "SH", "");
    set.text(0x0008, 0x0060, "CS", "ECG");
    set.text(0x0008, 0x0070, "LO", "Ebbmark demo (invented)");
    set.text(0x0008, 0x0090, "PN", "");
    set.text(0x0008, 0x0201, "SH", &label.start.format("%z").to_string());
    set.text(0x0010, 0x0010, "PN", "");
    set.text(0x0010, 0x0020, "LO", &label.patient_id);
    set.text(0x0010, 0x0021, "LO", &label.issuer);
    let born = label.birth_date.map(|date| date.format("%Y%m%d").to_string());
    set.text(0x0010, 0x0030, "DA", &born.unwrap_or_default());
    set.text(0x0010, 0x0040, "CS", letter(label.sex));
    set.text(0x0020, 0x000D, "UI", &own(2));
    set.text(0x0020, 0x000E, "UI", &own(3));
    set.text(0x0020, 0x0010, "SH", "1");
    set.text(0x0020, 0x0011, "IS", "1");
    set.text(0x0020, 0x0013, "IS", "1");
    set.sequence(0x0040, 0x0555, &[]);
    set.sequence(0x5400, 0x0100, &[multiplex_group(recording)]);

    let mut bytes = vec![0; 128];
    bytes.extend(b"DICM");
    bytes.extend(length.0);
    bytes.extend(meta.0);
    bytes.extend(set.0);
    bytes
}

fn multiplex_group(recording: &Recording) -> Elements {
    let leads = recording.leads();
    let mut group = Elements::default();
    group.text(0x003A, 0x0004, "CS", "ORIGINAL");
    group.put(0x003A, 0x0005, "US", &short(leads.len()).to_le_bytes());
    group.put(0x003A, 0x0010, "UL", &size(recording.samples()).to_le_bytes());
    group.text(0x003A, 0x001A, "DS", &recording.sampling().get().to_string());
    group.text(0x003A, 0x0020, "SH", "RHYTHM");
    let channels: Vec<Elements> = leads.iter().map(|signal| channel(&signal.lead)).collect();
    group.sequence(0x003A, 0x0200, &channels);
    group.put(0x5400, 0x1004, "US", &16_u16.to_le_bytes());
    group.text(0x5400, 0x1006, "CS", "SS");
    group.put(0x5400, 0x100A, "OW", &MISSING.to_le_bytes());
    let mut samples = Vec::with_capacity(2 * leads.len() * recording.samples());
    for n in 0..recording.samples() {
        for signal in leads {
            let uv = signal.uv.get(n).copied().and_then(whole).unwrap_or(MISSING);
            samples.extend(uv.to_le_bytes());
        }
    }
    group.put(0x5400, 0x1010, "OW", &samples);
    group
}

fn channel(lead: &Lead) -> Elements {
    let mut source = Elements::default();
    source.text(0x0008, 0x0100, "SH", &format!("2:{}", number(lead)));
    source.text(0x0008, 0x0102, "SH", "MDC");
    source.text(0x0008, 0x0104, "LO", &format!("Lead {lead}"));
    let mut unit = Elements::default();
    unit.text(0x0008, 0x0100, "SH", "uV");
    unit.text(0x0008, 0x0102, "SH", "UCUM");
    unit.text(0x0008, 0x0104, "LO", "microvolt");
    let mut channel = Elements::default();
    channel.text(0x003A, 0x0203, "SH", lead.name());
    channel.sequence(0x003A, 0x0208, &[source]);
    channel.text(0x003A, 0x0210, "DS", "1");
    channel.sequence(0x003A, 0x0211, &[unit]);
    channel.text(0x003A, 0x0212, "DS", "1");
    channel.text(0x003A, 0x0213, "DS", "0");
    channel.text(0x003A, 0x0215, "DS", "0");
    channel.put(0x003A, 0x021A, "US", &16_u16.to_le_bytes());
    channel.text(0x003A, 0x0220, "DS", "0.05");
    channel.text(0x003A, 0x0221, "DS", "150");
    channel
}

/// The lead's number in the ISO/IEEE 11073-10101 nomenclature.
fn number(lead: &Lead) -> u16 {
    match lead {
        Lead::I => 1,
        Lead::II => 2,
        Lead::V1 => 3,
        Lead::V2 => 4,
        Lead::V3 => 5,
        Lead::V4 => 6,
        Lead::V5 => 7,
        Lead::V6 => 8,
        Lead::III => 61,
        Lead::Avr => 62,
        Lead::Avl => 63,
        Lead::Avf => 64,
        Lead::Other(_) => 0,
    }
}

/// Data elements, one after the other, in the order of their tags.
#[derive(Default)]
struct Elements(Vec<u8>);

impl Elements {
    fn put(&mut self, group: u16, element: u16, vr: &str, value: &[u8]) {
        self.0.extend(group.to_le_bytes());
        self.0.extend(element.to_le_bytes());
        self.0.extend(vr.as_bytes());
        if matches!(vr, "OB" | "OW" | "SQ") {
            self.0.extend([0, 0]);
            self.0.extend(size(value.len()).to_le_bytes());
        } else {
            self.0.extend(short(value.len()).to_le_bytes());
        }
        self.0.extend(value);
    }

    /// Text, padded to an even length: with a zero for a UID, otherwise with a space.
    fn text(&mut self, group: u16, element: u16, vr: &str, text: &str) {
        let mut value = text.as_bytes().to_vec();
        if value.len() % 2 == 1 {
            value.push(if vr == "UI" { 0 } else { b' ' });
        }
        self.put(group, element, vr, &value);
    }

    fn sequence(&mut self, group: u16, element: u16, items: &[Elements]) {
        let mut value = Vec::new();
        for item in items {
            value.extend([0xFE, 0xFF, 0x00, 0xE0]);
            value.extend(size(item.0.len()).to_le_bytes());
            value.extend(&item.0);
        }
        self.put(group, element, "SQ", &value);
    }
}

/// A length of a file that is never near 4 GiB.
fn size(length: usize) -> u32 {
    u32::try_from(length).unwrap_or(u32::MAX)
}

fn short(length: usize) -> u16 {
    u16::try_from(length).unwrap_or(u16::MAX)
}

/// An identifier of this tracing's own: the same tracing gives the same.
fn uid(label: &Label, purpose: u64) -> String {
    let mut random = Random::new(purpose);
    let start = u64::from_le_bytes(label.start.timestamp_micros().to_le_bytes());
    for word in label.patient_id.bytes().map(u64::from).chain([start]) {
        random = random.fork(word.wrapping_add(1));
    }
    uid_of(random.whole(), random.whole())
}

/// A UID made of a number (ISO/IEC 9834-8: below 2.25).
fn uid_of(high: u64, low: u64) -> String {
    format!("2.25.{}", (u128::from(high) << 64) | u128::from(low))
}
