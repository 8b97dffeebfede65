//! Completeness: what was expected of every subject at every visit, against what is there.
//!
//! Pure: plan, courses and counts in, the grid out. Invariant: a visit's state follows from its dates, the counts and
//! the day of judgement alone.

use std::collections::{BTreeMap, HashMap};

use chrono::NaiveDate;
use serde::Serialize;

use crate::plan::{Anchor, Plan, VisitIx};
use crate::reading::Condition;
use crate::records::view::{AccountedRow, CellCount};
use crate::roster::{Enrolled, Roster};
use crate::session::{Course, Courses};

/// How a visit stands for one subject.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, PartialOrd, Ord, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum VisitState {
    /// Its window has not opened.
    Ahead,
    /// Its window is open.
    Open,
    /// All expected readings are there.
    Complete,
    /// Its window is closed and some readings are missing.
    Partial,
    /// Its window is closed and there is no reading.
    Missed,
    /// The subject was withdrawn before it.
    Ended,
}

/// How a subject stands.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, PartialOrd, Ord, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum SubjectStatus {
    /// No session, and no window closed.
    NotStarted,
    /// Nothing is missing at a closed window.
    UpToDate,
    /// Something is missing at a closed window.
    Incomplete,
    /// All visits are complete.
    Complete,
    /// Withdrawn.
    Withdrawn,
}

macro_rules! codes {
    ($kind:ident: $($name:ident = $code:literal),+) => {
        impl $kind {
            /// The code that people and files use.
            pub fn code(self) -> &'static str { match self { $(Self::$name => $code),+ } }
        }
    };
}
codes!(VisitState: Ahead = "ahead", Open = "open", Complete = "complete", Partial = "partial", Missed = "missed",
    Ended = "ended");
codes!(SubjectStatus: NotStarted = "not-started", UpToDate = "up-to-date", Incomplete = "incomplete",
    Complete = "complete", Withdrawn = "withdrawn");

/// One cell of a visit.
#[derive(Debug, Clone, PartialEq, Eq, Serialize)]
pub struct CellState {
    /// The measure's code.
    pub measure: String,
    /// Its condition.
    pub condition: Condition,
    /// Replicates expected.
    pub expected: u32,
    /// Current readings in the session that counts (of the instrument that gave most).
    pub current: u32,
    /// Why it will not come, where somebody said so.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub accounted: Option<String>,
}

/// One visit of one subject.
#[derive(Debug, Clone, PartialEq, Eq, Serialize)]
pub struct VisitLine {
    /// The visit's code.
    pub visit: String,
    /// How it stands.
    pub state: VisitState,
    /// The session that counts lies outside the window.
    pub off_window: bool,
    /// The session that counts.
    pub session: Option<i64>,
    /// The day of the session that counts.
    pub day: Option<NaiveDate>,
    /// First day of the window.
    pub from: Option<NaiveDate>,
    /// Its planned day.
    pub target: Option<NaiveDate>,
    /// Last day of the window.
    pub until: Option<NaiveDate>,
    /// Whether everything that is missing is accounted for.
    pub accounted: bool,
    /// Its cells.
    pub measures: Vec<CellState>,
}

impl VisitLine {
    /// A closed window with something missing that nobody has accounted for.
    pub fn wanting(&self) -> bool {
        matches!(self.state, VisitState::Partial | VisitState::Missed) && !self.accounted
    }
}

/// One subject.
#[derive(Debug, Clone, PartialEq, Eq, Serialize)]
pub struct SubjectLine {
    /// The subject's code.
    pub subject: String,
    /// How the subject stands.
    pub status: SubjectStatus,
    /// By visit, in the plan's order.
    pub visits: Vec<VisitLine>,
}

/// The grid.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Completeness {
    /// By the subject's code.
    pub subjects: Vec<SubjectLine>,
    /// How many subjects stand how.
    pub totals: BTreeMap<&'static str, u32>,
    /// Enrolment against its target.
    pub enrolment: Enrolment,
}

/// Enrolment against its target.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Enrolment {
    /// Planned number.
    pub target: Option<u32>,
    /// Subjects enrolled by the day of judgement.
    pub enrolled: u32,
    /// Expected at the end of enrolment.
    pub projected: Option<f64>,
    /// 80 % prediction interval of it.
    pub projected_interval: Option<(u32, u32)>,
}

/// Judges everyone on a local day.
pub fn judge(
    plan: &Plan,
    roster: &Roster,
    courses: &Courses,
    counts: &[CellCount],
    accounted: &[AccountedRow],
    today: NaiveDate,
) -> Completeness {
    let counts = by_cell(courses, counts);
    let subjects: Vec<SubjectLine> = roster
        .subjects
        .iter()
        .map(|(subject, entry)| {
            let none = Course::default();
            let course = courses.by_subject.get(subject.as_str()).unwrap_or(&none);
            let said: Vec<&AccountedRow> = accounted.iter().filter(|row| row.subject == *subject).collect();
            judge_subject(plan, subject, entry, course, &counts, &said, today)
        })
        .collect();
    let mut totals = BTreeMap::new();
    for line in &subjects {
        *totals.entry(line.status.code()).or_insert(0) += 1;
    }
    Completeness { subjects, totals, enrolment: enrolment(plan, roster, today) }
}

/// Current readings by session, measure and condition: of the instrument that gave most, since replicates are counted
/// for each instrument, with those entered by hand, which stand in for an instrument that could not export.
type Counts<'a> = HashMap<(i64, &'a str, &'a Condition), u32>;

fn by_cell<'a>(courses: &Courses, counts: &'a [CellCount]) -> Counts<'a> {
    let mut per_instrument: HashMap<(i64, &str, &Condition, &str), u32> = HashMap::new();
    for cell in counts {
        let session = courses.session(cell.session).map_or(cell.session, |placed| placed.session);
        *per_instrument.entry((session, &cell.measure, &cell.condition, &cell.instrument)).or_default() += cell.current;
    }
    let mut most: Counts<'a> = HashMap::new();
    let mut by_hand: Counts<'a> = HashMap::new();
    for ((session, measure, condition, instrument), count) in per_instrument {
        let counts = if instrument.is_empty() { &mut by_hand } else { &mut most };
        let kept = counts.entry((session, measure, condition)).or_default();
        *kept = (*kept).max(count);
    }
    for (cell, count) in by_hand {
        *most.entry(cell).or_default() += count;
    }
    most
}

fn judge_subject(
    plan: &Plan,
    subject: &str,
    entry: &Enrolled,
    course: &Course,
    counts: &Counts<'_>,
    said: &[&AccountedRow],
    today: NaiveDate,
) -> SubjectLine {
    let visits: Vec<VisitLine> =
        (0..plan.visits.len()).map(|visit| judge_visit(plan, visit, entry, course, counts, said, today)).collect();
    SubjectLine { subject: subject.to_owned(), status: status(entry, course, &visits, today), visits }
}

fn status(entry: &Enrolled, course: &Course, visits: &[VisitLine], today: NaiveDate) -> SubjectStatus {
    let wanting = visits.iter().any(|line| matches!(line.state, VisitState::Partial | VisitState::Missed));
    if entry.withdrawn.is_some_and(|day| day <= today) {
        SubjectStatus::Withdrawn
    } else if visits.iter().all(|line| line.state == VisitState::Complete) {
        SubjectStatus::Complete
    } else if course.sessions.is_empty() && !wanting {
        SubjectStatus::NotStarted
    } else if wanting {
        SubjectStatus::Incomplete
    } else {
        SubjectStatus::UpToDate
    }
}

fn judge_visit(
    plan: &Plan,
    visit: VisitIx,
    entry: &Enrolled,
    course: &Course,
    counts: &Counts<'_>,
    said: &[&AccountedRow],
    today: NaiveDate,
) -> VisitLine {
    let rule = &plan.visits[visit];
    let said: Vec<&&AccountedRow> = said.iter().filter(|row| row.visit == rule.code).collect();
    let mut cells = Vec::new();
    let mut counting: Option<(NaiveDate, i64, bool)> = None;
    for &measure in &rule.measures {
        let chosen = chosen_session(plan, course, visit, &plan.measures[measure].code);
        counting = counting.or(chosen);
        cells.extend(measure_cells(plan, measure, chosen.map(|chosen| chosen.1), counts, &said));
    }
    let span = course.span(plan, visit);
    let full = cells.iter().all(|cell| cell.current >= cell.expected);
    let any = cells.iter().any(|cell| cell.current > 0);
    let state = match span {
        _ if full => VisitState::Complete,
        Some(span) if !any && entry.withdrawn.is_some_and(|day| day < span.from && day <= today) => VisitState::Ended,
        None if !any && entry.withdrawn.is_some_and(|day| day <= today) => VisitState::Ended,
        None if plan.subject.anchor == Anchor::Visit(visit) => VisitState::Open,
        None => VisitState::Ahead,
        Some(span) if today < span.from => VisitState::Ahead,
        Some(span) if today <= span.until => VisitState::Open,
        Some(_) if any => VisitState::Partial,
        Some(_) => VisitState::Missed,
    };
    let missing = |cell: &&CellState| cell.current < cell.expected;
    VisitLine {
        visit: rule.code.clone(),
        state,
        off_window: counting.is_some_and(|(_, _, off)| off),
        session: counting.map(|(_, session, _)| session),
        day: counting.map(|(day, _, _)| day),
        from: span.map(|span| span.from),
        target: span.map(|span| span.target),
        until: span.map(|span| span.until),
        accounted: !full && cells.iter().filter(missing).all(|cell| cell.accounted.is_some()),
        measures: cells,
    }
}

/// The session that counts for a measure at a visit: its day, its number, whether it lies outside the window.
pub fn chosen_session(plan: &Plan, course: &Course, visit: VisitIx, measure: &str) -> Option<(NaiveDate, i64, bool)> {
    let with_measure = course
        .sessions
        .iter()
        .filter(|session| session.visit == Some(visit) && session.facts.measures.iter().any(|code| &**code == measure));
    let day = course.choose(plan, visit, with_measure.clone().map(|session| session.facts.day))?;
    with_measure
        .into_iter()
        .find(|session| session.facts.day == day)
        .map(|session| (day, session.session, session.off_window))
}

fn measure_cells(
    plan: &Plan,
    measure: usize,
    session: Option<i64>,
    counts: &Counts<'_>,
    said: &[&&AccountedRow],
) -> Vec<CellState> {
    let rule = &plan.measures[measure];
    let why = said.iter().rev().find(|row| row.measure.as_ref().is_none_or(|code| *code == rule.code));
    rule.cells()
        .iter()
        .map(|cell| {
            let condition = Condition::of_cell(rule, cell);
            let current = session.and_then(|session| counts.get(&(session, rule.code.as_str(), &condition)).copied());
            CellState {
                measure: rule.code.clone(),
                condition,
                expected: rule.replicates,
                current: current.unwrap_or(0),
                accounted: why.map(|row| row.why.clone()),
            }
        })
        .collect()
}

/// Enrolment so far, and a projection of it: arrivals as a Poisson process whose rate has a gamma distribution after
/// what was seen (Anisimov & Fedorov 2007, one centre), so that what is still to come is negative binomial.
fn enrolment(plan: &Plan, roster: &Roster, today: NaiveDate) -> Enrolment {
    let days = roster.subjects.values().filter_map(|entry| entry.enrolled).filter(|day| *day <= today);
    let enrolled = u32::try_from(days.count()).unwrap_or(u32::MAX);
    let mut result = Enrolment {
        target: plan.study.enrol.map(|enrol| enrol.target),
        enrolled,
        projected: None,
        projected_interval: None,
    };
    let Some(enrol) = plan.study.enrol else { return result };
    let gone = (today.min(enrol.until) - enrol.from).num_days() + 1;
    let left = (enrol.until - today.max(enrol.from)).num_days().max(0);
    // Once enrolment is over there is nothing to project.
    if gone < 1 || left < 1 || enrolled == 0 {
        return result;
    }
    let expected = f64::from(enrolled) * left as f64 / gone as f64;
    result.projected = Some(f64::from(enrolled) + expected);
    let share = gone as f64 / (gone + left) as f64;
    let (low, high) = negative_binomial_interval(f64::from(enrolled), share);
    result.projected_interval = Some((enrolled.saturating_add(low), enrolled.saturating_add(high)));
    result
}

/// The 10 % and 90 % points of the negative binomial distribution with `size` and success probability `share`, by
/// summing its probabilities upwards.
fn negative_binomial_interval(size: f64, share: f64) -> (u32, u32) {
    if share >= 1.0 {
        return (0, 0);
    }
    let mut ln_p = size * share.ln();
    let mut sum = 0.0;
    let mut low = None;
    for count in 0..1_000_000_u32 {
        sum += ln_p.exp();
        if low.is_none() && sum >= 0.1 {
            low = Some(count);
        }
        if sum >= 0.9 {
            return (low.unwrap_or(0), count);
        }
        let next = f64::from(count) + 1.0;
        ln_p += ((size + next - 1.0) / next).ln() + (1.0 - share).ln();
    }
    (low.unwrap_or(0), u32::MAX)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_projection_has_the_known_percentiles() {
        // scipy 1.17.1 (general-purpose reference library): nbinom.ppf([0.1, 0.9], 20, 0.5) = 12, 28.
        assert_eq!(negative_binomial_interval(20.0, 0.5), (12, 28));
        assert_eq!(negative_binomial_interval(20.0, 1.0), (0, 0));
    }
}
