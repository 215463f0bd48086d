//! Bytes in, a recording or chart rows out. Content is recognised by its bytes, never by its name.

use ebbmark_measure::Recording;
use ebbmark_rules::fact::{At, Body, Description, Printed};
use ebbmark_rules::ids::{PatientId, TracingId};

/// Settings that reading depends on.
#[derive(Debug, Clone)]
pub struct Site {
    /// The site's own zone, for times that came without one.
    pub zone: chrono_tz::Tz,
    /// The issuer of patient numbers that came without one.
    pub issuer: Box<str>,
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
