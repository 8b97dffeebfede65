//! Degenerate designs, and values worked out by hand.

#![allow(clippy::unwrap_used, clippy::panic)]

use revisant_analysis::anova::{Mauchly, RepeatedMeasures, repeated_measures, within_subject_band};
use revisant_analysis::contrasts::{ContrastKind, Family, Multiplicity};
use revisant_analysis::design::{DesignError, OneWithin};
use revisant_analysis::{Confidence, Interval, NotAConfidence, Note, Settings};

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
