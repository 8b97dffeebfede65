//! What a caller chooses: confidence, contrasts and multiplicity.
//!
//! Invariants: a [`Confidence`] lies strictly between 0 and 1, so that every critical value exists; an [`Interval`]
//! never has its lower end above its upper.

use std::fmt;

use crate::contrasts::{Family, Multiplicity};

/// The confidence level of every interval of an analysis, strictly between 0 and 1.
#[derive(Debug, Clone, Copy, PartialEq, PartialOrd)]
pub struct Confidence(f64);

/// A confidence level that is not strictly between 0 and 1.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct NotAConfidence(pub f64);

impl fmt::Display for NotAConfidence {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        write!(f, "{} is no confidence level: it has to lie between 0 and 1, both excluded", self.0)
    }
}

impl std::error::Error for NotAConfidence {}

impl Confidence {
    /// # Errors
    /// [`NotAConfidence`] unless 0 < `level` < 1.
    pub fn new(level: f64) -> Result<Self, NotAConfidence> {
        if 0.0 < level && level < 1.0 { Ok(Self(level)) } else { Err(NotAConfidence(level)) }
    }

    /// The level as a proportion, such as 0.95.
    #[must_use]
    pub fn level(self) -> f64 {
        self.0
    }
}

impl Default for Confidence {
    /// 0.95.
    fn default() -> Self {
        Self(0.95)
    }
}

/// A confidence interval, in the unit of what it encloses.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Interval {
    /// The lower limit.
    pub lower: f64,
    /// The upper limit.
    pub upper: f64,
}

impl Interval {
    /// `centre` ± `half_width`; the half width is never negative.
    pub(crate) fn around(centre: f64, half_width: f64) -> Self {
        Self { lower: centre - half_width, upper: centre + half_width }
    }
}

/// Which sums of squares unequal groups have; of equal groups all are the same.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default, Hash)]
pub enum Sums {
    /// Of the unweighted means of the groups: what would be found if the groups were equal.
    #[default]
    Type3,
    /// Each effect beside all those that do not contain it; effects within subjects from the mean of all subjects.
    Type2,
}

/// What to compute beside the analysis of variance, and how.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct Settings {
    /// The level of every confidence interval.
    pub confidence: Confidence,
    /// The families of contrasts wanted, in the order in which they are to come out.
    pub contrasts: Vec<Family>,
    /// How the p values of each family are adjusted, each family by itself.
    pub multiplicity: Multiplicity,
    /// Which sums of squares unequal groups have.
    pub sums: Sums,
}
