//! The checks of the programs from outside, by what they check.
#![allow(
    clippy::unwrap_used,
    clippy::expect_used,
    clippy::panic,
    reason = "a check that cannot go on says so by failing"
)]

mod agreement;
mod analyses;
mod corpus;
mod cuts;
mod errors;
mod holds;
mod house;
mod instruments;
mod kills;
mod probe;
mod properties;
mod ranks;
mod readings;
mod reference;
mod rehearse;
mod sample;
mod small_study;

use revisant_tests::site::{Programs, Site};

/// The programs as built for this run.
const PROGRAMS: Programs = Programs {
    revisant: env!("CARGO_BIN_EXE_revisant-under-test"),
    revisantd: env!("CARGO_BIN_EXE_revisantd-under-test"),
};

/// A study with this plan and roster, the roster imported.
#[allow(dead_code)]
fn site(plan: &str, roster: &str) -> Site {
    Site::with(PROGRAMS, plan, roster)
}
