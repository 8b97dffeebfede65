//! The error within subjects.
//!
//! Invariants: every reading of a subject with two or more counts, however many others have; only deviations from a
//! subject's own mean are squared.

use super::USUAL;
use crate::design::OneWithin;
use crate::distributions::ChiSquare;
use crate::moments::{Moments, Sum, rounding};
use crate::{Confidence, Interval, Note};

/// How much readings of one subject differ.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Within {
    /// Σ over subjects of (readings − 1).
    pub df: f64,
    /// s_w = √(Σ (y_ij − ȳ_i)² / df), in the readings' unit: from one-way analysis of variance, with any numbers of readings
    /// (Bland & Altman 1996, *BMJ* 313:744). `None` where no subject has two readings.
    pub sd: Option<f64>,
    /// s_w √(df / χ²), at the quantiles of chi-square.
    pub sd_ci: Option<Interval>,
    /// 1.96 √2 s_w: two readings of one subject differ by less than this 95 times in 100 (Bland & Altman 1986, *Lancet*
    /// i:307, with 1.96 for their 2).
    pub repeatability: Option<f64>,
    /// The root of the mean over subjects with two readings or more of (SD / mean)², as a proportion (Bland 2000, *An
    /// Introduction to Medical Statistics*, 15.2, root mean square method). `None` where a subject's mean is zero; of
    /// little use where readings have both signs.
    pub cv: Option<f64>,
    /// The one-way analysis of all readings.
    pub one_way: Option<OneWay>,
}

/// One-way analysis of variance of subjects with any numbers of readings.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct OneWay {
    /// Subjects with a reading, m.
    pub subjects: usize,
    /// Readings, N.
    pub readings: usize,
    /// (N − Σ n_i² / N) / (m − 1): the number of readings of a subject, in effect (Snedecor & Cochran 1989, *Statistical
    /// Methods*, 13.7).
    pub n0: f64,
    /// (B − W) / (B + (n0 − 1) W) with mean squares between and within subjects: ICC(1) from all readings, whose other
    /// form is from complete subjects. `None` where neither varies.
    pub icc: Option<f64>,
}

pub(super) fn within(design: &OneWithin, confidence: Confidence, notes: &mut Vec<Note>) -> Within {
    let subjects: Vec<Vec<f64>> = design
        .rows()
        .map(|row| row.iter().flatten().copied().collect())
        .filter(|own: &Vec<f64>| !own.is_empty())
        .collect();
    let noise = rounding(subjects.iter().flatten().copied());
    let df = subjects.iter().map(|own| own.len() as f64 - 1.0).sum::<f64>();
    if df <= 0.0 {
        notes.push(Note::NoRepeatedReading);
        return Within { df, sd: None, sd_ci: None, repeatability: None, cv: None, one_way: None };
    }
    let ss = Sum::of(subjects.iter().flat_map(|own| deviations(own))).value();
    let ss = if ss <= noise { 0.0 } else { ss };
    let sd = (ss / df).sqrt();
    Within {
        df,
        sd: Some(sd),
        sd_ci: interval(sd, df, confidence),
        repeatability: Some(USUAL * 2.0_f64.sqrt() * sd),
        cv: cv(&subjects, notes),
        one_way: one_way(&subjects, ss / df, noise),
    }
}

fn deviations(own: &[f64]) -> impl Iterator<Item = f64> {
    let mean = Sum::of(own.iter().copied()).over(own.len());
    own.iter().map(move |&y| mean.below(y).value().powi(2))
}

fn interval(sd: f64, df: f64, confidence: Confidence) -> Option<Interval> {
    let (chi2, tail) = (ChiSquare::new(df).ok()?, (1.0 - confidence.level()) / 2.0);
    let end = |quantile: f64| sd * (df / quantile).sqrt();
    let (lower, upper) = (end(chi2.upper_quantile(tail)?), end(chi2.quantile(tail)?));
    upper.is_finite().then_some(Interval { lower, upper })
}

fn cv(subjects: &[Vec<f64>], notes: &mut Vec<Note>) -> Option<f64> {
    let repeated: Vec<&Vec<f64>> = subjects.iter().filter(|own| own.len() > 1).collect();
    if repeated.iter().copied().flatten().any(|y| *y < 0.0) && repeated.iter().copied().flatten().any(|y| *y > 0.0) {
        notes.push(Note::CvOfBothSigns);
    }
    let squares: Option<Vec<f64>> = repeated.iter().map(|own| squared_cv(own)).collect();
    if squares.is_none() {
        notes.push(Note::CvUndefined);
    }
    let squares = squares?;
    Some((squares.iter().sum::<f64>() / squares.len() as f64).sqrt())
}

/// `None` where the mean is zero, as far as doubles can tell.
fn squared_cv(own: &[f64]) -> Option<f64> {
    let moments = Moments::of_readings(own);
    let noise = rounding(own.iter().copied());
    let square = (moments.sd()? / moments.mean).powi(2);
    (own.len() as f64 * moments.mean.powi(2) > noise).then_some(square).filter(|square| square.is_finite())
}

fn one_way(subjects: &[Vec<f64>], within_ms: f64, noise: f64) -> Option<OneWay> {
    let (m, readings) = (subjects.len(), subjects.iter().map(Vec::len).sum::<usize>());
    if m < 2 {
        return None;
    }
    let (n, df) = (readings as f64, m as f64 - 1.0);
    let grand = Sum::of(subjects.iter().flatten().copied()).over(readings);
    let between = subjects.iter().map(|own| {
        let mean = Sum::of(own.iter().copied()).over(own.len());
        own.len() as f64 * mean.minus(grand).value().powi(2)
    });
    let between = Sum::of(between).value();
    let between_ms = if between <= noise { 0.0 } else { between / df };
    let n0 = (n - subjects.iter().map(|own| (own.len() as f64).powi(2)).sum::<f64>() / n) / df;
    let whole = between_ms + (n0 - 1.0) * within_ms;
    Some(OneWay { subjects: m, readings, n0, icc: (whole > 0.0).then(|| (between_ms - within_ms) / whole) })
}
