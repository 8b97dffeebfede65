//! Reference cases: readings whose analysis is known to more digits than a program can give, made into a study.
//!
//! The cases lie beside the numerical crate (`cli/analysis/tests/reference`), where their published sources are named:
//! there the functions are checked, here the whole way from plan and export to the result.

use std::fs;
use std::path::PathBuf;

use chrono::{Days, NaiveDate};
use serde_json::Value as Json;

use crate::site::{Programs, Site};

/// One case.
#[derive(Debug, Clone)]
pub struct Case {
    /// Its name, as `folder/name`.
    pub name: String,
    /// Visits in order: the code in the plan, the label as exported, the day.
    pub visits: Vec<(String, String, u64)>,
    /// The readings; missing ones are absent.
    pub rows: Vec<Row>,
    /// All subjects, in the order of the table.
    pub subjects: Vec<String>,
    /// By subject: the level of each between factor.
    pub groups: Vec<Vec<String>>,
    /// The first within factor's name in the keys of `expected`; its levels are the visits.
    pub factor: String,
    /// The other within factors and their levels: conditions of the measure.
    pub conditions: Vec<(String, Vec<String>)>,
    /// The between factors and their levels: attributes of the subjects.
    pub between: Vec<(String, Vec<String>)>,
    /// The case's own settings.
    pub config: Json,
    /// What must come out, by key.
    pub expected: Json,
}

/// One reading.
#[derive(Debug, Clone)]
pub struct Row {
    /// Whose.
    pub subject: String,
    /// The label of the visit.
    pub visit: String,
    /// The level of each condition.
    pub conditions: Vec<String>,
    /// As written.
    pub value: String,
}

/// A day before the first visit of every case; a Monday.
fn day_0() -> NaiveDate {
    NaiveDate::from_ymd_opt(2015, 1, 5).expect("a date")
}

impl Case {
    /// Reads a case.
    pub fn load(name: &str) -> Self {
        let base = PathBuf::from(env!("CARGO_MANIFEST_DIR")).join("../cli/analysis/tests/reference").join(name);
        let read = |ending: &str| {
            let path = base.with_extension(ending);
            fs::read_to_string(&path).unwrap_or_else(|error| panic!("{}: {error}", path.display()))
        };
        let json: Json = serde_json::from_str(&read("json")).expect("a case in JSON");
        let columns = &json["columns"];
        let factor = columns["within"][0].as_str().expect("a factor").to_owned();
        let levels = ["levels", "raters"].iter().find_map(|name| json["config"][*name].as_array());
        let levels = match levels {
            Some(levels) => levels,
            None => json["config"]["within_levels"][&factor].as_array().expect("levels"),
        };
        let days = (0_u64..).map(|at| match json["config"]["times"][at as usize].as_u64() {
            Some(day) => day,
            None => 10 * at,
        });
        let visits = levels.iter().zip(days).map(|(level, day)| {
            let label = level.as_str().expect("a level");
            (slug(&format!("{factor}-{label}")), label.to_owned(), day)
        });
        let names = |kind: &str| {
            let names = columns[kind].as_array().into_iter().flatten();
            names.map(|name| name.as_str().expect("a factor").to_owned()).collect::<Vec<_>>()
        };
        let (within, between) = (names("within"), names("between"));
        let condition = |name: &String| {
            let levels = json["config"]["within_levels"][name].as_array().expect("levels");
            (name.clone(), levels.iter().map(|level| level.as_str().expect("a level").to_owned()).collect())
        };
        let mut case = Self {
            name: name.to_owned(),
            visits: visits.collect(),
            rows: Vec::new(),
            subjects: Vec::new(),
            groups: Vec::new(),
            conditions: within.iter().skip(1).map(condition).collect(),
            between: between.iter().map(|name| (name.clone(), Vec::new())).collect(),
            config: json["config"].clone(),
            expected: json["expected"].clone(),
            factor: factor.clone(),
        };
        let text = read("csv");
        let mut lines = text.lines();
        let header: Vec<&str> = lines.next().expect("a header").split(',').collect();
        let column = |name: &Json| header.iter().position(|it| name == it).expect("a column");
        let (subject, level) = (column(&columns["subject"]), column(&columns["within"][0]));
        let value = column(&columns["value"]);
        let places = |names: &[String]| names.iter().map(|name| column(&Json::from(name.as_str()))).collect::<Vec<_>>();
        let (conditions, groups) = (places(&within[1..]), places(&between));
        for line in lines {
            let cells: Vec<&str> = line.split(',').collect();
            let owned = |places: &[usize]| places.iter().map(|at| cells[*at].to_owned()).collect::<Vec<_>>();
            if !case.subjects.iter().any(|known| known == cells[subject]) {
                case.subjects.push(cells[subject].to_owned());
                case.groups.push(owned(&groups));
            }
            for ((_, levels), level) in case.between.iter_mut().zip(owned(&groups)) {
                if !levels.contains(&level) {
                    levels.push(level);
                }
            }
            if !cells[value].is_empty() {
                case.rows.push(Row {
                    subject: cells[subject].to_owned(),
                    visit: cells[level].to_owned(),
                    conditions: owned(&conditions),
                    value: cells[value].to_owned(),
                });
            }
        }
        case
    }

    /// The value expected under a key; NaN and infinity stand as texts.
    pub fn value(&self, key: &str) -> Option<&Json> {
        self.expected.get(key).map(|entry| &entry["v"])
    }

    /// The effects in the keys of `expected`, each once.
    pub fn prefixes(&self) -> Vec<String> {
        let keys = self.expected.as_object().into_iter().flatten().map(|(key, _)| key);
        let mut prefixes: Vec<String> =
            keys.filter_map(|key| key.rsplit_once('.')).map(|(prefix, _)| prefix.to_owned()).collect();
        prefixes.sort_unstable();
        prefixes.dedup();
        prefixes.retain(|prefix| prefix != "subject_error");
        prefixes
    }

    /// The plan code of a level.
    pub fn code(&self, level: &str) -> &str {
        let (code, ..) = self.visits.iter().find(|(_, label, _)| label == level).expect("a level of the case");
        code
    }

    /// The plan, with these analyses at its end.
    pub fn plan(&self, analyses: &str) -> String {
        let table = |factors: &[(String, Vec<String>)]| {
            let each = factors.iter().map(|(name, levels)| format!("{name} = {levels:?}"));
            format!("{{ {} }}", each.collect::<Vec<_>>().join(", "))
        };
        let mut plan = format!(
            "[study]\ncode = \"REF\"\ntitle = \"Reference values\"\ntime_zone = \"Europe/London\"\n\n\
             [subject]\npattern = '[A-Za-z0-9]+'\nnormalise = [\"trim\"]\nanchor = \"enrolment\"\nattributes = {}\n\n\
             [[measure]]\ncode = \"response\"\nunit = \"mm\"\nconditions = {}\n",
            table(&self.between),
            table(&self.conditions)
        );
        let condition = self.conditions.iter().map(|(name, _)| format!("{name} = {{ column = \"{name}\" }}"));
        let condition = format!("condition = {{ {} }}", condition.collect::<Vec<_>>().join(", "));
        let mut map = Vec::new();
        for (code, label, day) in &self.visits {
            plan.push_str(&format!("\n[[visit]]\ncode = \"{code}\"\nlabel = \"{label}\"\nday = {day}\n"));
            map.push(format!("\"{label}\" = \"{code}\""));
        }
        plan.push_str(&format!(
            "\n[[instrument]]\ncode = \"rig\"\nfolder = \"exports/rig\"\nfiles = \"*.csv\"\nrest = \"0s\"\n\n\
             [instrument.reader]\nformat = \"delimited\"\ndelimiter = \",\"\nheader = {{ row = 1 }}\n\
             subject = {{ column = \"Subject\" }}\ntaken_at = {{ column = \"Date\", format = \"iso\" }}\n\
             visit = {{ column = \"Visit\", map = {{ {} }} }}\n\n\
             [[instrument.reader.value]]\nmeasure = \"response\"\ncolumn = \"Value\"\n{condition}\n\n{analyses}",
            map.join(", ")
        ));
        plan
    }

    /// The roster: everybody, enrolled on day 0.
    pub fn roster(&self) -> String {
        let line = |(subject, groups): (&String, &Vec<String>)| {
            let groups: String = groups.iter().map(|level| format!(",{level}")).collect();
            format!("{subject},{},{groups}\n", day_0())
        };
        let lines: String = self.subjects.iter().zip(&self.groups).map(line).collect();
        let names: String = self.between.iter().map(|(name, _)| format!(",{name}")).collect();
        format!("subject,enrolled,withdrawn{names}\n{lines}")
    }

    /// Rows as an export.
    pub fn export(&self, rows: &[Row]) -> String {
        let names: String = self.conditions.iter().map(|(name, _)| format!("{name},")).collect();
        let mut export = format!("Subject,Date,Visit,{names}Value\n");
        for Row { subject, visit, conditions, value } in rows {
            let (.., day) = self.visits.iter().find(|(_, label, _)| label == visit).expect("a level of the case");
            let conditions: String = conditions.iter().map(|level| format!("{level},")).collect();
            export.push_str(&format!("{subject},{},{visit},{conditions}{value}\n", day_0() + Days::new(*day)));
        }
        export
    }

    /// The study with all rows in one export, collected.
    pub fn collected(&self, programs: Programs, analyses: &str) -> Site {
        let site = Site::with(programs, &self.plan(analyses), &self.roster());
        site.drop_export("exports/rig/all.csv", self.export(&self.rows));
        let collected = site.collect();
        assert_eq!(collected["readings"]["filed"], self.rows.len(), "{collected}");
        assert_eq!(collected["readings"]["held"], 0, "{collected}");
        site
    }
}

fn slug(text: &str) -> String {
    let plain = |c: char| if c.is_ascii_alphanumeric() { c.to_ascii_lowercase() } else { '-' };
    text.chars().map(plain).collect::<String>().trim_matches('-').to_owned()
}

/// Compared values of one case, with every difference in words.
#[derive(Debug)]
pub struct Compared<'c> {
    /// The case.
    pub case: &'c Case,
    /// How many values were compared.
    pub values: usize,
    /// What differs.
    pub differences: Vec<String>,
}

impl<'c> Compared<'c> {
    /// Nothing compared yet.
    pub fn new(case: &'c Case) -> Self {
        Self { case, values: 0, differences: Vec::new() }
    }

    /// Compares what was found with what the case expects under a key, at the tolerance that stands there. A key that
    /// the case has not is nothing to compare.
    pub fn key(&mut self, key: &str, found: &Json) {
        self.key_or_null(key, found, false);
    }

    /// The same; `null` is right as well where the published value is a limit that nothing was computed for.
    pub fn key_or_null(&mut self, key: &str, found: &Json, null_too: bool) {
        let Some(entry) = self.case.expected.get(key) else { return };
        let number = |name: &str| entry[name].as_f64().unwrap_or(0.0);
        // A sum of squares that is exactly 0 may come out as the square of a rounding error.
        let zero = if entry["v"].as_f64() == Some(0.0) { 1e-20 } else { 0.0 };
        let good = (null_too && found.is_null()) || close(found, &entry["v"], number("rtol"), number("atol") + zero);
        self.note(good, key, &entry["v"], found);
    }

    /// Compares with a value that follows from the case's own.
    pub fn also(&mut self, what: &str, found: &Json, wanted: f64, rtol: f64) {
        self.note(close(found, &Json::from(wanted), rtol, 0.0), what, &Json::from(wanted), found);
    }

    /// Compares exactly.
    pub fn exactly(&mut self, what: &str, found: &Json, wanted: &Json) {
        self.note(found == wanted, what, wanted, found);
    }

    fn note(&mut self, good: bool, what: &str, wanted: &Json, found: &Json) {
        self.values += 1;
        if !good {
            self.differences.push(format!("{}: {what}: expected {wanted}, found {found}", self.case.name));
        }
    }
}

/// Within tolerance; what is undefined has to be `null`.
fn close(found: &Json, wanted: &Json, rtol: f64, atol: f64) -> bool {
    match wanted {
        Json::String(_) => found.is_null(),
        Json::Array(wanted) => found.as_array().is_some_and(|found| {
            found.len() == wanted.len() && found.iter().zip(wanted).all(|(is, was)| close(is, was, rtol, atol))
        }),
        wanted => match (found.as_f64(), wanted.as_f64()) {
            (Some(is), Some(was)) => (is - was).abs() <= atol + rtol * was.abs(),
            _ => false,
        },
    }
}

/// The one entry of a list of results whose fields are these.
pub fn find<'j>(list: &'j Json, fields: &[(&str, &str)]) -> &'j Json {
    let entries = list.as_array().unwrap_or_else(|| panic!("no list: {list}"));
    let fits = |entry: &&Json| fields.iter().all(|(name, value)| entry[*name] == *value);
    let mut found = entries.iter().filter(fits);
    match (found.next(), found.next()) {
        (Some(entry), None) => entry,
        _ => panic!("not one entry with {fields:?}: {list}"),
    }
}
