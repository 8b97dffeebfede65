//! Residuals against fitted values and against normal quantiles.
//!
//! Invariant: a residual is what the cell of its group and the subject leave over, so residuals of one subject, and of one
//! cell in one group, sum to zero.

use crate::anova::{Strata, Table};
use crate::distributions::Normal;

/// What the model leaves over of one reading.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Residual {
    /// The subject.
    pub subject: usize,
    /// The cell.
    pub cell: usize,
    /// The mean of the subject's group at the cell, plus what the subject is above its group, in the readings' unit.
    pub fitted: f64,
    /// reading − fitted.
    pub residual: f64,
    /// The normal quantile that belongs to the residual's rank; see [`normal_quantiles`].
    pub quantile: f64,
}

/// What one subject is above its group.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct SubjectEffect {
    /// The subject.
    pub subject: usize,
    /// The mean of its readings less the mean of its group, in the readings' unit.
    pub effect: f64,
    /// The mean of the group.
    pub fitted: f64,
    /// The normal quantile that belongs to the effect's rank.
    pub quantile: f64,
}

pub(super) fn residuals(table: &Table, strata: &Strata) -> Vec<Residual> {
    if table.columns.len() < 2 {
        return Vec::new();
    }
    let mut found = Vec::with_capacity(table.used.len() * table.columns.len());
    for (at, &subject) in table.used.iter().enumerate() {
        let cells = table.columns.iter().zip(&strata.residuals).enumerate();
        found.extend(cells.filter_map(|(cell, (readings, residuals))| {
            let (reading, residual) = (readings.get(at)?, *residuals.get(at)?);
            Some(Residual { subject, cell, fitted: reading - residual, residual, quantile: 0.0 })
        }));
    }
    let quantiles = normal_quantiles(&found.iter().map(|it| it.residual).collect::<Vec<_>>());
    found.iter_mut().zip(quantiles).for_each(|(it, quantile)| it.quantile = quantile);
    // The table has the subjects group by group.
    found.sort_by_key(|it| it.subject);
    found
}

pub(super) fn subjects(table: &Table, strata: &Strata) -> Vec<SubjectEffect> {
    let mean = |group: &usize| strata.group_means.get(*group).copied().unwrap_or(0.0);
    let quantiles = normal_quantiles(&strata.subjects);
    let each = table.used.iter().zip(&strata.subjects).zip(&table.group).zip(quantiles);
    let effect =
        |(((&subject, &effect), group), quantile)| SubjectEffect { subject, effect, fitted: mean(group), quantile };
    let mut found: Vec<SubjectEffect> = each.map(effect).collect();
    found.sort_by_key(|it| it.subject);
    found
}

/// The standard normal quantile that belongs to each value's rank i of n, at (i − 3/8) / (n + 1/4) (Blom 1958, *Statistical
/// Estimates and Transformed Beta-Variables*); equal values share their mean rank. Values are ordered as doubles.
#[must_use]
pub fn normal_quantiles(values: &[f64]) -> Vec<f64> {
    let n = values.len() as f64;
    let mut order: Vec<(usize, f64)> = values.iter().copied().enumerate().collect();
    order.sort_by(|(_, a), (_, b)| a.total_cmp(b));
    let mut quantiles = vec![0.0; values.len()];
    let mut before = 0_usize;
    for equal in order.chunk_by(|(_, a), (_, b)| a == b) {
        let rank = before as f64 + (equal.len() as f64 + 1.0) / 2.0;
        let quantile = Normal.quantile((rank - 0.375) / (n + 0.25)).unwrap_or(0.0);
        for (index, _) in equal {
            quantiles.get_mut(*index).into_iter().for_each(|it| *it = quantile);
        }
        before += equal.len();
    }
    quantiles
}
