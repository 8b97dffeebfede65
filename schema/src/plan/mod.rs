//! The plan `study.toml`: as written, checked, used.
//!
//! Invariants: a [`Plan`] exists only without errors; reading one is pure (the same texts give the same plan and the
//! same faults) and never panics, whatever the texts; all faults of a plan come at once.
//!
//! The way of a plan: [`load`] reads the files, `written` makes a tree in which everything knows where it stands,
//! `keys` holds the tree against the definitions of the tables, and one module a table turns it into the types of
//! [`model`], checking what one key says against another.
//!
//! Older plans keep working. Spellings of earlier grammars are taken with a warning: in `[[analysis]]` the key
//! `adjust` for `multiplicity`, and the method `rm-anova` for `repeated-measures`. Where the grammar leaves a default
//! open, it is: `header = { row = 1 }` (with `columns` given: no header), `multiplicity = "holm"`, `sides = 2`,
//! `dropout = 0`, and an analysis without `visits` uses those at which its measure is due.

// In tests a panic is how a failure is said.
#![cfg_attr(test, allow(clippy::unwrap_used, clippy::expect_used, clippy::panic))]

mod analysis;
mod assume;
mod diagnostics;
mod forms;
mod instrument;
mod interim;
mod keys;
pub mod meaning;
mod measure;
pub mod model;
mod place;
mod reader;
mod schema;
pub mod stamp;
mod study;
pub mod units;
mod value;
mod visit;
pub mod windows;
mod written;

use std::io;
use std::path::{Path, PathBuf};

use sha2::{Digest, Sha256};

pub use diagnostics::{Fault, Faults, Severity};
pub use model::*;
pub use schema::{reader_schema, schema};

use keys::{Check, Kind, Tab, Table, key, needed};
use written::{FileText, Node, SyntaxFault};

/// The plan's file, in the study's folder.
pub const MAIN: &str = "study.toml";

/// The texts of a plan.
#[derive(Debug, Clone, PartialEq, Eq, serde::Serialize, serde::Deserialize)]
pub struct PlanFiles {
    /// `study.toml`.
    pub main: String,
    /// The reader files that it names: the path as written there, and the text.
    pub readers: Vec<(String, String)>,
}

impl PlanFiles {
    /// SHA-256 of the plan, in lower-case hexadecimal digits.
    ///
    /// Without reader files, that of the bytes of `study.toml`, so that any tool can recompute it. With reader files,
    /// that of this text: the line `revisant plan`, then for `study.toml` and for each reader file, in the order of
    /// their paths' bytes, the line `PATH LENGTH` (the length in bytes), the file's bytes, and a line end.
    pub fn sha256(&self) -> String {
        let mut hash = Sha256::new();
        if self.readers.is_empty() {
            hash.update(self.main.as_bytes());
        } else {
            hash.update(b"revisant plan\n");
            let mut readers: Vec<&(String, String)> = self.readers.iter().collect();
            readers.sort();
            let main = (MAIN.to_owned(), self.main.clone());
            for (path, text) in std::iter::once(&main).chain(readers) {
                hash.update(format!("{path} {}\n{text}\n", text.len()).as_bytes());
            }
        }
        hash.finalize().iter().map(|byte| format!("{byte:02x}")).collect()
    }
}

/// A plan as loaded.
#[derive(Debug, Clone)]
pub struct Loaded {
    /// The sound plan.
    pub plan: Plan,
    /// Its texts.
    pub files: PlanFiles,
    /// What a person should know although the plan is sound.
    pub warnings: Vec<Fault>,
}

/// Why a plan could not be loaded.
#[derive(Debug, thiserror::Error)]
pub enum LoadError {
    /// `study.toml` cannot be read.
    #[error("{} cannot be read: {source}", .path.display())]
    Unreadable {
        /// The file.
        path: PathBuf,
        /// Why.
        source: io::Error,
    },
    /// The plan is unsound.
    #[error("{0}")]
    Unsound(Faults),
}

/// Reads the plan of the study in `dir`, through `read`, and checks it.
///
/// A reader file that cannot be read is a fault of the plan, at the key that names it.
pub fn load(dir: &Path, read: &dyn Fn(&Path) -> io::Result<String>) -> Result<Loaded, LoadError> {
    let path = dir.join(MAIN);
    let main = read(&path).map_err(|source| LoadError::Unreadable { path, source })?;
    let (mut readers, mut absent) = (vec![], vec![]);
    for named in reader_files(&main) {
        match read(&dir.join(&named)) {
            Ok(text) => readers.push((named, text)),
            Err(error) => absent.push((named, error.to_string())),
        }
    }
    let files = PlanFiles { main, readers };
    let (plan, warnings) = judge(&files, &absent).map_err(LoadError::Unsound)?;
    Ok(Loaded { plan, files, warnings })
}

/// The reader files that a plan names, each once, in the order of the plan.
pub fn reader_files(main: &str) -> Vec<String> {
    let (root, _) = written::read(0, main);
    let mut files: Vec<String> = vec![];
    let tabs = Tab::new(&ROOT, &root, String::new()).map(|tab| tab.tables("instrument", &instrument::INSTRUMENT));
    for path in tabs.unwrap_or_default().iter().filter_map(|tab| tab.text("reader")) {
        if !files.iter().any(|known| known == path) {
            files.push(path.to_owned());
        }
    }
    files
}

/// Checks a plan from its texts alone: the plan and what a person should know of it, or all its faults.
pub fn parse(files: &PlanFiles) -> Result<(Plan, Vec<Fault>), Faults> {
    judge(files, &[])
}

/// As [`parse`]; `absent` are the reader files that could not be read, and why.
fn judge(files: &PlanFiles, absent: &[(String, String)]) -> Result<(Plan, Vec<Fault>), Faults> {
    let mut sources = vec![FileText { name: MAIN.to_owned(), text: files.main.clone() }];
    sources.extend(files.readers.iter().map(|(name, text)| FileText { name: name.clone(), text: text.clone() }));
    let mut check = Check::new(&sources);
    let mut trees = vec![];
    for (file, source) in sources.iter().enumerate() {
        let (tree, faults) = written::read(file, &source.text);
        syntax(&mut check, &faults);
        trees.push((source.name.clone(), tree));
    }
    let (_, root) = trees.remove(0);
    let plan = whole(&mut check, &root, &trees, absent);
    finish(check.faults, plan)
}

/// Faults of TOML's own syntax.
fn syntax(check: &mut Check<'_>, faults: &[SyntaxFault]) {
    let mut last = None;
    for fault in faults {
        // What follows on the same line follows from the first.
        let line =
            check.sources.get(fault.spot.file).map(|file| (fault.spot.file, file.place(fault.spot.span.start).0));
        if line == std::mem::replace(&mut last, line) {
            continue;
        }
        let wrong = format!("This is not TOML: {}.", fault.message.trim_end_matches('.'));
        check.error(&fault.spot, "", wrong, "TOML 1.0 (toml.io)");
        check.torn = true;
    }
}

/// Sorts the faults, drops repeated ones, and hands the plan out if none is an error.
fn finish(mut faults: Vec<Fault>, plan: Option<Plan>) -> Result<(Plan, Vec<Fault>), Faults> {
    // `study.toml` before the reader files, whatever their names.
    faults.sort_by(|a, b| {
        (a.file != MAIN, &a.file, a.span, a.severity).cmp(&(b.file != MAIN, &b.file, b.span, b.severity))
    });
    faults.dedup_by(|a, b| (&a.file, a.span, &a.wrong) == (&b.file, b.span, &b.wrong));
    let mut faults = Faults(faults);
    if plan.is_none() && !faults.any_error() {
        // No part may be absent without a word; were one, the plan must still not be taken for faultless.
        let (file, wrong) = (MAIN.to_owned(), "The plan is not whole.".to_owned());
        let (key, right, text) = (String::new(), String::new(), String::new());
        let severity = Severity::Error;
        faults.0.push(Fault {
            file,
            line: 1,
            column: 1,
            span: (0, 0),
            key,
            wrong,
            right,
            nearest: None,
            severity,
            text,
        });
    }
    match plan {
        Some(plan) if !faults.any_error() => Ok((plan, faults.0)),
        _ => Err(faults),
    }
}

static ROOT: Table = Table {
    name: "the plan",
    doc: "The plan of a study of repeated measurements.",
    keys: &[
        needed("study", Kind::Table(&study::STUDY), "What is studied, and where"),
        needed("subject", Kind::Table(&study::SUBJECT), "How subjects are told apart"),
        key("arm", Kind::Tables(&study::ARM), "none", "The arms"),
        needed("measure", Kind::Tables(&measure::MEASURE), "What is measured"),
        needed("visit", Kind::Tables(&visit::VISIT), "The planned time points"),
        key("instrument", Kind::Tables(&instrument::INSTRUMENT), "none", "The sources of exports"),
        key("analysis", Kind::Tables(&analysis::ANALYSIS), "none", "The analyses that the protocol names"),
        key("interim", Kind::Table(&interim::INTERIM), "none", "The planned looks"),
        key("assume", Kind::Table(&assume::ASSUME), "none", "What is assumed for rehearsing"),
    ],
    one_of: &[],
};

/// The names of the tables that have this key.
fn tables_with(name: &str) -> Vec<&'static str> {
    let mut tables = vec![];
    each_table(&ROOT, &mut |table| {
        if table.key(name).is_some() && !tables.contains(&table.name) {
            tables.push(table.name);
        }
    });
    tables
}

/// Visits a table's definition and all those under it.
fn each_table(table: &'static Table, visit: &mut dyn FnMut(&'static Table)) {
    fn kind(it: &Kind, visit: &mut dyn FnMut(&'static Table)) {
        match it {
            Kind::Table(table) | Kind::Tables(table) => each_table(table, visit),
            Kind::List(item, _) | Kind::Pair(item) | Kind::Map(_, item) => kind(item, visit),
            Kind::Either(kinds) => kinds.iter().for_each(|it| kind(it, visit)),
            _ => {}
        }
    }
    visit(table);
    table.keys.iter().for_each(|key| kind(&key.kind, visit));
}

/// The whole plan; `None` where a part without a stand-in is at fault, which has been said.
fn whole(check: &mut Check<'_>, root: &Node, readers: &[(String, Node)], absent: &[(String, String)]) -> Option<Plan> {
    check.table(&ROOT, root, "");
    let tab = Tab::new(&ROOT, root, String::new())?;
    let instruments = tab.tables("instrument", &instrument::INSTRUMENT);
    reader_tables(check, &instruments, readers, absent);
    if check.torn {
        // Half a file would only give faults that are none.
        return None;
    }
    let subject_tab = tab.table("subject", &study::SUBJECT);
    let names: Vec<String> =
        subject_tab.iter().flat_map(|tab| tab.map("attributes")).map(|entry| entry.key.clone()).collect();
    let anchor = subject_tab.as_ref().and_then(|tab| tab.text("anchor"));
    let arms = study::arms(check, &tab.tables("arm", &study::ARM));
    let study = tab.table("study", &study::STUDY).map(|tab| study::study(check, &tab, &arms));
    let measures = measure::measures(check, &tab.tables("measure", &measure::MEASURE), &names);
    let visits = visit::visits(check, &tab.tables("visit", &visit::VISIT), &measures, anchor);
    let subject = subject_tab.as_ref().map(|tab| study::subject(check, tab, &visits));
    let zone = study.as_ref().map_or(chrono_tz::Tz::UTC, |study| study.time_zone);
    let known = instrument::Known { measures: &measures, visits: &visits, zone, readers };
    let instruments = instrument::instruments(check, &instruments, &known);
    let attributes = subject.as_ref().map_or(&[][..], |subject| &subject.attributes);
    let known =
        analysis::Known { measures: &measures, visits: &visits, arms: &arms, attributes, instruments: &instruments };
    let analyses = analysis::analyses(check, &tab.tables("analysis", &analysis::ANALYSIS), &known);
    let known = interim::Known { analyses: &analyses, visits: &visits, arms: &arms };
    let interim = tab.table("interim", &interim::INTERIM).map(|tab| interim::interim(check, &tab, &known));
    let lengths = assumed_lengths(interim.as_ref().and_then(Option::as_ref), &analyses, visits.len());
    let assume = tab.table("assume", &assume::ASSUME).map(|tab| assume::assume(check, &tab, &arms, &lengths));
    Some(Plan {
        study: study?,
        subject: subject?,
        arms,
        measures,
        visits,
        instruments,
        analyses,
        interim: interim.map_or(Some(None), |it| it.map(Some))?,
        assume: assume.map_or(Some(None), |it| it.map(Some))?,
    })
}

/// How many visits `[assume]` may speak of: all of the plan, or those of the analysis that is looked at; without
/// looks, those of any analysis.
fn assumed_lengths(interim: Option<&Interim>, analyses: &[Analysis], visits: usize) -> Vec<usize> {
    let looked_at = interim.and_then(|interim| analyses.get(interim.analysis));
    let mut lengths = vec![visits];
    for analysis in looked_at.map_or(analyses, std::slice::from_ref) {
        let baseline = analysis.mixed.as_ref().is_some_and(|mixed| mixed.baseline.is_some());
        lengths.push(analysis.visits.len() + usize::from(baseline));
    }
    lengths.sort_unstable();
    lengths.dedup();
    lengths
}

/// Holds each reader file against the reader's definition; one that is not there is a fault where it is named.
fn reader_tables(
    check: &mut Check<'_>,
    instruments: &[Tab<'_>],
    readers: &[(String, Node)],
    absent: &[(String, String)],
) {
    for tab in instruments {
        let Some(path) = tab.text("reader") else { continue };
        match readers.iter().find(|(name, _)| name == path) {
            Some((_, node)) => check.table(&reader::READER, node, &keys::join(&tab.path, "reader")),
            None => {
                let why =
                    absent.iter().find(|(name, _)| name == path).map_or(String::new(), |(_, why)| format!(": {why}"));
                let wrong = format!("The reader file \"{}\" cannot be read{why}.", forms::clip(path));
                check.at(tab, "reader", wrong, "the path of a file, relative to the plan, or the table itself");
            }
        }
    }
}
