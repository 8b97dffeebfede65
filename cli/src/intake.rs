//! The one door to the intake: bringing a plan into force, collecting, deciding.
//!
//! Invariant: no other module of this crate names the intake, so that what it needs and gives stands here.

use std::path::Path;

use revisant_schema::hold::Answer;
use revisant_schema::plan::{self, Loaded, Plan};
use revisant_schema::records::codec::Hash;
use revisant_schema::records::{ActKind, Cell, Doer, Records, RecordsError};
use serde::Serialize;

use crate::error::Failure;

/// The plan that is in force now.
pub struct PlanInForce {
    /// Its version.
    pub version: i64,
    /// The plan.
    pub plan: Plan,
}

/// Reads the plan of a study's folder.
pub fn load(study: &Path) -> Result<Loaded, Failure> {
    Ok(plan::load(study, &|path| std::fs::read_to_string(path))?)
}

/// Brings the plan of the study's folder into force, if it is not.
pub fn bring_plan_into_force(records: &mut Records, study: &Path, doer: &Doer) -> Result<PlanInForce, Failure> {
    let loaded = load(study)?;
    let known = records.view()?.plan()?;
    if let Some(known) = known.filter(|known| known.files == loaded.files) {
        return Ok(PlanInForce { version: known.version, plan: loaded.plan });
    }
    let files = serde_json::to_string(&loaded.files).map_err(|error| RecordsError::Damaged(error.to_string()))?;
    let sha256 = bytes_of(&loaded.files.sha256());
    let version = records.act(ActKind::Plan, doer, |act| {
        act.add("plan_version", &[Cell::Bytes(&sha256), Cell::Text(&files)])
    })?;
    Ok(PlanInForce { version, plan: loaded.plan })
}

fn bytes_of(hex: &str) -> Hash {
    let mut hash = [0; 32];
    for (byte, at) in hash.iter_mut().zip((0..).step_by(2)) {
        *byte = hex.get(at..at + 2).and_then(|digits| u8::from_str_radix(digits, 16).ok()).unwrap_or(0);
    }
    hash
}

/// What a changed plan would change in the records, in words; empty when nothing.
pub fn would_change(_records: &Records, _study: &Path) -> Result<Vec<String>, Failure> {
    Ok(vec![])
}

/// What one collect did.
#[derive(Debug, Clone, Default, Serialize)]
pub struct Collected {
    /// How many exports are in each state, by the state's code.
    pub exports: serde_json::Map<String, serde_json::Value>,
    /// What became of readings.
    pub readings: CollectedReadings,
    /// How long it took.
    pub seconds: f64,
}

/// What became of readings.
#[derive(Debug, Clone, Copy, Default, Serialize)]
pub struct CollectedReadings {
    /// Filed now.
    pub filed: u64,
    /// There already.
    pub already: u64,
    /// Held now.
    pub held: u64,
}

/// How a collect is to be done.
pub struct HowToCollect<'a> {
    /// Read raw copies again with a mended reader.
    pub adopt: bool,
    /// Called with how many exports are done, and of how many.
    pub progress: &'a mut dyn FnMut(u64, u64),
}

/// Reads once all that waits.
pub fn collect(
    _records: &mut Records,
    _study: &Path,
    _doer: &Doer,
    _how: HowToCollect<'_>,
) -> Result<Collected, Failure> {
    Err(Failure::not_yet("collecting is not in this build"))
}

/// What deciding came to.
#[derive(Debug, Clone, Copy, Default, Serialize)]
pub struct Decided {
    /// Holds that are decided or dismissed now.
    pub holds: u64,
    /// Readings filed by it.
    pub filed: u64,
    /// Holds that the answer opened: the row has another fault.
    pub held: u64,
}

/// Gives a person's answer to holds, or dismisses them (`None`).
pub fn decide(
    _records: &mut Records,
    _study: &Path,
    _holds: &[i64],
    _answer: Option<&Answer>,
    _doer: &Doer,
) -> Result<Decided, Failure> {
    Err(Failure::not_yet("deciding is not in this build"))
}

/// Whether a service is running for the study.
pub fn service_running(_study: &Path) -> bool {
    false
}
