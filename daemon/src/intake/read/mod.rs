//! Reading: from an export's bytes to rows of located text.
//!
//! Invariants: every physical line is counted exactly once, either in [`LineCounts`] or by a [`Row`] that is handed
//! out ([`Row::lines`]); a cell's text is what was exported, never a guess; memory does not grow with the export.

pub mod cells;
pub mod delimited;
pub mod fixed_width;
pub mod heading;
pub mod ignore;
pub mod json;
pub mod json_lines;
pub mod paths;
pub mod sieve;
pub mod text;
pub mod workbook;
pub mod xml;

use std::io::Read;

use revisant_schema::plan::{Format, Reader};
use thiserror::Error;

/// Which readers these are: the program's version, and a number that goes up with every change after which an export
/// may be read that could not be. Files that are held are then tried again by themselves.
pub const READERS: &str = concat!(env!("CARGO_PKG_VERSION"), "/2");

/// An export's bytes, which can be read from the start as often as needed.
pub trait Bytes {
    /// A fresh stream over all bytes.
    fn open(&self) -> std::io::Result<Box<dyn Read + '_>>;
}

impl Bytes for Vec<u8> {
    fn open(&self) -> std::io::Result<Box<dyn Read + '_>> {
        Ok(Box::new(self.as_slice()))
    }
}

/// Why nothing of an export can be read.
#[derive(Debug, Error)]
pub enum FileFault {
    /// The bytes are not what the format says (`unreadable-file`).
    #[error("{0}")]
    Unreadable(String),
    /// The layout is not the one of the plan (`unknown-layout`).
    #[error("{0}")]
    Layout(String),
    /// It is larger, or expands further, than allowed (`too-large`).
    #[error("{0}")]
    TooLarge(String),
    /// It bears another serial number (`other-instrument`).
    #[error("{0}")]
    OtherInstrument(String),
    /// The kept bytes could not be read back; nothing is known about the export.
    #[error("the kept bytes could not be read: {0}")]
    Io(#[from] std::io::Error),
}

/// Physical lines that are no rows.
#[derive(Debug, Clone, Copy, Default, PartialEq, Eq)]
pub struct LineCounts {
    /// Lines above the header.
    pub preamble: u64,
    /// Lines of the header.
    pub header: u64,
    /// Lines of units.
    pub units: u64,
    /// Lines that are empty or only delimiters.
    pub blank: u64,
    /// Lines equal to the header.
    pub repeated_header: u64,
    /// Lines that a rule of the plan ignores.
    pub ignored: u64,
    /// The line that ends the table, and all after it.
    pub footer: u64,
}

impl LineCounts {
    /// All of them.
    pub fn total(&self) -> u64 {
        let Self { preamble, header, units, blank, repeated_header, ignored, footer } = self;
        preamble + header + units + blank + repeated_header + ignored + footer
    }
}

/// What is wrong with a row as a whole.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum RowFault {
    /// It cannot be read (`unreadable-row`): more non-empty cells than the header, an undecodable byte, no JSON.
    Unreadable(String),
    /// It is the last one and has no line end (`unfinished-row`). Its cells stand as read.
    Unfinished,
}

/// One row: the texts of the wanted columns, and where they stood. Reused from row to row.
#[derive(Debug, Clone, Default)]
pub struct Row {
    /// The physical line on which it begins, from 1 (text formats); the sheet's row (workbooks).
    pub line: u64,
    /// How many it counts in the account: the physical lines it takes (delimited, fixed-width), else one.
    pub lines: u64,
    /// Its first byte and the one after its last, line end excluded; `None` where bytes say nothing (workbooks). Rows
    /// that share a line have different first bytes.
    pub bytes: Option<(u64, u64)>,
    /// The row as exported, decoded, without its line end.
    pub raw: String,
    /// What is wrong with it.
    pub fault: Option<RowFault>,
    /// Texts of cells that do not stand in `raw` as they are.
    text: String,
    cells: Vec<Span>,
    /// The slots of cells that are numbers in the export itself.
    numbers: Vec<usize>,
}

/// Where a cell's text stands: in the row as exported, or in its own texts.
#[derive(Debug, Clone, Copy)]
struct Span {
    from: usize,
    to: usize,
    own: bool,
}

/// Where a row stands in its export; no two rows of one export stand at the same place.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, PartialOrd, Ord)]
pub struct At {
    /// [`Row::line`].
    pub line: u64,
    /// Its first byte, since rows of a nested document may share a line; 0 where bytes say nothing.
    pub from: u64,
}

impl At {
    /// As the records keep it.
    pub fn of(line: i64, bytes: Option<(i64, i64)>) -> Self {
        Self { line: line.unsigned_abs(), from: bytes.map_or(0, |(from, _)| from.unsigned_abs()) }
    }
}

impl Row {
    /// Where it stands.
    pub fn at(&self) -> At {
        At { line: self.line, from: self.bytes.map_or(0, |(from, _)| from) }
    }

    /// The text of the wanted column `slot` as exported, without surrounding quotes and blanks; empty when absent.
    pub fn cell(&self, slot: usize) -> &str {
        let Some(&Span { from, to, own }) = self.cells.get(slot) else { return "" };
        let text = if own { &self.text } else { &self.raw };
        text.get(from..to).unwrap_or_default()
    }

    /// Empties the row for the next one.
    pub fn clear(&mut self) {
        self.raw.clear();
        self.text.clear();
        self.cells.clear();
        self.numbers.clear();
        self.fault = None;
        self.bytes = None;
    }

    /// Adds the next wanted column's text.
    pub fn push(&mut self, cell: &str) {
        let from = self.text.len();
        self.text.push_str(cell);
        self.cells.push(Span { from, to: self.text.len(), own: true });
    }

    /// Adds the next wanted column's text by where it stands in [`Self::raw`], which then stays as it is.
    fn point(&mut self, cell: std::ops::Range<usize>) {
        self.cells.push(Span { from: cell.start, to: cell.end, own: false });
    }

    /// Adds the next wanted column's number, for formats whose numbers are no texts: whatever marks the plan states for
    /// texts, its decimal mark is a point and it has no thousands mark.
    pub fn push_number(&mut self, cell: &str) {
        self.numbers.push(self.cells.len());
        self.push(cell);
    }

    /// Whether the wanted column `slot` is a number in the export itself, and no text.
    pub fn is_number(&self, slot: usize) -> bool {
        self.numbers.contains(&slot)
    }
}

/// A stream of rows. Rows that the plan ignores, blank lines, headers and footers are never handed out.
pub trait Rows {
    /// The value of a preamble's key, known once the first row or the end has been handed out.
    fn preamble(&self, key: &str) -> Option<&str>;
    /// The units row's text for the wanted column `slot`; `None` when the reader has no units row.
    fn unit(&self, slot: usize) -> Option<&str>;
    /// Fills `row` with the next one; `false` at the end.
    fn next_row(&mut self, row: &mut Row) -> Result<bool, FileFault>;
    /// The cell of a workbook (`C7`) in which the wanted column `slot` of the sheet's row `line` stands; `None` for
    /// every other format.
    fn cell_name(&self, _line: u64, _slot: usize) -> Option<String> {
        None
    }
    /// Whether day numbers count from 1904 (a setting of some workbooks).
    fn since_1904(&self) -> bool {
        false
    }
    /// The lines counted so far that were no rows.
    fn counts(&self) -> LineCounts;
    /// What the account counts, so far; after the end, all that the export has. At any time it is the sum of
    /// [`Self::counts`] and of the [`Row::lines`] handed out. Physical lines in delimited and fixed-width text, rows of
    /// the sheet in workbooks, rows in JSON and XML (and in JSON lines the lines that hold none).
    fn lines(&self) -> u64;
}

/// The columns that a reader's plan names, in a fixed order: a column's position here is its slot.
pub fn wanted(reader: &Reader) -> Vec<String> {
    use revisant_schema::plan::{Ignore, LevelRule, MeasureRule, UnitRule};
    let mut names: Vec<String> = Vec::new();
    let mut add = |name: &str| {
        if !names.iter().any(|known| known == name) {
            names.push(name.to_owned());
        }
    };
    let places = [Some(&reader.subject), Some(&reader.taken_at), reader.visit.as_ref(), reader.replicate.as_ref()];
    for place in places.into_iter().flatten().chain(reader.operator.as_ref()) {
        place.source.columns().into_iter().for_each(&mut add);
    }
    for value in &reader.values {
        add(&value.column);
        if let MeasureRule::Found(place) = &value.measure {
            place.source.columns().into_iter().for_each(&mut add);
        }
        if let UnitRule::Found { place, .. } = &value.unit {
            place.source.columns().into_iter().for_each(&mut add);
        }
        for (_, level) in &value.condition {
            if let LevelRule::Found(place) = level {
                place.source.columns().into_iter().for_each(&mut add);
            }
        }
    }
    for rule in &reader.ignore {
        match rule {
            Ignore::Equals { column, .. } | Ignore::Matches { column, .. } => add(column),
            Ignore::Line(_) => {}
        }
    }
    names
}

/// Opens an export's bytes as rows.
pub fn open<'a>(reader: &'a Reader, bytes: &'a dyn Bytes) -> Result<Box<dyn Rows + 'a>, FileFault> {
    match &reader.format {
        Format::Delimited { delimiter } => Ok(Box::new(delimited::Delimited::open(reader, *delimiter, bytes)?)),
        Format::FixedWidth { columns } => Ok(Box::new(fixed_width::FixedWidth::open(reader, columns, bytes)?)),
        Format::Json { rows } => Ok(Box::new(json::Json::open(reader, rows, bytes)?)),
        Format::JsonLines { rows } => Ok(Box::new(json_lines::JsonLines::open(reader, rows, bytes)?)),
        Format::Workbook { sheet } => Ok(Box::new(workbook::Workbook::open(reader, sheet, bytes)?)),
        Format::Xml { rows } => Ok(Box::new(xml::Xml::open(reader, rows, bytes)?)),
    }
}
