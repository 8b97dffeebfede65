//! Contrasts among the levels of a within-subject factor, each with its own error.
//!
//! Invariants: a contrast is a number for each subject that has what it needs, and everything about it comes from those
//! numbers alone; families are adjusted one by one, over the contrasts that have a p value.

mod multiplicity;
mod polynomial;

use std::collections::BTreeMap;
use std::fmt;

pub use multiplicity::Multiplicity;

use crate::design::OneWithin;
use crate::distributions::StudentT;
use crate::moments::{Moments, rounding};
use crate::{Confidence, Interval, Note, Settings};

/// A family of contrasts to be asked for.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash)]
pub enum Family {
    /// Every pair of levels, the later minus the earlier.
    Pairwise,
    /// Every later level minus the first.
    EachVsFirst,
    /// Trends of every degree at the real spacing of the levels.
    Polynomial,
}

/// Which contrast it is; levels by index.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash)]
pub enum ContrastKind {
    /// `level` minus `against`, of all pairs.
    Pairwise {
        /// The later level.
        level: usize,
        /// The earlier level.
        against: usize,
    },
    /// `level` minus the first level.
    EachVsFirst {
        /// The later level.
        level: usize,
        /// The first level: always 0.
        against: usize,
    },
    /// The trend of one degree.
    Polynomial {
        /// 1 is linear, 2 quadratic, and so on.
        degree: usize,
    },
}

impl fmt::Display for ContrastKind {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self {
            Self::Pairwise { level, against } | Self::EachVsFirst { level, against } => {
                write!(f, "level {level} against level {against}")
            }
            Self::Polynomial { degree } => write!(f, "trend of degree {degree}"),
        }
    }
}

/// One contrast with its test: a *t* test of the subjects' contrast scores against zero.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Contrast {
    /// Which contrast.
    pub kind: ContrastKind,
    /// The subjects that have what it needs.
    pub n: usize,
    /// The mean of their scores, in the readings' unit; `None` where there are none.
    pub estimate: Option<f64>,
    /// SD / √n of the scores; `None` below two.
    pub se: Option<f64>,
    /// n − 1; `None` where there are none.
    pub df: Option<f64>,
    /// estimate / SE; `None` where that is infinite or undefined.
    pub t: Option<f64>,
    /// P(|T| > |t|); 0 where *t* is infinite.
    pub p: Option<f64>,
    /// `p` adjusted within the family.
    pub p_adjusted: Option<f64>,
    /// estimate ± t(n − 1) SE, not adjusted for the family.
    pub ci: Option<Interval>,
    /// estimate / SD of the scores (Cohen 1988, *Statistical Power Analysis for the Behavioral Sciences*, 2.3.5).
    pub dz: Option<f64>,
    /// estimate / mean of the two levels' SDs, over the same subjects (Cumming 2012, *Understanding the New Statistics*,
    /// chapter 11); `None` for trends.
    pub dav: Option<f64>,
}

/// The families that the settings ask for, in their order.
///
/// A pair uses all subjects that have both of its levels; a trend those that have all levels. Pairs come in the order of
/// the earlier level, then of the later; trends by degree. See Maxwell, Delaney & Kelley 2018, *Designing Experiments and
/// Analyzing Data*, chapters 11 and 12, for contrasts with their own error.
pub(crate) fn contrasts(design: &OneWithin, settings: &Settings, notes: &mut Vec<Note>) -> Vec<Contrast> {
    let mut tests = Tests::new(settings.confidence);
    settings
        .contrasts
        .iter()
        .flat_map(|&family| one_family(design, family, settings.multiplicity, &mut tests, notes))
        .collect()
}

fn one_family(
    design: &OneWithin,
    family: Family,
    adjust: Multiplicity,
    tests: &mut Tests,
    notes: &mut Vec<Note>,
) -> Vec<Contrast> {
    let mut found = match family {
        Family::Pairwise => pairwise(design, tests),
        Family::EachVsFirst => each_vs_first(design, tests),
        Family::Polynomial => trends(design, tests, notes),
    };
    let adjusted = adjust.adjust(&found.iter().map(|contrast| contrast.p).collect::<Vec<_>>());
    found.iter_mut().zip(adjusted).for_each(|(contrast, p)| contrast.p_adjusted = p);
    notes.extend(found.iter().filter_map(note));
    found
}

/// Why a contrast has no *t*, if it has none.
fn note(contrast: &Contrast) -> Option<Note> {
    match (contrast.n, contrast.t) {
        (subjects @ 0..=1, _) => Some(Note::TooFewForContrast { contrast: contrast.kind, subjects }),
        (_, None) => Some(Note::NoSpreadInContrast { contrast: contrast.kind }),
        _ => None,
    }
}

fn pairwise(design: &OneWithin, tests: &mut Tests) -> Vec<Contrast> {
    let levels = Levels::of(design);
    let pairs =
        (0..design.levels()).flat_map(|against| (against + 1..design.levels()).map(move |level| (level, against)));
    pairs
        .map(|(level, against)| levels.compare(ContrastKind::Pairwise { level, against }, level, against, tests))
        .collect()
}

fn each_vs_first(design: &OneWithin, tests: &mut Tests) -> Vec<Contrast> {
    let levels = Levels::of(design);
    let later = 1..design.levels();
    later.map(|level| levels.compare(ContrastKind::EachVsFirst { level, against: 0 }, level, 0, tests)).collect()
}

/// The readings by level, with the moments of each level on its own.
struct Levels {
    readings: Vec<Vec<Option<f64>>>,
    moments: Vec<Moments>,
}

impl Levels {
    fn of(design: &OneWithin) -> Self {
        let level = |level: usize| design.rows().map(|row| row.get(level).copied().flatten()).collect::<Vec<_>>();
        let readings: Vec<Vec<Option<f64>>> = (0..design.levels()).map(level).collect();
        let moments = readings
            .iter()
            .map(|level| Moments::of_readings(&level.iter().flatten().copied().collect::<Vec<_>>()))
            .collect();
        Self { readings, moments }
    }

    fn compare(&self, kind: ContrastKind, later: usize, earlier: usize, tests: &mut Tests) -> Contrast {
        let (later_values, earlier_values) = self.pairs(later, earlier);
        let differences: Vec<f64> = later_values.iter().zip(&earlier_values).map(|(y, x)| y - x).collect();
        let noise = rounding(later_values.iter().chain(&earlier_values).copied());
        let moments = Moments::of(&differences, noise);
        let sds = (self.sd(later, &later_values), self.sd(earlier, &earlier_values));
        Contrast { dav: dav(moments, sds), ..tests.of_scores(kind, moments) }
    }

    /// The readings of the subjects that have both levels.
    fn pairs(&self, later: usize, earlier: usize) -> (Vec<f64>, Vec<f64>) {
        let both = self.readings.get(later).into_iter().flatten().zip(self.readings.get(earlier).into_iter().flatten());
        both.filter_map(|(&y, &x)| y.zip(x)).unzip()
    }

    /// The SD of one level over a pair's subjects; known already if no reading of the level dropped out.
    fn sd(&self, level: usize, of_pair: &[f64]) -> Option<f64> {
        match self.moments.get(level) {
            Some(whole) if whole.n == of_pair.len() => whole.sd(),
            _ => Moments::of_readings(of_pair).sd(),
        }
    }
}

fn dav(differences: Moments, (later, earlier): (Option<f64>, Option<f64>)) -> Option<f64> {
    let mean_sd = f64::midpoint(later?, earlier?);
    (mean_sd > 0.0).then(|| differences.mean / mean_sd)
}

fn trends(design: &OneWithin, tests: &mut Tests, notes: &mut Vec<Note>) -> Vec<Contrast> {
    let Some(positions) = design.positions() else {
        notes.push(Note::TrendsNeedPositions);
        return Vec::new();
    };
    let coefficients = polynomial::orthonormal(positions);
    if coefficients.len() + 1 < design.levels() {
        notes.push(Note::TrendsIndistinct { degree: coefficients.len() + 1 });
    }
    let table = design.complete_table();
    let noise = rounding(table.values().iter().copied());
    let trend = |(degree, coefficients): (usize, &Vec<f64>)| {
        let scores: Vec<f64> = table.rows().map(|row| score(row, coefficients)).collect();
        tests.of_scores(ContrastKind::Polynomial { degree }, Moments::of(&scores, noise))
    };
    (1..).zip(&coefficients).map(trend).collect()
}

/// Σ c_j (y_j − y_1): the coefficients sum to zero only to rounding, which must not meet the offset of the readings.
fn score(row: &[f64], coefficients: &[f64]) -> f64 {
    let first = row.first().copied().unwrap_or(0.0);
    row.iter().zip(coefficients).map(|(y, c)| c * (y - first)).sum()
}

/// Student's test of scores against zero; remembers the critical value of each number of degrees of freedom.
struct Tests {
    confidence: Confidence,
    critical: BTreeMap<usize, Option<f64>>,
}

impl Tests {
    fn new(confidence: Confidence) -> Self {
        Self { confidence, critical: BTreeMap::new() }
    }

    fn of_scores(&mut self, kind: ContrastKind, scores: Moments) -> Contrast {
        let estimate = (scores.n > 0).then_some(scores.mean);
        let (t, p) = student(scores);
        Contrast {
            kind,
            n: scores.n,
            estimate,
            se: scores.se(),
            df: scores.n.checked_sub(1).map(|df| df as f64),
            t,
            p,
            p_adjusted: None,
            ci: self.interval(scores),
            dz: scores.sd().filter(|&sd| sd > 0.0).map(|sd| scores.mean / sd),
            dav: None,
        }
    }

    fn interval(&mut self, scores: Moments) -> Option<Interval> {
        let se = scores.se()?;
        Some(Interval::around(scores.mean, self.critical(scores.n - 1)? * se))
    }

    fn critical(&mut self, df: usize) -> Option<f64> {
        let level = self.confidence.level();
        *self.critical.entry(df).or_insert_with(|| StudentT::new(df as f64).ok()?.critical(level))
    }
}

/// *t* and its two-sided p; an infinite *t* is `None` with p = 0.
fn student(scores: Moments) -> (Option<f64>, Option<f64>) {
    match scores.se() {
        Some(se) if se > 0.0 => {
            let t = scores.mean / se;
            let p = StudentT::new(scores.n as f64 - 1.0).ok().and_then(|d| d.two_sided(t));
            (Some(t), p)
        }
        Some(_) if scores.mean != 0.0 => (None, Some(0.0)),
        _ => (None, None),
    }
}
