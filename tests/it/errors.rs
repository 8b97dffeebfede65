//! Bad input, bad places and bad days: each is told in plain words, with the right exit status, and loses nothing.
//!
//! What is told is in `snapshots/errors`. Every failure is also asked for as JSON, where it has one shape.

use std::fs;
use std::process::Command;
use std::time::Duration;

use revisant_tests::site::{Ran, Running, Site};
use revisant_tests::small::{self, FAULTY, PLAN, ROSTER, a_good_day_files_everything, all_of_it, filed};
use rusqlite::Connection;

use crate::PROGRAMS;

/// A command that must fail with this exit status, in words and as JSON; both leave standard output empty.
fn failing(site: &Site, code: i32, args: &[&str]) -> Ran {
    let ran = site.run(args);
    assert_eq!(ran.code, Some(code), "{}", ran.shown());
    well_behaved(&ran);
    let with_json: Vec<&str> = args.iter().copied().chain(["--json"]).collect();
    let json = site.run(&with_json);
    assert_eq!(json.code, Some(code), "{}", json.shown());
    assert_eq!(json.stdout, "", "{}", json.shown());
    json.error();
    ran
}

/// No panic, no debug dump of a Rust value, nothing on standard output.
fn well_behaved(ran: &Ran) {
    let text = ran.shown();
    for sign in ["panicked", "RUST_BACKTRACE", "Some(", "Err(", "Error {", "NaN"] {
        assert!(!text.contains(sign), "{text}");
    }
    assert_eq!(ran.stdout, "", "{text}");
    assert!(ran.stderr.starts_with("revisant: ") || ran.stderr.contains("\nrevisant: "), "{text}");
}

/// A family of failures in one snapshot.
fn told(site: &Site, name: &str, failures: &[(i32, &[&str])]) {
    let shown: Vec<String> = failures.iter().map(|(code, args)| failing(site, *code, args).shown()).collect();
    revisant_tests::snapshot::check(&format!("errors/{name}"), &site.redact(&shown.join("\n")));
}

fn collected() -> Site {
    let site = small::lay_out(PROGRAMS);
    a_good_day_files_everything(&site);
    site
}

fn database(site: &Site) -> std::path::PathBuf {
    site.path("records/records.sqlite")
}

// ---- the plan ----

#[test]
fn a_plan_with_ten_faults_reports_ten() {
    let site = small::lay_out(PROGRAMS);
    let plan = concat!(env!("CARGO_MANIFEST_DIR"), "/../schema/tests/plans/unsound/ten-faults.toml");
    site.write("study.toml", fs::read(plan).expect("the plan with ten faults"));
    told(&site, "ten-faults", &[(2, &["check"])]);
    let faults = site.run(&["check", "--json"]).error()["faults"].clone();
    assert_eq!(faults.as_array().map(Vec::len), Some(10), "{faults}");
    for fault in faults.as_array().into_iter().flatten() {
        assert!(fault["line"].as_u64() > Some(0) && fault["column"].as_u64() > Some(0), "{fault}");
    }
    assert!(!site.path("records").exists(), "an unsound plan made records");
    site.write("study.toml", PLAN);
    a_good_day_files_everything(&site);
}

#[test]
fn a_plan_that_is_not_there_or_not_toml() {
    let site = small::lay_out(PROGRAMS);
    site.write("empty/nothing.txt", "");
    site.write("broken/study.toml", "[study\ncode = ");
    let failures: [(i32, &[&str]); 5] = [
        (2, &["check", "--study", "nowhere"]),
        (2, &["check", "--study", "empty"]),
        (2, &["check", "--study", "roster.csv"]),
        (2, &["check", "--study", "broken"]),
        (2, &["roster", "import", "roster.csv", "--study", "broken", "--why", "enrolments"]),
    ];
    told(&site, "no-plan", &failures);
    a_good_day_files_everything(&site);
}

#[test]
fn a_changed_plan_that_would_give_readings_another_meaning_is_refused() {
    let site = collected();
    site.write("study.toml", PLAN.replace(r#"unit = "kg""#, r#"unit = "[lb_av]""#));
    told(&site, "changed-meaning", &[(2, &["collect"])]);
    site.write("study.toml", PLAN.replace("column = \"Grip\"\n", "column = \"Grip\"\nunit = { code = \"[lb_av]\" }\n"));
    told(&site, "changed-reader", &[(2, &["collect"])]);
    site.write("study.toml", PLAN.replace("plausible", "plausibel"));
    told(&site, "changed-to-unsound", &[(2, &["collect"])]);
    assert_eq!(filed(&site), all_of_it(), "what is filed stays readable meanwhile");
    site.write("study.toml", PLAN);
    a_good_day_files_everything(&site);
}

// ---- the roster ----

#[test]
fn rosters_with_faults_change_nothing() {
    let site = small::lay_out(PROGRAMS);
    let rosters = [
        ("twice", "subject,enrolled,withdrawn,sex\nW-01,2026-01-05,,F\nw-01 ,2026-01-06,,F\n"),
        ("dates", "subject,enrolled,withdrawn\nW-01,05/01/2026,\nW-02,2026-02-30,\nW-03,2026-02-03,2026-01-01\n"),
        ("column", "subject,enroled,withdrawn,colour\nW-01,2026-01-05,,red\n"),
        ("no-subject", "enrolled,withdrawn\n2026-01-05,\n"),
        ("level", "subject,enrolled,withdrawn,sex\nW-01,2026-01-05,,X\n"),
        ("pattern", "subject,enrolled,withdrawn\nWALK-1,2026-01-05,\n,2026-01-05,\n"),
        ("empty", ""),
    ];
    let mut names = vec!["nowhere.csv".to_owned(), "latin.csv".to_owned()];
    site.write("latin.csv", b"subject,enrolled,withdrawn\nW-01,2026-01-05,\xe9\n");
    for (name, text) in rosters {
        site.write(format!("{name}.csv"), text);
        names.push(format!("{name}.csv"));
    }
    let commands: Vec<[&str; 5]> =
        names.iter().map(|name| ["roster", "import", name.as_str(), "--why", "enrolments"]).collect();
    let failures: Vec<(i32, &[&str])> = commands.iter().map(|args| (1, args.as_slice())).collect();
    told(&site, "roster", &failures);
    assert!(!site.path("records").exists(), "a roster with faults left a trace");
    a_good_day_files_everything(&site);
}

#[test]
fn a_changed_cell_of_the_roster_owes_a_reason() {
    let site = collected();
    site.write("roster.csv", ROSTER.replace("W-01,2026-01-05,,F", "W-01,2026-01-05,,M"));
    let failures: [(i32, &[&str]); 4] = [
        (1, &["roster", "import", "roster.csv"]),
        (2, &["roster", "import", "roster.csv", "--why", "  "]),
        (1, &["roster", "add", "W-01", "--enrolled", "2026-01-05", "--why", "again"]),
        (1, &["roster", "withdraw", "W-77", "--on", "2026-02-01", "--data", "keep", "--why", "moved away"]),
    ];
    told(&site, "roster-reason", &failures);
    site.write("roster.csv", ROSTER);
    a_good_day_files_everything(&site);
}

// ---- what is asked for does not exist ----

#[test]
fn what_does_not_exist() {
    let site = collected();
    let failures: [(i32, &[&str]); 17] = [
        (1, &["holds", "show", "99"]),
        (1, &["holds", "decide", "99", "--as-it-stands", "--why", "looked at it"]),
        (1, &["holds", "dismiss", "99", "--why", "looked at it"]),
        (1, &["readings", "--subject", "W-77"]),
        (1, &["readings", "--measure", "grap"]),
        (1, &["readings", "--visit", "week-9"]),
        (1, &["readings", "--cut", "interim-1"]),
        (1, &["strike", "812", "--why", "wrong position"]),
        (1, &["restore", "1", "--why", "right after all"]),
        (1, &["amend", "reading", "812", "--value", "31", "--why", "misread"]),
        (1, &["amend", "session", "812", "--subject", "W-02", "--why", "swapped"]),
        (1, &["provenance", "812"]),
        (1, &["account", "W-01", "week-9", "--why", "ill"]),
        (1, &["account", "W-77", "week-4", "--why", "ill"]),
        (1, &["cut", "compare", "one", "other"]),
        (1, &["analyse", "grip-over-vists"]),
        (
            1,
            &[
                "enter",
                "--subject",
                "W-01",
                "--measure",
                "grap",
                "--value",
                "31",
                "--taken-at",
                "2026-03-02",
                "--why",
                "tape",
            ],
        ),
    ];
    told(&site, "not-there", &failures);
    a_good_day_files_everything(&site);
}

#[test]
fn before_there_are_records() {
    let site = small::lay_out(PROGRAMS);
    let failures: Vec<(i32, &[&str])> = vec![
        (1, &["readings"]),
        (1, &["holds"]),
        (1, &["status"]),
        (1, &["completeness"]),
        (1, &["due"]),
        (1, &["trail", "verify"]),
        (1, &["analyse", "grip-over-visits"]),
        (1, &["cut", "make", "first", "--why", "a look"]),
    ];
    told(&site, "no-records", &failures);
    assert!(!site.path("records").exists(), "asking made records");
    a_good_day_files_everything(&site);
}

#[test]
fn options_that_are_not_understood() {
    let site = collected();
    let failures: [(i32, &[&str]); 9] = [
        (2, &["colect"]),
        (2, &["readings", "--subjct", "W-01"]),
        (2, &["readings", "--as-of", "yesterday"]),
        (2, &["completeness", "--on", "2026-02-30"]),
        (2, &["readings", "--cut", "a", "--as-of", "2026-03-01"]),
        (2, &["strike", "1"]),
        (2, &["strike", "1", "--why", ""]),
        (2, &["cut", "make", "Interim 1", "--why", "a look"]),
        (2, &["roster", "withdraw", "W-01", "--on", "soon", "--data", "keep", "--why", "moved away"]),
    ];
    told(&site, "usage", &failures);
    a_good_day_files_everything(&site);
}

#[test]
fn answers_of_the_wrong_kind_decide_nothing() {
    let site = collected();
    site.drop_export(FAULTY.0, FAULTY.1);
    site.collect();
    let held = site.holds();
    let number = |reason: &str| {
        let hold = held.iter().find(|hold| hold["reason"] == reason).unwrap_or_else(|| panic!("no {reason}: {held:?}"));
        hold["hold"].to_string()
    };
    let (subject, visit) = (number("unknown-subject"), number("unknown-visit"));
    let (unreadable, implausible) = (number("unreadable-value"), number("implausible-value"));
    let failures: [(i32, &[&str]); 9] = [
        (2, &["holds", "decide", &subject, "--visit", "week-8", "--why", "misread"]),
        (1, &["holds", "decide", &subject, "--subject", "W-77", "--why", "misread"]),
        (1, &["holds", "decide", &visit, "--visit", "week-7", "--why", "misread"]),
        (2, &["holds", "decide", &unreadable, "--as-it-stands", "--why", "misread"]),
        (1, &["holds", "decide", &unreadable, "--value", "3O", "--why", "misread"]),
        (2, &["holds", "decide", &implausible, "--keep-old", "--why", "misread"]),
        (2, &["holds", "decide", &implausible, "--as-it-stands"]),
        (2, &["holds", "decide", &implausible, "--why", "misread"]),
        (2, &["holds", "decide", &implausible, "--as-it-stands", "--all-like-it", "7", "--why", "misread"]),
    ];
    told(&site, "wrong-answer", &failures);
    assert_eq!(site.holds(), held, "an answer of the wrong kind changed a hold");
    site.ok(&["holds", "decide", &implausible, "--as-it-stands", "--why", "a strong man"]);
    told(&site, "decided-twice", &[(1, &["holds", "decide", &implausible, "--as-it-stands", "--why", "a strong man"])]);
    assert_eq!(site.holds().len(), 3);
    assert_eq!(filed(&site).len(), all_of_it().len() + 1);
}

// ---- the records ----

#[test]
fn records_made_by_a_newer_program_are_left_alone() {
    let site = collected();
    let version = |to: i64| {
        let records = Connection::open(database(&site)).expect("the records");
        records.pragma_update(None, "user_version", to).expect("another version");
    };
    let known: i64 = Connection::open(database(&site))
        .and_then(|records| records.pragma_query_value(None, "user_version", |row| row.get(0)))
        .expect("the layout's number");
    version(999);
    let before = fs::read(database(&site)).expect("the records");
    told(&site, "newer-records", &[(1, &["collect"]), (1, &["readings"])]);
    assert!(fs::read(database(&site)).expect("the records") == before, "newer records were touched");
    version(known);
    a_good_day_files_everything(&site);
}

#[test]
fn a_file_that_is_not_records_is_left_alone() {
    let site = small::lay_out(PROGRAMS);
    site.write("records/records.sqlite", "Subject;Grip\nW-01;31.5\n".repeat(200));
    let before = fs::read(database(&site)).expect("the file");
    told(&site, "not-records", &[(1, &["roster", "import", "roster.csv", "--why", "x"]), (1, &["readings"])]);
    assert!(fs::read(database(&site)).expect("the file") == before, "a foreign file was touched");

    fs::remove_file(database(&site)).expect("the file removed");
    let other = Connection::open(database(&site)).expect("another program's database");
    other.execute_batch("CREATE TABLE addresses (name TEXT)").expect("its table");
    drop(other);
    told(&site, "another-database", &[(1, &["roster", "import", "roster.csv", "--why", "x"])]);
    fs::remove_dir_all(site.path("records")).expect("moved away");
    a_good_day_files_everything(&site);
}

#[test]
fn damaged_records_are_said_to_be_damaged() {
    let site = collected();
    // Pages in the middle, as a failing disk leaves them; the head of the file still says what it is.
    let mut bytes = fs::read(database(&site)).expect("the records");
    let (from, to) = (4096, bytes.len() / 4096 * 4096);
    bytes[from..to].fill(0x5a);
    fs::write(database(&site), bytes).expect("damage");
    for side in ["records/records.sqlite-wal", "records/records.sqlite-shm"] {
        // Where there is none, there is nothing that could heal the damage.
        let _ = fs::remove_file(site.path(side));
    }
    told(&site, "damaged-records", &[(1, &["readings"]), (1, &["collect"])]);
}

#[test]
fn a_file_in_place_of_the_records_folder() {
    let site = small::lay_out(PROGRAMS);
    site.write("records", "not a folder");
    told(&site, "no-folder", &[(1, &["roster", "import", "roster.csv", "--why", "x"]), (1, &["readings"])]);
    fs::remove_file(site.path("records")).expect("moved away");
    a_good_day_files_everything(&site);
}

#[test]
fn locked_records_are_waited_for_and_then_reported() {
    let site = small::lay_out(PROGRAMS);
    site.import_roster();
    let other = Connection::open(database(&site)).expect("another program");
    other.execute_batch("BEGIN IMMEDIATE").expect("the lock");
    // Both at once: each waits as long as a command waits.
    let words = site.command(&["collect"]);
    let json = std::thread::scope(|scope| {
        let json =
            scope.spawn(|| site.run(&["roster", "add", "W-05", "--enrolled", "2026-01-08", "--why", "late", "--json"]));
        let ran = Ran::of(&["collect"], words);
        assert_eq!(ran.code, Some(1), "{}", ran.shown());
        well_behaved(&ran);
        site.check_snapshot("errors/locked", &ran);
        json.join().expect("the other command")
    });
    assert_eq!(json.code, Some(1), "{}", json.shown());
    assert_eq!(json.error()["kind"], "busy", "{}", json.shown());
    assert!(site.readings().is_empty(), "reading does not wait for a writer");
    other.execute_batch("ROLLBACK").expect("the lock given back");
    a_good_day_files_everything(&site);
}

#[test]
fn a_short_wait_for_another_writer_is_no_failure() {
    let site = small::lay_out(PROGRAMS);
    site.import_roster();
    let path = database(&site);
    let (locked, wait) = std::sync::mpsc::channel();
    let other = std::thread::spawn(move || {
        let other = Connection::open(path).expect("another program");
        other.execute_batch("BEGIN IMMEDIATE").expect("the lock");
        locked.send(()).expect("somebody waits");
        std::thread::sleep(Duration::from_millis(500));
        other.execute_batch("ROLLBACK").expect("the lock given back");
    });
    wait.recv().expect("the lock");
    a_good_day_files_everything(&site);
    other.join().expect("the other program");
}

#[test]
fn only_one_program_collects() {
    let site = small::lay_out(PROGRAMS);
    site.import_roster();
    let lock = fs::File::options().write(true).create(true).truncate(true).open(site.path("records/intake.lock"));
    let mut lock = lock.expect("the lock's file");
    std::io::Write::write_all(&mut lock, b"revisant 0.1.0, process 812").expect("its note");
    lock.lock().expect("the lock");
    told(&site, "collected-elsewhere", &[(1, &["collect"])]);
    drop(lock);
    a_good_day_files_everything(&site);
}

#[test]
fn a_service_that_cannot_start_says_why() {
    let site = small::lay_out(PROGRAMS);
    site.write("empty/nothing.txt", "");
    let mut shown: Vec<String> = Vec::new();
    let mut fails = |code: i32, args: &[&str]| {
        let ran = site.service_fails(args);
        assert_eq!(ran.code, Some(code), "{}", ran.shown());
        assert!(!ran.stderr.contains("panicked"), "{}", ran.shown());
        assert_eq!(ran.stdout, "", "{}", ran.shown());
        shown.push(site.redact(&ran.shown()));
    };
    fails(2, &[]);
    fails(1, &["--study", "nowhere"]);
    fails(1, &["--study", "empty"]);
    site.import_roster();
    let service = site.serve();
    fails(1, &["--study", "."]);
    // What the running one does is not disturbed.
    site.wait_until_filed(small::EXPORTS.len());
    told(&site, "collected-by-the-service", &[(1, &["collect"])]);
    service.stop();
    revisant_tests::snapshot::check("errors/service", &shown.join("\n"));
    a_good_day_files_everything(&site);
}

#[test]
fn a_service_waits_for_a_sound_plan() {
    let site = small::lay_out(PROGRAMS);
    site.write("study.toml", PLAN.replace("plausible", "plausibel"));
    let service = Running(site.service().spawn().expect("the service starts"));
    let log = || fs::read_to_string(site.path("revisantd.log")).unwrap_or_default();
    site.wait_until("the fault is in the log", || log().contains("plausibel"));
    site.write("study.toml", PLAN);
    site.import_roster();
    site.wait_until_filed(small::EXPORTS.len());
    // Unsound again: the last sound one stays in force, and what comes is filed by it.
    site.write("study.toml", "[study");
    site.drop_export(FAULTY.0, FAULTY.1);
    site.wait_until("the odd export is held", || site.holds().len() == 4);
    site.write("study.toml", PLAN);
    service.stop();
    assert_eq!(filed(&site), all_of_it());
}

/// Runs a script in a mount namespace of its own, where it may mount without being asked for rights outside. `None` where
/// the machine does not allow that.
fn apart(site: &Site, script: &str) -> Option<Ran> {
    let apart = |script: &str| {
        let mut command = Command::new("unshare");
        command.args(["--user", "--map-root-user", "--mount", "sh", "-euc", script]);
        command.current_dir(site.study()).env("REVISANT", PROGRAMS.revisant).env("NO_COLOR", "1");
        command
    };
    let probe = apart("mount -t tmpfs tmpfs exports").output();
    if !probe.is_ok_and(|output| output.status.success()) {
        eprintln!("not checked here: this machine allows no mounts of one's own");
        return None;
    }
    Some(Ran::of(&["(script)"], apart(script)))
}

/// One `collect` that fails in bad surroundings; its words and status are left in files.
const COLLECT_FAILS: &str = r#"
"$REVISANT" collect >words 2>&1 && exit 9 || echo $? >status
"$REVISANT" collect --json >out 2>error && exit 9 || true
"#;

fn told_apart(site: &Site, name: &str, kind: &str) {
    let words = fs::read_to_string(site.path("words")).expect("its words");
    let status = fs::read_to_string(site.path("status")).expect("its exit status");
    let ran = Ran {
        program: "revisant",
        args: vec!["collect".into()],
        code: status.trim().parse().ok(),
        stdout: String::new(),
        stderr: words,
    };
    well_behaved(&ran);
    assert_eq!(ran.code, Some(1), "{}", ran.shown());
    site.check_snapshot(&format!("errors/{name}"), &ran);
    let error = fs::read_to_string(site.path("error")).expect("its failure as JSON");
    let json = Ran { stderr: error, ..ran };
    assert_eq!(json.error()["kind"], kind, "{}", json.shown());
}

#[test]
fn a_read_only_records_folder() {
    let site = small::lay_out(PROGRAMS);
    site.import_roster();
    let script = format!("mount --bind records records\nmount -o remount,ro,bind records\n{COLLECT_FAILS}");
    let Some(ran) = apart(&site, &script) else { return };
    assert_eq!(ran.code, Some(0), "{}", ran.shown());
    told_apart(&site, "read-only", "read-only");
    a_good_day_files_everything(&site);
}

#[test]
fn a_full_disk() {
    let site = small::lay_out(PROGRAMS);
    // An export that does not compress, larger than what is left of the disk.
    let mut chance = revisant_tests::chance::Chance::new(1908);
    let mut large = small::EXPORTS[2].1.to_owned();
    for minute in 0..40_000_u64 {
        let (subject, noise) = (1 + chance.below(4), chance.draw());
        large.push_str(&format!("W-0{subject},week-8,,,{noise:x}{minute}\n"));
    }
    site.drop_export(small::EXPORTS[2].0, &large);
    site.import_roster();
    // The records move to a disk of their own, which they nearly fill; and back when there is room again.
    let script = format!(
        "mkdir disk\nmount -t tmpfs -o size=700k tmpfs disk\ncp -a records/. disk/\nmount --bind disk records\n{COLLECT_FAILS}\
         \"$REVISANT\" trail verify --json >verified\n\"$REVISANT\" readings --json >kept\n\
         mount -o remount,size=64m disk\n\"$REVISANT\" collect --json >good\n\
         umount records\ncp -a disk/. records/\n"
    );
    let Some(ran) = apart(&site, &script) else { return };
    assert_eq!(ran.code, Some(0), "{}", ran.shown());
    told_apart(&site, "full-disk", "disk-full");
    let said = |name: &str| -> serde_json::Value {
        serde_json::from_slice(&fs::read(site.path(name)).expect("what was said")).expect("JSON")
    };
    assert_eq!(said("verified")["sound"], true);
    let kept = said("kept").as_array().map_or(0, Vec::len);
    let filed_later = said("good")["readings"]["filed"].as_u64();
    assert_eq!(kept as u64 + filed_later.expect("a number"), 12, "filed once, before or after");
    a_good_day_files_everything(&site);
}

// ---- exports ----

#[test]
fn exports_that_cannot_be_read_are_kept_and_shown() {
    let site = small::lay_out(PROGRAMS);
    site.drop_export("exports/dyn/bytes.csv", [0u8, 159, 146, 150, 255, 254, 0, 0, 1]);
    site.drop_export("exports/dyn/other.csv", "Name;Force\nW-01;31\n");
    site.drop_export("exports/dyn/nothing.csv", "");
    site.drop_export("exports/dyn/~$january.csv", "lock");
    site.drop_export("exports/dyn/notes.txt", "The battery was changed on 6 January.\n");
    site.drop_export("exports/dyn/cut.csv", "Subject,Visit,Taken,Grip\nW-01,week-8,2026-03-02 09:05,33");
    std::os::unix::fs::symlink("nowhere", site.path("exports/dyn/link.csv")).expect("a link to nothing");
    site.import_roster();
    let collect = site.ok(&["collect"]);
    let status = site.ok(&["status"]);
    let holds = site.ok(&["holds"]);
    let shown = format!("{}\n{}\n{}", collect.shown(), status.shown(), holds.shown());
    let dates = regex::Regex::new(r"\d{4}-\d\d-\d\d \d\d:\d\d( [A-Z]+)?").expect("a pattern");
    revisant_tests::snapshot::check("errors/odd-exports", &dates.replace_all(&site.redact(&shown), "TIME"));
    assert_eq!(filed(&site), all_of_it());
}

#[test]
fn a_reader_of_results_that_goes_away_is_no_failure() {
    let site = collected();
    let program = PROGRAMS.revisant;
    let mut shell = Command::new("sh");
    shell.args(["-c", &format!("('{program}' readings; echo $? >status) | true")]).current_dir(site.study());
    let ran = Ran::of(&["(readings, read by nobody)"], shell);
    assert_eq!(ran.stderr, "");
    assert_eq!(fs::read_to_string(site.path("status")).expect("the exit status").trim(), "0");
}
