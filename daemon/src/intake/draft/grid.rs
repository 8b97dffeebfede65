//! What the samples hold, as the readers themselves read it.
//!
//! Invariant: a cell that is looked at here has come out of the very reader that will read the exports, so that nothing
//! is concluded from a text that the service would not see.

use std::collections::BTreeMap;

use revisant_schema::plan::{Encoding, Format, Header, LastLine, Place, Reader, Source, Stamp};

use super::Sample;
use crate::intake::read::{self, Bytes, FileFault, Row, RowFault};

/// Rows looked at of one sample; an export that is larger is told by its beginning.
const MOST_ROWS: usize = 50_000;

/// How the samples are laid out, as far as the format goes.
#[derive(Debug, Clone)]
pub struct Layout {
    /// The format.
    pub format: Format,
    /// The encoding.
    pub encoding: Encoding,
    /// The header.
    pub header: Header,
    /// Whether a row of units stands under the header.
    pub units_row: bool,
    /// A line that ends the table.
    pub stop_at: Option<String>,
    /// Lines that are no rows, as expressions for `ignore`.
    pub ignored_lines: Vec<String>,
    /// Keys above the header that every sample has.
    pub preamble: Vec<String>,
}

/// One cell.
#[derive(Debug, Clone, Default, PartialEq, Eq)]
pub struct Cell {
    /// Its text, without blanks around it.
    pub text: String,
    /// It is a number in the export itself.
    pub number: bool,
}

/// One row of a sample.
#[derive(Debug, Clone)]
pub struct GridRow {
    /// Which sample.
    pub sample: usize,
    /// Its line there.
    pub line: u64,
    /// By column; absent columns are empty.
    pub cells: Vec<Cell>,
}

/// All samples' rows under one set of columns.
#[derive(Debug, Clone, Default)]
pub struct Grid {
    /// The columns' names.
    pub columns: Vec<String>,
    /// The rows that can be read.
    pub rows: Vec<GridRow>,
    /// The units row's text, by column.
    pub units: Vec<Option<String>>,
    /// The preamble's values, by key, then by sample.
    pub preamble: BTreeMap<String, Vec<String>>,
    /// Samples that were read.
    pub samples: Vec<usize>,
}

impl Grid {
    /// A column's texts in the order of the rows.
    pub fn texts(&self, column: usize) -> impl Iterator<Item = &str> {
        self.rows.iter().map(move |row| row.cells.get(column).map_or("", |cell| cell.text.as_str()))
    }

    /// A column's distinct texts that are not empty, each with its rows, the commonest first.
    pub fn distinct(&self, column: usize) -> Vec<(&str, usize)> {
        tally(self.texts(column))
    }

    /// Whether the column's cells are numbers in the export itself.
    pub fn is_number(&self, column: usize) -> bool {
        let mut filled = self.rows.iter().filter_map(|row| row.cells.get(column)).filter(|cell| !cell.text.is_empty());
        let numbers = filled.clone().filter(|cell| cell.number).count();
        let all = filled.by_ref().count();
        all > 0 && numbers * 2 > all
    }

    /// The same columns, with only the rows that are wanted.
    pub fn only(&self, wanted: impl Fn(&GridRow) -> bool) -> Self {
        Self { rows: self.rows.iter().filter(|row| wanted(row)).cloned().collect(), ..self.clone() }
    }
}

/// Distinct texts that are not empty, the commonest first.
pub fn tally<'a>(texts: impl Iterator<Item = &'a str>) -> Vec<(&'a str, usize)> {
    let mut counts: BTreeMap<&str, usize> = BTreeMap::new();
    texts.filter(|text| !text.is_empty()).for_each(|text| *counts.entry(text).or_default() += 1);
    let mut counts: Vec<(&str, usize)> = counts.into_iter().collect();
    counts.sort_by_key(|(_, count)| std::cmp::Reverse(*count));
    counts
}

/// A reader that names these columns and means nothing by them.
pub fn trial_reader(layout: &Layout, columns: &[String]) -> Reader {
    let nowhere = Place { source: Source::Fixed(String::new()), map: BTreeMap::new() };
    let compiled = |text: &String| regex::Regex::new(text).ok();
    Reader {
        format: layout.format.clone(),
        encoding: layout.encoding,
        decimal_mark: '.',
        group_mark: None,
        header: layout.header.clone(),
        last_line: LastLine::Finished,
        units_row: layout.units_row,
        stop_at: layout.stop_at.as_ref().and_then(compiled),
        missing: vec![String::new()],
        ignore: layout.ignored_lines.iter().filter_map(compiled).map(revisant_schema::plan::Ignore::Line).collect(),
        subject: Place { source: Source::Columns(columns.to_vec()), map: BTreeMap::new() },
        taken_at: nowhere,
        stamp: Stamp::Iso,
        visit: None,
        replicate: None,
        operator: None,
        values: vec![],
    }
}

/// What one sample holds.
struct One {
    rows: Vec<(u64, Vec<Cell>)>,
    units: Vec<Option<String>>,
    preamble: Vec<(String, String)>,
}

fn read_one(layout: &Layout, columns: &[String], bytes: &dyn Bytes) -> Result<One, FileFault> {
    let reader = trial_reader(layout, columns);
    let mut rows = read::open(&reader, bytes)?;
    let (mut row, mut taken) = (Row::default(), vec![]);
    while taken.len() < MOST_ROWS && rows.next_row(&mut row)? {
        if matches!(row.fault, Some(RowFault::Unreadable(_))) {
            continue;
        }
        let cell = |slot: usize| Cell { text: row.cell(slot).trim().to_owned(), number: row.is_number(slot) };
        taken.push((row.line, (0..columns.len()).map(cell).collect()));
    }
    let units = (0..columns.len()).map(|slot| rows.unit(slot).map(str::to_owned)).collect();
    let value = |key: &String| Some((key.clone(), rows.preamble(key)?.to_owned()));
    Ok(One { rows: taken, units, preamble: layout.preamble.iter().filter_map(value).collect() })
}

/// Reads the samples, each with the columns that it has; those that cannot be read are returned with the reason.
pub fn read_all(layout: &Layout, samples: &[Sample], columns_of: &[Vec<String>]) -> (Grid, Vec<(usize, String)>) {
    let mut grid = Grid::default();
    let mut refused = vec![];
    for (index, sample) in samples.iter().enumerate() {
        let Some(columns) = columns_of.get(index).filter(|columns| !columns.is_empty()) else { continue };
        match read_one(layout, columns, &sample.bytes) {
            Ok(one) => grid.add(index, columns, one),
            Err(fault) => refused.push((index, fault.to_string())),
        }
    }
    let width = grid.columns.len();
    grid.rows.iter_mut().for_each(|row| row.cells.resize(width, Cell::default()));
    (grid, refused)
}

impl Grid {
    fn add(&mut self, sample: usize, columns: &[String], one: One) {
        let mut places = vec![];
        for (slot, name) in columns.iter().enumerate() {
            let at = self.columns.iter().position(|known| known == name).unwrap_or_else(|| {
                self.columns.push(name.clone());
                self.units.push(None);
                self.columns.len() - 1
            });
            if let (Some(unit), Some(place)) = (one.units.get(slot).cloned().flatten(), self.units.get_mut(at)) {
                place.get_or_insert(unit);
            }
            places.push(at);
        }
        for (line, cells) in one.rows {
            let mut row = GridRow { sample, line, cells: vec![Cell::default(); self.columns.len()] };
            for (at, cell) in places.iter().zip(cells) {
                if let Some(place) = row.cells.get_mut(*at) {
                    *place = cell;
                }
            }
            self.rows.push(row);
        }
        for (key, value) in one.preamble {
            self.preamble.entry(key).or_default().push(value);
        }
        self.samples.push(sample);
    }
}

/// Whether a sample has these columns: the reader's own word where it has not.
pub fn has_columns(layout: &Layout, columns: &[String], sample: &Sample) -> Result<(), String> {
    let reader = trial_reader(layout, columns);
    let opened = read::open(&reader, &sample.bytes).map(drop);
    opened.map_err(|fault| fault.to_string())
}
