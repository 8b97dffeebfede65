//! Integrals over the whole line by the trapezoidal rule.
//!
//! Invariant: integrands are positive and have one peak, so that no term is ever a difference, every sum keeps its
//! relative precision however small the integral is, and the way outward from the peak may end where terms no longer
//! count.

/// The share of the sum below which a term, and with it all those farther out, no longer counts.
const NEGLIGIBLE: f64 = 1e-18;
/// The change on halving the step at which the finer sum is taken: its own error is about the square of that.
const AGREEMENT: f64 = 1e-10;
/// How finely the peak is looked for, as a share of the width that is expected of it.
const FINEST_CLIMB: f64 = 1.0 / 64.0;
const MOST_CLIMBS: u32 = 4_000;
const MOST_HALVINGS: u32 = 14;
const MOST_TERMS: u32 = 4_000_000;

/// ∫ exp(`log_f`(u)) du over all u, for an analytic integrand with one peak that falls to the left no slower than
/// e^(`rate` u). The search for the peak begins at `start`, and `width` is about the standard deviation that the peak
/// would have if it were normal. `None` without convergence.
///
/// The rule converges exponentially for such integrands (Trefethen & Weideman 2014, *SIAM Review* 56:385).
pub(super) fn whole_line(start: f64, width: f64, rate: f64, log_f: impl Fn(f64) -> f64) -> Option<f64> {
    let (peak, top) = climb(start, width, &log_f);
    if top == f64::NEG_INFINITY {
        return Some(0.0);
    }
    let f = |u: f64| (log_f(u) - top).exp();
    let mut step = width / 2.0;
    let mut sum = step * (f(peak) + rightward(peak, step, f)? + leftward(peak, step, rate, f)?);
    for _ in 0..MOST_HALVINGS {
        let between = rightward(peak - step / 2.0, step, f)? + leftward(peak + step / 2.0, step, rate, f)?;
        let finer = f64::midpoint(sum, step * between);
        if (finer - sum).abs() <= AGREEMENT * finer {
            return Some(finer * top.exp());
        }
        (sum, step) = (finer, step / 2.0);
    }
    None
}

/// The place of the peak, roughly, and the height there.
fn climb(start: f64, width: f64, log_f: impl Fn(f64) -> f64) -> (f64, f64) {
    let (mut at, mut top, mut step) = (start, log_f(start), width);
    for _ in 0..MOST_CLIMBS {
        let next = log_f(at + step);
        if next > top {
            (at, top, step) = (at + step, next, 2.0 * step);
        } else if step.abs() < FINEST_CLIMB * width {
            break;
        } else {
            step *= -0.5;
        }
    }
    (at, top)
}

/// The sum of f at `from` + `step`, `from` + 2 `step`, and so on.
fn rightward(from: f64, step: f64, f: impl Fn(f64) -> f64) -> Option<f64> {
    let (mut sum, mut last) = (0.0, 0.0);
    for count in 1..MOST_TERMS {
        let term = f(from + f64::from(count) * step);
        sum += term;
        if ended(term, last, sum) {
            return Some(sum);
        }
        last = term;
    }
    None
}

/// The sum of f at `from` − `step`, `from` − 2 `step`, and so on. Where f has come to fall by the slowest rate there is,
/// what is left is a geometric series.
fn leftward(from: f64, step: f64, rate: f64, f: impl Fn(f64) -> f64) -> Option<f64> {
    let slowest = (-rate * step).exp();
    let (mut sum, mut last, mut geometric) = (0.0, 0.0, 0);
    for count in 1..MOST_TERMS {
        let term = f(from - f64::from(count) * step);
        sum += term;
        if ended(term, last, sum) {
            return Some(sum);
        }
        geometric = if (term / last / slowest - 1.0).abs() <= 4.0 * f64::EPSILON { geometric + 1 } else { 0 };
        if geometric > 2 {
            return Some(sum + term / (rate * step).exp_m1());
        }
        last = term;
    }
    None
}

fn ended(term: f64, last: f64, sum: f64) -> bool {
    term == 0.0 || term <= NEGLIGIBLE * sum && term <= last
}
