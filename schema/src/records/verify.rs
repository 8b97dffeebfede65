//! Verifying: everything that the trail covers is computed again from the rows and the raw copies.
//!
//! Invariants: nothing is written; one read transaction sees one state, so that a running service neither disturbs the
//! check nor is held up by it; memory does not grow with the readings (terms, subjects and sessions are held, and 16
//! bytes for each other row); what is wrong with the records is a fault in the list, never a failure of the check,
//! which goes on with what can still be read.
//!
//! A row's own digest is not stored (unless the row was removed), so that a changed row is found through the digest of
//! its act or filing: the fault names the act, the filing and the rows among which the changed one is.

use std::collections::{BTreeMap, HashMap, HashSet};
use std::fmt;
use std::io::{self, Read};
use std::path::PathBuf;

use chrono::DateTime;
use rusqlite::types::ValueRef;
use rusqlite::{Connection, OptionalExtension, Row};
use sha2::{Digest, Sha256};

use super::codec::{Canon, Hash, Kind, OF_ACT, OF_FILING, Table, hex, table};
use super::error::{RecordsError, Result};
use super::open::{APPLICATION, Records, layout};
use super::removal::{REMOVABLE, blanked};
use super::texts::SessionFact;
use super::trail::{ActNumber, TrailRow};
use super::writer::column_list;

/// What a check of the records found.
#[derive(Debug, Clone, Default)]
pub struct Verified {
    /// How many rows were computed again: those of the trail and all that belong to its acts.
    pub rows: u64,
    /// How many of them are readings.
    pub readings: u64,
    /// How many raw copies were read.
    pub raw_copies: u64,
    /// The last act and its hash, which is made to be written down elsewhere.
    pub head: Option<(ActNumber, Hash)>,
    /// The act whose hash is the one noted elsewhere, where one was given.
    pub noted: Option<ActNumber>,
    /// What is wrong, by trail order; what belongs to no act comes last.
    pub faults: Vec<VerifyFault>,
    /// What is worth knowing and not wrong.
    pub notes: Vec<VerifyNote>,
}

/// Something that is wrong with the records.
#[derive(Debug, Clone, PartialEq, Eq)]
#[non_exhaustive]
pub enum VerifyFault {
    /// The file's marks are not those of records of this layout.
    Marks {
        /// Its `application_id`.
        application: i64,
        /// Its `user_version`.
        version: i64,
    },
    /// A table, index or trigger is missing.
    LayoutMissing {
        /// Its name.
        name: String,
    },
    /// A table, index, trigger or view is there that should not be.
    LayoutExtra {
        /// Its name.
        name: String,
    },
    /// A table, index or trigger is not as it was made.
    LayoutChanged {
        /// Its name.
        name: String,
    },
    /// SQLite's own check says that the file is damaged.
    Sqlite {
        /// Its words.
        what: String,
    },
    /// A part of the file could not be read to its end.
    Unreadable {
        /// Which part.
        part: String,
        /// What the database says.
        why: String,
    },
    /// Acts are missing from the trail.
    TrailGap {
        /// The first of them.
        from: ActNumber,
        /// The last of them.
        upto: ActNumber,
    },
    /// A row of the trail has a number that no act can have.
    TrailNumber {
        /// The number.
        act: ActNumber,
    },
    /// A row of the trail holds values of the wrong kind.
    TrailUnreadable {
        /// Its number.
        act: ActNumber,
    },
    /// A row of the trail has a moment that is none.
    TrailMoment {
        /// Its number.
        act: ActNumber,
        /// The moment as it stands.
        at: String,
    },
    /// A row of the trail is bound to another row than the one before it.
    TrailPrevious {
        /// Its number.
        act: ActNumber,
    },
    /// A row of the trail was changed.
    TrailHash {
        /// Its number.
        act: ActNumber,
    },
    /// A row that belongs to an act was changed, added or taken away.
    ActDigest {
        /// The act.
        act: ActNumber,
        /// The rows that say they belong to it.
        rows: String,
    },
    /// Rows belong to an act that is not on the trail.
    NoAct {
        /// The act that they name.
        act: ActNumber,
        /// Which rows.
        rows: String,
    },
    /// Rows belong to a filing that is neither published nor being written.
    NoFiling {
        /// Their table.
        table: &'static str,
        /// The filing that they name.
        filing: i64,
        /// The first of them.
        first: i64,
        /// How many they are.
        count: i64,
    },
    /// A reading comes after the last one of its filing.
    BeyondFiling {
        /// The filing's act.
        act: ActNumber,
        /// The filing.
        filing: i64,
        /// The reading.
        reading: i64,
    },
    /// A filing says another number than the rows do.
    FilingCount {
        /// The filing's act.
        act: ActNumber,
        /// The filing.
        filing: i64,
        /// The filing's column.
        column: &'static str,
        /// What it says.
        says: Option<i64>,
        /// What is there.
        found: Option<i64>,
    },
    /// A reading, hold, sighting or going of a filing was changed, added or taken away.
    FilingDigest {
        /// The filing's act.
        act: ActNumber,
        /// The filing.
        filing: i64,
        /// The rows that say they belong to it.
        rows: String,
    },
    /// A row refers to one that is not there.
    Dangling {
        /// The row's act, where it is known.
        act: Option<ActNumber>,
        /// The row's table.
        table: &'static str,
        /// The row's number.
        row: i64,
        /// The column that refers.
        column: &'static str,
        /// The number that is not there.
        to: i64,
    },
    /// SQLite's own check of references found one to a row that is not there.
    Reference {
        /// The row's table.
        table: String,
        /// The row's number.
        row: i64,
        /// The table it refers to.
        parent: String,
    },
    /// A row is blanked, salted or marked as removed in a way that no act does.
    Shape {
        /// The row's act.
        act: ActNumber,
        /// The row's table.
        table: &'static str,
        /// The row's number.
        row: i64,
        /// What is wrong.
        wrong: &'static str,
    },
    /// A removed row was changed, or a row was passed off as removed.
    Removal {
        /// The act that removed.
        act: ActNumber,
        /// How many rows it says it removed.
        says: i64,
        /// How many are marked as removed by it.
        found: i64,
    },
    /// A capture's bytes are not kept.
    RawMissing {
        /// The capture's act.
        act: ActNumber,
        /// The capture.
        capture: i64,
        /// The hash of its bytes.
        sha256: String,
    },
    /// A capture and its raw copy disagree about the number of bytes.
    RawSize {
        /// The capture's act.
        act: ActNumber,
        /// The capture.
        capture: i64,
        /// What the capture says.
        says: i64,
        /// What the raw copy says.
        found: i64,
    },
    /// A raw copy belongs to no capture.
    RawUnknown {
        /// The hash of its bytes.
        sha256: String,
    },
    /// A raw copy cannot be used.
    Raw {
        /// The first act with these bytes, where it is known.
        act: Option<ActNumber>,
        /// The hash of its bytes, as hexadecimal digits.
        sha256: String,
        /// What is wrong.
        wrong: RawWrong,
    },
    /// No act has the hash that was noted elsewhere.
    NotedHead {
        /// The hash as given.
        noted: String,
    },
    /// There are more faults than are listed.
    Further {
        /// How many.
        count: u64,
    },
}

/// What is wrong with a raw copy.
#[derive(Debug, Clone, PartialEq, Eq)]
#[non_exhaustive]
pub enum RawWrong {
    /// Its row holds values of the wrong kind.
    Row,
    /// Its file in `raw/` is not there.
    NoFile,
    /// Its file cannot be read.
    File(String),
    /// The compressed bytes are not those that were stored.
    Stored,
    /// They cannot be expanded.
    Expand(String),
    /// There are more or fewer bytes than the row says.
    Size {
        /// What the row says.
        says: i64,
        /// What is there; counting stops one byte after what the row says.
        found: u64,
    },
    /// The expanded bytes are not the export's.
    Bytes,
}

/// Something that is worth knowing and not wrong.
#[derive(Debug, Clone, PartialEq, Eq)]
#[non_exhaustive]
pub enum VerifyNote {
    /// A file in `raw/` that no row knows, as a crash may leave one.
    LooseFile {
        /// The file.
        file: PathBuf,
    },
    /// A filing that is being written or was broken off; its rows are not covered yet.
    Unpublished {
        /// The filing.
        filing: i64,
    },
    /// Rows whose values an act removed; their digests still count.
    Removed {
        /// The act.
        act: ActNumber,
        /// How many.
        rows: u64,
    },
}

impl VerifyFault {
    /// The act to which the fault belongs.
    pub fn act(&self) -> Option<ActNumber> {
        match self {
            Self::TrailGap { from: act, .. }
            | Self::TrailNumber { act }
            | Self::TrailUnreadable { act }
            | Self::TrailMoment { act, .. }
            | Self::TrailPrevious { act }
            | Self::TrailHash { act }
            | Self::ActDigest { act, .. }
            | Self::NoAct { act, .. }
            | Self::BeyondFiling { act, .. }
            | Self::FilingCount { act, .. }
            | Self::FilingDigest { act, .. }
            | Self::Shape { act, .. }
            | Self::Removal { act, .. }
            | Self::RawMissing { act, .. }
            | Self::RawSize { act, .. } => Some(*act),
            Self::Dangling { act, .. } | Self::Raw { act, .. } => *act,
            _ => None,
        }
    }
}

impl fmt::Display for VerifyFault {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self {
            Self::Marks { application, version } => write!(
                f,
                "the file is marked as application {application}, layout {version}, which is not what this program writes."
            ),
            Self::LayoutMissing { name } => write!(f, "{name} is missing from the file's layout."),
            Self::LayoutExtra { name } => write!(f, "{name} stands in the file's layout and does not belong there."),
            Self::LayoutChanged { name } => write!(f, "{name} is not as this program made it."),
            Self::Sqlite { what } => write!(f, "the file is damaged; SQLite says: {what}."),
            Self::Unreadable { part, why } => write!(f, "{part} cannot be read to the end: {why}."),
            Self::TrailGap { from, upto } if from == upto => write!(f, "act {from} is missing from the trail."),
            Self::TrailGap { from, upto } => write!(f, "acts {from} to {upto} are missing from the trail."),
            Self::TrailNumber { act } => write!(f, "the trail has a row numbered {act}; numbers run from 1."),
            Self::TrailUnreadable { act } => {
                write!(f, "act {act}: its row on the trail holds values of the wrong kind.")
            }
            Self::TrailMoment { act, at } => write!(f, "act {act}: its moment \"{at}\" is none."),
            Self::TrailPrevious { act } => {
                write!(f, "act {act}: it does not follow on the act before it, whose hash is another.")
            }
            Self::TrailHash { act } => write!(f, "act {act}: its row on the trail was changed."),
            Self::ActDigest { act, rows } if rows.is_empty() => {
                write!(f, "act {act}: the rows that belonged to it were taken away.")
            }
            Self::ActDigest { act, rows } => {
                write!(f, "act {act}: a row of it was changed, added or taken away ({rows}).")
            }
            Self::NoAct { act, rows } => write!(f, "rows belong to act {act}, which is not on the trail ({rows})."),
            Self::NoFiling { table, filing, first, count } => write!(
                f,
                "{count} rows of {table}, from row {first} on, belong to filing {filing}, which no act published."
            ),
            Self::BeyondFiling { act, filing, reading } => {
                write!(f, "act {act}: reading {reading} comes after the last one of its filing {filing}.")
            }
            Self::FilingCount { act, filing, column, says, found } => write!(
                f,
                "act {act}: filing {filing} says {column} = {}, and its rows say {}.",
                or_none(*says),
                or_none(*found)
            ),
            Self::FilingDigest { act, filing, rows } if rows.is_empty() => {
                write!(f, "act {act}: the rows of filing {filing} were taken away.")
            }
            Self::FilingDigest { act, filing, rows } => {
                write!(f, "act {act}: a row of filing {filing} was changed, added or taken away ({rows}).")
            }
            Self::Dangling { act, table, row, column, to } => {
                if let Some(act) = act {
                    write!(f, "act {act}: ")?;
                }
                write!(f, "row {row} of {table} refers to {column} {to}, which is not there.")
            }
            Self::Reference { table, row, parent } => {
                write!(f, "row {row} of {table} refers to a row of {parent} that is not there.")
            }
            Self::Shape { act, table, row, wrong } => write!(f, "act {act}: row {row} of {table} {wrong}."),
            Self::Removal { act, says, found } if says == found => {
                write!(f, "act {act}: a row that it removed was changed.")
            }
            Self::Removal { act, says, found } => {
                write!(f, "act {act}: it removed {says} rows, and {found} are marked as removed by it.")
            }
            Self::RawMissing { act, capture, sha256 } => {
                write!(f, "act {act}: the bytes of capture {capture} ({sha256}) are not kept.")
            }
            Self::RawSize { act, capture, says, found } => {
                write!(f, "act {act}: capture {capture} says {says} bytes, and its raw copy {found}.")
            }
            Self::RawUnknown { sha256 } => write!(f, "raw copy {sha256} belongs to no capture."),
            Self::Raw { act, sha256, wrong } => {
                if let Some(act) = act {
                    write!(f, "act {act}: ")?;
                }
                write!(f, "raw copy {sha256} {wrong}.")
            }
            Self::NotedHead { noted } => write!(
                f,
                "no act has the hash {noted} that was noted: the trail was cut short or rebuilt, or the note is not of \
                 these records."
            ),
            Self::Further { count } => write!(f, "there are {count} more faults."),
        }
    }
}

fn or_none(number: Option<i64>) -> String {
    number.map_or_else(|| "nothing".to_owned(), |number| number.to_string())
}

impl fmt::Display for RawWrong {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self {
            Self::Row => f.write_str("has a row with values of the wrong kind"),
            Self::NoFile => f.write_str("has no file in the folder raw"),
            Self::File(why) => write!(f, "has a file that cannot be read: {why}"),
            Self::Stored => f.write_str("holds other compressed bytes than were stored"),
            Self::Expand(why) => write!(f, "cannot be expanded: {why}"),
            Self::Size { says, found } if i64::try_from(*found).is_ok_and(|found| found > *says) => {
                write!(f, "holds more than the {says} bytes that its row says")
            }
            Self::Size { says, found } => write!(f, "holds {found} bytes where its row says {says}"),
            Self::Bytes => f.write_str("holds other bytes than were exported"),
        }
    }
}

impl fmt::Display for VerifyNote {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self {
            Self::LooseFile { file } => {
                write!(f, "{} is known to no row, as after a crash; it may be deleted.", file.display())
            }
            Self::Unpublished { filing } => write!(f, "filing {filing} is not published, and was not checked."),
            Self::Removed { act, rows } => write!(f, "the values of {rows} rows were removed by act {act}."),
        }
    }
}

/// Called with how much is done, and of how much.
type Progress<'p> = &'p mut dyn FnMut(u64, u64);

impl Records {
    /// Computes again all that the trail covers, and says what is wrong.
    pub fn verify(&self, progress: Progress<'_>) -> Result<Verified> {
        self.check(None, progress)
    }

    /// The same, and looks on the trail for a hash that was noted elsewhere: in full, or as [`super::trail::short`]
    /// writes it. It may be that of any act: the trail goes on after the note.
    pub fn verify_against(&self, head: &str, progress: Progress<'_>) -> Result<Verified> {
        self.check(Some(Noted::parse(head)?), progress)
    }

    fn check(&self, noted: Option<Noted>, progress: Progress<'_>) -> Result<Verified> {
        let transaction = self.conn.unchecked_transaction().map_err(self.failed("starting to verify"))?;
        let mut check = Check::new(self, &transaction, noted, progress);
        check.all()?;
        Ok(check.end())
    }

    /// The last act and its hash.
    pub fn head(&self) -> Result<Option<(ActNumber, Hash)>> {
        self.conn
            .prepare_cached("SELECT number, hash FROM trail ORDER BY number DESC LIMIT 1")
            .and_then(|mut statement| statement.query_row([], |row| Ok((row.get(0)?, row.get(1)?))).optional())
            .map_err(self.failed("reading the trail"))
    }

    /// The acts from one number to another, both included.
    pub fn trail(&self, from: ActNumber, upto: ActNumber) -> Result<Vec<TrailRow>> {
        let sql = format!("SELECT {TRAIL_COLUMNS} FROM trail WHERE number BETWEEN ?1 AND ?2 ORDER BY number");
        self.conn
            .prepare_cached(&sql)
            .and_then(|mut statement| statement.query_map([from, upto], trail_row)?.collect())
            .map_err(self.failed("reading the trail"))
    }
}

const TRAIL_COLUMNS: &str = "number, at, who, program, act, objects, before, after, reason, digest, previous, hash";

fn trail_row(row: &Row<'_>) -> rusqlite::Result<TrailRow> {
    Ok(TrailRow {
        number: row.get(0)?,
        at: row.get(1)?,
        who: row.get(2)?,
        program: row.get(3)?,
        act: row.get(4)?,
        objects: row.get(5)?,
        before: row.get(6)?,
        after: row.get(7)?,
        reason: row.get(8)?,
        digest: row.get(9)?,
        previous: row.get(10)?,
        hash: row.get(11)?,
    })
}

/// A hash that was noted elsewhere: its first digits.
struct Noted {
    given: String,
    digits: String,
}

impl Noted {
    /// The short form has 20 digits; fewer would prove little.
    const FEWEST: usize = 20;

    fn parse(given: &str) -> Result<Self> {
        let digits: String =
            given.chars().filter(|mark| !mark.is_whitespace() && *mark != '-').collect::<String>().to_lowercase();
        let hexadecimal = digits.chars().all(|digit| digit.is_ascii_hexdigit());
        if !hexadecimal || !(Self::FEWEST..=64).contains(&digits.len()) {
            let wrong = format!(
                "\"{given}\" is no head hash; it has at least 20 digits, such as 0123-4567-89ab-cdef-0123, as \
                 `revisant trail verify` prints it"
            );
            return Err(RecordsError::Refused(wrong));
        }
        Ok(Self { given: given.to_owned(), digits })
    }
}

/// More faults than this are counted and not listed.
const MOST_FAULTS: usize = 1000;

/// Faults, of which those of the earliest acts are kept when there are too many.
#[derive(Default)]
struct Faults {
    list: Vec<VerifyFault>,
    further: u64,
}

impl Faults {
    fn add(&mut self, fault: VerifyFault) {
        self.list.push(fault);
        if self.list.len() >= 2 * MOST_FAULTS {
            self.trim();
        }
    }

    fn trim(&mut self) {
        self.list.sort_by_key(|fault| fault.act().unwrap_or(ActNumber::MAX));
        self.further += self.list.len().saturating_sub(MOST_FAULTS) as u64;
        self.list.truncate(MOST_FAULTS);
    }

    fn end(mut self) -> Vec<VerifyFault> {
        self.trim();
        if self.further > 0 {
            self.list.push(VerifyFault::Further { count: self.further });
        }
        self.list
    }
}

/// Texts that rows refer to, and what removals allow.
#[derive(Default)]
struct Known {
    terms: HashMap<i64, String>,
    subjects: HashMap<i64, String>,
    sessions: HashMap<i64, SessionFact>,
    removals: HashSet<ActNumber>,
    instead: HashMap<Vec<u8>, Vec<Vec<u8>>>,
}

/// A part of the check.
type Step<C> = fn(&mut C) -> rusqlite::Result<()>;

/// A check in the making.
struct Check<'c> {
    records: &'c Records,
    conn: &'c Connection,
    progress: Progress<'c>,
    done: u64,
    of: u64,
    noted: Option<Noted>,
    known: Known,
    canon: Canon,
    faults: Faults,
    closed: HashSet<i64>,
    verified: Verified,
}

/// Rows of one table by the act that they name.
struct ActRows {
    table: &'static Table,
    sql: String,
    order: Vec<(ActNumber, i64)>,
    at: usize,
}

impl ActRows {
    fn next_of(&mut self, act: ActNumber) -> Option<i64> {
        let &(named, id) = self.order.get(self.at)?;
        (named == act).then(|| {
            self.at += 1;
            id
        })
    }

    /// The act that the next row names, when it lies before `act`.
    fn stray_before(&self, act: ActNumber) -> Option<ActNumber> {
        self.order.get(self.at).map(|(named, _)| *named).filter(|named| *named < act)
    }
}

/// Says which rows, in few words: `capture 3, roster_event 1 to 40`.
#[derive(Default)]
struct Span(Vec<(&'static str, i64, i64)>);

impl Span {
    fn add(&mut self, table: &'static str, id: i64) {
        match self.0.last_mut() {
            Some((last, _, upto)) if *last == table => *upto = id,
            _ => self.0.push((table, id, id)),
        }
    }

    fn say(&self) -> String {
        let parts: Vec<String> = self
            .0
            .iter()
            .map(|(table, from, upto)| match from == upto {
                true => format!("{table} {from}"),
                false => format!("{table} {from} to {upto}"),
            })
            .collect();
        parts.join(", ")
    }
}

/// A filing as its row says it is, and what its readings add up to so far.
struct OpenFiling {
    id: i64,
    act: ActNumber,
    first: Option<i64>,
    last: Option<i64>,
    readings: i64,
    holds: i64,
    digest: Vec<u8>,
    stream: Sha256,
    found_first: Option<i64>,
    found_last: Option<i64>,
    found: i64,
}

impl OpenFiling {
    fn add(&mut self, id: i64, digest: &Hash) {
        self.found_first.get_or_insert(id);
        self.found_last = Some(id);
        self.found += 1;
        self.stream.update(digest);
    }

    fn counts(&self, holds: i64) -> [(&'static str, Option<i64>, Option<i64>); 4] {
        [
            ("readings", Some(self.readings), Some(self.found)),
            ("first_reading", self.first, self.found_first),
            ("last_reading", self.last, self.found_last),
            ("holds", Some(self.holds), Some(holds)),
        ]
    }
}

/// To whom a reading belongs.
enum Owner {
    Published(Box<OpenFiling>),
    /// It is being written.
    Staged,
    /// It was published and its last reading has passed.
    Closed(ActNumber),
    Nobody {
        first: i64,
        count: i64,
    },
}

impl<'c> Check<'c> {
    fn new(records: &'c Records, conn: &'c Connection, noted: Option<Noted>, progress: Progress<'c>) -> Self {
        Self {
            records,
            conn,
            progress,
            done: 0,
            of: 0,
            noted,
            known: Known::default(),
            canon: Canon::default(),
            faults: Faults::default(),
            closed: HashSet::new(),
            verified: Verified::default(),
        }
    }

    fn all(&mut self) -> Result<()> {
        let steps: &[(&str, Step<Self>)] = &[
            ("the file", Self::measure),
            ("the file's marks", Self::marks),
            ("the file's layout", Self::layout),
            ("the file", Self::integrity),
            ("the references", Self::foreign_keys),
            ("the list of terms", Self::load_terms),
            ("the list of subjects", Self::load_subjects),
            ("the list of sessions", Self::load_sessions),
            ("the list of removals", Self::load_removals),
            ("the trail", Self::trail),
            ("the readings", Self::readings),
            ("the filings", Self::other_filings),
            ("rows without a filing", Self::without_filing),
            ("the removed rows", Self::removed_rows),
            ("the references", Self::references),
            ("the captures", Self::captures),
            ("the raw copies", Self::raw_copies),
        ];
        for (part, step) in steps {
            let done = step(self);
            self.attempt(part, done)?;
        }
        self.loose_files()
    }

    fn end(mut self) -> Verified {
        if let (Some(noted), None) = (&self.noted, self.verified.noted) {
            self.faults.add(VerifyFault::NotedHead { noted: noted.given.clone() });
        }
        self.verified.faults = self.faults.end();
        (self.progress)(self.of, self.of);
        self.verified
    }

    /// Turns damage into a fault; what says nothing about the records (a failing disk, no memory) ends the check.
    fn attempt(&mut self, part: &str, done: rusqlite::Result<()>) -> Result<()> {
        let Err(error) = done else { return Ok(()) };
        if says_nothing(&error) {
            return Err(RecordsError::database(&self.records.file, "verifying", error));
        }
        self.faults.add(VerifyFault::Unreadable { part: part.to_owned(), why: error.to_string() });
        Ok(())
    }

    fn step(&mut self) {
        self.done += 1;
        if self.done.is_multiple_of(4096) {
            (self.progress)(self.done.min(self.of), self.of);
        }
    }

    fn number(&self, sql: &str) -> rusqlite::Result<i64> {
        self.conn.query_row(sql, [], |row| row.get(0))
    }

    fn measure(&mut self) -> rusqlite::Result<()> {
        for table in ["trail", "reading", "raw"] {
            self.of += u64::try_from(self.number(&format!("SELECT count(*) FROM {table}"))?).unwrap_or(0);
        }
        (self.progress)(0, self.of);
        Ok(())
    }

    fn marks(&mut self) -> rusqlite::Result<()> {
        let application = self.number("PRAGMA application_id")?;
        let version = self.number("PRAGMA user_version")?;
        if application != APPLICATION || version != Records::newest_layout() {
            self.faults.add(VerifyFault::Marks { application, version });
        }
        Ok(())
    }

    fn layout(&mut self) -> rusqlite::Result<()> {
        let mut expected: BTreeMap<String, String> = Records::expected_layout()?.into_iter().collect();
        for (name, sql) in layout(self.conn)? {
            match expected.remove(&name) {
                None => self.faults.add(VerifyFault::LayoutExtra { name }),
                Some(right) if right != sql => self.faults.add(VerifyFault::LayoutChanged { name }),
                Some(_) => {}
            }
        }
        expected.into_keys().for_each(|name| self.faults.add(VerifyFault::LayoutMissing { name }));
        Ok(())
    }

    fn integrity(&mut self) -> rusqlite::Result<()> {
        let mut statement = self.conn.prepare("PRAGMA integrity_check")?;
        let mut rows = statement.query([])?;
        while let Some(row) = rows.next()? {
            let what: String = row.get(0)?;
            if what != "ok" {
                self.faults.add(VerifyFault::Sqlite { what });
            }
        }
        Ok(())
    }

    fn foreign_keys(&mut self) -> rusqlite::Result<()> {
        let mut statement = self.conn.prepare("PRAGMA foreign_key_check")?;
        let mut rows = statement.query([])?;
        while let Some(row) = rows.next()? {
            let row_number: Option<i64> = row.get(1)?;
            let (table, parent) = (row.get(0)?, row.get(2)?);
            self.faults.add(VerifyFault::Reference { table, row: row_number.unwrap_or(0), parent });
        }
        Ok(())
    }

    fn load_terms(&mut self) -> rusqlite::Result<()> {
        self.known.terms.insert(0, String::new());
        load_texts(self.conn, "SELECT id, text FROM term", &mut self.known.terms)
    }

    fn load_subjects(&mut self) -> rusqlite::Result<()> {
        load_texts(self.conn, "SELECT id, code FROM subject", &mut self.known.subjects)
    }

    fn load_sessions(&mut self) -> rusqlite::Result<()> {
        let mut statement = self.conn.prepare("SELECT id, subject, day, label FROM session")?;
        let mut rows = statement.query([])?;
        while let Some(row) = rows.next()? {
            let fact = SessionFact { subject: row.get(1)?, day: row.get(2)?, label: row.get(3)? };
            self.known.sessions.insert(row.get(0)?, fact);
        }
        Ok(())
    }

    fn load_removals(&mut self) -> rusqlite::Result<()> {
        let mut statement = self.conn.prepare("SELECT act FROM removal")?;
        self.known.removals = statement.query_map([], |row| row.get(0))?.collect::<rusqlite::Result<_>>()?;
        let mut statement = self.conn.prepare("SELECT sha256, instead FROM raw_removal")?;
        let mut rows = statement.query([])?;
        while let Some(row) = rows.next()? {
            self.known.instead.entry(row.get(0)?).or_default().push(row.get(1)?);
        }
        Ok(())
    }
}

/// Whether an error says nothing about the records themselves.
fn says_nothing(error: &rusqlite::Error) -> bool {
    use rusqlite::ErrorCode as Code;
    matches!(
        error.sqlite_error_code(),
        Some(
            Code::DatabaseBusy
                | Code::DatabaseLocked
                | Code::OutOfMemory
                | Code::OperationInterrupted
                | Code::SystemIoFailure
                | Code::DiskFull
                | Code::PermissionDenied
                | Code::CannotOpen
        )
    )
}

/// Texts that are no UTF-8 are left out: what refers to them then dangles.
fn load_texts(conn: &Connection, sql: &str, into: &mut HashMap<i64, String>) -> rusqlite::Result<()> {
    let mut statement = conn.prepare(sql)?;
    let mut rows = statement.query([])?;
    while let Some(row) = rows.next()? {
        if let Ok(text) = row.get_ref(1)?.as_str() {
            into.insert(row.get(0)?, text.to_owned());
        }
    }
    Ok(())
}

// Rows and their digests.
impl Check<'_> {
    /// A row's digest: computed again, or as stored where its values were removed.
    fn row_digest(&mut self, table: &'static Table, row: &Row<'_>, act: ActNumber) -> rusqlite::Result<Hash> {
        self.verified.rows += 1;
        if !table.salted {
            return self.fresh_digest(table, row, act, &[]);
        }
        let after = table.columns.len();
        let (salt, digest, removed) = (row.get_ref(after)?, row.get_ref(after + 1)?, row.get_ref(after + 2)?);
        match (salt, digest, removed) {
            (ValueRef::Blob(salt), ValueRef::Null, ValueRef::Null) if salt.len() == 16 => {
                self.fresh_digest(table, row, act, salt)
            }
            (ValueRef::Null, ValueRef::Blob(digest), ValueRef::Integer(by)) => {
                self.removed_digest(table, row, act, digest, by)
            }
            _ => {
                self.shape(table, row, act, "has salt, digest and removal as no act leaves them")?;
                self.fresh_digest(table, row, act, salt.as_blob().unwrap_or_default())
            }
        }
    }

    fn removed_digest(
        &mut self,
        table: &'static Table,
        row: &Row<'_>,
        act: ActNumber,
        digest: &[u8],
        by: ActNumber,
    ) -> rusqlite::Result<Hash> {
        if !self.known.removals.contains(&by) {
            self.shape(table, row, act, "is marked as removed by an act that removed nothing")?;
        }
        for (at, (name, _)) in table.columns.iter().enumerate() {
            if blanked(table.name).contains(name) && row.get_ref(at)? != ValueRef::Null {
                self.shape(table, row, act, "is marked as removed and still holds values")?;
            }
        }
        match digest.try_into() {
            Ok(digest) => Ok(digest),
            Err(_) => {
                self.shape(table, row, act, "has a digest that is none")?;
                Ok([0; 32])
            }
        }
    }

    fn shape(
        &mut self,
        table: &'static Table,
        row: &Row<'_>,
        act: ActNumber,
        wrong: &'static str,
    ) -> rusqlite::Result<()> {
        self.faults.add(VerifyFault::Shape { act, table: table.name, row: row.get(0)?, wrong });
        Ok(())
    }

    fn fresh_digest(
        &mut self,
        table: &'static Table,
        row: &Row<'_>,
        act: ActNumber,
        salt: &[u8],
    ) -> rusqlite::Result<Hash> {
        self.canon.start(salt);
        self.canon.text(table.name);
        for (at, (column, kind)) in table.columns.iter().enumerate() {
            let value = row.get_ref(at)?;
            if put(&mut self.canon, &self.known, *kind, value).is_none() {
                let to = value.as_i64().unwrap_or(-1);
                let fault = VerifyFault::Dangling { act: Some(act), table: table.name, row: row.get(0)?, column, to };
                self.faults.add(fault);
            }
        }
        Ok(self.canon.digest())
    }
}

// Removals.
impl Check<'_> {
    /// Compares what removals left with what they say that they left.
    fn removed_rows(&mut self) -> rusqlite::Result<()> {
        if self.known.removals.is_empty() {
            return Ok(());
        }
        let conn = self.conn;
        let mut left: BTreeMap<ActNumber, (i64, Sha256)> = BTreeMap::new();
        for table in REMOVABLE.iter().filter_map(|(name, _)| table(name)).map(|(_, table)| table) {
            let sql = format!(
                "SELECT {}, digest, removed FROM {} WHERE removed IS NOT NULL ORDER BY id",
                column_list(table),
                table.name
            );
            let mut statement = conn.prepare(&sql)?;
            let mut rows = statement.query([])?;
            while let Some(row) = rows.next()? {
                let (digest, by) = (row.get_ref("digest")?, row.get("removed")?);
                let rest = self.fresh_digest(table, row, by, digest.as_blob().unwrap_or_default())?;
                let (count, hasher) = left.entry(by).or_default();
                *count += 1;
                hasher.update(rest);
            }
        }
        self.compare_removals(left)
    }

    fn compare_removals(&mut self, mut left: BTreeMap<ActNumber, (i64, Sha256)>) -> rusqlite::Result<()> {
        let conn = self.conn;
        let mut statement = conn.prepare("SELECT act, rows, digest FROM removal ORDER BY act")?;
        let mut rows = statement.query([])?;
        while let Some(row) = rows.next()? {
            let (act, says): (ActNumber, i64) = (row.get(0)?, row.get(1)?);
            let (found, hasher) = left.remove(&act).unwrap_or_default();
            if found != says || row.get_ref(2)? != ValueRef::Blob(&hasher.finalize()) {
                self.faults.add(VerifyFault::Removal { act, says, found });
            }
            self.verified.notes.push(VerifyNote::Removed { act, rows: found.unsigned_abs() });
        }
        Ok(())
    }
}

/// Puts a value in the canonical form; `None` where what it refers to is not there.
fn put(canon: &mut Canon, known: &Known, kind: Kind, value: ValueRef<'_>) -> Option<()> {
    if kind == Kind::Plain {
        canon.value(value);
        return Some(());
    }
    let id = value.as_i64().ok()?;
    match kind {
        Kind::Term => canon.text(known.terms.get(&id)?),
        Kind::Subject => canon.text(known.subjects.get(&id)?),
        _ => {
            let fact = known.sessions.get(&id)?;
            canon.text(known.subjects.get(&fact.subject)?);
            canon.integer(fact.day);
            canon.text(known.terms.get(&fact.label)?);
        }
    }
    Some(())
}

/// The columns of a table's canonical row, and behind them salt, digest and removal where it has them.
fn columns_of(table: &Table) -> String {
    let more = if table.salted { ", salt, digest, removed" } else { "" };
    format!("{}{more}", column_list(table))
}

// The trail.
impl Check<'_> {
    fn trail(&mut self) -> rusqlite::Result<()> {
        let conn = self.conn;
        let mut lists = OF_ACT.iter().map(|table| self.rows_by_act(table)).collect::<rusqlite::Result<Vec<_>>>()?;
        let mut statement = conn.prepare(&format!("SELECT {TRAIL_COLUMNS} FROM trail ORDER BY number"))?;
        let mut rows = statement.query([])?;
        let mut head = (0, [0; 32]);
        while let Some(row) = rows.next()? {
            let number = row.get(0)?;
            self.number_follows(number, head.0);
            self.strays_before(&mut lists, number);
            let digest = self.act_digest(&mut lists, number)?;
            head = self.link(row, number, head, digest);
            self.verified.head = Some(head);
            self.verified.rows += 1;
            self.step();
        }
        self.strays_before(&mut lists, ActNumber::MAX);
        Ok(())
    }

    fn rows_by_act(&mut self, table: &'static Table) -> rusqlite::Result<ActRows> {
        let mut order = Vec::new();
        let done = self.order_by_act(table, &mut order);
        if let Err(error) = done {
            if says_nothing(&error) {
                return Err(error);
            }
            self.faults.add(VerifyFault::Unreadable { part: table.name.to_owned(), why: error.to_string() });
        }
        order.sort_unstable();
        let sql = format!("SELECT {} FROM {} WHERE id = ?1", columns_of(table), table.name);
        Ok(ActRows { table, sql, order, at: 0 })
    }

    fn order_by_act(&self, table: &Table, order: &mut Vec<(ActNumber, i64)>) -> rusqlite::Result<()> {
        let mut statement = self.conn.prepare(&format!("SELECT act, id FROM {} ORDER BY id", table.name))?;
        let mut rows = statement.query([])?;
        while let Some(row) = rows.next()? {
            order.push((row.get(0)?, row.get(1)?));
        }
        Ok(())
    }

    /// Reports rows that name an act before `act` and were not taken by it.
    fn strays_before(&mut self, lists: &mut [ActRows], act: ActNumber) {
        while let Some(stray) = lists.iter().filter_map(|list| list.stray_before(act)).min() {
            let mut span = Span::default();
            for list in lists.iter_mut() {
                while let Some(id) = list.next_of(stray) {
                    span.add(list.table.name, id);
                }
            }
            self.faults.add(VerifyFault::NoAct { act: stray, rows: span.say() });
        }
    }

    /// The digest over the rows that name this act, with the rows for a fault.
    fn act_digest(&mut self, lists: &mut [ActRows], act: ActNumber) -> rusqlite::Result<(Hash, Span)> {
        let conn = self.conn;
        let mut hasher = Sha256::new();
        let mut span = Span::default();
        for list in lists {
            while let Some(id) = list.next_of(act) {
                span.add(list.table.name, id);
                let mut statement = conn.prepare_cached(&list.sql)?;
                let mut rows = statement.query([id])?;
                if let Some(row) = rows.next()? {
                    hasher.update(self.row_digest(list.table, row, act)?);
                }
            }
        }
        Ok((hasher.finalize().into(), span))
    }

    fn number_follows(&mut self, number: ActNumber, before: ActNumber) {
        if number < 1 {
            self.faults.add(VerifyFault::TrailNumber { act: number });
        } else if number > before.saturating_add(1) {
            self.faults.add(VerifyFault::TrailGap { from: before + 1, upto: number - 1 });
        }
    }

    /// Checks one row of the trail against the one before it and the digest of its rows; gives what the next one must
    /// follow on.
    fn link(
        &mut self,
        row: &Row<'_>,
        number: ActNumber,
        before: (ActNumber, Hash),
        (digest, span): (Hash, Span),
    ) -> (ActNumber, Hash) {
        let Ok(row) = trail_row(row) else {
            self.faults.add(VerifyFault::TrailUnreadable { act: number });
            return (number, [0; 32]);
        };
        // Behind a gap it must differ, and the gap is reported.
        if row.previous != before.1 && number == before.0.saturating_add(1) {
            self.faults.add(VerifyFault::TrailPrevious { act: number });
        }
        if row.hash != row.expected_hash() {
            self.faults.add(VerifyFault::TrailHash { act: number });
        } else if self.noted.as_ref().is_some_and(|noted| hex(&row.hash).starts_with(&noted.digits)) {
            self.verified.noted = Some(number);
        }
        if row.digest != digest {
            self.faults.add(VerifyFault::ActDigest { act: number, rows: span.say() });
        }
        if DateTime::parse_from_rfc3339(&row.at).is_err() {
            self.faults.add(VerifyFault::TrailMoment { act: number, at: row.at });
        }
        (number.max(0), row.hash)
    }
}

/// Readings of a table that follow the filing's others: its rows, by their filing.
fn rows_of_filing(table: &Table) -> String {
    format!("SELECT {} FROM {} WHERE filing = ?1 ORDER BY id", columns_of(table), table.name)
}

// Filings.
impl Check<'_> {
    /// One scan over all readings by number. Those of one filing may lie among another's, so each open filing has its
    /// own hasher; a filing is closed as soon as the last reading that it names has passed.
    fn readings(&mut self) -> rusqlite::Result<()> {
        let conn = self.conn;
        let Some(table) = OF_FILING.first() else { return Ok(()) };
        let mut statement = conn.prepare(&format!("SELECT {} FROM reading ORDER BY id", columns_of(table)))?;
        let mut rows = statement.query([])?;
        let mut open: HashMap<i64, Owner> = HashMap::new();
        let mut current = None;
        let mut seen = Seen::default();
        while let Some(row) = rows.next()? {
            let (id, filing): (i64, i64) = (row.get(0)?, row.get(1)?);
            if current != Some(filing) {
                self.close_passed(&mut open, id)?;
                current = Some(filing);
            }
            if let std::collections::hash_map::Entry::Vacant(place) = open.entry(filing) {
                place.insert(self.owner(filing, id)?);
            }
            if let Some(owner) = open.get_mut(&filing) {
                self.reading(table, row, (id, filing), owner, &mut seen)?;
            }
            self.step();
        }
        self.close_rest(open)
    }

    fn owner(&mut self, filing: i64, first: i64) -> rusqlite::Result<Owner> {
        if let Some(open) = self.published(filing)? {
            let closed = self.closed.contains(&filing);
            return Ok(if closed { Owner::Closed(open.act) } else { Owner::Published(Box::new(open)) });
        }
        let staged = self.conn.prepare_cached("SELECT 1 FROM staging WHERE filing = ?1")?.exists([filing])?;
        Ok(if staged { Owner::Staged } else { Owner::Nobody { first, count: 0 } })
    }

    fn published(&self, filing: i64) -> rusqlite::Result<Option<OpenFiling>> {
        self.conn
            .prepare_cached(
                "SELECT id, act, first_reading, last_reading, readings, holds, digest FROM filing WHERE id = ?1",
            )?
            .query_row([filing], |row| {
                Ok(OpenFiling {
                    id: row.get(0)?,
                    act: row.get(1)?,
                    first: row.get(2)?,
                    last: row.get(3)?,
                    readings: row.get(4)?,
                    holds: row.get(5)?,
                    digest: row.get(6)?,
                    stream: Sha256::new(),
                    found_first: None,
                    found_last: None,
                    found: 0,
                })
            })
            .optional()
    }

    fn reading(
        &mut self,
        table: &'static Table,
        row: &Row<'_>,
        (id, filing): (i64, i64),
        owner: &mut Owner,
        seen: &mut Seen,
    ) -> rusqlite::Result<()> {
        match owner {
            Owner::Published(open) => {
                let digest = self.row_digest(table, row, open.act)?;
                self.verified.readings += 1;
                open.add(id, &digest);
                self.reading_refers(row, id, open.act, seen)?;
                if open.last == Some(id) {
                    let act = open.act;
                    if let Owner::Published(open) = std::mem::replace(owner, Owner::Closed(act)) {
                        self.close(*open)?;
                    }
                }
            }
            Owner::Closed(act) => self.faults.add(VerifyFault::BeyondFiling { act: *act, filing, reading: id }),
            Owner::Nobody { count, .. } => *count += 1,
            Owner::Staged => {}
        }
        Ok(())
    }

    /// Looks whether a reading's capture and plan version exist, unless the reading before it had the same.
    fn reading_refers(&mut self, row: &Row<'_>, id: i64, act: ActNumber, seen: &mut Seen) -> rusqlite::Result<()> {
        let (capture, plan): (Option<i64>, i64) = (row.get("capture")?, row.get("plan")?);
        let dangles = |column, to| VerifyFault::Dangling { act: Some(act), table: "reading", row: id, column, to };
        if capture.is_some() && capture != seen.capture {
            if !self.conn.prepare_cached("SELECT 1 FROM capture WHERE id = ?1")?.exists([capture])? {
                self.faults.add(dangles("capture", capture.unwrap_or(0)));
            }
            seen.capture = capture;
        }
        if Some(plan) != seen.plan {
            if !self.conn.prepare_cached("SELECT 1 FROM plan_version WHERE id = ?1")?.exists([plan])? {
                self.faults.add(dangles("plan", plan));
            }
            seen.plan = Some(plan);
        }
        Ok(())
    }

    /// Closes filings whose last reading lies before `id`, and forgets those that are closed.
    fn close_passed(&mut self, open: &mut HashMap<i64, Owner>, id: i64) -> rusqlite::Result<()> {
        let passed: Vec<i64> =
            open.iter().filter(|(_, owner)| owner.has_passed(id)).map(|(filing, _)| *filing).collect();
        for filing in passed {
            if let Some(Owner::Published(open)) = open.remove(&filing) {
                self.close(*open)?;
            }
        }
        Ok(())
    }

    fn close_rest(&mut self, open: HashMap<i64, Owner>) -> rusqlite::Result<()> {
        for (filing, owner) in open {
            match owner {
                Owner::Published(open) => self.close(*open)?,
                Owner::Nobody { first, count } => {
                    self.faults.add(VerifyFault::NoFiling { table: "reading", filing, first, count });
                }
                Owner::Staged | Owner::Closed(_) => {}
            }
        }
        Ok(())
    }

    /// Takes the rest of a filing's rows, and compares what all add up to with what the filing's row says.
    fn close(&mut self, open: OpenFiling) -> rusqlite::Result<()> {
        let conn = self.conn;
        self.closed.insert(open.id);
        let mut span = Span::default();
        open.found_first.into_iter().chain(open.found_last).for_each(|id| span.add("reading", id));
        let mut outer = Sha256::new();
        outer.update(open.stream.clone().finalize());
        let mut holds = 0;
        for table in OF_FILING.iter().skip(1) {
            let mut stream = Sha256::new();
            let mut statement = conn.prepare_cached(&rows_of_filing(table))?;
            let mut rows = statement.query([open.id])?;
            while let Some(row) = rows.next()? {
                stream.update(self.row_digest(table, row, open.act)?);
                span.add(table.name, row.get(0)?);
                holds += i64::from(table.name == "hold");
            }
            outer.update(stream.finalize());
        }
        let digest: Hash = outer.finalize().into();
        self.compare(&open, holds, &digest, &span);
        Ok(())
    }

    fn compare(&mut self, open: &OpenFiling, holds: i64, digest: &Hash, span: &Span) {
        let (act, filing) = (open.act, open.id);
        for (column, says, found) in open.counts(holds) {
            if says != found {
                self.faults.add(VerifyFault::FilingCount { act, filing, column, says, found });
            }
        }
        if open.digest != digest {
            self.faults.add(VerifyFault::FilingDigest { act, filing, rows: span.say() });
        }
    }

    /// Filings without readings, and those whose readings are all gone.
    fn other_filings(&mut self) -> rusqlite::Result<()> {
        let conn = self.conn;
        let mut statement = conn.prepare("SELECT id FROM filing ORDER BY id")?;
        let mut rows = statement.query([])?;
        while let Some(row) = rows.next()? {
            let filing = row.get(0)?;
            if !self.closed.contains(&filing)
                && let Some(open) = self.published(filing)?
            {
                self.close(open)?;
            }
        }
        Ok(())
    }

    /// Holds, sightings and goings whose filing is neither published nor being written.
    fn without_filing(&mut self) -> rusqlite::Result<()> {
        for table in OF_FILING.iter().skip(1) {
            let mut statement = self.conn.prepare(&format!(
                "SELECT filing, min(id), count(*) FROM {} WHERE filing NOT IN (SELECT id FROM filing)
                 AND filing NOT IN (SELECT filing FROM staging) GROUP BY filing",
                table.name
            ))?;
            let mut rows = statement.query([])?;
            while let Some(row) = rows.next()? {
                let (filing, first, count) = (row.get(0)?, row.get(1)?, row.get(2)?);
                self.faults.add(VerifyFault::NoFiling { table: table.name, filing, first, count });
            }
        }
        let mut statement = self.conn.prepare("SELECT filing FROM staging ORDER BY filing")?;
        let mut rows = statement.query([])?;
        while let Some(row) = rows.next()? {
            self.verified.notes.push(VerifyNote::Unpublished { filing: row.get(0)? });
        }
        Ok(())
    }
}

/// What the reading before referred to, found to be there or reported already.
#[derive(Default)]
struct Seen {
    capture: Option<i64>,
    plan: Option<i64>,
}

impl Owner {
    fn has_passed(&self, id: i64) -> bool {
        match self {
            Self::Published(open) => open.last.is_none_or(|last| last < id),
            _ => false,
        }
    }
}

/// Columns that refer to a row by its number and are bound by no foreign key: table, column, the table it refers to.
/// Terms, subjects, sessions, and a reading's capture and plan are looked up on the way.
const REFERENCES: &[(&str, &str, &str)] = &[
    ("account", "capture", "capture"),
    ("capture", "repeat_of", "capture"),
    ("capture", "continues", "capture"),
    ("filing", "capture", "capture"),
    ("reading_event", "reading", "reading"),
    ("hold_event", "hold", "hold"),
    ("cut", "trail", "trail"),
    ("reading", "supersedes", "reading"),
    ("hold", "capture", "capture"),
    ("sighting", "capture", "capture"),
    ("sighting", "hold", "hold"),
    ("gone", "reading", "reading"),
];

// References and raw copies.
impl Check<'_> {
    fn references(&mut self) -> rusqlite::Result<()> {
        for (table, column, target) in REFERENCES {
            let sql = reference_check(table, column, target);
            let mut statement = self.conn.prepare(&sql)?;
            let mut rows = statement.query([])?;
            while let Some(row) = rows.next()? {
                let (row, to, act) = (row.get(0)?, row.get(1)?, row.get(2)?);
                self.faults.add(VerifyFault::Dangling { act: Some(act), table, row, column, to });
            }
        }
        Ok(())
    }

    fn captures(&mut self) -> rusqlite::Result<()> {
        let conn = self.conn;
        let mut statement = conn.prepare(
            "SELECT c.id, c.act, c.size, c.sha256, r.size FROM capture c LEFT JOIN raw r ON r.sha256 = c.sha256 ORDER BY c.id",
        )?;
        let mut rows = statement.query([])?;
        while let Some(row) = rows.next()? {
            let (capture, act, says): (i64, ActNumber, i64) = (row.get(0)?, row.get(1)?, row.get(2)?);
            let sha256: Vec<u8> = row.get(3)?;
            match row.get::<_, Option<i64>>(4)? {
                Some(found) if found != says => self.faults.add(VerifyFault::RawSize { act, capture, says, found }),
                None if !self.is_kept_instead(&sha256)? => {
                    self.faults.add(VerifyFault::RawMissing { act, capture, sha256: hex(&sha256) });
                }
                _ => {}
            }
        }
        Ok(())
    }

    /// Whether a removal put other bytes in the place of these, and they, or their own successors, are kept.
    fn is_kept_instead(&self, sha256: &[u8]) -> rusqlite::Result<bool> {
        let mut seen: HashSet<&[u8]> = HashSet::new();
        let mut next: Vec<&[u8]> = vec![sha256];
        while let Some(sha256) = next.pop() {
            for instead in self.known.instead.get(sha256).into_iter().flatten() {
                if self.conn.prepare_cached("SELECT 1 FROM raw WHERE sha256 = ?1")?.exists([instead])? {
                    return Ok(true);
                }
                if seen.insert(instead) {
                    next.push(instead);
                }
            }
        }
        Ok(false)
    }

    fn raw_copies(&mut self) -> rusqlite::Result<()> {
        let conn = self.conn;
        let removal: HashSet<Vec<u8>> = self.known.instead.values().flatten().cloned().collect();
        let mut statement = conn.prepare("SELECT sha256, size, stored_sha256, stored FROM raw ORDER BY sha256")?;
        let mut rows = statement.query([])?;
        while let Some(row) = rows.next()? {
            self.raw_copy(row, &removal)?;
            self.verified.raw_copies += 1;
            self.step();
        }
        Ok(())
    }

    fn raw_copy(&mut self, row: &Row<'_>, removal: &HashSet<Vec<u8>>) -> rusqlite::Result<()> {
        let sha256: Vec<u8> = row.get(0)?;
        let act: Option<ActNumber> = self
            .conn
            .prepare_cached("SELECT min(act) FROM capture WHERE sha256 = ?1")?
            .query_row([&sha256], |row| row.get(0))?;
        if act.is_none() && !removal.contains(&sha256) {
            self.faults.add(VerifyFault::RawUnknown { sha256: hex(&sha256) });
        }
        if let Err(wrong) = self.raw_bytes(row) {
            self.faults.add(VerifyFault::Raw { act, sha256: hex(&sha256), wrong });
        }
        Ok(())
    }

    fn raw_bytes(&self, row: &Row<'_>) -> std::result::Result<(), RawWrong> {
        let read = || -> rusqlite::Result<(Hash, i64, Hash)> { Ok((row.get(0)?, row.get(1)?, row.get(2)?)) };
        let (sha256, size, stored_sha256) = read().map_err(|_| RawWrong::Row)?;
        let stored = row.get_ref(3).map_err(|_| RawWrong::Row)?;
        match stored {
            ValueRef::Blob(stored) => expand(stored, &sha256, size, &stored_sha256),
            ValueRef::Null => {
                let name = self.records.raw_file(&sha256);
                let file = self.records.world.open(&name).map_err(|error| match error.kind() {
                    io::ErrorKind::NotFound => RawWrong::NoFile,
                    _ => RawWrong::File(error.to_string()),
                })?;
                expand(file, &sha256, size, &stored_sha256)
            }
            _ => Err(RawWrong::Row),
        }
    }

    /// Notes files in `raw/` that no row knows.
    fn loose_files(&mut self) -> Result<()> {
        let folder = self.records.folder.join("raw");
        let listed = self.records.world.list(&folder);
        let mut entries = listed.map_err(|error| RecordsError::file(&folder, "listing raw copies", error))?;
        entries.sort_by(|one, other| one.path.cmp(&other.path));
        for entry in entries {
            let known = self.is_known(&entry.path).map_err(self.records.failed("verifying"))?;
            if !known {
                self.verified.notes.push(VerifyNote::LooseFile { file: entry.path });
            }
        }
        Ok(())
    }

    fn is_known(&self, file: &std::path::Path) -> rusqlite::Result<bool> {
        let name = file.file_name().and_then(|name| name.to_str()).and_then(|name| name.strip_suffix(".zst"));
        let Some(digits) = name.filter(|digits| digits.len() == 64) else { return Ok(false) };
        self.conn.prepare_cached("SELECT 1 FROM raw WHERE sha256 = unhex(?1) AND stored IS NULL")?.exists([digits])
    }
}

/// Finds rows whose `column` refers to nothing, with their act. Rows of filings that are not published are left out:
/// what they refer to may still be to come.
fn reference_check(table: &str, column: &str, target: &str) -> String {
    let key = if target == "trail" { "number" } else { "id" };
    let (act, from) = match OF_FILING.iter().any(|of_filing| of_filing.name == table) {
        true => ("f.act", format!("{table} t JOIN filing f ON f.id = t.filing")),
        false => ("t.act", format!("{table} t")),
    };
    format!(
        "SELECT t.id, t.{column}, {act} FROM {from} WHERE t.{column} IS NOT NULL
         AND NOT EXISTS (SELECT 1 FROM {target} WHERE {target}.{key} = t.{column})"
    )
}

/// Hashes what passes through.
struct Hashing<R> {
    source: R,
    hasher: Sha256,
}

impl<R: Read> Read for Hashing<R> {
    fn read(&mut self, buffer: &mut [u8]) -> io::Result<usize> {
        let count = self.source.read(buffer)?;
        self.hasher.update(&buffer[..count]);
        Ok(count)
    }
}

/// Reads a raw copy through once, and compares its size and both hashes.
fn expand(source: impl Read, sha256: &Hash, size: i64, stored_sha256: &Hash) -> std::result::Result<(), RawWrong> {
    let mut source = Hashing { source, hasher: Sha256::new() };
    let expanded = expanded_bytes(&mut source, size);
    // Damaged bytes end the expanding early, and bytes may follow its end: the rest counts for the stored hash as well.
    io::copy(&mut source, &mut io::sink()).map_err(|error| RawWrong::File(error.to_string()))?;
    let stored: Hash = source.hasher.finalize().into();
    if stored != *stored_sha256 {
        return Err(RawWrong::Stored);
    }
    let (found, bytes) = expanded.map_err(|error| RawWrong::Expand(error.to_string()))?;
    if i64::try_from(found).ok() != Some(size) {
        return Err(RawWrong::Size { says: size, found });
    }
    if bytes == *sha256 { Ok(()) } else { Err(RawWrong::Bytes) }
}

/// How many bytes there are when expanded, and their hash; no more than one byte beyond `size` is looked at.
fn expanded_bytes(source: &mut impl Read, size: i64) -> io::Result<(u64, Hash)> {
    let most = u64::try_from(size).unwrap_or(0).saturating_add(1);
    let mut bytes = Hashing { source: zstd::Decoder::new(source)?.take(most), hasher: Sha256::new() };
    let found = io::copy(&mut bytes, &mut io::sink())?;
    Ok((found, bytes.hasher.finalize().into()))
}
