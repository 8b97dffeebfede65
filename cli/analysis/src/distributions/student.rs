//! Student's *t* distribution.
//!
//! Invariant: everything comes from the mass inside ±t and the mass outside it, each computed as itself, so that
//! neither tail nor centre is ever a difference of nearly equal numbers.

use statrs::function::gamma::ln_gamma;

use super::{NotDegreesOfFreedom, Tails, beta, degrees, held, probability, quantile};

/// The |t| / √ν from which the tail is a power law to the last digit.
const FAR: f64 = 1e100;

/// Student's *t* distribution with `df` degrees of freedom, which need not be whole.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct StudentT {
    df: f64,
}

impl StudentT {
    /// # Errors
    /// [`NotDegreesOfFreedom`] unless `df` lies between [`FEWEST`](super::FEWEST) and [`MOST`](super::MOST).
    pub fn new(df: f64) -> Result<Self, NotDegreesOfFreedom> {
        Ok(Self { df: degrees(df)? })
    }

    /// P(T ≤ t); `None` for NaN.
    #[must_use]
    pub fn cdf(self, t: f64) -> Option<f64> {
        self.sf(-t)
    }

    /// P(T > t) (Abramowitz & Stegun 1964, 26.7.1 with 26.5.27); `None` for NaN.
    #[must_use]
    pub fn sf(self, t: f64) -> Option<f64> {
        let both = self.around_zero(t)?.upper;
        Some(if t >= 0.0 { both / 2.0 } else { 1.0 - both / 2.0 })
    }

    /// P(|T| > |t|), the two-sided p value of an observed *t*; `None` for NaN.
    #[must_use]
    pub fn two_sided(self, t: f64) -> Option<f64> {
        self.around_zero(t).map(|mass| mass.upper)
    }

    /// The t with P(T ≤ t) = `p`; `None` unless 0 < p < 1 and t is within the range of a double.
    #[must_use]
    pub fn quantile(self, p: f64) -> Option<f64> {
        self.upper_quantile(p).map(|t| 0.0 - t)
    }

    /// The t with P(T > t) = `q`; `None` unless 0 < q < 1 and t is within the range of a double.
    #[must_use]
    pub fn upper_quantile(self, q: f64) -> Option<f64> {
        let q = probability(q)?;
        let tail = q.min(1.0 - q);
        let size = self.with_masses(1.0 - 2.0 * tail, 2.0 * tail)?;
        Some(if q <= 0.5 { size } else { -size })
    }

    /// The t > 0 with P(|T| ≤ t) = `level`: the multiplier of a standard error in a two-sided interval. `None` unless
    /// 0 ≤ level < 1 and t is within the range of a double.
    #[must_use]
    pub fn critical(self, level: f64) -> Option<f64> {
        let level = probability(level)?;
        self.with_masses(level, 1.0 - level)
    }

    /// The t ≥ 0 with so much mass inside ±t and so much outside.
    fn with_masses(self, inside: f64, outside: f64) -> Option<f64> {
        quantile::positive(inside, outside, 1.0, |t| self.around_zero(t)).and_then(held)
    }

    /// The masses inside and outside ±t: I_x(½, ν/2) and I_y(ν/2, ½) for x = t² / (ν + t²), y = ν / (ν + t²).
    pub(super) fn around_zero(self, t: f64) -> Option<Tails> {
        if t.is_nan() {
            return None;
        }
        let ratio = t.abs() / self.df.sqrt();
        if ratio > FAR {
            return Some(self.far_out(t.abs()));
        }
        let (x, y) = if ratio <= 1.0 {
            let odds = ratio * ratio;
            (odds / (1.0 + odds), 1.0 / (1.0 + odds))
        } else {
            let inverse = (1.0 / ratio).powi(2);
            (1.0 / (1.0 + inverse), inverse / (1.0 + inverse))
        };
        let mass = beta::tails(0.5, self.df / 2.0, x, y)?;
        Some(Tails { slope: 2.0 * mass.slope, ..mass })
    }

    /// The masses where y = ν / t² might be too small for a double and its power not: y^(ν/2) / (ν/2 B(ν/2, ½)).
    fn far_out(self, t: f64) -> Tails {
        let half = self.df / 2.0;
        let log_beta = ln_gamma(half) + ln_gamma(0.5) - ln_gamma(half + 0.5);
        let upper = (-self.df * (t.ln() - 0.5 * self.df.ln()) - log_beta - half.ln()).exp();
        Tails { lower: 1.0 - upper, upper, slope: self.df * upper }
    }
}
