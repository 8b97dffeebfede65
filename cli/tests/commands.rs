//! The commands on a small invented study, within this process.

#![allow(clippy::unwrap_used, clippy::panic, reason = "a test ends where it fails")]

mod common;

use std::io::{self, Write};
use std::sync::Arc;

use common::{PLAN, ROSTER, Study, run_in};
use revisant::error::Exit;
use revisant::output::Out;
use revisant_schema::world::RealWorld;
use serde_json::{Value as Json, json};

// ---- roster ----

#[test]
fn all_faults_of_a_roster_come_at_once_and_leave_no_trace() {
    let study = Study::bare(PLAN);
    study.write(
        "roster.csv",
        "subject,enrolled,withdrawn,sex\nGR-001,2025-01-06,,F\nGR-001,2025-01-06,,F\nX,2025-01-06,,F\nGR-002,soon,,Q\n",
    );
    let ran = study.run(&["roster", "import", &study.path("roster.csv"), "--json"]);
    assert_eq!(ran.exit, Exit::Failed);
    let lines: Vec<u64> =
        ran.error()["faults"].as_array().unwrap().iter().map(|it| it["line"].as_u64().unwrap()).collect();
    assert_eq!(lines, [3, 4, 5, 5]);
    assert!(!study.folder.path().join("records").exists(), "nothing was made");
}

#[test]
fn a_changed_cell_owes_a_reason() {
    let study = Study::begun();
    study.write("roster.csv", &ROSTER.replace("GR-002,2025-01-06,,M,68", "GR-002,2025-01-06,,M,86"));
    let file = study.path("roster.csv");
    let ran = study.run(&["roster", "import", &file, "--json"]);
    assert_eq!((ran.exit, ran.error()["kind"].clone()), (Exit::Failed, json!("reason-owed")));
    let faults = ran.error()["faults"].clone();
    assert_eq!(faults, json!([{ "subject": "GR-002", "field": "age", "before": "68", "after": "86" }]));
    study.run(&["roster", "import", &file, "--why", "misheard"]).well();
    let list = study.run(&["roster", "list", "--json"]).well().json();
    assert_eq!(list[1]["attributes"]["age"], "86");
    let again = study.run(&["roster", "import", &file, "--json"]).well().json();
    assert_eq!(again["trail"], Json::Null, "an import that changes nothing is no act");
}

#[test]
fn subjects_come_and_go_one_by_one() {
    let study = Study::begun();
    let added = study.run(&[
        "roster",
        "add",
        "gr_006",
        "--enrolled",
        "2025-02-01",
        "--set",
        "age=70",
        "--why",
        "late",
        "--json",
    ]);
    assert_eq!(added.well().json()["new"], json!(["GR-006"]));
    let twice = study.run(&["roster", "add", "GR-006", "--enrolled", "2025-02-01", "--why", "late"]);
    assert_eq!(twice.exit, Exit::Failed);
    study.run(&["roster", "withdraw", "GR-006", "--on", "2025-02-03", "--data", "keep", "--why", "moved"]).well();
    let remove =
        study.run(&["roster", "withdraw", "GR-006", "--on", "2025-02-03", "--data", "remove", "--why", "moved"]);
    assert_eq!(remove.exit, Exit::Usage);
    let early = study.run(&["roster", "withdraw", "GR-001", "--on", "2024-02-03", "--data", "keep", "--why", "moved"]);
    assert!(early.err.contains("before the enrolment"), "{early:?}");
}

// ---- readings by hand ----

const LEFT: [&str; 9] =
    ["enter", "--subject", "GR-001", "--measure", "grip", "--condition", "hand=left", "--why", "export failed"];

fn enter(study: &Study, value: &str, at: &str) -> common::Ran {
    study.run(&[&LEFT[..], &["--value", value, "--taken-at", at, "--json"]].concat())
}

#[test]
fn a_reading_by_hand_is_held_to_the_same_rules() {
    let study = Study::begun();
    let reading = enter(&study, "31.50", "2025-01-06T09:40:00Z").well().json()["reading"].as_i64().unwrap();
    let shown = &study.run(&["readings", "--json"]).well().json()[0];
    assert_eq!(shown["reading"], reading);
    assert_eq!(
        (&shown["visit"], &shown["source"], &shown["replicate"]),
        (&json!("baseline"), &json!("by-hand"), &json!(1))
    );
    assert_eq!((&shown["value"], &shown["as_written"]), (&json!(31.5), &json!("31.50")));
    assert_eq!((&shown["instrument"], &shown["export"], &shown["where"]), (&Json::Null, &Json::Null, &Json::Null));
    for (value, at, wrong) in [
        ("315", "2025-01-06", "plausible"),
        ("31,5", "2025-01-06", "no number"),
        ("31.5", "2999-01-01", "future"),
        ("31.5", "2024-12-31", "before the enrolment"),
    ] {
        let ran = enter(&study, value, at);
        assert!(ran.exit != Exit::Done && ran.err.contains(wrong), "{value} {at}: {ran:?}");
    }
    enter(&study, "30", "2025-01-06").well();
    assert!(enter(&study, "30", "2025-01-06").err.contains("all 2 replicates"));
    let date = &study.run(&["readings", "--json"]).well().json()[1];
    assert_eq!((&date["taken_at"], &date["replicate"]), (&json!("2025-01-06"), &json!(2)));
}

#[test]
fn what_is_amended_struck_and_restored_stays_linked() {
    let study = Study::begun();
    study.export("a.csv", &Study::session("GR-001", "2025-01-06", 30.0));
    study.run(&["collect"]).well();
    let amended = study.run(&["amend", "reading", "1", "--value", "33", "--why", "misread", "--json"]).well().json();
    assert_eq!(amended["readings"], json!([{ "reading": 5, "supersedes": 1 }]));
    let shown = study.run(&["provenance", "5", "--json"]).well().json();
    assert_eq!((&shown["source"], &shown["line"], &shown["value"]), (&json!("amended"), &json!(2), &json!(33.0)));
    assert_eq!(shown["text"], "GR-001,2025-01-06T09:00,1,29,29");
    let acts: Vec<&str> = shown["history"].as_array().unwrap().iter().map(|act| act["act"].as_str().unwrap()).collect();
    assert_eq!(acts, ["file", "amend"]);
    assert!(study.run(&["amend", "reading", "1", "--value", "34", "--why", "again"]).err.contains("superseded"));
    study.run(&["strike", "5", "2", "--why", "wrong grip"]).well();
    let states = study.run(&["readings", "--json"]).well().json();
    let state = |at: usize| states[at]["state"].as_str().unwrap().to_owned();
    assert_eq!([state(0), state(1), state(4)], ["superseded", "struck", "struck"]);
    study.run(&["restore", "5", "--why", "right after all"]).well();
    assert!(study.run(&["restore", "5", "--why", "again"]).err.contains("not struck"));
    study.run(&["trail", "verify"]).well();
}

#[test]
fn two_sessions_change_subjects() {
    let study = Study::begun();
    let rows = [Study::session("GR-001", "2025-01-06", 30.0), Study::session("GR-002", "2025-01-07", 40.0)].concat();
    study.export("a.csv", &rows);
    study.run(&["collect"]).well();
    let before = study.run(&["readings", "--json"]).well().json();
    let session = |at: usize| before[at]["session"].to_string();
    study.run(&["amend", "session", &session(0), "--swap-with", &session(4), "--why", "bands swapped"]).well();
    let now = study.run(&["readings", "--subject", "GR-001", "--json"]).well().json();
    let current: Vec<&Json> = now.as_array().unwrap().iter().filter(|row| row["state"] == "current").collect();
    assert_eq!(current.len(), 4);
    assert!(current.iter().all(|row| row["value"].as_f64().unwrap() >= 39.0));
    study.run(&["trail", "verify"]).well();
}

// ---- holds ----

#[test]
fn many_holds_are_answered_only_with_their_number() {
    let study = Study::begun();
    study.export(
        "a.csv",
        "GR-00l,2025-01-06T09:00,1,30,31\nGR-00l,2025-01-06T09:01,2,30,31\nGR-9,2025-01-06T09:01,2,30,31\n",
    );
    study.run(&["collect"]).well();
    let shown = study.run(&["holds", "show", "1", "--json"]).well().json();
    assert_eq!((&shown["reason"], &shown["like_it"]), (&json!("unknown-subject"), &json!(2)));
    assert!(shown["commands"][0].as_str().unwrap().contains("--subject GR-001"), "{shown}");
    let decide = ["holds", "decide", "1", "--subject", "GR-001"];
    let seen = study.run(&[&decide[..], &["--all-like-it"]].concat());
    assert!(seen.exit == Exit::Usage && seen.err.contains("2 open holds are like hold 1"), "{seen:?}");
    let wrong = study.run(&[&decide[..], &["--all-like-it", "3", "--why", "l is 1"]].concat());
    assert_eq!(wrong.exit, Exit::Usage);
    let wrong = study.run(&["holds", "decide", "1", "--keep-old", "--why", "x"]);
    assert!(wrong.exit == Exit::Usage && wrong.err.contains("--subject CODE"), "{wrong:?}");
    let done = study.run(&[&decide[..], &["--all-like-it", "2", "--why", "l is 1", "--json"]].concat()).well().json();
    assert_eq!((&done["holds"], &done["filed"]), (&json!([1, 2]), &json!(4)));
    study.run(&["holds", "dismiss", "3", "--why", "nobody"]).well();
    assert_eq!(study.run(&["holds", "--json"]).well().json(), json!([]));
    assert_eq!(study.run(&["holds", "list", "--all", "--json"]).well().json().as_array().unwrap().len(), 3);
    let none = study.run(&["holds", "show", "9", "--json"]);
    assert_eq!((none.exit, none.error()["kind"].clone()), (Exit::Failed, json!("refused")));
}

// ---- completeness ----

#[test]
fn who_is_due_and_who_is_accounted_for() {
    let study = Study::begun();
    study.export("a.csv", &Study::session("GR-001", "2025-01-06", 30.0));
    study.run(&["collect"]).well();
    let due = study.run(&["due", "--on", "2025-02-01", "--json"]).well().json();
    assert_eq!(due["due"][0]["visit"], "week-4");
    assert_eq!(due["due"].as_array().unwrap().len(), 4, "the withdrawn subject is not due");
    let strict = ["completeness", "--on", "2025-01-20", "--strict"];
    assert_eq!(study.run(&strict).exit, Exit::Found);
    for subject in ["GR-002", "GR-003", "GR-004", "GR-005"] {
        study.run(&["account", subject, "baseline", "--why", "device broken"]).well();
    }
    assert_eq!(study.run(&strict).exit, Exit::Done);
    assert!(study.run(&["account", "GR-002", "week-5", "--why", "x"]).err.contains("week-4"));
}

// ---- analysis ----

fn analysed() -> Study {
    let study = Study::begun();
    let mut rows = String::new();
    for (subject, values) in
        [("GR-001", [30.0, 32.0, 35.0]), ("GR-002", [40.0, 41.0, 42.5]), ("GR-003", [35.0, 37.0, 37.5])]
    {
        for (day, value) in ["2025-01-06", "2025-02-03", "2025-03-03"].into_iter().zip(values) {
            rows.push_str(&Study::session(subject, day, value));
        }
    }
    // GR-003 came late for week 4 as well; GR-004 squeezed the left hand once only at week 4.
    rows = rows.replace("GR-003,2025-02-03", "GR-003,2025-02-10").replace("GR-003,2025-03-03", "GR-003,2025-03-10");
    rows.push_str(&Study::session("GR-004", "2025-01-06", 33.0));
    rows.push_str("GR-004,2025-02-03T09:00,1,33,33\nGR-004,2025-02-03T09:01,2,,34\n");
    rows.push_str(&Study::session("GR-005", "2025-01-07", 28.0));
    study.export("a.csv", &rows);
    study.run(&["collect"]).well();
    study
}

#[test]
fn whoever_is_left_out_has_a_reason() {
    let study = analysed();
    let result = study.run(&["analyse", "grip-over-visits", "--json"]).well().json();
    assert_eq!(
        result["subjects"],
        json!({
            "enrolled": 5, "with_any": 5, "used": 3,
            "left_out": [
                { "subject": "GR-004", "why": "no reading at week-8; week-4: 1 of the 2 replicates needed" },
                { "subject": "GR-005", "why": "withdrawn before week-4 and week-8" }
            ],
            "mixed_model_would_use": 5
        })
    );
    let means: Vec<f64> =
        result["cells"].as_array().unwrap().iter().map(|cell| cell["mean"].as_f64().unwrap()).collect();
    assert!(means.iter().zip([35.0, 110.0 / 3.0, 115.0 / 3.0]).all(|(a, b)| (a - b).abs() < 1e-12), "{means:?}");
    assert_eq!(result["data_state"]["off_window"][0]["subject"], "GR-003");
    assert_eq!(result["data_state"]["fewer_replicates"][0]["condition"], json!({ "hand": "left" }));
    assert_eq!(result["effects"][0]["error"], "residual");
}

#[test]
fn sessions_outside_their_window_can_be_left() {
    let study = analysed();
    let result = study.run(&["analyse", "grip-on-time", "--json"]).well().json();
    let why = &result["subjects"]["left_out"][0];
    assert_eq!(why["subject"], "GR-003");
    assert_eq!(why["why"], "session at week-4 lies outside its window");
}

#[test]
fn a_condition_can_be_the_factor() {
    let study = analysed();
    let result = study.run(&["analyse", "hands", "--json"]).well().json();
    assert_eq!(result["cells"][0]["hand"], "left");
    assert_eq!((&result["subjects"]["used"], &result["effects"][0]["p"]), (&json!(5), &Json::Null));
    let notes = result["notes"].to_string();
    assert!(notes.contains("F is not defined"), "{notes}");
}

#[test]
fn looks_are_counted_by_what_they_saw() {
    let study = analysed();
    let run = || study.run(&["analyse", "grip-over-visits", "--json"]).well().json()["looked"].clone();
    assert_eq!((&run()["times"], &run()["runs"]), (&json!(1), &json!(2)));
    study.run(&["strike", "1", "--why", "slipped"]).well();
    let looked = run();
    assert_eq!((&looked["times"], &looked["runs"]), (&json!(2), &json!(3)));
    assert_eq!(looked["error_rate"], json!({ "looks": 2, "rate": 0.083 }));
    assert_eq!(looked["planned_before_results"], true);
    study.write("study.toml", &PLAN.replace("off_window = \"leave\"", "off_window = \"use\""));
    let changed = study.run(&["analyse", "grip-on-time", "--json"]).well().json();
    assert_eq!(changed["looked"]["planned_before_results"], false);
}

#[test]
fn a_cut_stays_as_it_was() {
    let study = analysed();
    study.run(&["cut", "make", "one", "--why", "half"]).well();
    let before = study.run(&["analyse", "grip-over-visits", "--cut", "one", "--json"]).well().json();
    study.run(&["strike", "1", "--why", "slipped"]).well();
    study.run(&["cut", "make", "two", "--why", "end"]).well();
    let after = study.run(&["analyse", "grip-over-visits", "--cut", "one", "--json"]).well().json();
    assert_eq!((&before["effects"], &before["as_of"]), (&after["effects"], &after["as_of"]));
    assert_eq!(after["as_of"]["cut"], "one");
    let compared = study.run(&["cut", "compare", "one", "two", "--json"]).well().json();
    assert_eq!((compared["gone"][0]["reading"].as_i64(), compared["new"].clone()), (Some(1), json!([])));
    assert_eq!(study.run(&["cut", "make", "one", "--why", "x"]).exit, Exit::Failed);
    assert_eq!(study.run(&["cut", "make", "One!", "--why", "x"]).exit, Exit::Usage);
}

#[test]
fn what_is_not_there_yet_is_said_in_one_sentence() {
    let study = analysed();
    let ran = study.run(&["analyse", "model", "--json"]);
    assert_eq!((ran.exit, ran.error()["kind"].clone()), (Exit::Usage, json!("not-yet")), "{ran:?}");
    assert!(ran.error()["message"].as_str().unwrap().contains("mixed model"));
    assert!(study.run(&["analyse", "grip"]).err.contains("grip-over-visits"));
}

#[test]
fn the_plot_is_well_formed_and_says_who_was_left_out() {
    let study = analysed();
    let file = study.path("profiles.svg");
    study.run(&["analyse", "grip-over-visits", "--plot", &file]).well();
    let svg = std::fs::read_to_string(file).unwrap();
    assert!(svg.contains("Grip strength (kg): profiles of 3 subjects"));
    assert!(svg.contains("week-8 · 56"), "days run on along `after`");
    let words = svg.replace("</text>\n", " ");
    let words: String = words.split('<').map(|part| part.rsplit_once('>').map_or(part, |it| it.1)).collect();
    assert!(words.contains("GR-005: withdrawn before week-4 and week-8"), "{words}");
    assert_eq!(svg.matches("<polyline").count(), 4, "three subjects and the mean; one visit alone is a circle");
    assert_eq!(svg.matches('<').count(), svg.matches('>').count());
}

// ---- all of them ----

#[test]
fn nothing_is_wider_than_the_terminal() {
    let study = analysed();
    for args in [
        &["readings"][..],
        &["analyse", "grip-over-visits"],
        &["analyse", "ranks", "--checks"],
        &["completeness", "--on", "2025-04-01"],
        &["due", "--on", "2025-02-01"],
        &["status"],
        &["trail"],
        &["roster", "list"],
        &["provenance", "1"],
        &["holds"],
    ] {
        let ran = study.run(args).well();
        for line in ran.out.lines() {
            let wide = line.starts_with("Row:") || line.starts_with("SHA-256:");
            assert!(line.chars().count() <= 80 || wide, "{args:?}: {line}");
        }
        assert!(!ran.out.contains("NaN") && !ran.out.contains("inf"), "{}", ran.out);
    }
}

#[test]
fn failures_have_one_shape() {
    let folder = tempfile::TempDir::new().unwrap();
    let none = run_in(folder.path(), &["readings", "--json"]);
    assert_eq!((none.exit, none.error()["kind"].clone()), (Exit::Failed, json!("no-records")));
    let no_plan = run_in(folder.path(), &["check", "--json"]);
    assert_eq!((no_plan.exit, no_plan.error()["kind"].clone()), (Exit::Usage, json!("no-plan")));
    let usage = run_in(folder.path(), &["reading", "--json"]);
    assert_eq!((usage.exit, usage.error()["kind"].clone()), (Exit::Usage, json!("usage")));
    let lost = run_in(&folder.path().join("nowhere"), &["status", "--json"]);
    assert_eq!(lost.exit, Exit::Usage);
    let study = Study::bare(&PLAN.replace("unit = \"kg\"", "unitt = \"kg\""));
    let unsound = study.run(&["check", "--json"]);
    assert_eq!((unsound.exit, unsound.error()["kind"].clone()), (Exit::Usage, json!("unsound-plan")));
    assert!(unsound.error()["faults"][0]["line"].as_u64().is_some());
}

#[test]
fn a_new_plan_passes_check_and_is_never_overwritten() {
    let folder = tempfile::TempDir::new().unwrap();
    let study = folder.path().join("grip");
    let args = [
        "new",
        "--code",
        "GR-1",
        "--title",
        "Grip",
        "--zone",
        "Europe/London",
        "--measure",
        "grip:kg",
        "--visit",
        "baseline:0",
        "--visit",
        "week-4:28",
        "--instrument",
        "dyn:exports/dyn",
    ];
    run_in(&study, &args).well();
    run_in(&study, &["check"]).well();
    assert!(run_in(&study, &args).err.contains("never overwritten"));
    let unsound = run_in(
        &folder.path().join("other"),
        &[
            "new",
            "--code",
            "G",
            "--title",
            "",
            "--zone",
            "Mars/Dome",
            "--measure",
            "grip:kg",
            "--visit",
            "a:0",
            "--instrument",
            "d:e",
        ],
    );
    assert_eq!(unsound.exit, Exit::Usage);
    assert!(!folder.path().join("other").exists());
}

#[test]
fn what_was_done_is_said_in_words() {
    let study = Study::begun();
    let rows = Study::session("GR-001", "2025-01-06", 31.0);
    study.export("a.csv", &rows);
    study.export("b.csv", &rows);
    study.run(&["collect"]).well();
    let status = study.run(&["status"]).well().out;
    assert!(status.contains("repeat") && status.contains("the same bytes as"), "{status}");
    let args = ["roster", "withdraw", "GR-001", "--on", "2025-02-01", "--data", "keep", "--why", "moved"];
    let withdrawn = study.run(&args).well().out;
    assert!(withdrawn.starts_with("GR-001 is withdrawn on 2025-02-01; the data"), "{withdrawn}");
    let trail = study.run(&["trail"]).well().out;
    for internal in ["capture", "stood_at", "repeat_of"] {
        assert!(!trail.contains(internal), "{trail}");
    }
    let trail: String = trail.split_whitespace().collect::<Vec<_>>().join(" ");
    assert!(trail.contains("4 readings") && trail.contains("the same bytes as before"), "{trail}");
}

#[test]
fn a_mended_reader_is_adopted_only_on_purpose() {
    let study = Study::begun();
    study.export("a.csv", "GR-001,2025-01-06T09:00,1,30,31\n");
    study.run(&["collect"]).well();
    let right = "column = \"Right\"\ncondition = { hand = \"right\" }";
    study.write("study.toml", &PLAN.replace(right, &right.replace("Right", "Left")));
    let ran = study.run(&["check", "--json"]);
    assert_eq!((ran.exit, ran.json()["would_change"].as_array().unwrap().len()), (Exit::Found, 1));
    let refused = study.run(&["collect", "--json"]);
    assert_eq!((refused.exit, refused.error()["kind"].clone()), (Exit::Usage, json!("differently")));
    assert_eq!(study.run(&["collect", "--adopt"]).exit, Exit::Usage, "a reason is owed");
    study.run(&["collect", "--adopt", "--why", "columns mixed up"]).well();
    let readings = study.run(&["readings", "--json"]).well().json();
    let states: Vec<&str> = readings.as_array().unwrap().iter().map(|row| row["state"].as_str().unwrap()).collect();
    assert_eq!(states, ["current", "superseded", "current"]);
    assert_eq!((&readings[2]["value"], &readings[2]["supersedes"]), (&json!(30.0), &json!(2)));
    study.run(&["trail", "verify"]).well();
}

/// A reader that went away.
struct Closed;

impl Write for Closed {
    fn write(&mut self, _: &[u8]) -> io::Result<usize> {
        Err(io::Error::from(io::ErrorKind::BrokenPipe))
    }
    fn flush(&mut self) -> io::Result<()> {
        Err(io::Error::from(io::ErrorKind::BrokenPipe))
    }
}

#[test]
fn a_reader_that_went_away_ends_it_quietly() {
    let study = analysed();
    let mut out = Out::new(Box::new(Closed), Box::new(io::sink()));
    let args = ["revisant", "readings", "--json", "--study", &study.path("")].map(Into::into);
    assert_eq!(revisant::run(args, &mut out, Arc::new(RealWorld)), Exit::Done);
}
