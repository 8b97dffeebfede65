//! JSON documents.
//!
//! Invariants: a document is read from one end to the other and no more of it is remembered than the row in hand and
//! what is open along the path; all of it is checked, so that a document that was cut off or spoilt anywhere gives a
//! fault, whatever rows were handed out before.

pub(super) mod cells;
pub(super) mod outer;
pub(super) mod scan;
pub(super) mod walk;
pub(super) mod want;

use revisant_schema::plan::{LastLine, Reader};

use super::text::decoded::Decoded;
use super::{Bytes, FileFault, LineCounts, Row, RowFault, Rows};
use cells::Cells;
use outer::Outer;
use scan::{Feed, Scan};
use walk::Walk;
use want::Want;

/// The rows of a JSON document.
pub struct Json<'a> {
    reader: &'a Reader,
    want: Want<'a>,
    scan: Scan<Decoded<'a>>,
    walk: Walk,
    outer: Outer,
    cells: Cells,
    counts: LineCounts,
    handed_out: u64,
    ended: bool,
}

impl<'a> Json<'a> {
    /// Takes the plan's paths apart, and stands before the first row.
    pub fn open(reader: &'a Reader, rows: &'a str, bytes: &'a dyn Bytes) -> Result<Self, FileFault> {
        let want = Want::new(reader, rows)?;
        let mut outer = Outer::default();
        if want.outsiders() > 0 {
            outer.gather(&mut begin(reader, bytes)?, &want)?;
        }
        Ok(Self {
            reader,
            want,
            scan: begin(reader, bytes)?,
            walk: Walk::default(),
            outer,
            cells: Cells::default(),
            counts: LineCounts::default(),
            handed_out: 0,
            ended: false,
        })
    }

    fn read_row(&mut self, row: &mut Row) -> Result<bool, FileFault> {
        while self.walk.next(&mut self.scan, &self.want)? {
            self.cells.read(&mut self.scan, (&self.want, &self.walk, &self.outer), row)?;
            if row.fault.is_none() && self.want.ignores(row) {
                self.counts.ignored += 1;
                continue;
            }
            if row.fault.is_none() && self.reader.last_line == LastLine::Finished {
                row.fault = unfinished(&mut self.scan, &row.raw)?;
            }
            return Ok(true);
        }
        self.scan.end()?;
        self.walk.arrived(&self.want)?;
        Ok(false)
    }
}

fn begin<'a>(reader: &Reader, bytes: &'a dyn Bytes) -> Result<Scan<Decoded<'a>>, FileFault> {
    let decoded = Decoded::open(reader.encoding, bytes)?;
    let start = decoded.start();
    Ok(Scan::new(decoded, start))
}

/// A number with which everything ends may have lost its last digits; every other value shows that it is whole.
pub(super) fn unfinished<F: Feed>(scan: &mut Scan<F>, raw: &str) -> Result<Option<RowFault>, FileFault> {
    let number = raw.starts_with(|first: char| first == '-' || first.is_ascii_digit());
    Ok((number && scan.peek()?.is_none()).then_some(RowFault::Unfinished))
}

impl Rows for Json<'_> {
    fn preamble(&self, _: &str) -> Option<&str> {
        None
    }

    fn unit(&self, _: usize) -> Option<&str> {
        None
    }

    fn next_row(&mut self, row: &mut Row) -> Result<bool, FileFault> {
        if self.ended {
            return Ok(false);
        }
        let outcome = self.read_row(row);
        match outcome {
            Ok(true) => self.handed_out += 1,
            _ => self.ended = true,
        }
        outcome
    }

    fn counts(&self) -> LineCounts {
        self.counts
    }

    fn lines(&self) -> u64 {
        self.counts.total() + self.handed_out
    }
}
