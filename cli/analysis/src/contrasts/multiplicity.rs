//! Adjustment of p values for the size of their family.
//!
//! Invariant: an adjusted p value is never below its own p value, never above 1, and the order of the p values is kept.

/// How the p values of a family are adjusted.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default, Hash)]
pub enum Multiplicity {
    /// Not at all.
    #[default]
    None,
    /// min(1, m p) (Dunn 1961, *Journal of the American Statistical Association* 56:52): family-wise error.
    Bonferroni,
    /// max over the p values up to this one of min(1, (m + 1 − rank) p) (Holm 1979, *Scandinavian Journal of Statistics*
    /// 6:65): family-wise error.
    Holm,
    /// min over the p values from this one on of min(1, m p / rank) (Benjamini & Hochberg 1995, *Journal of the Royal
    /// Statistical Society B* 57:289): false discovery rate.
    BenjaminiHochberg,
}

impl Multiplicity {
    /// Whether it bounds the chance of a single false finding in the family.
    pub(super) fn bounds_the_family(self) -> bool {
        matches!(self, Self::Bonferroni | Self::Holm)
    }

    /// The adjusted p values, in the order given. The family is made up of the p values that there are; what is `None`,
    /// or no number between 0 and 1, comes out as `None`.
    #[must_use]
    pub fn adjust(self, p: &[Option<f64>]) -> Vec<Option<f64>> {
        let mut ranked: Vec<(usize, f64)> = p.iter().enumerate().filter_map(|(i, p)| p.map(|p| (i, p))).collect();
        ranked.retain(|(_, p)| (0.0..=1.0).contains(p));
        ranked.sort_by(|(_, a), (_, b)| a.total_cmp(b));
        let mut adjusted = vec![None; p.len()];
        for ((index, _), value) in ranked.iter().zip(self.of_ranked(&ranked)) {
            if let Some(slot) = adjusted.get_mut(*index) {
                *slot = Some(value);
            }
        }
        adjusted
    }

    /// The adjusted values of p values in ascending order.
    fn of_ranked(self, ranked: &[(usize, f64)]) -> Vec<f64> {
        let m = ranked.len() as f64;
        let times = |factor: &dyn Fn(f64) -> f64| -> Vec<f64> {
            ranked.iter().zip(1_u32..).map(|((_, p), rank)| (factor(f64::from(rank)) * p).min(1.0)).collect()
        };
        match self {
            Self::None => times(&|_| 1.0),
            Self::Bonferroni => times(&|_| m),
            Self::Holm => running(times(&|rank| m + 1.0 - rank).into_iter(), f64::max),
            Self::BenjaminiHochberg => {
                let mut from_last = running(times(&|rank| m / rank).into_iter().rev(), f64::min);
                from_last.reverse();
                from_last
            }
        }
    }
}

fn running(values: impl Iterator<Item = f64>, join: fn(f64, f64) -> f64) -> Vec<f64> {
    values
        .scan(None, |so_far, value| {
            let joined = so_far.map_or(value, |earlier| join(earlier, value));
            *so_far = Some(joined);
            Some(joined)
        })
        .collect()
}
