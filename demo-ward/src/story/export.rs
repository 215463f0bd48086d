//! What lands in the export folder. File names carry no patient.

use crate::synth::{Sketch, synthesise};
use crate::write::chart::{MEDICINES, PATIENTS, RESULTS, Sheet};
use crate::write::{Label, csv_tracing, dicom};
use ebbmark_measure::NotARecording;

/// A file to be exported.
#[derive(Debug)]
pub struct Export {
    /// Its name.
    pub name: String,
    content: Content,
}

/// Why a file can't be made.
#[derive(Debug, thiserror::Error)]
#[error("cannot draw a tracing of the story: {0}")]
pub struct ExportError(#[from] NotARecording);

#[derive(Debug)]
pub(super) enum Content {
    Chart(String),
    Tracing(Sketch, Label),
    DicomTracing(Sketch, Label),
}

impl Export {
    /// The carts of the ward send DICOM and CSV in turn.
    pub(super) fn tracing(number: u32, content: Content) -> Self {
        match content {
            Content::Tracing(sketch, label) if number % 2 == 0 => Self {
                name: format!("tracing-{number:04}.dcm"),
                content: Content::DicomTracing(sketch, label),
            },
            content => Self { name: format!("tracing-{number:04}.ecg.csv"), content },
        }
    }

    /// What the cart was to draw, where it is a tracing.
    pub fn sketch(&self) -> Option<&Sketch> {
        match &self.content {
            Content::Tracing(sketch, _) | Content::DicomTracing(sketch, _) => Some(sketch),
            Content::Chart(_) => None,
        }
    }

    /// The bytes of the file; the same each time.
    ///
    /// # Errors
    /// A sketch can't be drawn.
    pub fn bytes(&self) -> Result<Vec<u8>, ExportError> {
        Ok(match &self.content {
            Content::Chart(text) => text.clone().into_bytes(),
            Content::Tracing(sketch, label) => {
                csv_tracing(&synthesise(sketch)?.0, label).into_bytes()
            }
            Content::DicomTracing(sketch, label) => dicom(&synthesise(sketch)?.0, label),
        })
    }
}

type Row = Vec<(String, String)>;

/// Chart rows of one moment.
#[derive(Debug, Default)]
pub(super) struct Charts {
    whose: [(String, String); 2],
    patients: Vec<Row>,
    medicines: Vec<Row>,
    results: Vec<Row>,
}

impl Charts {
    pub(super) fn new(number: &str, issuer: &str) -> Self {
        let pair = |name: &str, text: &str| (name.to_owned(), text.to_owned());
        let whose = [pair("patient_id", number), pair("patient_issuer", issuer)];
        Self { whose, ..Self::default() }
    }

    fn row(&self, fields: &[(&str, &str)]) -> Row {
        let own = fields.iter().map(|(name, text)| ((*name).to_owned(), (*text).to_owned()));
        self.whose.iter().cloned().chain(own).collect()
    }

    pub(super) fn patient(&mut self, fields: &[(&str, &str)]) {
        self.patients.push(self.row(fields));
    }

    pub(super) fn medicine(&mut self, fields: &[(&str, &str)]) {
        self.medicines.push(self.row(fields));
    }

    pub(super) fn result(&mut self, fields: &[(&str, &str)]) {
        self.results.push(self.row(fields));
    }

    pub(super) fn join(&mut self, other: Charts) {
        self.patients.extend(other.patients);
        self.medicines.extend(other.medicines);
        self.results.extend(other.results);
    }

    /// One file for each sheet that has rows.
    pub(super) fn exports(&self, stamp: &str) -> Vec<Export> {
        let sheets = [
            ("patients", PATIENTS, &self.patients),
            ("medicines", MEDICINES, &self.medicines),
            ("results", RESULTS, &self.results),
        ];
        let written = sheets.into_iter().filter(|(_, _, rows)| !rows.is_empty());
        written
            .map(|(what, columns, rows)| {
                let mut sheet = Sheet::new(columns);
                for (number, row) in (1..).zip(rows) {
                    let message = format!("{what}-{stamp}-{number}");
                    let mut fields = vec![("message_id", &*message)];
                    fields.extend(row.iter().map(|(name, text)| (&**name, &**text)));
                    sheet.row(&fields);
                }
                Export {
                    name: format!("{what}-{stamp}.csv"),
                    content: Content::Chart(sheet.text().to_owned()),
                }
            })
            .collect()
    }
}
