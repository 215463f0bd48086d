//! The service.

pub mod agree;
pub mod clock;
pub mod commands;
pub mod draw;
pub mod intake;
pub mod ledger;
pub mod page;
pub mod people;
pub mod qtc;
pub mod reading;
pub mod report;
pub mod rulebooks;
pub mod service;
pub mod settings;
pub mod store;
