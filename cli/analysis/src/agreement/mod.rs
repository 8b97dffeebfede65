//! Agreement and reliability of repeated readings: intraclass correlations, the error within subjects, and limits of
//! agreement.
//!
//! Invariants: two-way quantities come from the complete subjects alone, the error within subjects from every reading of
//! subjects with two or more, and the limits of a pair from the subjects that have both; how many these were stands
//! beside each.

mod icc;
mod limits;
mod two_way;
mod within;

pub use icc::{Form, Icc};
pub use limits::{Limits, Point, difference_against_mean};
pub use within::{OneWay, Within};

use crate::design::OneWithin;
use crate::{Confidence, Note};
use two_way::TwoWay;

/// The multiplier of a standard deviation that takes in 95 % of a normal distribution, as the published methods round it.
const USUAL: f64 = 1.96;

/// How well readings of the same subject agree over visits, replicates, raters or instruments: the levels of the design.
#[derive(Debug, Clone, PartialEq)]
pub struct Agreement {
    /// The six intraclass correlations, in the order of [`Form::ALL`]; over complete subjects.
    pub icc: Vec<Icc>,
    /// The error within subjects, over all readings.
    pub within: Within,
    /// 1.96 √2 √(two-way residual MS): the least change of one subject that is more than error, when what all subjects
    /// have in common from level to level is no error (Beckerman et al. 2001, *Quality of Life Research* 10:571; de Vet
    /// et al. 2006, *Journal of Clinical Epidemiology* 59:1033). In the readings' unit; over complete subjects. `None`
    /// with fewer than two levels or two complete subjects.
    pub smallest_detectable_change: Option<f64>,
    /// One for each pair of levels, in the order of the earlier level, then of the later.
    pub limits: Vec<Limits>,
    /// Why fields are `None`, and words of caution.
    pub notes: Vec<Note>,
    /// The complete subjects (indices of the design).
    pub used: Vec<usize>,
    /// The subjects that lack a reading (indices of the design).
    pub incomplete: Vec<usize>,
}

/// The agreement of the levels of a design: see [`Icc`], [`Within`] and [`Limits`] for the formulas and their sources.
///
/// The function has no failure of its own: what a degenerate design leaves undefined is `None`, with a [`Note`]. A sum of
/// squares no larger than what rounding the readings to doubles can produce, Σ (ε y)², counts as zero.
#[must_use]
pub fn agreement(design: &OneWithin, confidence: Confidence) -> Agreement {
    let mut notes = Vec::new();
    let two_way = TwoWay::of(design);
    note_degenerate(&two_way, &mut notes);
    let icc = Form::ALL.iter().map(|&form| icc::icc(form, &two_way, confidence, &mut notes)).collect();
    let within = within::within(design, confidence, &mut notes);
    let smallest_detectable_change = two_way.error_ms().map(|ms| USUAL * 2.0_f64.sqrt() * ms.sqrt());
    let limits = limits::limits(design, confidence, &mut notes);
    Agreement {
        icc,
        within,
        smallest_detectable_change,
        limits,
        notes,
        used: design.complete(),
        incomplete: design.incomplete(),
    }
}

fn note_degenerate(two_way: &TwoWay, notes: &mut Vec<Note>) {
    if two_way.levels < 2 {
        notes.push(Note::OneLevel);
    }
    match two_way.subjects {
        0 => notes.push(Note::NoCompleteSubject),
        1 => notes.push(Note::OneSubject),
        _ => {}
    }
}
