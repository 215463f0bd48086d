//! An invented ward.
