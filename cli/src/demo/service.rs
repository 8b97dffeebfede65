//! The real service, run inside this process for as long as the demo lasts.

use std::path::Path;
use std::sync::Arc;
use std::time::Duration;

use revisant_daemon::intake::{notice, plan};
use revisant_daemon::service::{Handle, Options, ServiceError, spawn};
use revisant_schema::records::Records;
use revisant_schema::world::World;

use crate::error::Failure;

impl From<ServiceError> for Failure {
    fn from(error: ServiceError) -> Self {
        match error {
            ServiceError::Start { source, .. } => (*source).into(),
            other => Self::new("service", other.to_string()),
        }
    }
}

/// Starts the service on a study.
pub fn start(study: &Path, world: Arc<dyn World>) -> Result<Handle, Failure> {
    let options = Options { study: study.to_path_buf(), every: Duration::from_secs(60), world };
    Ok(spawn(options, Box::new(|_| {}))?)
}

/// Whether everything that lies in the export folders is at rest and has been read.
pub fn has_read_all(records: &Records, study: &Path) -> Result<bool, Failure> {
    let plan = plan::in_force(records)?.plan;
    let walk = notice::walk(records.world().as_ref(), study, &plan, &records.noticed()?);
    Ok(walk.ready.is_empty() && walk.settling.is_empty())
}
