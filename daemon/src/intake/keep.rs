//! Keep: an export's bytes, exactly, before anything is read of them.
//!
//! Invariant: what is kept is what the file held from its first byte to its last at rest: a file that changes while it
//! is read is left to settle.

use std::io::{self, Read};

use revisant_schema::records::raw::{RawSource, SMALL};
use revisant_schema::records::{KeepError, Kept, Records, RecordsError};
use revisant_schema::world::World;

use super::notice::Found;
use super::read::Bytes;

impl Bytes for RawSource {
    fn open(&self) -> io::Result<Box<dyn Read + '_>> {
        self.open()
    }
}

/// What keeping an export came to.
pub enum Keeping {
    /// Its bytes are kept.
    Kept(Kept),
    /// It changed meanwhile; try again later.
    Changed,
    /// It cannot be read now; try again later.
    Unreachable(String),
}

/// Keeps an export's bytes.
pub fn keep(world: &dyn World, records: &Records, found: &Found) -> Result<Keeping, RecordsError> {
    let mut file = match world.open(&found.path) {
        Ok(file) => file,
        Err(error) if error.kind() == io::ErrorKind::NotFound => return Ok(Keeping::Changed),
        Err(error) => return Ok(Keeping::Unreachable(error.to_string())),
    };
    let kept = if found.stat.size <= SMALL {
        let mut bytes = Vec::with_capacity(found.stat.size as usize);
        // One byte more than may be there: a file that has grown betrays itself without being read whole.
        match file.take(SMALL + 1).read_to_end(&mut bytes) {
            Ok(_) => records.keep_small(bytes)?,
            Err(error) => return Ok(Keeping::Unreachable(error.to_string())),
        }
    } else {
        match records.keep_large(&mut file) {
            Ok(kept) => kept,
            Err(KeepError::Source(error)) => return Ok(Keeping::Unreachable(error.to_string())),
            Err(KeepError::Copy(error)) => return Err(error),
        }
    };
    match world.stat(&found.path) {
        Ok(stat) if stat == found.stat && kept.size == stat.size => Ok(Keeping::Kept(kept)),
        _ => Ok(Keeping::Changed),
    }
}
