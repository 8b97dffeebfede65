//! The one door to the intake: bringing a plan into force, collecting, deciding.
//!
//! Invariant: no other module of this crate names the intake, so that what it needs and gives stands here.

use std::path::Path;
use std::sync::Arc;

use revisant_daemon::intake::collect::{self, IntakeLock, Progress, Report};
use revisant_daemon::intake::error::{IntakeError, WouldChange};
use revisant_daemon::intake::rules::Rules;
use revisant_daemon::intake::{draft, plan as force, replace, sample};
use revisant_schema::hold::Answer;
use revisant_schema::plan::{Loaded, Plan};
use revisant_schema::records::exports::ExportState;
use revisant_schema::records::view::HoldRow;
use revisant_schema::records::{Doer, Records};
use revisant_schema::world::World;
use serde::Serialize;
use serde_json::{Map, Value as Json, json};

use crate::error::{Exit, Failure};
use crate::study::PROGRAM;

pub use revisant_daemon::intake::draft::{Asked, Draft, PreviewRow, Sample as SampleExport};

/// Drafts an instrument from its sample exports.
pub fn draft(asked: &Asked<'_>) -> Result<Draft, Failure> {
    draft::draft(asked).map_err(|fault| Failure::new("samples", fault.to_string()))
}

/// A plan's text with the drafted instrument in it; all else stays byte for byte.
pub fn draft_into(text: &str, draft: &Draft, code: &str) -> Result<String, Failure> {
    draft::into::insert(text, &draft.toml, code)
        .map_err(|fault| Failure::refused(format!("the plan is as before: {fault}")))
}

/// What a plan says besides its instruments, which need not be sound for drafting one more.
pub fn without_instruments(text: &str) -> Option<String> {
    draft::into::without_instruments(text)
}

/// The plan that is in force now.
pub struct PlanInForce {
    /// Its version.
    pub version: i64,
    /// The plan.
    pub plan: Plan,
}

/// Reads the plan of a study's folder.
pub fn load(world: &dyn World, study: &Path) -> Result<Loaded, Failure> {
    Ok(force::load_plan(world, study)?)
}

/// Brings the plan of the study's folder into force, if it is not.
pub fn bring_plan_into_force(records: &mut Records, study: &Path, doer: &Doer) -> Result<PlanInForce, Failure> {
    let Rules { version, plan, .. } = force::bring_into_force(records, study, doer, false)?;
    Ok(PlanInForce { version, plan })
}

/// What a changed plan would change in the records, in words; empty when nothing.
pub fn would_change(records: &Records, plan: &Plan) -> Result<Vec<String>, Failure> {
    let Some(rules) = Rules::load(records)? else { return Ok(vec![]) };
    Ok(force::would_change(records, &rules, plan)?.iter().map(change_words).collect())
}

fn change_words(change: &WouldChange) -> String {
    let lines = if change.lines == 1 { "1 line".to_owned() } else { format!("{} lines", change.lines) };
    format!("{}: {lines}, such as {}", change.export, change.example)
}

impl From<IntakeError> for Failure {
    fn from(error: IntakeError) -> Self {
        let kind = error.kind();
        match error {
            IntakeError::Plan(error) => error.into(),
            IntakeError::Records(error) => error.into(),
            IntakeError::Differently(changes) => {
                let list: Vec<String> = changes.iter().map(change_words).collect();
                let text = list.join("\n");
                let what = IntakeError::Differently(changes).to_string();
                Self { exit: Exit::Usage, ..Self::new(kind, what) }.with_faults(text, json!(list))
            }
            IntakeError::Meaning(_) => Self { exit: Exit::Usage, ..Self::new(kind, error.to_string()) },
            IntakeError::Locked(_) => Self::new(kind, error.to_string()),
        }
    }
}

pub use sample::{Sample, Standing, Undecided};

/// Finds whose export a file is.
pub fn standing(
    world: &dyn World,
    study: &Path,
    plan: &Plan,
    file: &Path,
    named: Option<&str>,
) -> Result<Result<Standing, Undecided>, Failure> {
    Ok(sample::standing(world, study, plan, file, named)?)
}

/// What the plan would do with a file, with nothing filed; so many of the readings are given. `progress` is told how
/// many rows have been placed.
pub fn sample(
    records: Option<&Records>,
    world: &Arc<dyn World>,
    plan: &Loaded,
    standing: &Standing,
    doer: &Doer,
    readings: u64,
    progress: &dyn Fn(u64),
) -> Result<Sample, Failure> {
    let how = sample::How { world: world.clone(), plan, doer, readings, progress };
    Ok(sample::sample(records, standing, &how)?)
}

/// What one collect did.
#[derive(Debug, Clone, Default, Serialize)]
pub struct Collected {
    /// How many exports are in each state, by the state's code.
    pub exports: Map<String, Json>,
    /// What became of readings.
    pub readings: CollectedReadings,
    /// How long it took.
    pub seconds: f64,
    /// Older holds that were settled.
    pub settled: u64,
    /// Export folders that could not be looked at, and why, by instrument.
    pub lost_folders: Map<String, Json>,
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

impl Collected {
    fn of(reports: [Report; 2]) -> Self {
        let mut all = Self::default();
        for state in ExportState::ALL {
            let count: u64 = reports.iter().filter_map(|report| report.exports.get(state.code())).sum();
            all.exports.insert(state.code().to_owned(), json!(count));
        }
        for report in reports {
            all.readings.filed += report.filed;
            all.readings.already += report.already;
            all.readings.held += report.held;
            all.settled += report.settled;
            all.seconds += report.seconds;
            all.lost_folders.extend(report.lost_folders.into_iter().map(|(code, why)| (code, json!(why))));
        }
        all
    }
}

/// Reads once all that waits; with `adopt` first what a mended reader would read differently. `progress` is called
/// with how many exports are done, and of how many.
pub fn collect(
    records: &mut Records,
    study: &Path,
    doer: &Doer,
    adopt: bool,
    progress: &mut dyn FnMut(u64, u64),
) -> Result<Collected, Failure> {
    let _lock = IntakeLock::take(records, PROGRAM)?;
    let adopted = match adopt {
        true => replace::adopt(records, study, doer)?.1,
        false => {
            force::bring_into_force(records, study, doer, false)?;
            Report::default()
        }
    };
    let mut tell = |Progress { done, of }| progress(done, of);
    let how = collect::How { wait: true, progress: &mut tell, stop: &|| false };
    let collected = collect::collect(records, study, doer, how)?;
    Ok(Collected::of([adopted, collected]))
}

/// What deciding came to.
#[derive(Debug, Clone, Default, Serialize)]
pub struct Decided {
    /// Holds that are decided or dismissed now.
    pub holds: Vec<i64>,
    /// Readings filed by it.
    pub filed: u64,
    /// Values that turned out to be there already.
    pub already: u64,
    /// Holds that are open now on the same rows, for what else is wrong with them.
    pub held: u64,
}

/// Open holds that the same answer may be given to, this one among them.
pub fn like(records: &Records, hold: &HoldRow) -> Result<Vec<HoldRow>, Failure> {
    Ok(replace::like(records, hold)?)
}

/// Gives a person's answer to holds of one export, or dismisses them (`None`).
pub fn decide(
    records: &mut Records,
    holds: &[HoldRow],
    answer: Option<&Answer>,
    doer: &Doer,
) -> Result<Decided, Failure> {
    let done = match answer {
        Some(answer) => replace::decide(records, holds, answer, doer)?,
        None => replace::dismiss(records, holds, doer)?,
    };
    Ok(Decided { holds: done.ended, filed: done.filed, already: done.already, held: done.held })
}

/// Whether a service is running for the study.
pub fn service_running(study: &Path) -> bool {
    IntakeLock::holder(&Records::folder_of(study)).is_some_and(|note| note.starts_with("revisantd"))
}
