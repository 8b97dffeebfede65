//! Designs of several factors, within and between subjects.
//!
//! Invariants: those of the parent module; cells lie in the order of the within factors with the last running fastest,
//! and groups likewise; the numbers of factors and of groups are bounded, so that no analysis needs more memory than its
//! readings, times the number of their combinations.

use super::{DesignError, OneWithin, check_positions, check_row};
use crate::moments::Sum;

/// The most factors, within and between together: they have 2 to this power effects.
pub const MOST_FACTORS: usize = 10;
/// The most combinations of between levels: the work for unequal groups grows with the fourth power of their number.
pub const MOST_GROUPS: usize = 100;

/// The levels of a factor, and where they lie if they are points in time.
#[derive(Debug, Clone, PartialEq)]
pub struct Factor {
    levels: usize,
    positions: Option<Vec<f64>>,
}

impl Factor {
    /// A factor of so many levels.
    ///
    /// # Errors
    /// [`DesignError::NoLevels`] for none.
    pub fn of(levels: usize) -> Result<Self, DesignError> {
        if levels == 0 { Err(DesignError::NoLevels) } else { Ok(Self { levels, positions: None }) }
    }

    /// A factor with a level at each position, in days or any other unit; the order is free.
    ///
    /// # Errors
    /// [`DesignError::NoLevels`] for none, [`PositionUnusable`](DesignError::PositionUnusable) or
    /// [`PositionShared`](DesignError::PositionShared).
    pub fn at(positions: Vec<f64>) -> Result<Self, DesignError> {
        let factor = Self::of(positions.len())?;
        check_positions(&positions, factor.levels)?;
        Ok(Self { positions: Some(positions), ..factor })
    }

    /// The number of levels.
    #[must_use]
    pub fn levels(&self) -> usize {
        self.levels
    }

    /// The positions of the levels, where they were given.
    #[must_use]
    pub fn positions(&self) -> Option<&[f64]> {
        self.positions.as_deref()
    }
}

/// A factor of a design, by its index among those of its kind.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, Hash)]
pub enum FactorId {
    /// What tells subjects apart, such as the arm.
    Between(usize),
    /// What every subject goes through, such as the visits.
    Within(usize),
}

/// A level of a factor.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, Hash)]
pub struct At {
    /// The factor.
    pub factor: FactorId,
    /// Its level.
    pub level: usize,
}

/// Subjects, each in one group, by the combinations of the levels of any number of within factors.
///
/// Cells hold what is analysed: one number for each subject and combination, already summarised over replicates. Cell
/// number Σ_f level_f × Π_(g > f) levels_g: the last within factor runs fastest. Groups are numbered in the same way.
/// Without a within factor there is one cell, without a between factor one group.
#[derive(Debug, Clone, PartialEq)]
pub struct Design {
    within: Vec<Factor>,
    between: Vec<usize>,
    width: usize,
    /// The group of each subject.
    groups: Vec<usize>,
    /// Row by row, as in [`OneWithin`], each less the offset.
    cells: Vec<Option<f64>>,
    /// 0 in every design that a caller can see.
    offset: f64,
}

impl Design {
    /// A design from its within factors, the number of levels of each between factor, and for each subject its level of
    /// each between factor and its cells.
    ///
    /// # Errors
    /// [`DesignError::TooManyFactors`], [`NoLevels`](DesignError::NoLevels) (a between factor without),
    /// [`TooManyCombinations`](DesignError::TooManyCombinations), [`NoSubjects`](DesignError::NoSubjects); and for the
    /// first subject at fault [`GroupCount`](DesignError::GroupCount), [`NoSuchGroup`](DesignError::NoSuchGroup),
    /// [`Ragged`](DesignError::Ragged), [`NotFinite`](DesignError::NotFinite), [`TooLarge`](DesignError::TooLarge).
    pub fn new<G: AsRef<[usize]>, C: AsRef<[Option<f64>]>>(
        within: Vec<Factor>,
        between: Vec<usize>,
        subjects: &[(G, C)],
    ) -> Result<Self, DesignError> {
        let width = check_factors(&within, &between)?;
        if subjects.is_empty() {
            return Err(DesignError::NoSubjects);
        }
        let mut design = Self { within, between, width, groups: Vec::new(), cells: Vec::new(), offset: 0.0 };
        design.groups.reserve(subjects.len());
        design.cells.reserve(subjects.len().saturating_mul(width));
        for (subject, (groups, cells)) in subjects.iter().enumerate() {
            check_row(subject, cells.as_ref(), width)?;
            design.groups.push(group(subject, groups.as_ref(), &design.between)?);
            design.cells.extend_from_slice(cells.as_ref());
        }
        Ok(design)
    }

    /// The within factors, in their order.
    #[must_use]
    pub fn within(&self) -> &[Factor] {
        &self.within
    }

    /// The number of levels of each between factor, in their order.
    #[must_use]
    pub fn between(&self) -> &[usize] {
        &self.between
    }

    /// The number of levels of a factor; 0 for one that there is not.
    #[must_use]
    pub fn levels(&self, factor: FactorId) -> usize {
        match factor {
            FactorId::Between(index) => self.between.get(index).copied().unwrap_or(0),
            FactorId::Within(index) => self.within.get(index).map_or(0, Factor::levels),
        }
    }

    /// The number of subjects, complete or not.
    #[must_use]
    pub fn subjects(&self) -> usize {
        self.groups.len()
    }

    /// The number of combinations of the within levels.
    #[must_use]
    pub fn width(&self) -> usize {
        self.width
    }

    /// The cells of each subject in turn.
    pub fn rows(&self) -> impl Iterator<Item = &[Option<f64>]> {
        self.cells.chunks_exact(self.width)
    }

    /// The group number of each subject in turn.
    #[must_use]
    pub fn groups(&self) -> &[usize] {
        &self.groups
    }

    /// The level of each within factor in a cell.
    #[must_use]
    pub fn cell_levels(&self, cell: usize) -> Vec<usize> {
        digits(cell, &self.within_levels())
    }

    /// The level of each between factor in a group.
    #[must_use]
    pub fn group_levels(&self, group: usize) -> Vec<usize> {
        digits(group, &self.between)
    }

    /// The subjects that have every cell, in their order.
    #[must_use]
    pub fn complete(&self) -> Vec<usize> {
        self.subjects_where(|row| row.iter().all(Option::is_some))
    }

    /// The subjects that lack a cell or more, in their order.
    #[must_use]
    pub fn incomplete(&self) -> Vec<usize> {
        self.subjects_where(|row| row.iter().any(Option::is_none))
    }

    /// The same subjects with the named within factors averaged over: a cell is the mean of the cells that it takes in,
    /// and empty unless all of them are there.
    ///
    /// # Errors
    /// [`DesignError::NoSuchFactor`].
    pub fn averaged_over(&self, factors: &[usize]) -> Result<Self, DesignError> {
        if let Some(&factor) = factors.iter().find(|&&factor| factor >= self.within.len()) {
            return Err(DesignError::NoSuchFactor { factor });
        }
        let kept: Vec<usize> = (0..self.within.len()).filter(|factor| !factors.contains(factor)).collect();
        Ok(self.keeping(&kept, |_| true))
    }

    /// The same readings less the smallest of them in magnitude, which costs no reading more than its own rounding, so
    /// that means of cells keep the digits that a common offset would take.
    pub(crate) fn centred(&self) -> Self {
        let readings = self.cells.iter().flatten().copied();
        let least = readings.min_by(|a, b| a.abs().total_cmp(&b.abs())).unwrap_or(0.0);
        let cells = self.cells.iter().map(|y| y.map(|y| y - least)).collect();
        Self { cells, offset: self.offset + least, ..self.empty_of(self.groups.clone()) }
    }

    /// What was taken from every reading.
    pub(crate) fn offset(&self) -> f64 {
        self.offset
    }

    /// The number of levels of each within factor.
    pub(crate) fn within_levels(&self) -> Vec<usize> {
        self.within.iter().map(Factor::levels).collect()
    }

    /// The design of these within factors alone, averaged over the others, of the cells that `wanted` says by the levels
    /// of all within factors.
    pub(crate) fn keeping(&self, kept: &[usize], wanted: impl Fn(&[usize]) -> bool) -> Self {
        let within: Vec<Factor> = kept.iter().filter_map(|&factor| self.within.get(factor).cloned()).collect();
        let levels: Vec<usize> = within.iter().map(Factor::levels).collect();
        let width = levels.iter().product();
        let mut taken = vec![Vec::new(); width];
        for cell in 0..self.width {
            let at = self.cell_levels(cell);
            let into = number(kept.iter().filter_map(|&factor| at.get(factor).copied()), &levels);
            if let Some(cells) = taken.get_mut(into).filter(|_| wanted(&at)) {
                cells.push(cell);
            }
        }
        let mut cells = Vec::with_capacity(self.groups.len() * width);
        for row in self.rows() {
            cells.extend(taken.iter().map(|taken| mean_of(row, taken)));
        }
        Self { within, between: self.between.clone(), width, groups: self.groups.clone(), cells, offset: self.offset }
    }

    /// The subjects of which `wanted` holds by the levels of the between factors; `None` if there are none.
    pub(crate) fn subjects_at(&self, wanted: impl Fn(&[usize]) -> bool) -> Option<Self> {
        let kept: Vec<bool> = self.groups.iter().map(|&group| wanted(&self.group_levels(group))).collect();
        let groups: Vec<usize> = self.groups.iter().zip(&kept).filter(|(_, kept)| **kept).map(|(g, _)| *g).collect();
        let rows = self.rows().zip(&kept).filter(|(_, kept)| **kept);
        let cells = rows.flat_map(|(row, _)| row.iter().copied()).collect();
        (!groups.is_empty()).then(|| Self { cells, ..self.empty_of(groups) })
    }

    /// The same factors, with subjects of these groups whose cells are yet to come.
    fn empty_of(&self, groups: Vec<usize>) -> Self {
        let (within, between) = (self.within.clone(), self.between.clone());
        Self { within, between, width: self.width, groups, cells: Vec::new(), offset: self.offset }
    }

    fn subjects_where(&self, keep: impl Fn(&[Option<f64>]) -> bool) -> Vec<usize> {
        self.rows().enumerate().filter(|(_, row)| keep(row)).map(|(subject, _)| subject).collect()
    }
}

impl From<&OneWithin> for Design {
    /// The same subjects as one group.
    fn from(design: &OneWithin) -> Self {
        let positions = design.positions().map(<[f64]>::to_vec);
        Self {
            within: vec![Factor { levels: design.levels(), positions }],
            between: Vec::new(),
            width: design.levels(),
            groups: vec![0; design.subjects()],
            cells: design.cells.clone(),
            offset: 0.0,
        }
    }
}

/// The mean of these cells of a row, if all are there.
fn mean_of(row: &[Option<f64>], cells: &[usize]) -> Option<f64> {
    let value = |cell: &usize| row.get(*cell).copied().flatten();
    match cells {
        [] => None,
        [one] => value(one),
        more => {
            let mut sum = Sum::default();
            for cell in more {
                sum.add(value(cell)?);
            }
            Some(sum.over(more.len()).value())
        }
    }
}

/// The number of cells, if all is in bounds.
fn check_factors(within: &[Factor], between: &[usize]) -> Result<usize, DesignError> {
    let factors = within.len() + between.len();
    if factors > MOST_FACTORS {
        return Err(DesignError::TooManyFactors { factors });
    }
    if between.contains(&0) {
        return Err(DesignError::NoLevels);
    }
    let groups = between.iter().copied().try_fold(1, usize::checked_mul).filter(|&groups| groups <= MOST_GROUPS);
    let cells = within.iter().map(Factor::levels).try_fold(1, usize::checked_mul);
    groups.and(cells).ok_or(DesignError::TooManyCombinations)
}

fn group(subject: usize, groups: &[usize], between: &[usize]) -> Result<usize, DesignError> {
    if groups.len() != between.len() {
        return Err(DesignError::GroupCount { subject, groups: groups.len(), factors: between.len() });
    }
    let beyond = groups.iter().zip(between).enumerate().find(|(_, (level, levels))| level >= levels);
    match beyond {
        Some((factor, (&level, _))) => Err(DesignError::NoSuchGroup { subject, factor, level }),
        None => Ok(number(groups.iter().copied(), between)),
    }
}

/// The number of a combination of levels, the last running fastest.
pub(crate) fn number(at: impl Iterator<Item = usize>, levels: &[usize]) -> usize {
    at.zip(levels).fold(0, |number, (level, levels)| number * levels + level)
}

/// The combination of levels of a number.
pub(crate) fn digits(mut number: usize, levels: &[usize]) -> Vec<usize> {
    let mut digits: Vec<usize> = levels
        .iter()
        .rev()
        .map(|&levels| {
            let digit = number % levels.max(1);
            number /= levels.max(1);
            digit
        })
        .collect();
    digits.reverse();
    digits
}
