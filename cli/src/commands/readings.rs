//! `readings`: what is filed.

use revisant_schema::reading::ReadingState;
use revisant_schema::records::view::{ReadingFilter, ReadingRow};
use revisant_schema::session::UNSCHEDULED;

use super::Done;
use crate::args::Readings;
use crate::error::{Exit, Failure};
use crate::report::json;
use crate::report::number::plain_or_dash;
use crate::report::table::{Left, Right, Table, Whole};
use crate::report::when;
use crate::study::{Basis, Context, view};

/// Runs it.
pub fn run(context: &mut Context<'_, '_>, args: &Readings) -> Done {
    let records = context.records()?;
    let view = view(&records, &args.then)?;
    let basis = Basis::of(&view)?;
    let filter = filter(&basis, args)?;
    let visit = visit(&basis, args)?;
    let mut rows = view.readings(&filter)?;
    if let Some(visit) = visit {
        rows.retain(|row| basis.place(&row.session).visit == visit);
    }
    match context.out.json {
        true => context.out.json(&rows.iter().map(|row| json::Reading::new(&basis, row)).collect::<Vec<_>>())?,
        false if rows.is_empty() => context.out.say("There are no such readings.")?,
        false => {
            context.out.table(&table(&basis, &rows))?;
            context.out.say(&format!("\n{}", zone_note(&basis)))?;
        }
    }
    Ok(Exit::Done)
}

fn filter(basis: &Basis, args: &Readings) -> Result<ReadingFilter, Failure> {
    let subject = args.subject.as_deref().map(|code| basis.subject(code)).transpose()?;
    let measure = args.measure.as_deref().map(|code| basis.measure(code)).transpose()?;
    Ok(ReadingFilter { subject, measure: measure.map(|measure| measure.code.clone()), ..ReadingFilter::default() })
}

/// The visit asked for: `Some(None)` is unscheduled.
fn visit(basis: &Basis, args: &Readings) -> Result<Option<Option<usize>>, Failure> {
    match args.visit.as_deref() {
        None => Ok(None),
        Some(UNSCHEDULED) => Ok(Some(None)),
        Some(code) => Ok(Some(Some(basis.visit(code)?))),
    }
}

/// The readings as a table; their states stand in it only where one is not in use.
pub fn table(basis: &Basis, rows: &[ReadingRow]) -> Table {
    let states = rows.iter().any(|row| row.state != ReadingState::Current);
    let mut columns = vec![
        ("reading", Right),
        ("subject", Whole),
        ("visit", Left),
        ("measure", Left),
        ("no.", Right),
        ("value", Right),
        ("taken", Left),
    ];
    columns.extend(states.then_some(("state", Whole)));
    let mut table = Table::new(&columns);
    for row in rows {
        let state = states.then(|| row.state.code().to_owned());
        table.row(cells(basis, row).into_iter().chain(state));
    }
    table
}

/// In which zone the table's times are.
pub fn zone_note(basis: &Basis) -> String {
    format!("Times are those of {}.", basis.zone())
}

fn cells(basis: &Basis, row: &ReadingRow) -> [String; 7] {
    let place = basis.place(&row.session);
    let visit = basis.visit_code(place.visit).unwrap_or(UNSCHEDULED);
    let off = if place.off_window { " (off-window)" } else { "" };
    // The levels alone, which tell the condition to whoever knows the plan, so that the table stays narrow.
    let levels: Vec<&str> = row.condition.0.values().map(String::as_str).collect();
    let measure = format!("{} {}", row.measure, levels.join(" "));
    let unit = basis.plan.measure(&row.measure).map_or("", |(_, measure)| measure.unit.as_str());
    [
        row.reading.to_string(),
        row.session.subject.clone(),
        format!("{visit}{off}"),
        measure,
        row.replicate.to_string(),
        format!("{}{} {unit}", row.mark.as_deref().unwrap_or(""), plain_or_dash(row.number)),
        when::taken_here(row.moment, row.session.day, basis.zone()),
    ]
}
