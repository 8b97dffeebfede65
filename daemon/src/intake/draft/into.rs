//! Into the plan: the drafted instrument is added to a plan's text, of which all else stays byte for byte.
//!
//! Invariant: the text is only ever added to, at one place, between two lines.

use std::ops::Range;

use toml_edit::{Document, DocumentMut, Item, Table, Value};

/// Why a draft cannot be added.
#[derive(Debug, Clone, PartialEq, Eq, thiserror::Error)]
pub enum IntoFault {
    /// The text is no TOML.
    #[error("it is not TOML: {0}")]
    Syntax(String),
    /// It has an instrument of this code.
    #[error("it has an instrument \"{0}\" already")]
    There(String),
}

/// Tables that refer to instruments or do not matter to reading.
const REFERRING: [&str; 4] = ["instrument", "analysis", "interim", "assume"];

/// Where a draft's reader begins.
const READER: &str = "[instrument.reader]\n";

/// The byte after the line in which a byte stands.
fn line_end(text: &str, at: usize) -> usize {
    text.get(at..).and_then(|rest| rest.find('\n')).map_or(text.len(), |found| at + found + 1)
}

/// The plan's text with the instrument in it: after the last one that is there, else before the analyses, else at the
/// end.
pub fn insert(text: &str, toml: &str, code: &str) -> Result<String, IntoFault> {
    let document = Document::parse(text).map_err(|error| IntoFault::Syntax(one_line(error.message())))?;
    let instruments = document.get("instrument").and_then(Item::as_array_of_tables);
    let is_it = |table: &Table| table.get("code").and_then(Item::as_str) == Some(code);
    let there = instruments.into_iter().flat_map(|all| all.iter()).find(|table| is_it(table));
    let (at, toml) = match there {
        None => (place(text, document.as_table()), toml),
        // One that only lacks its reader gets it, and keeps all else.
        Some(table) if !table.contains_key("reader") => {
            let reader = toml.find(READER).and_then(|from| toml.get(from..)).unwrap_or_default();
            (line_end(text, end_of_table(table).saturating_sub(1)), reader)
        }
        Some(_) => return Err(IntoFault::There(code.to_owned())),
    };
    let ending = if text.contains("\r\n") { "\r\n" } else { "\n" };
    let (before, after) = text.split_at_checked(at).unwrap_or((text, ""));
    let mut all = String::with_capacity(text.len() + toml.len() + 4);
    all.push_str(before);
    if !before.is_empty() && !before.ends_with('\n') {
        all.push_str(ending);
    }
    if !before.is_empty() && !before.ends_with("\n\n") && !before.ends_with("\r\n\r\n") {
        all.push_str(ending);
    }
    for line in toml.trim_end().lines() {
        all.push_str(line);
        all.push_str(ending);
    }
    if !after.is_empty() && !after.starts_with(['\n', '\r']) {
        all.push_str(ending);
    }
    all.push_str(after);
    Ok(all)
}

/// What a plan says besides instruments and what refers to them; `None` when it is no TOML.
pub fn without_instruments(text: &str) -> Option<String> {
    let mut document: DocumentMut = text.parse().ok()?;
    REFERRING.iter().for_each(|name| drop(document.remove(name)));
    Some(document.to_string())
}

/// The same with only the drafted instrument.
pub fn alone(text: &str, toml: &str) -> Option<String> {
    Some(format!("{}\n{toml}", without_instruments(text)?))
}

/// The byte at which the instrument's text begins.
fn place(text: &str, root: &Table) -> usize {
    let end_of = |name: &str| root.get(name).map(end);
    if let Some(at) = end_of("instrument").filter(|at| *at > 0) {
        return line_end(text, at.saturating_sub(1));
    }
    // Before what refers to instruments, if all else stands before that.
    let last_other =
        root.iter().filter(|(name, _)| !REFERRING.contains(name)).map(|(_, item)| end(item)).max().unwrap_or(0);
    let first_referring = REFERRING.iter().filter_map(|name| root.get(name)).filter_map(start).min();
    match first_referring {
        Some(first) if first >= last_other && last_other > 0 => line_end(text, last_other.saturating_sub(1)),
        _ => text.len(),
    }
}

/// The byte after the last one of anything in an item.
fn end(item: &Item) -> usize {
    let own = item.span().map_or(0, |span| span.end);
    let inner = match item {
        Item::Table(table) => end_of_table(table),
        Item::ArrayOfTables(tables) => tables.iter().map(end_of_table).max().unwrap_or(0),
        Item::Value(value) => value.span().map_or(0, |span| span.end),
        Item::None => 0,
    };
    own.max(inner)
}

fn end_of_table(table: &Table) -> usize {
    let own = table.span().map_or(0, |span| span.end);
    table.iter().map(|(_, item)| end(item)).max().unwrap_or(0).max(own)
}

fn start(item: &Item) -> Option<usize> {
    let begins = |span: Option<Range<usize>>| span.map(|span| span.start);
    match item {
        Item::Table(table) => begins(table.span()),
        Item::ArrayOfTables(tables) => tables.iter().filter_map(|table| begins(table.span())).min(),
        Item::Value(value) => begins(Value::span(value)),
        Item::None => None,
    }
}

fn one_line(text: &str) -> String {
    text.lines().next().unwrap_or_default().to_owned()
}

#[cfg(test)]
mod tests {
    use super::*;

    const PLAN: &str = "# the plan\n[study]\ncode = \"A\"   # mine\n\n[[instrument]]\ncode = \"one\"\nfolder = \"a\"\n\
                        [instrument.reader]\nformat = \"json\"\n[[instrument.reader.value]]\ncolumn = \"x\"   # kept\n\n\
                        # the analyses\n[[analysis]]\ncode = \"b\"\n";

    #[test]
    fn it_is_added_after_the_last_instrument_and_all_else_stays() {
        let text = insert(PLAN, "[[instrument]]\ncode = \"two\"\n", "two").unwrap();
        let (before, after) = PLAN.split_once("\n# the analyses").unwrap();
        assert_eq!(text, format!("{before}\n[[instrument]]\ncode = \"two\"\n\n# the analyses{after}"));
        assert_eq!(text.matches("[[instrument]]").count(), 2);
    }

    #[test]
    fn without_instruments_it_stands_before_the_analyses() {
        let plan = "[study]\ncode = \"A\"\n\n# why\n[[analysis]]\ncode = \"b\"\n";
        let text = insert(plan, "[[instrument]]\ncode = \"two\"\n", "two").unwrap();
        assert_eq!(
            text,
            "[study]\ncode = \"A\"\n\n[[instrument]]\ncode = \"two\"\n\n# why\n[[analysis]]\ncode = \"b\"\n"
        );
        let text = insert("[study]\r\ncode = \"A\"", "[[instrument]]\ncode = \"two\"\n", "two").unwrap();
        assert_eq!(text, "[study]\r\ncode = \"A\"\r\n\r\n[[instrument]]\r\ncode = \"two\"\r\n");
    }

    #[test]
    fn an_instrument_without_a_reader_gets_one() {
        let plan =
            "[[instrument]]\ncode = \"one\"\nrest = \"0s\"   # at once\n\n# next\n[[instrument]]\ncode = \"b\"\n";
        let text =
            insert(plan, "[[instrument]]\ncode = \"one\"\n\n[instrument.reader]\nformat = \"json\"\n", "one").unwrap();
        let expected = "[[instrument]]\ncode = \"one\"\nrest = \"0s\"   # at once\n\n[instrument.reader]\n\
                        format = \"json\"\n\n# next\n[[instrument]]\ncode = \"b\"\n";
        assert_eq!(text, expected);
    }

    #[test]
    fn an_instrument_that_is_there_is_left_alone() {
        assert_eq!(insert(PLAN, "[[instrument]]\ncode = \"one\"\n", "one"), Err(IntoFault::There("one".into())));
        assert!(matches!(insert("a = ", "", "one"), Err(IntoFault::Syntax(_))));
    }
}
