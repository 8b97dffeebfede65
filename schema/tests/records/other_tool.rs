//! The trail can be computed again by a tool that shares no line with this program.

use std::process::{Command, Output};

use revisant_schema::records::codec::{OF_ACT, OF_FILING, hex};

use super::append_only::columns;
use super::study::{Study, populated};

/// What the script says; `None` where there is no Python.
fn script(study: &Study) -> Option<Output> {
    let script = concat!(env!("CARGO_MANIFEST_DIR"), "/tests/verify_trail.py");
    let output = Command::new("python3").arg(script).arg(study.file()).output();
    if output.is_err() {
        println!("skipped: there is no python3");
    }
    output.ok()
}

#[test]
fn another_tool_comes_to_the_same_head() {
    let study = populated();
    let Some(output) = script(&study) else { return };
    let said = String::from_utf8(output.stdout).unwrap();
    assert!(output.status.success(), "{}", String::from_utf8_lossy(&output.stderr));
    let (_, head) = study.records().head().unwrap().unwrap();
    assert_eq!(said.trim(), hex(&head));
}

#[test]
fn another_tool_finds_what_was_changed() {
    for (change, place) in [
        ("UPDATE reading SET number = 99 WHERE id = 1", "filing 1"),
        ("UPDATE capture SET path = 'other' WHERE id = 1", "act 3: rows"),
        ("UPDATE trail SET who = 'nobody' WHERE number = 2", "act 2: chain"),
        ("UPDATE reading SET operator = 0 WHERE id = 2", "removal 1"),
    ] {
        let study = populated();
        study.without_triggers().execute_batch(change).unwrap();
        let Some(output) = script(&study) else { return };
        assert!(!output.status.success(), "{change}");
        assert_eq!(String::from_utf8_lossy(&output.stderr).trim(), place);
    }
}

#[test]
fn values_stand_in_the_order_in_which_tables_declare_them() {
    let study = Study::new();
    drop(study.records());
    for table in OF_ACT.iter().chain(OF_FILING) {
        let mut covered: Vec<&str> = table.columns.iter().map(|(name, _)| *name).collect();
        if table.salted {
            covered.extend(["salt", "digest", "removed"]);
        }
        assert_eq!(columns(&study.plain(), table.name), covered, "{}", table.name);
    }
}
