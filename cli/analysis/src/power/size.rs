//! How many subjects a wanted power takes.
//!
//! Invariant: the number given has the power, and one fewer in each group has not.

use super::{Alpha, Assumed, PlannedEffect, Power, PowerError, Test, check};

/// The most subjects a group that are tried.
pub const MOST_PER_GROUP: usize = 1 << 20;

/// What a number of subjects has to reach.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Planning {
    alpha: Alpha,
    power: f64,
    dropout: f64,
}

impl Planning {
    /// `alpha` and the wanted `power` strictly between 0 and 1; `dropout`, the share of subjects who will not be complete,
    /// from 0 to below 1.
    ///
    /// # Errors
    /// [`PowerError::Alpha`], [`Power`](PowerError::Power) or [`Dropout`](PowerError::Dropout).
    pub fn new(alpha: f64, power: f64, dropout: f64) -> Result<Self, PowerError> {
        let alpha = Alpha::new(alpha)?;
        if !(0.0 < power && power < 1.0) {
            return Err(PowerError::Power(power));
        }
        if !(0.0..1.0).contains(&dropout) {
            return Err(PowerError::Dropout(dropout));
        }
        Ok(Self { alpha, power, dropout })
    }
}

/// A number of subjects, the same in each group.
#[derive(Debug, Clone, PartialEq)]
pub struct SampleSize {
    /// Complete subjects in each group: the fewest with the wanted power, and at least two.
    pub per_group: usize,
    /// Subjects to enrol in each group so that as many are complete: per_group / (1 − dropout), rounded up.
    pub enrolled_per_group: usize,
    /// `enrolled_per_group` in all groups.
    pub enrolled: usize,
    /// The power with `per_group` complete subjects.
    pub reached: Power,
}

/// The smallest number of complete subjects in each group with which the test of the effect has the wanted power, by the
/// formula of [`power`](super::power()), whose words of caution hold here too.
///
/// # Errors
/// [`PowerError::OneVisit`] or [`OneGroup`](PowerError::OneGroup), [`NoEffect`](PowerError::NoEffect),
/// [`NoError`](PowerError::NoError), or [`OutOfReach`](PowerError::OutOfReach).
pub fn sample_size(assumed: &Assumed, effect: PlannedEffect, planning: Planning) -> Result<SampleSize, PowerError> {
    check(assumed, effect)?;
    let test = |per_group: usize| Test::of(assumed, effect, &vec![per_group; assumed.groups()]);
    let first = test(2);
    if first.variance <= 0.0 {
        return Err(PowerError::NoError);
    }
    if first.squares <= 0.0 && planning.power > planning.alpha.level() {
        return Err(PowerError::NoEffect);
    }
    let power = |per_group: usize| test(per_group).power(planning.alpha).power.unwrap_or(0.0);
    let per_group = smallest(|per_group| power(per_group) >= planning.power)
        .ok_or_else(|| PowerError::OutOfReach { power: power(MOST_PER_GROUP) })?;
    let enrolled_per_group = inflated(per_group, planning.dropout);
    Ok(SampleSize {
        per_group,
        enrolled_per_group,
        enrolled: enrolled_per_group.saturating_mul(assumed.groups()),
        reached: test(per_group).power(planning.alpha),
    })
}

/// The smallest number from two up that is enough, given that all above it are enough too.
fn smallest(enough: impl Fn(usize) -> bool) -> Option<usize> {
    let mut high = 2;
    while !enough(high) {
        high *= 2;
        if high > MOST_PER_GROUP {
            return None;
        }
    }
    let mut low = high / 2;
    while high - low > 1 {
        let middle = low.midpoint(high);
        if enough(middle) { high = middle } else { low = middle }
    }
    Some(high)
}

fn inflated(per_group: usize, dropout: f64) -> usize {
    let wanted = per_group as f64 / (1.0 - dropout);
    // 40 / 0.8 is 50, whatever the last digit of the quotient says.
    (wanted * (1.0 - 1e-12)).ceil() as usize
}
