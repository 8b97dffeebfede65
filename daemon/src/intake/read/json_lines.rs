//! JSON lines.
//!
//! Invariants: each line stands alone, and one that is no JSON from end to end gives one row with a fault and none
//! without; rows of one line have different first bytes, and all end where the line's value does, since none of them
//! was whole before the line was.

use revisant_schema::plan::{Ignore, LastLine, Reader};

use super::json::cells::Cells;
use super::json::outer::Outer;
use super::json::scan::{OneLine, Scan};
use super::json::unfinished;
use super::json::walk::Walk;
use super::json::want::Want;
use super::text::{Line, LineEnd, Lines, nul_in, readable};
use super::{Bytes, FileFault, LineCounts, Row, RowFault, Rows};

/// The rows of an export that has a JSON value on each line.
pub struct JsonLines<'a> {
    reader: &'a Reader,
    want: Want<'a>,
    lines: Lines<'a>,
    /// The line in hand, whose rows are handed out one after the other.
    line: Option<InHand>,
    /// Its text.
    text: String,
    scan: Scan<OneLine>,
    outer: Outer,
    cells: Cells,
    counts: LineCounts,
    handed_out: u64,
}

/// The line in hand.
struct InHand {
    line: Line,
    walk: Walk,
    /// The byte after its value, for a line that may hold several rows: it has been read to its end.
    end: Option<u64>,
    /// A row of it has been handed out or ignored.
    has_rows: bool,
}

/// What became of a line.
enum Taken {
    /// Its rows can be asked for.
    InHand(InHand),
    /// It holds none, and is counted.
    Counted,
    /// It is one row, with a fault.
    Spoilt,
}

impl<'a> JsonLines<'a> {
    /// Takes the plan's paths apart, and stands before the first line.
    pub fn open(reader: &'a Reader, rows: &'a str, bytes: &'a dyn Bytes) -> Result<Self, FileFault> {
        let want = Want::new(reader, rows)?;
        let lines = Lines::open(reader.encoding, bytes)?;
        lines.settled_from(0)?;
        let scan = Scan::new(OneLine(lines.coding()), 0);
        Ok(Self {
            reader,
            want,
            lines,
            line: None,
            text: String::new(),
            scan,
            outer: Outer::default(),
            cells: Cells::default(),
            counts: LineCounts::default(),
            handed_out: 0,
        })
    }

    /// Takes a line in hand, counts it, or makes `row` of its fault.
    fn take(&mut self, line: Line, row: &mut Row) -> Result<Taken, FileFault> {
        self.text.clear();
        if let Some(what) = self.decode(&line) {
            return Ok(self.spoil(&line, what, row));
        }
        let (start, end) = readable(&self.text, line.ending);
        let text = self.text.get(start..end).unwrap_or_default();
        if text.bytes().all(|byte| matches!(byte, b' ' | b'\t' | 0x1A)) {
            self.counts.blank += 1;
            return Ok(Taken::Counted);
        }
        if self.reader.ignore.iter().any(|rule| matches!(rule, Ignore::Line(regex) if regex.is_match(text))) {
            self.counts.ignored += 1;
            return Ok(Taken::Counted);
        }
        let before = self.lines.coding().bytes_of(self.text.get(..start).unwrap_or_default());
        self.scan.set(text, line.number, line.start + before);
        match self.look_through() {
            Ok(end) => Ok(Taken::InHand(InHand { line, walk: Walk::default(), end, has_rows: false })),
            Err(fault) => Ok(self.spoil(&line, said(fault)?, row)),
        }
    }

    /// Decodes a line; what is wrong with it if that cannot be done.
    fn decode(&mut self, line: &Line) -> Option<String> {
        if line.too_long {
            return Some(format!("the line has {} bytes, more than any row's", line.end - line.start));
        }
        match self.lines.decode(line, &mut self.text) {
            Err(fault) => Some(fault.what),
            Ok(()) => nul_in(line, &self.text),
        }
    }

    /// Reads a line that may hold several rows to its end, before the first of them is handed out; the byte after its
    /// value. A line that is its own row is checked when that is read.
    fn look_through(&mut self) -> Result<Option<u64>, FileFault> {
        if self.want.steps.is_empty() {
            return Ok(None);
        }
        if self.want.outsiders() > 0 {
            self.outer.gather(&mut self.scan, &self.want)?;
            self.scan.rewind();
        }
        let mut walk = Walk::default();
        while walk.next(&mut self.scan, &self.want)? {
            self.scan.pass()?;
        }
        let end = self.scan.offset();
        self.scan.end()?;
        walk.arrived(&self.want)?;
        self.scan.rewind();
        Ok(Some(end))
    }

    /// Makes one row of a line that cannot be read.
    fn spoil(&self, line: &Line, what: String, row: &mut Row) -> Taken {
        row.clear();
        (row.line, row.lines, row.bytes) = (line.number, 1, Some((line.start, line.end)));
        row.raw.push_str(&self.text);
        row.fault = Some(RowFault::Unreadable(what));
        Taken::Spoilt
    }

    /// The next row of the line in hand; `false` when it has no more.
    fn row_of(&mut self, hand: &mut InHand, row: &mut Row) -> Result<bool, FileFault> {
        while hand.walk.next(&mut self.scan, &self.want)? {
            let read = self.cells.read(&mut self.scan, (&self.want, &hand.walk, &self.outer), row);
            hand.has_rows = true;
            let Some(end) = hand.end else { return read.and_then(|()| self.only_row(hand, row)) };
            row.bytes = row.bytes.map(|(start, _)| (start, end));
            match read {
                // The line has been read to its end before: what is wrong is where this row lies.
                Err(fault) => row.fault = Some(RowFault::Unreadable(said(fault)?)),
                Ok(()) if row.fault.is_none() && self.want.ignores(row) => {
                    self.counts.ignored += 1;
                    continue;
                }
                Ok(()) => {}
            }
            return Ok(true);
        }
        self.counts.blank += u64::from(!hand.has_rows);
        Ok(false)
    }

    /// Sees a line that is its own row to its end; `false` if the plan ignores it.
    fn only_row(&mut self, hand: &InHand, row: &mut Row) -> Result<bool, FileFault> {
        let last = hand.line.ending == LineEnd::Missing && self.reader.last_line == LastLine::Finished;
        let unfinished = if last { unfinished(&mut self.scan, &row.raw)? } else { None };
        self.scan.end()?;
        if row.fault.is_none() {
            if self.want.ignores(row) {
                self.counts.ignored += 1;
                return Ok(false);
            }
            row.fault = unfinished;
        }
        Ok(true)
    }

    /// Fills `row` with the next row of the line in hand, if there is one.
    fn go_on(&mut self, row: &mut Row) -> Result<bool, FileFault> {
        let Some(mut hand) = self.line.take() else { return Ok(false) };
        match self.row_of(&mut hand, row) {
            Ok(false) => Ok(false),
            Ok(true) => {
                self.line = hand.end.is_some().then_some(hand);
                Ok(true)
            }
            Err(fault) => {
                self.spoil(&hand.line, said(fault)?, row);
                Ok(true)
            }
        }
    }
}

/// What is wrong with a line; only bytes that could not be had are the whole export's fault.
fn said(fault: FileFault) -> Result<String, FileFault> {
    match fault {
        FileFault::Io(_) => Err(fault),
        other => Ok(other.to_string()),
    }
}

impl Rows for JsonLines<'_> {
    fn preamble(&self, _: &str) -> Option<&str> {
        None
    }

    fn unit(&self, _: usize) -> Option<&str> {
        None
    }

    fn next_row(&mut self, row: &mut Row) -> Result<bool, FileFault> {
        loop {
            if self.go_on(row)? {
                break;
            }
            let Some(line) = self.lines.advance()? else { return Ok(false) };
            match self.take(line, row)? {
                Taken::InHand(hand) => self.line = Some(hand),
                Taken::Counted => {}
                Taken::Spoilt => break,
            }
        }
        self.handed_out += 1;
        Ok(true)
    }

    fn counts(&self) -> LineCounts {
        self.counts
    }

    fn lines(&self) -> u64 {
        self.counts.total() + self.handed_out
    }
}
