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
enum Content {
    Chart(String),
    Tracing(Box<(Sketch, Label)>, Form),
}

/// How a cart sends a tracing.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
enum Form {
    Csv,
    Dicom,
}

impl Export {
    /// The carts of the ward send CSV and DICOM in turn.
    pub(super) fn tracing(number: u32, drawn: Box<(Sketch, Label)>) -> Self {
        let (form, end) =
            if number.is_multiple_of(2) { (Form::Dicom, "dcm") } else { (Form::Csv, "ecg.csv") };
        Self { name: format!("tracing-{number:04}.{end}"), content: Content::Tracing(drawn, form) }
    }

    /// What the cart was to draw, where it is a tracing.
    pub fn sketch(&self) -> Option<&Sketch> {
        match &self.content {
            Content::Tracing(drawn, _) => Some(&drawn.0),
            Content::Chart(_) => None,
        }
    }

    /// The bytes of the file; the same each time.
    ///
    /// # Errors
    /// A sketch can't be drawn.
    pub fn bytes(&self) -> Result<Vec<u8>, ExportError> {
        let (drawn, form) = match &self.content {
            Content::Chart(text) => return Ok(text.clone().into_bytes()),
            Content::Tracing(drawn, form) => (drawn, form),
        };
        let (recording, _) = synthesise(&drawn.0)?;
        Ok(match form {
            Form::Csv => csv_tracing(&recording, &drawn.1).into_bytes(),
            Form::Dicom => dicom(&recording, &drawn.1),
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
