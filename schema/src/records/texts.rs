//! Texts that stand in many rows, kept once: terms, subjects and sessions.
//!
//! Invariant: what is known here is what the file says, or will say when the transaction in hand commits; a rollback
//! must be followed by [`Texts::forget`].

use std::collections::HashMap;
use std::collections::hash_map::Entry;

use rusqlite::{Connection, OptionalExtension, params};

/// The number of a term; 0 stands for "none".
pub type TermId = i64;
/// The number of a subject.
pub type SubjectId = i64;
/// The number of a session.
pub type SessionId = i64;

/// What a session is: subject, local day, label.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash)]
pub struct SessionFact {
    /// Whose.
    pub subject: SubjectId,
    /// Days since 0001-01-01, which is day 1.
    pub day: i64,
    /// The visit's label; 0 = none.
    pub label: TermId,
}

/// Two ways between numbers and texts, filled as needed.
#[derive(Debug, Default)]
pub struct Texts {
    terms: HashMap<String, TermId>,
    term_texts: HashMap<TermId, String>,
    subjects: HashMap<String, SubjectId>,
    subject_codes: HashMap<SubjectId, String>,
    sessions: HashMap<SessionFact, SessionId>,
    facts: HashMap<SessionId, SessionFact>,
}

/// More sessions than this are not kept in memory at once.
const MOST_SESSIONS: usize = 50_000;

impl Texts {
    /// Forgets everything.
    pub fn forget(&mut self) {
        *self = Self::default();
    }

    /// The number of a term, made when new. The empty text is 0.
    pub fn term(&mut self, conn: &Connection, text: &str) -> rusqlite::Result<TermId> {
        if text.is_empty() {
            return Ok(0);
        }
        if let Some(&id) = self.terms.get(text) {
            return Ok(id);
        }
        let found = find(conn, "SELECT id FROM term WHERE text = ?1", text)?;
        let id = found.map_or_else(|| add(conn, "term", "text", text), Ok)?;
        self.terms.insert(text.to_owned(), id);
        self.term_texts.insert(id, text.to_owned());
        Ok(id)
    }

    /// The number of a term that may not exist.
    pub fn find_term(&mut self, conn: &Connection, text: &str) -> rusqlite::Result<Option<TermId>> {
        match (text.is_empty(), self.terms.get(text)) {
            (true, _) => Ok(Some(0)),
            (_, Some(&id)) => Ok(Some(id)),
            _ => find(conn, "SELECT id FROM term WHERE text = ?1", text),
        }
    }

    /// The text of a term.
    pub fn term_text(&mut self, conn: &Connection, id: TermId) -> rusqlite::Result<&str> {
        if id == 0 {
            return Ok("");
        }
        match self.term_texts.entry(id) {
            Entry::Occupied(known) => Ok(known.into_mut()),
            Entry::Vacant(place) => {
                let sql = "SELECT text FROM term WHERE id = ?1";
                let text: String = conn.prepare_cached(sql)?.query_row([id], |row| row.get(0))?;
                Ok(place.insert(text))
            }
        }
    }

    /// The number of a subject, made when new.
    pub fn subject(&mut self, conn: &Connection, code: &str) -> rusqlite::Result<SubjectId> {
        if let Some(&id) = self.subjects.get(code) {
            return Ok(id);
        }
        let found = find(conn, "SELECT id FROM subject WHERE code = ?1", code)?;
        let id = found.map_or_else(|| add(conn, "subject", "code", code), Ok)?;
        self.subjects.insert(code.to_owned(), id);
        self.subject_codes.insert(id, code.to_owned());
        Ok(id)
    }

    /// The number of a subject that may not exist.
    pub fn find_subject(&mut self, conn: &Connection, code: &str) -> rusqlite::Result<Option<SubjectId>> {
        match self.subjects.get(code) {
            Some(&id) => Ok(Some(id)),
            None => find(conn, "SELECT id FROM subject WHERE code = ?1", code),
        }
    }

    /// A subject's code.
    pub fn subject_code(&mut self, conn: &Connection, id: SubjectId) -> rusqlite::Result<&str> {
        match self.subject_codes.entry(id) {
            Entry::Occupied(known) => Ok(known.into_mut()),
            Entry::Vacant(place) => {
                let sql = "SELECT code FROM subject WHERE id = ?1";
                let code: String = conn.prepare_cached(sql)?.query_row([id], |row| row.get(0))?;
                Ok(place.insert(code))
            }
        }
    }

    /// The number of a session that may not exist.
    pub fn find_session(&mut self, conn: &Connection, fact: SessionFact) -> rusqlite::Result<Option<SessionId>> {
        if let Some(&id) = self.sessions.get(&fact) {
            return Ok(Some(id));
        }
        let found = conn
            .prepare_cached("SELECT id FROM session WHERE subject = ?1 AND day = ?2 AND label = ?3")?
            .query_row(params![fact.subject, fact.day, fact.label], |row| row.get(0))
            .optional()?;
        if let Some(id) = found {
            self.remember_session(id, fact);
        }
        Ok(found)
    }

    /// The number of a session, made when new.
    pub fn session(&mut self, conn: &Connection, fact: SessionFact) -> rusqlite::Result<SessionId> {
        let id = match self.find_session(conn, fact)? {
            Some(id) => id,
            None => {
                let id = next_id(conn, "session")?;
                conn.prepare_cached("INSERT INTO session (id, subject, day, label) VALUES (?1, ?2, ?3, ?4)")?
                    .execute(params![id, fact.subject, fact.day, fact.label])?;
                id
            }
        };
        self.remember_session(id, fact);
        Ok(id)
    }

    /// What a session is.
    pub fn session_fact(&mut self, conn: &Connection, id: SessionId) -> rusqlite::Result<SessionFact> {
        if let Some(&fact) = self.facts.get(&id) {
            return Ok(fact);
        }
        let fact = conn
            .prepare_cached("SELECT subject, day, label FROM session WHERE id = ?1")?
            .query_row([id], |row| Ok(SessionFact { subject: row.get(0)?, day: row.get(1)?, label: row.get(2)? }))?;
        self.remember_session(id, fact);
        Ok(fact)
    }

    fn remember_session(&mut self, id: SessionId, fact: SessionFact) {
        if self.sessions.len() >= MOST_SESSIONS {
            self.sessions.clear();
            self.facts.clear();
        }
        self.sessions.insert(fact, id);
        self.facts.insert(id, fact);
    }
}

fn find(conn: &Connection, sql: &str, text: &str) -> rusqlite::Result<Option<i64>> {
    conn.prepare_cached(sql)?.query_row([text], |row| row.get(0)).optional()
}

fn add(conn: &Connection, table: &str, column: &str, text: &str) -> rusqlite::Result<i64> {
    let id = next_id(conn, table)?;
    conn.prepare_cached(&format!("INSERT INTO {table} (id, {column}) VALUES (?1, ?2)"))?.execute(params![id, text])?;
    Ok(id)
}

/// The next free number of a table. Rows are numbered by hand so that the append-only triggers can see the number.
pub(crate) fn next_id(conn: &Connection, table: &str) -> rusqlite::Result<i64> {
    conn.prepare_cached(&format!("SELECT coalesce(max(id), 0) + 1 FROM {table}"))?.query_row([], |row| row.get(0))
}
