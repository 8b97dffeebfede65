//! Contrasts in a design of any number of factors, family by family.
//!
//! Invariants: a comparison uses every subject that has the cells it needs, and no other; a family is adjusted by itself.

use std::borrow::Cow;
use std::collections::BTreeMap;

use super::Family;
use super::groups::group_differences;
use super::polynomial;
use super::score::{Scores, Tests, split};
use super::simple;
use crate::anova::{About, Remark, Term};
use crate::design::{At, Design, Factor, FactorId};
use crate::distributions::StudentT;
use crate::moments::{Moments, rounding, rounding_of};
use crate::{Confidence, Interval, Note, Settings};

/// What is compared; factors by their index among those of their kind, levels by index.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash)]
pub enum Compared {
    /// `level` minus `against`, of all pairs of a within factor.
    Pairwise {
        /// The within factor.
        factor: usize,
        /// The later level.
        level: usize,
        /// The earlier level.
        against: usize,
    },
    /// `level` minus the first level of a within factor.
    EachVsFirst {
        /// The within factor.
        factor: usize,
        /// The later level.
        level: usize,
        /// The first level: always 0.
        against: usize,
    },
    /// The trend of one degree over a within factor.
    Polynomial {
        /// The within factor.
        factor: usize,
        /// 1 is linear, 2 quadratic, and so on.
        degree: usize,
    },
    /// The groups at `level` of a between factor minus those at `against`.
    Effect {
        /// The between factor.
        factor: usize,
        /// The later level.
        level: usize,
        /// The first level: always 0.
        against: usize,
    },
}

/// One comparison with its test.
///
/// Within subjects, a subject's score is the contrast of its levels, each the mean over the cells of the other within
/// factors; the estimate is the mean of the scores, the error their spread within groups: with [`Sums`](crate::Sums) of type
/// III the mean of the groups' means, SE = SD √(Σ_g 1 / n_g) / groups, with type II that of all subjects, SE = SD / √n, so
/// that t² is the *F* of two levels; SD² = Σ_g SS_g / (n − groups) (Maxwell, Delaney & Kelley 2018, *Designing Experiments
/// and Analyzing Data*, chapters 11 to 15, contrasts with separate error terms; Boik 1981, *Psychometrika* 46:241).
/// Groups of which nobody has what it needs are not in the mean. Between subjects, see [`Family::Groups`] and [`Compared::Effect`]: the unweighted mean of the groups at one level
/// minus that at the other, SD² that of the scores within all groups.
#[derive(Debug, Clone, PartialEq)]
pub struct Comparison {
    /// What is compared.
    pub compared: Compared,
    /// The levels of other factors at which it is; averaged over the rest.
    pub at: Vec<At>,
    /// The subjects that have what it needs; between subjects those at the two levels.
    pub n: usize,
    /// The estimate, in the readings' unit; `None` where there are no subjects.
    pub estimate: Option<f64>,
    /// Its standard error; `None` without degrees of freedom.
    pub se: Option<f64>,
    /// Subjects − groups, of all that have the cells; `None` where there are no subjects.
    pub df: Option<f64>,
    /// estimate / SE; `None` where that is infinite or undefined.
    pub t: Option<f64>,
    /// P(|T| > |t|) with `df` degrees of freedom; 0 where *t* is infinite.
    pub p: Option<f64>,
    /// The p value adjusted for its family.
    pub p_adjusted: Option<f64>,
    /// estimate ± t(df) SE.
    pub ci: Option<Interval>,
    /// estimate ± t(df) SE at 1 − α / m for a family of m: together they hold at the level asked for (Dunn 1961, *Journal
    /// of the American Statistical Association* 56:52). Given with Bonferroni's adjustment, and with Holm's too, which has no
    /// two-sided intervals of its own that say more (Strassburger & Bretz 2008, *Statistics in Medicine* 27:4914), so one
    /// may hold 0 although the adjusted p is small; `None` without adjustment, and with that of Benjamini and Hochberg,
    /// which bounds no family's error.
    pub simultaneous: Option<Interval>,
    /// estimate / SD of the scores (Cohen 1988, *Statistical Power Analysis for the Behavioral Sciences*, 2.3.5); `None`
    /// between subjects.
    pub dz: Option<f64>,
    /// estimate / mean of the two levels' SDs within groups, over the same subjects (Cumming 2012, *Understanding the New
    /// Statistics*, chapter 11); `None` for trends and between subjects.
    pub dav: Option<f64>,
}

/// The families that the settings ask for, in their order; within each the factors in theirs.
pub(crate) fn comparisons(design: &Design, settings: &Settings, remarks: &mut Vec<Remark>) -> Vec<Comparison> {
    if settings.contrasts.is_empty() {
        return Vec::new();
    }
    let design = &design.centred();
    let mut families = Families { tests: Tests::new(settings.confidence), settings, remarks, found: Vec::new() };
    let over_all = |family: &Family| matches!(family, Family::Pairwise | Family::EachVsFirst | Family::Polynomial);
    let factors = if settings.contrasts.iter().any(over_all) { 0..design.within().len() } else { 0..0 };
    let levels: Vec<Levels> = factors.map(|factor| Levels::of(design, factor)).collect();
    settings.contrasts.iter().for_each(|&family| families.add(design, &levels, family));
    families.found
}

/// What has been found so far.
pub(super) struct Families<'a> {
    pub tests: Tests,
    pub settings: &'a Settings,
    remarks: &'a mut Vec<Remark>,
    found: Vec<Comparison>,
}

impl Families<'_> {
    fn add(&mut self, design: &Design, levels: &[Levels], family: Family) {
        match family {
            Family::Pairwise | Family::EachVsFirst => {
                for levels in levels {
                    let found = levels.pairs(&[], family == Family::EachVsFirst, self);
                    self.settle(found);
                }
            }
            Family::Polynomial => self.trends(design, levels),
            Family::Simple => simple::comparisons(design, self),
            Family::Groups { at } => {
                for factor in 0..design.between().len() {
                    let found = group_differences(design, factor, at, self);
                    self.settle(found);
                }
            }
        }
    }

    /// Adjusts a family and takes it in.
    pub fn settle(&mut self, mut family: Vec<Comparison>) {
        let Settings { multiplicity, confidence, .. } = *self.settings;
        let adjusted = multiplicity.adjust(&family.iter().map(|it| it.p).collect::<Vec<_>>());
        let tested = adjusted.iter().flatten().count();
        let mut together = multiplicity.bounds_the_family().then(|| Together::of(confidence, tested));
        for (comparison, p) in family.iter_mut().zip(adjusted) {
            comparison.p_adjusted = p;
            comparison.simultaneous = together.as_mut().and_then(|it| it.interval(comparison));
            let about = About::Contrast(self.found.len());
            self.remarks.extend(note(comparison).map(|note| Remark::new(about, note)));
            self.found.push(comparison.clone());
        }
    }

    fn trends(&mut self, design: &Design, levels: &[Levels]) {
        let placed = |(factor, own): (&Factor, &'_ Levels)| factor.positions().map(|at| (own.factor, at.to_vec()));
        let placed: Vec<(usize, Vec<f64>)> = design.within().iter().zip(levels).filter_map(placed).collect();
        if placed.is_empty() {
            self.remarks.push(Remark::new(About::Design, Note::TrendsNeedPositions));
        }
        for (factor, positions) in placed {
            let Some(own) = levels.get(factor) else { continue };
            let coefficients = polynomial::orthonormal(&positions);
            if coefficients.len() + 1 < positions.len() {
                let note = Note::TrendsIndistinct { degree: coefficients.len() + 1 };
                let about = About::Term(Term::main(FactorId::Within(factor)));
                self.remarks.push(Remark::new(about, note));
            }
            let found = own.trends(&coefficients, self);
            self.settle(found);
        }
    }
}

/// Why a comparison has no *t*, if it has none.
fn note(found: &Comparison) -> Option<Note> {
    match (found.estimate, found.se, found.t) {
        (None, ..) if found.n > 0 => Some(Note::GroupWithoutComparison),
        (_, None, _) => Some(Note::TooFewForComparison { subjects: found.n }),
        (_, _, None) => Some(Note::NoSpread),
        _ => None,
    }
}

/// Intervals that hold together.
struct Together {
    tests: BTreeMap<u64, Option<f64>>,
    level: f64,
}

impl Together {
    fn of(confidence: Confidence, family: usize) -> Self {
        let level = 1.0 - (1.0 - confidence.level()) / family.max(1) as f64;
        Self { tests: BTreeMap::new(), level }
    }

    fn interval(&mut self, found: &Comparison) -> Option<Interval> {
        let (estimate, se, df) = (found.estimate?, found.se?, found.df?);
        let critical = || StudentT::new(df).ok()?.critical(self.level);
        let critical = *self.tests.entry(df.to_bits()).or_insert_with(critical);
        Some(Interval::around(estimate, critical? * se))
    }
}

/// The readings by level of one within factor, averaged over the others, with the moments of each level on its own.
pub(super) struct Levels {
    factor: usize,
    readings: Vec<Vec<Option<f64>>>,
    groups: Vec<usize>,
    count: usize,
    wholes: Vec<Whole>,
    /// What was taken from the readings.
    offset: f64,
}

/// One level by itself.
struct Whole {
    /// The readings that there are, in the order of the subjects.
    values: Vec<f64>,
    rounding: f64,
    sd: Option<f64>,
}

impl Whole {
    fn of(level: &[Option<f64>], groups: &[usize], count: usize, offset: f64) -> Self {
        let there = level.iter().zip(groups).filter_map(|(y, &group)| y.map(|y| (y, group)));
        let (values, groups): (Vec<f64>, Vec<usize>) = there.unzip();
        let rounding = rounding_of(&values, offset);
        Self { sd: Spread::of(&values, &groups, count, offset).sd, values, rounding }
    }
}

/// The spread of one level within groups.
struct Spread {
    sd: Option<f64>,
}

impl Spread {
    fn of(values: &[f64], groups: &[usize], count: usize, offset: f64) -> Self {
        let own = split(values, groups, count);
        let own: Vec<Moments> = own.iter().map(|own| Moments::of(own, rounding_of(own, offset))).collect();
        let filled = own.iter().filter(|own| own.n > 0).count();
        let (n, ss) = (values.len(), own.iter().map(|own| own.ss()).sum::<f64>());
        Self { sd: (n > filled).then(|| (ss / (n - filled) as f64).sqrt()) }
    }
}

impl Levels {
    pub fn of(design: &Design, factor: usize) -> Self {
        let design = design.keeping(&[factor], |_| true);
        let level = |level: usize| design.rows().map(|row| row.get(level).copied().flatten()).collect::<Vec<_>>();
        let readings: Vec<Vec<Option<f64>>> = (0..design.width()).map(level).collect();
        let (groups, count) = (design.groups().to_vec(), design.between().iter().product());
        let offset = design.offset();
        let wholes = readings.iter().map(|level| Whole::of(level, &groups, count, offset)).collect();
        Self { factor, readings, groups, count, wholes, offset }
    }

    /// The same as the levels of this factor of another design.
    pub fn named(self, factor: usize) -> Self {
        Self { factor, ..self }
    }

    /// Every pair, or every later level against the first.
    pub fn pairs(&self, at: &[At], first: bool, families: &mut Families<'_>) -> Vec<Comparison> {
        let levels = self.readings.len();
        let earlier = if first { 0..levels.min(1) } else { 0..levels };
        let pairs = earlier.flat_map(|against| (against + 1..levels).map(move |level| (level, against)));
        let factor = self.factor;
        pairs
            .map(|(level, against)| {
                let compared = match first {
                    true => Compared::EachVsFirst { factor, level, against },
                    false => Compared::Pairwise { factor, level, against },
                };
                self.compare(compared, (level, against), at, families)
            })
            .collect()
    }

    fn compare(
        &self,
        compared: Compared,
        (level, against): (usize, usize),
        at: &[At],
        families: &mut Families<'_>,
    ) -> Comparison {
        let pair = self.pair(level, against);
        let differences: Vec<f64> = pair.later.iter().zip(pair.earlier.iter()).map(|(y, x)| y - x).collect();
        let scores = Scores::of(&differences, &pair.groups, self.count, pair.rounding);
        let sds = (self.sd(level, &pair.later, &pair.groups), self.sd(against, &pair.earlier, &pair.groups));
        let weights = scores.weights(families.settings.sums);
        let found = families.tests.of_scores(compared, at.to_vec(), &scores, &weights);
        Comparison { dav: dav(found.estimate, sds), ..found }
    }

    /// The readings of the subjects that have both levels.
    fn pair(&self, later: usize, earlier: usize) -> Pair<'_> {
        let whole = |level: usize| self.wholes.get(level).filter(|it| it.values.len() == self.groups.len());
        if let (Some(later), Some(earlier)) = (whole(later), whole(earlier)) {
            let groups = Cow::Borrowed(self.groups.as_slice());
            let rounding = later.rounding + earlier.rounding;
            return Pair { later: (&later.values).into(), earlier: (&earlier.values).into(), groups, rounding };
        }
        let level = |level: usize| self.readings.get(level).into_iter().flatten();
        let both = level(later).zip(level(earlier)).zip(&self.groups);
        let both: Vec<(f64, (f64, usize))> =
            both.filter_map(|((y, x), &group)| Some(((*y)?, ((*x)?, group)))).collect();
        let (later, rest): (Vec<f64>, Vec<(f64, usize)>) = both.into_iter().unzip();
        let (earlier, groups): (Vec<f64>, Vec<usize>) = rest.into_iter().unzip();
        let rounding = rounding_of(&later, self.offset) + rounding_of(&earlier, self.offset);
        Pair { later: later.into(), earlier: earlier.into(), groups: groups.into(), rounding }
    }

    /// The SD of one level over a pair's subjects; known already if no reading of the level dropped out.
    fn sd(&self, level: usize, of_pair: &[f64], groups: &[usize]) -> Option<f64> {
        match self.wholes.get(level) {
            Some(whole) if whole.values.len() == of_pair.len() => whole.sd,
            _ => Spread::of(of_pair, groups, self.count, self.offset).sd,
        }
    }

    fn trends(&self, coefficients: &[Vec<f64>], families: &mut Families<'_>) -> Vec<Comparison> {
        let row = |subject: usize| -> Option<Vec<f64>> {
            self.readings.iter().map(|level| level.get(subject).copied().flatten()).collect()
        };
        let complete = self.groups.iter().enumerate().filter_map(|(subject, &group)| Some((row(subject)?, group)));
        let (rows, groups): (Vec<Vec<f64>>, Vec<usize>) = complete.unzip();
        let noise = rounding(rows.iter().flatten().map(|y| y + self.offset));
        let trend = |(degree, coefficients): (usize, &Vec<f64>)| {
            let scores: Vec<f64> = rows.iter().map(|row| score(row, coefficients)).collect();
            let scores = Scores::of(&scores, &groups, self.count, noise);
            let weights = scores.weights(families.settings.sums);
            let compared = Compared::Polynomial { factor: self.factor, degree };
            families.tests.of_scores(compared, Vec::new(), &scores, &weights)
        };
        (1..).zip(coefficients).map(trend).collect()
    }
}

/// The readings of one pair.
struct Pair<'a> {
    later: Cow<'a, [f64]>,
    earlier: Cow<'a, [f64]>,
    groups: Cow<'a, [usize]>,
    rounding: f64,
}

fn dav(estimate: Option<f64>, (later, earlier): (Option<f64>, Option<f64>)) -> Option<f64> {
    let mean_sd = f64::midpoint(later?, earlier?);
    (mean_sd > 0.0).then_some(estimate? / mean_sd)
}

/// Σ c_j (y_j − y_1): the coefficients sum to zero only to rounding, which must not meet the offset of the readings.
fn score(row: &[f64], coefficients: &[f64]) -> f64 {
    let first = row.first().copied().unwrap_or(0.0);
    row.iter().zip(coefficients).map(|(y, c)| c * (y - first)).sum()
}
