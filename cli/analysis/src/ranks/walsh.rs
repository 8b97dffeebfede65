//! Order statistics of the Walsh averages, the means of every two numbers and of each with itself.
//!
//! Invariant: averages are counted and never made, so that memory grows with the numbers and not with their pairs.

/// The sums of the pairs (i ≤ j) of some numbers, which are twice the Walsh averages.
pub(super) struct PairSums {
    ascending: Vec<f64>,
}

impl PairSums {
    /// From at least one number.
    pub fn of(mut numbers: Vec<f64>) -> Self {
        numbers.sort_by(f64::total_cmp);
        Self { ascending: numbers }
    }

    /// n (n + 1) / 2.
    pub fn count(&self) -> u64 {
        let n = self.ascending.len() as u64;
        n * (n + 1) / 2
    }

    /// The sum that has this rank, from 1 to [`count`](Self::count); `None` outside.
    ///
    /// Bisection over the doubles themselves, in their order: 64 steps of counting whatever the numbers are.
    pub fn ranked(&self, rank: u64) -> Option<f64> {
        let (first, last) = (self.ascending.first()?, self.ascending.last()?);
        if rank == 0 || rank > self.count() {
            return None;
        }
        let (mut low, mut high) = (key(first + first), key(last + last));
        while low < high {
            let middle = low + (high - low) / 2;
            if self.up_to(unkey(middle)) >= rank { high = middle } else { low = middle + 1 }
        }
        // Zero comes out without a sign.
        Some(unkey(low) + 0.0)
    }

    /// The middle sum, or the mean of the two middle ones.
    pub fn median(&self) -> Option<f64> {
        let count = self.count();
        Some(f64::midpoint(self.ranked(count.div_ceil(2))?, self.ranked(count / 2 + 1)?))
    }

    /// How many sums are at most `limit`: for each number those from itself on, up to a place that only moves down.
    fn up_to(&self, limit: f64) -> u64 {
        let mut end = self.ascending.as_slice();
        let mut count = 0;
        for (i, number) in self.ascending.iter().enumerate() {
            while let Some((last, rest)) = end.split_last() {
                if number + last <= limit {
                    break;
                }
                end = rest;
            }
            if end.len() <= i {
                break;
            }
            count += (end.len() - i) as u64;
        }
        count
    }
}

const SIGN: u64 = 1 << 63;

/// A whole number that orders as the doubles do.
fn key(x: f64) -> u64 {
    let bits = x.to_bits();
    if bits & SIGN == 0 { bits | SIGN } else { !bits }
}

fn unkey(key: u64) -> f64 {
    f64::from_bits(if key & SIGN == 0 { !key } else { key & !SIGN })
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn every_rank_is_that_of_the_sorted_sums() {
        let numbers = vec![3.5, -1.0, 0.0, 7.25, -1.0, 1e-300, -4e10, 2.0, 0.1];
        let sums = PairSums::of(numbers.clone());
        let mut all: Vec<f64> = (0..numbers.len())
            .flat_map(|i| (i..numbers.len()).map(move |j| (i, j)))
            .map(|(i, j)| numbers[i] + numbers[j])
            .collect();
        all.sort_by(f64::total_cmp);
        let found: Vec<f64> = (1..=sums.count()).map(|rank| sums.ranked(rank).unwrap()).collect();
        assert_eq!(found, all);
        assert_eq!((sums.ranked(0), sums.ranked(sums.count() + 1)), (None, None));
    }
}
