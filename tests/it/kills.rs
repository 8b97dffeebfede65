//! Killed at random moments while exports arrive, and started again: every reading is filed exactly once.

use std::collections::BTreeMap;
use std::fs;
use std::path::{Path, PathBuf};
use std::process::Stdio;
use std::thread;
use std::time::Duration;

use revisant_tests::chance::Chance;
use revisant_tests::site::{Running, Site};

use crate::PROGRAMS;

const SUBJECTS: usize = 100;
const DAYS: usize = 20;
const TRIALS: usize = 3;
const KILLS: usize = 50;

fn plan() -> String {
    let visits: String = (0..DAYS).map(|day| format!("[[visit]]\ncode = \"day-{day}\"\nday = {day}\n\n")).collect();
    format!(
        r#"[study]
code = "KILL"
title = "A squeeze test a day"
time_zone = "Europe/London"

[subject]
pattern = 'K-\d{{3}}'
normalise = ["trim"]
anchor = "enrolment"

[[measure]]
code = "grip"
unit = "kg"
plausible = [0, 95]
replicates = {TRIALS}

{visits}[[instrument]]
code = "grip"
folder = "exports/grip"
files = "*.csv"
rest = "0s"

[instrument.reader]
format = "delimited"
delimiter = ";"
header = {{ starts_with = "Trial" }}
subject = {{ preamble = "Subject" }}
taken_at = {{ column = "Taken", format = "%Y-%m-%d %H:%M:%S" }}

[[instrument.reader.value]]
measure = "grip"
column = "Grip"
"#
    )
}

fn day(day: usize) -> String {
    format!("2026-01-{:02}", 5 + day)
}

/// One export: where it will stand, its bytes, and what has to be filed of it.
struct Export {
    path: PathBuf,
    text: String,
    readings: Vec<String>,
}

fn export(subject: usize, on: usize) -> Export {
    let mut text = format!("Subject: K-{subject:03}\n\nTrial;Taken;Grip\n");
    let mut readings = Vec::new();
    for trial in 1..=TRIALS {
        let tenths = 150 + (subject * 7 + on * 13 + trial * 31) % 400;
        let value = tenths as f64 / 10.0;
        text.push_str(&format!("{trial};{} 09:{:02}:{:02};{value}\n", day(on), subject % 60, trial * 10));
        readings.push(format!("K-{subject:03} day-{on} {trial} {value} current"));
    }
    Export { path: format!("exports/grip/{subject:03}/day-{on:02}.csv").into(), text, readings }
}

/// As instruments write: under a name that is no export's, and then renamed.
fn drop_whole(folder: &Path, export: &Export, bytes: &[u8]) {
    let path = folder.join(&export.path);
    fs::create_dir_all(path.parent().expect("a folder")).expect("the export folder");
    let part = path.with_extension("part");
    fs::write(&part, bytes).expect("an export");
    fs::rename(&part, &path).expect("its name");
}

/// Drops all exports, some of them cut inside their last row at first and completed later.
fn drop_all(folder: &Path, exports: &[Export], mut chance: Chance) {
    let mut cut: Vec<&Export> = Vec::new();
    for (number, export) in exports.iter().enumerate() {
        match chance.below(10) {
            0 => {
                let whole = export.text.as_bytes();
                drop_whole(folder, export, &whole[..whole.len() - 1 - chance.below(12) as usize]);
                cut.push(export);
            }
            _ => drop_whole(folder, export, export.text.as_bytes()),
        }
        if number % 8 == 7 {
            thread::sleep(Duration::from_millis(20));
        }
        if cut.len() > 5 {
            let export = cut.remove(chance.below(cut.len() as u64) as usize);
            drop_whole(folder, export, export.text.as_bytes());
        }
    }
    cut.into_iter().for_each(|export| drop_whole(folder, export, export.text.as_bytes()));
}

/// Starts the service, or a `collect`, as often as is asked, and kills it each time after a random while.
fn kill_again_and_again(site: &Site, chance: &mut Chance) {
    let mut killed = 0;
    while killed < KILLS {
        let mut command = match chance.below(3) {
            0 => site.command(&["collect"]),
            _ => site.service(),
        };
        let child = command.stdout(Stdio::null()).stderr(Stdio::null()).spawn().expect("the program starts");
        let mut running = Running(child);
        // Half of them early, while the records are opened; half at work.
        let longest = if chance.below(2) == 0 { 60 } else { 400 };
        thread::sleep(Duration::from_millis(chance.below(longest)));
        // One that had ended by itself was no kill.
        if running.0.try_wait().expect("the program's state").is_none() {
            running.0.kill().expect("SIGKILL");
            killed += 1;
        }
    }
}

#[test]
fn killed_fifty_times_while_two_thousand_exports_arrive() {
    let mut exports: Vec<Export> =
        (0..SUBJECTS).flat_map(|subject| (0..DAYS).map(move |on| export(subject, on))).collect();
    assert_eq!(exports.len(), 2000);
    let mut chance = Chance::new(50);
    chance.shuffle(&mut exports);
    let roster: String = (0..SUBJECTS).map(|subject| format!("K-{subject:03},{},\n", day(0))).collect();
    let site = Site::with(PROGRAMS, &plan(), &format!("subject,enrolled,withdrawn\n{roster}"));

    let (folder, dropping) = (site.study().to_path_buf(), chance.clone());
    thread::scope(|scope| {
        let dropper = scope.spawn(|| drop_all(&folder, &exports, dropping));
        kill_again_and_again(&site, &mut chance);
        dropper.join().expect("all exports were dropped");
    });
    let service = site.serve();
    site.wait_until_filed(exports.len());
    service.stop();

    let mut times: BTreeMap<String, usize> = BTreeMap::new();
    for reading in site.readings() {
        let word = |field: &str| reading[field].as_str().unwrap_or("-").to_owned();
        let (number, value) = (&reading["replicate"], reading["value"].as_f64().expect("a value"));
        let reading = format!("{} {} {number} {value} {}", word("subject"), word("visit"), word("state"));
        *times.entry(reading).or_default() += 1;
    }
    let wanted: BTreeMap<String, usize> =
        exports.iter().flat_map(|export| &export.readings).map(|reading| (reading.clone(), 1)).collect();
    let missing: Vec<&String> = wanted.keys().filter(|reading| !times.contains_key(*reading)).collect();
    let wrong: Vec<_> = times.iter().filter(|(reading, times)| wanted.get(*reading) != Some(times)).collect();
    assert!(missing.is_empty() && wrong.is_empty(), "missing: {missing:?}\ntoo many or wrong: {wrong:?}");
    assert!(site.holds().is_empty(), "{:?}", site.holds());

    let verified = site.json(&["trail", "verify"]);
    assert_eq!(verified["sound"], true, "{verified}");
    assert_eq!(verified["readings"], 6000, "{verified}");
    let again = site.collect();
    assert_eq!(again["readings"]["filed"], 0, "{again}");
}
