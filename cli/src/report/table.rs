//! Tables for people.
//!
//! Invariants: a table fits the width given, however long its cells; what exports said is cleaned first.

use comfy_table::{
    CellAlignment, ColumnConstraint, ContentArrangement, ContentLineStyle, LineStyle, TableStyle, Width,
};

use super::text::clean;

/// Where a column's cells stand.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Align {
    /// Texts.
    Left,
    /// Texts that must not be broken: codes and dates.
    Whole,
    /// Numbers, which must not be broken either.
    Right,
}
pub use Align::{Left, Right, Whole};

const STYLE: TableStyle = TableStyle::new()
    .header_lines(ContentLineStyle::new(' ', ' ', ' '))
    .header_separator(LineStyle::new('─', '─', '─', '─'))
    .content_lines(ContentLineStyle::new(' ', ' ', ' '));

/// A longer word may be broken.
const LONGEST_WORD: usize = 20;

/// A table in the making.
#[derive(Debug, Clone)]
pub struct Table {
    columns: Vec<(String, Align)>,
    rows: Vec<Vec<String>>,
}

impl Table {
    /// A table with these columns and no rows.
    pub fn new(columns: &[(&str, Align)]) -> Self {
        Self { columns: columns.iter().map(|(name, align)| ((*name).to_owned(), *align)).collect(), rows: vec![] }
    }

    /// Adds a row.
    pub fn row(&mut self, cells: impl IntoIterator<Item = String>) {
        self.rows.push(cells.into_iter().map(|cell| clean(&cell)).collect());
    }

    /// Whether it has no rows.
    pub fn is_empty(&self) -> bool {
        self.rows.is_empty()
    }

    /// The table as text, without a line end. Numbers, codes and dates are broken only where nothing else helps.
    pub fn render(&self, width: usize) -> String {
        let fits = |text: &String| text.lines().all(|line| line.chars().count() <= width);
        let wide = self.lay_out(width, true, 1);
        let narrow = Some(wide).filter(fits).or_else(|| Some(self.lay_out(width, true, 0)).filter(fits));
        narrow.unwrap_or_else(|| self.lay_out(width, false, 0))
    }

    fn lay_out(&self, width: usize, whole: bool, padding: u16) -> String {
        let mut table = comfy_table::Table::new();
        table.load_style(STYLE).set_content_arrangement(ContentArrangement::Dynamic);
        // One more: the blank before the first column is taken away again.
        table.set_width(u16::try_from(width + 1).unwrap_or(u16::MAX));
        table.set_header(self.columns.iter().map(|(name, _)| name));
        table.add_rows(self.rows.iter());
        for ((_, align), column) in self.columns.iter().zip(table.column_iter_mut()) {
            column.set_padding((0, padding));
            column.set_cell_alignment(if *align == Right { CellAlignment::Right } else { CellAlignment::Left });
            if whole && *align != Left {
                column.set_constraint(ColumnConstraint::ContentWidth);
            }
        }
        if whole {
            self.keep_words(&mut table, padding);
        }
        let lines: Vec<String> = table.lines().map(|line| inner(&line).to_owned()).collect();
        lines.join("\n")
    }
}

impl Table {
    /// Gives every column of texts room for its longest word, as long as that is no path or the like.
    fn keep_words(&self, table: &mut comfy_table::Table, padding: u16) {
        for (at, ((name, align), column)) in self.columns.iter().zip(table.column_iter_mut()).enumerate() {
            if *align == Left {
                let words = self.rows.iter().filter_map(|row| row.get(at)).flat_map(|cell| cell.split(' '));
                let lengths = words.chain([name.as_str()]).map(|word| word.chars().count());
                let longest = lengths.filter(|length| *length <= LONGEST_WORD).max().unwrap_or(0);
                let width = u16::try_from(longest).unwrap_or(0) + padding;
                column.set_constraint(ColumnConstraint::LowerBoundary(Width::Fixed(width)));
            }
        }
    }
}

/// A line without the blank at its beginning and those at its end.
fn inner(line: &str) -> &str {
    let mut chars = line.chars();
    chars.next();
    chars.as_str().trim_end()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_table_fits_whatever_its_cells() {
        let mut table = Table::new(&[("hold", Right), ("export", Left), ("row", Left)]);
        table.row(["1".to_owned(), "exports/dyn-2/".repeat(9), "word ".repeat(50)]);
        table.row(["22222".to_owned(), "é漢字".repeat(40), "\u{1b}[31m".to_owned()]);
        for width in [40, 80, 120] {
            let text = table.render(width);
            let widest = text.lines().map(|line| line.chars().map(columns).sum::<usize>()).max();
            assert!(widest.is_some_and(|widest| widest <= width), "{width}:\n{text}");
            assert!(!text.contains('\u{1b}'));
        }
    }

    fn columns(c: char) -> usize {
        if ('\u{2e80}'..='\u{a4cf}').contains(&c) { 2 } else { 1 }
    }
}
