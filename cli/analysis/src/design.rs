//! Designs: which reading belongs to which subject and level, checked once and for all.
//!
//! Invariants: a design is a full rectangle of at least one subject by at least one level, and each of its cells is
//! empty or holds a finite number of magnitude at most [`LARGEST`], so that no analysis needs to ask again. Positions,
//! where there are any, are finite, distinct, and one for each level. Every subject of a [`Design`] stands at
//! one level of each between factor.

pub(crate) mod factorial;

use std::fmt;

pub use factorial::{At, Design, Factor, FactorId, MOST_FACTORS, MOST_GROUPS};

/// The largest magnitude that a reading or a position may have. Squares, and sums of any number of squares that fit
/// into memory, then stay far inside the range of a double.
pub const LARGEST: f64 = 1e100;

/// What makes a table of readings no design.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum DesignError {
    /// There is not a single subject.
    NoSubjects,
    /// The first subject has no levels.
    NoLevels,
    /// This subject has another number of cells than the first.
    Ragged {
        /// The subject.
        subject: usize,
        /// How many cells it has.
        cells: usize,
        /// How many there are to be.
        levels: usize,
    },
    /// A reading is NaN or infinite.
    NotFinite {
        /// The subject.
        subject: usize,
        /// The level.
        level: usize,
    },
    /// A reading is larger in magnitude than [`LARGEST`].
    TooLarge {
        /// The subject.
        subject: usize,
        /// The level.
        level: usize,
    },
    /// The number of positions is not the number of levels.
    PositionCount {
        /// How many positions there are.
        positions: usize,
        /// How many levels there are.
        levels: usize,
    },
    /// The position of a level is NaN, infinite, or larger in magnitude than [`LARGEST`].
    PositionUnusable {
        /// The level.
        level: usize,
    },
    /// Two levels stand at the same position.
    PositionShared {
        /// The level.
        level: usize,
        /// The earlier level there.
        other: usize,
    },
    /// There are more factors than [`MOST_FACTORS`].
    TooManyFactors {
        /// How many there are.
        factors: usize,
    },
    /// The between factors make more groups than [`MOST_GROUPS`], or the within factors more cells than there can be.
    TooManyCombinations,
    /// A subject's groups are not one for each between factor.
    GroupCount {
        /// The subject.
        subject: usize,
        /// How many it has.
        groups: usize,
        /// How many between factors there are.
        factors: usize,
    },
    /// A subject is in a group that there is not.
    NoSuchGroup {
        /// The subject.
        subject: usize,
        /// The between factor.
        factor: usize,
        /// The level that the factor has not.
        level: usize,
    },
    /// There is no within factor of this index.
    NoSuchFactor {
        /// The index.
        factor: usize,
    },
}

impl fmt::Display for DesignError {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match *self {
            Self::NoSubjects => write!(f, "there are no subjects"),
            Self::NoLevels => write!(f, "there are no levels"),
            Self::Ragged { subject, cells, levels } => {
                write!(f, "subject {subject} has {cells} cells where {levels} are due")
            }
            Self::NotFinite { subject, level } => {
                write!(f, "the reading of subject {subject} at level {level} is not a finite number")
            }
            Self::TooLarge { subject, level } => {
                write!(f, "the reading of subject {subject} at level {level} is beyond {LARGEST:e}")
            }
            Self::PositionCount { positions, levels } => {
                write!(f, "{positions} positions are given for {levels} levels")
            }
            Self::PositionUnusable { level } => write!(f, "the position of level {level} is not a usable number"),
            Self::PositionShared { level, other } => write!(f, "levels {level} and {other} stand at the same position"),
            Self::TooManyFactors { factors } => {
                write!(f, "{factors} factors are more than the {MOST_FACTORS} that can be analysed together")
            }
            Self::TooManyCombinations => {
                write!(
                    f,
                    "the factors have too many combinations of levels; at most {MOST_GROUPS} groups can be compared"
                )
            }
            Self::GroupCount { subject, groups, factors } => {
                write!(f, "subject {subject} has {groups} groups where {factors} are due")
            }
            Self::NoSuchGroup { subject, factor, level } => {
                write!(f, "subject {subject} is at level {level} of between factor {factor}, which there is not")
            }
            Self::NoSuchFactor { factor } => write!(f, "there is no within factor {factor}"),
        }
    }
}

impl std::error::Error for DesignError {}

/// Subjects by the levels of one within-subject factor, with empty cells where nothing was measured.
///
/// Cells hold what is analysed: one number for each subject and level, already summarised over replicates. Subjects
/// and levels are known by index, in the order given. Where the levels are points in time, their positions (days, or
/// any other unit) allow polynomial trends at the real spacing.
#[derive(Debug, Clone, PartialEq)]
pub struct OneWithin {
    levels: usize,
    /// Row by row: the cells of subject `i` are `cells[i * levels ..][.. levels]`.
    cells: Vec<Option<f64>>,
    positions: Option<Vec<f64>>,
}

impl OneWithin {
    /// A design from one row of cells for each subject, without positions.
    ///
    /// # Errors
    /// [`DesignError::NoSubjects`], [`NoLevels`](DesignError::NoLevels), [`Ragged`](DesignError::Ragged),
    /// [`NotFinite`](DesignError::NotFinite) or [`TooLarge`](DesignError::TooLarge), for the first row at fault.
    pub fn from_rows<R: AsRef<[Option<f64>]>>(rows: &[R]) -> Result<Self, DesignError> {
        let levels = rows.first().ok_or(DesignError::NoSubjects)?.as_ref().len();
        if levels == 0 {
            return Err(DesignError::NoLevels);
        }
        let mut cells = Vec::with_capacity(rows.len().saturating_mul(levels));
        for (subject, row) in rows.iter().enumerate() {
            check_row(subject, row.as_ref(), levels)?;
            cells.extend_from_slice(row.as_ref());
        }
        Ok(Self { levels, cells, positions: None })
    }

    /// The same design with its levels placed on an axis, in days or any other unit; the order is free.
    ///
    /// # Errors
    /// [`DesignError::PositionCount`], [`PositionUnusable`](DesignError::PositionUnusable) or
    /// [`PositionShared`](DesignError::PositionShared).
    pub fn with_positions(self, positions: Vec<f64>) -> Result<Self, DesignError> {
        check_positions(&positions, self.levels)?;
        Ok(Self { positions: Some(positions), ..self })
    }

    /// The number of subjects, complete or not.
    #[must_use]
    pub fn subjects(&self) -> usize {
        self.cells.len() / self.levels
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

    /// The cells of each subject in turn.
    pub fn rows(&self) -> impl Iterator<Item = &[Option<f64>]> {
        self.cells.chunks_exact(self.levels)
    }

    /// The subjects that have a reading at every level, in their order.
    #[must_use]
    pub fn complete(&self) -> Vec<usize> {
        self.subjects_where(|row| row.iter().all(Option::is_some))
    }

    /// The subjects that lack a reading at one level or more, in their order.
    #[must_use]
    pub fn incomplete(&self) -> Vec<usize> {
        self.subjects_where(|row| row.iter().any(Option::is_none))
    }

    fn subjects_where(&self, keep: impl Fn(&[Option<f64>]) -> bool) -> Vec<usize> {
        self.rows().enumerate().filter(|(_, row)| keep(row)).map(|(subject, _)| subject).collect()
    }
}

fn check_row(subject: usize, row: &[Option<f64>], levels: usize) -> Result<(), DesignError> {
    if row.len() != levels {
        return Err(DesignError::Ragged { subject, cells: row.len(), levels });
    }
    for (level, value) in row.iter().enumerate().filter_map(|(level, cell)| cell.map(|value| (level, value))) {
        if !value.is_finite() {
            return Err(DesignError::NotFinite { subject, level });
        }
        if value.abs() > LARGEST {
            return Err(DesignError::TooLarge { subject, level });
        }
    }
    Ok(())
}

fn check_positions(positions: &[f64], levels: usize) -> Result<(), DesignError> {
    if positions.len() != levels {
        return Err(DesignError::PositionCount { positions: positions.len(), levels });
    }
    for (level, &position) in positions.iter().enumerate() {
        if !position.is_finite() || position.abs() > LARGEST {
            return Err(DesignError::PositionUnusable { level });
        }
        if let Some(other) = positions.iter().take(level).position(|&earlier| earlier == position) {
            return Err(DesignError::PositionShared { level, other });
        }
    }
    Ok(())
}
