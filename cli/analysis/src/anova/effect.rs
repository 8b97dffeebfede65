//! The test of an effect, its corrections and its sizes.
//!
//! Invariants: an infinite *F* is `None` with p = 0, and 0/0 is `None` with p `None`; corrected tests differ from the
//! uncorrected one in their degrees of freedom alone.

use super::decomposition::Line;
use super::sphericity::{Epsilon, Mauchly, Sphericity};
use crate::distributions::{FisherF, effect_size_interval};
use crate::{Confidence, Interval};

/// The test of one effect against its error.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Effect {
    /// Sum of squares of the effect.
    pub ss: f64,
    /// Degrees of freedom of the effect.
    pub df: f64,
    /// `ss` / `df`; `None` where `df` is 0.
    pub ms: Option<f64>,
    /// Sum of squares of the error.
    pub error_ss: f64,
    /// Degrees of freedom of the error.
    pub error_df: f64,
    /// `error_ss` / `error_df`; `None` where `error_df` is 0.
    pub error_ms: Option<f64>,
    /// `ms` / `error_ms`; `None` where that is infinite or undefined.
    pub f: Option<f64>,
    /// P(F > f), uncorrected; 0 where *F* is infinite.
    pub p: Option<f64>,
    /// Mauchly's test of sphericity; its fields are `None` where it is not defined. `None` for an effect between subjects.
    pub mauchly: Option<Mauchly>,
    /// The estimates of epsilon; `None` for an effect between subjects, or where there is nothing to test.
    pub epsilon: Option<Epsilon>,
    /// The test corrected by each epsilon; `None` where `epsilon` is.
    pub corrected: Option<Corrected>,
    /// SS / (SS + error SS) (Cohen 1973, *Educational and Psychological Measurement* 33:107).
    pub partial_eta_sq: Option<f64>,
    /// The interval of the population's, by inverting the non-central *F* (Steiger 2004, *Psychological Methods* 9:164;
    /// Smithson 2001, *Educational and Psychological Measurement* 61:605), on the degrees of freedom that the
    /// Greenhouse-Geisser correction leaves, so that it goes with that test: exact between subjects and for one contrast,
    /// elsewhere as good as the correction. Its ends are λ / (λ + df + error df + 1). `None` where *F* is.
    pub partial_eta_sq_ci: Option<Interval>,
    /// SS / (SS + the error SS of all strata), for one factor SS / (SS + subject SS + residual SS): the share of all
    /// variation that a design with other subjects at each level would see as well. Between factors are taken as
    /// manipulated, not observed (Olejnik & Algina 2003, *Psychological Methods* 8:434; Bakeman 2005, *Behavior Research
    /// Methods* 37:379).
    pub generalized_eta_sq: Option<f64>,
    /// df (MS − error MS) / (df (MS − error MS) + N error MS), as Olejnik & Algina 2003 give it for an effect against its
    /// own error (after Keren & Lewis 1979, *Educational and Psychological Measurement* 39:119), with N the subjects times
    /// the levels of the effect's own within factors, so that averaging over the others changes nothing: n k readings for
    /// one within factor, n subjects between them. Given raw: negative where F < 1.
    pub partial_omega_sq: Option<f64>,
}

/// The test with both degrees of freedom multiplied by min(1, epsilon), for each epsilon that is defined.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Corrected {
    /// By the Greenhouse-Geisser epsilon.
    pub greenhouse_geisser: Option<CorrectedTest>,
    /// By the classic Huynh-Feldt epsilon.
    pub huynh_feldt: Option<CorrectedTest>,
    /// By the Huynh-Feldt epsilon as corrected by Lecoutre.
    pub lecoutre: Option<CorrectedTest>,
    /// By the smallest epsilon that there can be.
    pub lower_bound: Option<CorrectedTest>,
}

/// One corrected test.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct CorrectedTest {
    /// min(1, epsilon) times the degrees of freedom of the effect.
    pub df: f64,
    /// min(1, epsilon) times the degrees of freedom of the error.
    pub error_df: f64,
    /// P(F > f) with these; `None` where the uncorrected p is.
    pub p: Option<f64>,
}

/// An observed *F*.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(crate) enum Ratio {
    Finite(f64),
    Infinite,
    Undefined,
}

impl Ratio {
    /// A sum of squares up to `rounding` counts as zero below the line; above it only where there is zero below.
    pub fn of(effect: Line, error: Line, rounding: f64) -> Self {
        match (effect.ms, error.ms) {
            (Some(ms), Some(error_ms)) if error.ss > rounding => Self::Finite(ms / error_ms),
            (Some(_), Some(_)) if effect.ss > rounding => Self::Infinite,
            _ => Self::Undefined,
        }
    }

    pub fn finite(self) -> Option<f64> {
        if let Self::Finite(f) = self { Some(f) } else { None }
    }

    pub fn p(self, df: f64, error_df: f64) -> Option<f64> {
        match self {
            Self::Finite(f) => FisherF::new(df, error_df).ok()?.sf(f),
            Self::Infinite => Some(0.0),
            Self::Undefined => None,
        }
    }
}

/// An effect and its error, with what the sizes of the effect are measured by.
pub(super) struct Tested {
    pub effect: Line,
    pub error: Line,
    /// The error sums of squares of all strata.
    pub all_errors: f64,
    /// Subjects times the levels of the effect's within factors.
    pub means: f64,
    pub rounding: f64,
    /// Within subjects.
    pub sphericity: Option<Sphericity>,
    pub confidence: Confidence,
}

impl Tested {
    /// Of a factor with one level.
    pub fn nothing(none: Line, means: f64) -> Self {
        let sphericity = Some(Sphericity { mauchly: Mauchly::default(), epsilon: None });
        Self {
            effect: none,
            error: none,
            all_errors: 0.0,
            means,
            rounding: 0.0,
            sphericity,
            confidence: Confidence::default(),
        }
    }

    /// Whether there is an effect and an error at all.
    pub fn testable(&self) -> bool {
        self.effect.df > 0.0 && self.error.df > 0.0
    }

    pub fn ratio(&self) -> Ratio {
        Ratio::of(self.effect, self.error, self.rounding)
    }

    pub fn test(&self) -> Effect {
        let Self { effect, error, .. } = *self;
        let f = self.ratio();
        let epsilon = self.sphericity.and_then(|it| it.epsilon);
        Effect {
            ss: effect.ss,
            df: effect.df,
            ms: effect.ms,
            error_ss: error.ss,
            error_df: error.df,
            error_ms: error.ms,
            f: f.finite(),
            p: f.p(effect.df, error.df),
            mauchly: self.sphericity.map(|it| it.mauchly),
            epsilon,
            corrected: epsilon.map(|epsilon| corrected(f, epsilon, effect.df, error.df)),
            partial_eta_sq: self.share(effect.ss, error.ss),
            partial_eta_sq_ci: self.interval(f.finite(), epsilon),
            generalized_eta_sq: self.share(effect.ss, self.all_errors),
            partial_omega_sq: self.partial_omega_sq(),
        }
    }

    /// The share of a part in itself and the rest, where they are more than rounding.
    fn share(&self, part: f64, rest: f64) -> Option<f64> {
        (self.testable() && part + rest > self.rounding).then(|| part / (part + rest))
    }

    fn interval(&self, f: Option<f64>, epsilon: Option<Epsilon>) -> Option<Interval> {
        let by = epsilon.and_then(|it| it.greenhouse_geisser).unwrap_or(1.0);
        let (df, error_df) = (by * self.effect.df, by * self.error.df);
        effect_size_interval(f?, df, error_df, df + error_df + 1.0, self.confidence)
    }

    fn partial_omega_sq(&self) -> Option<f64> {
        let (effect, error) = (self.effect.ms?, self.error.ms?);
        self.share(self.effect.df * (effect - error), self.means * error)
    }
}

fn corrected(f: Ratio, epsilon: Epsilon, df: f64, error_df: f64) -> Corrected {
    let by = |epsilon: Option<f64>| {
        let factor = epsilon?.min(1.0);
        let (df, error_df) = (factor * df, factor * error_df);
        Some(CorrectedTest { df, error_df, p: f.p(df, error_df) })
    };
    Corrected {
        greenhouse_geisser: by(epsilon.greenhouse_geisser),
        huynh_feldt: by(epsilon.huynh_feldt),
        lecoutre: by(epsilon.lecoutre),
        lower_bound: by(Some(epsilon.lower_bound)),
    }
}
