//! Delimited text.
//!
//! Invariants: the plan decides and nothing is guessed; a quote that does not close spoils the line on which it
//! opened, never the lines after it; a row is handed out without a fault only when more bytes at the export's end
//! could not have made it another row (see `Doubt` for the one place where that rests on a likelihood); every
//! physical line is counted once, whatever the bytes are.

use revisant_schema::plan::{Header, Reader};

use super::cells::{Cells, Split, literal_cells};
use super::heading::{self, Above, Preamble, find_columns, join_labels, numbered_columns};
use super::sieve::{Parts, Sieve, Taken, decode_row};
use super::text::{Line, LineEnd, Lines, readable};
use super::{Bytes, FileFault, LineCounts, Row, RowFault, Rows, wanted};

/// The delimiters among which the header decides when the plan names none.
const CANDIDATES: [u8; 4] = [b',', b';', b'\t', b'|'];
/// A cell between quotes takes no more bytes and lines than this, else its quote was a stray one.
const LONGEST_CELL: usize = 64 * 1024;
const MOST_LINES: u64 = 1000;
/// After so many quotes that did not close, the next ones are followed less far, so that a file made of stray quotes
/// is read in linear time.
const PATIENCE: u32 = 100;
const SHORT_CELL: usize = 2 * 1024;

/// The rows of a delimited export.
pub struct Delimited<'a> {
    sieve: Sieve<'a>,
    splitter: Splitter,
    preamble: Preamble,
    table: Table,
    doubt: Option<Doubt>,
}

/// What is known of the table before its first row.
#[derive(Default)]
struct Table {
    /// How many columns there are; `None` until the first row of a table without a header.
    width: Option<usize>,
    /// Where the wanted columns stand, by slot.
    columns: Vec<usize>,
    /// The header's rows, as a repeated header has them.
    header: Vec<Vec<String>>,
    /// The row of units.
    units: Option<Vec<String>>,
}

/// A row's cells, beside what they may be equal to.
struct CellsOf<'r> {
    cells: &'r Cells,
    raw: &'r str,
    table: &'r Table,
    /// Its quotes make sense; else it has no cells.
    whole: bool,
}

impl Parts for CellsOf<'_> {
    fn are_blank(&self) -> bool {
        self.whole && self.cells.filled() == 0
    }

    fn are_header(&self) -> bool {
        self.whole && self.table.header.iter().any(|header| self.cells.are(self.raw, header))
    }

    fn are_units(&self) -> bool {
        self.whole && self.table.units.as_ref().is_some_and(|units| self.cells.are(self.raw, units))
    }

    fn known(&self, column: usize) -> Option<&str> {
        self.whole.then(|| self.cells.get(self.raw, column))
    }
}

/// After a quote that had not closed when the bytes ended.
///
/// Either the quote is a stray one, and the lines after it are rows; or the export was cut inside a cell of several
/// lines, and they are that cell's text. A line is taken for a row only if it has a cell for each column, and none
/// is when the quote's own line lacks cells, as the beginning of a row of several lines does.
struct Doubt {
    line: u64,
    all: bool,
}

impl<'a> Delimited<'a> {
    /// Finds the header and the columns that the plan names, and stands before the first row.
    pub fn open(reader: &'a Reader, delimiter: Option<u8>, bytes: &'a dyn Bytes) -> Result<Self, FileFault> {
        let candidates = match delimiter {
            Some(named) if named.is_ascii() => vec![named],
            Some(_) => return Err(FileFault::Layout("the delimiter must be an ASCII character".into())),
            None => CANDIDATES.to_vec(),
        };
        match reader.header {
            Header::None => Self::open_headless(reader, &candidates, bytes),
            _ => Self::open_headed(reader, &candidates, bytes),
        }
    }

    fn open_headed(reader: &'a Reader, candidates: &[u8], bytes: &'a dyn Bytes) -> Result<Self, FileFault> {
        let mut lines = Lines::open(reader.encoding, bytes)?;
        let mut above = Above::default();
        let first = heading::seek(&mut lines, &reader.header, &mut above)?;
        lines.keep(&first);
        let mut seen = Vec::new();
        for &delimiter in candidates {
            lines.rewind(&first);
            seen.push((delimiter, read_header(reader, &mut lines, &first, delimiter)));
        }
        let (delimiter, table) = choose(seen)?;
        // Stands behind the header again, by reading it once more under the delimiter that was chosen.
        lines.rewind(&first);
        read_header(reader, &mut lines, &first, delimiter)?;
        let mut opened = Self::new(reader, lines, delimiter, table);
        opened.preamble = Preamble::new(&above, delimiter);
        opened.sieve.counts.preamble = above.count();
        opened.sieve.counts.header = opened.sieve.lines.count() - above.count();
        if reader.units_row {
            opened.read_units()?;
        }
        Ok(opened)
    }

    /// Without a header the first row says how many columns there are, so it is read once beforehand.
    fn open_headless(reader: &'a Reader, candidates: &[u8], bytes: &'a dyn Bytes) -> Result<Self, FileFault> {
        let mut seen = Vec::new();
        for &delimiter in candidates {
            seen.push((delimiter, Self::try_headless(reader, delimiter, bytes)));
        }
        // Nothing but blank lines is the same under every delimiter.
        if seen.iter().all(|(_, outcome)| matches!(outcome, Ok(Table { width: None, .. }))) {
            seen.truncate(1);
        }
        let (delimiter, table) = choose(seen)?;
        Ok(Self::new(reader, Lines::open(reader.encoding, bytes)?, delimiter, table))
    }

    fn try_headless(reader: &'a Reader, delimiter: u8, bytes: &'a dyn Bytes) -> Result<Table, FileFault> {
        let table = Table { columns: numbered_columns(&wanted(reader))?, ..Table::default() };
        let lines = Lines::open(reader.encoding, bytes)?;
        lines.settled_from(0)?;
        let mut trial = Self::new(reader, lines, delimiter, table);
        let mut row = Row::default();
        while trial.table.width.is_none() && trial.next_row(&mut row)? {}
        Ok(trial.table)
    }

    fn new(reader: &'a Reader, lines: Lines<'a>, delimiter: u8, table: Table) -> Self {
        Self {
            sieve: Sieve::new(reader, lines, &table.columns),
            splitter: Splitter::new(delimiter),
            preamble: Preamble::default(),
            table,
            doubt: None,
        }
    }

    fn read_units(&mut self) -> Result<(), FileFault> {
        self.sieve.lines.release();
        let Some(first) = self.sieve.lines.advance()? else {
            self.table.units = Some(vec![]);
            return Ok(());
        };
        let mut text = String::new();
        let last = heading_row(&mut self.sieve.lines, &mut self.splitter, &first, &mut text)?;
        self.table.units = Some(self.splitter.cells.texts(&text));
        self.sieve.counts.units = 1 + last.number - first.number;
        Ok(())
    }

    /// Reads the row that begins with `first` into `row`; `false` when it is not one to be handed out.
    fn read_row(&mut self, first: &Line, row: &mut Row) -> Result<bool, FileFault> {
        let Gathered { last, stray } = self.splitter.gather(&mut self.sieve.lines, first, &mut row.raw)?;
        row.lines = 1 + last.number - first.number;
        row.bytes = Some((first.start, last.end));
        let (start, end) = readable(&row.raw, last.ending);
        let parts = CellsOf { cells: &self.splitter.cells, raw: &row.raw, table: &self.table, whole: stray.is_none() };
        if self.sieve.sift(&row.raw[start..end], row.lines, &parts) {
            return Ok(false);
        }
        row.fault = match stray {
            Some(stray) => Some(self.stray_quote(first, &row.raw, stray)),
            None => {
                self.settle_width(first)?;
                self.fill(row);
                self.fault(&row.raw, first, &last)
            }
        };
        Ok(true)
    }

    /// Without a header, the first row says how many columns there are.
    fn settle_width(&mut self, first: &Line) -> Result<(), FileFault> {
        if self.table.width.is_some() {
            return Ok(());
        }
        let width = self.splitter.cells.count();
        self.table.width = Some(width);
        match self.table.columns.iter().find(|column| **column >= width) {
            None => Ok(()),
            Some(column) => Err(FileFault::Layout(format!(
                "there is no column \"{}\": the first row (line {}) has {width} cells",
                column + 1,
                first.number
            ))),
        }
    }

    /// Gives the row the texts of the wanted columns.
    fn fill(&self, row: &mut Row) {
        for &column in &self.table.columns {
            match self.splitter.cells.place(column) {
                Ok(place) => row.point(place),
                Err(text) => row.push(text),
            }
        }
    }

    /// What is wrong with a row whose cells have been split.
    fn fault(&self, raw: &str, first: &Line, last: &Line) -> Option<RowFault> {
        let cells = &self.splitter.cells;
        let width = self.table.width.unwrap_or_default();
        if cells.filled() > width {
            let what = format!("cell {} holds text, but there are {width} columns", cells.filled());
            return Some(RowFault::Unreadable(what));
        }
        if let Some(doubt) = &self.doubt
            && (doubt.all || cells.count() < width)
        {
            let what = format!("it may belong to the cell whose quote opens on line {} and does not close", doubt.line);
            return Some(RowFault::Unreadable(what));
        }
        if last.number > first.number && looks_like_rows(raw, cells.delimiter(), width) {
            let what = "each of its lines looks like a row of its own, so the quote that joins them may be a stray one";
            return Some(RowFault::Unreadable(what.to_owned()));
        }
        self.sieve.unfinished(last)
    }

    /// The fault of a line on which a quote went astray.
    fn stray_quote(&mut self, first: &Line, raw: &str, stray: Stray) -> RowFault {
        if stray == Stray::OpenAtEnd && self.doubt.is_none() {
            let short = literal_cells(raw, self.splitter.cells.delimiter()) < self.table.width.unwrap_or(usize::MAX);
            self.doubt = Some(Doubt { line: first.number, all: short });
        }
        RowFault::Unreadable(stray.what().to_owned())
    }
}

impl Rows for Delimited<'_> {
    fn preamble(&self, key: &str) -> Option<&str> {
        self.preamble.get(key)
    }

    fn unit(&self, slot: usize) -> Option<&str> {
        let units = self.table.units.as_ref()?;
        let unit = self.table.columns.get(slot).and_then(|column| units.get(*column));
        Some(unit.map_or("", String::as_str))
    }

    fn next_row(&mut self, row: &mut Row) -> Result<bool, FileFault> {
        loop {
            match self.sieve.take(row)? {
                Taken::End => return Ok(false),
                Taken::Spoiled => return Ok(true),
                Taken::Line(first) if self.read_row(&first, row)? => return Ok(true),
                Taken::Line(_) => {}
            }
        }
    }

    fn counts(&self) -> LineCounts {
        self.sieve.counts
    }

    fn lines(&self) -> u64 {
        self.sieve.lines.count()
    }
}

/// How a quote went astray.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
enum Stray {
    TextAfterQuote,
    /// It does not close within what a cell may take, or before a line that cannot be read.
    Open,
    /// It does not close before the bytes end.
    OpenAtEnd,
}

impl Stray {
    fn what(self) -> &'static str {
        match self {
            Self::TextAfterQuote => "text stands between a closing quote and the next delimiter",
            Self::Open | Self::OpenAtEnd => "a quote opens and does not close",
        }
    }
}

/// What gathering a row came to.
struct Gathered {
    /// The row's last physical line.
    last: Line,
    /// What is wrong with its quotes; then the row is its first physical line, and it has no cells.
    stray: Option<Stray>,
}

/// Takes rows apart, over as many physical lines as their quoted cells need.
struct Splitter {
    cells: Cells,
    /// How many quotes did not close so far.
    failures: u32,
}

impl Splitter {
    fn new(delimiter: u8) -> Self {
        Self { cells: Cells::new(delimiter), failures: 0 }
    }

    /// Splits `raw`, the decoded line `first`, and takes more lines into it while a quote is open. When the quotes
    /// make no sense, all goes back to right after the first line.
    fn gather(&mut self, lines: &mut Lines, first: &Line, raw: &mut String) -> Result<Gathered, FileFault> {
        let length = raw.len();
        let (start, end) = readable(raw, first.ending);
        let split = self.cells.split(&raw[..end], start);
        let mut last = *first;
        let outcome = match split {
            Split::Open => self.follow(lines, &mut last, raw)?,
            Split::Whole => None,
            Split::TextAfterQuote => Some(Stray::TextAfterQuote),
        };
        if outcome.is_none() {
            return Ok(Gathered { last, stray: None });
        }
        self.cells.clear();
        raw.truncate(length);
        lines.rewind(first);
        Ok(Gathered { last: *first, stray: outcome })
    }

    /// Takes lines until the open quote has closed and the row has ended.
    fn follow(&mut self, lines: &mut Lines, last: &mut Line, raw: &mut String) -> Result<Option<Stray>, FileFault> {
        let limit = if self.failures < PATIENCE { LONGEST_CELL } else { SHORT_CELL };
        let (first, begun) = (*last, raw.len());
        lines.keep(&first);
        loop {
            let taken = raw.len() - begun;
            let next = if taken < limit && last.number - first.number < MOST_LINES {
                lines.advance_within(limit)?
            } else {
                Some(None)
            };
            let Some(next) = next else { return Ok(Some(self.fail(Stray::OpenAtEnd))) };
            let Some(line) = next else { return Ok(Some(self.fail(Stray::Open))) };
            raw.push_str(last.ending.as_str());
            *last = line;
            if decode_row(lines, &line, raw).is_some() {
                // The last line may only be undecodable because the export was cut there.
                let cut = line.ending == LineEnd::Missing;
                return Ok(Some(self.fail(if cut { Stray::OpenAtEnd } else { Stray::Open })));
            }
            let end = readable(raw, line.ending).1;
            match self.cells.resume(&raw[..end]) {
                Split::Open => {}
                Split::Whole => return Ok(None),
                Split::TextAfterQuote => return Ok(Some(self.fail(Stray::TextAfterQuote))),
            }
        }
    }

    fn fail(&mut self, stray: Stray) -> Stray {
        self.failures = self.failures.saturating_add(1);
        stray
    }
}

/// Whether each line of a row of several lines has as many cells as the table when quotes mean nothing. Then two stray
/// quotes may have made one row of several, with one row's values under another one's subject.
fn looks_like_rows(raw: &str, delimiter: u8, width: usize) -> bool {
    raw.split(['\r', '\n']).filter(|line| !line.is_empty()).all(|line| literal_cells(line, delimiter) == width)
}

/// Reads a row that stands above the table's rows, whose faults are the whole export's; returns its last line.
fn heading_row(lines: &mut Lines, splitter: &mut Splitter, first: &Line, text: &mut String) -> Result<Line, FileFault> {
    heading::decode(lines, first, text)?;
    let gathered = splitter.gather(lines, first, text)?;
    match gathered.stray {
        None => Ok(gathered.last),
        Some(stray) => Err(FileFault::Layout(format!("the header on line {}: {}", first.number, stray.what()))),
    }
}

/// Reads the header that begins with `first` under a delimiter, and finds the columns that the plan names.
fn read_header(reader: &Reader, lines: &mut Lines, first: &Line, delimiter: u8) -> Result<Table, FileFault> {
    let count = if let Header::Row { lines, .. } = reader.header { lines } else { 1 };
    let mut splitter = Splitter::new(delimiter);
    let mut header: Vec<Vec<String>> = Vec::new();
    let mut line = *first;
    for done in 1..=count.max(1) {
        let mut text = String::new();
        line = heading_row(lines, &mut splitter, &line, &mut text)?;
        header.push(splitter.cells.texts(&text));
        if done < count {
            line = heading::following(lines, &line, count)?;
        }
    }
    let labels = join_labels(&header);
    let columns = find_columns(&wanted(reader), &labels, first.number)?;
    Ok(Table { width: Some(labels.len()), columns, header, units: None })
}

/// The one delimiter under which all named columns were found.
fn choose(mut seen: Vec<(u8, Result<Table, FileFault>)>) -> Result<(u8, Table), FileFault> {
    let fitting: Vec<usize> = (0..seen.len()).filter(|&index| seen[index].1.is_ok()).collect();
    let only = if seen.len() == 1 { Some(0) } else { fitting.first().copied() };
    match only {
        Some(index) if fitting.len() <= 1 => {
            let (delimiter, outcome) = seen.swap_remove(index);
            Ok((delimiter, outcome?))
        }
        Some(_) => Err(FileFault::Layout(format!(
            "every named column is found under more than one delimiter ({}); the plan must name the delimiter",
            fitting.iter().map(|&index| shown(seen[index].0)).collect::<Vec<_>>().join(", ")
        ))),
        None => Err(no_delimiter(seen)),
    }
}

/// What to say when no delimiter fits.
fn no_delimiter(seen: Vec<(u8, Result<Table, FileFault>)>) -> FileFault {
    let mut said = Vec::new();
    for (delimiter, outcome) in seen {
        match outcome {
            Err(FileFault::Layout(what)) => said.push(format!("with {}: {what}", shown(delimiter))),
            Err(other) => return other,
            Ok(_) => {}
        }
    }
    FileFault::Layout(format!("under no delimiter is every named column found once; {}", said.join(". ")))
}

/// A delimiter for a message.
fn shown(delimiter: u8) -> String {
    if delimiter == b'\t' { "tab".to_owned() } else { format!("\"{}\"", char::from(delimiter)) }
}
