//! Friedman's test and signed-rank pairs.

#![allow(clippy::unwrap_used, clippy::panic)]

mod support;

use proptest::prelude::*;
use revisant_analysis::contrasts::{ContrastKind, Family, Multiplicity};
use revisant_analysis::design::OneWithin;
use revisant_analysis::ranks::{Friedman, Grain, MOST_EXACT, RankAnalysis, SignedRank, friedman};
use revisant_analysis::{Confidence, Note, Settings};
use support::{Case, cases, settle};

fn pairwise() -> Settings {
    Settings { contrasts: vec![Family::Pairwise], multiplicity: Multiplicity::Holm, ..Settings::default() }
}

#[test]
fn reference_cases() {
    let mut cases = cases("ranks");
    for case in &mut cases {
        check(case, Grain::decimals(decimals(case)));
        // Ties are also found without knowing the decimals.
        check(case, None);
    }
    settle(&cases, 270);
}

/// The most decimals with which a reading of the case stands in its file.
fn decimals(case: &Case) -> u32 {
    let places = |y: &f64| y.to_string().split_once('.').map_or(0, |(_, decimals)| decimals.len() as u32);
    case.rows.iter().flatten().flatten().map(places).max().unwrap()
}

fn check(case: &mut Case, grain: Option<Grain>) {
    let result = friedman(&case.design(), grain, &pairwise());
    assert_eq!(result.used.len() as u64, case.doc["config"]["n_complete"].as_u64().unwrap());
    check_effect(case, &result.effect.unwrap());
    result.contrasts.iter().for_each(|pair| check_pair(case, pair));
}

fn check_effect(case: &mut Case, effect: &Friedman) {
    let sums: Vec<f64> = case.doc["expected"]["friedman.rank_sums"]["v"]
        .as_array()
        .unwrap()
        .iter()
        .map(|v| v.as_f64().unwrap())
        .collect();
    assert_eq!(effect.rank_sums, sums, "{}", case.name);
    let f = effect.iman_davenport.unwrap();
    for (key, got) in [
        ("friedman.chi2", effect.chi2),
        ("friedman.df", Some(effect.df)),
        ("friedman.p", effect.p),
        ("kendall.W", effect.kendall_w),
        ("iman_davenport.F", f.f),
        ("iman_davenport.df1", Some(f.df)),
        ("iman_davenport.df2", Some(f.error_df)),
        ("iman_davenport.p", f.p),
    ] {
        assert!(case.has(key));
        case.check(key, got);
    }
}

fn check_pair(case: &mut Case, pair: &SignedRank) {
    let ContrastKind::Pairwise { level, against } = pair.kind else { panic!("{:?} is no pair", pair.kind) };
    let prefix = format!("wilcoxon.{}-{}.", case.levels[level], case.levels[against]);
    assert!(case.has(&format!("{prefix}n_pairs")));
    let p = if pair.exact.unwrap() { "p_exact_conditional" } else { "p_normal_cc" };
    for (short, got) in [
        ("n_pairs", Some(pair.n as f64)),
        ("n_nonzero", Some(pair.nonzero as f64)),
        ("W_plus", pair.positive_rank_sum),
        (p, pair.p),
        ("hodges_lehmann_nonzero", pair.estimate),
        ("hl_ci_lo", pair.ci.map(|ci| ci.lower)),
        ("hl_ci_hi", pair.ci.map(|ci| ci.upper)),
    ] {
        case.check(&format!("{prefix}{short}"), got);
    }
}

/// Integers made by a formula; p by scipy 1.17.1 (wilcoxon, normal with both corrections), the interval by sorting all
/// Walsh averages and counting in whole numbers.
#[test]
fn above_fifty_differences() {
    let row = |i: i32| {
        let x = (37 * i * i + 11 * i) % 101;
        let y = (53 * i * i + 29 * i + 7) % 103 + (i % 5) * 2;
        [Some(f64::from(x)), Some(f64::from(y))]
    };
    for (n, nonzero, sum, p, lower, upper, confidence) in [
        (60, 59, 1137.5, 0.057_126_642_311_875_676, 0.0, 22.0, 0.950_351_965_768_772_3),
        (160, 159, 8219.5, 0.001_388_292_302_358_060_2, 4.5, 17.5, 0.950_139_942_435_903_2),
    ] {
        let rows: Vec<_> = (0..n).map(row).collect();
        let design = OneWithin::from_rows(&rows).unwrap();
        let pair = friedman(&design, Grain::decimals(0), &pairwise()).contrasts[0];
        assert_eq!((pair.n, pair.nonzero), (rows.len(), nonzero));
        assert_eq!((pair.positive_rank_sum, pair.exact, pair.estimate), (Some(sum), Some(false), Some(11.0)));
        assert!((pair.p.unwrap() / p - 1.0).abs() < 1e-11, "{pair:?}");
        assert_eq!((pair.ci.unwrap().lower, pair.ci.unwrap().upper), (lower, upper));
        assert!((pair.ci_confidence.unwrap() - confidence).abs() < 1e-13);
    }
}

/// 5.55 − 5.50 and 5.60 − 5.55 are equal on paper; among doubles they are not.
#[test]
fn ties_are_those_of_the_decimals() {
    let case = cases("ranks").into_iter().find(|case| case.name == "rounding_times").unwrap();
    let traps: Vec<(f64, f64)> = case.doc["traps"]
        .as_object()
        .unwrap()
        .values()
        .map(|trap| (trap["v"].as_f64().unwrap(), trap["wanted"].as_f64().unwrap()))
        .collect();
    for grain in [Grain::decimals(2), Grain::decimals(3), Grain::shared(2, 6), None] {
        let result = friedman(&case.design(), grain, &pairwise());
        let sums: Vec<f64> = result.contrasts.iter().map(|pair| pair.positive_rank_sum.unwrap()).collect();
        assert!(traps.iter().all(|(wrong, wanted)| sums.contains(wanted) && !sums.contains(wrong)), "{sums:?}");
        assert_eq!(result.notes, []);
    }
    // Told fewer decimals than there are, nothing is rounded away: ties are looked for within rounding.
    let result = friedman(&case.design(), Grain::decimals(1), &pairwise());
    assert_eq!(result.notes, [Note::OffGrain]);
    assert_eq!(result.contrasts, friedman(&case.design(), None, &pairwise()).contrasts);
}

#[test]
fn means_of_replicates_are_shares_of_a_step() {
    // 0.1 and 0.2 + 0.2 over 3 subjects: differences of 1/30 by two ways that doubles tell apart.
    let third = |sum: f64| Some(sum / 3.0);
    let rows = [[third(0.3), third(0.4)], [third(0.9), third(1.0)], [third(2.2), third(2.4)]];
    let pair = friedman(&OneWithin::from_rows(&rows).unwrap(), Grain::shared(1, 3), &pairwise()).contrasts[0];
    assert_eq!((pair.positive_rank_sum, pair.p), (Some(6.0), Some(0.25)));
    assert!((pair.estimate.unwrap() - 1.25 / 30.0).abs() < 1e-16);
    assert_eq!((Grain::decimals(16), Grain::shared(2, 0)), (None, None));
}

#[test]
fn degenerate_designs() {
    let analyse = |rows: &[Vec<f64>]| {
        let rows: Vec<Vec<Option<f64>>> = rows.iter().map(|row| row.iter().map(|&y| Some(y)).collect()).collect();
        friedman(&OneWithin::from_rows(&rows).unwrap(), Grain::decimals(1), &pairwise())
    };
    let pair = ContrastKind::Pairwise { level: 1, against: 0 };
    let equal = analyse(&[vec![1.5, 1.5], vec![2.0, 2.0]]);
    assert_eq!(equal.notes, [Note::AllTied, Note::NoDifference { contrast: pair }]);
    assert_eq!((equal.effect.as_ref().unwrap().chi2, equal.effect.unwrap().kendall_w), (None, None));
    let zero = equal.contrasts[0];
    assert_eq!((zero.n, zero.nonzero, zero.positive_rank_sum), (2, 0, Some(0.0)));
    assert_eq!((zero.p, zero.exact, zero.estimate, zero.ci, zero.p_adjusted), (None, None, None, None, None));

    let one = analyse(&[vec![1.0, 2.0, 4.0]]);
    assert_eq!((one.effect.as_ref().unwrap().chi2, &one.notes[0]), (None, &Note::OneSubject));
    assert_eq!((one.contrasts[0].p, one.contrasts[0].estimate), (Some(1.0), Some(1.0)));
    assert_eq!(one.contrasts[0].ci_confidence, Some(0.0));
    assert_eq!(one.notes[1], Note::ConfidenceNotReached { contrast: pair, differences: 1 });

    let single = analyse(&[vec![1.0], vec![2.0]]);
    assert_eq!((single.effect.unwrap().chi2, single.contrasts.len(), single.notes), (None, 0, vec![Note::OneLevel]));

    let agreed = analyse(&[vec![1.0, 2.0, 4.0], vec![0.0, 5.0, 6.0], vec![1.0, 1.5, 7.0]]).effect.unwrap();
    assert_eq!((agreed.chi2, agreed.kendall_w), (Some(6.0), Some(1.0)));
    assert_eq!((agreed.iman_davenport.unwrap().f, agreed.iman_davenport.unwrap().p), (None, Some(0.0)));

    let gaps = [[Some(1.0), None], [None, Some(2.0)]];
    let settings = Settings { contrasts: vec![Family::EachVsFirst, Family::Polynomial], ..Settings::default() };
    let none = friedman(&OneWithin::from_rows(&gaps).unwrap(), None, &settings);
    assert_eq!((none.effect, none.used.len(), none.incomplete), (None, 0, vec![0, 1]));
    let first = ContrastKind::EachVsFirst { level: 1, against: 0 };
    let too_few = Note::TooFewForContrast { contrast: first, subjects: 0 };
    assert_eq!(none.notes, [Note::NoCompleteSubject, too_few, Note::OnlyPairsByRanks]);
}

/// Tables of tenths with gaps, of any shape.
fn tables() -> impl Strategy<Value = Vec<Vec<Option<f64>>>> {
    let value = prop_oneof![1 => Just(None), 9 => (-30_i32..30).prop_map(|x| Some(f64::from(x) / 10.0))];
    (1_usize..6, 1_usize..12)
        .prop_flat_map(move |(k, n)| prop::collection::vec(prop::collection::vec(value.clone(), k), n))
}

/// Pairs of tenths, so that there are ties and zeros, up to this many.
fn pairs(most: usize) -> impl Strategy<Value = Vec<Vec<Option<f64>>>> {
    let tenth = || (-20_i32..20).prop_map(|x| Some(f64::from(x) / 10.0));
    prop::collection::vec((tenth(), tenth()).prop_map(|(x, y)| vec![x, y]), 1..most)
}

fn analyse(rows: &[Vec<Option<f64>>], grain: Option<Grain>) -> RankAnalysis {
    friedman(&OneWithin::from_rows(rows).unwrap(), grain, &pairwise())
}

/// The exact p by counting the sums of all patterns of signs one by one.
fn by_enumeration(rows: &[Vec<Option<f64>>]) -> Option<(f64, f64)> {
    let tenths = |y: Option<f64>| (y.unwrap() * 10.0).round() as i64;
    let mut d: Vec<i64> = rows.iter().map(|row| tenths(row[1]) - tenths(row[0])).collect();
    d.retain(|d| *d != 0);
    let rank = |x: &i64| {
        let (less, same) =
            (d.iter().filter(|y| y.abs() < x.abs()).count(), d.iter().filter(|y| y.abs() == x.abs()).count());
        less as f64 + (same as f64 + 1.0) / 2.0
    };
    let ranks: Vec<f64> = d.iter().map(rank).collect();
    let sum: f64 = ranks.iter().zip(&d).filter(|(_, d)| **d > 0).map(|(rank, _)| rank).sum();
    let all = 1_u32 << d.len();
    let sums: Vec<f64> = (0..all)
        .map(|signs| ranks.iter().enumerate().filter(|(i, _)| signs >> i & 1 == 1).map(|(_, rank)| rank).sum())
        .collect();
    let share = |keep: &dyn Fn(f64) -> bool| sums.iter().filter(|s| keep(**s)).count() as f64 / f64::from(all);
    let p = (2.0 * share(&|s| s <= sum).min(share(&|s| s >= sum))).min(1.0);
    (!d.is_empty()).then_some((sum, p))
}

fn sorted_walsh(rows: &[Vec<Option<f64>>]) -> Vec<f64> {
    let d: Vec<f64> =
        rows.iter().map(|row| ((row[1].unwrap() - row[0].unwrap()) * 10.0).round()).filter(|d| *d != 0.0).collect();
    let mut walsh: Vec<f64> =
        (0..d.len()).flat_map(|i| (i..d.len()).map(move |j| (i, j))).map(|(i, j)| (d[i] + d[j]) / 20.0).collect();
    walsh.sort_by(f64::total_cmp);
    walsh
}

proptest! {
    #![proptest_config(ProptestConfig { cases: 200, failure_persistence: None, ..ProptestConfig::default() })]

    #[test]
    fn exact_p_is_that_of_enumeration(rows in pairs(13)) {
        let pair = analyse(&rows, Grain::decimals(1)).contrasts[0];
        prop_assert_eq!(pair.positive_rank_sum.zip(pair.p), by_enumeration(&rows));
        prop_assert_eq!(pair.exact.is_some(), pair.nonzero > 0);
    }

    #[test]
    fn the_estimate_and_the_interval_are_walsh_averages(rows in pairs(70)) {
        let pair = analyse(&rows, Grain::decimals(1)).contrasts[0];
        let walsh = sorted_walsh(&rows);
        prop_assume!(!walsh.is_empty());
        let middle = (walsh[(walsh.len() - 1) / 2] + walsh[walsh.len() / 2]) / 2.0;
        prop_assert!((pair.estimate.unwrap() - middle).abs() < 1e-14);
        let ci = pair.ci.unwrap();
        let at = |x: f64| walsh.iter().filter(|w| **w < x - 1e-12).count();
        prop_assert!(walsh.iter().any(|w| (w - ci.lower).abs() < 1e-14) && at(ci.lower) <= at(ci.upper));
        prop_assert!(pair.ci_confidence.unwrap() >= 0.95 || pair.nonzero < 6);
    }

    #[test]
    fn negated_readings_mirror_the_pair(rows in pairs(70), grained in any::<bool>()) {
        let grain = grained.then(|| Grain::decimals(1).unwrap());
        let pair = analyse(&rows, grain).contrasts[0];
        let negated: Vec<Vec<Option<f64>>> = rows.iter().map(|row| row.iter().map(|y| y.map(|y| -y)).collect()).collect();
        let mirror = analyse(&negated, grain).contrasts[0];
        let all = (pair.nonzero * (pair.nonzero + 1) / 2) as f64;
        prop_assert_eq!(pair.positive_rank_sum.map(|w| all - w), mirror.positive_rank_sum);
        prop_assert_eq!((pair.p, pair.n, pair.exact), (mirror.p, mirror.n, mirror.exact));
        prop_assert_eq!(pair.estimate.map(|e| -e + 0.0), mirror.estimate.map(|e| e + 0.0));
        prop_assert_eq!(pair.ci.map(|ci| (-ci.upper + 0.0, -ci.lower + 0.0)), mirror.ci.map(|ci| (ci.lower + 0.0, ci.upper + 0.0)));
    }

    #[test]
    fn the_order_of_subjects_and_an_offset_change_nothing(rows in tables(), turn in 0_usize..12, offset in -1_000_000_i32..1_000_000) {
        let result = analyse(&rows, Grain::decimals(1));
        let mut moved: Vec<Vec<Option<f64>>> = rows.iter().map(|row| row.iter().map(|y| y.map(|y| ((y + f64::from(offset)) * 10.0).round() / 10.0)).collect()).collect();
        let by = turn % moved.len();
        moved.rotate_left(by);
        let moved = analyse(&moved, Grain::decimals(1));
        prop_assert_eq!(&result.effect, &moved.effect);
        prop_assert_eq!(&result.contrasts, &moved.contrasts);
    }

    /// Without ties and zeros any rising function of the readings leaves Friedman's test as it is.
    #[test]
    fn friedman_sees_only_the_order(rows in tables()) {
        let risen: Vec<Vec<Option<f64>>> = rows.iter().map(|row| row.iter().map(|y| y.map(f64::exp)).collect()).collect();
        prop_assert_eq!(analyse(&rows, None).effect, analyse(&risen, None).effect);
    }

    #[test]
    fn no_design_gives_nan_or_panic(rows in tables(), scale in prop::sample::select(vec![1.0, 1e-300, 1e98, 1e15, 0.1]), level in 1e-9_f64..1.0, grained in any::<bool>()) {
        let rows: Vec<Vec<Option<f64>>> = rows.iter().map(|row| row.iter().map(|y| y.map(|y| y * scale)).collect()).collect();
        let settings = Settings { confidence: Confidence::new(level).unwrap(), ..pairwise() };
        let result = friedman(&OneWithin::from_rows(&rows).unwrap(), grained.then(|| Grain::decimals(1).unwrap()), &settings);
        let pairs = result.contrasts.iter().flat_map(|c| [c.p, c.p_adjusted, c.estimate, c.ci_confidence, c.ci.map(|ci| ci.lower), c.ci.map(|ci| ci.upper)]);
        let effect = result.effect.iter().flat_map(|e| [e.chi2, e.p, e.kendall_w, e.iman_davenport.and_then(|f| f.p)]);
        prop_assert!(pairs.chain(effect).flatten().all(f64::is_finite), "{result:?}");
        prop_assert!(result.contrasts.iter().all(|c| c.p.is_none_or(|p| (0.0..=1.0).contains(&p)) && c.ci.is_none_or(|ci| ci.lower <= ci.upper)));
        prop_assert!(result.effect.as_ref().is_some_and(|e| e.chi2.is_some()) || !result.notes.is_empty());
        prop_assert!(result.contrasts.iter().all(|c| c.nonzero > MOST_EXACT || c.exact != Some(false)));
    }
}

/// `cargo test --release -p revisant-analysis --test ranks -- --ignored --nocapture`
#[test]
#[ignore = "a measurement, not a test"]
#[allow(clippy::disallowed_methods, clippy::disallowed_macros)]
fn two_thousand_pairs() {
    let rows: Vec<Vec<Option<f64>>> = (0..2000_i32)
        .map(|i| vec![Some(f64::from(i * i % 1009) / 10.0), Some(f64::from(i * 7 % 1013) / 10.0)])
        .collect();
    let design = OneWithin::from_rows(&rows).unwrap();
    let start = std::time::Instant::now();
    let pair = friedman(&design, Grain::decimals(1), &pairwise()).contrasts[0];
    println!("{:.2} ms: {pair:?}", start.elapsed().as_secs_f64() * 1e3);
}
