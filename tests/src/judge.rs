//! The judge: what was filed, held, counted and found complete, against a study's known truth.
//!
//! Values agree within 1e-9 of their size, moments within 2 ms, everything else exactly. Each expected entry is paired
//! with the found one that fits it best, so that one fault is reported as one difference.

use std::collections::{BTreeMap, HashMap};

use chrono::{DateTime, NaiveDate, NaiveTime};
use serde_json::{Value as Json, json};

/// What of a reading is compared.
const FIELDS: [&str; 13] = [
    "subject",
    "visit",
    "measure",
    "condition",
    "replicate",
    "value",
    "as_written",
    "limit",
    "taken_at",
    "export",
    "where",
    "state",
    "off_window",
];

/// How far values may differ, relative to their size.
const TOLERANCE: f64 = 1e-9;
/// How far moments may differ, in seconds.
const MOMENT: f64 = 0.002;
/// How far a bare date may lie from the UTC moment that the truth writes for the start of its local day.
const ZONES: f64 = 14.0 * 3600.0;

/// What a program says of a study.
#[derive(Debug, Clone)]
pub struct Answers {
    /// `readings --json`
    pub readings: Json,
    /// `holds --json`
    pub holds: Json,
    /// `status --json`
    pub status: Json,
    /// `completeness --on NOW --json`
    pub completeness: Json,
}

/// How many entries were compared, and every difference in words.
#[derive(Debug, Clone, Default)]
pub struct Verdict {
    /// Entries that the truth holds.
    pub expected: usize,
    /// What is not as it should be.
    pub differences: Vec<String>,
}

impl Verdict {
    fn say(&mut self, difference: String) {
        self.differences.push(difference);
    }
}

/// Judges all four answers.
pub fn judge(truth: &Json, answers: &Answers) -> Verdict {
    let mut verdict = Verdict::default();
    readings(&mut verdict, entries(&truth["readings"]), entries(&answers.readings));
    holds(&mut verdict, entries(&truth["holds"]), entries(&answers.holds));
    states(&mut verdict, &truth["exports"], entries(&answers.status["files"]));
    completeness(&mut verdict, entries(&truth["completeness"]), entries(&answers.completeness["subjects"]));
    verdict
}

fn entries(json: &Json) -> &[Json] {
    json.as_array().map_or(&[], Vec::as_slice)
}

fn readings(verdict: &mut Verdict, expected: &[Json], found: &[Json]) {
    verdict.expected += expected.len();
    let keys: [&dyn Fn(&Json) -> String; 4] = [
        &|r| json!([r["export"], r["where"], r["measure"], condition(r)]).to_string(),
        &|r| json!([r["subject"], r["measure"], condition(r), r["replicate"], seconds(&r["taken_at"])]).to_string(),
        &|r| json!([r["export"], r["where"], r["measure"]]).to_string(),
        &|r| json!([r["export"], r["as_written"], r["subject"], r["measure"]]).to_string(),
    ];
    let matched = pair(expected, found, &keys, &reading_differences);
    for (at, _, wrong) in matched.pairs.iter().filter(|(_, _, wrong)| !wrong.is_empty()) {
        verdict.say(format!("reading wrong: {}: {}", short(&expected[*at]), wrong.join("; ")));
    }
    matched.missing.iter().for_each(|at| verdict.say(format!("reading missing: {}", short(&expected[*at]))));
    matched.extra.iter().for_each(|at| verdict.say(format!("reading extra: {}", short(&found[*at]))));
}

fn short(r: &Json) -> String {
    format!(
        "{} {} {} {} #{} = {} at {} from {} {}",
        r["subject"],
        r["visit"],
        r["measure"],
        condition(r),
        r["replicate"],
        r["value"],
        r["taken_at"],
        r["export"],
        r["where"]
    )
}

fn reading_differences(expected: &Json, found: &Json) -> Vec<String> {
    FIELDS
        .into_iter()
        .filter(|field| !same_field(field, expected, found))
        .map(|field| format!("{field}: expected {}, found {}", expected[field], found[field]))
        .collect()
}

fn same_field(field: &str, expected: &Json, found: &Json) -> bool {
    let (wanted, is) = (&expected[field], &found[field]);
    match field {
        // An unscheduled session lies in no window, so nothing is asked about it.
        "off_window" if wanted.is_null() || expected["visit"].is_null() => true,
        "value" => same_number(wanted, is),
        "condition" => condition(expected) == condition(found),
        "taken_at" => same_moment(wanted, is),
        _ => wanted == is || (nothing(wanted) && nothing(is)),
    }
}

fn nothing(json: &Json) -> bool {
    json.is_null() || json.as_str() == Some("")
}

fn same_number(wanted: &Json, is: &Json) -> bool {
    match (wanted.as_f64(), is.as_f64()) {
        (Some(wanted), Some(is)) => wanted == is || (wanted - is).abs() <= TOLERANCE * wanted.abs().max(is.abs()),
        (None, None) => wanted.is_null() && is.is_null(),
        _ => false,
    }
}

fn same_moment(wanted: &Json, is: &Json) -> bool {
    if wanted == is {
        return true;
    }
    match (seconds(wanted), seconds(is)) {
        (Some(wanted), Some(is)) => (wanted - is).abs() < MOMENT,
        // A date whose time is not known stays a bare date; the truth writes it as the start of a local day.
        (Some(wanted), None) => bare_date(is).is_some_and(|day| (wanted - day).abs() <= ZONES),
        _ => false,
    }
}

fn seconds(json: &Json) -> Option<f64> {
    let moment = DateTime::parse_from_rfc3339(json.as_str()?).ok()?;
    Some(moment.timestamp_micros() as f64 / 1e6)
}

fn bare_date(json: &Json) -> Option<f64> {
    let day: NaiveDate = json.as_str()?.parse().ok()?;
    Some(day.and_time(NaiveTime::MIN).and_utc().timestamp() as f64)
}

/// A condition in one spelling, whatever the order of its factors.
fn condition(r: &Json) -> String {
    let levels: BTreeMap<&str, &Json> =
        r["condition"].as_object().into_iter().flatten().map(|(factor, level)| (factor.as_str(), level)).collect();
    json!(levels).to_string()
}

struct Matched {
    pairs: Vec<(usize, usize, Vec<String>)>,
    missing: Vec<usize>,
    extra: Vec<usize>,
}

/// Pairs expected with found entries: first those without a difference, then the nearest, key by key.
fn pair(
    expected: &[Json],
    found: &[Json],
    keys: &[&dyn Fn(&Json) -> String],
    differences: &dyn Fn(&Json, &Json) -> Vec<String>,
) -> Matched {
    let mut pairs = Vec::new();
    let mut missing: Vec<usize> = (0..expected.len()).collect();
    let mut extra: Vec<usize> = (0..found.len()).collect();
    let passes = keys.iter().take(1).map(|key| (key, true)).chain(keys.iter().map(|key| (key, false)));
    for (key, exact) in passes {
        let mut boxes: HashMap<String, Vec<usize>> = HashMap::new();
        for at in &extra {
            boxes.entry(key(&found[*at])).or_default().push(*at);
        }
        missing.retain(|wanted| {
            let Some(candidates) = boxes.get_mut(&key(&expected[*wanted])) else { return true };
            let costs = candidates.iter().map(|at| (differences(&expected[*wanted], &found[*at]), *at));
            let Some((wrong, best)) = costs.min_by_key(|(wrong, _)| wrong.len()) else { return true };
            if exact && !wrong.is_empty() {
                return true;
            }
            candidates.retain(|at| *at != best);
            extra.retain(|at| *at != best);
            pairs.push((*wanted, best, wrong));
            false
        });
    }
    Matched { pairs, missing, extra }
}

fn holds(verdict: &mut Verdict, expected: &[Json], found: &[Json]) {
    verdict.expected += expected.len();
    let mut expected = expected.to_vec();
    let mut found: Vec<Json> = found.iter().filter(|hold| hold["state"] == "open").cloned().collect();
    one_for_a_whole_file(&mut expected, &mut found);
    let keys: [&dyn Fn(&Json) -> String; 3] = [
        &|h| json!([h["export"], place(h).map(row_of)]).to_string(),
        &|h| json!([h["export"], h["reason"]]).to_string(),
        &|h| h["export"].to_string(),
    ];
    let matched = pair(&expected, &found, &keys, &hold_differences);
    let words = |h: &Json| format!("{} {} {}", h["reason"], h["export"], h["where"]);
    for (at, _, wrong) in matched.pairs.iter().filter(|(_, _, wrong)| !wrong.is_empty()) {
        verdict.say(format!("hold wrong: {}: {}", words(&expected[*at]), wrong.join("; ")));
    }
    matched.missing.iter().for_each(|at| verdict.say(format!("hold missing: {}", words(&expected[*at]))));
    matched.extra.iter().for_each(|at| verdict.say(format!("hold extra: {}", words(&found[*at]))));
}

/// A fault that a file's name or preamble has is the fault of each of its rows: one hold on the file may stand for them.
fn one_for_a_whole_file(expected: &mut Vec<Json>, found: &mut Vec<Json>) {
    let of_files: Vec<(Json, Json)> = expected
        .iter()
        .filter(|hold| hold["or_file"] == true)
        .map(|hold| (hold["export"].clone(), hold["reason"].clone()))
        .collect();
    for (export, reason) in of_files {
        let of_this = |hold: &Json| hold["export"] == export && hold["reason"] == reason;
        let mut whole = found.iter().enumerate().filter(|(_, hold)| of_this(hold));
        if let (Some((at, hold)), None) = (whole.next(), whole.next())
            && place(hold).is_none()
        {
            found.remove(at);
            expected.retain(|hold| !(hold["or_file"] == true && hold["export"] == export));
        }
    }
}

fn place(hold: &Json) -> Option<&str> {
    hold["where"].as_str().filter(|place| !place.is_empty())
}

/// Of a workbook's cell the sheet and the row: a row's fault may be told at any of its cells.
fn row_of(place: &str) -> String {
    match place.rsplit_once('!') {
        Some((sheet, cell)) => format!("{sheet}!{}", cell.trim_start_matches(|c: char| c.is_ascii_uppercase())),
        None => place.to_owned(),
    }
}

fn hold_differences(expected: &Json, found: &Json) -> Vec<String> {
    let mut wrong = Vec::new();
    let reasons = expected["reason"].as_str().unwrap_or_default();
    if !reasons.split('|').any(|reason| found["reason"] == reason) {
        wrong.push(format!("reason: expected {reasons}, found {}", found["reason"]));
    }
    if expected["export"] != found["export"] {
        wrong.push(format!("export: expected {}, found {}", expected["export"], found["export"]));
    }
    let same_row = || expected["row_level"] == true && place(expected).map(row_of) == place(found).map(row_of);
    if place(expected) != place(found) && !same_row() {
        wrong.push(format!("where: expected {}, found {}", expected["where"], found["where"]));
    }
    wrong
}

fn states(verdict: &mut Verdict, expected: &Json, files: &[Json]) {
    let mut found: HashMap<&str, &str> =
        files.iter().filter_map(|file| Some((file["export"].as_str()?, file["state"].as_str()?))).collect();
    for (export, wanted) in expected.as_object().into_iter().flatten() {
        verdict.expected += 1;
        let is = found.remove(export.as_str());
        let good = match wanted.as_str() {
            // A temporary file is no export; to list it as ignored is right as well.
            None => is.is_none_or(|is| is == "ignored"),
            Some("settling") => is.is_none_or(|is| is == "settling"),
            wanted => is == wanted,
        };
        if !good {
            verdict.say(format!("state wrong: {export}: expected {wanted}, found {is:?}"));
        }
    }
    found.iter().for_each(|(export, state)| verdict.say(format!("state extra: {export}: {state}")));
}

fn completeness(verdict: &mut Verdict, expected: &[Json], found: &[Json]) {
    let by_name = |list: &[Json], field: &str| -> BTreeMap<String, Json> {
        list.iter().map(|entry| (entry[field].as_str().unwrap_or_default().to_owned(), entry.clone())).collect()
    };
    let mut subjects = by_name(found, "subject");
    for wanted in expected {
        let subject = wanted["subject"].as_str().unwrap_or_default();
        let is = subjects.remove(subject).unwrap_or(Json::Null);
        verdict.expected += 1;
        if is["status"] != wanted["status"] {
            verdict.say(format!("completeness: {subject}: expected {}, found {}", wanted["status"], is["status"]));
        }
        let mut visits = by_name(entries(&is["visits"]), "visit");
        for visit in entries(&wanted["visits"]) {
            verdict.expected += 1;
            let code = visit["visit"].as_str().unwrap_or_default();
            let is = visits.remove(code).unwrap_or(Json::Null);
            let off = |visit: &Json| visit["off_window"] == true;
            if is["state"] != visit["state"] || off(&is) != off(visit) {
                verdict.say(format!("completeness: {subject} {code}: expected {visit}, found {is}"));
            }
        }
        visits.keys().for_each(|visit| verdict.say(format!("completeness: {subject}: extra visit {visit}")));
    }
    subjects.keys().for_each(|subject| verdict.say(format!("completeness: extra subject {subject}")));
}
