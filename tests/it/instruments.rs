//! Instruments that change in mid-study: one is replaced by another, another of its kind turns up, its values are
//! corrected, and on a bridging day both measure the same.

use revisant_tests::site::{Site, list};
use serde_json::{Value as Json, json};

const ROSTER: &str = "subject,enrolled,withdrawn\nB-01,2026-01-05,\nB-02,2026-01-05,\nB-03,2026-01-05,\n";

const PLAN: &str = r#"[study]
code = "BRIDGE"
title = "Grip with two dynamometers"
time_zone = "Europe/London"

[subject]
pattern = 'B-\d{2}'
anchor = "enrolment"

[[measure]]
code = "grip"
unit = "kg"
replicates = 2
summary = "mean"

[[visit]]
code = "start"
day = 0

[[visit]]
code = "week-4"
day = 28
window = [-3, 3]

[[visit]]
code = "week-8"
day = 56
window = [-3, 3]

[[instrument]]
code = "dyn-1"
folder = "exports/dyn-1"
files = "*.csv"
rest = "0s"
silent = "10d"
used = { until = 2026-02-10 }
serial = { preamble = "Serial", is = "A1" }

[instrument.reader]
format = "delimited"
header = { starts_with = "Subject" }
subject = { column = "Subject" }
taken_at = { column = "Taken", format = "iso" }

[[instrument.reader.value]]
measure = "grip"
column = "Grip"

[[instrument]]
code = "dyn-2"
folder = "exports/dyn-2"
files = "*.csv"
rest = "0s"
used = { from = 2026-02-01 }
correct = [{ from = 2026-03-01, times = 1.002, plus = 0 }]

[instrument.reader]
format = "delimited"
header = { starts_with = "Subject" }
subject = { column = "Subject" }
taken_at = { column = "Taken", format = "iso" }

[[instrument.reader.value]]
measure = "grip"
column = "Force"
unit = { code = "N", times = 0.1019716, plus = 0 }

[[analysis]]
code = "grip-over-visits"
measure = "grip"
method = "repeated-measures"
"#;

fn rows(day: &str, values: [f64; 3]) -> String {
    let one = |(at, value): (usize, &f64)| {
        let subject = format!("B-0{}", at + 1);
        format!("{subject},{day}T09:00:00,{value}\n{subject},{day}T09:01:00,{}\n", value + 1.0)
    };
    values.iter().enumerate().map(one).collect()
}

fn dyn_1(serial: &str, rows: &str) -> String {
    format!("Serial: {serial}\nSubject,Taken,Grip\n{rows}")
}

fn dyn_2(rows: &str) -> String {
    format!("Subject,Taken,Force\n{rows}")
}

/// The whole story: the first instrument at the start, both at week 4, the second at week 8.
fn story() -> Site {
    let site = crate::site(PLAN, ROSTER);
    site.drop_export("exports/dyn-1/start.csv", dyn_1("A1", &rows("2026-01-05", [30.0, 40.0, 25.0])));
    site.drop_export("exports/dyn-1/bridge.csv", dyn_1("A1", &rows("2026-02-02", [31.0, 42.0, 26.0])));
    site.drop_export("exports/dyn-2/bridge.csv", dyn_2(&rows("2026-02-02", [305.0, 410.0, 260.0])));
    site.drop_export("exports/dyn-2/march.csv", dyn_2(&rows("2026-03-02", [320.0, 420.0, 270.0])));
    site.collect();
    site
}

fn of<'r>(readings: &'r [Json], instrument: &str, visit: &str) -> Vec<&'r Json> {
    readings.iter().filter(|row| row["instrument"] == instrument && row["visit"] == visit).collect()
}

#[test]
fn on_a_bridging_day_both_instruments_count_their_own_replicates() {
    let site = story();
    assert_eq!(site.holds(), Vec::<Json>::new(), "no replicate is one too many");
    let readings = site.readings();
    for instrument in ["dyn-1", "dyn-2"] {
        let replicates: Vec<Json> =
            of(&readings, instrument, "week-4").iter().map(|row| row["replicate"].clone()).collect();
        assert_eq!(replicates, [1, 2, 1, 2, 1, 2].map(|number| json!(number)), "{instrument}");
    }
    let complete = site.json(&["completeness", "--on", "2026-03-31"]);
    assert_eq!(complete["totals"]["complete"], 3, "{complete}");
    let bridge = &complete["subjects"][0]["visits"][1];
    assert_eq!(
        (&bridge["state"], &bridge["measures"][0]["expected"], &bridge["measures"][0]["current"]),
        (&json!("complete"), &json!(2), &json!(2))
    );
}

#[test]
fn a_correction_holds_from_its_day_on_and_the_exported_value_stays() {
    let site = story();
    let readings = site.readings();
    let before = of(&readings, "dyn-2", "week-4")[0];
    let after = of(&readings, "dyn-2", "week-8")[0];
    let value = |row: &Json| row["value"].as_f64().unwrap();
    assert!((value(before) - 305.0 * 0.101_971_6).abs() < 1e-9, "not yet corrected");
    assert!((value(after) - 320.0 * 0.101_971_6 * 1.002).abs() < 1e-9, "{after}");
    assert_eq!(after["as_written"], "320");
    let number = after["reading"].to_string();
    let shown = site.json(&["provenance", &number]);
    assert_eq!((&shown["exported"], &shown["exported_unit"]), (&json!(320.0), &json!("N")));
    assert_eq!(shown["correction"], json!({ "from": "2026-03-01", "times": 1.002, "plus": 0.0 }));
    assert_eq!(site.json(&["provenance", &before["reading"].to_string()])["correction"], Json::Null);
    let text = site.ok(&["provenance", &number]).stdout;
    assert!(
        text.contains("Written:   320 N\nCorrected: × 1.002 (the plan's correction from 2026-03-01 on)\n"),
        "{text}"
    );
    // The day is that of the study centre: in summer, half past eleven in the evening in UTC is the next day there.
    let plan = PLAN
        .replace("from = 2026-03-01, times", "from = 2026-05-01, times")
        .replace("used = { from = 2026-02-01 }", "");
    let site = crate::site(&plan, ROSTER);
    let late = "B-01,2026-04-30T22:59:00Z,300\nB-01,2026-04-30T23:30:00Z,300\n";
    site.drop_export("exports/dyn-2/may.csv", dyn_2(late));
    site.collect();
    let values: Vec<f64> = site.readings().iter().map(value).collect();
    assert!((values[1] / values[0] - 1.002).abs() < 1e-12, "{values:?}");
}

#[test]
fn a_result_says_which_instruments_took_part() {
    let site = story();
    let result = site.json(&["analyse", "grip-over-visits"]);
    let notes: Vec<&str> = result["notes"].as_array().unwrap().iter().filter_map(Json::as_str).collect();
    for note in [
        "Two instruments took part; readings of each: dyn-1 (start 6, week-4 6), dyn-2 (week-4 6, week-8 6).",
        "The numbers of 6 readings of dyn-2 are corrected by the plan's `correct`.",
        "In 3 cells several instruments gave readings; all of them make up the cell's number.",
    ] {
        assert!(notes.contains(&note), "{note}\nis not among\n{}", notes.join("\n"));
    }
    assert_eq!(
        result["data_state"]["took_part"],
        json!([
            { "instrument": "dyn-1", "readings": { "start": 6, "week-4": 6 }, "corrected": 0, "outside_use": 0 },
            { "instrument": "dyn-2", "readings": { "week-4": 6, "week-8": 6 }, "corrected": 6, "outside_use": 0 },
        ])
    );
    // All four replicates of a bridging day make up the cell: (31 + 32) kg and (305 + 306) N, for the first subject.
    let newton = 0.101_971_6;
    let means = [
        (31.0 + 32.0 + (305.0 + 306.0) * newton) / 4.0,
        (42.0 + 43.0 + (410.0 + 411.0) * newton) / 4.0,
        (26.0 + 27.0 + (260.0 + 261.0) * newton) / 4.0,
    ];
    let mean = result["cells"][1]["mean"].as_f64().unwrap();
    assert!((mean - means.iter().sum::<f64>() / 3.0).abs() < 1e-9, "{mean} and {means:?}");
    // The planned number is reached, although one instrument gave too few on another day.
    assert_eq!(result["data_state"]["fewer_replicates"], json!([]));
}

#[test]
fn replicates_of_two_instruments_do_not_make_up_for_each_other() {
    let site = crate::site(PLAN, ROSTER);
    site.drop_export("exports/dyn-1/a.csv", dyn_1("A1", "B-01,2026-02-02T09:00:00,31\n"));
    site.drop_export("exports/dyn-2/a.csv", dyn_2("B-01,2026-02-02T09:05:00,305\n"));
    site.collect();
    let complete = site.json(&["completeness", "--on", "2026-03-31"]);
    assert_eq!(complete["subjects"][0]["visits"][1]["state"], "partial");
    let result = site.json(&["analyse", "grip-over-visits"]);
    let few = list(result["data_state"]["fewer_replicates"].clone());
    assert_eq!((few.len(), &few[0]["current"], &few[0]["planned"]), (1, &json!(1), &json!(2)), "{few:?}");
}

fn line(site: &Site, instrument: &str) -> Json {
    let lines = list(site.json(&["status"])["instruments"].clone());
    lines.into_iter().find(|line| line["instrument"] == instrument).unwrap()
}

#[test]
fn a_replaced_instrument_is_not_quiet() {
    let quiet = |plan: &str| {
        let site = crate::site(plan, ROSTER);
        site.drop_export("exports/dyn-1/start.csv", dyn_1("A1", &rows("2026-01-05", [30.0, 40.0, 25.0])));
        site.drop_export("exports/dyn-2/march.csv", dyn_2(&rows("2026-03-02", [320.0, 420.0, 270.0])));
        // Written on the day of its sessions; sessions have taken place since.
        let file = std::fs::File::options().write(true).open(site.path("exports/dyn-1/start.csv")).unwrap();
        let written = std::time::UNIX_EPOCH + std::time::Duration::from_secs(1_767_612_000);
        file.set_modified(written).unwrap();
        site.collect();
        line(&site, "dyn-1")["silent"].clone()
    };
    assert_eq!(quiet(&PLAN.replace("used = { until = 2026-02-10 }\n", "")), true, "it is said to be in use");
    assert_eq!(quiet(PLAN), false, "its use has ended");
}

#[test]
fn readings_outside_an_instrument_s_use_are_filed_and_noted() {
    let site = story();
    let late = dyn_1("A1", "B-01,2026-03-02T10:00:00,33\nB-01,2026-03-02T10:01:00,33\n");
    site.drop_export("exports/dyn-1/late.csv", late);
    site.collect();
    assert_eq!(line(&site, "dyn-1")["outside_use"], 2);
    assert_eq!(line(&site, "dyn-2")["outside_use"], 0);
    let status = site.ok(&["status"]).stdout;
    assert!(status.contains("2 readings outside its use"), "{status}");
    let result = site.json(&["analyse", "grip-over-visits"]);
    let note = "Taken outside the instrument's use, and used: 2 readings of dyn-1 (in use until 2026-02-10).";
    assert!(result["notes"].as_array().unwrap().contains(&json!(note)), "{result}");
}

#[test]
fn another_serial_number_is_held_and_can_be_answered() {
    let site = crate::site(PLAN, ROSTER);
    site.drop_export("exports/dyn-1/a.csv", dyn_1("Z9", &rows("2026-01-05", [30.0, 40.0, 25.0])));
    site.drop_export("exports/dyn-1/b.csv", dyn_1("Z9", &rows("2026-02-02", [30.0, 40.0, 25.0])));
    site.collect();
    let holds = site.holds();
    let reasons: Vec<&Json> = holds.iter().map(|hold| &hold["reason"]).collect();
    assert_eq!((reasons, site.readings().len()), (vec![&json!("other-instrument"); 2], 0));
    assert!(holds[0]["wrong"].as_str().unwrap().contains("Z9"), "{holds:?}");
    // A person has seen it: this file is filed all the same, the other waits still.
    let hold = holds[0]["hold"].to_string();
    site.ok(&["holds", "decide", &hold, "--as-it-stands", "--why", "lent by the ward while A1 was repaired"]);
    assert_eq!((site.holds().len(), site.readings().len()), (1, 6));
    // The plan says that the instrument is another one now: what is held settles by itself.
    site.write("study.toml", PLAN.replace("is = \"A1\"", "is = \"Z9\""));
    site.collect();
    assert_eq!((site.holds().len(), site.readings().len()), (0, 12));
    let status = site.json(&["status"]);
    assert_eq!(status["exports"]["filed"], 2);
}

#[test]
fn a_correction_that_comes_later_is_adopted() {
    let site = crate::site(&PLAN.replace("correct = [{ from = 2026-03-01, times = 1.002, plus = 0 }]\n", ""), ROSTER);
    site.drop_export("exports/dyn-2/march.csv", dyn_2(&rows("2026-03-02", [320.0, 420.0, 270.0])));
    site.collect();
    site.write("study.toml", PLAN);
    let refused = site.run(&["collect"]);
    assert_eq!(refused.code, Some(2), "filed values would change: {}", refused.shown());
    site.ok(&["collect", "--adopt", "--why", "certificate of March: reads 0.2 % low"]);
    let readings = site.readings();
    let (old, new): (Vec<&Json>, Vec<&Json>) = readings.iter().partition(|row| row["state"] == "superseded");
    assert_eq!((old.len(), new.len()), (6, 6));
    let ratio = new[0]["value"].as_f64().unwrap() / old[0]["value"].as_f64().unwrap();
    assert!((ratio - 1.002).abs() < 1e-12);
    let result = site.json(&["analyse", "grip-over-visits"]);
    assert!(result["notes"].to_string().contains("6 readings of dyn-2 are corrected"), "{result}");
}
