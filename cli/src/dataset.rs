//! Records to a design for analysis, with everything left out and why: the one bridge between the two.
//!
//! Invariants: every subject of the roster is in the data set, used or left out; whoever is left out has a reason in
//! words; one number stands in a cell, made of that cell's current readings in the session that counts as the plan
//! says, or none does.

use std::collections::{BTreeMap, HashMap};

use chrono::NaiveDate;
use revisant_schema::completeness::chosen_session;
use revisant_schema::plan::{Analysis, Measure, OffWindow, Plan, Summary, VisitIx};
use revisant_schema::reading::Condition;
use revisant_schema::records::View;
use revisant_schema::records::view::{AccountedRow, ValueRow};
use revisant_schema::session::Course;
use serde::Serialize;

use crate::error::Failure;
use crate::report::text::list;
use crate::study::Basis;
use crate::took_part::{Corrections, TookPart, outside_use};

/// The within factor that an analysis has.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Factor {
    /// `visit`, or a condition's code.
    pub code: String,
    /// The codes of its levels.
    pub levels: Vec<String>,
    /// What people read.
    pub labels: Vec<String>,
}

/// Why a cell is empty.
#[derive(Debug, Clone, PartialEq, Eq, PartialOrd, Ord)]
pub enum Empty {
    /// The subject was enrolled after the day on which the records stand.
    NotEnrolled,
    /// The subject was withdrawn before the visit's window.
    Withdrawn,
    /// There is no reading.
    NoReading,
    /// Nobody expects one: the reason that was given.
    Accounted(String),
    /// Some condition that is averaged over is missing.
    Lacks(String),
    /// Fewer replicates than the measure needs.
    Few {
        /// Those that there are.
        current: usize,
        /// Those that it needs.
        needed: u32,
    },
    /// The session lies outside its window, and the analysis leaves such out.
    OffWindow,
}

/// One subject.
#[derive(Debug, Clone, PartialEq)]
pub struct Row {
    /// The subject's code.
    pub subject: String,
    /// By level: the number that is analysed, or why there is none.
    pub cells: Vec<Result<f64, Empty>>,
    /// There is at least one current reading of the measure at the visits analysed.
    pub any: bool,
}

impl Row {
    /// A reading at every level.
    pub fn complete(&self) -> bool {
        self.cells.iter().all(Result::is_ok)
    }

    /// Why it is left out of an analysis of complete subjects, in words; empty when it is not.
    pub fn why(&self, factor: &Factor) -> String {
        let mut by_reason: BTreeMap<&Empty, Vec<String>> = BTreeMap::new();
        for (cell, level) in self.cells.iter().zip(&factor.levels) {
            if let Err(empty) = cell {
                by_reason.entry(empty).or_default().push(level.clone());
            }
        }
        let words: Vec<String> = by_reason.into_iter().map(|(empty, levels)| empty.say(&levels)).collect();
        words.join("; ")
    }
}

impl Empty {
    fn say(&self, levels: &[String]) -> String {
        let levels = list(levels);
        match self {
            Self::NotEnrolled => "not enrolled yet".to_owned(),
            Self::Withdrawn => format!("withdrawn before {levels}"),
            Self::NoReading => format!("no reading at {levels}"),
            Self::Accounted(why) => format!("no reading at {levels} (accounted for: {why})"),
            Self::Lacks(what) => format!("{levels}: no reading of {what}"),
            Self::Few { current, needed } => format!("{levels}: {current} of the {needed} replicates needed"),
            Self::OffWindow => format!("session at {levels} lies outside its window"),
        }
    }
}

/// A visit for which a subject came more than once.
#[derive(Debug, Clone, PartialEq, Eq, Serialize)]
pub struct Spread {
    /// The subject's code.
    pub subject: String,
    /// The visit's code.
    pub visit: String,
    /// The days of its sessions.
    pub days: Vec<NaiveDate>,
    /// The day that counts.
    pub counts: NaiveDate,
}

/// A session outside its window.
#[derive(Debug, Clone, PartialEq, Eq, Serialize)]
pub struct OffWindowCell {
    /// The subject's code.
    pub subject: String,
    /// The visit's code.
    pub visit: String,
    /// The session's day.
    pub day: NaiveDate,
    /// Whether it is used all the same.
    pub used: bool,
}

/// A cell with fewer replicates than planned.
#[derive(Debug, Clone, PartialEq, Eq, Serialize)]
pub struct FewReplicates {
    /// The subject's code.
    pub subject: String,
    /// The visit's code.
    pub visit: String,
    /// The condition.
    pub condition: Condition,
    /// Replicates there.
    pub current: usize,
    /// Replicates planned.
    pub planned: u32,
}

/// Planned readings that somebody accounted for.
#[derive(Debug, Clone, PartialEq, Eq, Serialize)]
pub struct AccountedCell {
    /// The subject's code.
    pub subject: String,
    /// The visit's code.
    pub visit: String,
    /// Why they will not come.
    pub why: String,
}

/// What a reader of the result should know about the readings used.
#[derive(Debug, Clone, Default, PartialEq, Eq)]
pub struct Care {
    /// Visits with several sessions.
    pub spread: Vec<Spread>,
    /// Sessions outside their window.
    pub off_window: Vec<OffWindowCell>,
    /// Cells with fewer replicates than planned.
    pub fewer_replicates: Vec<FewReplicates>,
    /// Readings that will not come, and why.
    pub accounted: Vec<AccountedCell>,
    /// Readings at a limit of detection.
    pub at_limit: usize,
    /// Cells with readings of several instruments, all of which make up the cell's number.
    pub several_instruments: usize,
    /// Which instruments gave the readings.
    pub took_part: TookPart,
}

/// The data of one analysis.
#[derive(Debug, Clone, PartialEq)]
pub struct Dataset {
    /// The within factor.
    pub factor: Factor,
    /// For visits: days after day 0, cumulated along `after`.
    pub positions: Option<Vec<f64>>,
    /// Every subject of the roster, by code.
    pub rows: Vec<Row>,
    /// What to know about them.
    pub care: Care,
}

impl Dataset {
    /// From the records as they stand at a view, for an analysis of one within factor; `today` is the local day of
    /// that standing.
    pub fn build(view: &View<'_>, basis: &Basis, analysis: &Analysis, today: NaiveDate) -> Result<Self, Failure> {
        let measure = &basis.plan.measures[analysis.measure];
        let readings = Readings::of(view.values(&measure.code)?);
        let accounted = view.accounted()?;
        let factor = factor(basis, analysis);
        let conditions = conditions(view, measure, &factor)?;
        let corrections = Corrections::of(view, readings.values.iter().filter_map(|value| value.placed_by))?;
        let mut builder = Builder {
            basis,
            analysis,
            measure,
            readings,
            accounted,
            today,
            factor,
            conditions,
            instruments: Instruments { codes: view.terms()?, corrections },
            care: Care::default(),
        };
        let subjects: Vec<&String> = basis.roster.subjects.keys().collect();
        let rows = subjects.into_iter().map(|subject| builder.row(subject)).collect();
        let positions = (builder.factor.code == VISIT).then(|| positions(basis, &analysis.visits));
        Ok(Self { factor: builder.factor, positions, rows, care: builder.care })
    }

    /// The cells of each subject that has one, with the subject's place among the rows.
    pub fn design_rows(&self) -> (Vec<usize>, Vec<Vec<Option<f64>>>) {
        let with_cell = self.rows.iter().enumerate().filter(|(_, row)| row.cells.iter().any(Result::is_ok));
        with_cell.map(|(at, row)| (at, row.cells.iter().map(|cell| cell.as_ref().ok().copied()).collect())).unzip()
    }

    /// How many subjects have a reading at all.
    pub fn with_any(&self) -> usize {
        self.rows.iter().filter(|row| row.any).count()
    }

    /// How many subjects a mixed model would use: those with at least one cell.
    pub fn mixed_model_would_use(&self) -> usize {
        self.rows.iter().filter(|row| row.cells.iter().any(Result::is_ok)).count()
    }

    /// Those who are left out of an analysis of complete subjects, and why.
    pub fn left_out(&self) -> Vec<(&str, String)> {
        let left = self.rows.iter().filter(|row| !row.complete());
        left.map(|row| (row.subject.as_str(), row.why(&self.factor))).collect()
    }
}

/// The factor's code when it is the visits.
pub const VISIT: &str = "visit";

fn factor(basis: &Basis, analysis: &Analysis) -> Factor {
    let measure = &basis.plan.measures[analysis.measure];
    let condition = analysis.within.iter().find_map(|code| measure.conditions.iter().find(|it| it.code == *code));
    match condition {
        Some(factor) => {
            Factor { code: factor.code.clone(), levels: factor.levels.clone(), labels: factor.levels.clone() }
        }
        None => {
            let visits = analysis.visits.iter().map(|visit| &basis.plan.visits[*visit]);
            let (levels, labels) = visits.map(|visit| (visit.code.clone(), visit.label.clone())).unzip();
            Factor { code: VISIT.to_owned(), levels, labels }
        }
    }
}

/// Days after day 0 of each visit; one that is counted from an earlier visit lies so many days after that one's.
fn positions(basis: &Basis, visits: &[VisitIx]) -> Vec<f64> {
    let mut days: Vec<i64> = Vec::with_capacity(basis.plan.visits.len());
    for visit in &basis.plan.visits {
        let base = visit.after.and_then(|earlier| days.get(earlier).copied()).unwrap_or(0);
        days.push(base.saturating_add(visit.day));
    }
    visits.iter().filter_map(|visit| days.get(*visit)).map(|day| *day as f64).collect()
}

/// Current readings, those of one session and condition side by side.
struct Readings {
    values: Vec<ValueRow>,
    /// Where each session's begin and end.
    sessions: HashMap<i64, (usize, usize)>,
}

impl Readings {
    /// From values ordered by session and condition.
    fn of(values: Vec<ValueRow>) -> Self {
        let mut sessions = HashMap::new();
        let mut from = 0;
        for same in values.chunk_by(|one, other| one.session == other.session) {
            sessions.extend(same.first().map(|value| (value.session, (from, from + same.len()))));
            from += same.len();
        }
        Self { values, sessions }
    }

    /// Those of one session of the records and one condition.
    fn of_cell(&self, session: i64, condition: i64) -> impl Iterator<Item = ValueRow> {
        let (from, to) = self.sessions.get(&session).copied().unwrap_or_default();
        let held = self.values.get(from..to).unwrap_or_default();
        held.iter().filter(move |value| value.condition == condition).copied()
    }
}

/// One condition that takes part in a level: itself, and the term that it is in the records (`None`: it has never been
/// filed).
struct Part {
    condition: Condition,
    term: Option<i64>,
}

/// By level of the factor: the conditions that make it up. For visits there is one entry for all.
fn conditions(view: &View<'_>, measure: &Measure, factor: &Factor) -> Result<Vec<Vec<Part>>, Failure> {
    let terms: HashMap<String, i64> = view.terms()?.into_iter().map(|(term, text)| (text, term)).collect();
    let all: Vec<Condition> = measure.cells().into_iter().map(|cell| Condition::of_cell(measure, &cell)).collect();
    let of_level = |level: Option<&String>| {
        let holds = |condition: &&Condition| level.is_none_or(|level| condition.0.get(&factor.code) == Some(level));
        // The empty text has no row of its own.
        let term = |text: String| if text.is_empty() { Some(0) } else { terms.get(&text).copied() };
        let part = |condition: &Condition| Part { condition: condition.clone(), term: term(condition.to_string()) };
        all.iter().filter(holds).map(part).collect()
    };
    Ok(match factor.code.as_str() {
        VISIT => vec![of_level(None)],
        _ => factor.levels.iter().map(|level| of_level(Some(level))).collect(),
    })
}

/// What is known of the instruments that gave values.
struct Instruments {
    /// Every term; that of an instrument is its code, empty for readings by hand.
    codes: HashMap<i64, String>,
    corrections: Corrections,
}

impl Instruments {
    fn code(&self, value: &ValueRow) -> &str {
        self.codes.get(&value.instrument).map_or("", String::as_str)
    }

    /// How many the instrument gave that gave most, with those by hand.
    fn most_of_one(&self, values: &[ValueRow]) -> usize {
        let (by_hand, exported): (Vec<&ValueRow>, Vec<&ValueRow>) =
            values.iter().partition(|value| self.code(value).is_empty());
        let of = |instrument: i64| exported.iter().filter(|value| value.instrument == instrument).count();
        exported.iter().map(|value| of(value.instrument)).max().unwrap_or(0) + by_hand.len()
    }

    fn note(&self, took_part: &mut TookPart, value: &ValueRow, seen: (&Plan, &str, VisitIx, NaiveDate)) {
        let (plan, measure, visit, day) = seen;
        let code = self.code(value);
        let corrected = value.placed_by.and_then(|plan| self.corrections.find(plan, code, measure, day));
        took_part.see(code, visit, corrected.is_some(), outside_use(plan, code, day));
    }
}

struct Builder<'b> {
    basis: &'b Basis,
    analysis: &'b Analysis,
    measure: &'b Measure,
    readings: Readings,
    accounted: Vec<AccountedRow>,
    today: NaiveDate,
    factor: Factor,
    conditions: Vec<Vec<Part>>,
    instruments: Instruments,
    care: Care,
}

impl Builder<'_> {
    fn row(&mut self, subject: &str) -> Row {
        let nobody = Course::default();
        let basis = self.basis;
        let course = basis.courses.by_subject.get(subject).unwrap_or(&nobody);
        let visits: Vec<(VisitIx, usize)> = match self.factor.code.as_str() {
            VISIT => self.analysis.visits.iter().map(|visit| (*visit, 0)).collect(),
            _ => {
                let visit = self.analysis.visits.first().copied().unwrap_or(0);
                (0..self.factor.levels.len()).map(|level| (visit, level)).collect()
            }
        };
        let mut any = false;
        let mut cells = Vec::with_capacity(visits.len());
        let mut seen = None;
        for (visit, level) in visits {
            let session = chosen_session(&basis.plan, course, visit, &self.measure.code);
            any |= session.is_some();
            if seen != Some(visit) {
                self.note_session(subject, course, visit, session);
                seen = Some(visit);
            }
            cells.push(self.cell(subject, course, visit, level, session));
        }
        Row { subject: subject.to_owned(), cells, any }
    }

    /// Notes what is unusual about the session that counts for a visit.
    fn note_session(
        &mut self,
        subject: &str,
        course: &Course,
        visit: VisitIx,
        session: Option<(NaiveDate, i64, bool)>,
    ) {
        let Some((day, _, off_window)) = session else { return };
        let code = &self.basis.plan.visits[visit].code;
        let holding = course.sessions.iter().filter(|session| session.visit == Some(visit));
        let mut days: Vec<NaiveDate> = holding
            .filter(|session| session.facts.measures.iter().any(|code| **code == *self.measure.code))
            .map(|session| session.facts.day)
            .collect();
        days.dedup();
        if days.len() > 1 {
            let (subject, visit) = (subject.to_owned(), code.clone());
            self.care.spread.push(Spread { subject, visit, days, counts: day });
        }
        if off_window {
            let used = self.analysis.off_window == OffWindow::Use;
            let (subject, visit) = (subject.to_owned(), code.clone());
            self.care.off_window.push(OffWindowCell { subject, visit, day, used });
        }
    }

    fn cell(
        &mut self,
        subject: &str,
        course: &Course,
        visit: VisitIx,
        level: usize,
        session: Option<(NaiveDate, i64, bool)>,
    ) -> Result<f64, Empty> {
        let Some((day, session, off_window)) = session else { return Err(self.absent(subject, course, visit)) };
        if off_window && self.analysis.off_window == OffWindow::Leave {
            return Err(Empty::OffWindow);
        }
        // A visit's sessions of one day share their number; each has its own in the records.
        let same = course.sessions.iter().filter(|other| other.session == session);
        let sessions: Vec<i64> = same.map(|other| other.facts.session).collect();
        let mut numbers = Vec::new();
        for part in 0..self.conditions.get(level).map_or(0, Vec::len) {
            numbers.push(self.one_condition(subject, (visit, day), &sessions, (level, part))?);
        }
        Ok(mean(&numbers))
    }

    fn one_condition(
        &mut self,
        subject: &str,
        (visit, day): (VisitIx, NaiveDate),
        sessions: &[i64],
        (level, part): (usize, usize),
    ) -> Result<f64, Empty> {
        let Part { condition, term } = &self.conditions[level][part];
        let held = sessions.iter().flat_map(|session| term.iter().map(move |term| (*session, *term)));
        let values: Vec<ValueRow> = held.flat_map(|(session, term)| self.readings.of_cell(session, term)).collect();
        let planned = self.measure.replicates;
        let enough = values.len() >= self.measure.at_least.max(1) as usize;
        let (current, limits) = (values.len(), values.iter().filter(|value| value.limit).count());
        let several = values.iter().any(|value| value.instrument != values[0].instrument);
        let number = if enough { Ok(summarise(self.measure.summary, &values)) } else { Err(()) };
        // Replicates are planned for each instrument; those entered by hand stand in for one that could not export.
        let of_one = self.instruments.most_of_one(&values);
        if of_one < planned as usize && current > 0 {
            let (subject, visit) = (subject.to_owned(), self.basis.plan.visits[visit].code.clone());
            let few = FewReplicates { subject, visit, condition: condition.clone(), current: of_one, planned };
            self.care.fewer_replicates.push(few);
        }
        if number.is_ok() {
            self.care.at_limit += limits;
            self.care.several_instruments += usize::from(several);
            let seen = (&self.basis.plan, self.measure.code.as_str(), visit, day);
            values.iter().for_each(|value| self.instruments.note(&mut self.care.took_part, value, seen));
        }
        number.map_err(|()| match current {
            0 if condition.0.is_empty() => Empty::NoReading,
            0 => Empty::Lacks(condition.to_string()),
            _ => Empty::Few { current, needed: self.measure.at_least },
        })
    }

    /// Why there is no session.
    fn absent(&mut self, subject: &str, course: &Course, visit: VisitIx) -> Empty {
        let entry = self.basis.roster.subjects.get(subject);
        if entry.and_then(|entry| entry.enrolled).is_some_and(|day| day > self.today) {
            return Empty::NotEnrolled;
        }
        let code = &self.basis.plan.visits[visit].code;
        let said = self.accounted.iter().rev().find(|row| {
            row.subject == subject
                && row.visit == *code
                && row.measure.as_ref().is_none_or(|measure| *measure == self.measure.code)
        });
        if let Some(row) = said {
            let (subject, visit, why) = (subject.to_owned(), code.clone(), row.why.clone());
            self.care.accounted.push(AccountedCell { subject, visit, why: why.clone() });
            return Empty::Accounted(why);
        }
        let withdrawn = entry.and_then(|entry| entry.withdrawn);
        let span = course.span(&self.basis.plan, visit);
        match (withdrawn, span) {
            (Some(day), Some(span)) if day < span.from => Empty::Withdrawn,
            (Some(_), None) => Empty::Withdrawn,
            _ => Empty::NoReading,
        }
    }
}

/// The one number of a cell's replicates, of all instruments that gave some; there is at least one.
fn summarise(summary: Summary, values: &[ValueRow]) -> f64 {
    let numbers: Vec<f64> = values.iter().map(|value| value.number).collect();
    let in_order = |value: &&ValueRow| (value.moment, value.replicate);
    match summary {
        Summary::Mean => mean(&numbers),
        Summary::Median => median(numbers),
        Summary::Min => numbers.into_iter().fold(f64::INFINITY, f64::min),
        Summary::Max => numbers.into_iter().fold(f64::NEG_INFINITY, f64::max),
        Summary::First => values.iter().min_by_key(in_order).map_or(0.0, |value| value.number),
        Summary::Last => values.iter().max_by_key(in_order).map_or(0.0, |value| value.number),
    }
}

/// The arithmetic mean, summed as differences from the first so that a large offset costs no digits.
fn mean(numbers: &[f64]) -> f64 {
    let Some(first) = numbers.first() else { return 0.0 };
    first + numbers.iter().map(|number| number - first).sum::<f64>() / numbers.len() as f64
}

fn median(mut numbers: Vec<f64>) -> f64 {
    numbers.sort_by(f64::total_cmp);
    let half = numbers.len() / 2;
    match numbers.len() % 2 {
        0 => f64::midpoint(numbers[half - 1], numbers[half]),
        _ => numbers[half],
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn value(number: f64, minute: Option<i64>, replicate: u32) -> ValueRow {
        let moment = minute.map(|minute| minute * 60_000);
        ValueRow {
            reading: 1,
            session: 1,
            condition: 1,
            instrument: 1,
            replicate,
            number,
            moment,
            limit: false,
            placed_by: None,
        }
    }

    #[test]
    fn replicates_become_one_number_as_the_plan_says() {
        let values = [value(3.0, Some(5), 1), value(1.0, Some(5), 2), value(8.0, Some(1), 3), value(4.0, Some(9), 4)];
        let of = |summary| summarise(summary, &values);
        assert_eq!(of(Summary::Mean), 4.0);
        assert_eq!(of(Summary::Median), 3.5);
        assert_eq!((of(Summary::Min), of(Summary::Max)), (1.0, 8.0));
        assert_eq!((of(Summary::First), of(Summary::Last)), (8.0, 4.0));
        let same_time = [value(3.0, None, 2), value(1.0, None, 1)];
        assert_eq!(summarise(Summary::First, &same_time), 1.0, "then by replicate number");
        assert_eq!(summarise(Summary::Last, &same_time), 3.0);
        assert_eq!(summarise(Summary::Median, &values[..3]), 3.0);
    }

    #[test]
    fn a_large_offset_costs_no_digits() {
        assert_eq!(mean(&[1e9 + 0.25, 1e9 + 0.75]), 1e9 + 0.5);
        assert_eq!(mean(&[0.1]), 0.1);
    }

    #[test]
    fn reasons_are_words() {
        let factor = Factor {
            code: VISIT.to_owned(),
            levels: ["baseline", "week-4", "week-8"].map(str::to_owned).to_vec(),
            labels: vec![],
        };
        let row = |cells: Vec<Result<f64, Empty>>| Row { subject: "A-1".to_owned(), cells, any: true };
        let none = row(vec![Ok(1.0), Err(Empty::NoReading), Err(Empty::NoReading)]);
        assert_eq!(none.why(&factor), "no reading at week-4 and week-8");
        let few = row(vec![Ok(1.0), Err(Empty::Few { current: 1, needed: 2 }), Err(Empty::Withdrawn)]);
        assert_eq!(few.why(&factor), "withdrawn before week-8; week-4: 1 of the 2 replicates needed");
        let off = row(vec![Ok(1.0), Err(Empty::OffWindow), Err(Empty::Accounted("in hospital".to_owned()))]);
        assert_eq!(
            off.why(&factor),
            "no reading at week-8 (accounted for: in hospital); session at week-4 lies outside its window"
        );
    }
}
