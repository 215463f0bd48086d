//! The shipped examples and the decider, from outside.

#![allow(
    clippy::unwrap_used,
    clippy::panic,
    clippy::indexing_slicing,
    reason = "a test that can't go on should stop where it stands"
)]

mod config;
mod mistakes;
mod simulation;
mod values;
