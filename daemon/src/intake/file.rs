//! File: from placed readings and holds to one published export.
//!
//! Invariants: an export is published by one act or not at all; every row handed out by its reader ends in exactly one
//! class of the account, and an account that does not add up is never published; what was placed by rules that have
//! changed meanwhile is thrown away and placed again.

use std::collections::{HashMap, HashSet};
use std::time::{Duration, Instant};

use chrono::{DateTime, Utc};
use revisant_schema::hold::{HoldState, Reason};
use revisant_schema::plan::{Instrument, ReExport};
use revisant_schema::records::exports::ExportState;
use revisant_schema::records::raw::RawSource;
use revisant_schema::records::view::{HoldRow, day_number};
use revisant_schema::records::{Act, Cell, Doer, Filing, NewHold, NewReading, Records, RecordsError, Result};
use revisant_schema::session::UNSCHEDULED;
use serde_json::json;

use super::account::{Account, Class};
use super::place::clock::{Folds, Local};
use super::place::identity::{Case, Judge, Slotted, Verdict};
use super::place::resolve::{Decided, Held, Resolved, Resolver, RowOutcome, ValueOutcome, Whereabouts};
use super::read::{self, At, Bytes, FileFault, Row, Rows};
use super::rules::{CourseBook, Gathered, Rules};

/// Rows after which an unpublished part is committed, so that others may write in between.
const STAGE: i64 = 10_000;
/// Rows after which it is asked whether to stop.
pub(super) const ASK: u64 = 1_000;
/// Exports, and time, after which finished exports are committed together.
const GROUP: u32 = 256;
const GROUP_TIME: Duration = Duration::from_millis(250);

/// A row as written: 16 bytes of its hash, then its order among equals in the export.
pub type RowKey = [u8; 24];

/// Holds by the row as written, for exports that bring old rows again.
#[derive(Debug, Default)]
pub struct HeldBook {
    rows: HashMap<(String, [u8; 16]), Vec<HoldRow>>,
}

impl HeldBook {
    /// Every hold of the records that is on a row.
    pub fn load(records: &Records) -> Result<Self> {
        let mut book = Self::default();
        for hold in records.view()?.holds(false)? {
            book.add(hold);
        }
        Ok(book)
    }

    fn add(&mut self, hold: HoldRow) {
        let Some(base) = hold.row_key.first_chunk::<16>() else { return };
        if hold.line.is_some() {
            self.rows.entry((hold.instrument.clone(), *base)).or_default().push(hold);
        }
    }

    /// Takes in a hold that was just opened, so that later exports of the same collect know it.
    fn opened(&mut self, instrument: &str, capture: i64, hold: i64, row: &Row, held: &Held, key: &RowKey) {
        self.add(HoldRow {
            hold,
            act: 0,
            since: String::new(),
            capture,
            export: String::new(),
            instrument: instrument.to_owned(),
            reason: held.reason,
            line: Some(row.line as i64),
            cell: None,
            bytes: bytes_of(row),
            column: held.column.clone(),
            row_key: key.to_vec(),
            row: None,
            wrong: held.wrong.clone(),
            likely: vec![],
            state: HoldState::Open,
            answer: None,
            ended: None,
            about: held.about,
        });
    }

    fn forget(&mut self, capture: i64) {
        self.rows.values_mut().for_each(|holds| holds.retain(|hold| hold.capture != capture));
    }

    fn of_instrument(&self, instrument: &str) -> HashSet<[u8; 16]> {
        self.rows.keys().filter(|(code, _)| code == instrument).map(|(_, base)| *base).collect()
    }

    /// Takes in a decision that was just made.
    pub fn decide(&mut self, hold: i64, answer: &revisant_schema::hold::Answer) {
        for row in self.rows.values_mut().flatten().filter(|row| row.hold == hold) {
            row.state = HoldState::Decided;
            row.answer = Some(answer.clone());
        }
    }

    fn of_row(&self, instrument: &str, key: &RowKey) -> Vec<&HoldRow> {
        let base: [u8; 16] = key.first_chunk().copied().unwrap_or_default();
        let held = self.rows.get(&(instrument.to_owned(), base));
        held.into_iter().flatten().filter(|hold| hold.row_key == key).collect()
    }
}

/// What people have decided about a row.
pub fn decided_of<'h>(holds: impl IntoIterator<Item = &'h HoldRow>) -> Decided {
    let mut decided = Decided::default();
    for hold in holds {
        if let (HoldState::Decided, Some(answer)) = (hold.state, &hold.answer) {
            decided.add(&hold.column, hold.reason, answer.clone());
        }
    }
    decided
}

/// The key of a row that is the `order`-th of its kind in its export.
pub fn row_key(base: [u8; 16], order: u64) -> RowKey {
    let mut key = [0; 24];
    key[..16].copy_from_slice(&base);
    key[16..].copy_from_slice(&order.to_be_bytes());
    key
}

/// An export that is to be filed.
pub struct Export {
    /// The instrument's place in the plan.
    pub instrument: usize,
    /// Its path, as the records name it.
    pub path: String,
    /// Its file's name.
    pub file_name: String,
    /// Its folder below the instrument's.
    pub below: String,
    /// The number of its capture.
    pub capture: i64,
    /// Its bytes.
    pub source: RawSource,
    /// How many they are.
    pub size: u64,
    /// The capture of the same path whose bytes these begin with.
    pub continues: Option<Continued>,
    /// Another serial number was accepted by a person.
    pub accept_serial: bool,
}

/// What is known of the rows that a path held before and still holds at the same place.
#[derive(Debug, Clone, Default)]
pub struct Continued {
    /// The newest capture of that path.
    pub capture: i64,
    /// How many bytes it had.
    pub size: i64,
    /// Its rows were read.
    pub read: bool,
    /// Open holds of that capture and those it continues, by row; those on the file under `None`.
    pub holds: HashMap<Option<At>, Vec<HoldRow>>,
}

/// What one export came to.
#[derive(Debug, Default, Clone, PartialEq, Eq)]
pub struct Outcome {
    /// Readings filed.
    pub filed: u64,
    /// Values filed before.
    pub already: u64,
    /// Holds opened.
    pub held: u64,
    /// Lines that are held, also by older holds.
    pub held_lines: u64,
    /// Lines that are filed, now or before.
    pub known_lines: u64,
    /// Held as a whole file.
    pub file_held: bool,
    /// Holds that were settled.
    pub settled: u64,
    /// Readings that the source no longer holds.
    pub gone: u64,
}

impl Outcome {
    /// The export's state.
    pub fn state(&self) -> ExportState {
        match (self.file_held, self.held_lines > 0, self.known_lines > 0) {
            (true, ..) | (false, true, false) => ExportState::Held,
            (false, true, true) => ExportState::PartFiled,
            (false, false, _) => ExportState::Filed,
        }
    }
}

/// Which rows are placed.
pub enum Scope<'s> {
    /// All of an export that has just come.
    Whole,
    /// Those lines alone, with their holds: open ones that are tried again, or such as a person has just decided.
    Lines {
        /// By row.
        lines: &'s HashMap<At, Vec<HoldRow>>,
        /// A person has just decided them: what is wrong still is a hold of its own.
        decided: bool,
    },
}

/// Lines that leave the class `held`, by where they go.
#[derive(Debug, Default, Clone, Copy, PartialEq, Eq)]
pub struct Moved {
    /// Filed now.
    pub filed: u64,
    /// Filed before.
    pub already: u64,
    /// Without a value by the plan of now.
    pub no_value: u64,
    /// No longer a row by the plan of now.
    pub ignored: u64,
}

impl Moved {
    fn lines(self) -> u64 {
        self.filed + self.already + self.no_value + self.ignored
    }

    /// The account after the move.
    pub fn apply(self, mut account: Account) -> Account {
        // Never more than are held: the account stays balanced whatever older programs counted.
        if self.lines() <= account.held {
            account.held -= self.lines();
            account.filed += self.filed;
            account.already += self.already;
            account.no_value += self.no_value;
            account.ignored += self.ignored;
        }
        account
    }
}

/// What placing an export's rows gave, not yet published.
#[derive(Default)]
pub struct Placing {
    /// The account.
    pub account: Account,
    /// The outcome so far.
    pub outcome: Outcome,
    /// Holds to be settled by the act that publishes.
    pub settle: Vec<i64>,
    /// Holds whose row was met, of those tried again.
    pub tried: HashSet<i64>,
    /// Lines that are held no more, of those tried again.
    pub moved: Moved,
    matched: HashSet<i64>,
}

/// Places and publishes exports, many in one transaction.
pub struct Filer<'a> {
    /// The records.
    pub records: &'a mut Records,
    /// What placing goes by.
    pub rules: &'a Rules,
    /// Every subject's course.
    pub courses: CourseBook<'a>,
    /// Holds by the row as written.
    pub held: HeldBook,
    /// Who files.
    pub doer: &'a Doer,
    /// The moment of collection.
    pub now: DateTime<Utc>,
    /// Whether to stop.
    pub stop: &'a dyn Fn() -> bool,
    /// Everything in one transaction, however large: for who does not hold the intake's lock, since the intake clears
    /// what it finds unpublished.
    pub in_one: bool,
    open: bool,
    pending: u32,
    since: Instant,
}

impl<'a> Filer<'a> {
    /// Prepares; `gathered` is what the exports in hand say about day 0.
    pub fn new(records: &'a mut Records, rules: &'a Rules, gathered: Gathered, doer: &'a Doer) -> Result<Self> {
        let courses = CourseBook::new(rules, gathered);
        let held = HeldBook::load(records)?;
        let now = records.now();
        Ok(Self {
            records,
            rules,
            courses,
            held,
            doer,
            now,
            stop: &|| false,
            in_one: false,
            open: false,
            pending: 0,
            since: Instant::now(),
        })
    }

    /// Opens a transaction if none is, and sees that the rules are still those in force.
    pub fn begin(&mut self) -> Result<()> {
        if !self.open {
            self.records.begin()?;
            self.open = true;
            self.pending = 0;
            self.since = Instant::now();
        }
        self.check_rules()
    }

    fn check_rules(&self) -> Result<()> {
        match self.records.placing_head()? == self.rules.head {
            true => Ok(()),
            false => Err(RecordsError::Moved),
        }
    }

    /// Commits what is finished, when it is time or `now`.
    pub fn commit(&mut self, now: bool) -> Result<()> {
        self.pending += 1;
        if self.open && (now || self.pending >= GROUP || self.since.elapsed() >= GROUP_TIME) {
            self.open = false;
            self.records.commit()?;
        }
        Ok(())
    }

    /// Whether something finished is not committed yet.
    pub fn is_open(&self) -> bool {
        self.open
    }

    /// Gives up what is not committed.
    pub fn give_up(&mut self) {
        if self.open {
            self.open = false;
            self.records.roll_back();
        }
    }

    /// Places an export's rows into a new filing. On a fault of the file, nothing of it stays.
    pub fn place(
        &mut self,
        export: &Export,
        scope: &Scope<'_>,
    ) -> Result<(Filing, std::result::Result<Placing, FileFault>)> {
        let mut filing = self.records.new_filing(Some(export.capture))?;
        let placed = self.place_rows(export, scope, &mut filing);
        match placed {
            Ok(Ok(placing)) => Ok((filing, Ok(placing))),
            Ok(Err(fault)) => {
                self.records.clear_filing(filing.id)?;
                self.held.forget(export.capture);
                Ok((self.records.new_filing(Some(export.capture))?, Err(fault)))
            }
            // There may be much to clear, and little time: the next start does it.
            Err(RecordsError::Stopped) => Err(RecordsError::Stopped),
            Err(error) => {
                // The first error is the one worth telling.
                let _ = self.records.clear_filing(filing.id);
                Err(error)
            }
        }
    }

    fn place_rows(
        &mut self,
        export: &Export,
        scope: &Scope<'_>,
        filing: &mut Filing,
    ) -> Result<std::result::Result<Placing, FileFault>> {
        let rules = self.rules;
        let instrument = &rules.plan.instruments[export.instrument];
        let wanted = read::wanted(&instrument.reader);
        let whereabouts = Whereabouts { file_name: &export.file_name, folder: &export.below };
        let resolver = Resolver::new(&rules.plan, instrument, &rules.roster, self.now, &wanted, whereabouts);
        let mut resolver = resolver.map_err(RecordsError::Refused)?;
        let mut rows = match read::open(&instrument.reader, &export.source) {
            Ok(rows) => rows,
            Err(fault) => return file_fault(fault),
        };
        let mut run = Run::new(export, instrument, scope, &self.held);
        let mut row = Row::default();
        let mut first = true;
        for at in 0_u64.. {
            if at % ASK == 0 && (self.stop)() {
                return Err(RecordsError::Stopped);
            }
            match rows.next_row(&mut row) {
                Ok(true) => {}
                Ok(false) => break,
                Err(fault) => return file_fault(fault),
            }
            if std::mem::take(&mut first)
                && let Some(fault) = other_serial(instrument, export, rows.as_ref())
            {
                return Ok(Err(fault));
            }
            if let Err(fault) = run.settle_doubled(&mut resolver, export, &row, rows.as_ref()) {
                return file_fault(fault);
            }
            let here = Here { resolver: &resolver, row: &row, rows: rows.as_ref() };
            self.place_row(scope, filing, &here, &mut run)?;
            self.stage_when_due(filing, &mut run)?;
        }
        let mut placing = run.placing;
        placing.account.take(rows.counts(), rows.lines());
        placing.matched = run.judge.matched;
        match scope {
            Scope::Whole if !placing.account.balanced() => Err(out_of_balance(export, &placing.account)),
            _ => Ok(Ok(placing)),
        }
    }

    fn stage_when_due(&mut self, filing: &mut Filing, run: &mut Run<'_>) -> Result<()> {
        if !self.in_one && filing.readings() / STAGE > run.staged {
            run.staged = filing.readings() / STAGE;
            self.records.stage(filing)?;
            self.check_rules()?;
        }
        Ok(())
    }

    fn place_row(&mut self, scope: &Scope<'_>, filing: &mut Filing, here: &Here<'_>, run: &mut Run<'_>) -> Result<()> {
        let mut turn = match scope {
            Scope::Whole if run.covered(here.row) => return self.stays(filing, here, run),
            Scope::Whole => self.turn_of_new(here, run),
            Scope::Lines { lines, .. } => match lines.get(&here.row.at()) {
                Some(tried) => self.turn_of_tried(tried, run),
                None => return Ok(()),
            },
        };
        if turn.dismissed {
            turn.class = Class::Already;
        } else if !self.sighted(filing, here, &mut turn, "")? {
            match here.resolver.resolve(here.row, here.rows, &turn.decided) {
                RowOutcome::NoValue => {}
                RowOutcome::Held(held) => self.hold(filing, here, &held, &mut turn, run)?,
                RowOutcome::Ready(resolved) => match self.late_fault(&resolved)? {
                    Some(held) if !self.placed_before(&resolved, &turn, run)? => {
                        self.hold(filing, here, &held, &mut turn, run)?;
                    }
                    _ => self.place_values(filing, here, &resolved, &mut turn, run)?,
                },
            }
        }
        run.end_row(scope, here.row, &turn);
        Ok(())
    }

    /// The turn of a row that has just come. Where exports bring old rows again, holds on its like bind.
    fn turn_of_new<'t>(&self, here: &Here<'_>, run: &mut Run<'_>) -> Turn<'t> {
        if run.again.is_empty() {
            return Turn::default();
        }
        let base = here.resolver.row_hash(here.row, here.rows);
        if !run.again.contains(&base) {
            return Turn::default();
        }
        let key = row_key(base, run.next_order(base));
        Turn::of(key, &self.held.of_row(&run.instrument.code, &key), &[])
    }

    /// The turn of a row that is tried again.
    fn turn_of_tried<'t>(&self, tried: &'t [HoldRow], run: &Run<'_>) -> Turn<'t> {
        let Some(first) = tried.first() else { return Turn::default() };
        let key: RowKey = first.row_key.as_slice().try_into().unwrap_or_default();
        let mut like = self.held.of_row(&run.instrument.code, &key);
        like.retain(|hold| hold.capture == first.capture || run.instrument.re_export != ReExport::New);
        Turn::of(key, &like, tried)
    }

    /// A row that stands where it stood in the path's older bytes.
    fn stays(&mut self, filing: &mut Filing, here: &Here<'_>, run: &mut Run<'_>) -> Result<()> {
        let open = run.open_holds(here.row.at());
        let class = if !open.is_empty() {
            for hold in open {
                self.records.add_sighting(filing, hold, Some(here.row.line as i64))?;
            }
            Class::Held
        } else if here.resolver.nothing_there(here.row, here.rows) {
            Class::NoValue
        } else {
            run.placing.outcome.already += 1;
            Class::Already
        };
        run.count(class, here.row.lines);
        Ok(())
    }

    /// Whether a column (the empty one: the row) is held already; if so, that it was seen again is noted.
    fn sighted(&mut self, filing: &mut Filing, here: &Here<'_>, turn: &mut Turn<'_>, column: &str) -> Result<bool> {
        let mut any = false;
        for (hold, on) in &turn.open {
            if on == column {
                self.records.add_sighting(filing, *hold, Some(here.row.line as i64))?;
                any = true;
            }
        }
        if any {
            turn.class = Class::Held;
        }
        Ok(any)
    }

    /// Whether label and date point to different visits.
    fn disagrees(&mut self, resolved: &Resolved) -> Result<Option<Held>> {
        let label = resolved.label.as_deref().filter(|label| *label != UNSCHEDULED && !resolved.label_decided);
        let plan = &self.rules.plan;
        let Some((label, (visit, _))) = label.and_then(|label| Some((label, plan.visit(label)?))) else {
            return Ok(None);
        };
        let course = self.courses.course(self.records, &resolved.subject)?;
        if course.span(plan, visit).is_none_or(|span| span.counts(resolved.day)) {
            return Ok(None);
        }
        let other = course.visit_on(plan, resolved.day).filter(|(other, _)| *other != visit);
        Ok(other.map(|(other, _)| {
            let other = &plan.visits[other].code;
            let wrong = format!("the label says {label}, and {} lies in the window of {other}", resolved.day);
            Held::row(Reason::VisitDisagrees, wrong).likely(vec![label.to_owned(), other.clone()])
        }))
    }

    /// A fault of the row that depends on what may become known after it was filed: roster and day 0.
    fn late_fault(&mut self, resolved: &Resolved) -> Result<Option<Held>> {
        match &resolved.outside {
            Some(held) => Ok(Some(held.clone())),
            None => self.disagrees(resolved),
        }
    }

    /// Whether the row came before and was judged by what was then known: some value of it is filed, or held.
    fn placed_before(&mut self, resolved: &Resolved, turn: &Turn<'_>, run: &Run<'_>) -> Result<bool> {
        if !turn.open.is_empty() {
            return Ok(true);
        }
        for value in &resolved.values {
            if let ValueOutcome::Number(value) = value {
                let measure = &self.rules.plan.measures[value.measure];
                if run.judge.came_before(self.records, &Case { row: resolved, value, measure, twin: None })? {
                    return Ok(true);
                }
            }
        }
        Ok(false)
    }

    /// The label of the other session that is the same occasion as this row's, if there can be one.
    fn twin(&mut self, resolved: &Resolved) -> Result<Option<String>> {
        let plan = &self.rules.plan;
        let course = self.courses.course(self.records, &resolved.subject)?;
        let Some((at, _)) = course.visit_on(plan, resolved.day) else { return Ok(None) };
        let code = &plan.visits[at].code;
        Ok(match resolved.label.as_deref() {
            None => Some(code.clone()),
            Some(label) if label == code => Some(String::new()),
            Some(_) => None,
        })
    }

    fn place_values(
        &mut self,
        filing: &mut Filing,
        here: &Here<'_>,
        resolved: &Resolved,
        turn: &mut Turn<'_>,
        run: &mut Run<'_>,
    ) -> Result<()> {
        let twin = self.twin(resolved)?;
        for (value, rule) in resolved.values.iter().zip(&run.instrument.reader.values) {
            let column = rule.column.as_str();
            if !turn.concerns(column) {
                continue;
            }
            if turn.closed.contains(column) {
                turn.class = turn.class.max(Class::Already);
                continue;
            }
            if self.sighted(filing, here, turn, column)? {
                continue;
            }
            match value {
                ValueOutcome::Missing => {}
                ValueOutcome::Held(held) => self.hold(filing, here, held, turn, run)?,
                ValueOutcome::Number(value) => {
                    let measure = &self.rules.plan.measures[value.measure];
                    let case = Case { row: resolved, value, measure, twin: twin.as_deref() };
                    self.place_value(filing, here, &case, turn, run)?;
                }
            }
        }
        Ok(())
    }

    fn place_value(
        &mut self,
        filing: &mut Filing,
        here: &Here<'_>,
        case: &Case<'_>,
        turn: &mut Turn<'_>,
        run: &mut Run<'_>,
    ) -> Result<()> {
        match run.judge.judge(self.records, case)? {
            Verdict::File(slot) => {
                let cell = here.cell(&case.value.column);
                let new = new_reading(self.rules, run.instrument, (here.row, cell.as_deref()), case, slot);
                let reading = self.records.add_reading(filing, &new)?;
                run.judge.filed(reading, slot);
                run.placing.outcome.filed += 1;
                turn.class = turn.class.max(Class::Filed);
            }
            Verdict::Already(_) | Verdict::Left => {
                run.placing.outcome.already += 1;
                turn.class = turn.class.max(Class::Already);
            }
            Verdict::Held(held) => self.hold(filing, here, &held, turn, run)?,
        }
        Ok(())
    }

    /// Opens a hold, unless one for the same reason is being tried again there.
    fn hold(
        &mut self,
        filing: &mut Filing,
        here: &Here<'_>,
        held: &Held,
        turn: &mut Turn<'_>,
        run: &mut Run<'_>,
    ) -> Result<()> {
        turn.class = Class::Held;
        let same = |hold: &&HoldRow| !run.decided && hold.column == held.column && hold.reason == held.reason;
        if let Some(kept) = turn.tried.iter().find(same) {
            run.kept.insert(kept.hold);
            return Ok(());
        }
        let key = match turn.key {
            Some(key) => key,
            None => {
                let base = here.resolver.row_hash(here.row, here.rows);
                row_key(base, run.next_order(base))
            }
        };
        turn.key = Some(key);
        let cell = here.cell(&held.column);
        let hold = add_hold(self.records, filing, Some((here.row, cell.as_deref())), held, &key)?;
        if run.instrument.re_export != ReExport::New {
            self.held.opened(&run.instrument.code, run.judge.capture(), hold, here.row, held, &key);
        }
        run.placing.outcome.held += 1;
        Ok(())
    }

    /// Notes the readings that the source no longer holds. Only where the export shares some with older ones: a log
    /// that begins anew takes nothing away.
    pub fn note_gone(&mut self, export: &Export, filing: &mut Filing, placing: &mut Placing) -> Result<()> {
        let instrument = &self.rules.plan.instruments[export.instrument];
        if instrument.re_export == ReExport::New || placing.matched.is_empty() || export.continues.is_some() {
            return Ok(());
        }
        let mut captures: HashSet<i64> = HashSet::new();
        for reading in &placing.matched {
            captures.extend(self.records.capture_of(*reading)?);
        }
        captures.remove(&export.capture);
        let known: HashSet<i64> = self.records.view()?.gone()?.into_iter().collect();
        let mut captures: Vec<i64> = captures.into_iter().collect();
        captures.sort_unstable();
        for capture in captures {
            for reading in self.records.readings_of_capture(capture)? {
                if !placing.matched.contains(&reading) && !known.contains(&reading) {
                    self.records.add_gone(filing, reading)?;
                    placing.outcome.gone += 1;
                }
            }
        }
        Ok(())
    }
}

/// Where a run stands.
pub(super) struct Here<'h> {
    pub(super) resolver: &'h Resolver<'h>,
    pub(super) row: &'h Row,
    pub(super) rows: &'h dyn Rows,
}

impl Here<'_> {
    /// The workbook's cell of a value's column, or of the row's first column that the plan names.
    pub(super) fn cell(&self, column: &str) -> Option<String> {
        self.rows.cell_name(self.row.line, self.resolver.slot_of(column))
    }
}

/// One row's turn: what is known of it from holds on its like, and what it comes to.
#[derive(Default)]
struct Turn<'t> {
    key: Option<RowKey>,
    class: Class,
    decided: Decided,
    /// The open holds that are tried again.
    tried: &'t [HoldRow],
    /// Other open holds, each with its column.
    open: Vec<(i64, String)>,
    /// The row was dismissed.
    dismissed: bool,
    /// Columns that were dismissed.
    closed: HashSet<String>,
}

impl<'t> Turn<'t> {
    fn of(key: RowKey, holds: &[&HoldRow], tried: &'t [HoldRow]) -> Self {
        let again: HashSet<i64> = tried.iter().map(|hold| hold.hold).collect();
        let open = holds.iter().filter(|hold| hold.state == HoldState::Open && !again.contains(&hold.hold));
        let closed: HashSet<String> =
            holds.iter().filter(|hold| hold.state == HoldState::Dismissed).map(|hold| hold.column.clone()).collect();
        Self {
            key: Some(key),
            class: Class::NoValue,
            decided: decided_of(holds.iter().copied()),
            tried,
            open: open.map(|hold| (hold.hold, hold.column.clone())).collect(),
            dismissed: closed.contains(""),
            closed,
        }
    }

    /// Whether a value is to be placed: all of a new row; of a row tried again those that are held.
    fn concerns(&self, column: &str) -> bool {
        self.tried.is_empty() || self.tried.iter().any(|hold| hold.column.is_empty() || hold.column == column)
    }
}

/// One export's run.
struct Run<'r> {
    instrument: &'r Instrument,
    judge: Judge<'r>,
    placing: Placing,
    continues: Option<&'r Continued>,
    again: HashSet<[u8; 16]>,
    orders: HashMap<[u8; 16], u64>,
    kept: HashSet<i64>,
    decided: bool,
    folded: bool,
    staged: i64,
}

impl<'r> Run<'r> {
    fn new(export: &'r Export, instrument: &'r Instrument, scope: &Scope<'_>, held: &HeldBook) -> Self {
        let again = match instrument.re_export {
            ReExport::New => HashSet::new(),
            ReExport::Grows | ReExport::Replaces => held.of_instrument(&instrument.code),
        };
        let mut judge = Judge::new(instrument, export.capture);
        judge.again = matches!(scope, Scope::Lines { .. });
        Self {
            instrument,
            judge,
            placing: Placing::default(),
            continues: export.continues.as_ref().filter(|before| before.read),
            again,
            orders: HashMap::new(),
            kept: HashSet::new(),
            decided: matches!(scope, Scope::Lines { decided: true, .. }),
            folded: false,
            staged: 0,
        }
    }

    /// A row's order among its equals.
    fn next_order(&mut self, base: [u8; 16]) -> u64 {
        let order = self.orders.entry(base).or_insert(0);
        *order += 1;
        *order
    }

    /// Whether a row stood, finished, in the path's older bytes.
    fn covered(&self, row: &Row) -> bool {
        let Some((before, (_, end))) = self.continues.zip(row.bytes) else { return false };
        (end as i64) < before.size
    }

    fn open_holds(&self, at: At) -> Vec<i64> {
        let holds = self.continues.and_then(|before| before.holds.get(&Some(at)));
        holds.into_iter().flatten().map(|hold| hold.hold).collect()
    }

    fn count(&mut self, class: Class, lines: u64) {
        self.placing.account.add(class, lines);
        if class == Class::Held {
            self.placing.outcome.held_lines += lines;
        }
    }

    fn end_row(&mut self, scope: &Scope<'_>, row: &Row, turn: &Turn<'_>) {
        match scope {
            Scope::Whole => {
                self.count(turn.class, row.lines);
                // The row that older bytes of the path broke off in reads well now.
                if row.fault.is_none() {
                    let finished = self.open_holds(row.at());
                    self.placing.settle.extend(finished);
                }
            }
            Scope::Lines { .. } => {
                let ended = turn.tried.iter().map(|hold| hold.hold).filter(|hold| !self.kept.contains(hold));
                self.placing.settle.extend(ended);
                self.placing.tried.extend(turn.tried.iter().map(|hold| hold.hold));
                match turn.class {
                    // A value of the row is held still.
                    _ if !turn.open.is_empty() => {}
                    Class::Held => {}
                    Class::Filed => self.placing.moved.filed += row.lines,
                    Class::Already => self.placing.moved.already += row.lines,
                    Class::NoValue => self.placing.moved.no_value += row.lines,
                }
            }
        }
    }

    /// Once an export shows a local time that exists twice, its order is read through to settle which it is.
    fn settle_doubled(
        &mut self,
        resolver: &mut Resolver<'_>,
        export: &Export,
        row: &Row,
        rows: &dyn Rows,
    ) -> std::result::Result<(), FileFault> {
        if self.folded || !matches!(resolver.local(row, rows), Some(Local::Twice(..))) {
            return Ok(());
        }
        self.folded = true;
        resolver.settled = settle_folds(resolver, self.instrument, &export.source)?;
        Ok(())
    }
}

fn out_of_balance(export: &Export, account: &Account) -> RecordsError {
    let account = serde_json::to_string(account).unwrap_or_default();
    RecordsError::Damaged(format!("the lines of {} do not add up: {account}", export.path))
}

fn file_fault(fault: FileFault) -> Result<std::result::Result<Placing, FileFault>> {
    match fault {
        FileFault::Io(error) => Err(RecordsError::Damaged(format!("a raw copy could not be read back: {error}"))),
        other => Ok(Err(other)),
    }
}

/// A serial number in the preamble that is not the plan's.
fn other_serial(instrument: &Instrument, export: &Export, rows: &dyn Rows) -> Option<FileFault> {
    let serial = instrument.serial.as_ref().filter(|_| !export.accept_serial)?;
    let found = rows.preamble(&serial.preamble).unwrap_or_default().trim();
    (found != serial.is).then(|| {
        FileFault::OtherInstrument(match found.is_empty() {
            true => format!("its preamble does not say \"{}\"; the plan expects {}", serial.preamble, serial.is),
            false => format!("its serial number is {found}; the plan expects {}", serial.is),
        })
    })
}

/// The moments of doubled local times that the order of an export's rows settles.
pub fn settle_folds(
    resolver: &Resolver<'_>,
    instrument: &Instrument,
    source: &dyn Bytes,
) -> std::result::Result<HashMap<At, DateTime<Utc>>, FileFault> {
    let mut folds = Folds::default();
    let mut rows = read::open(&instrument.reader, source)?;
    let mut row = Row::default();
    while rows.next_row(&mut row)? {
        match resolver.local(&row, rows.as_ref()) {
            Some(Local::Once(moment)) => folds.once(moment),
            Some(Local::Twice(early, late)) => folds.twice(row.at(), early, late),
            Some(Local::Never) | None => {}
        }
    }
    Ok(folds.settle())
}

/// A reading as it is to be filed.
pub fn new_reading<'n>(
    rules: &'n Rules,
    instrument: &'n Instrument,
    (row, cell): (&'n Row, Option<&'n str>),
    case: &Case<'n>,
    slot: Slotted,
) -> NewReading<'n> {
    let (resolved, value) = (case.row, case.value);
    NewReading {
        line: Some(row.line as i64),
        bytes: bytes_of(row),
        cell,
        instrument: &instrument.code,
        measure: &rules.plan.measures[value.measure].code,
        condition: &value.condition,
        replicate: slot.replicate,
        labelled: slot.labelled,
        subject: &resolved.subject,
        day: day_number(resolved.day),
        label: resolved.label.as_deref().unwrap_or_default(),
        text: &value.text,
        exported: value.exported,
        unit: &value.unit,
        number: value.number,
        mark: value.mark,
        written: Some(&resolved.written),
        moment: resolved.moment.map(|moment| moment.timestamp_millis()),
        operator: &resolved.operator,
        plan: rules.version,
        identity: Some(slot.identity),
        ordinal: slot.ordinal,
        supersedes: slot.supersedes,
        source: 0,
    }
}

/// A row's bytes as the records keep them.
fn bytes_of(row: &Row) -> Option<(i64, i64)> {
    row.bytes.map(|(from, to)| (from as i64, to as i64))
}

/// Writes a hold, on a row or on the whole file.
pub fn add_hold(
    records: &mut Records,
    filing: &mut Filing,
    place: Option<(&Row, Option<&str>)>,
    held: &Held,
    key: &RowKey,
) -> Result<i64> {
    let detail = json!({ "wrong": held.wrong, "likely": held.likely, "about": held.about }).to_string();
    let row = place.map(|(row, _)| row);
    let new = NewHold {
        reason: held.reason.code(),
        line: row.map(|row| row.line as i64),
        cell: place.and_then(|(_, cell)| cell),
        bytes: row.and_then(bytes_of),
        column: &held.column,
        row_key: key,
        row: row.map(|row| row.raw.as_str()).unwrap_or_default(),
        detail: &detail,
    };
    records.add_hold(filing, &new)
}

/// Writes the end of holds that a change of plan, roster or bytes has settled.
pub fn settle_holds(act: &mut Act<'_>, holds: &[i64]) -> Result<()> {
    for hold in holds {
        act.add("hold_event", &[Cell::Int(*hold), Cell::Text(HoldState::Decided.code()), Cell::Null])?;
    }
    Ok(())
}

/// The reason for which a file is held.
pub fn reason_of(fault: &FileFault) -> Reason {
    match fault {
        FileFault::Unreadable(_) | FileFault::Io(_) => Reason::UnreadableFile,
        FileFault::Layout(_) => Reason::UnknownLayout,
        FileFault::TooLarge(_) => Reason::TooLarge,
        FileFault::OtherInstrument(_) => Reason::OtherInstrument,
    }
}
