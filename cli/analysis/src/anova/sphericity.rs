//! Sphericity: Mauchly's test, and the epsilons that measure the departure from it.
//!
//! Invariants: everything derives from the triangular factor of the orthonormal-contrast scores, whose condition is the
//! square root of their covariance's, so the covariance is never formed before its determinant is known; and nothing
//! here depends on which orthonormal contrasts were chosen.

use super::householder::triangular;
use super::strata::Stratum;
use crate::Note;
use crate::distributions::ChiSquare;
use crate::moments::Sum;

/// Mauchly's test that the covariance of p orthonormal contrasts is a multiple of the identity (Mauchly 1940, *Annals of
/// Mathematical Statistics* 11:204), with v error degrees of freedom.
///
/// Not defined (fields `None`) for fewer than two contrasts, for v < p, and where the covariance is singular.
#[derive(Debug, Clone, Copy, PartialEq, Default)]
pub struct Mauchly {
    /// W = det S / (tr S / p)^p, between 0 and 1.
    pub w: Option<f64>,
    /// The first-order statistic −v ρ ln W, ρ = 1 − (2p² + p + 2) / (6 p v).
    pub chi2: Option<f64>,
    /// p (p + 1) / 2 − 1.
    pub df: Option<f64>,
    /// The second-order p value P(χ²_f > z) + ω (P(χ²_(f+4) > z) − P(χ²_f > z)), with
    /// ω = (p + 2)(p − 1)(p − 2)(2p³ + 6p² + 3p + 2) / (288 p² v² ρ²) (Box 1949, *Biometrika* 36:317; Anderson 2003, *An
    /// Introduction to Multivariate Statistical Analysis*, section 10.7).
    pub p: Option<f64>,
}

/// Estimates of how far the contrasts are from sphericity: 1 is spherical, 1 / p as far as can be.
///
/// All are 1 for a single contrast, but for the classic one of several groups, which stands as computed. Those of Huynh and Feldt are given as computed and may exceed 1; tests use min(1, epsilon).
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Epsilon {
    /// ε̂ = (tr S)² / (p tr S²) (Greenhouse & Geisser 1959, *Psychometrika* 24:95); `None` where the residual is zero.
    pub greenhouse_geisser: Option<f64>,
    /// (n p ε̂ − 2) / (p (v − p ε̂)) with n subjects in all groups (Huynh & Feldt 1976, *Journal of Educational
    /// Statistics* 1:69); `None` where the denominator is not positive.
    pub huynh_feldt: Option<f64>,
    /// ((v + 1) p ε̂ − 2) / (p (v − p ε̂)) with v error degrees of freedom (Lecoutre 1991, *Journal of Educational
    /// Statistics* 16:371); `None` where the denominator is not positive. With one group it is the classic one.
    pub lecoutre: Option<f64>,
    /// 1 / p.
    pub lower_bound: f64,
}

impl Epsilon {
    /// Of one contrast, for which there is nothing to depart from: only the classic estimate of several groups, with
    /// its subjects instead of its degrees of freedom, differs from 1.
    fn of_one(n: f64, v: f64) -> Self {
        let huynh_feldt = huynh_feldt(1.0, 1.0, n, v).unwrap_or(1.0);
        Self { greenhouse_geisser: Some(1.0), huynh_feldt: Some(huynh_feldt), lecoutre: Some(1.0), lower_bound: 1.0 }
    }

    fn undefined(contrasts: f64) -> Self {
        Self { greenhouse_geisser: None, huynh_feldt: None, lecoutre: None, lower_bound: 1.0 / contrasts }
    }
}

/// What the residuals of a stratum say about sphericity.
#[derive(Debug, Clone, Copy)]
pub(super) struct Sphericity {
    pub mauchly: Mauchly,
    /// `None` where there is no error to estimate it from.
    pub epsilon: Option<Epsilon>,
}

impl Sphericity {
    /// For a stratum within subjects; `subjects` are those of all groups.
    pub fn of(stratum: &Stratum, subjects: usize, rounding: f64, notes: &mut Vec<Note>) -> Self {
        let none = |epsilon| Self { mauchly: Mauchly::default(), epsilon };
        let (p, v) = (stratum.contrasts(), stratum.error_df_each());
        match p {
            _ if v < 1.0 => none(None),
            0 => none(None),
            1 => none(Some(Epsilon::of_one(subjects as f64, v))),
            _ if stratum.error.ss <= rounding => none(Some(Epsilon::undefined(p as f64))),
            _ => Self::of_scores(stratum, subjects, rounding, notes),
        }
    }

    /// For at least two contrasts, and an error.
    fn of_scores(stratum: &Stratum, subjects: usize, rounding: f64, notes: &mut Vec<Note>) -> Self {
        let factor = triangular(stratum.scores.clone());
        let epsilon = epsilon(&factor, subjects as f64, stratum.error_df_each());
        if epsilon.huynh_feldt.is_none() || epsilon.lecoutre.is_none() {
            notes.push(Note::HuynhFeldtUndefined);
        }
        Self { mauchly: mauchly(&factor, stratum.error_df_each(), rounding, notes), epsilon: Some(epsilon) }
    }
}

/// The epsilons of n subjects, from a factor R with RᵀR a multiple of the contrasts' covariance on v degrees of freedom.
fn epsilon(factor: &[Vec<f64>], n: f64, v: f64) -> Epsilon {
    let p = factor.len() as f64;
    let trace = Sum::of(factor.iter().flatten().map(|r| r * r)).value();
    let squares = Sum::of(pairs(factor).map(|(a, b, times)| times * (dot(a, b) / trace).powi(2))).value();
    let pe = 1.0 / squares;
    Epsilon {
        greenhouse_geisser: Some((pe / p).clamp(1.0 / p, 1.0)),
        huynh_feldt: huynh_feldt(p, pe, n, v),
        lecoutre: huynh_feldt(p, pe, v + 1.0, v),
        lower_bound: 1.0 / p,
    }
}

/// (N p ε̂ − 2) / (p (v − p ε̂)), where the denominator is positive beyond rounding.
fn huynh_feldt(p: f64, pe: f64, n: f64, v: f64) -> Option<f64> {
    let below = v - pe;
    (below > 1e-12 * v).then(|| (n * pe - 2.0) / (p * below))
}

/// Each unordered pair of columns, and how often it stands in the full square.
fn pairs(columns: &[Vec<f64>]) -> impl Iterator<Item = (&[f64], &[f64], f64)> {
    columns.iter().enumerate().flat_map(move |(i, a)| {
        columns
            .iter()
            .take(i + 1)
            .enumerate()
            .map(move |(j, b)| (a.as_slice(), b.as_slice(), if i == j { 1.0 } else { 2.0 }))
    })
}

fn dot(a: &[f64], b: &[f64]) -> f64 {
    a.iter().zip(b).map(|(x, y)| x * y).sum()
}

fn mauchly(factor: &[Vec<f64>], v: f64, rounding: f64, notes: &mut Vec<Note>) -> Mauchly {
    let p = factor.len() as f64;
    if v < p {
        notes.push(Note::TooFewErrorDf { error_df: v as usize, contrasts: factor.len() });
        return Mauchly::default();
    }
    match log_w(factor, rounding) {
        Some(log_w) => mauchly_of(log_w, p, v),
        None => {
            notes.push(Note::SingularCovariance);
            Mauchly::default()
        }
    }
}

/// ln W from the diagonal of the factor; `None` where an element of it may be rounding alone.
fn log_w(factor: &[Vec<f64>], rounding: f64) -> Option<f64> {
    let p = factor.len() as f64;
    // The factorisation adds a little rounding of its own to what the readings brought.
    let floor = 8.0 * rounding.sqrt();
    let mut diagonal = factor.iter().enumerate().map(|(i, column)| column.get(i).copied().unwrap_or(0.0).abs());
    let log_det: Option<f64> = diagonal.try_fold(0.0, |sum, r| (r > floor).then(|| sum + 2.0 * r.ln()));
    let trace = Sum::of(factor.iter().flatten().map(|r| r * r)).value();
    Some((log_det? - p * (trace / p).ln()).min(0.0))
}

fn mauchly_of(log_w: f64, p: f64, v: f64) -> Mauchly {
    let rho = 1.0 - (2.0 * p * p + p + 2.0) / (6.0 * p * v);
    let chi2 = (v * rho * -log_w).max(0.0);
    let df = p * (p + 1.0) / 2.0 - 1.0;
    let omega = (p + 2.0) * (p - 1.0) * (p - 2.0) * (2.0 * p.powi(3) + 6.0 * p * p + 3.0 * p + 2.0)
        / (288.0 * (p * v * rho).powi(2));
    let tail = |df| ChiSquare::new(df).ok()?.sf(chi2);
    let second_order = |first: f64, next: f64| (first + omega * (next - first)).clamp(0.0, 1.0);
    Mauchly {
        w: Some(log_w.exp()),
        chi2: Some(chi2),
        df: Some(df),
        p: tail(df).zip(tail(df + 4.0)).map(|(a, b)| second_order(a, b)),
    }
}
