//! Which files are opened, and which are refused untouched.

use std::os::unix::fs::PermissionsExt;
use std::path::Path;

use revisant_schema::records::{Records, RecordsError};
use rusqlite::Connection;

use super::study::{Study, plan};

/// Puts a file in the records' place, tries to open it, and sees that nothing of it has changed.
fn refusal(study: &Study) -> RecordsError {
    let file = study.file();
    let seen = |file: &Path| (std::fs::read(file).unwrap(), std::fs::metadata(file).unwrap().permissions().mode());
    let before = seen(&file);
    let error = Records::open_or_create(study.path(), study.world.clone()).err().unwrap();
    assert!(before == seen(&file), "the file was touched");
    error
}

fn in_the_place_of_records(study: &Study) -> Connection {
    std::fs::create_dir_all(study.file().parent().unwrap()).unwrap();
    Connection::open(study.file()).unwrap()
}

#[test]
fn there_are_none() {
    let study = Study::new();
    let error = Records::open(study.path(), study.world.clone()).err().unwrap();
    assert!(matches!(error, RecordsError::Absent(_)));
    assert!(!study.file().exists());
}

#[test]
fn a_newer_layout_is_refused_untouched() {
    let study = Study::new();
    plan(&mut study.records());
    study.plain().execute_batch("PRAGMA user_version = 99").unwrap();
    assert!(matches!(refusal(&study), RecordsError::Newer { found: 99, .. }));
}

#[test]
fn a_foreign_database_is_refused_untouched() {
    let study = Study::new();
    in_the_place_of_records(&study).execute_batch("CREATE TABLE other (id)").unwrap();
    assert!(matches!(refusal(&study), RecordsError::Foreign(_)));
    let study = Study::new();
    in_the_place_of_records(&study).execute_batch("PRAGMA application_id = 7; PRAGMA user_version = 1").unwrap();
    assert!(matches!(refusal(&study), RecordsError::Foreign(_)));
}

#[test]
fn a_text_file_is_refused_untouched() {
    let study = Study::new();
    drop(in_the_place_of_records(&study));
    std::fs::write(study.file(), "day;value\n2026-03-02;31.5\n".repeat(50)).unwrap();
    assert!(matches!(refusal(&study), RecordsError::Foreign(_)));
}

#[test]
fn files_are_for_their_owner_alone() {
    let study = Study::new();
    drop(study.records());
    std::fs::set_permissions(study.file(), std::fs::Permissions::from_mode(0o644)).unwrap();
    let _records = study.records();
    let mode = |path: &Path| std::fs::metadata(path).unwrap().permissions().mode() & 0o777;
    assert_eq!(mode(&study.file()), 0o600);
    assert_eq!(mode(study.file().parent().unwrap()), 0o700);
    assert_eq!(mode(&study.file().with_file_name("raw")), 0o700);
}

#[test]
fn two_who_make_the_same_records_at_once_both_get_them() {
    for _ in 0..40 {
        let study = Study::new();
        let start = std::sync::Barrier::new(3);
        std::thread::scope(|scope| {
            for _ in 0..3 {
                scope.spawn(|| {
                    start.wait();
                    let opened = Records::open_or_create(study.path(), study.world.clone());
                    opened.unwrap_or_else(|error| panic!("{error:?}"));
                });
            }
        });
        let records = study.records();
        assert_eq!(records.verify(&mut |_, _| {}).unwrap().faults, []);
    }
}
