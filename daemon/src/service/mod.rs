//! The service: watches export folders and files what arrives, until it is told to stop.
//!
//! Invariants: one worker a study owns its records and does all the filing, one cycle at a time; a cycle that fails is
//! told once in plain words and tried again, it never ends the service; events only cause a cycle, what a cycle does
//! depends on the folders alone; whoever lets go of a [`Handle`] has stopped its service.

mod agenda;
pub mod command;
mod glance;
mod logs;
mod watch;
mod worker;

use std::path::{Path, PathBuf};
use std::sync::Arc;
use std::sync::atomic::{AtomicBool, Ordering};
use std::sync::mpsc::{Receiver, Sender, channel};
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
#[derive(Debug, Clone, PartialEq, Eq)]
enum Wake {
    /// Something happened in the folders.
    Files,
    /// This folder is gone from its place.
    Gone(PathBuf),
    /// Events were lost.
    Lost,
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
    ready: Option<Receiver<()>>,
    thread: Option<JoinHandle<()>>,
}

/// What is told after each cycle.
pub type Observer = Box<dyn FnMut(&Report) + Send>;

/// Starts a service for one study and waits until it is ready: the first walk through all folders is done, and what it
/// found is being filed.
pub fn spawn(options: Options, observer: Observer) -> Result<Handle, ServiceError> {
    let mut handle = start(options, observer)?;
    handle.take_ready().wait();
    Ok(handle)
}

/// Starts a service for one study. When this returns, the study is locked and the start is on the trail.
pub fn start(options: Options, observer: Observer) -> Result<Handle, ServiceError> {
    if !options.study.join(revisant_schema::plan::MAIN).exists() {
        return Err(ServiceError::NoStudy(options.study));
    }
    let study = options.study.clone();
    let failed = |source: IntakeError| ServiceError::Start { study: study.clone(), source: source.into() };
    let records = Records::open_or_create(&study, options.world.clone()).map_err(|error| failed(error.into()))?;
    let lock = IntakeLock::take(&records, PROGRAM).map_err(failed)?;
    let (wake, woken) = channel();
    let (tell_ready, ready) = channel();
    let stop = Arc::new(AtomicBool::new(false));
    let mut worker = Worker::new(options, records, lock, wake.clone(), stop.clone(), observer);
    worker.begin().map_err(failed)?;
    let thread = std::thread::Builder::new()
        .name("intake".to_owned())
        .spawn(move || worker.run(&woken, &tell_ready))
        .map_err(|_| ServiceError::Broken(study.clone()))?;
    Ok(Handle { study, wake, stop, ready: Some(ready), thread: Some(thread) })
}

/// Serves one study until `shutdown` comes about, and then stops in order.
pub async fn run(options: Options, observer: Observer, shutdown: impl Future<Output = ()>) -> Result<(), ServiceError> {
    let study = options.study.clone();
    let broken = || ServiceError::Broken(study.clone());
    let handle = tokio::task::spawn_blocking(move || start(options, observer)).await.map_err(|_| broken())??;
    let mut look = tokio::time::interval(Duration::from_secs(1));
    tokio::pin!(shutdown);
    loop {
        tokio::select! {
            () = &mut shutdown => break,
            _ = look.tick() => if !handle.is_alive() { break },
        }
    }
    let alive = handle.is_alive();
    tokio::task::spawn_blocking(move || handle.stop()).await.map_err(|_| broken())??;
    if alive { Ok(()) } else { Err(broken()) }
}

/// That a service is ready will be heard of here.
pub struct Ready(Option<Receiver<()>>);

impl Ready {
    /// Waits until it is, or has ended.
    pub fn wait(self) {
        if let Some(ready) = self.0 {
            // A worker that ended before it was ready is noticed by `is_alive`.
            let _ = ready.recv();
        }
    }
}

impl Handle {
    /// To be waited for where that does no harm; once.
    pub fn take_ready(&mut self) -> Ready {
        Ready(self.ready.take())
    }

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
    pub fn study(&self) -> &Path {
        &self.study
    }

    /// Asks it to stop, with the export in hand finished or wholly unfiled.
    pub fn ask_to_stop(&self) {
        self.stop.store(true, Ordering::SeqCst);
        let _ = self.wake.send(Wake::Stop);
    }

    /// Stops it and waits until it has.
    pub fn stop(mut self) -> Result<(), ServiceError> {
        self.end()
    }

    fn end(&mut self) -> Result<(), ServiceError> {
        self.ask_to_stop();
        match self.thread.take().map(JoinHandle::join) {
            Some(Err(_)) => Err(ServiceError::Broken(self.study.clone())),
            _ => Ok(()),
        }
    }
}

impl Drop for Handle {
    fn drop(&mut self) {
        // Nobody is left who could be told that the worker broke down.
        let _ = self.end();
    }
}
