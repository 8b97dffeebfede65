//! What the same readings would have given if nobody had known who was who.
//!
//! Invariant: the variation between subjects is error here, added to the residual and never obtained by subtraction.

use super::decomposition::{Decomposition, Line};
use super::effect::Ratio;

/// One-way analysis of variance of the readings as if each came from another subject.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct IfUnlinked {
    /// Effect MS / unlinked error MS; `None` where that is infinite or undefined.
    pub f: Option<f64>,
    /// k − 1.
    pub df: f64,
    /// k (n − 1).
    pub error_df: f64,
    /// P(F > f); 0 where *F* is infinite.
    pub p: Option<f64>,
    /// Unlinked error MS / residual MS: what following the same subjects has bought, as the factor by which the number
    /// of readings would have to grow for the same precision without it. `None` where the residual is zero.
    pub variance_ratio: Option<f64>,
}

/// F = effect MS / ((subject SS + residual SS) / (k (n − 1))) (Fisher 1925, *Statistical Methods for Research Workers*,
/// VII; compare the efficiency of blocking in Cochran & Cox 1957, *Experimental Designs*, chapter 4). `None` with fewer
/// than two levels or two subjects.
pub(super) fn if_unlinked(parts: &Decomposition, rounding: f64) -> Option<IfUnlinked> {
    let residual_ms = parts.residual.ms?;
    let error = Line::new(parts.subject.ss + parts.residual.ss, parts.subject.df + parts.residual.df);
    let (df, error_df) = (parts.effect.df, error.df);
    let f = Ratio::of(parts.effect, error, rounding);
    Some(IfUnlinked {
        f: f.finite(),
        df,
        error_df,
        p: f.p(df, error_df),
        variance_ratio: error.ms.filter(|_| parts.residual.ss > rounding).map(|ms| ms / residual_ms),
    })
}
