//! What placing goes by: the plan in force, the roster, and every subject's course.
//!
//! Invariant: all of it comes from the records as they stood at one trail number, and from what the exports in hand say
//! about day 0.

use std::collections::{BTreeMap, HashMap};

use chrono::NaiveDate;
use revisant_schema::plan::{Measure, Plan, VisitIx, parse};
use revisant_schema::records::view::PlanVersion;
use revisant_schema::records::{ActNumber, Records, RecordsError, Result};
use revisant_schema::roster::Roster;
use revisant_schema::session::{Course, SessionFacts, UNSCHEDULED};

/// The plan, its version, and the roster.
#[derive(Debug, Clone)]
pub struct Rules {
    /// The plan in force.
    pub plan: Plan,
    /// Its version.
    pub version: i64,
    /// Of its files, in hexadecimal digits.
    pub hash: String,
    /// The roster.
    pub roster: Roster,
    /// The newest act that bears on placing.
    pub head: ActNumber,
}

impl Rules {
    /// The rules in force; `None` before the first plan.
    pub fn load(records: &Records) -> Result<Option<Self>> {
        let head = records.placing_head()?;
        let view = records.view()?;
        let Some(PlanVersion { version, files, .. }) = view.plan()? else { return Ok(None) };
        let (plan, _) = parse(&files).map_err(|faults| {
            RecordsError::Damaged(format!("plan version {version} was sound when filed and is not now: {faults}"))
        })?;
        Ok(Some(Self { plan, version, hash: files.sha256(), roster: view.roster()?, head }))
    }
}

/// A session's label, small: a visit, none, or unscheduled.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, PartialOrd, Ord)]
enum Label {
    None,
    Unscheduled,
    Visit(VisitIx),
}

/// The sessions that the exports in hand would add, by subject: which measures they hold, as bits.
#[derive(Debug, Default)]
pub struct Gathered {
    sessions: HashMap<String, BTreeMap<(NaiveDate, Label), u128>>,
}

impl Gathered {
    /// Notes that a row has a value of a measure.
    pub fn see(&mut self, plan: &Plan, subject: &str, day: NaiveDate, label: Option<&str>, measure: usize) {
        let label = match label {
            None => Label::None,
            Some(UNSCHEDULED) => Label::Unscheduled,
            Some(code) => plan.visit(code).map_or(Label::Unscheduled, |(visit, _)| Label::Visit(visit)),
        };
        if !self.sessions.contains_key(subject) {
            self.sessions.insert(subject.to_owned(), BTreeMap::new());
        }
        if let Some(sessions) = self.sessions.get_mut(subject) {
            *sessions.entry((day, label)).or_default() |= 1 << (measure.min(127));
        }
    }

    /// Takes in what another export says.
    pub fn join(&mut self, other: Self) {
        if self.sessions.is_empty() {
            self.sessions = other.sessions;
            return;
        }
        for (subject, sessions) in other.sessions {
            let own = self.sessions.entry(subject).or_default();
            sessions.into_iter().for_each(|(session, measures)| *own.entry(session).or_default() |= measures);
        }
    }

    fn facts(&self, plan: &Plan, subject: &str) -> Vec<SessionFacts> {
        let sessions = self.sessions.get(subject).into_iter().flatten();
        sessions
            .map(|((day, label), measures)| SessionFacts {
                session: i64::MAX,
                subject: subject.into(),
                day: *day,
                label: match label {
                    Label::None => None,
                    Label::Unscheduled => Some(UNSCHEDULED.into()),
                    Label::Visit(visit) => Some(plan.visits[*visit].code.as_str().into()),
                },
                measures: held_measures(plan, *measures),
            })
            .collect()
    }
}

fn held_measures(plan: &Plan, bits: u128) -> Vec<std::sync::Arc<str>> {
    let held = |(at, _): &(usize, &Measure)| bits >> (*at).min(127) & 1 == 1;
    plan.measures.iter().enumerate().filter(held).map(|(_, measure)| measure.code.as_str().into()).collect()
}

/// Every subject's course, from the records and the exports in hand, each worked out when first asked for.
pub struct CourseBook<'p> {
    plan: &'p Plan,
    roster: &'p Roster,
    gathered: Gathered,
    known: HashMap<String, Course>,
}

impl<'p> CourseBook<'p> {
    /// Opens the book.
    pub fn new(rules: &'p Rules, gathered: Gathered) -> Self {
        Self { plan: &rules.plan, roster: &rules.roster, gathered, known: HashMap::new() }
    }

    /// A subject's course.
    pub fn course(&mut self, records: &Records, subject: &str) -> Result<&Course> {
        if !self.known.contains_key(subject) {
            let mut facts = records.view()?.facts_of_subject(subject)?;
            facts.extend(self.gathered.facts(self.plan, subject));
            let enrolled = self.roster.subjects.get(subject).and_then(|entry| entry.enrolled);
            self.known.insert(subject.to_owned(), Course::derive(self.plan, enrolled, facts));
        }
        let lost = || RecordsError::Damaged(format!("the course of {subject} is lost"));
        self.known.get(subject).ok_or_else(lost)
    }
}
