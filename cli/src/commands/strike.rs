//! `strike` and `restore`: take readings out of use, legibly, and put them back.

use revisant_schema::reading::ReadingState;
use revisant_schema::records::view::{ReadingRow, SessionRow};
use revisant_schema::records::{ActKind, Cell, Records, View};
use serde_json::json;

use super::Done;
use crate::args::Strike;
use crate::by_hand;
use crate::error::{Exit, Failure};
use crate::report::text::count;
use crate::study::{Basis, Context, reason};

/// Runs `strike`.
pub fn strike(context: &mut Context<'_, '_>, args: &Strike) -> Done {
    let why = reason(&args.why)?;
    let mut records = context.records()?;
    for row in rows(&records.view()?, &args.readings)? {
        by_hand::current(&row)?;
    }
    write(context, &mut records, (ActKind::Strike, "struck"), &args.readings, why)
}

/// Runs `restore`.
pub fn restore(context: &mut Context<'_, '_>, args: &Strike) -> Done {
    let why = reason(&args.why)?;
    let mut records = context.records()?;
    let view = records.view()?;
    let basis = Basis::of(&view)?;
    for row in rows(&view, &args.readings)? {
        restorable(&view, &basis, &row)?;
    }
    write(context, &mut records, (ActKind::Restore, "restored"), &args.readings, why)
}

fn rows(view: &View<'_>, readings: &[i64]) -> Result<Vec<ReadingRow>, Failure> {
    let mut sorted = readings.to_vec();
    sorted.sort_unstable();
    sorted.dedup();
    if sorted.len() < readings.len() {
        return Err(Failure::usage("a reading stands twice in the list"));
    }
    readings.iter().map(|reading| Ok(view.reading(*reading)?)).collect()
}

/// A struck reading whose place nobody has taken since.
fn restorable(view: &View<'_>, basis: &Basis, row: &ReadingRow) -> Result<(), Failure> {
    if row.state != ReadingState::Struck {
        return Err(Failure::refused(format!("reading {} is not struck but {}", row.reading, row.state.code())));
    }
    let SessionRow { session, subject, day, label } = row.session.clone();
    let place = SessionRow { session, subject, day, label };
    let there = by_hand::in_the_cell(view, basis, &row.measure, &row.condition, &place)?;
    match there.iter().find(|other| other.replicate == row.replicate && other.instrument == row.instrument) {
        Some(other) => Err(Failure::refused(format!(
            "reading {} has taken the place of reading {} meanwhile",
            other.reading, row.reading
        ))
        .then("strike that one first")),
        None => Ok(()),
    }
}

fn write(
    context: &mut Context<'_, '_>,
    records: &mut Records,
    (kind, state): (ActKind, &'static str),
    readings: &[i64],
    why: &str,
) -> Done {
    let trail = records.act(kind, &context.doer(Some(why)), |act| {
        act.objects.insert("readings".to_owned(), json!(readings));
        for reading in readings {
            act.add("reading_event", &[Cell::Int(*reading), Cell::Text(state)])?;
        }
        Ok(act.number())
    })?;
    match context.out.json {
        true => context.out.json(&json!({ "trail": trail, "readings": readings }))?,
        false => context
            .out
            .say(&format!("{} {state}, act {trail} on the trail.", count(readings.len() as u64, "reading")))?,
    }
    Ok(Exit::Done)
}
