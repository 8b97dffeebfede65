//! The step of which the numbers of a data set are whole multiples, as far as exports and plan settle it.
//!
//! Invariant: a step is stated only where every number is such a multiple in decimals; where one is not, whoever uses the
//! step finds it out and says so.

use revisant_analysis::ranks::Grain;
use revisant_schema::plan::Summary;

/// What is known of the numbers so far.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Steps {
    /// The most decimals that a reading has in its shortest form.
    decimals: u32,
    /// A common multiple of the numbers of replicates that made up a cell; `None`: too large to count with.
    parts: Option<u32>,
}

impl Default for Steps {
    fn default() -> Self {
        Self { decimals: 0, parts: Some(1) }
    }
}

impl Steps {
    /// Takes in the readings that one condition of a cell is made of.
    ///
    /// The shortest decimal that reads back as a reading is the number as exported, without zeros at its end, as long as
    /// it was exported with 15 digits or fewer and in the measure's unit. A conversion or a correction by a short decimal
    /// gives such numbers too; where it gives numbers with as many digits as a double has, no usable step comes out.
    pub fn take_in(&mut self, summary: Summary, readings: impl Iterator<Item = f64>) {
        let mut count = 0_u32;
        for reading in readings {
            count = count.saturating_add(1);
            self.decimals = self.decimals.max(decimals(reading));
        }
        self.share(match summary {
            Summary::Mean => count,
            // Half way between the two in the middle.
            Summary::Median if count.is_multiple_of(2) => 2,
            Summary::Median | Summary::Min | Summary::Max | Summary::First | Summary::Last => 1,
        });
    }

    /// Takes in that cells are means over so many conditions.
    pub fn averaged(&mut self, conditions: usize) {
        let conditions = u32::try_from(conditions).ok();
        self.parts = self.parts.zip(conditions).and_then(|(parts, over)| parts.checked_mul(over.max(1)));
    }

    fn share(&mut self, by: u32) {
        self.parts = self.parts.and_then(|parts| least_common_multiple(parts, by.max(1)));
    }

    /// The step; `None` where it would be finer than doubles can count, as after a conversion.
    pub fn grain(self) -> Option<Grain> {
        Grain::shared(self.decimals, self.parts?)
    }
}

/// Of the shortest form that reads back as the same number.
fn decimals(reading: f64) -> u32 {
    let text = reading.to_string();
    text.split_once('.').map_or(0, |(_, after)| u32::try_from(after.len()).unwrap_or(u32::MAX))
}

fn least_common_multiple(a: u32, b: u32) -> Option<u32> {
    let (mut x, mut y) = (a, b);
    while y != 0 {
        (x, y) = (y, x % y);
    }
    (a / x.max(1)).checked_mul(b)
}

#[cfg(test)]
mod tests {
    use super::*;

    fn of(summary: Summary, cells: &[&[f64]]) -> Steps {
        let mut steps = Steps::default();
        cells.iter().for_each(|cell| steps.take_in(summary, cell.iter().copied()));
        steps
    }

    #[test]
    fn the_step_is_that_of_the_finest_reading_shared_by_the_replicates() {
        let cells: [&[f64]; 3] = [&[5.4, 5.55], &[5.5], &[1.0, 2.0, 3.0]];
        assert_eq!(of(Summary::Max, &cells).grain(), Grain::decimals(2));
        assert_eq!(of(Summary::Mean, &cells).grain(), Grain::shared(2, 6));
        assert_eq!(of(Summary::Median, &cells).grain(), Grain::shared(2, 2));
        let mut averaged = of(Summary::Mean, &cells);
        averaged.averaged(2);
        assert_eq!(averaged.grain(), Grain::shared(2, 12));
    }

    #[test]
    fn an_exact_conversion_keeps_a_step_and_another_has_none() {
        assert_eq!(of(Summary::Mean, &[&[31.5 / 1000.0]]).grain(), Grain::decimals(4));
        assert_eq!(of(Summary::Mean, &[&[31.5 * 0.101_971_6]]).grain(), Grain::decimals(7));
        assert_eq!(of(Summary::Mean, &[&[0.5 / 7.0]]).grain(), None, "{}", 0.5 / 7.0);
        assert_eq!(of(Summary::Mean, &[]).grain(), Grain::decimals(0));
    }

    #[test]
    fn too_many_replicates_to_share_a_step_give_none() {
        let cells: Vec<Vec<f64>> = [61, 59, 53, 47, 43, 41].iter().map(|n| vec![1.5; *n]).collect();
        let cells: Vec<&[f64]> = cells.iter().map(Vec::as_slice).collect();
        assert_eq!(of(Summary::Mean, &cells).grain(), None);
    }
}
