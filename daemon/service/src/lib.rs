//! The service.

pub mod agree;
pub mod draw;
