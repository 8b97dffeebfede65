//! The plan as written: a tree in which everything knows where it stands.
//!
//! Invariants: nothing is judged here but the syntax of TOML; entries keep the order of the file; a span always lies
//! inside its file.

use std::ops::Range;

use chrono::NaiveDate;
use serde_spanned::Spanned;
use toml::de::{DeTable, DeValue};

/// One file's name and text.
#[derive(Debug, Clone)]
pub(crate) struct FileText {
    /// As the plan names it.
    pub name: String,
    /// What stands in it.
    pub text: String,
}

impl FileText {
    /// Line and column (in characters) of a byte, both from 1, and the line itself.
    pub fn place(&self, byte: usize) -> (usize, usize, &str) {
        let byte = (0..=byte.min(self.text.len())).rev().find(|at| self.text.is_char_boundary(*at)).unwrap_or(0);
        let (before, after) = self.text.split_at(byte);
        let start = before.rfind('\n').map_or(0, |at| at + 1);
        let end = after.find('\n').map_or(self.text.len(), |at| byte + at);
        let line = before.matches('\n').count() + 1;
        (line, before[start..].chars().count() + 1, self.text[start..end].trim_end_matches('\r'))
    }
}

/// Where something stands: the position of its file among the sources, and its bytes there.
#[derive(Debug, Clone, PartialEq, Eq)]
pub(crate) struct Spot {
    pub file: usize,
    pub span: Range<usize>,
}

/// A value and where it stands.
#[derive(Debug, Clone)]
pub(crate) struct Node {
    pub spot: Spot,
    pub value: Value,
}

/// A value of TOML.
#[derive(Debug, Clone)]
pub(crate) enum Value {
    Text(String),
    Whole(i64),
    Number(f64),
    Truth(bool),
    Date(NaiveDate),
    /// A time, with or without its day: no key of the plan takes one.
    Time,
    /// A number beyond what can be held.
    Unheld,
    List(Vec<Node>),
    Table(Entries),
}

impl Value {
    /// What people call it.
    pub fn called(&self) -> &'static str {
        match self {
            Self::Text(_) => "a text",
            Self::Whole(_) => "a whole number",
            Self::Number(_) => "a number",
            Self::Truth(_) => "true or false",
            Self::Date(_) => "a date",
            Self::Time => "a time",
            Self::Unheld => "a number that is too large",
            Self::List(_) => "a list",
            Self::Table(_) => "a table",
        }
    }
}

/// What a table holds, in the order of the file.
#[derive(Debug, Clone, Default)]
pub(crate) struct Entries(pub Vec<Entry>);

impl Entries {
    pub fn get(&self, key: &str) -> Option<&Entry> {
        self.0.iter().find(|entry| entry.key == key)
    }
}

/// One key and its value.
#[derive(Debug, Clone)]
pub(crate) struct Entry {
    pub key: String,
    pub spot: Spot,
    pub node: Node,
}

/// A fault of TOML's own syntax.
#[derive(Debug, Clone)]
pub(crate) struct SyntaxFault {
    pub spot: Spot,
    pub message: String,
}

/// Reads one file's text as far as it can be read; with syntax faults, the tree lacks what they spoil.
pub(crate) fn read(file: usize, text: &str) -> (Node, Vec<SyntaxFault>) {
    let (document, errors) = DeTable::parse_recoverable(text);
    let faults = errors
        .into_iter()
        .map(|error| {
            let span = error.span().unwrap_or(0..0);
            SyntaxFault { spot: Spot { file, span: within(span, text) }, message: error.message().to_owned() }
        })
        .collect();
    // The document as a whole is marked by its first byte, not from end to end.
    let spot = Spot { file, span: 0..text.len().min(1) };
    let entries = entries(file, text, document.get_ref());
    (Node { spot, value: Value::Table(entries) }, faults)
}

fn within(span: Range<usize>, text: &str) -> Range<usize> {
    let end = span.end.min(text.len());
    span.start.min(end)..end
}

fn entries(file: usize, text: &str, table: &DeTable<'_>) -> Entries {
    let mut entries: Vec<Entry> = table
        .iter()
        .map(|(key, value)| Entry {
            key: key.get_ref().to_string(),
            spot: Spot { file, span: within(key.span(), text) },
            node: node(file, text, value),
        })
        .collect();
    entries.sort_by_key(|entry| entry.spot.span.start);
    Entries(entries)
}

fn node(file: usize, text: &str, value: &Spanned<DeValue<'_>>) -> Node {
    let spot = Spot { file, span: within(value.span(), text) };
    let value = match value.get_ref() {
        DeValue::String(text) => Value::Text(text.to_string()),
        DeValue::Integer(whole) => {
            i64::from_str_radix(whole.as_str(), whole.radix()).map_or(Value::Unheld, Value::Whole)
        }
        DeValue::Float(number) => match number.as_str().parse::<f64>() {
            Ok(number) if number.is_finite() => Value::Number(number),
            _ => Value::Unheld,
        },
        DeValue::Boolean(truth) => Value::Truth(*truth),
        DeValue::Datetime(moment) => date(moment).map_or(Value::Time, Value::Date),
        DeValue::Array(list) => Value::List(list.iter().map(|item| node(file, text, item)).collect()),
        DeValue::Table(table) => Value::Table(entries(file, text, table)),
    };
    Node { spot, value }
}

/// The date, when it is nothing but a date.
fn date(moment: &toml::value::Datetime) -> Option<NaiveDate> {
    match (moment.date, moment.time, moment.offset) {
        (Some(day), None, None) => {
            NaiveDate::from_ymd_opt(i32::from(day.year), u32::from(day.month), u32::from(day.day))
        }
        _ => None,
    }
}
