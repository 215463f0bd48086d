//! The service.

pub mod draw;
