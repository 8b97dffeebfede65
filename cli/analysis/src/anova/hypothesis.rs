//! Sums of squares of hypotheses on the means of unequal groups.
//!
//! Invariants: a hypothesis is a matrix of which each row takes from any table of group means one orthonormal part of the
//! effect, so the sum of squares is that of a product and never a difference; groups are all filled.

use super::householder::triangular;
use super::term::FactorSet;
use crate::Sums;

/// The orthonormal Helmert contrasts of so many levels: the mean of the levels before, less the level.
pub(super) fn helmert(levels: usize) -> Vec<Vec<f64>> {
    (1..levels)
        .map(|level| {
            let before = level as f64;
            let length = (before * (before + 1.0)).sqrt();
            (0..levels).map(|at| if at < level { 1.0 } else if at == level { -before } else { 0.0 } / length).collect()
        })
        .collect()
}

/// The Kronecker products of the Helmert contrasts of the factors in a set with `rest(levels)` for each level of the
/// others: rows over the combinations of all levels, the last factor fastest.
pub(super) fn contrasts(levels: &[usize], set: FactorSet, rest: impl Fn(f64) -> f64) -> Vec<Vec<f64>> {
    let mut rows = vec![vec![1.0]];
    for (factor, &levels) in levels.iter().enumerate() {
        let own = if set.has(factor) { helmert(levels) } else { vec![vec![rest(levels as f64); levels]] };
        rows = rows.iter().flat_map(|row| own.iter().map(|own| kronecker(row, own))).collect();
    }
    rows
}

fn kronecker(a: &[f64], b: &[f64]) -> Vec<f64> {
    a.iter().flat_map(|a| b.iter().map(move |b| a * b)).collect()
}

/// A hypothesis on group means: its sum of squares for a column x of means is ‖H x‖².
pub(crate) struct Hypothesis {
    rows: Vec<Vec<f64>>,
    centred: bool,
}

impl Hypothesis {
    /// That the effect of these between factors is zero, or for the empty set that the mean over the groups is.
    ///
    /// Type III: the contrasts L of the unweighted means, SS = (Lx)ᵀ (L D⁻¹ Lᵀ)⁻¹ Lx with D the numbers of subjects
    /// (Yates 1934, *Journal of the American Statistical Association* 29:51, weighted squares of means; Maxwell, Delaney
    /// & Kelley 2018, chapter 7). Type II: what the effect adds to all effects that do not contain it (Langsrud 2003,
    /// *Statistics and Computing* 13:163); for the empty set the mean of all subjects.
    pub fn of(set: FactorSet, levels: &[usize], counts: &[f64], sums: Sums) -> Self {
        let rows = match sums {
            Sums::Type3 => unweighted(set, levels, counts),
            Sums::Type2 => added(set, levels, counts),
        };
        Self { rows, centred: !set.is_empty() }
    }

    /// The degrees of freedom for one column.
    pub fn df(&self) -> usize {
        self.rows.len()
    }

    /// ‖H x‖².
    pub fn squares(&self, means: &[f64]) -> f64 {
        // The rows sum to zero only to rounding, which must not meet the common part of the means.
        let common = if self.centred { means.iter().sum::<f64>() / means.len().max(1) as f64 } else { 0.0 };
        let part = |row: &Vec<f64>| row.iter().zip(means).map(|(h, x)| h * (x - common)).sum::<f64>();
        self.rows.iter().map(|row| part(row).powi(2)).sum()
    }
}

/// R⁻ᵀ L, where R is the triangular factor of D^(−½) Lᵀ.
fn unweighted(set: FactorSet, levels: &[usize], counts: &[f64]) -> Vec<Vec<f64>> {
    let mut rows = contrasts(levels, set, |levels| 1.0 / levels);
    let scaled = rows.iter().map(|row| row.iter().zip(counts).map(|(l, n)| l / n.sqrt()).collect()).collect();
    let factor = triangular(scaled);
    for at in 0..rows.len() {
        let (done, rest) = rows.split_at_mut(at);
        let (Some(row), Some(column)) = (rest.first_mut(), factor.get(at)) else { continue };
        for (earlier, by) in done.iter().zip(column) {
            row.iter_mut().zip(earlier).for_each(|(x, e)| *x -= by * e);
        }
        let diagonal = column.get(at).copied().unwrap_or(1.0);
        row.iter_mut().for_each(|x| *x /= diagonal);
    }
    rows
}

/// D^(½) Q, with Q an orthonormal basis of what the effect's contrasts add to those of the effects without it.
fn added(set: FactorSet, levels: &[usize], counts: &[f64]) -> Vec<Vec<f64>> {
    let weighted = |set| {
        let rows = contrasts(levels, set, |levels| 1.0 / levels.sqrt());
        rows.into_iter().map(|row| row.iter().zip(counts).map(|(l, n)| l * n.sqrt()).collect::<Vec<f64>>())
    };
    let others = FactorSet::varied(levels).subsets().into_iter().filter(|other| !other.contains(set));
    let mut basis: Vec<Vec<f64>> = Vec::new();
    for column in others.flat_map(weighted) {
        let next = orthonormal(&basis, column);
        basis.push(next);
    }
    let before = basis.len();
    for column in weighted(set) {
        let next = orthonormal(&basis, column);
        basis.push(next);
    }
    let own = basis.split_off(before);
    own.into_iter().map(|q| q.iter().zip(counts).map(|(q, n)| q * n.sqrt()).collect()).collect()
}

/// What is left of a column beside an orthonormal basis, twice to undo the effect of rounding, at length 1.
fn orthonormal(basis: &[Vec<f64>], mut column: Vec<f64>) -> Vec<f64> {
    for earlier in basis.iter().chain(basis) {
        let along: f64 = earlier.iter().zip(&column).map(|(e, x)| e * x).sum();
        column.iter_mut().zip(earlier).for_each(|(x, e)| *x -= along * e);
    }
    let length = column.iter().map(|x| x * x).sum::<f64>().sqrt();
    column.iter_mut().for_each(|x| *x /= length);
    column
}
