//! Intake.
pub mod open;
pub mod scan;
pub mod settle;
