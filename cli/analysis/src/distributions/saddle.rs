//! The densities at the heart of the incomplete beta and gamma functions, to full relative precision.
//!
//! Invariant: large logarithms are never subtracted from each other; what is left of them is computed directly, by the
//! saddle-point expansion of Loader 2000, *Fast and accurate computation of binomial probabilities*.

use std::f64::consts::PI;

use statrs::function::gamma::ln_gamma;

/// The coefficients of Stirling's series, B₂ₖ / (2k (2k − 1)) (Abramowitz & Stegun 1964, 6.1.40).
const STIRLING: [f64; 8] = [
    1.0 / 12.0,
    -1.0 / 360.0,
    1.0 / 1260.0,
    -1.0 / 1680.0,
    1.0 / 1188.0,
    -691.0 / 360_360.0,
    1.0 / 156.0,
    -3617.0 / 122_400.0,
];

/// δ(n) = ln Γ(n + 1) − (n + ½) ln n + n − ½ ln 2π, the error of Stirling's formula; n > 0.
fn stirling_error(n: f64) -> f64 {
    if n < 10.0 {
        return ln_gamma(n + 1.0) - (n + 0.5) * n.ln() + n - 0.5 * (2.0 * PI).ln();
    }
    let step = 1.0 / (n * n);
    STIRLING.iter().rev().fold(0.0, |rest, term| rest * step + term) / n
}

/// The deviance D(a, m) = a ln(a / m) + m − a, exact where the two are close; a > 0, m > 0.
fn deviance(a: f64, m: f64) -> f64 {
    let v = (a - m) / (a + m);
    if v.abs() >= 0.1 {
        return a * (a.ln() - m.ln()) + (m - a);
    }
    // a ln(a/m) = 2 a artanh(v); the first term of its series joins m − a to make (a − m) v.
    let (mut sum, mut power, mut k) = ((a - m) * v, 2.0 * a * v, 1.0);
    loop {
        power *= v * v;
        k += 2.0;
        let next = sum + power / k;
        if next == sum {
            return sum;
        }
        sum = next;
    }
}

/// x^a y^b / B(a, b) for y = 1 − x, both given so that neither loses digits.
pub(super) fn beta_kernel(a: f64, b: f64, x: f64, y: f64) -> f64 {
    if x <= 0.0 || y <= 0.0 {
        return 0.0;
    }
    let n = a + b;
    let log = stirling_error(n) - stirling_error(a) - stirling_error(b) - deviance(a, n * x) - deviance(b, n * y);
    (a / n * b / (2.0 * PI)).sqrt() * log.exp()
}

/// x^a e^(−x) / Γ(a).
pub(super) fn gamma_kernel(a: f64, x: f64) -> f64 {
    if x <= 0.0 || !x.is_finite() {
        return 0.0;
    }
    (a / (2.0 * PI)).sqrt() * (-stirling_error(a) - deviance(a, x)).exp()
}
