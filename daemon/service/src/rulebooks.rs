//! The hospital's own rules: protocol and medicine list, read, checked, tried on their own examples, and only then put
//! in force.

use crate::ledger::Ledger;
use crate::settings::{Codes, Folders, Problems};
use crate::store::{StoreError, TextKind};
use ebbmark_rules::finding::Finding;
use ebbmark_rules::medicines::MedicineList;
use ebbmark_rules::protocol::{Protocol, run_examples};
use std::path::Path;

/// Checked rulebooks.
#[derive(Debug, Clone)]
pub struct Rulebooks {
    /// The protocol.
    pub protocol: Protocol,
    /// The medicine list.
    pub medicines: MedicineList,
    /// How many examples the protocol carries, all of which hold.
    pub examples: usize,
    protocol_text: String,
    medicines_text: String,
}

impl Rulebooks {
    /// Reads and checks both, and runs the protocol's examples.
    ///
    /// # Errors
    /// Everything that is wrong with either.
    pub fn read(folders: &Folders) -> Result<Self, Vec<Problems>> {
        let medicines = read(&folders.medicines, MedicineList::parse);
        let protocol = read(&folders.protocol, Protocol::parse);
        let ((protocol_text, protocol), (medicines_text, medicines)) = match (protocol, medicines) {
            (Ok(protocol), Ok(medicines)) => (protocol, medicines),
            (protocol, medicines) => {
                return Err(protocol.err().into_iter().chain(medicines.err()).collect());
            }
        };
        let results = run_examples(&protocol, &medicines);
        let wrong: Vec<String> = results
            .iter()
            .filter(|result| !result.holds())
            .map(|result| {
                let (rule, number) = (&result.rule, result.number);
                format!(
                    "example {number} of rule `{rule}` expects `{}` and gives `{}`",
                    result.expected, result.found
                )
            })
            .collect();
        if !wrong.is_empty() {
            return Err(wrong
                .iter()
                .map(|what| Problems::whole(&folders.protocol, what))
                .collect());
        }
        Ok(Self { protocol, medicines, examples: results.len(), protocol_text, medicines_text })
    }

    /// Puts in force what is not, and keeps the codes by which files are read. The medicine list comes before the
    /// protocol: its rules speak of it.
    ///
    /// # Errors
    /// The store failed.
    pub async fn put_in_force(self, ledger: &Ledger, codes: &Codes) -> Result<(), StoreError> {
        let Self { protocol, medicines, protocol_text, medicines_text, .. } = self;
        if let Some(text) = &codes.text
            && ledger.put_in_force(TextKind::Codes, text.clone()).await?
        {
            tracing::info!("the site's codes came into force");
        }
        if ledger.put_in_force(TextKind::Medicines, medicines_text).await? {
            tracing::info!(
                list = medicines.name,
                version = medicines.version,
                "a medicine list came into force"
            );
        }
        if ledger.put_in_force(TextKind::Protocol, protocol_text).await? {
            let signed = protocol.approved.is_some();
            tracing::info!(
                protocol = protocol.name,
                version = protocol.version,
                signed,
                "a protocol came into force"
            );
        }
        Ok(())
    }
}

fn read<T>(
    file: &Path,
    parse: impl FnOnce(&str) -> Result<T, Vec<Finding>>,
) -> Result<(String, T), Problems> {
    let text = std::fs::read_to_string(file)
        .map_err(|error| Problems::whole(file, format!("can't be read: {error}")))?;
    let checked = parse(&text).map_err(|findings| Problems::of(file, &findings))?;
    Ok((text, checked))
}
