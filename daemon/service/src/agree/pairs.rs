//! The reader's file: one row a tracing, with the local reading.

use std::path::PathBuf;

/// One tracing with its local reading.
#[derive(Debug, Clone, PartialEq)]
pub struct Pair {
    /// The tracing's file, as written in the table (relative to the table's folder).
    pub file: PathBuf,
    /// The local reading, ms.
    pub qt_ms: f64,
    /// The lead that was read; `None` for a global reading.
    pub lead: Option<String>,
    /// QRS by the reader, ms, if given.
    pub qrs_ms: Option<f64>,
}

/// A row that could not be used, and why.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct BadPair {
    /// The line in the file, from 1.
    pub line: u64,
    /// `column "qt_ms" is not a number of milliseconds`.
    pub why: String,
}

#[derive(serde::Deserialize)]
struct Raw {
    file: String,
    qt_ms: String,
    #[serde(default)]
    lead: Option<String>,
    #[serde(default)]
    qrs_ms: Option<String>,
}

/// Reads `file,qt_ms[,lead][,qrs_ms]` with a header row. Good rows are kept, bad ones reported. An error means that
/// the header itself can't be used.
pub fn pairs(text: &[u8]) -> Result<(Vec<Pair>, Vec<BadPair>), csv::Error> {
    let mut reader = csv::ReaderBuilder::new().trim(csv::Trim::All).from_reader(text);
    let headers = reader.headers()?.clone();
    let (mut good, mut bad) = (Vec::new(), Vec::new());
    for record in reader.records() {
        let record = match record {
            Ok(record) => record,
            Err(error) => {
                let line = error.position().map_or(0, csv::Position::line);
                bad.push(BadPair {
                    line,
                    why: "the row has another number of columns than the header".into(),
                });
                continue;
            }
        };
        let line = record.position().map_or(0, csv::Position::line);
        let checked = record
            .deserialize::<Raw>(Some(&headers))
            .map_err(|_| "columns `file` and `qt_ms` are needed".to_owned())
            .and_then(Pair::checked);
        match checked {
            Ok(pair) => good.push(pair),
            Err(why) => bad.push(BadPair { line, why }),
        }
    }
    Ok((good, bad))
}

impl Pair {
    fn checked(raw: Raw) -> Result<Self, String> {
        let interval = |name: &str, text: &str| {
            text.parse::<f64>().ok().filter(|ms| (20.0..=1000.0).contains(ms)).ok_or_else(|| {
                format!("column `{name}` is not a number of milliseconds between 20 and 1000")
            })
        };
        let filled = |text: Option<String>| text.filter(|text| !text.is_empty());
        if raw.file.is_empty() {
            return Err("column `file` is empty".into());
        }
        Ok(Self {
            qt_ms: interval("qt_ms", &raw.qt_ms)?,
            qrs_ms: filled(raw.qrs_ms).map(|text| interval("qrs_ms", &text)).transpose()?,
            lead: filled(raw.lead).filter(|lead| !lead.eq_ignore_ascii_case("global")),
            file: raw.file.into(),
        })
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn good_rows_stay_and_bad_rows_are_named() {
        let text =
            b"file,qt_ms,lead,qrs_ms\na.hea,412,II,92\nb.hea,0.41,,\nc.hea,398,global,\n,400,,\n";
        let (good, bad) = pairs(text).unwrap();
        assert_eq!(good.len(), 2);
        assert_eq!(good[0].lead.as_deref(), Some("II"));
        assert_eq!(good[1].lead, None);
        assert_eq!(bad.iter().map(|row| row.line).collect::<Vec<_>>(), [3, 5]);
        assert!(bad[0].why.contains("between 20 and 1000"), "seconds are not milliseconds");
    }
}
