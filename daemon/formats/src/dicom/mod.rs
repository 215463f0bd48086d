//! DICOM ECG waveforms (PS3.3 A.34, C.10.9): 12-lead, general, ambulatory and 32-bit. The original rhythm group is
//! read; a derived median beat is not measured on. Parsed by `dicom-object` behind a fence of our own.

mod annotation;
mod fence;
mod waveform;

pub(crate) use fence::looks_like;

use crate::{Companions, Content, Error, Site, TracingFile, time};
use chrono::{DateTime, FixedOffset, NaiveDate, NaiveDateTime, NaiveTime, Utc};
use dicom_object::{InMemDicomObject, OpenFileOptions, Tag};
use ebbmark_measure::Recording;
use ebbmark_rules::fact::{At, Description, Sex};
use ebbmark_rules::ids::{PatientId, TracingId};

const CLASSES: [&str; 4] = [
    "1.2.840.10008.5.1.4.1.1.9.1.1",
    "1.2.840.10008.5.1.4.1.1.9.1.2",
    "1.2.840.10008.5.1.4.1.1.9.1.3",
    "1.2.840.10008.5.1.4.1.1.9.1.4",
];

fn hold(why: impl std::fmt::Display) -> Error {
    Error::Hold(format!("cannot read the DICOM file: {why}"))
}

pub(crate) fn read(bytes: &[u8], _: &Companions<'_>, site: &Site) -> Result<Content, Error> {
    fence::pass(bytes)?;
    // The library's own message may quote the file's text: say only that it failed.
    let object = OpenFileOptions::new()
        .from_reader(bytes)
        .map_err(|_| hold("its elements do not follow the standard"))?;
    let object: &InMemDicomObject = &object;
    let class = text(object, Tag(0x0008, 0x0016)).unwrap_or_default();
    if !CLASSES.contains(&class.as_str()) {
        return Err(hold("it is no ECG waveform"));
    }
    let mut warnings = Vec::new();
    let (hz, leads) = waveform::rhythm(object, site, &mut warnings)?;
    let recording = Recording::new(hz, leads).map_err(hold)?;
    let started = acquired(object, site);
    if let Some(note) = started.as_ref().and_then(|told| told.note) {
        warnings.push(note.into());
    }
    let issuer = text(object, Tag(0x0010, 0x0021)).filter(|issuer| !issuer.is_empty());
    let number = text(object, Tag(0x0010, 0x0020)).unwrap_or_default();
    Ok(Content::Tracing(Box::new(TracingFile {
        recording,
        id: text(object, Tag(0x0008, 0x0018)).filter(|uid| !uid.is_empty()).map(TracingId::new),
        patient: PatientId::new(issuer.as_deref().unwrap_or(&site.issuer), &number),
        described: described(object),
        recorded_at: started.as_ref().map(|told| told.at),
        assumed_zone: started.and_then(|told| told.assumed_zone),
        printed: annotation::printed(object),
        calibrated: true,
        warnings,
    })))
}

/// An element's text without padding.
fn text(object: &InMemDicomObject, tag: Tag) -> Option<String> {
    let text = object.get(tag)?.to_str().ok()?;
    Some(text.trim_matches(['\0', ' ']).to_owned())
}

/// A number, which DICOM may write as text.
fn number(object: &InMemDicomObject, tag: Tag) -> Option<f64> {
    let element = object.get(tag)?;
    element
        .to_float64()
        .ok()
        .or_else(|| element.to_str().ok()?.trim().parse().ok())
        .filter(|n: &f64| n.is_finite())
}

/// The items of a sequence; none where it is missing.
fn items(object: &InMemDicomObject, tag: Tag) -> &[InMemDicomObject] {
    object.get(tag).and_then(|element| element.items()).unwrap_or(&[])
}

/// (scheme, code) of the first item of a code sequence.
fn code(object: &InMemDicomObject, tag: Tag) -> Option<(String, String)> {
    let item = items(object, tag).first()?;
    Some((text(item, Tag(0x0008, 0x0102))?, text(item, Tag(0x0008, 0x0100))?))
}

fn described(object: &InMemDicomObject) -> Description {
    let birth_date = text(object, Tag(0x0010, 0x0030))
        .and_then(|d| NaiveDate::parse_from_str(&d, "%Y%m%d").ok());
    let sex = match text(object, Tag(0x0010, 0x0040)).as_deref() {
        Some("F") => Some(Sex::Female),
        Some("M") => Some(Sex::Male),
        Some("O") => Some(Sex::Other),
        _ => None,
    };
    Description { sex, birth_date, ..Description::default() }
}

/// When it was acquired: acquisition, else content, else study. Never when the file was made, which may be years later.
fn acquired(object: &InMemDicomObject, site: &Site) -> Option<time::Told> {
    let offset = text(object, Tag(0x0008, 0x0201));
    let pair = |date, time| Some(format!("{}{}", text(object, date)?, text(object, time)?));
    let raw = text(object, Tag(0x0008, 0x002a))
        .filter(|raw| raw.len() >= 12)
        .or_else(|| pair(Tag(0x0008, 0x0023), Tag(0x0008, 0x0033)).filter(|raw| raw.len() >= 12))
        .or_else(|| pair(Tag(0x0008, 0x0020), Tag(0x0008, 0x0030)).filter(|raw| raw.len() >= 12))?;
    // An offset within the value wins over the file's own.
    let (stamp, own) = match raw.find(['+', '-']) {
        Some(at) => (raw.get(..at)?, raw.get(at..)),
        None => (raw.as_str(), None),
    };
    let local = stamp_of(stamp)?;
    match own.or(offset.as_deref()).and_then(offset_of) {
        Some(offset) => {
            let at: At = DateTime::<FixedOffset>::from_naive_utc_and_offset(local - offset, offset)
                .with_timezone(&Utc);
            Some(time::Told { at, assumed_zone: None, note: None })
        }
        None => Some(time::local_time(local, &raw, site)),
    }
}

/// `YYYYMMDDHHMM[SS[.F]]`.
fn stamp_of(text: &str) -> Option<NaiveDateTime> {
    let date = NaiveDate::parse_from_str(text.get(..8)?, "%Y%m%d").ok()?;
    let rest = text.get(8..)?;
    let time = ["%H%M%S%.f", "%H%M%S", "%H%M"]
        .iter()
        .find_map(|form| NaiveTime::parse_from_str(rest, form).ok())?;
    Some(date.and_time(time))
}

/// `±HHMM`.
fn offset_of(text: &str) -> Option<FixedOffset> {
    let (sign, digits) = text.split_at_checked(1)?;
    let minutes =
        digits.get(..2)?.parse::<i32>().ok()? * 60 + digits.get(2..4)?.parse::<i32>().ok()?;
    FixedOffset::east_opt(if sign == "-" { -minutes } else { minutes } * 60)
}
