//! Planning: the power of a test within or between subjects, and how many subjects a wanted power takes.
//!
//! Invariants: power follows from what is assumed through one non-centrality and one pair of degrees of freedom, which
//! stand in the result; and a number of subjects is the smallest that reaches the power, found by trying.

mod assumed;
mod size;

pub use assumed::{Assumed, AssumedError, ar1, compound_symmetry, covariance};
pub use size::{MOST_PER_GROUP, Planning, SampleSize, sample_size};

use std::fmt;

use crate::Note;
use crate::distributions::{FisherF, NonCentralF};
use assumed::Spread;

/// The effect whose test is planned.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash)]
pub enum PlannedEffect {
    /// Visits differ, averaged over groups.
    Within,
    /// Groups differ, averaged over visits.
    Between,
    /// Groups change differently.
    Interaction,
}

/// A probability of the first kind of error, strictly between 0 and 1.
#[derive(Debug, Clone, Copy, PartialEq, PartialOrd)]
pub struct Alpha(f64);

impl Alpha {
    /// # Errors
    /// [`PowerError::Alpha`] unless 0 < `alpha` < 1.
    pub fn new(alpha: f64) -> Result<Self, PowerError> {
        if 0.0 < alpha && alpha < 1.0 { Ok(Self(alpha)) } else { Err(PowerError::Alpha(alpha)) }
    }

    /// As a proportion, such as 0.05.
    #[must_use]
    pub fn level(self) -> f64 {
        self.0
    }
}

/// Why there is no power, or no number of subjects.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum PowerError {
    /// An alpha that is not strictly between 0 and 1.
    Alpha(f64),
    /// A wanted power that is not strictly between 0 and 1.
    Power(f64),
    /// A dropout that is not from 0 to below 1.
    Dropout(f64),
    /// Visits are to be compared, and there is only one.
    OneVisit,
    /// Groups are to be compared, and there is only one.
    OneGroup,
    /// There are not as many sizes as groups.
    SizeCount {
        /// How many sizes were given.
        sizes: usize,
        /// How many groups are assumed.
        groups: usize,
    },
    /// A group has no subject.
    EmptyGroup {
        /// The group.
        group: usize,
    },
    /// The assumed means have no such effect, so that no number of subjects has more power than alpha.
    NoEffect,
    /// The assumed covariance leaves no error to test the effect against.
    NoError,
    /// The wanted power takes more than [`MOST_PER_GROUP`] subjects a group.
    OutOfReach {
        /// The power with that many.
        power: f64,
    },
}

impl fmt::Display for PowerError {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self {
            Self::Alpha(alpha) => write!(f, "{alpha} is no alpha: it has to lie between 0 and 1, both excluded"),
            Self::Power(power) => write!(f, "{power} is no power: it has to lie between 0 and 1, both excluded"),
            Self::Dropout(dropout) => write!(f, "{dropout} is no dropout: it has to lie between 0 and 1, 1 excluded"),
            Self::OneVisit => write!(f, "a change between visits takes at least two of them"),
            Self::OneGroup => write!(f, "a difference between groups takes at least two of them"),
            Self::SizeCount { sizes, groups } => write!(f, "{sizes} sizes are given for {groups} groups"),
            Self::EmptyGroup { group } => write!(f, "group {group} has no subject"),
            Self::NoEffect => write!(f, "the assumed means have no such effect, so no number of subjects can show it"),
            Self::NoError => write!(f, "the assumed SDs and correlations leave no error to test the effect against"),
            Self::OutOfReach { power } => {
                write!(
                    f,
                    "the wanted power takes more than {MOST_PER_GROUP} subjects a group, with which it is {power}"
                )
            }
        }
    }
}

impl std::error::Error for PowerError {}

/// The power of one test with given numbers of subjects.
#[derive(Debug, Clone, PartialEq)]
pub struct Power {
    /// P(F > critical value); `None` where there are no degrees of freedom of error, or no error.
    pub power: Option<f64>,
    /// The non-centrality λ: ε Σ (squared effects) / error variance, which see under [`power`].
    pub noncentrality: Option<f64>,
    /// ε times the degrees of freedom of the effect.
    pub df: f64,
    /// ε times the degrees of freedom of the error.
    pub error_df: f64,
    /// The *F* beyond which the test rejects.
    pub critical: Option<f64>,
    /// The Greenhouse-Geisser epsilon of the assumed covariance itself: (tr S)² / ((k − 1) tr S²), S the covariance of
    /// k − 1 orthonormal contrasts. `None` for [`PlannedEffect::Between`], where nothing is corrected, and where the
    /// contrasts do not vary.
    pub epsilon: Option<f64>,
    /// Why fields are `None`, and whether the power is an approximation.
    pub notes: Vec<Note>,
}

/// The power of the *F* test of an effect with `sizes` subjects in each group, all of them complete.
///
/// With group g's n_g subjects, N in all in G groups, assumed means μ_gj at k visits and covariance Σ (the same in each
/// group), ε the assumed epsilon, s² = tr S / (k − 1), and F' the non-central *F* with non-centrality λ:
/// - within: λ = ε ñ Σ_j (μ_·j − μ_··)² / s² on ε (k − 1) and ε (N − G) (k − 1) degrees of freedom, with plain means over
///   groups (type III) and ñ = G² / Σ (1 / n_g);
/// - interaction: λ = ε Σ_g n_g Σ_j (μ_gj − μ_g· − (μ_·j − μ_··))² / s² on ε (G − 1) (k − 1) and ε (N − G) (k − 1), with
///   means over groups weighted by n_g;
/// - between: λ = Σ_g n_g (μ_g· − μ_··)² / σ², σ² = 1ᵀΣ1 / k², on G − 1 and N − G, without ε.
///
/// (Muller & Barton 1989, *Journal of the American Statistical Association* 84:549, with the population's ε in place of
/// its estimate; Cohen 1988, *Statistical Power Analysis for the Behavioral Sciences*, chapter 8.) Exact where ε = 1, and
/// for effects between subjects. With ε < 1 the formula is **optimistic** for the Greenhouse-Geisser corrected test in
/// small samples, since the estimate of ε varies and lies below it: with 12 subjects, 5 visits and a correlation of
/// 0.7^lag, 0.801 by formula and 0.730 by simulation. It is so in samples of any size where means change along the
/// contrast that varies most. [`Note::PowerOptimistic`] then stands in the result; simulate before relying on it.
///
/// # Errors
/// [`PowerError::OneVisit`], [`OneGroup`](PowerError::OneGroup), [`SizeCount`](PowerError::SizeCount) or
/// [`EmptyGroup`](PowerError::EmptyGroup).
pub fn power(assumed: &Assumed, effect: PlannedEffect, sizes: &[usize], alpha: Alpha) -> Result<Power, PowerError> {
    check(assumed, effect)?;
    if sizes.len() != assumed.groups() {
        return Err(PowerError::SizeCount { sizes: sizes.len(), groups: assumed.groups() });
    }
    if let Some(group) = sizes.iter().position(|&n| n == 0) {
        return Err(PowerError::EmptyGroup { group });
    }
    Ok(Test::of(assumed, effect, sizes).power(alpha))
}

/// Whether there is such an effect at all.
fn check(assumed: &Assumed, effect: PlannedEffect) -> Result<(), PowerError> {
    if effect != PlannedEffect::Between && assumed.visits() < 2 {
        return Err(PowerError::OneVisit);
    }
    if effect != PlannedEffect::Within && assumed.groups() < 2 {
        return Err(PowerError::OneGroup);
    }
    Ok(())
}

/// One planned test.
struct Test {
    /// Σ of squared effects, in squares of the readings' unit.
    squares: f64,
    /// The error variance of one contrast, or of one subject's mean.
    variance: f64,
    epsilon: Option<f64>,
    df: f64,
    error_df: f64,
    within: bool,
}

impl Test {
    fn of(assumed: &Assumed, effect: PlannedEffect, sizes: &[usize]) -> Self {
        let sizes: Vec<f64> = sizes.iter().map(|&n| n as f64).collect();
        let (groups, contrasts) = (assumed.groups() as f64, assumed.visits() as f64 - 1.0);
        let error_df = sizes.iter().sum::<f64>() - groups;
        let squares = assumed.squares(effect, &sizes);
        if effect == PlannedEffect::Between {
            let variance = assumed.variance_of_mean();
            return Self { squares, variance, epsilon: None, df: groups - 1.0, error_df, within: false };
        }
        let Spread { variance, epsilon } = assumed.spread();
        let df = if effect == PlannedEffect::Within { contrasts } else { (groups - 1.0) * contrasts };
        Self { squares, variance, epsilon, df, error_df: error_df * contrasts, within: true }
    }

    fn power(&self, alpha: Alpha) -> Power {
        let factor = self.epsilon.unwrap_or(1.0);
        let mut found = Power {
            power: None,
            noncentrality: None,
            df: factor * self.df,
            error_df: factor * self.error_df,
            critical: None,
            epsilon: self.epsilon,
            notes: Vec::new(),
        };
        if self.variance <= 0.0 {
            found.notes.push(if self.squares > 0.0 { Note::ZeroResidual } else { Note::NoEffectNoResidual });
            return found;
        }
        if self.error_df < 1.0 {
            found.notes.push(Note::NoErrorDegrees);
            return found;
        }
        if self.within && factor < NEARLY_SPHERICAL {
            found.notes.push(Note::PowerOptimistic);
        }
        let lambda = factor * self.squares / self.variance;
        found.noncentrality = Some(lambda).filter(|lambda| lambda.is_finite());
        found.critical = FisherF::new(found.df, found.error_df).ok().and_then(|f| f.upper_quantile(alpha.level()));
        found.power = found.critical.and_then(|f| tail(found.df, found.error_df, lambda, f));
        found
    }
}

/// Below this an epsilon is more than rounding away from 1.
const NEARLY_SPHERICAL: f64 = 1.0 - 1e-9;

/// P(F > f); a non-centrality beyond what can be computed leaves no doubt.
fn tail(df: f64, error_df: f64, lambda: f64, f: f64) -> Option<f64> {
    NonCentralF::new(df, error_df, lambda.min(LARGEST_LAMBDA)).ok()?.sf(f)
}

const LARGEST_LAMBDA: f64 = 1e7;
