//! Analysis by ranks of one within factor.
//!
//! Invariant: ties are those of the numbers as exported, wherever the data set knows their step.

use revisant_analysis::Settings;
use revisant_analysis::anova::{Band, Cell, repeated_measures, within_subject_band};
use revisant_analysis::contrasts::Family;
use revisant_analysis::design::OneWithin;
use revisant_analysis::ranks::{RankAnalysis, friedman};
use revisant_schema::plan::{Analysis, ContrastKind};

use super::{confidence, multiplicity, one_within};
use crate::dataset::Dataset;
use crate::error::Failure;

/// What an analysis by ranks gives.
#[derive(Debug, Clone, PartialEq)]
pub struct Ranks {
    /// The readings, by subject of the design.
    pub design: OneWithin,
    /// What came out.
    pub result: RankAnalysis,
    /// Of the complete subjects, by level.
    pub cells: Vec<Cell>,
    settings: Settings,
}

impl Ranks {
    pub(super) fn of(analysis: &Analysis, data: &Dataset) -> Result<Self, Failure> {
        let design = one_within(data)?;
        let family = |kind: &ContrastKind| match kind {
            ContrastKind::Pairwise => Family::Pairwise,
            ContrastKind::EachVsFirst => Family::EachVsFirst,
            // These have no form by ranks, which the notes say.
            ContrastKind::Polynomial => Family::Polynomial,
            ContrastKind::Simple => Family::Simple,
        };
        let settings = Settings {
            confidence: confidence(analysis)?,
            contrasts: analysis.contrasts.iter().map(family).collect(),
            multiplicity: multiplicity(analysis),
            ..Settings::default()
        };
        let result = friedman(&design, data.steps.grain(), &settings);
        let plain = Settings { confidence: settings.confidence, ..Settings::default() };
        let cells = repeated_measures(&design, &plain).cells;
        Ok(Self { design, result, cells, settings })
    }

    /// By level: the mean with its within-subject spread.
    pub fn bands(&self) -> Vec<Band> {
        within_subject_band(&self.design, self.settings.confidence)
    }

    /// By level: the median of the complete subjects.
    pub fn medians(&self) -> Vec<Option<f64>> {
        let complete: Vec<Vec<f64>> = self.design.rows().filter_map(|row| row.iter().copied().collect()).collect();
        (0..self.design.levels())
            .map(|level| median(complete.iter().filter_map(|row| row.get(level).copied())))
            .collect()
    }
}

fn median(readings: impl Iterator<Item = f64>) -> Option<f64> {
    let mut readings: Vec<f64> = readings.collect();
    readings.sort_by(f64::total_cmp);
    let upper = *readings.get(readings.len() / 2)?;
    match readings.len() % 2 {
        0 => readings.get(readings.len() / 2 - 1).map(|lower| f64::midpoint(*lower, upper)),
        _ => Some(upper),
    }
}
