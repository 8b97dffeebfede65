//! `due`: whose window is open, or opens soon.

use chrono::{Days, NaiveDate};
use revisant_schema::completeness::{SubjectLine, SubjectStatus, VisitLine, VisitState};
use serde_json::{Value as Json, json};

use super::Done;
use super::completeness::{judge, missing_cells};
use crate::args::Due;
use crate::error::Exit;
use crate::report::table::{Left, Table, Whole};
use crate::report::when;
use crate::study::{Basis, Context};

/// Runs it.
pub fn run(context: &mut Context<'_, '_>, args: &Due) -> Done {
    let records = context.records()?;
    let view = records.view()?;
    let basis = Basis::of(&view)?;
    let today = context.day(args.on, basis.zone());
    let soon = today.checked_add_days(Days::new(u64::from(args.days))).unwrap_or(NaiveDate::MAX);
    let grid = judge(&view, &basis, today)?;
    let mut due: Vec<(&SubjectLine, &VisitLine)> = grid.subjects.iter().flat_map(|line| due_of(line, soon)).collect();
    due.sort_by_key(|(line, visit)| (visit.until.is_none(), visit.until, visit.from, &line.subject));
    if context.out.json {
        let due: Vec<Json> = due.iter().map(|(line, visit)| due_json(line, visit)).collect();
        context.out.json(&json!({ "on": today, "days": args.days, "due": due }))?;
    } else if due.is_empty() {
        context.out.say(&format!("Nobody is due on {today} or within {} days.", args.days))?;
    } else {
        context.out.table(&table(&due))?;
    }
    Ok(Exit::Done)
}

fn due_of(line: &SubjectLine, soon: NaiveDate) -> impl Iterator<Item = (&SubjectLine, &VisitLine)> {
    let there = line.status != SubjectStatus::Withdrawn;
    line.visits.iter().filter(move |visit| there && is_due(visit, soon)).map(move |visit| (line, visit))
}

fn is_due(visit: &VisitLine, soon: NaiveDate) -> bool {
    !visit.accounted
        && match visit.state {
            VisitState::Open => true,
            VisitState::Ahead => visit.from.is_some_and(|from| from <= soon),
            _ => false,
        }
}

fn due_json(line: &SubjectLine, visit: &VisitLine) -> Json {
    json!({
        "subject": line.subject, "visit": visit.visit, "state": visit.state, "from": visit.from,
        "target": visit.target, "until": visit.until, "missing": missing_cells(&visit.measures)
    })
}

fn table(due: &[(&SubjectLine, &VisitLine)]) -> Table {
    let mut table = Table::new(&[
        ("subject", Whole),
        ("visit", Left),
        ("state", Whole),
        ("window", Left),
        ("planned", Whole),
        ("missing", Left),
    ]);
    for (line, visit) in due {
        table.row([
            line.subject.clone(),
            visit.visit.clone(),
            visit.state.code().to_owned(),
            when::span(visit.from, visit.until),
            visit.target.map_or(String::new(), |day| day.to_string()),
            missing_cells(&visit.measures),
        ]);
    }
    table
}
