//! Bringing a plan into force.
//!
//! Invariants: an unsound plan, and one that would change what filed readings mean or how filed rows are read, never
//! comes into force; the last sound one then stays; each version is kept with its hash.

use std::collections::HashSet;
use std::io::Read;
use std::path::Path;
use std::sync::Arc;

use chrono::{SecondsFormat, Utc};
use revisant_schema::plan::meaning::{self, Change};
use revisant_schema::plan::{Loaded, Plan, load};
use revisant_schema::reading::Condition;
use revisant_schema::records::view::CaptureRow;
use revisant_schema::records::{ActKind, Cell, Doer, Records, RecordsError};
use revisant_schema::roster::Roster;
use revisant_schema::session::Courses;
use revisant_schema::world::World;
use serde_json::json;

use super::collect::file_name;
use super::error::{IntakeError, Result, WouldChange};
use super::file;
use super::place::clock::Local;
use super::place::resolve::{Decided, PlacedValue, Resolved, Resolver, RowOutcome, ValueOutcome, Whereabouts};
use super::read::{self, At, FileFault, Row, Rows};
use super::rules::Rules;

/// Reads the study's plan through the world's doors.
pub fn load_plan(world: &dyn World, study: &Path) -> Result<Loaded> {
    let read = |path: &Path| {
        let mut text = String::new();
        world.open(path)?.read_to_string(&mut text)?;
        Ok(text)
    };
    Ok(load(study, &read)?)
}

/// Sees that the plan on disk is the one in force, and brings it into force when it is another and may be. With
/// `adopt`, one that would read filed rows differently may be too.
pub fn bring_into_force(records: &mut Records, study: &Path, doer: &Doer, adopt: bool) -> Result<Rules> {
    let world = records.world().clone();
    let loaded = load_plan(world.as_ref(), study)?;
    if let Some(rules) = Rules::load(records)? {
        if rules.hash == loaded.files.sha256() {
            return Ok(rules);
        }
        refuse_other_meaning(records, &rules.plan, &loaded.plan)?;
        if !adopt {
            let changes = would_change(records, &rules, &loaded.plan)?;
            if !changes.is_empty() {
                return Err(IntakeError::Differently(changes));
            }
        }
    }
    let hash = from_hex(&loaded.files.sha256());
    let files = serde_json::to_string(&loaded.files).unwrap_or_default();
    records.act(ActKind::Plan, doer, |act| {
        let version = act.add("plan_version", &[Cell::Bytes(&hash), Cell::Text(&files)])?;
        act.objects.insert("version".into(), json!(version));
        act.objects.insert("sha256".into(), json!(loaded.files.sha256()));
        Ok(())
    })?;
    let lost = || RecordsError::Damaged("the plan just recorded is not there".to_owned());
    Ok(Rules::load(records)?.ok_or_else(lost)?)
}

/// Bytes that are written as hexadecimal digits.
pub(super) fn from_hex(digits: &str) -> Vec<u8> {
    let pairs = digits.as_bytes().chunks(2);
    pairs.filter_map(|pair| u8::from_str_radix(std::str::from_utf8(pair).ok()?, 16).ok()).collect()
}

fn refuse_other_meaning(records: &Records, old: &Plan, new: &Plan) -> Result<()> {
    let data = Data::load(records, old)?;
    let touched: Vec<String> = meaning::changes(old, new)
        .into_iter()
        .filter_map(|change| data.touched(new, &change).map(|count| format!("{change} ({count})")))
        .collect();
    if touched.is_empty() { Ok(()) } else { Err(IntakeError::Meaning(touched)) }
}

/// What there are data of.
struct Data {
    /// (measure, condition, readings)
    cells: Vec<(Arc<str>, Arc<Condition>, u32)>,
    /// Visits that have a session, by code.
    visits: HashSet<String>,
    roster: Roster,
}

impl Data {
    fn load(records: &Records, old: &Plan) -> Result<Self> {
        let view = records.view()?;
        let roster = view.roster()?;
        let cells = view.cells()?;
        let courses = Courses::derive(old, &roster, view.facts_of(&cells)?);
        let sessions = courses.by_subject.values().flat_map(|course| &course.sessions);
        let visits = sessions.filter_map(|session| session.visit.map(|visit| old.visits[visit].code.clone())).collect();
        let cells = cells.into_iter().map(|cell| (cell.measure, cell.condition, cell.current)).collect();
        Ok(Self { cells, visits, roster })
    }

    /// What a change touches, in words; `None`: nothing.
    fn touched(&self, new: &Plan, change: &Change) -> Option<String> {
        let readings = |which: &dyn Fn(&str, &Condition) -> bool| {
            let count: u32 = self
                .cells
                .iter()
                .filter(|(code, condition, _)| which(code, condition))
                .map(|(_, _, count)| count)
                .sum();
            (count > 0).then(|| format!("it has {count} readings"))
        };
        let subjects = |count: usize| (count > 0).then(|| format!("it stands in the roster of {count} subjects"));
        let people = self.roster.subjects.values();
        match change {
            Change::MeasureRemoved { measure }
            | Change::UnitChanged { measure, .. }
            | Change::ConditionRemoved { measure, .. }
            | Change::ConditionAdded { measure, .. } => readings(&|code, _| code == measure),
            Change::LevelRemoved { measure, condition, level } => {
                readings(&|code, levels| code == measure && levels.0.get(condition) == Some(level))
            }
            Change::VisitRemoved { visit } => self.visits.contains(visit).then(|| "it has sessions".to_owned()),
            Change::ArmRemoved { arm } => subjects(people.filter(|entry| entry.arm.as_ref() == Some(arm)).count()),
            Change::AttributeLevelRemoved { attribute, level } => {
                subjects(people.filter(|entry| entry.attributes.get(attribute) == Some(level)).count())
            }
            Change::AttributeHasLevels { attribute } => {
                let levels = new.subject.attributes.iter().find(|it| it.code == *attribute);
                let fits = |value: &String| match levels.map(|it| &it.kind) {
                    Some(revisant_schema::plan::AttributeKind::Levels(levels)) => levels.contains(value),
                    _ => true,
                };
                subjects(people.filter_map(|entry| entry.attributes.get(attribute)).filter(|it| !fits(it)).count())
            }
            // These place rows differently, or not at all, which is found by reading the rows again; where day 0 lies
            // is derived and may move; a roster column may be left out of later analyses.
            Change::InstrumentRemoved { .. }
            | Change::SubjectPattern { .. }
            | Change::SubjectNormalise { .. }
            | Change::StudyZone { .. }
            | Change::AnchorMoved { .. }
            | Change::AttributeRemoved { .. } => None,
        }
    }
}

/// The exports whose filed rows a new plan would read or place differently: those of every instrument of which
/// something that decides it has changed are read again, with both plans.
pub fn would_change(records: &Records, rules: &Rules, new: &Plan) -> Result<Vec<WouldChange>> {
    let mut changes = Vec::new();
    let captures = records.view()?.captures()?;
    for (old_at, old_instrument) in rules.plan.instruments.iter().enumerate() {
        let Some((new_at, new_instrument)) = new.instrument(&old_instrument.code) else { continue };
        let same =
            meaning::placing_sections(&rules.plan, old_instrument) == meaning::placing_sections(new, new_instrument);
        if same {
            continue;
        }
        let own = captures.iter().filter(|capture| capture.instrument == old_instrument.code);
        for capture in own.filter(|capture| capture.repeat_of.is_none() && capture.lines.is_some()) {
            let lines = differing_lines(records, rules, (old_at, &rules.plan), (new_at, new), capture)?;
            if let Some((_, example)) = lines.first() {
                changes.push(WouldChange {
                    export: capture.path.clone(),
                    capture: capture.capture,
                    lines: lines.len() as u64,
                    example: example.clone(),
                });
            }
        }
    }
    Ok(changes)
}

/// The place that stands for the export as a whole.
const FIRST: At = At { line: 1, from: 0 };

/// An instrument in a plan.
type InPlan<'p> = (usize, &'p Plan);

/// The lines of a capture that two plans read differently where the old one filed something, each with a word on how.
pub fn differing_lines(
    records: &Records,
    rules: &Rules,
    old: InPlan<'_>,
    new: InPlan<'_>,
    capture: &CaptureRow,
) -> Result<Vec<(At, String)>> {
    let source = records.raw_source(&capture.sha256)?;
    let name = file_name(&capture.path);
    let folder = below(old.1, old.0, &capture.path);
    let whereabouts = Whereabouts { file_name: &name, folder: &folder };
    let mut before = match Side::open(old, &rules.roster, records.now(), &source, whereabouts) {
        Ok(side) => side,
        // What the old plan could not read it has not filed.
        Err(_) => return Ok(vec![]),
    };
    let after = Side::open(new, &rules.roster, records.now(), &source, whereabouts);
    let mut after = match after {
        Ok(side) => side,
        Err(fault) => return Ok(vec![(FIRST, format!("the new plan cannot read it: {fault}"))]),
    };
    match compare(&mut before, &mut after) {
        Ok(lines) => Ok(lines),
        Err(fault) => Ok(vec![(FIRST, format!("the new plan cannot read it: {fault}"))]),
    }
}

/// The folder of an export below its instrument's.
pub fn below(plan: &Plan, instrument: usize, export: &str) -> String {
    let folder = Path::new(export).parent().unwrap_or(Path::new(""));
    let root = plan.instruments.get(instrument).map(|instrument| instrument.folder.as_path());
    let below = root.and_then(|root| folder.strip_prefix(root).ok()).unwrap_or(Path::new(""));
    below.to_string_lossy().into_owned()
}

struct Side<'s> {
    plan: &'s Plan,
    resolver: Resolver<'s>,
    rows: Box<dyn Rows + 's>,
    row: Row,
    more: bool,
}

impl<'s> Side<'s> {
    fn open(
        (at, plan): InPlan<'s>,
        roster: &'s Roster,
        now: chrono::DateTime<Utc>,
        source: &'s dyn read::Bytes,
        whereabouts: Whereabouts<'_>,
    ) -> std::result::Result<Self, FileFault> {
        let instrument = &plan.instruments[at];
        let wanted = read::wanted(&instrument.reader);
        let mut resolver =
            Resolver::new(plan, instrument, roster, now, &wanted, whereabouts).map_err(FileFault::Layout)?;
        settle_doubled(&mut resolver, instrument, source)?;
        let rows = read::open(&instrument.reader, source)?;
        let mut side = Self { plan, resolver, rows, row: Row::default(), more: true };
        side.step()?;
        Ok(side)
    }

    fn step(&mut self) -> std::result::Result<(), FileFault> {
        if self.more {
            self.more = self.rows.next_row(&mut self.row)?;
        }
        Ok(())
    }

    fn at(&self) -> Option<At> {
        self.more.then(|| self.row.at())
    }

    /// What the row comes to: each value as a text that says everything about it, or nothing where it is held.
    fn values(&self) -> Option<Vec<Option<String>>> {
        match self.resolver.resolve(&self.row, self.rows.as_ref(), &Decided::default()) {
            RowOutcome::NoValue => Some(vec![]),
            RowOutcome::Held(_) => None,
            RowOutcome::Ready(row) if row.outside.is_some() => None,
            RowOutcome::Ready(row) => Some(
                row.values
                    .iter()
                    .filter(|value| !matches!(value, ValueOutcome::Missing))
                    .map(|value| match value {
                        ValueOutcome::Number(value) => Some(self.said(&row, value)),
                        ValueOutcome::Missing | ValueOutcome::Held(_) => None,
                    })
                    .collect(),
            ),
        }
    }

    /// Everything about one value, in words: two that read alike are filed alike.
    fn said(&self, row: &Resolved, value: &PlacedValue) -> String {
        let measure = &self.plan.measures[value.measure];
        let condition = value.condition.to_string();
        let condition = if condition.is_empty() { condition } else { format!(" {condition}") };
        let moment =
            row.moment.map_or(String::new(), |at| format!(", {}", at.to_rfc3339_opts(SecondsFormat::AutoSi, true)));
        let visit = row.label.as_deref().map_or("visit by its date".to_owned(), |label| format!("visit {label}"));
        let replicate = value.replicate.or(row.replicate);
        let replicate = replicate.map_or(String::new(), |number| format!(", replicate {number}"));
        format!(
            "{}{condition} of {} on {}{moment}, {visit}{replicate}: {}{} {}",
            measure.code,
            row.subject,
            row.day,
            value.mark.unwrap_or_default(),
            value.number,
            measure.unit
        )
    }
}

/// Settles the local times that exist twice, if the export has one.
pub fn settle_doubled(
    resolver: &mut Resolver<'_>,
    instrument: &revisant_schema::plan::Instrument,
    source: &dyn read::Bytes,
) -> std::result::Result<(), FileFault> {
    if has_doubled(resolver, instrument, source)? {
        resolver.settled = file::settle_folds(resolver, instrument, source)?;
    }
    Ok(())
}

fn has_doubled(
    resolver: &Resolver<'_>,
    instrument: &revisant_schema::plan::Instrument,
    source: &dyn read::Bytes,
) -> std::result::Result<bool, FileFault> {
    let mut rows = read::open(&instrument.reader, source)?;
    let mut row = Row::default();
    while rows.next_row(&mut row)? {
        if matches!(resolver.local(&row, rows.as_ref()), Some(Local::Twice(..))) {
            return Ok(true);
        }
    }
    Ok(false)
}

fn compare(before: &mut Side<'_>, after: &mut Side<'_>) -> std::result::Result<Vec<(At, String)>, FileFault> {
    let mut lines = Vec::new();
    loop {
        let (old_at, new_at) = (before.at(), after.at());
        // No row (`None`) is before every row, so the end of one side must not be taken for the first.
        let Some(at) = old_at.into_iter().chain(new_at).min() else { break };
        let old = (old_at == Some(at)).then(|| before.values());
        let new = (new_at == Some(at)).then(|| after.values());
        if let Some(how) = difference(old, new) {
            lines.push((at, format!("line {}: {how}", at.line)));
        }
        if old_at == Some(at) {
            before.step()?;
        }
        if new_at == Some(at) {
            after.step()?;
        }
    }
    Ok(lines)
}

type RowValues = Option<Vec<Option<String>>>;

/// How a row comes out differently, if the old plan filed something of it, or the new one would file more of it.
fn difference(old: Option<RowValues>, new: Option<RowValues>) -> Option<String> {
    let old = match old {
        // Held as a whole: it is tried again by itself.
        Some(None) => return None,
        Some(Some(values)) => values,
        None => vec![],
    };
    // Of a value that was held nothing was filed, and it is tried again by itself.
    let held = old.iter().filter(|value| value.is_none()).count();
    let old: Vec<String> = old.into_iter().flatten().collect();
    let mut new: Vec<String> = match new {
        Some(Some(values)) => values.into_iter().flatten().collect(),
        Some(None) | None => vec![],
    };
    let mut lost = Vec::new();
    for value in old {
        match new.iter().position(|same| *same == value) {
            Some(at) => drop(new.remove(at)),
            None => lost.push(value),
        }
    }
    match (lost.first(), new.first()) {
        (Some(was), Some(is)) => Some(format!("{was} would become {is}")),
        (Some(was), None) => Some(format!("{was} would no longer be filed")),
        (None, Some(is)) if new.len() > held => Some(format!("{is} would be filed besides")),
        _ => None,
    }
}

/// For callers that only want the rules of now.
pub fn in_force(records: &Records) -> Result<Rules> {
    let none = || RecordsError::Refused("there is no plan in force yet".to_owned());
    Ok(Rules::load(records)?.ok_or_else(none)?)
}
