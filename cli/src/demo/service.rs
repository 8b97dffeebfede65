//! The real service, run inside this process for as long as the demo lasts.

use std::path::Path;
use std::sync::Arc;
use std::sync::atomic::{AtomicBool, Ordering};
use std::thread::JoinHandle;
use std::time::Duration;

use revisant_daemon::intake::{collect, notice, plan};
use revisant_schema::records::{Doer, Records};
use revisant_schema::world::World;

use crate::error::Failure;
use crate::study::PROGRAM;

/// A service that runs.
pub struct Running {
    stop: Arc<AtomicBool>,
    thread: JoinHandle<Result<(), Failure>>,
}

/// Starts the service on a study.
pub fn start(study: &Path, world: Arc<dyn World>) -> Running {
    let stop = Arc::new(AtomicBool::new(false));
    let (told, study) = (stop.clone(), study.to_path_buf());
    let thread = std::thread::spawn(move || {
        let mut records = Records::open(&study, world)?;
        let _lock = collect::IntakeLock::take(&records, "revisantd")?;
        while !told.load(Ordering::Relaxed) {
            let how = collect::How { wait: false, progress: &mut |_| (), stop: &|| told.load(Ordering::Relaxed) };
            collect::collect(&mut records, &study, &Doer::this_account(PROGRAM), how)?;
            std::thread::sleep(Duration::from_millis(200));
        }
        Ok(())
    });
    Running { stop, thread }
}

impl Running {
    /// Whether it ended without being asked to.
    pub fn has_ended(&self) -> bool {
        self.thread.is_finished()
    }

    /// Stops it, and says how it ended.
    pub fn stop(self) -> Result<(), Failure> {
        self.stop.store(true, Ordering::Relaxed);
        self.thread.join().unwrap_or_else(|_| Err(Failure::new("service", "the service broke off")))
    }
}

/// Whether everything that lies in the export folders is at rest and has been read.
pub fn has_read_all(records: &Records, study: &Path) -> Result<bool, Failure> {
    let plan = plan::in_force(records)?.plan;
    let walk = notice::walk(records.world().as_ref(), study, &plan, &records.noticed()?);
    Ok(walk.ready.is_empty() && walk.settling.is_empty())
}
