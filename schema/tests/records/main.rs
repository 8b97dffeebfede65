//! The records as a whole: what is written stays, what was changed is found.

#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic, reason = "a test says what is wrong by failing")]

mod acts;
mod opening;
mod speed;
mod study;
