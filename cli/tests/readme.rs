//! The README's shell blocks that are marked as runnable, run one after the other in a temporary folder.
#![allow(
    clippy::unwrap_used,
    clippy::expect_used,
    clippy::panic,
    reason = "a check that cannot go on says so by failing"
)]

use std::path::Path;
use std::process::Command;

const README: &str = include_str!("../../README.md");

/// The blocks that begin with the fence ` ```sh run `.
fn runnable() -> String {
    let mut script = String::from("set -eu\n");
    let mut inside = false;
    for line in README.lines() {
        match (inside, line) {
            (false, "```sh run") => inside = true,
            (true, "```") => inside = false,
            (true, line) => script.push_str(&format!("{line}\n")),
            (false, _) => {}
        }
    }
    assert!(!inside, "a block of the README does not end");
    script
}

#[test]
fn the_readme_s_commands_work() {
    let script = runnable();
    assert!(script.lines().filter(|line| line.starts_with("revisant ")).count() > 20, "{script}");
    let folder = tempfile::tempdir().expect("a temporary folder");
    let program = Path::new(env!("CARGO_BIN_EXE_revisant")).parent().expect("the program's folder");
    let path = format!("{}:{}", program.display(), std::env::var("PATH").unwrap_or_default());
    let run = Command::new("bash").args(["-c", &script]).current_dir(folder.path()).env("PATH", path).output();
    let run = run.expect("bash");
    let (said, wrong) = (String::from_utf8_lossy(&run.stdout), String::from_utf8_lossy(&run.stderr));
    assert!(run.status.success(), "{said}\n{wrong}");
    assert_eq!(wrong, "");
    for expected in ["is sound", "unknown-subject", "week-8: missed", "partial η²", "Nothing is wrong."] {
        assert!(said.contains(expected), "no {expected} in:\n{said}");
    }
    assert!(folder.path().join("grip/grip.svg").exists());
    for wide in said.lines().filter(|line| line.chars().count() > 80) {
        println!("wider than 80 columns: {wide}");
    }
}
