//! Seeded chance: the same seed gives the same study, order and moments on every machine.

/// A small generator (Steele, Lea & Flood 2014, "Fast splittable pseudorandom number generators", SplitMix64): good
/// enough to shuffle files, and without a dependency whose next version draws other numbers.
#[derive(Debug, Clone)]
pub struct Chance(u64);

impl Chance {
    /// A generator with this seed.
    pub fn new(seed: u64) -> Self {
        Self(seed)
    }

    /// The next number.
    pub fn draw(&mut self) -> u64 {
        self.0 = self.0.wrapping_add(0x9e37_79b9_7f4a_7c15);
        let mut mixed = self.0;
        mixed = (mixed ^ (mixed >> 30)).wrapping_mul(0xbf58_476d_1ce4_e5b9);
        mixed = (mixed ^ (mixed >> 27)).wrapping_mul(0x94d0_49bb_1331_11eb);
        mixed ^ (mixed >> 31)
    }

    /// A number below `bound`, which is above 0.
    pub fn below(&mut self, bound: u64) -> u64 {
        // The bias of a remainder does not matter to a shuffle.
        self.draw() % bound
    }

    /// Puts the items in another order.
    pub fn shuffle<T>(&mut self, items: &mut [T]) {
        for at in (1..items.len()).rev() {
            items.swap(at, self.below(at as u64 + 1) as usize);
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_numbers_are_those_of_the_paper() {
        // The first three of seed 1234567, as in the authors' reference code (Vigna 2015, splitmix64.c).
        let mut chance = Chance::new(1_234_567);
        let drawn = [chance.draw(), chance.draw(), chance.draw()];
        assert_eq!(drawn, [6_457_827_717_110_365_317, 3_203_168_211_198_807_973, 9_817_491_932_198_370_423]);
    }
}
