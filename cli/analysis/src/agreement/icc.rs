//! Intraclass correlations.
//!
//! Invariant: estimate, test and interval of a form derive from the same mean squares; an interval's ends follow from its
//! *F* limits by the formula of the estimate.

use super::two_way::TwoWay;
use crate::distributions::FisherF;
use crate::{Confidence, Interval, Note};

/// The six forms, as McGraw & Wong 1996 name them. Those with k are for the mean of the k levels.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash)]
pub enum Form {
    /// ICC(1): one-way, each subject read by others.
    OneWay,
    /// ICC(A,1): two-way, absolute agreement of single readings.
    Agreement,
    /// ICC(C,1): two-way, consistency of single readings.
    Consistency,
    /// ICC(k).
    OneWayMean,
    /// ICC(A,k).
    AgreementMean,
    /// ICC(C,k).
    ConsistencyMean,
}

impl Form {
    /// All six, single readings first.
    pub const ALL: [Self; 6] = [
        Self::OneWay,
        Self::Agreement,
        Self::Consistency,
        Self::OneWayMean,
        Self::AgreementMean,
        Self::ConsistencyMean,
    ];

    /// The published name, such as `ICC(A,1)`.
    #[must_use]
    pub fn name(self) -> &'static str {
        match self {
            Self::OneWay => "ICC(1)",
            Self::Agreement => "ICC(A,1)",
            Self::Consistency => "ICC(C,1)",
            Self::OneWayMean => "ICC(k)",
            Self::AgreementMean => "ICC(A,k)",
            Self::ConsistencyMean => "ICC(C,k)",
        }
    }
}

/// One intraclass correlation of n subjects at k levels (Shrout & Fleiss 1979, *Psychological Bulletin* 86:420; McGraw &
/// Wong 1996, *Psychological Methods* 1:30, tables 4 and 7).
///
/// With mean squares of subjects R, levels C, residual E, and within subjects W:
/// ICC(1) = (R − W) / (R + (k − 1) W), ICC(k) = (R − W) / R;
/// ICC(C,1) = (R − E) / (R + (k − 1) E), ICC(C,k) = (R − E) / R;
/// ICC(A,1) = (R − E) / (R + (k − 1) E + k (C − E) / n), ICC(A,k) = (R − E) / (R + (C − E) / n).
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Icc {
    /// Which form.
    pub form: Form,
    /// The estimate, given raw: it may be negative. `None` where it is not defined.
    pub value: Option<f64>,
    /// McGraw & Wong's interval: for the one-way and consistency forms from *F* over and times the quantiles of *F*; for
    /// ICC(A,1) with their approximate degrees of freedom v; for ICC(A,k) its ends stepped up by the Spearman-Brown
    /// formula k ρ / (1 + (k − 1) ρ). `None` where it is not defined.
    pub ci: Option<Interval>,
    /// R / W for the one-way forms, else R / E: the test that there is no correlation. `None` where that is infinite or
    /// undefined.
    pub f: Option<f64>,
    /// n − 1.
    pub df: f64,
    /// n (k − 1) for the one-way forms, else (n − 1) (k − 1).
    pub error_df: f64,
    /// P(F > f); 0 where *F* is infinite.
    pub p: Option<f64>,
}

pub(super) fn icc(form: Form, two_way: &TwoWay, confidence: Confidence, notes: &mut Vec<Note>) -> Icc {
    let error_df = match form {
        Form::OneWay | Form::OneWayMean => two_way.within_df(),
        _ => two_way.error_df(),
    };
    let none = Icc {
        form,
        value: None,
        ci: None,
        f: None,
        df: two_way.subject_df().max(0.0),
        error_df: error_df.max(0.0),
        p: None,
    };
    let Some(squares) = Squares::of(form, two_way) else { return none };
    let found = squares.icc(none, confidence);
    if found.value.is_none() || found.ci.is_none() {
        notes.push(Note::IccUndefined { form });
    }
    found
}

/// The mean squares that one form compares.
struct Squares {
    subject: f64,
    level: f64,
    error: f64,
    n: f64,
    k: f64,
}

impl Squares {
    fn of(form: Form, two_way: &TwoWay) -> Option<Self> {
        let error = match form {
            Form::OneWay | Form::OneWayMean => two_way.within_ms()?,
            _ => two_way.error_ms()?,
        };
        Some(Self {
            subject: two_way.subject_ms()?,
            level: two_way.level_ms()?,
            error,
            n: two_way.subjects as f64,
            k: two_way.levels as f64,
        })
    }

    fn icc(&self, none: Icc, confidence: Confidence) -> Icc {
        if self.subject <= 0.0 && self.error <= 0.0 {
            return none;
        }
        let f = (self.error > 0.0).then(|| self.subject / self.error);
        let p = f.map_or(Some(0.0), |f| FisherF::new(none.df, none.error_df).ok()?.sf(f));
        Icc { value: self.value(none.form), ci: self.interval(&none, confidence), f, p, ..none }
    }

    fn value(&self, form: Form) -> Option<f64> {
        let between_levels = (self.level - self.error) / self.n;
        let gain = self.subject - self.error;
        match form {
            Form::OneWay | Form::Consistency => self.single(self.subject, self.error),
            Form::OneWayMean | Form::ConsistencyMean => of_means(self.subject, self.error),
            Form::Agreement => share(gain, self.subject + (self.k - 1.0) * self.error + self.k * between_levels),
            Form::AgreementMean => share(gain, self.subject + between_levels),
        }
    }

    fn single(&self, subject: f64, error: f64) -> Option<f64> {
        share(subject - error, subject + (self.k - 1.0) * error)
    }

    fn interval(&self, icc: &Icc, confidence: Confidence) -> Option<Interval> {
        let level = f64::midpoint(confidence.level(), 1.0);
        let quantile = |df, error_df| FisherF::new(df, error_df).ok()?.quantile(level);
        let ends = |of: &dyn Fn(f64, f64) -> Option<f64>| {
            let lower = of(self.subject, quantile(icc.df, icc.error_df)? * self.error)?;
            Some(Interval { lower, upper: of(quantile(icc.error_df, icc.df)? * self.subject, self.error)? })
        };
        match icc.form {
            Form::OneWay | Form::Consistency => ends(&|subject, error| self.single(subject, error)),
            Form::OneWayMean | Form::ConsistencyMean => ends(&of_means),
            Form::Agreement => self.agreement(icc.df, quantile),
            Form::AgreementMean => {
                let single = self.agreement(icc.df, quantile)?;
                Some(Interval { lower: self.stepped_up(single.lower)?, upper: self.stepped_up(single.upper)? })
            }
        }
    }

    /// The limits of ICC(A,1): with a = k ρ and b = n (1 − ρ) + k ρ (n − 1),
    /// v = (a C + b E)² / ((a C)² / (k − 1) + (b E)² / ((n − 1) (k − 1))), and *F* quantiles on n − 1 and v.
    fn agreement(&self, df: f64, quantile: impl Fn(f64, f64) -> Option<f64>) -> Option<Interval> {
        let rho = self.value(Form::Agreement)?;
        if self.level <= 0.0 && self.error <= 0.0 {
            return Some(Interval { lower: 1.0, upper: 1.0 });
        }
        // v has no unit: as shares of both, its parts can be squared whatever the readings' unit is.
        let both = self.level + self.error;
        let of_levels = self.k * rho * (self.level / both);
        let of_error = (self.n * (1.0 - rho) + self.k * rho * (self.n - 1.0)) * (self.error / both);
        let spread = (of_levels.powi(2) + of_error.powi(2) / (self.n - 1.0)) / (self.k - 1.0);
        let v = share((of_levels + of_error).powi(2), spread)?;
        let (low, high) = (quantile(df, v)?, quantile(v, df)?);
        let rest = self.k * self.level + (self.k * self.n - self.k - self.n) * self.error;
        Some(Interval {
            lower: share(self.n * (self.subject - low * self.error), low * rest + self.n * self.subject)?,
            upper: share(self.n * (high * self.subject - self.error), rest + self.n * high * self.subject)?,
        })
    }

    /// The reliability of a mean of k from that of one (Spearman 1910; Brown 1910, *British Journal of Psychology* 3).
    fn stepped_up(&self, single: f64) -> Option<f64> {
        share(self.k * single, 1.0 + (self.k - 1.0) * single)
    }
}

/// (R − E) / R.
fn of_means(subject: f64, error: f64) -> Option<f64> {
    share(subject - error, subject)
}

/// A quotient where what is below the line is more than nothing, and a double holds it.
fn share(part: f64, whole: f64) -> Option<f64> {
    (whole > 0.0).then(|| part / whole).filter(|share| share.is_finite())
}
