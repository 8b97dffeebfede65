//! Differences between groups of subjects.
//!
//! Invariant: a difference is that of unweighted means over the groups at either level, and exists only where each of
//! these groups has somebody.

use super::comparison::{Compared, Comparison, Families};
use super::score::Scores;
use crate::design::{At, Design, FactorId};
use crate::moments::rounding_of;

/// Every later level of a between factor minus the first, at each level of a within factor, or over all cells.
pub(super) fn group_differences(
    design: &Design,
    factor: usize,
    at: Option<usize>,
    families: &mut Families<'_>,
) -> Vec<Comparison> {
    let Some(within) = at else { return against_first(&design.keeping(&[], |_| true), factor, None, families) };
    let levels =
        (0..design.levels(FactorId::Within(within))).map(|level| At { factor: FactorId::Within(within), level });
    levels.flat_map(|at| group_differences_at(design, factor, at, families)).collect()
}

/// The same at one level of another factor.
pub(super) fn group_differences_at(
    design: &Design,
    factor: usize,
    at: At,
    families: &mut Families<'_>,
) -> Vec<Comparison> {
    let here = |levels: &[usize]| match at.factor {
        FactorId::Within(within) => levels.get(within) == Some(&at.level),
        FactorId::Between(_) => true,
    };
    against_first(&design.keeping(&[], here), factor, Some(at), families)
}

/// The later levels against the first in a design of one cell.
fn against_first(design: &Design, factor: usize, at: Option<At>, families: &mut Families<'_>) -> Vec<Comparison> {
    // The level of each group; of none that lies at another level of the other between factor.
    let level = |group: usize| {
        let levels = design.group_levels(group);
        match at {
            Some(At { factor: FactorId::Between(other), level }) if levels.get(other) != Some(&level) => None,
            _ => levels.get(factor).copied(),
        }
    };
    let levels: Vec<Option<usize>> = (0..design.between().iter().product()).map(level).collect();
    let there = design.rows().zip(design.groups()).filter_map(|(row, &group)| Some(((*row.first()?)?, group)));
    let there = there.filter(|(_, group)| levels.get(*group).is_some_and(Option::is_some));
    let (values, groups): (Vec<f64>, Vec<usize>) = there.unzip();
    let noise = rounding_of(&values, design.offset());
    let scores = Scores::of(&values, &groups, levels.len(), noise);
    let later = 1..design.levels(FactorId::Between(factor));
    later.map(|level| difference((factor, level), at, &scores, &levels, families)).collect()
}

/// A level minus the first; `levels` are those of the groups.
fn difference(
    (factor, level): (usize, usize),
    at: Option<At>,
    scores: &Scores,
    levels: &[Option<usize>],
    families: &mut Families<'_>,
) -> Comparison {
    let (compared, later, earlier) = (Compared::Effect { factor, level, against: 0 }, Some(level), Some(0));
    let size = |level: Option<usize>| levels.iter().filter(|of| **of == level).count().max(1) as f64;
    let weight = |level: &Option<usize>| match *level {
        None => 0.0,
        level if level == later => 1.0 / size(later),
        level if level == earlier => -1.0 / size(earlier),
        _ => 0.0,
    };
    let weights: Vec<f64> = levels.iter().map(weight).collect();
    let compared_groups = || scores.groups.iter().zip(&weights).filter(|(_, w)| **w != 0.0).map(|(own, _)| own.n);
    let found = families.tests.of_scores(compared, at.into_iter().collect(), scores, &weights);
    let found = Comparison { n: compared_groups().sum(), dz: None, ..found };
    match compared_groups().all(|n| n > 0) {
        true => found,
        false => Comparison { estimate: None, se: None, t: None, p: None, ci: None, ..found },
    }
}
