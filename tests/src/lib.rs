//! Acceptance tests live in `tests/`; what they share lives here.

#![allow(
    clippy::unwrap_used,
    clippy::panic,
    clippy::indexing_slicing,
    reason = "helpers of tests fail by panicking"
)]

mod hospital;
mod post_office;

pub use hospital::Hospital;
pub use post_office::{Fault, Mail, PostOffice, Security, Verb};
