//! Questions that only the intake puts: has this been seen, what stands in this place already.
//!
//! Invariant: these see the rows of the filing in hand too, published or not, since an export may hold the same
//! reading twice.

use std::collections::HashMap;

use rusqlite::{OptionalExtension, params};

use super::codec::Hash;
use super::error::Result;
use super::open::Records;
use super::texts::{SessionFact, SessionId};
use super::trail::{ActKind, ActNumber};
use crate::world::Stat;

/// A filed reading that may be the one in hand.
#[derive(Debug, Clone, PartialEq)]
pub struct Candidate {
    /// Its number.
    pub reading: i64,
    /// The capture it is from.
    pub capture: Option<i64>,
    /// The replicate's number.
    pub replicate: u32,
    /// Whether that came from the export.
    pub labelled: bool,
    /// Its order among equals in its export.
    pub ordinal: i64,
    /// The number as exported.
    pub exported: Option<f64>,
    /// Its unit as exported; empty: the measure's.
    pub unit: String,
    /// `<` or `>`.
    pub mark: Option<String>,
}

/// What identifies a reading in its instrument's exports, besides its replicate.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Identity<'a> {
    /// The instrument's code.
    pub instrument: &'a str,
    /// The measure's code.
    pub measure: &'a str,
    /// The condition's text.
    pub condition: &'a str,
    /// The subject's code.
    pub subject: &'a str,
    /// The time as written.
    pub written: &'a str,
}

impl Identity<'_> {
    /// Sixty-four bits: the upper half from instrument and subject, so that rows of one subject lie together in the
    /// index, the lower from the rest. Candidates are compared in full, so a collision costs time only.
    pub fn hash(&self) -> i64 {
        let whose = fnv(&[self.instrument, self.subject]);
        let what = fnv(&[self.measure, self.condition, self.written]);
        ((whose & 0xffff_ffff_0000_0000) | (what >> 32)) as i64
    }
}

/// FNV-1a, 64 bits, over texts, each followed by a byte that no text holds (Fowler, Noll & Vo; the constants of the
/// published reference code).
fn fnv(texts: &[&str]) -> u64 {
    let bytes = texts.iter().flat_map(|text| text.bytes().chain([0xff]));
    bytes.fold(0xcbf2_9ce4_8422_2325, |hash, byte| (hash ^ u64::from(byte)).wrapping_mul(0x0000_0100_0000_01b3))
}

/// A replicate that stands in a session already.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Slot {
    /// The reading.
    pub reading: i64,
    /// Its replicate's number.
    pub replicate: u32,
}

/// What the path of an export held last.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct LastCapture {
    /// Its number.
    pub capture: i64,
    /// Of its bytes.
    pub sha256: Hash,
    /// How many.
    pub size: i64,
    /// It was read (and not a repeat or held as a file).
    pub read: bool,
}

/// What is known of a file in an export folder.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Noticed {
    /// The instrument's code.
    pub instrument: String,
    /// `captured`, `settling`, `ignored` or `unreachable`.
    pub state: String,
    /// What the file system said.
    pub stat: Stat,
    /// Its newest capture.
    pub capture: Option<i64>,
    /// Why it is in that state.
    pub detail: Option<String>,
}

impl Records {
    /// Filed readings with this identity, oldest first; never amended ones or those entered by hand.
    pub fn candidates(&mut self, identity: &Identity<'_>) -> Result<Vec<Candidate>> {
        let failed = self.failed("looking for a reading filed before");
        self.find_candidates(identity).map_err(failed)
    }

    fn find_candidates(&mut self, identity: &Identity<'_>) -> rusqlite::Result<Vec<Candidate>> {
        let mut statement = self.conn.prepare_cached(
            "SELECT id, capture, replicate, labelled, ordinal, exported, unit, mark, instrument, measure, condition, session
             FROM reading WHERE identity = ?1 ORDER BY id",
        )?;
        let mut rows = statement.query([identity.hash()])?;
        let mut found = Vec::new();
        while let Some(row) = rows.next()? {
            let (conn, texts) = (&self.conn, &mut self.texts);
            let same = texts.term_text(conn, row.get(8)?)? == identity.instrument
                && texts.term_text(conn, row.get(9)?)? == identity.measure
                && texts.term_text(conn, row.get(10)?)? == identity.condition
                && {
                    let fact = texts.session_fact(conn, row.get(11)?)?;
                    texts.subject_code(conn, fact.subject)? == identity.subject
                };
            if same {
                found.push(Candidate {
                    reading: row.get(0)?,
                    capture: row.get(1)?,
                    replicate: row.get(2)?,
                    labelled: row.get(3)?,
                    ordinal: row.get(4)?,
                    exported: row.get(5)?,
                    unit: texts.term_text(conn, row.get(6)?)?.to_owned(),
                    mark: row.get(7)?,
                });
            }
        }
        Ok(found)
    }

    /// The number of a session, if it was ever named.
    pub fn find_session(&mut self, subject: &str, day: i64, label: &str) -> Result<Option<SessionId>> {
        self.look_for_session(subject, day, label).map_err(self.failed("looking for a session"))
    }

    fn look_for_session(&mut self, subject: &str, day: i64, label: &str) -> rusqlite::Result<Option<SessionId>> {
        let (conn, texts) = (&self.conn, &mut self.texts);
        let found = (texts.find_subject(conn, subject)?, texts.find_term(conn, label)?);
        let (Some(subject), Some(label)) = found else { return Ok(None) };
        texts.find_session(conn, SessionFact { subject, day, label })
    }

    /// What one instrument's replicates stand in a cell of a session, superseded ones aside.
    pub fn slots(&mut self, session: SessionId, measure: &str, condition: &str, instrument: &str) -> Result<Vec<Slot>> {
        let failed = self.failed("looking for replicates filed before");
        let (conn, texts) = (&self.conn, &mut self.texts);
        let ids = [measure, condition, instrument].map(|text| texts.find_term(conn, text));
        let [measure, condition, instrument] = ids;
        let known = (|| Ok((measure?, condition?, instrument?)))().map_err(&failed)?;
        let (Some(measure), Some(condition), Some(instrument)) = known else { return Ok(vec![]) };
        self.conn
            .prepare_cached(
                "SELECT r.id, r.replicate FROM reading r WHERE r.session = ?1 AND r.measure = ?2 AND r.condition = ?3
                 AND r.instrument = ?4
                 AND NOT EXISTS (SELECT 1 FROM reading n WHERE n.supersedes = r.id)
                 AND NOT EXISTS (SELECT 1 FROM reading_event e WHERE e.reading = r.id AND e.kind = 'superseded')
                 ORDER BY r.id",
            )
            .and_then(|mut statement| {
                statement
                    .query_map(params![session, measure, condition, instrument], |row| {
                        Ok(Slot { reading: row.get(0)?, replicate: row.get(1)? })
                    })?
                    .collect()
            })
            .map_err(failed)
    }

    /// Whether a reading was struck, or amended by a person: what its export says then no longer decides by itself.
    pub fn touched_by_hand(&self, reading: i64) -> Result<bool> {
        self.conn
            .prepare_cached(
                "SELECT EXISTS (SELECT 1 FROM reading WHERE supersedes = ?1 AND source = 2)
                 OR coalesce((SELECT kind = 'struck' FROM reading_event WHERE reading = ?1 ORDER BY id DESC LIMIT 1), 0)",
            )
            .and_then(|mut statement| statement.query_row([reading], |row| row.get(0)))
            .map_err(self.failed("looking at a reading's history"))
    }

    /// The reading that stands where this one stood: itself, or the last of those that supersede one another.
    pub fn newest_of_line(&self, reading: i64) -> Result<i64> {
        self.conn
            .prepare_cached(
                "WITH RECURSIVE line (id) AS (VALUES (?1) UNION SELECT r.id FROM reading r JOIN line ON r.supersedes = line.id)
                 SELECT max(id) FROM line",
            )
            .and_then(|mut statement| statement.query_row([reading], |row| row.get(0)))
            .map_err(self.failed("looking at a reading's history"))
    }

    /// What a path held last.
    pub fn last_capture(&self, path: &str) -> Result<Option<LastCapture>> {
        self.conn
            .prepare_cached(
                "SELECT c.id, c.sha256, c.size, c.repeat_of IS NULL AND EXISTS (SELECT 1 FROM account a WHERE a.capture = c.id)
                 FROM capture c WHERE c.path = ?1 ORDER BY c.id DESC LIMIT 1",
            )
            .and_then(|mut statement| {
                statement
                    .query_row([path], |row| {
                        Ok(LastCapture { capture: row.get(0)?, sha256: row.get(1)?, size: row.get(2)?, read: row.get(3)? })
                    })
                    .optional()
            })
            .map_err(self.failed("looking at what a path held"))
    }

    /// Captures of the same bytes by the same instrument, that were themselves no repeats: (number, path).
    pub fn captures_of_bytes(&self, instrument: &str, sha256: &Hash) -> Result<Vec<(i64, String)>> {
        self.conn
            .prepare_cached(
                "SELECT c.id, c.path FROM capture c JOIN term i ON i.id = c.instrument
                 WHERE c.sha256 = ?1 AND i.text = ?2 AND c.repeat_of IS NULL ORDER BY c.id",
            )
            .and_then(|mut statement| {
                statement
                    .query_map(params![sha256.as_slice(), instrument], |row| Ok((row.get(0)?, row.get(1)?)))?
                    .collect()
            })
            .map_err(self.failed("looking for known bytes"))
    }

    /// Readings as one capture gave them, superseded ones aside.
    pub fn readings_of_capture(&self, capture: i64) -> Result<Vec<i64>> {
        self.conn
            .prepare_cached(
                "SELECT r.id FROM filing f JOIN reading r ON r.id BETWEEN f.first_reading AND f.last_reading
                 AND r.filing = f.id AND r.source = 0 WHERE f.capture = ?1
                 AND NOT EXISTS (SELECT 1 FROM reading n WHERE n.supersedes = r.id) ORDER BY r.id",
            )
            .and_then(|mut statement| statement.query_map([capture], |row| row.get(0))?.collect())
            .map_err(self.failed("reading an export's readings"))
    }

    /// The capture that a reading is from.
    pub fn capture_of(&self, reading: i64) -> Result<Option<i64>> {
        self.conn
            .prepare_cached("SELECT capture FROM reading WHERE id = ?1")
            .and_then(|mut statement| statement.query_row([reading], |row| row.get(0)).optional())
            .map(Option::flatten)
            .map_err(self.failed("reading a reading"))
    }

    /// The newest act, of those kinds that change how rows are placed.
    pub fn placing_head(&self) -> Result<ActNumber> {
        use ActKind::{Amend, Decide, Dismiss, Enter, Plan, Restore, Roster, Strike};
        self.newest_of(&[Plan, Roster, Decide, Dismiss, Amend, Strike, Restore, Enter])
    }

    /// The newest act that changed the plan or the roster.
    pub fn rules_head(&self) -> Result<ActNumber> {
        self.newest_of(&[ActKind::Plan, ActKind::Roster])
    }

    fn newest_of(&self, kinds: &[ActKind]) -> Result<ActNumber> {
        // One look into the index for each kind; a list of kinds would have SQLite read all of their acts.
        let each = |kind: &ActKind| format!("(SELECT max(number) FROM trail WHERE act = '{}')", kind.code());
        let newest: Vec<String> = kinds.iter().map(|kind| format!("coalesce({}, 0)", each(kind))).collect();
        self.conn
            .prepare_cached(&format!("SELECT max({})", newest.join(", ")))
            .and_then(|mut statement| statement.query_row([], |row| row.get(0)))
            .map_err(self.failed("reading the trail"))
    }

    /// A note of the intake's own, which can be made anew.
    pub fn working(&self, name: &str) -> Result<Option<String>> {
        self.conn
            .prepare_cached("SELECT value FROM working WHERE name = ?1")
            .and_then(|mut statement| statement.query_row([name], |row| row.get(0)).optional())
            .map_err(self.failed("reading a working note"))
    }

    /// Writes such a note.
    pub fn set_working(&self, name: &str, value: &str) -> Result<()> {
        self.conn
            .prepare_cached(
                "INSERT INTO working (name, value) VALUES (?1, ?2) ON CONFLICT (name) DO UPDATE SET value = ?2",
            )
            .and_then(|mut statement| statement.execute([name, value]))
            .map(|_| ())
            .map_err(self.failed("writing a working note"))
    }

    /// What was last seen of every file in the export folders, by path.
    pub fn noticed(&self) -> Result<HashMap<String, Noticed>> {
        self.conn
            .prepare_cached("SELECT path, instrument, state, size, modified, changed, capture, detail FROM noticed")
            .and_then(|mut statement| {
                statement
                    .query_map([], |row| {
                        let stat = Stat {
                            size: row.get::<_, i64>(3)?.unsigned_abs(),
                            modified: row.get(4)?,
                            changed: row.get(5)?,
                        };
                        Ok((
                            row.get(0)?,
                            Noticed {
                                instrument: row.get(1)?,
                                state: row.get(2)?,
                                stat,
                                capture: row.get(6)?,
                                detail: row.get(7)?,
                            },
                        ))
                    })?
                    .collect()
            })
            .map_err(self.failed("reading what was noticed"))
    }

    /// Writes what was seen of one file.
    pub fn set_noticed(&self, path: &str, seen: &Noticed) -> Result<()> {
        self.conn
            .prepare_cached(
                "INSERT INTO noticed (path, instrument, state, size, modified, changed, capture, detail)
                 VALUES (?1, ?2, ?3, ?4, ?5, ?6, ?7, ?8) ON CONFLICT (path) DO UPDATE SET instrument = ?2, state = ?3,
                 size = ?4, modified = ?5, changed = ?6, capture = ?7, detail = ?8",
            )
            .and_then(|mut statement| {
                statement.execute(params![
                    path,
                    seen.instrument,
                    seen.state,
                    seen.stat.size as i64,
                    seen.stat.modified,
                    seen.stat.changed,
                    seen.capture,
                    seen.detail
                ])
            })
            .map(|_| ())
            .map_err(self.failed("writing what was noticed"))
    }

    /// Forgets a file that is no longer there and of which nothing was captured.
    pub fn forget_noticed(&self, path: &str) -> Result<()> {
        self.conn
            .prepare_cached("DELETE FROM noticed WHERE path = ?1")
            .and_then(|mut statement| statement.execute([path]))
            .map(|_| ())
            .map_err(self.failed("writing what was noticed"))
    }
}

impl Records {
    /// A capture and those before it whose bytes it continues, newest first.
    pub fn chain_of(&self, capture: i64) -> Result<Vec<i64>> {
        self.conn
            .prepare_cached(
                "WITH RECURSIVE chain (id) AS (VALUES (?1) UNION SELECT c.continues FROM capture c JOIN chain ON c.id = chain.id
                 WHERE c.continues IS NOT NULL) SELECT id FROM chain ORDER BY id DESC",
            )
            .and_then(|mut statement| statement.query_map([capture], |row| row.get(0))?.collect())
            .map_err(self.failed("looking at what a path held"))
    }
}

impl Records {
    /// The newest account of a capture's lines, as JSON.
    pub fn account_of(&self, capture: i64) -> Result<Option<String>> {
        self.conn
            .prepare_cached("SELECT lines FROM account WHERE capture = ?1 ORDER BY id DESC LIMIT 1")
            .and_then(|mut statement| statement.query_row([capture], |row| row.get(0)).optional())
            .map_err(self.failed("reading an account"))
    }

    /// The later captures that hold a held row again.
    pub fn sightings_of(&self, hold: i64) -> Result<Vec<i64>> {
        self.conn
            .prepare_cached("SELECT capture FROM sighting WHERE hold = ?1 ORDER BY id")
            .and_then(|mut statement| statement.query_map([hold], |row| row.get(0))?.collect())
            .map_err(self.failed("reading where a hold was seen"))
    }
}

impl Records {
    /// How many exports are being filed in parts and not yet published.
    pub fn staged(&self) -> Result<u64> {
        self.conn
            .prepare_cached("SELECT count(*) FROM staging")
            .and_then(|mut statement| statement.query_row([], |row| row.get::<_, i64>(0)))
            .map(i64::unsigned_abs)
            .map_err(self.failed("looking for unfinished exports"))
    }
}
