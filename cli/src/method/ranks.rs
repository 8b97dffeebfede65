//! Analysis by ranks of one within factor.
//!
//! Invariant: ties are those of the numbers as exported, wherever the data set knows their step.

use revisant_analysis::Settings;
use revisant_analysis::anova::{Band, Cell, repeated_measures, within_subject_band};
use revisant_analysis::contrasts::Family;
use revisant_analysis::design::OneWithin;
use revisant_analysis::ranks::{Friedman, RankAnalysis, friedman};
use revisant_schema::plan::{Analysis, ContrastKind};

use super::{Repeated, confidence, multiplicity, one_within};
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
    /// What it rests on, where that is wanted.
    pub checks: Option<RankChecks>,
    settings: Settings,
}

/// The most complete subjects who are left out one by one.
const MOST_LEFT_OUT: usize = 1000;

/// What an analysis by ranks rests on: it has no residuals.
#[derive(Debug, Clone, PartialEq)]
pub struct RankChecks {
    /// The analysis of variance of the same design, with its pattern of missing readings and thin cells.
    pub design: Repeated,
    /// For each complete subject, by its place among the rows of the data set: the test without it. Of more than
    /// a thousand subjects none is left out in turn: the work grows with the square of their number, and no one of
    /// so many moves the test.
    pub without: Vec<(usize, Friedman)>,
}

impl Ranks {
    pub(super) fn of(analysis: &Analysis, data: &Dataset, wanted: bool) -> Result<Self, Failure> {
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
        let checks = wanted.then(|| RankChecks::of(analysis, data, &design)).transpose()?;
        Ok(Self { design, result, cells, checks, settings })
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

impl RankChecks {
    fn of(analysis: &Analysis, data: &Dataset, design: &OneWithin) -> Result<Self, Failure> {
        let mut repeated = Repeated::of(analysis, data, true)?;
        if let Some(checks) = &mut repeated.checks {
            // Ranks assume no normal residuals, and have an influence of their own.
            checks.residuals.clear();
            checks.subjects.clear();
            checks.influence.clear();
        }
        let rows: Vec<&[Option<f64>]> = design.rows().collect();
        let subjects = data.subjects();
        let without = |left: usize| {
            let others = rows.iter().enumerate().filter(|(at, _)| *at != left).map(|(_, row)| *row);
            let others = OneWithin::from_rows(&others.collect::<Vec<_>>()).ok()?;
            let effect = friedman(&others, data.steps.grain(), &Settings::default()).effect?;
            Some((subjects.get(left).copied()?, effect))
        };
        let complete = Some(design.complete()).filter(|all| all.len() <= MOST_LEFT_OUT);
        let without = complete.unwrap_or_default().into_iter().filter_map(without).collect();
        Ok(Self { design: repeated, without })
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
