//! The service as a whole: real folders, a real store, and the real program where a process matters.

mod folder;
mod house;
mod outbox;
