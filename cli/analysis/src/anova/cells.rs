//! What stands at each level: means with their own spread, and means with the within-subject spread.
//!
//! Invariant: a standard error exists from two subjects on, and an interval exactly where a standard error does.

use super::decomposition::Split;
use crate::design::{OneWithin, Table};
use crate::distributions::StudentT;
use crate::moments::{Moments, Sum};
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

pub(super) fn cells(table: &Table, confidence: Confidence) -> Vec<Cell> {
    let multiplier = multiplier(table.subjects(), confidence);
    (0..table.levels()).map(|level| cell(&table.level(level).collect::<Vec<_>>(), multiplier)).collect()
}

fn cell(readings: &[f64], multiplier: Option<f64>) -> Cell {
    let own = Moments::of_readings(readings);
    let mean = (own.n > 0).then_some(own.mean);
    Cell { n: own.n, mean, sd: own.sd(), se: own.se(), ci: interval(mean, own.se(), multiplier) }
}

/// The band of a profile plot that shows the changes within subjects: the means of the levels with standard errors and
/// intervals from which what tells subjects apart has been taken out. One for each level, over complete subjects.
///
/// Each reading is normalised, z_ij = y_ij − ȳ_i· + ȳ (Cousineau 2005, *Tutorials in Quantitative Methods for
/// Psychology* 1:42), and SE_j = √(k / (k − 1)) SD_j(z) / √n, the factor undoing the shrinkage that normalising causes
/// (Morey 2008, *ibid.* 4:61); the interval is mean ± t(n − 1) SE. In the readings' unit.
#[must_use]
pub fn within_subject_band(design: &OneWithin, confidence: Confidence) -> Vec<Band> {
    let table = design.complete_table();
    let multiplier = multiplier(table.subjects(), confidence);
    let errors = within_errors(&table);
    let band = |(level, se): (usize, Option<f64>)| {
        let mean = level_mean(&table, level);
        Band { n: table.subjects(), mean, se, ci: interval(mean, se, multiplier) }
    };
    errors.into_iter().enumerate().map(band).collect()
}

fn level_mean(table: &Table, level: usize) -> Option<f64> {
    (table.subjects() > 0).then(|| Sum::of(table.level(level)).over(table.subjects()).value())
}

/// A normalised reading deviates from its level's mean by exactly the residual, so the residuals serve.
fn within_errors(table: &Table) -> Vec<Option<f64>> {
    let (n, k) = (table.subjects() as f64, table.levels() as f64);
    let Some(split) = Split::of(table).filter(|_| n > 1.0 && k > 1.0) else {
        return vec![None; table.levels()];
    };
    let mut squares = vec![Sum::default(); table.levels()];
    for row in split.residuals.chunks_exact(table.levels()) {
        squares.iter_mut().zip(row).for_each(|(sum, e)| sum.add(e * e));
    }
    squares.into_iter().map(|ss| Some((k / (k - 1.0) * ss.value() / (n - 1.0) / n).sqrt())).collect()
}

fn multiplier(subjects: usize, confidence: Confidence) -> Option<f64> {
    StudentT::new(subjects.checked_sub(1)? as f64).ok()?.critical(confidence.level())
}

fn interval(mean: Option<f64>, se: Option<f64>, multiplier: Option<f64>) -> Option<Interval> {
    Some(Interval::around(mean?, multiplier? * se?))
}
