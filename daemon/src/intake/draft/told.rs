//! What was found in the samples, told column by column for machines.
//!
//! Invariant: it says what the drafted lines say, or less; what a line leaves open is `None` here.

use revisant_schema::plan::{Encoding, Format};

use super::grid::{self, Grid, Layout};
use super::{Sample, numbers};
use crate::intake::read::{self, Row};

/// What was found about the samples as a whole.
#[derive(Debug, Clone, PartialEq, Eq, serde::Serialize)]
pub struct Told {
    /// As the plan names it.
    pub format: &'static str,
    /// Of text; a WHATWG label.
    pub encoding: Option<String>,
    /// Of delimited text.
    pub delimiter: Option<String>,
    /// Of delimited text.
    pub quote: Option<&'static str>,
    /// Of tables with a header: its first line in the first sample, from 1.
    pub header_row: Option<u64>,
    /// Whether a row of units stands under the header.
    pub units_row: bool,
    /// The decimal mark; `None` while it may be either.
    pub decimal: Option<char>,
    /// How moments are written; `None` while that may be one of several.
    pub stamp: Option<String>,
    /// Every column, in the order of the first sample.
    pub columns: Vec<ToldColumn>,
}

/// One column.
#[derive(Debug, Clone, PartialEq, Eq, serde::Serialize)]
pub struct ToldColumn {
    /// Its label, or its path inside a row.
    pub name: String,
    /// What it is taken for: `subject`, `taken_at`, `visit`, `replicate`, `operator`, the code of a measure, `value`,
    /// or by what stands in it `number`, `text` or `empty`.
    pub looks_like: String,
    /// The first text that is not empty.
    pub example: String,
}

/// What the questions came to, as far as it is told here.
pub struct Answers<'a> {
    /// What is known of a column, by its place.
    pub taken_for: &'a dyn Fn(usize) -> Option<String>,
    /// The decimal mark, where it is settled.
    pub decimal: Option<char>,
    /// How moments are written, where it is settled.
    pub stamp: Option<String>,
}

/// Tells what was found.
pub fn tell(samples: &[Sample], layout: &Layout, grid: &Grid, answers: Answers<'_>) -> Told {
    let first = grid.samples.first().and_then(|at| samples.get(*at));
    let is_table =
        matches!(layout.format, Format::Delimited { .. } | Format::FixedWidth { .. } | Format::Workbook { .. });
    let delimiter = match layout.format {
        Format::Delimited { delimiter } => delimiter.map(|byte| char::from(byte).to_string()),
        _ => None,
    };
    Told {
        format: layout.format.name(),
        encoding: first.and_then(|sample| encoding(layout, sample)),
        quote: matches!(layout.format, Format::Delimited { .. }).then_some("\""),
        delimiter,
        header_row: first.filter(|_| is_table).and_then(|sample| header_row(layout, grid, sample)),
        units_row: layout.units_row,
        decimal: answers.decimal,
        stamp: answers.stamp,
        columns: (0..grid.columns.len()).filter_map(|at| column(grid, at, answers.taken_for)).collect(),
    }
}

fn encoding(layout: &Layout, sample: &Sample) -> Option<String> {
    let found = match (&layout.format, layout.encoding) {
        (Format::Workbook { .. }, _) => return None,
        (_, Encoding::Label(label)) => label,
        (_, Encoding::Auto) => {
            encoding_rs::Encoding::for_bom(&sample.bytes).map_or(encoding_rs::UTF_8, |(found, _)| found)
        }
    };
    Some(found.name().to_lowercase())
}

fn header_row(layout: &Layout, grid: &Grid, sample: &Sample) -> Option<u64> {
    if layout.header == revisant_schema::plan::Header::None {
        return None;
    }
    let reader = grid::trial_reader(layout, &grid.columns);
    let mut rows = read::open(&reader, &sample.bytes).ok()?;
    // The lines above the header are counted when the first row has been handed out.
    rows.next_row(&mut Row::default()).ok()?;
    Some(rows.counts().preamble + 1)
}

fn column(grid: &Grid, at: usize, taken_for: &dyn Fn(usize) -> Option<String>) -> Option<ToldColumn> {
    let example = grid.texts(at).find(|text| !text.is_empty()).unwrap_or_default().to_owned();
    let by_content = || match example.as_str() {
        "" => "empty",
        text if grid.is_number(at) || numbers::is_like_a_number(text) => "number",
        _ => "text",
    };
    let looks_like = taken_for(at).unwrap_or_else(|| by_content().to_owned());
    Some(ToldColumn { name: grid.columns.get(at)?.clone(), looks_like, example })
}
