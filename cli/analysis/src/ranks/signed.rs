//! Signed-rank comparison of two levels.
//!
//! Invariants: a difference of zero is counted and then dropped; test, estimate and interval all come from the
//! differences that are left.

use super::grain::{Graded, Rough};
use super::midranks::Midranks;
use super::null;
use super::walsh::PairSums;
use crate::contrasts::ContrastKind;
use crate::{Confidence, Interval, Note};

/// Up to so many differences other than zero, p is exact.
pub const MOST_EXACT: usize = 50;

/// The comparison of two levels by Wilcoxon's signed ranks: later minus earlier level.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct SignedRank {
    /// Which pair.
    pub kind: ContrastKind,
    /// The subjects that have both levels, those with a difference of zero among them.
    pub n: usize,
    /// Those with a difference other than zero.
    pub nonzero: usize,
    /// W+, the sum of the ranks of the positive differences, ranked by size without the zeros; tied sizes share the mean
    /// of their ranks (Wilcoxon 1945, *Biometrics Bulletin* 1:80). `None` without a subject.
    pub positive_rank_sum: Option<f64>,
    /// Whether `p` is exact; `None` where there is no p.
    pub exact: Option<bool>,
    /// Two-sided. Up to [`MOST_EXACT`] differences other than zero: min(1, 2 min(P(W+ ≤ w), P(W+ ≥ w))) over all patterns
    /// of signs of the ranks there are, ties included. Above: by the normal distribution, with the variance corrected for
    /// ties and a continuity correction of ½ (Conover 1999, *Practical Nonparametric Statistics*, 5.7). `None` where every
    /// difference is zero.
    pub p: Option<f64>,
    /// `p` adjusted within the family.
    pub p_adjusted: Option<f64>,
    /// The median of the Walsh averages of the differences other than zero, in the readings' unit (Hodges & Lehmann 1963,
    /// *Annals of Mathematical Statistics* 34:598).
    pub estimate: Option<f64>,
    /// The Walsh averages of rank q and N + 1 − q out of N, where q is the smallest v ≥ 1 with P(V ≤ v) ≥ half of what the
    /// confidence leaves, V the signed-rank sum without ties, exactly and for any number of differences (Hollander, Wolfe
    /// & Chicken 2014, *Nonparametric Statistical Methods*, 3.3).
    pub ci: Option<Interval>,
    /// The confidence that the interval has where there are no ties, 1 − 2 P(V < q): at least what was asked for, unless
    /// there are so few differences that the widest interval falls short.
    pub ci_confidence: Option<f64>,
}

pub(super) fn compare(
    graded: &Graded,
    kind: ContrastKind,
    confidence: Confidence,
    notes: &mut Vec<Note>,
) -> SignedRank {
    let (ContrastKind::Pairwise { level, against } | ContrastKind::EachVsFirst { level, against }) = kind else {
        return empty(kind);
    };
    let all = graded.differences(level, against);
    let (n, some): (usize, Vec<Rough>) = (all.len(), all.into_iter().filter(|d| d.value.abs() > d.rounding).collect());
    if some.is_empty() {
        notes.push(match n {
            0 => Note::TooFewForContrast { contrast: kind, subjects: 0 },
            _ => Note::NoDifference { contrast: kind },
        });
        return SignedRank { n, positive_rank_sum: (n > 0).then_some(0.0), ..empty(kind) };
    }
    let found = tested(&some, SignedRank { n, nonzero: some.len(), ..empty(kind) });
    let found = estimated(&some, graded.per_unit, confidence, found);
    if found.ci_confidence.is_some_and(|reached| reached < confidence.level() - 1e-12) {
        notes.push(Note::ConfidenceNotReached { contrast: kind, differences: some.len() });
    }
    found
}

fn empty(kind: ContrastKind) -> SignedRank {
    SignedRank {
        kind,
        n: 0,
        nonzero: 0,
        positive_rank_sum: None,
        exact: None,
        p: None,
        p_adjusted: None,
        estimate: None,
        ci: None,
        ci_confidence: None,
    }
}

fn tested(differences: &[Rough], pair: SignedRank) -> SignedRank {
    let sizes: Vec<Rough> = differences.iter().map(|d| Rough { value: d.value.abs(), ..*d }).collect();
    let ranks = Midranks::of(&sizes);
    let sum: u64 = ranks.doubled.iter().zip(differences).filter(|(_, d)| d.value > 0.0).map(|(rank, _)| rank).sum();
    let exact = differences.len() <= MOST_EXACT;
    let p = if exact {
        Some(null::exact_p(&ranks.doubled, sum))
    } else {
        null::normal_p(differences.len(), sum, ranks.ties)
    };
    SignedRank { positive_rank_sum: Some(sum as f64 / 2.0), exact: Some(exact), p, ..pair }
}

fn estimated(differences: &[Rough], per_unit: f64, confidence: Confidence, pair: SignedRank) -> SignedRank {
    let sums = PairSums::of(differences.iter().map(|d| d.value).collect());
    let q = null::lower_rank(differences.len(), (1.0 - confidence.level()) / 2.0);
    // Sums of two, in steps: halved, and back in the readings' unit, with one rounding.
    let average = |sum: f64| sum / (2.0 * per_unit);
    let ends = sums.ranked(q.rank).zip(sums.ranked((sums.count() + 1).saturating_sub(q.rank)));
    SignedRank {
        estimate: sums.median().map(average),
        ci: ends.map(|(lower, upper)| Interval { lower: average(lower), upper: average(upper) }),
        ci_confidence: Some(1.0 - 2.0 * q.below),
        ..pair
    }
}
