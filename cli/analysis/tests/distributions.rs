//! The non-central distributions, the studentized range and intervals of effect sizes.

#![allow(clippy::unwrap_used, clippy::panic)]

mod support;

use proptest::prelude::*;
use revisant_analysis::Confidence;
use revisant_analysis::distributions::{
    FisherF, NonCentralF, NonCentralT, Normal, ParameterError, StudentT, StudentizedRange, effect_size_interval,
};
use support::{folder, lines};

/// Tables in 40-digit arithmetic (non-central *F* as Poisson mixture, non-central *t* by quadrature) and, for the
/// studentized range, by a 400 x 300 Gauss-Legendre rule in doubles; each value confirmed by R 4.2.2 or scipy 1.17.1.
#[test]
fn tables_of_two_libraries() {
    for (family, tolerance) in [("ncF", 1e-10), ("nct", 1e-10), ("tukey", 1e-8)] {
        let rows = lines(&folder("distributions").join(format!("{family}.csv")));
        assert!(rows.len() > 190, "{family}");
        agree(family, &rows, tolerance, if family == "tukey" { 1e-12 } else { 0.0 });
    }
}

/// Far tails, both of each, from the same formulas in 50 digits or more (mpmath).
#[test]
fn far_tails_in_many_digits() {
    let rows = lines(&folder("distributions").join("noncentral_far.csv"));
    for (family, tolerance) in [("ncF", 1e-11), ("nct", 1e-11), ("tukey", 1e-11)] {
        let own: Vec<Vec<String>> = rows.iter().filter(|row| row[0] == family).map(|row| row[1..].to_vec()).collect();
        assert!(own.len() > 15, "{family}");
        agree(family, &own, tolerance, 0.0);
    }
}

fn value(family: &str, row: &[String]) -> Option<f64> {
    let number = |i: usize| row[i].parse::<f64>().unwrap();
    let (a, b, c, x) = (number(1), number(2), number(3), number(4));
    match (family, row[0].as_str()) {
        ("ncF", "cdf") => NonCentralF::new(a, b, c).unwrap().cdf(x),
        ("ncF", "sf") => NonCentralF::new(a, b, c).unwrap().sf(x),
        ("nct", "cdf") => NonCentralT::new(a, b).unwrap().cdf(x),
        ("nct", "sf") => NonCentralT::new(a, b).unwrap().sf(x),
        ("tukey", "cdf") => StudentizedRange::new(a as usize, b).unwrap().cdf(x),
        ("tukey", "sf") => StudentizedRange::new(a as usize, b).unwrap().sf(x),
        other => panic!("{other:?} is not known"),
    }
}

/// Compares with the value in each row; within `atol` an absolute difference is forgiven.
fn agree(family: &str, rows: &[Vec<String>], rtol: f64, atol: f64) {
    let off = |row: &Vec<String>| {
        let want: f64 = row[5].parse().unwrap();
        let got = value(family, row);
        let off = got.map_or(f64::INFINITY, |got| (((got - want).abs() - atol) / want).max(0.0));
        (off, format!("{row:?} gave {got:?}"))
    };
    let (worst, which) = rows.iter().map(off).max_by(|a, b| a.0.total_cmp(&b.0)).unwrap();
    assert!(worst <= rtol, "{family}: {which}, off by {worst:e}");
    #[allow(clippy::disallowed_macros)] // the test's own account, shown with --nocapture
    {
        println!("{family}: {} values, worst relative error {worst:.1e}: {which}", rows.len());
    }
}

fn none_or_probability(p: Option<f64>) -> bool {
    p.is_none_or(|p| (0.0..=1.0).contains(&p))
}

fn near(a: f64, b: f64, rtol: f64) -> bool {
    (a - b).abs() <= rtol * a.abs().max(b.abs())
}

proptest! {
    #![proptest_config(ProptestConfig { cases: 24, failure_persistence: None, ..ProptestConfig::default() })]

    #[test]
    fn two_tails_make_one(df in 0.5_f64..80.0, error_df in 0.5_f64..400.0, lambda in 0.0_f64..300.0, x in 0.01_f64..50.0, delta in -9.0_f64..9.0, means in 2_usize..12) {
        let f = NonCentralF::new(df, error_df, lambda).unwrap();
        prop_assert!(near(f.cdf(x).unwrap() + f.sf(x).unwrap(), 1.0, 1e-12));
        let t = NonCentralT::new(error_df, delta).unwrap();
        prop_assert!(near(t.cdf(x).unwrap() + t.sf(x).unwrap(), 1.0, 1e-12));
        let q = StudentizedRange::new(means, error_df).unwrap();
        prop_assert!(near(q.cdf(x).unwrap() + q.sf(x).unwrap(), 1.0, 1e-12));
    }

    #[test]
    fn without_a_noncentrality_they_are_the_central_ones(df in 0.5_f64..80.0, error_df in 0.5_f64..400.0, x in 1e-6_f64..200.0) {
        let (f, t) = (NonCentralF::new(df, error_df, 0.0).unwrap(), NonCentralT::new(error_df, 0.0).unwrap());
        let (central_f, central_t) = (FisherF::new(df, error_df).unwrap(), StudentT::new(error_df).unwrap());
        prop_assert!(near(f.cdf(x).unwrap(), central_f.cdf(x).unwrap(), 1e-12));
        prop_assert!(near(f.sf(x).unwrap(), central_f.sf(x).unwrap(), 1e-12));
        prop_assert!(near(t.sf(x).unwrap(), central_t.sf(x).unwrap(), 1e-11) || central_t.sf(x) < Some(1e-300), "{t:?} {x} {:?}", central_t.sf(x));
    }

    /// A non-central t squared is a non-central F with one degree of freedom above.
    #[test]
    fn t_squared_is_f(df in 1.0_f64..200.0, delta in 0.0_f64..12.0, t in 0.1_f64..30.0) {
        let (own, f) = (NonCentralT::new(df, delta).unwrap(), NonCentralF::new(1.0, df, delta * delta).unwrap());
        let outside = own.sf(t).unwrap() + own.cdf(-t).unwrap();
        prop_assert!(near(outside, f.sf(t * t).unwrap(), 1e-11), "{outside:e} {:e}", f.sf(t * t).unwrap());
    }

    /// The range of two means is √2 |t|; and that of more is larger.
    #[test]
    fn more_means_have_a_wider_range(means in 3_usize..15, df in 1.0_f64..300.0, q in 0.05_f64..20.0) {
        let sf = |means| StudentizedRange::new(means, df).unwrap().sf(q).unwrap();
        let two = StudentT::new(df).unwrap().two_sided(q / 2.0_f64.sqrt()).unwrap();
        prop_assert!(near(sf(2), two, 1e-12));
        prop_assert!(sf(means) <= sf(means + 1) * (1.0 + 1e-13) && sf(means) >= two * (1.0 - 1e-13) && sf(means) <= f64::from(u32::try_from(means * (means - 1) / 2).unwrap()) * two * (1.0 + 1e-12));
    }

    #[test]
    fn distribution_functions_rise(df in 0.5_f64..60.0, error_df in 0.5_f64..300.0, lambda in 0.0_f64..100.0, x in 0.01_f64..30.0, step in 1.001_f64..3.0) {
        let (f, t) = (NonCentralF::new(df, error_df, lambda).unwrap(), NonCentralT::new(error_df, lambda / 10.0).unwrap());
        let q = StudentizedRange::new(5, error_df).unwrap();
        prop_assert!(f.cdf(x).unwrap() <= f.cdf(x * step).unwrap() * (1.0 + 1e-13) && f.sf(x * step).unwrap() <= f.sf(x).unwrap() * (1.0 + 1e-13));
        prop_assert!(t.cdf(x).unwrap() <= t.cdf(x * step).unwrap() * (1.0 + 1e-13));
        prop_assert!(q.cdf(x).unwrap() <= q.cdf(x * step).unwrap() * (1.0 + 1e-13));
        let more = NonCentralF::new(df, error_df, lambda + 1.0).unwrap();
        prop_assert!(more.sf(x) > f.sf(x) || f.sf(x) > Some(1.0 - 1e-12));
    }

    #[test]
    fn quantiles_undo_the_range(means in 2_usize..9, df in 1.0_f64..200.0, exponent in -12.0_f64..-0.01) {
        let range = StudentizedRange::new(means, df).unwrap();
        let p = 10_f64.powf(exponent);
        let (upper, lower) = (range.upper_quantile(p).unwrap(), range.quantile(p).unwrap());
        prop_assert!(near(range.sf(upper).unwrap(), p, 1e-10) && near(range.cdf(lower).unwrap(), p, 1e-10));
    }

    #[test]
    fn noncentralities_undo_tails(df in 0.7_f64..30.0, error_df in 2.0_f64..300.0, lambda in 0.001_f64..500.0, f in 0.05_f64..40.0) {
        let at = NonCentralF::new(df, error_df, lambda).unwrap();
        let (lower, upper) = (at.cdf(f).unwrap(), at.sf(f).unwrap());
        // Where a tail hardly depends on λ any more, or is nearly 1, λ cannot be read off it.
        prop_assume!(lower > 1e-200 && lower < 0.999 && upper > 1e-200 && upper < 0.999 && lambda > 0.01);
        let back = NonCentralF::noncentrality_with_cdf(df, error_df, f, lower).unwrap();
        prop_assert!((back - lambda).abs() < 1e-7 * (1.0 + lambda), "{back}");
        let back = NonCentralF::noncentrality_with_sf(df, error_df, f, upper).unwrap();
        prop_assert!((back - lambda).abs() < 1e-7 * (1.0 + lambda), "{back}");
    }

    #[test]
    fn any_number_is_answered(df in 0.001_f64..1e6, error_df in 0.001_f64..1e6, lambda in prop_oneof![0.0_f64..1e6, Just(0.0), Just(1e-300), Just(1e7)], x in any::<f64>(), delta in -1e3_f64..1e3) {
        let f = NonCentralF::new(df, error_df, lambda).unwrap();
        prop_assert!(none_or_probability(f.cdf(x)) && none_or_probability(f.sf(x)), "{f:?}");
        let t = NonCentralT::new(error_df, delta).unwrap();
        prop_assert!(none_or_probability(t.cdf(x)) && none_or_probability(t.sf(x)), "{t:?}");
        let q = StudentizedRange::new(7, df).unwrap();
        prop_assert!(none_or_probability(q.cdf(x)) && none_or_probability(q.sf(x)), "{q:?}");
        let ends = effect_size_interval(x.abs(), df, error_df, 1.0 + df + error_df, Confidence::default());
        prop_assert!(ends.is_none_or(|ends| 0.0 <= ends.lower && ends.lower <= ends.upper && ends.upper <= 1.0), "{ends:?}");
    }
}

/// Critical values of the studentized range at 0.05 and 0.01 (Harter 1960, *Annals of Mathematical Statistics* 31:1122;
/// from memory).
#[test]
fn tabled_critical_values() {
    for (means, df, upper, want) in [
        (3, 10.0, 0.05, 3.877),
        (4, 20.0, 0.05, 3.958),
        (5, 60.0, 0.01, 4.818),
        (10, 120.0, 0.05, 4.560),
        (3, 2.0, 0.05, 8.331),
    ] {
        let q = StudentizedRange::new(means, df).unwrap().upper_quantile(upper).unwrap();
        assert!((q - want).abs() < 6e-4, "{means} {df}: {q}");
    }
}

/// With one degree of freedom above and known variance, λ's ends are squares of normal limits: (|z| ± 1.96)².
#[test]
fn the_interval_of_an_effect_size_by_hand() {
    let f = 25.0;
    let ends = effect_size_interval(f, 1.0, 1e9, 40.0, Confidence::default()).unwrap();
    let z = Normal.quantile(0.975).unwrap();
    let share = |root: f64| root * root / (root * root + 40.0);
    assert!((ends.lower - share(5.0 - z)).abs() < 1e-6 && (ends.upper - share(5.0 + z)).abs() < 1e-6, "{ends:?}");
    // A small F reaches down to no effect, a very small one has nothing above it either.
    let small = effect_size_interval(1.0, 3.0, 30.0, 34.0, Confidence::default()).unwrap();
    assert!(small.lower == 0.0 && small.upper > 0.1);
    let none = effect_size_interval(0.001, 3.0, 30.0, 34.0, Confidence::default()).unwrap();
    assert_eq!((none.lower, none.upper), (0.0, 0.0));
    assert_eq!(effect_size_interval(f64::NAN, 3.0, 30.0, 34.0, Confidence::default()), None);
    assert_eq!(effect_size_interval(2.0, 3.0, 30.0, 0.0, Confidence::default()), None);
}

#[test]
fn what_is_no_distribution_is_refused() {
    assert!(matches!(NonCentralF::new(1.0, 2.0, -1.0), Err(ParameterError::Noncentrality { .. })));
    assert!(matches!(NonCentralF::new(0.0, 2.0, 1.0), Err(ParameterError::DegreesOfFreedom(_))));
    assert!(matches!(NonCentralT::new(3.0, f64::NAN), Err(ParameterError::Noncentrality { .. })));
    assert_eq!(StudentizedRange::new(1, 3.0), Err(ParameterError::Means(1)));
}
