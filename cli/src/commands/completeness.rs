//! `completeness`: what was expected of every subject, against what is there.

use revisant_schema::completeness::{self, CellState, Completeness, SubjectLine, SubjectStatus, VisitLine, VisitState};
use revisant_schema::records::View;

use super::Done;
use crate::args::Completeness as Args;
use crate::error::{Exit, Failure};
use crate::report::table::{Left, Right, Table, Whole};
use crate::report::text::count;
use crate::study::{Basis, Context, view};

/// Runs it.
pub fn run(context: &mut Context<'_, '_>, args: &Args) -> Done {
    let records = context.records()?;
    let view = view(&records, &args.then)?;
    let basis = Basis::of(&view)?;
    let grid = judge(&view, &basis, context.day(args.on, basis.zone()))?;
    match context.out.json {
        true => context.out.json(&grid)?,
        false => text(context, &grid)?,
    }
    Ok(if args.strict && grid.subjects.iter().any(wanting) { Exit::Found } else { Exit::Done })
}

/// The grid on a local day.
pub fn judge(view: &View<'_>, basis: &Basis, today: chrono::NaiveDate) -> Result<Completeness, Failure> {
    let counts = view.cells()?;
    let accounted = view.accounted()?;
    Ok(completeness::judge(&basis.plan, &basis.roster, &basis.courses, &counts, &accounted, today))
}

fn wanting(line: &SubjectLine) -> bool {
    line.status == SubjectStatus::Incomplete && line.visits.iter().any(VisitLine::wanting)
}

fn text(context: &mut Context<'_, '_>, grid: &Completeness) -> Result<(), Failure> {
    if grid.subjects.is_empty() {
        return context.out.say("Nobody is enrolled; see `revisant roster import`.");
    }
    let mut table =
        Table::new(&[("subject", Whole), ("status", Whole), ("visits", Right), ("open", Left), ("missing", Left)]);
    for line in &grid.subjects {
        table.row(cells(line));
    }
    context.out.table(&table)?;
    context.out.say(&format!("\n{}", totals(grid)))
}

fn cells(line: &SubjectLine) -> [String; 5] {
    let complete = line.visits.iter().filter(|visit| visit.state == VisitState::Complete).count();
    let open = line.visits.iter().filter(|visit| visit.state == VisitState::Open);
    let open: Vec<String> = open.map(|visit| format!("{}{}", visit.visit, until(visit))).collect();
    let missing = line.visits.iter().filter(|visit| matches!(visit.state, VisitState::Partial | VisitState::Missed));
    let missing: Vec<String> = missing.map(missing_words).collect();
    [
        line.subject.clone(),
        line.status.code().to_owned(),
        format!("{complete} of {}", line.visits.len()),
        open.join(", "),
        missing.join("; "),
    ]
}

fn until(visit: &VisitLine) -> String {
    visit.until.map_or(String::new(), |day| format!(" until {day}"))
}

fn missing_words(visit: &VisitLine) -> String {
    let what = match visit.state {
        VisitState::Missed => "missed".to_owned(),
        _ => missing_cells(&visit.measures),
    };
    let accounted = if visit.accounted { " (accounted for)" } else { "" };
    format!("{}: {what}{accounted}", visit.visit)
}

/// `grip hand=left 1 of 3, gait`
pub fn missing_cells(cells: &[CellState]) -> String {
    let missing = cells.iter().filter(|cell| cell.current < cell.expected);
    let words: Vec<String> = missing.map(cell_words).collect();
    words.join(", ")
}

fn cell_words(cell: &CellState) -> String {
    let condition = cell.condition.to_string();
    let name = if condition.is_empty() { cell.measure.clone() } else { format!("{} {condition}", cell.measure) };
    match (cell.current, cell.expected) {
        (0, _) => name,
        (current, expected) => format!("{name} {current} of {expected}"),
    }
}

fn totals(grid: &Completeness) -> String {
    let parts: Vec<String> = grid.totals.iter().map(|(status, number)| format!("{number} {status}")).collect();
    let enrolment = &grid.enrolment;
    let target = enrolment.target.map_or(String::new(), |target| format!(" of {target} planned"));
    let projected = match (enrolment.projected, enrolment.projected_interval) {
        (Some(projected), Some((low, high))) => {
            format!(" About {projected:.0} are to be expected by the end of enrolment (80 % interval {low} to {high}).")
        }
        _ => String::new(),
    };
    let enrolled = count(u64::from(enrolment.enrolled), "subject");
    format!("{}. {enrolled} enrolled{target}.{projected}", parts.join(", "))
}
