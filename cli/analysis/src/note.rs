//! Notes: why a value of a result is absent, or what it must not be taken for.
//!
//! Invariant: a note carries only indices and counts; names and numbers in a person's language are put in by the caller.

use std::fmt;

use crate::agreement::Form;
use crate::contrasts::ContrastKind;

/// Why something in a result is `None`, or needs a word of caution.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash)]
pub enum Note {
    /// No subject has a reading at every level: there is no analysis of variance, though pairs may have one.
    NoCompleteSubject,
    /// One complete subject: nothing tells a visit from chance.
    OneSubject,
    /// One level: there is no change to test.
    OneLevel,
    /// Every reading used is the same, as far as doubles can tell: *F* is 0/0.
    NoVariation,
    /// The residual is zero, as far as doubles can tell, and so is the effect: *F* is 0/0.
    NoEffectNoResidual,
    /// The residual is zero, as far as doubles can tell: *F* is infinite and its p 0.
    ZeroResidual,
    /// Mauchly's test needs at least as many error degrees of freedom as contrasts.
    TooFewSubjectsForMauchly {
        /// Complete subjects.
        subjects: usize,
        /// Levels.
        levels: usize,
    },
    /// The same, with several factors.
    TooFewErrorDf {
        /// Error degrees of freedom of each contrast.
        error_df: usize,
        /// Contrasts.
        contrasts: usize,
    },
    /// There is nobody at this level of a between factor who is complete: the level is left out of the comparison.
    EmptyLevel {
        /// The between factor.
        factor: usize,
        /// The level.
        level: usize,
    },
    /// Nobody in this combination of between levels is complete: effects are not defined.
    EmptyGroup {
        /// The group's number in the design.
        group: usize,
    },
    /// A group of one complete subject, which adds nothing to the error.
    GroupOfOne {
        /// The group's number in the design.
        group: usize,
    },
    /// Every group has one subject at most: nothing tells an effect from chance.
    NoErrorWithinGroups,
    /// The groups are not equal in size, so the sums of squares of the effects do not add up to the total.
    UnequalGroups,
    /// Fewer subjects have what a comparison needs than it has groups, and two: it has no standard error.
    TooFewForComparison {
        /// How many subjects have it.
        subjects: usize,
    },
    /// Nobody of a group that there is has what a comparison needs: it is not defined.
    GroupWithoutComparison,
    /// All subjects of a group have the same value of a comparison, as far as doubles can tell: *t* is infinite, or 0/0.
    NoSpread,
    /// The covariance of the contrasts is singular, as far as doubles can tell: Mauchly's test is not defined.
    SingularCovariance,
    /// The Huynh-Feldt epsilons have a denominator of zero or below: too few subjects for so strong a correlation.
    HuynhFeldtUndefined,
    /// Trends were asked for, and the levels have no positions.
    TrendsNeedPositions,
    /// The positions lie so unevenly that the trend of this degree and those above cannot be told from lower ones.
    TrendsIndistinct {
        /// The first degree left out.
        degree: usize,
    },
    /// Fewer than two subjects have what this contrast needs: it has no standard error.
    TooFewForContrast {
        /// Which contrast.
        contrast: ContrastKind,
        /// How many subjects have it.
        subjects: usize,
    },
    /// All subjects have the same value of this contrast, as far as doubles can tell: *t* is infinite, or 0/0.
    NoSpreadInContrast {
        /// Which contrast.
        contrast: ContrastKind,
    },
    /// Every subject's readings are all tied: Friedman's test is not defined.
    AllTied,
    /// Contrasts other than pairs of levels were asked for of an analysis by ranks, which has none.
    OnlyPairsByRanks,
    /// A reading is no multiple of the step in which all were said to be exported: ties were looked for within rounding.
    OffGrain,
    /// All differences of this pair are zero: there is nothing to rank.
    NoDifference {
        /// Which pair.
        contrast: ContrastKind,
    },
    /// The pair has so few differences that even its widest interval has less confidence than was asked for.
    ConfidenceNotReached {
        /// Which pair.
        contrast: ContrastKind,
        /// Its differences other than zero.
        differences: usize,
    },
    /// This intraclass correlation or its interval is not defined for these mean squares.
    IccUndefined {
        /// Which form.
        form: Form,
    },
    /// No subject has two readings: there is no error within subjects.
    NoRepeatedReading,
    /// The mean of a subject's readings is zero: the coefficient of variation is not defined.
    CvUndefined,
    /// Readings have both signs: a coefficient of variation says little about them.
    CvOfBothSigns,
    /// The groups have no more subjects than there are groups: there is no error to test against.
    NoErrorDegrees,
    /// The assumed covariance is not spherical: the power formula promises more than a corrected test has in small samples.
    PowerOptimistic,
}

impl fmt::Display for Note {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self {
            Self::NoCompleteSubject => {
                write!(f, "no subject has a reading at every level, so there is no analysis of variance")
            }
            Self::OneSubject => write!(f, "only one subject is complete, so there is no residual to test against"),
            Self::OneLevel => write!(f, "there is only one level, so there is no change to test"),
            Self::NoVariation => write!(f, "all readings are equal, so F is not defined"),
            Self::NoEffectNoResidual => write!(f, "neither the effect nor the residual varies, so F is not defined"),
            Self::ZeroResidual => write!(f, "the residual is zero, so F is infinite"),
            Self::TooFewSubjectsForMauchly { subjects, levels } => {
                write!(f, "Mauchly's test is not defined for {subjects} complete subjects and {levels} levels")
            }
            Self::TooFewErrorDf { error_df, contrasts } => {
                write!(f, "Mauchly's test is not defined for {contrasts} contrasts on {error_df} degrees of freedom")
            }
            Self::EmptyLevel { factor, level } => {
                write!(f, "nobody at level {level} of between factor {factor} is complete, so it is not compared")
            }
            Self::EmptyGroup { group } => {
                write!(f, "nobody in group {group} is complete, so effects are not defined")
            }
            Self::GroupOfOne { group } => write!(f, "only one subject of group {group} is complete"),
            Self::NoErrorWithinGroups => {
                write!(f, "no group has two complete subjects, so there is no error to test against")
            }
            Self::UnequalGroups => {
                write!(f, "the groups are of unequal size, so the sums of squares do not add up to the total")
            }
            Self::TooFewForComparison { subjects } => {
                write!(f, "{subjects} subjects are too few for a standard error")
            }
            Self::GroupWithoutComparison => write!(f, "a group has nobody with all that it needs"),
            Self::NoSpread => write!(f, "it is the same for all subjects of a group, so t is not defined"),
            Self::SingularCovariance => {
                write!(f, "the covariance of the contrasts is singular, so Mauchly's test is not defined")
            }
            Self::HuynhFeldtUndefined => write!(f, "the Huynh-Feldt corrections are not defined for so few subjects"),
            Self::TrendsNeedPositions => write!(f, "trends need the positions of the levels"),
            Self::TrendsIndistinct { degree } => {
                write!(f, "trends of degree {degree} and above cannot be told from lower ones at these positions")
            }
            Self::TooFewForContrast { contrast, subjects } => {
                write!(f, "{contrast}: {subjects} subjects have it, so it has no standard error")
            }
            Self::NoSpreadInContrast { contrast } => {
                write!(f, "{contrast}: it is the same for all subjects, so t is not defined")
            }
            Self::AllTied => {
                write!(f, "every subject's readings are all tied, so Friedman's test is not defined")
            }
            Self::OnlyPairsByRanks => write!(f, "an analysis by ranks compares pairs of levels only"),
            Self::OffGrain => {
                write!(
                    f,
                    "not every reading has the decimals it was said to have, so ties were looked for within rounding"
                )
            }
            Self::NoDifference { contrast } => {
                write!(f, "{contrast}: all differences are zero, so there is nothing to rank")
            }
            Self::ConfidenceNotReached { contrast, differences } => write!(
                f,
                "{contrast}: with {differences} differences no interval has the confidence asked for; the widest is given"
            ),
            Self::IccUndefined { form } => {
                write!(f, "{} or its interval is not defined for readings that vary like this", form.name())
            }
            Self::NoRepeatedReading => {
                write!(f, "no subject has two readings, so there is no variation within subjects")
            }
            Self::CvUndefined => {
                write!(f, "a subject's mean is zero, so the coefficient of variation is not defined")
            }
            Self::CvOfBothSigns => {
                write!(f, "some readings are negative and some positive, so the coefficient of variation says little")
            }
            Self::NoErrorDegrees => {
                write!(f, "there are no more subjects than groups, so there is no error to test against")
            }
            Self::PowerOptimistic => write!(
                f,
                "the assumed covariance is not spherical, so the formula mostly promises more power than a corrected test has; simulate before relying on it"
            ),
        }
    }
}
