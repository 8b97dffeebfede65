//! Real readings: the growth of children's jaws and the sleep of ten people, each written as one export for a child and
//! a visit, dropped in any order into the folder of a running service.
//!
//! Potthoff & Roy 1964, "A generalized multivariate analysis of variance model useful especially for growth curve
//! problems", Biometrika 51:313; Student 1908, "The probable error of a mean", Biometrika 6:1.

use revisant_tests::chance::Chance;
use revisant_tests::reference::{Case, Compared, Row, find};
use revisant_tests::site::Site;
use serde_json::{Value as Json, json};

use crate::PROGRAMS;

const ANALYSIS: &str = "[[analysis]]\ncode = \"over-visits\"\nmeasure = \"response\"\nmethod = \"repeated-measures\"\n";

/// Every export, by path, in shuffled order.
fn exports(case: &Case, seed: u64) -> Vec<(String, String)> {
    let export = |row: &Row| {
        let path = format!("exports/rig/{}/{}.csv", case.code(&row.visit), row.subject);
        (path, case.export(std::slice::from_ref(row)))
    };
    let mut exports: Vec<(String, String)> = case.rows.iter().map(export).collect();
    Chance::new(seed).shuffle(&mut exports);
    exports
}

/// Drops exports into the folder of the running service, and waits until so many are filed, one reading each.
fn file(site: &Site, exports: &[(String, String)], all: usize) {
    for (path, text) in exports {
        site.drop_export(path, text);
    }
    site.wait_until_filed(all);
    assert_eq!(site.readings().len(), all);
}

/// Without one child's last export the child is incomplete and left out, and says why; when it comes, all is as published.
fn as_published(name: &str, seed: u64, check: impl Fn(&mut Compared<'_>, &Case, &Json)) {
    let case = Case::load(name);
    let site = Site::with(PROGRAMS, &case.plan(ANALYSIS), &case.roster());
    let mut exports = exports(&case, seed);
    let (last, ..) = case.visits.last().expect("a visit").clone();
    let late = exports.iter().position(|(path, _)| path.contains(&last)).expect("an export of the last visit");
    let late = exports.remove(late);
    let child = late.0.rsplit('/').next().and_then(|name| name.strip_suffix(".csv")).expect("a child").to_owned();

    let service = site.serve();
    file(&site, &exports, case.rows.len() - 1);
    let grid = site.json(&["completeness", "--on", "2016-12-31"]);
    let statuses = grid["subjects"].as_array().expect("subjects");
    for line in statuses {
        let wanted = if line["subject"] == child.as_str() { "incomplete" } else { "complete" };
        assert_eq!(line["status"], wanted, "{line}");
    }
    let result = site.json(&["analyse", "over-visits"]);
    assert_eq!(result["subjects"]["used"], case.subjects.len() - 1);
    let left_out = result["subjects"]["left_out"].as_array().expect("a list");
    assert_eq!(left_out.len(), 1, "{left_out:?}");
    assert_eq!(left_out[0]["subject"], child.as_str());
    let why = left_out[0]["why"].as_str().expect("a reason");
    assert!(why.contains(&last), "the reason does not name the visit: {why}");
    let strict = site.run(&["completeness", "--on", "2016-12-31", "--strict"]);
    assert_eq!(strict.code, Some(3), "{}", strict.shown());

    file(&site, &[late], case.rows.len());
    let strict = site.run(&["completeness", "--on", "2016-12-31", "--strict"]);
    assert_eq!(strict.code, Some(0), "{}", strict.shown());
    let result = site.json(&["analyse", "over-visits"]);
    assert_eq!(result["subjects"]["used"], case.subjects.len());
    assert_eq!(result["subjects"]["left_out"], json!([]));
    let mut compared = Compared::new(&case);
    check(&mut compared, &case, &result);
    assert!(compared.values >= 3, "only {} values compared", compared.values);
    assert!(compared.differences.is_empty(), "{}", compared.differences.join("\n"));
    assert_eq!(site.json(&["trail", "verify"])["sound"], true);
    service.stop();
}

fn whole_decomposition(compared: &mut Compared<'_>, case: &Case, result: &Json) {
    let part = |source: &str| find(&result["decomposition"], &[("source", source)]);
    for (key, source, field) in [
        ("ss.total".to_owned(), "total", "ss"),
        ("df.total".to_owned(), "total", "df"),
        ("ss.subject".to_owned(), "subject", "ss"),
        ("df.subject".to_owned(), "subject", "df"),
        ("ms.subject".to_owned(), "subject", "ms"),
        (format!("{}.ss", case.factor), "visit", "ss"),
        (format!("{}.df", case.factor), "visit", "df"),
        (format!("{}.ms", case.factor), "visit", "ms"),
        (format!("{}.sse", case.factor), "residual", "ss"),
        (format!("{}.dfe", case.factor), "residual", "df"),
        (format!("{}.mse", case.factor), "residual", "ms"),
    ] {
        compared.key(&key, &part(source)[field]);
    }
    let effect = find(&result["effects"], &[("source", "visit")]);
    compared.key(&format!("{}.F", case.factor), &effect["f"]);
    compared.key(&format!("{}.p", case.factor), &effect["p"]);
}

#[test]
fn the_growth_of_eleven_girls() {
    as_published("repeated_measures/orthodont_girls", 1964, whole_decomposition);
}

#[test]
fn the_growth_of_sixteen_boys() {
    as_published("contrasts/orthodont_boys_8_14", 51_313, |compared, _, result| {
        let effect = find(&result["effects"], &[("source", "visit")]);
        compared.key("trend.ss_sum_equals_ss_condition", &effect["ss"]);
        compared.key("trend.ms_resid", &effect["error_ms"]);
        compared.key("trend.df_resid", &effect["error_df"]);
    });
}

#[test]
fn the_sleep_of_ten_people() {
    as_published("repeated_measures/k2_sleep", 1908, |compared, case, result| {
        whole_decomposition(compared, case, result);
        // Fisher 1925, "Statistical Methods for Research Workers", section 24, gives t = 4.06 for Student's pairs, and
        // F = t² with one df.
        let f = find(&result["effects"], &[("source", "visit")])["f"].as_f64().expect("F");
        assert!((f.sqrt() - 4.06).abs() < 0.005, "t = {}", f.sqrt());
    });
}
