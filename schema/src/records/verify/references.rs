//! References by number that no foreign key binds.

use super::{Check, VerifyFault};
use crate::records::codec::OF_FILING;

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

impl Check<'_> {
    pub(super) fn references(&mut self) -> rusqlite::Result<()> {
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
