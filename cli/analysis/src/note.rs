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
                "the assumed covariance is not spherical, so the formula promises more power than a corrected test has with few subjects; simulate before relying on it"
            ),
        }
    }
}
