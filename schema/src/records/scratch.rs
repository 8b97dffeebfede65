//! Records to try something out on, which are thrown away.
//!
//! Invariant: they lie in a temporary folder of their own; what is done to them never reaches the records that they
//! were copied from, of which not a byte changes.

use std::path::Path;
use std::sync::Arc;
use std::time::Duration;

use rusqlite::Connection;
use tempfile::TempDir;

use super::error::{RecordsError, Result};
use super::open::Records;
use crate::world::World;

/// Records in a temporary folder, gone with this value.
pub struct Scratch {
    // Before the folder: its file is closed first.
    /// The records.
    pub records: Records,
    folder: TempDir,
}

impl Scratch {
    /// Empty ones.
    pub fn empty(world: Arc<dyn World>) -> Result<Self> {
        let folder = temporary()?;
        Self::open(folder, world)
    }

    /// A copy of these, as they are at this moment. Raw copies that lie in files of their own are not copied.
    pub fn copy_of(records: &Records) -> Result<Self> {
        let folder = temporary()?;
        // Made first, so that the copy is for its owner alone from the first byte on.
        let copy = Records::open_or_create(folder.path(), records.world.clone())?.file;
        let failed = records.failed("copying the records");
        let mut target = Connection::open(&copy).map_err(&failed)?;
        let backup = rusqlite::backup::Backup::new(&records.conn, &mut target).map_err(&failed)?;
        // All pages at one go: a copy in parts begins anew whenever somebody writes in between.
        backup.run_to_completion(i32::MAX, Duration::from_millis(20), None).map_err(&failed)?;
        drop(backup);
        drop(target);
        Self::open(folder, records.world.clone())
    }

    fn open(folder: TempDir, world: Arc<dyn World>) -> Result<Self> {
        let records = Records::open_or_create(folder.path(), world)?;
        // Nothing of it has to outlive a loss of power.
        records.conn.execute_batch("PRAGMA synchronous = OFF").map_err(records.failed("opening the copy"))?;
        Ok(Self { records, folder })
    }

    /// The folder, as a study's.
    pub fn study(&self) -> &Path {
        self.folder.path()
    }
}

fn temporary() -> Result<TempDir> {
    let made = tempfile::Builder::new().prefix("revisant-").tempdir();
    made.map_err(|error| RecordsError::file(&std::env::temp_dir(), "making a temporary folder", error))
}
