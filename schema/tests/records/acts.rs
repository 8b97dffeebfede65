//! An act is done as a whole or not at all.

use std::time::Duration;

use revisant_schema::records::{ActKind, Cell, RecordsError};

use super::study::{Study, begun, doer, file, hold, number, plan, reading};

fn refused<T>() -> Result<T, RecordsError> {
    Err(RecordsError::Refused("enough".to_owned()))
}

#[test]
fn an_act_commits_with_its_row_on_the_trail() {
    let study = Study::new();
    let mut records = study.records();
    assert_eq!(records.head().unwrap(), None);
    plan(&mut records);
    let trail = records.trail(1, 10).unwrap();
    assert_eq!(trail.len(), 1);
    assert_eq!(records.head().unwrap(), Some((1, trail[0].hash)));
    assert_eq!(trail[0].previous, [0; 32]);
    assert_eq!(trail[0].hash, trail[0].expected_hash());
    assert_eq!((trail[0].act.as_str(), trail[0].objects.as_str()), ("plan", "{\"plan\":1}"));
    assert_eq!(number(&study.plain(), "SELECT act FROM plan_version"), 1);
}

#[test]
fn an_act_that_fails_leaves_nothing() {
    let study = Study::new();
    let mut records = study.records();
    plan(&mut records);
    let failed = records.act(ActKind::Roster, &doer(), |act| {
        act.add("roster_event", &[Cell::Subject("S-01"), Cell::Text("arm"), Cell::Text("a")])?;
        let mut filing = act.records().new_filing(None)?;
        act.records().add_reading(&mut filing, &reading("S-01", 1, 1.0))?;
        act.publish(filing)?;
        refused::<()>()
    });
    assert!(matches!(failed, Err(RecordsError::Refused(_))));
    let conn = study.plain();
    for table in ["roster_event", "subject", "term", "session", "reading", "filing"] {
        assert_eq!(number(&conn, &format!("SELECT count(*) FROM {table}")), 0, "{table}");
    }
    assert_eq!(records.head().unwrap().unwrap().0, 1);
    // The texts that the failed act made are known no more, and made again by the next.
    file(&mut records, b"x", "x.csv", |records, filing| {
        records.add_reading(filing, &reading("S-01", 1, 1.0)).map(|_| ())
    });
    assert_eq!(records.verify(&mut |_, _| {}).unwrap().faults, []);
}

#[test]
fn one_act_of_a_batch_is_undone_alone() {
    let study = Study::new();
    let mut records = study.records();
    records.begin().unwrap();
    for (name, good) in [("first", true), ("second", false), ("third", true)] {
        let done = records.act_within(ActKind::Account, &doer(), |act| {
            act.add("accounted", &[Cell::Subject(name), Cell::Text("week-4"), Cell::Null])?;
            if good { Ok(()) } else { refused() }
        });
        assert_eq!(done.is_ok(), good);
    }
    records.commit().unwrap();
    let conn = study.plain();
    let subjects =
        super::study::names(&conn, "SELECT code FROM accounted a JOIN subject s ON s.id = a.subject ORDER BY a.id");
    assert_eq!(subjects, ["first", "third"]);
    assert_eq!(number(&conn, "SELECT max(number) FROM trail"), 2);
    assert_eq!(records.verify(&mut |_, _| {}).unwrap().faults, []);
}

#[test]
fn an_act_outside_a_transaction_is_refused() {
    let study = Study::new();
    let mut records = study.records();
    let done = records.act_within(ActKind::Start, &doer(), |_| Ok(()));
    assert!(matches!(done, Err(RecordsError::Refused(_))));
    assert_eq!(records.head().unwrap(), None);
}

#[test]
fn what_sqlite_cannot_keep_is_not_filed() {
    let study = Study::new();
    let mut records = study.records();
    plan(&mut records);
    file(&mut records, b"x", "x.csv", |records, filing| {
        assert!(records.add_reading(filing, &reading("S-01", 1, f64::NAN)).is_err());
        records.add_reading(filing, &reading("S-01", 1, -0.0))?;
        records.add_reading(filing, &reading("S-01", 2, f64::INFINITY))?;
        records.add_reading(filing, &reading("S-01", 3, f64::MIN_POSITIVE / 2.0)).map(|_| ())
    });
    let verified = records.verify(&mut |_, _| {}).unwrap();
    assert_eq!((verified.faults, verified.readings), (vec![], 3));
}

#[test]
fn unpublished_rows_are_cleared_and_published_ones_stay() {
    let study = Study::new();
    let mut records = study.records();
    plan(&mut records);
    file(&mut records, b"x", "x.csv", |records, filing| {
        records.add_reading(filing, &reading("S-01", 1, 1.0)).map(|_| ())
    });
    let mut filing = begun(&mut records, Some(1));
    records.add_reading(&mut filing, &reading("S-01", 2, 2.0)).unwrap();
    records.add_hold(&mut filing, &hold(b"x")).unwrap();
    records.add_sighting(&mut filing, 1, None).unwrap();
    records.add_gone(&mut filing, 1).unwrap();
    records.stage(&mut filing).unwrap();
    records.commit().unwrap();
    drop(filing);
    let conn = study.plain();
    let counts = || {
        ["reading", "hold", "sighting", "gone", "staging"]
            .map(|table| number(&conn, &format!("SELECT count(*) FROM {table}")))
    };
    assert_eq!(counts(), [2, 1, 1, 1, 1]);
    let verified = records.verify(&mut |_, _| {}).unwrap();
    assert_eq!((verified.faults, verified.readings), (vec![], 1));
    assert_eq!(verified.notes.len(), 1, "{:?}", verified.notes);
    assert_eq!(records.clear_unpublished().unwrap(), 1);
    assert_eq!(counts(), [1, 0, 0, 0, 0]);
    assert!(records.clear_filing(1).is_err());
    assert_eq!(counts(), [1, 0, 0, 0, 0]);
    assert_eq!(records.verify(&mut |_, _| {}).unwrap().faults, []);
}

#[test]
fn a_writer_that_holds_the_lock_makes_another_wait_and_give_up() {
    let study = Study::new();
    let (mut one, mut other) = (study.records(), study.records());
    one.begin().unwrap();
    other.set_patience(Duration::from_millis(50)).unwrap();
    let done = other.act(ActKind::Start, &doer(), |_| Ok(()));
    assert!(matches!(done, Err(RecordsError::Busy { seconds: 0, .. })), "{done:?}");
    // Reading goes on meanwhile.
    assert_eq!(other.verify(&mut |_, _| {}).unwrap().faults, []);
    one.commit().unwrap();
    other.act(ActKind::Start, &doer(), |_| Ok(())).unwrap();
}

#[test]
fn a_row_is_removed_once_and_only_where_it_holds_values() {
    let study = super::study::populated();
    let mut records = study.records();
    let mut remove = |rows: &[(&str, i64)]| records.act(ActKind::Roster, &doer(), |act| act.remove("S-02", rows));
    for (rows, wrong) in [
        ([("reading", 1), ("reading", 2)], "row 2 of reading is removed already"),
        ([("reading", 1), ("reading", 900)], "there is no row 900 of reading to be removed"),
        ([("reading", 1), ("trail", 1)], "trail holds nothing that can be removed"),
    ] {
        assert_eq!(remove(rows.as_slice()).unwrap_err().to_string(), wrong);
    }
    let conn = study.plain();
    assert_eq!(number(&conn, "SELECT count(*) FROM reading WHERE removed IS NOT NULL"), 1);
    remove(&[("reading", 1), ("hold", 1), ("reading", 1)]).unwrap();
    remove(&[]).unwrap();
    assert_eq!(number(&conn, "SELECT count(*) FROM reading WHERE removed IS NOT NULL AND text IS NULL"), 2);
    assert_eq!(records.verify(&mut |_, _| {}).unwrap().faults, []);
}
