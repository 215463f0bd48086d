//! The hospital's own rules: protocol and medicine list, read, checked, and only then put in force.

use crate::ledger::Ledger;
use crate::settings::{Folders, Problems};
use crate::store::{StoreError, TextKind};
use ebbmark_rules::medicines::MedicineList;
use std::path::Path;

/// The texts of checked rulebooks.
#[derive(Debug, Clone)]
pub struct Rulebooks {
    protocol: String,
    medicines: String,
}

impl Rulebooks {
    /// Reads and checks both.
    ///
    /// # Errors
    /// Everything that is wrong with either.
    pub fn read(folders: &Folders) -> Result<Self, Vec<Problems>> {
        let medicines = read(&folders.medicines, |text| MedicineList::parse(text).map(|_| ()));
        let protocol = read(&folders.protocol, |_| Ok(()));
        match (protocol, medicines) {
            (Ok(protocol), Ok(medicines)) => Ok(Self { protocol, medicines }),
            (protocol, medicines) => {
                Err(protocol.err().into_iter().chain(medicines.err()).collect())
            }
        }
    }

    /// Puts in force what is not. The medicine list comes first: a protocol's rules speak of it.
    ///
    /// # Errors
    /// The store failed.
    pub async fn put_in_force(self, ledger: &Ledger) -> Result<(), StoreError> {
        if ledger.put_in_force(TextKind::Medicines, self.medicines).await? {
            tracing::info!("a medicine list came into force");
        }
        if ledger.put_in_force(TextKind::Protocol, self.protocol).await? {
            tracing::info!("a protocol came into force");
        }
        Ok(())
    }
}

fn read(
    file: &Path,
    check: impl FnOnce(&str) -> Result<(), Vec<ebbmark_rules::finding::Finding>>,
) -> Result<String, Problems> {
    let text = std::fs::read_to_string(file)
        .map_err(|error| Problems::whole(file, format!("can't be read: {error}")))?;
    check(&text).map_err(|findings| Problems::of(file, &findings))?;
    Ok(text)
}
