//! What a plan assumes of the readings: means by group and visit, and the covariance of a subject's readings.
//!
//! Invariant: what is assumed is a full table of finite means and a symmetric, positive semi-definite matrix of finite
//! covariances of the same number of visits.

use std::fmt;

use super::PlannedEffect;
use crate::design::LARGEST;

/// Means of groups at visits, and the covariance within a subject that all groups share; in the readings' unit and its
/// square.
#[derive(Debug, Clone, PartialEq)]
pub struct Assumed {
    means: Vec<Vec<f64>>,
    covariance: Vec<Vec<f64>>,
    factor: Vec<Vec<f64>>,
}

/// What cannot be assumed.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum AssumedError {
    /// There is no group.
    NoGroups,
    /// There is no visit.
    NoVisits,
    /// This group has another number of means than the first.
    Ragged {
        /// The group.
        group: usize,
        /// How many means it has.
        means: usize,
        /// How many visits there are.
        visits: usize,
    },
    /// A mean is not finite, or beyond [`LARGEST`].
    Mean {
        /// The group.
        group: usize,
        /// The visit.
        visit: usize,
    },
    /// The covariance has not as many rows and columns as there are visits.
    Shape {
        /// How many visits there are.
        visits: usize,
    },
    /// A covariance is not finite, or beyond [`LARGEST`].
    Covariance {
        /// The visit of its row.
        row: usize,
        /// The visit of its column.
        column: usize,
    },
    /// A covariance differs from its mirror image.
    NotSymmetric {
        /// The visit of its row.
        row: usize,
        /// The visit of its column.
        column: usize,
    },
    /// No readings can have these SDs and correlations: the matrix is not positive semi-definite, which shows first at
    /// this visit.
    Impossible {
        /// The visit.
        visit: usize,
    },
}

impl fmt::Display for AssumedError {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match *self {
            Self::NoGroups => write!(f, "there are no groups"),
            Self::NoVisits => write!(f, "there are no visits"),
            Self::Ragged { group, means, visits } => {
                write!(f, "group {group} has {means} means where {visits} are due")
            }
            Self::Mean { group, visit } => write!(f, "the mean of group {group} at visit {visit} is no usable number"),
            Self::Shape { visits } => write!(f, "the covariance has to have {visits} rows and columns"),
            Self::Covariance { row, column } => {
                write!(f, "the covariance of visits {row} and {column} is no usable number")
            }
            Self::NotSymmetric { row, column } => {
                write!(f, "the covariance of visits {row} and {column} is not that of visits {column} and {row}")
            }
            Self::Impossible { visit } => {
                write!(
                    f,
                    "no readings can have these SDs and correlations: at visit {visit} they contradict earlier visits"
                )
            }
        }
    }
}

impl std::error::Error for AssumedError {}

/// The covariance matrix of readings with these SDs and this correlation matrix: r_ij s_i s_j. Rows and columns beyond
/// the number of SDs are left out.
#[must_use]
pub fn covariance(sds: &[f64], correlation: &[Vec<f64>]) -> Vec<Vec<f64>> {
    let row = |(s, row): (&f64, &Vec<f64>)| row.iter().zip(sds).map(|(r, t)| r * s * t).collect();
    sds.iter().zip(correlation).map(row).collect()
}

/// The correlation matrix in which every two visits have the same correlation.
#[must_use]
pub fn compound_symmetry(visits: usize, correlation: f64) -> Vec<Vec<f64>> {
    by_lag(visits, |lag| if lag == 0 { 1.0 } else { correlation })
}

/// The correlation matrix in which visits `lag` places apart have the correlation ρ^lag.
#[must_use]
pub fn ar1(visits: usize, correlation: f64) -> Vec<Vec<f64>> {
    by_lag(visits, |lag| correlation.powi(i32::try_from(lag).unwrap_or(i32::MAX)))
}

fn by_lag(visits: usize, of: impl Fn(usize) -> f64) -> Vec<Vec<f64>> {
    (0..visits).map(|i| (0..visits).map(|j| of(i.abs_diff(j))).collect()).collect()
}

/// What orthonormal contrasts of the visits have for an error: their mean variance, and how unlike they are.
pub(super) struct Spread {
    pub variance: f64,
    pub epsilon: Option<f64>,
}

impl Assumed {
    /// Means of each group at each visit, and the covariance matrix of the visits.
    ///
    /// # Errors
    /// [`AssumedError`], for the first thing at fault.
    pub fn new(means: Vec<Vec<f64>>, covariance: Vec<Vec<f64>>) -> Result<Self, AssumedError> {
        let visits = means.first().ok_or(AssumedError::NoGroups)?.len();
        if visits == 0 {
            return Err(AssumedError::NoVisits);
        }
        for (group, own) in means.iter().enumerate() {
            check_means(group, own, visits)?;
        }
        check_covariance(&covariance, visits)?;
        let factor = factor(&covariance)?;
        Ok(Self { means, covariance, factor })
    }

    /// The number of groups.
    #[must_use]
    pub fn groups(&self) -> usize {
        self.means.len()
    }

    /// The number of visits.
    #[must_use]
    pub fn visits(&self) -> usize {
        self.covariance.len()
    }

    /// The means of each group.
    #[must_use]
    pub fn means(&self) -> &[Vec<f64>] {
        &self.means
    }

    /// The rows of the covariance matrix.
    #[must_use]
    pub fn covariance(&self) -> &[Vec<f64>] {
        &self.covariance
    }

    /// The lower triangle L with L Lᵀ = covariance, row i holding i + 1 numbers: a subject of group g is the group's means
    /// plus L z, with z independent standard normal numbers.
    #[must_use]
    pub fn factor(&self) -> &[Vec<f64>] {
        &self.factor
    }

    /// The covariance with row and column means taken out: that of the readings less their subject's mean, whose traces
    /// are those of any orthonormal contrasts.
    pub(super) fn spread(&self) -> Spread {
        let k = self.visits() as f64;
        let row_means: Vec<f64> = self.covariance.iter().map(|row| row.iter().sum::<f64>() / k).collect();
        let grand = row_means.iter().sum::<f64>() / k;
        let largest = self.largest_variance();
        // As shares of the largest variance, so that no square is too small for a double.
        let (mut trace, mut squares) = (0.0, 0.0);
        for (i, (row, own)) in self.covariance.iter().zip(&row_means).enumerate() {
            for (j, (c, other)) in row.iter().zip(&row_means).enumerate() {
                let centred = (c - own - other + grand) / largest;
                squares += centred * centred;
                trace += if i == j { centred } else { 0.0 };
            }
        }
        // Readings that all move together have contrasts of rounding alone.
        if largest <= 0.0 || trace <= 1e-12 * k {
            return Spread { variance: 0.0, epsilon: None };
        }
        Spread {
            variance: largest * trace / (k - 1.0),
            epsilon: Some((trace * trace / ((k - 1.0) * squares)).clamp(1.0 / (k - 1.0), 1.0)),
        }
    }

    fn largest_variance(&self) -> f64 {
        let diagonal = self.covariance.iter().enumerate().filter_map(|(i, row)| row.get(i).copied());
        diagonal.fold(0.0, f64::max)
    }

    /// The variance of a subject's mean over visits.
    pub(super) fn variance_of_mean(&self) -> f64 {
        let k = self.visits() as f64;
        let variance = self.covariance.iter().flatten().sum::<f64>() / (k * k);
        if variance > 1e-12 * self.largest_variance() { variance } else { 0.0 }
    }

    /// The squared effects, each times the number of subjects that stand behind it.
    pub(super) fn squares(&self, effect: PlannedEffect, sizes: &[f64]) -> f64 {
        let group_means: Vec<f64> = self.means.iter().map(|own| mean(own, None)).collect();
        let visits = 0..self.visits();
        let at = |visit: usize, sizes: Option<&[f64]>| {
            let own: Vec<f64> = self.means.iter().filter_map(|own| own.get(visit).copied()).collect();
            mean(&own, sizes)
        };
        match effect {
            PlannedEffect::Within => {
                let profile: Vec<f64> = visits.map(|visit| at(visit, None)).collect();
                let groups = sizes.len() as f64;
                let behind = groups * groups / sizes.iter().map(|n| 1.0 / n).sum::<f64>();
                behind * deviations(&profile, None)
            }
            PlannedEffect::Between => deviations(&group_means, Some(sizes)),
            PlannedEffect::Interaction => visits
                .map(|visit| {
                    let own =
                        self.means.iter().zip(&group_means).filter_map(|(own, mean)| Some(own.get(visit)? - mean));
                    deviations(&own.collect::<Vec<_>>(), Some(sizes))
                })
                .sum(),
        }
    }
}

/// The mean, weighted where there are weights.
fn mean(values: &[f64], weights: Option<&[f64]>) -> f64 {
    let Some(first) = values.first() else { return 0.0 };
    let sum: f64 = weighted(values, weights).map(|(x, w)| w * (x - first)).sum();
    first + sum / weighted(values, weights).map(|(_, w)| w).sum::<f64>()
}

/// Σ w (x − mean)².
fn deviations(values: &[f64], weights: Option<&[f64]>) -> f64 {
    let mean = mean(values, weights);
    weighted(values, weights).map(|(x, w)| w * (x - mean).powi(2)).sum()
}

fn weighted<'a>(values: &'a [f64], weights: Option<&'a [f64]>) -> impl Iterator<Item = (f64, f64)> + 'a {
    let weight = move |i: usize| weights.map_or(1.0, |w| w.get(i).copied().unwrap_or(0.0));
    values.iter().enumerate().map(move |(i, x)| (*x, weight(i)))
}

fn usable(x: f64) -> bool {
    x.is_finite() && x.abs() <= LARGEST
}

fn check_means(group: usize, own: &[f64], visits: usize) -> Result<(), AssumedError> {
    if own.len() != visits {
        return Err(AssumedError::Ragged { group, means: own.len(), visits });
    }
    match own.iter().position(|&mean| !usable(mean)) {
        Some(visit) => Err(AssumedError::Mean { group, visit }),
        None => Ok(()),
    }
}

fn check_covariance(covariance: &[Vec<f64>], visits: usize) -> Result<(), AssumedError> {
    if covariance.len() != visits || covariance.iter().any(|row| row.len() != visits) {
        return Err(AssumedError::Shape { visits });
    }
    for (row, own) in covariance.iter().enumerate() {
        if let Some(column) = own.iter().position(|&c| !usable(c)) {
            return Err(AssumedError::Covariance { row, column });
        }
        for (column, (c, mirror)) in own.iter().zip(covariance.iter().filter_map(|other| other.get(row))).enumerate() {
            if (c - mirror).abs() > 1e-9 * c.abs().max(mirror.abs()) {
                return Err(AssumedError::NotSymmetric { row, column });
            }
        }
    }
    Ok(())
}

/// Cholesky's factor, in which a visit that earlier ones settle wholly has a zero on the diagonal.
fn factor(covariance: &[Vec<f64>]) -> Result<Vec<Vec<f64>>, AssumedError> {
    let mut factor: Vec<Vec<f64>> = Vec::with_capacity(covariance.len());
    for (visit, own) in covariance.iter().enumerate() {
        let variance = own.get(visit).copied().unwrap_or(0.0);
        let mut row: Vec<f64> = Vec::with_capacity(visit + 1);
        for (column, (above, c)) in factor.iter().zip(own).enumerate() {
            let left = c - dot(&row, above);
            let pivot = above.get(column).copied().unwrap_or(0.0);
            let scale = covariance.get(column).and_then(|row| row.get(column)).copied().unwrap_or(0.0) * variance;
            if pivot == 0.0 && left * left > SLACK * scale {
                return Err(AssumedError::Impossible { visit });
            }
            row.push(if pivot > 0.0 { left / pivot } else { 0.0 });
        }
        let left = variance - dot(&row, &row);
        if variance < 0.0 || left < -SLACK * variance {
            return Err(AssumedError::Impossible { visit });
        }
        row.push(if left > SLACK * variance { left.sqrt() } else { 0.0 });
        factor.push(row);
    }
    Ok(factor)
}

/// What rounding may take from a variance, as a share of it.
const SLACK: f64 = 1e-10;

fn dot(a: &[f64], b: &[f64]) -> f64 {
    a.iter().zip(b).map(|(x, y)| x * y).sum()
}
