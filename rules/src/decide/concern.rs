//! From a patient's rules to open alerts: one alert for one concern.

use super::life::{Outcome, Signature};
use super::{Decider, Due, Key};
use crate::alert::{Decision, Evidence};
use crate::evaluate::evaluate;
use crate::evidence;
use crate::fact::At;
use crate::ids::{PatientId, Ward};
use crate::patient::Patient;
use crate::protocol::{Protocol, Rule};
use crate::verdict::{Basis, Because, Verdict};
use crate::view::View;
use std::collections::BTreeMap;

/// What a rule says of a patient.
#[derive(Debug)]
pub struct RuleSays<'p> {
    /// The rule.
    pub rule: &'p Rule,
    /// Its answer.
    pub verdict: Verdict,
    /// The tier's rank that the protocol gives this answer; `None`: shown only, or quiet.
    pub rank: Option<usize>,
    /// What was missing to tell whether the rule is meant for this patient; it was asked all the same.
    pub guard_missing: Vec<Box<str>>,
}

/// Asks every rule of the protocol.
pub fn ask<'p>(view: &View<'p>) -> Vec<RuleSays<'p>> {
    let protocol = view.protocol;
    protocol
        .rules
        .iter()
        .map(|rule| {
            // A guard that can't be told does not keep the rule from being asked: absence of data is never safety.
            let (verdict, guard_missing) =
                match rule.only_if.as_ref().map(|only_if| evaluate(only_if, view)) {
                    Some(Verdict::Quiet) => (Verdict::Quiet, Vec::new()),
                    Some(Verdict::CannotTell(missing)) => {
                        (evaluate(&rule.when, view), missing.what)
                    }
                    Some(Verdict::Fired(_)) | None => (evaluate(&rule.when, view), Vec::new()),
                };
            // A wide-QRS estimate alone never reaches the highest tier, borderline or not.
            let capped = |tier: usize, because: &Because| {
                if because.wide { tier.min(protocol.wide_qrs_tier) } else { tier }
            };
            let rank = match &verdict {
                Verdict::Fired(because) => Some(capped(rule.tier, because)),
                Verdict::CannotTell(missing) if missing.borderline => {
                    rule.borderline.map(|tier| capped(tier, &missing.because))
                }
                Verdict::CannotTell(_) => rule.cannot_tell,
                Verdict::Quiet => None,
            };
            RuleSays { rule, verdict, rank, guard_missing }
        })
        .collect()
}

/// What can't be told of a patient, each once.
pub fn unknown(says: &[RuleSays<'_>]) -> Vec<Box<str>> {
    let mut found: Vec<Box<str>> = Vec::new();
    for said in says {
        let of_rule = match &said.verdict {
            Verdict::CannotTell(missing) => missing.what.as_slice(),
            Verdict::Fired(_) | Verdict::Quiet => &[],
        };
        let guard = if matches!(said.verdict, Verdict::Quiet) { &[] } else { &*said.guard_missing };
        for what in of_rule.iter().chain(guard) {
            if !found.contains(what) {
                found.push(what.clone());
            }
        }
    }
    found
}

/// Of each concern the rule that speaks: the highest tier; of equal tiers the certain one, and of those the one that
/// stands first in the file.
pub fn by_concern<'s, 'p>(says: &'s [RuleSays<'p>]) -> BTreeMap<&'p str, &'s RuleSays<'p>> {
    let weight = |said: &RuleSays<'_>| (said.rank, matches!(said.verdict, Verdict::Fired(_)));
    let mut found: BTreeMap<&str, &RuleSays<'_>> = BTreeMap::new();
    for said in says.iter().filter(|said| said.rank.is_some()) {
        let best = found.entry(&said.rule.concern).or_insert(said);
        if weight(said) > weight(best) {
            *best = said;
        }
    }
    found
}

/// What one look at a patient gave.
struct Look {
    ward: Option<Ward>,
    /// What is to be said of each concern that holds.
    concerns: BTreeMap<String, Said>,
    next: Option<At>,
}

struct Said {
    rank: usize,
    signature: Signature,
    /// Worked out only where it is news.
    evidence: Option<Evidence>,
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
        let look = match self.whole(patient) {
            None => return,
            Some(whole) if whole.gone(at) => None,
            Some(whole) => Some(self.look(&whole, &protocol, patient, at)),
        };
        let Some(look) = look else {
            self.close_all(patient, "the patient has left", at, out);
            let next = self.whole(patient).and_then(|whole| whole.next_after(at));
            self.look_again(patient, next);
            return;
        };
        let over: Vec<Key> = self
            .keys_of(patient)
            .filter(|(_, concern)| !look.concerns.contains_key(concern))
            .cloned()
            .collect();
        for key in over {
            self.over(&key, corrects, at, out);
        }
        self.settled.retain(|(whose, concern), _| {
            whose.as_ref() != Some(patient) || look.concerns.contains_key(concern)
        });
        for (concern, said) in look.concerns {
            let Said { rank, signature, evidence } = said;
            let Some(evidence) = evidence else { continue };
            let key: Key = (Some(patient.clone()), concern);
            self.settled.remove(&key);
            let outcome = Outcome { rank, signature, evidence, ward: look.ward.clone() };
            if self.open.contains_key(&key) {
                self.change(&key, outcome, at, out);
            } else {
                self.raise(key, outcome, None, at, out);
            }
        }
        self.look_again(patient, look.next);
    }

    fn look(&self, whole: &Patient, protocol: &Protocol, patient: &PatientId, at: At) -> Look {
        let view = View::new(whole, protocol, &self.list, at);
        let says = ask(&view);
        let mut concerns = BTreeMap::new();
        for (concern, said) in by_concern(&says) {
            let Some((because, told_not, rank)) = reasons(said) else { continue };
            let signature = signature(&view, said.rule, &because, rank, told_not.is_empty());
            let key: Key = (Some(patient.clone()), concern.to_owned());
            let known = self.open.get(&key).is_some_and(|open| open.signature == signature);
            // A person closed it on these very facts: the same ones don't open it again.
            let settled = self.settled.get(&key).is_some_and(|settled| settled.covers(&signature));
            let evidence = (!known && !settled).then(|| {
                evidence::of_rule(&view, said.rule, &because, rank, &told_not, &unknown(&says))
            });
            concerns.insert(key.1, Said { rank, signature, evidence });
        }
        let ward = whole.place(at).map(|place| place.ward.clone());
        Look { ward, concerns, next: view.next_change() }
    }

    /// The evidence of an open alert as of a moment: ages as the reader will find them. `None` for technical alerts, and
    /// where the concern no longer holds.
    pub(super) fn fresh(&self, key: &Key, at: At) -> Option<Evidence> {
        let (Some(patient), concern) = key else { return None };
        let protocol = self.protocol.as_ref()?;
        let whole = self.whole(patient)?;
        let view = View::new(&whole, protocol, &self.list, at);
        let says = ask(&view);
        let said = by_concern(&says).remove(concern.as_str())?;
        let (because, told_not, rank) = reasons(said)?;
        Some(evidence::of_rule(&view, said.rule, &because, rank, &told_not, &unknown(&says)))
    }

    /// Nothing holds any more: over, or withdrawn where the very fact that it rested on was corrected.
    fn over(&mut self, key: &Key, corrects: Option<&Basis>, at: At, out: &mut Vec<Decision>) {
        let Some(open) = self.open.get(key) else { return };
        let disproved = corrects.is_some_and(|basis| open.rests_on.contains(basis));
        let because = match corrects {
            Some(Basis::Result(_)) if disproved => "the result that it rested on was corrected",
            Some(Basis::Tracing(_)) if disproved => "the tracing that it rested on was read anew",
            Some(_) if disproved => "what it rested on was recorded by mistake",
            _ => "newer facts: the rule does not hold any more",
        };
        self.end(key, disproved, because, at, out);
    }

    pub(super) fn look_again(&mut self, patient: &PatientId, at: Option<At>) {
        if let Some(known) = self.look.remove(patient) {
            self.due.remove(&(known, Due::Look(patient.clone())));
        }
        if let Some(at) = at {
            self.look.insert(patient.clone(), at);
            self.due.insert((at, Due::Look(patient.clone())));
        }
    }
}

/// Why a rule speaks, what it can't tell, and at which rank; `None` where it is quiet.
fn reasons(said: &RuleSays<'_>) -> Option<(Because, Vec<Box<str>>, usize)> {
    let rank = said.rank?;
    match &said.verdict {
        Verdict::Fired(because) => Some((because.clone(), Vec::new(), rank)),
        Verdict::CannotTell(missing) => {
            let because = Because { borderline: missing.borderline, ..missing.because.clone() };
            Some((because, missing.what.clone(), rank))
        }
        Verdict::Quiet => None,
    }
}

fn signature(
    view: &View<'_>,
    rule: &Rule,
    because: &Because,
    rank: usize,
    certain: bool,
) -> Signature {
    Signature {
        rule: rule.id.clone(),
        rank,
        borderline: because.borderline,
        certain,
        says: because.rests_on.iter().filter_map(|basis| view.says(basis)).collect(),
        rests_on: because.rests_on.clone(),
    }
}
