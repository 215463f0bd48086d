//! The ward page, on loopback, server-rendered, with no outside resource.

pub mod guard;
pub mod session;
