//! What has to hold for any readings.

#![allow(clippy::unwrap_used, clippy::panic)]

use proptest::prelude::*;
use revisant_analysis::anova::{Effect, RepeatedMeasures, repeated_measures, within_subject_band};
use revisant_analysis::contrasts::{Contrast, Family, Multiplicity};
use revisant_analysis::design::OneWithin;
use revisant_analysis::{Confidence, Interval, Settings};

type Rows = Vec<Vec<Option<f64>>>;

const ALL: [Family; 3] = [Family::Pairwise, Family::EachVsFirst, Family::Polynomial];

fn settings() -> Settings {
    Settings { contrasts: ALL.to_vec(), multiplicity: Multiplicity::Holm, ..Settings::default() }
}

fn analyse(rows: &Rows) -> RepeatedMeasures {
    let design = OneWithin::from_rows(rows).unwrap();
    let positions = (0..design.levels()).map(|j| (j * j + j) as f64).collect();
    repeated_measures(&design.with_positions(positions).unwrap(), &settings())
}

/// Complete tables of multiples of 1/8, so that moderate shifts and powers of two change no digit.
fn complete(levels: std::ops::Range<usize>) -> impl Strategy<Value = Rows> {
    (levels, 2_usize..14).prop_flat_map(|(k, n)| {
        prop::collection::vec(prop::collection::vec((-4000_i32..4000).prop_map(|x| Some(f64::from(x) / 8.0)), k), n)
    })
}

/// Tables with gaps, constants, ties, huge and tiny values, of any shape from one by one.
fn degenerate() -> impl Strategy<Value = Rows> {
    let value = prop_oneof![
        3 => Just(None),
        4 => (-2_i32..3).prop_map(|x| Some(f64::from(x))),
        2 => (-5_i32..5).prop_map(|x| Some(f64::from(x) / 10.0)),
        1 => prop::sample::select(vec![0.0, -0.0, 1e100, -1e100, 1e-300, 5e-324, 1e12, 1e12 + 0.1, 0.1 + 0.2]).prop_map(Some),
    ];
    let mixed = (1_usize..6, 1_usize..7)
        .prop_flat_map(move |(k, n)| prop::collection::vec(prop::collection::vec(value.clone(), k), n));
    let additive = (1_usize..6, 1_usize..7, -30_i32..30, -30_i32..30).prop_map(|(k, n, a, b)| {
        let cell = |i: usize, j: usize| Some(f64::from(a) * i as f64 / 10.0 + f64::from(b) * j as f64 / 10.0);
        (0..n).map(|i| (0..k).map(|j| cell(i, j)).collect()).collect()
    });
    prop_oneof![3 => mixed, 1 => additive]
}

fn near(a: Option<f64>, b: Option<f64>, tolerance: f64) -> bool {
    match (a, b) {
        (Some(a), Some(b)) => (a - b).abs() <= tolerance * a.abs().max(b.abs()),
        (a, b) => a == b,
    }
}

/// Relative agreement of everything without a unit, for readings that are not degenerate.
fn same_tests(a: &RepeatedMeasures, b: &RepeatedMeasures, tolerance: f64) -> Result<(), TestCaseError> {
    let numbers = |e: &Effect| {
        let (epsilon, mauchly) = (e.epsilon.unwrap(), e.mauchly.unwrap());
        [e.f, e.p, epsilon.greenhouse_geisser, mauchly.w, mauchly.p, e.partial_eta_sq, e.generalized_eta_sq]
    };
    let (x, y) = (numbers(&a.effect.unwrap()), numbers(&b.effect.unwrap()));
    prop_assert!(x.iter().zip(&y).all(|(x, y)| near(*x, *y, tolerance)), "{x:?} and {y:?}");
    for (c, d) in a.contrasts.iter().zip(&b.contrasts) {
        prop_assert_eq!((c.kind, c.n), (d.kind, d.n));
        let alike = near(c.p, d.p, tolerance)
            && near(c.p_adjusted, d.p_adjusted, tolerance)
            && near(c.t.map(f64::abs), d.t.map(f64::abs), tolerance);
        prop_assert!(alike || c.t.is_some_and(|t| t.abs() < 1e-6), "{c:?} and {d:?}");
    }
    Ok(())
}

/// Whether the residual is more than the readings' own grain, so that relative agreement can be asked for.
fn varied(result: &RepeatedMeasures) -> bool {
    result
        .effect
        .is_some_and(|e| e.error_ss > 1e-3 && e.ss > 1e-3 && e.mauchly.is_none_or(|m| m.w.is_none_or(|w| w > 1e-6)))
}

fn all_numbers(result: &RepeatedMeasures) -> Vec<f64> {
    let ends = |ci: Option<Interval>| ci.map_or(vec![], |ci| vec![ci.lower, ci.upper]);
    let mut all = Vec::new();
    for line in result.decomposition.iter().flat_map(|d| [d.effect, d.subject, d.residual, d.total]) {
        all.extend([line.ss, line.df].into_iter().chain(line.ms));
    }
    if let Some(e) = &result.effect {
        all.extend(
            [e.ms, e.error_ms, e.f, e.p, e.partial_eta_sq, e.generalized_eta_sq, e.partial_omega_sq]
                .into_iter()
                .flatten(),
        );
        let mauchly = e.mauchly.into_iter().flat_map(|m| [m.w, m.chi2, m.df, m.p]);
        let epsilon =
            e.epsilon.into_iter().flat_map(|x| [x.greenhouse_geisser, x.huynh_feldt, x.lecoutre, Some(x.lower_bound)]);
        all.extend(mauchly.chain(epsilon).flatten());
        let tests =
            e.corrected.into_iter().flat_map(|c| [c.greenhouse_geisser, c.huynh_feldt, c.lecoutre, c.lower_bound]);
        all.extend(tests.flatten().flat_map(|t| [Some(t.df), Some(t.error_df), t.p]).flatten());
    }
    for c in &result.cells {
        all.extend([c.mean, c.sd, c.se].into_iter().flatten().chain(ends(c.ci)));
    }
    if let Some(u) = &result.if_unlinked {
        all.extend([u.f, u.p, u.variance_ratio, Some(u.df), Some(u.error_df)].into_iter().flatten());
    }
    for c in &result.contrasts {
        all.extend(
            [c.estimate, c.se, c.df, c.t, c.p, c.p_adjusted, c.dz, c.dav].into_iter().flatten().chain(ends(c.ci)),
        );
    }
    all
}

fn all_probabilities(result: &RepeatedMeasures) -> Vec<f64> {
    let effect = result.effect.iter().flat_map(|e| {
        let tests =
            e.corrected.into_iter().flat_map(|c| [c.greenhouse_geisser, c.huynh_feldt, c.lecoutre, c.lower_bound]);
        let corrected: Vec<Option<f64>> = tests.flatten().map(|t| t.p).collect();
        corrected.into_iter().chain([e.p, e.mauchly.and_then(|m| m.p), e.partial_eta_sq, e.generalized_eta_sq])
    });
    let contrasts = result.contrasts.iter().flat_map(|c| [c.p, c.p_adjusted]);
    effect.chain(contrasts).chain([result.if_unlinked.and_then(|u| u.p)]).flatten().collect()
}

proptest! {
    #![proptest_config(ProptestConfig { cases: 400, failure_persistence: None, ..ProptestConfig::default() })]

    #[test]
    fn sums_of_squares_and_degrees_of_freedom_add_up(rows in complete(1..8)) {
        let parts = analyse(&rows).decomposition.unwrap();
        let ss = parts.effect.ss + parts.subject.ss + parts.residual.ss;
        prop_assert!((ss - parts.total.ss).abs() <= 1e-12 * parts.total.ss, "{parts:?}");
        prop_assert_eq!(parts.effect.df + parts.subject.df + parts.residual.df, parts.total.df);
    }

    #[test]
    fn the_order_of_subjects_does_not_matter(rows in complete(2..6), turn in 0_usize..14) {
        let result = analyse(&rows);
        prop_assume!(varied(&result));
        let mut moved = rows.clone();
        let by = turn % moved.len();
        moved.rotate_left(by);
        moved.swap(0, rows.len() - 1);
        same_tests(&result, &analyse(&moved), 1e-9)?;
    }

    #[test]
    fn an_offset_of_1e9_changes_no_test(rows in complete(2..6)) {
        let result = analyse(&rows);
        prop_assume!(varied(&result));
        let shifted = rows.iter().map(|row| row.iter().map(|y| y.map(|y| y + 1e9)).collect()).collect();
        let shifted = analyse(&shifted);
        same_tests(&result, &shifted, 1e-9)?;
        for (a, b) in result.cells.iter().zip(&shifted.cells) {
            prop_assert!(near(a.sd, b.sd, 1e-10) && near(a.mean.map(|m| m + 1e9), b.mean, 1e-15));
        }
    }

    #[test]
    fn another_unit_scales_what_has_a_unit_and_nothing_else(rows in complete(2..6), power in -30_i32..30, flip in any::<bool>()) {
        let result = analyse(&rows);
        prop_assume!(varied(&result));
        let factor = if flip { -1.0 } else { 1.0 } * 2_f64.powi(power);
        let scaled = analyse(&rows.iter().map(|row| row.iter().map(|y| y.map(|y| y * factor)).collect()).collect());
        same_tests(&result, &scaled, 1e-9)?;
        prop_assert!(near(Some(result.effect.unwrap().ss * factor * factor), Some(scaled.effect.unwrap().ss), 1e-12));
        for (a, b) in result.contrasts.iter().zip(&scaled.contrasts) {
            prop_assert!(near(a.estimate.map(|x| x * factor), b.estimate, 1e-12) && near(a.se.map(|x| x * factor.abs()), b.se, 1e-9));
        }
    }

    #[test]
    fn with_two_levels_f_is_t_squared(rows in complete(2..3)) {
        let result = analyse(&rows);
        prop_assume!(varied(&result));
        let (effect, pair) = (result.effect.unwrap(), result.contrasts[0]);
        prop_assert!(near(effect.f, pair.t.map(|t| t * t), 1e-9), "{effect:?} {pair:?}");
        prop_assert!(near(effect.p, pair.p, 1e-9));
        prop_assert_eq!(effect.epsilon.unwrap().huynh_feldt, Some(1.0));
        prop_assert_eq!(effect.mauchly.unwrap().w, None);
    }

    #[test]
    fn trends_share_out_the_effect(rows in complete(2..8)) {
        let result = analyse(&rows);
        let trends: Vec<&Contrast> = result.contrasts.iter().filter(|c| matches!(c.kind, revisant_analysis::contrasts::ContrastKind::Polynomial { .. })).collect();
        prop_assert_eq!(trends.len(), rows[0].len() - 1);
        let ss: f64 = trends.iter().map(|c| c.estimate.unwrap().powi(2) * c.n as f64).sum();
        let effect = result.effect.unwrap();
        prop_assert!((ss - effect.ss).abs() <= 1e-10 * result.decomposition.unwrap().total.ss, "{ss} {effect:?}");
    }

    #[test]
    fn epsilons_lie_between_the_lower_bound_and_one(rows in complete(3..8)) {
        let result = analyse(&rows);
        prop_assume!(varied(&result));
        let epsilon = result.effect.unwrap().epsilon.unwrap();
        let greenhouse_geisser = epsilon.greenhouse_geisser.unwrap();
        prop_assert!(epsilon.lower_bound <= greenhouse_geisser && greenhouse_geisser <= 1.0);
        if let Some(huynh_feldt) = epsilon.huynh_feldt {
            prop_assert!(huynh_feldt >= greenhouse_geisser * (1.0 - 1e-9));
        }
    }

    #[test]
    fn holm_lies_between_raw_and_bonferroni(p in prop::collection::vec(prop::option::weighted(0.9, 0.0_f64..=1.0), 0..12)) {
        let adjusted = |how: Multiplicity| how.adjust(&p);
        let (raw, holm, bonferroni, bh) = (adjusted(Multiplicity::None), adjusted(Multiplicity::Holm), adjusted(Multiplicity::Bonferroni), adjusted(Multiplicity::BenjaminiHochberg));
        prop_assert_eq!(&raw, &p);
        for i in 0..p.len() {
            prop_assert!(raw[i] <= bh[i] && bh[i] <= holm[i] && holm[i] <= bonferroni[i] && bonferroni[i] <= Some(1.0));
            prop_assert_eq!(holm[i].is_none(), p[i].is_none());
            for j in 0..p.len() {
                prop_assert!(p[i] > p[j] || holm[i] <= holm[j] && bh[i] <= bh[j], "the order of p is kept");
            }
        }
    }

    #[test]
    fn no_design_gives_nan_infinity_or_panic(rows in degenerate(), confidence in 1e-9_f64..1.0) {
        let design = OneWithin::from_rows(&rows).unwrap();
        let positions = (0..design.levels()).map(|j| [0.0, 1e-200, 1.0, 1.0 + 1e-15, 1e100, -3.0][j]).collect();
        let confidence = Confidence::new(confidence).unwrap();
        let settings = Settings { confidence, ..settings() };
        let result = repeated_measures(&design.clone().with_positions(positions).unwrap(), &settings);
        let band = within_subject_band(&design, confidence);
        let band_numbers = band.iter().flat_map(|b| [b.mean, b.se, b.ci.map(|ci| ci.lower), b.ci.map(|ci| ci.upper)]).flatten();
        let bad: Vec<f64> = all_numbers(&result).into_iter().chain(band_numbers).filter(|x| !x.is_finite()).collect();
        prop_assert!(bad.is_empty(), "{bad:?} in {result:?}");
        prop_assert!(all_probabilities(&result).iter().all(|p| (0.0..=1.0).contains(p)), "{result:?}");
        prop_assert_eq!(result.used.len() + result.incomplete.len(), rows.len());
        if result.effect.is_none_or(|e| e.f.is_none()) {
            prop_assert!(!result.notes.is_empty(), "a missing F has a reason: {result:?}");
        }
    }

    #[test]
    fn additive_decimals_have_no_residual(n in 2_usize..9, k in 2_usize..7, start in -200_i32..200, between in prop::collection::vec(-50_i32..50, 8), steps in prop::collection::vec(-50_i32..50, 7)) {
        let cell = |i: usize, j: usize| Some(f64::from(start + between[i] + steps[j]) / 100.0);
        let rows: Rows = (0..n.min(8)).map(|i| (0..k).map(|j| cell(i, j)).collect()).collect();
        let effect = analyse(&rows).effect.unwrap();
        prop_assert_eq!(effect.f, None);
        let flat = steps[..k].iter().all(|s| *s == steps[0]);
        prop_assert_eq!(effect.p, if flat { None } else { Some(0.0) });
        prop_assert!(effect.error_ss < 1e-25);
    }

    #[test]
    fn distributions_answer_any_number(df in 0.001_f64..1e6, error_df in 0.001_f64..1e6, x in any::<f64>(), p in -0.5_f64..1.5) {
        use revisant_analysis::distributions::{ChiSquare, FisherF, Normal, StudentT};
        let (t, f, c) = (StudentT::new(df).unwrap(), FisherF::new(df, error_df).unwrap(), ChiSquare::new(df).unwrap());
        let tails = [t.cdf(x), t.sf(x), t.two_sided(x), f.cdf(x), f.sf(x), c.cdf(x), c.sf(x), Normal.cdf(x), Normal.sf(x)];
        prop_assert!(tails.iter().all(|tail| tail.is_some_and(|tail| (0.0..=1.0).contains(&tail)) || x.is_nan()), "{tails:?}");
        let quantiles = [t.quantile(p), t.upper_quantile(p), f.quantile(p), f.upper_quantile(p), c.quantile(p), c.upper_quantile(p), Normal.quantile(p), t.critical(p)];
        prop_assert!(quantiles.iter().flatten().all(|q| q.is_finite()), "{quantiles:?}");
    }

    #[test]
    fn quantiles_undo_tails(df in 0.2_f64..2e4, error_df in 0.2_f64..2e4, exponent in -250.0_f64..-0.01) {
        use revisant_analysis::distributions::{ChiSquare, FisherF, Normal, StudentT};
        let q = 10_f64.powf(exponent);
        let (t, f, c) = (StudentT::new(df).unwrap(), FisherF::new(df, error_df).unwrap(), ChiSquare::new(df).unwrap());
        // A tail as steep as df at its quantile magnifies the quantile's own rounding.
        for (name, back) in [
            ("t", t.upper_quantile(q).and_then(|x| t.sf(x))),
            ("F", f.upper_quantile(q).and_then(|x| f.sf(x))),
            ("chi-square", c.upper_quantile(q).and_then(|x| c.sf(x))),
            ("normal", Normal.upper_quantile(q).and_then(|x| Normal.sf(x))),
        ] {
            prop_assert!(back.is_none_or(|back| ((back - q) / q).abs() < 1e-9), "{name}: {back:?} for {q:e}");
        }
    }
}
