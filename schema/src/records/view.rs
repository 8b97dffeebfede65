//! Reading: questions put to the records as they stood at one trail number.
//!
//! Invariant: an answer depends on rows of acts up to that number alone, so that it is the same for ever.

use std::collections::{HashMap, HashSet};
use std::sync::Arc;

use chrono::{DateTime, NaiveDate, Utc};
use rusqlite::{OptionalExtension, Row, params};
use serde_json::Value as Json;

use super::codec::Hash;
use super::error::{RecordsError, Result};
use super::open::Records;
use super::trail::{ActNumber, write_moment};
use crate::hold::{Answer, HoldState, Reason};
use crate::plan::PlanFiles;
use crate::reading::{Condition, ReadingState};
use crate::roster::Roster;
use crate::session::SessionFacts;

/// The records as they stood at a trail number.
#[derive(Clone, Copy)]
pub struct View<'r> {
    records: &'r Records,
    upto: ActNumber,
}

/// Which records are asked.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum AsOf {
    /// As they are.
    Now,
    /// As they stood at a moment.
    Moment(DateTime<Utc>),
    /// As they stood at a cut.
    Cut(String),
}

/// A plan version in the records.
#[derive(Debug, Clone)]
pub struct PlanVersion {
    /// From 1.
    pub version: i64,
    /// Of its files.
    pub sha256: Hash,
    /// Its files.
    pub files: PlanFiles,
    /// The act that brought it into force.
    pub act: ActNumber,
}

/// A session, as filed.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct SessionRow {
    /// Its number.
    pub session: i64,
    /// Whose.
    pub subject: String,
    /// Local day of the study centre.
    pub day: NaiveDate,
    /// The visit's label: a code, `unscheduled`, or none.
    pub label: Option<String>,
}

/// How many current readings one instrument gave to one cell of a session.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct CellCount {
    /// The session's number.
    pub session: i64,
    /// The measure's code.
    pub measure: Arc<str>,
    /// Its condition.
    pub condition: Arc<Condition>,
    /// The instrument's code.
    pub instrument: Arc<str>,
    /// How many.
    pub current: u32,
}

/// One current reading as far as a cell of an analysis needs it.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct ValueRow {
    /// Its number.
    pub reading: i64,
    /// The session's number.
    pub session: i64,
    /// The term that is its condition.
    pub condition: i64,
    /// The term that is its instrument's code.
    pub instrument: i64,
    /// The replicate's number.
    pub replicate: u32,
    /// In the measure's unit.
    pub number: f64,
    /// In milliseconds since 1970 in UTC; `None`: only the day is known.
    pub moment: Option<i64>,
    /// It lies at a limit of detection.
    pub limit: bool,
    /// The plan version that placed it; `None`: its number is not one that an export gave.
    pub placed_by: Option<i64>,
}

/// One reading, with texts in place of numbers.
#[derive(Debug, Clone)]
pub struct ReadingRow {
    /// Its number.
    pub reading: i64,
    /// Its filing's act.
    pub act: ActNumber,
    /// The capture it is from.
    pub capture: Option<i64>,
    /// The export's path, relative to the study's folder.
    pub export: Option<String>,
    /// Physical line or sheet row.
    pub line: Option<i64>,
    /// First byte and the one after the last.
    pub bytes: Option<(i64, i64)>,
    /// A workbook's cell.
    pub cell: Option<String>,
    /// The instrument's code; empty for readings by hand.
    pub instrument: String,
    /// The measure's code.
    pub measure: String,
    /// Its condition.
    pub condition: Condition,
    /// The replicate's number.
    pub replicate: u32,
    /// Whether that came from the export.
    pub labelled: bool,
    /// The session.
    pub session: SessionRow,
    /// As exported; `None` once removed.
    pub text: Option<String>,
    /// The number as exported, in `unit`.
    pub exported: Option<f64>,
    /// The unit as exported; empty: the measure's.
    pub unit: String,
    /// The number in the measure's unit.
    pub number: Option<f64>,
    /// `<` or `>`.
    pub mark: Option<String>,
    /// The time as written.
    pub written: Option<String>,
    /// The moment; `None`: only the day is known.
    pub moment: Option<DateTime<Utc>>,
    /// Empty when not said.
    pub operator: String,
    /// The plan version that placed it.
    pub plan: i64,
    /// The reading whose place it takes.
    pub supersedes: Option<i64>,
    /// 0 export, 1 by hand, 2 amended.
    pub source: i64,
    /// Current, superseded or struck.
    pub state: ReadingState,
}

impl ReadingRow {
    /// Where in the export it stands, as people and files write it.
    pub fn place(&self) -> Option<String> {
        self.cell.clone().or_else(|| self.line.map(|line| format!("line {line}")))
    }
}

/// One hold.
#[derive(Debug, Clone)]
pub struct HoldRow {
    /// Its number.
    pub hold: i64,
    /// The act that opened it.
    pub act: ActNumber,
    /// When.
    pub since: String,
    /// The capture it is on.
    pub capture: i64,
    /// The export's path.
    pub export: String,
    /// The instrument's code.
    pub instrument: String,
    /// Why.
    pub reason: Reason,
    /// `None`: the whole file.
    pub line: Option<i64>,
    /// A workbook's cell.
    pub cell: Option<String>,
    /// First byte and the one after the last.
    pub bytes: Option<(i64, i64)>,
    /// Empty: the whole row.
    pub column: String,
    /// The row as written, with its order among equals.
    pub row_key: Vec<u8>,
    /// As exported; `None` once removed.
    pub row: Option<String>,
    /// What is wrong, in words.
    pub wrong: String,
    /// The likeliest answers, best first.
    pub likely: Vec<String>,
    /// Open, decided or dismissed.
    pub state: HoldState,
    /// The answer, where a person gave one.
    pub answer: Option<Answer>,
    /// The act that ended it.
    pub ended: Option<ActNumber>,
    /// Other codes it refers to (a filed reading that differs, say).
    pub about: Option<i64>,
}

impl HoldRow {
    /// Where in the export it stands, as people and files write it; `None`: the whole file.
    pub fn place(&self) -> Option<String> {
        self.cell.clone().or_else(|| self.line.map(|line| format!("line {line}")))
    }
}

/// What one path held at one time.
#[derive(Debug, Clone)]
pub struct CaptureRow {
    /// Its number.
    pub capture: i64,
    /// The act that filed it.
    pub act: ActNumber,
    /// When.
    pub at: String,
    /// The instrument's code.
    pub instrument: String,
    /// The export's path.
    pub path: String,
    /// When the file was last written, nanoseconds since 1970.
    pub modified: i64,
    /// Bytes.
    pub size: i64,
    /// Of the bytes.
    pub sha256: Hash,
    /// The plan version that read it.
    pub plan: i64,
    /// A capture with the same bytes.
    pub repeat_of: Option<i64>,
    /// The older capture of the path, whose bytes these begin with.
    pub continues: Option<i64>,
    /// The account of its lines; `None`: not read.
    pub lines: Option<Json>,
}

/// Why a planned reading will not come.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct AccountedRow {
    /// Whose.
    pub subject: String,
    /// The visit's code.
    pub visit: String,
    /// The measure's code; `None`: all of the visit.
    pub measure: Option<String>,
    /// Why.
    pub why: String,
    /// The act that says so.
    pub act: ActNumber,
}

/// A cut.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct CutRow {
    /// Its name.
    pub name: String,
    /// The trail number it stands at.
    pub trail: ActNumber,
    /// The hash of the trail there.
    pub hash: Hash,
    /// When it was made.
    pub at: String,
    /// By whom.
    pub who: String,
    /// Why.
    pub why: Option<String>,
}

/// What an `--as-of` or a cut comes to.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Standing {
    /// The trail number.
    pub trail: ActNumber,
    /// The trail's hash there.
    pub hash: Hash,
    /// The moment of that act.
    pub moment: String,
    /// The cut's name.
    pub cut: Option<String>,
}

impl Records {
    /// The records as they stand.
    pub fn view(&self) -> Result<View<'_>> {
        let upto = self.query_one("SELECT coalesce(max(number), 0) FROM trail", [], "reading the trail")?;
        Ok(View { records: self, upto })
    }

    /// The records as they stood.
    pub fn view_as_of(&self, as_of: &AsOf) -> Result<View<'_>> {
        let upto = match as_of {
            AsOf::Now => return self.view(),
            AsOf::Moment(moment) => self.query_one(
                "SELECT coalesce(max(number), 0) FROM trail WHERE at <= ?1",
                [write_moment(*moment)],
                "reading the trail",
            )?,
            AsOf::Cut(name) => self.cut_number(name)?,
        };
        Ok(View { records: self, upto })
    }

    fn cut_number(&self, name: &str) -> Result<ActNumber> {
        let failed = self.failed("reading the cuts");
        let found = self
            .conn
            .query_row("SELECT trail FROM cut WHERE name = ?1", [name], |row| row.get(0))
            .optional()
            .map_err(failed)?;
        found.ok_or_else(|| {
            RecordsError::Refused(format!("there is no cut named \"{name}\"; `revisant cut list` shows those that are"))
        })
    }

    fn query_one<T: rusqlite::types::FromSql>(
        &self,
        sql: &str,
        params: impl rusqlite::Params,
        doing: &'static str,
    ) -> Result<T> {
        self.conn
            .prepare_cached(sql)
            .and_then(|mut statement| statement.query_row(params, |row| row.get(0)))
            .map_err(self.failed(doing))
    }

    fn query_all<T>(
        &self,
        sql: &str,
        params: impl rusqlite::Params,
        doing: &'static str,
        read: impl FnMut(&Row<'_>) -> rusqlite::Result<T>,
    ) -> Result<Vec<T>> {
        self.conn
            .prepare_cached(sql)
            .and_then(|mut statement| statement.query_map(params, read)?.collect())
            .map_err(self.failed(doing))
    }
}

/// A session's day as the records number it.
pub fn day_number(day: NaiveDate) -> i64 {
    use chrono::Datelike;
    i64::from(day.num_days_from_ce())
}

/// The day with that number.
pub fn day_of_number(number: i64) -> NaiveDate {
    i32::try_from(number).ok().and_then(NaiveDate::from_num_days_from_ce_opt).unwrap_or(NaiveDate::MIN)
}

impl<'r> View<'r> {
    /// The trail number it stands at.
    pub fn upto(&self) -> ActNumber {
        self.upto
    }

    /// The records asked.
    pub fn records(&self) -> &'r Records {
        self.records
    }

    /// Where it stands, for a result's `as_of`.
    pub fn standing(&self, cut: Option<&str>) -> Result<Standing> {
        let found = self.records.query_all(
            "SELECT hash, at FROM trail WHERE number = ?1",
            [self.upto],
            "reading the trail",
            |row| Ok((row.get(0)?, row.get(1)?)),
        )?;
        let (hash, moment) = found.into_iter().next().unwrap_or(([0; 32], String::new()));
        Ok(Standing { trail: self.upto, hash, moment, cut: cut.map(str::to_owned) })
    }

    /// The plan in force; `None` before the first.
    pub fn plan(&self) -> Result<Option<PlanVersion>> {
        self.plan_where("act <= ?1 ORDER BY id DESC LIMIT 1", self.upto)
    }

    /// A plan version by its number.
    pub fn plan_version(&self, version: i64) -> Result<Option<PlanVersion>> {
        self.plan_where("id = ?1", version)
    }

    fn plan_where(&self, condition: &str, value: i64) -> Result<Option<PlanVersion>> {
        let sql = format!("SELECT id, sha256, files, act FROM plan_version WHERE {condition}");
        let rows = self.records.query_all(&sql, [value], "reading the plan", |row| {
            Ok((row.get::<_, i64>(0)?, row.get::<_, Hash>(1)?, row.get::<_, String>(2)?, row.get::<_, i64>(3)?))
        })?;
        let Some((version, sha256, files, act)) = rows.into_iter().next() else { return Ok(None) };
        let files = serde_json::from_str(&files)
            .map_err(|error| RecordsError::Damaged(format!("plan version {version}: {error}")))?;
        Ok(Some(PlanVersion { version, sha256, files, act }))
    }

    /// The roster.
    pub fn roster(&self) -> Result<Roster> {
        let mut roster = Roster::default();
        let cells = self.records.query_all(
            "SELECT s.code, e.field, e.value FROM roster_event e JOIN subject s ON s.id = e.subject
             WHERE e.act <= ?1 ORDER BY e.id",
            [self.upto],
            "reading the roster",
            |row| Ok((row.get::<_, String>(0)?, row.get::<_, String>(1)?, row.get::<_, Option<String>>(2)?)),
        )?;
        for (subject, field, value) in cells {
            roster.apply(&subject, &field, value.as_deref());
        }
        Ok(roster)
    }

    /// The readings that are not current, and what they are.
    pub fn reading_states(&self) -> Result<HashMap<i64, ReadingState>> {
        let mut states = HashMap::new();
        let superseded = self.records.query_all(
            "SELECT r.supersedes FROM reading r JOIN filing f ON f.id = r.filing
             WHERE r.supersedes IS NOT NULL AND f.act <= ?1",
            [self.upto],
            "reading what was superseded",
            |row| row.get(0),
        )?;
        states.extend(superseded.into_iter().map(|reading| (reading, ReadingState::Superseded)));
        let events = self.records.query_all(
            "SELECT reading, kind FROM reading_event WHERE act <= ?1 ORDER BY id",
            [self.upto],
            "reading what was struck",
            |row| Ok((row.get::<_, i64>(0)?, row.get::<_, String>(1)?)),
        )?;
        for (reading, kind) in events {
            match kind.as_str() {
                "struck" => states.insert(reading, ReadingState::Struck),
                "superseded" => states.insert(reading, ReadingState::Superseded),
                _ => states.remove(&reading),
            };
        }
        Ok(states)
    }

    /// Every session that holds a current reading.
    pub fn sessions(&self) -> Result<Vec<SessionRow>> {
        let held: HashSet<i64> = self.cells()?.into_iter().map(|cell| cell.session).collect();
        Ok(self.all_sessions()?.into_iter().filter(|session| held.contains(&session.session)).collect())
    }

    /// Every session ever named, also by readings that are no longer current.
    pub fn all_sessions(&self) -> Result<Vec<SessionRow>> {
        self.records.query_all(
            "SELECT s.id, u.code, s.day, t.text FROM session s JOIN subject u ON u.id = s.subject
             LEFT JOIN term t ON t.id = s.label ORDER BY u.code, s.day, s.id",
            [],
            "reading the sessions",
            |row| {
                Ok(SessionRow {
                    session: row.get(0)?,
                    subject: row.get(1)?,
                    day: day_of_number(row.get(2)?),
                    label: row.get(3)?,
                })
            },
        )
    }

    /// How many current readings each instrument gave to each cell of each session.
    pub fn cells(&self) -> Result<Vec<CellCount>> {
        let states = self.reading_states()?;
        let published = self.published()?;
        // Counted here and not by the database: sorting a hundred thousand groups there costs more than reading them.
        let mut keys: Vec<[i64; 4]> = self
            .records
            .query_all(
                "SELECT id, filing, session, measure, condition, instrument FROM reading",
                [],
                "counting readings",
                |row| {
                    let live = published.contains(&row.get(1)?) && !states.contains_key(&row.get(0)?);
                    Ok(if live { Some([row.get(2)?, row.get(3)?, row.get(4)?, row.get(5)?]) } else { None })
                },
            )?
            .into_iter()
            .flatten()
            .collect();
        keys.sort_unstable();
        let texts = self.texts("SELECT id, text FROM term")?;
        let mut conditions: HashMap<i64, Arc<Condition>> = HashMap::new();
        let text = |id: i64| texts.get(&id).cloned().unwrap_or_default();
        let counts = keys.chunk_by(|one, other| one == other).map(|same| {
            let [session, measure, condition, instrument] = same[0];
            let parse = || Arc::new(Condition::parse(&text(condition)));
            CellCount {
                session,
                measure: text(measure),
                condition: Arc::clone(conditions.entry(condition).or_insert_with(parse)),
                instrument: text(instrument),
                current: u32::try_from(same.len()).unwrap_or(u32::MAX),
            }
        });
        Ok(counts.collect())
    }

    /// The filings that acts up to this one have published.
    fn published(&self) -> Result<HashSet<i64>> {
        let filings = self.records.query_all(
            "SELECT id FROM filing WHERE act <= ?1",
            [self.upto],
            "reading the filings",
            |row| row.get(0),
        )?;
        Ok(filings.into_iter().collect())
    }

    /// The current readings of a measure that have a number, as far as a cell of an analysis needs them, by session,
    /// condition, and the order of filing.
    pub fn values(&self, measure: &str) -> Result<Vec<ValueRow>> {
        let states = self.reading_states()?;
        let published = self.published()?;
        let mut values: Vec<ValueRow> = self
            .records
            .query_all(
                "SELECT id, filing, session, condition, instrument, replicate, number, moment, mark IS NOT NULL,
             iif(source = 0, plan, NULL) FROM reading WHERE measure = (SELECT id FROM term WHERE text = ?1) AND number IS NOT NULL",
                [measure],
                "reading the values of a measure",
                |row| {
                    let live = published.contains(&row.get(1)?) && !states.contains_key(&row.get(0)?);
                    live.then(|| read_value(row)).transpose()
                },
            )?
            .into_iter()
            .flatten()
            .collect();
        values.sort_unstable_by_key(|value| (value.session, value.condition, value.reading));
        Ok(values)
    }

    /// All terms by their number; the empty text is number 0.
    pub fn terms(&self) -> Result<HashMap<i64, String>> {
        let rows = self.records.query_all("SELECT id, text FROM term", [], "reading terms", |row| {
            Ok((row.get::<_, i64>(0)?, row.get::<_, String>(1)?))
        })?;
        Ok(std::iter::once((0, String::new())).chain(rows).collect())
    }

    /// Readings, all or those of one subject, measure or session, in the order of filing.
    pub fn readings(&self, filter: &ReadingFilter) -> Result<Vec<ReadingRow>> {
        let states = self.reading_states()?;
        let terms = self.terms()?;
        let paths = self.paths()?;
        let (condition, values) = filter.sql();
        let most = filter.most.and_then(|most| i64::try_from(most).ok()).unwrap_or(i64::MAX);
        let sql = format!(
            "SELECT r.id, f.act, r.capture, r.line, r.byte_from, r.byte_to, r.cell, r.instrument, r.measure, r.condition,
             r.replicate, r.labelled, r.session, s.day, s.label, u.code, r.text, r.exported, r.unit, r.number, r.mark,
             r.written, r.moment, r.operator, r.plan, r.supersedes, r.source
             FROM reading r JOIN filing f ON f.id = r.filing AND f.act <= ?1
             JOIN session s ON s.id = r.session JOIN subject u ON u.id = s.subject {condition} ORDER BY r.id LIMIT {most}"
        );
        let mut values = values;
        values.insert(0, rusqlite::types::Value::Integer(self.upto));
        self.records.query_all(&sql, rusqlite::params_from_iter(values), "reading readings", |row| {
            read_reading(row, &terms, &paths, &states)
        })
    }

    /// One reading.
    pub fn reading(&self, reading: i64) -> Result<ReadingRow> {
        let found = self.readings(&ReadingFilter { reading: Some(reading), ..ReadingFilter::default() })?;
        found.into_iter().next().ok_or_else(|| {
            RecordsError::Refused(format!("there is no reading {reading}; `revisant readings` lists those that are"))
        })
    }

    fn paths(&self) -> Result<HashMap<i64, String>> {
        let rows = self.records.query_all("SELECT id, path FROM capture", [], "reading exports", |row| {
            Ok((row.get::<_, i64>(0)?, row.get::<_, String>(1)?))
        })?;
        Ok(rows.into_iter().collect())
    }

    /// Holds in the order in which they were opened; only the open ones when `open`.
    pub fn holds(&self, open: bool) -> Result<Vec<HoldRow>> {
        let mut ends: HashMap<i64, (HoldState, Option<Answer>, ActNumber)> = HashMap::new();
        let events = self.records.query_all(
            "SELECT hold, state, answer, act FROM hold_event WHERE act <= ?1 ORDER BY id",
            [self.upto],
            "reading decisions",
            |row| Ok((row.get::<_, i64>(0)?, row.get::<_, String>(1)?, row.get::<_, Option<String>>(2)?, row.get(3)?)),
        )?;
        for (hold, state, answer, act) in events {
            let state = if state == "dismissed" { HoldState::Dismissed } else { HoldState::Decided };
            let answer = answer.and_then(|text| serde_json::from_str(&text).ok());
            ends.insert(hold, (state, answer, act));
        }
        let rows = self.records.query_all(
            "SELECT h.id, f.act, t.at, h.capture, c.path, i.text, h.reason, h.line, h.cell, h.byte_from, h.byte_to,
             h.column, h.row_key, h.row, h.detail
             FROM hold h JOIN filing f ON f.id = h.filing AND f.act <= ?1 JOIN trail t ON t.number = f.act
             JOIN capture c ON c.id = h.capture JOIN term i ON i.id = c.instrument ORDER BY h.id",
            [self.upto],
            "reading holds",
            |row| read_hold(row, &ends),
        )?;
        Ok(rows.into_iter().filter(|hold| !open || hold.state == HoldState::Open).collect())
    }

    /// One hold.
    pub fn hold(&self, hold: i64) -> Result<HoldRow> {
        let found = self.holds(false)?.into_iter().find(|row| row.hold == hold);
        found.ok_or_else(|| {
            RecordsError::Refused(format!("there is no hold {hold}; `revisant holds` lists those that are open"))
        })
    }

    /// Every capture, in the order of filing, with the newest account of its lines.
    pub fn captures(&self) -> Result<Vec<CaptureRow>> {
        self.records.query_all(
            "SELECT c.id, c.act, t.at, i.text, c.path, c.modified, c.size, c.sha256, c.plan, c.repeat_of, c.continues,
             (SELECT a.lines FROM account a WHERE a.capture = c.id AND a.act <= ?1 ORDER BY a.id DESC LIMIT 1)
             FROM capture c JOIN trail t ON t.number = c.act JOIN term i ON i.id = c.instrument
             WHERE c.act <= ?1 ORDER BY c.id",
            [self.upto],
            "reading exports",
            |row| {
                let lines: Option<String> = row.get(11)?;
                Ok(CaptureRow {
                    capture: row.get(0)?,
                    act: row.get(1)?,
                    at: row.get(2)?,
                    instrument: row.get(3)?,
                    path: row.get(4)?,
                    modified: row.get(5)?,
                    size: row.get(6)?,
                    sha256: row.get(7)?,
                    plan: row.get(8)?,
                    repeat_of: row.get(9)?,
                    continues: row.get(10)?,
                    lines: lines.and_then(|text| serde_json::from_str(&text).ok()),
                })
            },
        )
    }

    /// Held rows that came again: (capture, hold).
    pub fn sightings(&self) -> Result<Vec<(i64, i64)>> {
        self.records.query_all(
            "SELECT s.capture, s.hold FROM sighting s JOIN filing f ON f.id = s.filing WHERE f.act <= ?1",
            [self.upto],
            "reading holds",
            |row| Ok((row.get(0)?, row.get(1)?)),
        )
    }

    /// Readings that a later export no longer holds.
    pub fn gone(&self) -> Result<Vec<i64>> {
        self.records.query_all(
            "SELECT DISTINCT g.reading FROM gone g JOIN filing f ON f.id = g.filing WHERE f.act <= ?1 ORDER BY 1",
            [self.upto],
            "reading what is gone from its source",
            |row| row.get(0),
        )
    }

    /// Why planned readings will not come.
    pub fn accounted(&self) -> Result<Vec<AccountedRow>> {
        self.records.query_all(
            "SELECT u.code, a.visit, a.measure, coalesce(t.reason, ''), a.act FROM accounted a
             JOIN subject u ON u.id = a.subject JOIN trail t ON t.number = a.act WHERE a.act <= ?1 ORDER BY a.id",
            [self.upto],
            "reading what is accounted for",
            |row| {
                Ok(AccountedRow {
                    subject: row.get(0)?,
                    visit: row.get(1)?,
                    measure: row.get(2)?,
                    why: row.get(3)?,
                    act: row.get(4)?,
                })
            },
        )
    }

    /// The cuts, oldest first.
    pub fn cuts(&self) -> Result<Vec<CutRow>> {
        self.records.query_all(
            "SELECT c.name, c.trail, at.hash, made.at, made.who, made.reason FROM cut c
             JOIN trail at ON at.number = c.trail JOIN trail made ON made.number = c.act
             WHERE c.act <= ?1 ORDER BY c.id",
            [self.upto],
            "reading the cuts",
            |row| {
                Ok(CutRow {
                    name: row.get(0)?,
                    trail: row.get(1)?,
                    hash: row.get(2)?,
                    at: row.get(3)?,
                    who: row.get(4)?,
                    why: row.get(5)?,
                })
            },
        )
    }

    /// The SHA-256 of a capture's bytes.
    pub fn bytes_of(&self, capture: i64) -> Result<Hash> {
        self.records.query_one("SELECT sha256 FROM capture WHERE id = ?1", [capture], "reading an export")
    }

    /// Acts of one kind whose objects hold a text, newest last: (number, at, who, reason).
    pub fn acts_on(&self, kind: super::trail::ActKind, object: &str) -> Result<Vec<(ActNumber, String, String)>> {
        self.records.query_all(
            "SELECT number, at, who FROM trail WHERE act = ?1 AND number <= ?2 AND instr(objects, ?3) > 0 ORDER BY number",
            params![kind.code(), self.upto, object],
            "reading the trail",
            |row| Ok((row.get(0)?, row.get(1)?, row.get(2)?)),
        )
    }
}

/// Which readings are asked for.
#[derive(Debug, Clone, Default, PartialEq, Eq)]
pub struct ReadingFilter {
    /// Of this subject.
    pub subject: Option<String>,
    /// Of this measure.
    pub measure: Option<String>,
    /// Of this session.
    pub session: Option<i64>,
    /// From this capture.
    pub capture: Option<i64>,
    /// This one.
    pub reading: Option<i64>,
    /// No more than so many, the first.
    pub most: Option<u64>,
}

impl ReadingFilter {
    fn sql(&self) -> (String, Vec<rusqlite::types::Value>) {
        use rusqlite::types::Value;
        let text = |value: &Option<String>| value.clone().map(Value::Text);
        let int = |value: Option<i64>| value.map(Value::Integer);
        let wanted = [
            ("s.subject = (SELECT id FROM subject WHERE code = ?)", text(&self.subject)),
            ("r.measure = (SELECT id FROM term WHERE text = ?)", text(&self.measure)),
            ("r.session = ?", int(self.session)),
            ("r.capture = ?", int(self.capture)),
            ("r.id = ?", int(self.reading)),
        ];
        let given: Vec<(&str, Value)> = wanted.into_iter().filter_map(|(sql, value)| Some((sql, value?))).collect();
        let clauses: Vec<String> =
            given.iter().enumerate().map(|(at, (sql, _))| sql.replace('?', &format!("?{}", at + 2))).collect();
        let condition = if clauses.is_empty() { String::new() } else { format!("WHERE {}", clauses.join(" AND ")) };
        (condition, given.into_iter().map(|(_, value)| value).collect())
    }
}

fn read_value(row: &Row<'_>) -> rusqlite::Result<ValueRow> {
    Ok(ValueRow {
        reading: row.get(0)?,
        session: row.get(2)?,
        condition: row.get(3)?,
        instrument: row.get(4)?,
        replicate: row.get(5)?,
        number: row.get(6)?,
        moment: row.get(7)?,
        limit: row.get(8)?,
        placed_by: row.get(9)?,
    })
}

fn read_reading(
    row: &Row<'_>,
    terms: &HashMap<i64, String>,
    paths: &HashMap<i64, String>,
    states: &HashMap<i64, ReadingState>,
) -> rusqlite::Result<ReadingRow> {
    let text = |id: i64| terms.get(&id).cloned().unwrap_or_default();
    let reading: i64 = row.get(0)?;
    let capture: Option<i64> = row.get(2)?;
    let from: Option<i64> = row.get(4)?;
    let to: Option<i64> = row.get(5)?;
    let label: i64 = row.get(14)?;
    Ok(ReadingRow {
        reading,
        act: row.get(1)?,
        capture,
        export: capture.and_then(|capture| paths.get(&capture).cloned()),
        line: row.get(3)?,
        bytes: from.zip(to),
        cell: row.get(6)?,
        instrument: text(row.get(7)?),
        measure: text(row.get(8)?),
        condition: Condition::parse(&text(row.get(9)?)),
        replicate: row.get(10)?,
        labelled: row.get(11)?,
        session: SessionRow {
            session: row.get(12)?,
            subject: row.get(15)?,
            day: day_of_number(row.get(13)?),
            label: (label != 0).then(|| text(label)),
        },
        text: row.get(16)?,
        exported: row.get(17)?,
        unit: text(row.get(18)?),
        number: row.get(19)?,
        mark: row.get(20)?,
        written: row.get(21)?,
        moment: row.get::<_, Option<i64>>(22)?.and_then(DateTime::from_timestamp_millis),
        operator: text(row.get(23)?),
        plan: row.get(24)?,
        supersedes: row.get(25)?,
        source: row.get(26)?,
        state: states.get(&reading).copied().unwrap_or(ReadingState::Current),
    })
}

fn read_hold(row: &Row<'_>, ends: &HashMap<i64, (HoldState, Option<Answer>, ActNumber)>) -> rusqlite::Result<HoldRow> {
    let hold: i64 = row.get(0)?;
    let reason: String = row.get(6)?;
    let detail: Json =
        row.get::<_, Option<String>>(14)?.and_then(|text| serde_json::from_str(&text).ok()).unwrap_or_default();
    let likely = detail["likely"].as_array().into_iter().flatten();
    let from: Option<i64> = row.get(9)?;
    let to: Option<i64> = row.get(10)?;
    let end = ends.get(&hold);
    Ok(HoldRow {
        hold,
        act: row.get(1)?,
        since: row.get(2)?,
        capture: row.get(3)?,
        export: row.get(4)?,
        instrument: row.get(5)?,
        reason: reason.parse().unwrap_or(Reason::UnreadableRow),
        line: row.get(7)?,
        cell: row.get(8)?,
        bytes: from.zip(to),
        column: row.get(11)?,
        row_key: row.get(12)?,
        row: row.get(13)?,
        wrong: detail["wrong"].as_str().unwrap_or_default().to_owned(),
        likely: likely.filter_map(|text| text.as_str().map(str::to_owned)).collect(),
        state: end.map_or(HoldState::Open, |end| end.0),
        answer: end.and_then(|end| end.1.clone()),
        ended: end.map(|end| end.2),
        about: detail["about"].as_i64(),
    })
}

impl View<'_> {
    /// Every session that holds a current reading, with the measures it holds.
    pub fn session_facts(&self) -> Result<Vec<SessionFacts>> {
        self.facts_of(&self.cells()?)
    }

    /// The same, of one subject alone.
    pub fn facts_of_subject(&self, subject: &str) -> Result<Vec<SessionFacts>> {
        let rows = self.records.query_all(
            "SELECT s.id, s.day, l.text, m.text FROM session s JOIN subject u ON u.id = s.subject
             LEFT JOIN term l ON l.id = s.label JOIN reading r ON r.session = s.id
             JOIN filing f ON f.id = r.filing AND f.act <= ?2 JOIN term m ON m.id = r.measure
             WHERE u.code = ?1 AND NOT EXISTS
                (SELECT 1 FROM reading n JOIN filing g ON g.id = n.filing WHERE n.supersedes = r.id AND g.act <= ?2)
             AND coalesce((SELECT e.kind FROM reading_event e WHERE e.reading = r.id AND e.act <= ?2
                ORDER BY e.id DESC LIMIT 1), 'restored') = 'restored'
             GROUP BY s.id, r.measure ORDER BY s.id, r.measure",
            params![subject, self.upto],
            "reading a subject's sessions",
            |row| {
                let measure: Arc<str> = row.get_ref(3)?.as_str()?.into();
                Ok((row.get::<_, i64>(0)?, row.get::<_, i64>(1)?, row.get::<_, Option<String>>(2)?, measure))
            },
        )?;
        let mut facts: Vec<SessionFacts> = Vec::new();
        for (session, day, label, measure) in rows {
            match facts.last_mut() {
                Some(last) if last.session == session => last.measures.push(measure),
                _ => facts.push(SessionFacts {
                    session,
                    subject: subject.into(),
                    day: day_of_number(day),
                    label: label.map(Into::into),
                    measures: vec![measure],
                }),
            }
        }
        Ok(facts)
    }

    /// The same, from counts already at hand.
    pub fn facts_of(&self, cells: &[CellCount]) -> Result<Vec<SessionFacts>> {
        // The counts come by session, so that a session's measures stand side by side.
        let by_session: HashMap<i64, &[CellCount]> = cells
            .chunk_by(|one, other| one.session == other.session)
            .filter_map(|same| Some((same.first()?.session, same)))
            .collect();
        let subjects = self.texts("SELECT id, code FROM subject")?;
        let labels = self.texts("SELECT id, text FROM term")?;
        let facts = self.records.query_all(
            "SELECT id, subject, day, label FROM session",
            [],
            "reading the sessions",
            |row| {
                let session: i64 = row.get(0)?;
                let Some(held) = by_session.get(&session) else { return Ok(None) };
                let mut measures: Vec<Arc<str>> = held.iter().map(|cell| Arc::clone(&cell.measure)).collect();
                measures.dedup();
                let label: Option<i64> = row.get(3)?;
                Ok(Some(SessionFacts {
                    session,
                    subject: subjects.get(&row.get(1)?).cloned().unwrap_or_default(),
                    day: day_of_number(row.get(2)?),
                    label: label.and_then(|label| labels.get(&label).cloned()),
                    measures,
                }))
            },
        )?;
        Ok(facts.into_iter().flatten().collect())
    }

    /// Texts by their number.
    fn texts(&self, sql: &str) -> Result<HashMap<i64, Arc<str>>> {
        let rows = self
            .records
            .query_all(sql, [], "reading texts", |row| Ok((row.get::<_, i64>(0)?, row.get_ref(1)?.as_str()?.into())))?;
        Ok(rows.into_iter().collect())
    }
}
