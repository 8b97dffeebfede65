//! The first half of placing: what a row says by itself, by the plan and the roster.
//!
//! Invariants: nothing is guessed: every text is either what the plan says it may be, or held with the reason; a row
//! whose values are all missing asks nothing; the outcome depends on the row, the plan, the roster and the clock of
//! collection alone, never on other rows (but for doubled local times, which the export's order may settle).

use std::borrow::Cow;
use std::cell::{Cell, RefCell};
use std::collections::{BTreeMap, HashMap};
use std::sync::Arc;

use chrono::{DateTime, NaiveDate, NaiveDateTime, Utc};
use chrono_tz::Tz;
use regex::Regex;
use revisant_schema::hold::{Answer, Reason};
use revisant_schema::plan::stamp::{CompiledStamp, Written};
use revisant_schema::plan::{
    Affine, ConditionFactor, Instrument, LevelRule, LimitRule, MeasureIx, MeasureRule, Place, Plan, Reader, Source,
    UnitRule, ValueRule, VisitIx, units,
};
use revisant_schema::reading::Condition;
use revisant_schema::roster::{Roster, tidy};
use revisant_schema::session::UNSCHEDULED;
use sha2::{Digest, Sha256};

use super::clock::{self, Local};
use super::number;
use crate::intake::read::{At, Row, RowFault, Rows};

/// Something that a person must look at.
#[derive(Debug, Clone, PartialEq)]
pub struct Held {
    /// Why.
    pub reason: Reason,
    /// The value's column; empty: the whole row.
    pub column: String,
    /// What is wrong, in words.
    pub wrong: String,
    /// The likeliest answers, best first.
    pub likely: Vec<String>,
    /// The reading it is about.
    pub about: Option<i64>,
}

impl Held {
    /// A row's fault.
    pub fn row(reason: Reason, wrong: impl Into<String>) -> Self {
        Self { reason, column: String::new(), wrong: wrong.into(), likely: vec![], about: None }
    }

    /// With the likeliest answers.
    pub fn likely(mut self, likely: Vec<String>) -> Self {
        self.likely = likely;
        self
    }

    /// On one value.
    pub fn on(mut self, column: &str) -> Self {
        self.column = column.to_owned();
        self
    }

    /// About a filed reading.
    pub fn about(mut self, reading: i64) -> Self {
        self.about = Some(reading);
        self
    }
}

/// What became of a row.
#[derive(Debug, Clone, PartialEq)]
pub enum RowOutcome {
    /// Every value is missing.
    NoValue,
    /// The whole row is held.
    Held(Held),
    /// It is whose and when it says; its values follow.
    Ready(Box<Resolved>),
}

/// A row whose subject, time and visit are known.
#[derive(Debug, Clone, PartialEq)]
pub struct Resolved {
    /// The subject's code.
    pub subject: String,
    /// Local day of the study centre.
    pub day: NaiveDate,
    /// The moment; `None`: only the day is known.
    pub moment: Option<DateTime<Utc>>,
    /// The time as written.
    pub written: String,
    /// Whether that is finer than the minute.
    pub finer: bool,
    /// The visit's code, or `unscheduled`; `None` = no label.
    pub label: Option<String>,
    /// A person has said which visit it is, whatever the date says.
    pub label_decided: bool,
    /// The replicate's number, where the export says one.
    pub replicate: Option<u32>,
    /// Empty when not said.
    pub operator: String,
    /// One for each value of the row.
    pub values: Vec<ValueOutcome>,
    /// The day lies outside the subject's enrolment: the row is held for it, unless it was filed when the roster did
    /// not say so yet.
    pub outside: Option<Held>,
}

/// What became of one value.
#[derive(Debug, Clone, PartialEq)]
pub enum ValueOutcome {
    /// Missing by the plan.
    Missing,
    /// Held.
    Held(Held),
    /// A number in the measure's unit.
    Number(PlacedValue),
}

/// A value that may be filed.
#[derive(Debug, Clone, PartialEq)]
pub struct PlacedValue {
    /// Its column.
    pub column: Arc<str>,
    /// Its measure.
    pub measure: MeasureIx,
    /// Its condition's text.
    pub condition: String,
    /// As exported.
    pub text: String,
    /// The number as exported.
    pub exported: Option<f64>,
    /// Its unit as exported; empty: the measure's.
    pub unit: String,
    /// In the measure's unit.
    pub number: f64,
    /// `<` or `>`.
    pub mark: Option<&'static str>,
    /// The replicate's number, where the column says one.
    pub replicate: Option<u32>,
    /// What a person said about its replicate or its change.
    pub decided: Option<Answer>,
}

/// Answers that bind to one row: by column, the empty one for the row.
#[derive(Debug, Clone, Default, PartialEq)]
pub struct Decided {
    answers: HashMap<String, Vec<(Reason, Answer)>>,
}

impl Decided {
    /// Adds an answer.
    pub fn add(&mut self, column: &str, reason: Reason, answer: Answer) {
        self.answers.entry(column.to_owned()).or_default().push((reason, answer));
    }

    /// Whether there is none.
    pub fn is_empty(&self) -> bool {
        self.answers.is_empty()
    }

    fn find<T>(&self, column: &str, pick: impl Fn(Reason, &Answer) -> Option<T>) -> Option<T> {
        if self.answers.is_empty() {
            return None;
        }
        // The newest answer wins.
        self.answers.get(column)?.iter().rev().find_map(|(reason, answer)| pick(*reason, answer))
    }

    fn stands(&self, column: &str, wanted: Reason) -> bool {
        self.find(column, |reason, answer| (reason == wanted && *answer == Answer::AsItStands).then_some(())).is_some()
    }
}

/// A place with its columns found.
#[derive(Debug)]
enum Finder<'p> {
    Column(usize, &'p BTreeMap<String, String>),
    Columns(Vec<usize>, &'p BTreeMap<String, String>),
    Preamble(&'p str, &'p BTreeMap<String, String>),
    Settled(String),
    Parts(Vec<Finder<'p>>, &'p BTreeMap<String, String>),
}

/// Where an export lies.
#[derive(Debug, Clone, Copy)]
pub struct Whereabouts<'a> {
    /// Its file's name.
    pub file_name: &'a str,
    /// Its folder below the instrument's, with `/`; empty for none.
    pub folder: &'a str,
}

impl<'p> Finder<'p> {
    fn new(place: &'p Place, wanted: &[String], whereabouts: Whereabouts<'_>) -> Self {
        let slot = |name: &str| wanted.iter().position(|known| known == name).unwrap_or(usize::MAX);
        match &place.source {
            Source::Column(name) => Self::Column(slot(name), &place.map),
            Source::Columns(names) => Self::Columns(names.iter().map(|name| slot(name)).collect(), &place.map),
            Source::Preamble(key) => Self::Preamble(key, &place.map),
            Source::FileName(regex) => Self::Settled(mapped(&place.map, &group(regex, whereabouts.file_name))),
            Source::Folder(regex) => Self::Settled(mapped(&place.map, &group(regex, whereabouts.folder))),
            Source::Fixed(text) => Self::Settled(mapped(&place.map, text)),
            Source::Parts(parts) => {
                Self::Parts(parts.iter().map(|part| Self::new(part, wanted, whereabouts)).collect(), &place.map)
            }
        }
    }

    fn find<'r>(&'r self, row: &'r Row, rows: &'r dyn Rows) -> Cow<'r, str> {
        match self {
            Self::Column(slot, map) => mapped_cow(map, trim(row.cell(*slot))),
            Self::Columns(slots, map) => {
                let texts: Vec<&str> = slots.iter().map(|slot| trim(row.cell(*slot))).collect();
                Cow::Owned(mapped(map, texts.join(" ").trim()))
            }
            Self::Preamble(key, map) => mapped_cow(map, rows.preamble(key).unwrap_or_default().trim()),
            Self::Settled(text) => Cow::Borrowed(text),
            Self::Parts(parts, map) => {
                let texts: Vec<Cow<'_, str>> = parts.iter().map(|part| part.find(row, rows)).collect();
                Cow::Owned(mapped(map, texts.join(" ").trim()))
            }
        }
    }
}

impl Finder<'_> {
    /// What it finds outside the row.
    fn outside(&self, rows: &dyn Rows, put: &mut impl FnMut(&str)) {
        match self {
            Self::Column(..) | Self::Columns(..) => {}
            Self::Preamble(key, _) => put(rows.preamble(key).unwrap_or_default()),
            Self::Settled(text) => put(text),
            Self::Parts(parts, _) => parts.iter().for_each(|part| part.outside(rows, put)),
        }
    }
}

/// What a reader finds in an export's path: two files with the same bytes and the same facts are one export.
pub fn path_facts(reader: &Reader, file_name: &str, folder: &str) -> Vec<String> {
    let places = [Some(&reader.subject), Some(&reader.taken_at), reader.visit.as_ref(), reader.replicate.as_ref()];
    let levels = reader.values.iter().flat_map(|value| {
        value.condition.iter().filter_map(|(_, level)| match level {
            LevelRule::Found(place) => Some(place),
            LevelRule::Fixed(_) => None,
        })
    });
    let mut facts = Vec::new();
    for place in places.into_iter().flatten().chain(levels) {
        collect_path_facts(place, file_name, folder, &mut facts);
    }
    facts
}

fn collect_path_facts(place: &Place, file_name: &str, folder: &str, facts: &mut Vec<String>) {
    match &place.source {
        Source::FileName(regex) => facts.push(group(regex, file_name)),
        Source::Folder(regex) => facts.push(group(regex, folder)),
        Source::Parts(parts) => parts.iter().for_each(|part| collect_path_facts(part, file_name, folder, facts)),
        Source::Column(_) | Source::Columns(_) | Source::Preamble(_) | Source::Fixed(_) => {}
    }
}

/// [`str::trim`], at once where no blank stands around a text, as hardly ever one does behind a reader.
fn trim(text: &str) -> &str {
    match text.as_bytes() {
        [first, .., last] if first.is_ascii_graphic() && last.is_ascii_graphic() => text,
        _ => text.trim(),
    }
}

fn group(regex: &Regex, text: &str) -> String {
    let found = regex.captures(text).and_then(|groups| groups.get(1));
    found.map_or_else(String::new, |group| group.as_str().trim().to_owned())
}

fn mapped(map: &BTreeMap<String, String>, text: &str) -> String {
    map.get(text).map_or(text, String::as_str).to_owned()
}

fn mapped_cow<'r>(map: &'r BTreeMap<String, String>, text: &'r str) -> Cow<'r, str> {
    Cow::Borrowed(map.get(text).map_or(text, String::as_str))
}

/// Resolves the rows of one export.
pub struct Resolver<'p> {
    plan: &'p Plan,
    instrument: &'p Instrument,
    roster: &'p Roster,
    now: DateTime<Utc>,
    stamp: CompiledStamp,
    subject: Finder<'p>,
    taken_at: Finder<'p>,
    visit: Option<Finder<'p>>,
    replicate: Option<Finder<'p>>,
    operator: Option<Finder<'p>>,
    values: Vec<ValueFinder<'p>>,
    /// The visit that a label named last: rows of one visit stand together.
    visit_before: Cell<VisitIx>,
    /// Subjects met, by the text that names them.
    subjects: RefCell<HashMap<String, Listed>>,
    /// Settled moments of doubled local times, by row.
    pub settled: HashMap<At, DateTime<Utc>>,
}

/// A subject of the roster.
#[derive(Debug, Clone)]
struct Listed {
    code: String,
    enrolled: Option<NaiveDate>,
    withdrawn: Option<NaiveDate>,
}

/// Texts that name subjects remembered at once.
const MOST_MET: usize = 4096;

struct ValueFinder<'p> {
    rule: &'p ValueRule,
    slot: usize,
    /// The rule's column, to be shared by the values found in it.
    column: Arc<str>,
    /// The condition, where it is the same in every row.
    condition: Option<String>,
    measure: Option<Finder<'p>>,
    unit: Option<Finder<'p>>,
    levels: Vec<(&'p str, Result<&'p str, Finder<'p>>)>,
    conversions: RefCell<HashMap<(String, MeasureIx), Option<Affine>>>,
}

/// What the stamp of a row comes to.
enum Taken {
    Moment(DateTime<Utc>, bool, NaiveDate),
    Day(NaiveDate),
}

impl<'p> Resolver<'p> {
    /// Prepares for one export. `wanted` are the columns in the order of their slots.
    pub fn new(
        plan: &'p Plan,
        instrument: &'p Instrument,
        roster: &'p Roster,
        now: DateTime<Utc>,
        wanted: &[String],
        whereabouts: Whereabouts<'_>,
    ) -> Result<Self, String> {
        let reader = &instrument.reader;
        let finder = |place: &'p Place| Finder::new(place, wanted, whereabouts);
        Ok(Self {
            plan,
            instrument,
            roster,
            now,
            stamp: CompiledStamp::new(&reader.stamp)?,
            subject: finder(&reader.subject),
            taken_at: finder(&reader.taken_at),
            visit: reader.visit.as_ref().map(finder),
            replicate: reader.replicate.as_ref().map(finder),
            operator: reader.operator.as_ref().map(finder),
            values: reader.values.iter().map(|rule| ValueFinder::new(plan, rule, wanted, whereabouts)).collect(),
            visit_before: Cell::new(0),
            subjects: Default::default(),
            settled: HashMap::new(),
        })
    }

    /// The slot of a value's column; of anything else, that of the first column that the plan names.
    pub fn slot_of(&self, column: &str) -> usize {
        self.values.iter().find(|value| value.rule.column == column).map_or(0, |value| value.slot)
    }

    /// Whether every value of the row is missing by the plan.
    pub fn nothing_there(&self, row: &Row, rows: &dyn Rows) -> bool {
        row.fault.is_none() && self.values.iter().all(|value| self.is_missing(value, row, rows))
    }

    fn is_missing(&self, value: &ValueFinder<'_>, row: &Row, rows: &dyn Rows) -> bool {
        let text = trim(row.cell(value.slot));
        if self.instrument.reader.missing.iter().any(|word| word == text) {
            return true;
        }
        text.starts_with('<')
            && value
                .measure_ix(self.plan, row, rows)
                .is_ok_and(|measure| self.plan.measures[measure].below_limit == LimitRule::Missing)
    }

    /// The local time of a row, for settling doubled hours: nothing when it has no value or no readable stamp.
    pub fn local(&self, row: &Row, rows: &dyn Rows) -> Option<Local> {
        if row.fault.is_some() || self.nothing_there(row, rows) {
            return None;
        }
        match self.stamp.read_in(&self.taken_at.find(row, rows), rows.since_1904())?.written {
            Written::Local(local) => Some(clock::in_zone(self.instrument.time_zone, local)),
            Written::Moment(moment) => Some(Local::Once(moment.to_utc())),
            Written::Date(_) => None,
        }
    }

    /// Sixteen bytes that stand for the row as written: the instrument, the row's text, and what was found about it
    /// outside the row (in the file's name, its folder or its preamble).
    pub fn row_hash(&self, row: &Row, rows: &dyn Rows) -> [u8; 16] {
        let mut hasher = Sha256::new();
        let mut put = |text: &str| {
            hasher.update(text.as_bytes());
            hasher.update([0xff]);
        };
        put(&self.instrument.code);
        put(&row.raw);
        let places = [Some(&self.subject), Some(&self.taken_at), self.visit.as_ref(), self.replicate.as_ref()];
        for finder in places.into_iter().flatten() {
            finder.outside(rows, &mut put);
        }
        let digest = hasher.finalize();
        digest.first_chunk().copied().unwrap_or_default()
    }

    /// The subject's code that a row names, tidied as the plan says; empty where it names none.
    pub fn subject_code(&self, row: &Row, rows: &dyn Rows) -> String {
        tidy(&self.subject.find(row, rows), &self.plan.subject.normalise)
    }

    /// Resolves one row, with what people have decided about it.
    pub fn resolve(&self, row: &Row, rows: &dyn Rows, decided: &Decided) -> RowOutcome {
        if self.nothing_there(row, rows) {
            return RowOutcome::NoValue;
        }
        match self.resolve_row(row, rows, decided) {
            Ok(resolved) => RowOutcome::Ready(resolved),
            Err(held) => RowOutcome::Held(*held),
        }
    }

    fn resolve_row(&self, row: &Row, rows: &dyn Rows, decided: &Decided) -> Result<Box<Resolved>, Box<Held>> {
        row_fault(row, decided)?;
        let subject = self.subject_of(row, rows, decided)?;
        let (taken, written) = self.taken(row, rows, decided)?;
        let (moment, finer, day) = match taken {
            Taken::Moment(moment, finer, day) => (Some(moment), finer, day),
            Taken::Day(day) => (None, false, day),
        };
        let outside = check_enrolment(&subject, day, decided).err();
        // Of two faults the one that is looked for first is told.
        let first = |later: Box<Held>| outside.clone().unwrap_or(later);
        let (label, label_decided) = self.label(row, rows, decided).map_err(first)?;
        let replicate = self.replicate_of(row, rows).map_err(first)?;
        let outside = outside.map(|held| *held);
        let values = self.values.iter().map(|value| self.value(value, row, rows, day, decided)).collect();
        let operator = self.operator.as_ref().map(|finder| finder.find(row, rows).into_owned()).unwrap_or_default();
        Ok(Box::new(Resolved {
            subject: subject.code,
            day,
            moment,
            written,
            finer,
            label,
            label_decided,
            replicate,
            operator,
            values,
            outside,
        }))
    }

    fn subject_of(&self, row: &Row, rows: &dyn Rows, decided: &Decided) -> Result<Listed, Box<Held>> {
        let said = decided.find("", |_, answer| match answer {
            Answer::Subject(code) => Some(code.clone()),
            _ => None,
        });
        let found = said.map_or_else(|| self.subject.find(row, rows), Cow::Owned);
        if let Some(met) = self.subjects.borrow().get(found.as_ref()) {
            return Ok(met.clone());
        }
        let listed = self.listed(&found)?;
        let mut subjects = self.subjects.borrow_mut();
        if subjects.len() >= MOST_MET {
            subjects.clear();
        }
        subjects.insert(found.into_owned(), listed.clone());
        Ok(listed)
    }

    /// The subject that a text names.
    fn listed(&self, found: &str) -> Result<Listed, Box<Held>> {
        let code = tidy(found, &self.plan.subject.normalise);
        if code.trim().is_empty() {
            let wrong = format!("no subject is named: {} is empty", place_words(&self.instrument.reader.subject));
            return Err(Box::new(Held::row(Reason::NoSubject, wrong)));
        }
        let fits = self.plan.subject.pattern.is_match(&code);
        match self.roster.subjects.get(&code) {
            Some(entry) if fits => Ok(Listed { code, enrolled: entry.enrolled, withdrawn: entry.withdrawn }),
            _ => Err(Box::new(self.unlisted(&code, fits))),
        }
    }

    fn unlisted(&self, code: &str, fits: bool) -> Held {
        let why = match self.roster.subjects.keys().next() {
            None => "is not on the roster, which has nobody yet".to_owned(),
            Some(_) if fits => "is not on the roster".to_owned(),
            Some(other) => format!("is not on the roster, nor written as this study's codes are (such as {other})"),
        };
        let held = Held::row(Reason::UnknownSubject, format!("\"{code}\" {why}"));
        held.likely(nearest(code, self.roster.subjects.keys().map(String::as_str)))
    }

    fn taken(&self, row: &Row, rows: &dyn Rows, decided: &Decided) -> Result<(Taken, String), Box<Held>> {
        let written = trim(&self.taken_at.find(row, rows)).to_owned();
        let said = decided.find("", |_, answer| match answer {
            Answer::Moment(text) => Some(Ok(text.clone())),
            Answer::Date(day) => Some(Err(*day)),
            _ => None,
        });
        let taken = match said {
            Some(Err(day)) => Taken::Day(day),
            Some(Ok(text)) => self.decided_moment(&text)?,
            None => self.stamped(row, rows, &written)?,
        };
        let future = match taken {
            Taken::Moment(moment, ..) => (moment > self.now).then(|| written.clone()),
            Taken::Day(day) => (day > self.today()).then(|| day.to_string()),
        };
        if let Some(what) = future {
            let today = self.today();
            let wrong = format!("\"{what}\" lies in the future: the export was read on {today}");
            return Err(Box::new(Held::row(Reason::FutureStamp, wrong)));
        }
        Ok((taken, written))
    }

    fn unreadable_stamp(&self, written: &str) -> Held {
        use revisant_schema::plan::{Stamp, stamp};
        let as_planned = match &self.instrument.reader.stamp {
            Stamp::Iso => "such as 2026-02-28T14:05".to_owned(),
            Stamp::Serial => "a workbook's number of the day".to_owned(),
            Stamp::Pattern(pattern) => example(pattern),
        };
        let wrong = format!("\"{written}\" is no time as the plan expects it, {as_planned}");
        // A time that reads as ISO 8601 is most likely that.
        let iso = Some(written.replacen(' ', "T", 1)).filter(|text| stamp::read(&Stamp::Iso, text).is_some());
        Held::row(Reason::UnreadableStamp, wrong).likely(iso.into_iter().collect())
    }

    fn today(&self) -> NaiveDate {
        self.now.with_timezone(&self.plan.study.time_zone).date_naive()
    }

    fn stamped(&self, row: &Row, rows: &dyn Rows, written: &str) -> Result<Taken, Box<Held>> {
        if written.is_empty() {
            let wrong = format!("no time is said: {} is empty", place_words(&self.instrument.reader.taken_at));
            return Err(Box::new(Held::row(Reason::NoStamp, wrong)));
        }
        let Some(read) = self.stamp.read_in(written, rows.since_1904()) else {
            return Err(Box::new(self.unreadable_stamp(written)));
        };
        match read.written {
            Written::Date(day) => Ok(Taken::Day(day)),
            Written::Moment(moment) => Ok(self.at(moment.to_utc(), moment.date_naive(), read.finer)),
            Written::Local(local) => {
                let moment = match clock::in_zone(self.instrument.time_zone, local) {
                    Local::Once(moment) => moment,
                    Local::Twice(early, late) => match self.settled.get(&row.at()) {
                        Some(moment) => *moment,
                        None => return Err(Box::new(doubled(written, self.instrument.time_zone, early, late))),
                    },
                    Local::Never => return Err(Box::new(skipped(written, self.instrument.time_zone, local))),
                };
                Ok(self.at_local(moment, local.date(), read.finer))
            }
        }
    }

    /// A moment that was written as a local time, on a day of the instrument's clock.
    fn at_local(&self, moment: DateTime<Utc>, day: NaiveDate, finer: bool) -> Taken {
        // A right clock that keeps the study centre's own time shows the study centre's day.
        if self.instrument.clock.is_empty() && self.instrument.time_zone == self.plan.study.time_zone {
            return Taken::Moment(moment, finer, day);
        }
        self.at(moment, day, finer)
    }

    /// A moment with the clock's error added, and its local day at the study centre.
    fn at(&self, moment: DateTime<Utc>, clock_day: NaiveDate, finer: bool) -> Taken {
        let moment = moment.checked_add_signed(clock::error_on(self.instrument, clock_day)).unwrap_or(moment);
        Taken::Moment(moment, finer, moment.with_timezone(&self.plan.study.time_zone).date_naive())
    }

    /// A moment that a person gave: with an offset as it is; else local time of the study centre. It is the true
    /// moment, so that no error of the instrument's clock is added.
    fn decided_moment(&self, text: &str) -> Result<Taken, Box<Held>> {
        let zone = self.plan.study.time_zone;
        let read = revisant_schema::plan::stamp::read(&revisant_schema::plan::Stamp::Iso, text);
        let moment = match read.map(|read| read.written) {
            Some(Written::Moment(moment)) => moment.to_utc(),
            Some(Written::Local(local)) => match clock::in_zone(zone, local) {
                Local::Once(moment) => moment,
                Local::Twice(early, late) => return Err(Box::new(doubled(text, zone, early, late))),
                Local::Never => return Err(Box::new(skipped(text, zone, local))),
            },
            Some(Written::Date(day)) => return Ok(Taken::Day(day)),
            None => {
                let wrong = format!("\"{text}\" is no moment; write it as 2026-02-28T14:05");
                return Err(Box::new(Held::row(Reason::UnreadableStamp, wrong)));
            }
        };
        Ok(Taken::Moment(moment, true, moment.with_timezone(&zone).date_naive()))
    }

    fn label(&self, row: &Row, rows: &dyn Rows, decided: &Decided) -> Result<(Option<String>, bool), Box<Held>> {
        let said = decided.find("", |_, answer| match answer {
            Answer::Visit(code) => Some(code.clone()),
            _ => None,
        });
        if let Some(code) = said {
            return Ok((Some(code), true));
        }
        let Some(finder) = &self.visit else { return Ok((None, false)) };
        let found = finder.find(row, rows);
        let text = trim(&found);
        if text.is_empty() {
            Ok((None, false))
        } else if text == UNSCHEDULED || self.is_visit(text) {
            Ok((Some(text.to_owned()), false))
        } else {
            let codes = self.plan.visits.iter().map(|visit| visit.code.as_str());
            let held = Held::row(Reason::UnknownVisit, format!("\"{text}\" is no visit of the plan"));
            Err(Box::new(held.likely(nearest_or_all(text, codes))))
        }
    }

    fn is_visit(&self, code: &str) -> bool {
        if self.plan.visits.get(self.visit_before.get()).is_some_and(|visit| visit.code == code) {
            return true;
        }
        let Some((visit, _)) = self.plan.visit(code) else { return false };
        self.visit_before.set(visit);
        true
    }

    fn replicate_of(&self, row: &Row, rows: &dyn Rows) -> Result<Option<u32>, Box<Held>> {
        let Some(finder) = &self.replicate else { return Ok(None) };
        let found = finder.find(row, rows);
        let text = trim(&found);
        if text.is_empty() {
            return Ok(None);
        }
        match text.parse::<u32>() {
            Ok(number) => Ok(Some(number)),
            Err(_) => {
                let wrong = format!("\"{text}\" is no replicate's number, which is 1, 2, 3 and so on");
                Err(Box::new(Held::row(Reason::UnknownReplicate, wrong)))
            }
        }
    }

    fn value(
        &self,
        value: &ValueFinder<'_>,
        row: &Row,
        rows: &dyn Rows,
        day: NaiveDate,
        decided: &Decided,
    ) -> ValueOutcome {
        if self.is_missing(value, row, rows) {
            return ValueOutcome::Missing;
        }
        match self.place_value(value, row, rows, day, decided) {
            Ok(Some(placed)) => ValueOutcome::Number(placed),
            Ok(None) => ValueOutcome::Missing,
            Err(held) => ValueOutcome::Held(held.on(&value.rule.column)),
        }
    }

    fn place_value(
        &self,
        value: &ValueFinder<'_>,
        row: &Row,
        rows: &dyn Rows,
        day: NaiveDate,
        decided: &Decided,
    ) -> Result<Option<PlacedValue>, Held> {
        let column = value.rule.column.as_str();
        let measure_ix = self.measure_of(value, row, rows, decided)?;
        let measure = &self.plan.measures[measure_ix];
        let condition = self.condition_of(value, measure_ix, row, rows, decided)?;
        let (unit, conversion) = self.unit_of(value, measure_ix, row, rows, decided)?;
        let Some(number) = self.number_of(value, measure_ix, row, decided)? else { return Ok(None) };
        let in_unit = number.used * conversion.times + conversion.plus;
        let corrected = self.corrected(measure_ix, in_unit, day);
        if let Some((low, high)) = measure.plausible
            && !(low..=high).contains(&corrected)
            && !decided.stands(column, Reason::ImplausibleValue)
        {
            let read = row.cell(value.slot).trim();
            let is = match corrected == number.exported {
                true => format!("{corrected} {}", measure.unit),
                false => format!("\"{read}\" is {} {}, which", short(corrected), measure.unit),
            };
            let wrong = format!("{is} lies outside {low} to {high}, the plausible bounds of {}", measure.code);
            return Err(Held::row(Reason::ImplausibleValue, wrong));
        }
        let about_replicate = decided.find(column, |_, answer| {
            matches!(answer, Answer::KeepOld | Answer::TakeNew | Answer::Replicate(_) | Answer::InsteadOf(_))
                .then(|| answer.clone())
        });
        let row_replicate = decided.find("", |_, answer| {
            matches!(answer, Answer::Replicate(_) | Answer::InsteadOf(_)).then(|| answer.clone())
        });
        Ok(Some(PlacedValue {
            column: value.column.clone(),
            measure: measure_ix,
            condition,
            text: trim(row.cell(value.slot)).to_owned(),
            exported: Some(number.exported),
            unit,
            number: corrected,
            mark: number.mark,
            replicate: value.rule.replicate,
            decided: about_replicate.or(row_replicate),
        }))
    }

    fn corrected(&self, measure: MeasureIx, number: f64, day: NaiveDate) -> f64 {
        self.instrument.correction(measure, day).map_or(number, |entry| number * entry.times + entry.plus)
    }

    fn measure_of(
        &self,
        value: &ValueFinder<'_>,
        row: &Row,
        rows: &dyn Rows,
        decided: &Decided,
    ) -> Result<MeasureIx, Held> {
        let said = decided.find(&value.rule.column, |_, answer| match answer {
            Answer::Measure(code) => Some(code.clone()),
            _ => None,
        });
        if let Some((measure, _)) = said.and_then(|code| self.plan.measure(&code)) {
            return Ok(measure);
        }
        value.measure_ix(self.plan, row, rows).map_err(|text| {
            let codes = self.plan.measures.iter().map(|measure| measure.code.as_str());
            let wrong = match text.is_empty() {
                true => "the row names no measure".to_owned(),
                false => format!("\"{text}\" is no measure of the plan"),
            };
            Held::row(Reason::UnknownMeasure, wrong).likely(nearest_or_all(&text, codes))
        })
    }

    fn condition_of(
        &self,
        value: &ValueFinder<'_>,
        measure: MeasureIx,
        row: &Row,
        rows: &dyn Rows,
        decided: &Decided,
    ) -> Result<String, Held> {
        let said = decided.find(&value.rule.column, |_, answer| match answer {
            Answer::Condition(levels) => Some(levels.clone()),
            _ => None,
        });
        if let (None, Some(condition)) = (&said, &value.condition) {
            return Ok(condition.clone());
        }
        let mut condition = Condition::default();
        for factor in &self.plan.measures[measure].conditions {
            let decided_level = said.as_ref().and_then(|levels| levels.get(&factor.code));
            let found = match decided_level {
                Some(level) => Cow::Borrowed(level.as_str()),
                None => value.level(&factor.code, row, rows),
            };
            if !factor.levels.iter().any(|level| *level == found) {
                let wrong = match found.is_empty() {
                    true => format!("the row does not say which {}", factor.code),
                    false => format!("\"{found}\" is no level of {}", factor.code),
                };
                let near = nearest_or_all(&found, factor.levels.iter().map(String::as_str));
                let likely = near.iter().map(|level| format!("{}={level}", factor.code)).collect();
                return Err(Held::row(Reason::UnknownCondition, wrong).likely(likely));
            }
            condition.0.insert(factor.code.clone(), found.into_owned());
        }
        Ok(condition.to_string())
    }

    /// The unit as exported, and how it becomes the measure's.
    fn unit_of(
        &self,
        value: &ValueFinder<'_>,
        measure: MeasureIx,
        row: &Row,
        rows: &dyn Rows,
        decided: &Decided,
    ) -> Result<(String, Affine), Held> {
        const SAME: Affine = Affine { times: 1.0, plus: 0.0 };
        let said = decided.find(&value.rule.column, |_, answer| match answer {
            Answer::Unit(code) => Some(code.clone()),
            _ => None,
        });
        let (code, stated) = match (&value.rule.unit, said) {
            (_, Some(code)) => (code, None),
            (UnitRule::Fixed { code, convert }, None) => (code.clone(), *convert),
            (UnitRule::Found { convert, .. }, None) => {
                let code = value.unit.as_ref().map(|finder| finder.find(row, rows).into_owned()).unwrap_or_default();
                if code.is_empty() {
                    let target = &self.plan.measures[measure].unit;
                    let wrong = format!("the row names no unit; the plan's is {target}");
                    return Err(Held::row(Reason::UnknownUnit, wrong).likely(vec![target.clone()]));
                }
                (code, *convert)
            }
            (UnitRule::Unsaid, None) => match rows.unit(value.slot).map(str::trim) {
                None | Some("") => return Ok((String::new(), SAME)),
                Some(code) => (code.to_owned(), None),
            },
        };
        if let Some(conversion) = stated {
            return Ok((code, conversion));
        }
        let target = &self.plan.measures[measure].unit;
        if code == *target {
            return Ok((String::new(), SAME));
        }
        let mut conversions = value.conversions.borrow_mut();
        let known = conversions.entry((code.clone(), measure)).or_insert_with(|| units::convert(&code, target));
        match known {
            Some(conversion) => Ok((code, *conversion)),
            None => {
                let converts = |meant: &String| units::convert(meant, target).is_some();
                let meant = units::meant(&code).filter(converts).unwrap_or_else(|| target.clone());
                Err(Held::row(Reason::UnknownUnit, unit_fault(&code, target)).likely(vec![meant]))
            }
        }
    }

    fn number_of(
        &self,
        value: &ValueFinder<'_>,
        measure: MeasureIx,
        row: &Row,
        decided: &Decided,
    ) -> Result<Option<Number>, Held> {
        let reader = &self.instrument.reader;
        let column = value.rule.column.as_str();
        let said = decided.find(column, |_, answer| match answer {
            Answer::Value(text) => Some(text.clone()),
            _ => None,
        });
        let parse = |text: &str| number::parse(text, reader.decimal_mark, reader.group_mark);
        if let Some(text) = &said {
            // A person may write the number with the plan's marks or with a point.
            let number = parse(text).or_else(|| number::parse(text, '.', None));
            if let Some(number) = number {
                return Ok(Some(Number { exported: number, used: number, mark: None }));
            }
        }
        let text = trim(row.cell(value.slot));
        let as_it_stands = if row.is_number(value.slot) { number::parse(text, '.', None) } else { parse(text) };
        if let Some(number) = as_it_stands {
            return Ok(Some(Number { exported: number, used: number, mark: None }));
        }
        let unreadable = || Held::row(Reason::UnreadableValue, not_a_number(text, reader));
        let (mark, limit) = number::limit(text).ok_or_else(unreadable)?;
        let limit = parse(limit).ok_or_else(unreadable)?;
        self.beyond_limit(measure, column, text, mark, limit, decided)
    }

    fn beyond_limit(
        &self,
        measure: MeasureIx,
        column: &str,
        text: &str,
        mark: &'static str,
        limit: f64,
        decided: &Decided,
    ) -> Result<Option<Number>, Held> {
        let measure = &self.plan.measures[measure];
        let (rule, reason) = match mark {
            "<" => (measure.below_limit, Reason::BelowLimit),
            _ => (measure.above_limit, Reason::AboveLimit),
        };
        let used = match rule {
            _ if decided.stands(column, reason) => limit,
            LimitRule::Limit => limit,
            LimitRule::Half => limit / 2.0,
            LimitRule::Missing => return Ok(None),
            LimitRule::Hold => {
                let side = if mark == "<" { "below" } else { "above" };
                let wrong = format!("\"{text}\" says only that it lies {side} {limit}, and not what it is");
                return Err(Held::row(reason, wrong));
            }
        };
        Ok(Some(Number { exported: limit, used, mark: Some(mark) }))
    }
}

/// A number as exported, and as used before conversion.
struct Number {
    exported: f64,
    used: f64,
    mark: Option<&'static str>,
}

impl<'p> ValueFinder<'p> {
    fn new(plan: &'p Plan, rule: &'p ValueRule, wanted: &[String], whereabouts: Whereabouts<'_>) -> Self {
        let finder = |place: &'p Place| Finder::new(place, wanted, whereabouts);
        Self {
            rule,
            column: rule.column.as_str().into(),
            condition: fixed_condition(plan, rule),
            slot: wanted.iter().position(|name| *name == rule.column).unwrap_or(usize::MAX),
            measure: match &rule.measure {
                MeasureRule::Fixed(_) => None,
                MeasureRule::Found(place) => Some(finder(place)),
            },
            unit: match &rule.unit {
                UnitRule::Found { place, .. } => Some(finder(place)),
                UnitRule::Unsaid | UnitRule::Fixed { .. } => None,
            },
            levels: rule
                .condition
                .iter()
                .map(|(factor, level)| match level {
                    LevelRule::Fixed(level) => (factor.as_str(), Ok(level.as_str())),
                    LevelRule::Found(place) => (factor.as_str(), Err(finder(place))),
                })
                .collect(),
            conversions: Default::default(),
        }
    }

    /// The measure, or the text that names none.
    fn measure_ix(&self, plan: &Plan, row: &Row, rows: &dyn Rows) -> Result<MeasureIx, String> {
        match (&self.rule.measure, &self.measure) {
            (MeasureRule::Fixed(measure), _) => Ok(*measure),
            (MeasureRule::Found(_), Some(finder)) => {
                let text = finder.find(row, rows);
                plan.measure(text.trim()).map(|(measure, _)| measure).ok_or_else(|| text.trim().to_owned())
            }
            (MeasureRule::Found(_), None) => Err(String::new()),
        }
    }

    fn level<'r>(&'r self, factor: &str, row: &'r Row, rows: &'r dyn Rows) -> Cow<'r, str> {
        match self.levels.iter().find(|(code, _)| *code == factor) {
            Some((_, Ok(level))) => Cow::Borrowed(level),
            Some((_, Err(finder))) => finder.find(row, rows),
            None => Cow::Borrowed(""),
        }
    }
}

fn unit_fault(code: &str, target: &str) -> String {
    match units::apart(code, target) {
        Some(why) => format!(
            "the unit \"{code}\" does not convert to {target}: {why}. If it is right, the plan needs `times` for it"
        ),
        None => format!("the unit \"{code}\" is no UCUM code, and the plan's unit is {target}"),
    }
}

/// The condition of a value, where the plan alone says it.
fn fixed_condition(plan: &Plan, rule: &ValueRule) -> Option<String> {
    let MeasureRule::Fixed(measure) = rule.measure else { return None };
    let level = |factor: &ConditionFactor| {
        let (_, level) = rule.condition.iter().find(|(code, _)| *code == factor.code)?;
        let LevelRule::Fixed(level) = level else { return None };
        factor.levels.contains(level).then(|| (factor.code.clone(), level.clone()))
    };
    let levels = plan.measures.get(measure)?.conditions.iter().map(level).collect::<Option<_>>()?;
    Some(Condition(levels).to_string())
}

fn row_fault(row: &Row, decided: &Decided) -> Result<(), Box<Held>> {
    let held = match &row.fault {
        None => return Ok(()),
        Some(RowFault::Unreadable(_)) if decided.stands("", Reason::UnreadableRow) => return Ok(()),
        Some(RowFault::Unfinished) if decided.stands("", Reason::UnfinishedRow) => return Ok(()),
        Some(RowFault::Unreadable(wrong)) => Held::row(Reason::UnreadableRow, wrong.clone()),
        Some(RowFault::Unfinished) => {
            Held::row(Reason::UnfinishedRow, "the last row has no line end and may have been cut inside a number")
        }
    };
    Err(Box::new(held))
}

fn check_enrolment(listed: &Listed, day: NaiveDate, decided: &Decided) -> Result<(), Box<Held>> {
    let subject = &listed.code;
    // A person who names the subject has seen the dates; the answer to these two reasons is the subject.
    let confirmed = |wanted: Reason| {
        decided
            .find("", |reason, answer| {
                (reason == wanted && matches!(answer, Answer::Subject(code) if code == subject)).then_some(())
            })
            .is_some()
    };
    if let Some(enrolled) = listed.enrolled.filter(|enrolled| day < *enrolled)
        && !confirmed(Reason::BeforeEnrolment)
    {
        let wrong = format!("{day} lies before {subject}'s enrolment on {enrolled}");
        return Err(Box::new(Held::row(Reason::BeforeEnrolment, wrong).likely(vec![subject.clone()])));
    }
    if let Some(withdrawn) = listed.withdrawn.filter(|withdrawn| day > *withdrawn)
        && !confirmed(Reason::AfterWithdrawal)
    {
        let wrong = format!("{day} lies after {subject}'s withdrawal on {withdrawn}");
        return Err(Box::new(Held::row(Reason::AfterWithdrawal, wrong).likely(vec![subject.clone()])));
    }
    Ok(())
}

fn doubled(written: &str, zone: Tz, early: DateTime<Utc>, late: DateTime<Utc>) -> Held {
    let wrong = format!("\"{written}\" was there twice in {}: clocks went back over it", zone.name());
    Held::row(Reason::ClockFold, wrong).likely([early, late].map(|moment| local_text(moment, zone)).to_vec())
}

fn skipped(written: &str, zone: Tz, local: NaiveDateTime) -> Held {
    let wrong = format!("\"{written}\" was never there in {}: clocks went forward over it", zone.name());
    let around = clock::around_gap(zone, local).into_iter().flatten();
    Held::row(Reason::ClockGap, wrong).likely(around.map(|moment| local_text(moment, zone)).collect())
}

/// A moment as a person may answer with it.
fn local_text(moment: DateTime<Utc>, zone: Tz) -> String {
    moment.with_timezone(&zone).to_rfc3339_opts(chrono::SecondsFormat::AutoSi, true)
}

/// A time as a pattern writes it.
fn example(pattern: &str) -> String {
    use std::fmt::Write;
    let moment = DateTime::from_timestamp(1_772_287_500, 0).unwrap_or_default();
    let mut text = String::new();
    match write!(text, "{}", moment.format(pattern)) {
        Ok(()) => format!("such as {text}"),
        Err(_) => format!("as \"{pattern}\" says"),
    }
}

/// What a place is, in words.
fn place_words(place: &Place) -> String {
    match &place.source {
        Source::Column(name) => format!("the column \"{name}\""),
        Source::Columns(names) => format!("each of the columns \"{}\"", names.join("\", \"")),
        Source::Preamble(key) => format!("\"{key}\" above the header"),
        Source::FileName(_) => "what the plan looks for in the file's name".to_owned(),
        Source::Folder(_) => "what the plan looks for in the folder's name".to_owned(),
        Source::Fixed(_) => "what the plan says".to_owned(),
        Source::Parts(parts) => parts.iter().map(place_words).collect::<Vec<_>>().join(" and "),
    }
}

/// A number in six digits, for the eye.
fn short(number: f64) -> String {
    let rounded: f64 = format!("{number:.5e}").parse().unwrap_or(number);
    rounded.to_string()
}

/// Why a text is no number, with the marks that the plan expects where it has one of another kind.
fn not_a_number(text: &str, reader: &Reader) -> String {
    let other = if reader.decimal_mark == '.' { ',' } else { '.' };
    match text.contains(other) && number::parse(text, other, None).is_some() {
        true => {
            format!("\"{text}\" is no number with the decimal mark that the plan states (\"{}\")", reader.decimal_mark)
        }
        false => format!("\"{text}\" is no number"),
    }
}

/// The nearest codes, or all where none is near and there are few.
fn nearest_or_all<'a>(text: &str, codes: impl Iterator<Item = &'a str> + Clone) -> Vec<String> {
    const FEW: usize = 6;
    let near = nearest(text, codes.clone());
    if near.is_empty() && codes.clone().count() <= FEW { codes.map(str::to_owned).collect() } else { near }
}

/// The codes nearest to `text`, best first: at most three, one or two edits away.
pub fn nearest<'a>(text: &str, codes: impl Iterator<Item = &'a str>) -> Vec<String> {
    let text = text.to_lowercase();
    let most = (text.chars().count() / 3).clamp(1, 2);
    let mut near: Vec<(usize, &str)> = codes
        .map(|code| (edits(&text, &code.to_lowercase()), code))
        .filter(|(distance, _)| *distance <= most)
        .collect();
    near.sort_unstable();
    near.into_iter().take(3).map(|(_, code)| code.to_owned()).collect()
}

/// Edits of one character (insert, delete, replace, swap neighbours) that turn one text into the other: the optimal
/// string alignment distance (Damerau 1964).
fn edits(one: &str, other: &str) -> usize {
    let (one, other): (Vec<char>, Vec<char>) = (one.chars().collect(), other.chars().collect());
    let mut before: Vec<usize> = vec![];
    let mut last: Vec<usize> = (0..=other.len()).collect();
    for row in 1..=one.len() {
        let mut now = vec![row];
        for column in 1..=other.len() {
            let change = usize::from(one[row - 1] != other[column - 1]);
            let mut best = (last[column] + 1).min(now[column - 1] + 1).min(last[column - 1] + change);
            let swapped =
                row > 1 && column > 1 && one[row - 1] == other[column - 2] && one[row - 2] == other[column - 1];
            if swapped {
                best = best.min(before[column - 2] + 1);
            }
            now.push(best);
        }
        before = std::mem::replace(&mut last, now);
    }
    last.last().copied().unwrap_or(0)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn near_codes_come_best_first() {
        let codes = ["DV-011", "DV-012", "DV-110"];
        assert_eq!(nearest("DV-O11", codes.into_iter()), ["DV-011", "DV-012", "DV-110"]);
        assert_eq!(nearest("DV-101", codes.into_iter()), ["DV-011", "DV-110", "DV-012"]);
        assert!(nearest("ZZ", codes.into_iter()).is_empty());
        assert_eq!(edits("abcd", "acbd"), 1);
    }
}
