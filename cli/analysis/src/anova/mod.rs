//! Analysis of variance for repeated measurements.
//!
//! Invariants: only complete subjects enter, and who they are stands in the result; every quantity derives from one set
//! of strata, so no two fields of a result can disagree. One factor is several factors with no others.

mod cells;
mod decomposition;
mod effect;
mod factorial;
mod householder;
mod hypothesis;
mod sphericity;
mod strata;
mod term;
mod unlinked;

pub use cells::{Band, Cell, within_subject_band, within_subject_bands};
pub use decomposition::{Decomposition, Line};
pub use effect::{Corrected, CorrectedTest, Effect};
pub use factorial::{About, Factorial, Remark, StratumTable, TermEffect, factorial};
pub use sphericity::{Epsilon, Mauchly};
pub use term::{FactorSet, Term};
pub use unlinked::IfUnlinked;

use crate::contrasts::{self, Contrast};
use crate::design::{Design, OneWithin};
use crate::{Note, Settings};
pub(crate) use effect::Ratio;
pub(crate) use factorial::{Analysed, hypotheses};
pub(crate) use hypothesis::Hypothesis;
pub(crate) use strata::{Strata, Stratum, Table};

/// A repeated-measures analysis of one within-subject factor.
#[derive(Debug, Clone, PartialEq)]
pub struct RepeatedMeasures {
    /// Where the variation comes from; `None` without a complete subject.
    pub decomposition: Option<Decomposition>,
    /// The test of the factor; `None` without a complete subject.
    pub effect: Option<Effect>,
    /// One for each level, in order; of the complete subjects.
    pub cells: Vec<Cell>,
    /// The same readings with the subjects' identities forgotten; `None` with fewer than two levels or two complete subjects.
    pub if_unlinked: Option<IfUnlinked>,
    /// The families asked for, in the order asked for.
    pub contrasts: Vec<Contrast>,
    /// Why fields are `None`, without repetition.
    pub notes: Vec<Note>,
    /// The subjects analysed (indices of the design).
    pub used: Vec<usize>,
    /// The subjects left out because they lack a reading (indices of the design).
    pub incomplete: Vec<usize>,
}

/// Repeated-measures analysis of variance of one within-subject factor with k levels on n complete subjects.
///
/// With y_ij the reading of subject i at level j: effect SS = n Σ_j (ȳ_·j − ȳ)², subject SS = k Σ_i (ȳ_i· − ȳ)²,
/// residual SS = Σ (y_ij − ȳ_i· − ȳ_·j + ȳ)², F = effect MS / residual MS on k − 1 and (n − 1)(k − 1) degrees of
/// freedom (Winer, Brown & Michels 1991, *Statistical Principles in Experimental Design*, chapter 4). Sphericity,
/// corrections and effect sizes: see [`Mauchly`], [`Epsilon`] and [`Effect`]. Contrasts: see [`contrasts`].
///
/// Sums of squares are in the square of the readings' unit. The function has no failure of its own: what a degenerate
/// design leaves undefined is `None`, with a [`Note`]. An error sum of squares no larger than what rounding the
/// readings to doubles can produce, Σ (ε y)², counts as zero in the tests, and is reported as it is.
#[must_use]
pub fn repeated_measures(design: &OneWithin, settings: &Settings) -> RepeatedMeasures {
    let several = Design::from(design);
    let table = Table::of(&several);
    let mut remarks = Vec::new();
    let analysed = Analysed::of(&several, &table, settings, &mut remarks);
    let mut notes: Vec<Note> = remarks.iter().map(|remark| of_one_factor(remark.note, &table)).collect();
    let contrasts = contrasts::contrasts(design, settings, &mut notes);
    RepeatedMeasures {
        decomposition: decomposition(&analysed),
        effect: analysed.strata.last().and_then(|stratum| effect_of(stratum, &table)),
        cells: cells::cells(&table, settings.confidence).pop().unwrap_or_default(),
        if_unlinked: analysed.if_unlinked,
        contrasts,
        notes,
        used: design.complete(),
        incomplete: design.incomplete(),
    }
}

/// The note in the words of one factor.
fn of_one_factor(note: Note, table: &Table) -> Note {
    match note {
        Note::TooFewErrorDf { contrasts, .. } => {
            Note::TooFewSubjectsForMauchly { subjects: table.subjects(), levels: contrasts + 1 }
        }
        note => note,
    }
}

fn decomposition(analysed: &Analysed) -> Option<Decomposition> {
    let (subject, total) = (analysed.strata.first()?.error, analysed.total?);
    let none = Line::new(0.0, 0.0);
    let within = analysed.strata.get(1);
    let effect = within.and_then(|stratum| stratum.effects.first());
    Some(Decomposition {
        effect: effect.map_or(none, |it| Line::new(it.effect.ss, it.effect.df)),
        subject,
        residual: within.map_or(none, |stratum| stratum.error),
        total,
    })
}

/// The test of the factor; of one level there is none to make, which its fields say.
fn effect_of(stratum: &StratumTable, table: &Table) -> Option<Effect> {
    let none = Line::new(0.0, 0.0);
    match stratum.effects.first() {
        Some(it) => Some(it.effect),
        None => Some(effect::Tested::nothing(none, table.subjects() as f64).test()),
    }
}
