//! The service: watches export folders and files what arrives, until it is told to stop.
//!
//! Invariants: one worker a study owns its records and does all the filing, one cycle at a time; a cycle that fails is
//! told once in plain words and tried again, it never ends the service; events only cause a cycle, what a cycle does
//! depends on the folders alone.

pub mod command;
mod logs;
mod watch;
mod worker;

use std::path::PathBuf;
use std::sync::Arc;
use std::sync::atomic::{AtomicBool, Ordering};
use std::sync::mpsc::{Sender, channel};
use std::thread::JoinHandle;
use std::time::Duration;

use revisant_schema::records::Records;
use revisant_schema::world::World;
use thiserror::Error;

use crate::intake::collect::{IntakeLock, Report};
use crate::intake::error::IntakeError;
use worker::Worker;

/// Name and version, as the trail and the lock write them.
pub const PROGRAM: &str = concat!("revisantd ", env!("CARGO_PKG_VERSION"));

/// Names of the working notes that a service leaves for `status`.
pub mod notes {
    /// When the service that runs now started.
    pub const SINCE: &str = "service_since";
    /// When it was last seen alive.
    pub const SEEN: &str = "service_seen";
    /// Why the plan on disk is not the one in force; empty when it is.
    pub const PLAN_REFUSED: &str = "plan_refused";
}

/// What a service for one study needs to know.
#[derive(Clone)]
pub struct Options {
    /// The study's folder.
    pub study: PathBuf,
    /// How often the folders are walked through even if nothing seems to have happened.
    pub every: Duration,
    /// Clock, chance and files.
    pub world: Arc<dyn World>,
}

/// Why a service could not start, or ended badly.
#[derive(Debug, Error)]
pub enum ServiceError {
    /// The records or the lock.
    #[error("{}: {source}", study.display())]
    Start {
        /// The study's folder.
        study: PathBuf,
        /// Why.
        source: Box<IntakeError>,
    },
    /// The study's folder is not there.
    #[error("there is no study in {}: it holds no study.toml. Name the study's folder with --study DIR", .0.display())]
    NoStudy(PathBuf),
    /// A thread could not be started, or broke down.
    #[error("the worker of {} broke down; what it had filed is safe. Start the service again", .0.display())]
    Broken(PathBuf),
}

/// What makes a worker look.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Wake {
    /// Something happened in the folders.
    Files,
    /// Look at everything now.
    Reload,
    /// Stop.
    Stop,
}

/// A service for one study that is running in this process.
pub struct Handle {
    study: PathBuf,
    wake: Sender<Wake>,
    stop: Arc<AtomicBool>,
    thread: Option<JoinHandle<()>>,
}

/// What is told after each cycle.
pub type Observer = Box<dyn FnMut(&Report) + Send>;

/// Starts a service for one study. It is ready when this returns: the first walk through all folders is done.
pub fn spawn(options: Options, observer: Observer) -> Result<Handle, ServiceError> {
    if !options.study.join(revisant_schema::plan::MAIN).exists() {
        return Err(ServiceError::NoStudy(options.study));
    }
    let start = |source: IntakeError| ServiceError::Start { study: options.study.clone(), source: source.into() };
    let records =
        Records::open_or_create(&options.study, options.world.clone()).map_err(|error| start(error.into()))?;
    let lock = IntakeLock::take(&records, PROGRAM).map_err(start)?;
    let (wake, woken) = channel();
    let stop = Arc::new(AtomicBool::new(false));
    let study = options.study.clone();
    let mut worker = Worker::new(options, records, lock, wake.clone(), stop.clone(), observer);
    worker.begin().map_err(|source| ServiceError::Start { study: study.clone(), source: source.into() })?;
    let thread = std::thread::Builder::new()
        .name("intake".to_owned())
        .spawn(move || worker.run(&woken))
        .map_err(|_| ServiceError::Broken(study.clone()))?;
    Ok(Handle { study, wake, stop, thread: Some(thread) })
}

impl Handle {
    /// Looks at everything now.
    pub fn reload(&self) {
        // A worker that is gone is noticed by `is_alive`.
        let _ = self.wake.send(Wake::Reload);
    }

    /// Whether its worker is at work.
    pub fn is_alive(&self) -> bool {
        self.thread.as_ref().is_some_and(|thread| !thread.is_finished())
    }

    /// The study it serves.
    pub fn study(&self) -> &PathBuf {
        &self.study
    }

    /// Asks it to stop, with the export in hand finished or wholly unfiled.
    pub fn ask_to_stop(&self) {
        self.stop.store(true, Ordering::SeqCst);
        let _ = self.wake.send(Wake::Stop);
    }

    /// Stops it and waits until it has.
    pub fn stop(mut self) -> Result<(), ServiceError> {
        self.ask_to_stop();
        match self.thread.take().map(JoinHandle::join) {
            Some(Err(_)) => Err(ServiceError::Broken(self.study.clone())),
            _ => Ok(()),
        }
    }
}
