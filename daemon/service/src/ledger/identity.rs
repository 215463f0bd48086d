//! What the chart says of people, so that a tracing that says otherwise is put before a person.

use crate::store::Held;
use ebbmark_rules::fact::{Body, Description, Fact, Sex};
use ebbmark_rules::ids::PatientId;
use std::collections::BTreeMap;

/// Sex and birth date of everyone, from the facts that describe them.
#[derive(Debug, Default)]
pub(super) struct Identities {
    described: BTreeMap<PatientId, Description>,
    merged: BTreeMap<PatientId, PatientId>,
}

impl Identities {
    /// Learns what a fact says of a person.
    pub(super) fn learn(&mut self, fact: &Fact) {
        let Some(patient) = &fact.patient else { return };
        match &fact.body {
            Body::Described(new) => {
                let known = self.described.entry(patient.clone()).or_default();
                known.sex = new.sex.or(known.sex);
                known.birth_date = new.birth_date.or(known.birth_date);
            }
            Body::Merged { into } => {
                self.merged.insert(patient.clone(), into.clone());
            }
            Body::Split => {
                self.merged.remove(patient);
            }
            _ => {}
        }
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
