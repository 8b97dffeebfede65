//! What must hold of every study, tried on many small invented ones.
//!
//! The studies are drawn from a fixed seed, so that a failure is the same on every machine.

use std::collections::{BTreeMap, BTreeSet};

use proptest::prelude::*;
use proptest::test_runner::RngSeed;
use revisant_tests::chance::Chance;
use revisant_tests::site::Site;
use serde_json::{Value as Json, json};

use crate::PROGRAMS;

/// When all windows of the generated studies have closed.
const LATER: &str = "2026-06-01";

/// One row of an export.
#[derive(Debug, Clone, PartialEq, Eq)]
struct Row {
    subject: u32,
    visit: &'static str,
    day: u32,
    second: u32,
    value: String,
    note: &'static str,
}

impl Row {
    fn written(&self) -> String {
        let (hour, minute, second) = (9 + self.second / 3600, self.second / 60 % 60, self.second % 60);
        let time = format!("2026-03-{:02} {hour:02}:{minute:02}:{second:02}", 2 + self.day);
        format!("P-{:02};{};{time};{};{}\n", self.subject, self.visit, self.value, self.note)
    }
}

/// The generated part of a study.
#[derive(Debug, Clone)]
struct Study {
    labelled: bool,
    rows: Vec<Row>,
}

const HEADER: &str = "Who;Visit;Taken;Grip;Note\n";

impl Study {
    fn plan(&self, re_export: &str) -> String {
        let visit = if self.labelled { "visit = { column = \"Visit\" }\n" } else { "" };
        format!(
            r#"[study]
code = "PROP"
title = "Invented, many times over"
time_zone = "Europe/London"

[subject]
pattern = 'P-\d{{2}}'
normalise = ["trim"]
anchor = "first"

[[measure]]
code = "grip"
unit = "kg"
plausible = [2, 95]
replicates = 60

[[visit]]
code = "first"
day = 0
window = [0, 1]

[[visit]]
code = "second"
day = 7
window = [-2, 2]
counts = [-3, 3]

[[visit]]
code = "third"
day = 14
window = [-2, 2]

[[instrument]]
code = "dyn"
folder = "exports/dyn"
files = "*.csv"
rest = "0s"
re_export = "{re_export}"

[instrument.reader]
format = "delimited"
delimiter = ";"
header = {{ row = 1 }}
missing = ["", "---"]
subject = {{ column = "Who" }}
{visit}taken_at = {{ column = "Taken", format = "%Y-%m-%d %H:%M:%S" }}

[[instrument.reader.value]]
measure = "grip"
column = "Grip"
"#
        )
    }

    fn site(&self, re_export: &str) -> Site {
        let roster: String = (1..=3).map(|subject| format!("P-{subject:02},2026-03-01,\n")).collect();
        Site::in_memory(PROGRAMS).laid_out(&self.plan(re_export), &format!("subject,enrolled,withdrawn\n{roster}"))
    }
}

fn export(rows: &[Row]) -> String {
    std::iter::once(HEADER.to_owned()).chain(rows.iter().map(Row::written)).collect()
}

/// Values as instruments write them: mostly numbers, now and then something for a person.
fn value() -> impl Strategy<Value = String> {
    prop_oneof![
        8 => (20_u32..900).prop_map(|tenths| format!("{}.{}", tenths / 10, tenths % 10)),
        1 => Just(String::new()),
        1 => Just("---".to_owned()),
        1 => Just("n/a".to_owned()),
        1 => Just("300".to_owned()),
    ]
}

fn study() -> impl Strategy<Value = Study> {
    let label =
        prop_oneof![3 => Just(""), 2 => Just("first"), 2 => Just("second"), 1 => Just("third"), 1 => Just("extra")];
    let note = prop_oneof![4 => Just(""), 1 => Just("müde"), 1 => Just("\"zweimal; links\"")];
    // Subject 4 is on no roster.
    let row = (1_u32..=4, label, 0_u32..20, value(), note);
    (any::<bool>(), prop::collection::vec(row, 1..25)).prop_map(|(labelled, rows)| {
        // Each row at a second of its own: whether equal rows are one reading or two is another question.
        let rows = rows.into_iter().enumerate().map(|(at, (subject, visit, day, value, note))| Row {
            subject,
            visit,
            day,
            second: at as u32 * 7,
            value,
            note,
        });
        Study { labelled, rows: rows.collect() }
    })
}

/// How often each reading is there, by everything about it but its number, its place and its replicate's number.
fn filed(site: &Site) -> BTreeMap<String, usize> {
    let mut times = BTreeMap::new();
    for reading in site.readings() {
        let fields = ["subject", "visit", "off_window", "measure", "value", "as_written", "taken_at", "state"];
        let words: Vec<String> = fields.iter().map(|field| reading[*field].to_string()).collect();
        *times.entry(words.join(" ")).or_default() += 1;
    }
    times
}

/// How often each reason stands open for each row, wherever it stood.
fn held(site: &Site) -> BTreeMap<String, usize> {
    let mut times = BTreeMap::new();
    for hold in site.holds() {
        *times.entry(format!("{} {}", hold["reason"], hold["row"])).or_default() += 1;
    }
    times
}

fn grid(site: &Site) -> Json {
    let mut grid = site.json(&["completeness", "--on", LATER]);
    // Sessions are numbered in the order in which they came.
    for line in grid["subjects"].as_array_mut().into_iter().flatten() {
        for visit in line["visits"].as_array_mut().into_iter().flatten() {
            visit["session"] = Json::Null;
        }
    }
    grid
}

/// Whose readings say what: never anything that the whole export does not say.
fn values(site: &Site) -> BTreeSet<String> {
    let text = |reading: &Json, field: &str| reading[field].as_str().unwrap_or_default().to_owned();
    site.readings()
        .iter()
        .map(|reading| format!("{} {}", text(reading, "subject"), text(reading, "as_written")))
        .collect()
}

/// Every row that has a value is filed once, or held once; none is there twice, and none is lost.
fn each_row_is_there_once(site: &Site, rows: &[Row]) {
    let (readings, holds) = (site.readings(), site.holds());
    for row in rows {
        let written = row.written();
        let text = written.trim_end();
        let second = format!("09:{:02}:{:02}Z", row.second / 60, row.second % 60);
        let stamp = format!("2026-03-{:02}T{second}", 2 + row.day);
        // Summer time had not begun.
        let filed = readings.iter().filter(|reading| reading["taken_at"] == stamp.as_str()).count();
        let held = holds.iter().filter(|hold| hold["row"].as_str().is_some_and(|held| held.trim_end() == text)).count();
        let wanted = usize::from(!matches!(row.value.as_str(), "" | "---"));
        assert_eq!(filed + held, wanted, "{text}: filed {filed} times, held {held} times");
    }
}

/// The lines of every export add up, and there are as many as the file has.
fn lines_add_up(site: &Site) {
    let status = site.json(&["status"]);
    for file in status["files"].as_array().into_iter().flatten().filter(|file| !file["lines"].is_null()) {
        let lines = file["lines"].as_object().expect("an account");
        let parts: u64 =
            lines.iter().filter(|(name, _)| *name != "lines").filter_map(|(_, count)| count.as_u64()).sum();
        let text = std::fs::read(site.path(file["export"].as_str().expect("a path"))).expect("the export");
        let ends = text.iter().filter(|byte| **byte == b'\n').count() as u64;
        let there = ends + u64::from(text.last().is_some_and(|byte| *byte != b'\n'));
        assert_eq!(parts, there, "{file}");
        assert_eq!(lines["lines"], there, "{file}");
    }
}

fn settings(cases: u32, seed: u64) -> ProptestConfig {
    // Shrinking runs whole programs; a smaller study is worth some dozen of them.
    ProptestConfig {
        cases,
        rng_seed: RngSeed::Fixed(seed),
        failure_persistence: None,
        max_shrink_iters: 60,
        ..ProptestConfig::default()
    }
}

/// Rows shared out over some files.
fn shared_out(rows: &[Row], files: usize, chance: &mut Chance) -> Vec<Vec<Row>> {
    let mut shares = vec![Vec::new(); files];
    for row in rows {
        shares[chance.below(files as u64) as usize].push(row.clone());
    }
    shares
}

proptest! {
    #![proptest_config(settings(20, 1))]

    /// Neither the order of files nor that of rows changes what is filed, held or complete.
    #[test]
    fn order_does_not_matter(study in study(), seed in any::<u64>()) {
        let mut chance = Chance::new(seed);
        let mut shares = shared_out(&study.rows, 3, &mut chance);
        let one = study.site("new");
        for (at, share) in shares.iter().enumerate() {
            one.drop_export(format!("exports/dyn/{at}.csv"), export(share));
        }
        one.collect();

        chance.shuffle(&mut shares);
        let other = study.site("new");
        for (at, share) in shares.iter_mut().enumerate() {
            chance.shuffle(share);
            other.drop_export(format!("exports/dyn/other-{at}.csv"), export(share));
        }
        other.collect();
        prop_assert_eq!(filed(&one), filed(&other));
        prop_assert_eq!(held(&one), held(&other));
        prop_assert_eq!(grid(&one), grid(&other));
        lines_add_up(&one);
        lines_add_up(&other);
    }

    /// Collecting again files and holds nothing more, and changes no answer.
    #[test]
    fn collecting_twice_is_collecting_once(study in study()) {
        let site = study.site("new");
        site.drop_export("exports/dyn/all.csv", export(&study.rows));
        let first = site.collect();
        let (readings, holds, before) = (site.readings(), site.holds(), grid(&site));
        let again = site.collect();
        prop_assert_eq!(&again["readings"]["filed"], 0, "{}", first);
        prop_assert_eq!(&again["readings"]["held"], 0, "{}", first);
        prop_assert_eq!(readings, site.readings());
        prop_assert_eq!(holds, site.holds());
        prop_assert_eq!(before, grid(&site));
        // Not even under another name.
        site.drop_export("exports/dyn/copy.csv", export(&study.rows));
        let copied = site.collect();
        prop_assert_eq!(&copied["exports"]["repeat"], 1, "{}", copied);
        prop_assert_eq!(&copied["readings"]["filed"], 0, "{}", copied);
    }

    /// A log that grows, and is exported again and again, comes to what its last export says.
    #[test]
    fn what_is_exported_again_is_filed_once(study in study(), seed in any::<u64>()) {
        let mut chance = Chance::new(seed);
        let site = study.site("grows");
        let mut upto = 0;
        for step in 0.. {
            upto = (upto + 1 + chance.below(10) as usize).min(study.rows.len());
            // Under the same name or a new one.
            let name = if chance.below(2) == 0 { "log.csv".to_owned() } else { format!("log-{step}.csv") };
            site.drop_export(format!("exports/dyn/{name}"), export(&study.rows[..upto]));
            site.collect();
            if upto == study.rows.len() {
                break;
            }
        }
        let whole = study.site("grows");
        whole.drop_export("exports/dyn/log.csv", export(&study.rows));
        whole.collect();
        each_row_is_there_once(&site, &study.rows);
        lines_add_up(&site);
        // With labels, a row is judged by what was known of day 0 when it came.
        if !study.labelled {
            prop_assert_eq!(filed(&site), filed(&whole));
            prop_assert_eq!(held(&site), held(&whole));
            prop_assert_eq!(grid(&site), grid(&whole));
        }
    }

    /// An export cut at any byte is never a wrong whole; completed, it comes to what it says.
    #[test]
    fn an_export_cut_anywhere_and_completed_is_whole(study in study(), cuts in prop::collection::vec(any::<u64>(), 1..4)) {
        let text = export(&study.rows);
        let mut cuts: Vec<usize> = cuts.into_iter().map(|cut| (cut % text.len() as u64) as usize).collect();
        cuts.sort_unstable();
        let whole = study.site("new");
        whole.drop_export("exports/dyn/all.csv", &text);
        whole.collect();
        let said: BTreeSet<String> = study.rows.iter().map(|row| format!("P-{:02} {}", row.subject, row.value)).collect();

        let site = study.site("new");
        for cut in cuts {
            site.drop_export("exports/dyn/all.csv", &text.as_bytes()[..cut]);
            site.collect();
            let so_far = values(&site);
            prop_assert!(so_far.is_subset(&said), "cut at {}: {:?}", cut, so_far.difference(&said));
        }
        site.drop_export("exports/dyn/all.csv", &text);
        site.collect();
        each_row_is_there_once(&site, &study.rows);
        lines_add_up(&site);
        if !study.labelled {
            prop_assert_eq!(filed(&site), filed(&whole));
            prop_assert_eq!(held(&site), held(&whole));
            prop_assert_eq!(grid(&site), grid(&whole));
        }
    }
}

proptest! {
    #![proptest_config(settings(12, 2))]

    /// What was answered before an act is answered again as of then, whatever the act.
    #[test]
    fn the_past_stays_as_it_was(study in study(), acts in prop::collection::vec(0_u8..6, 2..5)) {
        let site = study.site("new");
        let (first, second) = study.rows.split_at(study.rows.len() / 2);
        site.drop_export("exports/dyn/first.csv", export(first));
        site.collect();
        let mut past: Vec<(String, String, [Json; 3])> = Vec::new();
        for (at, act) in acts.iter().enumerate() {
            let name = format!("cut-{at}");
            let cut = site.json(&["cut", "make", &name, "--why", "to look back"]);
            past.push((name, cut["at"].as_str().expect("a moment").to_owned(), answers(&site, &[])));
            take(&site, *act, second);
            for (cut, moment, answered) in &past {
                prop_assert_eq!(answered, &answers(&site, &["--cut", cut]), "after act {}", act);
                prop_assert_eq!(answered, &answers(&site, &["--as-of", moment]), "after act {}", act);
            }
        }
        prop_assert_eq!(&site.json(&["trail", "verify"])["sound"], &json!(true));
    }
}

/// Two rows of one subject: the second is labelled, and came before the day 0 was known by which its label is wrong.
fn labelled_before_day_0(value: &str) -> Study {
    let row =
        |visit, day, second, value: &str| Row { subject: 1, visit, day, second, value: value.to_owned(), note: "" };
    Study { labelled: true, rows: vec![row("second", 16, 0, value), row("first", 2, 7, "70.1")] }
}

#[test]
fn a_filed_row_that_comes_again_is_not_held() {
    for (value, filed_first, held_first) in [("31.5", 1, 0), ("n/a", 0, 1)] {
        let study = labelled_before_day_0(value);
        let site = study.site("grows");
        site.drop_export("exports/dyn/log-1.csv", export(&study.rows[..1]));
        let first = site.collect();
        assert_eq!(first["readings"], json!({ "filed": filed_first, "already": 0, "held": held_first }));
        site.drop_export("exports/dyn/log-2.csv", export(&study.rows));
        let second = site.collect();
        assert_eq!(second["readings"], json!({ "filed": 1, "already": filed_first, "held": 0 }), "{value}");
        each_row_is_there_once(&site, &study.rows);
    }
}

#[test]
fn a_filed_row_that_comes_again_after_a_withdrawal_is_not_held() {
    let study = labelled_before_day_0("31.5");
    let site = study.site("grows");
    site.drop_export("exports/dyn/log-1.csv", export(&study.rows[..1]));
    site.collect();
    site.ok(&["roster", "withdraw", "P-01", "--on", "2026-03-10", "--data", "keep", "--why", "moved away"]);
    site.drop_export("exports/dyn/log-2.csv", export(&study.rows));
    let second = site.collect();
    assert_eq!(second["readings"], json!({ "filed": 1, "already": 1, "held": 0 }));
    each_row_is_there_once(&site, &study.rows);
}

fn answers(site: &Site, then: &[&str]) -> [Json; 3] {
    let ask = |question: &[&str]| site.json(&[question, then].concat());
    [ask(&["readings"]), ask(&["holds"]), ask(&["completeness", "--on", LATER])]
}

/// One act on whatever is there; where it has nothing to act on, nothing happens.
fn take(site: &Site, act: u8, rest: &[Row]) {
    let current = || site.readings().into_iter().find(|reading| reading["state"] == "current");
    let open = || site.holds().into_iter().next();
    let number = |json: &Json, field: &str| json[field].to_string();
    match act {
        0 => {
            site.drop_export("exports/dyn/second.csv", export(rest));
            site.collect();
        }
        1 => {
            if let Some(reading) = current() {
                site.ok(&["strike", &number(&reading, "reading"), "--why", "wrong position"]);
            }
        }
        2 => {
            if let Some(reading) = current() {
                site.ok(&["amend", "reading", &number(&reading, "reading"), "--value", "44.4", "--why", "misread"]);
            }
        }
        3 => {
            if let Some(hold) = open() {
                site.ok(&["holds", "dismiss", &number(&hold, "hold"), "--why", "a test squeeze"]);
            }
        }
        4 => {
            let known = site.path("roster.csv");
            let roster = std::fs::read_to_string(known).expect("the roster");
            if !roster.contains("P-04") {
                site.write("roster.csv", format!("{roster}P-04,2026-03-01,\n"));
                site.import_roster();
                site.collect();
            }
        }
        _ => {
            site.ok(&["account", "P-01", "third", "--why", "ill"]);
        }
    }
}
