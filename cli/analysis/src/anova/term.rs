//! Effects by the factors that make them up.
//!
//! Invariants: a set of factors has each once, in their order; sets are listed by size, then in the order of their
//! factors, so `arm`, `sex`, `arm:sex`.

use std::cmp::Reverse;

use crate::design::FactorId;

/// A set of factors of one kind, by index.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Default)]
pub struct FactorSet(u16);

impl FactorSet {
    /// No factor.
    pub const EMPTY: Self = Self(0);

    /// The set of this factor alone.
    #[must_use]
    pub fn one(factor: usize) -> Self {
        Self(u32::try_from(factor).ok().and_then(|by| 1_u16.checked_shl(by)).unwrap_or(0))
    }

    /// The set with this factor too.
    #[must_use]
    pub fn with(self, factor: usize) -> Self {
        Self(self.0 | Self::one(factor).0)
    }

    /// Whether the factor is in the set.
    #[must_use]
    pub fn has(self, factor: usize) -> bool {
        Self::one(factor).0 & self.0 != 0
    }

    /// Whether all of the other set is in this one.
    #[must_use]
    pub fn contains(self, other: Self) -> bool {
        other.0 & self.0 == other.0
    }

    /// Whether there is no factor in it.
    #[must_use]
    pub fn is_empty(self) -> bool {
        self.0 == 0
    }

    /// How many factors are in it.
    #[must_use]
    pub fn len(self) -> usize {
        self.0.count_ones() as usize
    }

    /// The factors, in their order.
    pub fn iter(self) -> impl Iterator<Item = usize> {
        (0..16).filter(move |&factor| self.has(factor))
    }

    /// The factors of more than one level: only these have effects.
    pub(crate) fn varied(levels: &[usize]) -> Self {
        Self(levels.iter().enumerate().filter(|(_, levels)| **levels > 1).map(|(f, _)| Self::one(f).0).sum())
    }

    /// Every set of these factors, the empty one first.
    pub(crate) fn subsets(self) -> Vec<Self> {
        let mut subsets: Vec<Self> = (0..=self.0).map(Self).filter(|&subset| self.contains(subset)).collect();
        subsets.sort_by_key(|subset| (subset.len(), Reverse(subset.0.reverse_bits())));
        subsets
    }
}

/// A main effect or an interaction.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Default)]
pub struct Term {
    /// Its between factors.
    pub between: FactorSet,
    /// Its within factors; they also name its error, their interaction with the subjects.
    pub within: FactorSet,
}

impl Term {
    /// The main effect of a factor.
    #[must_use]
    pub fn main(factor: FactorId) -> Self {
        match factor {
            FactorId::Between(index) => Self { between: FactorSet::one(index), ..Self::default() },
            FactorId::Within(index) => Self { within: FactorSet::one(index), ..Self::default() },
        }
    }

    /// Its factors, those between subjects first, each kind in the order of the design.
    pub fn factors(self) -> impl Iterator<Item = FactorId> {
        self.between.iter().map(FactorId::Between).chain(self.within.iter().map(FactorId::Within))
    }
}
