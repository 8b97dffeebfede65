//! `new`: a plan to begin with.
//!
//! Invariants: what is written passes `check`; a plan that is there is never overwritten; every answer is held against
//! the plan's own rules when it is given; nothing is written unless all is answered.

mod ask;
mod begun;

use std::fs;
use std::io::{IsTerminal, Write};
use std::path::Path;

use revisant_schema::plan::{self, PlanFiles};
use serde_json::json;

use super::Done;
use crate::args::New;
use crate::error::{Exit, Failure, unsound};
use crate::report::text::list;
use crate::study::Context;
use ask::{Asking, Ended};
use begun::Begun;

/// Runs it.
pub fn run(context: &mut Context<'_, '_>, args: &New) -> Done {
    let file = context.study.join(plan::MAIN);
    if file.exists() {
        let shown = file.display().to_string();
        return Err(Failure::refused(format!("there is a plan {shown} already, which is never overwritten")).at(shown));
    }
    let begun = begun(args)?;
    let text = begun.text();
    // A plan at fault is said to be so before anything is written.
    plan::parse(&PlanFiles { main: text.clone(), readers: vec![] }).map_err(|faults| unsound(&faults))?;
    write(context, &file, &text)?;
    let folders: Vec<&str> = begun.instruments.iter().map(|instrument| instrument.folder.as_str()).collect();
    for folder in &folders {
        made(&context.study.join(folder))?;
    }
    if context.out.json {
        context.out.json(&json!({ "plan": file.display().to_string(), "folders": folders }))?;
    } else {
        let shown = file.display();
        let next = match folders.first() {
            Some(folder) => format!(
                "The readers in it are placeholders: put an export into {folder} and run `revisant probe FILE --into \
                 {shown}`, or write them by hand; then run `revisant check`."
            ),
            None => "It has no instruments yet; add them, and run `revisant check`.".to_owned(),
        };
        context.out.say(&format!("Wrote {shown}. {next}"))?;
    }
    Ok(Exit::Done)
}

fn failed(path: &Path) -> impl Fn(std::io::Error) -> Failure + '_ {
    move |error| {
        let shown = path.display().to_string();
        Failure::new("file", format!("{shown} cannot be written ({error})")).at(shown)
    }
}

fn made(folder: &Path) -> Result<(), Failure> {
    fs::create_dir_all(folder).map_err(failed(folder))
}

fn write(context: &Context<'_, '_>, file: &Path, text: &str) -> Result<(), Failure> {
    made(&context.study)?;
    let mut new = fs::OpenOptions::new().write(true).create_new(true).open(file).map_err(failed(file))?;
    new.write_all(text.as_bytes()).and_then(|()| new.sync_all()).map_err(failed(file))
}

/// What the options say, and on a terminal the answers to what they do not say.
fn begun(args: &New) -> Result<Begun, Failure> {
    let (mut begun, wrong) = Begun::from_options(args);
    let terminal = std::io::stdin().is_terminal() && std::io::stderr().is_terminal();
    if !wrong.is_empty() {
        let what = if wrong.len() == 1 { "an option cannot be taken" } else { "some options cannot be taken" };
        let failure = Failure::usage(format!("{what}; nothing was written"));
        return Err(failure.then("`revisant new --help` has an example").with_faults(wrong.join("\n"), json!(wrong)));
    }
    if terminal {
        let (mut input, mut output) = (std::io::stdin().lock(), std::io::stderr());
        Asking { input: &mut input, output: &mut output }.complete(&mut begun).map_err(ended)?;
        return Ok(begun);
    }
    let missing = begun.missing();
    if !missing.is_empty() {
        let are = if missing.len() == 1 { "is" } else { "are" };
        let what = format!("{} {are} not given, and there is no terminal to ask on", list(&missing));
        return Err(Failure::usage(what).then("`revisant new --help` has an example"));
    }
    Ok(begun)
}

fn ended(ended: Ended) -> Failure {
    match ended {
        Ended::NoMore => Failure::usage("the answers ended before all was asked; nothing was written")
            .then("run `revisant new` again"),
        Ended::Broken(error) => {
            Failure::new("terminal", format!("nothing can be asked ({error}); nothing was written"))
        }
    }
}
