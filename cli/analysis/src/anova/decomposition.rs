//! The decomposition of the total variation into effect, subject and residual.
//!
//! Invariants: deviations are taken from means held in two doubles and only then squared; a line keeps what the
//! doubles hold even where that may be their own rounding, which only the tests have to judge.

use super::Table;
use crate::moments::{Sum, Twofold, rounding};

/// One line of the decomposition.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Line {
    /// Sum of squares, in the square of the readings' unit.
    pub ss: f64,
    /// Degrees of freedom; whole here, fractional once corrected.
    pub df: f64,
    /// `ss` / `df`; `None` where `df` is 0.
    pub ms: Option<f64>,
}

impl Line {
    pub(super) fn new(ss: f64, df: f64) -> Self {
        Self { ss, df, ms: (df > 0.0).then(|| ss / df) }
    }
}

/// total = effect + subject + residual, for sums of squares and degrees of freedom alike.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Decomposition {
    /// Between the levels of the factor: k − 1 degrees of freedom.
    pub effect: Line,
    /// Between subjects: n − 1.
    pub subject: Line,
    /// What neither accounts for: (n − 1)(k − 1).
    pub residual: Line,
    /// All of it: n k − 1.
    pub total: Line,
}

/// A decomposition with what it was made from, as far as further steps need it.
pub(super) struct Split {
    pub subjects: usize,
    pub levels: usize,
    pub decomposition: Decomposition,
    /// y_ij − ȳ_i· − ȳ_·j + ȳ, row by row.
    pub residuals: Vec<f64>,
    /// What rounding can have put into any of the sums of squares.
    pub rounding: f64,
}

impl Split {
    /// `None` for a table without rows.
    pub fn of(table: &Table) -> Option<Self> {
        let (subjects, levels) = (table.subjects(), table.levels());
        if subjects == 0 {
            return None;
        }
        let means = Means::of(table);
        let residuals = means.residuals(table);
        let rounding = rounding(table.values().iter().copied());
        let decomposition = means.decomposition(table, &residuals, rounding);
        Some(Self { subjects, levels, decomposition, residuals, rounding })
    }
}

/// The means that the deviations are taken from.
struct Means {
    grand: Twofold,
    of_subject: Vec<Twofold>,
    of_level: Vec<Twofold>,
}

impl Means {
    fn of(table: &Table) -> Self {
        let mut by_level = vec![Sum::default(); table.levels()];
        for row in table.rows() {
            by_level.iter_mut().zip(row).for_each(|(sum, &y)| sum.add(y));
        }
        Self {
            grand: Sum::of(table.values().iter().copied()).over(table.values().len()),
            of_subject: table.rows().map(|row| Sum::of(row.iter().copied()).over(row.len())).collect(),
            of_level: by_level.into_iter().map(|sum| sum.over(table.subjects())).collect(),
        }
    }

    fn residuals(&self, table: &Table) -> Vec<f64> {
        let level_effects: Vec<Twofold> = self.of_level.iter().map(|mean| mean.minus(self.grand)).collect();
        let mut residuals = Vec::with_capacity(table.values().len());
        for (row, subject) in table.rows().zip(&self.of_subject) {
            residuals.extend(row.iter().zip(&level_effects).map(|(&y, &level)| subject.below(y).minus(level).value()));
        }
        residuals
    }

    fn decomposition(&self, table: &Table, residuals: &[f64], rounding: f64) -> Decomposition {
        let (n, k) = (table.subjects(), table.levels());
        let from_grand = |means: &[Twofold]| squares(means.iter().map(|mean| mean.minus(self.grand).value()));
        let total = squares(table.values().iter().map(|&y| self.grand.below(y).value()));
        // Means in two doubles are off by ε² in their turn, so what is smaller still is nothing but that.
        let arithmetic = f64::EPSILON * f64::EPSILON * rounding;
        let line = |ss, df: usize| Line::new(if ss <= arithmetic { 0.0 } else { ss }, df as f64);
        Decomposition {
            effect: line(n as f64 * from_grand(&self.of_level), k - 1),
            subject: line(k as f64 * from_grand(&self.of_subject), n - 1),
            residual: line(squares(residuals.iter().copied()), (n - 1) * (k - 1)),
            total: line(total, n * k - 1),
        }
    }
}

fn squares(deviations: impl Iterator<Item = f64>) -> f64 {
    Sum::of(deviations.map(|d| d * d)).value()
}
