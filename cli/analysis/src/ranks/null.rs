//! What the signed-rank sum does where no difference is more likely up than down.
//!
//! Invariants: given the sizes of the differences every pattern of signs is equally likely, and exact p values count
//! patterns; the distribution without ties is exact too, by recursion where that is fast and by Fourier inversion beyond.

use std::f64::consts::{PI, TAU};

use crate::distributions::Normal;

/// The two-sided p value of a sum of ranks, over all patterns of signs of these ranks: min(1, 2 min(P(W ≤ w), P(W ≥ w)))
/// (Pratt & Gibbons 1981, *Concepts of Nonparametric Theory*, 3.7). Ranks and sum are doubled; at most 63 ranks.
pub(super) fn exact_p(doubled: &[u64], sum: u64) -> f64 {
    let whole: u64 = doubled.iter().sum();
    let length = usize::try_from(whole).unwrap_or(usize::MAX).saturating_add(1);
    // How many patterns of the signs so far have each sum.
    let mut patterns = vec![0_u64; length];
    if let Some(none) = patterns.first_mut() {
        *none = 1;
    }
    for step in doubled.iter().map(|&rank| usize::try_from(rank).unwrap_or(usize::MAX)) {
        for s in (step..length).rev() {
            let more = patterns.get(s - step).copied().unwrap_or(0);
            if let Some(count) = patterns.get_mut(s) {
                *count += more;
            }
        }
    }
    // The distribution is symmetric: the mass from `sum` up is that from its mirror image down.
    let nearer = usize::try_from(sum.min(whole.saturating_sub(sum))).unwrap_or(usize::MAX);
    let tail: u64 = patterns.iter().take(nearer.saturating_add(1)).sum();
    let all: u64 = patterns.iter().sum();
    (2.0 * (tail as f64 / all as f64)).min(1.0)
}

/// The two-sided p value of a sum of ranks by the normal distribution, the variance corrected for ties and the sum moved
/// by ½ towards its mean (Conover 1999, *Practical Nonparametric Statistics*, 5.7). Doubled sum; `ties` = Σ (t³ − t).
pub(super) fn normal_p(count: usize, sum: u64, ties: f64) -> Option<f64> {
    let n = count as f64;
    let variance = n * (n + 1.0) * (2.0 * n + 1.0) / 24.0 - ties / 48.0;
    let off = ((sum as f64 / 2.0 - n * (n + 1.0) / 4.0).abs() - 0.5).max(0.0);
    Normal.sf(off / variance.sqrt()).map(|tail| (2.0 * tail).min(1.0))
}

/// The rank of the Walsh average at which an interval begins, and the mass P(V < rank) left out below it.
pub(super) struct LowerRank {
    pub rank: u64,
    pub below: f64,
}

/// The smallest v ≥ 1 with P(V ≤ v) ≥ `tail`, V the signed-rank sum of `count` differences without ties.
pub(super) fn lower_rank(count: usize, tail: f64) -> LowerRank {
    if count <= MOST_RECURSIVE {
        return by_recursion(count, tail);
    }
    let inversion = Inversion::of(count);
    let (mut low, mut high) = (0_u64, (count as u64) * (count as u64 + 1) / 4);
    // P(V ≤ high) is at least ½ or thereabouts; P(V ≤ 0) is 2^(−count).
    while high - low > 1 {
        let middle = low + (high - low) / 2;
        if inversion.cdf(middle as f64) >= tail { high = middle } else { low = middle }
    }
    LowerRank { rank: high, below: inversion.cdf(high as f64 - 1.0).clamp(0.0, 1.0) }
}

/// Up to so many differences the recursion is as fast as one needs.
const MOST_RECURSIVE: usize = 120;

fn by_recursion(count: usize, tail: f64) -> LowerRank {
    let (mut rank, mut below, mut so_far) = (0, 0.0, 0.0);
    for (v, mass) in (0_u64..).zip(masses(count)) {
        if v >= 1 {
            (rank, below) = (v, so_far);
        }
        so_far += mass;
        if v >= 1 && so_far >= tail {
            break;
        }
    }
    LowerRank { rank, below }
}

/// P(V = v) for v from 0 to n (n + 1) / 2 (Wilcoxon 1945, *Biometrics Bulletin* 1:80): rank j joins with probability ½.
fn masses(count: usize) -> Vec<f64> {
    let mut masses = vec![1.0];
    for rank in 1..=count {
        let mut next = vec![0.0; masses.len() + rank];
        for (v, mass) in masses.iter().enumerate() {
            for at in [v, v + rank] {
                if let Some(slot) = next.get_mut(at) {
                    *slot += mass / 2.0;
                }
            }
        }
        masses = next;
    }
    masses
}

/// The distribution of V by inversion of its characteristic function, whose part about the mean is Π cos(j t / 2):
/// P(V ≤ v) = ½ + 1/(2π) ∫ from 0 to π of Π cos(j t / 2) sin((v + ½ − μ) t) / sin(t / 2) dt (after Gil-Pelaez 1951,
/// *Biometrika* 38:481), right to about 1e-15 from 100 differences on; below, the function has other peaks that count.
struct Inversion {
    mean: f64,
    reach: f64,
    step: f64,
    /// The characteristic function at step, 2 step, and so on.
    nodes: Vec<f64>,
}

impl Inversion {
    fn of(count: usize) -> Self {
        let n = count as f64;
        let sd = (n * (n + 1.0) * (2.0 * n + 1.0) / 24.0).sqrt();
        // Sampling confuses values 2π / step apart, and beyond 12 SD there is nothing; so is the integrand from 9 / SD on.
        let reach = 12.0 * sd;
        let step = TAU / (2.0 * reach);
        let nodes = (1..).map(|i| f64::from(i) * step).take_while(|&t| t < PI && t * sd < 9.0);
        let at = |t: f64| (1..=count).map(|j| (j as f64 * t / 2.0).cos()).product();
        Self { mean: n * (n + 1.0) / 4.0, reach, step, nodes: nodes.map(at).collect() }
    }

    fn cdf(&self, v: f64) -> f64 {
        let from_mean = v + 0.5 - self.mean;
        if from_mean.abs() >= self.reach {
            return if from_mean > 0.0 { 1.0 } else { 0.0 };
        }
        let terms = (1_u32..).zip(&self.nodes).map(|(i, node)| {
            let t = f64::from(i) * self.step;
            node * (from_mean * t).sin() / (t / 2.0).sin()
        });
        // The trapezoidal rule; at t = 0 the integrand is twice the distance from the mean.
        0.5 + self.step / TAU * (from_mean + terms.sum::<f64>())
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn inversion_and_recursion_agree() {
        for count in [121, 200] {
            let inversion = Inversion::of(count);
            let mut so_far = 0.0;
            for (v, mass) in masses(count).into_iter().enumerate() {
                so_far += mass;
                assert!((inversion.cdf(v as f64) - so_far).abs() < 1e-13, "{count}: {v}");
            }
        }
    }

    /// Lower critical values of the signed-rank sum, largest w with P(W ≤ w) ≤ 0.025: 8 at n = 10, 52 at n = 20, 434 at
    /// n = 50 (Wilcoxon 1945; common tables, from memory). The rank sought is one above.
    #[test]
    fn ranks_of_common_tables() {
        for (count, critical) in [(10, 8), (20, 52), (50, 434)] {
            assert_eq!(lower_rank(count, 0.025).rank, critical + 1, "{count}");
        }
    }
}
