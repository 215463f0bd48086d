//! The start: folding what is stored, holding the decisions that come out against those that were stored, and catching
//! up with the deadlines that fell due while the service was down.

use super::Tally;
use super::keeper::Keeper;
use crate::store::{Reader, StoreError, StorePath, TextKind};
use ebbmark_rules::alert::{Alert, AlertState, Decision, LifeStep, Notice};
use ebbmark_rules::fact::{Body, Source, Trouble};
use ebbmark_rules::ids::AlertId;
use std::collections::BTreeMap;

/// What a start found.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub struct Folded {
    /// Facts that were folded.
    pub facts: u64,
    /// Decisions that were stored.
    pub stored: u64,
    /// Decisions that folding gave again.
    pub folded: u64,
    /// Places at which the two differ.
    pub different: u64,
    /// A protocol is in force.
    pub protocol: bool,
    /// A medicine list is in force.
    pub medicines: bool,
    /// Messages that were being sent when the last run ended.
    pub unclaimed: usize,
    /// What catching up led to.
    pub caught_up: Tally,
}

/// An alert that folding leaves open, with the last message about it.
#[derive(Debug, Clone)]
pub(super) struct Standing {
    pub(super) alert: Alert,
    pub(super) told: Option<Notice>,
}

impl Keeper {
    /// Folds the store into the decider. Live, restart and replay are one code path, so the decisions must be those
    /// that were stored; where they are not (another version of the program decides otherwise), what folding gives
    /// stands from now on, people are told what they were not, and the difference is a technical alert.
    pub(super) fn fold(&mut self, path: &StorePath) -> Result<Folded, StoreError> {
        let reader = Reader::open(path)?;
        self.shelf.0 = reader.texts()?;
        let mut stored = Stored::default();
        let mut found = Folded::default();
        let mut standing = BTreeMap::new();
        reader.facts(|_, fact| {
            found.facts += 1;
            self.last = self.last.max(fact.received_at);
            self.known.learn(&fact);
            for decision in self.decider.take(&fact, &self.shelf) {
                stored.hold(&reader, &decision, &mut found)?;
                stand(&mut standing, decision);
            }
            Ok(())
        })?;
        // Deadlines that were taken after the last fact are stored too; only those after them are news.
        self.last = self.last.max(reader.last_decision()?.unwrap_or(self.last));
        for decision in self.decider.advance(self.last) {
            stored.hold(&reader, &decision, &mut found)?;
            stand(&mut standing, decision);
        }
        stored.rest(&reader, &mut found)?;
        drop(reader);
        found.protocol = self.known.in_force(TextKind::Protocol).is_some();
        found.medicines = self.known.in_force(TextKind::Medicines).is_some();

        let now = self.now();
        let change = self.store.write(now)?;
        found.unclaimed = change.unclaim()?;
        change.commit()?;
        if found.different > 0 {
            found.caught_up = self.reconcile(&standing)?;
        }
        found.caught_up.add(self.advance()?);
        Ok(found)
    }

    fn reconcile(&mut self, standing: &BTreeMap<AlertId, Standing>) -> Result<Tally, StoreError> {
        self.change(|pen| {
            pen.change.close_all_but(standing.keys())?;
            for Standing { alert, told } in standing.values() {
                pen.change.stand(alert)?;
                let Some(notice) = told else { continue };
                if !pen.change.is_posted(&notice.alert.id, notice.step)? {
                    pen.post(notice)?;
                }
            }
            let body = Body::Service { trouble: Trouble::History, present: true };
            pen.fact(
                super::Draft { occurred_at: None, source: Source::Service, patient: None, body },
                None,
            )
        })
    }
}

/// Follows the alerts that are open as decisions go by.
fn stand(standing: &mut BTreeMap<AlertId, Standing>, decision: Decision) {
    match decision {
        Decision::Raised(alert) | Decision::Changed(alert) => {
            let told = standing.remove(&alert.id).and_then(|before| before.told);
            if matches!(alert.state, AlertState::Open | AlertState::Acknowledged) {
                standing.insert(alert.id.clone(), Standing { alert: *alert, told });
            }
        }
        Decision::Life { alert, step, .. } => match step {
            LifeStep::ClosedByFacts { .. }
            | LifeStep::ClosedByPerson { .. }
            | LifeStep::Withdrawn { .. } => {
                standing.remove(&alert);
            }
            LifeStep::Acknowledged { .. } => {
                if let Some(open) = standing.get_mut(&alert) {
                    open.alert.state = AlertState::Acknowledged;
                }
            }
            LifeStep::Told { .. }
            | LifeStep::Refused { .. }
            | LifeStep::Snoozed { .. }
            | LifeStep::SnoozeEnded
            | LifeStep::HandedOver { .. }
            | LifeStep::Escalated { .. } => {}
        },
        Decision::Tell(notice) => {
            if let Some(open) = standing.get_mut(&notice.alert.id) {
                open.told = Some(*notice);
            }
        }
    }
}

/// The stored decisions, a page at a time.
#[derive(Debug, Default)]
struct Stored {
    page: std::collections::VecDeque<String>,
    last: i64,
    ended: bool,
}

impl Stored {
    fn next(&mut self, reader: &Reader) -> Result<Option<String>, StoreError> {
        if self.page.is_empty() && !self.ended {
            let page = reader.decisions_after(self.last)?;
            self.ended = page.is_empty();
            self.last = page.last().map_or(self.last, |(seq, _)| *seq);
            self.page = page.into_iter().map(|(_, body)| body).collect();
        }
        Ok(self.page.pop_front())
    }

    /// Holds a decision against the stored one in its place.
    fn hold(
        &mut self,
        reader: &Reader,
        decision: &Decision,
        found: &mut Folded,
    ) -> Result<(), StoreError> {
        found.folded += 1;
        let stored = self.next(reader)?;
        found.stored += u64::from(stored.is_some());
        let text = serde_json::to_string(decision)
            .map_err(|error| StoreError::Row { table: "decision", why: error.to_string() })?;
        found.different += u64::from(stored.as_deref() != Some(&text));
        Ok(())
    }

    /// Counts what is stored and was not given again.
    fn rest(&mut self, reader: &Reader, found: &mut Folded) -> Result<(), StoreError> {
        while self.next(reader)?.is_some() {
            found.stored += 1;
            found.different += 1;
        }
        Ok(())
    }
}
