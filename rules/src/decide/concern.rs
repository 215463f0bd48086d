//! From a patient's rules to open alerts: one alert for one concern.

use super::life::{Outcome, Signature};
use super::{Decider, Due, Key};
use crate::alert::Decision;
use crate::evaluate::evaluate;
use crate::evidence;
use crate::fact::At;
use crate::ids::PatientId;
use crate::protocol::Rule;
use crate::verdict::{Basis, Because, Verdict};
use crate::view::View;
use std::collections::{BTreeMap, BTreeSet};

/// What a rule says of a patient.
#[derive(Debug)]
pub struct RuleSays<'p> {
    /// The rule.
    pub rule: &'p Rule,
    /// Its answer.
    pub verdict: Verdict,
    /// The tier's rank that the protocol gives this answer; `None`: shown only, or quiet.
    pub rank: Option<usize>,
}

/// Asks every rule of the protocol.
pub fn ask<'p>(view: &View<'p>) -> Vec<RuleSays<'p>> {
    let protocol = view.protocol;
    protocol
        .rules
        .iter()
        .map(|rule| {
            let meant = rule.only_if.as_ref().map(|only_if| evaluate(only_if, view));
            // A guard that can't be told does not keep the rule from being asked: absence of data is never safety.
            let verdict = match meant {
                Some(Verdict::Quiet) => Verdict::Quiet,
                Some(Verdict::Fired(_) | Verdict::CannotTell(_)) | None => {
                    evaluate(&rule.when, view)
                }
            };
            let rank = match &verdict {
                Verdict::Fired(because) if because.wide => {
                    Some(rule.tier.min(protocol.wide_qrs_tier))
                }
                Verdict::Fired(_) => Some(rule.tier),
                Verdict::CannotTell(missing) if missing.borderline => rule.borderline,
                Verdict::CannotTell(_) => rule.cannot_tell,
                Verdict::Quiet => None,
            };
            RuleSays { rule, verdict, rank }
        })
        .collect()
}

/// What can't be told of a patient, each once.
pub fn unknown(says: &[RuleSays<'_>]) -> Vec<Box<str>> {
    let mut found: Vec<Box<str>> = Vec::new();
    for said in says {
        if let Verdict::CannotTell(missing) = &said.verdict {
            for what in &missing.what {
                if !found.contains(what) {
                    found.push(what.clone());
                }
            }
        }
    }
    found
}

impl Decider {
    /// Asks all rules about one patient as of a moment and opens, changes and ends alerts accordingly.
    pub(super) fn look_at(
        &mut self,
        patient: &PatientId,
        at: At,
        corrects: Option<&Basis>,
        out: &mut Vec<Decision>,
    ) {
        let Some(protocol) = self.protocol.clone() else { return };
        let list = self.list.clone();
        let Some(whole) = self.whole(patient).map(std::borrow::Cow::into_owned) else { return };
        if whole.gone(at) {
            self.close_all(patient, "the patient has left", at, out);
            self.look_again(patient, None);
            return;
        }
        let view = View::new(&whole, &protocol, &list, at);
        let says = ask(&view);
        let unknown = unknown(&says);
        let mut by_concern: BTreeMap<&str, &RuleSays<'_>> = BTreeMap::new();
        for said in &says {
            // Of equal tiers the certain one speaks, and of those the one that stands first in the file.
            let weight =
                |said: &RuleSays<'_>| (said.rank, matches!(said.verdict, Verdict::Fired(_)));
            let best = by_concern.entry(&said.rule.concern).or_insert(said);
            if weight(said) > weight(best) {
                *best = said;
            }
        }
        let ward = whole.place(at).map(|place| place.ward.clone());
        let mut concerns: BTreeSet<String> = self
            .open
            .keys()
            .filter(|(whose, _)| whose.as_ref() == Some(patient))
            .map(|(_, concern)| concern.clone())
            .collect();
        concerns.extend(by_concern.keys().map(|concern| (*concern).to_owned()));
        for concern in concerns {
            let key: Key = (Some(patient.clone()), concern);
            let said = by_concern.get(key.1.as_str()).filter(|said| said.rank.is_some());
            let Some((said, rank)) = said.and_then(|said| Some((said, said.rank?))) else {
                self.settled.remove(&key);
                self.over(&key, corrects, at, out);
                continue;
            };
            let (because, told_not): (Because, Vec<Box<str>>) = match &said.verdict {
                Verdict::Fired(because) => (because.clone(), Vec::new()),
                Verdict::CannotTell(missing) => (
                    Because { borderline: missing.borderline, ..missing.because.clone() },
                    missing.what.clone(),
                ),
                Verdict::Quiet => continue,
            };
            let signature = Signature {
                rule: said.rule.id.clone(),
                rank,
                borderline: because.borderline,
                certain: told_not.is_empty(),
                rests_on: because.rests_on.clone(),
            };
            if let Some(settled) = self.settled.get(&key) {
                if rank <= settled.rank && signature.rests_on.is_subset(&settled.rests_on) {
                    continue; // a person closed it on these very facts
                }
                self.settled.remove(&key);
            }
            let evidence = evidence::of_rule(&view, said.rule, &because, rank, &told_not, &unknown);
            let outcome = Outcome { rank, signature, evidence, ward: ward.clone() };
            if self.open.contains_key(&key) {
                self.change(&key, outcome, at, out);
            } else {
                self.raise(key, outcome, None, at, out);
            }
        }
        self.look_again(patient, view.next_change());
    }

    /// Nothing holds any more: over, or withdrawn where the very fact that it rested on was corrected.
    fn over(&mut self, key: &Key, corrects: Option<&Basis>, at: At, out: &mut Vec<Decision>) {
        let Some(open) = self.open.get(key) else { return };
        let disproved = corrects.is_some_and(|basis| open.rests_on.contains(basis));
        let because = match corrects {
            Some(Basis::Result(_)) if disproved => "the result that it rested on was corrected",
            Some(Basis::Tracing(_)) if disproved => "the tracing that it rested on was read anew",
            _ => "newer facts: the rule does not hold any more",
        };
        self.end(key, disproved, because, at, out);
    }

    fn look_again(&mut self, patient: &PatientId, at: Option<At>) {
        if let Some(known) = self.look.remove(patient) {
            self.due.remove(&(known, Due::Look(patient.clone())));
        }
        if let Some(at) = at {
            self.look.insert(patient.clone(), at);
            self.due.insert((at, Due::Look(patient.clone())));
        }
    }
}
