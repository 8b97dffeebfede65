//! The one door to the intake: bringing a plan into force, collecting, deciding.
//!
//! Invariant: no other module of this crate names the intake, so that what it needs and gives stands here.

use std::path::Path;

use revisant_daemon::intake::collect::{IntakeLock, Progress, Report, collect as collect_once};
use revisant_daemon::intake::error::IntakeError;
use revisant_daemon::intake::{plan as plan_door, replace};
use revisant_schema::hold::Answer;
use revisant_schema::plan::{self, Loaded, Plan};
use revisant_schema::records::exports::ExportState;
use revisant_schema::records::view::HoldRow;
use revisant_schema::records::{Doer, Records};
use serde::Serialize;

use crate::error::Failure;

/// The plan that is in force now.
pub struct PlanInForce {
    /// Its version.
    pub version: i64,
    /// The plan.
    pub plan: Plan,
}

impl From<IntakeError> for Failure {
    fn from(error: IntakeError) -> Self {
        match error {
            IntakeError::Plan(error) => error.into(),
            IntakeError::Records(error) => error.into(),
            other => Self::new(other.kind(), other.to_string()),
        }
    }
}

/// Reads the plan of a study's folder.
pub fn load(study: &Path) -> Result<Loaded, Failure> {
    Ok(plan::load(study, &|path| std::fs::read_to_string(path))?)
}

/// Brings the plan of the study's folder into force, if it is not.
pub fn bring_plan_into_force(records: &mut Records, study: &Path, doer: &Doer) -> Result<PlanInForce, Failure> {
    let rules = plan_door::bring_into_force(records, study, doer, false)?;
    Ok(PlanInForce { version: rules.version, plan: rules.plan })
}

/// What a changed plan would change in the records, in words; empty when nothing.
pub fn would_change(records: &Records, study: &Path) -> Result<Vec<String>, Failure> {
    let loaded = load(study)?;
    let rules = plan_door::in_force(records)?;
    let changes = plan_door::would_change(records, &rules, &loaded.plan)?;
    Ok(changes
        .into_iter()
        .map(|change| format!("{}: {} lines, such as {}", change.export, change.lines, change.example))
        .collect())
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
pub fn collect(records: &mut Records, study: &Path, doer: &Doer, how: HowToCollect<'_>) -> Result<Collected, Failure> {
    let _lock = IntakeLock::take(records, &doer.program)?;
    let mut adopted = Report::default();
    if how.adopt {
        adopted = replace::adopt(records, study, doer)?.1;
    } else {
        plan_door::bring_into_force(records, study, doer, false)?;
    }
    let HowToCollect { progress, .. } = how;
    let report = collect_once(records, study, doer, true, &mut |Progress { done, of }| progress(done, of))?;
    let counts = |state: ExportState| report.exports.get(state.code()).copied().unwrap_or(0).into();
    Ok(Collected {
        exports: ExportState::ALL.into_iter().map(|state| (state.code().to_owned(), counts(state))).collect(),
        readings: CollectedReadings {
            filed: report.filed + adopted.filed,
            already: report.already,
            held: report.held + adopted.held,
        },
        seconds: report.seconds,
    })
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

/// Gives a person's answer to holds of one export, or dismisses them (`None`).
pub fn decide(
    records: &mut Records,
    holds: &[HoldRow],
    answer: Option<&Answer>,
    doer: &Doer,
) -> Result<Decided, Failure> {
    let decision = match answer {
        Some(answer) => replace::decide(records, holds, answer, doer)?,
        None => replace::dismiss(records, holds, doer)?,
    };
    Ok(Decided { holds: decision.ended.len() as u64, filed: decision.filed, held: decision.held })
}

/// Open holds that one answer may be given to at once: those like it in the same export.
pub fn like(records: &Records, hold: &HoldRow) -> Result<Vec<HoldRow>, Failure> {
    Ok(replace::like(records, hold)?)
}

/// Whether a service is running for the study.
pub fn service_running(study: &Path) -> bool {
    IntakeLock::holder(&Records::folder_of(study)).is_some_and(|note| note.starts_with("revisantd"))
}
