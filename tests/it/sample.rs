//! `check --sample`: what the plan would do with a file is what `collect` then does, and nothing of it is done.

use std::collections::BTreeMap;
use std::fs;
use std::path::{Path, PathBuf};

use revisant_tests::corpus::{self, files_below};
use revisant_tests::site::{Site, list};
use revisant_tests::small::{EXPORTS, FAULTY, PLAN, ROSTER};
use serde_json::{Value as Json, json};

use crate::PROGRAMS;

/// Every file of the study's folder, with its bytes.
fn bytes(site: &Site) -> BTreeMap<PathBuf, Vec<u8>> {
    let files = files_below(site.study(), Path::new(""));
    files.into_iter().map(|file| (file.clone(), fs::read(site.path(&file)).unwrap())).collect()
}

/// A sample as JSON; nothing of the study's folder may change.
fn sample(site: &Site, args: &[&str]) -> Json {
    let before = bytes(site);
    let args: Vec<&str> = ["check", "--json", "--sample"].into_iter().chain(args.iter().copied()).collect();
    let ran = site.run(&args);
    assert!(bytes(site) == before, "the study's folder has changed: {}", ran.shown());
    let json = ran.json();
    let held = |field: &str| json[field].as_array().is_some_and(|holds| !holds.is_empty());
    let found = held("holds") || held("held_before");
    assert_eq!(ran.code, Some(if found { 3 } else { 0 }), "{}", ran.shown());
    json
}

/// A study of the corpus, collected export by export: each is shown beforehand as it is then filed.
fn shown_as_filed(study: &str, most: usize) {
    let site = Site::in_memory(PROGRAMS);
    let from = corpus::folder(study);
    for name in ["study.toml", "roster.csv"] {
        site.write(name, fs::read(from.join(name)).unwrap());
    }
    site.import_roster();
    let exports = files_below(&from, Path::new("exports"));
    assert!(!exports.is_empty());
    let mut shown = 0;
    for export in exports.iter().filter(|export| !fs::read(from.join(export)).unwrap().is_empty()).take(most) {
        site.write(export, fs::read(from.join(export)).unwrap());
        site.age(export);
        let path = export.to_str().unwrap();
        let sample = sample(&site, &[path]);
        let before: Vec<Json> = site.readings();
        site.collect();
        let files = list(site.json(&["status"])["files"].clone());
        let file = files.iter().find(|file| file["export"] == sample["export"]);
        let Some(file) = file.filter(|file| file["state"] != "ignored" && file["state"] != "repeat") else {
            assert!(sample["collected"] == false || sample["filed_before"].is_string(), "{sample}");
            continue;
        };
        assert_eq!(sample["state"], file["state"], "{path}: {sample}");
        assert_eq!(sample["lines"], file["lines"], "{path}");
        same_readings(&sample, &site.readings()[before.len()..]);
        same_holds(&site, &sample);
        shown += 1;
    }
    assert!(shown > 0, "nothing was compared");
}

fn same_readings(sample: &Json, filed: &[Json]) {
    assert_eq!(sample["readings"]["filed"].as_u64(), Some(filed.len() as u64));
    for (shown, filed) in sample["first"].as_array().unwrap().iter().zip(filed) {
        for (field, value) in shown.as_object().unwrap() {
            // Readings that were filed before have other numbers in a copy than in a fresh study.
            assert!(field == "supersedes" || filed[field] == *value, "{field}: {shown} and {filed}");
        }
    }
}

fn same_holds(site: &Site, sample: &Json) {
    let of = |holds: &[Json]| -> Vec<[Json; 4]> {
        holds.iter().map(|hold| ["reason", "where", "row", "wrong"].map(|field| hold[field].clone())).collect()
    };
    let open = site.holds().into_iter().filter(|hold| hold["export"] == sample["export"]).collect::<Vec<_>>();
    assert_eq!(of(sample["holds"].as_array().unwrap()), of(&open));
}

#[test]
fn a_sample_is_shown_as_it_is_then_filed() {
    let studies = [
        ("dovermoss", 1),
        ("marlecott", 2),
        ("lindrow", 2),
        ("wexlow", 2),
        ("nightjar", 4),
        ("brackwell", 3),
        ("hendrake", 2),
        ("fernstow", 2),
        ("scrapside", 7),
    ];
    studies.into_iter().for_each(|(study, most)| shown_as_filed(study, most));
}

/// The small study with its roster; one export is filed.
fn begun() -> Site {
    let site = crate::site(PLAN, ROSTER);
    site.drop_export(EXPORTS[0].0, EXPORTS[0].1);
    site.collect();
    site
}

#[test]
fn what_is_filed_already_is_seen() {
    let site = begun();
    // The study's instrument exports new rows, and a time without seconds is no proof of sameness: what was filed is
    // asked of the study's own records.
    let again = EXPORTS[0].1.replace("44.0", "45.0") + "W-01,start,2026-01-05 09:50,33\n";
    site.write("elsewhere/again.csv", &again);
    let shown = sample(&site, &["elsewhere/again.csv"]);
    assert_eq!(shown["in_folder"], false);
    assert_eq!(shown["export"], "exports/dyn/again.csv");
    let reasons: Vec<&str> =
        shown["holds"].as_array().unwrap().iter().filter_map(|hold| hold["reason"].as_str()).collect();
    assert_eq!(reasons, ["extra-replicate"; 5], "one reading of each is there already: {shown}");

    // A log that has grown: only what is new is filed.
    let grown = format!("{}W-03,week-4,2026-02-03 10:00,29.0\n", EXPORTS[0].1);
    site.write(EXPORTS[0].0, grown);
    site.age(EXPORTS[0].0);
    let shown = sample(&site, &[EXPORTS[0].0]);
    assert_eq!((&shown["lines"]["already"], &shown["lines"]["filed"]), (&json!(4), &json!(1)), "{shown}");
    assert_eq!(shown["first"][0]["visit"], "week-4");
}

#[test]
fn a_large_log_that_has_grown_is_compared_with_its_older_bytes() {
    let site = crate::site(&PLAN.replace("dyn\"\nfiles", "dyn\"\nre_export = \"grows\"\nfiles"), ROSTER);
    // More than the records keep in themselves, so that the older bytes lie in a file of their own.
    let mut log = EXPORTS[0].1.to_owned();
    (0..3000).for_each(|_| log.push_str("W-01,start,2026-01-05 09:10,\n"));
    assert!(log.len() > 64 * 1024);
    site.drop_export(EXPORTS[0].0, &log);
    site.collect();
    site.write(EXPORTS[0].0, log + "W-03,week-4,2026-02-03 10:00,29.0\n");
    let shown = sample(&site, &[EXPORTS[0].0]);
    assert_eq!((&shown["lines"]["already"], &shown["lines"]["filed"]), (&json!(4), &json!(1)), "{shown}");
}

#[test]
fn bytes_that_are_filed_are_shown_by_themselves() {
    let site = begun();
    let shown = sample(&site, &[EXPORTS[0].0]);
    assert_eq!(shown["filed_before"], EXPORTS[0].0);
    assert_eq!((&shown["readings"]["filed"], &shown["readings"]["already"]), (&json!(4), &json!(0)));
    // The visit by its date comes from what the study knows of day 0, although these rows are not there.
    site.drop_export(EXPORTS[1].0, EXPORTS[1].1);
    site.collect();
    site.write("study.toml", PLAN.replace("visit = { column = \"Visit\" }\n", ""));
    let shown = sample(&site, &[EXPORTS[1].0]);
    assert_eq!(shown["first"][0]["visit"], "week-4", "{shown}");
}

#[test]
fn a_study_without_records_shows_a_sample() {
    let site = Site::new(PROGRAMS);
    site.write("study.toml", PLAN);
    site.drop_export(FAULTY.0, FAULTY.1);
    let shown = sample(&site, &[FAULTY.0]);
    assert_eq!(shown["without_roster"], true);
    let reasons: Vec<&str> =
        shown["holds"].as_array().unwrap().iter().filter_map(|hold| hold["reason"].as_str()).collect();
    assert_eq!(reasons, ["unknown-visit", "unreadable-value", "implausible-value"], "nobody is unknown yet");
    assert_eq!(shown["readings"]["filed"], 1);
    assert!(!site.path("records").exists());
    let ran = site.run(&["check", "--sample", FAULTY.0]);
    assert!(ran.stdout.lines().all(|line| line.chars().count() <= 80), "{}", ran.shown());
    site.check_snapshot("sample/without-roster", &ran);
}

#[test]
fn a_file_held_as_a_whole_is_shown_as_that() {
    let site = begun();
    site.drop_export("exports/dyn/odd.csv", "Who,When\nW-01,2026-01-05\n");
    let shown = sample(&site, &["exports/dyn/odd.csv"]);
    assert_eq!((&shown["state"], &shown["lines"]), (&json!("held"), &Json::Null));
    assert_eq!(shown["holds"][0]["reason"], "unknown-layout");
    site.check_snapshot("sample/held-whole", &site.run(&["check", "--sample", "exports/dyn/odd.csv"]));
    site.drop_export(EXPORTS[1].0, EXPORTS[1].1);
    site.check_snapshot("sample/sound", &site.run(&["check", "--sample", EXPORTS[1].0]));
}

#[test]
fn the_instrument_is_found_or_asked_for() {
    let (head, reader) = PLAN.split_at(PLAN.find("[[instrument]]").unwrap());
    let (reader, tail) = reader.split_at(reader.find("[[analysis]]").unwrap());
    let second = reader.replace("\"dyn\"", "\"dyn-2\"").replace("exports/dyn", "exports/dyn-2");
    let other = second.replace("dyn-2", "other").replace("\"Grip\"", "\"Strength\"");
    let site = Site::new(PROGRAMS);
    site.write("study.toml", [head, reader, &second, &other, tail].concat());
    // By its folder.
    site.drop_export("exports/dyn-2/a.csv", EXPORTS[0].1);
    assert_eq!(sample(&site, &["exports/dyn-2/a.csv"])["instrument"], "dyn-2");
    // By its layout.
    site.write("b.csv", EXPORTS[0].1.replace("Grip", "Strength"));
    assert_eq!(sample(&site, &["b.csv"])["instrument"], "other");
    // Two may have written it.
    site.write("a.csv", EXPORTS[0].1);
    site.check_snapshot("sample/several-instruments", &site.run(&["check", "--sample", "a.csv"]));
    assert_eq!(sample(&site, &["a.csv", "--instrument", "dyn"])["instrument"], "dyn");
    // A serial number tells two of a kind apart.
    let serial = |is: &str| format!("serial = {{ preamble = \"Serial\", is = \"{is}\" }}\nrest = \"0s\"");
    let row = |text: &str| text.replace("header = { row = 1 }", "header = { starts_with = \"Subject\" }");
    let (first, second) =
        (reader.replace("rest = \"0s\"", &serial("A1")), second.replace("rest = \"0s\"", &serial("B2")));
    site.write("study.toml", [head, &row(&first), &row(&second), tail].concat());
    site.write("a.csv", format!("Serial: B2\n{}", EXPORTS[0].1));
    assert_eq!(sample(&site, &["a.csv"])["instrument"], "dyn-2");
    // Of no instrument, and of one that is not there.
    site.write("c.csv", "Nothing,of,this\n1,2,3\n");
    site.check_snapshot("sample/no-instrument", &site.run(&["check", "--sample", "c.csv"]));
    site.check_snapshot("sample/unknown-instrument", &site.run(&["check", "--sample", "a.csv", "--instrument", "x"]));
    site.check_snapshot("sample/no-file", &site.run(&["check", "--sample", "d.csv"]));
}

#[test]
fn of_many_holds_the_first_are_shown_and_all_are_counted() {
    let site = begun();
    let rows: String = (0..60).map(|row| format!("W-9{},start,2026-01-05 09:10,31\n", row % 10)).collect();
    site.drop_export("exports/dyn/many.csv", format!("Subject,Visit,Taken,Grip\n{rows},start,2026-01-05 09:10,31\n"));
    assert_eq!(sample(&site, &["exports/dyn/many.csv"])["holds"].as_array().unwrap().len(), 61);
    let text = site.run(&["check", "--sample", "exports/dyn/many.csv"]).stdout;
    assert_eq!(text.matches("as exported").count(), 40);
    let words: String = text.split_whitespace().collect::<Vec<_>>().join(" ");
    assert!(
        words.contains("and 21 more; --json lists all of them. In all: 1 no-subject, 60 unknown-subject."),
        "{text}"
    );
}
