//! `rehearse --size` from outside: the number of subjects that a plan's assumptions ask for.

use std::fs;
use std::path::PathBuf;

use revisant_tests::site::Site;
use serde_json::Value as Json;

use crate::PROGRAMS;

/// A plan of one group without arms, up to its assumptions.
fn plan(visits: usize) -> String {
    let mut plan = "[study]\ncode = \"SZ-1\"\ntitle = \"Size\"\ntime_zone = \"Europe/London\"\n\
         enrol = { target = 20, from = 2026-02-02, until = 2026-08-31 }\n\n\
         [subject]\npattern = 'SZ-\\d{3}'\nnormalise = [\"trim\"]\nanchor = \"enrolment\"\n\n\
         [[measure]]\ncode = \"grip\"\nunit = \"kg\"\n"
        .to_owned();
    for visit in 0..visits {
        plan.push_str(&format!("\n[[visit]]\ncode = \"week-{visit}\"\nday = {}\n", 7 * visit));
    }
    plan
}

fn arms(plan: &str) -> String {
    plan.replace("\n[[measure]]", "\n[[arm]]\ncode = \"band\"\n\n[[arm]]\ncode = \"stretch\"\n\n[[measure]]")
}

const ONE_GROUP: &str = "\n[assume]\nmeans = [30, 31, 31, 32]\nsd = [3, 3, 3, 3]\n\
    correlation = { compound_symmetry = 0.6 }\ndropout = 0.1\npower = 0.8\n";
const TWO_ARMS: &str = "\n[assume]\nmeans = { band = [31, 32.5, 33], stretch = [31, 31, 31] }\nsd = [4, 4, 4.5]\n\
    correlation = { ar1 = 0.8 }\ndropout = 0.15\npower = 0.9\n";
const ANALYSES: &str = "\n[[analysis]]\ncode = \"ends\"\nmeasure = \"grip\"\nmethod = \"repeated-measures\"\n\
    visits = [\"week-0\", \"week-2\"]\nbetween = [\"arm\"]\nconfidence = 0.99\n\
    \n[[analysis]]\ncode = \"ranks\"\nmeasure = \"grip\"\nmethod = \"friedman\"\n";

fn site(plan: &str) -> Site {
    let site = Site::new(PROGRAMS);
    site.write("study.toml", plan);
    site
}

fn sized(plan: &str, args: &[&str]) -> Json {
    let args: Vec<&str> = ["rehearse", "--size"].iter().chain(args).copied().collect();
    site(plan).json(&args)
}

fn close(found: &Json, wanted: f64, rtol: f64) -> bool {
    found.as_f64().is_some_and(|found| (found - wanted).abs() <= rtol * wanted.abs())
}

/// The designs of `power/one_group.json` beside the numerical crate, whose sources stand there.
#[test]
fn published_numbers_of_subjects_come_out_of_the_plan() {
    let path = PathBuf::from(env!("CARGO_MANIFEST_DIR")).join("../cli/analysis/tests/reference/power/one_group.json");
    let case: Json = serde_json::from_str(&fs::read_to_string(path).unwrap()).unwrap();
    let mut designs = 0;
    for (name, design) in case["config"].as_object().unwrap() {
        let expected = |key: &str| case["expected"][format!("{name}.{key}")]["v"].as_f64().unwrap();
        let visits = design["means"].as_array().unwrap().len();
        let structure = if design["structure"] == "cs" { "compound_symmetry" } else { "ar1" };
        let assume = format!(
            "\n[assume]\nmeans = {}\nsd = {:?}\ncorrelation = {{ {structure} = {} }}\ndropout = 0\npower = {}\n",
            design["means"],
            vec![1.0; visits],
            design["rho"],
            design["target"]
        );
        let alpha = design["alpha"].to_string();
        let found = sized(&(plan(visits) + &assume), &["--alpha", &alpha, "--runs", "400"]);
        let (wanted, planned) = (&found["wanted"], &found["planned"]);
        assert_eq!(wanted["per_group"].as_f64(), Some(expected("n")), "{name}: {found}");
        assert_eq!(wanted["enrolled"], wanted["complete"], "{name}: without dropout");
        assert!(close(&wanted["formula"]["power"], expected("power"), 1e-8), "{name}: {found}");
        assert!(close(&wanted["formula"]["noncentrality"], expected("lambda"), 1e-8), "{name}: {found}");
        assert!(close(&found["epsilon"], expected("eps"), 1e-8), "{name}: {found}");
        assert!(close(&planned["formula"]["power"], expected("power_n20"), 1e-8), "{name}: {found}");
        // By simulation of 100,000 studies: 400 of them lie within four standard errors.
        let simulated = wanted["simulation"]["power"].as_f64().unwrap();
        assert!((simulated - expected("mc_power")).abs() < 4.0 * 0.025, "{name}: {simulated}");
        designs += 1;
    }
    assert_eq!(designs, 4);
}

#[test]
fn the_size_of_one_group_and_of_two_arms_is_said() {
    let one = site(&(plan(4) + ONE_GROUP));
    one.check_snapshot("rehearse/one-group", &one.ok(&["rehearse", "--size", "--runs", "400"]));
    let two = site(&(arms(&plan(3)) + ANALYSES + TWO_ARMS));
    two.check_snapshot("rehearse/two-arms", &two.ok(&["rehearse", "--size", "--runs", "400"]));
    let ends = ["rehearse", "--size", "--analysis", "ends", "--effect", "arm", "--runs", "200"];
    two.check_snapshot("rehearse/of-an-analysis", &two.ok(&ends));
    let text = two.ok(&["rehearse", "--size", "--runs", "200"]).stdout;
    assert!(text.lines().all(|line| line.chars().count() <= 80), "{text}");
}

#[test]
fn one_seed_gives_one_answer() {
    let plan = plan(4) + ONE_GROUP;
    let of = |seed: &str| sized(&plan, &["--runs", "300", "--seed", seed])["wanted"]["simulation"]["rejected"].clone();
    assert_eq!(of("7"), of("7"));
    assert_ne!(of("7"), of("8"));
}

#[test]
fn dropout_and_arms_make_up_the_number_to_enrol() {
    let found = sized(&(arms(&plan(3)) + TWO_ARMS), &["--runs", "200"]);
    assert_eq!(found["effect"], "arm:visit", "{found}");
    let wanted = &found["wanted"];
    let each = wanted["per_group"].as_u64().unwrap();
    let enrolled = (each as f64 / 0.85).ceil() as u64;
    assert_eq!((wanted["complete"].as_u64(), wanted["enrolled_per_group"].as_u64()), (Some(2 * each), Some(enrolled)));
    assert_eq!(wanted["enrolled"].as_u64(), Some(2 * enrolled));
    assert!(wanted["formula"]["power"].as_f64().unwrap() >= 0.9);
    // 17 of 20 stay.
    assert_eq!(found["planned"]["sizes"], serde_json::json!([9, 8]), "{found}");
}

/// Where the means change in the way in which readings vary most, the formula promises too much with any number.
#[test]
fn simulated_studies_ask_for_their_own_number_where_the_formula_is_too_hopeful() {
    let assume = "\n[assume]\nmeans = [30, 30.5, 31, 31.5, 32]\nsd = [6, 6, 6, 6, 6]\ncorrelation = { ar1 = 0.9 }\n\
                  dropout = 0\npower = 0.9\n";
    let found = sized(&(plan(5) + assume), &["--runs", "1000"]);
    let number = |of: &str| found[of]["per_group"].as_u64();
    assert!(number("by_simulation") > number("wanted"), "{found}");
    let ci = |end: usize| found["by_simulation"]["simulation"]["ci"][end].as_f64().unwrap();
    assert!(ci(0) <= 0.9 && 0.9 <= ci(1), "{found}");
    assert!(found["notes"].to_string().contains("not spherical"), "{found}");
}

#[test]
fn what_cannot_be_rehearsed_is_refused_in_words() {
    let two = arms(&plan(3)) + ANALYSES + TWO_ARMS;
    let flat = plan(4) + &ONE_GROUP.replace("[30, 31, 31, 32]", "[30, 30, 30, 30]");
    let few = plan(4).replace("target = 20", "target = 1") + ONE_GROUP;
    for (name, plan, args) in [
        ("whole", &two, vec![]),
        ("boundaries", &two, vec!["--boundaries"]),
        ("blinded", &two, vec!["--blinded"]),
        ("nothing-assumed", &plan(3), vec!["--size"]),
        ("friedman", &two, vec!["--size", "--analysis", "ranks"]),
        ("unknown-analysis", &two, vec!["--size", "--analysis", "other"]),
        ("no-arms", &(plan(4) + ONE_GROUP), vec!["--size", "--effect", "arm"]),
        ("alpha", &two, vec!["--size", "--alpha", "1"]),
        ("no-effect", &flat, vec!["--size"]),
        ("nobody-complete", &few, vec!["--size", "--runs", "10"]),
    ] {
        let site = site(plan);
        let args: Vec<&str> = ["rehearse"].into_iter().chain(args).collect();
        let ran = site.run(&args);
        assert!(matches!(ran.code, Some(1 | 2)), "{name}: {}", ran.shown());
        site.check_snapshot(&format!("rehearse/refused-{name}"), &ran);
        let json: Vec<&str> = args.iter().copied().chain(["--json"]).collect();
        site.run(&json).error();
    }
}
