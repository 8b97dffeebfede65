//! The drafted lines, and how sure each is.
//!
//! Invariant: a line that is a gap makes the plan unsound, so that nothing is filed by it until a person has answered;
//! its comment begins with `FILL IN` and says what is to be answered.

use std::fmt::Write;

/// The text that stands where a person must write something.
pub const BLANK: &str = "FILL IN";

/// How sure a line is.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum Mark {
    /// The samples settle it.
    Sure,
    /// It is likely; why it is not certain.
    Unsure(String),
    /// It cannot be said; what a person must say.
    Gap(String),
}

/// One line of the draft.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Line {
    /// The key, as a remark names it.
    pub key: String,
    /// The line itself; empty for a remark that has none.
    pub text: String,
    /// How sure it is.
    pub mark: Mark,
}

impl Line {
    /// A line `key = value` that the samples settle.
    pub fn sure(key: &str, value: &str) -> Self {
        Self { key: key.to_owned(), text: format!("{key} = {value}"), mark: Mark::Sure }
    }

    /// A line that is likely.
    pub fn unsure(key: &str, value: &str, why: impl Into<String>) -> Self {
        Self { mark: Mark::Unsure(why.into()), ..Self::sure(key, value) }
    }

    /// A line that a person must fill in.
    pub fn gap(key: &str, value: &str, what: impl Into<String>) -> Self {
        Self { mark: Mark::Gap(what.into()), ..Self::sure(key, value) }
    }

    /// A remark beside no line.
    pub fn remark(key: &str, why: impl Into<String>) -> Self {
        Self { key: key.to_owned(), text: String::new(), mark: Mark::Unsure(why.into()) }
    }

    /// A line with several reasons for not being sure; none: it is sure. A gap among them makes it one.
    pub fn with(key: &str, value: &str, notes: &Notes) -> Self {
        let mark = match (notes.gaps.as_slice(), notes.doubts.as_slice()) {
            ([], []) => Mark::Sure,
            ([], doubts) => Mark::Unsure(doubts.join("; ")),
            (gaps, _) => Mark::Gap(gaps.join("; ")),
        };
        Self { mark, ..Self::sure(key, value) }
    }

    /// As it stands in the file: the comment behind the line, or above it where both together are too long to be read
    /// at a sight.
    pub fn write(&self, into: &mut String) {
        let comment = match &self.mark {
            Mark::Sure => String::new(),
            Mark::Unsure(why) => format!("# unsure: {}", clean(why)),
            Mark::Gap(what) => format!("# {BLANK}: {}", clean(what)),
        };
        let behind = format!("{}     {comment}", self.text);
        if comment.is_empty() {
            let _ = writeln!(into, "{}", self.text);
        } else if !self.text.is_empty() && behind.chars().count() <= WIDTH {
            let _ = writeln!(into, "{behind}");
        } else {
            let indent = self.text.len() - self.text.trim_start().len();
            write_above(&comment, indent, into);
            if !self.text.is_empty() {
                let _ = writeln!(into, "{}", self.text);
            }
        }
    }
}

/// Columns that a drafted line takes with its comment.
const WIDTH: usize = 80;

/// Writes a comment over as many lines as it needs.
fn write_above(comment: &str, indent: usize, into: &mut String) {
    let mut line = " ".repeat(indent);
    let start = line.len();
    for word in comment.split(' ') {
        if line.len() > start && line.chars().count() + 1 + word.chars().count() > WIDTH {
            let _ = writeln!(into, "{}", line.trim_end());
            line = format!("{}#  ", " ".repeat(indent));
        }
        if line.len() > start {
            line.push(' ');
        }
        line.push_str(word);
    }
    let _ = writeln!(into, "{}", line.trim_end());
}

/// Reasons gathered for one line.
#[derive(Debug, Clone, Default, PartialEq, Eq)]
pub struct Notes {
    /// Why it is not certain.
    pub doubts: Vec<String>,
    /// What a person must say.
    pub gaps: Vec<String>,
}

impl Notes {
    /// Adds a doubt.
    pub fn doubt(&mut self, why: impl Into<String>) {
        self.doubts.push(why.into());
    }

    /// Adds a gap.
    pub fn gap(&mut self, what: impl Into<String>) {
        self.gaps.push(what.into());
    }
}

/// A comment on one line, without what could end it or steer a terminal.
fn clean(text: &str) -> String {
    text.chars().map(|c| if c.is_control() { ' ' } else { c }).collect()
}

/// A text as a basic string of TOML, on one line.
pub fn quote(text: &str) -> String {
    let mut quoted = String::from("\"");
    for c in text.chars() {
        match c {
            '"' | '\\' => quoted.extend(['\\', c]),
            '\t' => quoted.push_str("\\t"),
            c if c.is_control() => quoted.push_str(&format!("\\u{:04X}", u32::from(c))),
            c => quoted.push(c),
        }
    }
    quoted.push('"');
    quoted
}

/// An expression as TOML writes it: literally where that is possible.
pub fn literal(text: &str) -> String {
    if text.contains('\'') || text.chars().any(char::is_control) { quote(text) } else { format!("'{text}'") }
}

/// `{ "a" = "b", … }`
pub fn map(pairs: &[(String, String)]) -> String {
    let pairs: Vec<String> = pairs.iter().map(|(key, value)| format!("{} = {}", quote(key), quote(value))).collect();
    format!("{{ {} }}", pairs.join(", "))
}

/// A few texts for a comment.
pub fn some<'a>(texts: impl IntoIterator<Item = &'a str>) -> String {
    let all: Vec<&str> = texts.into_iter().collect();
    let shown: Vec<String> = all.iter().take(4).map(|text| format!("\"{}\"", clip(text))).collect();
    let more = if all.len() > 4 { ", …" } else { "" };
    format!("{}{more}", shown.join(", "))
}

/// Enough of a text to recognise it.
pub fn clip(text: &str) -> String {
    match text.char_indices().nth(40) {
        Some((at, _)) => format!("{}…", text.get(..at).unwrap_or_default()),
        None => text.to_owned(),
    }
}

/// A count with its noun.
pub fn rows(count: usize) -> String {
    if count == 1 { "1 row".to_owned() } else { format!("{count} rows") }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn written(line: &Line) -> String {
        let mut text = String::new();
        line.write(&mut text);
        text
    }

    #[test]
    fn comments_stand_behind_or_above() {
        assert_eq!(written(&Line::unsure("a", "1", "why")), "a = 1     # unsure: why\n");
        let long = written(&Line::gap("a", "1", "word ".repeat(40)));
        assert!(long.starts_with("# FILL IN: word word") && long.ends_with("\na = 1\n"), "{long}");
        assert!(long.lines().all(|line| line.chars().count() <= 80 && (line.starts_with('#') || line == "a = 1")));
    }

    #[test]
    fn nothing_that_a_sample_holds_ends_a_comment_or_a_text() {
        assert_eq!(written(&Line::unsure("a", &quote("x\"\ny"), "p\nq")).lines().count(), 1);
        let text = written(&Line::sure("a", &map(&[("k\"\n".into(), "v\\".into())])));
        assert!(text.parse::<toml_edit::DocumentMut>().is_ok(), "{text}");
    }
}
