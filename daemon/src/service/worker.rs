//! A study's worker: cycles, one at a time, and what causes them.
//!
//! Invariants: a trouble is told when it begins and when it ends, not while it lasts; the worker stops between exports,
//! or between the parts of a large one, which then stays unpublished.

use std::collections::BTreeMap;
use std::path::PathBuf;
use std::sync::Arc;
use std::sync::atomic::{AtomicBool, Ordering};
use std::sync::mpsc::{Receiver, RecvTimeoutError, Sender};
use std::time::{Duration, Instant};

use chrono::{DateTime, SecondsFormat, Utc};
use revisant_schema::plan::{MAIN, reader_files};
use revisant_schema::records::{ActKind, Doer, Records};
use serde_json::json;
use tracing::{error, info, warn};

use super::watch::Watches;
use super::{Observer, Options, PROGRAM, Wake, notes};
use crate::intake::collect::{How, IntakeLock, Report, collect};
use crate::intake::error::{IntakeError, Result};
use crate::intake::plan::{bring_into_force, in_force};

/// Events that come close together cause one cycle.
const GATHER: Duration = Duration::from_millis(80);
/// After events the folders are walked again: events of files in folders that were just made get lost.
const AFTERWARDS: Duration = Duration::from_secs(1);
/// How often it is looked whether plan or roster have changed.
const GLANCE: Duration = Duration::from_secs(1);
/// Waiting time after a failure, doubled up to a minute.
const FIRST_PAUSE: Duration = Duration::from_secs(1);
const LONGEST_PAUSE: Duration = Duration::from_secs(60);

/// A study's worker.
pub struct Worker {
    options: Options,
    records: Records,
    doer: Doer,
    stop: Arc<AtomicBool>,
    watches: Watches,
    observer: Observer,
    /// The next walk by the clock, and one wanted sooner.
    next_walk: Instant,
    sooner: Option<Instant>,
    pause: Duration,
    trouble: Option<String>,
    plan_trouble: Option<String>,
    lost: BTreeMap<String, String>,
    seen_rules: i64,
    /// The plan's files, and what the file system said of each.
    plan_files: Vec<PathBuf>,
    plan_stamp: Vec<Option<(u64, i64)>>,
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
        let now = Instant::now();
        Self {
            watches: Watches::new(options.study.clone(), wake),
            options,
            records,
            doer: Doer::this_account(PROGRAM),
            stop,
            observer,
            next_walk: now,
            sooner: None,
            pause: FIRST_PAUSE,
            trouble: None,
            plan_trouble: None,
            lost: BTreeMap::new(),
            seen_rules: -1,
            plan_files: vec![],
            plan_stamp: vec![],
            _lock: lock,
        }
    }

    /// Registers the watches, writes down the start, and walks through everything once.
    pub fn begin(&mut self) -> Result<()> {
        let study = self.options.study.display().to_string();
        self.records.act(ActKind::Start, &self.doer, |act| {
            act.objects.insert("process".into(), json!(std::process::id()));
            Ok(())
        })?;
        self.records.set_working(notes::SINCE, &moment(self.records.now()))?;
        info!(study, "started");
        self.cycle();
        Ok(())
    }

    /// Works until it is stopped.
    pub fn run(&mut self, woken: &Receiver<Wake>) {
        while !self.stopped() {
            match woken.recv_timeout(self.patience()) {
                Ok(Wake::Stop) | Err(RecvTimeoutError::Disconnected) => break,
                Ok(Wake::Reload) => self.sooner = Some(Instant::now()),
                Ok(Wake::Files) => self.gather(woken),
                Err(RecvTimeoutError::Timeout) => {}
            }
            let now = Instant::now();
            let wanted = self.sooner.is_some_and(|at| at <= now) || self.next_walk <= now;
            if !self.stopped() && (wanted || self.rules_changed()) {
                self.cycle();
            }
        }
        self.end();
    }

    fn stopped(&self) -> bool {
        self.stop.load(Ordering::SeqCst)
    }

    fn patience(&self) -> Duration {
        let now = Instant::now();
        let next = self.sooner.map_or(self.next_walk, |at| at.min(self.next_walk));
        next.saturating_duration_since(now).min(GLANCE)
    }

    /// Takes in the events that come with one, and wants a cycle then.
    fn gather(&mut self, woken: &Receiver<Wake>) {
        let until = Instant::now() + GATHER;
        while let Some(left) = until.checked_duration_since(Instant::now()).filter(|left| !left.is_zero()) {
            match woken.recv_timeout(left) {
                Ok(Wake::Files | Wake::Reload) => {}
                Ok(Wake::Stop) => {
                    self.stop.store(true, Ordering::SeqCst);
                    return;
                }
                Err(_) => break,
            }
        }
        let now = Instant::now();
        if self.trouble.is_none() {
            self.sooner = Some(now);
        }
        self.next_walk = self.next_walk.min(now + AFTERWARDS);
    }

    /// Whether the plan's files or the roster changed since the last cycle: a glance that costs nothing.
    fn rules_changed(&self) -> bool {
        self.records.rules_head().is_ok_and(|head| head != self.seen_rules) || self.stamp() != self.plan_stamp
    }

    fn stamp(&self) -> Vec<Option<(u64, i64)>> {
        let stat = |path: &PathBuf| self.options.world.stat(path).ok().map(|stat| (stat.size, stat.modified));
        self.plan_files.iter().map(stat).collect()
    }

    /// The files that the plan on disk is made of.
    fn find_plan_files(&self) -> Vec<PathBuf> {
        let main = self.options.study.join(MAIN);
        let named = std::fs::read_to_string(&main).map(|text| reader_files(&text)).unwrap_or_default();
        let readers = named.into_iter().map(|name| self.options.study.join(name));
        std::iter::once(main.clone()).chain(readers).collect()
    }

    fn cycle(&mut self) {
        self.sooner = None;
        self.next_walk = Instant::now() + self.options.every;
        self.plan_files = self.find_plan_files();
        self.plan_stamp = self.stamp();
        match self.work() {
            Ok(report) => {
                self.over();
                self.tell(&report);
                self.want_rest(&report);
                (self.observer)(&report);
            }
            Err(error) => self.fail(&error),
        }
        self.seen_rules = self.records.rules_head().unwrap_or(-1);
    }

    fn work(&mut self) -> Result<Report> {
        self.take_plan()?;
        let rules = in_force(&self.records)?;
        self.watches.refresh(&rules.plan);
        let stop = self.stop.clone();
        let how = How { wait: false, progress: &mut |_| {}, stop: &|| stop.load(Ordering::SeqCst) };
        let report = collect(&mut self.records, &self.options.study, &self.doer, how)?;
        self.records.set_working(notes::SEEN, &moment(self.records.now()))?;
        Ok(report)
    }

    /// Brings a changed plan into force; one that may not be leaves the last sound one in force.
    fn take_plan(&mut self) -> Result<()> {
        let trouble = match bring_into_force(&mut self.records, &self.options.study, &self.doer, false) {
            Ok(_) => None,
            Err(error @ (IntakeError::Records(_) | IntakeError::Locked(_))) => return Err(error),
            Err(error) => Some(error.to_string()),
        };
        if trouble != self.plan_trouble {
            match &trouble {
                Some(text) => warn!("the plan on disk is not in force: {text}"),
                None => info!("the plan on disk is in force"),
            }
            self.records.set_working(notes::PLAN_REFUSED, trouble.as_deref().unwrap_or_default())?;
            self.plan_trouble = trouble;
        }
        Ok(())
    }

    fn over(&mut self) {
        self.pause = FIRST_PAUSE;
        if self.trouble.take().is_some() {
            info!("filing goes on");
        }
    }

    fn fail(&mut self, error: &IntakeError) {
        let text = error.to_string();
        if self.trouble.as_ref() != Some(&text) {
            error!(kind = error.kind(), "filing waits: {text}");
            self.trouble = Some(text);
        }
        self.next_walk = Instant::now() + self.pause;
        self.pause = (self.pause * 2).min(LONGEST_PAUSE);
    }

    fn tell(&mut self, report: &Report) {
        if !report.is_quiet() || report.exports.contains_key("repeat") {
            let exports = report
                .exports
                .iter()
                .filter(|(state, _)| **state != "ignored" && **state != "settling")
                .map(|(state, count)| format!("{count} {state}"))
                .collect::<Vec<_>>()
                .join(", ");
            info!(
                exports,
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
        self.lost = report.lost_folders.clone();
    }

    /// Wants a cycle when the first of the files that are settling will have rested, and looks sooner for folders that
    /// are lost.
    fn want_rest(&mut self, report: &Report) {
        if let Some(until) = report.next_rest {
            let left = (until - self.records.now()).to_std().unwrap_or_default() + Duration::from_millis(2);
            self.sooner = Some(Instant::now() + left);
        } else if report.exports.contains_key("settling") {
            self.next_walk = self.next_walk.min(Instant::now() + AFTERWARDS);
        }
        if !report.lost_folders.is_empty() {
            self.next_walk = self.next_walk.min(Instant::now() + Duration::from_secs(2));
        }
    }

    fn end(&mut self) {
        let done = self.records.act(ActKind::Stop, &self.doer, |act| {
            act.objects.insert("process".into(), json!(std::process::id()));
            Ok(())
        });
        match done {
            Ok(()) => info!("stopped"),
            Err(error) => error!("stopped, which could not be written to the trail: {error}"),
        }
    }
}

fn moment(at: DateTime<Utc>) -> String {
    at.to_rfc3339_opts(SecondsFormat::Millis, true)
}
