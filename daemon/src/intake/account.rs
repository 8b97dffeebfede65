//! The account of an export's lines.
//!
//! Invariant: the parts add up to the lines ([`Account::balanced`]), checked whenever an export is filed.

use serde::{Deserialize, Serialize};

use super::read::LineCounts;

/// How many physical lines of an export are what.
#[derive(Debug, Clone, Copy, Default, PartialEq, Eq, Serialize, Deserialize)]
#[expect(missing_docs, reason = "the names are those of the design, explained in LineCounts and below")]
pub struct Account {
    pub lines: u64,
    pub preamble: u64,
    pub header: u64,
    pub units: u64,
    pub blank: u64,
    pub repeated_header: u64,
    pub ignored: u64,
    pub footer: u64,
    /// Rows without any value.
    pub no_value: u64,
    /// Rows of which something was filed and nothing is held.
    pub filed: u64,
    /// Rows filed before.
    pub already: u64,
    /// Rows of which something is held, or was dismissed by a person.
    pub held: u64,
}

/// What a row is in the account: held if one of its values is, else filed if one is, else already there, else without
/// a value.
#[derive(Debug, Clone, Copy, Default, PartialEq, Eq, PartialOrd, Ord)]
pub enum Class {
    /// No value.
    #[default]
    NoValue,
    /// Filed before.
    Already,
    /// Filed.
    Filed,
    /// Held.
    Held,
}

impl Account {
    /// Takes over the lines that are no rows.
    pub fn take(&mut self, counts: LineCounts, lines: u64) {
        self.lines = lines;
        self.preamble = counts.preamble;
        self.header = counts.header;
        self.units = counts.units;
        self.blank = counts.blank;
        self.repeated_header = counts.repeated_header;
        self.ignored = counts.ignored;
        self.footer = counts.footer;
    }

    /// Adds a row of so many lines.
    pub fn add(&mut self, class: Class, lines: u64) {
        match class {
            Class::NoValue => self.no_value += lines,
            Class::Already => self.already += lines,
            Class::Filed => self.filed += lines,
            Class::Held => self.held += lines,
        }
    }

    /// Shares out the rows that have a value as an older account did, as far as they go; the rest are filed.
    pub fn rest_as(&mut self, before: &Account) {
        let others = self.preamble
            + self.header
            + self.units
            + self.blank
            + self.repeated_header
            + self.ignored
            + self.footer
            + self.no_value;
        let rest = self.lines.saturating_sub(others);
        self.held = before.held.min(rest);
        self.already = before.already.min(rest - self.held);
        self.filed = rest - self.held - self.already;
    }

    /// Moves so many lines that were filed, or there already, to those that are held.
    pub fn hold(&mut self, lines: u64) {
        let from_filed = lines.min(self.filed);
        let from_already = (lines - from_filed).min(self.already);
        self.filed -= from_filed;
        self.already -= from_already;
        self.held += from_filed + from_already;
    }

    /// Whether the parts add up.
    pub fn balanced(&self) -> bool {
        let parts = [
            self.preamble,
            self.header,
            self.units,
            self.blank,
            self.repeated_header,
            self.ignored,
            self.footer,
            self.no_value,
            self.filed,
            self.already,
            self.held,
        ];
        parts.iter().sum::<u64>() == self.lines
    }
}
