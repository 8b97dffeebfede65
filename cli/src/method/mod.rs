//! From a data set to what a method finds in it, one module a method.
//!
//! Invariant: what the plan asks for is done as asked or refused in words, never left out.

mod repeated;

use revisant_analysis::design::DesignError;
use revisant_analysis::{Confidence, contrasts};
use revisant_schema::plan::{Analysis, Method, Multiplicity};

pub use repeated::Repeated;

use crate::dataset::Dataset;
use crate::error::Failure;

/// What came out.
#[derive(Debug, Clone, PartialEq)]
pub enum Outcome {
    /// Of an analysis of variance.
    RepeatedMeasures(Box<Repeated>),
}

impl Outcome {
    /// By the method that the plan names, with the checks of its model if they are wanted.
    ///
    /// # Errors
    /// As [`offered`]; or the readings make no design.
    pub fn of(analysis: &Analysis, data: &Dataset, checks: bool) -> Result<Self, Failure> {
        match analysis.method {
            Method::RepeatedMeasures => Ok(Self::RepeatedMeasures(Box::new(Repeated::of(analysis, data, checks)?))),
            Method::Friedman | Method::Agreement | Method::MixedModel => Err(not_offered(analysis)),
        }
    }
}

/// Whether this version has the method.
///
/// # Errors
/// What it has not yet, in one plain sentence.
pub fn offered(analysis: &Analysis) -> Result<(), Failure> {
    match analysis.method {
        Method::RepeatedMeasures => Ok(()),
        Method::Friedman | Method::Agreement | Method::MixedModel => Err(not_offered(analysis)),
    }
}

fn not_offered(analysis: &Analysis) -> Failure {
    let what = match analysis.method {
        Method::MixedModel => format!("{} is a mixed model", analysis.code),
        method => format!("{} is an analysis by the method {}", analysis.code, method.name()),
    };
    Failure::not_yet(format!("{what}, which comes with a later version")).at(analysis.code.clone())
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
