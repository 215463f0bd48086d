//! Files on which the ledger itself failed: a fault of the program that one file brings out must not stop a ward's
//! service for good, start after start.
//!
//! A failing batch makes all its files suspects; after the next start each suspect is taken alone, and one that makes
//! the ledger fail again is held. Only our own failures count: a kill or a power cut blames nobody.

use super::{Arrival, Reading};
use crate::store::{Held, StoreError, What};
use ebbmark_rules::ids::ContentHash;
use std::collections::BTreeMap;
use std::path::PathBuf;

/// How often each file was there when the ledger failed; kept beside the store.
#[derive(Debug)]
pub(super) struct Suspects {
    path: PathBuf,
    counts: BTreeMap<ContentHash, u32>,
}

impl Suspects {
    /// Those of earlier runs. A list that can't be read is empty: at worst a file gets one more chance.
    pub(super) fn load(path: PathBuf) -> Self {
        let counts =
            std::fs::read(&path).ok().and_then(|bytes| serde_json::from_slice(&bytes).ok());
        Self { path, counts: counts.unwrap_or_default() }
    }

    fn count(&self, arrival: &Arrival) -> u32 {
        arrival.hash.as_ref().and_then(|hash| self.counts.get(hash)).copied().unwrap_or(0)
    }

    /// Whether any of these has to be taken alone.
    pub(super) fn any(&self, batch: &[Arrival]) -> bool {
        !self.counts.is_empty() && batch.iter().any(|arrival| self.count(arrival) > 0)
    }

    /// Holds a file that failed alone as well.
    pub(super) fn judge(&self, arrival: &mut Arrival) {
        if self.count(arrival) > 1 {
            let reason =
                "made the service stop twice; this is a fault of the program, please report it";
            arrival.reading = Reading::Held(What::Unknown, Held(reason.to_owned()));
        }
    }

    /// The ledger failed on these.
    pub(super) fn blame(&mut self, batch: &[Arrival]) -> Result<(), StoreError> {
        for hash in batch.iter().filter_map(|arrival| arrival.hash.as_ref()) {
            *self.counts.entry(hash.clone()).or_default() += 1;
        }
        self.save()
    }

    /// These were taken after all.
    pub(super) fn clear(&mut self, batch: &[Arrival]) -> Result<(), StoreError> {
        let before = self.counts.len();
        for hash in batch.iter().filter_map(|arrival| arrival.hash.as_ref()) {
            self.counts.remove(hash);
        }
        if self.counts.len() == before { Ok(()) } else { self.save() }
    }

    fn save(&self) -> Result<(), StoreError> {
        let bytes = serde_json::to_vec(&self.counts)
            .map_err(|error| StoreError::Row { table: "suspects", why: error.to_string() })?;
        std::fs::write(&self.path, bytes).map_err(|source| StoreError::Io {
            doing: "write the list of suspects",
            path: self.path.clone(),
            source,
        })
    }
}
