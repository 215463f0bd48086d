//! The shipped examples and the decider, from outside.

mod config;
mod values;
