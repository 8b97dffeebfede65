//! `demo`: an invented study on a fresh copy, with the real service at work.

use super::Done;
use crate::args::Demo;
use crate::error::Failure;
use crate::study::Context;

/// Runs it.
pub fn run(_context: &mut Context<'_, '_>, _args: &Demo) -> Done {
    Err(Failure::not_yet("the demo is not in this build"))
}
