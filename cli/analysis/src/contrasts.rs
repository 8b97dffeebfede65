//! Contrasts among the levels of a factor, each with its own error.
//!
//! Invariants: a contrast is a number for each subject that has what it needs, and everything about it comes from those
//! numbers alone; families are adjusted one by one, over the contrasts that have a p value.

mod comparison;
mod groups;
mod multiplicity;
mod polynomial;
mod score;
mod simple;

use std::fmt;

pub use comparison::{Compared, Comparison};
pub use multiplicity::Multiplicity;
pub use simple::SimpleEffect;

pub(crate) use comparison::comparisons;
pub(crate) use simple::simple_effects;

use crate::anova::About;
use crate::design::{Design, OneWithin};
use crate::{Interval, Note, Settings};

/// A family of contrasts to be asked for.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash)]
pub enum Family {
    /// Every pair of levels of each within factor, the later minus the earlier.
    Pairwise,
    /// Every later level of each within factor minus the first.
    EachVsFirst,
    /// Trends of every degree at the real spacing of the levels, of each within factor whose levels have positions.
    Polynomial,
    /// Of each factor at each level of each other: pairs of within levels, and later groups minus the first; with the
    /// effect of the factor there.
    Simple,
    /// Every later level of each between factor minus the first, at each level of this within factor, or, with none,
    /// over all cells.
    Groups {
        /// The within factor.
        at: Option<usize>,
    },
}

/// Which contrast it is; levels by index.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash)]
pub enum ContrastKind {
    /// `level` minus `against`, of all pairs.
    Pairwise {
        /// The later level.
        level: usize,
        /// The earlier level.
        against: usize,
    },
    /// `level` minus the first level.
    EachVsFirst {
        /// The later level.
        level: usize,
        /// The first level: always 0.
        against: usize,
    },
    /// The trend of one degree.
    Polynomial {
        /// 1 is linear, 2 quadratic, and so on.
        degree: usize,
    },
}

impl fmt::Display for ContrastKind {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self {
            Self::Pairwise { level, against } | Self::EachVsFirst { level, against } => {
                write!(f, "level {level} against level {against}")
            }
            Self::Polynomial { degree } => write!(f, "trend of degree {degree}"),
        }
    }
}

/// One contrast with its test: a *t* test of the subjects' contrast scores against zero.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Contrast {
    /// Which contrast.
    pub kind: ContrastKind,
    /// The subjects that have what it needs.
    pub n: usize,
    /// The mean of their scores, in the readings' unit; `None` where there are none.
    pub estimate: Option<f64>,
    /// SD / √n of the scores; `None` below two.
    pub se: Option<f64>,
    /// n − 1; `None` where there are none.
    pub df: Option<f64>,
    /// estimate / SE; `None` where that is infinite or undefined.
    pub t: Option<f64>,
    /// P(|T| > |t|); 0 where *t* is infinite.
    pub p: Option<f64>,
    /// `p` adjusted within the family.
    pub p_adjusted: Option<f64>,
    /// estimate ± t(n − 1) SE, not adjusted for the family.
    pub ci: Option<Interval>,
    /// estimate / SD of the scores (Cohen 1988, *Statistical Power Analysis for the Behavioral Sciences*, 2.3.5).
    pub dz: Option<f64>,
    /// estimate / mean of the two levels' SDs, over the same subjects (Cumming 2012, *Understanding the New Statistics*,
    /// chapter 11); `None` for trends.
    pub dav: Option<f64>,
}

/// The contrasts of one factor, from those of several.
///
/// A pair uses all subjects that have both of its levels; a trend those that have all levels. Pairs come in the order of
/// the earlier level, then of the later; trends by degree.
pub(crate) fn contrasts(design: &OneWithin, settings: &Settings, notes: &mut Vec<Note>) -> Vec<Contrast> {
    let mut remarks = Vec::new();
    let found = comparisons(&Design::from(design), settings, &mut remarks);
    let contrasts: Vec<Contrast> = found.iter().filter_map(of_one_factor).collect();
    notes.extend(remarks.iter().map(|remark| {
        match (remark.about, remark.note) {
            (About::Contrast(index), Note::TooFewForComparison { subjects }) => contrasts
                .get(index)
                .map_or(remark.note, |contrast| Note::TooFewForContrast { contrast: contrast.kind, subjects }),
            (About::Contrast(index), Note::NoSpread) => contrasts
                .get(index)
                .map_or(remark.note, |contrast| Note::NoSpreadInContrast { contrast: contrast.kind }),
            (_, note) => note,
        }
    }));
    contrasts
}

/// The same without what one factor has no need of.
fn of_one_factor(found: &Comparison) -> Option<Contrast> {
    let kind = match found.compared {
        Compared::Pairwise { level, against, .. } => ContrastKind::Pairwise { level, against },
        Compared::EachVsFirst { level, against, .. } => ContrastKind::EachVsFirst { level, against },
        Compared::Polynomial { degree, .. } => ContrastKind::Polynomial { degree },
        Compared::Effect { .. } => return None,
    };
    let Comparison { n, estimate, se, df, t, p, p_adjusted, ci, dz, dav, .. } = *found;
    Some(Contrast { kind, n, estimate, se, df, t, p, p_adjusted, ci, dz, dav })
}
