//! The non-central *t* distribution.
//!
//! Invariant: both tails come from one integral whose integrand is positive, so neither is ever a difference.

use super::mixture::over_scale;
use super::normal::log_cdf;
use super::{ParameterError, degrees};

/// The non-central *t* distribution with `df` degrees of freedom, which need not be whole: that of (Z + δ) / √(χ²_ν / ν).
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct NonCentralT {
    df: f64,
    noncentrality: f64,
}

/// The largest magnitude of a non-centrality of *t* that is accepted.
const MOST_SHIFT: f64 = 1e3;

impl NonCentralT {
    /// # Errors
    /// [`ParameterError`] unless `df` lies between [`FEWEST`](super::FEWEST) and [`MOST`](super::MOST), and
    /// `noncentrality` between −1000 and 1000.
    pub fn new(df: f64, noncentrality: f64) -> Result<Self, ParameterError> {
        let df = degrees(df)?;
        if noncentrality.abs() <= MOST_SHIFT {
            return Ok(Self { df, noncentrality });
        }
        Err(ParameterError::Noncentrality { given: noncentrality, least: -MOST_SHIFT, most: MOST_SHIFT })
    }

    /// P(T ≤ t) = P(−T ≥ −t), and −T has the non-centrality −δ; `None` for NaN.
    #[must_use]
    pub fn cdf(self, t: f64) -> Option<f64> {
        Self { noncentrality: -self.noncentrality, ..self }.sf(-t)
    }

    /// P(T > t) = E Φ(δ − t s), s = √(χ²_ν / ν) (Johnson & Welch 1940, *Biometrika* 31:362); `None` for NaN.
    #[must_use]
    pub fn sf(self, t: f64) -> Option<f64> {
        if t.is_nan() {
            return None;
        }
        let delta = self.noncentrality;
        if t.is_infinite() {
            return Some(if t > 0.0 { 0.0 } else { 1.0 });
        }
        // Where t s passes δ, the tail falls from 1 to 0 within about 1/δ on the scale of ln s.
        let sharpest = 1.0 / (1.0 + delta.abs());
        over_scale(self.df, 0.0, sharpest, |s| log_cdf(delta - t * s)).map(|p| p.min(1.0))
    }
}
