//! One export of 1,000,000 rows filed by `collect`, against the SQLite shell's own import of the same rows into a bare
//! table with three indexes, alternately in the same run. Wanted: at most 3 times the time, under 200 MB.
//!
//! `cargo bench -p revisant-tests --bench million_rows`
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic, reason = "a bench that cannot go on stops")]

use std::fmt::Write as _;
use std::fs;
use std::path::Path;
use std::process::{Command, ExitCode, Stdio};
use std::time::Instant;

use revisant_tests::bench::{child, machine, median, revisant};
use serde_json::Value as Json;

const SUBJECTS: u32 = 500;
const VISITS: u32 = 20;
const TRIALS: u32 = 100;
const ROUNDS: usize = 3;

fn main() -> ExitCode {
    if let Some(code) = child() {
        return code;
    }
    let (plan, roster, export) = (plan(), roster(), export());
    println!("{}; {} rows, {:.1} MB", machine(), SUBJECTS * VISITS * TRIALS, export.len() as f64 / 1e6);
    let (mut ours, mut bare, mut memory, mut busy) = (vec![], vec![], vec![], vec![]);
    for round in 1..=ROUNDS {
        let folder = tempfile::tempdir().expect("a temporary folder");
        let study = folder.path();
        fs::create_dir_all(study.join("exports/grip")).expect("the export folder");
        fs::write(study.join("study.toml"), &plan).expect("the plan");
        fs::write(study.join("roster.csv"), &roster).expect("the roster");
        fs::write(study.join("exports/grip/all.csv"), &export).expect("the export");
        let (import, import_busy) = import(study);
        revisant(study, &["roster", "import", study.join("roster.csv").to_str().expect("UTF-8"), "--why", "bench"]);
        let collect = revisant(study, &["collect", "--json"]);
        let said: Json = serde_json::from_str(&collect.stdout).expect("JSON");
        assert_eq!(said["readings"]["filed"], SUBJECTS * VISITS * TRIALS, "{said}");
        assert_eq!(said["readings"]["held"], 0, "{said}");
        let size = fs::metadata(study.join("records/records.sqlite")).map_or(0, |meta| meta.len());
        println!(
            "round {round}: collect {:.2} s ({:.2} s busy), bare import {import:.2} s ({:.2} s busy), ratio {:.2}; \
             peak {:.0} MiB; records {:.0} MB",
            collect.seconds,
            collect.busy.unwrap_or(f64::NAN),
            import_busy.unwrap_or(f64::NAN),
            collect.seconds / import,
            collect.mib.unwrap_or(f64::NAN),
            size as f64 / 1e6
        );
        ours.push(collect.seconds);
        bare.push(import);
        memory.extend(collect.mib);
        busy.extend(collect.busy.zip(import_busy).map(|(ours, bare)| ours / bare));
    }
    let ratio = median(ours) / median(bare);
    let peak = memory.into_iter().fold(0.0, f64::max);
    println!("million_rows: ratio of medians {ratio:.2} (wanted 3.0 or less), peak {peak:.0} MiB (wanted under 190)");
    if !busy.is_empty() {
        println!("million_rows: median ratio of time on the processors {:.2}", median(busy));
    }
    ExitCode::SUCCESS
}

fn plan() -> String {
    let mut plan = format!(
        "[study]\ncode = \"ROWS\"\ntitle = \"A million squeezes\"\ntime_zone = \"Europe/London\"\n\n\
         [subject]\npattern = 'S-\\d{{3}}'\nnormalise = [\"trim\"]\nanchor = \"enrolment\"\n\n\
         [[measure]]\ncode = \"grip\"\nunit = \"kg\"\nplausible = [0, 95]\nreplicates = {TRIALS}\n"
    );
    for visit in 0..VISITS {
        let _ = write!(plan, "\n[[visit]]\ncode = \"week-{visit}\"\nday = {}\nwindow = [-3, 3]\n", visit * 7);
    }
    plan.push_str(
        "\n[[instrument]]\ncode = \"grip\"\nfolder = \"exports/grip\"\nrest = \"0s\"\n\n\
         [instrument.reader]\nformat = \"delimited\"\ndelimiter = \",\"\nheader = { row = 1 }\n\
         subject = { column = \"Subject\" }\nvisit = { column = \"Visit\" }\n\
         taken_at = { column = \"Taken\", format = \"%Y-%m-%d %H:%M:%S\" }\nreplicate = { column = \"Trial\" }\n\n\
         [[instrument.reader.value]]\nmeasure = \"grip\"\ncolumn = \"Grip\"\n",
    );
    plan
}

fn roster() -> String {
    let mut roster = "subject,enrolled,withdrawn\n".to_owned();
    (0..SUBJECTS).for_each(|subject| roster.push_str(&format!("S-{subject:03},2024-01-08,\n")));
    roster
}

/// As a logging instrument writes it: week by week, subject by subject, a squeeze every ten seconds.
fn export() -> String {
    let day0 = chrono::NaiveDate::from_ymd_opt(2024, 1, 8).expect("a date");
    let mut export = "Subject,Visit,Taken,Trial,Grip\n".to_owned();
    for visit in 0..VISITS {
        for subject in 0..SUBJECTS {
            let day = day0 + chrono::Days::new(u64::from(visit * 7 + subject % 3));
            let start = day.and_hms_opt(9, subject % 60, 0).expect("a time");
            for trial in 1..=TRIALS {
                let at = start + chrono::TimeDelta::seconds(i64::from(trial * 10));
                let tenths = 150 + (subject * 7 + visit * 13 + trial * 31) % 400;
                let (whole, part) = (tenths / 10, tenths % 10);
                let _ = writeln!(export, "S-{subject:03},week-{visit},{at},{trial},{whole}.{part}");
            }
        }
    }
    export
}

/// The yardstick: the shell's `.import`; where there is no shell, the same inserts in one transaction.
fn import(study: &Path) -> (f64, Option<f64>) {
    const TABLE: &str = "CREATE TABLE bare (subject TEXT, visit TEXT, taken TEXT, trial INTEGER, grip REAL);\
         CREATE INDEX bare_subject ON bare (subject, visit); CREATE INDEX bare_taken ON bare (taken);\
         CREATE INDEX bare_grip ON bare (grip);";
    let (file, export) = (study.join("bare.sqlite"), study.join("exports/grip/all.csv"));
    let start = Instant::now();
    // `times` prints what the shell's children were busy: the one line more that POSIX gives for it.
    let shell = Command::new("sh")
        .args(["-ec", "command -v sqlite3 >&2; sqlite3 \"$0\" \"$1\" '.mode csv' \"$2\"; times"])
        .arg(&file)
        .args([TABLE, &format!(".import --skip 1 {} bare", export.display())])
        .stdin(Stdio::null())
        .output()
        .expect("a shell");
    let busy = match shell.status.success() {
        true => busy(&String::from_utf8_lossy(&shell.stdout)),
        false => {
            assert!(shell.stderr.is_empty(), "the SQLite shell failed: {}", String::from_utf8_lossy(&shell.stderr));
            import_without_shell(&file, &export, TABLE);
            None
        }
    };
    let seconds = start.elapsed().as_secs_f64();
    let rows: u32 = rusqlite::Connection::open(&file)
        .and_then(|bare| bare.query_row("SELECT count(*) FROM bare", [], |row| row.get(0)))
        .expect("the bare table");
    assert_eq!(rows, SUBJECTS * VISITS * TRIALS);
    (seconds, busy)
}

/// The second line of `times`: user and system time of the children, as 0m6.10s 0m1.20s.
fn busy(times: &str) -> Option<f64> {
    let spans = times.lines().nth(1)?.split_whitespace().map(|span| {
        let (minutes, seconds) = span.strip_suffix('s')?.split_once('m')?;
        Some(minutes.parse::<f64>().ok()? * 60.0 + seconds.parse::<f64>().ok()?)
    });
    spans.sum()
}

fn import_without_shell(file: &Path, export: &Path, table: &str) {
    println!("there is no SQLite shell: its import is done by the library");
    let mut bare = rusqlite::Connection::open(file).expect("the bare table's file");
    bare.execute_batch(table).expect("the bare table");
    let transaction = bare.transaction().expect("a transaction");
    let text = fs::read_to_string(export).expect("the export");
    let mut insert = transaction.prepare("INSERT INTO bare VALUES (?1, ?2, ?3, ?4, ?5)").expect("a statement");
    for line in text.lines().skip(1) {
        insert.execute(rusqlite::params_from_iter(line.split(','))).expect("a row");
    }
    drop(insert);
    transaction.commit().expect("the bare rows");
}
