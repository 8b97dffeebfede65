//! What was changed behind the program's back is found, and the first fault is where the trail first goes wrong.

use std::collections::BTreeMap;
use std::fs;

use revisant_schema::records::codec::{OF_ACT, OF_FILING, hex};
use revisant_schema::records::trail::short;
use revisant_schema::records::{RawWrong, Records, RecordsError, Verified, VerifyFault, VerifyNote};
use rusqlite::Connection;
use rusqlite::types::Value;

use super::append_only::{columns, lasting, rows};
use super::study::{Study, number, populated};

fn verify(study: &Study) -> Verified {
    study.records().verify(&mut |_, _| {}).unwrap()
}

/// Faults but for the triggers that had to be dropped.
fn faults(study: &Study) -> Vec<VerifyFault> {
    let missing_trigger = |fault: &VerifyFault| matches!(fault, VerifyFault::LayoutMissing { .. });
    verify(study).faults.into_iter().filter(|fault| !missing_trigger(fault)).collect()
}

fn say(faults: &[VerifyFault]) -> String {
    faults.iter().map(|fault| format!("{fault}\n")).collect()
}

#[test]
fn nothing_is_wrong_with_records_as_they_are_written() {
    let study = populated();
    let mut last = (0, 0);
    let verified = study.records().verify(&mut |done, of| last = (done, of)).unwrap();
    assert_eq!(verified.faults, []);
    assert_eq!(last.0, last.1);
    let conn = study.plain();
    let published = "SELECT count(*) FROM reading WHERE filing IN (SELECT id FROM filing)";
    assert_eq!(verified.readings as i64, number(&conn, published));
    assert_eq!(verified.raw_copies as i64, number(&conn, "SELECT count(*) FROM raw"));
    assert_eq!(verified.head, study.records().head().unwrap());
    let act = number(&conn, "SELECT act FROM removal");
    assert!(verified.notes.contains(&VerifyNote::Removed { act, rows: 4 }), "{:?}", verified.notes);
    for table in lasting(&conn) {
        assert!(number(&conn, &format!("SELECT count(*) FROM {table}")) > 0, "{table} is empty");
    }
}

#[test]
fn empty_records_verify() {
    let study = Study::new();
    let verified = verify(&study);
    assert_eq!((verified.faults, verified.head, verified.rows), (vec![], None, 0));
}

/// Another value in the place of one.
fn flipped(value: &Value, kind: &str) -> Value {
    match (value, kind) {
        (Value::Integer(number), _) => Value::Integer(number + 1000),
        (Value::Real(number), _) => Value::Real(f64::from_bits(number.to_bits() ^ 1)),
        (Value::Text(text), _) => Value::Text(format!("{text}x")),
        (Value::Blob(bytes), _) => {
            let mut bytes = bytes.clone();
            if let Some(last) = bytes.last_mut() {
                *last ^= 1;
            }
            Value::Blob(bytes)
        }
        (Value::Null, "INTEGER") => Value::Integer(1),
        (Value::Null, "REAL") => Value::Real(0.0),
        (Value::Null, "BLOB") => Value::Blob(vec![]),
        (Value::Null, _) => Value::Text(String::new()),
    }
}

/// The act of each row of a table, by the row's key, where it has one.
fn acts(conn: &Connection, table: &str) -> BTreeMap<i64, i64> {
    let of_filing = OF_FILING.iter().any(|of_filing| of_filing.name == table);
    let sql = match (table, of_filing) {
        ("trail", _) => "SELECT number, number FROM trail".to_owned(),
        (_, true) => format!("SELECT t.id, f.act FROM {table} t JOIN filing f ON f.id = t.filing"),
        _ if OF_ACT.iter().any(|of_act| of_act.name == table) => format!("SELECT id, act FROM {table}"),
        _ => return BTreeMap::new(),
    };
    let mut statement = conn.prepare(&sql).unwrap();
    let pairs = statement.query_map([], |row| Ok((row.get(0)?, row.get(1)?)));
    pairs.unwrap().collect::<rusqlite::Result<_>>().unwrap()
}

/// Whether the trail covers a row: not where its filing is not published.
fn is_covered(row: &[Value], acts: &BTreeMap<i64, i64>, table: &str) -> bool {
    match row[0] {
        Value::Integer(id) if !["term", "subject", "session"].contains(&table) => acts.contains_key(&id),
        _ => true,
    }
}

#[test]
fn every_value_of_every_row_is_covered() {
    let study = populated();
    let conn = study.without_triggers();
    for table in lasting(&conn) {
        let (names, all, acts) = (columns(&conn, &table), rows(&conn, &table), acts(&conn, &table));
        let kinds = super::study::names(&conn, &format!("SELECT type FROM pragma_table_info('{table}') ORDER BY cid"));
        let covered = all.iter().filter(|row| is_covered(row, &acts, &table));
        let mut count = 0;
        for row in covered {
            for (at, column) in names.iter().enumerate() {
                flip(&study, &conn, (&table, column, at), row, &flipped(&row[at], &kinds[at]), &acts);
            }
            count += 1;
        }
        assert!(count > 0, "no row of {table} was tried");
    }
    assert_eq!(faults(&study), []);
}

/// Changes one value, sees that it is found at the row's act, and changes it back.
fn flip(
    study: &Study,
    conn: &Connection,
    (table, column, at): (&str, &str, usize),
    row: &[Value],
    flipped: &Value,
    acts: &BTreeMap<i64, i64>,
) {
    let (key, key_name) = (&row[0], &columns(conn, table)[0]);
    let sql = format!("UPDATE {table} SET \"{column}\" = ?1 WHERE {key_name} = ?2");
    let set = |value: &Value, key: &Value| conn.execute(&sql, rusqlite::params![value, key]).unwrap();
    assert_eq!(set(flipped, key), 1);
    let found = faults(study);
    let what = format!("{table} {key:?}, {column}: {:?} -> {flipped:?}\n{}", row[at], say(&found));
    assert!(!found.is_empty(), "not found: {what}");
    if let Value::Integer(id) = key
        && let Some(&act) = acts.get(id)
    {
        // Of a removed row the removal's act covers what is left.
        let removed = columns(conn, table).iter().position(|column| column == "removed");
        let last = match removed.map(|at| &row[at]) {
            Some(Value::Integer(removal)) => *removal,
            _ => act,
        };
        assert!(found.iter().any(|fault| [Some(act), Some(last)].contains(&fault.act())), "not named: {what}");
        assert!(found[0].act().is_some_and(|first| first <= last), "first: {what}");
        // Where the row still says whose it is, the first fault names its table or filing; the act itself on the trail.
        let named = [table, "filing", "capture", "removed"].iter().any(|word| found[0].to_string().contains(word));
        assert!(named || table == "trail" || ["id", "act"].contains(&column), "{what}");
    }
    assert_eq!(set(&row[at], if at == 0 { flipped } else { key }), 1);
}

#[test]
fn a_removed_row_counts_by_its_digest() {
    let study = populated();
    let conn = study.without_triggers();
    let act = number(&conn, "SELECT act FROM filing WHERE id = 1");
    let removal = number(&conn, "SELECT act FROM removal");
    for change in [
        "digest = x'00'",
        "digest = randomblob(32)",
        "text = '31.5'",
        "byte_from = 1",
        "removed = 1",
        "removed = NULL",
        "digest = NULL",
        "salt = randomblob(16)",
    ] {
        conn.execute_batch(&format!("SAVEPOINT change; UPDATE reading SET {change} WHERE id = 2; RELEASE change"))
            .unwrap();
        let found = faults(&study);
        assert!(!found.is_empty(), "{change}");
        assert!(
            found.iter().all(|fault| [Some(act), Some(removal)].contains(&fault.act())),
            "{change}: {}",
            say(&found)
        );
        undo(&conn, &study, "reading", 2);
    }
    assert_eq!(faults(&study), []);
}

/// Puts a row back as it was in a study of the same making.
fn undo(conn: &Connection, _study: &Study, table: &str, id: i64) {
    let fresh = populated();
    let row = rows(&fresh.plain(), table).into_iter().find(|row| row[0] == Value::Integer(id)).unwrap();
    let marks = vec!["?"; row.len()].join(", ");
    conn.execute(&format!("DELETE FROM {table} WHERE id = ?1"), [id]).unwrap();
    conn.execute(&format!("INSERT INTO {table} VALUES ({marks})"), rusqlite::params_from_iter(row)).unwrap();
}

#[test]
fn rows_that_belong_to_nothing_are_found() {
    let study = populated();
    let conn = study.without_triggers();
    conn.execute_batch(
        "INSERT INTO accounted (id, act, subject, visit) VALUES (90, 400, 1, 'week-4');
         INSERT INTO sighting (id, filing, capture, hold) VALUES (90, 70, 1, 1);
         INSERT INTO reading SELECT 90, 71, capture, line, byte_from, byte_to, cell, instrument, measure, condition,
            replicate, labelled, session, text, exported, unit, number, mark, written, moment, operator, plan, identity,
            ordinal, supersedes, source, salt, digest, removed FROM reading WHERE id = 1;
         INSERT INTO raw SELECT x'01', size, stored_sha256, stored FROM raw WHERE stored IS NOT NULL LIMIT 1;
         INSERT INTO cut (id, act, name, trail) VALUES (90, 0, 'none', 900);",
    )
    .unwrap();
    let found = say(&faults(&study));
    for sentence in [
        "rows belong to act 400, which is not on the trail (accounted 90).",
        "rows belong to act 0, which is not on the trail (cut 90).",
        "1 rows of sighting, from row 90 on, belong to filing 70, which no act published.",
        "1 rows of reading, from row 90 on, belong to filing 71, which no act published.",
        "raw copy 01 belongs to no capture.",
        "row 90 of cut refers to trail 900, which is not there.",
    ] {
        assert!(found.contains(sentence), "{sentence}\n{found}");
    }
}

#[test]
fn rows_that_were_taken_away_are_found() {
    for (table, id) in
        [("reading", 1), ("reading", 3), ("hold", 1), ("gone", 1), ("capture", 2), ("filing", 3), ("removal", 1)]
    {
        let study = populated();
        let conn = study.without_triggers();
        let act = acts(&conn, table)[&id];
        conn.execute(&format!("DELETE FROM {table} WHERE id = ?1"), [id]).unwrap();
        let found = faults(&study);
        assert!(found.iter().any(|fault| fault.act() == Some(act)), "{table} {id}: {}", say(&found));
    }
    let study = populated();
    study.without_triggers().execute_batch("DELETE FROM trail WHERE number IN (4, 5)").unwrap();
    assert_eq!(faults(&study)[0], VerifyFault::TrailGap { from: 4, upto: 5 });
}

#[test]
fn swapped_rows_are_found() {
    let study = populated();
    let conn = study.without_triggers();
    let swap = |table: &str, key: &str, one: i64, other: i64| {
        conn.execute_batch(&format!(
            "UPDATE {table} SET {key} = -7 WHERE {key} = {one}; UPDATE {table} SET {key} = {one} WHERE {key} = {other};
             UPDATE {table} SET {key} = {other} WHERE {key} = -7"
        ))
        .unwrap();
    };
    for (table, key, one, other) in
        [("trail", "number", 5, 6), ("reading", "id", 3, 4), ("hold_event", "id", 1, 2), ("term", "id", 1, 2)]
    {
        swap(table, key, one, other);
        let found = faults(&study);
        assert!(!found.is_empty(), "{table} {one} and {other}");
        if table == "trail" {
            assert_eq!(found[0].act(), Some(5), "{}", say(&found));
        }
        swap(table, key, one, other);
        assert_eq!(faults(&study), []);
    }
}

#[test]
fn a_trail_cut_short_is_found_by_a_noted_head() {
    let study = populated();
    let records = study.records();
    let (last, hash) = records.head().unwrap().unwrap();
    let early = records.trail(3, 3).unwrap()[0].hash;
    let against = |study: &Study, head: &str| study.records().verify_against(head, &mut |_, _| {});
    for (head, act) in [(short(&hash), last), (hex(&hash), last), (hex(&hash).to_uppercase(), last), (short(&early), 3)]
    {
        let verified = against(&study, &head).unwrap();
        assert_eq!((verified.noted, verified.faults), (Some(act), vec![]), "{head}");
    }
    for wrong in ["", "0123", "the head of the trail", &"0".repeat(65)] {
        assert!(matches!(against(&study, wrong), Err(RecordsError::Refused(_))), "{wrong}");
    }
    // The last act is `roster` with a removal: cut off both, and all that belongs to it.
    let copy = Study::new();
    let mut shorter = copy.records();
    super::study::plan(&mut shorter);
    drop(shorter);
    assert_eq!(verify(&copy).faults, []);
    let verified = against(&copy, &short(&hash)).unwrap();
    assert_eq!(verified.faults, [VerifyFault::NotedHead { noted: short(&hash) }]);
    // One who cuts off the trail alone leaves rows that belong to no act.
    study.without_triggers().execute("DELETE FROM trail WHERE number = ?1", [last]).unwrap();
    let found = faults(&study);
    assert!(matches!(found[0], VerifyFault::NoAct { act, .. } if act == last), "{}", say(&found));
}

#[test]
fn a_changed_layout_is_found() {
    for (change, fault) in [
        ("DROP TRIGGER reading_same", VerifyFault::LayoutMissing { name: "reading_same".into() }),
        ("DROP INDEX reading_cell", VerifyFault::LayoutMissing { name: "reading_cell".into() }),
        ("CREATE TABLE sqlitelike (id)", VerifyFault::LayoutExtra { name: "sqlitelike".into() }),
        (
            "CREATE TRIGGER sly AFTER INSERT ON trail BEGIN DELETE FROM working; END",
            VerifyFault::LayoutExtra { name: "sly".into() },
        ),
        (
            "DROP TRIGGER cut_stays; CREATE TRIGGER cut_stays BEFORE DELETE ON cut BEGIN SELECT 1; END",
            VerifyFault::LayoutChanged { name: "cut_stays".into() },
        ),
    ] {
        let study = populated();
        study.plain().execute_batch(change).unwrap();
        assert_eq!(verify(&study).faults, [fault], "{change}");
    }
    let study = populated();
    study.plain().execute_batch("ANALYZE").unwrap();
    assert_eq!(verify(&study).faults, []);
}

/// The file of the one large copy.
fn large(study: &Study) -> std::path::PathBuf {
    let entries = fs::read_dir(study.file().with_file_name("raw")).unwrap();
    let mut files = entries.map(|entry| entry.unwrap().path());
    files.find(|file| revisant_schema::records::raw::is_raw_name(file)).unwrap()
}

#[test]
fn a_changed_raw_file_is_found() {
    let study = populated();
    let act = number(&study.plain(), "SELECT act FROM capture WHERE path = 'large.csv'");
    let file = large(&study);
    let bytes = fs::read(&file).unwrap();
    let wrong_now = || match verify(&study).faults.as_slice() {
        [VerifyFault::Raw { act: found, wrong, .. }] => {
            assert_eq!(*found, Some(act));
            Some(wrong.clone())
        }
        [] => None,
        others => panic!("{}", say(others)),
    };
    let last = bytes.len() - 1;
    for at in [0, 1, 4, 5, 6, 13, 100, last / 2, last - 1, last] {
        let mut changed = bytes.clone();
        changed[at] ^= 0x10;
        fs::write(&file, changed).unwrap();
        assert_eq!(wrong_now(), Some(RawWrong::Stored), "byte {at}");
    }
    for changed in [&bytes[..last], &[], &[bytes.as_slice(), b"more"].concat()] {
        fs::write(&file, changed).unwrap();
        assert_eq!(wrong_now(), Some(RawWrong::Stored), "{} bytes", changed.len());
    }
    fs::remove_file(&file).unwrap();
    assert_eq!(wrong_now(), Some(RawWrong::NoFile));
    fs::create_dir(&file).unwrap();
    assert!(matches!(wrong_now(), Some(RawWrong::File(_) | RawWrong::Expand(_))));
    fs::remove_dir(&file).unwrap();
    fs::write(&file, bytes).unwrap();
    assert_eq!(wrong_now(), None);
}

#[test]
fn a_raw_copy_exchanged_with_its_hash_is_found() {
    let study = populated();
    let conn = study.without_triggers();
    let stored = zstd::bulk::compress(b"between", 19).unwrap();
    let other = zstd::bulk::compress(b"BETWEEN", 19).unwrap();
    let longer = zstd::bulk::compress(b"between and more", 19).unwrap();
    let set = |bytes: &[u8]| {
        let hash = revisant_schema::records::codec::sha256(bytes);
        let sql = "UPDATE raw SET stored = ?1, stored_sha256 = ?2
                   WHERE sha256 = (SELECT sha256 FROM capture WHERE path = 'b.csv')";
        assert_eq!(conn.execute(sql, rusqlite::params![bytes, hash]).unwrap(), 1);
        match faults(&study).as_slice() {
            [VerifyFault::Raw { wrong, .. }] => Some(wrong.clone()),
            [] => None,
            others => panic!("{}", say(others)),
        }
    };
    assert_eq!(set(&other), Some(RawWrong::Bytes));
    assert_eq!(set(&longer), Some(RawWrong::Size { says: 7, found: 8 }));
    assert!(matches!(set(b"not compressed"), Some(RawWrong::Expand(_))));
    assert_eq!(set(&stored), None);
}

#[test]
fn a_raw_file_of_another_compression_stays() {
    let study = populated();
    let file = large(&study);
    let bytes = zstd::decode_all(fs::read(&file).unwrap().as_slice()).unwrap();
    let other = zstd::bulk::compress(&bytes, 9).unwrap();
    fs::write(&file, &other).unwrap();
    let hash = revisant_schema::records::codec::sha256(&other);
    study.without_triggers().execute("UPDATE raw SET stored_sha256 = ?1 WHERE stored IS NULL", [hash]).unwrap();
    assert_eq!(faults(&study), []);
    study.records().keep_large(&mut bytes.as_slice()).unwrap();
    assert_eq!(faults(&study), []);
    assert!(fs::read(&file).unwrap() == other);
    // One that is lost is written anew.
    fs::remove_file(&file).unwrap();
    study.records().keep_large(&mut bytes.as_slice()).unwrap();
    assert!(file.exists());
}

#[test]
fn a_loose_file_is_a_note() {
    let study = populated();
    let file = study.file().with_file_name("raw").join(".new-abc");
    fs::write(&file, b"half").unwrap();
    let verified = verify(&study);
    assert_eq!(verified.faults, []);
    assert!(verified.notes.contains(&VerifyNote::LooseFile { file }), "{:?}", verified.notes);
}

/// What matters of a file's content: the rows that last and the layout. `None` where it cannot be read.
fn content(study: &Study) -> Option<Vec<Vec<Vec<Value>>>> {
    let conn = study.plain();
    let read = |sql: &str| -> rusqlite::Result<Vec<Vec<Value>>> {
        let mut statement = conn.prepare(sql)?;
        let width = statement.column_count();
        statement.query_map([], |row| (0..width).map(|at| row.get(at)).collect())?.collect()
    };
    let mut sets = vec![read("SELECT name, sql FROM sqlite_master ORDER BY name").ok()?];
    for table in lasting(&populated().plain()) {
        // What is not published is not covered, nor is a term or session that only such rows name.
        let sql = match OF_FILING.iter().any(|of_filing| of_filing.name == table) {
            true => format!("SELECT * FROM {table} WHERE filing IN (SELECT id FROM filing) ORDER BY id"),
            false => format!("SELECT * FROM {table} ORDER BY 1"),
        };
        sets.push(read(&sql).ok()?);
    }
    Some(sets)
}

#[test]
fn a_flipped_byte_of_the_file_is_found() {
    let study = populated();
    study.plain().execute_batch("PRAGMA wal_checkpoint(TRUNCATE)").unwrap();
    let (bytes, before) = (fs::read(study.file()).unwrap(), content(&study));
    let mut chance = 0x2545_f491_4f6c_dd1du64;
    let (mut found, mut harmless) = (0, 0);
    while found < 150 {
        // Marsaglia's xorshift: the same bytes in every run.
        chance ^= chance << 13;
        chance ^= chance >> 7;
        chance ^= chance << 17;
        let at = (chance % bytes.len() as u64) as usize;
        if bytes[at] == 0 {
            // Most of these are free space.
            continue;
        }
        let mut changed = bytes.clone();
        changed[at] ^= 1 << (chance >> 60 & 7);
        fs::write(study.file(), changed).unwrap();
        if is_found(&study) {
            found += 1;
        } else {
            assert!(content(&study) == before, "byte {at} was changed, and it was not found");
            harmless += 1;
        }
        for side in ["sqlite-wal", "sqlite-shm"] {
            let _ = fs::remove_file(study.file().with_extension(side));
        }
    }
    assert!(harmless < found, "{harmless} flips changed nothing that lasts, and {found} were found");
}

fn is_found(study: &Study) -> bool {
    match Records::open(study.path(), study.world.clone()) {
        Ok(records) => records.verify(&mut |_, _| {}).map_or(true, |verified| !verified.faults.is_empty()),
        Err(_) => true,
    }
}

#[test]
fn too_many_faults_are_counted() {
    let study = populated();
    let conn = study.without_triggers();
    conn.execute_batch(
        "WITH RECURSIVE n (at) AS (SELECT 1000 UNION ALL SELECT at + 1 FROM n WHERE at < 3999)
         INSERT INTO cut (id, act, name, trail) SELECT at, at, 'cut ' || at, 1 FROM n",
    )
    .unwrap();
    let verified = verify(&study);
    assert_eq!(verified.faults.len(), 1001);
    assert!(matches!(verified.faults[0], VerifyFault::NoAct { act: 1000, .. }));
    assert!(matches!(verified.faults[1000], VerifyFault::Further { count } if count > 2000));
}

#[test]
fn what_is_written_meanwhile_does_not_disturb() {
    let study = populated();
    let (records, mut writer) = (study.records(), study.records());
    let head = records.head().unwrap();
    let mut acts = 0;
    let verified = records.verify(&mut |_, _| {
        acts += 1;
        super::study::file(&mut writer, format!("export {acts}").as_bytes(), "c.csv", |records, filing| {
            records.add_reading(filing, &super::study::reading("S-03", 1, 4.0)).map(|_| ())
        });
    });
    let verified = verified.unwrap();
    assert!(acts >= 2);
    assert_eq!((verified.faults, verified.head), (vec![], head));
    assert_eq!(records.verify(&mut |_, _| {}).unwrap().faults, []);
    assert_eq!(records.head().unwrap().unwrap().0, head.unwrap().0 + acts);
}
