//! Intraclass correlations, error within subjects and limits of agreement.

#![allow(clippy::unwrap_used, clippy::panic)]

mod support;

use proptest::prelude::*;
use revisant_analysis::agreement::{Agreement, Form, Limits, agreement, difference_against_mean};
use revisant_analysis::design::OneWithin;
use revisant_analysis::{Confidence, Interval, Note};
use support::{Case, cases, settle};

#[test]
fn reference_cases() {
    let mut cases = cases("agreement");
    for case in &mut cases {
        let result = agreement(&case.design(), Confidence::default());
        check_icc(case, &result);
        check_within(case, &result);
        result.limits.iter().for_each(|limits| check_limits(case, limits));
    }
    settle(&cases, 200);
}

fn key(form: Form) -> &'static str {
    match form {
        Form::OneWay => "ICC1",
        Form::Agreement => "ICCA1",
        Form::Consistency => "ICCC1",
        Form::OneWayMean => "ICC1k",
        Form::AgreementMean => "ICCAk",
        Form::ConsistencyMean => "ICCCk",
    }
}

fn check_icc(case: &mut Case, result: &Agreement) {
    assert_eq!(result.icc.iter().map(|icc| icc.form).collect::<Vec<_>>(), Form::ALL);
    for icc in &result.icc {
        for (short, got) in [
            ("est", icc.value),
            ("F", icc.f),
            ("p", icc.p),
            ("ci_lo", icc.ci.map(|ci| ci.lower)),
            ("ci_hi", icc.ci.map(|ci| ci.upper)),
        ] {
            let key = format!("{}.{short}", key(icc.form));
            assert!(case.has(&key), "{key}");
            case.check(&key, got);
        }
        let (n, k) = (result.used.len() as f64, case.levels.len() as f64);
        let one_way = matches!(icc.form, Form::OneWay | Form::OneWayMean);
        assert_eq!((icc.df, icc.error_df), (n - 1.0, if one_way { n } else { n - 1.0 } * (k - 1.0)));
    }
}

fn check_within(case: &mut Case, result: &Agreement) {
    let (within, one_way) = (result.within, result.within.one_way.unwrap());
    for (key, got) in [
        ("repeat.df_within", Some(within.df)),
        ("repeat.sw", within.sd),
        ("repeat.sw_ci_lo", within.sd_ci.map(|ci| ci.lower)),
        ("repeat.sw_ci_hi", within.sd_ci.map(|ci| ci.upper)),
        ("repeat.coef_196", within.repeatability),
        ("repeat.cv_rms", within.cv),
        ("repeat.sem_two_way_complete", result.smallest_detectable_change.map(|sdc| sdc / 1.96 / 2.0_f64.sqrt())),
        ("repeat.icc1_unequal", one_way.icc),
        ("repeat.n0", Some(one_way.n0)),
    ] {
        assert!(case.has(key), "{key}");
        case.check(key, got);
    }
}

/// The cases have the earlier minus the later level.
fn check_limits(case: &mut Case, limits: &Limits) {
    let prefix = format!("ba[{}-{}].", case.levels[limits.against], case.levels[limits.level]);
    let mirrored = |ci: Option<Interval>| ci.map(|ci| [-ci.upper, -ci.lower]);
    case.check(&format!("{prefix}bias"), limits.bias.map(|bias| -bias));
    case.check(&format!("{prefix}sd"), limits.sd);
    for (short, got) in [
        ("bias_ci", mirrored(limits.bias_ci)),
        ("loa", limits.lower.zip(limits.upper).map(|(lower, upper)| [-upper, -lower])),
        ("loa_lower_ci_1999", mirrored(limits.upper_ci)),
        ("loa_upper_ci_1999", mirrored(limits.lower_ci)),
    ] {
        let Some(expected) = case.doc["expected"].get(format!("{prefix}{short}")).cloned() else { continue };
        for end in 0..2 {
            let (v, rtol) = (expected["v"][end].as_f64().unwrap(), expected["rtol"].as_f64().unwrap());
            case.close(&format!("{prefix}{short}[{end}]"), got.map(|got| got[end]), v, rtol, 0.0);
        }
    }
}

fn of(rows: &[Vec<Option<f64>>]) -> Agreement {
    agreement(&OneWithin::from_rows(rows).unwrap(), Confidence::default())
}

fn full(rows: &[&[f64]]) -> Vec<Vec<Option<f64>>> {
    rows.iter().map(|row| row.iter().map(|&y| Some(y)).collect()).collect()
}

/// Published: .17 .29 .71 and .44 .62 .91 (Shrout & Fleiss 1979, table 4).
#[test]
fn the_published_intraclass_correlations() {
    let case = cases("agreement").into_iter().find(|case| case.name == "shrout_fleiss").unwrap();
    let found: Vec<f64> = of(&case.rows).icc.iter().map(|icc| (icc.value.unwrap() * 100.0).round() / 100.0).collect();
    assert_eq!(found, [0.17, 0.29, 0.71, 0.44, 0.62, 0.91]);
}

/// Subject means 1.5, 2.5, 5, level means 3, 3: subject SS 13, level SS 0, residual SS 1.
#[test]
fn two_readings_by_hand() {
    let result = of(&full(&[&[1.0, 2.0], &[3.0, 2.0], &[5.0, 5.0]]));
    let near = |got: Option<f64>, want: f64| assert!((got.unwrap() - want).abs() < 1e-13, "{got:?} for {want}");
    let [one_way, absolute, consistent, ..] = result.icc[..] else { panic!() };
    near(consistent.f, 13.0);
    near(consistent.value, 6.0 / 7.0);
    near(one_way.f, 6.5 / (1.0 / 3.0));
    near(absolute.value, 6.0 / (6.5 + 0.5 - 1.0 / 3.0));
    near(result.within.sd, (1.0_f64 / 3.0).sqrt());
    near(result.smallest_detectable_change, 1.96);
    let limits = result.limits[0];
    near(limits.bias, 0.0);
    near(limits.upper, 1.96);
    near(result.within.cv, ((0.5 / 1.5_f64.powi(2) + 0.5 / 2.5_f64.powi(2)) / 3.0_f64).sqrt());
    let points = difference_against_mean(&OneWithin::from_rows(&full(&[&[1.0, 2.0], &[3.0, 2.0]])).unwrap(), 1, 0);
    let as_pairs: Vec<_> = points.iter().map(|point| (point.subject, point.mean, point.difference)).collect();
    assert_eq!(as_pairs, [(0, 1.5, 1.0), (1, 2.5, -1.0)]);
}

#[test]
fn degenerate_designs() {
    let values = |result: &Agreement| result.icc.iter().map(|icc| icc.value).collect::<Vec<_>>();
    let one = of(&full(&[&[1.0, 2.0, 4.0]]));
    assert_eq!((values(&one), one.smallest_detectable_change), (vec![None; 6], None));
    assert!(one.within.sd.is_some() && one.within.one_way.is_none());
    assert_eq!(one.notes[0], Note::OneSubject);
    assert_eq!((one.limits[0].bias, one.limits[0].sd, one.limits[0].lower_ci), (Some(1.0), None, None));

    let single = of(&full(&[&[1.0], &[2.0]]));
    assert_eq!((values(&single), single.limits.len(), single.within.sd), (vec![None; 6], 0, None));
    assert_eq!(single.notes, [Note::OneLevel, Note::NoRepeatedReading]);

    let equal = of(&full(&[&[5.1, 5.1], &[5.1, 5.1]]));
    assert_eq!((values(&equal), equal.within.sd, equal.within.cv), (vec![None; 6], Some(0.0), Some(0.0)));
    assert_eq!((equal.icc[0].f, equal.icc[0].p, equal.within.one_way.unwrap().icc), (None, None, None));
    assert!(Form::ALL.iter().all(|&form| equal.notes.contains(&Note::IccUndefined { form })));

    // Readings that repeat exactly: an infinite F, and nothing but agreement.
    let repeated = of(&full(&[&[5.1, 5.1], &[6.2, 6.2], &[7.7, 7.7]]));
    for icc in &repeated.icc {
        assert_eq!((icc.value, icc.f, icc.p), (Some(1.0), None, Some(0.0)), "{icc:?}");
        assert_eq!(icc.ci, Some(Interval { lower: 1.0, upper: 1.0 }));
    }
    // Two raters who differ by a constant are consistent and do not agree.
    let offset = of(&full(&[&[5.1, 5.4], &[6.2, 6.5], &[7.7, 8.0]]));
    assert_eq!((offset.icc[2].value, offset.icc[2].p), (Some(1.0), Some(0.0)));
    assert!(offset.icc[1].value.unwrap() < 1.0 && offset.icc[1].ci.unwrap().lower < 0.95);
    assert_eq!((offset.limits[0].sd, offset.limits[0].lower), (Some(0.0), offset.limits[0].bias));

    let signs = of(&full(&[&[-1.0, 1.0], &[2.0, 2.5]]));
    assert_eq!((signs.within.cv, &signs.notes[..2]), (None, &[Note::CvOfBothSigns, Note::CvUndefined][..]));
    let gaps = of(&[vec![Some(1.0), None], vec![None, Some(2.0)]]);
    assert_eq!((values(&gaps), gaps.incomplete, gaps.limits[0].n), (vec![None; 6], vec![0, 1], 0));
}

type Rows = Vec<Vec<Option<f64>>>;

/// Complete tables of multiples of 1/8, so that shifts and powers of two change no digit.
fn complete() -> impl Strategy<Value = Rows> {
    (2_usize..6, 3_usize..12).prop_flat_map(|(k, n)| {
        prop::collection::vec(prop::collection::vec((1_i32..4000).prop_map(|x| Some(f64::from(x) / 8.0)), k), n)
    })
}

/// Tables with gaps, ties and extremes, of any shape from one by one.
fn any_table() -> impl Strategy<Value = Rows> {
    let value = prop_oneof![
        2 => Just(None),
        5 => (-2_i32..3).prop_map(|x| Some(f64::from(x) / 10.0)),
        1 => prop::sample::select(vec![0.0, -0.0, 1e100, -1e100, 1e-300, 5e-324, 1e12, 1e12 + 0.1, 0.1 + 0.2]).prop_map(Some),
    ];
    (1_usize..5, 1_usize..7)
        .prop_flat_map(move |(k, n)| prop::collection::vec(prop::collection::vec(value.clone(), k), n))
}

fn mapped(rows: &Rows, f: impl Fn(f64) -> f64) -> Rows {
    rows.iter().map(|row| row.iter().map(|y| y.map(&f)).collect()).collect()
}

fn near(a: Option<f64>, b: Option<f64>) -> bool {
    match (a, b) {
        (Some(a), Some(b)) => (a - b).abs() <= 1e-9 * (1.0 + a.abs().min(b.abs())),
        (a, b) => a == b,
    }
}

fn same_icc(a: &Agreement, b: &Agreement) -> bool {
    let ends = |ci: Option<Interval>| (ci.map(|ci| ci.lower), ci.map(|ci| ci.upper));
    a.icc.iter().zip(&b.icc).all(|(a, b)| {
        let ((a_low, a_high), (b_low, b_high)) = (ends(a.ci), ends(b.ci));
        near(a.value, b.value) && near(a.f, b.f) && near(a.p, b.p) && near(a_low, b_low) && near(a_high, b_high)
    })
}

proptest! {
    #![proptest_config(ProptestConfig { cases: 200, failure_persistence: None, ..ProptestConfig::default() })]

    #[test]
    fn another_unit_or_offset_or_order_changes_no_correlation(rows in complete(), power in -40_i32..40, flip in any::<bool>(), turn in 0_usize..12) {
        let result = of(&rows);
        prop_assume!(result.icc[2].f.is_some_and(|f| f > 1e-3));
        let factor = if flip { -1.0 } else { 1.0 } * 2_f64.powi(power);
        prop_assert!(same_icc(&result, &of(&mapped(&rows, |y| y * factor))));
        prop_assert!(same_icc(&result, &of(&mapped(&rows, |y| y + 1e9))));
        let mut turned = rows.clone();
        turned.rotate_left(turn % rows.len());
        turned.iter_mut().for_each(|row| row.reverse());
        prop_assert!(same_icc(&result, &of(&turned)));
        let scaled = of(&mapped(&rows, |y| y * factor));
        prop_assert!(near(result.within.sd.map(|sd| sd * factor.abs()), scaled.within.sd) && near(result.within.cv, scaled.within.cv));
    }

    #[test]
    fn a_rater_s_own_offset_changes_no_consistency(rows in complete(), offset in -800_i32..800) {
        let mut moved = rows.clone();
        moved.iter_mut().for_each(|row| row[0] = row[0].map(|y| y + f64::from(offset) / 8.0));
        let (result, moved) = (of(&rows), of(&moved));
        for i in [2, 5] {
            prop_assert!(near(result.icc[i].value, moved.icc[i].value) && near(result.icc[i].p, moved.icc[i].p));
        }
        prop_assert!(near(result.smallest_detectable_change, moved.smallest_detectable_change));
    }

    #[test]
    fn estimates_lie_in_their_intervals_and_means_above_single_readings(rows in complete()) {
        for icc in of(&rows).icc {
            if let Some((value, ci)) = icc.value.zip(icc.ci) {
                prop_assert!(ci.lower <= value + 1e-12 && value <= ci.upper + 1e-12 && ci.upper <= 1.0 || value < 0.0, "{icc:?}");
            }
        }
        let icc = of(&rows).icc;
        for (single, mean) in [(0, 3), (1, 4), (2, 5)] {
            if icc[single].value.is_some_and(|value| value > 0.0) {
                prop_assert!(icc[mean].value >= icc[single].value);
            }
        }
    }

    #[test]
    fn a_swapped_pair_mirrors_its_limits(rows in complete()) {
        let swapped: Rows = rows.iter().map(|row| vec![row[1], row[0]]).collect();
        let pair: Rows = rows.iter().map(|row| vec![row[0], row[1]]).collect();
        let (a, b) = (of(&pair).limits[0], of(&swapped).limits[0]);
        let minus = |x: Option<f64>| x.map(|x| -x);
        prop_assert!(near(a.bias, minus(b.bias)) && near(a.sd, b.sd) && near(a.lower, minus(b.upper)) && near(a.upper, minus(b.lower)));
        prop_assert!(near(a.lower_ci.map(|ci| ci.lower), minus(b.upper_ci.map(|ci| ci.upper))));
        let points = |rows: &Rows| difference_against_mean(&OneWithin::from_rows(rows).unwrap(), 1, 0);
        prop_assert!(points(&pair).iter().zip(points(&swapped)).all(|(p, q)| p.mean == q.mean && p.difference == -q.difference));
    }

    /// With two levels √2 times the error within subjects is what differences would show without a bias.
    #[test]
    fn within_sd_of_two_readings_comes_from_their_differences(rows in complete()) {
        let pair: Rows = rows.iter().map(|row| vec![row[0], row[1]]).collect();
        let squares: f64 = pair.iter().map(|row| (row[1].unwrap() - row[0].unwrap()).powi(2)).sum();
        prop_assert!(near(of(&pair).within.sd, Some((squares / 2.0 / pair.len() as f64).sqrt())));
    }

    #[test]
    fn no_design_gives_nan_infinity_or_panic(rows in any_table(), level in 1e-9_f64..1.0) {
        let result = agreement(&OneWithin::from_rows(&rows).unwrap(), Confidence::new(level).unwrap());
        let ends = |ci: Option<Interval>| [ci.map(|ci| ci.lower), ci.map(|ci| ci.upper)];
        let icc = result.icc.iter().flat_map(|icc| [icc.value, icc.f, icc.p, Some(icc.df), Some(icc.error_df)].into_iter().chain(ends(icc.ci)));
        let within = [result.within.sd, result.within.cv, result.within.repeatability, Some(result.within.df), result.smallest_detectable_change];
        let one_way = result.within.one_way.iter().flat_map(|o| [Some(o.n0), o.icc]);
        let limits = result.limits.iter().flat_map(|l| [l.bias, l.sd, l.lower, l.upper].into_iter().chain(ends(l.bias_ci)).chain(ends(l.lower_ci)).chain(ends(l.upper_ci)));
        let all: Vec<f64> = icc.chain(within).chain(one_way).chain(limits).chain(ends(result.within.sd_ci)).flatten().collect();
        prop_assert!(all.iter().all(|x| x.is_finite()), "{result:?}");
        prop_assert!(result.icc.iter().all(|icc| icc.p.is_none_or(|p| (0.0..=1.0).contains(&p))));
        prop_assert!(result.icc.iter().all(|icc| icc.value.is_some() && icc.ci.is_some()) || !result.notes.is_empty());
    }
}
