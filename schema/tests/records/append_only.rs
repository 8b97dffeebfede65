//! Rows stay as they were written, whatever connection tries to change them.

use revisant_schema::records::VerifyFault;
use rusqlite::Connection;
use rusqlite::types::Value;

use super::study::{Study, digest_of, names, number, populated};

/// Tables that can be made anew from the others and the export folders. Any other table is append-only.
const WORKING: [&str; 3] = ["staging", "noticed", "working"];

/// The tables whose rows stay, as the file lists them.
pub fn lasting(conn: &Connection) -> Vec<String> {
    let all =
        names(conn, "SELECT name FROM sqlite_master WHERE type = 'table' AND name NOT LIKE 'sqlite%' ORDER BY name");
    all.into_iter().filter(|table| !WORKING.contains(&table.as_str())).collect()
}

pub fn columns(conn: &Connection, table: &str) -> Vec<String> {
    names(conn, &format!("SELECT name FROM pragma_table_info('{table}') ORDER BY cid"))
}

/// All rows of a table.
pub fn rows(conn: &Connection, table: &str) -> Vec<Vec<Value>> {
    let mut statement = conn.prepare(&format!("SELECT * FROM {table} ORDER BY 1")).unwrap();
    let width = statement.column_count();
    let read = statement.query_map([], |row| (0..width).map(|at| row.get(at)).collect());
    read.unwrap().collect::<rusqlite::Result<_>>().unwrap()
}

/// Which columns of a table must be unique together: its primary key and each UNIQUE.
fn keys(conn: &Connection, table: &str) -> Vec<Vec<String>> {
    let primary = names(conn, &format!("SELECT name FROM pragma_table_info('{table}') WHERE pk > 0"));
    let unique =
        names(conn, &format!("SELECT name FROM pragma_index_list('{table}') WHERE \"unique\" AND origin = 'u'"));
    let of_index = |index: &String| names(conn, &format!("SELECT name FROM pragma_index_info('{index}')"));
    std::iter::once(primary).chain(unique.iter().map(of_index)).collect()
}

/// Rows that an act covers; those of a filing that is not published may go.
fn published(conn: &Connection, table: &str) -> String {
    match columns(conn, table).iter().any(|column| column == "filing") {
        true => format!("SELECT * FROM {table} WHERE filing IN (SELECT id FROM filing)"),
        false => format!("SELECT * FROM {table}"),
    }
}

#[track_caller]
fn refuses(conn: &Connection, table: &str, sql: &str) {
    let before = rows(conn, table);
    let error = conn.execute_batch(sql).expect_err(sql).to_string();
    assert!(error.contains("append-only"), "{sql}: {error}");
    assert!(before == rows(conn, table), "{sql} changed rows");
}

#[test]
fn every_lasting_table_refuses_to_change_a_row() {
    let study = populated();
    let conn = study.plain();
    for table in lasting(&conn) {
        assert!(
            number(&conn, &format!("SELECT count(*) FROM ({})", published(&conn, &table))) > 0,
            "{table} has no row"
        );
        for column in columns(&conn, &table) {
            for how in ["UPDATE", "UPDATE OR REPLACE", "UPDATE OR IGNORE"] {
                refuses(&conn, &table, &format!("{how} {table} SET \"{column}\" = \"{column}\""));
            }
        }
    }
}

#[test]
fn every_lasting_table_refuses_to_lose_a_row() {
    let study = populated();
    let conn = study.plain();
    for table in lasting(&conn) {
        let key = keys(&conn, &table).remove(0).remove(0);
        let of_all = format!("SELECT quote({key}) FROM ({})", published(&conn, &table));
        for row in names(&conn, &of_all) {
            refuses(&conn, &table, &format!("DELETE FROM {table} WHERE {key} = {row}"));
        }
        refuses(&conn, &table, &format!("DELETE FROM {table}"));
    }
}

/// A copy of a row, which keeps the columns of `key` and has others where another key would be in the way as well.
fn replacement(conn: &Connection, table: &str, key: &[String]) -> String {
    let primary = keys(conn, table).remove(0);
    let of_row: Vec<String> = columns(conn, table)
        .iter()
        .map(|column| match primary.contains(column) && !key.contains(column) {
            true => format!("\"{column}\" + 1000"),
            false => format!("\"{column}\""),
        })
        .collect();
    format!("INSERT OR REPLACE INTO {table} SELECT {} FROM ({}) LIMIT 1", of_row.join(", "), published(conn, table))
}

#[test]
fn every_lasting_table_refuses_to_replace_a_row() {
    let study = populated();
    let conn = study.plain();
    for table in lasting(&conn) {
        for key in keys(&conn, &table) {
            refuses(&conn, &table, &replacement(&conn, &table, &key));
        }
    }
    // Also where the number is left to SQLite.
    refuses(&conn, "term", "INSERT OR REPLACE INTO term (text) SELECT text FROM term LIMIT 1");
    refuses(&conn, "subject", "INSERT OR REPLACE INTO subject (code) SELECT code FROM subject LIMIT 1");
    refuses(
        &conn,
        "session",
        "INSERT OR REPLACE INTO session (subject, day, label) SELECT subject, day, label FROM session",
    );
    refuses(&conn, "cut", "INSERT OR REPLACE INTO cut (act, name, trail) SELECT act, name, trail FROM cut");
    refuses(
        &conn,
        "session",
        "INSERT OR REPLACE INTO session (subject, day) SELECT subject, day FROM session WHERE label = 0",
    );
}

#[test]
fn an_unpublished_row_may_go_and_not_change() {
    let study = populated();
    let conn = study.plain();
    let unpublished = "filing NOT IN (SELECT id FROM filing)";
    assert_eq!(number(&conn, &format!("SELECT count(*) FROM reading WHERE {unpublished}")), 1);
    refuses(&conn, "reading", &format!("UPDATE reading SET number = 1 WHERE {unpublished}"));
    assert_eq!(conn.execute(&format!("DELETE FROM reading WHERE {unpublished}"), []).unwrap(), 1);
}

/// The blanking of reading 1 as a removal does it, with one part of the statement as the caller wants it.
struct Blanking {
    act: String,
    digest: String,
    blanked: &'static str,
    more: &'static str,
}

impl Blanking {
    const ALL: &'static str =
        "text = NULL, exported = NULL, number = NULL, mark = NULL, byte_from = NULL, byte_to = NULL, salt = NULL";

    fn right(study: &Study) -> Self {
        let conn = study.plain();
        let digest: String = digest_of(&conn, "reading", 1).iter().map(|byte| format!("{byte:02x}")).collect();
        let act = number(&conn, "SELECT act FROM removal").to_string();
        Self { act, digest: format!("x'{digest}'"), blanked: Self::ALL, more: "" }
    }

    fn sql(&self) -> String {
        let Self { act, digest, blanked, more } = self;
        format!("UPDATE reading SET {blanked}, digest = {digest}, removed = {act}{more} WHERE id = 1")
    }
}

#[test]
fn the_door_of_removal_is_narrow() {
    let study = populated();
    let conn = study.plain();
    let right = || Blanking::right(&study);
    refuses(&conn, "reading", &Blanking { act: "1".into(), ..right() }.sql());
    refuses(&conn, "reading", &Blanking { act: "NULL".into(), ..right() }.sql());
    refuses(&conn, "reading", &Blanking { digest: "NULL".into(), ..right() }.sql());
    refuses(&conn, "reading", &Blanking { blanked: "text = NULL, number = NULL, salt = NULL", ..right() }.sql());
    for column in columns(&conn, "reading") {
        if !Blanking::ALL.contains(&format!("{column} =")) && !["digest", "removed"].contains(&column.as_str()) {
            let more: &'static str = format!(", \"{column}\" = 4000").leak();
            refuses(&conn, "reading", &Blanking { more, ..right() }.sql());
        }
    }
    // Through the open door, but the removal on the trail does not name this row.
    let (right, act) = (right().sql(), number(&conn, "SELECT act FROM removal"));
    assert_eq!(conn.execute(&right, []).unwrap(), 1);
    refuses(&conn, "reading", &right);
    let faults = study.records().verify(&mut |_, _| {}).unwrap().faults;
    assert_eq!(faults, [VerifyFault::Removal { act, says: 4, found: 5 }]);
}

#[test]
fn without_a_removal_nothing_can_be_blanked() {
    let study = Study::new();
    let mut records = study.records();
    super::study::plan(&mut records);
    super::study::file(&mut records, b"x", "x.csv", |records, filing| {
        records.add_reading(filing, &super::study::reading("S-01", 1, 1.0)).map(|_| ())
    });
    let conn = study.plain();
    for act in ["NULL", "1", "2"] {
        let sql = format!("UPDATE reading SET {}, digest = x'00', removed = {act}", Blanking::ALL);
        refuses(&conn, "reading", &sql);
    }
}
