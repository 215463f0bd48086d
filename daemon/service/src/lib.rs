//! The service.

pub mod agree;
pub mod clock;
pub mod commands;
pub mod delivery;
pub mod demo;
pub mod draw;
pub mod intake;
pub mod ledger;
pub mod mail;
pub mod qtc;
pub mod reading;
pub mod report;
pub mod rulebooks;
pub mod service;
pub mod settings;
pub mod store;
