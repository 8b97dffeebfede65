//! Analysis by ranks through the whole program: reference cases, what is said, and readings that allow little.
//!
//! The published source of each case stands in its file, beside the numerical crate.

use revisant_tests::reference::{Case, Compared, find};
use serde_json::{Value as Json, json};

use crate::PROGRAMS;
use crate::reference::{at, cases, later_and_earlier};

use crate::small_study::{BASELINE, WEEK_4, WEEK_8, study, study_with};

cases! { by_ranks:
    continuous_10x4 in "ranks"
    likert_12x3 in "ranks"
    rounding_times in "ranks"
    sleep_pair in "ranks"
    tiny_4x3_exact in "ranks"
}

/// Friedman's test, and every pair by signed ranks with each of the four adjustments.
fn by_ranks(case: &Case) -> Compared<'_> {
    let adjustments = ["none", "holm", "bonferroni", "benjamini-hochberg"];
    let plan: String = adjustments
        .iter()
        .map(|name| {
            format!(
                "[[analysis]]\ncode = \"ranks-{name}\"\nmeasure = \"response\"\nmethod = \"friedman\"\n\
                 contrasts = [\"pairwise\"]\nmultiplicity = \"{name}\"\nconfidence = 0.95\n\n"
            )
        })
        .collect();
    let site = case.collected(PROGRAMS, &plan);
    let mut compared = Compared::new(case);
    for name in adjustments {
        let result = site.json(&["analyse", &format!("ranks-{name}")]);
        compared.exactly("method", &result["method"], &json!("friedman"));
        compared.exactly("subjects used", &result["subjects"]["used"], &case.config["n_complete"]);
        let effect = find(&result["effects"], &[("source", "visit")]);
        for (key, field) in [("chi2", "chi2"), ("df", "df"), ("p", "p")] {
            compared.key(&format!("friedman.{key}"), &effect[field]);
        }
        compared.key("kendall.W", &effect["kendall_w"]);
        for (key, field) in [("F", "f"), ("df1", "df"), ("df2", "error_df"), ("p", "p")] {
            compared.key(&format!("iman_davenport.{key}"), at(effect, &format!("/iman_davenport/{field}")));
        }
        for (level, against) in later_and_earlier(case) {
            signed_ranks(&mut compared, case, &result, level, against);
        }
        adjusted(&mut compared, name, &result);
    }
    compared
}

fn signed_ranks(compared: &mut Compared<'_>, case: &Case, result: &Json, level: &str, against: &str) {
    let label = |code: &str| case.visits.iter().find(|(it, ..)| it == code).map_or("", |(_, label, _)| label.as_str());
    let key = |name: &str| format!("wilcoxon.{}-{}.{name}", label(level), label(against));
    let pair = find(&result["contrasts"], &[("kind", "pairwise"), ("level", level), ("against", against)]);
    assert!(case.value(&key("n_pairs")).is_some(), "the case knows no {}", key("n_pairs"));
    let nonzero = case.value(&key("n_nonzero")).and_then(Json::as_f64).unwrap_or(0.0);
    for (name, field) in [
        ("n_pairs", "n"),
        ("n_nonzero", "nonzero"),
        ("W_plus", "positive_rank_sum"),
        ("hodges_lehmann_nonzero", "estimate"),
    ] {
        compared.key(&key(name), &pair[field]);
    }
    compared.key(&key("p"), &pair["p"]);
    if nonzero > 0.0 {
        compared.key(&key(if nonzero <= 50.0 { "p_exact_conditional" } else { "p_normal_cc" }), &pair["p"]);
        compared.exactly("exact", &pair["exact"], &json!(nonzero <= 50.0));
    }
    compared.key(&key("hl_ci_lo"), &pair["ci"][0]);
    compared.key(&key("hl_ci_hi"), &pair["ci"][1]);
}

/// The adjusted p values follow from the raw ones, which the case has (Holm 1979; Benjamini & Hochberg 1995).
fn adjusted(compared: &mut Compared<'_>, name: &str, result: &Json) {
    let pairs = result["contrasts"].as_array().expect("pairs");
    let mut p: Vec<(usize, f64)> =
        pairs.iter().enumerate().filter_map(|(at, pair)| Some((at, pair["p"].as_f64()?))).collect();
    p.sort_by(|(_, one), (_, other)| one.total_cmp(other));
    let m = p.len() as f64;
    let mut highest = 0.0_f64;
    for (rank, (at, raw)) in p.iter().enumerate() {
        highest = highest.max((m - rank as f64) * raw).min(1.0);
        let later = p.iter().enumerate().skip(rank).map(|(rank, (_, p))| p * m / (rank as f64 + 1.0));
        let wanted = match name {
            "none" => *raw,
            "holm" => highest,
            "bonferroni" => (m * raw).min(1.0),
            _ => later.fold(1.0, f64::min),
        };
        compared.also(&format!("p adjusted, {name}"), &pairs[*at]["p_adjusted"], wanted, 1e-12);
    }
}

const PAIRS: &str = "method = \"friedman\"\ncontrasts = [\"pairwise\"]\nmultiplicity = \"holm\"";

fn rows(cells: &[(&str, &str, &str, &str)]) -> String {
    let row = |(who, day, trial, value): &(&str, &str, &str, &str)| format!("watch RK-{who},{day},{trial},{value}\n");
    cells.iter().map(row).collect()
}

/// The same values for every subject's three visits.
fn visits(values: &[(&str, [&str; 3])]) -> String {
    let days = [BASELINE, WEEK_4, WEEK_8];
    let of = |(who, own): &(&str, [&str; 3])| {
        days.iter().zip(own).map(|(day, value)| rows(&[(who, day, "1", value)])).collect::<String>()
    };
    values.iter().map(of).collect()
}

#[test]
fn ranks_are_said_within_80_columns() {
    let rows = visits(&[
        ("1", ["12.1", "11.0", "10.2"]),
        ("2", ["13.4", "13.4", "11.9"]),
        ("3", ["11.8", "11.2", "11.5"]),
        ("4", ["14.0", "12.5", "12.0"]),
        ("5", ["12.9", "12.2", "12.0"]),
    ]);
    let site = study(PAIRS, 1, &rows);
    let ran = site.ok(&["analyse", "it"]);
    assert!(ran.stdout.lines().all(|line| line.chars().count() <= 80), "{}", ran.shown());
    site.check_snapshot("analyse/friedman", &ran);
    site.ok(&["analyse", "it", "--plot", "ranks.svg"]);
    let svg = std::fs::read_to_string(site.path("ranks.svg")).unwrap();
    assert!(svg.contains("profiles of 5 subjects") && svg.contains("Friedman"), "{svg}");
}

/// 0.1 + 0.2 is not 0.3 in doubles; the means of 0.1, 0.2 and 0.3, 0.0 are equal all the same, as exported.
#[test]
fn means_over_replicates_tie_where_their_decimals_do() {
    let mut cells = Vec::new();
    let days = [BASELINE, WEEK_4, WEEK_8];
    let own = [
        ("1", [["0.1", "0.2", "0.6"], ["0.3", "0.3", "0.3"], ["0.7", "0.1", "0.1"]]),
        ("2", [["1.1", "1.2", "1.4"], ["1.3", "1.3", "1.1"], ["1.9", "1.7", "1.8"]]),
        ("3", [["2.3", "2.2", "2.4"], ["2.1", "2.6", "2.2"], ["2.9", "2.7", "2.8"]]),
    ];
    for (who, visits) in &own {
        for (day, trials) in days.iter().zip(visits) {
            for (trial, value) in ["1", "2", "3"].iter().zip(trials) {
                cells.push((*who, *day, *trial, *value));
            }
        }
    }
    let result = study(PAIRS, 3, &rows(&cells)).json(&["analyse", "it"]);
    let pair = find(&result["contrasts"], &[("level", "week-4"), ("against", "baseline")]);
    // 0.9 / 3 twice, 3.7 / 3 twice, 6.9 / 3 twice.
    assert_eq!((&pair["n"], &pair["nonzero"]), (&json!(3), &json!(0)), "{pair}");
    assert_eq!((&pair["p"], &pair["positive_rank_sum"]), (&Json::Null, &json!(0.0)), "{pair}");
    assert!(!result["notes"].to_string().contains("after a conversion"), "the step is known: {result}");
    // By hand: ranks 2 2 2, 1.5 1.5 3, 1.5 1.5 3; sums 5 5 8; chi2 = 12 × 6 / (36 − (24 + 6 + 6) / 2) = 4.
    let effect = find(&result["effects"], &[("source", "visit")]);
    assert!((effect["chi2"].as_f64().unwrap() - 4.0).abs() < 1e-12, "{effect}");
}

#[test]
fn readings_that_allow_little_are_said_so() {
    let same = visits(&[("1", ["5.0"; 3]), ("2", ["6.0"; 3])]);
    let one = visits(&[("1", ["5.0", "6.0", "7.0"])]);
    for (name, rows) in [("nothing", String::new()), ("one-subject", one), ("all-equal", same)] {
        let site = study(PAIRS, 1, &rows);
        site.check_snapshot(&format!("analyse/friedman-{name}"), &site.ok(&["analyse", "it"]));
        let result = site.json(&["analyse", "it"]);
        assert!(!result.to_string().contains("NaN"), "{result}");
        assert!(!result["notes"].as_array().unwrap().is_empty(), "{name}: {result}");
        site.ok(&["analyse", "it", "--plot", "ranks.svg"]);
    }
}

#[test]
fn contrasts_that_ranks_have_not_are_named() {
    let rows = visits(&[("1", ["5.0", "6.0", "7.0"]), ("2", ["5.0", "6.5", "7.0"])]);
    let site = study("method = \"friedman\"\ncontrasts = [\"each-vs-first\", \"polynomial\"]", 1, &rows);
    let result = site.json(&["analyse", "it"]);
    assert_eq!(result["contrasts"].as_array().map(Vec::len), Some(2), "{result}");
    assert!(result["notes"].to_string().contains("compares pairs of levels only"), "{result}");
}

/// A third of a unit is no short decimal: differences that are equal as exported tie within rounding, and that is said.
#[test]
fn converted_numbers_tie_within_rounding() {
    let text = visits(&[("1", ["10.1", "11.2", "12.3"]), ("2", ["10.2", "9.1", "12.4"]), ("3", ["9.7", "9.7", "9.9"])]);
    let site = study_with(
        "method = \"friedman\"\ncontrasts = [\"pairwise\"]",
        1,
        &text,
        "unit = { code = \"N\", times = 0.3333333333333333, plus = 0 }",
    );
    let result = site.json(&["analyse", "it"]);
    let pair = find(&result["contrasts"], &[("level", "week-4"), ("against", "baseline")]);
    // 1.1 exported units up and as many down, which share their ranks, and one difference of none.
    assert_eq!((&pair["nonzero"], &pair["positive_rank_sum"], &pair["p"]), (&json!(2), &json!(1.5), &json!(1.0)));
    assert!(result["notes"].to_string().contains("after a conversion"), "{result}");
}

#[test]
fn what_a_rank_analysis_rests_on_is_shown() {
    let all = [("1", ["5.0", "6.0", "7.0"]), ("2", ["5.0", "6.5", "7.5"]), ("3", ["7.0", "6.0", "5.0"])];
    let result = study(PAIRS, 1, &visits(&all)).json(&["analyse", "it", "--checks"]);
    let influence = &result["checks"]["influence"][0];
    // Two subjects of one mind of two: chi2 = n (k − 1) = 4. With the third one the rank sums are 5, 6 and 7.
    let without = find(&influence["without"], &[("subject", "RK-3")]);
    assert!((without["chi2"].as_f64().unwrap() - 4.0).abs() < 1e-12, "{influence}");
    assert!((influence["chi2"].as_f64().unwrap() - 2.0 / 3.0).abs() < 1e-12, "{influence}");
    // Two opposite minds leave no difference.
    let without = find(&influence["without"], &[("subject", "RK-1")]);
    assert_eq!(without["chi2"], 0.0, "{influence}");
    assert_eq!(result["checks"]["residuals"], json!([]), "{result}");
    let few = study(PAIRS, 1, &visits(&all[..1])).ok(&["analyse", "it", "--checks"]);
    assert!(few.stdout.lines().all(|line| line.chars().count() <= 80), "{}", few.shown());
}
