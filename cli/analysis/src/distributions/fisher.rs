//! The *F* distribution.
//!
//! Invariant: both shares of the argument, d₁f / (d₁f + d₂) and d₂ / (d₁f + d₂), are formed without subtraction.

use super::{NotDegreesOfFreedom, Tails, beta, degrees, probability, quantile};

/// The *F* distribution with `df` and `error_df` degrees of freedom, which need not be whole.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct FisherF {
    df: f64,
    error_df: f64,
}

impl FisherF {
    /// # Errors
    /// [`NotDegreesOfFreedom`] unless both lie between [`FEWEST`](super::FEWEST) and [`MOST`](super::MOST).
    pub fn new(df: f64, error_df: f64) -> Result<Self, NotDegreesOfFreedom> {
        Ok(Self { df: degrees(df)?, error_df: degrees(error_df)? })
    }

    /// P(F ≤ f) = I_x(d₁/2, d₂/2), x = d₁f / (d₁f + d₂) (Abramowitz & Stegun 1964, 26.6.2); `None` for NaN.
    #[must_use]
    pub fn cdf(self, f: f64) -> Option<f64> {
        self.tails(f).map(|t| t.lower)
    }

    /// P(F > f), the p value of an observed *F*; `None` for NaN.
    #[must_use]
    pub fn sf(self, f: f64) -> Option<f64> {
        self.tails(f).map(|t| t.upper)
    }

    /// The f with P(F ≤ f) = `p`; `None` unless 0 ≤ p < 1 and f is within the range of a double.
    #[must_use]
    pub fn quantile(self, p: f64) -> Option<f64> {
        let p = probability(p)?;
        quantile::positive(p, 1.0 - p, 1.0, |f| self.tails(f))
    }

    /// The f with P(F > f) = `q`; `None` unless 0 < q ≤ 1 and f is within the range of a double.
    #[must_use]
    pub fn upper_quantile(self, q: f64) -> Option<f64> {
        let q = probability(q)?;
        quantile::positive(1.0 - q, q, 1.0, |f| self.tails(f))
    }

    fn tails(self, f: f64) -> Option<Tails> {
        if f.is_nan() {
            return None;
        }
        let (x, y) = shares(f.max(0.0), self.df / self.error_df);
        beta::tails(self.df / 2.0, self.error_df / 2.0, x, y)
    }
}

/// cf / (cf + 1) and 1 / (cf + 1), for f ≥ 0, also where cf is beyond the largest double.
pub(super) fn shares(f: f64, c: f64) -> (f64, f64) {
    let odds = c * f;
    if odds <= 1.0 {
        return (odds / (1.0 + odds), 1.0 / (1.0 + odds));
    }
    let inverse = 1.0 / c / f;
    (1.0 / (1.0 + inverse), inverse / (1.0 + inverse))
}
