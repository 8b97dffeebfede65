//! Analysis of variance of any number of factors, within and between subjects.
//!
//! Invariant: result, checks and bands come from one design, and its subjects are known by their place in the data set.

use revisant_analysis::anova::{Band, Factorial, factorial, within_subject_bands};
use revisant_analysis::checks::{Checks, checks};
use revisant_analysis::contrasts::Family;
use revisant_analysis::design::Design;
use revisant_analysis::{Confidence, Settings, Sums};
use revisant_schema::plan::{self, Analysis, ContrastKind};

use super::{confidence, multiplicity, unusable};
use crate::dataset::{Dataset, VISIT};
use crate::error::Failure;

/// What an analysis of variance gives.
#[derive(Debug, Clone, PartialEq)]
pub struct Repeated {
    /// The readings, by subject of the design.
    pub design: Design,
    /// By subject of the design: its place among the rows of the data set.
    pub subjects: Vec<usize>,
    /// What came out.
    pub result: Factorial,
    /// What it rests on, where that is wanted.
    pub checks: Option<Checks>,
    confidence: Confidence,
}

impl Repeated {
    pub(super) fn of(analysis: &Analysis, data: &Dataset, wanted: bool) -> Result<Self, Failure> {
        let design = data.design().map_err(unusable)?;
        let settings = settings(analysis, data)?;
        let result = factorial(&design, &settings);
        let checks = wanted.then(|| checks(&design, &settings));
        Ok(Self { subjects: data.subjects(), result, checks, confidence: settings.confidence, design })
    }

    /// For each group, by cell: the mean with its within-subject spread.
    pub fn bands(&self) -> Vec<Vec<Band>> {
        within_subject_bands(&self.design, self.confidence)
    }
}

/// As the plan asks; differences between groups are always given, at each visit where the visits are a factor.
fn settings(analysis: &Analysis, data: &Dataset) -> Result<Settings, Failure> {
    let family = |kind: &ContrastKind| match kind {
        ContrastKind::Pairwise => Family::Pairwise,
        ContrastKind::EachVsFirst => Family::EachVsFirst,
        ContrastKind::Polynomial => Family::Polynomial,
        ContrastKind::Simple => Family::Simple,
    };
    let mut contrasts: Vec<Family> = analysis.contrasts.iter().map(family).collect();
    if !data.between.is_empty() {
        contrasts.push(Family::Groups { at: data.within.iter().position(|factor| factor.code == VISIT) });
    }
    let sums = match analysis.sums {
        plan::Sums::Type3 => Sums::Type3,
        plan::Sums::Type2 => Sums::Type2,
    };
    Ok(Settings { confidence: confidence(analysis)?, contrasts, multiplicity: multiplicity(analysis), sums })
}
