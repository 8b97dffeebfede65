//! Which visit a session belongs to: derived, never stored.
//!
//! Invariants: the same facts, plan and roster give the same visits in whatever order they came; a label wins over the
//! date; a session without a label lies at the visit whose `counts` hold its day, or is unscheduled.
//!
//! Day 0 is the first session labelled with the anchor visit; for a subject who has none, the first day, on or after
//! enrolment, of a session without a label that holds a measure due at the anchor visit. With `anchor = "enrolment"`
//! it is the day of enrolment.

use std::collections::{BTreeMap, HashMap};
use std::sync::Arc;

use chrono::NaiveDate;

use crate::plan::windows::{self, Span};
use crate::plan::{Anchor, Choose, Plan, Tie, VisitIx};
use crate::roster::Roster;

/// The label of a session that belongs to no visit by somebody's word.
pub const UNSCHEDULED: &str = "unscheduled";

/// What is known of one session.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct SessionFacts {
    /// Its number in the records.
    pub session: i64,
    /// Whose.
    pub subject: Arc<str>,
    /// Local day of the study centre.
    pub day: NaiveDate,
    /// The visit's label, if there was one.
    pub label: Option<Arc<str>>,
    /// Codes of the measures of which it holds a current reading.
    pub measures: Vec<Arc<str>>,
}

/// What a session is to the plan.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Placed {
    /// The facts.
    pub facts: SessionFacts,
    /// Its visit; `None` = unscheduled.
    pub visit: Option<VisitIx>,
    /// Its day lies outside the visit's window.
    pub off_window: bool,
    /// The number that all sessions of the same subject, visit and day share.
    pub session: i64,
}

/// One subject's sessions and what follows from them.
#[derive(Debug, Clone, Default)]
pub struct Course {
    /// Day 0.
    pub day0: Option<NaiveDate>,
    /// By day.
    pub sessions: Vec<Placed>,
    /// For each visit of the plan the day from which its own day is counted.
    bases: Vec<Option<NaiveDate>>,
}

/// All subjects' courses.
#[derive(Debug, Clone, Default)]
pub struct Courses {
    /// By the subject's code.
    pub by_subject: BTreeMap<Arc<str>, Course>,
    places: HashMap<i64, (Arc<str>, usize)>,
}

/// The earliest days that may become a subject's day 0.
#[derive(Debug, Clone, Copy, Default, PartialEq, Eq)]
pub struct AnchorDays {
    /// Of a session labelled with the anchor visit.
    pub labelled: Option<NaiveDate>,
    /// Of a session without a label that holds a measure due at the anchor visit, on or after enrolment.
    pub unlabelled: Option<NaiveDate>,
}

impl AnchorDays {
    /// Takes one more session into account.
    pub fn see(
        &mut self,
        plan: &Plan,
        enrolled: Option<NaiveDate>,
        day: NaiveDate,
        label: Option<&str>,
        measure: &str,
    ) {
        let Anchor::Visit(anchor) = plan.subject.anchor else { return };
        let anchor = &plan.visits[anchor];
        match label {
            Some(label) if label == anchor.code => earlier(&mut self.labelled, day),
            Some(_) => {}
            None => {
                let due = anchor.measures.iter().any(|measure_ix| plan.measures[*measure_ix].code == measure);
                if due && enrolled.is_none_or(|enrolled| day >= enrolled) {
                    earlier(&mut self.unlabelled, day);
                }
            }
        }
    }

    /// Takes what another source saw into account.
    pub fn join(&mut self, other: AnchorDays) {
        other.labelled.into_iter().for_each(|day| earlier(&mut self.labelled, day));
        other.unlabelled.into_iter().for_each(|day| earlier(&mut self.unlabelled, day));
    }

    /// Day 0.
    pub fn day0(&self, plan: &Plan, enrolled: Option<NaiveDate>) -> Option<NaiveDate> {
        match plan.subject.anchor {
            Anchor::Enrolment => enrolled,
            Anchor::Visit(_) => self.labelled.or(self.unlabelled),
        }
    }
}

fn earlier(kept: &mut Option<NaiveDate>, day: NaiveDate) {
    *kept = Some(kept.map_or(day, |kept| kept.min(day)));
}

impl Course {
    /// Derives one subject's course from its sessions.
    pub fn derive(plan: &Plan, enrolled: Option<NaiveDate>, mut facts: Vec<SessionFacts>) -> Self {
        facts.sort_by_key(|facts| (facts.day, facts.session));
        let mut anchor = AnchorDays::default();
        for session in &facts {
            for measure in &session.measures {
                anchor.see(plan, enrolled, session.day, session.label.as_deref(), measure);
            }
        }
        let mut course = Self { day0: anchor.day0(plan, enrolled), ..Self::default() };
        course.bases = vec![None; plan.visits.len()];
        // `after` names an earlier visit of the plan, so that one pass in the plan's order settles every base.
        for visit in 0..plan.visits.len() {
            course.bases[visit] = match plan.visits[visit].after {
                None => course.day0,
                Some(earlier) => course.counting_day(plan, &facts, earlier),
            };
        }
        course.sessions = facts.into_iter().map(|facts| course.place(plan, facts)).collect();
        course.number_sessions();
        course
    }

    /// The day of the session that counts for `visit`, over all measures.
    fn counting_day(&self, plan: &Plan, facts: &[SessionFacts], visit: VisitIx) -> Option<NaiveDate> {
        let days = facts.iter().filter(|session| self.visit_of(plan, session).is_some_and(|(at, _)| at == visit));
        self.choose(plan, visit, days.map(|session| session.day))
    }

    /// Which of several days counts for a visit.
    pub fn choose(&self, plan: &Plan, visit: VisitIx, days: impl Iterator<Item = NaiveDate>) -> Option<NaiveDate> {
        let rule = &plan.visits[visit];
        let span = self.span(plan, visit);
        match (rule.choose, span) {
            (Choose::Last, _) => days.max(),
            (Choose::First, _) | (Choose::Nearest, None) => days.min(),
            (Choose::Nearest, Some(span)) => days.min_by_key(|day| {
                let later_first = match rule.tie {
                    Tie::Later => *day < span.target,
                    Tie::Earlier => *day > span.target,
                };
                (span.distance(*day), later_first)
            }),
        }
    }

    /// The dates of a visit; `None` while they cannot be known.
    pub fn span(&self, plan: &Plan, visit: VisitIx) -> Option<Span> {
        let base = self.bases.get(visit).copied().flatten()?;
        Some(windows::span(&plan.visits[visit], base))
    }

    /// The visit whose `counts` hold a day.
    pub fn visit_on(&self, plan: &Plan, day: NaiveDate) -> Option<(VisitIx, bool)> {
        windows::visit_on(plan, day, |visit| self.bases.get(visit).copied().flatten())
    }

    fn visit_of(&self, plan: &Plan, facts: &SessionFacts) -> Option<(VisitIx, bool)> {
        match facts.label.as_deref() {
            Some(UNSCHEDULED) => None,
            Some(label) => {
                let (visit, _) = plan.visit(label)?;
                let off = self.span(plan, visit).is_some_and(|span| !span.on_time(facts.day));
                Some((visit, off))
            }
            None => self.visit_on(plan, facts.day),
        }
    }

    fn place(&self, plan: &Plan, facts: SessionFacts) -> Placed {
        let found = self.visit_of(plan, &facts);
        Placed {
            session: facts.session,
            visit: found.map(|(visit, _)| visit),
            off_window: found.is_some_and(|(_, off)| off),
            facts,
        }
    }

    fn number_sessions(&mut self) {
        let mut first: HashMap<(Option<VisitIx>, NaiveDate), i64> = HashMap::new();
        for session in &mut self.sessions {
            session.session = *first.entry((session.visit, session.facts.day)).or_insert(session.session);
        }
    }
}

impl Courses {
    /// Derives every subject's course.
    pub fn derive(plan: &Plan, roster: &Roster, facts: impl IntoIterator<Item = SessionFacts>) -> Self {
        let mut by_subject: HashMap<Arc<str>, Vec<SessionFacts>> = HashMap::new();
        for session in facts {
            by_subject.entry(Arc::clone(&session.subject)).or_default().push(session);
        }
        for subject in roster.subjects.keys() {
            if !by_subject.contains_key(subject.as_str()) {
                by_subject.insert(subject.as_str().into(), vec![]);
            }
        }
        let mut courses = Self::default();
        courses.places.reserve(by_subject.values().map(Vec::len).sum());
        for (subject, facts) in by_subject {
            let enrolled = roster.subjects.get(&*subject).and_then(|entry| entry.enrolled);
            let course = Course::derive(plan, enrolled, facts);
            for (at, session) in course.sessions.iter().enumerate() {
                courses.places.insert(session.facts.session, (Arc::clone(&subject), at));
            }
            courses.by_subject.insert(subject, course);
        }
        courses
    }

    /// What a session of the records is to the plan.
    pub fn session(&self, session: i64) -> Option<&Placed> {
        let (subject, at) = self.places.get(&session)?;
        self.by_subject.get(subject)?.sessions.get(*at)
    }
}
