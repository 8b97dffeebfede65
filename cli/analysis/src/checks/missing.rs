//! Who has which levels, and which cells hang on too few.
//!
//! Invariants: every subject of the design is in exactly one pattern; patterns come with the fullest first.

use crate::design::{Design, Factor};

/// Which levels of a within factor the subjects have.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Missing {
    /// The within factor.
    pub factor: usize,
    /// Each pattern that there is.
    pub patterns: Vec<Pattern>,
    /// Whether nobody has a level after one that is lacking: those who leave stay away (Little & Rubin 2020, *Statistical
    /// Analysis with Missing Data*, section 1.2). In the order of the positions, or of the levels where there are none.
    pub monotone: bool,
}

/// The subjects that have the same levels.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Pattern {
    /// For each level, in the factor's own order, whether all its cells are there.
    pub present: Vec<bool>,
    /// Who.
    pub subjects: Vec<usize>,
    /// Whether nothing comes after what is lacking.
    pub monotone: bool,
}

/// A cell with fewer than two complete subjects.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Thin {
    /// The group.
    pub group: usize,
    /// The cell.
    pub cell: usize,
    /// Its complete subjects: 0 or 1.
    pub complete: usize,
    /// All that have a reading there.
    pub available: usize,
}

/// The patterns of missing levels of a within factor, over all subjects; `None` if there is no such factor.
#[must_use]
pub fn missing(design: &Design, factor: usize) -> Option<Missing> {
    let order = order(design.within().get(factor)?);
    let levels = design.keeping(&[factor], |_| true);
    let mut each: Vec<(Vec<bool>, usize)> =
        levels.rows().enumerate().map(|(subject, row)| (row.iter().map(Option::is_some).collect(), subject)).collect();
    each.sort_by(|(a, one), (b, other)| b.cmp(a).then(one.cmp(other)));
    let pattern = |same: &[(Vec<bool>, usize)]| {
        let present = same.first().map_or_else(Vec::new, |(present, _)| present.clone());
        let subjects = same.iter().map(|(_, subject)| *subject).collect();
        Pattern { monotone: is_monotone(&present, &order), present, subjects }
    };
    let patterns: Vec<Pattern> = each.chunk_by(|(a, _), (b, _)| a == b).map(pattern).collect();
    Some(Missing { factor, monotone: patterns.iter().all(|pattern| pattern.monotone), patterns })
}

/// The levels by their positions.
fn order(factor: &Factor) -> Vec<usize> {
    let mut order: Vec<usize> = (0..factor.levels()).collect();
    if let Some(positions) = factor.positions() {
        let at = |level: &usize| positions.get(*level).copied().unwrap_or(0.0);
        order.sort_by(|a, b| at(a).total_cmp(&at(b)));
    }
    order
}

fn is_monotone(present: &[bool], order: &[usize]) -> bool {
    order.iter().filter_map(|&level| present.get(level)).is_sorted_by(|earlier, later| earlier >= later)
}

/// The cells with fewer than two complete subjects, group by group.
#[must_use]
pub fn thin_cells(design: &Design) -> Vec<Thin> {
    let mut complete = vec![0; design.between().iter().product()];
    let mut available = vec![vec![0; design.width()]; complete.len()];
    for (row, &group) in design.rows().zip(design.groups()) {
        let whole = usize::from(row.iter().all(Option::is_some));
        complete.get_mut(group).into_iter().for_each(|n| *n += whole);
        let counts = available.get_mut(group).into_iter().flatten();
        counts.zip(row).for_each(|(n, reading)| *n += usize::from(reading.is_some()));
    }
    let thin = complete.iter().zip(&available).enumerate().filter(|(_, (n, _))| **n < 2);
    thin.flat_map(|(group, (&complete, available))| {
        let thin = move |(cell, &available): (usize, &usize)| Thin { group, cell, complete, available };
        available.iter().enumerate().map(thin)
    })
    .collect()
}
