//! Fixed-width text: columns by the position of characters.
//!
//! Invariants: a position counts characters as Unicode scalar values, so a combining mark counts as one and a wide
//! character does too; no text is cut silently, so a row in which it cannot be told to which column a text belongs
//! is held; every physical line is counted once, whatever the bytes are.

use std::ops::Range;

use memchr::memchr;
use revisant_schema::plan::{FixedColumn, Header, Reader};

use super::heading::{self, Above, Preamble, find_columns};
use super::sieve::{Parts, Sieve, Taken};
use super::text::{Line, Lines, readable};
use super::{Bytes, FileFault, LineCounts, Row, RowFault, Rows, Span, wanted};

/// The rows of a fixed-width export.
pub struct FixedWidth<'a> {
    sieve: Sieve<'a>,
    preamble: Preamble,
    table: Table,
    ruler: Ruler,
}

/// What is known of the table before its first row.
struct Table {
    layout: Layout,
    /// The header's lines, as a repeated header has them.
    header: Vec<String>,
    units: Option<Units>,
}

/// The row of units.
#[derive(Default)]
struct Units {
    /// As a repeated one reads.
    line: String,
    /// By slot.
    texts: Vec<String>,
}

/// A column by its characters: the first, from 0, and the one after its last.
#[derive(Debug, PartialEq, Eq)]
struct Column {
    name: String,
    from: usize,
    to: usize,
}

/// A position over which no text of a row may go, and what to say when one does.
struct Edge {
    at: usize,
    says: String,
}

/// Where columns stand, and what of it a row is held against.
struct Layout {
    /// From left to right where the header shows them, else in the order of the plan.
    columns: Vec<Column>,
    /// Where the wanted columns stand among them, by slot.
    wanted: Vec<usize>,
    edges: Vec<Edge>,
    /// Columns in which two texts mean that one of them may be a neighbour's. None where the plan gives the columns.
    single: Vec<usize>,
    /// The end of the last wanted column.
    end: usize,
}

impl<'a> FixedWidth<'a> {
    /// Finds the columns that the plan names, and stands before the first row.
    pub fn open(reader: &'a Reader, given: &[FixedColumn], bytes: &'a dyn Bytes) -> Result<Self, FileFault> {
        let mut lines = Lines::open(reader.encoding, bytes)?;
        let mut above = Above::default();
        let (header, first) = match reader.header {
            Header::None => (vec![], 0),
            _ => read_header(&mut lines, &reader.header, &mut above)?,
        };
        let layout = match (given.is_empty(), reader.header == Header::None) {
            (true, true) => return Err(FileFault::Layout(NO_COLUMNS.to_owned())),
            (true, false) => Layout::shown(&wanted(reader), &header, first)?,
            (false, _) => Layout::given(&wanted(reader), given)?,
        };
        if reader.header == Header::None {
            lines.settled_from(0)?;
        }
        let mut opened = Self {
            sieve: Sieve::new(reader, lines, &layout.wanted),
            preamble: Preamble::new(&above, b'\t'),
            table: Table { layout, header, units: None },
            ruler: Ruler::default(),
        };
        opened.sieve.counts.preamble = above.count();
        opened.sieve.counts.header = opened.sieve.lines.count() - above.count();
        if reader.units_row {
            opened.read_units()?;
        }
        Ok(opened)
    }

    fn read_units(&mut self) -> Result<(), FileFault> {
        let Some(line) = self.sieve.lines.advance()? else {
            self.table.units = Some(Units::default());
            return Ok(());
        };
        let text = heading_line(&self.sieve.lines, &line)?;
        let cut = self.ruler.lay(&text, &self.table);
        if let Some(fault) = cut.fault() {
            return Err(FileFault::Layout(format!("the row of units on line {}: {fault}", line.number)));
        }
        let texts = self.table.layout.wanted.iter().map(|column| cut.cell(*column).to_owned()).collect();
        self.table.units = Some(Units { line: text, texts });
        self.sieve.counts.units = 1;
        Ok(())
    }

    /// Reads the row of the line `first` into `row`; `false` when it is not one to be handed out.
    fn read_row(&mut self, first: &Line, row: &mut Row) -> bool {
        let (start, end) = readable(&row.raw, first.ending);
        let Row { raw, cells, fault, .. } = row;
        let cut = self.ruler.lay(trimmed(&raw[start..end]), &self.table);
        if self.sieve.sift(&raw[start..end], 1, &cut) {
            return false;
        }
        *fault = cut.fault().map(RowFault::Unreadable);
        if fault.is_none() {
            for &column in &self.table.layout.wanted {
                let place = cut.place(column);
                cells.push(Span { from: start + place.start, to: start + place.end, own: false });
            }
            *fault = self.sieve.unfinished(first);
        }
        true
    }
}

const NO_COLUMNS: &str = "without a header nothing shows where columns begin; the plan's reader must give \"columns\"";
/// What a plan can do where a row leaves it open where a column ends.
const REMEDY: &str = "the plan's reader can say with \"columns\" where each begins and ends";

impl Rows for FixedWidth<'_> {
    fn preamble(&self, key: &str) -> Option<&str> {
        self.preamble.get(key)
    }

    fn unit(&self, slot: usize) -> Option<&str> {
        let units = self.table.units.as_ref()?;
        Some(units.texts.get(slot).map_or("", String::as_str))
    }

    fn next_row(&mut self, row: &mut Row) -> Result<bool, FileFault> {
        loop {
            match self.sieve.take(row)? {
                Taken::End => return Ok(false),
                Taken::Spoiled => return Ok(true),
                Taken::Line(first) if self.read_row(&first, row) => return Ok(true),
                Taken::Line(_) => {}
            }
        }
    }

    fn counts(&self) -> LineCounts {
        self.sieve.counts
    }

    fn lines(&self) -> u64 {
        self.sieve.lines.count()
    }
}

/// The header's lines, and the number of the first one.
fn read_header(lines: &mut Lines, header: &Header, above: &mut Above) -> Result<(Vec<String>, u64), FileFault> {
    let first = heading::seek(lines, header, above)?;
    let count = if let Header::Row { lines, .. } = header { (*lines).max(1) } else { 1 };
    let mut line = first;
    let mut texts = vec![heading_line(lines, &line)?];
    for _ in 1..count {
        line = heading::following(lines, &line, count)?;
        texts.push(heading_line(lines, &line)?);
    }
    Ok((texts, first.number))
}

/// A line that stands above the rows.
fn heading_line(lines: &Lines, line: &Line) -> Result<String, FileFault> {
    let mut text = String::new();
    heading::decode(lines, line, &mut text)?;
    let (start, end) = readable(&text, line.ending);
    Ok(trimmed(&text[start..end]).to_owned())
}

impl Layout {
    /// As the header's labels show.
    fn shown(names: &[String], header: &[String], line: u64) -> Result<Self, FileFault> {
        if header.iter().any(|text| text.contains('\t')) {
            let what = "a tab stands in it, so it does not show where columns begin";
            return Err(FileFault::Layout(format!("the header on line {line}: {what}; {REMEDY}")));
        }
        let columns = shown_columns(header);
        let labels: Vec<String> = columns.iter().map(|column| column.name.clone()).collect();
        let wanted = find_columns(names, &labels, line)?;
        let is_wanted = |column: usize| wanted.contains(&column);
        let edges = (1..columns.len()).filter(|&right| is_wanted(right - 1) || is_wanted(right));
        let edges = edges.map(|right| Edge::between(&columns[right - 1], &columns[right])).collect();
        let single = (0..columns.len()).filter(|&column| is_wanted(column) || is_wanted(column + 1)).collect();
        Ok(Self::new(columns, wanted, edges, single))
    }

    /// As the plan gives them.
    fn given(names: &[String], given: &[FixedColumn]) -> Result<Self, FileFault> {
        let column = |it: &FixedColumn| Column { name: it.name.clone(), from: it.from.saturating_sub(1), to: it.to };
        let columns: Vec<Column> = given.iter().map(column).collect();
        let place = |name: &String| {
            let place = columns.iter().position(|column| column.name == *name);
            place.ok_or_else(|| FileFault::Layout(format!("the plan's \"columns\" have no \"{name}\"")))
        };
        let wanted = names.iter().map(place).collect::<Result<Vec<_>, _>>()?;
        let mut edges = Vec::new();
        for column in wanted.iter().map(|&column| &columns[column]) {
            // Where one given column ends and another begins, the plan itself says where to cut.
            if column.from > 0 && columns.iter().all(|other| other.to != column.from) {
                edges.push(Edge { at: column.from, says: column.goes_over("beginning", column.from + 1) });
            }
            if columns.iter().all(|other| other.from != column.to) {
                edges.push(Edge { at: column.to, says: column.goes_over("end", column.to) });
            }
        }
        Ok(Self::new(columns, wanted, edges, vec![]))
    }

    fn new(columns: Vec<Column>, wanted: Vec<usize>, edges: Vec<Edge>, single: Vec<usize>) -> Self {
        let end = wanted.iter().map(|&column| columns[column].to).max().unwrap_or_default();
        Self { columns, wanted, edges, single, end }
    }
}

impl Column {
    fn goes_over(&self, what: &str, character: usize) -> String {
        format!(
            "a text goes over the {what} of the column \"{}\" (character {character}) without a blank, so a part of it \
             would be lost; the plan's \"columns\" say where it stands",
            self.name
        )
    }
}

impl Edge {
    fn between(left: &Column, right: &Column) -> Self {
        let at = right.from;
        let says = format!(
            "a text goes on from the column \"{}\" into the column \"{}\" (character {}) without a blank, so it cannot \
             be told where to cut; {REMEDY}",
            left.name,
            right.name,
            at + 1
        );
        Self { at, says }
    }
}

/// The columns that a header shows. A column begins where a label of any line begins that no earlier label of another
/// line reaches beyond; what stands left of the first belongs to it, since it can be nobody else's.
fn shown_columns(header: &[String]) -> Vec<Column> {
    let lines: Vec<Vec<Label>> = header.iter().map(|text| labels(text)).collect();
    let mut all: Vec<&Label> = lines.iter().flatten().collect();
    all.sort_by_key(|label| label.from);
    let mut columns: Vec<Column> = Vec::new();
    let mut reach = 0;
    for label in all {
        if columns.is_empty() || label.from >= reach {
            if let Some(last) = columns.last_mut() {
                last.to = label.from;
            }
            let from = if columns.is_empty() { 0 } else { label.from };
            columns.push(Column { name: String::new(), from, to: usize::MAX });
        }
        reach = reach.max(label.to);
    }
    for label in lines.iter().flatten() {
        let column = columns.iter_mut().rfind(|column| column.from <= label.from);
        if let Some(column) = column {
            let gap = if column.name.is_empty() { "" } else { " " };
            column.name.extend([gap, label.text]);
        }
    }
    columns
}

/// A label, by its characters.
struct Label<'t> {
    text: &'t str,
    from: usize,
    to: usize,
}

/// The texts of a line that are parted by two or more blanks.
fn labels(line: &str) -> Vec<Label<'_>> {
    let mut found: Vec<Label> = Vec::new();
    let mut begun: Option<(usize, usize)> = None;
    let mut end = (0, 0);
    for (position, (byte, character)) in line.char_indices().enumerate() {
        if is_blank(character) {
            continue;
        }
        match begun {
            Some((from, start)) if position - end.0 >= 2 => {
                found.push(Label { text: &line[start..end.1], from, to: end.0 });
                begun = Some((position, byte));
            }
            Some(_) => {}
            None => begun = Some((position, byte)),
        }
        end = (position + 1, byte + character.len_utf8());
    }
    if let Some((from, start)) = begun {
        found.push(Label { text: &line[start..end.1], from, to: end.0 });
    }
    found
}

/// From characters to bytes of a line. Reused from line to line.
#[derive(Debug, Default)]
struct Ruler {
    /// Where each character begins; empty where each is one byte.
    starts: Vec<usize>,
}

impl Ruler {
    /// Lays it along a line, which is then cut into the table's columns.
    fn lay<'r>(&'r mut self, text: &'r str, table: &'r Table) -> CutLine<'r> {
        self.starts.clear();
        if !text.is_ascii() {
            self.starts.extend(text.char_indices().map(|(start, _)| start));
        }
        let starts = (!text.is_ascii()).then_some(self.starts.as_slice());
        CutLine { text, starts, table }
    }
}

/// A line cut into columns.
struct CutLine<'r> {
    /// Without blanks and tabs at its end.
    text: &'r str,
    starts: Option<&'r [usize]>,
    table: &'r Table,
}

impl CutLine<'_> {
    /// The byte at which a character begins; the text's end when there is none.
    fn byte(&self, position: usize) -> usize {
        let byte = self.starts.map_or(position, |starts| starts.get(position).copied().unwrap_or(self.text.len()));
        byte.min(self.text.len())
    }

    /// A column's text, without the blanks around it.
    fn cell(&self, column: usize) -> &str {
        &self.text[self.place(column)]
    }

    /// The bytes of the line at which that stands.
    fn place(&self, column: usize) -> Range<usize> {
        let Some(column) = self.table.layout.columns.get(column) else { return 0..0 };
        let (from, to) = (self.byte(column.from), self.byte(column.to));
        let text = &self.text[from..to];
        let left = text.len() - text.trim_start_matches(is_blank).len();
        let start = from + left;
        start..start + text[left..].trim_end_matches(is_blank).len()
    }

    /// What is wrong with it as a row.
    fn fault(&self) -> Option<String> {
        let layout = &self.table.layout;
        if self.has_tab_before(layout.end) {
            return Some("a tab stands in it, so it cannot be told at which character a column begins".to_owned());
        }
        if let Some(edge) = layout.edges.iter().find(|edge| self.is_crossed(edge.at)) {
            return Some(edge.says.clone());
        }
        let doubled = layout.single.iter().find(|&&column| self.is_doubled(column))?;
        let name = layout.columns.get(*doubled).map_or("", |column| &column.name);
        let what = format!("two texts stand in the column \"{name}\", of which one may be a neighbour's; {REMEDY}");
        Some(what)
    }

    fn has_tab_before(&self, position: usize) -> bool {
        memchr(b'\t', self.text.as_bytes()).is_some_and(|tab| tab < self.byte(position))
    }

    /// Whether no blank stands on either side of a position.
    fn is_crossed(&self, position: usize) -> bool {
        let (before, after) = self.text.split_at(self.byte(position));
        let stands = |character: Option<char>| character.is_some_and(|it| !is_blank(it));
        stands(before.chars().next_back()) && stands(after.chars().next())
    }

    /// Whether two texts stand in a column.
    fn is_doubled(&self, column: usize) -> bool {
        let mut blanks = 0;
        self.cell(column).chars().any(|character| {
            blanks = if is_blank(character) { blanks + 1 } else { 0 };
            blanks == 2
        })
    }
}

impl Parts for CutLine<'_> {
    fn are_blank(&self) -> bool {
        self.text.is_empty()
    }

    fn are_header(&self) -> bool {
        self.table.header.iter().any(|line| line == self.text)
    }

    fn are_units(&self) -> bool {
        self.table.units.as_ref().is_some_and(|units| units.line == self.text)
    }

    fn known(&self, column: usize) -> Option<&str> {
        let layout = &self.table.layout;
        let Column { from, to, .. } = layout.columns.get(column)?;
        let crossed = layout.edges.iter().any(|edge| [*from, *to].contains(&edge.at) && self.is_crossed(edge.at));
        let doubled = |column: &usize| layout.single.contains(column) && self.is_doubled(*column);
        let doubtful = crossed || doubled(&column) || column.checked_sub(1).is_some_and(|left| doubled(&left));
        (!doubtful && !self.has_tab_before(*to)).then(|| self.cell(column))
    }
}

fn is_blank(character: char) -> bool {
    matches!(character, ' ' | '\u{a0}')
}

/// A line without blanks and tabs at its end, which move nothing.
fn trimmed(line: &str) -> &str {
    line.trim_end_matches(|character| is_blank(character) || character == '\t')
}
