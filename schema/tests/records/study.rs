//! A study folder of its own for each test, in a world whose clock and chance are fixed.

use std::io::{self, Read};
use std::path::{Path, PathBuf};
use std::sync::Arc;
use std::sync::atomic::{AtomicU64, Ordering};

use chrono::{DateTime, TimeDelta, TimeZone, Utc};
use revisant_schema::records::codec::{Canon, Kind, table};
use revisant_schema::records::{Act, ActKind, Cell, Doer, Filing, Kept, NewHold, NewReading, Records, Result};
use revisant_schema::world::{Entry, NewFile, RealWorld, Stat, World};
use rusqlite::Connection;

/// The machine's files; a clock that goes on by a second whenever it is read; chance from a counter.
#[derive(Default)]
pub struct FixedWorld {
    read: AtomicU64,
    drawn: AtomicU64,
}

impl World for FixedWorld {
    fn now(&self) -> DateTime<Utc> {
        let start = Utc.with_ymd_and_hms(2026, 3, 2, 8, 0, 0).unwrap();
        start + TimeDelta::seconds(self.read.fetch_add(1, Ordering::Relaxed) as i64)
    }
    fn chance(&self, bytes: &mut [u8]) {
        for piece in bytes.chunks_mut(8) {
            let drawn = self.drawn.fetch_add(1, Ordering::Relaxed);
            // A multiplication by a large odd number, so that neighbours look unlike.
            let mixed = (drawn + 1).wrapping_mul(0x9e37_79b9_7f4a_7c15).to_le_bytes();
            piece.copy_from_slice(&mixed[..piece.len()]);
        }
    }
    fn list(&self, folder: &Path) -> io::Result<Vec<Entry>> {
        RealWorld.list(folder)
    }
    fn stat(&self, file: &Path) -> io::Result<Stat> {
        RealWorld.stat(file)
    }
    fn open(&self, file: &Path) -> io::Result<Box<dyn Read + Send>> {
        RealWorld.open(file)
    }
    fn create(&self, folder: &Path) -> io::Result<Box<dyn NewFile>> {
        RealWorld.create(folder)
    }
}

/// A study's folder, gone with the test.
pub struct Study {
    pub folder: tempfile::TempDir,
    pub world: Arc<FixedWorld>,
}

impl Study {
    pub fn new() -> Self {
        Self { folder: tempfile::tempdir().unwrap(), world: Arc::default() }
    }

    pub fn path(&self) -> &Path {
        self.folder.path()
    }

    pub fn records(&self) -> Records {
        Records::open_or_create(self.path(), self.world.clone()).unwrap()
    }

    pub fn file(&self) -> PathBuf {
        self.path().join("records").join("records.sqlite")
    }

    /// A connection as any other program would open it: no pragma is set.
    pub fn plain(&self) -> Connection {
        Connection::open(self.file()).unwrap()
    }

    /// The same, without triggers: for those who tamper.
    pub fn without_triggers(&self) -> Connection {
        let conn = self.plain();
        conn.execute_batch("PRAGMA foreign_keys = OFF; PRAGMA ignore_check_constraints = ON").unwrap();
        for name in names(&conn, "SELECT name FROM sqlite_master WHERE type = 'trigger'") {
            conn.execute_batch(&format!("DROP TRIGGER {name}")).unwrap();
        }
        conn
    }
}

/// The first column of a query.
pub fn names(conn: &Connection, sql: &str) -> Vec<String> {
    let mut statement = conn.prepare(sql).unwrap();
    statement.query_map([], |row| row.get(0)).unwrap().collect::<rusqlite::Result<_>>().unwrap()
}

/// A number that a query gives.
pub fn number(conn: &Connection, sql: &str) -> i64 {
    conn.query_row(sql, [], |row| row.get(0)).unwrap()
}

pub fn doer() -> Doer {
    Doer { who: "coordinator".into(), program: "revisant 0.1.0".into(), why: None }
}

/// A reading of the grip strength of a subject's left hand.
pub fn reading(subject: &str, replicate: u32, number: f64) -> NewReading<'_> {
    NewReading {
        line: Some(i64::from(replicate) + 1),
        bytes: Some((100, 140)),
        cell: None,
        instrument: "dynamometer",
        measure: "grip",
        condition: "hand=left",
        replicate,
        labelled: true,
        subject,
        day: 739_677,
        label: "",
        text: "31.5",
        exported: Some(number),
        unit: "kg",
        number,
        mark: None,
        written: Some("2026-03-02 09:15"),
        moment: Some(1_772_439_300_000),
        operator: "TK",
        plan: 1,
        identity: Some(4_711),
        ordinal: 0,
        supersedes: None,
        source: 0,
    }
}

pub fn hold(row_key: &[u8]) -> NewHold<'_> {
    NewHold {
        reason: "unknown-subject",
        line: Some(7),
        cell: None,
        bytes: Some((300, 340)),
        column: "",
        row_key,
        row: "S-99;2026-03-02 09:20;31.0",
        detail: "{\"subject\":\"S-99\"}",
    }
}

/// The plan's first version.
pub fn plan(records: &mut Records) -> i64 {
    records
        .act(ActKind::Plan, &doer(), |act| {
            act.objects.insert("plan".into(), 1.into());
            act.add("plan_version", &[Cell::Bytes(&[7; 32]), Cell::Text("{\"study.toml\":\"\"}")])
        })
        .unwrap()
}

/// A capture of these bytes, with its account.
pub fn capture(act: &mut Act<'_>, kept: &Kept, path: &str) -> Result<i64> {
    act.add_raw(kept)?;
    let cells = [
        Cell::Term("dynamometer"),
        Cell::Text(path),
        Cell::Int(1_772_439_300_000_000_000),
        Cell::Int(kept.size as i64),
        Cell::Bytes(&kept.sha256),
        Cell::Int(1),
        Cell::Null,
        Cell::Null,
    ];
    let capture = act.add("capture", &cells)?;
    act.add("account", &[Cell::Int(capture), Cell::Text("{\"filed\":2}")])?;
    Ok(capture)
}

/// Files an export whose readings and holds `work` adds.
pub fn file(
    records: &mut Records,
    bytes: &[u8],
    path: &str,
    work: impl FnOnce(&mut Records, &mut Filing) -> Result<()>,
) -> i64 {
    let kept = records.keep_small(bytes.to_vec()).unwrap();
    file_kept(records, &kept, path, work)
}

/// The same, of bytes that are kept already.
pub fn file_kept(
    records: &mut Records,
    kept: &Kept,
    path: &str,
    work: impl FnOnce(&mut Records, &mut Filing) -> Result<()>,
) -> i64 {
    records
        .act(ActKind::File, &doer(), |act| {
            let number = capture(act, kept, path)?;
            let mut filing = act.records().new_filing(Some(number))?;
            work(act.records(), &mut filing)?;
            act.objects.insert("capture".into(), number.into());
            act.publish(filing)
        })
        .unwrap()
}

/// The digest of a row as the documentation says, taken from the file.
pub fn digest_of(conn: &Connection, name: &str, id: i64) -> Vec<u8> {
    let (_, table) = table(name).unwrap();
    let mut canon = Canon::default();
    let salt: Vec<u8> =
        conn.query_row(&format!("SELECT salt FROM {name} WHERE id = ?1"), [id], |row| row.get(0)).unwrap();
    canon.start(&salt);
    canon.text(name);
    for (column, kind) in table.columns {
        let sql = match kind {
            Kind::Plain => format!("SELECT \"{column}\" FROM {name} WHERE id = ?1"),
            Kind::Term => format!(
                "SELECT coalesce(term.text, '') FROM {name} t LEFT JOIN term ON term.id = t.{column} WHERE t.id = ?1"
            ),
            Kind::Subject => format!("SELECT code FROM {name} t JOIN subject s ON s.id = t.{column} WHERE t.id = ?1"),
            Kind::Session => format!(
                "SELECT code, day, coalesce(term.text, '') FROM {name} t JOIN session s ON s.id = t.{column}
                 JOIN subject ON subject.id = s.subject LEFT JOIN term ON term.id = s.label WHERE t.id = ?1"
            ),
        };
        let mut statement = conn.prepare(&sql).unwrap();
        let width = statement.column_count();
        statement
            .query_row([id], |row| (0..width).try_for_each(|at| row.get_ref(at).map(|value| canon.value(value))))
            .unwrap();
    }
    canon.digest().to_vec()
}

/// A study in which every table has rows: acts of all sorts, filings that lie among one another, a large raw copy, a
/// removed subject, and a filing that was broken off.
pub fn populated() -> Study {
    let study = Study::new();
    let mut records = study.records();
    plan(&mut records);
    roster(&mut records);
    exports(&mut records);
    by_hand(&mut records);
    staged(&mut records);
    remove(&study, &mut records);
    let mut broken_off = begun(&mut records, Some(1));
    records.add_reading(&mut broken_off, &reading("S-01", 9, 5.0)).unwrap();
    records.stage(&mut broken_off).unwrap();
    records.commit().unwrap();
    drop(records);
    study
        .plain()
        .execute_batch(
            "INSERT INTO noticed VALUES ('a.csv', 'dynamometer', 'captured', 1, 2, 3, 1, NULL);
             INSERT INTO working VALUES ('seen', '1');",
        )
        .unwrap();
    study
}

fn roster(records: &mut Records) {
    let events = [("S-01", "enrolled", "2026-02-01"), ("S-01", ".age", "71"), ("S-02", "enrolled", "2026-02-03")];
    records
        .act(ActKind::Roster, &doer().because(Some("first list")), |act| {
            act.after = Some(serde_json::json!({"cells": 3}));
            for (subject, field, value) in events {
                act.add("roster_event", &[Cell::Subject(subject), Cell::Text(field), Cell::Text(value)])?;
            }
            act.add("roster_event", &[Cell::Subject("S-02"), Cell::Text(".age"), Cell::Null]).map(|_| ())
        })
        .unwrap();
}

fn exports(records: &mut Records) {
    file(records, b"first export", "a.csv", |records, filing| {
        records.add_reading(filing, &reading("S-01", 1, 31.5))?;
        let mut labelled = reading("S-02", 2, -0.0);
        labelled.label = "base";
        labelled.mark = Some("<");
        labelled.cell = Some("Sheet1!B2");
        records.add_reading(filing, &labelled)?;
        records.add_hold(filing, &hold(b"one"))?;
        records.add_hold(filing, &hold(b"other")).map(|_| ())
    });
    file(records, b"first export, grown", "a.csv", |records, filing| {
        records.add_sighting(filing, 1, Some(7))?;
        records.add_gone(filing, 2)?;
        let mut newer = reading("S-01", 1, 32.5);
        newer.supersedes = Some(1);
        records.add_reading(filing, &newer).map(|_| ())
    });
    let large: Vec<u8> = (0..200_000u32).flat_map(|at| at.wrapping_mul(2_654_435_761).to_le_bytes()).collect();
    let kept = records.keep_large(&mut large.as_slice()).unwrap();
    file_kept(records, &kept, "large.csv", |records, filing| records.add_hold(filing, &hold(b"large")).map(|_| ()));
}

fn by_hand(records: &mut Records) {
    let doer = doer().because(Some("read off the display"));
    records
        .act(ActKind::Enter, &doer, |act| {
            let mut filing = act.records().new_filing(None)?;
            let mut new = reading("S-01", 3, 30.0);
            (new.line, new.bytes, new.identity, new.source) = (None, None, None, 1);
            act.records().add_reading(&mut filing, &new)?;
            act.publish(filing)
        })
        .unwrap();
    let rows: [(ActKind, &str, &[Cell<'_>]); 7] = [
        (ActKind::Strike, "reading_event", &[Cell::Int(1), Cell::Text("struck")]),
        (ActKind::Restore, "reading_event", &[Cell::Int(1), Cell::Text("restored")]),
        (ActKind::Decide, "hold_event", &[Cell::Int(1), Cell::Text("decided"), Cell::Text("{\"subject\":\"S-02\"}")]),
        (ActKind::Dismiss, "hold_event", &[Cell::Int(2), Cell::Text("dismissed"), Cell::Null]),
        (ActKind::Account, "accounted", &[Cell::Subject("S-01"), Cell::Text("week-4"), Cell::Null]),
        (ActKind::Account, "accounted", &[Cell::Subject("S-01"), Cell::Text("week-8"), Cell::Text("grip")]),
        (ActKind::Cut, "cut", &[Cell::Text("first"), Cell::Int(5)]),
    ];
    for (kind, table, cells) in rows {
        records.act(kind, &doer, |act| act.add(table, cells)).unwrap();
    }
    records.act(ActKind::Start, &doer, |_| Ok(())).unwrap();
}

/// A filing in a transaction of its own, which is left open.
pub fn begun(records: &mut Records, capture: Option<i64>) -> Filing {
    records.begin().unwrap();
    records.new_filing(capture).unwrap()
}

/// Two filings, the second of which is done while the first is being written.
fn staged(records: &mut Records) {
    let mut large = begun(records, Some(3));
    for replicate in 4..6 {
        records.add_reading(&mut large, &reading("S-01", replicate, f64::from(replicate))).unwrap();
    }
    records.stage(&mut large).unwrap();
    records.commit().unwrap();
    file(records, b"between", "b.csv", |records, filing| {
        records.add_reading(filing, &reading("S-02", 6, 1e-300)).map(|_| ())
    });
    records.begin().unwrap();
    records.add_reading(&mut large, &reading("S-01", 7, 1e15)).unwrap();
    records.act_within(ActKind::File, &doer(), |act| act.publish(large)).unwrap();
    records.commit().unwrap();
}

/// Removes what is known of S-02, as the act of a withdrawal does.
fn remove(study: &Study, records: &mut Records) {
    let kept = records.keep_small(b"first export, blanked".to_vec()).unwrap();
    let old = records.keep_small(b"first export".to_vec()).unwrap().sha256;
    records
        .act(ActKind::Roster, &doer().because(Some("withdrew consent")), |act| {
            act.add("roster_event", &[Cell::Subject("S-02"), Cell::Text("data"), Cell::Text("removed")])?;
            act.remove("S-02", &[("reading", 2), ("hold_event", 1), ("roster_event", 3), ("hold", 2)])?;
            act.add_raw(&kept)?;
            act.add("raw_removal", &[Cell::Bytes(&old), Cell::Bytes(&kept.sha256)])
        })
        .unwrap();
    let conn = study.plain();
    conn.execute("DELETE FROM raw WHERE sha256 = ?1", [old.as_slice()]).unwrap();
}
