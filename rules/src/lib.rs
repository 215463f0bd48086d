//! Everything that decides: facts in, decisions out. No I/O, no clock.

pub mod alert;
pub mod codes;
pub mod consider;
pub mod correction;
pub mod decide;
pub mod electrolytes;
pub mod evaluate;
pub mod evidence;
pub mod fact;
pub mod finding;
pub mod ids;
pub mod kidney;
pub mod medicines;
pub mod patient;
pub mod protocol;
pub mod replay;
pub mod routes;
pub mod score;
pub mod units;
pub mod verdict;
pub mod view;
pub mod watch;
pub mod wide;
pub mod words;
