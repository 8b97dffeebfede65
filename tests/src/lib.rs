//! Revisant from outside: a study folder under test, the judge of what must be filed, and seeded chance.
//!
//! Invariants: a check reaches the programs by their command line and files alone, and goes on the same way every time:
//! chance is seeded, and nothing depends on how fast the machine is.
#![allow(
    clippy::unwrap_used,
    clippy::expect_used,
    clippy::panic,
    reason = "a check that cannot go on says so by failing"
)]

pub mod bench;
pub mod chance;
pub mod corpus;
pub mod judge;
pub mod reading;
pub mod reference;
pub mod site;
pub mod small;
pub mod snapshot;
