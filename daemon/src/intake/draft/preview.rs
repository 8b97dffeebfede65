//! A look ahead: the first rows as the draft would file them.
//!
//! Invariant: of a draft without gaps, what is shown comes from the very steps that file a reading; of one with gaps,
//! what is not known yet is shown as `?`.

use revisant_schema::plan::{Instrument, Plan, PlanFiles, Stamp, parse};
use revisant_schema::roster::{Enrolled, Roster};
use serde::Serialize;

use super::grid::Grid;
use super::into;
use super::place::{Against, Spot};
use super::{Asked, Sample};
use crate::intake::place::resolve::{Decided, Held, Resolved, Resolver, RowOutcome, ValueOutcome, Whereabouts};
use crate::intake::read::{self, Row};

/// How many rows are shown.
const SHOWN: usize = 8;
/// What is not known yet.
const OPEN: &str = "?";

/// One value as it would be filed, or why it would not.
#[derive(Debug, Clone, Default, PartialEq, Eq, Serialize)]
pub struct PreviewRow {
    /// The sample, and the line or cell.
    pub place: String,
    /// Whose.
    pub subject: String,
    /// The visit's label; empty when the date decides.
    pub visit: String,
    /// The moment as written.
    pub taken_at: String,
    /// The measure's code.
    pub measure: String,
    /// The condition.
    pub condition: String,
    /// The replicate's number, where one is said.
    pub replicate: String,
    /// The number with its unit; as exported when it is held.
    pub value: String,
    /// Why it would be held; empty when it would be filed.
    pub held: String,
}

/// Where the draft takes its texts from.
pub struct Spots<'a> {
    /// The subject.
    pub subject: &'a Spot,
    /// The moment.
    pub taken_at: &'a Spot,
    /// The visit's column.
    pub visit: Option<usize>,
    /// The values' columns, with the measure where it is fixed.
    pub values: Vec<(usize, Option<usize>)>,
}

/// The first rows.
pub fn preview(asked: &Asked<'_>, toml: &str, whole: bool, grid: &Grid, spots: &Spots<'_>) -> Vec<PreviewRow> {
    let sound = asked.plan.filter(|_| whole).zip(asked.plan_text).and_then(|(_, text)| sound(text, toml, asked.code));
    match sound {
        Some((plan, at)) => {
            let everybody = everybody(asked, grid, spots);
            plan.instruments.get(at).map_or(vec![], |instrument| as_filed(asked, &plan, instrument, &everybody))
        }
        None => as_read(asked, grid, spots),
    }
}

/// The plan with the draft in it, when that is sound.
fn sound(text: &str, toml: &str, code: &str) -> Option<(Plan, usize)> {
    let main = into::alone(text, toml)?;
    let (plan, _) = parse(&PlanFiles { main, readers: vec![] }).ok()?;
    let at = plan.instrument(code)?.0;
    Some((plan, at))
}

fn as_filed(asked: &Asked<'_>, plan: &Plan, instrument: &Instrument, everybody: &Roster) -> Vec<PreviewRow> {
    let roster = asked.roster.filter(|roster| !roster.subjects.is_empty()).unwrap_or(everybody);
    let mut shown = vec![];
    for sample in asked.samples {
        if shown.len() >= SHOWN {
            break;
        }
        let _ = sample_rows(asked, plan, instrument, roster, sample, &mut shown);
    }
    shown.truncate(SHOWN);
    shown
}

/// Without a roster, whoever fits the pattern is taken to be on it.
fn everybody(asked: &Asked<'_>, grid: &Grid, spots: &Spots<'_>) -> Roster {
    let against = Against { plan: asked.plan, roster: None, now: asked.now };
    let codes = grid.rows.iter().filter_map(|row| against.code(&spots.subject.text(row)));
    Roster { subjects: codes.map(|code| (code, Enrolled::default())).collect() }
}

fn resolver<'p>(
    asked: &Asked<'_>,
    plan: &'p Plan,
    instrument: &'p Instrument,
    roster: &'p Roster,
    sample: &'p Sample,
) -> Option<Resolver<'p>> {
    let wanted = read::wanted(&instrument.reader);
    let whereabouts = Whereabouts { file_name: &sample.file_name, folder: &sample.folder };
    Resolver::new(plan, instrument, roster, asked.now, &wanted, whereabouts).ok()
}

fn sample_rows(
    asked: &Asked<'_>,
    plan: &Plan,
    instrument: &Instrument,
    roster: &Roster,
    sample: &Sample,
    shown: &mut Vec<PreviewRow>,
) -> Option<()> {
    let resolver = resolver(asked, plan, instrument, roster, sample)?;
    let mut rows = read::open(&instrument.reader, &sample.bytes).ok()?;
    let mut row = Row::default();
    while shown.len() < SHOWN && rows.next_row(&mut row).ok()? {
        let cell = rows.cell_name(row.line, 0).unwrap_or_else(|| format!("line {}", row.line));
        let place = format!("{} {cell}", sample.file_name);
        match resolver.resolve(&row, rows.as_ref(), &Decided::default()) {
            RowOutcome::NoValue => {}
            RowOutcome::Held(held) => shown.push(held_row(place, &held, &row)),
            RowOutcome::Ready(resolved) => shown.extend(values_of(plan, instrument, &place, &resolved)),
        }
    }
    Some(())
}

fn held_row(place: String, held: &Held, row: &Row) -> PreviewRow {
    let held = format!("{}: {}", held.reason.code(), held.wrong);
    PreviewRow { place, value: super::lines::clip(&row.raw), held, ..PreviewRow::default() }
}

/// The moment as written; a workbook's number of the day says nothing to people, so that as the moment it stands for.
fn taken(plan: &Plan, instrument: &Instrument, resolved: &Resolved) -> String {
    match (&instrument.reader.stamp, resolved.moment) {
        (Stamp::Serial, Some(moment)) => {
            moment.with_timezone(&plan.study.time_zone).format("%Y-%m-%d %H:%M").to_string()
        }
        (Stamp::Serial, None) => resolved.day.to_string(),
        _ => resolved.written.clone(),
    }
}

fn values_of(plan: &Plan, instrument: &Instrument, place: &str, resolved: &Resolved) -> Vec<PreviewRow> {
    let base = PreviewRow {
        place: place.to_owned(),
        subject: resolved.subject.clone(),
        visit: resolved.label.clone().unwrap_or_default(),
        taken_at: taken(plan, instrument, resolved),
        replicate: resolved.replicate.map(|number| number.to_string()).unwrap_or_default(),
        ..PreviewRow::default()
    };
    let row = |value: &ValueOutcome| match value {
        ValueOutcome::Missing => None,
        ValueOutcome::Held(held) => {
            let held = format!("{}: {}", held.reason.code(), held.wrong);
            Some(PreviewRow { held, ..base.clone() })
        }
        ValueOutcome::Number(number) => {
            let measure = plan.measures.get(number.measure)?;
            let value = format!("{}{} {}", number.mark.unwrap_or_default(), number.number, measure.unit);
            let replicate = number.replicate.map(|it| it.to_string()).unwrap_or_else(|| base.replicate.clone());
            let (measure, condition) = (measure.code.clone(), number.condition.clone());
            Some(PreviewRow { measure, condition, replicate, value, ..base.clone() })
        }
    };
    resolved.values.iter().filter_map(row).collect()
}

/// What the rows hold, where the draft still has gaps.
fn as_read(asked: &Asked<'_>, grid: &Grid, spots: &Spots<'_>) -> Vec<PreviewRow> {
    let open = |text: String| if text.is_empty() { OPEN.to_owned() } else { text };
    let mut shown = vec![];
    for row in &grid.rows {
        let name = asked.samples.get(row.sample).map_or("", |it| it.file_name.as_str());
        for (column, measure) in &spots.values {
            let value = row.cells.get(*column).map_or("", |cell| cell.text.as_str());
            if value.is_empty() {
                continue;
            }
            let measure = measure.and_then(|at| asked.plan.and_then(|plan| plan.measures.get(at)));
            shown.push(PreviewRow {
                place: format!("{name} line {}", row.line),
                subject: open(spots.subject.text(row)),
                visit: spots.visit.and_then(|at| row.cells.get(at)).map_or(String::new(), |cell| cell.text.clone()),
                taken_at: open(spots.taken_at.text(row)),
                measure: measure.map_or(OPEN.to_owned(), |it| it.code.clone()),
                value: value.to_owned(),
                ..PreviewRow::default()
            });
        }
        if shown.len() >= SHOWN {
            break;
        }
    }
    shown.truncate(SHOWN);
    shown
}
