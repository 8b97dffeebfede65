//! Values of subjects who do not exist: a subject's own level, what each visit adds, and noise.
//!
//! Invariant: a subject's values depend on the seed and the subject's code alone.

use crate::chance::Chance;

/// How a measure behaves.
struct Law {
    level: f64,
    between: f64,
    gain: [f64; VISITS],
    noise: f64,
}

/// Visits of the study.
pub const VISITS: usize = 4;

const RISE: Law = Law { level: 14.2, between: 2.1, gain: [0.0, -0.7, -1.3, -1.6], noise: 0.6 };
const WALK: Law = Law { level: 1.04, between: 0.15, gain: [0.0, 0.03, 0.05, 0.08], noise: 0.05 };
const GRIP: Law = Law { level: 23.5, between: 3.6, gain: [0.0, 0.5, 1.0, 1.3], noise: 0.9 };
const SWAY: Law = Law { level: 21.0, between: 3.8, gain: [0.0, -0.6, -1.3, -1.6], noise: 1.5 };
const WEIGHT: Law = Law { level: 68.0, between: 7.5, gain: [0.0, -0.1, -0.3, -0.4], noise: 0.5 };

/// What one subject's instruments show at one visit.
#[derive(Debug, Clone, PartialEq)]
pub struct Shown {
    /// Five rises, in seconds.
    pub rise: f64,
    /// Walking speed in metres a second.
    pub walk: f64,
    /// Grip in kilograms: left and right of each of two trials.
    pub grip: [[f64; 2]; 2],
    /// Sway path in centimetres: eyes open and closed of each of two runs.
    pub sway: [[f64; 2]; 2],
    /// Weight in kilograms.
    pub weight: f64,
}

/// What a subject's instruments would show at every visit.
pub fn of_subject(seed: u64, code: &str, male: bool) -> [Shown; VISITS] {
    let mut chance = Chance::new(seed, code);
    let mut own = |law: &Law| law.level + chance.spread(law.between);
    let (rise, walk, mut grip, sway, mut weight) = (own(&RISE), own(&WALK), own(&GRIP), own(&SWAY), own(&WEIGHT));
    if male {
        grip += 9.0;
        weight += 8.0;
    }
    std::array::from_fn(|visit| {
        let mut at =
            |law: &Law, own: f64, more: f64| (own + more + law.gain[visit] + chance.spread(law.noise)).max(0.1);
        let pair = |left: f64, right: f64| [left, right];
        Shown {
            rise: at(&RISE, rise, 0.0),
            walk: at(&WALK, walk, 0.0),
            grip: std::array::from_fn(|_| pair(at(&GRIP, grip, 0.0), at(&GRIP, grip, 1.8))),
            sway: std::array::from_fn(|_| pair(at(&SWAY, sway, 0.0), at(&SWAY, sway, 9.5))),
            weight: at(&WEIGHT, weight, 0.0),
        }
    })
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_subject_is_the_same_for_the_same_seed_alone() {
        assert_eq!(of_subject(7, "QR-101", false), of_subject(7, "QR-101", false));
        assert_ne!(of_subject(7, "QR-101", false), of_subject(8, "QR-101", false));
        assert_ne!(of_subject(7, "QR-101", false), of_subject(7, "QR-112", false));
    }
}
