//! Bytes in, a recording or chart rows out. Content is recognised by its bytes, never by its name.

mod csv_chart;
mod csv_tracing;
mod dicom;
mod time;
mod wfdb;

use chrono::{LocalResult, NaiveDateTime, Offset, TimeZone, Utc};
use ebbmark_measure::{Lead, Recording};
use ebbmark_rules::codes::LocalCodes;
use ebbmark_rules::fact::{At, Body, Description, Printed};
use ebbmark_rules::ids::{PatientId, TracingId};
use std::sync::Arc;

/// Settings that reading depends on.
#[derive(Debug, Clone)]
pub struct Site {
    /// The site's own zone, for times that came without one.
    pub zone: chrono_tz::Tz,
    /// The issuer of patient numbers that came without one.
    pub issuer: Box<str>,
    /// The site's own codes, units and words.
    pub codes: Arc<LocalCodes>,
}

impl Site {
    /// A lead by its name, or by what the site's carts call it.
    pub(crate) fn lead(&self, name: &str) -> Lead {
        Lead::named(self.codes.lead(name))
    }

    /// A local time as UTC in the site's zone, the zone's name, and a note where the clock change makes it ambiguous
    /// (the earlier is taken) or skips it (read with the offset before the change).
    pub(crate) fn resolve(&self, local: NaiveDateTime) -> (At, Box<str>, Option<&'static str>) {
        let zone = self.zone.name().into();
        match self.zone.from_local_datetime(&local) {
            LocalResult::Single(at) => (at.with_timezone(&Utc), zone, None),
            LocalResult::Ambiguous(earlier, _) => (
                earlier.with_timezone(&Utc),
                zone,
                Some("its time falls in the hour that the clock change repeats"),
            ),
            LocalResult::None => {
                let before =
                    self.zone.offset_from_utc_datetime(&(local - chrono::TimeDelta::hours(3)));
                let at = (local - before.fix()).and_utc();
                (at, zone, Some("its time falls in the hour that the clock change skips"))
            }
        }
    }
}

/// A format, recognised by content.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Kind {
    /// A DICOM ECG waveform.
    Dicom,
    /// A WFDB record header; its samples lie in files beside it.
    Wfdb,
    /// A tracing as CSV.
    CsvTracing,
    /// Chart rows as CSV.
    CsvChart,
}

type Looks = fn(&[u8]) -> bool;
type Reader = fn(&[u8], &Companions<'_>, &Site) -> Result<Content, Error>;
/// The sniffing table: a format, how its bytes look, how it is read. In the order in which they are tried.
const FORMATS: [(Kind, Looks, Reader); 4] = [
    (Kind::Dicom, dicom::looks_like, dicom::read),
    (Kind::CsvTracing, csv_tracing::looks_like, csv_tracing::read),
    (Kind::CsvChart, csv_chart::looks_like, csv_chart::read),
    (Kind::Wfdb, wfdb::looks_like_header, wfdb::read),
];

/// Recognises a format by its bytes, never by its name. `None`: nothing that is read.
pub fn sniff(bytes: &[u8]) -> Option<Kind> {
    FORMATS.iter().find(|(_, looks, _)| looks(bytes)).map(|(kind, _, _)| *kind)
}

/// The files that must lie beside this one before it can be read; plain names in the same folder.
pub fn companions(kind: Kind, bytes: &[u8]) -> Result<Vec<String>, Error> {
    match kind {
        Kind::Wfdb => wfdb::companions(bytes),
        Kind::Dicom | Kind::CsvTracing | Kind::CsvChart => Ok(Vec::new()),
    }
}

/// Reads a file with its companions.
pub fn read(
    kind: Kind,
    bytes: &[u8],
    companions: &Companions<'_>,
    site: &Site,
) -> Result<Content, Error> {
    match FORMATS.iter().find(|(known, _, _)| *known == kind) {
        Some((_, _, read)) => read(bytes, companions, site),
        None => Err(Error::Hold("no reader for this format".into())),
    }
}

/// The contents of companion files by name.
#[derive(Debug, Default)]
pub struct Companions<'a>(Vec<(&'a str, &'a [u8])>);

impl<'a> Companions<'a> {
    /// Adds one.
    pub fn add(&mut self, name: &'a str, bytes: &'a [u8]) {
        self.0.push((name, bytes));
    }

    fn get(&self, name: &str) -> Option<&'a [u8]> {
        self.0.iter().find(|(known, _)| *known == name).map(|(_, bytes)| *bytes)
    }
}

/// Why a file was not read, in words without patient text.
#[derive(Debug, Clone, PartialEq, Eq, thiserror::Error)]
pub enum Error {
    /// It is not complete: look again later.
    #[error("{0}")]
    NotYet(String),
    /// A person has to look: hold it with this reason.
    #[error("{0}")]
    Hold(String),
}

/// What a file held.
#[derive(Debug)]
pub enum Content {
    /// One tracing.
    Tracing(Box<TracingFile>),
    /// Rows of a chart: good ones kept, bad ones reported.
    Chart(Chart),
}

/// A tracing with what its file says about it.
#[derive(Debug)]
pub struct TracingFile {
    /// The leads.
    pub recording: Recording,
    /// The file's own unique id, if it has one.
    pub id: Option<TracingId>,
    /// Whose, if it says.
    pub patient: Option<PatientId>,
    /// What it says of the patient, to be checked against the chart.
    pub described: Description,
    /// When it was recorded.
    pub recorded_at: Option<At>,
    /// Where a time came without a zone: the raw text and the zone that was assumed.
    pub assumed_zone: Option<(Box<str>, Box<str>)>,
    /// The cart's own intervals.
    pub printed: Option<Printed>,
    /// The file states what its numbers mean in volts. Without that, intervals stand and amplitudes do not.
    pub calibrated: bool,
    /// Things that a reader of the file should know, in words without patient text.
    pub warnings: Vec<Box<str>>,
}

/// Rows of a chart file.
#[derive(Debug, Default)]
pub struct Chart {
    /// Rows that were understood, in the file's order.
    pub rows: Vec<Row>,
    /// Rows that were not.
    pub bad: Vec<BadRow>,
    /// How many were understood and are of no concern here: a sodium, a potassium in urine.
    pub left_out: usize,
}

/// One row, ready to become a fact.
#[derive(Debug)]
pub struct Row {
    /// Its place: `row 17`.
    pub place: Box<str>,
    /// Whom it is about.
    pub patient: PatientId,
    /// When it was true.
    pub occurred_at: At,
    /// Where a time came without a zone: the raw text and the zone that was assumed.
    pub assumed_zone: Option<(Box<str>, Box<str>)>,
    /// What it says.
    pub body: Body,
}

/// A row that could not be used, and why, in words without patient text.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct BadRow {
    /// Its place: `row 17`.
    pub place: Box<str>,
    /// `column "value" is not a number`.
    pub why: Box<str>,
}
