//! The test of a within-subject factor, its corrections and its sizes.
//!
//! Invariants: an infinite *F* is `None` with p = 0, and 0/0 is `None` with p `None`; corrected tests differ from the
//! uncorrected one in their degrees of freedom alone.

use super::decomposition::{Decomposition, Line, Split};
use super::sphericity::{Epsilon, Mauchly, Sphericity};
use crate::Note;
use crate::distributions::FisherF;

/// The test of one effect against its error.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Effect {
    /// Sum of squares of the effect.
    pub ss: f64,
    /// Degrees of freedom of the effect.
    pub df: f64,
    /// `ss` / `df`; `None` where `df` is 0.
    pub ms: Option<f64>,
    /// Sum of squares of the error.
    pub error_ss: f64,
    /// Degrees of freedom of the error.
    pub error_df: f64,
    /// `error_ss` / `error_df`; `None` where `error_df` is 0.
    pub error_ms: Option<f64>,
    /// `ms` / `error_ms`; `None` where that is infinite or undefined.
    pub f: Option<f64>,
    /// P(F > f), uncorrected; 0 where *F* is infinite.
    pub p: Option<f64>,
    /// Mauchly's test of sphericity; its fields are `None` where it is not defined. `None` for an effect between subjects.
    pub mauchly: Option<Mauchly>,
    /// The estimates of epsilon; `None` for an effect between subjects, or where there is nothing to test.
    pub epsilon: Option<Epsilon>,
    /// The test corrected by each epsilon; `None` where `epsilon` is.
    pub corrected: Option<Corrected>,
    /// SS / (SS + error SS) (Cohen 1973, *Educational and Psychological Measurement* 33:107).
    pub partial_eta_sq: Option<f64>,
    /// SS / (SS + subject SS + residual SS): the share of all variation that a design with other subjects at each level
    /// would see as well (Olejnik & Algina 2003, *Psychological Methods* 8:434; Bakeman 2005, *Behavior Research
    /// Methods* 37:379).
    pub generalized_eta_sq: Option<f64>,
    /// df (MS − error MS) / (df (MS − error MS) + N error MS) with N = n k readings, as Olejnik & Algina 2003 give it for
    /// an effect against its own error (after Keren & Lewis 1979, *Educational and Psychological Measurement* 39:119).
    /// Given raw: negative where F < 1.
    pub partial_omega_sq: Option<f64>,
}

/// The test with both degrees of freedom multiplied by min(1, epsilon), for each epsilon that is defined.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Corrected {
    /// By the Greenhouse-Geisser epsilon.
    pub greenhouse_geisser: Option<CorrectedTest>,
    /// By the classic Huynh-Feldt epsilon.
    pub huynh_feldt: Option<CorrectedTest>,
    /// By the Huynh-Feldt epsilon as corrected by Lecoutre.
    pub lecoutre: Option<CorrectedTest>,
    /// By the smallest epsilon that there can be.
    pub lower_bound: Option<CorrectedTest>,
}

/// One corrected test.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct CorrectedTest {
    /// min(1, epsilon) times the degrees of freedom of the effect.
    pub df: f64,
    /// min(1, epsilon) times the degrees of freedom of the error.
    pub error_df: f64,
    /// P(F > f) with these; `None` where the uncorrected p is.
    pub p: Option<f64>,
}

/// An observed *F*.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) enum Ratio {
    Finite(f64),
    Infinite,
    Undefined,
}

impl Ratio {
    /// A sum of squares up to `rounding` counts as zero below the line; above it only where there is zero below.
    pub fn of(effect: Line, error: Line, rounding: f64) -> Self {
        match (effect.ms, error.ms) {
            (Some(ms), Some(error_ms)) if error.ss > rounding => Self::Finite(ms / error_ms),
            (Some(_), Some(_)) if effect.ss > rounding => Self::Infinite,
            _ => Self::Undefined,
        }
    }

    pub fn finite(self) -> Option<f64> {
        if let Self::Finite(f) = self { Some(f) } else { None }
    }

    pub fn p(self, df: f64, error_df: f64) -> Option<f64> {
        match self {
            Self::Finite(f) => FisherF::new(df, error_df).ok()?.sf(f),
            Self::Infinite => Some(0.0),
            Self::Undefined => None,
        }
    }
}

/// The effect of the factor, and the notes that it owes.
pub(super) fn effect(split: &Split, notes: &mut Vec<Note>) -> Effect {
    let Decomposition { effect, subject, residual, .. } = split.decomposition;
    let f = Ratio::of(effect, residual, split.rounding);
    note_degenerate(split, f, notes);
    let sphericity = Sphericity::of(split, notes);
    Effect {
        ss: effect.ss,
        df: effect.df,
        ms: effect.ms,
        error_ss: residual.ss,
        error_df: residual.df,
        error_ms: residual.ms,
        f: f.finite(),
        p: f.p(effect.df, residual.df),
        mauchly: Some(sphericity.mauchly),
        epsilon: sphericity.epsilon,
        corrected: sphericity.epsilon.map(|epsilon| corrected(f, epsilon, effect.df, residual.df)),
        partial_eta_sq: share(split, effect.ss, residual.ss),
        generalized_eta_sq: share(split, effect.ss, subject.ss + residual.ss),
        partial_omega_sq: partial_omega_sq(split),
    }
}

/// Whether there is an effect and an error at all.
fn testable(split: &Split) -> bool {
    split.subjects > 1 && split.levels > 1
}

/// The share of a part in itself and the rest, where they are more than rounding.
fn share(split: &Split, part: f64, rest: f64) -> Option<f64> {
    (testable(split) && part + rest > split.rounding).then(|| part / (part + rest))
}

fn note_degenerate(split: &Split, f: Ratio, notes: &mut Vec<Note>) {
    if split.subjects == 1 {
        notes.push(Note::OneSubject);
    }
    if split.levels == 1 {
        notes.push(Note::OneLevel);
    }
    match f {
        Ratio::Finite(_) => {}
        Ratio::Infinite => notes.push(Note::ZeroResidual),
        Ratio::Undefined if !testable(split) => {}
        Ratio::Undefined if split.decomposition.total.ss <= split.rounding => notes.push(Note::NoVariation),
        Ratio::Undefined => notes.push(Note::NoEffectNoResidual),
    }
}

fn corrected(f: Ratio, epsilon: Epsilon, df: f64, error_df: f64) -> Corrected {
    let by = |epsilon: Option<f64>| {
        let factor = epsilon?.min(1.0);
        let (df, error_df) = (factor * df, factor * error_df);
        Some(CorrectedTest { df, error_df, p: f.p(df, error_df) })
    };
    Corrected {
        greenhouse_geisser: by(epsilon.greenhouse_geisser),
        huynh_feldt: by(epsilon.huynh_feldt),
        lecoutre: by(epsilon.lecoutre),
        lower_bound: by(Some(epsilon.lower_bound)),
    }
}

fn partial_omega_sq(split: &Split) -> Option<f64> {
    let parts = split.decomposition;
    let (effect, error) = (parts.effect.ms?, parts.residual.ms?);
    let gain = parts.effect.df * (effect - error);
    let whole = parts.total.df + 1.0;
    share(split, gain, whole * error)
}
