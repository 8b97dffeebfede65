//! Reading of the reference cases beside the tests.

// Each test binary uses its own part of this; and the tests, unlike the crate, read files.
#![allow(dead_code, clippy::disallowed_methods)]

use std::fs;
use std::path::{Path, PathBuf};

use revisant_analysis::design::{Design, Factor, OneWithin};
use serde_json::Value;

pub fn folder(name: &str) -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/reference").join(name)
}

pub fn lines(path: &Path) -> Vec<Vec<String>> {
    let text = fs::read_to_string(path).unwrap();
    text.lines().skip(1).map(|line| line.split(',').map(str::to_owned).collect()).collect()
}

/// A case: its readings as a table, its levels, and what is expected of it.
pub struct Case {
    pub name: String,
    pub doc: Value,
    pub levels: Vec<String>,
    pub rows: Vec<Vec<Option<f64>>>,
    /// Agreements so far, as the share of the tolerance used; and disagreements.
    pub worst: f64,
    pub compared: usize,
    pub wrong: Vec<String>,
}

pub fn cases(name: &str) -> Vec<Case> {
    paths(name).iter().map(|path| Case::read(path)).collect()
}

fn paths(name: &str) -> Vec<PathBuf> {
    let mut paths: Vec<PathBuf> = fs::read_dir(folder(name)).unwrap().map(|entry| entry.unwrap().path()).collect();
    paths.retain(|path| path.extension().is_some_and(|e| e == "json"));
    paths.sort();
    assert!(!paths.is_empty(), "no cases in {name}");
    paths
}

/// A case of several factors: its design, and the names of its factors, between then within.
pub struct Several {
    pub case: Case,
    pub design: Design,
    pub between: Vec<String>,
    pub within: Vec<String>,
}

pub fn cases_of_several(name: &str) -> Vec<Several> {
    paths(name).iter().map(|path| Several::read(path)).collect()
}

impl Several {
    /// Lines of subject, between levels, within levels, value, in the order in which the columns are named.
    fn read(path: &Path) -> Self {
        let doc: Value = serde_json::from_str(&fs::read_to_string(path).unwrap()).unwrap();
        let lines = lines(&path.with_extension("csv"));
        let names = |kind: &str| -> Vec<String> {
            doc["columns"][kind].as_array().unwrap().iter().map(|name| name.as_str().unwrap().to_owned()).collect()
        };
        let (between, within) = (names("between"), names("within"));
        let mut group_levels: Vec<Vec<String>> = vec![Vec::new(); between.len()];
        let mut within_levels: Vec<Vec<String>> =
            within.iter().map(|name| texts(&doc["config"]["within_levels"][name])).collect();
        let sizes: Vec<usize> = within_levels.iter().map(Vec::len).collect();
        let (mut subjects, mut rows) = (Vec::new(), Vec::new());
        for line in &lines {
            let subject = position(&mut subjects, &line[0]);
            let (groups, rest) = line[1..].split_at(between.len());
            let groups: Vec<usize> =
                groups.iter().zip(&mut group_levels).map(|(at, known)| position(known, at)).collect();
            rows.resize(subjects.len(), (groups, vec![None; sizes.iter().product()]));
            let at = rest.iter().zip(&mut within_levels).map(|(at, known)| position(known, at));
            let cell = at.zip(&sizes).fold(0, |cell, (level, size)| cell * size + level);
            rows[subject].1[cell] = rest[within.len()].parse().ok();
        }
        let factors = sizes.iter().map(|&size| Factor::of(size).unwrap()).collect();
        let design = Design::new(factors, group_levels.iter().map(Vec::len).collect(), &rows).unwrap();
        let name = path.file_stem().unwrap().to_string_lossy().into_owned();
        let case = Case { name, doc, levels: Vec::new(), rows: Vec::new(), worst: 0.0, compared: 0, wrong: Vec::new() };
        Self { case, design, between, within }
    }
}

fn texts(list: &Value) -> Vec<String> {
    list.as_array().unwrap().iter().map(|text| text.as_str().unwrap().to_owned()).collect()
}

impl Case {
    fn read(path: &Path) -> Self {
        let doc: Value = serde_json::from_str(&fs::read_to_string(path).unwrap()).unwrap();
        let lines = lines(&path.with_extension("csv"));
        let grouped = lines[0].len() == 2;
        let (levels, rows) = if grouped { by_group(&lines) } else { by_subject(&lines, planned_levels(&doc)) };
        let name = path.file_stem().unwrap().to_string_lossy().into_owned();
        Self { name, doc, levels, rows, worst: 0.0, compared: 0, wrong: Vec::new() }
    }

    pub fn design(&self) -> OneWithin {
        OneWithin::from_rows(&self.rows).unwrap()
    }

    pub fn has(&self, key: &str) -> bool {
        self.doc["expected"].get(key).is_some()
    }

    pub fn value(&self, key: &str) -> f64 {
        self.doc["expected"][key]["v"].as_f64().unwrap_or_else(|| panic!("{}: {key} is no number", self.name))
    }

    /// Compares with the expected value under `key`, if there is one.
    pub fn check(&mut self, key: &str, got: Option<f64>) {
        let Some(expected) = self.doc["expected"].get(key).cloned() else { return };
        let tolerance = |name: &str| expected.get(name).and_then(Value::as_f64).unwrap_or(0.0);
        match expected["v"].as_f64() {
            Some(v) => self.close(key, got, v, tolerance("rtol"), tolerance("atol")),
            None => self.note(key, got.is_none(), 0.0, format!("{got:?} for {}", expected["v"])),
        }
    }

    pub fn close(&mut self, key: &str, got: Option<f64>, v: f64, rtol: f64, atol: f64) {
        let allowed = atol + rtol * v.abs();
        let off = got.map_or(f64::INFINITY, |x| (x - v).abs());
        let share = if off == 0.0 { 0.0 } else { off / allowed };
        self.note(key, off <= allowed, share, format!("{got:?} for {v:e}, {share:.3} of the tolerance"));
    }

    fn note(&mut self, key: &str, right: bool, share: f64, text: String) {
        self.compared += 1;
        if right {
            self.worst = self.worst.max(share);
        } else {
            self.wrong.push(format!("{}/{key}: {text}", self.name));
        }
    }
}

/// Fails with everything that disagreed, and tells how much was compared.
pub fn settle(cases: &[Case], at_least: usize) {
    let wrong: Vec<&String> = cases.iter().flat_map(|case| &case.wrong).collect();
    let compared: usize = cases.iter().map(|case| case.compared).sum();
    let worst = cases.iter().map(|case| case.worst).fold(0.0, f64::max);
    assert!(wrong.is_empty(), "{} of {compared} disagree:\n{wrong:#?}", wrong.len());
    assert!(compared >= at_least, "only {compared} values were compared, where {at_least} were meant to be");
    #[allow(clippy::disallowed_macros)] // the test's own account, shown with --nocapture
    {
        println!("{compared} values, worst {worst:.4} of its tolerance");
    }
}

fn position(names: &mut Vec<String>, name: &str) -> usize {
    names.iter().position(|known| known == name).unwrap_or_else(|| {
        names.push(name.to_owned());
        names.len() - 1
    })
}

/// The order of the levels is the plan's, not that of the file.
fn planned_levels(doc: &Value) -> Vec<String> {
    let config = &doc["config"];
    let within = doc["columns"]["within"][0].as_str().unwrap();
    let levels = config["levels"].as_array().or_else(|| config["within_levels"][within].as_array()).unwrap();
    levels.iter().map(|level| level.as_str().unwrap().to_owned()).collect()
}

/// Lines of subject, level, value.
fn by_subject(lines: &[Vec<String>], mut levels: Vec<String>) -> (Vec<String>, Vec<Vec<Option<f64>>>) {
    let mut subjects = Vec::new();
    let cells: Vec<(usize, usize, Option<f64>)> = lines
        .iter()
        .map(|line| (position(&mut subjects, &line[0]), position(&mut levels, &line[1]), line[2].parse().ok()))
        .collect();
    let mut rows = vec![vec![None; levels.len()]; subjects.len()];
    cells.into_iter().for_each(|(i, j, value)| rows[i][j] = value);
    (levels, rows)
}

/// Lines of group, value: the nth value of each group makes up the nth row.
fn by_group(lines: &[Vec<String>]) -> (Vec<String>, Vec<Vec<Option<f64>>>) {
    let mut levels = Vec::new();
    let mut groups: Vec<Vec<Option<f64>>> = Vec::new();
    for line in lines {
        let j = position(&mut levels, &line[0]);
        groups.resize(levels.len(), Vec::new());
        groups[j].push(line[1].parse().ok());
    }
    let rows = (0..groups[0].len()).map(|i| groups.iter().map(|group| group[i]).collect()).collect();
    (levels, rows)
}
