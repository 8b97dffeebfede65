//! Drafted readers, on every study of the corpus: the plan without one instrument's reader, the reader drafted from
//! that instrument's exports, from two of them or from one, and what it then files held against what the true reader files.

use std::collections::BTreeMap;
use std::fs;
use std::path::{Path, PathBuf};

use revisant_tests::corpus::{files_below, folder};
use revisant_tests::site::{Ran, Site};
use serde_json::Value as Json;

use crate::PROGRAMS;

/// One instrument's text in a plan: what stands before its reader, and the reader.
#[derive(Debug, Clone)]
struct Block {
    whole: String,
    head: String,
    reader: String,
}

impl Block {
    fn of(text: &str) -> Self {
        let at = text.find("[instrument.reader]").expect("the corpus writes readers as tables of their own");
        Self { whole: text.to_owned(), head: text[..at].to_owned(), reader: text[at..].to_owned() }
    }

    fn value(&self, key: &str) -> Option<String> {
        let line = self.head.lines().find(|line| line.split('=').next().is_some_and(|it| it.trim() == key))?;
        line.split('"').nth(1).map(str::to_owned)
    }

    /// Whether labels are the plan's own codes, units its own, and nothing has to be mapped.
    fn is_plain(&self) -> bool {
        !self.reader.contains("map =") && !self.reader.contains("unit =")
    }
}

/// The instruments of a plan, in its order.
fn blocks(plan: &str) -> Vec<Block> {
    let starts: Vec<usize> = plan.match_indices("\n[[instrument]]").map(|(at, _)| at + 1).collect();
    let ends = ["\n[[instrument]]", "\n[[analysis]]", "\n[interim]", "\n[assume]"];
    let end = |start: usize| {
        let rest = &plan[start + 1..];
        ends.iter().filter_map(|mark| rest.find(mark)).min().map_or(plan.len(), |at| start + 2 + at)
    };
    starts.into_iter().map(|start| Block::of(&plan[start..end(start)])).collect()
}

/// Every study of the corpus that has a plan.
fn studies() -> Vec<String> {
    let root = folder("");
    let mut names: Vec<String> = fs::read_dir(&root)
        .unwrap()
        .filter_map(|entry| entry.unwrap().file_name().into_string().ok())
        .filter(|name| root.join(name).join("study.toml").exists())
        .collect();
    names.sort();
    names
}

/// The plan as it is after all steps of a study.
fn last_plan(study: &str) -> String {
    let from = folder(study);
    let steps = fs::read_to_string(from.join("steps.json")).unwrap_or_else(|_| "[]".to_owned());
    let steps: Vec<Json> = serde_json::from_str(&steps).unwrap();
    let last = steps.iter().rev().find(|step| step["do"] == "plan").and_then(|step| step["file"].as_str());
    fs::read_to_string(from.join(last.unwrap_or("study.toml"))).unwrap()
}

fn last_roster(study: &str) -> String {
    let from = folder(study);
    let steps = fs::read_to_string(from.join("steps.json")).unwrap_or_else(|_| "[]".to_owned());
    let steps: Vec<Json> = serde_json::from_str(&steps).unwrap();
    let last = steps.iter().rev().find(|step| step["do"] == "roster").and_then(|step| step["file"].as_str());
    fs::read_to_string(from.join(last.unwrap_or("roster.csv"))).unwrap()
}

/// A site with all exports of a study, as they are after all its steps; the roster is imported.
fn site(study: &str, plan: &str) -> Site {
    let site = Site::in_memory(PROGRAMS);
    let from = folder(study);
    let mut exports: Vec<(PathBuf, PathBuf)> =
        files_below(&from, Path::new("exports")).into_iter().map(|name| (name.clone(), name)).collect();
    for drop in files_below(&from, Path::new("drops")) {
        exports.push((drop.clone(), drop.components().skip(2).collect()));
    }
    for (source, name) in exports {
        site.write(&name, fs::read(from.join(source)).unwrap());
        site.age(&name);
    }
    site.write("study.toml", plan);
    site.write("roster.csv", last_roster(study));
    site.import_roster();
    site
}

/// The readings of an instrument's exports, each as what must not be wrong, and how often it is there.
fn readings(site: &Site, exports: &str) -> BTreeMap<String, usize> {
    let mut all = BTreeMap::new();
    let fields =
        ["subject", "visit", "measure", "condition", "replicate", "value", "limit", "taken_at", "export", "where"];
    for reading in site.readings() {
        let export = reading["export"].as_str().unwrap_or_default().to_owned();
        if !export.starts_with(&format!("{exports}/")) {
            continue;
        }
        let key: Vec<String> = fields.iter().map(|field| reading[*field].to_string()).collect();
        *all.entry(key.join(" ")).or_default() += 1;
    }
    all
}

/// What a drafted reader came to.
#[derive(Debug, Default)]
struct Outcome {
    gaps: usize,
    sound: bool,
    filed: usize,
    right: usize,
    wrong: Vec<String>,
    toml: String,
}

fn probe(site: &Site, block: &Block, files: &[String]) -> Result<Json, Ran> {
    let folder = block.value("folder").unwrap();
    let code = block.value("code").unwrap();
    let mut args = vec!["probe", "--json", "--code", &code, "--folder", &folder];
    args.extend(files.iter().map(String::as_str));
    let ran = site.run(&args);
    if matches!(ran.code, Some(0 | 3)) { Ok(ran.json()) } else { Err(ran) }
}

/// The exports that the plan's glob takes, by the ending alone.
fn exports(site: &Site, block: &Block) -> Vec<String> {
    let ending = block.value("files").unwrap_or_default().trim_start_matches('*').to_owned();
    let below = files_below(site.study(), Path::new(&block.value("folder").unwrap()));
    let names = below.into_iter().filter(|path| {
        let name = path.file_name().unwrap().to_string_lossy().into_owned();
        let skipped = name.starts_with(['.', '~']) || name.ends_with(".tmp") || name.ends_with(".part");
        name.ends_with(&ending) && !skipped && fs::metadata(site.path(path)).unwrap().len() > 0
    });
    names.map(|path| path.to_string_lossy().into_owned()).collect()
}

/// Drafts a reader and files by it.
fn draft(study: &str, plan: &str, block: &Block, most: usize, truth: &BTreeMap<String, usize>) -> Outcome {
    let site = site(study, &plan.replace(&block.whole, ""));
    let mut files = exports(&site, block);
    files.truncate(most);
    let drafted = match probe(&site, block, &files) {
        Ok(drafted) => drafted,
        Err(ran) => return Outcome { toml: ran.shown(), ..Outcome::default() },
    };
    let toml = drafted["reader"].as_str().unwrap().to_owned();
    let made = Block::of(&toml);
    let kept: Vec<&str> = block.head.lines().filter(|line| !line.starts_with("re_export")).collect();
    let re_export: Vec<&str> = made.head.lines().filter(|line| line.starts_with("re_export")).collect();
    let text = format!("{}\n{}\n{}\n", kept.join("\n").trim_end(), re_export.join("\n"), made.reader);
    site.write("study.toml", plan.replace(&block.whole, &text));
    let mut outcome = Outcome { gaps: drafted["gaps"].as_array().unwrap().len(), toml, ..Outcome::default() };
    outcome.sound = site.run(&["check"]).code != Some(2);
    if !outcome.sound {
        return outcome;
    }
    site.collect();
    let mut left = truth.clone();
    for (key, count) in readings(&site, &block.value("folder").unwrap()) {
        outcome.filed += count;
        let known = left.remove(&key).unwrap_or_default();
        outcome.right += known.min(count);
        if count > known {
            outcome.wrong.push(key);
        }
    }
    outcome
}

/// No reading is filed wrongly by a draft, whatever the study; a draft that cannot be used says what is missing; and
/// where nothing has to be mapped or converted, it files nine tenths of what the true reader files.
fn judge(study: &str, most: usize, failed: &mut Vec<String>) {
    let plan = last_plan(study);
    for block in blocks(&plan) {
        let folder = block.value("folder").unwrap();
        let truth_site = site(study, &plan);
        truth_site.collect();
        let truth = readings(&truth_site, &folder);
        let all: usize = truth.values().sum();
        let outcome = draft(study, &plan, &block, most, &truth);
        let name = format!("{study} {}", block.value("code").unwrap());
        println!(
            "{name}: {} gaps, {}, files {} of {all}, {} wrong{}",
            outcome.gaps,
            if outcome.sound { "sound" } else { "unsound" },
            outcome.right,
            outcome.wrong.len(),
            if block.is_plain() { ", nothing to map" } else { "" }
        );
        if std::env::var_os("SHOW_DRAFTS").is_some() {
            println!("{}", outcome.toml);
        }
        if !outcome.wrong.is_empty() {
            failed.push(format!("{name} files wrongly: {:#?}\n{}", outcome.wrong, outcome.toml));
        }
        if outcome.sound != (outcome.gaps == 0) {
            failed.push(format!("{name}: gaps and soundness differ\n{}", outcome.toml));
        }
        if block.is_plain() && most == usize::MAX && outcome.right * 10 < all * 9 {
            failed.push(format!("{name} files {} of {all}\n{}", outcome.right, outcome.toml));
        }
    }
}

fn judge_all(most: usize) {
    let only = std::env::var("STUDY").ok();
    let mut failed = vec![];
    for study in studies().iter().filter(|study| only.as_ref().is_none_or(|only| only == *study)) {
        judge(study, most, &mut failed);
    }
    assert!(failed.is_empty(), "{}", failed.join("\n\n"));
}

#[test]
fn drafts_from_all_exports_file_nothing_wrongly() {
    judge_all(usize::MAX);
}

#[test]
fn drafts_from_two_exports_file_nothing_wrongly() {
    judge_all(2);
}

#[test]
fn drafts_from_one_export_file_nothing_wrongly() {
    judge_all(1);
}

/// The delimiter of each delimited export of the corpus by itself, against that of the plan.
#[test]
fn delimiters_of_single_exports_are_found() {
    let (mut right, mut wrong) = (0, vec![]);
    for study in studies() {
        let plan = last_plan(&study);
        for block in blocks(&plan).iter().filter(|block| block.reader.contains("format = \"delimited\"")) {
            let stated = block.reader.lines().find(|line| line.starts_with("delimiter"));
            let expected = stated.unwrap_or("delimiter = \",\"").to_owned();
            let site = site(&study, &plan.replace(&block.whole, ""));
            for file in exports(&site, block) {
                // What is no table at all has no delimiter.
                let Ok(drafted) = probe(&site, block, std::slice::from_ref(&file)) else { continue };
                let toml = drafted["reader"].as_str().unwrap();
                let found = toml.lines().find(|line| line.starts_with("delimiter")).unwrap_or_default();
                if found == expected { right += 1 } else { wrong.push(format!("{study} {file}: {found}")) }
            }
        }
    }
    println!("{right} right, {} wrong: {wrong:#?}", wrong.len());
    assert!(right > 150 && wrong.len() * 50 <= right, "{right} right, wrong: {wrong:#?}");
}

// ---- the command ----

const PLAN: &str = "\
# Kept by hand; comments and order matter.
[study]
code = \"P-1\"          # our code
time_zone = \"Europe/London\"
[subject]
pattern = 'P-\\d{3}'
normalise = [\"trim\", \"upper\"]
anchor = \"first\"
[[measure]]
code = \"grip\"
unit = \"kg\"
plausible = [2, 95]
conditions = { hand = [\"left\", \"right\"] }
[[visit]]
code = \"first\"
day = 0
[[visit]]
code = \"second\"
day = 28
window = [-3, 3]

# Last of all, the analyses.
[[analysis]]
code = \"grip-over-visits\"
measure = \"grip\"
method = \"repeated-measures\"
average = [\"hand\"]
";

const ROSTER: &str = "subject,enrolled,withdrawn\nP-001,2025-03-03,\nP-002,2025-03-03,\n";

const EXPORT: &str = "\
Tester: A. B.
Subject;Visit;Time;Left (kg);Right (kg);Note
P-001;first;2025-03-03 09:10;31,5;30,0;
P-002;first;2025-03-14 09:40;27,0;26,5;slipped
P-001;second;2025-03-31 09:05;32,0;NA;
";

fn small_site() -> Site {
    let site = Site::with(PROGRAMS, PLAN, ROSTER);
    site.write("exports/dyn/march.csv", EXPORT);
    site.age("exports/dyn/march.csv");
    site
}

#[test]
fn a_draft_is_toml_and_shows_what_would_be_filed() {
    let site = small_site();
    let ran = site.run(&["probe", "exports/dyn/march.csv"]);
    site.check_snapshot("probe/sound", &ran);
    assert_eq!(ran.code, Some(0), "{}", ran.shown());
    for line in ran.stdout.lines() {
        assert!(line.chars().count() <= 80, "{line}");
    }
    // All of it, the look ahead too, may stand in a plan.
    site.write("study.toml", format!("{PLAN}\n{}", ran.stdout));
    site.ok(&["check"]);
    assert_eq!(site.collect()["readings"]["filed"], 5);
}

#[test]
fn a_draft_is_added_to_the_plan_and_all_else_stays() {
    let site = small_site();
    let ran = site.run(&["probe", "exports/dyn/march.csv", "--into", "study.toml"]);
    site.check_snapshot("probe/into", &ran);
    assert_eq!(ran.code, Some(0), "{}", ran.shown());
    let text = fs::read_to_string(site.path("study.toml")).unwrap();
    let (before, after) = PLAN.split_once("\n# Last of all").unwrap();
    assert!(text.starts_with(before) && text.ends_with(&format!("\n# Last of all{after}")), "{text}");
    site.ok(&["check"]);
    // Once more it is refused, and nothing is written.
    let again = site.run(&["probe", "exports/dyn/march.csv", "--into", "study.toml", "--json"]);
    assert_eq!((again.code, again.error()["kind"].clone()), (Some(1), "refused".into()));
    assert_eq!(fs::read_to_string(site.path("study.toml")).unwrap(), text);
}

#[test]
fn what_is_ambiguous_is_said_and_not_decided() {
    let site = small_site();
    site.write(
        "exports/scale/one.csv",
        "Subject,Visit,When,Side,Grip,Type\nP-001,V1,03/04/2025 10:00,L,\"1,234\",S\nP-002,V1,04/04/2025 10:00,R,\"1,500\",S\n",
    );
    site.write("exports/scale/other.csv", "nothing\n");
    let ran = site.run(&["probe", "exports/scale/one.csv", "exports/scale/other.csv"]);
    site.check_snapshot("probe/gaps", &ran);
    assert_eq!(ran.code, Some(3));
    let json = site.run(&["probe", "exports/scale/one.csv", "--json"]).json();
    let keys: Vec<&str> = json["gaps"].as_array().unwrap().iter().map(|gap| gap["key"].as_str().unwrap()).collect();
    for key in ["decimal_mark", "taken_at", "visit", "ignore", "condition"] {
        assert!(keys.contains(&key), "{key}: {json}");
    }
    // In the plan, `check` names each of them, and a second instrument can be drafted nevertheless.
    assert_eq!(site.run(&["probe", "exports/scale/one.csv", "--into", "study.toml"]).code, Some(3));
    let check = site.run(&["check"]);
    assert_eq!(check.code, Some(2));
    assert!(check.stderr.contains("FILL IN"), "{}", check.stderr);
    assert_eq!(site.run(&["probe", "exports/dyn/march.csv", "--into", "study.toml"]).code, Some(0));
}

#[test]
fn without_a_plan_what_the_plan_would_say_is_left_open() {
    let site = Site::new(PROGRAMS);
    site.write("march.csv", EXPORT);
    let ran = site.run(&["probe", "march.csv", "--code", "dyn", "--json"]);
    assert_eq!(ran.code, Some(3), "{}", ran.shown());
    let toml = ran.json()["reader"].as_str().unwrap().to_owned();
    assert!(toml.contains("subject = { column = \"Subject\" }") && toml.contains("measure = \"FILL IN\""), "{toml}");
    let bad = site.run(&["probe", "absent.csv", "--json"]);
    assert_eq!((bad.code, bad.error()["kind"].clone()), (Some(1), "file".into()));
}
