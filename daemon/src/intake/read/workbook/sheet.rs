//! The rows of a worksheet, one after the other.
//!
//! Invariants: a cell's text is what the workbook holds and nothing is calculated; rows and cells stand where the
//! sheet says and in its order, else nothing of it is read; at most one row is held in memory, and of that no more
//! than [`LONGEST_LINE`] bytes; the end is handed out only when the whole part was read and was sound.

use quick_xml::events::{BytesStart, Event};

use super::super::FileFault;
use super::super::heading::excerpt;
use super::super::text::LONGEST_LINE;
use super::markup::{Markup, characters, plain_attributes};
use super::number::add_number;
use super::package::Stream;
use super::texts::{Rich, Texts, unescape};

/// The bounds of every sheet of this format.
const MOST_ROWS: u64 = 1_048_576;
const MOST_COLUMNS: u32 = 16_384;
/// What stands for a formula that no program has calculated.
const NOT_CALCULATED: &str = "(formula without a value)";

/// A cell that is not empty.
#[derive(Debug, Clone, Copy)]
pub struct Cell {
    /// Its column, from 0.
    pub column: usize,
    /// Whether it is a number, and no text.
    pub number: bool,
    /// Where its text stands in the row's, blanks around it excluded.
    start: usize,
    end: usize,
}

/// A row with a cell that is not empty.
#[derive(Debug, Default)]
pub struct SheetRow {
    /// The sheet's row, from 1.
    pub number: u64,
    /// Its cells that are not empty, by column.
    pub cells: Vec<Cell>,
    /// The cells' texts as exported, in the order of their columns and with a tab between two columns.
    pub raw: String,
    /// It holds more text than any table's row, and only the beginning is here.
    pub too_long: bool,
}

impl SheetRow {
    /// The text of a cell of this row.
    pub fn text(&self, cell: &Cell) -> &str {
        &self.raw[cell.start..cell.end]
    }

    /// The cell in a column, if it is not empty.
    pub fn at(&self, column: usize) -> Option<&Cell> {
        self.cells.binary_search_by_key(&column, |cell| cell.column).ok().map(|index| &self.cells[index])
    }

    /// The text in a column; empty when there is none.
    pub fn text_at(&self, column: usize) -> &str {
        self.at(column).map_or("", |cell| self.text(cell))
    }

    /// The texts of all columns up to the last that is not empty.
    pub fn texts(&self) -> Vec<String> {
        let width = self.cells.last().map_or(0, |cell| cell.column + 1);
        let mut texts = vec![String::new(); width];
        self.cells.iter().for_each(|cell| self.text(cell).clone_into(&mut texts[cell.column]));
        texts
    }

    fn clear(&mut self, number: u64) {
        self.number = number;
        self.cells.clear();
        self.raw.clear();
        self.too_long = false;
    }

    /// Adds the text that was just put at the end of the row's as a cell; blanks alone are none.
    fn add(&mut self, column: usize, from: usize, number: bool) {
        let written = &self.raw[from..];
        // Most texts have no blanks around them, and looking for all that Unicode calls so takes long.
        if let [first, .., last] | [first @ last] = written.as_bytes()
            && first.is_ascii_graphic()
            && last.is_ascii_graphic()
        {
            self.cells.push(Cell { column, number, start: from, end: self.raw.len() });
            return;
        }
        let text = written.trim();
        if text.is_empty() {
            self.raw.truncate(from);
            return;
        }
        let start = from + written.len() - written.trim_start().len();
        self.cells.push(Cell { column, number, start, end: start + text.len() });
    }
}

/// Which element one stands in.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
enum Inside {
    Part,
    Worksheet,
    Rows,
    Row,
    Cell,
    Value,
    Formula,
    /// A cell's own text.
    Text,
    /// After all of it.
    After,
}

/// What a cell says it holds.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
enum Kind {
    Number,
    SharedText,
    OwnText,
    /// A formula's text, or a moment in ISO 8601.
    Written,
    Truth,
    Error,
}

/// A cell that is being read.
#[derive(Debug)]
struct Open {
    column: u32,
    kind: Kind,
    formula: bool,
    /// It has an element for a value, be it empty.
    valued: bool,
    value: String,
}

/// The rows of a worksheet.
pub struct Sheet {
    markup: Markup<Stream>,
    texts: Texts,
    at: At,
    done: bool,
}

/// Where in the sheet one stands.
struct At {
    inside: Inside,
    /// So deep in an element that is passed over.
    passed: usize,
    had_rows: bool,
    row: u64,
    /// The row's number as the sheet writes it.
    written: String,
    /// The column after the last cell.
    column: u32,
    cell: Open,
    rich: Rich,
    /// How deep in the cell's own text.
    rich_depth: usize,
}

impl Sheet {
    /// Stands before the first row.
    pub fn new(part: &str, bytes: Stream, texts: Texts) -> Self {
        let cell = Open { column: 0, kind: Kind::Number, formula: false, valued: false, value: String::new() };
        let at = At {
            inside: Inside::Part,
            passed: 0,
            had_rows: false,
            row: 0,
            written: String::new(),
            column: 0,
            cell,
            rich: Rich::default(),
            rich_depth: 0,
        };
        Self { markup: Markup::new(part, bytes), texts, at, done: false }
    }

    /// Fills `row` with the next one that has a cell that is not empty; `false` at the end.
    pub fn next_row(&mut self, row: &mut SheetRow) -> Result<bool, FileFault> {
        while !self.done {
            let Self { markup, texts, at, .. } = self;
            match markup.advance(|_, event| at.step(event, texts, row).map_err(|what| at.told(&what)))? {
                Step::More => {}
                Step::Row if row.cells.is_empty() && !row.too_long => {}
                Step::Row => return Ok(true),
                Step::End => self.done = true,
            }
        }
        Ok(false)
    }
}

/// What an event comes to.
enum Step {
    More,
    /// A row is complete.
    Row,
    /// The sheet ends.
    End,
}

impl At {
    fn step(&mut self, event: &Event<'_>, texts: &Texts, row: &mut SheetRow) -> Result<Step, String> {
        match event {
            Event::Start(tag) => self.start(tag, row)?,
            Event::End(_) => return self.end(texts, row),
            Event::Eof if self.had_rows => return Ok(Step::End),
            Event::Eof => return Err("it holds no rows".to_owned()),
            _ => self.take(event)?,
        }
        Ok(Step::More)
    }

    /// What is wrong, with the row where it is.
    fn told(&self, what: &str) -> String {
        if self.row == 0 { what.to_owned() } else { format!("row {}: {what}", self.row) }
    }

    /// An element begins.
    fn start(&mut self, tag: &BytesStart<'_>, row: &mut SheetRow) -> Result<(), String> {
        if self.passed > 0 {
            self.passed += 1;
            return Ok(());
        }
        match (self.inside, tag.local_name().as_ref()) {
            (Inside::Row, "c") => self.start_cell(tag)?,
            (Inside::Cell, name @ ("v" | "f" | "is")) => self.start_value(name)?,
            (Inside::Text, _) => {
                self.rich_depth += 1;
                self.rich.start(tag)?;
            }
            (Inside::Rows, "row") => self.start_row(tag, row)?,
            (Inside::Part, "worksheet") => self.inside = Inside::Worksheet,
            (Inside::Worksheet, "sheetData") if self.had_rows => return Err("it holds two tables".to_owned()),
            (Inside::Worksheet, "sheetData") => {
                self.had_rows = true;
                self.inside = Inside::Rows;
            }
            (Inside::Worksheet, _) | (Inside::Row | Inside::Cell, "extLst") => self.passed = 1,
            (_, other) => return Err(format!("\"{}\" stands where it should not", excerpt(other))),
        }
        Ok(())
    }

    /// What a cell holds begins: a value, a formula or a text of its own.
    fn start_value(&mut self, name: &str) -> Result<(), String> {
        match name {
            "f" => {
                self.cell.formula = true;
                self.inside = Inside::Formula;
            }
            "v" if self.cell.valued && self.cell.kind != Kind::OwnText => {
                return Err("a cell has two values".to_owned());
            }
            "v" => {
                self.cell.valued = true;
                self.inside = Inside::Value;
            }
            _ => {
                self.cell.kind = Kind::OwnText;
                self.cell.valued = true;
                self.cell.value.clear();
                self.rich.begin(true);
                self.rich_depth = 0;
                self.inside = Inside::Text;
            }
        }
        Ok(())
    }

    fn start_row(&mut self, tag: &BytesStart<'_>, row: &mut SheetRow) -> Result<(), String> {
        let mut number = None;
        self.written.clear();
        plain_attributes(tag, |name, value| {
            if name != "r" {
                return Ok(());
            }
            self.written.push_str(value);
            match number.replace(row_number(value)?) {
                Some(_) => Err("a row has two numbers".to_owned()),
                None => Ok(()),
            }
        })?;
        let number = number.unwrap_or(self.row + 1);
        if number <= self.row || number > MOST_ROWS {
            return Err(format!("row {number} follows it"));
        }
        self.row = number;
        self.column = 0;
        self.inside = Inside::Row;
        row.clear(number);
        Ok(())
    }

    fn start_cell(&mut self, tag: &BytesStart<'_>) -> Result<(), String> {
        let (mut column, mut kind) = (None, None);
        plain_attributes(tag, |name, value| {
            let again = match name {
                "r" => column.replace(self.column_of(value)?).is_some(),
                "t" => kind.replace(kind_of(value)?).is_some(),
                _ => false,
            };
            if again { Err("a cell says twice where it is or what it holds".to_owned()) } else { Ok(()) }
        })?;
        let column = column.unwrap_or(self.column);
        if column < self.column || column >= MOST_COLUMNS {
            return Err(format!("cell {} does not stand in the order of the columns", letters(column as usize)));
        }
        self.column = column + 1;
        self.cell.column = column;
        self.cell.kind = kind.unwrap_or(Kind::Number);
        self.cell.formula = false;
        self.cell.valued = false;
        self.cell.value.clear();
        self.inside = Inside::Cell;
        Ok(())
    }

    /// The column (from 0) of a cell's name, which must be of this row.
    fn column_of(&self, name: &str) -> Result<u32, String> {
        let wrong = || format!("a cell names itself \"{}\"", excerpt(name));
        let letters = name.bytes().take_while(u8::is_ascii_alphabetic).count();
        let (letters, digits) = name.split_at(letters);
        // Nearly always it is written as the row has it.
        let here = !digits.is_empty() && digits == self.written || row_number(digits) == Ok(self.row);
        if letters.is_empty() || letters.len() > 3 || !here {
            return Err(wrong());
        }
        let value = |letter: u8| u32::from(letter.to_ascii_uppercase() - b'A') + 1;
        Ok(letters.bytes().fold(0, |column, letter| column * 26 + value(letter)) - 1)
    }

    /// What stands between elements.
    fn take(&mut self, event: &Event<'_>) -> Result<(), String> {
        // What is longer than a row may be spoils the row when the cell ends.
        if self.passed > 0 || self.cell.value.len() > LONGEST_LINE {
            return Ok(());
        }
        match self.inside {
            // Beside a text of its own a cell's value says nothing.
            Inside::Value if self.cell.kind != Kind::OwnText => {
                self.cell.value.push_str(characters(event)?.as_deref().unwrap_or_default());
            }
            Inside::Text => self.rich.take(event, &mut self.cell.value)?,
            _ => {}
        }
        Ok(())
    }

    /// An element ends.
    fn end(&mut self, texts: &Texts, row: &mut SheetRow) -> Result<Step, String> {
        if self.passed > 0 {
            self.passed -= 1;
            return Ok(Step::More);
        }
        self.inside = match self.inside {
            Inside::Cell => {
                self.end_cell(texts, row)?;
                Inside::Row
            }
            Inside::Value | Inside::Formula => Inside::Cell,
            Inside::Text if self.rich_depth > 0 => {
                self.rich_depth -= 1;
                self.rich.end(&mut self.cell.value);
                Inside::Text
            }
            Inside::Text => Inside::Cell,
            Inside::Row => {
                self.inside = Inside::Rows;
                return Ok(Step::Row);
            }
            Inside::Rows => Inside::Worksheet,
            Inside::Worksheet | Inside::Part | Inside::After => Inside::After,
        };
        Ok(Step::More)
    }

    /// Adds the cell to the row, unless it is empty.
    fn end_cell(&mut self, texts: &Texts, row: &mut SheetRow) -> Result<(), String> {
        if row.too_long {
            return Ok(());
        }
        let column = self.cell.column as usize;
        let before = row.raw.len();
        let last = row.cells.last().map_or(0, |cell| cell.column);
        (last..column).for_each(|_| row.raw.push('\t'));
        let from = row.raw.len();
        let number = self.cell.add_text(texts, &mut row.raw)?;
        row.add(column, from, number);
        if row.raw.len() == from {
            row.raw.truncate(before);
        }
        if row.raw.len() > LONGEST_LINE {
            row.too_long = true;
            row.cells.clear();
            row.raw.clear();
        }
        Ok(())
    }
}

impl Open {
    /// Adds the cell's text to `text`; whether it is a number.
    fn add_text(&mut self, texts: &Texts, text: &mut String) -> Result<bool, String> {
        let value = self.value.as_str();
        let nothing = value.trim_ascii().is_empty();
        // An empty value of a formula was calculated only if it says that it is a text.
        let is_text = matches!(self.kind, Kind::Written | Kind::OwnText);
        if self.formula && (!self.valued || nothing && !is_text) {
            text.push_str(NOT_CALCULATED);
        }
        if nothing {
            return Ok(false);
        }
        match self.kind {
            Kind::Number if add_number(value, text) => return Ok(true),
            Kind::Number | Kind::OwnText | Kind::Error => text.push_str(value),
            Kind::Written => {
                let from = text.len();
                text.push_str(value);
                unescape(text, from);
            }
            Kind::Truth => text.push_str(truth(value)),
            Kind::SharedText => {
                let shared = value.trim().parse().ok().and_then(|index| texts.get(index));
                text.push_str(shared.ok_or_else(|| format!("there is no shared text \"{}\"", excerpt(value)))?);
            }
        }
        Ok(false)
    }
}

/// A truth value as it is shown; what is none stays as it is written.
fn truth(value: &str) -> &str {
    match value.trim() {
        "1" | "true" => "TRUE",
        "0" | "false" => "FALSE",
        other => other,
    }
}

fn kind_of(word: &str) -> Result<Kind, String> {
    Ok(match word {
        "n" => Kind::Number,
        "s" => Kind::SharedText,
        "inlineStr" => Kind::OwnText,
        "str" | "d" => Kind::Written,
        "b" => Kind::Truth,
        "e" => Kind::Error,
        other => return Err(format!("a cell is of the unknown kind \"{}\"", excerpt(other))),
    })
}

fn row_number(digits: &str) -> Result<u64, String> {
    let number = Some(digits).filter(|digits| digits.bytes().all(|byte| byte.is_ascii_digit()));
    let number = number.and_then(|digits| digits.parse().ok()).filter(|number| (1..=MOST_ROWS).contains(number));
    number.ok_or_else(|| format!("\"{}\" is no row's number", excerpt(digits)))
}

/// A column's letters, from its number, from 0.
pub fn letters(column: usize) -> String {
    let mut letters = Vec::new();
    let mut rest = column + 1;
    while rest > 0 {
        rest -= 1;
        letters.push(b'A' + (rest % 26) as u8);
        rest /= 26;
    }
    letters.iter().rev().map(|&letter| char::from(letter)).collect()
}

#[cfg(test)]
mod tests {
    use super::letters;

    #[test]
    fn columns_have_their_letters() {
        for (column, name) in [(0, "A"), (25, "Z"), (26, "AA"), (701, "ZZ"), (702, "AAA"), (16_383, "XFD")] {
            assert_eq!(letters(column), name);
        }
    }
}
