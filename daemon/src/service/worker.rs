//! A study's worker: cycles, one at a time, and what causes them.
//!
//! Invariants: a trouble is told when it begins and when it ends, not while it lasts; the worker stops between exports,
//! or between rows of a large one, which then stays unpublished.

use std::collections::BTreeMap;
use std::path::PathBuf;
use std::sync::Arc;
use std::sync::atomic::{AtomicBool, Ordering};
use std::sync::mpsc::{Receiver, RecvTimeoutError, Sender};
use std::time::{Duration, Instant};

use chrono::{DateTime, SecondsFormat, Utc};
use revisant_schema::plan::Plan;
use revisant_schema::records::{ActKind, Doer, Records};
use serde_json::json;
use tracing::{Span, error, info, info_span, warn};

use super::agenda::Agenda;
use super::glance::PlanOnDisk;
use super::watch::Watches;
use super::{Observer, Options, PROGRAM, Wake, notes};
use crate::intake::collect::{How, IntakeLock, Report, collect};
use crate::intake::error::{IntakeError, Result};
use crate::intake::plan::{bring_into_force, in_force};

/// Events that come close together cause one cycle.
const GATHER: Duration = Duration::from_millis(80);
/// How often it is looked whether plan, roster or folders have changed.
const GLANCE: Duration = Duration::from_secs(1);
/// How long to wait for another writer when stopping, which has to be done within seconds.
const LAST_PATIENCE: Duration = Duration::from_secs(2);

/// A study's worker.
pub struct Worker {
    options: Options,
    records: Records,
    doer: Doer,
    stop: Arc<AtomicBool>,
    span: Span,
    watches: Watches,
    observer: Observer,
    agenda: Agenda,
    plan: PlanOnDisk,
    /// The kind of failure that lasts: texts may name another temporary file each time.
    trouble: Option<&'static str>,
    /// Why the plan on disk is not in force; the outer `None`: not looked yet.
    plan_trouble: Option<Option<String>>,
    /// Instruments whose folder is lost, and why.
    lost: BTreeMap<String, String>,
    lost_folders: Vec<PathBuf>,
    // Last, so that nobody else starts to file before all of the above is done with.
    _lock: IntakeLock,
}

impl Worker {
    /// A worker that has not begun.
    pub fn new(
        options: Options,
        records: Records,
        lock: IntakeLock,
        wake: Sender<Wake>,
        stop: Arc<AtomicBool>,
        observer: Observer,
    ) -> Self {
        Self {
            doer: Doer::this_account(PROGRAM),
            span: info_span!("study", folder = %options.study.display()),
            watches: Watches::new(records.folder().to_path_buf(), wake),
            agenda: Agenda::new(options.every, Instant::now()),
            plan: PlanOnDisk::new(options.study.clone(), options.world.clone()),
            options,
            records,
            stop,
            observer,
            trouble: None,
            plan_trouble: None,
            lost: BTreeMap::new(),
            lost_folders: vec![],
            _lock: lock,
        }
    }

    /// Writes down the start.
    pub fn begin(&mut self) -> Result<()> {
        self.records.act(ActKind::Start, &self.doer, |act| {
            act.objects.insert("process".into(), json!(std::process::id()));
            Ok(())
        })?;
        self.records.set_working(notes::SINCE, &moment(self.records.now()))?;
        self.span.in_scope(|| info!("started"));
        Ok(())
    }

    /// Works until it is stopped; `ready` hears when the first walk is done.
    pub fn run(mut self, woken: &Receiver<Wake>, ready: &Sender<()>) {
        let span = self.span.clone();
        let _entered = span.enter();
        self.cycle(ready);
        while !self.stopped() {
            match woken.recv_timeout(self.patience()) {
                Ok(wake) => self.gather(wake, woken),
                Err(RecvTimeoutError::Timeout) => {}
                Err(RecvTimeoutError::Disconnected) => break,
            }
            if !self.stopped() && (self.agenda.next() <= Instant::now() || self.glance()) {
                self.cycle(ready);
            }
        }
        self.end();
    }

    fn stopped(&self) -> bool {
        self.stop.load(Ordering::SeqCst)
    }

    fn patience(&self) -> Duration {
        let glance = if self.plan.is_steady() { GLANCE } else { GLANCE / 4 };
        self.agenda.next().saturating_duration_since(Instant::now()).min(glance)
    }

    /// Takes in a message and those that come with it.
    fn gather(&mut self, first: Wake, woken: &Receiver<Wake>) {
        let until = Instant::now() + GATHER;
        self.take(first);
        while !self.stopped() {
            let left = until.saturating_duration_since(Instant::now());
            match woken.recv_timeout(left) {
                Ok(wake) => self.take(wake),
                Err(_) => return,
            }
        }
    }

    fn take(&mut self, wake: Wake) {
        match wake {
            Wake::Files => {}
            Wake::Gone(folder) => self.watches.forget(&folder),
            Wake::Lost => self.watches.forget_all(),
            Wake::Reload => {
                self.plan.read_anew();
                return self.agenda.want(Instant::now());
            }
            Wake::Stop => return self.stop.store(true, Ordering::SeqCst),
        }
        self.agenda.events(Instant::now());
    }

    /// Whether the plan's files, the roster or the folders themselves have changed: a look that costs next to nothing.
    fn glance(&mut self) -> bool {
        if self.agenda.is_failing() {
            return false;
        }
        let world = &self.options.world;
        self.records.rules_head().is_ok_and(|head| self.plan.is_to_be_read(head))
            || self.watches.is_out_of_date()
            || self.lost_folders.iter().any(|folder| world.list(folder).is_ok())
    }

    fn cycle(&mut self, ready: &Sender<()>) {
        let began = Instant::now();
        self.agenda.begin(began);
        match self.work(ready) {
            Ok(report) => {
                self.agenda.ended(began, Instant::now(), report.is_quiet());
                if self.trouble.take().is_some() {
                    info!("filing goes on");
                }
                self.tell(&report);
                self.want_rest(&report);
                (self.observer)(&report);
            }
            Err(error) => self.fail(&error),
        }
        // Also when the first cycle fails: there is nothing more to wait for.
        let _ = ready.send(());
    }

    fn work(&mut self, ready: &Sender<()>) -> Result<Report> {
        self.see_to_plan()?;
        let plan = in_force(&self.records)?.plan;
        // Watches before the walk: what happens in between is then in one or the other.
        self.watches.refresh(&self.options.study, &plan);
        let stop = self.stop.clone();
        let how = How {
            wait: false,
            progress: &mut |_| {
                let _ = ready.send(());
            },
            stop: &|| stop.load(Ordering::SeqCst),
        };
        let report = collect(&mut self.records, &self.options.study, &self.doer, how)?;
        self.lost_folders = folders(&self.options, &plan, &report);
        self.records.set_working(notes::SEEN, &moment(self.records.now()))?;
        Ok(report)
    }

    fn see_to_plan(&mut self) -> Result<()> {
        let head = self.records.rules_head()?;
        if self.plan.is_to_be_read(head) {
            self.take_plan()?;
            self.plan.was_read(self.records.rules_head()?);
        }
        Ok(())
    }

    /// Brings a changed plan into force; one that may not be leaves the last sound one in force.
    fn take_plan(&mut self) -> Result<()> {
        let trouble = match bring_into_force(&mut self.records, &self.options.study, &self.doer, false) {
            Ok(_) => None,
            Err(error @ (IntakeError::Records(_) | IntakeError::Locked(_))) => return Err(error),
            Err(error) => Some(error.to_string()),
        };
        if self.plan_trouble.as_ref() == Some(&trouble) {
            return Ok(());
        }
        match (&trouble, &self.plan_trouble) {
            (Some(text), _) => warn!("the plan on disk is not in force: {text}"),
            (None, Some(_)) => info!("the plan on disk is in force"),
            (None, None) => {}
        }
        self.records.set_working(notes::PLAN_REFUSED, trouble.as_deref().unwrap_or_default())?;
        self.plan_trouble = Some(trouble);
        Ok(())
    }

    fn fail(&mut self, error: &IntakeError) {
        self.agenda.failed(Instant::now());
        if self.trouble.replace(error.kind()) != Some(error.kind()) {
            error!(kind = error.kind(), "filing waits: {error}");
        }
    }

    fn tell(&mut self, report: &Report) {
        if !report.is_quiet() || report.exports.contains_key("repeat") {
            info!(
                exports = states(report),
                readings = report.filed,
                already = report.already,
                held = report.held,
                settled = report.settled,
                seconds = format!("{:.3}", report.seconds),
                "filed"
            );
        }
        for (instrument, why) in &report.lost_folders {
            if self.lost.get(instrument) != Some(why) {
                warn!(instrument, "its export folder is unreachable: {why}");
            }
        }
        for instrument in self.lost.keys().filter(|code| !report.lost_folders.contains_key(*code)) {
            info!(instrument, "its export folder is there again");
        }
        self.lost.clone_from(&report.lost_folders);
    }

    /// Wants a cycle when the first of the files that are settling will have rested.
    fn want_rest(&mut self, report: &Report) {
        if let Some(until) = report.next_rest {
            let left = (until - self.records.now()).to_std().unwrap_or_default() + Duration::from_millis(2);
            self.agenda.want(Instant::now() + left);
        }
    }

    fn end(&mut self) {
        let done = self.records.set_patience(LAST_PATIENCE).and_then(|()| {
            self.records.act(ActKind::Stop, &self.doer, |act| {
                act.objects.insert("process".into(), json!(std::process::id()));
                Ok(())
            })
        });
        match done {
            Ok(()) => info!("stopped"),
            Err(error) => error!("stopped, which could not be written to the trail: {error}"),
        }
    }
}

/// How many exports came to which state, those left out that say nothing new.
fn states(report: &Report) -> String {
    let telling = report.exports.iter().filter(|(state, _)| !matches!(**state, "ignored" | "settling"));
    telling.map(|(state, count)| format!("{count} {state}")).collect::<Vec<_>>().join(", ")
}

fn folders(options: &Options, plan: &Plan, report: &Report) -> Vec<PathBuf> {
    let lost = plan.instruments.iter().filter(|instrument| report.lost_folders.contains_key(&instrument.code));
    lost.map(|instrument| options.study.join(&instrument.folder)).collect()
}

fn moment(at: DateTime<Utc>) -> String {
    at.to_rfc3339_opts(SecondsFormat::Millis, true)
}
