//! Means over the scale that a standard deviation on so many degrees of freedom has.
//!
//! Invariant: the density of the scale is formed from what is left of large logarithms, never from their difference.

use super::saddle::gamma_kernel;
use super::trapezoid;

/// E exp(`log_tail`(s)) for s = √(χ²_ν / ν): the step from a tail with known variance to one with an estimate of it.
///
/// With u = ln s, the density of u is 2 K exp(−a (e^(2u) − 1 − 2u)), a = ν/2, K = a^a e^(−a) / Γ(a). `start` is where
/// the search for the integrand's peak begins, as a value of u, and `widest` the width of anything sharp in the tail, on
/// the same scale.
pub(super) fn over_scale(df: f64, start: f64, widest: f64, log_tail: impl Fn(f64) -> f64) -> Option<f64> {
    let a = df / 2.0;
    let log_height = (2.0 * gamma_kernel(a, a)).ln();
    let width = (1.0 / (2.0 * df + 1.0).sqrt()).min(widest);
    let log_f = |u: f64| log_height - a * beyond_linear(2.0 * u) + log_tail(u.exp());
    trapezoid::whole_line(start, width, df, |u| if u < LARGEST_LOG { log_f(u) } else { f64::NEG_INFINITY })
}

/// From here on the density of u is 0 for any degrees of freedom.
const LARGEST_LOG: f64 = 300.0;

/// e^v − 1 − v.
fn beyond_linear(v: f64) -> f64 {
    if v.abs() > 0.3 {
        return v.exp_m1() - v;
    }
    let rest = (3..16).rev().fold(1.0, |rest, n| 1.0 + v / f64::from(n) * rest);
    v * v / 2.0 * rest
}
