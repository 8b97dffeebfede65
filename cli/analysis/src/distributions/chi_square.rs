//! The chi-square distribution.
//!
//! Invariant: the lower and the upper tail each come from the expansion that gives it without cancellation.

use super::{NotDegreesOfFreedom, Tails, degrees, gamma, probability, quantile};

/// The chi-square distribution with `df` degrees of freedom, which need not be whole.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct ChiSquare {
    df: f64,
}

impl ChiSquare {
    /// # Errors
    /// [`NotDegreesOfFreedom`] unless `df` lies between [`FEWEST`](super::FEWEST) and [`MOST`](super::MOST).
    pub fn new(df: f64) -> Result<Self, NotDegreesOfFreedom> {
        Ok(Self { df: degrees(df)? })
    }

    /// P(X ≤ x) = P(ν/2, x/2) (Abramowitz & Stegun 1964, 26.4.19); `None` for NaN.
    #[must_use]
    pub fn cdf(self, x: f64) -> Option<f64> {
        self.tails(x).map(|t| t.lower)
    }

    /// P(X > x) = Q(ν/2, x/2); `None` for NaN.
    #[must_use]
    pub fn sf(self, x: f64) -> Option<f64> {
        self.tails(x).map(|t| t.upper)
    }

    /// The x with P(X ≤ x) = `p`; `None` unless 0 ≤ p < 1.
    #[must_use]
    pub fn quantile(self, p: f64) -> Option<f64> {
        let p = probability(p)?;
        quantile::positive(p, 1.0 - p, self.df, |x| self.tails(x))
    }

    /// The x with P(X > x) = `q`; `None` unless 0 < q ≤ 1.
    #[must_use]
    pub fn upper_quantile(self, q: f64) -> Option<f64> {
        let q = probability(q)?;
        quantile::positive(1.0 - q, q, self.df, |x| self.tails(x))
    }

    fn tails(self, x: f64) -> Option<Tails> {
        if x.is_nan() {
            return None;
        }
        gamma::tails(self.df / 2.0, x.max(0.0) / 2.0)
    }
}
