//! Digests of rows, computed again, and what removals left of them.

use std::collections::BTreeMap;

use rusqlite::Row;
use rusqlite::types::ValueRef;
use sha2::{Digest, Sha256};

use super::{Check, Known, VerifyFault, VerifyNote};
use crate::records::codec::{Canon, Hash, Kind, Table, table};
use crate::records::removal::{REMOVABLE, blanked};
use crate::records::trail::ActNumber;
use crate::records::writer::column_list;

impl Check<'_> {
    /// A row's digest: computed again, or as stored where its values were removed.
    pub(super) fn row_digest(
        &mut self,
        table: &'static Table,
        row: &Row<'_>,
        act: ActNumber,
    ) -> rusqlite::Result<Hash> {
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

    pub(super) fn fresh_digest(
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

impl Check<'_> {
    /// Compares what removals left with what they say that they left.
    pub(super) fn removed_rows(&mut self) -> rusqlite::Result<()> {
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
pub(super) fn columns_of(table: &Table) -> String {
    let more = if table.salted { ", salt, digest, removed" } else { "" };
    format!("{}{more}", column_list(table))
}
