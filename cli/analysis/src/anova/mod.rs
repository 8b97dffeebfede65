//! Analysis of variance for repeated measurements.
//!
//! Invariants: only complete subjects enter, and who they are stands in the result; every quantity derives from one
//! [`Decomposition`], so no two fields of a result can disagree.

mod cells;
mod decomposition;
mod effect;
mod householder;
mod sphericity;
mod unlinked;

pub use cells::{Band, Cell, within_subject_band};
pub use decomposition::{Decomposition, Line};
pub use effect::{Corrected, CorrectedTest, Effect};
pub use sphericity::{Epsilon, Mauchly};
pub use unlinked::IfUnlinked;

use crate::contrasts::{self, Contrast};
use crate::design::{OneWithin, Table};
use crate::{Note, Settings};
use decomposition::Split;

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
    let table = design.complete_table();
    let mut notes = Vec::new();
    let (decomposition, effect, if_unlinked) = match Split::of(&table) {
        Some(split) => analysed(&split, &mut notes),
        None => {
            notes.push(Note::NoCompleteSubject);
            (None, None, None)
        }
    };
    let contrasts = contrasts::contrasts(design, settings, &mut notes);
    RepeatedMeasures {
        decomposition,
        effect,
        cells: cells::cells(&table, settings.confidence),
        if_unlinked,
        contrasts,
        notes,
        used: design.complete(),
        incomplete: design.incomplete(),
    }
}

type Analysed = (Option<Decomposition>, Option<Effect>, Option<IfUnlinked>);

fn analysed(split: &Split, notes: &mut Vec<Note>) -> Analysed {
    let effect = effect::effect(split, notes);
    (Some(split.decomposition), Some(effect), unlinked::if_unlinked(&split.decomposition, split.rounding))
}
