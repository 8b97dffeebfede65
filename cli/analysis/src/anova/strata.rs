//! Readings taken apart into strata: between subjects, and within them for each interaction of within factors.
//!
//! Invariants: deviations are taken from means held in two doubles and only then squared or contrasted, so neither an
//! offset nor differences between subjects cost digits; residuals sum to zero over the cells of a subject and over the
//! subjects of a group, to rounding; the strata are orthogonal, so their sums of squares add up to the total.

use super::decomposition::Line;
use super::hypothesis::contrasts;
use super::term::FactorSet;
use crate::design::Design;
use crate::design::factorial::number;
use crate::moments::{Sum, Twofold, rounding_of, squares};

/// The complete subjects, group by group.
pub(crate) struct Table {
    /// The number of levels of each within factor.
    pub within: Vec<usize>,
    /// The levels of each between factor at which there is a complete subject.
    pub filled: Vec<Vec<usize>>,
    /// The complete subjects, as the design has them, in the order of the rows here.
    pub used: Vec<usize>,
    /// The group of each, among the combinations of the filled levels; never falling.
    pub group: Vec<usize>,
    /// The subjects of each of these groups.
    pub counts: Vec<usize>,
    /// Where each group of the design is among these; `None` for one at a level that is not filled.
    pub place: Vec<Option<usize>>,
    /// The readings, one column for each cell.
    pub columns: Vec<Vec<f64>>,
    /// What was taken from the readings before.
    offset: f64,
}

impl Table {
    pub fn of(design: &Design) -> Self {
        let complete =
            design.rows().zip(design.groups()).enumerate().filter(|(_, (row, _))| row.iter().all(Option::is_some));
        let mut complete: Vec<(usize, &[Option<f64>], usize)> =
            complete.map(|(subject, (row, &group))| (subject, row, group)).collect();
        let filled = filled(design, complete.iter().map(|(_, _, group)| *group));
        let levels: Vec<usize> = filled.iter().map(Vec::len).collect();
        let place: Vec<Option<usize>> =
            (0..design.between().iter().product()).map(|group| place(design, &filled, &levels, group)).collect();
        // Groups keep their order among the filled levels.
        complete.sort_by_key(|(_, _, group)| *group);
        let group: Vec<usize> =
            complete.iter().filter_map(|(_, _, group)| place.get(*group).copied().flatten()).collect();
        let mut counts = vec![0; levels.iter().product()];
        group.iter().for_each(|&group| counts.get_mut(group).into_iter().for_each(|n| *n += 1));
        let mut columns = vec![Vec::with_capacity(complete.len()); design.width()];
        for (_, row, _) in &complete {
            columns.iter_mut().zip(*row).for_each(|(column, y)| column.push(y.unwrap_or(0.0)));
        }
        let used = complete.iter().map(|(subject, ..)| *subject).collect();
        Self { within: design.within_levels(), filled, used, group, counts, place, columns, offset: design.offset() }
    }

    /// A column by groups.
    pub fn by_group<'a>(&'a self, column: &'a [f64]) -> impl Iterator<Item = &'a [f64]> {
        let mut rest = column;
        self.counts.iter().map(move |&n| {
            let (own, others) = rest.split_at_checked(n).unwrap_or((rest, &[]));
            rest = others;
            own
        })
    }

    pub fn subjects(&self) -> usize {
        self.group.len()
    }

    /// The number of filled levels of each between factor.
    pub fn between(&self) -> Vec<usize> {
        self.filled.iter().map(Vec::len).collect()
    }

    /// The groups of the design whose levels are all filled and that have nobody all the same.
    pub fn empty_groups(&self) -> impl Iterator<Item = usize> {
        let nobody = |place: &Option<usize>| place.and_then(|at| self.counts.get(at)) == Some(&0);
        self.place.iter().enumerate().filter(move |(_, place)| nobody(place)).map(|(group, _)| group)
    }
}

fn filled(design: &Design, groups: impl Iterator<Item = usize>) -> Vec<Vec<usize>> {
    let mut there: Vec<Vec<bool>> = design.between().iter().map(|&levels| vec![false; levels]).collect();
    for group in groups {
        for (there, level) in there.iter_mut().zip(design.group_levels(group)) {
            there.get_mut(level).into_iter().for_each(|it| *it = true);
        }
    }
    let levels = |there: &Vec<bool>| there.iter().enumerate().filter(|(_, it)| **it).map(|(level, _)| level).collect();
    there.iter().map(levels).collect()
}

/// The number of a group among the filled levels.
fn place(design: &Design, filled: &[Vec<usize>], levels: &[usize], group: usize) -> Option<usize> {
    let at = design.group_levels(group);
    let own: Option<Vec<usize>> =
        at.iter().zip(filled).map(|(level, filled)| filled.iter().position(|it| it == level)).collect();
    Some(number(own?.into_iter(), levels))
}

/// The readings taken apart. Orthonormal contrasts of the cells turn the means and the residuals into scores.
pub(crate) struct Strata {
    /// The mean of each group over all cells.
    pub group_means: Vec<f64>,
    /// y − group's mean at the cell − what the subject is above its group: columns of cells, over subjects.
    pub residuals: Vec<Vec<f64>>,
    /// What each subject is above the mean of its group, over all cells.
    pub subjects: Vec<f64>,
    /// One for each set of within factors; that between subjects first.
    pub strata: Vec<Stratum>,
    /// Σ (y − ȳ)² over all readings.
    pub total: Line,
    /// What rounding can have put into any of the sums of squares.
    pub rounding: f64,
}

/// One stratum: scores on its orthonormal contrasts.
pub(crate) struct Stratum {
    /// Its within factors; none between subjects.
    pub within: FactorSet,
    /// The means of the groups on each contrast; between subjects less the mean of all subjects.
    pub means: Vec<Vec<f64>>,
    /// The residual scores of the subjects on each contrast.
    pub scores: Vec<Vec<f64>>,
    /// Within groups.
    pub error: Line,
    /// Of all scores: between subjects about their mean, else about zero.
    pub total: Line,
}

impl Strata {
    /// A group without subjects has means of 0, which nothing may use.
    pub fn of(table: &Table) -> Self {
        let means = Means::of(table);
        let (subjects, residuals) = means.deviations(table);
        let rounding = table.columns.iter().map(|column| rounding_of(column, table.offset)).sum();
        let readings = table.subjects() * table.columns.len();
        let about = |column: &Vec<f64>| Sum::over_each(column, |y| means.grand.below(y).value().powi(2));
        let total = joined(table.columns.iter().map(about)).value();
        let total = Line::new(vanishing(total, rounding), readings.saturating_sub(1) as f64);
        let between = between(table, &means, &subjects, rounding);
        let sets = FactorSet::varied(&table.within).subsets().into_iter().filter(|set| !set.is_empty());
        let within = sets.map(|set| within(table, &means, &residuals, set, rounding));
        let strata = std::iter::once(between).chain(within).collect();
        let group_means = means.groups.iter().map(|mean| mean.value()).collect();
        Self { group_means, residuals, subjects, strata, total, rounding }
    }
}

/// Means in two doubles give sums of squares off by ε² in their turn, so what is smaller still is nothing but that.
pub(super) fn vanishing(ss: f64, rounding: f64) -> f64 {
    if ss <= f64::EPSILON * f64::EPSILON * rounding { 0.0 } else { ss }
}

fn between(table: &Table, means: &Means, subjects: &[f64], rounding: f64) -> Stratum {
    let root = (table.columns.len() as f64).sqrt();
    let scores = vec![subjects.iter().map(|s| root * s).collect()];
    let means = vec![means.groups.iter().map(|mean| root * mean.minus(means.grand).value()).collect()];
    Stratum::of(table, FactorSet::EMPTY, means, scores, rounding)
}

fn within(table: &Table, means: &Means, residuals: &[Vec<f64>], set: FactorSet, rounding: f64) -> Stratum {
    let rows = contrasts(&table.within, set, |levels| 1.0 / levels.sqrt());
    let profiles = means.profiles();
    let scores = rows.iter().map(|row| combined(row, residuals)).collect();
    let means = rows.iter().map(|row| combined(row, &profiles)).collect();
    Stratum::of(table, set, means, scores, rounding)
}

/// Σ_j c_j x_j for columns x.
fn combined(coefficients: &[f64], columns: &[Vec<f64>]) -> Vec<f64> {
    let mut sum = vec![0.0; columns.first().map_or(0, Vec::len)];
    for (c, column) in coefficients.iter().zip(columns).filter(|(c, _)| **c != 0.0) {
        sum.iter_mut().zip(column).for_each(|(sum, x)| *sum += c * x);
    }
    sum
}

impl Stratum {
    fn of(table: &Table, within: FactorSet, means: Vec<Vec<f64>>, scores: Vec<Vec<f64>>, rounding: f64) -> Self {
        let (n, p) = (table.subjects(), scores.len());
        let groups = table.counts.iter().filter(|n| **n > 0).count();
        let error = vanishing(joined(scores.iter().map(|column| squares(column))).value(), rounding);
        let weighted = means.iter().flat_map(|column| column.iter().zip(&table.counts));
        let model = Sum::of(weighted.map(|(x, &n)| n as f64 * x * x)).value();
        let free = if within.is_empty() { n.saturating_sub(1) } else { n * p };
        Self {
            within,
            means,
            scores,
            error: Line::new(error, (n.saturating_sub(groups) * p) as f64),
            total: Line::new(vanishing(error + model, rounding), free as f64),
        }
    }

    /// The number of contrasts.
    pub fn contrasts(&self) -> usize {
        self.scores.len()
    }

    /// The degrees of freedom of each contrast's error.
    pub fn error_df_each(&self) -> f64 {
        self.error.df / self.contrasts().max(1) as f64
    }
}

/// The means that the deviations are taken from.
struct Means {
    grand: Twofold,
    /// Of each group over all cells.
    groups: Vec<Twofold>,
    /// Of each cell, of each group.
    cells: Vec<Vec<Twofold>>,
    /// Of each subject.
    subjects: Vec<Twofold>,
}

impl Means {
    fn of(table: &Table) -> Self {
        let mut of_subjects = vec![Sum::default(); table.subjects()];
        let mut of_groups = vec![Sum::default(); table.counts.len()];
        let mut cells = Vec::with_capacity(table.columns.len());
        for column in &table.columns {
            of_subjects.iter_mut().zip(column).for_each(|(sum, &y)| sum.add(y));
            let sums: Vec<Sum> = table.by_group(column).map(|own| Sum::over_each(own, |y| y)).collect();
            of_groups.iter_mut().zip(&sums).for_each(|(all, one)| all.join(*one));
            cells.push(sums.iter().zip(&table.counts).map(|(sum, &n)| sum.over(n)).collect());
        }
        let width = table.columns.len();
        let mut grand = Sum::default();
        of_groups.iter().for_each(|&sum| grand.join(sum));
        Self {
            grand: grand.over(table.subjects() * width),
            groups: of_groups.iter().zip(&table.counts).map(|(sum, &n)| sum.over(n * width)).collect(),
            cells,
            subjects: of_subjects.iter().map(|sum| sum.over(width)).collect(),
        }
    }

    /// What each group's cells are above the group's own mean: columns of cells, over groups.
    fn profiles(&self) -> Vec<Vec<f64>> {
        let profile =
            |cell: &Vec<Twofold>| cell.iter().zip(&self.groups).map(|(mean, own)| mean.minus(*own).value()).collect();
        self.cells.iter().map(profile).collect()
    }

    /// The subjects above their groups, and the residuals.
    fn deviations(&self, table: &Table) -> (Vec<f64>, Vec<Vec<f64>>) {
        let own = |group: &usize| self.groups.get(*group).copied().unwrap_or_default();
        let subjects =
            self.subjects.iter().zip(&table.group).map(|(mean, group)| mean.minus(own(group)).value()).collect();
        let residual = |(column, cell): (&Vec<f64>, &Vec<Twofold>)| {
            let mut residuals = Vec::with_capacity(column.len());
            let mut subjects = self.subjects.iter();
            let effects = cell.iter().zip(&self.groups).map(|(mean, own)| mean.minus(*own));
            for (own, effect) in table.by_group(column).zip(effects) {
                residuals.extend(own.iter().zip(&mut subjects).map(|(&y, mean)| mean.below(y).minus(effect).value()));
            }
            residuals
        };
        (subjects, table.columns.iter().zip(&self.cells).map(residual).collect())
    }
}

fn joined(sums: impl Iterator<Item = Sum>) -> Sum {
    sums.fold(Sum::default(), |mut all, one| {
        all.join(one);
        all
    })
}
