//! The decomposition of the total variation into effect, subject and residual.
//!
//! Invariant: a line keeps what the doubles hold even where that may be their own rounding, which only the tests have
//! to judge.

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
    pub(crate) fn new(ss: f64, df: f64) -> Self {
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
