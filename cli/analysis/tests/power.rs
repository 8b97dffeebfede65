//! Power and numbers of subjects.

#![allow(clippy::unwrap_used, clippy::panic)]

mod support;

use std::fs;

use proptest::prelude::*;
use revisant_analysis::anova::repeated_measures;
use revisant_analysis::design::OneWithin;
use revisant_analysis::distributions::{FisherF, NonCentralT, StudentT};
use revisant_analysis::power::{
    Alpha, Assumed, AssumedError, PlannedEffect, Planning, PowerError, ar1, compound_symmetry, covariance, power,
    sample_size,
};
use revisant_analysis::{Note, Settings};
use serde_json::Value;

/// The designs of the reference case: name, means, assumed covariance, alpha, wanted power.
struct Reference {
    doc: Value,
}

impl Reference {
    #[allow(clippy::disallowed_methods)] // tests read files
    fn read() -> Self {
        let text = fs::read_to_string(support::folder("power").join("one_group.json")).unwrap();
        Self { doc: serde_json::from_str(&text).unwrap() }
    }

    fn designs(&self) -> Vec<(String, Assumed, f64, f64)> {
        let design = |(name, config): (&String, &Value)| {
            let means: Vec<f64> = config["means"].as_array().unwrap().iter().map(|m| m.as_f64().unwrap()).collect();
            let number = |key: &str| config[key].as_f64().unwrap();
            let correlation = match config["structure"].as_str().unwrap() {
                "cs" => compound_symmetry(means.len(), number("rho")),
                _ => ar1(means.len(), number("rho")),
            };
            (name.clone(), Assumed::new(vec![means], correlation).unwrap(), number("alpha"), number("target"))
        };
        self.doc["config"].as_object().unwrap().iter().map(design).collect()
    }

    fn check(&self, key: &str, got: f64) {
        let (v, rtol) = (self.value(key), self.doc["expected"][key]["rtol"].as_f64().unwrap());
        assert!((got - v).abs() <= rtol * v.abs(), "{key}: {got} for {v}");
    }

    fn value(&self, key: &str) -> f64 {
        self.doc["expected"][key]["v"].as_f64().unwrap()
    }
}

#[test]
fn reference_designs() {
    let reference = Reference::read();
    for (name, assumed, alpha, target) in reference.designs() {
        let alpha = Alpha::new(alpha).unwrap();
        let size =
            sample_size(&assumed, PlannedEffect::Within, Planning::new(alpha.level(), target, 0.0).unwrap()).unwrap();
        let with = |n: usize| power(&assumed, PlannedEffect::Within, &[n], alpha).unwrap();
        for (key, got) in [
            ("n", size.per_group as f64),
            ("eps", size.reached.epsilon.unwrap()),
            ("lambda", size.reached.noncentrality.unwrap()),
            ("df1", size.reached.df),
            ("df2", size.reached.error_df),
            ("power", size.reached.power.unwrap()),
            ("power_at_n_minus_1", with(size.per_group - 1).power.unwrap()),
            ("power_n5", with(5).power.unwrap()),
            ("power_n20", with(20).power.unwrap()),
            ("power_n50", with(50).power.unwrap()),
        ] {
            reference.check(&format!("{name}.{key}"), got);
        }
        let spherical = size.reached.epsilon == Some(1.0) || name != "design3";
        assert_eq!(size.reached.notes.contains(&Note::PowerOptimistic), !spherical, "{name}");
    }
}

/// 64 in each of two groups for a difference of half an SD (Cohen 1988, *Statistical Power Analysis for the Behavioral
/// Sciences*, table 2.4.1), and 34 pairs for a d_z of a half (both from memory); power by the non-central t.
#[test]
fn two_groups_and_two_visits_are_t_tests() {
    let planning = Planning::new(0.05, 0.8, 0.0).unwrap();
    let groups = Assumed::new(vec![vec![0.0], vec![5.0]], vec![vec![100.0]]).unwrap();
    let size = sample_size(&groups, PlannedEffect::Between, planning).unwrap();
    assert_eq!((size.per_group, size.enrolled), (64, 128));
    assert!((size.reached.power.unwrap() - by_t(126.0, 0.5 * 32.0_f64.sqrt())).abs() < 1e-12);

    let sd = 4.0 / 2.0_f64.sqrt(); // uncorrelated readings whose difference has an SD of 4
    let pairs = Assumed::new(vec![vec![10.0, 12.0]], covariance(&[sd, sd], &compound_symmetry(2, 0.0))).unwrap();
    let size = sample_size(&pairs, PlannedEffect::Within, planning).unwrap();
    assert_eq!(size.per_group, 34);
    assert!((size.reached.power.unwrap() - by_t(33.0, 0.5 * 34.0_f64.sqrt())).abs() < 1e-12);

    // The interaction of two groups and two visits is the two-sample test of their changes, of unequal groups too.
    let both =
        Assumed::new(vec![vec![10.0, 12.0], vec![10.0, 15.0]], covariance(&[sd, sd], &compound_symmetry(2, 0.0)));
    let found = power(&both.unwrap(), PlannedEffect::Interaction, &[10, 25], Alpha::new(0.05).unwrap()).unwrap();
    let delta = 3.0 / 4.0 / (1.0 / 10.0 + 1.0 / 25.0_f64).sqrt();
    assert!((found.power.unwrap() - by_t(33.0, delta)).abs() < 1e-12);
    assert_eq!((found.df, found.error_df, found.epsilon, found.notes), (1.0, 33.0, Some(1.0), vec![]));
}

/// Plain means of the groups 1, 3 and 5 by visit, ñ = 4 / (1/9 + 1/15) = 22.5, Σ (1 − 3)² + … = 8, s² = 1.44 · 0.4;
/// weighted for the interaction, whose changes differ by ±1 around 9 · 15 / 24 = 5.625 subjects' worth.
#[test]
fn unequal_groups_by_hand() {
    let means = vec![vec![1.0, 3.0, 5.0], vec![1.0, 3.0, 5.0]];
    let spread = covariance(&[1.2; 3], &compound_symmetry(3, 0.6));
    let alpha = Alpha::new(0.05).unwrap();
    let lambda = |means: Vec<Vec<f64>>, effect| {
        power(&Assumed::new(means, spread.clone()).unwrap(), effect, &[9, 15], alpha).unwrap().noncentrality.unwrap()
    };
    let near = |got: f64, want: f64| assert!((got / want - 1.0).abs() < 1e-12, "{got} for {want}");
    near(lambda(means, PlannedEffect::Within), 22.5 * 8.0 / (1.44 * 0.4));
    let crossed = vec![vec![1.0, 2.0, 3.0], vec![3.0, 2.0, 1.0]];
    near(lambda(crossed.clone(), PlannedEffect::Interaction), 5.625 * 8.0 / (1.44 * 0.4));
    let apart = vec![vec![1.0, 2.0, 3.0], vec![2.0, 3.0, 4.0]];
    near(lambda(apart, PlannedEffect::Between), 5.625 / (1.44 * 2.2 / 3.0));
}

/// The power of a two-sided t test at 0.05.
fn by_t(df: f64, delta: f64) -> f64 {
    let (t, critical) = (NonCentralT::new(df, delta).unwrap(), StudentT::new(df).unwrap().critical(0.95).unwrap());
    t.sf(critical).unwrap() + t.cdf(-critical).unwrap()
}

#[test]
fn dropout_adds_to_those_enrolled() {
    let assumed = Assumed::new(vec![vec![0.0, 0.3, 0.5]; 2], compound_symmetry(3, 0.5)).unwrap();
    let size =
        |dropout| sample_size(&assumed, PlannedEffect::Within, Planning::new(0.05, 0.8, dropout).unwrap()).unwrap();
    let none = size(0.0);
    assert_eq!((none.enrolled_per_group, none.enrolled), (none.per_group, 2 * none.per_group));
    assert_eq!(none.per_group, 20);
    assert_eq!((size(0.2).enrolled_per_group, size(0.2).enrolled), (25, 50));
    assert_eq!(size(0.15).enrolled_per_group, 24);
}

#[test]
fn what_cannot_be_assumed_is_refused_by_name() {
    let with = |covariance: Vec<Vec<f64>>| Assumed::new(vec![vec![0.0; 2]], covariance).err();
    assert_eq!(Assumed::new(vec![], vec![]).err(), Some(AssumedError::NoGroups));
    assert_eq!(Assumed::new(vec![vec![]], vec![]).err(), Some(AssumedError::NoVisits));
    let ragged = AssumedError::Ragged { group: 1, means: 1, visits: 2 };
    assert_eq!(Assumed::new(vec![vec![0.0, 1.0], vec![0.0]], compound_symmetry(2, 0.5)).err(), Some(ragged));
    assert_eq!(with(vec![vec![1.0, 0.0]]), Some(AssumedError::Shape { visits: 2 }));
    assert_eq!(with(vec![vec![1.0, f64::NAN], vec![0.0, 1.0]]), Some(AssumedError::Covariance { row: 0, column: 1 }));
    assert_eq!(with(vec![vec![1.0, 0.5], vec![0.4, 1.0]]), Some(AssumedError::NotSymmetric { row: 0, column: 1 }));
    assert_eq!(with(vec![vec![1.0, 1.5], vec![1.5, 1.0]]), Some(AssumedError::Impossible { visit: 1 }));
    assert_eq!(with(vec![vec![-1.0, 0.0], vec![0.0, 1.0]]), Some(AssumedError::Impossible { visit: 0 }));
    assert_eq!(with(vec![vec![0.0, 0.5], vec![0.5, 1.0]]), Some(AssumedError::Impossible { visit: 1 }));
    assert_eq!(with(vec![vec![1.0, 1.0], vec![1.0, 1.0]]), None);
    let mean = Assumed::new(vec![vec![0.0, f64::INFINITY]], compound_symmetry(2, 0.5)).err();
    assert_eq!(mean, Some(AssumedError::Mean { group: 0, visit: 1 }));
    // Three visits cannot all be that unlike each other.
    assert_eq!(
        Assumed::new(vec![vec![0.0; 3]], compound_symmetry(3, -0.6)).err(),
        Some(AssumedError::Impossible { visit: 2 })
    );
}

#[test]
fn what_has_no_power_says_why() {
    let alpha = Alpha::new(0.05).unwrap();
    let planning = Planning::new(0.05, 0.9, 0.0).unwrap();
    let flat = Assumed::new(vec![vec![3.0, 3.0]; 2], compound_symmetry(2, 0.5)).unwrap();
    assert_eq!(sample_size(&flat, PlannedEffect::Within, planning), Err(PowerError::NoEffect));
    let only_alpha = power(&flat, PlannedEffect::Within, &[20, 20], alpha).unwrap().power.unwrap();
    assert!((only_alpha - 0.05).abs() < 1e-12);

    let one = Assumed::new(vec![vec![3.0, 4.0]], compound_symmetry(2, 1.0)).unwrap();
    assert_eq!(sample_size(&one, PlannedEffect::Within, planning), Err(PowerError::NoError));
    let none = power(&one, PlannedEffect::Within, &[20], alpha).unwrap();
    assert_eq!((none.power, none.epsilon, none.notes), (None, None, vec![Note::ZeroResidual]));
    assert_eq!(power(&one, PlannedEffect::Between, &[20], alpha), Err(PowerError::OneGroup));
    assert_eq!(power(&one, PlannedEffect::Within, &[20, 3], alpha), Err(PowerError::SizeCount { sizes: 2, groups: 1 }));
    assert_eq!(power(&one, PlannedEffect::Within, &[0], alpha), Err(PowerError::EmptyGroup { group: 0 }));
    let visit = Assumed::new(vec![vec![3.0], vec![4.0]], vec![vec![1.0]]).unwrap();
    assert_eq!(power(&visit, PlannedEffect::Interaction, &[3, 3], alpha), Err(PowerError::OneVisit));
    let alone = power(&visit, PlannedEffect::Between, &[1, 1], alpha).unwrap();
    assert_eq!((alone.power, alone.notes), (None, vec![Note::NoErrorDegrees]));
    let faint = Assumed::new(vec![vec![0.0, 1e-9]], compound_symmetry(2, 0.0)).unwrap();
    assert!(
        matches!(sample_size(&faint, PlannedEffect::Within, planning), Err(PowerError::OutOfReach { power }) if power < 0.06)
    );
    assert_eq!(Planning::new(1.0, 0.9, 0.0), Err(PowerError::Alpha(1.0)));
    assert_eq!(Planning::new(0.05, 0.0, 0.0), Err(PowerError::Power(0.0)));
    assert_eq!(Planning::new(0.05, 0.9, 1.0), Err(PowerError::Dropout(1.0)));
}

fn assumptions() -> impl Strategy<Value = Assumed> {
    (1_usize..4, 2_usize..6, 0.0_f64..0.95, any::<bool>()).prop_flat_map(|(groups, visits, rho, ar)| {
        let means = prop::collection::vec(prop::collection::vec(-2.0_f64..2.0, visits), groups);
        let sds = prop::collection::vec(0.5_f64..3.0, visits);
        (means, sds).prop_map(move |(means, sds)| {
            let correlation = if ar { ar1(visits, rho) } else { compound_symmetry(visits, rho) };
            Assumed::new(means, covariance(&sds, &correlation)).unwrap()
        })
    })
}

proptest! {
    #![proptest_config(ProptestConfig { cases: 60, failure_persistence: None, ..ProptestConfig::default() })]

    #[test]
    fn power_grows_with_subjects_and_the_size_is_the_smallest(assumed in assumptions(), which in 0_usize..3, wanted in 0.1_f64..0.99) {
        let effect = [PlannedEffect::Within, PlannedEffect::Between, PlannedEffect::Interaction][which];
        prop_assume!(assumed.groups() > 1 || effect == PlannedEffect::Within);
        let alpha = Alpha::new(0.05).unwrap();
        let with = |n: usize| power(&assumed, effect, &vec![n; assumed.groups()], alpha).unwrap().power.unwrap();
        prop_assert!(with(5) <= with(9) + 1e-12 && with(9) <= with(40) + 1e-12 && with(5) >= 0.05 - 1e-9);
        match sample_size(&assumed, effect, Planning::new(0.05, wanted, 0.1).unwrap()) {
            Ok(size) => {
                prop_assert!(with(size.per_group) >= wanted);
                prop_assert!(size.per_group == 2 || with(size.per_group - 1) < wanted);
                prop_assert!(size.enrolled_per_group as f64 * 0.9 >= size.per_group as f64 - 1e-9);
            }
            Err(error) => prop_assert!(matches!(error, PowerError::OutOfReach { .. }), "{error}"),
        }
    }

    #[test]
    fn another_unit_or_order_of_visits_changes_no_power(assumed in assumptions(), factor in 0.001_f64..1000.0, offset in -50.0_f64..50.0) {
        let alpha = Alpha::new(0.01).unwrap();
        let sizes: Vec<usize> = (0..assumed.groups()).map(|group| 5 + 3 * group).collect();
        let means: Vec<Vec<f64>> = assumed.means().iter().map(|own| own.iter().rev().map(|m| m * factor + offset).collect()).collect();
        let turned: Vec<Vec<f64>> = assumed.covariance().iter().rev().map(|row| row.iter().rev().map(|c| c * factor * factor).collect()).collect();
        let other = Assumed::new(means, turned).unwrap();
        for effect in [PlannedEffect::Within, PlannedEffect::Between, PlannedEffect::Interaction] {
            let (a, b) = (power(&assumed, effect, &sizes, alpha), power(&other, effect, &sizes, alpha));
            let (Ok(a), Ok(b)) = (a, b) else { continue };
            prop_assert!((a.power.unwrap() - b.power.unwrap()).abs() < 1e-7, "{a:?} {b:?}");
        }
    }

    #[test]
    fn the_factor_makes_the_covariance(assumed in assumptions()) {
        let (factor, covariance) = (assumed.factor(), assumed.covariance());
        for i in 0..assumed.visits() {
            for j in 0..=i {
                let product: f64 = factor[i].iter().zip(&factor[j]).map(|(a, b)| a * b).sum();
                prop_assert!((product - covariance[i][j]).abs() < 1e-12);
            }
        }
    }

    #[test]
    fn epsilon_lies_between_its_bounds_and_is_1_under_compound_symmetry(assumed in assumptions(), rho in 0.0_f64..0.9) {
        let alpha = Alpha::new(0.05).unwrap();
        let epsilon = |assumed: &Assumed| power(assumed, PlannedEffect::Within, &vec![9; assumed.groups()], alpha).unwrap().epsilon.unwrap();
        let lowest = 1.0 / (assumed.visits() as f64 - 1.0);
        prop_assert!(lowest <= epsilon(&assumed) && epsilon(&assumed) <= 1.0);
        let symmetric = Assumed::new(assumed.means().to_vec(), compound_symmetry(assumed.visits(), rho)).unwrap();
        prop_assert!((epsilon(&symmetric) - 1.0).abs() < 1e-12);
    }

    #[test]
    fn power_is_never_nan(scale in prop::sample::select(vec![1e-150, 1e-20, 1.0, 1e50, 1e100]), sd in prop::sample::select(vec![0.0, 1e-150, 1.0, 1e50]), rho in -0.5_f64..=1.0, n in 1_usize..2000) {
        let Ok(assumed) = Assumed::new(vec![vec![scale, 0.0, scale]; 2], covariance(&[sd, sd, 2.0 * sd], &compound_symmetry(3, rho))) else { return Ok(()) };
        for effect in [PlannedEffect::Within, PlannedEffect::Between, PlannedEffect::Interaction] {
            let found = power(&assumed, effect, &[n, n], Alpha::new(0.05).unwrap()).unwrap();
            prop_assert!(found.power.is_none_or(|p| (0.0..=1.0).contains(&p)) && found.noncentrality.is_none_or(f64::is_finite), "{found:?}");
            prop_assert!(found.power.is_some() || !found.notes.is_empty(), "{found:?}");
            let _ = sample_size(&assumed, effect, Planning::new(0.05, 0.9, 0.3).unwrap());
        }
    }
}

/// Uniform numbers by Steele, Lea & Flood 2014 (OOPSLA 49:453); normal ones by Box & Muller 1958.
struct Chance(u64);

impl Chance {
    fn uniform(&mut self) -> f64 {
        self.0 = self.0.wrapping_add(0x9e37_79b9_7f4a_7c15);
        let mut z = self.0;
        z = (z ^ (z >> 30)).wrapping_mul(0xbf58_476d_1ce4_e5b9);
        z = (z ^ (z >> 27)).wrapping_mul(0x94d0_49bb_1331_11eb);
        (((z ^ (z >> 31)) >> 11) as f64 + 0.5) / 9_007_199_254_740_992.0
    }

    fn normal(&mut self) -> f64 {
        (-2.0 * self.uniform().ln()).sqrt() * (std::f64::consts::TAU * self.uniform()).cos()
    }

    fn subject(&mut self, assumed: &Assumed, group: usize) -> Vec<f64> {
        let z: Vec<f64> = (0..assumed.visits()).map(|_| self.normal()).collect();
        let error = |row: &Vec<f64>| row.iter().zip(&z).map(|(l, z)| l * z).sum::<f64>();
        assumed.means()[group].iter().zip(assumed.factor()).map(|(mean, row)| mean + error(row)).collect()
    }
}

#[allow(clippy::disallowed_macros)] // the test's own account, shown with --nocapture
fn judge(what: &str, formula: f64, rejected: usize, runs: usize, allowed: f64) {
    let simulated = rejected as f64 / runs as f64;
    let se = (formula * (1.0 - formula) / runs as f64).sqrt();
    println!("{what}: {formula:.4} by formula, {simulated:.4} in {runs} simulated studies (SE {se:.4})");
    assert!((simulated - formula).abs() < allowed.max(4.0 * se), "{what}");
}

/// `cargo test --release -p revisant-analysis --test power -- --ignored --nocapture`
///
/// The whole analysis of simulated studies, Greenhouse-Geisser corrected where the covariance is not spherical.
#[test]
#[ignore = "slow"]
fn simulated_studies_of_one_group() {
    let (reference, runs) = (Reference::read(), 20_000);
    let mut chance = Chance(2026);
    for (name, assumed, alpha, _) in reference.designs() {
        let n = reference.value(&format!("{name}.n")) as usize;
        let rejects = |chance: &mut Chance| {
            let rows: Vec<Vec<Option<f64>>> =
                (0..n).map(|_| chance.subject(&assumed, 0).into_iter().map(Some).collect()).collect();
            let effect = repeated_measures(&OneWithin::from_rows(&rows).unwrap(), &Settings::default()).effect.unwrap();
            let corrected = effect.corrected.unwrap().greenhouse_geisser.unwrap();
            if name == "design3" { corrected.p < Some(alpha) } else { effect.p < Some(alpha) }
        };
        let rejected = (0..runs).filter(|_| rejects(&mut chance)).count();
        let formula = power(&assumed, PlannedEffect::Within, &[n], Alpha::new(alpha).unwrap()).unwrap().power.unwrap();
        // The third design is the one for which the formula is optimistic; the simulation has to find what others found.
        let mc = reference.value(&format!("{name}.mc_power"));
        judge(&format!("{name}, {n} subjects"), formula, rejected, runs, if name == "design3" { 0.1 } else { 0.0 });
        assert!((rejected as f64 / runs as f64 - mc).abs() < 0.02 * mc, "{name}");
    }
}

/// Two unequal groups under compound symmetry, where all three formulas are exact.
#[test]
#[ignore = "slow"]
fn simulated_studies_of_two_groups() {
    let (sizes, runs) = ([9, 15], 40_000);
    let means = vec![vec![0.0, 0.4, 0.7, 0.2], vec![0.3, 1.0, 1.9, 1.1]];
    let assumed = Assumed::new(means, covariance(&[1.2; 4], &compound_symmetry(4, 0.6))).unwrap();
    let mut chance = Chance(20_261_201);
    let mut rejected = [0_usize; 3];
    for _ in 0..runs {
        let groups: Vec<Vec<Vec<f64>>> =
            (0..2).map(|group| (0..sizes[group]).map(|_| chance.subject(&assumed, group)).collect()).collect();
        for (count, p) in rejected.iter_mut().zip(mixed_p(&groups)) {
            *count += usize::from(p < 0.05);
        }
    }
    for (effect, rejected) in
        [PlannedEffect::Within, PlannedEffect::Between, PlannedEffect::Interaction].into_iter().zip(rejected)
    {
        let formula = power(&assumed, effect, &sizes, Alpha::new(0.05).unwrap()).unwrap().power.unwrap();
        judge(&format!("{effect:?}"), formula, rejected, runs, 0.0);
    }
}

/// p of visits (type III), groups, and visits by groups, by their textbook sums of squares.
fn mixed_p(groups: &[Vec<Vec<f64>>]) -> [f64; 3] {
    let (g, k) = (groups.len() as f64, groups[0][0].len());
    let n: Vec<f64> = groups.iter().map(|group| group.len() as f64).collect();
    let whole: f64 = n.iter().sum();
    let at = |group: usize, j: usize| groups[group].iter().map(|y| y[j]).sum::<f64>() / n[group];
    let mean = |y: &dyn Fn(usize) -> f64| (0..k).map(y).sum::<f64>() / k as f64;
    let of_group = |group: usize| mean(&|j| at(group, j));
    let weighted = |y: &dyn Fn(usize) -> f64| (0..n.len()).map(|i| n[i] * y(i)).sum::<f64>() / whole;
    let (mut subject, mut error) = (0.0, 0.0);
    for (i, group) in groups.iter().enumerate() {
        for y in group {
            let own = mean(&|j| y[j]);
            subject += k as f64 * (own - of_group(i)).powi(2);
            error += (0..k).map(|j| (y[j] - own - at(i, j) + of_group(i)).powi(2)).sum::<f64>();
        }
    }
    let profile = |j: usize| (0..n.len()).map(|i| at(i, j)).sum::<f64>() / g;
    let behind = g * g / n.iter().map(|n| 1.0 / n).sum::<f64>();
    let within = behind * (0..k).map(|j| (profile(j) - mean(&profile)).powi(2)).sum::<f64>();
    let grand = weighted(&of_group);
    let between = (0..n.len()).map(|i| n[i] * k as f64 * (of_group(i) - grand).powi(2)).sum::<f64>();
    let change = |i: usize, j: usize| at(i, j) - of_group(i) - weighted(&|i| at(i, j)) + grand;
    let interaction = (0..n.len()).map(|i| n[i] * (0..k).map(|j| change(i, j).powi(2)).sum::<f64>()).sum::<f64>();
    let (dk, dg) = (k as f64 - 1.0, g - 1.0);
    let p = |ss: f64, df: f64, error_ss: f64, error_df: f64| {
        FisherF::new(df, error_df).unwrap().sf(ss / df / (error_ss / error_df)).unwrap()
    };
    [
        p(within, dk, error, (whole - g) * dk),
        p(between, dg, subject, whole - g),
        p(interaction, dg * dk, error, (whole - g) * dk),
    ]
}
