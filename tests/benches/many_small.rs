//! 5,000 small exports filed by one `collect`, against a bare loop that writes, fsyncs and renames the same files,
//! alternately in the same run. Wanted: at least a fifth of the bare loop's rate.
//!
//! `cargo bench -p revisant-tests --bench many_small`
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic, reason = "a bench that cannot go on stops")]

use std::fs::{self, File};
use std::io::Write;
use std::path::Path;
use std::process::ExitCode;
use std::time::Instant;

use revisant_tests::bench::{child, machine, median, revisant};
use serde_json::Value as Json;

const EXPORTS: u32 = 5_000;
const SUBJECTS: u32 = 250;
const ROWS: u32 = 12;
const ROUNDS: usize = 3;

const PLAN: &str = r#"
[study]
code = "MANY"
title = "A file for each squeeze test"
time_zone = "Europe/London"

[subject]
pattern = 'S-\d{3}'
normalise = ["trim"]
anchor = "enrolment"

[[measure]]
code = "grip"
unit = "kg"
plausible = [0, 95]
replicates = 12

[[visit]]
code = "first"
day = 0
window = [0, 30]

[[instrument]]
code = "grip"
folder = "exports/grip"
rest = "0s"

[instrument.reader]
format = "delimited"
delimiter = ";"
header = { starts_with = "Trial" }
subject = { preamble = "Subject" }
taken_at = { column = "Taken", format = "%Y-%m-%d %H:%M:%S" }

[[instrument.reader.value]]
measure = "grip"
column = "Grip"
"#;

fn main() -> ExitCode {
    if let Some(code) = child() {
        return code;
    }
    println!("{}; {EXPORTS} exports of {} bytes", machine(), export(0).len());
    let (mut ours, mut bare) = (vec![], vec![]);
    for round in 1..=ROUNDS {
        let folder = tempfile::tempdir().expect("a temporary folder");
        let study = folder.path();
        let loop_seconds = bare_loop(&study.join("bare"));
        lay_out(study);
        revisant(study, &["roster", "import", study.join("roster.csv").to_str().expect("UTF-8"), "--why", "bench"]);
        let collect = revisant(study, &["collect", "--json"]);
        let said: Json = serde_json::from_str(&collect.stdout).expect("JSON");
        assert_eq!(said["readings"]["filed"], EXPORTS * ROWS, "{said}");
        println!(
            "round {round}: collect {:.2} s ({:.0} exports a second), bare loop {loop_seconds:.2} s, ratio of rates {:.2}; \
             peak {:.0} MiB",
            collect.seconds,
            f64::from(EXPORTS) / collect.seconds,
            loop_seconds / collect.seconds,
            collect.mib.unwrap_or(f64::NAN),
        );
        ours.push(collect.seconds);
        bare.push(loop_seconds);
    }
    println!("many_small: ratio of median rates {:.2} (wanted 0.2 or more)", median(bare) / median(ours));
    ExitCode::SUCCESS
}

fn lay_out(study: &Path) {
    fs::create_dir_all(study.join("exports/grip")).expect("the export folder");
    fs::write(study.join("study.toml"), PLAN).expect("the plan");
    let mut roster = "subject,enrolled,withdrawn\n".to_owned();
    (0..SUBJECTS).for_each(|subject| roster.push_str(&format!("S-{subject:03},2024-01-08,\n")));
    fs::write(study.join("roster.csv"), roster).expect("the roster");
    for number in 0..EXPORTS {
        fs::write(study.join(format!("exports/grip/test-{number:04}.csv")), export(number)).expect("an export");
    }
}

/// One test: a preamble and twelve squeezes, on a day of its own for each of a subject's twenty.
fn export(number: u32) -> String {
    let (subject, day) = (number % SUBJECTS, number / SUBJECTS);
    let day = chrono::NaiveDate::from_ymd_opt(2024, 1, 8).expect("a date") + chrono::Days::new(u64::from(day));
    let start = day.and_hms_opt(9, subject % 60, 0).expect("a time");
    let mut export = format!("Device: grip tester\nSubject: S-{subject:03}\n\nTrial;Taken;Grip\n");
    for trial in 1..=ROWS {
        let at = start + chrono::TimeDelta::seconds(i64::from(trial * 3));
        let tenths = 150 + (number * 7 + trial * 31) % 400;
        export.push_str(&format!("{trial};{at};{}.{}\n", tenths / 10, tenths % 10));
    }
    export
}

/// The yardstick: what any program must at least do to keep as many files safely.
fn bare_loop(folder: &Path) -> f64 {
    fs::create_dir_all(folder).expect("the bare loop's folder");
    let exports: Vec<String> = (0..EXPORTS).map(export).collect();
    let start = Instant::now();
    for (number, export) in exports.iter().enumerate() {
        let making = folder.join(".new");
        let mut file = File::create(&making).expect("a file");
        file.write_all(export.as_bytes()).expect("its bytes");
        file.sync_all().expect("its bytes on the disk");
        drop(file);
        fs::rename(&making, folder.join(format!("test-{number:04}.csv"))).expect("its name");
    }
    start.elapsed().as_secs_f64()
}
