//! From a row's text to its cells: delimiters and double quotes (RFC 4180).
//!
//! Invariants: a cell's text is the row's own, without the quotes around it and the blanks around that; a quote that
//! does not stand first in its cell is a character like any other; nothing is allocated for a row once the buffers
//! have grown to the size of the export's rows.

use std::ops::Range;

use memchr::{memchr, memchr_iter};

/// Where a cell's text stands.
#[derive(Debug, Clone, Copy)]
struct Span {
    start: usize,
    end: usize,
    /// In [`Cells::resolved`] instead of the row's text: quotes were doubled in it.
    resolved: bool,
}

/// What splitting a row's text came to.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Split {
    /// All cells have ended.
    Whole,
    /// The last cell's quote has not closed; call [`Cells::resume`] when more text has come.
    Open,
    /// Text stands between a closing quote and the next delimiter.
    TextAfterQuote,
}

/// The cells of one row. Reused from row to row.
#[derive(Debug)]
pub struct Cells {
    delimiter: u8,
    spans: Vec<Span>,
    resolved: String,
    /// The number of cells up to and including the last one that is not empty.
    filled: usize,
    /// Of a cell whose quote has not closed: where its text begins, and how far it has been looked through.
    open: (usize, usize),
}

impl Cells {
    /// No cells yet.
    pub fn new(delimiter: u8) -> Self {
        Self { delimiter, spans: vec![], resolved: String::new(), filled: 0, open: (0, 0) }
    }

    /// The delimiter.
    pub fn delimiter(&self) -> u8 {
        self.delimiter
    }

    /// How many cells there are.
    pub fn count(&self) -> usize {
        self.spans.len()
    }

    /// How many there are up to and including the last one that is not empty.
    pub fn filled(&self) -> usize {
        self.filled
    }

    /// The text of a cell of `text`; empty when absent.
    #[inline]
    pub fn get<'a>(&'a self, text: &'a str, index: usize) -> &'a str {
        match self.spans.get(index) {
            Some(span) if span.resolved => &self.resolved[span.start..span.end],
            Some(span) => &text[span.start..span.end],
            None => "",
        }
    }

    /// Where a cell's text stands in the row's, or the text itself where it does not stand there as it is.
    #[inline]
    pub fn place(&self, index: usize) -> Result<Range<usize>, &str> {
        match self.spans.get(index) {
            Some(span) if span.resolved => Err(&self.resolved[span.start..span.end]),
            Some(span) => Ok(span.start..span.end),
            None => Err(""),
        }
    }

    /// All cells' texts up to and including the last one that is not empty.
    pub fn texts(&self, text: &str) -> Vec<String> {
        (0..self.filled).map(|index| self.get(text, index).to_owned()).collect()
    }

    /// Whether the cells are these, empty ones at the end aside.
    pub fn are(&self, text: &str, others: &[String]) -> bool {
        self.filled == others.len()
            && others.iter().enumerate().all(|(index, other)| self.get(text, index) == other.as_str())
    }

    /// Forgets all cells.
    pub fn clear(&mut self) {
        self.spans.clear();
        self.resolved.clear();
        self.filled = 0;
    }

    /// Splits `text` from `start` on.
    pub fn split(&mut self, text: &str, start: usize) -> Split {
        self.clear();
        let bytes = text.as_bytes();
        if memchr(b'"', &bytes[start..]).is_some() {
            return self.split_quoted(text, start);
        }
        let mut from = start;
        for at in memchr_iter(self.delimiter, &bytes[start..]) {
            self.add(bytes, from, start + at);
            from = start + at + 1;
        }
        self.add(bytes, from, bytes.len());
        Split::Whole
    }

    /// Goes on after [`Split::Open`]; `text` is the earlier text and more.
    pub fn resume(&mut self, text: &str) -> Split {
        match self.close_quote(text) {
            Ok(Some(next)) => self.split_quoted(text, next),
            Ok(None) => Split::Whole,
            Err(fault) => fault,
        }
    }

    /// Splits text that may hold quotes.
    fn split_quoted(&mut self, text: &str, mut from: usize) -> Split {
        let bytes = text.as_bytes();
        loop {
            let first = skip_blanks(bytes, from, bytes.len(), self.delimiter);
            let next = if bytes.get(first) == Some(&b'"') {
                self.open = (first + 1, first + 1);
                match self.close_quote(text) {
                    Ok(next) => next,
                    Err(fault) => return fault,
                }
            } else {
                let end = memchr(self.delimiter, &bytes[from..]).map_or(bytes.len(), |at| from + at);
                self.add(bytes, from, end);
                (end < bytes.len()).then_some(end + 1)
            };
            match next {
                Some(next) => from = next,
                None => return Split::Whole,
            }
        }
    }

    /// Ends the quoted cell that is open; returns where the next cell begins, or `None` at the row's end.
    fn close_quote(&mut self, text: &str) -> Result<Option<usize>, Split> {
        let bytes = text.as_bytes();
        let (start, mut from) = self.open;
        let end = loop {
            let Some(quote) = memchr(b'"', &bytes[from..]).map(|at| from + at) else {
                self.open = (start, bytes.len());
                return Err(Split::Open);
            };
            if bytes.get(quote + 1) != Some(&b'"') {
                break quote;
            }
            from = quote + 2;
        };
        self.add_quoted(text, start, end);
        let after = skip_blanks(bytes, end + 1, bytes.len(), self.delimiter);
        match bytes.get(after) {
            None => Ok(None),
            Some(&byte) if byte == self.delimiter => Ok(Some(after + 1)),
            Some(_) => Err(Split::TextAfterQuote),
        }
    }

    /// Adds what stood between quotes.
    fn add_quoted(&mut self, text: &str, start: usize, end: usize) {
        let bytes = text.as_bytes();
        if memchr(b'"', &bytes[start..end]).is_none() {
            return self.add(bytes, start, end);
        }
        let from = self.resolved.len();
        let mut rest = &text[start..end];
        while let Some(quote) = memchr(b'"', rest.as_bytes()) {
            self.resolved.push_str(&rest[..=quote]);
            rest = &rest[quote + 2..];
        }
        self.resolved.push_str(rest);
        let (start, end) = trim(self.resolved.as_bytes(), from, self.resolved.len(), self.delimiter);
        self.add_span(Span { start, end, resolved: true });
    }

    #[inline]
    fn add(&mut self, bytes: &[u8], start: usize, end: usize) {
        let (start, end) = trim(bytes, start, end, self.delimiter);
        self.add_span(Span { start, end, resolved: false });
    }

    #[inline]
    fn add_span(&mut self, span: Span) {
        self.spans.push(span);
        if span.end > span.start {
            self.filled = self.spans.len();
        }
    }
}

/// The first position from `from` on at which no blank stands: no space, tab or no-break space.
#[inline]
fn skip_blanks(bytes: &[u8], mut from: usize, end: usize, delimiter: u8) -> usize {
    while from < end {
        match bytes[from] {
            byte @ (b' ' | b'\t') if byte != delimiter => from += 1,
            0xC2 if from + 1 < end && bytes[from + 1] == 0xA0 => from += 2,
            _ => break,
        }
    }
    from
}

/// Takes blanks away at both ends. The bytes are UTF-8, where 0xC2 always begins a character of two bytes.
#[inline]
fn trim(bytes: &[u8], start: usize, mut end: usize, delimiter: u8) -> (usize, usize) {
    let start = skip_blanks(bytes, start, end, delimiter);
    while end > start {
        match bytes[end - 1] {
            byte @ (b' ' | b'\t') if byte != delimiter => end -= 1,
            0xA0 if end - start >= 2 && bytes[end - 2] == 0xC2 => end -= 2,
            _ => break,
        }
    }
    (start, end)
}

/// How many cells a line would have if quotes meant nothing.
pub fn literal_cells(line: &str, delimiter: u8) -> usize {
    memchr_iter(delimiter, line.as_bytes()).count() + 1
}

#[cfg(test)]
#[allow(clippy::unwrap_used, reason = "tests may")]
mod tests {
    use super::*;

    fn split(text: &str, delimiter: u8) -> (Split, Vec<String>) {
        let mut cells = Cells::new(delimiter);
        let outcome = cells.split(text, 0);
        (outcome, (0..cells.count()).map(|index| cells.get(text, index).to_owned()).collect())
    }

    fn whole(text: &str, delimiter: u8) -> Vec<String> {
        let (outcome, cells) = split(text, delimiter);
        assert_eq!(outcome, Split::Whole, "{text}");
        cells
    }

    #[test]
    fn cells_lose_quotes_and_blanks() {
        assert_eq!(whole("a; b ;\u{a0}c\t;", b';'), ["a", "b", "c", ""]);
        assert_eq!(whole("\"a;b\";\" say \"\"x\"\" \";\"\"", b';'), ["a;b", "say \"x\"", ""]);
        assert_eq!(whole("a, \"b,c\" ,d", b','), ["a", "b,c", "d"]);
        assert_eq!(whole("\"\"\"\";\"\"\"a\"", b';'), ["\"", "\"a"]);
        assert_eq!(whole("", b','), [""]);
    }

    #[test]
    fn a_quote_inside_a_cell_stands_for_itself() {
        assert_eq!(whole("5\" pipe;a\"b\";c", b';'), ["5\" pipe", "a\"b\"", "c"]);
    }

    #[test]
    fn the_delimiter_is_never_a_blank() {
        assert_eq!(whole("a\t\tb", b'\t'), ["a", "", "b"]);
        assert_eq!(whole("a  b", b' '), ["a", "", "b"]);
        assert_eq!(whole("\"\ta\"\tb", b'\t'), ["\ta", "b"]);
    }

    #[test]
    fn text_after_a_closing_quote_is_a_fault() {
        assert_eq!(split("\"a\" x;b", b';').0, Split::TextAfterQuote);
        assert_eq!(split("\"a\"\"b\"c;b", b';').0, Split::TextAfterQuote);
    }

    #[test]
    fn an_open_quote_goes_on_where_it_stopped() {
        let mut cells = Cells::new(b',');
        assert_eq!(cells.split("x,\"a\"\"", 0), Split::Open);
        assert_eq!(cells.resume("x,\"a\"\"\nb"), Split::Open);
        let text = "x,\"a\"\"\nb\nc\",y";
        assert_eq!(cells.resume(text), Split::Whole);
        assert_eq!(cells.texts(text), ["x", "a\"\nb\nc", "y"]);
    }

    #[test]
    fn empty_cells_at_the_end_do_not_count() {
        let mut cells = Cells::new(b',');
        cells.split("a,,b,, ", 0);
        assert_eq!((cells.count(), cells.filled()), (5, 3));
        assert!(cells.are("a,,b,, ", &["a".into(), String::new(), "b".into()]));
    }
}
