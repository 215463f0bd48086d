//! Everything that decides: facts in, decisions out. No I/O, no clock.

pub mod alert;
pub mod correction;
pub mod decide;
pub mod fact;
pub mod ids;
pub mod units;
