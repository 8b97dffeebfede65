//! Workbooks: which sheet, and where its header is.

use revisant_schema::plan::{Encoding, Format, Header, Sheet};

use super::grid::Layout;
use super::place::Against;
use super::text::{self, Head};
use super::{Sample, words};
use crate::intake::read::workbook::{Glance, glance};

/// Rows of each sheet that are looked at.
const MOST_ROWS: usize = 500;

/// What the samples have in common.
pub struct Found {
    /// The layout.
    pub layout: Layout,
    /// The columns of each sample.
    pub columns: Vec<Vec<String>>,
    /// Samples that are no such workbook, and why.
    pub refused: Vec<(usize, String)>,
}

/// One sample's sheet that looks most like a table of readings.
struct Chosen {
    sample: usize,
    number: usize,
    sheets: usize,
    name: String,
    rows: Vec<Vec<String>>,
    head: Head,
}

/// Finds the sheet and the header of workbooks.
pub fn workbooks(samples: &[Sample], which: &[usize], against: Against<'_>) -> Option<Found> {
    let mut refused = vec![];
    let mut chosen: Vec<Chosen> = vec![];
    for index in which {
        let Some(sample) = samples.get(*index) else { continue };
        match glance(&sample.bytes, MOST_ROWS) {
            Err(fault) => refused.push((*index, fault.to_string())),
            Ok(sheets) => match choose(*index, sheets, against) {
                Some(it) => chosen.push(it),
                None => refused.push((*index, "no sheet of it holds a table".to_owned())),
            },
        }
    }
    let labels = commonest(chosen.iter().map(|it| &it.head.labels))?.clone();
    let alike: Vec<&Chosen> = chosen.iter().filter(|it| it.head.labels == labels).collect();
    let first = alike.first()?;
    let named = alike.iter().all(|it| it.name == first.name);
    let sheet = match (first.sheets, named) {
        (1, _) if first.number == 1 => Sheet::Number(1),
        (_, true) => Sheet::Named(first.name.clone()),
        _ => Sheet::Number(first.number),
    };
    let mut columns = vec![vec![]; samples.len()];
    for it in &chosen {
        let fits = it.head.labels.iter().any(|label| !label.is_empty() && labels.contains(label));
        match columns.get_mut(it.sample) {
            Some(place) if fits => {
                *place = text::nameable(&it.head.labels).into_iter().filter(|label| labels.contains(label)).collect();
            }
            _ => refused.push((it.sample, "its header is another one".to_owned())),
        }
    }
    let units = |it: &&Chosen| {
        let below = it.rows.get(it.head.line.map_or(0, |line| line + 1)..).unwrap_or_default();
        let first = below.first();
        first.is_some_and(|line| text::is_units_row(line, below.get(1..).unwrap_or_default()))
    };
    let units_row = alike.iter().any(&units) && alike.iter().all(|it| units(it) || it.rows.len() < 3);
    let layout = Layout {
        format: Format::Workbook { sheet },
        encoding: Encoding::Auto,
        header: header(&alike, &labels),
        units_row,
        stop_at: None,
        ignored_lines: vec![],
        preamble: vec![],
    };
    Some(Found { layout, columns, refused })
}

fn header(alike: &[&Chosen], labels: &[String]) -> Header {
    let Some(Some(first)) = alike.first().map(|it| it.head.line) else { return Header::None };
    let same = alike.iter().all(|it| it.head.line == Some(first));
    let start = labels.iter().find(|label| !label.is_empty()).cloned().unwrap_or_default();
    let before = |it: &&Chosen| {
        let above = it.rows.get(..it.head.line.unwrap_or(0)).unwrap_or_default();
        above.iter().any(|row| row.iter().find(|cell| !cell.is_empty()).is_some_and(|cell| cell.starts_with(&start)))
    };
    if (same && first == 0) || start.is_empty() || alike.iter().any(before) {
        return Header::Row { row: first as u64 + 1, lines: 1 };
    }
    Header::StartsWith(start)
}

/// The sheet that holds subjects, else the one with most rows.
fn choose(sample: usize, sheets: Vec<Glance>, against: Against<'_>) -> Option<Chosen> {
    let count = sheets.len();
    let tables = sheets.into_iter().enumerate().filter_map(|(at, sheet)| {
        let head = text::head(&sheet.rows)?;
        Some(Chosen { sample, number: at + 1, sheets: count, name: sheet.name, rows: sheet.rows, head })
    });
    let subjects = |it: &Chosen| match against.plan {
        Some(_) => it.rows.iter().filter(|row| row.iter().any(|cell| against.is_subject(cell))).count(),
        None => usize::from(it.head.labels.iter().any(|label| words::SUBJECT.names(label))),
    };
    tables.max_by_key(|it| (subjects(it), it.rows.len()))
}

/// The commonest of some lists, the first among equals.
fn commonest<'a>(lists: impl Iterator<Item = &'a Vec<String>>) -> Option<&'a Vec<String>> {
    let mut counts: Vec<(&Vec<String>, usize)> = vec![];
    for list in lists {
        match counts.iter_mut().find(|(known, _)| *known == list) {
            Some((_, count)) => *count += 1,
            None => counts.push((list, 1)),
        }
    }
    let most = counts.iter().map(|(_, count)| *count).max()?;
    counts.into_iter().find(|(_, count)| *count == most).map(|(list, _)| list)
}
