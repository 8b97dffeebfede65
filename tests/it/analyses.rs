//! Analyses of several factors from outside: what is said within 80 columns, what is refused, and what a plan and records
//! that hardly allow one give. Numbers are checked in `reference`; the studies here are invented.

use std::fs;

use revisant_tests::site::Site;
use serde_json::{Value as Json, json};

use crate::site;

const PLAN: &str = r#"
[study]
code = "GRIP-2"
title = "Two ways of training"
time_zone = "Europe/London"

[subject]
pattern = 'GR-\d{2}'
anchor = "enrolment"
attributes = { sex = ["F", "M"] }

[[arm]]
code = "band"
[[arm]]
code = "stretch"

[[measure]]
code = "grip"
label = "Grip strength"
unit = "kg"
conditions = { hand = ["left", "right"] }

[[visit]]
code = "baseline"
day = 0
[[visit]]
code = "week-4"
day = 28
[[visit]]
code = "week-12"
day = 84

[[instrument]]
code = "dyn"
folder = "exports/dyn"
rest = "0s"
[instrument.reader]
format = "delimited"
header = { row = 1 }
subject = { column = "Who" }
taken_at = { column = "When", format = "iso" }
[[instrument.reader.value]]
measure = "grip"
column = "Left"
condition = { hand = "left" }
[[instrument.reader.value]]
measure = "grip"
column = "Right"
condition = { hand = "right" }

[[analysis]]
code = "both"
measure = "grip"
method = "repeated-measures"
within = ["visit", "hand"]
between = ["arm"]
contrasts = ["each-vs-first", "polynomial"]

[[analysis]]
code = "simple"
measure = "grip"
method = "repeated-measures"
average = ["hand"]
between = ["arm"]
contrasts = ["pairwise", "simple"]
multiplicity = "bonferroni"

[[analysis]]
code = "groups"
measure = "grip"
method = "repeated-measures"
average = ["hand"]
between = ["arm", "sex"]
sums = "type-2"

[[analysis]]
code = "hand-first"
measure = "grip"
method = "repeated-measures"
within = ["hand", "visit"]

[[analysis]]
code = "one-factor"
measure = "grip"
method = "repeated-measures"
average = ["hand"]
contrasts = ["pairwise", "polynomial", "simple"]

[[analysis]]
code = "one-visit"
measure = "grip"
method = "repeated-measures"
within = ["hand"]
between = ["sex"]
visits = ["baseline"]
"#;

/// Thirteen subjects: of GR-12 nobody wrote the sex down, and GR-13 came once.
fn roster() -> String {
    let line = |at: usize| {
        let arm = if at.is_multiple_of(2) { "stretch" } else { "band" };
        let sex = match at {
            12 => "",
            at if at.is_multiple_of(3) => "M",
            _ => "F",
        };
        format!("GR-{at:02},2025-01-06,,{arm},{sex}\n")
    };
    let lines: String = (1..=13).map(line).collect();
    format!("subject,enrolled,withdrawn,arm,sex\n{lines}")
}

/// Grip that rises by 3 kg with bands and hardly without, with what looks like chance.
fn rows(subjects: std::ops::RangeInclusive<usize>) -> String {
    let mut rows = "Who,When,Left,Right\n".to_owned();
    for at in subjects {
        for (visit, day) in ["2025-01-06", "2025-02-03", "2025-03-31"].into_iter().enumerate() {
            if at == 13 && visit > 0 {
                continue;
            }
            let chance = |salt: usize| ((at * 37 + visit * 53 + salt * 71 + at * visit * 17) % 23) as f64 / 10.0;
            let gain = if at.is_multiple_of(2) { 0.2 } else { 1.5 } * visit as f64;
            let left = 24.0 + (at * 7 % 11) as f64 + gain + chance(1);
            let right = if at == 5 && visit == 2 { String::new() } else { format!("{:.1}", left + 1.5 + chance(2)) };
            rows.push_str(&format!("GR-{at:02},{day},{left:.1},{right}\n"));
        }
    }
    rows
}

fn study() -> Site {
    let site = site(&PLAN.replace("[study]\n", "[study]\nallocation = \"open\"\n"), &roster());
    site.drop_export("exports/dyn/all.csv", rows(1..=13));
    site.collect();
    site
}

fn fits(text: &str) {
    for line in text.lines() {
        assert!(line.chars().count() <= 80, "{line}");
    }
    assert!(!text.contains("NaN") && !text.contains("inf"), "{text}");
}

#[test]
fn what_several_factors_give_is_said_within_eighty_columns() {
    let site = study();
    for analysis in ["both", "simple", "groups", "hand-first", "one-factor", "one-visit"] {
        let ran = site.ok(&["analyse", analysis, "--checks"]);
        fits(&ran.stdout);
        site.check_snapshot(&format!("analyses/{analysis}"), &ran);
    }
}

#[test]
fn whoever_is_left_out_has_a_reason_by_the_factors_of_the_analysis() {
    let site = study();
    let left_out = |analysis: &str| site.json(&["analyse", analysis])["subjects"]["left_out"].clone();
    let gone = json!({ "subject": "GR-13", "why": "no reading at week-4 and week-12" });
    let one_hand = json!({ "subject": "GR-05", "why": "week-12: no reading of hand=right" });
    assert_eq!(left_out("both"), json!([one_hand, gone]));
    let no_sex = json!({ "subject": "GR-12", "why": "no value of sex" });
    assert_eq!(left_out("groups"), json!([one_hand, no_sex, gone]));
    assert_eq!(left_out("one-visit"), json!([no_sex]));
}

#[test]
fn the_order_of_within_factors_changes_nothing_but_the_names() {
    let site = study();
    let plan = fs::read_to_string(site.path("study.toml")).unwrap();
    let other = "\n[[analysis]]\ncode = \"visit-first\"\nmeasure = \"grip\"\nmethod = \"repeated-measures\"\n\
                 within = [\"visit\", \"hand\"]\n";
    site.write("study.toml", plan + other);
    let (one, two) = (site.json(&["analyse", "hand-first"]), site.json(&["analyse", "visit-first"]));
    let f = |result: &Json, source: &str| {
        let effects = result["effects"].as_array().unwrap();
        effects.iter().find(|effect| effect["source"] == source).map(|effect| effect["f"].as_f64().unwrap()).unwrap()
    };
    for (one_name, two_name) in [("visit", "visit"), ("hand", "hand"), ("hand:visit", "visit:hand")] {
        let (a, b) = (f(&one, one_name), f(&two, two_name));
        assert!((a - b).abs() <= 1e-9 * a.abs(), "{one_name}: {a} {b}");
    }
    assert_eq!(one["effects"][2]["error"], "hand:visit:subject");
}

#[test]
fn differences_between_groups_are_always_given() {
    let result = study().json(&["analyse", "both"]);
    let contrasts = result["contrasts"].as_array().unwrap();
    let effects: Vec<&Json> = contrasts.iter().filter(|it| it["kind"] == "effect").collect();
    let at: Vec<&Json> = effects.iter().map(|it| &it["at"]["visit"]).collect();
    assert_eq!(at, ["baseline", "week-4", "week-12"]);
    for it in effects {
        assert_eq!((&it["factor"], &it["level"], &it["against"]), (&json!("arm"), &json!("stretch"), &json!("band")));
    }
    let names: Vec<&Json> = result["effects"].as_array().unwrap().iter().map(|it| &it["source"]).collect();
    assert_eq!(names, ["arm", "visit", "arm:visit", "hand", "arm:hand", "visit:hand", "arm:visit:hand"]);
}

#[test]
fn what_one_factor_cannot_have_is_said() {
    let result = study().json(&["analyse", "one-factor"]);
    assert!(result["notes"].to_string().contains("Simple effects need a second factor"), "{}", result["notes"]);
    assert_eq!(result["effects"][0]["error"], "residual");
}

#[test]
fn a_sealed_allocation_lets_no_result_by_arm_out() {
    // An allocation is sealed unless the plan opens it, and the roster then has no arms.
    let roster: String = roster()
        .lines()
        .map(|line| {
            let cells: Vec<&str> = line.split(',').collect();
            format!("{},{},{},{}\n", cells[0], cells[1], cells[2], cells[4])
        })
        .collect();
    let site = site(&PLAN.replace("[study]\n", "[study]\nallocation = \"sealed\"\n"), &roster);
    site.drop_export("exports/dyn/all.csv", rows(1..=13));
    site.collect();
    let trail = site.json(&["status"])["trail"].clone();
    for analysis in ["both", "simple", "groups"] {
        let ran = site.run(&["analyse", analysis, "--json", "--plot", "arms.svg"]);
        assert_eq!(ran.code, Some(1), "{}", ran.shown());
        assert!(ran.stderr.contains("the allocation is sealed"), "{}", ran.shown());
        assert!(ran.stdout.is_empty() && !ran.stderr.contains("stretch"), "{}", ran.shown());
    }
    assert!(!site.path("arms.svg").exists());
    assert_eq!(site.json(&["status"])["trail"], trail, "what is refused is no look");
    site.ok(&["analyse", "one-visit"]);
}

#[test]
fn what_hardly_allows_an_analysis_says_so() {
    let plan = PLAN.replace("[study]\n", "[study]\nallocation = \"open\"\n");
    for (name, subjects) in [("nobody", 0), ("one", 1), ("one-of-each", 2), ("few", 3)] {
        let site = site(&plan, &roster());
        if subjects > 0 {
            site.drop_export("exports/dyn/all.csv", rows(1..=subjects));
            site.collect();
        }
        for analysis in ["both", "simple", "groups", "hand-first", "one-factor", "one-visit"] {
            let ran = site.ok(&["analyse", analysis, "--checks", "--plot", "p.svg"]);
            fits(&ran.stdout);
            let result = site.json(&["analyse", analysis, "--checks"]);
            assert!(!result["notes"].as_array().unwrap().is_empty(), "{name} {analysis}");
            assert!(!result["sentence"].as_str().unwrap().is_empty(), "{name} {analysis}");
            assert!(fs::read_to_string(site.path("p.svg")).unwrap().ends_with("</svg>\n"));
        }
        let both = site.json(&["analyse", "both"]);
        assert_eq!(both["effects"].as_array().unwrap().iter().all(|it| it["p"].is_null()), subjects < 3, "{name}");
    }
}

#[test]
fn an_empty_level_of_a_group_is_left_out_of_the_comparison() {
    let plan = PLAN
        .replace("[study]\n", "[study]\nallocation = \"open\"\n")
        .replace("[\"F\", \"M\"]", "[\"F\", \"M\", \"X\"]");
    let site = site(&plan, &roster());
    site.drop_export("exports/dyn/all.csv", rows(1..=13));
    site.collect();
    let result = site.json(&["analyse", "one-visit"]);
    assert!(result["notes"].to_string().contains("Nobody of sex X is complete"), "{}", result["notes"]);
    assert!(result["effects"][0]["f"].is_number(), "{}", result["effects"][0]);
}

#[test]
fn checks_are_whole_for_machines() {
    let result = study().json(&["analyse", "both", "--checks"]);
    let checks = &result["checks"];
    let used = result["subjects"]["used"].as_u64().unwrap() as usize;
    let length = |list: &Json| list.as_array().unwrap().len();
    assert_eq!((length(&checks["residuals"]), length(&checks["subjects"])), (used * 6, used));
    let influence = checks["influence"].as_array().unwrap();
    assert_eq!(influence.len(), 7);
    assert!(influence.iter().all(|it| length(&it["without"]) == used && it["f"].is_number()));
    let missing = &checks["missing"];
    assert_eq!((&missing["factor"], &missing["monotone"]), (&json!("visit"), &json!(true)));
    assert_eq!(missing["patterns"][2]["subjects"], json!(["GR-13"]));
    assert_eq!(missing["patterns"][2]["present"], json!({ "baseline": true, "week-4": false, "week-12": false }));
    assert!(study().json(&["analyse", "both"]).get("checks").is_none());
}

#[test]
fn influence_is_what_the_analysis_gives_without_the_subject() {
    let site = study();
    let with = site.json(&["analyse", "both", "--checks"]);
    let of = |result: &Json, source: &str| {
        let effects = result["effects"].as_array().unwrap();
        effects.iter().find(|it| it["source"] == source).unwrap()["f"].as_f64().unwrap()
    };
    let expected: Vec<(String, f64)> = with["checks"]["influence"]
        .as_array()
        .unwrap()
        .iter()
        .map(|it| {
            let without = it["without"].as_array().unwrap().iter().find(|it| it["subject"] == "GR-03").unwrap();
            (it["source"].as_str().unwrap().to_owned(), without["f"].as_f64().unwrap())
        })
        .collect();
    let own = site.readings().into_iter().filter(|reading| reading["subject"] == "GR-03");
    let numbers: Vec<String> = own.map(|reading| reading["reading"].to_string()).collect();
    let mut args = vec!["strike"];
    args.extend(numbers.iter().map(String::as_str));
    args.extend(["--why", "without GR-03"]);
    site.ok(&args);
    let without = site.json(&["analyse", "both"]);
    for (source, f) in expected {
        let found = of(&without, &source);
        assert!((found - f).abs() <= 1e-8 * f.abs(), "{source}: {found} {f}");
    }
}

#[test]
fn plots_hold_every_group_and_are_legible_in_grey() {
    let site = study();
    site.ok(&["analyse", "both", "--plot", "both.svg"]);
    let svg = fs::read_to_string(site.path("both.svg")).unwrap();
    for words in ["band, left (n = 5)", "stretch, right (n = 6)", "Means together", "GR-13: no reading at"] {
        assert!(svg.contains(words), "no {words}");
    }
    let colours = svg.split('#').skip(1).map(|rest| rest.split('"').next().unwrap());
    let grey = |colour: &str| colour.chars().collect::<std::collections::BTreeSet<_>>().len() == 1;
    for colour in colours.filter(|it| it.len() == 3) {
        assert!(grey(colour), "#{colour} is no grey");
    }
    site.ok(&["analyse", "both", "--plot", "both.png"]);
    let png = fs::read(site.path("both.png")).unwrap();
    assert!(png.starts_with(b"\x89PNG\r\n\x1a\n") && png.len() > 20_000, "{} bytes", png.len());
    let ran = site.run(&["analyse", "both", "--plot", "both.jpeg"]);
    assert_eq!(ran.code, Some(2), "{}", ran.shown());
}
