//! Days held against the plan: what visits' windows say of a way of reading dates, and of labels outside the rows.
//!
//! Invariant: windows decide between two ways of reading only where several subjects' sessions fit by one of them and
//! hardly any by the other; fewer are evidence for a person alone.

use std::collections::BTreeMap;

use chrono::NaiveDate;
use revisant_schema::plan::stamp::{CompiledStamp, Written};
use revisant_schema::plan::windows::{span, visit_on};
use revisant_schema::plan::{Anchor, Plan, Stamp};

use super::grid::{Grid, GridRow};
use super::labels::Meeting;
use super::place::{Against, Spot};
use super::rest::known_visits;

/// So many subjects' later sessions must fit by one way of reading.
const ENOUGH: usize = 5;

/// Reads days out of stamps written in one way.
pub struct Days(CompiledStamp);

impl Days {
    /// For stamps of this format.
    pub fn new(format: &str) -> Option<Self> {
        let stamp = match format {
            "iso" => Stamp::Iso,
            "serial" => Stamp::Serial,
            pattern => Stamp::Pattern(pattern.to_owned()),
        };
        CompiledStamp::new(&stamp).ok().map(Self)
    }

    /// The day as written, of a moment the day in its own zone.
    pub fn read(&self, text: &str) -> Option<NaiveDate> {
        Some(match self.0.read(text)?.written {
            Written::Date(day) => day,
            Written::Local(local) => local.date(),
            Written::Moment(moment) => moment.date_naive(),
        })
    }
}

/// Where a row's subject, moment and label are.
pub struct Spots<'a> {
    /// The subject.
    pub subject: &'a Spot,
    /// The moment.
    pub taken_at: &'a Spot,
    /// The column of visit labels.
    pub visit: usize,
}

/// How many subjects' later sessions fit the windows, and how many do not, when stamps are written so.
fn fits(grid: &Grid, plan: &Plan, against: Against<'_>, spots: &Spots<'_>, format: &str) -> Option<(usize, usize)> {
    let days = Days::new(format)?;
    let texts = grid.distinct(spots.visit);
    let meeting = Meeting::of(&texts, &known_visits(plan));
    let code = |text: &str| {
        let alike = meeting.alike.iter().find(|(from, _)| from == text).map(|(_, code)| code.clone());
        alike.unwrap_or_else(|| text.to_owned())
    };
    let mut sessions: BTreeMap<(String, usize), NaiveDate> = BTreeMap::new();
    for row in &grid.rows {
        let label = row.cells.get(spots.visit).map_or("", |cell| cell.text.as_str());
        let found = || {
            Some((
                against.code(&spots.subject.text(row))?,
                plan.visit(&code(label))?.0,
                days.read(&spots.taken_at.text(row))?,
            ))
        };
        let Some((subject, visit, day)) = found() else { continue };
        sessions.entry((subject, visit)).and_modify(|first| *first = day.min(*first)).or_insert(day);
    }
    let day0 = |subject: &str| match plan.subject.anchor {
        Anchor::Visit(anchor) => sessions.get(&(subject.to_owned(), anchor)).copied(),
        Anchor::Enrolment => against.roster.and_then(|roster| roster.subjects.get(subject)).and_then(|it| it.enrolled),
    };
    let is_anchor = |visit: usize| plan.subject.anchor == Anchor::Visit(visit);
    let mut by_subject: BTreeMap<&str, bool> = BTreeMap::new();
    for ((subject, visit), day) in &sessions {
        let (Some(start), Some(it)) = (day0(subject), plan.visits.get(*visit)) else { continue };
        if !is_anchor(*visit) && it.after.is_none() {
            let fit = span(it, start).counts(*day);
            by_subject.entry(subject).and_modify(|all| *all &= fit).or_insert(fit);
        }
    }
    let fitting = by_subject.values().filter(|fit| **fit).count();
    Some((fitting, by_subject.len() - fitting))
}

/// The one way of reading by which the sessions fit the visits' windows, and how many subjects' do.
pub fn settled_by_windows<'f>(
    grid: &Grid,
    plan: &Plan,
    against: Against<'_>,
    spots: &Spots<'_>,
    formats: &'f [String],
) -> Option<(&'f str, usize)> {
    let counted: Option<Vec<(usize, usize)>> =
        formats.iter().map(|format| fits(grid, plan, against, spots, format)).collect();
    let counted = counted?;
    let good = |(fit, not): &(usize, usize)| *fit >= ENOUGH && *fit >= *not * 4;
    let bad = |(fit, not): &(usize, usize)| *fit * 4 <= *not;
    let mut fitting = counted.iter().enumerate().filter(|(_, counts)| good(counts));
    let (Some((at, (fit, _))), None) = (fitting.next(), fitting.next()) else { return None };
    let rest_bad = counted.iter().enumerate().all(|(other, counts)| other == at || bad(counts));
    rest_bad.then_some((formats.get(at)?.as_str(), *fit))
}

/// Whether the day of every row that a label stands for lies in that visit's window already, so that the label adds
/// nothing; only where day 0 is known without labels.
pub fn dates_agree(
    grid: &Grid,
    plan: &Plan,
    against: Against<'_>,
    (subject, taken_at, format): (&Spot, &Spot, &str),
    label: &dyn Fn(&GridRow) -> Option<usize>,
) -> bool {
    let (Anchor::Enrolment, Some(roster), Some(days)) = (plan.subject.anchor, against.roster, Days::new(format)) else {
        return false;
    };
    let mut any = false;
    for row in &grid.rows {
        let Some(visit) = label(row) else { continue };
        let (Some(code), Some(day)) = (against.code(&subject.text(row)), days.read(&taken_at.text(row))) else {
            continue;
        };
        let Some(enrolled) = roster.subjects.get(&code).and_then(|it| it.enrolled) else { return false };
        if visit_on(plan, day, |_| Some(enrolled)).map(|(found, _)| found) != Some(visit) {
            return false;
        }
        any = true;
    }
    any
}
