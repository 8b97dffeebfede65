//! From a data set to what a method finds in it, one module a method.
//!
//! Invariant: what the plan asks for is done as asked or refused in words, never left out.

mod agreement;
mod ranks;
mod repeated;

use revisant_analysis::design::{DesignError, OneWithin};
use revisant_analysis::{Confidence, contrasts};
use revisant_schema::plan::{Analysis, Method, Multiplicity};

pub use agreement::Agreeing;
pub use ranks::{RankChecks, Ranks};
pub use repeated::Repeated;

use crate::dataset::{Dataset, Row};
use crate::error::Failure;

/// What came out.
#[derive(Debug, Clone, PartialEq)]
pub enum Outcome {
    /// Of an analysis of variance.
    RepeatedMeasures(Box<Repeated>),
    /// Of an analysis by ranks.
    Ranks(Box<Ranks>),
    /// Of an analysis of agreement.
    Agreement(Box<Agreeing>),
}

impl Outcome {
    /// By the method that the plan names, with the checks of its model if they are wanted.
    ///
    /// # Errors
    /// As [`offered`]; or the readings make no design.
    pub fn of(analysis: &Analysis, data: &Dataset, checks: bool) -> Result<Self, Failure> {
        match analysis.method {
            Method::RepeatedMeasures => Ok(Self::RepeatedMeasures(Box::new(Repeated::of(analysis, data, checks)?))),
            Method::Friedman => Ok(Self::Ranks(Box::new(Ranks::of(analysis, data, checks)?))),
            Method::Agreement => Ok(Self::Agreement(Box::new(Agreeing::of(analysis, data, checks)?))),
            Method::MixedModel => Err(not_offered(analysis)),
        }
    }
}

/// Whether this version has the method.
///
/// # Errors
/// What it has not yet, in one plain sentence.
pub fn offered(analysis: &Analysis) -> Result<(), Failure> {
    match analysis.method {
        Method::RepeatedMeasures | Method::Friedman | Method::Agreement => Ok(()),
        Method::MixedModel => Err(not_offered(analysis)),
    }
}

fn not_offered(analysis: &Analysis) -> Failure {
    let what = match analysis.method {
        Method::MixedModel => format!("{} is a mixed model", analysis.code),
        method => format!("{} is an analysis by the method {}", analysis.code, method.name()),
    };
    Failure::not_yet(format!("{what}, which comes with a later version")).at(analysis.code.clone())
}

/// The readings of those who have one, for a method of one factor. Where nobody has, one subject without any, so that
/// the notes say so.
fn one_within(data: &Dataset) -> Result<OneWithin, Failure> {
    let cells = |row: &Row| row.cells.iter().map(|cell| cell.as_ref().ok().copied()).collect::<Vec<_>>();
    let mut rows: Vec<Vec<Option<f64>>> = data.rows.iter().filter(|row| row.some()).map(cells).collect();
    if rows.is_empty() {
        rows.push(vec![None; data.names.len()]);
    }
    OneWithin::from_rows(&rows).map_err(unusable)
}

fn unusable(error: DesignError) -> Failure {
    Failure::new("design", format!("these readings cannot be analysed: {error}"))
}

fn confidence(analysis: &Analysis) -> Result<Confidence, Failure> {
    Confidence::new(analysis.confidence).map_err(|error| Failure::refused(error.to_string()))
}

fn multiplicity(analysis: &Analysis) -> contrasts::Multiplicity {
    match analysis.multiplicity {
        Multiplicity::None => contrasts::Multiplicity::None,
        Multiplicity::Bonferroni => contrasts::Multiplicity::Bonferroni,
        Multiplicity::Holm => contrasts::Multiplicity::Holm,
        Multiplicity::BenjaminiHochberg => contrasts::Multiplicity::BenjaminiHochberg,
    }
}
