//! The chain of acts, and the digest of each act's rows.

use chrono::DateTime;
use rusqlite::Row;
use sha2::{Digest, Sha256};

use super::rows::columns_of;
use super::{Check, Span, TRAIL_COLUMNS, VerifyFault, says_nothing, trail_row};
use crate::records::codec::{Hash, OF_ACT, Table, hex};
use crate::records::trail::ActNumber;

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

impl Check<'_> {
    pub(super) fn trail(&mut self) -> rusqlite::Result<()> {
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
