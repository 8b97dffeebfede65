//! A small study, as good as any: four subjects, three visits, one reading each, in three exports.

use crate::site::{Programs, Site};

/// Its plan.
pub const PLAN: &str = r#"[study]
code = "WALK"
title = "Grip in a walking group"
time_zone = "Europe/London"

[subject]
pattern = 'W-\d{2}'
normalise = ["trim", "upper"]
anchor = "start"
attributes = { sex = ["F", "M"] }

[[measure]]
code = "grip"
unit = "kg"
plausible = [2, 95]

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
code = "dyn"
folder = "exports/dyn"
files = "*.csv"
rest = "0s"

[instrument.reader]
format = "delimited"
delimiter = ","
header = { row = 1 }
subject = { column = "Subject" }
visit = { column = "Visit" }
taken_at = { column = "Taken", format = "%Y-%m-%d %H:%M" }

[[instrument.reader.value]]
measure = "grip"
column = "Grip"

[[analysis]]
code = "grip-over-visits"
measure = "grip"
method = "repeated-measures"
contrasts = ["pairwise"]
"#;

/// Its roster.
pub const ROSTER: &str = "\
subject,enrolled,withdrawn,sex
W-01,2026-01-05,,F
W-02,2026-01-05,,M
W-03,2026-01-06,,F
W-04,2026-01-07,,M
";

/// Its exports, by path.
pub const EXPORTS: [(&str, &str); 3] = [
    (
        "exports/dyn/january.csv",
        "Subject,Visit,Taken,Grip\nW-01,start,2026-01-05 09:10,31.5\nW-02,start,2026-01-05 09:40,44.0\n\
         W-03,start,2026-01-06 10:05,27.5\nW-04,start,2026-01-07 09:20,39.0\n",
    ),
    (
        "exports/dyn/february.csv",
        "Subject,Visit,Taken,Grip\nW-01,week-4,2026-02-02 09:15,32.0\nW-02,week-4,2026-02-03 09:45,45.5\n\
         W-03,week-4,2026-02-03 10:00,29.0\nW-04,week-4,2026-02-04 09:25,39.5\n",
    ),
    (
        "exports/dyn/march.csv",
        "Subject,Visit,Taken,Grip\nW-01,week-8,2026-03-02 09:05,33.5\nW-02,week-8,2026-03-02 09:35,45.0\n\
         W-03,week-8,2026-03-03 10:10,30.5\nW-04,week-8,2026-03-04 09:30,41.0\n",
    ),
];

/// An export with a row for each of four faults.
pub const FAULTY: (&str, &str) = (
    "exports/dyn/odd.csv",
    "Subject,Visit,Taken,Grip\nW-09,week-8,2026-03-02 11:00,30.0\nW-01,week-9,2026-03-02 11:10,30.0\n\
     W-02,week-8,2026-03-02 11:20,3O\nW-03,week-8,2026-03-02 11:30,300\n",
);

/// The study laid out with its exports, nothing imported or collected yet.
pub fn lay_out(programs: Programs) -> Site {
    let site = Site::new(programs);
    site.write("study.toml", PLAN);
    site.write("roster.csv", ROSTER);
    EXPORTS.iter().for_each(|(path, text)| site.drop_export(path, text));
    site
}

/// What is filed, in one spelling: subject, visit, value.
pub fn filed(site: &Site) -> Vec<String> {
    let words = |reading: &serde_json::Value| {
        let word = |field: &str| reading[field].as_str().unwrap_or("-").to_owned();
        format!("{} {} {} {}", word("subject"), word("visit"), reading["value"], word("state"))
    };
    let mut filed: Vec<String> = site.readings().iter().map(words).collect();
    filed.sort();
    filed
}

/// What must be filed in the end, whatever went wrong on the way.
pub fn all_of_it() -> Vec<String> {
    let rows = EXPORTS.iter().flat_map(|(_, text)| text.lines().skip(1));
    let mut all: Vec<String> = rows
        .map(|row| {
            let cells: Vec<&str> = row.split(',').collect();
            let value: f64 = cells[3].parse().expect("a number");
            format!("{} {} {value:?} current", cells[0], cells[1])
        })
        .collect();
    all.sort();
    all
}

/// Imports and collects as on any good day, and sees that nothing was lost, nothing is there twice, and the trail holds.
pub fn a_good_day_files_everything(site: &Site) {
    site.import_roster();
    site.collect();
    assert_eq!(filed(site), all_of_it());
    assert_eq!(site.json(&["trail", "verify"])["sound"], true);
}
