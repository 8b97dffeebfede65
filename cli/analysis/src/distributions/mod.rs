//! Distribution functions: normal, Student's *t*, *F* and chi-square, both tails and quantiles from either tail; the
//! non-central *t* and *F*, both tails, and the non-centrality that a tail belongs to; the studentized range, both tails
//! and quantiles; and the interval of an effect's size that follows from *F*.
//!
//! Invariants: each tail is computed as itself, never as one minus the other where that would cost digits, so a p value
//! keeps its relative precision (1e-10 or better) down to 1e-300; and a distribution that exists has usable parameters,
//! so its functions return `None` only for an argument outside their domain, or a result that no double can hold.
//!
//! What comes from elsewhere, and why: `ln_gamma` is that of `statrs`, which is right to the last digits where it is
//! used (below 10; above, Stirling's series is at hand anyway). The tails and quantiles of `statrs` are not used: its
//! upper tail of *F* is one minus the lower, hence 0 from 1e-16 on; its *t* is good to nine digits; and its quantiles of
//! both panic at 1e-300. `erfc` is that of `libm`, right to the last digit. The incomplete beta and gamma functions and
//! the quantiles are written here. `statrs` has neither non-central distributions nor the studentized range.

mod beta;
mod chi_square;
mod effect_size;
mod fisher;
mod gamma;
mod mixture;
mod noncentral_f;
mod noncentral_t;
mod normal;
mod quantile;
mod saddle;
mod student;
mod studentized_range;
mod trapezoid;

use std::fmt;

pub use chi_square::ChiSquare;
pub use effect_size::effect_size_interval;
pub use fisher::FisherF;
pub use noncentral_f::NonCentralF;
pub use noncentral_t::NonCentralT;
pub use normal::Normal;
pub use student::StudentT;
pub use studentized_range::StudentizedRange;

/// Degrees of freedom that are not positive, or too many to compute with.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct NotDegreesOfFreedom(pub f64);

impl fmt::Display for NotDegreesOfFreedom {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        write!(f, "{} is no number of degrees of freedom between {FEWEST} and {MOST}", self.0)
    }
}

impl std::error::Error for NotDegreesOfFreedom {}

/// What makes a distribution with several parameters none.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum ParameterError {
    /// Unusable degrees of freedom.
    DegreesOfFreedom(NotDegreesOfFreedom),
    /// A non-centrality out of the range in which this distribution is computed.
    Noncentrality {
        /// What was given.
        given: f64,
        /// The least accepted.
        least: f64,
        /// The most accepted.
        most: f64,
    },
    /// A number of means that has no range, or is too large.
    Means(usize),
}

impl fmt::Display for ParameterError {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self {
            Self::DegreesOfFreedom(error) => error.fmt(f),
            Self::Noncentrality { given, least, most } => {
                write!(f, "{given} is no non-centrality between {least} and {most}")
            }
            Self::Means(means) => write!(f, "the range of {means} means is not defined, or of too many"),
        }
    }
}

impl std::error::Error for ParameterError {}

impl From<NotDegreesOfFreedom> for ParameterError {
    fn from(error: NotDegreesOfFreedom) -> Self {
        Self::DegreesOfFreedom(error)
    }
}

/// The fewest degrees of freedom accepted.
pub const FEWEST: f64 = 1e-3;
/// The most degrees of freedom accepted.
pub const MOST: f64 = 1e10;

fn degrees(df: f64) -> Result<f64, NotDegreesOfFreedom> {
    if (FEWEST..=MOST).contains(&df) { Ok(df) } else { Err(NotDegreesOfFreedom(df)) }
}

/// A probability and its complement, and how fast the first grows with the logarithm of the argument.
#[derive(Debug, Clone, Copy)]
struct Tails {
    lower: f64,
    upper: f64,
    slope: f64,
}

impl Tails {
    fn swapped(self) -> Self {
        Self { lower: self.upper, upper: self.lower, ..self }
    }
}

/// `p` if it is a probability.
fn probability(p: f64) -> Option<f64> {
    (0.0..=1.0).contains(&p).then_some(p)
}

/// `x` if a double holds it.
fn held(x: f64) -> Option<f64> {
    x.is_finite().then_some(x)
}
