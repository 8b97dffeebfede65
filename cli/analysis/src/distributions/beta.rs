//! The regularised incomplete beta function, both tails.
//!
//! Invariant: the continued fraction is used only on the side of the mean where it converges fast; the far side is its
//! complement, and there the complement is not small.

use super::Tails;
use super::saddle::beta_kernel;

/// Terms after which the fraction is given up; at the largest degrees of freedom accepted a tenth of it is used.
const MOST_TERMS: u32 = 10_000_000;

/// `lower` = I_x(a, b), `upper` = I_y(b, a) for y = 1 − x, `slope` = x^a y^b / B(a, b); `None` without convergence.
///
/// Relative error about 1e-13 while the kernel is not subnormal. DiDonato & Morris 1992, *ACM Transactions on
/// Mathematical Software* 18:360, for the fraction; Loader 2000 for the kernel.
pub(super) fn tails(a: f64, b: f64, x: f64, y: f64) -> Option<Tails> {
    if x > (a + 1.0) / (a + b + 2.0) {
        return near(b, a, y, x).map(Tails::swapped);
    }
    near(a, b, x, y)
}

/// The tails for x on the near side of the mean.
fn near(a: f64, b: f64, x: f64, y: f64) -> Option<Tails> {
    let slope = beta_kernel(a, b, x, y);
    let lower = if slope > 0.0 { (slope / fraction(a, b, x, y)?).min(1.0) } else { 0.0 };
    Some(Tails { lower, upper: 1.0 - lower, slope })
}

/// The denominator β₀ + α₁ / (β₁ + α₂ / (β₂ + …)) of I_x(a, b) = kernel / denominator, by the method of Lentz as
/// modified by Thompson & Barnett 1986, *Journal of Computational Physics* 64:490.
fn fraction(a: f64, b: f64, x: f64, y: f64) -> Option<f64> {
    let lambda = a * y - b * x + 1.0;
    let beta = |m: f64| {
        let odd = a + 2.0 * m - 1.0;
        let tail = if m == 0.0 { 0.0 } else { m * (b - m) * x / odd };
        m + tail + (a + m) * (lambda + m * (1.0 + y)) / (odd + 2.0)
    };
    let mut value = beta(0.0);
    let (mut c, mut d) = (value, 0.0);
    for term in 1..MOST_TERMS {
        let m = f64::from(term);
        let odd = a + 2.0 * m - 1.0;
        let alpha = (a + m - 1.0) / odd * ((a + b + m - 1.0) / odd) * m * (b - m) * x * x;
        d = 1.0 / (beta(m) + alpha * d);
        c = beta(m) + alpha / c;
        value *= c * d;
        if (c * d - 1.0).abs() <= f64::EPSILON {
            return Some(value);
        }
    }
    None
}
