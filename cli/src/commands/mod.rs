//! The commands, one module each: options, to records, to (analysis), to report.

mod account;
mod amend;
mod analyse;
mod check;
mod collect;
mod completeness;
mod cut;
mod demo;
mod due;
mod enter;
mod holds;
mod new;
mod probe;
mod provenance;
mod readings;
mod rehearse;
mod roster;
mod sample;
mod status;
mod strike;
mod trail;

pub use status::InstrumentLine;

use crate::args::Command;
use crate::error::{Exit, Failure};
use crate::study::Context;

/// What a command gives.
pub type Done = Result<Exit, Failure>;

/// Runs one command.
pub fn run(context: &mut Context<'_, '_>, command: &Command) -> Done {
    match command {
        Command::New(args) => new::run(context, args),
        Command::Probe(args) => probe::run(context, args),
        Command::Check(args) => check::run(context, args),
        Command::Roster(args) => roster::run(context, args),
        Command::Collect(args) => collect::run(context, args),
        Command::Status(args) => status::run(context, args),
        Command::Completeness(args) => completeness::run(context, args),
        Command::Due(args) => due::run(context, args),
        Command::Account(args) => account::run(context, args),
        Command::Holds(args) => holds::run(context, args),
        Command::Readings(args) => readings::run(context, args),
        Command::Enter(args) => enter::run(context, args),
        Command::Amend(args) => amend::run(context, args),
        Command::Strike(args) => strike::strike(context, args),
        Command::Restore(args) => strike::restore(context, args),
        Command::Cut(args) => cut::run(context, args),
        Command::Trail(args) => trail::run(context, args),
        Command::Analyse(args) => analyse::run(context, args),
        Command::Rehearse(args) => rehearse::run(context, args),
        Command::Provenance(args) => provenance::run(context, args),
        Command::Demo(args) => demo::run(context, args),
    }
}
