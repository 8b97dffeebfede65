//! Removal: a subject's texts and numbers are blanked, and their digests stay.
//!
//! Invariants: a removal names, by a digest on the trail, exactly the rows that it blanked and what is left of them, so
//! that no other row can be passed off as removed afterwards; a row is blanked once, within the act that removes it.

use rusqlite::types::ValueRef;
use rusqlite::{Connection, Row, params};
use sha2::{Digest, Sha256};

use super::codec::{Canon, Hash, Kind, Table, table};
use super::error::{RecordsError, Result};
use super::texts::Texts;
use super::writer::{Act, Cell, column_list};

/// The tables that hold a subject's values, in the order in which a removal's digest takes their rows, with the columns
/// that are blanked.
pub const REMOVABLE: &[(&str, &[&str])] = &[
    ("roster_event", &["value"]),
    ("reading", &["text", "exported", "number", "mark", "byte_from", "byte_to"]),
    ("hold", &["row", "detail", "byte_from", "byte_to"]),
    ("hold_event", &["answer"]),
];

/// The columns of a table that a removal blanks.
pub fn blanked(table: &str) -> &'static [&'static str] {
    REMOVABLE.iter().find(|(name, _)| *name == table).map_or(&[], |(_, columns)| columns)
}

/// A row to be blanked: its table's place in [`REMOVABLE`], its number, the digest that stays.
struct Blanking {
    rank: usize,
    id: i64,
    digest: Hash,
}

impl Act<'_> {
    /// Blanks rows, given by table and number, because `subject` withdrew consent. May be called once in an act.
    pub fn remove(&mut self, subject: &str, rows: &[(&str, i64)]) -> Result<i64> {
        let mut wanted = rows.iter().map(|(table, id)| Ok((rank(table)?, *id))).collect::<Result<Vec<_>>>()?;
        wanted.sort_unstable();
        wanted.dedup();
        let mut outer = Sha256::new();
        let mut blankings = Vec::with_capacity(wanted.len());
        for (rank, id) in wanted {
            let (digest, rest) = self.digests(rank, id)?;
            outer.update(rest);
            blankings.push(Blanking { rank, id, digest });
        }
        let digest: Hash = outer.finalize().into();
        let cells = [Cell::Subject(subject), Cell::Int(blankings.len() as i64), Cell::Bytes(&digest)];
        let removal = self.add("removal", &cells)?;
        blankings.iter().try_for_each(|blanking| self.blank(blanking))?;
        Ok(removal)
    }

    /// A row's digest, and that of what a removal leaves of it.
    fn digests(&mut self, rank: usize, id: i64) -> Result<(Hash, Hash)> {
        let name = REMOVABLE.get(rank).map_or("", |(name, _)| name);
        let Some((_, table)) = table(name) else { return Err(no_table(name)) };
        let records = self.records();
        let failed = records.failed("removing a row");
        let (conn, texts) = (&records.conn, &mut records.texts);
        let mut statement = conn
            .prepare_cached(&format!("SELECT {}, salt FROM {name} WHERE id = ?1", column_list(table)))
            .map_err(&failed)?;
        let mut rows = statement.query([id]).map_err(&failed)?;
        let Some(row) = rows.next().map_err(&failed)? else {
            return Err(RecordsError::Refused(format!("there is no row {id} of {name} to be removed")));
        };
        let salt: Option<Vec<u8>> = row.get("salt").map_err(&failed)?;
        let Some(salt) = salt else {
            return Err(RecordsError::Refused(format!("row {id} of {name} is removed already")));
        };
        let digest = digest(conn, texts, table, row, &salt, &[]).map_err(&failed)?;
        let rest = self::digest(conn, texts, table, row, &digest, blanked(name)).map_err(&failed)?;
        Ok((digest, rest))
    }

    fn blank(&mut self, blanking: &Blanking) -> Result<()> {
        let act = self.number();
        let records = self.records();
        let failed = records.failed("removing a row");
        let Some((name, columns)) = REMOVABLE.get(blanking.rank) else { return Ok(()) };
        let blanks: String = columns.iter().map(|column| format!("\"{column}\" = NULL, ")).collect();
        let sql = format!("UPDATE {name} SET {blanks} salt = NULL, digest = ?1, removed = ?2 WHERE id = ?3");
        let mut statement = records.conn.prepare_cached(&sql).map_err(&failed)?;
        statement.execute(params![blanking.digest.as_slice(), act, blanking.id]).map_err(&failed)?;
        Ok(())
    }
}

fn rank(name: &str) -> Result<usize> {
    REMOVABLE.iter().position(|(table, _)| *table == name).ok_or_else(|| no_table(name))
}

fn no_table(name: &str) -> RecordsError {
    RecordsError::Refused(format!("{name} holds nothing that can be removed"))
}

/// The digest of a row in the canonical form, with some columns written as NULL.
fn digest(
    conn: &Connection,
    texts: &mut Texts,
    table: &Table,
    row: &Row<'_>,
    salt: &[u8],
    blanked: &[&str],
) -> rusqlite::Result<Hash> {
    let mut canon = Canon::default();
    canon.start(salt);
    canon.text(table.name);
    for (at, (name, kind)) in table.columns.iter().enumerate() {
        match blanked.contains(name) {
            true => canon.null(),
            false => put(conn, texts, &mut canon, *kind, row.get_ref(at)?)?,
        }
    }
    Ok(canon.digest())
}

fn put(
    conn: &Connection,
    texts: &mut Texts,
    canon: &mut Canon,
    kind: Kind,
    value: ValueRef<'_>,
) -> rusqlite::Result<()> {
    match kind {
        Kind::Plain => canon.value(value),
        Kind::Term => canon.text(texts.term_text(conn, value.as_i64()?)?),
        Kind::Subject => canon.text(texts.subject_code(conn, value.as_i64()?)?),
        Kind::Session => {
            let fact = texts.session_fact(conn, value.as_i64()?)?;
            canon.text(texts.subject_code(conn, fact.subject)?);
            canon.integer(fact.day);
            canon.text(texts.term_text(conn, fact.label)?);
        }
    }
    Ok(())
}
