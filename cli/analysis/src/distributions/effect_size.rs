//! Intervals for the size of an effect.
//!
//! Invariant: the ends are non-centralities at which the observed *F* is just as extreme as the confidence allows, so an
//! interval excludes 0 exactly where the test at half the remaining error does.

use super::NonCentralF;
use crate::{Confidence, Interval};

/// The confidence interval of a population's partial eta squared, λ / (λ + n), from an observed *F* on `df` and
/// `error_df` degrees of freedom, by inverting the non-central *F* distribution (Steiger 2004, *Psychological Methods*
/// 9:164; Smithson 2001, *Educational and Psychological Measurement* 61:605).
///
/// λ's lower end leaves half of what the confidence does not cover above `f`, its upper end leaves half below; an end
/// that no λ gives is 0. `n` is the number of observations that the effect is spread over: all of them in a design
/// between subjects, where it equals `df` + `error_df` + 1; for an effect within subjects that same sum, so that the
/// interval belongs to the partial eta squared that F df / (F df + `error_df`) estimates. With degrees of freedom
/// corrected for sphericity, give the corrected ones. Exact where the effect's *F* follows a non-central *F*.
///
/// `None` where `f` is not finite or is negative, `n` is not positive, or the degrees of freedom are unusable.
#[must_use]
pub fn effect_size_interval(f: f64, df: f64, error_df: f64, n: f64, confidence: Confidence) -> Option<Interval> {
    if n.is_nan() || n <= 0.0 {
        return None;
    }
    let tail = (1.0 - confidence.level()) / 2.0;
    let share = |lambda: f64| lambda / (lambda + n);
    let lower = NonCentralF::noncentrality_with_sf(df, error_df, f, tail)?;
    let upper = NonCentralF::noncentrality_with_cdf(df, error_df, f, tail)?;
    Some(Interval { lower: share(lower), upper: share(upper.max(lower)) })
}
