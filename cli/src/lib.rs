//! The command line of Revisant: options, to records, to (analysis), to report.
//!
//! Invariants: a command reads its options from [`args`], asks the records through one [`study::Context`], and prints
//! through [`output::Out`] alone; numbers and dates are formatted in [`report`] alone; the intake is reached through
//! [`intake`] alone. Every failure is one [`error::Failure`].

pub mod args;
pub mod by_hand;
pub mod chance;
pub mod commands;
pub mod dataset;
pub mod demo;
pub mod error;
pub mod intake;
pub mod looked;
pub mod method;
pub mod moment;
pub mod output;
pub mod report;
pub mod simulate;
pub mod steps;
pub mod study;
pub mod took_part;

use std::ffi::OsString;
use std::io::IsTerminal;
use std::process::ExitCode;
use std::sync::Arc;

use clap::Parser;
use revisant_schema::world::{RealWorld, World};

use args::Args;
use error::{Exit, Failure};
use output::Out;
use study::Context;

/// Runs one command on the machine's own standard output, error output, clock and files.
pub fn main(args: impl IntoIterator<Item = OsString>) -> ExitCode {
    let stdout = std::io::stdout();
    let terminal = stdout.is_terminal();
    let mut out = Out::new(Box::new(stdout.lock()), Box::new(std::io::stderr()));
    out.terminal = terminal;
    out.colour = terminal && anstream::AutoStream::choice(&stdout) != anstream::ColorChoice::Never;
    out.width = output::terminal_width();
    let exit = run(args, &mut out, Arc::new(RealWorld));
    ExitCode::from(exit.code())
}

/// Runs one command with the given doors; what it prints and its exit status are all that comes of it.
pub fn run(args: impl IntoIterator<Item = OsString>, out: &mut Out<'_>, world: Arc<dyn World>) -> Exit {
    let args: Vec<OsString> = args.into_iter().collect();
    out.json = args.iter().any(|arg| arg == "--json");
    let parsed = match Args::try_parse_from(&args) {
        Ok(parsed) => parsed,
        Err(error) => return usage(out, &error),
    };
    out.quiet = parsed.quiet;
    let mut context = Context::new(parsed.study, out, world);
    let done = commands::run(&mut context, &parsed.command).and_then(|exit| context.out.finish().map(|()| exit));
    match done {
        Ok(exit) => exit,
        Err(failure) => {
            context.out.failure(&failure);
            failure.exit
        }
    }
}

/// What the command line could not be understood as, or the help that was asked for.
fn usage(out: &mut Out<'_>, error: &clap::Error) -> Exit {
    if !error.use_stderr() {
        let text = if out.colour { error.render().ansi().to_string() } else { error.render().to_string() };
        return match out.text(&text).and_then(|()| out.finish()) {
            Ok(()) => Exit::Done,
            Err(failure) => failure.exit,
        };
    }
    let text = error.render().to_string();
    let text = text.trim().trim_start_matches("error: ").to_owned();
    let failure = Failure::usage(text);
    out.failure(&failure);
    failure.exit
}
