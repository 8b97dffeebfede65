//! The roster: who is enrolled, as a history of cells.
//!
//! Invariants: importing again never takes a subject away; a cell that changes or is blanked owes a reason; a roster
//! with faults changes nothing.

use std::collections::{BTreeMap, HashMap};

use chrono::NaiveDate;
use thiserror::Error;

use crate::plan::{Allocation, AttributeKind, Plan, Tidy};
use crate::records::{Act, Cell, Result as RecordsResult};

/// One subject on the roster.
#[derive(Debug, Clone, Default, PartialEq)]
pub struct Enrolled {
    /// Day of enrolment.
    pub enrolled: Option<NaiveDate>,
    /// Day of withdrawal.
    pub withdrawn: Option<NaiveDate>,
    /// The arm, where the allocation is open.
    pub arm: Option<String>,
    /// Attributes, as written.
    pub attributes: BTreeMap<String, String>,
    /// Data are to be removed.
    pub data: Option<String>,
}

/// The roster at one moment: subjects in the order of their codes.
#[derive(Debug, Clone, Default, PartialEq)]
pub struct Roster {
    /// By code.
    pub subjects: BTreeMap<String, Enrolled>,
}

/// One cell of the roster that an import would change.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct CellChange {
    /// Whose.
    pub subject: String,
    /// `enrolled`, `withdrawn`, `arm`, or an attribute with a leading dot.
    pub field: String,
    /// What stood there.
    pub before: Option<String>,
    /// What will.
    pub after: Option<String>,
}

impl CellChange {
    /// Whether a person's reason is owed: something that stood there changes.
    pub fn owes_reason(&self) -> bool {
        self.before.is_some()
    }
}

/// A fault of a roster file.
#[derive(Debug, Clone, PartialEq, Eq, Error)]
#[error("line {line}: {wrong}")]
pub struct RosterFault {
    /// Physical line, from 1.
    pub line: u64,
    /// What is wrong, and what would be right.
    pub wrong: String,
}

impl Roster {
    /// Adds what one cell says.
    pub fn apply(&mut self, subject: &str, field: &str, value: Option<&str>) {
        let entry = self.subjects.entry(subject.to_owned()).or_default();
        let day = value.and_then(|text| text.parse().ok());
        match field {
            "enrolled" => entry.enrolled = day,
            "withdrawn" => entry.withdrawn = day,
            "arm" => entry.arm = value.map(str::to_owned),
            "data" => entry.data = value.map(str::to_owned),
            attribute => {
                let code = attribute.trim_start_matches('.').to_owned();
                match value {
                    Some(value) => entry.attributes.insert(code, value.to_owned()),
                    None => entry.attributes.remove(&code),
                };
            }
        }
    }

    fn cell(&self, subject: &str, field: &str) -> Option<String> {
        let entry = self.subjects.get(subject)?;
        match field {
            "enrolled" => entry.enrolled.map(|day| day.to_string()),
            "withdrawn" => entry.withdrawn.map(|day| day.to_string()),
            "arm" => entry.arm.clone(),
            attribute => entry.attributes.get(attribute.trim_start_matches('.')).cloned(),
        }
    }

    /// What importing `text` would change, or every fault of it at once.
    pub fn changes(&self, plan: &Plan, text: &str) -> Result<Vec<CellChange>, Vec<RosterFault>> {
        let table = Table::read(text).map_err(|fault| vec![fault])?;
        let mut faults = Vec::new();
        let fields: Vec<Option<String>> = table.header.iter().map(|name| field_of(plan, name, &mut faults)).collect();
        if !table.header.iter().any(|name| name == "subject") {
            faults.push(RosterFault { line: 1, wrong: "there is no column \"subject\"".to_owned() });
        }
        if !table.header.iter().any(|name| name == "enrolled") {
            faults.push(RosterFault { line: 1, wrong: "there is no column \"enrolled\"".to_owned() });
        }
        if !faults.is_empty() {
            return Err(faults);
        }
        let mut seen: HashMap<String, u64> = HashMap::new();
        let mut changes = Vec::new();
        for (line, cells) in &table.rows {
            self.row_changes(plan, *line, &fields, cells, &mut seen, &mut changes, &mut faults);
        }
        if faults.is_empty() { Ok(changes) } else { Err(faults) }
    }

    #[expect(clippy::too_many_arguments, reason = "one row's share of `changes`, with what that gathers")]
    fn row_changes(
        &self,
        plan: &Plan,
        line: u64,
        fields: &[Option<String>],
        cells: &[String],
        seen: &mut HashMap<String, u64>,
        changes: &mut Vec<CellChange>,
        faults: &mut Vec<RosterFault>,
    ) {
        let mut fault = |wrong: String| faults.push(RosterFault { line, wrong });
        let at = |name: &str| fields.iter().position(|field| field.as_deref() == Some(name));
        let text = |index: Option<usize>| index.and_then(|at| cells.get(at)).map_or("", |cell| cell.trim());
        let subject = tidy(text(at("subject")), &plan.subject.normalise);
        if cells.len() != fields.len() {
            fault(format!("it has {} cells where the header has {}", cells.len(), fields.len()));
            return;
        }
        if let Err(wrong) = check_subject(plan, &subject) {
            fault(wrong);
            return;
        }
        if let Some(first) = seen.insert(subject.clone(), line) {
            fault(format!("subject {subject} stands on line {first} already; a subject has one line"));
            return;
        }
        let new = !self.subjects.contains_key(&subject);
        if new && text(at("enrolled")).is_empty() {
            fault(format!("{subject} has no day of enrolment; write it as 2026-02-28"));
        }
        for (field, cell) in fields.iter().zip(cells) {
            let Some(field) = field.as_deref().filter(|field| *field != "subject") else { continue };
            let cell = cell.trim();
            if let Err(wrong) = check_cell(plan, field, cell) {
                fault(format!("{subject}: {wrong}"));
                continue;
            }
            let after = (!cell.is_empty()).then(|| cell.to_owned());
            let before = self.cell(&subject, field);
            if before != after {
                changes.push(CellChange { subject: subject.clone(), field: field.to_owned(), before, after });
            }
        }
        let day = |name| text(at(name)).parse::<NaiveDate>().ok();
        if let (Some(enrolled), Some(withdrawn)) = (day("enrolled"), day("withdrawn"))
            && withdrawn < enrolled
        {
            fault(format!("{subject} was withdrawn on {withdrawn}, before the enrolment on {enrolled}"));
        }
    }
}

fn check_subject(plan: &Plan, subject: &str) -> Result<(), String> {
    if subject.is_empty() {
        return Err("it names no subject".to_owned());
    }
    if !plan.subject.pattern.is_match(subject) {
        return Err(format!("\"{subject}\" does not fit the plan's pattern '{}'", plan.subject.pattern_text));
    }
    Ok(())
}

fn field_of(plan: &Plan, name: &str, faults: &mut Vec<RosterFault>) -> Option<String> {
    let attribute = plan.subject.attributes.iter().any(|attribute| attribute.code == name);
    match name {
        "subject" | "enrolled" | "withdrawn" => Some(name.to_owned()),
        _ if attribute => Some(format!(".{name}")),
        "arm" if plan.study.allocation == Allocation::Open && !plan.arms.is_empty() => Some(name.to_owned()),
        "arm" if !plan.arms.is_empty() => {
            let wrong = "the column \"arm\" is refused: the plan's allocation is sealed, so nobody may see who is in \
                         which arm; take the column out, or say allocation = \"open\" under [study]";
            faults.push(RosterFault { line: 1, wrong: wrong.to_owned() });
            None
        }
        _ => {
            let known: Vec<&str> = plan.subject.attributes.iter().map(|attribute| attribute.code.as_str()).collect();
            let known = ["subject", "enrolled", "withdrawn"].into_iter().chain(known).collect::<Vec<_>>().join(", ");
            faults.push(RosterFault { line: 1, wrong: format!("the column \"{name}\" is unknown; known are {known}") });
            None
        }
    }
}

fn check_cell(plan: &Plan, field: &str, cell: &str) -> Result<(), String> {
    if cell.is_empty() {
        return if field == "enrolled" { Err("the day of enrolment cannot be blank".into()) } else { Ok(()) };
    }
    match field {
        "enrolled" | "withdrawn" => cell
            .parse::<NaiveDate>()
            .map(|_| ())
            .map_err(|_| format!("{field}: \"{cell}\" is no date; write it as 2026-02-28")),
        "arm" => match plan.arms.iter().any(|arm| arm.code == cell) {
            true => Ok(()),
            false => Err(format!("arm \"{cell}\" is not in the plan")),
        },
        attribute => check_attribute(plan, attribute.trim_start_matches('.'), cell),
    }
}

fn check_attribute(plan: &Plan, code: &str, cell: &str) -> Result<(), String> {
    let attribute = plan.subject.attributes.iter().find(|attribute| attribute.code == code);
    match attribute.map(|attribute| &attribute.kind) {
        Some(AttributeKind::Number) => match cell.parse::<f64>() {
            Ok(number) if number.is_finite() => Ok(()),
            _ => Err(format!("{code}: \"{cell}\" is no number")),
        },
        Some(AttributeKind::Levels(levels)) if !levels.iter().any(|level| level == cell) => {
            Err(format!("{code}: \"{cell}\" is none of {}", levels.join(", ")))
        }
        _ => Ok(()),
    }
}

/// A subject's code, tidied as the plan says.
pub fn tidy(code: &str, steps: &[Tidy]) -> String {
    steps.iter().fold(code.to_owned(), |code, step| match step {
        Tidy::Trim => code.trim().to_owned(),
        Tidy::Upper => code.to_uppercase(),
        Tidy::Dash => code.replace(['_', ' '], "-"),
    })
}

/// Writes the changes of an import, as part of an act.
pub fn write(act: &mut Act<'_>, changes: &[CellChange]) -> RecordsResult<()> {
    for change in changes {
        let value = Cell::text_or_null(change.after.as_deref());
        act.add("roster_event", &[Cell::Subject(&change.subject), Cell::Text(&change.field), value])?;
    }
    Ok(())
}

/// A CSV with a header, its rows with their lines.
struct Table {
    header: Vec<String>,
    rows: Vec<(u64, Vec<String>)>,
}

impl Table {
    fn read(text: &str) -> Result<Self, RosterFault> {
        let text = text.strip_prefix('\u{feff}').unwrap_or(text);
        let mut reader = csv::ReaderBuilder::new().has_headers(false).flexible(true).from_reader(text.as_bytes());
        let mut rows = Vec::new();
        for record in reader.records() {
            let record = record.map_err(|error| {
                let line = error.position().map_or(1, csv::Position::line);
                RosterFault { line, wrong: format!("it cannot be read as CSV: {error}") }
            })?;
            let line = record.position().map_or(1, csv::Position::line);
            let cells: Vec<String> = record.iter().map(str::to_owned).collect();
            if cells.iter().any(|cell| !cell.trim().is_empty()) {
                rows.push((line, cells));
            }
        }
        if rows.is_empty() {
            return Err(RosterFault { line: 1, wrong: "the file is empty".to_owned() });
        }
        let header = rows.remove(0).1.into_iter().map(|name| name.trim().to_owned()).collect();
        Ok(Self { header, rows })
    }
}
