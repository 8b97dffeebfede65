//! Chance that is settled by a seed.
//!
//! Invariant: the same seed and name give the same numbers on every machine.

use revisant_analysis::distributions::Normal;

/// Steele, Lea & Flood's SplitMix64 (2014): small, and the same everywhere.
#[derive(Debug, Clone)]
pub struct Chance(u64);

impl Chance {
    /// Begins a series for a seed and a name.
    pub fn new(seed: u64, name: &str) -> Self {
        // The 64-bit hash of Fowler, Noll and Vo, variant 1a.
        let hash = |sum: u64, byte: u8| (sum ^ u64::from(byte)).wrapping_mul(0x0000_0100_0000_01b3);
        Self(name.bytes().fold(seed ^ 0xcbf2_9ce4_8422_2325, hash))
    }

    fn next(&mut self) -> u64 {
        self.0 = self.0.wrapping_add(0x9e37_79b9_7f4a_7c15);
        let mut z = self.0;
        z = (z ^ (z >> 30)).wrapping_mul(0xbf58_476d_1ce4_e5b9);
        z = (z ^ (z >> 27)).wrapping_mul(0x94d0_49bb_1331_11eb);
        z ^ (z >> 31)
    }

    /// Standard normal, by the quantile of a uniform number that is never 0 or 1.
    pub fn normal(&mut self) -> f64 {
        let uniform = ((self.next() >> 11) as f64 + 0.5) / (1u64 << 53) as f64;
        Normal.quantile(uniform).unwrap_or(0.0)
    }

    /// Uniform from 0 up to 1.
    fn uniform(&mut self) -> f64 {
        (self.next() >> 11) as f64 / (1u64 << 53) as f64
    }

    /// A whole number from 0 up to `below`.
    pub fn below(&mut self, below: u64) -> u64 {
        self.next() % below.max(1)
    }

    /// Close to normal, with mean 0 and the given standard deviation: twelve uniform numbers added up, so that no
    /// function of the platform's own is needed.
    pub fn spread(&mut self, sd: f64) -> f64 {
        let sum: f64 = (0..12).map(|_| self.uniform()).sum();
        (sum - 6.0) * sd
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_first_numbers_of_the_published_generator() {
        let mut chance = Chance(1234567);
        assert_eq!([chance.next(), chance.next()], [6457827717110365317, 3203168211198807973]);
    }

    #[test]
    fn spreads_as_it_should() {
        let mut chance = Chance::new(1, "spread");
        let values: Vec<f64> = (0..4000).map(|_| chance.spread(2.0)).collect();
        let mean = values.iter().sum::<f64>() / 4000.0;
        let sd = (values.iter().map(|value| (value - mean).powi(2)).sum::<f64>() / 3999.0).sqrt();
        assert!(mean.abs() < 0.15 && (sd - 2.0).abs() < 0.1, "{mean} {sd}");
    }

    #[test]
    fn normal_numbers_have_the_moments_of_the_normal_distribution() {
        let mut chance = Chance::new(1, "normal");
        let values: Vec<f64> = (0..40_000).map(|_| chance.normal()).collect();
        let moment = |power: i32| values.iter().map(|value| value.powi(power)).sum::<f64>() / 40_000.0;
        assert!(moment(1).abs() < 0.025 && (moment(2) - 1.0).abs() < 0.04, "{} {}", moment(1), moment(2));
        assert!((moment(4) - 3.0).abs() < 0.25, "{}", moment(4));
    }
}
