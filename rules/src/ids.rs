//! Names of things. What identifies a patient hides itself: `Debug` and `Display` print a short keyed hash,
//! `expose()` can be searched for.

use serde::{Deserialize, Serialize};
use std::collections::hash_map::RandomState;
use std::fmt;
use std::hash::BuildHasher;
use std::sync::OnceLock;

/// Hashes with a key that lives as long as the process: a log line can be followed within one run, and
/// means nothing in another.
#[allow(clippy::cast_possible_truncation, reason = "folded to 24 bits on purpose")]
fn veil(parts: &[&str]) -> u32 {
    static KEY: OnceLock<RandomState> = OnceLock::new();
    let hash = KEY.get_or_init(RandomState::new).hash_one(parts);
    (hash ^ (hash >> 32)) as u32 & 0x00ff_ffff
}

/// A patient, by number and the issuer of the number. Never by name.
#[derive(Clone, PartialEq, Eq, Hash, PartialOrd, Ord, Serialize, Deserialize)]
pub struct PatientId {
    issuer: Box<str>,
    number: Box<str>,
}

impl PatientId {
    /// A number with its issuer; both trimmed, the number must not be empty.
    pub fn new(issuer: &str, number: &str) -> Option<Self> {
        let number = number.trim();
        (!number.is_empty()).then(|| Self { issuer: issuer.trim().into(), number: number.into() })
    }

    /// Who gave the number.
    pub fn issuer(&self) -> &str {
        &self.issuer
    }

    /// The number itself. Never into a log, a metric or a mail's subject.
    pub fn expose(&self) -> &str {
        &self.number
    }
}

impl fmt::Debug for PatientId {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        write!(f, "patient~{:06x}", veil(&[&self.issuer, &self.number]))
    }
}

impl fmt::Display for PatientId {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        fmt::Debug::fmt(self, f)
    }
}

/// Text that may identify a patient (a name, a file name, a free comment).
#[derive(Clone, PartialEq, Eq, Hash, PartialOrd, Ord, Serialize, Deserialize)]
#[serde(transparent)]
pub struct Private(Box<str>);

impl Private {
    /// Hides a text.
    pub fn new(text: impl Into<Box<str>>) -> Self {
        Self(text.into())
    }

    /// The text itself. Never into a log, a metric or a mail's subject.
    pub fn expose(&self) -> &str {
        &self.0
    }
}

impl fmt::Debug for Private {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        write!(f, "private~{:06x}", veil(&[&self.0]))
    }
}

impl fmt::Display for Private {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        fmt::Debug::fmt(self, f)
    }
}

macro_rules! name {
    ($(#[$doc:meta])* $name:ident) => {
        $(#[$doc])*
        #[derive(Debug, Clone, PartialEq, Eq, Hash, PartialOrd, Ord, Serialize, Deserialize)]
        #[serde(transparent)]
        pub struct $name(Box<str>);

        impl $name {
            /// Takes the text as it is.
            pub fn new(text: impl Into<Box<str>>) -> Self {
                Self(text.into())
            }

            /// The text.
            pub fn as_str(&self) -> &str {
                &self.0
            }
        }

        impl fmt::Display for $name {
            fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
                f.write_str(&self.0)
            }
        }
    };
}

name!(
    /// SHA-256 of some content, as 64 lower-case hex digits: a file, a protocol, a medicine list.
    ContentHash
);
name!(
    /// A medicine order, by the sender's own number.
    OrderId
);
name!(
    /// A result's identity across its versions: the sender's order number, analyte code and sub-number.
    ResultId
);
name!(
    /// A tracing's identity: the file's own unique id, else its content hash.
    TracingId
);
name!(
    /// An alert. Derived from patient, concern and the moment it was raised, so that replay names it the same.
    AlertId
);
name!(
    /// A role that the protocol names (`nurse`, `ward-pharmacist`).
    Role
);
name!(
    /// A member of staff, by account name.
    Person
);
name!(
    /// A tier that the protocol names (`note`, `review`, `call`).
    TierName
);
name!(
    /// A rule's id in the protocol.
    RuleId
);
name!(
    /// A ward.
    Ward
);
name!(
    /// A bed within a ward.
    Bed
);

impl ContentHash {
    /// Hashes content.
    pub fn of(bytes: &[u8]) -> Self {
        use sha2::{Digest, Sha256};
        use std::fmt::Write;
        let mut text = String::with_capacity(64);
        for byte in Sha256::digest(bytes) {
            let _ = write!(text, "{byte:02x}"); // writing to a String can't fail
        }
        Self::new(text)
    }

    /// The first twelve digits, for a person to compare.
    pub fn short(&self) -> &str {
        self.0.get(..12).unwrap_or(&self.0)
    }
}
