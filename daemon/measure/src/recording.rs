//! What goes in: simultaneous leads in microvolts.

use crate::units::Hz;
use std::fmt;

/// A lead of the standard twelve, or any other name as the file gives it.
#[derive(Debug, Clone, PartialEq, Eq, Hash, PartialOrd, Ord)]
#[allow(missing_docs, reason = "the names are the trade's own")]
pub enum Lead {
    I,
    II,
    III,
    Avr,
    Avl,
    Avf,
    V1,
    V2,
    V3,
    V4,
    V5,
    V6,
    /// A lead outside the standard twelve, by the file's own name.
    Other(Box<str>),
}

impl Lead {
    /// The standard twelve, in the order in which they are printed.
    pub const STANDARD: [Lead; 12] = [
        Lead::I,
        Lead::II,
        Lead::III,
        Lead::Avr,
        Lead::Avl,
        Lead::Avf,
        Lead::V1,
        Lead::V2,
        Lead::V3,
        Lead::V4,
        Lead::V5,
        Lead::V6,
    ];

    /// Reads a lead's name without regard to case or the words that exporters put around it
    /// (`"ii"`, `"ECG II"`, `"Lead aVR"`, `"MDC_ECG_LEAD_V1"`). Never fails: what is not one of the twelve is
    /// kept as [`Lead::Other`].
    pub fn named(name: &str) -> Lead {
        let trimmed = name.trim();
        let upper = trimmed.to_ascii_uppercase();
        let bare = ["MDC_ECG_LEAD_", "LEAD ", "ECG ", "LEAD_", "ECG_"]
            .iter()
            .find_map(|prefix| upper.strip_prefix(prefix))
            .unwrap_or(&upper)
            .trim();
        Lead::STANDARD
            .into_iter()
            .find(|lead| lead.name().to_ascii_uppercase() == bare)
            .unwrap_or_else(|| Lead::Other(trimmed.into()))
    }

    /// The printed name: `I`, `aVR`, `V1`, or the file's own.
    pub fn name(&self) -> &str {
        match self {
            Lead::I => "I",
            Lead::II => "II",
            Lead::III => "III",
            Lead::Avr => "aVR",
            Lead::Avl => "aVL",
            Lead::Avf => "aVF",
            Lead::V1 => "V1",
            Lead::V2 => "V2",
            Lead::V3 => "V3",
            Lead::V4 => "V4",
            Lead::V5 => "V5",
            Lead::V6 => "V6",
            Lead::Other(name) => name,
        }
    }
}

impl fmt::Display for Lead {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(self.name())
    }
}

/// One lead's samples, in µV at the recording's rate. A missing sample is `NaN`.
#[derive(Debug, Clone)]
pub struct Signal {
    /// Which lead.
    pub lead: Lead,
    /// The samples, µV.
    pub uv: Vec<f32>,
}

/// Simultaneous leads of equal length at one sampling rate.
///
/// Checked once by [`Recording::new`]; past that point nothing checks it again.
#[derive(Debug, Clone)]
pub struct Recording {
    sampling: Hz,
    leads: Vec<Signal>,
}

/// Why samples do not make a recording.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum NotARecording {
    /// Outside 100 to 4,000 Hz, or not a number.
    #[error("sampling rate is {0} Hz; 100 to 4000 Hz can be read")]
    Rate(f64),
    /// No leads, or more than can be told apart.
    #[error("{0} leads; 1 to 64 can be read")]
    LeadCount(usize),
    /// Leads of unequal length.
    #[error("lead {lead} has {found} samples where the first has {expected}")]
    Ragged {
        /// The lead's name.
        lead: String,
        /// Its samples.
        found: usize,
        /// The first lead's samples.
        expected: usize,
    },
    /// A finite sample above 10 V in size: a wrong unit, not a heart.
    #[error("lead {lead} reaches {uv:.0} uV; no skin electrode does, so the unit must be wrong")]
    OutOfRange {
        /// The lead's name.
        lead: String,
        /// The offending sample, µV.
        uv: f32,
    },
}

impl Recording {
    /// The largest sample that may be a heart, µV. A DC offset of an electrode stays below 0.3 V; a
    /// recording above this was read in the wrong unit.
    pub const LARGEST_UV: f32 = 1.0e7;

    /// Takes the leads as they are, after checking that they can be one recording.
    /// Two leads of one name are told apart: the second `V5` becomes `V5 (2)`.
    pub fn new(sampling_hz: f64, mut leads: Vec<Signal>) -> Result<Self, NotARecording> {
        let sampling = Hz::new(sampling_hz)
            .filter(|hz| (100.0..=4000.0).contains(&hz.get()))
            .ok_or(NotARecording::Rate(sampling_hz))?;
        if leads.is_empty() || leads.len() > 64 {
            return Err(NotARecording::LeadCount(leads.len()));
        }
        let expected = leads.first().map_or(0, |signal| signal.uv.len());
        for signal in &leads {
            let lead = || signal.lead.name().to_owned();
            if signal.uv.len() != expected {
                return Err(NotARecording::Ragged {
                    lead: lead(),
                    found: signal.uv.len(),
                    expected,
                });
            }
            if let Some(&uv) = signal.uv.iter().find(|uv| uv.abs() > Self::LARGEST_UV) {
                return Err(NotARecording::OutOfRange { lead: lead(), uv });
            }
        }
        tell_apart(&mut leads);
        Ok(Self { sampling, leads })
    }

    /// Samples per second.
    pub fn sampling(&self) -> Hz {
        self.sampling
    }

    /// The leads, in the file's order.
    pub fn leads(&self) -> &[Signal] {
        &self.leads
    }

    /// Samples per lead.
    pub fn samples(&self) -> usize {
        self.leads.first().map_or(0, |signal| signal.uv.len())
    }

    /// Length in seconds.
    pub fn duration_s(&self) -> f64 {
        self.samples() as f64 / self.sampling.get()
    }

    /// The signal of one lead, if it was recorded.
    pub fn lead(&self, lead: &Lead) -> Option<&Signal> {
        self.leads.iter().find(|signal| signal.lead == *lead)
    }
}

/// Gives every later lead of the same name a number of its own.
fn tell_apart(leads: &mut [Signal]) {
    let mut seen: Vec<Lead> = Vec::with_capacity(leads.len());
    for signal in leads {
        let mut lead = signal.lead.clone();
        let mut number = 2;
        while seen.contains(&lead) {
            lead = Lead::Other(format!("{} ({number})", signal.lead.name()).into());
            number += 1;
        }
        seen.push(lead.clone());
        signal.lead = lead;
    }
}
