//! Degenerate designs, and values worked out by hand.

#![allow(clippy::unwrap_used, clippy::panic)]

use revisant_analysis::anova::{
    About, Factorial, Mauchly, Remark, RepeatedMeasures, Term, factorial, repeated_measures, within_subject_band,
    within_subject_bands,
};
use revisant_analysis::contrasts::{Compared, ContrastKind, Family, Multiplicity};
use revisant_analysis::design::{At, Design, DesignError, Factor, FactorId, OneWithin};
use revisant_analysis::distributions::effect_size_interval;
use revisant_analysis::{Confidence, Interval, NotAConfidence, Note, Settings, Sums};

fn full(rows: &[&[f64]]) -> OneWithin {
    let rows: Vec<Vec<Option<f64>>> = rows.iter().map(|row| row.iter().map(|&y| Some(y)).collect()).collect();
    OneWithin::from_rows(&rows).unwrap()
}

fn analyse(design: &OneWithin, contrasts: &[Family]) -> RepeatedMeasures {
    repeated_measures(design, &Settings { contrasts: contrasts.to_vec(), ..Settings::default() })
}

#[test]
fn what_is_no_design_is_refused_by_name() {
    let none: [Vec<Option<f64>>; 0] = [];
    assert_eq!(OneWithin::from_rows(&none), Err(DesignError::NoSubjects));
    assert_eq!(OneWithin::from_rows(&[vec![]]), Err(DesignError::NoLevels));
    let ragged = DesignError::Ragged { subject: 1, cells: 1, levels: 2 };
    assert_eq!(OneWithin::from_rows(&[vec![None, None], vec![None]]), Err(ragged));
    let nan = DesignError::NotFinite { subject: 0, level: 1 };
    assert_eq!(OneWithin::from_rows(&[[Some(1.0), Some(f64::NAN)]]), Err(nan));
    let large = DesignError::TooLarge { subject: 0, level: 0 };
    assert_eq!(OneWithin::from_rows(&[[Some(1e101), None]]), Err(large));
}

#[test]
fn positions_are_one_for_each_level_finite_and_distinct() {
    let at = |positions: &[f64]| full(&[&[1.0, 2.0, 3.0]]).with_positions(positions.to_vec()).err();
    assert_eq!(at(&[0.0, 7.0]), Some(DesignError::PositionCount { positions: 2, levels: 3 }));
    assert_eq!(at(&[0.0, f64::NAN, 7.0]), Some(DesignError::PositionUnusable { level: 1 }));
    assert_eq!(at(&[0.0, 7.0, 0.0]), Some(DesignError::PositionShared { level: 2, other: 0 }));
    assert_eq!(at(&[0.0, 14.0, 7.0]), None);
}

#[test]
fn a_confidence_lies_between_0_and_1() {
    assert_eq!(Confidence::new(1.0), Err(NotAConfidence(1.0)));
    assert_eq!(Confidence::new(0.0), Err(NotAConfidence(0.0)));
    assert!(Confidence::new(f64::NAN).is_err());
    assert_eq!(Confidence::new(0.9).map(Confidence::level), Ok(0.9));
}

#[test]
fn one_subject_has_means_and_no_test() {
    let result = analyse(&full(&[&[1.0, 2.0, 4.0]]), &[Family::Pairwise]);
    let effect = result.effect.unwrap();
    assert_eq!(
        (effect.f, effect.p, effect.partial_eta_sq, effect.epsilon, effect.error_ms),
        (None, None, None, None, None)
    );
    assert_eq!((effect.df, effect.error_df), (2.0, 0.0));
    assert_eq!(result.if_unlinked, None);
    assert_eq!((result.cells[2].mean, result.cells[2].sd, result.cells[2].ci), (Some(4.0), None, None));
    assert_eq!((result.contrasts[0].estimate, result.contrasts[0].se, result.contrasts[0].p), (Some(1.0), None, None));
    assert_eq!(result.notes[0], Note::OneSubject);
    let kind = ContrastKind::Pairwise { level: 1, against: 0 };
    assert_eq!(result.notes[1], Note::TooFewForContrast { contrast: kind, subjects: 1 });
}

#[test]
fn one_level_has_a_spread_and_no_test() {
    let result = analyse(&full(&[&[1.0], &[2.0], &[4.0]]), &[Family::Pairwise, Family::Polynomial]);
    let effect = result.effect.unwrap();
    assert_eq!((effect.f, effect.p, effect.corrected, effect.generalized_eta_sq), (None, None, None, None));
    assert_eq!(result.decomposition.unwrap().subject.df, 2.0);
    assert_eq!(result.contrasts, []);
    assert_eq!(result.notes, [Note::OneLevel, Note::TrendsNeedPositions]);
}

#[test]
fn without_a_complete_subject_pairs_remain() {
    let rows = [vec![Some(1.0), Some(2.0), None], vec![Some(2.0), Some(5.0), None], vec![None, Some(1.0), Some(0.5)]];
    let result = analyse(&OneWithin::from_rows(&rows).unwrap(), &[Family::Pairwise]);
    assert_eq!((result.decomposition, result.effect), (None, None));
    assert_eq!((result.used, result.incomplete), (vec![], vec![0, 1, 2]));
    assert_eq!((result.cells[0].n, result.cells[0].mean), (0, None));
    assert_eq!((result.contrasts[0].n, result.contrasts[0].estimate, result.contrasts[0].t), (2, Some(2.0), Some(2.0)));
    assert_eq!((result.contrasts[1].n, result.contrasts[1].estimate, result.contrasts[1].df), (0, None, None));
    assert_eq!(result.notes[0], Note::NoCompleteSubject);
}

/// Decimals whose differences are equal on paper and unequal as doubles.
#[test]
fn equal_decimal_differences_have_no_spread() {
    let result = analyse(&full(&[&[5.0, 5.1], &[6.0, 6.1], &[0.1, 0.2]]), &[Family::Pairwise]);
    let pair = result.contrasts[0];
    assert_eq!((pair.se, pair.t, pair.p, pair.p_adjusted, pair.dz), (Some(0.0), None, Some(0.0), Some(0.0), None));
    assert_eq!(pair.ci.map(|ci| ci.lower), pair.estimate);
    let kind = ContrastKind::Pairwise { level: 1, against: 0 };
    assert_eq!(result.notes, [Note::ZeroResidual, Note::NoSpreadInContrast { contrast: kind }]);
    let still = analyse(&full(&[&[5.1, 5.1], &[6.2, 6.2]]), &[Family::EachVsFirst]).contrasts[0];
    assert_eq!(
        (still.estimate, still.t, still.p, still.ci),
        (Some(0.0), None, None, Some(Interval { lower: 0.0, upper: 0.0 }))
    );
}

#[test]
fn two_identical_visits_make_the_covariance_singular() {
    let result = analyse(&full(&[&[1.0, 3.1, 3.1], &[2.0, 2.5, 2.5], &[4.0, 4.7, 4.7], &[3.0, 4.9, 4.9]]), &[]);
    let effect = result.effect.unwrap();
    assert_eq!(effect.mauchly, Some(Mauchly::default()));
    assert!(effect.f.is_some() && (effect.epsilon.unwrap().greenhouse_geisser.unwrap() - 0.5).abs() < 1e-12);
    assert_eq!(result.notes, [Note::SingularCovariance]);
}

#[test]
fn two_subjects_have_no_huynh_feldt() {
    let result = analyse(&full(&[&[1.0, 3.0, 2.0], &[2.0, 2.5, 7.0]]), &[]);
    let epsilon = result.effect.unwrap().epsilon.unwrap();
    assert_eq!((epsilon.huynh_feldt, epsilon.lecoutre), (None, None));
    assert!((epsilon.greenhouse_geisser.unwrap() - 0.5).abs() < 1e-12);
    assert_eq!(result.notes, [Note::HuynhFeldtUndefined, Note::TooFewSubjectsForMauchly { subjects: 2, levels: 3 }]);
}

/// Grand mean 3, level means 2, 3, 4, subject means 5/3, 3, 13/3: total SS 20 = effect 6 + subject 32/3 + residual 10/3.
#[test]
fn one_factor_by_hand() {
    let result = analyse(&full(&[&[1.0, 2.0, 2.0], &[1.0, 3.0, 5.0], &[4.0, 4.0, 5.0]]), &[]);
    let (parts, effect, unlinked) =
        (result.decomposition.unwrap(), result.effect.unwrap(), result.if_unlinked.unwrap());
    let near = |got: f64, want: f64| assert!((got - want).abs() < 1e-13, "{got} for {want}");
    near(parts.total.ss, 20.0);
    near(parts.effect.ss, 6.0);
    near(parts.subject.ss, 32.0 / 3.0);
    near(parts.residual.ms.unwrap(), 5.0 / 6.0);
    near(effect.f.unwrap(), 3.6);
    near(effect.partial_eta_sq.unwrap(), 9.0 / 14.0);
    near(effect.generalized_eta_sq.unwrap(), 0.3);
    near(effect.partial_omega_sq.unwrap(), 26.0 / 71.0);
    near(unlinked.f.unwrap(), 9.0 / 7.0);
    near(unlinked.variance_ratio.unwrap(), 2.8);
}

/// Two subjects, two levels: residuals are a quarter of the difference of differences, d = 2 / 4.
#[test]
fn within_subject_band_by_hand() {
    let band = within_subject_band(&full(&[&[0.0, 4.0], &[10.0, 12.0]]), Confidence::default());
    let se = (2.0_f64 * (2.0 * 0.25) / 1.0 / 2.0).sqrt();
    assert_eq!((band[0].mean, band[1].mean), (Some(5.0), Some(8.0)));
    assert!((band[0].se.unwrap() - se).abs() < 1e-14 && band[0].se == band[1].se);
    let half = 12.706_204_736_174_694 * se;
    assert!((band[1].ci.unwrap().upper - (8.0 + half)).abs() < 1e-10);
}

#[test]
fn adjusted_p_values_by_hand() {
    let p = [Some(0.01), None, Some(0.04), Some(0.03)];
    let check = |how: Multiplicity, want: [f64; 3]| {
        let got = how.adjust(&p);
        assert_eq!(got[1], None);
        let got: Vec<f64> = got.into_iter().flatten().collect();
        assert!(got.iter().zip(want).all(|(a, b)| (a - b).abs() < 1e-15), "{how:?}: {got:?}");
    };
    check(Multiplicity::None, [0.01, 0.04, 0.03]);
    check(Multiplicity::Bonferroni, [0.03, 0.12, 0.09]);
    check(Multiplicity::Holm, [0.03, 0.06, 0.06]);
    check(Multiplicity::BenjaminiHochberg, [0.03, 0.04, 0.04]);
}

#[test]
fn each_against_the_first_is_a_family_of_its_own() {
    let design = full(&[&[1.0, 2.0, 2.5], &[1.0, 3.5, 5.0], &[4.0, 4.5, 5.0], &[2.0, 1.5, 4.0]]);
    let settings = Settings {
        contrasts: vec![Family::Pairwise, Family::EachVsFirst],
        multiplicity: Multiplicity::Bonferroni,
        ..Settings::default()
    };
    let result = repeated_measures(&design, &settings);
    assert_eq!(result.contrasts.len(), 5);
    let (pair, first) = (result.contrasts[1], result.contrasts[4]);
    assert_eq!(first.kind, ContrastKind::EachVsFirst { level: 2, against: 0 });
    assert_eq!((pair.t, pair.p, pair.dav), (first.t, first.p, first.dav));
    assert_eq!(
        (pair.p_adjusted, first.p_adjusted),
        (pair.p.map(|p| (3.0 * p).min(1.0)), pair.p.map(|p| (2.0 * p).min(1.0)))
    );
}

#[test]
fn the_linear_trend_rises_with_time_whatever_the_order_of_the_levels() {
    let rows: [&[f64]; 3] = [&[3.0, 1.0, 2.1], &[5.2, 3.0, 4.0], &[9.0, 7.1, 8.0]];
    let design = full(&rows).with_positions(vec![14.0, 0.0, 7.0]).unwrap();
    let trends = analyse(&design, &[Family::Polynomial]).contrasts;
    assert_eq!(trends.len(), 2);
    let mean_rise = (2.0 + 2.2 + 1.9) / 3.0;
    assert!((trends[0].estimate.unwrap() - mean_rise / 2.0_f64.sqrt()).abs() < 1e-12);
    assert_eq!(trends[0].dav, None);
}

/// Subjects with their groups and readings.
type Subjects<'a> = &'a [(&'a [usize], &'a [f64])];

fn several(within: &[usize], between: &[usize], subjects: Subjects<'_>) -> Design {
    let subjects: Vec<(Vec<usize>, Vec<Option<f64>>)> =
        subjects.iter().map(|(groups, cells)| (groups.to_vec(), cells.iter().map(|&y| Some(y)).collect())).collect();
    Design::new(within.iter().map(|&k| Factor::of(k).unwrap()).collect(), between.to_vec(), &subjects).unwrap()
}

fn with(design: &Design, contrasts: &[Family]) -> Factorial {
    factorial(design, &Settings { contrasts: contrasts.to_vec(), ..Settings::default() })
}

fn of_design(note: Note) -> Remark {
    Remark { about: About::Design, note }
}

const WITHIN: FactorId = FactorId::Within(0);
const BETWEEN: FactorId = FactorId::Between(0);

#[test]
fn what_is_no_design_of_several_factors_is_refused_by_name() {
    let one = |within: &[usize], between: Vec<usize>, groups: Vec<usize>, cells: Vec<Option<f64>>| {
        let within: Result<Vec<Factor>, DesignError> = within.iter().map(|&k| Factor::of(k)).collect();
        Design::new(within?, between, &[(groups, cells)]).map(|_| ())
    };
    let none: [(Vec<usize>, Vec<Option<f64>>); 0] = [];
    assert_eq!(Design::new(vec![], vec![], &none), Err(DesignError::NoSubjects));
    assert_eq!(one(&[0], vec![], vec![], vec![]), Err(DesignError::NoLevels));
    assert_eq!(one(&[1], vec![0], vec![0], vec![None]), Err(DesignError::NoLevels));
    assert_eq!(one(&[1; 11], vec![], vec![], vec![None]), Err(DesignError::TooManyFactors { factors: 11 }));
    assert_eq!(one(&[1], vec![20, 20], vec![0, 0], vec![None]), Err(DesignError::TooManyCombinations));
    assert_eq!(one(&[usize::MAX, 2], vec![], vec![], vec![None]), Err(DesignError::TooManyCombinations));
    assert_eq!(one(&[2], vec![], vec![], vec![None]), Err(DesignError::Ragged { subject: 0, cells: 1, levels: 2 }));
    let count = DesignError::GroupCount { subject: 0, groups: 0, factors: 1 };
    assert_eq!(one(&[1], vec![2], vec![], vec![None]), Err(count));
    let level = DesignError::NoSuchGroup { subject: 0, factor: 0, level: 2 };
    assert_eq!(one(&[1], vec![2], vec![2], vec![None]), Err(level));
    assert_eq!(one(&[1], vec![], vec![], vec![Some(f64::NAN)]), Err(DesignError::NotFinite { subject: 0, level: 0 }));
    assert_eq!(Factor::at(vec![1.0, 1.0]), Err(DesignError::PositionShared { level: 1, other: 0 }));
}

#[test]
fn averaging_needs_all_levels() {
    let rows: [(&[usize], [Option<f64>; 4]); 2] =
        [(&[], [Some(1.0), Some(2.0), Some(5.0), Some(8.0)]), (&[], [Some(1.0), Some(2.0), None, Some(8.0)])];
    let two = || vec![Factor::at(vec![0.0, 7.0]).unwrap(), Factor::of(2).unwrap()];
    let design = Design::new(two(), vec![], &rows).unwrap();
    let rows = |design: &Design| design.rows().map(<[_]>::to_vec).collect::<Vec<_>>();
    let visits = design.averaged_over(&[1]).unwrap();
    assert_eq!(rows(&visits), [[Some(1.5), Some(6.5)], [Some(1.5), None]]);
    assert_eq!(visits.within()[0].positions(), Some(&[0.0, 7.0][..]));
    assert_eq!(rows(&design.averaged_over(&[0]).unwrap()), [[Some(3.0), Some(5.0)], [None, Some(5.0)]]);
    assert_eq!(rows(&design.averaged_over(&[0, 1]).unwrap()), [[Some(4.0)], [None]]);
    assert_eq!(design.averaged_over(&[2]), Err(DesignError::NoSuchFactor { factor: 2 }));
}

/// Groups of 2 and 3. Subject means 2, 4 and 4, 5, 6, group means 3 and 5: subject SS 2 (2 + 2) = 8 on 3, group SS with type
/// III 2 (5 − 3)² / (1/2 + 1/3) = 9.6. Differences 2, 4 and 0, 2, 4, their means 3 and 2: error SS (2 + 8) / 2 = 5 on 3;
/// visit SS with type III ½ (2.5)² / ((1/2 + 1/3) / 4) = 15, with type II ½ 5 (2.4)² = 14.4.
#[test]
fn two_groups_at_two_visits_by_hand() {
    let design = several(
        &[2],
        &[2],
        &[(&[0], &[1.0, 3.0]), (&[0], &[2.0, 6.0]), (&[1], &[4.0, 4.0]), (&[1], &[4.0, 6.0]), (&[1], &[4.0, 8.0])],
    );
    let near = |got: Option<f64>, want: f64| assert!((got.unwrap() - want).abs() < 1e-12, "{got:?} for {want}");
    let at = Family::Groups { at: Some(0) };
    let result = with(&design, &[Family::Pairwise, at]);
    let (group, visit) = (result.effect(Term::main(BETWEEN)).unwrap(), result.effect(Term::main(WITHIN)).unwrap());
    near(Some(group.ss), 9.6);
    near(group.f, 9.6 / (8.0 / 3.0));
    near(Some(visit.ss), 15.0);
    near(visit.f, 9.0);
    // Two contrasts' worth of nothing but one: the classic epsilon has subjects where the others have degrees of freedom.
    near(visit.epsilon.unwrap().huynh_feldt, 1.5);
    near(visit.epsilon.unwrap().lecoutre, 1.0);
    near(visit.generalized_eta_sq, 15.0 / (15.0 + 8.0 + 5.0));
    near(group.partial_omega_sq, (9.6 - 8.0 / 3.0) / (9.6 - 8.0 / 3.0 + 5.0 * 8.0 / 3.0));
    let pair = &result.contrasts[0];
    assert_eq!((pair.n, pair.df), (5, Some(3.0)));
    near(pair.estimate, 2.5);
    near(pair.t, 3.0);
    near(pair.dz, 2.5 / (10.0_f64 / 3.0).sqrt());
    // SDs within groups: at the first visit √(½ / 3), at the second √((4.5 + 8) / 3).
    near(pair.dav, 2.5 / f64::midpoint((0.5_f64 / 3.0).sqrt(), (12.5_f64 / 3.0).sqrt()));
    // Groups at the second visit: 6 − 4.5 with SD² = 12.5 / 3.
    let difference = &result.contrasts[2];
    assert_eq!(difference.compared, Compared::Effect { factor: 0, level: 1, against: 0 });
    assert_eq!(difference.at, [At { factor: WITHIN, level: 1 }]);
    assert_eq!((difference.n, difference.df, difference.dz), (5, Some(3.0), None));
    near(difference.estimate, 1.5);
    near(difference.se, (12.5_f64 / 3.0 * (1.0 / 2.0 + 1.0 / 3.0)).sqrt());
    let second =
        factorial(&design, &Settings { sums: Sums::Type2, contrasts: vec![Family::Pairwise], ..Settings::default() });
    near(second.effect(Term::main(WITHIN)).map(|it| it.ss), 14.4);
    near(second.contrasts[0].estimate, 2.4);
    near(second.contrasts[0].t.map(|t| t * t), second.effect(Term::main(WITHIN)).unwrap().f.unwrap());
    assert_eq!(result.remarks, [of_design(Note::UnequalGroups)]);
}

#[test]
fn simple_effects_have_the_error_of_their_own_level() {
    let design = several(
        &[2],
        &[2],
        &[(&[0], &[1.0, 3.0]), (&[0], &[2.0, 6.0]), (&[1], &[4.0, 4.0]), (&[1], &[4.0, 6.0]), (&[1], &[4.0, 8.0])],
    );
    let result = with(&design, &[Family::Simple]);
    let at = |factor, level| vec![At { factor, level }];
    let found: Vec<_> = result.contrasts.iter().map(|it| (it.compared, it.at.clone(), it.n, it.df)).collect();
    let pair = Compared::Pairwise { factor: 0, level: 1, against: 0 };
    let groups = Compared::Effect { factor: 0, level: 1, against: 0 };
    let wanted = [
        (pair, at(BETWEEN, 0), 2, Some(1.0)),
        (pair, at(BETWEEN, 1), 3, Some(2.0)),
        (groups, at(WITHIN, 0), 5, Some(3.0)),
        (groups, at(WITHIN, 1), 5, Some(3.0)),
    ];
    assert_eq!(found, wanted);
    let near = |a: Option<f64>, b: Option<f64>| assert!((a.unwrap() - b.unwrap()).abs() < 1e-12, "{a:?} {b:?}");
    // Effects come factor by factor, those between first.
    let simple: Vec<_> = result.simple.iter().map(|it| (it.factor, it.at.clone(), it.n)).collect();
    let order = [
        (BETWEEN, at(WITHIN, 0), 5),
        (BETWEEN, at(WITHIN, 1), 5),
        (WITHIN, at(BETWEEN, 0), 2),
        (WITHIN, at(BETWEEN, 1), 3),
    ];
    assert_eq!(simple, order);
    for (effect, contrast) in [(0, 2), (1, 3), (2, 0), (3, 1)] {
        near(result.simple[effect].effect.f, result.contrasts[contrast].t.map(|t| t * t));
    }
    // Asked for by themselves, differences between groups come once.
    let once = with(&design, &[Family::Simple, Family::Groups { at: Some(0) }]);
    assert_eq!(once.contrasts.len(), 4);
}

#[test]
fn a_group_of_one_adds_nothing_to_the_error() {
    let design = several(&[2], &[2], &[(&[0], &[1.0, 3.0]), (&[0], &[2.0, 6.5]), (&[1], &[4.0, 4.5])]);
    let result = with(&design, &[Family::Pairwise]);
    assert_eq!(result.strata.iter().map(|it| it.error.df).collect::<Vec<_>>(), [1.0, 1.0]);
    assert!(result.effects().all(|it| it.effect.f.is_some()));
    assert_eq!(result.contrasts[0].df, Some(1.0));
    assert_eq!(result.remarks, [of_design(Note::GroupOfOne { group: 1 }), of_design(Note::UnequalGroups)]);
    let alone = with(&several(&[2], &[2], &[(&[0], &[1.0, 3.0]), (&[1], &[4.0, 4.5])]), &[Family::Pairwise]);
    assert!(alone.effects().all(|it| it.effect.f.is_none() && it.effect.p.is_none() && it.effect.epsilon.is_none()));
    assert_eq!((alone.contrasts[0].estimate, alone.contrasts[0].se), (Some(1.25), None));
    let few = Remark { about: About::Contrast(0), note: Note::TooFewForComparison { subjects: 2 } };
    assert_eq!(alone.remarks, [of_design(Note::NoErrorWithinGroups), few]);
}

#[test]
fn a_level_with_nobody_is_not_compared() {
    let subjects: Subjects<'_> = &[(&[0], &[1.0, 3.0]), (&[0], &[2.0, 6.5]), (&[2], &[4.0, 4.5]), (&[2], &[3.0, 8.5])];
    let result = with(&several(&[2], &[3], subjects), &[Family::Groups { at: None }]);
    let without = with(
        &several(
            &[2],
            &[2],
            &subjects.iter().map(|(g, y)| (if g[0] == 2 { &[1][..] } else { &[0] }, *y)).collect::<Vec<_>>(),
        ),
        &[],
    );
    let tests = |result: &Factorial| result.effects().map(|it| it.effect).collect::<Vec<_>>();
    assert_eq!(tests(&result), tests(&without));
    assert_eq!(result.cells.iter().map(|cells| cells[0].n).collect::<Vec<_>>(), [2, 0, 2]);
    assert_eq!((result.contrasts[0].estimate, result.contrasts[0].p), (None, None));
    assert!((result.contrasts[1].estimate.unwrap() - 1.875).abs() < 1e-12);
    let lacking = Remark { about: About::Contrast(0), note: Note::GroupWithoutComparison };
    assert_eq!(result.remarks, [of_design(Note::EmptyLevel { factor: 0, level: 1 }), lacking]);
}

#[test]
fn a_combination_of_groups_with_nobody_leaves_effects_undefined() {
    let subjects: Subjects<'_> =
        &[(&[0, 0], &[1.0, 3.0]), (&[0, 0], &[2.0, 6.5]), (&[0, 1], &[4.0, 4.5]), (&[1, 0], &[3.0, 8.5])];
    for sums in [Sums::Type3, Sums::Type2] {
        let result = factorial(&several(&[2], &[2, 2], subjects), &Settings { sums, ..Settings::default() });
        assert_eq!(result.effects().count(), 7);
        let nothing = |it: &revisant_analysis::anova::Effect| (it.df, it.ms, it.f, it.p, it.partial_eta_sq);
        assert!(result.effects().all(|it| nothing(&it.effect) == (0.0, None, None, None, None)));
        assert_eq!(result.strata[1].error.df, 1.0);
        assert_eq!(result.remarks[0], of_design(Note::EmptyGroup { group: 3 }));
    }
}

#[test]
fn without_variation_or_residual_an_effect_says_so() {
    let flat = with(
        &several(&[2], &[2], &[(&[0], &[5.1, 5.1]), (&[0], &[5.1, 5.1]), (&[1], &[5.1, 5.1]), (&[1], &[5.1, 5.1])]),
        &[],
    );
    assert!(flat.effects().all(|it| it.effect.f.is_none() && it.effect.p.is_none()));
    assert_eq!(flat.remarks, [of_design(Note::NoVariation)]);
    // Decimals that differ by exactly 0.1 on paper: the visit has no error, the groups have one.
    let steps = with(
        &several(&[2], &[2], &[(&[0], &[5.1, 5.2]), (&[0], &[0.1, 0.2]), (&[1], &[7.3, 7.4]), (&[1], &[6.0, 6.1])]),
        &[],
    );
    let visit = steps.effect(Term::main(WITHIN)).unwrap();
    assert_eq!((visit.f, visit.p), (None, Some(0.0)));
    assert!(steps.effect(Term::main(BETWEEN)).unwrap().f.is_some());
    let both = Term { between: Term::main(BETWEEN).between, ..Term::main(WITHIN) };
    let about = |term, note| Remark { about: About::Term(term), note };
    assert_eq!(steps.remarks, [about(Term::main(WITHIN), Note::ZeroResidual), about(both, Note::NoEffectNoResidual)]);
}

#[test]
fn nobody_complete_leaves_what_pairs_there_are() {
    let rows: [(&[usize], [Option<f64>; 3]); 4] = [
        (&[0], [Some(1.0), Some(2.0), None]),
        (&[0], [Some(2.0), Some(4.0), None]),
        (&[1], [Some(2.0), Some(2.0), None]),
        (&[1], [Some(2.0), Some(5.0), None]),
    ];
    let design = Design::new(vec![Factor::of(3).unwrap()], vec![2], &rows).unwrap();
    let result = with(&design, &[Family::Pairwise]);
    assert!(result.strata.is_empty() && result.total.is_none() && result.if_unlinked.is_none());
    assert_eq!(
        (result.contrasts[0].n, result.contrasts[0].df, result.contrasts[0].estimate),
        (4, Some(2.0), Some(1.5))
    );
    assert_eq!(result.remarks[0], of_design(Note::NoCompleteSubject));
    assert!(result.cells.iter().flatten().all(|cell| cell.n == 0));
}

#[test]
fn one_cell_and_one_group_leave_nothing_to_test() {
    let result = with(&several(&[1], &[1], &[(&[0], &[1.0]), (&[0], &[2.0])]), &[Family::Pairwise]);
    assert_eq!((result.effects().count(), result.contrasts.len()), (0, 0));
    assert_eq!(result.strata[0].error.ss, 0.5);
    assert_eq!(result.remarks, [of_design(Note::OneLevel)]);
}

/// Each group's band is that of the group alone.
#[test]
fn bands_of_groups_are_those_of_each_alone() {
    let first: &[&[f64]] = &[&[0.0, 4.0], &[10.0, 12.0]];
    let second: &[&[f64]] = &[&[1.0, 1.5], &[3.0, 7.0], &[4.0, 3.0]];
    let subjects: Vec<(&[usize], &[f64])> =
        first.iter().map(|y| (&[0][..], *y)).chain(second.iter().map(|y| (&[2][..], *y))).collect();
    let bands = within_subject_bands(&several(&[2], &[3], &subjects), Confidence::default());
    let alone = |rows: &[&[f64]]| within_subject_band(&full(rows), Confidence::default());
    for (band, alone) in bands[0].iter().zip(alone(first)).chain(bands[2].iter().zip(alone(second))) {
        assert_eq!((band.n, band.mean), (alone.n, alone.mean));
        assert!((band.se.unwrap() - alone.se.unwrap()).abs() < 1e-14);
    }
    assert!(bands[1].iter().all(|band| band.n == 0 && band.mean.is_none() && band.se.is_none()));
}

/// Two pairs of a family of three, and what Bonferroni makes of their intervals: t(2) at 1 − 0.05 / 3.
#[test]
fn simultaneous_intervals_by_hand() {
    let design = Design::from(&full(&[&[1.0, 2.0, 2.5], &[1.0, 3.5, 5.0], &[4.0, 4.5, 5.0]]));
    let family = |multiplicity| {
        let settings = Settings { contrasts: vec![Family::Pairwise], multiplicity, ..Settings::default() };
        factorial(&design, &settings).contrasts
    };
    let (holm, bonferroni) = (family(Multiplicity::Holm), family(Multiplicity::Bonferroni));
    // The quantile of t with 2 degrees of freedom has a closed form: 2a / √(2 · 4p(1 − p)), a = 2p − 1 (Shaw 2006, J Comput Finance 9:37).
    let p = 1.0 - 0.05_f64 / 6.0;
    let quantile = (2.0 * p - 1.0) * (2.0 / (4.0 * p * (1.0 - p))).sqrt();
    for it in &bonferroni {
        let half = (it.simultaneous.unwrap().upper - it.simultaneous.unwrap().lower) / 2.0;
        assert!((half - quantile * it.se.unwrap()).abs() < 1e-12);
    }
    assert!(holm.iter().zip(&bonferroni).all(|(a, b)| a.simultaneous == b.simultaneous));
    let without = [Multiplicity::None, Multiplicity::BenjaminiHochberg].map(family);
    assert!(without.iter().flatten().all(|it| it.simultaneous.is_none() && it.ci.is_some()));
}

/// Decimals whose differences are equal on paper, far from zero: what rounding them took is judged by what they are, not by
/// what is left of them once a common part has been taken off.
#[test]
fn a_common_part_brings_its_rounding_along() {
    let row = |own: i32| [1, 3, 2, 4].map(|cell| Some(f64::from(own + cell) / 10.0)).to_vec();
    let subjects = [1_000_001, 1_000_002, 1_000_004, 1_000_007].map(|own| (Vec::<usize>::new(), row(own)));
    let design = Design::new(vec![Factor::of(2).unwrap(), Factor::of(2).unwrap()], vec![], &subjects).unwrap();
    let result = with(&design, &[Family::Pairwise, Family::Simple]);
    for it in &result.contrasts {
        assert_eq!((it.se, it.t, it.p), (Some(0.0), None, Some(0.0)), "{it:?}");
    }
    assert!(result.simple.iter().all(|it| it.effect.f.is_none() && it.effect.p == Some(0.0)));
    assert_eq!(result.contrasts.len(), 6);
}

#[test]
fn the_interval_of_a_size_goes_with_the_corrected_test() {
    let design = full(&[&[1.0, 2.0, 2.5], &[1.0, 3.5, 9.0], &[4.0, 4.5, 5.0], &[2.0, 1.5, 4.0]]);
    let effect = analyse(&design, &[]).effect.unwrap();
    let test = effect.corrected.unwrap().greenhouse_geisser.unwrap();
    assert!(test.df < 1.9, "{test:?}");
    let n = test.df + test.error_df + 1.0;
    let wanted = effect_size_interval(effect.f.unwrap(), test.df, test.error_df, n, Confidence::default());
    assert_eq!(effect.partial_eta_sq_ci, wanted);
    assert!(
        wanted.is_some_and(|ci| ci.lower < effect.partial_eta_sq.unwrap() && effect.partial_eta_sq.unwrap() < ci.upper)
    );
}
