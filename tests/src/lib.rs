//! Acceptance tests live in `tests/`; what they share lives here.
