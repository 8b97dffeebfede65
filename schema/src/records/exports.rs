//! Exports: what became of every file in the export folders.
//!
//! Invariant: an export is a path; its state follows from its newest bytes, their account and the holds that are open
//! on them, or, where nothing was captured, from what was last noticed.

use std::collections::{BTreeMap, HashMap, HashSet};

use serde::Serialize;
use serde_json::Value as Json;

use super::error::Result;
use super::view::{CaptureRow, View};
use crate::hold::HoldState;

/// The state of an export.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, PartialOrd, Ord, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum ExportState {
    /// Not yet at rest, or empty.
    Settling,
    /// All read, nothing held.
    Filed,
    /// Some filed or known, some held.
    PartFiled,
    /// Held as a whole, or all its rows are.
    Held,
    /// Bytes already known.
    Repeat,
    /// Left out by a rule of the plan.
    Ignored,
    /// Cannot be read now; tried again.
    Unreachable,
}

impl ExportState {
    /// All of them.
    pub const ALL: [Self; 7] =
        [Self::Settling, Self::Filed, Self::PartFiled, Self::Held, Self::Repeat, Self::Ignored, Self::Unreachable];

    /// The code that people and files use.
    pub fn code(self) -> &'static str {
        match self {
            Self::Settling => "settling",
            Self::Filed => "filed",
            Self::PartFiled => "part-filed",
            Self::Held => "held",
            Self::Repeat => "repeat",
            Self::Ignored => "ignored",
            Self::Unreachable => "unreachable",
        }
    }
}

/// One export.
#[derive(Debug, Clone)]
pub struct ExportRow {
    /// Its path, relative to the study's folder.
    pub export: String,
    /// The instrument's code.
    pub instrument: String,
    /// What became of it.
    pub state: ExportState,
    /// The account of its lines.
    pub lines: Option<Json>,
    /// Its newest capture.
    pub capture: Option<i64>,
    /// When that was filed.
    pub at: Option<String>,
    /// Why it is in this state, where that needs a word.
    pub detail: Option<String>,
}

/// The holds on each capture: (lines with open holds, an open hold on the file, a dismissed hold on the file).
#[derive(Debug, Default, Clone)]
struct HoldsOn {
    lines: HashSet<i64>,
    file: Option<String>,
    dismissed: bool,
}

impl View<'_> {
    /// Every export, by its path.
    pub fn exports(&self) -> Result<Vec<ExportRow>> {
        let holds = self.holds_by_capture()?;
        let mut exports: BTreeMap<String, ExportRow> = BTreeMap::new();
        let mut paths: HashMap<i64, String> = HashMap::new();
        for capture in self.captures()? {
            let same =
                capture.repeat_of.and_then(|other| paths.get(&other)).map(|path| format!("the same bytes as {path}"));
            paths.insert(capture.capture, capture.path.clone());
            let row = ExportRow {
                state: state_of(&capture, holds.get(&capture.capture)),
                export: capture.path.clone(),
                instrument: capture.instrument,
                lines: capture.lines,
                capture: Some(capture.capture),
                at: Some(capture.at),
                detail: same.or_else(|| holds.get(&capture.capture).and_then(|holds| holds.file.clone())),
            };
            exports.insert(capture.path, row);
        }
        for (path, seen) in self.records().noticed()? {
            let state = match seen.state.as_str() {
                "ignored" => ExportState::Ignored,
                "unreachable" => ExportState::Unreachable,
                "settling" if seen.capture.is_none() => ExportState::Settling,
                _ => continue,
            };
            let row = exports.entry(path.clone()).or_insert(ExportRow {
                export: path,
                instrument: seen.instrument,
                state,
                lines: None,
                capture: seen.capture,
                at: None,
                detail: None,
            });
            row.state = state;
            row.detail = seen.detail;
        }
        Ok(exports.into_values().collect())
    }

    fn holds_by_capture(&self) -> Result<HashMap<i64, HoldsOn>> {
        let mut on: HashMap<i64, HoldsOn> = HashMap::new();
        let mut lines: HashMap<i64, i64> = HashMap::new();
        for hold in self.holds(false)? {
            let entry = on.entry(hold.capture).or_default();
            match (hold.line, hold.state) {
                (None, HoldState::Open) => entry.file = Some(format!("{}: {}", hold.reason, hold.wrong)),
                (None, HoldState::Dismissed) => entry.dismissed = true,
                (Some(line), HoldState::Open) => {
                    entry.lines.insert(line);
                    lines.insert(hold.hold, line);
                }
                _ => {}
            }
        }
        for (capture, hold) in self.sightings()? {
            if let Some(line) = lines.get(&hold) {
                // The line of the first sighting stands for the row: only whether there are any matters here.
                on.entry(capture).or_default().lines.insert(*line);
            }
        }
        Ok(on)
    }
}

fn state_of(capture: &CaptureRow, holds: Option<&HoldsOn>) -> ExportState {
    let count = |key: &str| capture.lines.as_ref().and_then(|lines| lines[key].as_u64()).unwrap_or(0);
    match holds {
        _ if capture.repeat_of.is_some() => ExportState::Repeat,
        Some(holds) if holds.file.is_some() => ExportState::Held,
        Some(holds) if !holds.lines.is_empty() && count("filed") + count("already") > 0 => ExportState::PartFiled,
        Some(holds) if !holds.lines.is_empty() => ExportState::Held,
        Some(holds) if holds.dismissed && capture.lines.is_none() => ExportState::Ignored,
        _ => ExportState::Filed,
    }
}
