//! The service as a whole: real folders, a real store, and the real program where a process matters.

#![allow(
    clippy::unwrap_used,
    clippy::panic,
    clippy::indexing_slicing,
    clippy::wildcard_enum_match_arm,
    reason = "a test fails by panicking"
)]

mod chart;
mod demo;
mod files;
mod folder;
mod house;
mod kill;
mod outbox;
mod process;
mod program;
mod storm;
mod ward;
