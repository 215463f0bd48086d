//! WFDB records: a text header that names one or more sample files (the WFDB applications guide, header(5) and
//! signal(5)). Read: formats 16 and 212. Values agree with wfdb-python to the sample.

#![allow(
    clippy::cast_possible_truncation,
    reason = "samples are kept as f32; checksums are modulo 2^16"
)]

use crate::{Companions, Content, Error, Site, TracingFile};
use chrono::{NaiveDate, NaiveDateTime, NaiveTime};
use ebbmark_measure::{Recording, Signal};
use ebbmark_rules::fact::{Description, Sex};

/// A header is a few lines; more is something else.
const LARGEST_HEADER: usize = 64 * 1024;
/// 15 leads × 24 h × 500 Hz would be larger; such a record is read in windows by its exporter, not here.
const MOST_SAMPLES: usize = 120_000_000;

/// How a sample lies in its file.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
enum Packing {
    /// 16 bits, little-endian.
    Bits16,
    /// Pairs of 12 bits in three bytes.
    Bits212,
}

/// One signal line.
#[derive(Debug)]
struct Line {
    file: String,
    packing: Packing,
    offset: usize,
    /// Units of the file per mV, and the value that means 0 mV.
    gain: f64,
    baseline: f64,
    /// µV in one of the header's physical units.
    to_uv: f64,
    /// The header states the gain.
    calibrated: bool,
    checksum: Option<i16>,
    name: String,
}

/// A checked header.
#[derive(Debug)]
struct Header {
    hz: f64,
    samples: Option<usize>,
    starts: Option<NaiveDateTime>,
    signals: Vec<Line>,
    described: Description,
}

/// Whether these bytes begin like a record line: `name signals rate …` as printable ASCII.
pub(crate) fn looks_like_header(bytes: &[u8]) -> bool {
    if bytes.len() > LARGEST_HEADER {
        return false;
    }
    let Ok(text) = std::str::from_utf8(bytes) else { return false };
    let Some(line) =
        text.lines().map(str::trim).find(|line| !line.is_empty() && !line.starts_with('#'))
    else {
        return false;
    };
    let mut fields = line.split_ascii_whitespace();
    let name = fields.next().unwrap_or("");
    let plain = |name: &str| {
        !name.is_empty()
            && name.chars().all(|c| c.is_ascii_alphanumeric() || matches!(c, '_' | '-' | '/' | '.'))
    };
    plain(name) && fields.next().is_some_and(|count| count.parse::<u16>().is_ok())
}

/// The sample files that a header names, each once.
pub(crate) fn companions(header: &[u8]) -> Result<Vec<String>, Error> {
    let mut names: Vec<String> = Vec::new();
    for line in parse(header)?.signals {
        if !names.contains(&line.file) {
            names.push(line.file);
        }
    }
    Ok(names)
}

/// Reads a header with its sample files.
pub(crate) fn read(header: &[u8], files: &Companions<'_>, site: &Site) -> Result<Content, Error> {
    let header = parse(header)?;
    let mut leads = Vec::with_capacity(header.signals.len());
    let mut warnings = Vec::new();
    let mut done: Vec<&str> = Vec::new();
    for line in &header.signals {
        if done.contains(&line.file.as_str()) {
            continue;
        }
        done.push(&line.file);
        let group: Vec<&Line> =
            header.signals.iter().filter(|other| other.file == line.file).collect();
        let bytes = files.get(&line.file).ok_or_else(|| {
            Error::NotYet(format!("the sample file `{}` is not there yet", line.file))
        })?;
        for (signal, samples) in group.iter().zip(samples(&group, header.samples, bytes)?) {
            if let Some(expected) = signal.checksum {
                let sum = samples.iter().fold(0i16, |sum, &d| sum.wrapping_add(d as i16));
                if sum != expected {
                    warnings
                        .push(format!("lead {} does not match its checksum", signal.name).into());
                }
            }
            let missing = match signal.packing {
                Packing::Bits16 => i32::from(i16::MIN),
                Packing::Bits212 => -2048,
            };
            let uv = samples
                .into_iter()
                .map(|d| {
                    if d == missing {
                        f32::NAN
                    } else {
                        ((f64::from(d) - signal.baseline) / signal.gain * signal.to_uv) as f32
                    }
                })
                .collect();
            leads.push(Signal { lead: site.lead(&signal.name), uv });
        }
    }
    let calibrated = header.signals.iter().all(|line| line.calibrated);
    if !calibrated {
        let what =
            "the header does not state the gain: intervals can be measured, amplitudes are unknown";
        warnings.push(what.into());
    }
    let recording =
        Recording::new(header.hz, leads).map_err(|error| Error::Hold(error.to_string()))?;
    let (recorded_at, assumed_zone) = match header.starts {
        Some(local) => {
            let (at, zone, note) = site.resolve(local);
            warnings.extend(note.map(Into::into));
            (Some(at), Some((local.to_string().into(), zone)))
        }
        None => (None, None),
    };
    Ok(Content::Tracing(Box::new(TracingFile {
        recording,
        id: None,
        patient: None,
        described: header.described,
        recorded_at,
        assumed_zone,
        printed: None,
        calibrated,
        warnings,
    })))
}

/// De-interleaves one file into the samples of its signals.
fn samples(group: &[&Line], stated: Option<usize>, bytes: &[u8]) -> Result<Vec<Vec<i32>>, Error> {
    let Some(first) = group.first() else { return Ok(Vec::new()) };
    if group.iter().any(|line| line.packing != first.packing || line.offset != first.offset) {
        return Err(Error::Hold(format!(
            "signals of `{}` are packed in different ways",
            first.file
        )));
    }
    let body = bytes.get(first.offset..).unwrap_or(&[]);
    let held = match first.packing {
        Packing::Bits16 => body.len() / 2,
        Packing::Bits212 => body.len() / 3 * 2 + usize::from(body.len() % 3 == 2),
    };
    let frames = stated.unwrap_or(held / group.len());
    let total = frames.checked_mul(group.len()).filter(|total| *total <= MOST_SAMPLES);
    let total = total
        .ok_or_else(|| Error::Hold("the header states more samples than can be read".into()))?;
    if held < total {
        return Err(Error::NotYet(format!("`{}` holds {held} of {total} samples", first.file)));
    }
    let mut signals: Vec<Vec<i32>> = group.iter().map(|_| Vec::with_capacity(frames)).collect();
    let values: &mut dyn Iterator<Item = i32> = match first.packing {
        Packing::Bits16 => &mut body.chunks_exact(2).map(|b| match b {
            &[low, high] => i32::from(i16::from_le_bytes([low, high])),
            _ => 0,
        }),
        Packing::Bits212 => &mut body.chunks(3).flat_map(|b| {
            let sign = |twelve: i32| (twelve << 20) >> 20;
            let byte = |i: usize| b.get(i).copied().map_or(0, i32::from);
            [sign(byte(0) | (byte(1) & 0x0f) << 8), sign(byte(2) | (byte(1) & 0xf0) << 4)]
        }),
    };
    for _ in 0..frames {
        for signal in &mut signals {
            signal.extend(values.next());
        }
    }
    Ok(signals)
}

fn parse(bytes: &[u8]) -> Result<Header, Error> {
    let hold = |line: usize, why: String| {
        Error::Hold(format!("cannot read the record header: {why} (line {line})"))
    };
    if bytes.len() > LARGEST_HEADER {
        return Err(hold(1, "it is larger than 64 KiB".into()));
    }
    let text = std::str::from_utf8(bytes).map_err(|_| hold(1, "it is not text".into()))?;
    let mut lines = text.lines().enumerate().map(|(n, line)| (n + 1, line.trim()));
    let mut described = Description::default();
    let mut record = None;
    let mut signals = Vec::new();
    for (n, line) in lines.by_ref() {
        if let Some(comment) = line.strip_prefix('#') {
            describe(comment, &mut described);
        } else if line.is_empty() {
        } else if record.is_none() {
            record = Some(record_line(line).map_err(|why| hold(n, why))?);
        } else {
            signals.push(signal_line(line).map_err(|why| hold(n, why))?);
        }
    }
    let (count, hz, samples, starts) =
        record.ok_or_else(|| hold(1, "there is no record line".into()))?;
    if signals.len() != count {
        return Err(Error::NotYet(format!(
            "the record header names {count} signals and describes {}",
            signals.len()
        )));
    }
    Ok(Header { hz, samples, starts, signals, described })
}

type RecordLine = (usize, f64, Option<usize>, Option<NaiveDateTime>);

/// `name[/segments] signals [rate[/counter] [samples [time [date]]]]`, day first.
fn record_line(line: &str) -> Result<RecordLine, String> {
    let mut fields = line.split_ascii_whitespace();
    if fields.next().is_some_and(|name| name.contains('/')) {
        return Err("the record has several segments, which a resting tracing has not".into());
    }
    let count: usize =
        fields.next().and_then(|f| f.parse().ok()).ok_or("the number of signals is missing")?;
    if !(1..=64).contains(&count) {
        return Err(format!("{count} signals; 1 to 64 can be read"));
    }
    let hz = match fields.next() {
        None => 250.0,
        Some(field) => {
            let rate = field.split(['/', '(']).next().unwrap_or(field);
            rate.parse::<f64>()
                .map_err(|_| format!("the sampling rate `{rate}` is not a number"))?
        }
    };
    let samples = match fields.next() {
        None | Some("0") => None,
        Some(field) => Some(
            field
                .parse()
                .map_err(|_| format!("the number of samples `{field}` is not a number"))?,
        ),
    };
    let time = fields.next().and_then(|field| NaiveTime::parse_from_str(field, "%H:%M:%S%.f").ok());
    let date = fields.next().and_then(|field| NaiveDate::parse_from_str(field, "%d/%m/%Y").ok());
    Ok((count, hz, samples, date.zip(time).map(|(date, time)| date.and_time(time))))
}

/// `file format[…][+offset] [gain[(baseline)][/units] [resolution [zero [initial [checksum [block [name]]]]]]]`.
fn signal_line(line: &str) -> Result<Line, String> {
    let mut rest = line;
    let mut field = || {
        let start = rest.trim_start();
        let (head, tail) = start.split_once(char::is_whitespace).unwrap_or((start, ""));
        rest = tail;
        (!head.is_empty()).then_some(head)
    };
    let file = field().ok_or("the sample file is missing")?;
    let plain = file.chars().all(|c| c.is_ascii_alphanumeric() || matches!(c, '_' | '-' | '.'))
        && file.starts_with(|c: char| c.is_ascii_alphanumeric() || c == '_');
    if !plain {
        return Err("the sample file's name is not a plain name in the same folder".into());
    }
    let format = field().ok_or("the sample format is missing")?;
    let (format, offset) = format.split_once('+').unwrap_or((format, "0"));
    let packing = match format {
        "16" => Packing::Bits16,
        "212" => Packing::Bits212,
        other => return Err(format!("sample format `{other}` is not read (16 and 212 are)")),
    };
    let offset = offset.parse().map_err(|_| "the byte offset is not a number".to_owned())?;
    let gain = field().unwrap_or("0");
    let (gain, unit) = gain.split_once('/').unwrap_or((gain, "mV"));
    let (gain, baseline) = match gain.split_once('(') {
        Some((gain, baseline)) => (gain, Some(baseline.trim_end_matches(')'))),
        None => (gain, None),
    };
    let number = |text: &str, what: &str| {
        text.parse::<f64>().map_err(|_| format!("the {what} `{text}` is not a number"))
    };
    let stated = number(gain, "gain")?;
    if !stated.is_finite() {
        return Err("the gain is not a number".into());
    }
    // header(5): a gain of 0 means "not calibrated", and 200 is then assumed.
    let calibrated = stated != 0.0;
    let gain = if calibrated { stated } else { 200.0 };
    let to_uv = match unit {
        "mV" => 1000.0,
        "uV" | "µV" | "μV" => 1.0,
        "V" => 1e6,
        "nV" => 1e-3,
        other => return Err(format!("the unit `{other}` is not a voltage that is known")),
    };
    let _resolution = field();
    let zero = field().map_or(Ok(0.0), |text| number(text, "ADC zero"))?;
    let baseline = baseline.map_or(Ok(zero), |text| number(text, "baseline"))?;
    let _initial = field();
    let checksum = field().and_then(|text| text.parse::<i64>().ok()).map(|sum| sum as i16);
    let _block = field();
    let name = rest.trim().into();
    Ok(Line {
        file: file.into(),
        packing,
        offset,
        gain,
        baseline,
        to_uv,
        calibrated,
        checksum,
        name,
    })
}

/// By convention a comment may give `age: 81` and `sex: F`, in several spellings; only the sex is kept, because an
/// age without its date goes stale.
fn describe(comment: &str, described: &mut Description) {
    let Some((key, value)) = comment.split_once(':') else { return };
    let key = key.trim().trim_matches(['<', '>']);
    if key.eq_ignore_ascii_case("sex") {
        described.sex = match value.trim().to_ascii_lowercase().as_str() {
            "f" | "female" => Some(Sex::Female),
            "m" | "male" => Some(Sex::Male),
            _ => None,
        };
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn pairs_of_twelve_bits_come_back_with_their_sign() {
        // signal(5): first sample in the low byte and low nibble, second in the high nibble and third byte.
        let line = signal_line("a.dat 212 200(0)/mV 11 0 0 0 0 V5").unwrap();
        let bytes = [0xff, 0x8f, 0x01]; // 0xfff = -1, 0x801 = -2047
        let found = samples(&[&line, &line], Some(1), &bytes).unwrap();
        assert_eq!(found, [vec![-1], vec![-2047]]);
    }

    #[test]
    fn a_short_sample_file_is_not_yet_there() {
        let line = signal_line("a.dat 16 1000/mV 16 0 0 0 0 II").unwrap();
        assert!(matches!(samples(&[&line], Some(3), &[0; 5]), Err(Error::NotYet(_))));
    }

    #[test]
    fn a_name_that_leaves_the_folder_is_refused() {
        for name in ["../x.dat", "/etc/passwd", ".hidden", "a b.dat"] {
            assert!(signal_line(&format!("{name} 16 1000/mV")).is_err(), "{name}");
        }
    }

    #[test]
    fn a_record_without_a_gain_says_that_it_is_not_calibrated() {
        let line = signal_line("a.dat 212 0 12 0 0 0 0 ECG1").unwrap();
        assert!(!line.calibrated && (line.gain - 200.0).abs() < 1e-12);
        assert!(signal_line("a.dat 16 1000/mV 16 0 0 0 0 II").unwrap().calibrated);
    }
}
