//! Agreement through the whole program: reference cases, over replicates and instruments, what is said and drawn, and
//! readings that allow little.
//!
//! The published source of each case stands in its file, beside the numerical crate.

use revisant_tests::reference::{Case, Compared, find};
use serde_json::{Value as Json, json};

use crate::PROGRAMS;
use crate::reference::{at, cases, later_and_earlier};

use crate::small_study::{BASELINE, WEEK_4, study};

cases! { agreement:
    ba1986_large_meter_pair in "agreement"
    ba1986_methods in "agreement"
    shrout_fleiss in "agreement"
    synth_20x3 in "agreement"
    unequal_replicates in "agreement"
}

const FORMS: [(&str, &str); 6] = [
    ("ICC1", "ICC(1)"),
    ("ICCA1", "ICC(A,1)"),
    ("ICCC1", "ICC(C,1)"),
    ("ICC1k", "ICC(k)"),
    ("ICCAk", "ICC(A,k)"),
    ("ICCCk", "ICC(C,k)"),
];

/// All that an analysis of agreement over visits gives.
fn agreement(case: &Case) -> Compared<'_> {
    let plan = "[[analysis]]\ncode = \"agreement\"\nmeasure = \"response\"\nmethod = \"agreement\"\n";
    let site = case.collected(PROGRAMS, plan);
    let result = site.json(&["analyse", "agreement"]);
    let mut compared = Compared::new(case);
    compared.exactly("method", &result["method"], &json!("agreement"));
    for (form, name) in FORMS {
        let icc = find(&result["icc"], &[("form", name)]);
        for (key, pointer) in [("est", "/value"), ("F", "/f"), ("p", "/p"), ("ci_lo", "/ci/0"), ("ci_hi", "/ci/1")] {
            compared.key(&format!("{form}.{key}"), at(icc, pointer));
        }
    }
    for (key, field) in
        [("sw", "within_sd"), ("coef_196", "repeatability"), ("cv_rms", "within_cv"), ("df_within", "within_df")]
    {
        compared.key(&format!("repeat.{key}"), &result[field]);
    }
    compared.key("repeat.icc1_unequal", at(&result, "/one_way/icc"));
    compared.key("repeat.n0", at(&result, "/one_way/n0"));
    let change = result["smallest_detectable_change"].as_f64().map(|change| change / (1.96 * 2.0_f64.sqrt()));
    compared.key("repeat.sem_two_way_complete", &json!(change));
    for (level, against) in later_and_earlier(case) {
        limits(&mut compared, case, &result, level, against);
    }
    compared
}

/// The files have the earlier minus the later level.
fn limits(compared: &mut Compared<'_>, case: &Case, result: &Json, level: &str, against: &str) {
    let label = |code: &str| case.visits.iter().find(|(it, ..)| it == code).map_or("", |(_, label, _)| label.as_str());
    let key = |name: &str| format!("ba[{}-{}].{name}", label(against), label(level));
    let pair = find(&result["limits"], &[("level", level), ("against", against)]);
    let turned = |pointer: &str| json!(at(pair, pointer).as_f64().map(|value| 0.0 - value));
    let interval = |field: &str| json!([turned(&format!("/{field}/1")), turned(&format!("/{field}/0"))]);
    compared.key(&key("bias"), &turned("/bias"));
    compared.key(&key("sd"), &pair["sd"]);
    compared.key(&key("bias_ci"), &interval("bias_ci"));
    compared.key(&key("loa"), &json!([turned("/upper"), turned("/lower")]));
    compared.key(&key("loa_lower_ci_1999"), &interval("upper_ci"));
    compared.key(&key("loa_upper_ci_1999"), &interval("lower_ci"));
}

const OVER_VISITS: &str = "method = \"agreement\"\nvisits = [\"baseline\", \"week-4\"]";
const OVER_REPLICATES: &str = "method = \"agreement\"\nagree_over = \"replicates\"";
const OVER_INSTRUMENTS: &str = "method = \"agreement\"\nagree_over = \"instruments\"\nvisits = [\"baseline\"]";

/// Two trials of five subjects on both instruments at baseline, and on one at week 4; the sixth has one trial.
fn both() -> String {
    let mut rows = String::new();
    let own = [(1, 12.1, 0.3), (2, 13.4, -0.2), (3, 11.8, 0.1), (4, 14.0, 0.4), (5, 12.9, -0.1)];
    for (who, value, by) in own {
        rows.push_str(&format!(
            "watch RK-{who},{BASELINE},1,{value:.1}\nwatch RK-{who},{BASELINE},2,{:.1}\n",
            value + by
        ));
        rows.push_str(&format!(
            "gate RK-{who},{BASELINE},1,{:.2}\ngate RK-{who},{BASELINE},2,{:.2}\n",
            value - 0.25,
            value - by
        ));
        rows.push_str(&format!(
            "watch RK-{who},{WEEK_4},1,{:.1}\nwatch RK-{who},{WEEK_4},2,{:.1}\n",
            value - 0.6,
            value - 0.2
        ));
    }
    rows + &format!("watch RK-6,{BASELINE},1,12.0\n")
}

fn watch_alone() -> String {
    both().lines().filter(|row| row.starts_with("watch")).map(|row| format!("{row}\n")).collect()
}

#[test]
fn agreement_is_said_within_80_columns() {
    for (name, analysis, rows) in [
        ("visits", OVER_VISITS, watch_alone()),
        ("replicates", OVER_REPLICATES, watch_alone()),
        ("instruments", OVER_INSTRUMENTS, both()),
    ] {
        let site = study(analysis, 2, &rows);
        let ran = site.ok(&["analyse", "it"]);
        assert!(ran.stdout.lines().all(|line| line.chars().count() <= 80), "{}", ran.shown());
        site.check_snapshot(&format!("analyse/agreement-{name}"), &ran);
    }
}

/// The differences of the two trials are 0.3, −0.2, 0.1, 0.4, −0.1 by construction.
#[test]
fn replicates_agree_within_the_first_visit_s_session() {
    let result = study(OVER_REPLICATES, 2, &watch_alone()).json(&["analyse", "it"]);
    assert_eq!(result["agree_over"], "replicates");
    assert_eq!(result["subjects"]["used"], 5, "{result}");
    let limits = find(&result["limits"], &[("level", "2"), ("against", "1")]);
    assert!((limits["bias"].as_f64().unwrap() - 0.1).abs() < 1e-9, "{limits}");
    // sqrt(mean of d² / 2): 0.31 / 10.
    assert!((result["within_sd"].as_f64().unwrap() - 0.031_f64.sqrt()).abs() < 1e-9, "{result}");
    assert_eq!((&result["cells"][1]["visit"], &result["cells"][1]["replicate"]), (&json!("baseline"), &json!("2")));
    let left = &result["subjects"]["left_out"][0];
    assert_eq!((&left["subject"], &left["why"]), (&json!("RK-6"), &json!("baseline: no reading of replicate 2")));
    assert!(result["notes"].to_string().contains("the first, baseline, is used"), "{result}");
}

/// Each instrument's number is the mean of its two trials: (2 value + by) / 2 against (2 value − 0.25 − by) / 2.
#[test]
fn instruments_agree_by_their_own_summaries() {
    let result = study(OVER_INSTRUMENTS, 2, &both()).json(&["analyse", "it"]);
    let limits = find(&result["limits"], &[("level", "gate"), ("against", "watch")]);
    let mean = [0.3, -0.2, 0.1, 0.4, -0.1].iter().map(|by| -0.125 - by).sum::<f64>() / 5.0;
    assert!((limits["bias"].as_f64().unwrap() - mean).abs() < 5e-3, "{limits}");
    assert_eq!(limits["n"], 5);
    let left = &result["subjects"]["left_out"][0];
    assert_eq!((&left["subject"], &left["why"]), (&json!("RK-6"), &json!("baseline: no reading of gate")));
}

#[test]
fn the_plot_shows_bias_and_limits_in_grey() {
    let site = study(OVER_VISITS, 2, &watch_alone());
    site.ok(&["analyse", "it", "--plot", "agreement.svg"]);
    let svg = std::fs::read_to_string(site.path("agreement.svg")).unwrap();
    assert_eq!(svg.matches("<circle").count(), 5, "{svg}");
    for part in
        ["bias −", "upper limit", "lower limit", "stroke-dasharray", "<title>RK-3</title>", "mean of the two / kg"]
    {
        assert!(svg.contains(part), "no {part}: {svg}");
    }
    let colours = regex::Regex::new("#[0-9a-f]{3}").unwrap();
    let grey = |colour: &str| colour.as_bytes().windows(2).skip(1).all(|pair| pair[0] == pair[1]);
    assert!(colours.find_iter(&svg).all(|colour| grey(colour.as_str())), "a colour: {svg}");
    site.ok(&["analyse", "it", "--plot", "agreement.png"]);
    assert!(std::fs::read(site.path("agreement.png")).unwrap().starts_with(b"\x89PNG"));
}

#[test]
fn readings_that_allow_little_are_said_so() {
    let one = format!("watch RK-1,{BASELINE},1,5.0\nwatch RK-1,{WEEK_4},1,6.0\n");
    let same: String = [1, 2, 3]
        .iter()
        .map(|who| format!("watch RK-{who},{BASELINE},1,5.0\nwatch RK-{who},{WEEK_4},1,5.0\n"))
        .collect();
    for (name, rows) in [("nothing", String::new()), ("one-subject", one), ("all-equal", same)] {
        let site = study(OVER_VISITS, 1, &rows);
        site.check_snapshot(&format!("analyse/agreement-{name}"), &site.ok(&["analyse", "it"]));
        let result = site.json(&["analyse", "it"]);
        assert!(!result["notes"].as_array().unwrap().is_empty(), "{name}: {result}");
        site.ok(&["analyse", "it", "--plot", "agreement.svg"]);
        let svg = std::fs::read_to_string(site.path("agreement.svg")).unwrap();
        assert!(!svg.contains("NaN") && !svg.contains("inf"), "{svg}");
    }
    for analysis in [OVER_REPLICATES, OVER_INSTRUMENTS] {
        study(analysis, 2, "").ok(&["analyse", "it", "--checks", "--plot", "agreement.svg"]);
    }
}

/// The residuals are those of the two-way analysis: with two levels half of each difference less the mean difference.
#[test]
fn what_an_analysis_of_agreement_rests_on_is_shown() {
    let result = study(OVER_REPLICATES, 2, &watch_alone()).json(&["analyse", "it", "--checks"]);
    let residuals = result["checks"]["residuals"].as_array().unwrap();
    assert_eq!(residuals.len(), 10, "{result}");
    let largest = residuals.iter().filter_map(|it| it["residual"].as_f64()).fold(0.0, f64::max);
    assert!((largest - 0.15).abs() < 1e-9, "{largest}");
}
