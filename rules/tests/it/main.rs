//! The shipped examples and the decider, from outside.

#![allow(
    clippy::unwrap_used,
    clippy::panic,
    clippy::indexing_slicing,
    clippy::cast_possible_truncation,
    clippy::cast_sign_loss,
    clippy::wildcard_enum_match_arm,
    clippy::disallowed_methods,
    reason = "a test that can't go on should stop where it stands"
)]

mod config;
mod mistakes;
mod simulation;
mod values;
