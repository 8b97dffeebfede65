//! The non-central *F* distribution, and the non-centrality that an observed *F* speaks for.
//!
//! Invariants: each tail is a sum of positive terms that begins at its largest ones and is stepped in the direction in
//! which the recurrence adds; a non-centrality that is solved for matches the smaller tail.

use super::saddle::gamma_kernel;
use super::{FisherF, ParameterError, Tails, beta, degrees, fisher, probability, quantile};

/// The non-central *F* distribution with `df` and `error_df` degrees of freedom, which need not be whole, and
/// non-centrality λ: that of (χ²_d₁(λ) / d₁) / (χ²_d₂ / d₂).
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct NonCentralF {
    df: f64,
    error_df: f64,
    noncentrality: f64,
}

/// The largest non-centrality of *F* that is accepted.
const MOST_NONCENTRALITY: f64 = 1e7;
/// The share of the sum below which a term, and with it all those farther out, no longer counts.
const NEGLIGIBLE: f64 = 1e-18;

impl NonCentralF {
    /// # Errors
    /// [`ParameterError`] unless the degrees of freedom lie between [`FEWEST`](super::FEWEST) and
    /// [`MOST`](super::MOST), and `noncentrality` between 0 and 1e7.
    pub fn new(df: f64, error_df: f64, noncentrality: f64) -> Result<Self, ParameterError> {
        let (df, error_df) = (degrees(df)?, degrees(error_df)?);
        if (0.0..=MOST_NONCENTRALITY).contains(&noncentrality) {
            return Ok(Self { df, error_df, noncentrality });
        }
        Err(ParameterError::Noncentrality { given: noncentrality, least: 0.0, most: MOST_NONCENTRALITY })
    }

    /// P(F ≤ f) = Σ_j Poisson(j; λ/2) I_x(d₁/2 + j, d₂/2), x = d₁f / (d₁f + d₂) (Abramowitz & Stegun 1964, 26.6.18; the
    /// order of summation after Benton & Krishnamoorthy 2003, *Computational Statistics & Data Analysis* 43:249);
    /// `None` for NaN.
    #[must_use]
    pub fn cdf(self, f: f64) -> Option<f64> {
        Some(self.mixture(f)?.lower()?.0)
    }

    /// P(F > f): the same sum over the upper tails; `None` for NaN. The power of an *F* test is this at its critical value.
    #[must_use]
    pub fn sf(self, f: f64) -> Option<f64> {
        Some(self.mixture(f)?.upper()?.0)
    }

    /// The λ ≥ 0 with P(F ≤ f) = `p` at the given degrees of freedom: the end of a confidence interval for λ. 0 where
    /// even λ = 0 leaves less than `p` below f; `None` unless 0 < p < 1, the degrees of freedom are usable, f is finite
    /// and not negative, and the answer is at most 1e7.
    #[must_use]
    pub fn noncentrality_with_cdf(df: f64, error_df: f64, f: f64, p: f64) -> Option<f64> {
        let p = probability(p)?;
        noncentrality(df, error_df, f, p, 1.0 - p)
    }

    /// The λ ≥ 0 with P(F > f) = `q`; 0 where even λ = 0 leaves more than `q` above f. Otherwise as
    /// [`noncentrality_with_cdf`](Self::noncentrality_with_cdf).
    #[must_use]
    pub fn noncentrality_with_sf(df: f64, error_df: f64, f: f64, q: f64) -> Option<f64> {
        let q = probability(q)?;
        noncentrality(df, error_df, f, 1.0 - q, q)
    }

    fn mixture(self, f: f64) -> Option<Mixture> {
        if f.is_nan() {
            return None;
        }
        let (x, y) = fisher::shares(f.max(0.0), self.df / self.error_df);
        Some(Mixture { a: self.df / 2.0, b: self.error_df / 2.0, mean: self.noncentrality / 2.0, x, y })
    }
}

/// The λ that leaves `lower` below f and `upper` above.
fn noncentrality(df: f64, error_df: f64, f: f64, lower: f64, upper: f64) -> Option<f64> {
    let central = FisherF::new(df, error_df).ok()?;
    if lower <= 0.0 || upper <= 0.0 || !f.is_finite() || f < 0.0 {
        return None;
    }
    if central.cdf(f)? <= lower || central.sf(f)? >= upper {
        return Some(0.0);
    }
    let found = quantile::positive(upper, lower, (df * f).max(1.0), |lambda| {
        let Ok(at) = NonCentralF::new(df, error_df, lambda.min(MOST_NONCENTRALITY)) else { return None };
        let mixture = at.mixture(f)?;
        let ((below, falling), (above, _)) = (mixture.lower()?, mixture.upper()?);
        // With growing λ it is the mass above that grows.
        Some(Tails { lower: above, upper: below, slope: mixture.mean * falling })
    })?;
    (found <= MOST_NONCENTRALITY).then_some(found)
}

/// A Poisson mixture, with the given mean, of incomplete beta functions at x = 1 − y.
///
/// L(j) = I_x(a + j, b) and U(j) = 1 − L(j) obey L(j) = L(j + 1) + T(j), T(j) = x^(a+j) y^b / ((a + j) B(a + j, b)), so L
/// is stepped downwards and U upwards; T(j + 1) = T(j) x (a + b + j) / (a + j + 1).
struct Mixture {
    a: f64,
    b: f64,
    mean: f64,
    x: f64,
    y: f64,
}

impl Mixture {
    /// The mass below, and how fast it falls with the mean of the mixture, Σ Poisson(j) T(j).
    fn lower(&self) -> Option<(f64, f64)> {
        let rising = |j: f64| {
            let at = self.at(j)?;
            Some(self.mean / (j + 1.0) * (1.0 - at.slope / ((self.a + j) * at.lower)) > 1.0)
        };
        let peak = last_rising(self.mean, rising)? + 1.0;
        let (mut j, at) = self.end_of_sum(peak, 1.0, |at| at.lower)?;
        let (mut weight, mut tail, mut step) = (poisson(j, self.mean), at.lower, at.slope / (self.a + j));
        let (mut sum, mut falling) = (0.0, 0.0);
        loop {
            sum += weight * tail;
            falling += weight * step;
            if j <= 0.0 || j < peak && weight * tail <= NEGLIGIBLE * sum {
                return Some((sum.min(1.0), falling));
            }
            weight *= j / self.mean;
            j -= 1.0;
            step *= (self.a + j + 1.0) / (self.x * (self.a + self.b + j));
            tail += step;
        }
    }

    /// The mass above, and how fast it grows with the mean of the mixture.
    fn upper(&self) -> Option<(f64, f64)> {
        let rising = |j: f64| {
            let at = self.at(j)?;
            let growth = self.mean / (j + 1.0) * (1.0 + at.slope / ((self.a + j) * at.upper));
            Some(growth > 1.0 || growth.is_nan())
        };
        let peak = last_rising(self.mean + (self.mean * self.b).sqrt(), rising)? + 1.0;
        let (mut j, at) = self.end_of_sum(peak, -1.0, |at| at.upper)?;
        let (mut weight, mut tail, mut step) = (poisson(j, self.mean), at.upper, at.slope / (self.a + j));
        let (mut sum, mut growing) = (0.0, 0.0);
        loop {
            sum += weight * tail;
            growing += weight * step;
            if j > peak && weight * tail <= NEGLIGIBLE * sum || self.mean <= 0.0 {
                return Some((sum.min(1.0), growing));
            }
            tail += step;
            step *= self.x * (self.a + self.b + j) / (self.a + j + 1.0);
            weight *= self.mean / (j + 1.0);
            j += 1.0;
        }
    }

    fn at(&self, j: f64) -> Option<Tails> {
        beta::tails(self.a + j, self.b, self.x, self.y)
    }

    /// Where, on one side of the largest term, terms no longer count though their factors are no less than a double holds.
    fn end_of_sum(&self, peak: f64, side: f64, tail: impl Fn(Tails) -> f64) -> Option<(f64, Tails)> {
        let term = |j: f64| Some((poisson(j, self.mean) * tail(self.at(j)?), j));
        let (top, mut held) = term(peak)?;
        let mut distance = 1.0;
        loop {
            let (size, j) = term((peak + side * distance).max(0.0))?;
            if size >= f64::MIN_POSITIVE {
                held = j;
            }
            if j <= 0.0 || size <= NEGLIGIBLE * top {
                return Some((held, self.at(held)?));
            }
            distance *= 2.0;
        }
    }
}

/// The largest whole j below `limit` at which `rising` holds, given that it holds up to there and not beyond; −1 if it
/// never does.
fn last_rising(limit: f64, rising: impl Fn(f64) -> Option<bool>) -> Option<f64> {
    let (mut low, mut high) = (-1.0, limit.ceil());
    while high - low > 1.0 {
        let middle = f64::midpoint(low, high).floor();
        if rising(middle)? {
            low = middle;
        } else {
            high = middle;
        }
    }
    Some(low)
}

/// e^(−m) m^j / j!, for m ≥ 0.
fn poisson(j: f64, m: f64) -> f64 {
    if j > 0.0 { gamma_kernel(j, m) / j } else { (-m).exp() }
}
