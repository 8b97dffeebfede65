//! `collect`: read once all exports that wait.

use indicatif::{ProgressBar, ProgressDrawTarget, ProgressStyle};

use super::Done;
use crate::args::Collect;
use crate::error::{Exit, Failure};
use crate::intake::{self, Collected};
use crate::report::text::count;
use crate::study::{Context, reason};

/// Runs it.
pub fn run(context: &mut Context<'_, '_>, args: &Collect) -> Done {
    let why = args.why.as_deref().map(reason).transpose()?;
    let mut records = context.records()?;
    let bar = progress_bar(context, "exports");
    let mut progress = |done: u64, of: u64| {
        bar.set_length(of);
        bar.set_position(done);
    };
    let done = intake::collect(&mut records, &context.study, &context.doer(why), args.adopt, &mut progress);
    bar.finish_and_clear();
    let collected = done?;
    match context.out.json {
        true => context.out.json(&collected)?,
        false => text(context, &collected)?,
    }
    Ok(Exit::Done)
}

/// A bar on a terminal, on standard error so that the result stays clean; elsewhere nothing.
pub fn progress_bar(context: &Context<'_, '_>, what: &str) -> ProgressBar {
    if !context.out.terminal || context.out.quiet || context.out.json {
        return ProgressBar::hidden();
    }
    let bar = ProgressBar::with_draw_target(None, ProgressDrawTarget::stderr());
    if let Ok(style) = ProgressStyle::with_template(&format!("{{bar:30}} {{pos}} of {{len}} {what}, {{elapsed}}")) {
        bar.set_style(style);
    }
    bar
}

/// A count that goes on, where it is not known how far, in the same place.
pub fn counter(context: &Context<'_, '_>, what: &str) -> ProgressBar {
    let bar = progress_bar(context, what);
    if let Ok(style) = ProgressStyle::with_template(&format!("{{spinner}} {{pos}} {what}, {{elapsed}}")) {
        bar.set_style(style);
    }
    bar
}

fn text(context: &mut Context<'_, '_>, collected: &Collected) -> Result<(), Failure> {
    let states = collected.exports.iter().filter_map(|(state, number)| {
        let number = number.as_u64().filter(|number| *number > 0)?;
        Some(format!("{number} {state}"))
    });
    let states: Vec<String> = states.collect();
    let exports = if states.is_empty() { "none".to_owned() } else { states.join(", ") };
    let readings = collected.readings;
    context.out.text(&format!(
        "Exports: {exports}.\n{} filed, {} there already, {} held.",
        count(readings.filed, "reading"),
        readings.already,
        readings.held
    ))?;
    for (instrument, why) in &collected.lost_folders {
        let why = why.as_str().unwrap_or_default();
        context.out.say(&format!("The folder of {instrument} cannot be read: {why}."))?;
    }
    if readings.held > 0 {
        context.out.say("See `revisant holds`.")?;
    }
    Ok(())
}
