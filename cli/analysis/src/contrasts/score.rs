//! Student's test of the mean of scores, over groups.
//!
//! Invariants: a contrast is a number for each subject that has what it needs; the error is the spread of these numbers
//! within groups; with one group this is the paired *t* test.

use std::borrow::Cow;
use std::collections::BTreeMap;

use super::comparison::{Compared, Comparison};
use crate::design::At;
use crate::distributions::StudentT;
use crate::moments::Moments;
use crate::{Confidence, Interval, Sums};

/// The scores of the subjects that have them, by group.
pub(super) struct Scores {
    /// One for each group, some without subjects.
    pub groups: Vec<Moments>,
    rounding: f64,
}

impl Scores {
    /// From scores, the group of each, and the number of groups; computed from readings whose rounding is given.
    pub fn of(scores: &[f64], groups: &[usize], count: usize, rounding: f64) -> Self {
        let groups = split(scores, groups, count).iter().map(|own| Moments::of(own, rounding)).collect();
        Self { groups, rounding }
    }

    /// How many subjects there are.
    pub fn n(&self) -> usize {
        self.groups.iter().map(|own| own.n).sum()
    }

    /// Subjects less groups, of those that have any.
    pub fn df(&self) -> Option<usize> {
        let groups = self.groups.iter().filter(|own| own.n > 0).count();
        (groups > 0).then(|| self.n() - groups)
    }

    /// √(Σ_g SS_g / (n − groups)); `None` without degrees of freedom.
    pub fn sd(&self) -> Option<f64> {
        let ss: f64 = self.groups.iter().map(|own| own.ss()).sum();
        let ss = if ss <= self.rounding { 0.0 } else { ss };
        self.df().filter(|&df| df > 0).map(|df| (ss / df as f64).sqrt())
    }

    /// The weights of the groups in the mean over them.
    pub fn weights(&self, sums: Sums) -> Vec<f64> {
        let groups = self.groups.iter().filter(|own| own.n > 0).count() as f64;
        let n = self.n() as f64;
        let weight = |own: &Moments| match sums {
            _ if own.n == 0 => 0.0,
            Sums::Type3 => 1.0 / groups,
            Sums::Type2 => own.n as f64 / n,
        };
        self.groups.iter().map(weight).collect()
    }

    /// Σ_g w_g mean_g and √(1 / Σ_g w_g² / n_g), by which the SD is divided in its standard error: √n with one group.
    fn combined(&self, weights: &[f64]) -> (f64, f64) {
        let used = || self.groups.iter().zip(weights).filter(|(own, _)| own.n > 0);
        let estimate = used().map(|(own, w)| w * own.mean).sum();
        let square: f64 = used().map(|(own, w)| w * w / own.n as f64).sum();
        (estimate, (1.0 / square).sqrt())
    }
}

/// Values by group.
pub(super) fn split<'a>(values: &'a [f64], groups: &[usize], count: usize) -> Vec<Cow<'a, [f64]>> {
    if count == 1 {
        return vec![Cow::Borrowed(values)];
    }
    let mut split = vec![Vec::new(); count];
    for (&value, &group) in values.iter().zip(groups) {
        split.get_mut(group).into_iter().for_each(|own: &mut Vec<f64>| own.push(value));
    }
    split.into_iter().map(Cow::Owned).collect()
}

/// Student's tests; remembers the critical value of each number of degrees of freedom.
pub(super) struct Tests {
    confidence: Confidence,
    critical: BTreeMap<usize, Option<f64>>,
}

impl Tests {
    pub fn new(confidence: Confidence) -> Self {
        Self { confidence, critical: BTreeMap::new() }
    }

    /// The test that Σ_g w_g mean_g is zero; none where there are no scores.
    pub fn of_scores(&mut self, compared: Compared, at: Vec<At>, scores: &Scores, weights: &[f64]) -> Comparison {
        let (estimate, root) = scores.combined(weights);
        let (df, sd) = (scores.df(), scores.sd());
        let se = sd.map(|sd| sd / root);
        let (t, p) = student(estimate, se, df);
        Comparison {
            compared,
            at,
            n: scores.n(),
            estimate: (scores.n() > 0).then_some(estimate),
            se,
            df: df.map(|df| df as f64),
            t,
            p,
            p_adjusted: None,
            ci: df.zip(se).and_then(|(df, se)| Some(Interval::around(estimate, self.critical(df)? * se))),
            simultaneous: None,
            dz: sd.filter(|&sd| sd > 0.0).map(|sd| estimate / sd),
            dav: None,
        }
    }

    fn critical(&mut self, df: usize) -> Option<f64> {
        let level = self.confidence.level();
        *self.critical.entry(df).or_insert_with(|| StudentT::new(df as f64).ok()?.critical(level))
    }
}

/// *t* and its two-sided p; an infinite *t* is `None` with p = 0.
fn student(estimate: f64, se: Option<f64>, df: Option<usize>) -> (Option<f64>, Option<f64>) {
    match se {
        Some(se) if se > 0.0 => {
            let t = estimate / se;
            (Some(t), df.and_then(|df| StudentT::new(df as f64).ok()).and_then(|d| d.two_sided(t)))
        }
        Some(_) if estimate != 0.0 => (None, Some(0.0)),
        _ => (None, None),
    }
}
