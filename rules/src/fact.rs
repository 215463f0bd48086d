//! Facts: everything known about a ward, append-only. State is a fold over them; nothing else holds truth.
//! A correction is a new fact that supersedes an old one.

use crate::ids::{
    AlertId, Bed, ContentHash, OrderId, PatientId, Person, Private, ResultId, Role, TracingId, Ward,
};
use crate::units::{Kg, Ms, PerMinute};
use chrono::{DateTime, NaiveDate, Utc};
use serde::{Deserialize, Serialize};

/// A moment, UTC.
pub type At = DateTime<Utc>;

/// One thing known.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Fact {
    /// When it was true.
    pub occurred_at: At,
    /// When we learned it. Facts are decided in this order.
    pub received_at: At,
    /// Where it came from.
    pub source: Source,
    /// Whom it is about; `None` for facts about the ward or the service.
    pub patient: Option<PatientId>,
    /// What is known.
    pub body: Body,
}

/// Where a fact came from, so that anyone can go back and look.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub enum Source {
    /// A row or an element of a file that is kept by its hash.
    File {
        /// The file's content hash.
        file: ContentHash,
        /// Its place: `row 17`, `OBX 3`.
        place: Box<str>,
        /// Where the file gave a time without a zone: the raw text and the zone that was assumed.
        assumed_zone: Option<(Box<str>, Box<str>)>,
    },
    /// A person at the page or the command line.
    Person(Person),
    /// The service itself (a refused mail, a silent feed, a protocol put in force).
    Service,
}

/// What is known.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[serde(tag = "kind", content = "is", rename_all = "kebab-case")]
pub enum Body {
    /// Came onto a ward.
    Admitted(Place),
    /// Changed bed or ward.
    Moved(Place),
    /// Left.
    Discharged,
    /// An admission, a move or a discharge was recorded by mistake.
    StayCancelled {
        /// Which: the fact's time as it was given.
        of: At,
    },
    /// The record of this patient now belongs to another number.
    Merged {
        /// The number that goes on.
        into: PatientId,
    },
    /// A merge was a mistake: this number is its own patient again.
    Split,
    /// Sex, birth date and the like. `None` leaves what is known as it is.
    Described(Description),

    /// A medicine was ordered, or its order changed (same [`OrderId`], new content).
    Ordered(Order),
    /// An order was put on hold.
    OrderHeld(OrderId),
    /// A held order goes on.
    OrderResumed(OrderId),
    /// An order ended.
    OrderStopped(OrderId),
    /// An order was never meant.
    OrderCancelled(OrderId),
    /// A dose was given.
    Given(Administration),
    /// A dose that was recorded as given was not (refused, entered in error).
    NotGiven {
        /// The administration's own number.
        administration: Box<str>,
    },

    /// A laboratory result, in whichever version.
    Result(LabResult),

    /// A tracing was measured. Measuring it again with another engine is a new fact for the same tracing.
    Tracing(Tracing),
    /// A tracing arrived that no engine could read as belonging to this patient's story (wrong patient, wrong unit).
    TracingWithdrawn(TracingId),
    /// A qualified reader's own reading of a tracing; supersedes the machine's.
    OverRead(OverRead),
    /// A person chose the tracing to compare with.
    BaselineChosen(TracingId),

    /// A condition that raises the risk was recorded or ruled out.
    Risk {
        /// Which: one of [`Condition`].
        condition: Condition,
        /// Recorded (`true`) or ruled out (`false`).
        present: bool,
    },

    /// Somebody took an alert on, with what intent (one of the protocol's own list).
    Acknowledged {
        /// Which alert.
        alert: AlertId,
        /// By whom.
        by: Person,
        /// What they mean to do.
        intent: Box<str>,
    },
    /// Somebody put an alert off.
    Snoozed {
        /// Which alert.
        alert: AlertId,
        /// By whom.
        by: Person,
        /// Until when.
        until: At,
        /// Why.
        why: Box<str>,
    },
    /// Somebody passed an alert to another role.
    HandedOver {
        /// Which alert.
        alert: AlertId,
        /// By whom.
        by: Person,
        /// To whom.
        to: Role,
    },
    /// Somebody closed an alert.
    ClosedByPerson {
        /// Which alert.
        alert: AlertId,
        /// By whom.
        by: Person,
        /// Why.
        why: Box<str>,
    },

    /// A message reached the mail server (250 after the final dot).
    Told {
        /// Which alert.
        alert: AlertId,
        /// Which step of it.
        step: u32,
        /// Address or folder.
        recipient: Private,
    },
    /// A message can never reach this recipient (a permanent refusal).
    Refused {
        /// Which alert.
        alert: AlertId,
        /// Which step of it.
        step: u32,
        /// Address or folder.
        recipient: Private,
    },

    /// A protocol came into force; its text is stored under the hash.
    ProtocolInForce(ContentHash),
    /// A medicine list came into force; its text is stored under the hash.
    MedicinesInForce(ContentHash),
    /// Local codes came into force; their text is stored under the hash.
    CodesInForce(ContentHash),
    /// Nothing came from a feed for as long as the protocol allows, or something came again.
    Feed {
        /// `tracings`, `results` or `medicines`.
        feed: Feed,
        /// Silent (`true`) or heard again (`false`).
        silent: bool,
    },
    /// Something of the service's own is in trouble, or well again: a technical alert.
    Service {
        /// What.
        trouble: Trouble,
        /// In trouble (`true`) or well again (`false`).
        present: bool,
    },
}

/// What can go wrong with the service itself, so that its silence would not be a ward's calm.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, PartialOrd, Ord, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Trouble {
    /// The disk that holds the store is nearly full.
    Disk,
    /// The mail server can't be reached or refuses everything.
    Mail,
    /// The export folder is gone, was replaced by another, or can't be read.
    Folder,
    /// A changed settings, protocol or medicine file was refused; the last good one still holds.
    Settings,
    /// Facts folded again after a start gave other decisions than those that were stored.
    History,
}

/// Where a patient lies.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, Deserialize)]
pub struct Place {
    /// The ward.
    pub ward: Ward,
    /// The bed, if known.
    pub bed: Option<Bed>,
}

/// What is known about a person. `None` says nothing.
#[derive(Debug, Clone, PartialEq, Default, Serialize, Deserialize)]
pub struct Description {
    /// Sex as the hospital records it.
    pub sex: Option<Sex>,
    /// Birth date.
    pub birth_date: Option<NaiveDate>,
    /// Body weight.
    pub weight: Option<Kg>,
    /// Name, kept hidden; shown only where the site switches names on.
    pub name: Option<Private>,
    /// The local pseudonym under which mails speak of the patient.
    pub pseudonym: Option<Box<str>>,
}

/// Sex, as far as limits depend on it.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Sex {
    /// Female.
    Female,
    /// Male.
    Male,
    /// Recorded as neither, or as unknown: the stricter limit holds.
    Other,
}

/// A code in a named system.
#[derive(Debug, Clone, PartialEq, Eq, Hash, Serialize, Deserialize)]
pub struct Code {
    /// `ATC`, `RxNorm`, `LOINC`, or a site's own name.
    pub system: Box<str>,
    /// The code.
    pub code: Box<str>,
}

/// A medicine as the feed names it. The medicine list decides what it is.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, Deserialize)]
pub struct MedicineName {
    /// Codes, best first.
    pub codes: Vec<Code>,
    /// The name as written.
    pub text: Box<str>,
}

/// An amount as written; never computed with, only shown and compared for equality.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, Deserialize)]
pub struct Dose {
    /// The number as written (`2.5`).
    pub amount: Box<str>,
    /// The unit as written (`mg`).
    pub unit: Box<str>,
}

/// An order.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Order {
    /// The sender's number.
    pub id: OrderId,
    /// What.
    pub medicine: MedicineName,
    /// How much.
    pub dose: Option<Dose>,
    /// By which route, as written (`PO`, `IV`).
    pub route: Option<Box<str>>,
    /// How often, as written (`every 12 h`).
    pub frequency: Option<Box<str>>,
    /// From when it is meant to run.
    pub starts: Option<At>,
    /// Until when, if known.
    pub ends: Option<At>,
}

/// A dose that was given.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Administration {
    /// The sender's number for this dose.
    pub id: Box<str>,
    /// Its order, if the feed says so.
    pub order: Option<OrderId>,
    /// What.
    pub medicine: MedicineName,
    /// How much.
    pub dose: Option<Dose>,
    /// By which route, as written.
    pub route: Option<Box<str>>,
}

/// What is analysed. Ionised and total calcium are different things, told apart by code.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, PartialOrd, Ord, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Analyte {
    /// Serum, plasma or blood potassium, mmol/L.
    Potassium,
    /// Serum, plasma or blood magnesium, mmol/L.
    Magnesium,
    /// Total calcium, mmol/L.
    CalciumTotal,
    /// Ionised calcium, mmol/L.
    CalciumIonised,
    /// Albumin, g/L.
    Albumin,
    /// Creatinine, µmol/L.
    Creatinine,
}

/// A result, converted to the analyte's canonical unit (mmol/L; albumin g/L; creatinine µmol/L).
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct LabResult {
    /// Identity across versions.
    pub id: ResultId,
    /// What was analysed.
    pub analyte: Analyte,
    /// The value in the canonical unit; `None` where the laboratory gave no number.
    pub value: Option<ResultValue>,
    /// The text of value and unit as sent (`4.1 mEq/L`).
    pub as_sent: Box<str>,
    /// The version's standing.
    pub status: ResultStatus,
    /// When this version was issued, which orders versions whatever their order of arrival.
    pub issued_at: Option<At>,
    /// What the laboratory said of the specimen.
    pub specimen: Specimen,
}

/// A number, possibly only bounded.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct ResultValue {
    /// The number, in the analyte's canonical unit.
    pub number: f64,
    /// `<`, `>`, or equal.
    pub bound: Bound,
}

/// How a number is to be read.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Bound {
    /// Exactly.
    Equal,
    /// The true value is below (`<0.3`).
    Below,
    /// The true value is above (`>10`).
    Above,
}

/// The standing of one version of a result.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum ResultStatus {
    /// Not verified yet.
    Preliminary,
    /// Verified.
    Final,
    /// Replaces a final one.
    Corrected,
    /// No value will come.
    Cancelled,
    /// Belonged to somebody else, or was entered in error.
    EnteredInError,
}

/// What a laboratory says of a specimen.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default, Serialize, Deserialize)]
pub struct Specimen {
    /// Red cells burst: potassium reads too high.
    pub haemolysed: bool,
    /// Contaminated (EDTA, drip arm) or clotted: electrolytes read wrong.
    pub unreliable: bool,
}

/// A measured tracing.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Tracing {
    /// Identity.
    pub id: TracingId,
    /// The measuring engine and its version.
    pub engine: Box<str>,
    /// How far to trust it.
    pub quality: Quality,
    /// Why it is doubted or absent, in the engine's words.
    pub why: Vec<Box<str>>,
    /// Mean RR.
    pub rr: Option<Ms>,
    /// Ventricular rate.
    pub rate: Option<PerMinute>,
    /// The pattern of RR.
    pub rhythm: Option<Rhythm>,
    /// QRS duration.
    pub qrs: Option<Ms>,
    /// Pacing spikes were found.
    pub paced: bool,
    /// The global reading.
    pub global: Option<Reading>,
    /// Readings of single leads, about 20 ms shorter by definition.
    pub leads: Vec<(Box<str>, Reading)>,
    /// The cart's own intervals: a second opinion, never silently used.
    pub printed: Option<Printed>,
}

/// One reading of QT.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct Reading {
    /// By the tangent method.
    pub qt_tangent: Option<Ms>,
    /// By the threshold method.
    pub qt_threshold: Option<Ms>,
    /// The doubt of either.
    pub doubt: Ms,
}

/// How far a measurement may be trusted.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Quality {
    /// The readers agree.
    Good,
    /// A person should look.
    Doubtful,
    /// No QT could be told.
    None,
}

/// The pattern of RR intervals; a pattern, not a diagnosis.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Rhythm {
    /// RR steady.
    Regular,
    /// RR varies with a pattern or ectopic beats.
    Irregular,
    /// RR varies without a pattern.
    IrregularlyIrregular,
}

/// Intervals that the cart printed.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Printed {
    /// QT.
    pub qt: Option<Ms>,
    /// QTc, by the cart's formula.
    pub qtc: Option<Ms>,
    /// The cart's formula, if it says.
    pub formula: Option<Box<str>>,
    /// QRS duration.
    pub qrs: Option<Ms>,
    /// Rate.
    pub rate: Option<PerMinute>,
}

/// A qualified reader's reading.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct OverRead {
    /// Of which tracing.
    pub tracing: TracingId,
    /// By whom.
    pub by: Person,
    /// QT; `None` says that no QT can be told from this tracing.
    pub qt: Option<Ms>,
    /// QRS, if read.
    pub qrs: Option<Ms>,
    /// RR, if read; else the machine's stands.
    pub rr: Option<Ms>,
    /// Which lead was read, or `None` for a global reading.
    pub lead: Option<Box<str>>,
    /// By tangent (`true`) or threshold (`false`).
    pub tangent: bool,
    /// Why it differs, in the reader's words.
    pub why: Box<str>,
}

/// Conditions that the protocol may ask about.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, PartialOrd, Ord, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Condition {
    /// Heart failure with reduced ejection fraction.
    HeartFailure,
    /// Acute myocardial infarction in this stay.
    AcuteMyocardialInfarction,
    /// Sepsis in this stay.
    Sepsis,
    /// Inherited long QT syndrome, known.
    InheritedLongQt,
    /// Torsades de pointes before.
    EarlierTorsades,
    /// Bundle-branch block, known.
    BundleBranchBlock,
    /// Pacemaker, known.
    Pacemaker,
    /// A loop diuretic is taken (recorded where the medicine feed does not show it).
    LoopDiuretic,
    /// Liver failure.
    LiverFailure,
    /// Eating disorder or starvation.
    EatingDisorder,
}

/// A stream of files that should not fall silent.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, PartialOrd, Ord, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Feed {
    /// Tracings.
    Tracings,
    /// Results.
    Results,
    /// Medicines.
    Medicines,
}
