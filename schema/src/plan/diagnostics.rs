//! Faults of a plan: where, what is wrong, what would be right.
//!
//! Invariants: every fault names a file, a line and a column from 1; what is printed for people fits 80 columns;
//! the order of faults is that of the files and of the places in them, whatever order they were found in.

use std::fmt;

use serde::Serialize;

/// Columns that a fault printed for people may take.
const WIDTH: usize = 80;

/// Whether a fault keeps a plan from being used.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, Serialize)]
#[serde(rename_all = "lowercase")]
pub enum Severity {
    /// The plan is unsound.
    Error,
    /// The plan is sound; a person should know.
    Warning,
}

/// One fault.
#[derive(Debug, Clone, PartialEq, Eq, Serialize)]
pub struct Fault {
    /// The file, as the plan names it (`study.toml`, `readers/dyn-2.toml`).
    pub file: String,
    /// Its line, from 1.
    pub line: usize,
    /// Its column in characters, from 1.
    pub column: usize,
    /// Its first byte in the file and the one after its last.
    pub span: (usize, usize),
    /// The dotted path of the key, such as `instrument[dyn-2].reader.decimal_mark`; empty for the file as a whole.
    pub key: String,
    /// What is wrong.
    pub wrong: String,
    /// What would be right.
    pub right: String,
    /// The nearest name that would be right, if one is near.
    pub nearest: Option<String>,
    /// Whether it keeps the plan from being used.
    pub severity: Severity,
    /// The line as it stands in the file.
    pub text: String,
}

/// The faults of one plan, in the order of the files and of the places in them.
#[derive(Debug, Clone, PartialEq, Eq, Serialize)]
#[serde(transparent)]
pub struct Faults(pub Vec<Fault>);

impl Faults {
    /// Whether any of them keeps the plan from being used.
    pub fn any_error(&self) -> bool {
        self.0.iter().any(|fault| fault.severity == Severity::Error)
    }
}

impl std::error::Error for Faults {}

impl fmt::Display for Faults {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        for (index, fault) in self.0.iter().enumerate() {
            if index > 0 {
                writeln!(f)?;
            }
            write!(f, "{fault}")?;
        }
        Ok(())
    }
}

impl fmt::Display for Fault {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        let mark = if self.severity == Severity::Warning { "  (warning)" } else { "" };
        let head = format!("{}:{}:{}  {}{mark}", self.file, self.line, self.column, self.key);
        wrapped(f, head.trim_end(), "", "    ")?;
        wrapped(f, &self.wrong, "  ", "  ")?;
        if let Some(nearest) = &self.nearest {
            wrapped(f, &format!("nearest: {nearest}"), "  ", "    ")?;
        }
        if !self.right.is_empty() {
            wrapped(f, &format!("right: {}", self.right), "  ", "    ")?;
        }
        self.excerpt(f)
    }
}

impl Fault {
    /// The line of the file with carets under the place, cut to the width.
    fn excerpt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        if self.text.trim().is_empty() {
            return Ok(());
        }
        let number = self.line.to_string();
        let room = WIDTH.saturating_sub(number.len() + 5);
        let chars: Vec<char> = self.text.chars().map(|c| if c.is_control() { ' ' } else { c }).collect();
        let at = (self.column - 1).min(chars.len());
        // A little of what stands before the place helps to recognise it.
        let from = if columns(&chars[..at]) + 8 < room { 0 } else { at.saturating_sub(room / 3) };
        let mut shown = String::new();
        let mut width = 0;
        for c in &chars[from..] {
            width += char_width(*c);
            if width > room {
                break;
            }
            shown.push(*c);
        }
        let before = columns(&chars[from..at]);
        let wanted = (self.span.1 - self.span.0).max(1);
        let carets = self.marked(at, wanted).clamp(1, room.saturating_sub(before).max(1));
        writeln!(f, "  {number} | {}", shown.trim_end())?;
        writeln!(f, "  {:width$} | {:before$}{}", "", "", "^".repeat(carets), width = number.len())
    }

    /// Columns taken by the marked bytes, as far as they stand on this line.
    fn marked(&self, at: usize, bytes: usize) -> usize {
        let mut left = bytes;
        let mut width = 0;
        for c in self.text.chars().skip(at) {
            if left == 0 {
                break;
            }
            left = left.saturating_sub(c.len_utf8());
            width += char_width(c);
        }
        width
    }
}

/// Columns of a terminal that a character takes: two for the wide scripts of East Asia and for pictures, none for
/// combining marks.
fn char_width(c: char) -> usize {
    match u32::from(c) {
        0x300..=0x36F => 0,
        0x1100..=0x115F | 0x2E80..=0xA4CF | 0xAC00..=0xD7A3 | 0xF900..=0xFAFF | 0xFE30..=0xFE6F | 0xFF00..=0xFF60 => 2,
        0x1F300..=0x1FAFF | 0x20000..=0x3FFFD => 2,
        _ => 1,
    }
}

fn columns(chars: &[char]) -> usize {
    chars.iter().map(|c| char_width(*c)).sum()
}

/// Writes `text` in lines that fit, the first one led by `first`, the others by `rest`.
fn wrapped(f: &mut fmt::Formatter<'_>, text: &str, first: &str, rest: &str) -> fmt::Result {
    let mut line = String::from(first);
    let mut used = first.len();
    let mut fresh = true;
    for word in text.split_inclusive(' ') {
        let bare: Vec<char> = word.trim_end().chars().map(|c| if c.is_control() { ' ' } else { c }).collect();
        if !fresh && used + columns(&bare) > WIDTH {
            writeln!(f, "{}", line.trim_end())?;
            line = String::from(rest);
            used = rest.len();
        }
        for c in word.chars().map(|c| if c.is_control() { ' ' } else { c }) {
            if used + char_width(c) > WIDTH && c != ' ' {
                writeln!(f, "{line}")?;
                line = String::from(rest);
                used = rest.len();
            }
            line.push(c);
            used += char_width(c);
        }
        fresh = false;
    }
    writeln!(f, "{}", line.trim_end())
}

/// The nearest of `known` to `name`, when it is near enough to be meant.
pub(crate) fn nearest<'a>(name: &str, known: impl IntoIterator<Item = &'a str>) -> Option<&'a str> {
    let allowed = (name.chars().count() / 3).max(1);
    let lower = name.to_lowercase();
    known
        .into_iter()
        .map(|candidate| (distance(&lower, &candidate.to_lowercase()), candidate))
        .filter(|(distance, candidate)| *distance <= allowed && *distance < candidate.chars().count())
        .min_by_key(|(distance, _)| *distance)
        .map(|(_, candidate)| candidate)
}

/// Edit distance in which two neighbours that changed places count once (optimal string alignment).
fn distance(a: &str, b: &str) -> usize {
    let (a, b): (Vec<char>, Vec<char>) = (a.chars().collect(), b.chars().collect());
    // A long text is never near to a name; this bounds the work on hostile plans.
    if a.len().abs_diff(b.len()) > 8 || a.len() > 64 {
        return usize::MAX;
    }
    let mut rows: Vec<Vec<usize>> = vec![(0..=b.len()).collect()];
    for i in 1..=a.len() {
        let mut row = vec![i];
        for j in 1..=b.len() {
            let same = usize::from(a[i - 1] != b[j - 1]);
            let mut best = (rows[i - 1][j] + 1).min(row[j - 1] + 1).min(rows[i - 1][j - 1] + same);
            if i > 1 && j > 1 && a[i - 1] == b[j - 2] && a[i - 2] == b[j - 1] {
                best = best.min(rows[i - 2][j - 2] + 1);
            }
            row.push(best);
        }
        rows.push(row);
    }
    rows[a.len()][b.len()]
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn nearest_names() {
        let known = ["delimiter", "decimal_mark", "header", "sheet"];
        assert_eq!(nearest("delimeter", known), Some("delimiter"));
        assert_eq!(nearest("haeder", known), Some("header"));
        assert_eq!(nearest("Header", known), Some("header"));
        assert_eq!(nearest("colour", known), None);
        assert_eq!(nearest("x", ["y"]), None);
    }

    #[test]
    fn printed_faults_fit_the_width() {
        let fault = Fault {
            file: "study.toml".into(),
            line: 1234,
            column: 150,
            span: (149, 420),
            key: format!("instrument[{}].reader.value[3].condition", "long-".repeat(20)),
            wrong: "word ".repeat(60),
            right: "x".repeat(200),
            nearest: Some("n".repeat(90)),
            severity: Severity::Warning,
            text: format!("{}{}", "é漢".repeat(80), "b".repeat(300)),
        };
        for line in fault.to_string().lines() {
            assert!(columns(&line.chars().collect::<Vec<_>>()) <= WIDTH, "{line}");
        }
    }
}
