//! How long the largest design in view takes; shown, not judged, because machines differ.
//!
//! `cargo test --release -p revisant-analysis --test speed -- --ignored --nocapture`

#![allow(clippy::unwrap_used, clippy::disallowed_methods, clippy::disallowed_macros)]

use std::hint::black_box;
use std::time::Instant;

use revisant_analysis::Settings;
use revisant_analysis::anova::{repeated_measures, within_subject_band};
use revisant_analysis::contrasts::{Family, Multiplicity};
use revisant_analysis::design::OneWithin;

#[test]
#[ignore = "a measurement, not a test"]
fn ten_thousand_subjects_at_ten_visits() {
    let mut state = 1_u64;
    let mut next = || {
        state = state.wrapping_mul(6_364_136_223_846_793_005).wrapping_add(1_442_695_040_888_963_407);
        (state >> 40) as f64 / 1000.0
    };
    let rows: Vec<Vec<Option<f64>>> = (0..10_000).map(|_| (0..10).map(|_| Some(next())).collect()).collect();
    time("the design", || OneWithin::from_rows(&rows).unwrap());
    let design =
        OneWithin::from_rows(&rows).unwrap().with_positions((0..10).map(|j| f64::from(j * j)).collect()).unwrap();
    time("the analysis of variance", || repeated_measures(&design, &Settings::default()));
    time("the same with all contrasts", || {
        let contrasts = vec![Family::Pairwise, Family::EachVsFirst, Family::Polynomial];
        repeated_measures(&design, &Settings { contrasts, multiplicity: Multiplicity::Holm, ..Settings::default() })
    });
    time("the band", || within_subject_band(&design, Settings::default().confidence));
}

fn time<T>(what: &str, work: impl Fn() -> T) {
    let mut times: Vec<f64> = (0..21)
        .map(|_| {
            let start = Instant::now();
            black_box(work());
            start.elapsed().as_secs_f64() * 1e3
        })
        .collect();
    times.sort_by(f64::total_cmp);
    println!("{what}: {:.2} ms (median of 21; fastest {:.2})", times[10], times[0]);
}
