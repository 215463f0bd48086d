//! Numbers that carry their unit, finite by construction.

use serde::{Deserialize, Serialize};
use std::fmt;

/// A number that was infinite, not a number, or outside what its unit allows.
#[derive(Debug, Clone, Copy, PartialEq, thiserror::Error)]
#[error("{value} is not a {unit}")]
pub struct NotAQuantity {
    /// The number.
    pub value: f64,
    /// What it should have been.
    pub unit: &'static str,
}

macro_rules! quantity {
    ($(#[$doc:meta])* $name:ident, $symbol:literal, $decimals:literal) => {
        $(#[$doc])*
        #[derive(Debug, Clone, Copy, PartialEq, PartialOrd, Serialize, Deserialize)]
        #[serde(try_from = "f64", into = "f64")]
        pub struct $name(f64);

        impl $name {
            /// The unit as printed.
            pub const UNIT: &'static str = $symbol;

            /// Refuses what is infinite or not a number.
            pub fn new(value: f64) -> Result<Self, NotAQuantity> {
                if value.is_finite() { Ok(Self(value)) } else { Err(NotAQuantity { value, unit: $symbol }) }
            }

            /// The bare number, in this type's unit.
            pub const fn get(self) -> f64 {
                self.0
            }
        }

        impl TryFrom<f64> for $name {
            type Error = NotAQuantity;
            fn try_from(value: f64) -> Result<Self, NotAQuantity> {
                Self::new(value)
            }
        }

        impl From<$name> for f64 {
            fn from(value: $name) -> f64 {
                value.0
            }
        }

        impl fmt::Display for $name {
            fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
                write!(f, concat!("{:.", $decimals, "} ", $symbol), self.0)
            }
        }
    };
}

quantity!(
    /// Milliseconds: QT, QRS, JT, RR and differences of them.
    Ms, "ms", 0
);
quantity!(
    /// Beats per minute.
    PerMinute, "/min", 0
);
quantity!(
    /// Millimoles per litre, of the analyte beside which it stands.
    MmolPerL, "mmol/L", 2
);
quantity!(
    /// Grams per litre (albumin).
    GramPerL, "g/L", 0
);
quantity!(
    /// Micromoles per litre (creatinine).
    MicromolPerL, "umol/L", 0
);
quantity!(
    /// Kilograms.
    Kg, "kg", 1
);
quantity!(
    /// Hours, for half-lives and ages of results.
    Hours, "h", 1
);
