//! Records to a design for analysis, with everything left out and why: the one bridge between the two.
//!
//! Invariants: every subject of the roster is in the data set, used or left out; whoever is left out has a reason in
//! words; one number stands in a cell, made of that cell's current readings in the session that counts as the plan
//! says, or none does. Cells lie in the order of a [`Design`]: the last within factor runs fastest.

use std::collections::{BTreeMap, HashMap, HashSet};

use chrono::NaiveDate;
use revisant_analysis::design::{self, Design, DesignError};
use revisant_schema::completeness::chosen_session;
use revisant_schema::plan::{
    AgreeOver, Analysis, AttributeKind, Measure, MeasureRule, Method, OffWindow, Plan, Summary, VisitIx,
};
use revisant_schema::reading::Condition;
use revisant_schema::records::View;
use revisant_schema::records::view::{AccountedRow, ValueRow};
use revisant_schema::session::Course;
use serde::Serialize;

use crate::error::Failure;
use crate::report::text::list;
use crate::steps::Steps;
use crate::study::Basis;
use crate::took_part::{Corrections, TookPart, outside_use};

/// A factor of an analysis.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Factor {
    /// `visit` or a condition's code; between subjects `arm` or an attribute's code.
    pub code: String,
    /// The codes of its levels.
    pub levels: Vec<String>,
    /// What people read.
    pub labels: Vec<String>,
}

/// What a cell is called where it is empty.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct CellName {
    /// Where the whole session is not there.
    pub session: String,
    /// Where it is the cell alone.
    pub cell: String,
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
    /// By between factor: the level that the subject is at; `None` where the roster has none.
    pub group: Vec<Option<usize>>,
    /// By combination of the within levels: the number that is analysed, or why there is none.
    pub cells: Vec<Result<f64, Empty>>,
    /// There is at least one current reading of the measure at the visits analysed.
    pub any: bool,
}

impl Row {
    /// A level of every between factor, and a reading in every cell.
    pub fn complete(&self) -> bool {
        self.placed() && self.cells.iter().all(Result::is_ok)
    }

    /// A level of every between factor.
    fn placed(&self) -> bool {
        self.group.iter().all(Option::is_some)
    }

    /// A level of every between factor, and some reading.
    pub fn some(&self) -> bool {
        self.placed() && self.cells.iter().any(Result::is_ok)
    }

    /// Why it is left out of an analysis of complete subjects, in words; empty when it is not.
    pub fn why(&self, names: &[CellName], between: &[Factor]) -> String {
        let no_group = self.group.iter().zip(between).filter(|(level, _)| level.is_none());
        let no_group = no_group.map(|(_, factor)| format!("no value of {}", factor.code));
        let mut by_reason: BTreeMap<&Empty, Vec<String>> = BTreeMap::new();
        for (cell, name) in self.cells.iter().zip(names) {
            if let Err(empty) = cell {
                let named = by_reason.entry(empty).or_default();
                let name = if matches!(empty, Empty::Few { .. }) { &name.cell } else { &name.session };
                if !named.contains(name) {
                    named.push(name.clone());
                }
            }
        }
        let words = by_reason.into_iter().map(|(empty, levels)| empty.say(&levels));
        no_group.chain(words).collect::<Vec<_>>().join("; ")
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
    /// The within factors, in the order of the plan; at least one.
    pub within: Vec<Factor>,
    /// The between factors, in the order of the plan.
    pub between: Vec<Factor>,
    /// By cell.
    pub names: Vec<CellName>,
    /// Where the visits are a factor: days after day 0, cumulated along `after`.
    pub positions: Option<Vec<f64>>,
    /// Where levels are repeats within a session: the code of its visit.
    pub repeats_at: Option<String>,
    /// Of what step the numbers are multiples.
    pub steps: Steps,
    /// Every subject of the roster, by code.
    pub rows: Vec<Row>,
    /// What to know about them.
    pub care: Care,
}

impl Dataset {
    /// From the records as they stand at a view; `today` is the local day of that standing.
    pub fn build(view: &View<'_>, basis: &Basis, analysis: &Analysis, today: NaiveDate) -> Result<Self, Failure> {
        let measure = &basis.plan.measures[analysis.measure];
        let readings = Readings::of(view.values(&measure.code)?);
        let accounted = view.accounted()?;
        let terms = view.terms()?;
        let repeats = Repeats::of(analysis);
        let within: Vec<Factor> = match repeats {
            Some(repeats) => vec![repeats.factor(basis, analysis, &readings, &terms)],
            None => analysis.within.iter().map(|code| within(basis, analysis, code)).collect(),
        };
        let between: Vec<Factor> = analysis.between.iter().map(|code| between(basis, code)).collect();
        let layout = match repeats {
            Some(repeats) => Layout::of(view, basis, analysis, &[])?.repeated(repeats, &within, &terms),
            None => Layout::of(view, basis, analysis, &within)?,
        };
        let corrections = Corrections::of(view, readings.values.iter().filter_map(|value| value.placed_by))?;
        let mut builder = Builder {
            basis,
            analysis,
            measure,
            readings,
            accounted,
            today,
            between: &between,
            layout: &layout,
            instruments: Instruments { codes: terms, corrections },
            care: Care::default(),
            steps: Steps::default(),
        };
        let subjects: Vec<&String> = basis.roster.subjects.keys().collect();
        let rows = subjects.into_iter().map(|subject| builder.row(subject)).collect();
        let (care, mut steps) = (builder.care, builder.steps);
        steps.averaged(layout.parts.first().map_or(1, Vec::len));
        let positions = within.iter().any(|factor| factor.code == VISIT).then(|| positions(basis, &analysis.visits));
        let repeated = repeats.and_then(|_| layout.visits.first());
        let repeats_at = repeated.map(|visit| basis.plan.visits[*visit].code.clone());
        let names = match &repeats_at {
            Some(visit) => repeats_names(visit, &within),
            None => layout.names(&within, basis),
        };
        Ok(Self { within, between, names, positions, repeats_at, steps, rows, care })
    }

    /// The subjects that an analysis can take in, by their place among the rows: those with a level of every between
    /// factor and a reading.
    pub fn subjects(&self) -> Vec<usize> {
        let taken = self.rows.iter().enumerate().filter(|(_, row)| row.some());
        taken.map(|(at, _)| at).collect()
    }

    /// These subjects as a design. Where nobody has a reading it has one subject without any, so that the notes say so.
    ///
    /// # Errors
    /// As [`Design::new`].
    pub fn design(&self) -> Result<Design, DesignError> {
        let cells = |row: &Row| row.cells.iter().map(|cell| cell.as_ref().ok().copied()).collect::<Vec<_>>();
        let groups = |row: &Row| row.group.iter().map(|level| level.unwrap_or(0)).collect::<Vec<_>>();
        let mut subjects: Vec<(Vec<usize>, Vec<Option<f64>>)> =
            self.rows.iter().filter(|row| row.some()).map(|row| (groups(row), cells(row))).collect();
        if subjects.is_empty() {
            subjects.push((vec![0; self.between.len()], vec![None; self.names.len()]));
        }
        let within = self.within.iter().map(|factor| self.factor(factor)).collect::<Result<_, _>>()?;
        Design::new(within, self.between.iter().map(|factor| factor.levels.len()).collect(), &subjects)
    }

    /// Visits on the same day have no order in time: then there are no trends, which the notes say.
    fn factor(&self, factor: &Factor) -> Result<design::Factor, DesignError> {
        let positions = self.positions.as_ref().filter(|_| factor.code == VISIT);
        match positions.map(|positions| design::Factor::at(positions.clone())) {
            Some(Ok(placed)) => Ok(placed),
            _ => design::Factor::of(factor.levels.len()),
        }
    }

    /// The one within factor of an analysis that has no other factor.
    pub fn only(&self) -> Option<&Factor> {
        match (self.within.as_slice(), self.between.is_empty()) {
            ([one], true) => Some(one),
            _ => None,
        }
    }

    /// How many subjects have a reading at all.
    pub fn with_any(&self) -> usize {
        self.rows.iter().filter(|row| row.any).count()
    }

    /// How many subjects a mixed model would use: those with at least one cell.
    pub fn mixed_model_would_use(&self) -> usize {
        self.rows.iter().filter(|row| row.some()).count()
    }

    /// Those who are left out of an analysis of complete subjects, and why.
    pub fn left_out(&self) -> Vec<(&str, String)> {
        let left = self.rows.iter().filter(|row| !row.complete());
        left.map(|row| (row.subject.as_str(), row.why(&self.names, &self.between))).collect()
    }
}

/// The factor's code when it is the visits.
pub const VISIT: &str = "visit";
/// The factor's code when it is the arms.
pub const ARM: &str = "arm";

fn within(basis: &Basis, analysis: &Analysis, code: &str) -> Factor {
    let measure = &basis.plan.measures[analysis.measure];
    match measure.conditions.iter().find(|it| it.code == *code) {
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

fn between(basis: &Basis, code: &str) -> Factor {
    if code == ARM {
        let (levels, labels) = basis.plan.arms.iter().map(|arm| (arm.code.clone(), arm.label.clone())).unzip();
        return Factor { code: code.to_owned(), levels, labels };
    }
    let attribute = basis.plan.subject.attributes.iter().find(|attribute| attribute.code == code);
    let levels = match attribute.map(|attribute| &attribute.kind) {
        Some(AttributeKind::Levels(levels)) => levels.clone(),
        _ => Vec::new(),
    };
    Factor { code: code.to_owned(), labels: levels.clone(), levels }
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
#[derive(Clone)]
struct Part {
    condition: Condition,
    term: Option<i64>,
    /// Which of its readings.
    pick: Pick,
}

/// Which readings of a session and condition make up a cell.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
enum Pick {
    All,
    /// Those with this number, of which every instrument may have given one.
    Replicate(u32),
    /// Those of the instrument that is this term.
    Instrument(i64),
}

impl Pick {
    fn takes(self, value: &ValueRow) -> bool {
        match self {
            Self::All => true,
            Self::Replicate(number) => value.replicate == number,
            Self::Instrument(term) => value.instrument == term,
        }
    }
}

/// What repeats within a session, where agreement is over that. The session is that of the analysis's first visit: rows
/// of several sessions of one subject would not be independent.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
enum Repeats {
    /// Levels are the numbers of the replicates.
    Replicates,
    /// Levels are the instruments; each one's number is the plan's summary of its replicates.
    Instruments,
}

impl Repeats {
    fn of(analysis: &Analysis) -> Option<Self> {
        match (analysis.method, analysis.agree_over) {
            (Method::Agreement, AgreeOver::Replicates) => Some(Self::Replicates),
            (Method::Agreement, AgreeOver::Instruments) => Some(Self::Instruments),
            _ => None,
        }
    }

    fn factor(self, basis: &Basis, analysis: &Analysis, readings: &Readings, terms: &HashMap<i64, String>) -> Factor {
        let (code, levels) = match self {
            Self::Replicates => {
                let planned = basis.plan.measures[analysis.measure].replicates;
                ("replicate", (1..=planned).map(|number| number.to_string()).collect())
            }
            Self::Instruments => ("instrument", instruments_at_work(basis, analysis, readings, terms)),
        };
        let levels: Vec<String> = levels;
        Factor { code: code.to_owned(), labels: levels.clone(), levels }
    }

    fn pick(self, level: usize, code: &str, terms: &HashMap<i64, String>) -> Pick {
        match self {
            Self::Replicates => Pick::Replicate(u32::try_from(level + 1).unwrap_or(u32::MAX)),
            // An instrument that never gave a reading is no term: it takes nothing.
            Self::Instruments => Pick::Instrument(term_of(terms, code).unwrap_or(i64::MIN)),
        }
    }
}

fn term_of(terms: &HashMap<i64, String>, code: &str) -> Option<i64> {
    terms.iter().find(|(_, text)| *text == code).map(|(term, _)| *term)
}

/// The plan's instruments that gave a reading of the measure; where fewer than two did, all that may.
fn instruments_at_work(
    basis: &Basis,
    analysis: &Analysis,
    readings: &Readings,
    terms: &HashMap<i64, String>,
) -> Vec<String> {
    let gives = |rule: &MeasureRule| match rule {
        MeasureRule::Fixed(measure) => *measure == analysis.measure,
        MeasureRule::Found(_) => true,
    };
    let measuring = basis.plan.instruments.iter().filter(|it| it.reader.values.iter().any(|it| gives(&it.measure)));
    let measuring: Vec<String> = measuring.map(|instrument| instrument.code.clone()).collect();
    let gave: HashSet<i64> = readings.values.iter().map(|value| value.instrument).collect();
    let at_work = |code: &&String| term_of(terms, code).is_some_and(|term| gave.contains(&term));
    let working: Vec<String> = measuring.iter().filter(at_work).cloned().collect();
    if working.len() < 2 { measuring } else { working }
}

fn repeats_names(visit: &str, within: &[Factor]) -> Vec<CellName> {
    let name = |factor: &Factor, level: &String| CellName {
        session: visit.to_owned(),
        cell: format!("{visit}, {} {level}", factor.code),
    };
    within.iter().flat_map(|factor| factor.levels.iter().map(|level| name(factor, level))).collect()
}

/// Of what each cell is made.
struct Layout {
    /// By cell: which visit of the analysis, and which of `parts`.
    cells: Vec<(usize, usize)>,
    /// By combination of the levels of the within conditions: the conditions that make it up.
    parts: Vec<Vec<Part>>,
    /// The visits of the analysis; one where they are no factor.
    visits: Vec<VisitIx>,
}

impl Layout {
    fn of(view: &View<'_>, basis: &Basis, analysis: &Analysis, within: &[Factor]) -> Result<Self, Failure> {
        let by_visit = within.iter().any(|factor| factor.code == VISIT);
        let visits = match by_visit {
            true => analysis.visits.clone(),
            false => vec![analysis.visits.first().copied().unwrap_or(0)],
        };
        let mut layout = Self { cells: Vec::new(), parts: Vec::new(), visits };
        let mut combinations: Vec<Vec<(&str, &str)>> = Vec::new();
        for cell in product(within) {
            let mut visit = 0;
            let mut combination = Vec::new();
            for (factor, level) in within.iter().zip(cell) {
                match factor.code.as_str() {
                    VISIT => visit = level,
                    code => combination.push((code, factor.levels[level].as_str())),
                }
            }
            let parts = combinations.iter().position(|known| *known == combination).unwrap_or_else(|| {
                combinations.push(combination);
                combinations.len() - 1
            });
            layout.cells.push((visit, parts));
        }
        layout.parts = parts(view, &basis.plan.measures[analysis.measure], &combinations)?;
        Ok(layout)
    }

    /// One cell a level, of the same conditions, with the readings of that level alone.
    fn repeated(self, repeats: Repeats, within: &[Factor], terms: &HashMap<i64, String>) -> Self {
        let all = self.parts.into_iter().next().unwrap_or_default();
        let levels = within.iter().flat_map(|factor| &factor.levels).enumerate();
        let of_level = |(level, code): (usize, &String)| {
            let pick = repeats.pick(level, code, terms);
            all.iter().map(|part| Part { pick, ..part.clone() }).collect()
        };
        let parts: Vec<Vec<Part>> = levels.map(of_level).collect();
        Self { cells: (0..parts.len()).map(|level| (0, level)).collect(), parts, visits: self.visits }
    }

    fn names(&self, within: &[Factor], basis: &Basis) -> Vec<CellName> {
        let cells = self.cells.iter().zip(product(within));
        let name = |((visit, _), cell): (&(usize, usize), Vec<usize>)| {
            let levels = within.iter().zip(cell).map(|(factor, level)| factor.levels[level].clone());
            let cell = levels.collect::<Vec<_>>().join(" ");
            let visit = self.visits.get(*visit).map(|visit| basis.plan.visits[*visit].code.clone());
            let session = visit.filter(|_| within.len() > 1).unwrap_or_else(|| cell.clone());
            CellName { session, cell }
        };
        cells.map(name).collect()
    }
}

/// Every combination of the factors' levels, the last running fastest.
pub fn product(factors: &[Factor]) -> Vec<Vec<usize>> {
    factors.iter().fold(vec![vec![]], |all, factor| {
        let longer = |begun: Vec<usize>| {
            (0..factor.levels.len()).map(move |level| begun.iter().copied().chain([level]).collect())
        };
        all.into_iter().flat_map(longer).collect()
    })
}

/// By combination of condition levels: the conditions of the measure that have all of them.
fn parts(view: &View<'_>, measure: &Measure, combinations: &[Vec<(&str, &str)>]) -> Result<Vec<Vec<Part>>, Failure> {
    let terms: HashMap<String, i64> = view.terms()?.into_iter().map(|(term, text)| (text, term)).collect();
    let all: Vec<Condition> = measure.cells().into_iter().map(|cell| Condition::of_cell(measure, &cell)).collect();
    // The empty text has no row of its own.
    let term = |text: String| if text.is_empty() { Some(0) } else { terms.get(&text).copied() };
    let part = |condition: &Condition| Part {
        condition: condition.clone(),
        term: term(condition.to_string()),
        pick: Pick::All,
    };
    let of_combination = |levels: &Vec<(&str, &str)>| {
        let has =
            |condition: &Condition, (code, level): (&str, &str)| condition.0.get(code).is_some_and(|own| own == level);
        let all_of_them = |condition: &&Condition| levels.iter().all(|level| has(condition, *level));
        all.iter().filter(all_of_them).map(part).collect()
    };
    Ok(combinations.iter().map(of_combination).collect())
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
    between: &'b [Factor],
    layout: &'b Layout,
    instruments: Instruments,
    care: Care,
    steps: Steps,
}

/// The session of a visit that counts: its day, and its numbers in the records.
struct Came {
    day: NaiveDate,
    sessions: Vec<i64>,
}

impl Builder<'_> {
    fn row(&mut self, subject: &str) -> Row {
        let nobody = Course::default();
        let (basis, layout) = (self.basis, self.layout);
        let course = basis.courses.by_subject.get(subject).unwrap_or(&nobody);
        let mut any = false;
        let mut came = Vec::with_capacity(layout.visits.len());
        for &visit in &layout.visits {
            let session = chosen_session(&basis.plan, course, visit, &self.measure.code);
            any |= session.is_some();
            self.note_session(subject, course, visit, session);
            came.push(self.came(subject, course, visit, session));
        }
        let cell = |&(visit, parts): &(usize, usize)| match &came[visit] {
            Ok(came) => self.cell(subject, layout.visits[visit], came, &layout.parts[parts]),
            Err(empty) => Err(empty.clone()),
        };
        let cells = layout.cells.iter().map(cell).collect();
        Row { subject: subject.to_owned(), group: self.group(subject), cells, any }
    }

    /// The level of each between factor.
    fn group(&self, subject: &str) -> Vec<Option<usize>> {
        let entry = self.basis.roster.subjects.get(subject);
        let level = |factor: &Factor| {
            let own = match factor.code.as_str() {
                ARM => entry?.arm.as_ref()?,
                code => entry?.attributes.get(code)?,
            };
            factor.levels.iter().position(|level| level == own)
        };
        self.between.iter().map(level).collect()
    }

    /// The session that counts for a visit, or why there is none.
    fn came(
        &mut self,
        subject: &str,
        course: &Course,
        visit: VisitIx,
        session: Option<(NaiveDate, i64, bool)>,
    ) -> Result<Came, Empty> {
        let Some((day, session, off_window)) = session else { return Err(self.absent(subject, course, visit)) };
        if off_window && self.analysis.off_window == OffWindow::Leave {
            return Err(Empty::OffWindow);
        }
        // A visit's sessions of one day share their number; each has its own in the records.
        let same = course.sessions.iter().filter(|other| other.session == session);
        Ok(Came { day, sessions: same.map(|other| other.facts.session).collect() })
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

    /// The mean of the conditions that make a cell up, all of which must be there.
    fn cell(&mut self, subject: &str, visit: VisitIx, came: &Came, parts: &[Part]) -> Result<f64, Empty> {
        if let [one] = parts {
            return self.one_condition(subject, visit, came, one);
        }
        let numbers = parts.iter().map(|part| self.one_condition(subject, visit, came, part));
        Ok(mean(&numbers.collect::<Result<Vec<f64>, Empty>>()?))
    }

    fn one_condition(&mut self, subject: &str, visit: VisitIx, came: &Came, part: &Part) -> Result<f64, Empty> {
        let (Part { condition, term, pick }, Came { day, sessions }) = (part, came);
        let held = sessions.iter().flat_map(|session| term.iter().map(move |term| (*session, *term)));
        let values = held.flat_map(|(session, term)| self.readings.of_cell(session, term));
        let values: Vec<ValueRow> = values.filter(|value| pick.takes(value)).collect();
        let (planned, at_least, summary) = self.of_one_number(*pick);
        let enough = values.len() >= at_least.max(1) as usize;
        let (current, limits) = (values.len(), values.iter().filter(|value| value.limit).count());
        let several = values.iter().any(|value| value.instrument != values[0].instrument);
        let number = if enough { Ok(summarise(summary, &values)) } else { Err(()) };
        // Replicates are planned for each instrument; those entered by hand stand in for one that could not export.
        let of_one = self.instruments.most_of_one(&values);
        if of_one < planned as usize && current > 0 {
            let (subject, visit) = (subject.to_owned(), self.basis.plan.visits[visit].code.clone());
            let few = FewReplicates { subject, visit, condition: condition.clone(), current: of_one, planned };
            self.care.fewer_replicates.push(few);
        }
        if number.is_ok() {
            if self.analysis.method == Method::Friedman {
                self.steps.take_in(summary, values.iter().map(|value| value.number));
            }
            self.care.at_limit += limits;
            self.care.several_instruments += usize::from(several);
            let seen = (&self.basis.plan, self.measure.code.as_str(), visit, *day);
            values.iter().for_each(|value| self.instruments.note(&mut self.care.took_part, value, seen));
        }
        number.map_err(|()| match current {
            0 => self.nothing(condition, *pick),
            _ => Empty::Few { current, needed: self.measure.at_least },
        })
    }

    /// How many replicates are planned and needed for one number, and how they are summarised: a replicate by itself is
    /// one, and the mean of those that several instruments gave under its number.
    fn of_one_number(&self, pick: Pick) -> (u32, u32, Summary) {
        match pick {
            Pick::Replicate(_) => (1, 1, Summary::Mean),
            Pick::All | Pick::Instrument(_) => (self.measure.replicates, self.measure.at_least, self.measure.summary),
        }
    }

    /// Why there is no reading in a session that there is.
    fn nothing(&self, condition: &Condition, pick: Pick) -> Empty {
        let of = match pick {
            Pick::All => None,
            Pick::Replicate(number) => Some(format!("replicate {number}")),
            Pick::Instrument(term) => Some(match self.instruments.codes.get(&term) {
                Some(code) => code.clone(),
                None => "an instrument that gave none at all".to_owned(),
            }),
        };
        match (of, condition.0.is_empty()) {
            (None, true) => Empty::NoReading,
            (None, false) => Empty::Lacks(condition.to_string()),
            (Some(of), true) => Empty::Lacks(of),
            (Some(of), false) => Empty::Lacks(format!("{condition}, {of}")),
        }
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
        let name = |code: &str| CellName { session: code.to_owned(), cell: code.to_owned() };
        let names = ["baseline", "week-4", "week-8"].map(name);
        let group = vec![];
        let row = |cells| Row { subject: "A-1".to_owned(), group: group.clone(), cells, any: true }.why(&names, &[]);
        let none = row(vec![Ok(1.0), Err(Empty::NoReading), Err(Empty::NoReading)]);
        assert_eq!(none, "no reading at week-4 and week-8");
        let few = row(vec![Ok(1.0), Err(Empty::Few { current: 1, needed: 2 }), Err(Empty::Withdrawn)]);
        assert_eq!(few, "withdrawn before week-8; week-4: 1 of the 2 replicates needed");
        let off = row(vec![Ok(1.0), Err(Empty::OffWindow), Err(Empty::Accounted("in hospital".to_owned()))]);
        assert_eq!(off, "no reading at week-8 (accounted for: in hospital); session at week-4 lies outside its window");
    }
}
