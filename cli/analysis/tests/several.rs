//! What has to hold for any readings of several factors.

#![allow(clippy::unwrap_used, clippy::panic)]

use proptest::prelude::*;
use revisant_analysis::anova::{Effect, FactorSet, Factorial, Term, factorial, within_subject_bands};
use revisant_analysis::checks::checks;
use revisant_analysis::contrasts::{Compared, Comparison, Family, Multiplicity};
use revisant_analysis::design::{Design, Factor, FactorId};
use revisant_analysis::{Confidence, Interval, Settings, Sums};

type Subject = (Vec<usize>, Vec<Option<f64>>);

/// What a design is made from, so that a test can make it another way.
#[derive(Debug, Clone)]
struct Made {
    within: Vec<usize>,
    between: Vec<usize>,
    subjects: Vec<Subject>,
}

impl Made {
    fn design(&self) -> Design {
        let positions = |&k: &usize| Factor::at((0..k).map(|j| (j * j + j) as f64).collect()).unwrap();
        Design::new(self.within.iter().map(positions).collect(), self.between.clone(), &self.subjects).unwrap()
    }

    fn analyse(&self, sums: Sums) -> Factorial {
        factorial(&self.design(), &settings(sums))
    }

    fn mapped(&self, change: impl Fn(f64) -> f64) -> Self {
        let row = |(groups, cells): &Subject| (groups.clone(), cells.iter().map(|y| y.map(&change)).collect());
        Self { subjects: self.subjects.iter().map(row).collect(), ..self.clone() }
    }

    /// Every level of every factor renamed by counting from the other end.
    fn reversed(&self) -> Self {
        let row = |(groups, cells): &Subject| {
            let groups = groups.iter().zip(&self.between).map(|(level, levels)| levels - 1 - level).collect();
            (groups, cells.iter().rev().copied().collect())
        };
        Self { subjects: self.subjects.iter().map(row).collect(), ..self.clone() }
    }
}

fn settings(sums: Sums) -> Settings {
    let contrasts = vec![
        Family::Pairwise,
        Family::EachVsFirst,
        Family::Polynomial,
        Family::Simple,
        Family::Groups { at: Some(0) },
        Family::Groups { at: None },
    ];
    Settings { contrasts, multiplicity: Multiplicity::Holm, sums, ..Settings::default() }
}

fn number(at: &[usize], levels: &[usize]) -> usize {
    at.iter().zip(levels).fold(0, |number, (level, levels)| number * levels + level)
}

/// Designs of up to two factors of each kind, each group filled, of multiples of 1/8.
fn complete(equal: bool) -> impl Strategy<Value = Made> {
    of((prop::collection::vec(1_usize..5, 0..3), prop::collection::vec(1_usize..4, 0..3)), equal)
}

fn of(factors: impl Strategy<Value = (Vec<usize>, Vec<usize>)>, equal: bool) -> impl Strategy<Value = Made> {
    factors.prop_flat_map(move |(within, between)| {
        let (width, groups): (usize, usize) = (within.iter().product(), between.iter().product());
        let sizes = prop::collection::vec(2_usize..6, groups);
        let values = prop::collection::vec((-4000_i32..4000).prop_map(|x| f64::from(x) / 8.0), groups * 6 * width);
        (Just(within), Just(between), sizes, values).prop_map(move |(within, between, sizes, values)| {
            let mut rows = values.chunks_exact(width);
            let mut subjects = Vec::new();
            for (group, &size) in sizes.iter().enumerate() {
                let (mut left, mut at) = (group, Vec::new());
                for levels in between.iter().rev() {
                    at.insert(0, left % levels);
                    left /= levels;
                }
                assert_eq!(number(&at, &between), group);
                let size = if equal { 3 } else { size };
                subjects
                    .extend((0..size).map(|_| (at.clone(), rows.next().unwrap().iter().map(|y| Some(*y)).collect())));
            }
            Made { within, between, subjects }
        })
    })
}

/// Any designs: gaps, ties, huge and tiny values, groups with nobody or one.
fn degenerate() -> impl Strategy<Value = Made> {
    let factors = (prop::collection::vec(1_usize..4, 0..3), prop::collection::vec(1_usize..4, 0..3), 1_usize..9);
    factors.prop_flat_map(|(within, between, n)| {
        let value = prop_oneof![
            1 => Just(None),
            6 => (-2_i32..3).prop_map(|x| Some(f64::from(x))),
            2 => (-5_i32..5).prop_map(|x| Some(f64::from(x) / 10.0)),
            1 => prop::sample::select(vec![0.0, 1e100, -1e100, 1e-300, 5e-324, 1e12 + 0.1, 0.1 + 0.2]).prop_map(Some),
        ];
        let group: Vec<_> = between.iter().map(|&levels| 0..levels).collect();
        let subject = (group, prop::collection::vec(value, within.iter().product::<usize>()));
        (Just(within), Just(between), prop::collection::vec(subject, n)).prop_map(|(within, between, subjects)| Made {
            within,
            between,
            subjects,
        })
    })
}

fn near(a: Option<f64>, b: Option<f64>, tolerance: f64) -> bool {
    match (a, b) {
        (Some(a), Some(b)) => (a - b).abs() <= tolerance * a.abs().max(b.abs()).max(1e-12),
        (a, b) => a == b,
    }
}

/// Whether every sum of squares is more than the readings' own grain, so that relative agreement can be asked for.
fn varied(result: &Factorial) -> bool {
    result.effects().all(|it| {
        let regular = |w: f64| w > 1e-6;
        it.effect.ss > 1e-2 && it.effect.error_ss > 1e-2 && it.effect.mauchly.and_then(|m| m.w).is_none_or(regular)
    })
}

fn tests_of(effect: &Effect) -> [Option<f64>; 9] {
    let (epsilon, corrected) = (effect.epsilon, effect.corrected);
    [
        effect.f,
        effect.p,
        epsilon.and_then(|it| it.greenhouse_geisser),
        epsilon.and_then(|it| it.huynh_feldt),
        corrected.and_then(|it| it.greenhouse_geisser).and_then(|it| it.p),
        effect.mauchly.and_then(|it| it.p),
        effect.partial_eta_sq,
        effect.generalized_eta_sq,
        effect.partial_omega_sq,
    ]
}

fn same_effects(a: &Factorial, b: &Factorial, tolerance: f64) -> Result<(), TestCaseError> {
    prop_assert_eq!(a.effects().count(), b.effects().count());
    for (x, y) in a.effects().zip(b.effects()) {
        prop_assert_eq!(x.term, y.term);
        let (p, q) = (tests_of(&x.effect), tests_of(&y.effect));
        prop_assert!(p.iter().zip(&q).all(|(p, q)| near(*p, *q, tolerance)), "{:?}: {p:?} and {q:?}", x.term);
    }
    Ok(())
}

fn same_contrasts(a: &Factorial, b: &Factorial, tolerance: f64) -> Result<(), TestCaseError> {
    prop_assert_eq!(a.contrasts.len(), b.contrasts.len());
    for (x, y) in a.contrasts.iter().zip(&b.contrasts) {
        prop_assert_eq!((x.compared, &x.at, x.n), (y.compared, &y.at, y.n));
        let alike =
            near(x.t, y.t, tolerance) && near(x.p, y.p, tolerance) && near(x.p_adjusted, y.p_adjusted, tolerance);
        prop_assert!(alike || x.t.is_some_and(|t| t.abs() < 1e-6), "{x:?} and {y:?}");
    }
    Ok(())
}

fn interval(ci: Option<Interval>) -> [Option<f64>; 2] {
    [ci.map(|ci| ci.lower), ci.map(|ci| ci.upper)]
}

fn numbers_of(effect: &Effect) -> Vec<Option<f64>> {
    let mut all = vec![Some(effect.ss), Some(effect.df), effect.ms, Some(effect.error_ss), effect.error_ms];
    all.extend(tests_of(effect));
    all.extend(interval(effect.partial_eta_sq_ci));
    all.extend(effect.mauchly.into_iter().flat_map(|it| [it.w, it.chi2, it.df]));
    all.extend(effect.epsilon.into_iter().flat_map(|it| [it.lecoutre, Some(it.lower_bound)]));
    let corrected = effect.corrected.into_iter();
    let corrected = corrected.flat_map(|it| [it.huynh_feldt, it.lecoutre, it.lower_bound]).flatten();
    all.extend(corrected.flat_map(|it| [Some(it.df), Some(it.error_df), it.p]));
    all
}

fn all_numbers(result: &Factorial) -> Vec<f64> {
    let mut all: Vec<Option<f64>> = result.effects().flat_map(|it| numbers_of(&it.effect)).collect();
    all.extend(result.simple.iter().flat_map(|it| numbers_of(&it.effect)));
    for cell in result.cells.iter().flatten() {
        all.extend([cell.mean, cell.sd, cell.se].into_iter().chain(interval(cell.ci)));
    }
    for it in &result.contrasts {
        all.extend([it.estimate, it.se, it.df, it.t, it.p, it.p_adjusted, it.dz, it.dav]);
        all.extend(interval(it.ci).into_iter().chain(interval(it.simultaneous)));
    }
    all.extend(result.if_unlinked.iter().flat_map(|it| [it.f, it.p, it.variance_ratio]));
    all.into_iter().flatten().collect()
}

/// The pair of a within factor of two levels, over everything.
fn only_pair(result: &Factorial, factor: usize) -> Comparison {
    let wanted = Compared::Pairwise { factor, level: 1, against: 0 };
    result.contrasts.iter().find(|it| it.compared == wanted && it.at.is_empty()).unwrap().clone()
}

proptest! {
    #![proptest_config(ProptestConfig { cases: 64, failure_persistence: None, ..ProptestConfig::default() })]

    #[test]
    fn strata_add_up_to_the_total(made in complete(false)) {
        let result = made.analyse(Sums::Type3);
        let total = result.total.unwrap();
        let strata = || result.strata.iter().map(|it| it.total);
        prop_assert!((strata().map(|it| it.ss).sum::<f64>() - total.ss).abs() <= 1e-12 * total.ss, "{result:?}");
        prop_assert_eq!(strata().map(|it| it.df).sum::<f64>(), total.df);
    }

    #[test]
    fn with_equal_groups_effects_and_errors_add_up(made in complete(true)) {
        let result = made.analyse(Sums::Type3);
        for it in &result.strata {
            let ss = it.error.ss + it.effects.iter().map(|it| it.effect.ss).sum::<f64>();
            prop_assert!((ss - it.total.ss).abs() <= 1e-11 * it.total.ss, "{it:?}");
            prop_assert_eq!(it.error.df + it.effects.iter().map(|it| it.effect.df).sum::<f64>(), it.total.df);
        }
        prop_assume!(varied(&result));
        same_effects(&result, &made.analyse(Sums::Type2), 1e-9)?;
    }

    #[test]
    fn the_order_of_subjects_and_the_names_of_levels_do_not_matter(made in complete(false), by in 0_usize..50) {
        for sums in [Sums::Type3, Sums::Type2] {
            let result = made.analyse(sums);
            prop_assume!(varied(&result));
            let mut moved = made.clone();
            let by = by % moved.subjects.len();
            moved.subjects.rotate_left(by);
            let moved = moved.analyse(sums);
            same_effects(&result, &moved, 1e-9)?;
            same_contrasts(&result, &moved, 1e-9)?;
            same_effects(&result, &made.reversed().analyse(sums), 1e-9)?;
        }
    }

    #[test]
    fn an_offset_of_1e9_changes_no_test(made in complete(false)) {
        for sums in [Sums::Type3, Sums::Type2] {
            let (result, shifted) = (made.analyse(sums), made.mapped(|y| y + 1e9).analyse(sums));
            prop_assume!(varied(&result));
            same_effects(&result, &shifted, 1e-9)?;
            same_contrasts(&result, &shifted, 1e-9)?;
        }
    }

    #[test]
    fn another_unit_scales_what_has_a_unit_and_nothing_else(made in complete(false), power in -30_i32..30) {
        let factor = 2_f64.powi(power);
        let (result, scaled) = (made.analyse(Sums::Type3), made.mapped(|y| y * factor).analyse(Sums::Type3));
        prop_assume!(varied(&result));
        same_effects(&result, &scaled, 1e-9)?;
        same_contrasts(&result, &scaled, 1e-9)?;
        for (x, y) in result.effects().zip(scaled.effects()) {
            prop_assert!(near(Some(x.effect.ss * factor * factor), Some(y.effect.ss), 1e-12));
        }
    }

    #[test]
    fn with_two_levels_f_is_t_squared(made in complete(false)) {
        for sums in [Sums::Type3, Sums::Type2] {
            let result = made.analyse(sums);
            prop_assume!(varied(&result));
            for factor in (0..made.within.len()).filter(|&factor| made.within[factor] == 2) {
                let (effect, pair) = (result.effect(Term::main(FactorId::Within(factor))).unwrap(), only_pair(&result, factor));
                prop_assert!(near(effect.f, pair.t.map(|t| t * t), 1e-8), "{effect:?} {pair:?}");
                prop_assert!(near(effect.p, pair.p, 1e-8) && pair.df == Some(effect.error_df));
            }
        }
    }

    /// The same for groups, where another between factor does not disturb the comparison.
    #[test]
    fn with_two_groups_f_is_t_squared(made in of((prop::collection::vec(1_usize..5, 0..3), Just(vec![2])), false)) {
        let result = made.analyse(Sums::Type3);
        prop_assume!(varied(&result));
        let over_all = result.contrasts.iter().rev().find(|it| matches!(it.compared, Compared::Effect { .. }) && it.at.is_empty()).unwrap();
        let effect = result.effect(Term::main(FactorId::Between(0))).unwrap();
        prop_assert!(near(effect.f, over_all.t.map(|t| t * t), 1e-8), "{effect:?} {over_all:?}");
        prop_assert!(near(effect.p, over_all.p, 1e-8) && over_all.dz.is_none());
    }

    #[test]
    fn one_between_factor_with_one_visit_is_the_ordinary_one_way_analysis(made in of((Just(vec![1]), prop::collection::vec(2_usize..6, 1)), false)) {
        let effect = *made.analyse(Sums::Type3).effect(Term::main(FactorId::Between(0))).unwrap();
        let of = |group: usize| made.subjects.iter().filter(move |it| it.0[0] == group).map(|it| it.1[0].unwrap());
        let mean = |values: &mut dyn Iterator<Item = f64>| { let v: Vec<f64> = values.collect(); v.iter().sum::<f64>() / v.len() as f64 };
        let grand = mean(&mut made.subjects.iter().map(|it| it.1[0].unwrap()));
        let (mut across, mut inside) = (0.0, 0.0);
        for group in 0..made.between[0] {
            let own = mean(&mut of(group));
            across += of(group).count() as f64 * (own - grand).powi(2);
            inside += of(group).map(|y| (y - own).powi(2)).sum::<f64>();
        }
        prop_assert!((effect.ss - across).abs() < 1e-9 * (across + 1.0) && (effect.error_ss - inside).abs() < 1e-9 * (inside + 1.0));
        prop_assert_eq!((effect.df, effect.error_df), ((made.between[0] - 1) as f64, (made.subjects.len() - made.between[0]) as f64));
        prop_assert_eq!((effect.mauchly, effect.epsilon, effect.corrected), (None, None, None));
    }

    #[test]
    fn a_factor_of_one_level_changes_nothing(made in complete(false), at in 0_usize..3) {
        let mut more = made.clone();
        let within = at.min(more.within.len());
        more.within.insert(within, 1);
        let between = at.min(more.between.len());
        more.between.insert(between, 1);
        more.subjects.iter_mut().for_each(|(groups, _)| groups.insert(between, 0));
        let (one, other) = (made.analyse(Sums::Type3), more.analyse(Sums::Type3));
        let tests = |result: &Factorial| result.effects().map(|it| it.effect).collect::<Vec<_>>();
        prop_assert_eq!(tests(&one), tests(&other));
        prop_assert_eq!(one.cells, other.cells);
    }

    /// Trends are orthonormal over the levels of one factor, of which each is a mean over the cells of the others.
    #[test]
    fn trends_share_out_the_effect(made in complete(false)) {
        let result = made.analyse(Sums::Type2);
        let n = made.subjects.len() as f64;
        for (factor, &levels) in made.within.iter().enumerate().filter(|(_, levels)| **levels > 1) {
            let trends = result.contrasts.iter().filter(|it| matches!(it.compared, Compared::Polynomial { factor: of, .. } if of == factor));
            let cells = (made.within.iter().product::<usize>() / levels) as f64;
            let ss: f64 = trends.map(|it| it.estimate.unwrap().powi(2) * n * cells).sum();
            let effect = result.effect(Term::main(FactorId::Within(factor))).unwrap();
            prop_assert!((ss - effect.ss).abs() <= 1e-10 * result.total.unwrap().ss, "{ss} {effect:?}");
        }
    }

    #[test]
    fn adjusted_p_and_simultaneous_intervals_are_never_the_sharper(made in complete(false)) {
        for multiplicity in [Multiplicity::Holm, Multiplicity::Bonferroni] {
            let result = factorial(&made.design(), &Settings { multiplicity, ..settings(Sums::Type3) });
            for it in &result.contrasts {
                prop_assert!(it.p_adjusted >= it.p);
                if let (Some(ci), Some(simultaneous)) = (it.ci, it.simultaneous) {
                    prop_assert!(simultaneous.lower <= ci.lower && ci.upper <= simultaneous.upper);
                }
                prop_assert_eq!(it.simultaneous.is_some(), it.ci.is_some());
            }
        }
    }

    /// At confidence 1 − 2p the interval of a size begins at 0.
    #[test]
    fn the_interval_of_a_size_holds_it_and_goes_with_the_test(made in complete(false)) {
        for it in made.analyse(Sums::Type3).effects() {
            let (Some(ci), Some(size), Some(p)) = (it.effect.partial_eta_sq_ci, it.effect.partial_eta_sq, it.effect.p) else { continue };
            let p = it.effect.corrected.and_then(|it| it.greenhouse_geisser).and_then(|it| it.p).unwrap_or(p);
            prop_assert!(0.0 <= ci.lower && ci.lower <= ci.upper && ci.upper < 1.0);
            prop_assert!(ci.lower <= size, "{ci:?} {size}");
            prop_assert_eq!(ci.lower > 0.0, p < 0.025, "{:?} {}", ci, p);
        }
    }

    #[test]
    fn no_design_gives_nan_infinity_or_panic(made in degenerate(), type2 in any::<bool>(), confidence in 1e-9_f64..1.0) {
        let confidence = Confidence::new(confidence).unwrap();
        let sums = if type2 { Sums::Type2 } else { Sums::Type3 };
        let settings = Settings { confidence, ..settings(sums) };
        let design = made.design();
        let result = factorial(&design, &settings);
        let numbers = all_numbers(&result);
        prop_assert!(numbers.iter().all(|x| x.is_finite()), "{result:?}");
        prop_assert_eq!(result.used.len() + result.incomplete.len(), made.subjects.len());
        prop_assert_eq!(result.cells.len(), made.between.iter().product::<usize>());
        if result.effects().any(|it| it.effect.f.is_none()) || result.strata.is_empty() {
            prop_assert!(!result.remarks.is_empty(), "a missing F has a reason: {result:?}");
        }
        let checks = checks(&design, &settings);
        let found = checks.influence.iter().flat_map(|it| &it.without).flat_map(|it| [it.f, it.p, it.p_greenhouse_geisser]).flatten();
        let found = found.chain(checks.residuals.iter().flat_map(|it| [it.fitted, it.residual, it.quantile]));
        let mut found = found.chain(checks.subjects.iter().flat_map(|it| [it.effect, it.fitted, it.quantile]));
        prop_assert!(found.all(|x| x.is_finite()), "{checks:?}");
        let bands = within_subject_bands(&design, confidence);
        let mut band = bands.iter().flatten().flat_map(|it| [it.mean, it.se].into_iter().chain(interval(it.ci))).flatten();
        prop_assert!(band.all(|x| x.is_finite()) && bands.len() == result.cells.len());
    }
}

#[test]
fn effects_come_in_the_order_of_the_plan() {
    let subjects: Vec<Subject> = (0..16)
        .map(|i| (vec![i % 2, i / 2 % 2], (0..6).map(|j| Some(((i * 7 + j * 5) % 11) as f64)).collect()))
        .collect();
    let made = Made { within: vec![3, 2], between: vec![2, 2], subjects };
    let set = |factors: &[usize]| factors.iter().fold(FactorSet::EMPTY, |set, &factor| set.with(factor));
    let term = |between: &[usize], within: &[usize]| Term { between: set(between), within: set(within) };
    let wanted: Vec<Term> = [&[][..], &[0], &[1], &[0, 1]]
        .iter()
        .flat_map(|within| [&[][..], &[0], &[1], &[0, 1]].map(|between| term(between, within)))
        .skip(1)
        .collect();
    assert_eq!(made.analyse(Sums::Type3).effects().map(|it| it.term).collect::<Vec<_>>(), wanted);
}
