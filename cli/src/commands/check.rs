//! `check`: what is wrong with the plan, and what a changed plan would change.

use revisant_schema::plan::{Fault, Plan};
use revisant_schema::records::Records;
use serde_json::json;

use super::{Done, sample};
use crate::args::Check;
use crate::error::{Exit, Failure};
use crate::intake;
use crate::report::text::count;
use crate::study::Context;

/// Runs it.
pub fn run(context: &mut Context<'_, '_>, args: &Check) -> Done {
    if args.schema {
        context.out.json(&revisant_schema::plan::schema())?;
        return Ok(Exit::Done);
    }
    let study = context.folder()?.to_path_buf();
    let loaded = intake::load(context.world.as_ref(), &study)?;
    if let Some(file) = &args.sample {
        return sample::run(context, &loaded, file, args.instrument.as_deref());
    }
    let would_change = match Records::folder_of(&study).join("records.sqlite").exists() {
        true => intake::would_change(&context.records()?, &loaded.plan)?,
        false => vec![],
    };
    if context.out.json {
        context.out.json(&json!({
            "sound": true, "sha256": loaded.files.sha256(), "warnings": loaded.warnings, "would_change": would_change
        }))?;
    } else {
        text(context, &loaded.plan, &loaded.warnings, &would_change)?;
    }
    Ok(if would_change.is_empty() { Exit::Done } else { Exit::Found })
}

fn text(
    context: &mut Context<'_, '_>,
    plan: &Plan,
    warnings: &[Fault],
    would_change: &[String],
) -> Result<(), Failure> {
    for fault in warnings {
        context.out.text(&fault.to_string())?;
    }
    let parts = [
        count(plan.measures.len() as u64, "measure"),
        count(plan.visits.len() as u64, "visit"),
        count(plan.instruments.len() as u64, "instrument"),
        format!("{} analys{}", plan.analyses.len(), if plan.analyses.len() == 1 { "is" } else { "es" }),
    ];
    let warned =
        if warnings.is_empty() { String::new() } else { format!("; {}", count(warnings.len() as u64, "warning")) };
    context.out.text(&format!("The plan of {} is sound: {}{warned}.", plan.study.code, parts.join(", ")))?;
    if would_change.is_empty() {
        return Ok(());
    }
    context.out.text("\nIt would change what is filed:")?;
    for line in would_change {
        context.out.text(&format!("- {line}"))?;
    }
    context.out.say("\n`revisant collect --adopt --why TEXT` reads the exports again under this plan.")
}
