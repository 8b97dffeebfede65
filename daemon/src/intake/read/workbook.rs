//! Workbooks (.xlsx and .xlsm: Office Open XML, ECMA-376, both editions).
//!
//! Invariants: a row is handed out only as the workbook holds it, and the end only when every byte of its sheet was
//! read and sound, so a damaged workbook gives a fault and never other rows; memory is bounded by [`Limits`] and one
//! row, wherever cells stand; every row of the sheet down to the last one with a cell that is not empty is counted
//! once.
//!
//! Cells are read by a reader of our own, because a library's would have to be guarded from outside: the usual one
//! takes what the workbook declares as sizes, reads a text without a number as the first one, and cannot be kept
//! beside what it reads from.

mod book;
mod markup;
mod number;
mod package;
mod sheet;
mod texts;

use revisant_schema::plan;
use revisant_schema::plan::{Header, Reader};

use self::book::Book;
pub use self::package::Limits;
use self::package::Package;
use self::sheet::{Sheet, SheetRow, letters};
use self::texts::Texts;
use super::heading::{Above, Preamble, excerpt, find_columns, fold, join_labels, numbered_columns};
use super::ignore::Ignored;
use super::{Bytes, FileFault, LineCounts, Row, RowFault, Rows, wanted};

/// The rows of a workbook's sheet.
pub struct Workbook<'a> {
    reader: &'a Reader,
    sheet: Ahead,
    /// The sheet's name.
    name: String,
    since_1904: bool,
    preamble: Preamble,
    table: Table,
    rules: Ignored<'a>,
    counts: LineCounts,
    /// Rows handed out.
    given: u64,
    /// The row before was a repeated header, so that this one may be its row of units.
    after_header: bool,
}

/// What is known of the table before its first row.
#[derive(Default)]
struct Table {
    /// The column after the header's last label; `None` without a header.
    width: Option<usize>,
    /// Where the wanted columns stand, by slot.
    columns: Vec<usize>,
    /// The header's rows, as a repeated header has them.
    header: Vec<Vec<String>>,
    /// The row of units.
    units: Option<Vec<String>>,
}

/// A sheet of which the next row can be looked at.
struct Ahead {
    sheet: Sheet,
    row: SheetRow,
    /// `row` is the next one.
    looked: bool,
}

impl Ahead {
    /// The next row with a cell that is not empty, which stays the next one.
    fn peek(&mut self) -> Result<Option<&SheetRow>, FileFault> {
        self.looked = self.looked || self.sheet.next_row(&mut self.row)?;
        Ok(self.looked.then_some(&self.row))
    }

    /// The next row with a cell that is not empty.
    fn take(&mut self) -> Result<Option<&mut SheetRow>, FileFault> {
        let there = self.peek()?.is_some();
        self.looked = false;
        Ok(there.then_some(&mut self.row))
    }

    /// The texts of the row of this number, if a cell of it is not empty; later rows stay.
    fn take_texts(&mut self, number: u64) -> Result<Vec<String>, FileFault> {
        if self.peek()?.is_none_or(|row| row.number != number) {
            return Ok(vec![]);
        }
        self.looked = false;
        heading_texts(&self.row)
    }
}

/// The texts of a row above the table's rows, whose faults are the whole export's.
fn heading_texts(row: &SheetRow) -> Result<Vec<String>, FileFault> {
    if row.too_long {
        return Err(FileFault::Unreadable(format!("row {} holds more text than any table's row", row.number)));
    }
    Ok(row.texts())
}

/// The beginning of a sheet.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Glance {
    /// The sheet's name.
    pub name: String,
    /// The texts of its rows, from the first row of the sheet on; rows without a text are empty.
    pub rows: Vec<Vec<String>>,
}

/// The beginning of every sheet, for drafting a reader: no more than `most` rows of each.
pub fn glance(bytes: &dyn Bytes, most: usize) -> Result<Vec<Glance>, FileFault> {
    let book = Book::read(&mut Package::open(bytes, Limits::default())?)?;
    book.sheets
        .iter()
        .map(|sheet| Ok(Glance { name: sheet.name.clone(), rows: beginning(bytes, &book, &sheet.part, most)? }))
        .collect()
}

fn beginning(bytes: &dyn Bytes, book: &Book, part: &str, most: usize) -> Result<Vec<Vec<String>>, FileFault> {
    let mut package = Package::open(bytes, Limits::default())?;
    let texts = match &book.texts {
        Some(part) => Texts::read(&mut package, part)?,
        None => Texts::default(),
    };
    let mut sheet = Sheet::new(part, package.stream(part)?, texts);
    let (mut row, mut rows) = (SheetRow::default(), vec![]);
    while sheet.next_row(&mut row)? && row.number <= most as u64 {
        rows.resize(usize::try_from(row.number).unwrap_or(most).saturating_sub(1), vec![]);
        rows.push(row.texts());
    }
    Ok(rows)
}

impl<'a> Workbook<'a> {
    /// Finds the sheet, the header and the columns that the plan names, and stands before the first row.
    pub fn open(reader: &'a Reader, sheet: &plan::Sheet, bytes: &dyn Bytes) -> Result<Self, FileFault> {
        Self::open_within(reader, sheet, bytes, Limits::default())
    }

    /// The same under other limits.
    pub fn open_within(
        reader: &'a Reader,
        sheet: &plan::Sheet,
        bytes: &dyn Bytes,
        limits: Limits,
    ) -> Result<Self, FileFault> {
        let mut package = Package::open(bytes, limits)?;
        let book = Book::read(&mut package)?;
        let chosen = book.choose(sheet)?;
        let texts = match &book.texts {
            Some(part) => Texts::read(&mut package, part)?,
            None => Texts::default(),
        };
        let rows = Sheet::new(&chosen.part, package.stream(&chosen.part)?, texts);
        let mut opened = Self {
            reader,
            sheet: Ahead { sheet: rows, row: SheetRow::default(), looked: false },
            name: chosen.name.clone(),
            since_1904: book.since_1904,
            preamble: Preamble::default(),
            table: Table::default(),
            rules: Ignored::default(),
            counts: LineCounts::default(),
            given: 0,
            after_header: false,
        };
        opened.find_table()?;
        opened.rules = Ignored::by_column(reader, &opened.table.columns);
        Ok(opened)
    }

    /// Reads down to the table's first row.
    fn find_table(&mut self) -> Result<(), FileFault> {
        let names = wanted(self.reader);
        let count = match self.reader.header {
            Header::None => {
                self.table.columns = numbered_columns(&names)?;
                0
            }
            Header::StartsWith(_) => 1,
            Header::Row { lines, .. } => lines.max(1),
        };
        if count > 0 {
            let first = self.seek_header()?;
            self.read_header(first, count)?;
            let labels = join_labels(&self.table.header);
            self.table.width = Some(labels.len());
            self.table.columns = find_columns(&names, &labels, first)?;
        }
        if self.reader.units_row {
            self.read_units()?;
        }
        Ok(())
    }

    /// Goes to the header; the rows above it become the preamble. Returns the header's first row.
    fn seek_header(&mut self) -> Result<u64, FileFault> {
        let mut above = Above::default();
        let mut last = 0;
        loop {
            let Some(row) = self.sheet.peek()? else {
                return Err(FileFault::Layout(not_found(&self.reader.header, last, &self.name)));
            };
            let found = match &self.reader.header {
                Header::Row { row: sought, .. } => (row.number >= *sought).then_some(*sought),
                Header::StartsWith(sought) => begins_so(row, sought).then_some(row.number),
                Header::None => Some(row.number),
            };
            if let Some(first) = found {
                self.preamble = Preamble::new(&above, b'\t');
                self.counts.preamble = first.saturating_sub(1);
                return Ok(first);
            }
            last = row.number;
            add_above(row, &mut above)?;
            self.sheet.take()?;
        }
    }

    fn read_header(&mut self, first: u64, count: u64) -> Result<(), FileFault> {
        for number in first..first + count {
            if self.sheet.peek()?.is_none() {
                let what = format!("the header should take {count} rows; row {} is the last", number - 1);
                return Err(FileFault::Layout(what));
            }
            self.table.header.push(self.sheet.take_texts(number)?);
            self.counts.header += 1;
        }
        Ok(())
    }

    fn read_units(&mut self) -> Result<(), FileFault> {
        let number = self.lines() + 1;
        if self.sheet.peek()?.is_some() {
            self.counts.units = 1;
        }
        self.table.units = Some(self.sheet.take_texts(number)?);
        Ok(())
    }

    /// Counts the row that ends the table, and all after it, as the footer.
    fn pass_footer(&mut self, first: u64) -> Result<(), FileFault> {
        let mut last = first;
        while let Some(row) = self.sheet.take()? {
            last = row.number;
        }
        self.counts.footer += 1 + last - first;
        Ok(())
    }

    /// Reads the row that was just taken into `row`; `false` when it is not one to be handed out.
    fn read_row(&mut self, row: &mut Row) -> Result<bool, FileFault> {
        let taken = &mut self.sheet.row;
        let number = taken.number;
        let after_header = std::mem::take(&mut self.after_header);
        row.clear();
        row.line = number;
        row.lines = 1;
        if taken.too_long {
            row.fault = Some(RowFault::Unreadable("it holds more text than any table's row".to_owned()));
            return Ok(true);
        }
        if ends_table(self.reader, &taken.raw) {
            self.pass_footer(number)?;
            return Ok(false);
        }
        if self.repeats_heading(after_header) {
            return Ok(false);
        }
        let taken = &mut self.sheet.row;
        if self.rules.line(&taken.raw) || self.rules.cells(|column| Some(taken.text_at(column))) {
            self.counts.ignored += 1;
            return Ok(false);
        }
        fill(taken, &self.table.columns, row);
        row.fault = beyond(taken, self.table.width);
        std::mem::swap(&mut row.raw, &mut taken.raw);
        Ok(true)
    }

    /// Whether the row just taken is the header again, or after that the units; it is counted then.
    fn repeats_heading(&mut self, after_header: bool) -> bool {
        let (taken, table) = (&self.sheet.row, &self.table);
        if table.header.iter().any(|header| are(taken, header)) {
            self.counts.repeated_header += 1;
            self.after_header = true;
            return true;
        }
        let units = after_header && table.units.as_ref().is_some_and(|units| are(taken, units));
        self.counts.units += u64::from(units);
        units
    }
}

impl Rows for Workbook<'_> {
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
            let before = self.lines();
            let Some(taken) = self.sheet.take()? else { return Ok(false) };
            self.counts.blank += taken.number.saturating_sub(before + 1);
            if self.read_row(row)? {
                self.given += 1;
                return Ok(true);
            }
        }
    }

    /// The cell with the sheet's name before it, as `Results!C7`. A column that the plan does not name stands for the
    /// row as a whole, and gives its first cell.
    fn cell_name(&self, line: u64, slot: usize) -> Option<String> {
        let column = self.table.columns.get(slot).copied().unwrap_or_default();
        Some(format!("{}!{}{line}", self.name, letters(column)))
    }

    fn since_1904(&self) -> bool {
        self.since_1904
    }

    fn counts(&self) -> LineCounts {
        self.counts
    }

    fn lines(&self) -> u64 {
        self.counts.total() + self.given
    }
}

/// Whether the first cell of a row that is not empty begins so.
fn begins_so(row: &SheetRow, sought: &str) -> bool {
    let Some(first) = row.cells.first().map(|cell| row.text(cell)) else { return false };
    first.starts_with(sought) || fold(first).starts_with(&fold(sought))
}

fn not_found(header: &Header, last: u64, sheet: &str) -> String {
    let sheet = excerpt(sheet);
    match header {
        Header::StartsWith(text) => {
            format!("no row of the sheet \"{sheet}\" begins with \"{text}\", as the header should")
        }
        Header::Row { row, .. } => {
            format!("the header should be in row {row}, but the sheet \"{sheet}\" has only {last} rows")
        }
        Header::None => format!("the sheet \"{sheet}\" is empty"),
    }
}

/// Adds a row above the header to what keys are looked for in: each cell by itself (`key: value`), and each cell with
/// the next one that is not empty.
fn add_above(row: &SheetRow, above: &mut Above) -> Result<(), FileFault> {
    heading_texts(row)?;
    let text = |cell| row.text(cell).replace(['\t', '\r', '\n'], " ");
    row.cells.iter().for_each(|cell| above.add(&text(cell)));
    for pair in row.cells.windows(2) {
        if let [key, value] = pair {
            above.add(&format!("{}\t{}", text(key), text(value)));
        }
    }
    Ok(())
}

/// Whether a row ends the table: its text matches from its first column on, or from its first cell on that is not
/// empty.
fn ends_table(reader: &Reader, raw: &str) -> bool {
    let first = raw.trim_start_matches('\t');
    reader.stop_at.as_ref().is_some_and(|stop| stop.is_match(raw) || stop.is_match(first))
}

/// Whether the row's cells are these.
fn are(row: &SheetRow, texts: &[String]) -> bool {
    !texts.is_empty()
        && row.cells.last().is_some_and(|cell| cell.column + 1 == texts.len())
        && texts.iter().enumerate().all(|(column, text)| row.text_at(column) == text)
}

/// Gives the row the wanted columns' cells.
fn fill(taken: &SheetRow, columns: &[usize], row: &mut Row) {
    for &column in columns {
        match taken.at(column) {
            Some(cell) if cell.number => row.push_number(taken.text(cell)),
            Some(cell) => row.push(taken.text(cell)),
            None => row.push(""),
        }
    }
}

/// The fault of a row with a cell to the right of the header's last label.
fn beyond(row: &SheetRow, width: Option<usize>) -> Option<RowFault> {
    let (width, last) = (width?, row.cells.last()?.column);
    let (cell, end) = (letters(last), letters(width.saturating_sub(1)));
    (last >= width).then(|| {
        let what = format!("cell {cell}{} holds something, but the header ends with column {end}", row.number);
        RowFault::Unreadable(what)
    })
}
