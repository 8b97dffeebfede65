//! Delimited text.

use super::{Bytes, FileFault, LineCounts, Row, Rows};
use revisant_schema::plan::Reader;

/// The rows of a delimited export.
pub struct Delimited;

impl Delimited {
    /// Opens.
    pub fn open(_reader: &Reader, _delimiter: Option<u8>, _bytes: &dyn Bytes) -> Result<Self, FileFault> {
        Ok(Self)
    }
}

impl Rows for Delimited {
    fn preamble(&self, _key: &str) -> Option<&str> {
        None
    }
    fn unit(&self, _slot: usize) -> Option<&str> {
        None
    }
    fn next_row(&mut self, _row: &mut Row) -> Result<bool, FileFault> {
        Ok(false)
    }
    fn counts(&self) -> LineCounts {
        LineCounts::default()
    }
}
