//! The regularised incomplete gamma function, both tails.
//!
//! Invariant: the series serves below the mean and the continued fraction above; each gives the small tail itself.

use super::Tails;
use super::saddle::gamma_kernel;

/// Terms after which a sum or fraction is given up; about √a of them are used.
const MOST_TERMS: u32 = 10_000_000;

/// `lower` = P(a, x), `upper` = Q(a, x), `slope` = x^a e^(−x) / Γ(a); `None` without convergence.
///
/// Relative error about 1e-13. Gautschi 1979, *ACM Transactions on Mathematical Software* 5:466 (series and fraction);
/// Loader 2000 (kernel).
pub(super) fn tails(a: f64, x: f64) -> Option<Tails> {
    let slope = gamma_kernel(a, x);
    if x <= a + 1.0 {
        let lower = if slope > 0.0 { (slope * series(a, x)?).min(1.0) } else { 0.0 };
        return Some(Tails { lower, upper: 1.0 - lower, slope });
    }
    let upper = if slope > 0.0 { (slope / fraction(a, x)?).min(1.0) } else { 0.0 };
    Some(Tails { lower: 1.0 - upper, upper, slope })
}

/// Σ xⁿ / (a (a + 1) … (a + n)).
fn series(a: f64, x: f64) -> Option<f64> {
    let (mut term, mut sum) = (1.0 / a, 1.0 / a);
    for n in 1..MOST_TERMS {
        term *= x / (a + f64::from(n));
        sum += term;
        if term <= sum * 0.25 * f64::EPSILON {
            return Some(sum);
        }
    }
    None
}

/// The denominator of Q = kernel / (x + 1 − a − 1 (1 − a) / (x + 3 − a − 2 (2 − a) / …)), by modified Lentz.
fn fraction(a: f64, x: f64) -> Option<f64> {
    let mut value = x + 1.0 - a;
    let (mut c, mut d) = (value, 0.0);
    for term in 1..MOST_TERMS {
        let m = f64::from(term);
        let (alpha, beta) = (m * (a - m), x + 2.0 * m + 1.0 - a);
        d = 1.0 / (beta + alpha * d);
        c = beta + alpha / c;
        value *= c * d;
        if (c * d - 1.0).abs() <= f64::EPSILON {
            return Some(value);
        }
    }
    None
}
