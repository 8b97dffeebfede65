//! Ranks in which tied numbers share the mean of theirs.
//!
//! Invariant: ranks are held doubled, as whole numbers, so that they and their sums are exact.

use super::grain::Rough;

/// The ranks of some numbers, from 1 up.
pub(super) struct Midranks {
    /// Twice the rank of each number, in the order given.
    pub doubled: Vec<u64>,
    /// Σ (t³ − t) over runs of t tied numbers.
    pub ties: f64,
}

impl Midranks {
    /// Neighbours in size are tied where their roundings alone can have parted them.
    pub fn of(numbers: &[Rough]) -> Self {
        let mut order: Vec<(usize, Rough)> = numbers.iter().copied().enumerate().collect();
        order.sort_by(|(_, a), (_, b)| a.value.total_cmp(&b.value));
        let tied = |(_, a): &(usize, Rough), (_, b): &(usize, Rough)| b.value - a.value <= a.rounding + b.rounding;
        let mut ranks = Self { doubled: vec![0; numbers.len()], ties: 0.0 };
        let mut before = 0;
        for run in order.chunk_by(tied) {
            let length = run.len() as u64;
            ranks.ties += run.len() as f64 * (run.len() as f64 * run.len() as f64 - 1.0);
            // The run has the ranks before + 1 to before + length.
            for slot in run.iter().map(|(index, _)| *index) {
                if let Some(rank) = ranks.doubled.get_mut(slot) {
                    *rank = 2 * before + length + 1;
                }
            }
            before += length;
        }
        ranks
    }
}
