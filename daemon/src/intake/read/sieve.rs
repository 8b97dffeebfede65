//! What tables of text share, however their cells are parted: passing over all that is no row.
//!
//! Invariants: each line that is taken is either handed out or counted once; whether it is a row is asked in one
//! order for every format (unreadable, end of the table, blank, repeated header, its units, ignored); a rule of the
//! plan looks at a cell only when it is known what stands in it.

use revisant_schema::plan::{LastLine, Reader};

use super::ignore::Ignored;
use super::text::{Line, LineEnd, Lines, nul_in, readable};
use super::{FileFault, LineCounts, Row, RowFault};

/// A row's text, taken apart.
pub trait Parts {
    /// Nothing stands in any cell.
    fn are_blank(&self) -> bool;
    /// The row says what the header does.
    fn are_header(&self) -> bool;
    /// The row says what the row of units does.
    fn are_units(&self) -> bool;
    /// What stands in a column; `None` when that cannot be told.
    fn known(&self, column: usize) -> Option<&str>;
}

/// What taking the next line came to.
pub enum Taken {
    /// The table has ended.
    End,
    /// It cannot be read; the row says so, and is to be handed out.
    Spoiled,
    /// Its text is the row's.
    Line(Line),
}

/// The lines of a table, from which what is no row is sifted.
pub struct Sieve<'a> {
    reader: &'a Reader,
    /// The lines, of which the next one is not yet looked at.
    pub lines: Lines<'a>,
    /// The lines that were no rows.
    pub counts: LineCounts,
    rules: Ignored<'a>,
    /// The row before was a repeated header, so that this one may be its row of units.
    after_header: bool,
}

impl<'a> Sieve<'a> {
    /// Before the first of `lines`; the wanted columns stand at `columns`, by slot.
    pub fn new(reader: &'a Reader, lines: Lines<'a>, columns: &[usize]) -> Self {
        let rules = Ignored::by_column(reader, columns);
        Self { reader, lines, counts: LineCounts::default(), rules, after_header: false }
    }

    /// Takes the next line into `row`.
    pub fn take(&mut self, row: &mut Row) -> Result<Taken, FileFault> {
        self.lines.release();
        let Some(line) = self.lines.advance()? else { return Ok(Taken::End) };
        row.clear();
        row.line = line.number;
        row.lines = 1;
        row.bytes = Some((line.start, line.end));
        if let Some(fault) = decode_row(&self.lines, &line, &mut row.raw) {
            self.after_header = false;
            row.fault = Some(RowFault::Unreadable(fault));
            return Ok(Taken::Spoiled);
        }
        if self.ends_table(&line, &row.raw) {
            self.pass_footer()?;
            return Ok(Taken::End);
        }
        Ok(Taken::Line(line))
    }

    fn ends_table(&self, line: &Line, raw: &str) -> bool {
        let (start, end) = readable(raw, line.ending);
        self.reader.stop_at.as_ref().is_some_and(|stop| stop.is_match(&raw[start..end]))
    }

    /// Counts the line just taken and all after it as the footer.
    fn pass_footer(&mut self) -> Result<(), FileFault> {
        self.counts.footer += 1;
        self.lines.release();
        while self.lines.advance()?.is_some() {
            self.counts.footer += 1;
        }
        Ok(())
    }

    /// Counts what was taken if it is no row: its readable text, the physical lines that it took, and its parts.
    /// Returns whether it was counted. To be asked once after each [`Taken::Line`].
    pub fn sift(&mut self, text: &str, lines: u64, parts: &impl Parts) -> bool {
        let after_header = std::mem::take(&mut self.after_header);
        let count = if parts.are_blank() || text.bytes().all(|byte| byte == 0x1A) {
            self.after_header = after_header;
            &mut self.counts.blank
        } else if parts.are_header() {
            self.after_header = true;
            &mut self.counts.repeated_header
        } else if after_header && parts.are_units() {
            &mut self.counts.units
        } else if self.ignores(text, parts) {
            &mut self.counts.ignored
        } else {
            return false;
        };
        *count += lines;
        true
    }

    fn ignores(&self, text: &str, parts: &impl Parts) -> bool {
        self.rules.line(text) || self.rules.cells(|column| parts.known(column))
    }

    /// The fault of a row whose last line is `last`, if that may have been cut.
    pub fn unfinished(&self, last: &Line) -> Option<RowFault> {
        let unfinished = last.ending == LineEnd::Missing && self.reader.last_line == LastLine::Finished;
        unfinished.then_some(RowFault::Unfinished)
    }
}

/// Adds a line's text to `raw`; says what is wrong with it if it cannot be a row's.
pub fn decode_row(lines: &Lines, line: &Line, raw: &mut String) -> Option<String> {
    if line.too_long {
        return Some(format!("the line has {} bytes, more than any table's", line.end - line.start));
    }
    let from = raw.len();
    match lines.decode(line, raw) {
        Err(fault) => Some(fault.what),
        Ok(()) => nul_in(line, &raw[from..]),
    }
}
