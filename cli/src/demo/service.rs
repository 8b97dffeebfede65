//! The real service, run inside this process for as long as the demo lasts.
//!
//! Invariant: it is started and stopped as `revisantd` starts and stops it; nothing is filed by any other way.

use std::path::Path;
use std::sync::Arc;
use std::sync::atomic::{AtomicU64, Ordering};
use std::time::Duration;

use revisant_daemon::service::{Handle, Options, ServiceError, spawn};
use revisant_schema::world::World;

use crate::error::Failure;

/// How often the service walks through all folders when nothing seems to happen.
const EVERY: Duration = Duration::from_secs(60);

/// What the service has done so far.
#[derive(Debug, Default)]
pub struct Done {
    filed: AtomicU64,
    held: AtomicU64,
    /// Times that it went through all folders, and files that were not at rest the last time.
    rounds: AtomicU64,
    settling: AtomicU64,
}

impl Done {
    /// Readings filed, and holds opened.
    pub fn so_far(&self) -> (u64, u64) {
        (self.filed.load(Ordering::Relaxed), self.held.load(Ordering::Relaxed))
    }
}

/// A service that runs.
pub struct Running {
    handle: Handle,
    /// What it has done.
    pub done: Arc<Done>,
}

/// Starts the service on a study.
pub fn start(study: &Path, world: Arc<dyn World>) -> Result<Running, Failure> {
    let done = Arc::new(Done::default());
    let seen = done.clone();
    let options = Options { study: study.to_path_buf(), every: EVERY, world };
    let handle = spawn(
        options,
        Box::new(move |report| {
            seen.filed.fetch_add(report.filed, Ordering::Relaxed);
            seen.held.fetch_add(report.held, Ordering::Relaxed);
            seen.settling.store(report.exports.get("settling").copied().unwrap_or(0), Ordering::SeqCst);
            seen.rounds.fetch_add(1, Ordering::SeqCst);
        }),
    )?;
    Ok(Running { handle, done })
}

impl Running {
    /// Whether it is at work.
    pub fn is_alive(&self) -> bool {
        self.handle.is_alive()
    }

    /// How often it has gone through all folders.
    pub fn rounds(&self) -> u64 {
        self.done.rounds.load(Ordering::SeqCst)
    }

    /// Whether everything that lay in the export folders after `rounds` rounds is at rest and has been read; else it
    /// looks again. A round that was under way then may have missed some of it, the one after it cannot.
    pub fn has_read_all(&self, rounds: u64) -> bool {
        let read = self.rounds() >= rounds + 2 && self.done.settling.load(Ordering::SeqCst) == 0;
        if !read {
            self.handle.reload();
        }
        read
    }

    /// Stops it.
    pub fn stop(self) -> Result<(), Failure> {
        Ok(self.handle.stop()?)
    }
}

impl From<ServiceError> for Failure {
    fn from(error: ServiceError) -> Self {
        match error {
            ServiceError::Start { source, .. } => (*source).into(),
            other => Self::new("service", other.to_string()),
        }
    }
}
