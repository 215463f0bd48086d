//! A tracing as CSV: header lines `#key=value`, a row of lead names, then rows of numbers. Ours, documented in
//! `config/README.md`: the easiest way to hand a tracing over by hand.

#![allow(clippy::cast_possible_truncation, reason = "samples are kept as f32")]

use crate::{Companions, Content, Error, Site, TracingFile, time};
use chrono::NaiveDate;
use ebbmark_measure::{Recording, Signal};
use ebbmark_rules::fact::{Description, Printed, Sex};
use ebbmark_rules::ids::{ContentHash, PatientId};
use ebbmark_rules::units::Ms;
use std::collections::BTreeMap;

const MARK: &[u8] = b"#ecgcsv=";
/// 24 h of 12 leads at 500 Hz as text would be more; such a recording comes in another format.
const LARGEST: usize = 64 << 20;
const KNOWN: [&str; 17] = [
    "ecgcsv",
    "patient_id",
    "patient_issuer",
    "sex",
    "birth_date",
    "start",
    "fs_hz",
    "unit",
    "lsb",
    "samples",
    "highpass_hz",
    "lowpass_hz",
    "notch_hz",
    "device",
    "sha256",
    "printed_qt_ms",
    "printed_qrs_ms",
];

/// Whether these bytes are a CSV tracing.
pub(crate) fn looks_like(bytes: &[u8]) -> bool {
    bytes.strip_prefix(b"\xef\xbb\xbf").unwrap_or(bytes).starts_with(MARK)
}

pub(crate) fn read(bytes: &[u8], _: &Companions<'_>, site: &Site) -> Result<Content, Error> {
    let hold = |why: String| Error::Hold(format!("cannot read the CSV tracing: {why}"));
    if bytes.len() > LARGEST {
        return Err(hold("it is larger than 64 MiB".into()));
    }
    let text = std::str::from_utf8(bytes.strip_prefix(b"\xef\xbb\xbf").unwrap_or(bytes))
        .map_err(|_| hold("it is not UTF-8 text".into()))?;
    let (keys, body, head_lines) = head(text).map_err(hold)?;
    let warnings = keys
        .keys()
        .filter(|key| !KNOWN.contains(key))
        .map(|key| format!("the key `{key}` is not known").into());
    let warnings = warnings.collect::<Vec<Box<str>>>();
    let needed = |key: &str| {
        keys.get(key).copied().ok_or_else(|| hold(format!("the line `#{key}=` is missing")))
    };
    let number = |key: &str| {
        needed(key)?
            .parse::<f64>()
            .ok()
            .filter(|n| n.is_finite())
            .ok_or_else(|| hold(format!("`#{key}=` is not a number")))
    };
    if needed("ecgcsv")? != "1" {
        return Err(hold("`#ecgcsv=` is not 1, the only version that is known".into()));
    }
    let to_uv = match needed("unit")? {
        "uV" => 1.0,
        "mV" => 1000.0,
        other => return Err(hold(format!("the unit `{}` is not uV or mV", clipped(other)))),
    } * number("lsb")?;
    let samples = number("samples")?;
    let started =
        time::rfc3339(needed("start")?, site).map_err(|why| hold(format!("`#start=` {why}")))?;
    if started.assumed_zone.is_some() {
        return Err(hold("`#start=` has no offset from UTC, which this format requires".into()));
    }
    let sum = || ContentHash::of(body.as_bytes());
    if keys.get("sha256").is_some_and(|stated| !sum().as_str().eq_ignore_ascii_case(stated)) {
        let why = "the samples do not match `#sha256=`: the file is not complete, or was changed";
        return Err(Error::NotYet(why.into()));
    }
    let leads = rows(body, head_lines, to_uv, samples, site)?;
    let recording = Recording::new(number("fs_hz")?, leads).map_err(|why| hold(why.to_string()))?;
    let ms = |key: &str| {
        keys.get(key)
            .and_then(|text| text.parse().ok())
            .and_then(|ms: f64| Ms::new(ms).ok())
            .filter(|ms| ms.get() > 0.0)
    };
    let (qt, qrs) = (ms("printed_qt_ms"), ms("printed_qrs_ms"));
    let printed = (qt.is_some() || qrs.is_some()).then_some(Printed {
        qt,
        qtc: None,
        formula: None,
        qrs,
        rate: None,
    });
    let birth_date = match keys.get("birth_date").filter(|text| !text.is_empty()) {
        Some(text) => Some(
            NaiveDate::parse_from_str(text, "%Y-%m-%d")
                .map_err(|_| hold("`#birth_date=` is not a date such as 1950-02-03".into()))?,
        ),
        None => None,
    };
    let sex = match keys.get("sex").copied().unwrap_or("") {
        "F" => Some(Sex::Female),
        "M" => Some(Sex::Male),
        "O" => Some(Sex::Other),
        "" | "U" => None,
        _ => return Err(hold("`#sex=` is not F, M, O or U".into())),
    };
    let issuer =
        keys.get("patient_issuer").copied().filter(|text| !text.is_empty()).unwrap_or(&site.issuer);
    let patient = PatientId::new(issuer, needed("patient_id")?)
        .ok_or_else(|| hold("`#patient_id=` is empty".into()))?;
    Ok(Content::Tracing(Box::new(TracingFile {
        recording,
        id: None,
        patient: Some(patient),
        described: Description { sex, birth_date, ..Description::default() },
        recorded_at: Some(started.at),
        assumed_zone: None,
        printed,
        calibrated: true,
        warnings,
    })))
}

/// What a message may show of a text that a stranger wrote.
fn clipped(text: &str) -> String {
    text.chars().take(12).collect()
}

type Head<'t> = (BTreeMap<&'t str, &'t str>, &'t str, usize);

/// The keys, the rest, and how many lines the keys took.
fn head(text: &str) -> Result<Head<'_>, String> {
    let (mut keys, mut rest, mut lines) = (BTreeMap::new(), text, 0);
    while let Some(line) = rest.strip_prefix('#') {
        let (line, after) = line.split_once('\n').unwrap_or((line, ""));
        lines += 1;
        let (key, value) =
            line.split_once('=').ok_or_else(|| format!("line {lines} is not `#key=value`"))?;
        if keys.insert(key.trim(), value.trim()).is_some() {
            return Err(format!("line {lines} gives a key for the second time"));
        }
        rest = after;
    }
    Ok((keys, rest, lines))
}

fn rows(
    body: &str,
    head_lines: usize,
    to_uv: f64,
    samples: f64,
    site: &Site,
) -> Result<Vec<Signal>, Error> {
    let hold = |why: String| Error::Hold(format!("cannot read the CSV tracing: {why}"));
    let mut lines = body.lines().enumerate().map(|(n, line)| (head_lines + n + 1, line.trim_end()));
    let (_, names) = lines
        .next()
        .ok_or_else(|| Error::NotYet("the row of lead names is not there yet".into()))?;
    let names: Vec<&str> = names.split(',').collect();
    if names.len() > 64 {
        return Err(hold(format!("{} leads; 64 at most can be read", names.len())));
    }
    let mut leads: Vec<Signal> =
        names.iter().map(|name| Signal { lead: site.lead(name), uv: Vec::new() }).collect();
    for (number, line) in lines.filter(|(_, line)| !line.is_empty()) {
        let mut fields = line.split(',');
        for signal in &mut leads {
            let field = fields
                .next()
                .ok_or_else(|| hold(format!("line {number} has fewer columns than leads")))?;
            let value: f64 = match field.trim() {
                "" => f64::NAN, // a missing sample
                text => text.parse().ok().filter(|n: &f64| n.is_finite()).ok_or_else(|| {
                    hold(format!("line {number} has a field that is not a number"))
                })?,
            };
            signal.uv.push((value * to_uv) as f32);
        }
        if fields.next().is_some() {
            return Err(hold(format!("line {number} has more columns than leads")));
        }
    }
    let found = leads.first().map_or(0, |signal| signal.uv.len()) as f64;
    if found < samples {
        return Err(Error::NotYet(format!("{found} of {samples} samples are there")));
    }
    if found > samples {
        return Err(hold(format!("it has {found} samples where `#samples=` says {samples}")));
    }
    Ok(leads)
}

#[cfg(test)]
mod tests {
    use super::*;
    use ebbmark_measure::Lead;

    const GOOD: &str = "#ecgcsv=1\n#patient_id=1001\n#sex=F\n#birth_date=1950-02-03\n\
                        #start=2026-03-10T02:15:00+01:00\n#fs_hz=500\n#unit=mV\n#lsb=0.001\n#samples=2\nI,ii\n-21,37\n,40\n";

    fn site() -> Site {
        Site { zone: chrono_tz::Europe::London, issuer: "SALT".into(), codes: Default::default() }
    }

    fn parsed(text: &str) -> Result<Content, Error> {
        read(text.as_bytes(), &Companions::default(), &site())
    }

    #[test]
    fn a_good_one_is_read_in_microvolts() {
        let Ok(Content::Tracing(tracing)) = parsed(GOOD) else { panic!() };
        let leads = tracing.recording.leads();
        assert_eq!(leads[1].lead, Lead::II);
        assert!((leads[0].uv[0] + 21.0).abs() < 1e-6);
        assert!(leads[0].uv[1].is_nan(), "an empty field is a missing sample");
        assert_eq!(tracing.patient, PatientId::new("SALT", "1001"));
        assert_eq!(tracing.recorded_at.unwrap().to_rfc3339(), "2026-03-10T01:15:00+00:00");
    }

    #[test]
    fn what_is_wrong_is_said_and_what_is_short_is_waited_for() {
        let why = |from: &str, to: &str| match parsed(&GOOD.replacen(from, to, 1)) {
            Err(Error::Hold(why)) => why,
            other => panic!("{other:?}"),
        };
        assert!(why("#unit=mV\n", "").contains("`#unit=` is missing"));
        assert!(why("=mV", "=V").contains("not uV or mV"));
        assert!(why("-21,37", "-21,37,5").contains("line 11 has more columns"));
        assert!(why("-21,37", "-21").contains("line 11 has fewer columns"));
        assert!(why("-21,37", "-21,3x7").contains("not a number"));
        assert!(why("+01:00", "").contains("has no offset"));
        assert!(why("#sex=F", "#sex=F\n#sex=M").contains("second time"));
        assert!(matches!(parsed(&GOOD.replacen(",40\n", "", 1)), Err(Error::NotYet(_))));
    }
}
