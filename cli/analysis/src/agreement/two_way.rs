//! The two-way decomposition of complete readings, subjects by levels.
//!
//! Invariant: readings are centred before they are squared, so an offset costs no digits; and what rounding alone can have
//! made is zero.

use crate::design::OneWithin;
use crate::moments::{Sum, rounding};

/// Sums of squares of n complete subjects at k levels.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct TwoWay {
    pub subjects: usize,
    pub levels: usize,
    subject_ss: f64,
    level_ss: f64,
    error_ss: f64,
}

impl TwoWay {
    pub fn of(design: &OneWithin) -> Self {
        let rows: Vec<Vec<f64>> = design.rows().filter_map(|row| row.iter().copied().collect()).collect();
        let (subjects, levels) = (rows.len(), design.levels());
        let noise = rounding(rows.iter().flatten().copied());
        let rows = centred(rows);
        let subject_means: Vec<f64> = rows.iter().map(|row| mean(row)).collect();
        let level_means: Vec<f64> = (0..levels)
            .map(|level| mean(&rows.iter().filter_map(|row| row.get(level).copied()).collect::<Vec<_>>()))
            .collect();
        let error = rows.iter().zip(&subject_means).flat_map(|(row, subject)| {
            row.iter().zip(&level_means).map(move |(y, level)| (y - subject - level).powi(2))
        });
        let error_ss = Sum::of(error).value();
        let squares = |means: &[f64]| Sum::of(means.iter().map(|m| m * m)).value();
        let held = |ss: f64| if ss <= noise { 0.0 } else { ss };
        Self {
            subjects,
            levels,
            subject_ss: held(levels as f64 * squares(&subject_means)),
            level_ss: held(subjects as f64 * squares(&level_means)),
            error_ss: held(error_ss),
        }
    }

    /// Whether there is an error at all.
    fn testable(&self) -> bool {
        self.subjects > 1 && self.levels > 1
    }

    pub fn subject_df(&self) -> f64 {
        self.subjects as f64 - 1.0
    }

    fn level_df(&self) -> f64 {
        self.levels as f64 - 1.0
    }

    pub fn error_df(&self) -> f64 {
        self.subject_df() * self.level_df()
    }

    /// Degrees of freedom within subjects, n (k − 1).
    pub fn within_df(&self) -> f64 {
        self.subjects as f64 * self.level_df()
    }

    pub fn subject_ms(&self) -> Option<f64> {
        self.testable().then(|| self.subject_ss / self.subject_df())
    }

    pub fn level_ms(&self) -> Option<f64> {
        self.testable().then(|| self.level_ss / self.level_df())
    }

    pub fn error_ms(&self) -> Option<f64> {
        self.testable().then(|| self.error_ss / self.error_df())
    }

    pub fn within_ms(&self) -> Option<f64> {
        self.testable().then(|| (self.level_ss + self.error_ss) / self.within_df())
    }
}

/// The readings less their mean.
fn centred(mut rows: Vec<Vec<f64>>) -> Vec<Vec<f64>> {
    let count = rows.iter().map(Vec::len).sum();
    let grand = Sum::of(rows.iter().flatten().copied()).over(count);
    rows.iter_mut().flatten().for_each(|y| *y = grand.below(*y).value());
    rows
}

fn mean(values: &[f64]) -> f64 {
    Sum::of(values.iter().copied()).over(values.len()).value()
}
