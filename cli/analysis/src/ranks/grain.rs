//! Readings as whole multiples of the step in which they were exported.
//!
//! Invariant: graded readings are either all whole numbers of steps, and their sums and differences exact, or all plain
//! readings, each with the rounding that it may carry.

use crate::Note;
use crate::design::OneWithin;

/// The step of which all readings of a measure are whole multiples: 10^(−decimals) / parts, in the readings' unit.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Grain {
    per_unit: f64,
}

/// Whole numbers up to here, and sums of two of them, are exact in a double.
const LARGEST_EXACT: f64 = 4_503_599_627_370_496.0;

impl Grain {
    /// Readings exported with this many decimals: 2 for 5.55. `None` beyond 15.
    #[must_use]
    pub fn decimals(decimals: u32) -> Option<Self> {
        Self::shared(decimals, 1)
    }

    /// Means over `parts` readings exported with this many decimals; where cells have different numbers of replicates,
    /// `parts` is a common multiple of these numbers. `None` where `parts` is 0 or the step finer than a double can count.
    #[must_use]
    pub fn shared(decimals: u32, parts: u32) -> Option<Self> {
        let steps = 10_u64.checked_pow(decimals)?.checked_mul(u64::from(parts))?;
        let per_unit = steps as f64;
        (1.0..=LARGEST_EXACT).contains(&per_unit).then_some(Self { per_unit })
    }

    /// The reading in steps; `None` where it is no multiple of the step as far as doubles can tell, or too large.
    fn steps(self, reading: f64) -> Option<f64> {
        let scaled = reading * self.per_unit;
        let whole = scaled.round();
        let rounding = 8.0 * f64::EPSILON * scaled.abs();
        (whole.abs() <= LARGEST_EXACT / 2.0 && (scaled - whole).abs() <= rounding && rounding < 0.25).then_some(whole)
    }
}

/// A number, and by how much rounding may have moved it.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct Rough {
    pub value: f64,
    pub rounding: f64,
}

/// The readings of a design, in steps where all are whole numbers of steps.
pub(super) struct Graded {
    pub levels: usize,
    /// How many steps make up one unit of the readings.
    pub per_unit: f64,
    cells: Vec<Option<f64>>,
    exact: bool,
}

impl Graded {
    pub fn of(design: &OneWithin, grain: Option<Grain>, notes: &mut Vec<Note>) -> Self {
        let cells: Vec<Option<f64>> = design.rows().flatten().copied().collect();
        let plain = |cells| Self { levels: design.levels(), per_unit: 1.0, cells, exact: false };
        let Some(grain) = grain else { return plain(cells) };
        let in_steps: Option<Vec<Option<f64>>> =
            cells.iter().map(|cell| cell.map_or(Some(None), |reading| grain.steps(reading).map(Some))).collect();
        match in_steps {
            Some(steps) => Self { per_unit: grain.per_unit, exact: true, ..plain(steps) },
            None => {
                notes.push(Note::OffGrain);
                plain(cells)
            }
        }
    }

    /// The readings of each complete subject.
    pub fn complete_rows(&self) -> impl Iterator<Item = Vec<Rough>> {
        self.cells.chunks_exact(self.levels).filter_map(|row| {
            let readings: Option<Vec<f64>> = row.iter().copied().collect();
            Some(readings?.into_iter().map(|value| self.rough(value, value.abs())).collect())
        })
    }

    /// Later less earlier reading of each subject that has both.
    pub fn differences(&self, later: usize, earlier: usize) -> Vec<Rough> {
        let both = self.cells.chunks_exact(self.levels).filter_map(|row| {
            let (y, x) = (row.get(later).copied().flatten()?, row.get(earlier).copied().flatten()?);
            Some(self.rough(y - x, y.abs() + x.abs()))
        });
        both.collect()
    }

    /// A mean over replicates is off by little more than one unit in the last place, a reading by half of one.
    fn rough(&self, value: f64, sizes: f64) -> Rough {
        Rough { value, rounding: if self.exact { 0.0 } else { f64::EPSILON * sizes } }
    }
}
