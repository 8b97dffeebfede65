//! Quantiles of distributions on the positive half line.
//!
//! Invariant: the smaller of the two tails is matched, on the logarithmic scale, so a quantile at 1e-300 is as good as
//! one at 0.3; a bracket that only shrinks keeps every step of Newton's inside it.

use super::Tails;

/// The logarithms of the smallest and the largest argument searched.
const RANGE: (f64, f64) = (-745.0, 709.7);
/// How close to an end of the range the search stops where the quantile lies beyond it.
const EDGE: f64 = 1e-6;
const MOST_STEPS: u32 = 400;

/// The x > 0 at which `at(x)` has the tails `lower` and `upper`, two numbers that sum to 1 and of which the smaller is
/// held to full precision. 0 where x is too small for a double; `None` where it is too large or does not exist.
pub(super) fn positive(lower: f64, upper: f64, start: f64, at: impl Fn(f64) -> Option<Tails>) -> Option<f64> {
    if lower <= 0.0 {
        return Some(0.0);
    }
    if upper <= 0.0 {
        return None;
    }
    let matched = Matched { rising: lower <= upper, target: lower.min(upper).ln() };
    let log = search(start.ln(), |log| Some(matched.step(at(log.exp())?)))?;
    if log <= RANGE.0 + EDGE {
        return Some(0.0);
    }
    (log < RANGE.1 - EDGE).then(|| log.exp())
}

/// Which tail is to have which logarithm.
struct Matched {
    rising: bool,
    target: f64,
}

impl Matched {
    /// Newton's step towards the root of ln tail − target: positive if the root lies above.
    fn step(&self, tails: Tails) -> f64 {
        let tail = if self.rising { tails.lower } else { tails.upper };
        let towards = if self.rising { self.target - tail.ln() } else { tail.ln() - self.target };
        let step = towards * tail / tails.slope;
        if step.is_finite() { step } else { towards }
    }
}

/// Newton's method between bounds, with bisection where a step would leave them; a step that is not finite still tells
/// the side by its sign.
fn search(start: f64, step_at: impl Fn(f64) -> Option<f64>) -> Option<f64> {
    let (mut low, mut high) = RANGE;
    let mut x = start.clamp(low, high);
    for _ in 0..MOST_STEPS {
        let step = step_at(x)?;
        if step.abs() <= 2.0 * f64::EPSILON * x.abs().max(0.25) {
            return Some(x + step);
        }
        if step > 0.0 {
            low = x;
        } else {
            high = x;
        }
        let next = x + step;
        x = if low < next && next < high { next } else { low + (high - low) / 2.0 };
    }
    Some(x)
}
