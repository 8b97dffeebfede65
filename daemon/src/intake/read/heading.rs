//! What stands above a table's rows: the preamble, the header, and the columns that the plan names.
//!
//! Invariants: a column is found by its label alone, never by its place; a label that is absent or stands twice is
//! a fault that names it; what is remembered of the lines above the header is bounded.

use std::collections::HashMap;

use revisant_schema::plan::Header;
use unicode_normalization::UnicodeNormalization;

use super::FileFault;
use super::cells::{Cells, Split};
use super::text::{LONGEST_LINE, Line, Lines, holds_nul, nul_in, readable};

/// How much text above the header is remembered: more is no preamble.
const LONGEST_PREAMBLE: usize = 256 * 1024;

/// A label as it is compared: NFC, the two micro signs one, line ends as spaces, no blanks around.
pub fn fold(label: &str) -> String {
    let spaced = label.trim_start_matches('\u{feff}').replace("\r\n", " ").replace(['\r', '\n'], " ");
    fold_characters(spaced.trim())
}

/// NFC, with the two micro signs one.
fn fold_characters(text: &str) -> String {
    text.replace('\u{b5}', "\u{3bc}").nfc().collect()
}

/// The lines above the header, as far as they are remembered.
#[derive(Debug, Default)]
pub struct Above {
    lines: Vec<String>,
    size: usize,
    count: u64,
}

impl Above {
    /// Adds a line, as long as there is room.
    pub fn add(&mut self, line: &str) {
        self.count += 1;
        if self.size + line.len() <= LONGEST_PREAMBLE {
            self.size += line.len() + 1;
            self.lines.push(line.to_owned());
        }
    }

    /// Counts a line that cannot be read.
    fn pass(&mut self) {
        self.count += 1;
    }

    /// How many there were.
    pub fn count(&self) -> u64 {
        self.count
    }

    /// The first few, for a message.
    fn first_few(&self) -> String {
        if self.lines.is_empty() {
            return if self.count == 0 { "nothing stands in it" } else { "no line can be read" }.to_owned();
        }
        let shown: Vec<String> = self.lines.iter().take(3).map(|line| format!("\"{}\"", excerpt(line))).collect();
        format!("it begins {}", shown.join(", "))
    }
}

/// The first part of a line, for a message.
pub fn excerpt(line: &str) -> String {
    const LONGEST: usize = 80;
    match line.char_indices().nth(LONGEST) {
        Some((end, _)) => format!("{}…", &line[..end]),
        None => line.to_owned(),
    }
}

/// Goes to the header's first line; the lines above it go into `above`.
///
/// A line above the header that cannot be decoded gives no keys and does no harm otherwise.
pub fn seek(lines: &mut Lines, header: &Header, above: &mut Above) -> Result<Line, FileFault> {
    let mut text = String::new();
    let mut spoiled = None;
    while let Some(line) = lines.advance()? {
        text.clear();
        let decoded = decode(lines, &line, &mut text);
        let (start, end) = readable(&text, line.ending);
        if begins_table(header, &line, &text[start..end]) {
            decoded?;
            lines.settled_from(line.start)?;
            return Ok(line);
        }
        match decoded {
            Ok(()) => above.add(&text[start..end]),
            Err(fault) if line.too_long || holds_nul(&text) => return Err(fault),
            Err(fault) => {
                above.pass();
                spoiled.get_or_insert(fault);
            }
        }
    }
    // The header may well be on the line that could not be decoded.
    Err(spoiled.unwrap_or_else(|| not_found(header, above)))
}

/// The line after `line` in a header that takes `count` lines.
pub fn following(lines: &mut Lines, line: &Line, count: u64) -> Result<Line, FileFault> {
    let next = lines.advance_within(LONGEST_LINE)?.flatten();
    let what = || format!("the header should take {count} lines; line {} is the last", line.number);
    next.ok_or_else(|| FileFault::Layout(what()))
}

fn not_found(header: &Header, above: &Above) -> FileFault {
    let sought = match header {
        Header::StartsWith(text) => format!("no line begins with \"{text}\", as the header should"),
        Header::Row { row, .. } => {
            format!("the header should be on line {row}, but there are only {} lines", above.count)
        }
        Header::None => "there is no line".to_owned(),
    };
    FileFault::Layout(format!("{sought}; {}", above.first_few()))
}

fn begins_table(header: &Header, line: &Line, text: &str) -> bool {
    match header {
        Header::Row { row, .. } => line.number == *row,
        Header::None => true,
        Header::StartsWith(sought) => {
            let unquoted = text.strip_prefix('"').unwrap_or(text);
            [text, unquoted].iter().any(|text| text.starts_with(sought.as_str()))
                || fold_characters(unquoted).starts_with(&fold_characters(sought))
        }
    }
}

/// Adds the text of a line that stands above the rows, where a byte that cannot be read spoils the whole export.
pub fn decode(lines: &Lines, line: &Line, text: &mut String) -> Result<(), FileFault> {
    let from = text.len();
    let number = line.number;
    if line.too_long {
        return Err(FileFault::Unreadable(format!("line {number} is longer than any table's line")));
    }
    lines.decode(line, text).map_err(|fault| FileFault::Unreadable(format!("line {number}: {}", fault.what)))?;
    nul_in(line, &text[from..]).map_or(Ok(()), |what| Err(FileFault::Unreadable(what)))
}

/// Where the columns named stand among the labels.
///
/// All that is wrong is said at once, with the label nearest to each that is absent.
pub fn find_columns(wanted: &[String], labels: &[String], line: u64) -> Result<Vec<usize>, FileFault> {
    let folded: Vec<String> = labels.iter().map(|label| fold(label)).collect();
    let mut faults = Vec::new();
    let mut absent: Vec<String> = Vec::new();
    let mut columns = Vec::with_capacity(wanted.len());
    for name in wanted {
        let sought = fold(name);
        let mut places = folded.iter().enumerate().filter(|(_, label)| **label == sought).map(|(column, _)| column);
        match (places.next(), places.next()) {
            (Some(column), None) => columns.push(column),
            (Some(_), Some(_)) => faults.push(format!("the column \"{name}\" stands twice")),
            (None, _) => match nearest(&sought, &folded, wanted) {
                Some(label) => {
                    faults.push(format!("there is no column \"{name}\" (the nearest is \"{}\")", labels[label]));
                }
                None => absent.push(format!("\"{name}\"")),
            },
        }
    }
    if let Some((last, others)) = absent.split_last() {
        let or = if others.is_empty() { "" } else { " or " };
        faults.push(format!("there is no column {}{or}{last}", others.join(", ")));
    }
    if faults.is_empty() {
        return Ok(columns);
    }
    Err(FileFault::Layout(format!(
        "the header on line {line}: {}; it reads \"{}\"",
        faults.join("; "),
        excerpt(&labels.join("\", \""))
    )))
}

/// The label that `sought` has most likely become: one that it is part of, or else the one with the fewest changes of
/// one character, if those are few. Labels that the plan names itself have become nothing else.
fn nearest(sought: &str, labels: &[String], wanted: &[String]) -> Option<usize> {
    let free = |label: &str| !label.is_empty() && wanted.iter().all(|name| fold(name) != label);
    let holds = |label: &str| label.contains(sought) || sought.contains(label);
    let key = |label: &str| (!holds(label), distance(sought, label));
    let few = (sought.chars().count() / 2).max(1);
    let near = |label: &str| holds(label) || distance(sought, label) <= few;
    let free_labels = labels.iter().enumerate().filter(|(_, label)| free(label) && near(label));
    free_labels.min_by_key(|(_, label)| key(label)).map(|(index, _)| index)
}

/// Levenshtein's distance.
fn distance(one: &str, other: &str) -> usize {
    let other: Vec<char> = other.to_lowercase().chars().collect();
    let mut costs: Vec<usize> = (0..=other.len()).collect();
    for (row, mine) in one.to_lowercase().chars().enumerate() {
        let mut diagonal = costs[0];
        costs[0] = row + 1;
        for (column, theirs) in other.iter().enumerate() {
            let replaced = diagonal + usize::from(mine != *theirs);
            diagonal = costs[column + 1];
            costs[column + 1] = replaced.min(diagonal + 1).min(costs[column] + 1);
        }
    }
    costs[other.len()]
}

/// Without a header, columns are named by their number, from 1.
pub fn numbered_columns(names: &[String]) -> Result<Vec<usize>, FileFault> {
    let number = |name: &String| match name.trim().parse::<usize>() {
        Ok(number) if number > 0 => Ok(number - 1),
        _ => Err(FileFault::Layout(format!(
            "without a header, columns are named 1, 2, …; the plan names \"{}\"",
            excerpt(name)
        ))),
    };
    names.iter().map(number).collect()
}

/// The labels of a header that takes several rows: each column's texts joined by a space.
pub fn join_labels(rows: &[Vec<String>]) -> Vec<String> {
    let width = rows.iter().map(Vec::len).max().unwrap_or_default();
    let label = |column: usize| {
        let texts = rows.iter().filter_map(|row| row.get(column)).map(String::as_str).filter(|text| !text.is_empty());
        texts.collect::<Vec<_>>().join(" ")
    };
    (0..width).map(label).collect()
}

/// The preamble's keys and values.
///
/// A line can be meant in several ways (`Date, Time: 3` may name `Date` or `Date, Time`), so each line is split in
/// every way and the plan's key decides. Where two ways give the same key, the one that is the likelier to be meant
/// stays: by the delimiter, by a tab, by a colon, by a comma; and of two lines the first.
#[derive(Debug, Default)]
pub struct Preamble {
    values: HashMap<String, String>,
}

impl Preamble {
    /// Splits the lines above the header.
    pub fn new(above: &Above, delimiter: u8) -> Self {
        let mut values = HashMap::new();
        let mut cells = Cells::new(delimiter);
        for split in [split_by_delimiter, split_by_tab, split_by_colon, split_by_comma] {
            for line in &above.lines {
                if let Some((key, value)) = split(line, &mut cells) {
                    values.entry(key).or_insert(value);
                }
            }
        }
        Self { values }
    }

    /// The value of a key.
    pub fn get(&self, key: &str) -> Option<&str> {
        self.values.get(&fold(key)).map(String::as_str)
    }
}

fn split_by_tab(line: &str, cells: &mut Cells) -> Option<(String, String)> {
    split_at(line, '\t', cells.delimiter())
}

fn split_by_colon(line: &str, cells: &mut Cells) -> Option<(String, String)> {
    split_at(line, ':', cells.delimiter())
}

fn split_by_comma(line: &str, cells: &mut Cells) -> Option<(String, String)> {
    split_at(line, ',', cells.delimiter())
}

/// The first cell is the key, and what follows it the value.
fn split_by_delimiter(line: &str, cells: &mut Cells) -> Option<(String, String)> {
    if cells.split(line, 0) != Split::Whole {
        return split_at(line, char::from(cells.delimiter()), cells.delimiter());
    }
    if cells.count() < 2 {
        return None;
    }
    let mut texts = cells.texts(line).into_iter();
    let key = key_of(&texts.next().unwrap_or_default())?;
    let rest: Vec<String> = texts.skip_while(String::is_empty).collect();
    Some((key, rest.join(char::from(cells.delimiter()).encode_utf8(&mut [0; 4]))))
}

/// The text before the first `mark` is the key, the text after it the value.
fn split_at(line: &str, mark: char, delimiter: u8) -> Option<(String, String)> {
    let (key, value) = line.split_once(mark)?;
    let surrounds =
        |character: char| character.is_whitespace() || character == '"' || character == char::from(delimiter);
    Some((key_of(key)?, value.trim_matches(surrounds).to_owned()))
}

/// A key as it is compared: unquoted, without the colon that some put before the delimiter; `None` when empty.
fn key_of(text: &str) -> Option<String> {
    let bare = text.trim_matches(|character: char| character.is_whitespace() || character == '"');
    let key = fold(bare.trim_end_matches(':'));
    (!key.is_empty()).then_some(key)
}

#[cfg(test)]
#[allow(clippy::unwrap_used, reason = "tests may")]
mod tests {
    use super::*;

    fn preamble(lines: &[&str], delimiter: u8) -> Preamble {
        let mut above = Above::default();
        lines.iter().for_each(|line| above.add(line));
        Preamble::new(&above, delimiter)
    }

    #[test]
    fn keys_are_found_however_they_are_written() {
        let seen = preamble(
            &[
                "Gerät-Nr: HK-0031",
                "Station 4;;;;",
                "Serial:;A1703;;",
                "\"Tester\";\"B Ä\"",
                "Rate [Hz]\t100",
                "Room,12",
            ],
            b';',
        );
        for (key, value) in [
            ("Gerät-Nr", "HK-0031"),
            ("Station 4", ""),
            ("Serial", "A1703"),
            ("Tester", "B Ä"),
            (" Rate [Hz] ", "100"),
            ("Room", "12"),
        ] {
            assert_eq!(seen.get(key), Some(value), "{key}");
        }
        assert_eq!(seen.get("Nothing"), None);
    }

    #[test]
    fn quotes_and_empty_cells_around_a_value_go() {
        let seen = preamble(&["\"Serial: A1703\",,,", "Start: 10:30,,", "Name, first: Ada", "Date: today"], b',');
        assert_eq!(seen.get("Serial"), Some("A1703"));
        assert_eq!(seen.get("Start"), Some("10:30"));
        assert_eq!(seen.get("Name, first"), Some("Ada"));
        assert_eq!(seen.get("Date"), Some("today"));
    }

    #[test]
    fn the_delimiter_wins_over_a_comma() {
        let seen = preamble(&["Date, first;x", "Date;y"], b';');
        assert_eq!(seen.get("Date"), Some("y"));
        assert_eq!(seen.get("Date, first"), Some("x"));
    }

    #[test]
    fn labels_are_compared_by_what_they_mean() {
        assert_eq!(fold("\u{feff} Pru\u{308}fer\u{a0}"), fold("Prüfer"));
        assert_eq!(fold("\u{b5}g/L"), fold("\u{3bc}g/L"));
        assert_eq!(fold("Concentration\r\n(ng/ul)"), "Concentration (ng/ul)");
    }

    #[test]
    fn what_is_wrong_with_a_header_is_said_at_once() {
        let labels: Vec<String> = ["Code", "Kraft (kg)", "Code"].map(String::from).into();
        let wanted: Vec<String> = ["Code", "Kraft"].map(String::from).into();
        let fault = find_columns(&wanted, &labels, 6).unwrap_err().to_string();
        for part in ["line 6", "\"Code\" stands twice", "no column \"Kraft\"", "nearest is \"Kraft (kg)\""] {
            assert!(fault.contains(part), "{fault}");
        }
        assert_eq!(find_columns(&wanted[1..], &["x".into(), " Kraft".into()], 1).unwrap(), [1]);
    }

    #[test]
    fn a_header_over_two_rows_is_joined() {
        let rows = [vec!["Grip".into(), String::new(), "Id".into()], vec!["left".into(), "right".into()]];
        assert_eq!(join_labels(&rows), ["Grip left", "right", "Id"]);
    }

    #[test]
    fn distances_are_known() {
        assert_eq!(distance("kitten", "sitting"), 3);
        assert_eq!(distance("", "abc"), 3);
    }
}
