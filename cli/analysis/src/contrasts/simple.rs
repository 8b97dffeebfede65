//! Simple effects: of one factor at the levels of another.
//!
//! Invariant: a simple effect comes from the readings at its level alone, with the error that these have.

use super::Family;
use super::comparison::{Comparison, Families, Levels};
use super::groups::group_differences_at;
use crate::anova::{About, Effect, Remark, Term, factorial};
use crate::design::{At, Design, FactorId};
use crate::{Note, Settings};

/// The effect of a factor at one level of another.
#[derive(Debug, Clone, PartialEq)]
pub struct SimpleEffect {
    /// The factor.
    pub factor: FactorId,
    /// The level of the other; averaged over the rest.
    pub at: Vec<At>,
    /// The subjects used: those with all cells that it needs.
    pub n: usize,
    /// The test.
    pub effect: Effect,
}

/// The other factors of a design that have levels to be at.
fn others(design: &Design, factor: FactorId) -> impl Iterator<Item = FactorId> {
    let between = (0..design.between().len()).map(FactorId::Between);
    let within = (0..design.within().len()).map(FactorId::Within);
    between.chain(within).filter(move |other| *other != factor && design.levels(*other) > 1)
}

/// The design at one level of a factor, averaged over all within factors but the `kept` one, with the level of a between
/// factor as the only one left. `None` where there is nobody.
fn at_level(design: &Design, kept: Option<usize>, at: At) -> Option<Design> {
    let kept: Vec<usize> = kept.into_iter().collect();
    match at.factor {
        FactorId::Within(factor) => Some(design.keeping(&kept, |levels| levels.get(factor) == Some(&at.level))),
        FactorId::Between(factor) => {
            let design = design.subjects_at(|levels| levels.get(factor) == Some(&at.level))?;
            Some(design.keeping(&kept, |_| true))
        }
    }
}

/// Pairs of each within factor, and later groups of each between factor against the first, at each level of each other
/// factor. A family is all there is of one factor at the levels of another.
pub(super) fn comparisons(design: &Design, families: &mut Families<'_>) {
    for factor in 0..design.within().len() {
        for other in others(design, FactorId::Within(factor)) {
            let found = pairs(design, factor, other, families);
            families.settle(found);
        }
    }
    for factor in 0..design.between().len() {
        for other in others(design, FactorId::Between(factor)) {
            let found = groups(design, factor, other, families);
            families.settle(found);
        }
    }
}

fn pairs(design: &Design, factor: usize, other: FactorId, families: &mut Families<'_>) -> Vec<Comparison> {
    let levels = (0..design.levels(other)).map(|level| At { factor: other, level });
    let pairs = |at: At| match at_level(design, Some(factor), at) {
        Some(sub) => Levels::of(&sub, 0).named(factor).pairs(&[at], false, families),
        None => Vec::new(),
    };
    levels.flat_map(pairs).collect()
}

/// Nothing where the same differences have been asked for by themselves.
fn groups(design: &Design, factor: usize, other: FactorId, families: &mut Families<'_>) -> Vec<Comparison> {
    match other {
        FactorId::Within(within) if families.settings.contrasts.contains(&Family::Groups { at: Some(within) }) => {
            Vec::new()
        }
        _ => {
            let levels = (0..design.levels(other)).map(|level| At { factor: other, level });
            levels.flat_map(|at| group_differences_at(design, factor, at, families)).collect()
        }
    }
}

/// The *F* tests of each factor at each level of each other, where simple effects were asked for: the analysis of variance
/// of the readings at that level, averaged over the other within factors, with the error that they have by themselves
/// (Maxwell, Delaney & Kelley 2018, chapters 12 and 14, separate error terms).
pub(crate) fn simple_effects(design: &Design, settings: &Settings, remarks: &mut Vec<Remark>) -> Vec<SimpleEffect> {
    if !settings.contrasts.contains(&Family::Simple) {
        return Vec::new();
    }
    let design = &design.centred();
    let factors = (0..design.between().len()).map(FactorId::Between);
    let factors = factors.chain((0..design.within().len()).map(FactorId::Within));
    let pairs = factors.flat_map(|factor| others(design, factor).map(move |other| (factor, other)));
    let all = pairs
        .flat_map(|(factor, other)| (0..design.levels(other)).map(move |level| (factor, At { factor: other, level })));
    let settings = Settings { contrasts: Vec::new(), ..settings.clone() };
    let mut found = Vec::new();
    for (factor, at) in all {
        let one = simple_effect(design, factor, at, &settings, About::Simple(found.len()), remarks);
        found.extend(one);
    }
    found
}

fn simple_effect(
    design: &Design,
    factor: FactorId,
    at: At,
    settings: &Settings,
    about: About,
    remarks: &mut Vec<Remark>,
) -> Option<SimpleEffect> {
    let kept = if let FactorId::Within(index) = factor { Some(index) } else { None };
    let sub = at_level(design, kept, at)?;
    let own = if kept.is_some() { FactorId::Within(0) } else { factor };
    let result = factorial(&sub, settings);
    let effect = *result.effect(Term::main(own))?;
    let telling = |remark: &&Remark| !matches!(remark.note, Note::UnequalGroups | Note::EmptyLevel { .. });
    remarks.extend(result.remarks.iter().filter(telling).map(|remark| Remark::new(about, remark.note)));
    Some(SimpleEffect { factor, at: vec![at], n: result.used.len(), effect })
}
