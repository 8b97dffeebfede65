//! The checks of a model, against the analyses that they stand for.

#![allow(clippy::unwrap_used, clippy::panic)]

use proptest::prelude::*;
use revisant_analysis::anova::factorial;
use revisant_analysis::checks::{checks, missing, normal_quantiles, thin_cells};
use revisant_analysis::design::{Design, Factor};
use revisant_analysis::{Settings, Sums};

type Subject = (Vec<usize>, Vec<Option<f64>>);

fn design(within: &[usize], between: &[usize], subjects: &[Subject]) -> Design {
    Design::new(within.iter().map(|&k| Factor::of(k).unwrap()).collect(), between.to_vec(), subjects).unwrap()
}

fn near(a: Option<f64>, b: Option<f64>, tolerance: f64) -> bool {
    match (a, b) {
        (Some(a), Some(b)) => (a - b).abs() <= tolerance * a.abs().max(b.abs()),
        (a, b) => a == b,
    }
}

fn subjects(between: usize, width: usize) -> impl Strategy<Value = Vec<Subject>> {
    let cells = prop::collection::vec((-4000_i32..4000).prop_map(|x| Some(f64::from(x) / 8.0)), width);
    prop::collection::vec((prop::collection::vec(0..2_usize, between), cells), 9..16)
}

proptest! {
    #![proptest_config(ProptestConfig { cases: 16, failure_persistence: None, ..ProptestConfig::default() })]

    /// Every updated test is that of an analysis made anew without the subject.
    #[test]
    fn leaving_a_subject_out_is_the_analysis_without_it(all in subjects(2, 6), type2 in any::<bool>(), offset in prop::sample::select(vec![0.0, 1e7])) {
        let sums = if type2 { Sums::Type2 } else { Sums::Type3 };
        let all: Vec<Subject> = all.into_iter().map(|(groups, cells)| (groups, cells.iter().map(|y| y.map(|y| y + offset)).collect())).collect();
        let settings = Settings { sums, ..Settings::default() };
        let whole = design(&[3, 2], &[2, 2], &all);
        let filled = factorial(&whole, &settings).cells.iter().all(|cells| cells[0].n > 0);
        prop_assume!(filled);
        for influence in checks(&whole, &settings).influence {
            for without in influence.without {
                let others: Vec<Subject> = all.iter().enumerate().filter(|(at, _)| *at != without.subject).map(|(_, it)| it.clone()).collect();
                let anew = factorial(&design(&[3, 2], &[2, 2], &others), &settings);
                let alone = anew.cells.iter().any(|cells| cells[0].n == 0);
                let effect = anew.effect(influence.term).copied();
                let Some(effect) = effect.filter(|_| !alone) else {
                    prop_assert_eq!((without.f, without.p), (None, None));
                    continue;
                };
                prop_assert!(near(without.f, effect.f, 1e-7), "{without:?} {effect:?}");
                prop_assert!(near(without.p, effect.p, 1e-7), "{without:?} {effect:?}");
                let corrected = effect.corrected.and_then(|it| it.greenhouse_geisser).and_then(|it| it.p);
                prop_assert!(near(without.p_greenhouse_geisser, corrected, 1e-6), "{without:?} {effect:?}");
            }
        }
    }

    #[test]
    fn residuals_and_fitted_values_make_up_the_readings(all in subjects(1, 4)) {
        let whole = design(&[4], &[2], &all);
        let checks = checks(&whole, &Settings::default());
        prop_assert_eq!(checks.residuals.len(), 4 * all.len());
        for (subject, own) in checks.residuals.chunks_exact(4).enumerate() {
            prop_assert!(own.iter().map(|it| it.residual).sum::<f64>().abs() < 1e-9);
            for it in own {
                let reading = all[subject].1[it.cell].unwrap();
                prop_assert!((it.fitted + it.residual - reading).abs() < 1e-9 && it.subject == subject);
            }
        }
        let error: f64 = checks.residuals.iter().map(|it| it.residual.powi(2)).sum();
        let strata = factorial(&whole, &Settings::default()).strata;
        prop_assert!((error - strata[1].error.ss).abs() < 1e-9 * error.max(1.0));
        let between: f64 = checks.subjects.iter().map(|it| 4.0 * it.effect.powi(2)).sum();
        prop_assert!((between - strata[0].error.ss).abs() < 1e-9 * between.max(1.0));
    }
}

/// One subject holds nearly all of the error, so that what is left is lost in a difference.
#[test]
fn a_subject_that_is_nearly_all_of_the_error_is_left_out_exactly() {
    let mut all: Vec<Subject> =
        (0..8).map(|i| (vec![i % 2], (0..3).map(|j| Some(((i * 5 + j * 3) % 7) as f64 / 8.0)).collect())).collect();
    all[3].1[1] = Some(1e9);
    let settings = Settings::default();
    let found = checks(&design(&[3], &[2], &all), &settings);
    all.remove(3);
    let anew = factorial(&design(&[3], &[2], &all), &settings);
    let mut met = 0;
    for influence in &found.influence {
        let (effect, without) = (anew.effect(influence.term).unwrap(), influence.without[3]);
        assert!(near(without.f, effect.f, 1e-6), "{without:?} {effect:?}");
        met += 1;
    }
    assert_eq!(met, 3);
}

/// Blom 1958: for n = 3, Φ⁻¹(0.625 / 3.25) = −0.869424 (common tables).
#[test]
fn normal_quantiles_by_hand() {
    let found = normal_quantiles(&[5.0, 1.0, 3.0]);
    assert!((found[1] + 0.869_423_8).abs() < 1e-6 && found[2].abs() < 1e-15 && (found[0] + found[1]).abs() < 1e-12);
    let tied = normal_quantiles(&[2.0, 2.0, 0.0, 4.0]);
    assert!(tied[0] == tied[1] && tied[0].abs() < 1e-15);
    assert!(normal_quantiles(&[]).is_empty());
}

#[test]
fn patterns_of_missing_visits_are_counted() {
    let there = |cells: [u8; 3]| (vec![], cells.map(|it| (it == 1).then_some(1.0)).to_vec());
    let leaving = [there([1, 1, 1]), there([1, 0, 0]), there([1, 1, 1]), there([1, 1, 0]), there([0, 0, 0])];
    let found = missing(&design(&[3], &[], &leaving), 0).unwrap();
    assert!(found.monotone);
    let counts: Vec<usize> = found.patterns.iter().map(|it| it.subjects.len()).collect();
    assert_eq!(counts, [2, 1, 1, 1]);
    assert_eq!(
        (found.patterns[0].subjects.as_slice(), found.patterns[1].present.as_slice()),
        (&[0, 2][..], &[true, true, false][..])
    );
    let returning = [there([1, 1, 1]), there([1, 0, 1])];
    let found = missing(&design(&[3], &[], &returning), 0).unwrap();
    assert_eq!((found.monotone, found.patterns[1].monotone), (false, false));
    // The same levels in another order of time: the visit that is lacking comes last.
    let placed = Design::new(vec![Factor::at(vec![0.0, 9.0, 5.0]).unwrap()], vec![], &returning).unwrap();
    assert!(missing(&placed, 0).unwrap().monotone);
    assert_eq!(missing(&placed, 1), None);
}

#[test]
fn cells_with_fewer_than_two_subjects_are_named() {
    let all = [
        (vec![0], vec![Some(1.0), Some(2.0)]),
        (vec![0], vec![Some(2.0), Some(2.5)]),
        (vec![1], vec![Some(1.0), Some(4.0)]),
        (vec![1], vec![Some(3.0), None]),
    ];
    let thin = thin_cells(&design(&[2], &[3], &all));
    let found: Vec<_> = thin.iter().map(|it| (it.group, it.cell, it.complete, it.available)).collect();
    assert_eq!(found, [(1, 0, 1, 2), (1, 1, 1, 1), (2, 0, 0, 0), (2, 1, 0, 0)]);
}
