//! An invented ward in an invented hospital: its story, its people, and tracings of known truth.
//!
//! Everything here is made up. It is for showing the service at work and for testing it; nothing of it is a model of
//! any person or illness.

mod random;
pub mod story;
pub mod synth;
pub mod write;

pub use random::Random;
