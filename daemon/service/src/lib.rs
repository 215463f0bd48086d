//! The service.

pub mod agree;
pub mod clock;
pub mod draw;
pub mod store;
