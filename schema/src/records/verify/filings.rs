//! Filings: what their rows add up to.
//!
//! Invariant: a filing's hasher is kept only from its first reading to its last.

use std::collections::HashMap;
use std::collections::hash_map::Entry;

use rusqlite::{OptionalExtension, Row};
use sha2::{Digest, Sha256};

use super::rows::columns_of;
use super::{Check, Span, VerifyFault, VerifyNote};
use crate::records::codec::{Hash, OF_FILING, Table};
use crate::records::trail::ActNumber;

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

/// The statement that gives a filing's rows in a table that lists them by filing.
fn rows_of_filing(table: &Table) -> String {
    format!("SELECT {} FROM {} WHERE filing = ?1 ORDER BY id", columns_of(table), table.name)
}

impl Check<'_> {
    /// One scan over all readings by number. Those of one filing may lie among another's, so each open filing has its
    /// own hasher; a filing is closed as soon as the last reading that it names has passed.
    pub(super) fn readings(&mut self) -> rusqlite::Result<()> {
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
            if let Entry::Vacant(place) = open.entry(filing) {
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
    pub(super) fn other_filings(&mut self) -> rusqlite::Result<()> {
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
    pub(super) fn without_filing(&mut self) -> rusqlite::Result<()> {
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
