//! What the tests of the readers share: readers made by hand, and exports read whole.
#![allow(dead_code, reason = "each test binary uses its part")]

use std::collections::BTreeMap;

use regex::Regex;
use revisant_daemon::intake::read::{self, Bytes, FileFault, LineCounts, Row, RowFault};
use revisant_schema::plan::{
    Encoding, Format, Header, Ignore, LastLine, MeasureRule, Place, Reader, Source, Stamp, UnitRule, ValueRule,
};

fn place(source: Source) -> Place {
    Place { source, map: BTreeMap::new() }
}

/// A reader of delimited text with its header on line 1; slots are in the order of `columns`: subject, moment, then
/// values.
pub fn reader(delimiter: Option<u8>, columns: &[&str]) -> Reader {
    let value = |column: &&str| ValueRule {
        measure: MeasureRule::Fixed(0),
        column: (*column).to_owned(),
        unit: UnitRule::Unsaid,
        condition: vec![],
        replicate: None,
    };
    Reader {
        format: Format::Delimited { delimiter },
        encoding: Encoding::Auto,
        decimal_mark: '.',
        group_mark: None,
        header: Header::Row { row: 1, lines: 1 },
        last_line: LastLine::Finished,
        units_row: false,
        stop_at: None,
        missing: vec![String::new()],
        ignore: vec![],
        subject: place(Source::Column(columns[0].to_owned())),
        taken_at: place(Source::Column(columns[1].to_owned())),
        stamp: Stamp::Iso,
        visit: None,
        replicate: None,
        operator: None,
        values: columns[2..].iter().map(value).collect(),
    }
}

pub fn label(name: &str) -> Encoding {
    Encoding::Label(encoding_rs::Encoding::for_label(name.as_bytes()).unwrap())
}

pub fn starts_with(text: &str) -> Header {
    Header::StartsWith(text.to_owned())
}

pub fn regex(text: &str) -> Regex {
    Regex::new(text).unwrap()
}

pub fn ignore_equals(column: &str, text: &str) -> Ignore {
    Ignore::Equals { column: column.to_owned(), text: text.to_owned() }
}

/// A row as handed out, kept.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Kept {
    pub line: u64,
    pub lines: u64,
    pub bytes: Option<(u64, u64)>,
    pub raw: String,
    pub cells: Vec<String>,
    pub fault: Option<RowFault>,
}

/// An export read to its end.
#[derive(Debug)]
pub struct Whole {
    pub rows: Vec<Kept>,
    pub counts: LineCounts,
    pub lines: u64,
}

impl Whole {
    /// The rows without a fault, as their cells.
    pub fn good(&self) -> Vec<Vec<&str>> {
        let good = self.rows.iter().filter(|row| row.fault.is_none());
        good.map(|row| row.cells.iter().map(String::as_str).collect()).collect()
    }

    /// Line and fault of the others.
    pub fn faults(&self) -> Vec<(u64, &RowFault)> {
        self.rows.iter().filter_map(|row| row.fault.as_ref().map(|fault| (row.line, fault))).collect()
    }

    /// The lines of the rows that cannot be read.
    pub fn unreadable(&self) -> Vec<u64> {
        let faults = self.faults().into_iter().filter(|(_, fault)| matches!(fault, RowFault::Unreadable(_)));
        faults.map(|(line, _)| line).collect()
    }
}

/// Reads all of it, and checks what must hold of every export.
pub fn read_all(reader: &Reader, bytes: &dyn Bytes) -> Result<Whole, FileFault> {
    let slots = read::wanted(reader).len();
    let mut rows = read::open(reader, bytes)?;
    let mut kept: Vec<Kept> = Vec::new();
    let mut row = Row::default();
    let mut taken = 0;
    while rows.next_row(&mut row)? {
        taken += row.lines;
        assert_eq!(rows.counts().total() + taken, rows.lines(), "every line is accounted for at {row:?}");
        kept.push(Kept {
            line: row.line,
            lines: row.lines,
            bytes: row.bytes,
            raw: row.raw.clone(),
            cells: (0..slots).map(|slot| row.cell(slot).to_owned()).collect(),
            fault: row.fault.clone(),
        });
    }
    assert_eq!(rows.counts().total() + taken, rows.lines(), "every line is accounted for");
    assert!(!rows.next_row(&mut row)?, "the end stays the end");
    Ok(Whole { rows: kept, counts: rows.counts(), lines: rows.lines() })
}

/// The physical lines of text whose code units are bytes, counted another way.
pub fn physical_lines(bytes: &[u8]) -> u64 {
    let bytes = bytes.strip_prefix(b"\xEF\xBB\xBF").unwrap_or(bytes);
    let mut lines = 0;
    let mut in_line = false;
    let mut index = 0;
    while index < bytes.len() {
        in_line = !matches!(bytes[index], b'\r' | b'\n');
        if !in_line {
            lines += 1;
            index += usize::from(bytes[index] == b'\r' && bytes.get(index + 1) == Some(&b'\n'));
        }
        index += 1;
    }
    lines + u64::from(in_line)
}
