//! Analysis of variance of any number of factors, within and between subjects.
//!
//! Invariants: every effect is tested against the error of its own stratum, and every quantity derives from one
//! [`Strata`]; where a group has nobody, effects are `None` and never those of other groups.

use super::Decomposition;
use super::cells::{Cell, cells};
use super::decomposition::Line;
use super::effect::{Effect, Ratio, Tested};
use super::hypothesis::Hypothesis;
use super::sphericity::Sphericity;
use super::strata::{Strata, Stratum, Table, vanishing};
use super::term::{FactorSet, Term};
use super::unlinked::{IfUnlinked, if_unlinked};
use crate::contrasts::{self, Comparison, SimpleEffect};
use crate::design::Design;
use crate::{Confidence, Note, Settings, Sums};

/// An analysis of variance of several factors.
#[derive(Debug, Clone, PartialEq)]
pub struct Factorial {
    /// Between subjects first, then one for each interaction of within factors of more than one level; none without a
    /// complete subject.
    pub strata: Vec<StratumTable>,
    /// All variation: Σ (y − ȳ)² over the readings used; `None` without a complete subject.
    pub total: Option<Line>,
    /// One for each group in the order of their numbers, then for each cell; of the complete subjects.
    pub cells: Vec<Vec<Cell>>,
    /// For one within factor and no between factor of more than one level: the same readings with the subjects'
    /// identities forgotten; `None` otherwise, or with fewer than two complete subjects.
    pub if_unlinked: Option<IfUnlinked>,
    /// The families asked for, in the order asked for.
    pub contrasts: Vec<Comparison>,
    /// The effect of each factor at the levels of each other one, where simple effects were asked for.
    pub simple: Vec<SimpleEffect>,
    /// Why fields are `None`, and what needs a word of caution, without repetition.
    pub remarks: Vec<Remark>,
    /// The subjects analysed (indices of the design).
    pub used: Vec<usize>,
    /// The subjects left out because they lack a cell (indices of the design).
    pub incomplete: Vec<usize>,
}

/// The effects that share an error, their error, and the variation of the whole stratum.
#[derive(Debug, Clone, PartialEq)]
pub struct StratumTable {
    /// The within factors whose interaction with the subjects is the error; none between subjects.
    pub within: FactorSet,
    /// The main effect of these factors (not between subjects), then its interactions with the between factors.
    pub effects: Vec<TermEffect>,
    /// The variation within groups: `subject`, or `visit:hand:subject`.
    pub error: Line,
    /// All variation of the stratum; those of all strata add up to the total, whether groups are equal or not.
    pub total: Line,
}

/// The test of one term.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct TermEffect {
    /// Which effect; its `within` is its error's.
    pub term: Term,
    /// Its test. Where the combinations of between levels are not all filled, its fields are `None`, and `ss` and `df` 0;
    /// a remark says so.
    pub effect: Effect,
}

/// What a remark is about.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash)]
pub enum About {
    /// The design as a whole.
    Design,
    /// One effect; for a note on sphericity or on trends, that of the within factors alone.
    Term(Term),
    /// The contrast of this index in the result.
    Contrast(usize),
    /// The simple effect of this index in the result.
    Simple(usize),
}

/// A note and what it is about.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash)]
pub struct Remark {
    /// What it is about.
    pub about: About,
    /// The note.
    pub note: Note,
}

impl Remark {
    pub(crate) fn new(about: About, note: Note) -> Self {
        Self { about, note }
    }
}

impl Factorial {
    /// Every effect: between subjects first, then within, each within effect before its interactions with groups.
    pub fn effects(&self) -> impl Iterator<Item = &TermEffect> {
        self.strata.iter().flat_map(|stratum| &stratum.effects)
    }

    /// The test of a term, if the analysis has it.
    #[must_use]
    pub fn effect(&self, term: Term) -> Option<&Effect> {
        self.effects().find(|effect| effect.term == term).map(|effect| &effect.effect)
    }
}

/// Analysis of variance with repeated measurements of any number of within and between factors.
///
/// Between subjects, effects are tested against the variation of subject means within groups; within subjects, each
/// effect and its interactions with groups against the interaction of its within factors with the subjects of a group
/// (Winer, Brown & Michels 1991, *Statistical Principles in Experimental Design*, chapters 7 and 9; Maxwell, Delaney &
/// Kelley 2018, *Designing Experiments and Analyzing Data*, chapters 12 to 15). Each stratum is the analysis of the
/// subjects' scores on orthonormal contrasts of the cells (Boik 1981, *Psychometrika* 46:241), summed over the contrasts:
/// error df = (n − groups) × contrasts. Unequal groups: see [`Sums`](crate::Sums). Sphericity, corrections, effect sizes:
/// see [`Mauchly`](super::Mauchly), [`Epsilon`](super::Epsilon), [`Effect`]; contrasts: [`Comparison`].
///
/// Only complete subjects enter the analysis of variance. Factors of one level have no effects; a between level with
/// nobody in it is left out, with a remark. Sums of squares are in the square of the readings' unit. The function has no
/// failure of its own: what a degenerate design leaves undefined is `None`, with a [`Remark`]. An error sum of squares no
/// larger than what rounding the readings to doubles can produce, Σ (ε y)², counts as zero in the tests, and is reported
/// as it is.
///
/// ```
/// use revisant_analysis::Settings;
/// use revisant_analysis::anova::{Term, factorial};
/// use revisant_analysis::contrasts::Family;
/// use revisant_analysis::design::{Design, DesignError, Factor, FactorId};
///
/// // Two arms, three visits on days 0, 14 and 42.
/// let subjects = [
///     ([0], [Some(31.0), Some(33.5), Some(36.0)]),
///     ([0], [Some(28.5), Some(30.0), Some(30.5)]),
///     ([1], [Some(40.0), Some(40.5), Some(41.0)]),
///     ([1], [Some(35.0), Some(36.5), Some(35.5)]),
/// ];
/// let design = Design::new(vec![Factor::at(vec![0.0, 14.0, 42.0])?], vec![2], &subjects)?;
/// let result = factorial(&design, &Settings { contrasts: vec![Family::Groups { at: Some(0) }], ..Settings::default() });
///
/// let (arm, visit) = (Term::main(FactorId::Between(0)), Term::main(FactorId::Within(0)));
/// let both = Term { between: arm.between, within: visit.within };
/// assert_eq!(result.effects().map(|it| it.term).collect::<Vec<_>>(), [arm, visit, both]);
/// assert!(result.effect(both).and_then(|effect| effect.f).is_some_and(|f| f > 1.0));
/// assert_eq!(result.contrasts.len(), 3); // arm 1 minus arm 0 at each visit
/// # Ok::<(), DesignError>(())
/// ```
#[must_use]
pub fn factorial(design: &Design, settings: &Settings) -> Factorial {
    let table = Table::of(design);
    let mut remarks = Vec::new();
    let analysed = Analysed::of(design, &table, settings, &mut remarks);
    let contrasts = contrasts::comparisons(design, settings, &mut remarks);
    let simple = contrasts::simple_effects(design, settings, &mut remarks);
    let own = cells(&table, settings.confidence);
    let of_group = |place: &Option<usize>| place.and_then(|at| own.get(at).cloned());
    let cells =
        table.place.iter().map(|it| of_group(it).unwrap_or_else(|| vec![Cell::EMPTY; design.width()])).collect();
    Factorial {
        strata: analysed.strata,
        total: analysed.total,
        cells,
        if_unlinked: analysed.if_unlinked,
        contrasts,
        simple,
        remarks,
        used: design.complete(),
        incomplete: design.incomplete(),
    }
}

/// The part of the result that comes from the complete subjects.
#[derive(Default)]
pub(crate) struct Analysed {
    pub strata: Vec<StratumTable>,
    pub total: Option<Line>,
    pub if_unlinked: Option<IfUnlinked>,
}

impl Analysed {
    pub fn of(design: &Design, table: &Table, settings: &Settings, remarks: &mut Vec<Remark>) -> Self {
        if table.subjects() == 0 {
            remarks.push(Remark::new(About::Design, Note::NoCompleteSubject));
            return Self::default();
        }
        remark_on_groups(design, table, remarks);
        let strata = Strata::of(table);
        let errors = strata.strata.iter().map(|stratum| stratum.error.ss).sum();
        let hypotheses = hypotheses(table, &table.counts, settings.sums);
        let analysis = Analysis { table, strata: &strata, hypotheses, errors, confidence: settings.confidence };
        let tables: Vec<StratumTable> = strata.strata.iter().map(|it| analysis.stratum(it, remarks)).collect();
        remark_on_variation(&strata, remarks);
        Self { if_unlinked: unlinked(table, &strata, &tables), strata: tables, total: Some(strata.total) }
    }
}

/// Who is in the groups.
fn remark_on_groups(design: &Design, table: &Table, remarks: &mut Vec<Remark>) {
    let mut say = |note| remarks.push(Remark::new(About::Design, note));
    for (factor, (&levels, filled)) in design.between().iter().zip(&table.filled).enumerate() {
        let empty = (0..levels).filter(|level| !filled.contains(level));
        empty.for_each(|level| say(Note::EmptyLevel { factor, level }));
    }
    table.empty_groups().for_each(|group| say(Note::EmptyGroup { group }));
    let largest = table.counts.iter().copied().max().unwrap_or(0);
    match largest {
        1 if table.subjects() == 1 => say(Note::OneSubject),
        1 => say(Note::NoErrorWithinGroups),
        _ => {
            let alone = |place: &Option<usize>| place.and_then(|at| table.counts.get(at)) == Some(&1);
            let alone = table.place.iter().enumerate().filter(|(_, place)| alone(place));
            alone.for_each(|(group, _)| say(Note::GroupOfOne { group }));
        }
    }
    if table.counts.iter().any(|&n| n != largest) {
        say(Note::UnequalGroups);
    }
    if FactorSet::varied(&table.within).is_empty() && FactorSet::varied(&table.between()).is_empty() {
        say(Note::OneLevel);
    }
}

fn remark_on_variation(strata: &Strata, remarks: &mut Vec<Remark>) {
    let undefined = |remark: &Remark| remark.note == Note::NoEffectNoResidual;
    if strata.total.ss <= strata.rounding && remarks.iter().any(undefined) {
        remarks.retain(|remark| !undefined(remark));
        remarks.push(Remark::new(About::Design, Note::NoVariation));
    }
}

/// For one within factor and one group.
fn unlinked(table: &Table, strata: &Strata, tables: &[StratumTable]) -> Option<IfUnlinked> {
    let [between, within] = tables else { return None };
    let [effect] = within.effects.as_slice() else { return None };
    if table.counts.len() > 1 || table.subjects() < 2 {
        return None;
    }
    let effect = Line::new(effect.effect.ss, effect.effect.df);
    let parts = Decomposition { effect, subject: between.error, residual: within.error, total: strata.total };
    if_unlinked(&parts, strata.rounding)
}

struct Analysis<'a> {
    table: &'a Table,
    strata: &'a Strata,
    hypotheses: Vec<(FactorSet, Hypothesis)>,
    errors: f64,
    confidence: Confidence,
}

/// One for each set of between factors of more than one level, if every group has somebody; else none can be tested.
pub(crate) fn hypotheses(table: &Table, counts: &[usize], sums: Sums) -> Vec<(FactorSet, Hypothesis)> {
    let levels = table.between();
    let sets = FactorSet::varied(&levels).subsets().into_iter().filter(|_| !counts.contains(&0));
    let counts: Vec<f64> = counts.iter().map(|&n| n as f64).collect();
    sets.map(|set| (set, Hypothesis::of(set, &levels, &counts, sums))).collect()
}

impl Analysis<'_> {
    fn stratum(&self, stratum: &Stratum, remarks: &mut Vec<Remark>) -> StratumTable {
        let sphericity = (!stratum.within.is_empty()).then(|| self.sphericity(stratum, remarks));
        let between = FactorSet::varied(&self.table.between()).subsets().into_iter();
        let terms =
            between.map(|between| Term { between, within: stratum.within }).filter(|term| *term != Term::default());
        let effects = terms.map(|term| self.effect(term, stratum, sphericity, remarks)).collect();
        StratumTable { within: stratum.within, effects, error: stratum.error, total: stratum.total }
    }

    fn sphericity(&self, stratum: &Stratum, remarks: &mut Vec<Remark>) -> Sphericity {
        let mut notes = Vec::new();
        let found = Sphericity::of(stratum, self.table.subjects(), self.strata.rounding, &mut notes);
        let term = Term { within: stratum.within, ..Term::default() };
        remarks.extend(notes.into_iter().map(|note| Remark::new(About::Term(term), note)));
        found
    }

    fn effect(
        &self,
        term: Term,
        stratum: &Stratum,
        sphericity: Option<Sphericity>,
        remarks: &mut Vec<Remark>,
    ) -> TermEffect {
        let levels = |(factor, levels): (usize, &usize)| if term.within.has(factor) { *levels } else { 1 };
        let cells: usize = self.table.within.iter().enumerate().map(levels).product();
        let tested = Tested {
            effect: self.line(term, stratum),
            error: stratum.error,
            all_errors: self.errors,
            means: (self.table.subjects() * cells) as f64,
            rounding: self.strata.rounding,
            sphericity,
            confidence: self.confidence,
        };
        if let Some(note) = degenerate(&tested) {
            remarks.push(Remark::new(About::Term(term), note));
        }
        TermEffect { term, effect: tested.test() }
    }

    /// Sum of squares and degrees of freedom of a term; none where a group is empty.
    fn line(&self, term: Term, stratum: &Stratum) -> Line {
        let Some((_, hypothesis)) = self.hypotheses.iter().find(|(set, _)| *set == term.between) else {
            return Line::new(0.0, 0.0);
        };
        let ss = stratum.means.iter().map(|means| hypothesis.squares(means)).sum();
        let df = hypothesis.df() * stratum.contrasts();
        Line::new(vanishing(ss, self.strata.rounding), df as f64)
    }
}

/// Why a test is not an ordinary one, if it can be made at all.
fn degenerate(tested: &Tested) -> Option<Note> {
    match tested.ratio() {
        _ if !tested.testable() => None,
        Ratio::Finite(_) => None,
        Ratio::Infinite => Some(Note::ZeroResidual),
        Ratio::Undefined => Some(Note::NoEffectNoResidual),
    }
}
