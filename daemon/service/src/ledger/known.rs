//! What the ledger itself follows of the facts, beside the decider: what the chart says of people, so that a tracing
//! that says otherwise is put before a person; what is in force; and what is in trouble, so that it is said once.

use crate::store::{Held, TextKind};
use ebbmark_rules::fact::{Body, Description, Fact, Sex, Trouble};
use ebbmark_rules::ids::{ContentHash, PatientId, Private};
use std::collections::{BTreeMap, BTreeSet};

/// A fold over the facts.
#[derive(Debug, Default)]
pub(super) struct Known {
    described: BTreeMap<PatientId, Description>,
    merged: BTreeMap<PatientId, PatientId>,
    in_force: BTreeMap<TextKind, ContentHash>,
    troubles: BTreeSet<Trouble>,
}

impl Known {
    /// Learns a fact.
    pub(super) fn learn(&mut self, fact: &Fact) {
        if let Some(patient) = &fact.patient {
            self.learn_of(patient, &fact.body);
        }
        if let Body::ProtocolInForce(hash) = &fact.body {
            self.in_force.insert(TextKind::Protocol, hash.clone());
        } else if let Body::MedicinesInForce(hash) = &fact.body {
            self.in_force.insert(TextKind::Medicines, hash.clone());
        } else if let Body::CodesInForce(hash) = &fact.body {
            self.in_force.insert(TextKind::Codes, hash.clone());
        } else if let Body::Service { trouble, present } = fact.body {
            if present {
                self.troubles.insert(trouble);
            } else {
                self.troubles.remove(&trouble);
            }
        }
    }

    fn learn_of(&mut self, patient: &PatientId, body: &Body) {
        if let Body::Described(new) = body {
            let known = self.described.entry(patient.clone()).or_default();
            known.sex = new.sex.or(known.sex);
            known.birth_date = new.birth_date.or(known.birth_date);
            known.name = new.name.clone().or(known.name.take());
        } else if let Body::Merged { into } = body {
            self.merged.insert(patient.clone(), into.clone());
        } else if let Body::Split = body {
            self.merged.remove(patient);
        }
    }

    /// The name that the chart has for a patient.
    pub(super) fn name(&self, patient: &PatientId) -> Option<&Private> {
        self.described.get(self.holder(patient))?.name.as_ref()
    }

    /// The text of this kind that is in force.
    pub(super) fn in_force(&self, kind: TextKind) -> Option<&ContentHash> {
        self.in_force.get(&kind)
    }

    /// Whether this is in trouble.
    pub(super) fn is_in_trouble(&self, trouble: Trouble) -> bool {
        self.troubles.contains(&trouble)
    }

    /// Why a file that describes this patient so is not to be believed to be theirs.
    pub(super) fn disagree(&self, patient: Option<&PatientId>, said: &Description) -> Option<Held> {
        let Some(patient) = patient else {
            return Some(Held(
                "carries no patient number; export it again with one, or enter it by hand"
                    .to_owned(),
            ));
        };
        let chart = self.described.get(self.holder(patient))?;
        let other_date =
            matches!((said.birth_date, chart.birth_date), (Some(a), Some(b)) if a != b);
        let other_sex = matches!(
            (said.sex, chart.sex),
            (Some(Sex::Female), Some(Sex::Male)) | (Some(Sex::Male), Some(Sex::Female))
        );
        let what = match (other_date, other_sex) {
            (false, false) => return None,
            (true, false) => "birth date",
            (false, true) => "sex",
            (true, true) => "birth date and another sex",
        };
        Some(Held(format!(
            "carries another {what} than the chart has for this patient number; find out whose tracing it is"
        )))
    }

    /// The number under which a merged patient goes on. A circle of merges ends after as many steps as there are.
    fn holder<'a>(&'a self, patient: &'a PatientId) -> &'a PatientId {
        let mut holder = patient;
        for _ in 0..=self.merged.len() {
            match self.merged.get(holder) {
                Some(into) => holder = into,
                None => break,
            }
        }
        holder
    }
}
