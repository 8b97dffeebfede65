//! Checks of an analysis: what its assumptions rest on, and on whom its results hang.
//!
//! Invariants: checks say what is there and judge nothing; they come from the same strata as the analysis, so that they
//! cannot speak of another; subjects, cells and groups are those of the design, by index.

mod influence;
mod missing;
mod residuals;

pub use influence::{Influence, Without};
pub use missing::{Missing, Pattern, Thin, missing, thin_cells};
pub use residuals::{Residual, SubjectEffect, normal_quantiles};

use crate::Settings;
use crate::anova::{Strata, Table};
use crate::design::Design;

/// The checks of an analysis of variance.
#[derive(Debug, Clone, PartialEq)]
pub struct Checks {
    /// One for each reading used: by subject, then by cell. Empty for a single cell, of which nothing is left.
    pub residuals: Vec<Residual>,
    /// One for each subject used.
    pub subjects: Vec<SubjectEffect>,
    /// One for each effect, in the order of the analysis.
    pub influence: Vec<Influence>,
    /// Of all subjects of the design: which levels of the first within factor they have; `None` without one.
    pub missing: Option<Missing>,
    /// The cells with fewer than two complete subjects.
    pub thin: Vec<Thin>,
}

/// The checks of [`factorial`](crate::anova::factorial) on the same design and settings.
#[must_use]
pub fn checks(design: &Design, settings: &Settings) -> Checks {
    let table = Table::of(design);
    let strata = Strata::of(&table);
    Checks {
        residuals: residuals::residuals(&table, &strata),
        subjects: residuals::subjects(&table, &strata),
        influence: influence::influence(&table, &strata, settings),
        missing: missing(design, 0),
        thin: thin_cells(design),
    }
}
