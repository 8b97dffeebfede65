//! What stands at each level: means with their own spread, and means with the within-subject spread.
//!
//! Invariant: a standard error exists from two subjects on, and an interval exactly where a standard error does.

use super::strata::{Strata, Table};
use crate::design::{Design, OneWithin};
use crate::distributions::StudentT;
use crate::moments::{Moments, squares};
use crate::{Confidence, Interval};

/// The complete subjects' readings at one level.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Cell {
    /// How many there are.
    pub n: usize,
    /// Their mean; `None` where there are none.
    pub mean: Option<f64>,
    /// Their standard deviation, over n − 1; `None` below two.
    pub sd: Option<f64>,
    /// SD / √n.
    pub se: Option<f64>,
    /// mean ± t(n − 1) SE, from this level alone.
    pub ci: Option<Interval>,
}

/// The mean of one level with its within-subject spread.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Band {
    /// How many complete subjects there are.
    pub n: usize,
    /// Their mean; `None` where there are none.
    pub mean: Option<f64>,
    /// The within-subject standard error; `None` below two subjects or two levels.
    pub se: Option<f64>,
    /// mean ± t(n − 1) SE.
    pub ci: Option<Interval>,
}

/// Each group's cells in turn, over the groups of the table.
pub(super) fn cells(table: &Table, confidence: Confidence) -> Vec<Vec<Cell>> {
    let mut groups: Vec<Vec<Cell>> = vec![Vec::with_capacity(table.columns.len()); table.counts.len()];
    let multipliers: Vec<Option<f64>> = table.counts.iter().map(|&n| multiplier(n, confidence)).collect();
    for column in &table.columns {
        for ((cells, own), &multiplier) in groups.iter_mut().zip(table.by_group(column)).zip(&multipliers) {
            cells.push(cell(own, multiplier));
        }
    }
    groups
}

fn cell(readings: &[f64], multiplier: Option<f64>) -> Cell {
    let own = Moments::of_readings(readings);
    let mean = (own.n > 0).then_some(own.mean);
    Cell { n: own.n, mean, sd: own.sd(), se: own.se(), ci: interval(mean, own.se(), multiplier) }
}

impl Cell {
    /// Where there is nobody.
    pub(super) const EMPTY: Self = Self { n: 0, mean: None, sd: None, se: None, ci: None };
}

/// The band of a profile plot that shows the changes within subjects: the means of the levels with standard errors and
/// intervals from which what tells subjects apart has been taken out. One for each level, over complete subjects.
///
/// Each reading is normalised, z_ij = y_ij − ȳ_i· + ȳ (Cousineau 2005, *Tutorials in Quantitative Methods for
/// Psychology* 1:42), and SE_j = √(k / (k − 1)) SD_j(z) / √n, the factor undoing the shrinkage that normalising causes
/// (Morey 2008, *ibid.* 4:61); the interval is mean ± t(n − 1) SE. In the readings' unit.
#[must_use]
pub fn within_subject_band(design: &OneWithin, confidence: Confidence) -> Vec<Band> {
    within_subject_bands(&Design::from(design), confidence).pop().unwrap_or_default()
}

/// The same for several groups and any within factors: for each group in the order of their numbers, a band for each
/// cell. Each group is normalised by itself, with k the number of cells (Morey 2008 has the factor for any number of
/// within cells; groups are other subjects, so nothing of one enters another's).
#[must_use]
pub fn within_subject_bands(design: &Design, confidence: Confidence) -> Vec<Vec<Band>> {
    let table = Table::of(design);
    let (cells, errors) = (cells(&table, confidence), within_errors(&table));
    let of_group = |place: &Option<usize>| match place.and_then(|at| cells.get(at).zip(errors.get(at))) {
        Some((cells, errors)) => band(cells, errors, confidence),
        None => band(&vec![Cell::EMPTY; design.width()], &vec![None; design.width()], confidence),
    };
    table.place.iter().map(of_group).collect()
}

fn band(cells: &[Cell], errors: &[Option<f64>], confidence: Confidence) -> Vec<Band> {
    let multiplier = cells.first().and_then(|cell| multiplier(cell.n, confidence));
    let band = |(cell, &se): (&Cell, &Option<f64>)| Band {
        n: cell.n,
        mean: cell.mean,
        se,
        ci: interval(cell.mean, se, multiplier),
    };
    cells.iter().zip(errors).map(band).collect()
}
/// A normalised reading deviates from its cell's mean by exactly the residual, so the residuals serve. By groups.
fn within_errors(table: &Table) -> Vec<Vec<Option<f64>>> {
    let k = table.columns.len() as f64;
    let error = |own: &[f64]| {
        let n = own.len() as f64;
        (n > 1.0 && k > 1.0).then(|| (k / (k - 1.0) * squares(own).value() / (n - 1.0) / n).sqrt())
    };
    let mut groups = vec![Vec::with_capacity(table.columns.len()); table.counts.len()];
    for column in &Strata::of(table).residuals {
        groups.iter_mut().zip(table.by_group(column)).for_each(|(errors, own)| errors.push(error(own)));
    }
    groups
}

fn multiplier(subjects: usize, confidence: Confidence) -> Option<f64> {
    StudentT::new(subjects.checked_sub(1)? as f64).ok()?.critical(confidence.level())
}

fn interval(mean: Option<f64>, se: Option<f64>, multiplier: Option<f64>) -> Option<Interval> {
    Some(Interval::around(mean?, multiplier? * se?))
}
