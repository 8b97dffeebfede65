//! `holds`: what waits for a person, and deciding it.

use revisant_schema::records::view::HoldRow;

use super::Done;
use crate::args::{Holds, HoldsAct, HoldsList};
use crate::error::{Exit, Failure};
use crate::report::json;
use crate::report::table::{Left, Right, Table};
use crate::report::text::clip;
use crate::study::{Context, view};

/// Runs it.
pub fn run(context: &mut Context<'_, '_>, args: &Holds) -> Done {
    match &args.act {
        None => list(context, &args.list),
        Some(HoldsAct::List(args)) => list(context, args),
        Some(_) => Err(Failure::not_yet("this is not in this build")),
    }
}

fn list(context: &mut Context<'_, '_>, args: &HoldsList) -> Done {
    let records = context.records()?;
    let holds = view(&records, &args.then)?.holds(!args.all)?;
    match context.out.json {
        true => context.out.json(&holds.iter().map(json::Hold::new).collect::<Vec<_>>())?,
        false if holds.is_empty() => context.out.say("Nothing is held.")?,
        false => {
            context.out.text(&table(&holds, args.all).render(context.out.width))?;
            context.out.say("\n`revisant holds show N` shows one, with the commands that answer it.")?;
        }
    }
    Ok(Exit::Done)
}

fn table(holds: &[HoldRow], all: bool) -> Table {
    let mut columns = vec![("hold", Right), ("reason", Left), ("where", Left), ("as exported", Left)];
    if all {
        columns.push(("state", Left));
    }
    let mut table = Table::new(&columns);
    for hold in holds {
        let place = hold.place().map_or(String::new(), |place| format!(", {place}"));
        let row = hold.row.as_deref().unwrap_or("(removed)");
        let row = if hold.reason.of_file() { hold.wrong.as_str() } else { row };
        let mut cells = vec![
            hold.hold.to_string(),
            hold.reason.code().to_owned(),
            format!("{}{place}", hold.export),
            clip(row, 120),
        ];
        cells.extend(all.then(|| hold.state.code().to_owned()));
        table.row(cells);
    }
    table
}
