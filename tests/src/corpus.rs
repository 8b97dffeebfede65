//! The studies of `tests/corpus`: copied to a site, led through their steps, and judged at each.

use std::fs;
use std::path::{Path, PathBuf};

use serde_json::Value as Json;

use crate::judge::{Answers, Verdict, judge};
use crate::site::{Programs, Site};

/// The folder of a study.
pub fn folder(study: &str) -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join("corpus").join(study)
}

/// A study's truth.
pub fn truth(study: &str, name: &str) -> Json {
    let path = folder(study).join(name);
    let text = fs::read_to_string(&path).unwrap_or_else(|error| panic!("{}: {error}", path.display()));
    serde_json::from_str(&text).unwrap_or_else(|error| panic!("{}: {error}", path.display()))
}

/// A study laid out on a site, its roster imported, nothing collected yet.
pub fn lay_out(programs: Programs, study: &str) -> Site {
    let site = Site::new(programs);
    let from = folder(study);
    copy(&site, &from, &["study.toml".into(), "roster.csv".into()]);
    let exports = files_below(&from, Path::new("exports"));
    copy(&site, &from, &exports);
    exports.iter().for_each(|export| site.age(export));
    site.import_roster();
    site
}

/// What the program now says of a study.
pub fn ask(site: &Site, truth: &Json) -> Answers {
    let now = truth["now"].as_str().expect("the truth says at which moment it holds");
    Answers {
        readings: site.json(&["readings"]),
        holds: site.json(&["holds"]),
        status: site.json(&["status"]),
        completeness: site.json(&["completeness", "--on", now]),
    }
}

/// Leads a study through all its steps; every difference from its truth is returned, with the step before it.
pub fn run(programs: Programs, study: &str) -> Verdict {
    let site = lay_out(programs, study);
    let steps = folder(study).join("steps.json");
    if !steps.exists() {
        site.collect();
        let truth = truth(study, "truth.json");
        return judge(&truth, &ask(&site, &truth));
    }
    let mut all = Verdict::default();
    for step in crate::site::list(truth(study, "steps.json")) {
        let Some(name) = take_step(&site, study, &step) else { continue };
        let truth = truth(study, &name);
        let verdict = judge(&truth, &ask(&site, &truth));
        all.expected += verdict.expected;
        all.differences.extend(verdict.differences.into_iter().map(|text| format!("{name}: {text}")));
    }
    all
}

/// Takes one step; after a collect, names the truth that then holds.
fn take_step(site: &Site, study: &str, step: &Json) -> Option<String> {
    let from = folder(study);
    let file = |step: &Json| PathBuf::from(step["file"].as_str().expect("a step names its file"));
    match step["do"].as_str() {
        Some("drop") => {
            let mut dropped: Vec<PathBuf> = Vec::new();
            for path in step["files"].as_array().into_iter().flatten().filter_map(Json::as_str) {
                // drops/N/exports/… arrives as exports/…
                let to: PathBuf = Path::new(path).components().skip(2).collect();
                site.write(&to, fs::read(from.join(path)).expect("a file of the corpus"));
                dropped.push(to);
            }
            site.an_hour_later();
            dropped.sort();
            dropped.iter().for_each(|path| site.age(path));
        }
        Some("roster") => {
            site.write("roster.csv", fs::read(from.join(file(step))).expect("a roster of the corpus"));
            site.import_roster();
        }
        Some("plan") => site.write("study.toml", fs::read(from.join(file(step))).expect("a plan of the corpus")),
        Some("collect") => {
            site.collect();
            return Some(step["truth"].as_str().expect("a collect has a truth").to_owned());
        }
        other => panic!("no such step: {other:?}"),
    }
    None
}

fn copy(site: &Site, from: &Path, names: &[PathBuf]) {
    for name in names {
        site.write(name, fs::read(from.join(name)).unwrap_or_else(|error| panic!("{}: {error}", name.display())));
    }
}

/// All files below a folder of `root`, relative to `root` and sorted.
pub fn files_below(root: &Path, below: &Path) -> Vec<PathBuf> {
    let mut files = Vec::new();
    let mut folders = vec![below.to_path_buf()];
    while let Some(folder) = folders.pop() {
        let Ok(entries) = fs::read_dir(root.join(&folder)) else { continue };
        for entry in entries {
            let entry = entry.expect("an entry of a folder");
            let path = folder.join(entry.file_name());
            if entry.path().is_dir() { folders.push(path) } else { files.push(path) }
        }
    }
    files.sort();
    files
}
