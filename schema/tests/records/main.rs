//! The records as a whole: what is written stays, what was changed is found.

#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic, reason = "a test says what is wrong by failing")]

mod acts;
mod append_only;
mod opening;
mod other_tool;
mod speed;
mod study;
mod tampering;
