//! Agreement of readings of the same subject: over visits, replicates or instruments.
//!
//! Invariant: result, cells and plot come from one design, and its subjects are known by their place in the data set.

use revisant_analysis::Settings;
use revisant_analysis::agreement::{Agreement, Limits, Point, agreement, difference_against_mean};
use revisant_analysis::anova::{Cell, repeated_measures};
use revisant_analysis::design::OneWithin;
use revisant_schema::plan::Analysis;

use super::{Repeated, confidence, one_within};
use crate::dataset::Dataset;
use crate::error::Failure;

/// What an analysis of agreement gives.
#[derive(Debug, Clone, PartialEq)]
pub struct Agreeing {
    /// The readings, by subject of the design.
    pub design: OneWithin,
    /// By subject of the design: its place among the rows of the data set.
    pub subjects: Vec<usize>,
    /// What came out.
    pub result: Agreement,
    /// Of the complete subjects, by level.
    pub cells: Vec<Cell>,
    /// The two-way analysis of variance that the intraclass correlations rest on, with its checks, where they are wanted.
    pub two_way: Option<Repeated>,
}

impl Agreeing {
    pub(super) fn of(analysis: &Analysis, data: &Dataset, wanted: bool) -> Result<Self, Failure> {
        let design = one_within(data)?;
        let confidence = confidence(analysis)?;
        let result = agreement(&design, confidence);
        let cells = repeated_measures(&design, &Settings { confidence, ..Settings::default() }).cells;
        let two_way = wanted.then(|| Repeated::of(analysis, data, true)).transpose()?;
        Ok(Self { subjects: data.subjects(), result, cells, two_way, design })
    }

    /// The points of the plot of differences against means of a pair.
    pub fn points(&self, pair: &Limits) -> Vec<Point> {
        difference_against_mean(&self.design, pair.level, pair.against)
    }
}
