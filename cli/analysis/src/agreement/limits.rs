//! Limits of agreement of pairs of levels, and the points of their plot.
//!
//! Invariant: a difference is later minus earlier level, of the subjects that have both.

use super::USUAL;
use crate::contrasts::ContrastKind;
use crate::design::OneWithin;
use crate::distributions::StudentT;
use crate::moments::{Moments, rounding};
use crate::{Confidence, Interval, Note};

/// The limits within which 95 % of differences between two levels lie (Bland & Altman 1986, *Lancet* i:307; 1999,
/// *Statistical Methods in Medical Research* 8:135), in the readings' unit.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Limits {
    /// The later level.
    pub level: usize,
    /// The earlier level.
    pub against: usize,
    /// The subjects that have both.
    pub n: usize,
    /// The mean difference; `None` where there are none.
    pub bias: Option<f64>,
    /// The SD of the differences; `None` below two.
    pub sd: Option<f64>,
    /// bias − 1.96 SD.
    pub lower: Option<f64>,
    /// bias + 1.96 SD.
    pub upper: Option<f64>,
    /// bias ± t(n − 1) SD / √n.
    pub bias_ci: Option<Interval>,
    /// lower ± t(n − 1) SE, SE = SD √(1 / n + 1.96² / (2 (n − 1))) (Bland & Altman 1999, section 3).
    pub lower_ci: Option<Interval>,
    /// upper ± the same.
    pub upper_ci: Option<Interval>,
}

/// A subject in the plot of differences against means.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Point {
    /// The subject (index of the design).
    pub subject: usize,
    /// The mean of its two readings.
    pub mean: f64,
    /// Later minus earlier reading.
    pub difference: f64,
}

/// The points of the plot of differences against means, for the subjects that have both levels, in their order (Bland &
/// Altman 1986). Empty where a level does not exist.
#[must_use]
pub fn difference_against_mean(design: &OneWithin, level: usize, against: usize) -> Vec<Point> {
    let points = design.rows().enumerate().filter_map(|(subject, row)| {
        let (y, x) = (row.get(level).copied().flatten()?, row.get(against).copied().flatten()?);
        Some(Point { subject, mean: f64::midpoint(y, x), difference: y - x })
    });
    points.collect()
}

pub(super) fn limits(design: &OneWithin, confidence: Confidence, notes: &mut Vec<Note>) -> Vec<Limits> {
    let levels = design.levels();
    let pairs = (0..levels).flat_map(|against| (against + 1..levels).map(move |level| (level, against)));
    pairs.map(|(level, against)| one_pair(design, level, against, confidence, notes)).collect()
}

fn one_pair(design: &OneWithin, level: usize, against: usize, confidence: Confidence, notes: &mut Vec<Note>) -> Limits {
    let both =
        design.rows().filter_map(|row| row.get(level).copied().flatten().zip(row.get(against).copied().flatten()));
    let (later, earlier): (Vec<f64>, Vec<f64>) = both.unzip();
    let differences: Vec<f64> = later.iter().zip(&earlier).map(|(y, x)| y - x).collect();
    let moments = Moments::of(&differences, rounding(later.iter().chain(&earlier).copied()));
    if moments.n < 2 {
        let contrast = ContrastKind::Pairwise { level, against };
        notes.push(Note::TooFewForContrast { contrast, subjects: moments.n });
    }
    let critical = moments.n.checked_sub(1).and_then(|df| StudentT::new(df as f64).ok()?.critical(confidence.level()));
    of_moments(level, against, moments, critical)
}

fn of_moments(level: usize, against: usize, moments: Moments, critical: Option<f64>) -> Limits {
    let (n, bias, sd) = (moments.n as f64, (moments.n > 0).then_some(moments.mean), moments.sd());
    let half = |se: Option<f64>| critical.zip(se).map(|(t, se)| t * se);
    let of_limit = half(sd.map(|sd| sd * (1.0 / n + USUAL * USUAL / (2.0 * (n - 1.0))).sqrt()));
    let limit = |sds: f64| bias.zip(sd).map(|(bias, sd)| bias + sds * sd);
    let around = |centre: Option<f64>, half: Option<f64>| centre.zip(half).map(|(c, half)| Interval::around(c, half));
    let (lower, upper) = (limit(-USUAL), limit(USUAL));
    Limits {
        level,
        against,
        n: moments.n,
        bias,
        sd,
        lower,
        upper,
        bias_ci: around(bias, half(moments.se())),
        lower_ci: around(lower, of_limit),
        upper_ci: around(upper, of_limit),
    }
}
