//! Verifying: everything that the trail covers is computed again from the rows and the raw copies.
//!
//! Invariants: nothing is written; one read transaction sees one state, so that a running service neither disturbs the
//! check nor is held up by it; memory does not grow with the readings (terms, subjects and sessions are held, and 16
//! bytes for each other row); what is wrong with the records is a fault in the list, never a failure of the check,
//! which goes on with what can still be read.
//!
//! A row's own digest is not stored (unless the row was removed), so that a changed row is found through the digest of
//! its act or filing: the fault names the act, the filing and the rows among which the changed one is.

mod acts;
mod copies;
mod fault;
mod filings;
mod references;
mod rows;

use std::collections::{BTreeMap, HashMap, HashSet};

use rusqlite::{Connection, OptionalExtension, Row};

use self::fault::Faults;
pub use self::fault::{RawWrong, Verified, VerifyFault, VerifyNote};
use super::codec::{Canon, Hash};
use super::error::{RecordsError, Result};
use super::open::{APPLICATION, Records, layout};
use super::texts::SessionFact;
use super::trail::{ActNumber, TrailRow};

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
