//! What each effect would be without each subject.
//!
//! Invariant: leaving a subject out is an exact update of the group's means and of the errors' squares, so the result is
//! that of the analysis without the subject, to rounding, at the cost of one analysis and not of as many as there are
//! subjects.

use crate::Settings;
use crate::anova::{FactorSet, Hypothesis, Line, Ratio, Strata, Stratum, Table, Term, hypotheses};

/// One effect without each subject in turn.
#[derive(Debug, Clone, PartialEq)]
pub struct Influence {
    /// The effect.
    pub term: Term,
    /// One for each subject used, in their order.
    pub without: Vec<Without>,
}

/// An effect without one subject.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Without {
    /// The subject left out.
    pub subject: usize,
    /// The *F* of the others; `None` where it is infinite or undefined, or the subject was the only one of its group.
    pub f: Option<f64>,
    /// Its p value, uncorrected; 0 where *F* is infinite.
    pub p: Option<f64>,
    /// Its p value corrected by the Greenhouse-Geisser epsilon of the others; `None` between subjects.
    pub p_greenhouse_geisser: Option<f64>,
}

/// The scores of a subject e and its group's means m become, in a group of n, those of the others: m − e / (n − 1), and the
/// error's cross-products S − n / (n − 1) e eᵀ (Cook & Weisberg 1982, *Residuals and Influence in Regression*, section 2.2,
/// for the mean of a group).
pub(super) fn influence(table: &Table, strata: &Strata, settings: &Settings) -> Vec<Influence> {
    let smaller = (0..table.counts.len()).map(|group| without_one(table, group, settings)).collect();
    let leaving = Leaving { table, strata, smaller };
    let sets = FactorSet::varied(&table.between()).subsets();
    let terms = strata.strata.iter().flat_map(|stratum| {
        let own = sets.iter().map(|&between| Term { between, within: stratum.within });
        own.filter(|term| *term != Term::default()).map(move |term| (term, stratum))
    });
    if table.used.is_empty() {
        return Vec::new();
    }
    terms.map(|(term, stratum)| leaving.influence(term, stratum)).collect()
}

/// The hypotheses with one subject fewer in a group; none if that empties it.
fn without_one(table: &Table, group: usize, settings: &Settings) -> Vec<(FactorSet, Hypothesis)> {
    let mut counts = table.counts.clone();
    counts.get_mut(group).into_iter().for_each(|n| *n = n.saturating_sub(1));
    hypotheses(table, &counts, settings.sums)
}

struct Leaving<'a> {
    table: &'a Table,
    strata: &'a Strata,
    /// By the group that is smaller by one.
    smaller: Vec<Vec<(FactorSet, Hypothesis)>>,
}

impl Leaving<'_> {
    fn influence(&self, term: Term, stratum: &Stratum) -> Influence {
        let cross = Cross::of(&stratum.scores);
        let without = self.table.used.iter().enumerate().map(|(at, &subject)| {
            let nothing = Without { subject, f: None, p: None, p_greenhouse_geisser: None };
            let one = self.one(stratum, at);
            let hypothesis = one.as_ref().and_then(|one| self.hypothesis(term, one.group));
            one.zip(hypothesis).map_or(nothing, |(one, hypothesis)| Without {
                subject,
                ..self.without(term, stratum, &cross, &one, hypothesis)
            })
        });
        let mut without: Vec<Without> = without.collect();
        without.sort_by_key(|it| it.subject);
        Influence { term, without }
    }

    fn one(&self, stratum: &Stratum, at: usize) -> Option<One> {
        let group = *self.table.group.get(at)?;
        let n = *self.table.counts.get(group)? as f64;
        let scores = stratum.scores.iter().filter_map(|column| column.get(at).copied()).collect();
        Some(One { at, group, n, scores })
    }

    fn hypothesis(&self, term: Term, group: usize) -> Option<&Hypothesis> {
        self.smaller.get(group)?.iter().find(|(set, _)| *set == term.between).map(|(_, hypothesis)| hypothesis)
    }

    fn without(&self, term: Term, stratum: &Stratum, cross: &Cross, one: &One, hypothesis: &Hypothesis) -> Without {
        let p = one.scores.len() as f64;
        let mut others = cross.without(one);
        if others.trace <= TOO_LITTLE * cross.trace || others.squares <= TOO_LITTLE * cross.squares {
            others = Cross::of(&self.others(stratum, one));
        }
        let error = Line::new(others.trace.max(0.0), (stratum.error.df - p).max(0.0));
        let effect = effect_without(hypothesis, stratum, one);
        let ratio = Ratio::of(effect, error, self.strata.rounding);
        let varied = error.ss > self.strata.rounding && error.df > 0.0;
        let epsilon = if p > 1.0 { varied.then(|| others.epsilon(p)) } else { Some(1.0) };
        let epsilon = epsilon.filter(|_| !term.within.is_empty());
        Without {
            subject: one.at,
            f: ratio.finite(),
            p: ratio.p(effect.df, error.df),
            p_greenhouse_geisser: epsilon.and_then(|by| ratio.p(by * effect.df, by * error.df)),
        }
    }

    /// The others' scores about the means as they are without the subject.
    fn others(&self, stratum: &Stratum, one: &One) -> Vec<Vec<f64>> {
        let column = |(column, score): (&Vec<f64>, &f64)| {
            let by = score / (one.n - 1.0);
            let each = column.iter().zip(&self.table.group).enumerate().filter(|(at, _)| *at != one.at);
            each.map(|(_, (x, &group))| if group == one.group { x + by } else { *x }).collect()
        };
        stratum.scores.iter().zip(&one.scores).map(column).collect()
    }
}

/// The subject to be left out.
struct One {
    at: usize,
    group: usize,
    /// The size of its group with it.
    n: f64,
    scores: Vec<f64>,
}

/// The effect with the group's means as they are without the subject.
fn effect_without(hypothesis: &Hypothesis, stratum: &Stratum, one: &One) -> Line {
    let squares = stratum.means.iter().zip(&one.scores).map(|(means, score)| {
        let mut means = means.clone();
        means.get_mut(one.group).into_iter().for_each(|mean| *mean -= score / (one.n - 1.0));
        hypothesis.squares(&means)
    });
    Line::new(squares.sum(), (hypothesis.df() * one.scores.len()) as f64)
}

/// The cross-products S of a stratum's scores.
struct Cross {
    rows: Vec<Vec<f64>>,
    /// tr S: the error's sum of squares.
    trace: f64,
    /// tr S².
    squares: f64,
}

/// Below this share of what there was, a difference has too few digits left.
const TOO_LITTLE: f64 = 1e-6;

impl Cross {
    fn of(columns: &[Vec<f64>]) -> Self {
        let rows: Vec<Vec<f64>> = columns.iter().map(|a| columns.iter().map(|b| dot(a, b)).collect()).collect();
        let trace = rows.iter().enumerate().filter_map(|(i, row)| row.get(i)).sum();
        let squares = rows.iter().flatten().map(|s| s * s).sum();
        Self { rows, trace, squares }
    }

    /// Those of S − c e eᵀ, c = n / (n − 1), of which nothing but the traces is wanted.
    fn without(&self, one: &One) -> Self {
        let c = one.n / (one.n - 1.0);
        let own = dot(&one.scores, &one.scores);
        let across: f64 = self.rows.iter().zip(&one.scores).map(|(row, e)| e * dot(row, &one.scores)).sum();
        let (trace, squares) = (self.trace - c * own, self.squares - 2.0 * c * across + (c * own).powi(2));
        Self { rows: Vec::new(), trace, squares }
    }

    /// (tr S)² / (p tr S²).
    fn epsilon(&self, p: f64) -> f64 {
        (self.trace * self.trace / self.squares / p).clamp(1.0 / p, 1.0)
    }
}

fn dot(a: &[f64], b: &[f64]) -> f64 {
    a.iter().zip(b).map(|(x, y)| x * y).sum()
}
