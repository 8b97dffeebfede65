//! Rows that are no readings, by the plan's rules.
//!
//! Invariants: a rule on a column asks what stands in that cell, and is no ground where that cannot be told; one rule
//! that fits is enough.

use regex::Regex;
use revisant_schema::plan::{Ignore, Reader};

use super::wanted;

/// The rules of a reader, each of those on a column with the place at which its cell is asked for.
#[derive(Default)]
pub struct Ignored<'a> {
    lines: Vec<&'a Regex>,
    cells: Vec<(usize, Holds<'a>)>,
}

enum Holds<'a> {
    Text(&'a str),
    Match(&'a Regex),
}

impl<'a> Ignored<'a> {
    /// The rules of a reader whose cells are asked for by the slots of the wanted columns.
    pub fn by_slot(reader: &'a Reader) -> Self {
        Self::new(reader, Some)
    }

    /// The rules of a reader whose cells are asked for by columns: `columns` says which, by slot.
    pub fn by_column(reader: &'a Reader, columns: &[usize]) -> Self {
        Self::new(reader, |slot| columns.get(slot).copied())
    }

    fn new(reader: &'a Reader, place: impl Fn(usize) -> Option<usize>) -> Self {
        let names = wanted(reader);
        let at = |column: &String| names.iter().position(|name| name == column).and_then(&place);
        let mut rules = Self::default();
        for rule in &reader.ignore {
            match rule {
                Ignore::Line(regex) => rules.lines.push(regex),
                Ignore::Equals { column, text } => {
                    rules.cells.extend(at(column).map(|at| (at, Holds::Text(text.trim()))));
                }
                Ignore::Matches { column, regex } => rules.cells.extend(at(column).map(|at| (at, Holds::Match(regex)))),
            }
        }
        rules
    }

    /// Whether a line as text is ignored.
    pub fn line(&self, text: &str) -> bool {
        self.lines.iter().any(|regex| regex.is_match(text))
    }

    /// Whether a row is ignored for one of its cells; `None` is a cell of which it cannot be told what stands in it.
    pub fn cells<'c>(&self, cell: impl Fn(usize) -> Option<&'c str>) -> bool {
        self.cells.iter().any(|(at, holds)| cell(*at).is_some_and(|text| holds.is(text)))
    }
}

impl Holds<'_> {
    fn is(&self, cell: &str) -> bool {
        match self {
            Self::Text(text) => cell == *text,
            Self::Match(regex) => regex.is_match(cell),
        }
    }
}
