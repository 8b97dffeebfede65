//! How long the largest design in view takes; shown, not judged, because machines differ.
//!
//! `cargo test --release -p revisant-analysis --test speed -- --ignored --nocapture`

#![allow(clippy::unwrap_used, clippy::disallowed_methods, clippy::disallowed_macros)]

use std::hint::black_box;
use std::time::Instant;

use revisant_analysis::Settings;
use revisant_analysis::anova::{factorial, repeated_measures, within_subject_band};
use revisant_analysis::checks::checks;
use revisant_analysis::contrasts::{Family, Multiplicity};
use revisant_analysis::design::{Design, Factor, OneWithin};

fn readings() -> impl FnMut() -> f64 {
    let mut state = 1_u64;
    move || {
        state = state.wrapping_mul(6_364_136_223_846_793_005).wrapping_add(1_442_695_040_888_963_407);
        (state >> 40) as f64 / 1000.0
    }
}

#[test]
#[ignore = "a measurement, not a test"]
fn a_thousand_subjects_of_two_groups_at_four_visits_of_three_conditions() {
    let mut next = readings();
    let rows: Vec<([usize; 1], Vec<Option<f64>>)> =
        (0..1000).map(|subject| ([subject % 2], (0..12).map(|_| Some(next())).collect())).collect();
    let made = || {
        let visits = Factor::at((0..4).map(|j| f64::from(j * j)).collect()).unwrap();
        Design::new(vec![visits, Factor::of(3).unwrap()], vec![2], &rows).unwrap()
    };
    time("the design", made);
    let design = made();
    time("the analysis of variance", || factorial(&design, &Settings::default()));
    time("the same with all contrasts", || {
        let families = [Family::Pairwise, Family::EachVsFirst, Family::Polynomial, Family::Simple];
        let contrasts = families.into_iter().chain([Family::Groups { at: Some(0) }]).collect();
        factorial(&design, &Settings { contrasts, multiplicity: Multiplicity::Holm, ..Settings::default() })
    });
    time("the checks", || checks(&design, &Settings::default()));
}

#[test]
#[ignore = "a measurement, not a test"]
fn ten_thousand_subjects_at_ten_visits() {
    let mut next = readings();
    let rows: Vec<Vec<Option<f64>>> = (0..10_000).map(|_| (0..10).map(|_| Some(next())).collect()).collect();
    time("the design", || OneWithin::from_rows(&rows).unwrap());
    let design =
        OneWithin::from_rows(&rows).unwrap().with_positions((0..10).map(|j| f64::from(j * j)).collect()).unwrap();
    time("the analysis of variance", || repeated_measures(&design, &Settings::default()));
    time("the same with all contrasts", || {
        let contrasts = vec![Family::Pairwise, Family::EachVsFirst, Family::Polynomial];
        repeated_measures(&design, &Settings { contrasts, multiplicity: Multiplicity::Holm, ..Settings::default() })
    });
    let several = Design::from(&design);
    time("the checks", || checks(&several, &Settings::default()));
    time("the band", || within_subject_band(&design, Settings::default().confidence));
}

fn time<T>(what: &str, work: impl Fn() -> T) {
    const TIMES: u32 = 21;
    let on_processor = processor();
    let mut times: Vec<f64> = (0..TIMES)
        .map(|_| {
            let start = Instant::now();
            black_box(work());
            start.elapsed().as_secs_f64() * 1e3
        })
        .collect();
    let mean = (processor() - on_processor) / f64::from(TIMES);
    times.sort_by(f64::total_cmp);
    println!("{what}: {:.2} ms (median of {TIMES}; fastest {:.2}; on the processor {mean:.2})", times[10], times[0]);
}

/// Milliseconds that this thread has had the processor, which another program's load does not lengthen; 0 where the system
/// does not say.
fn processor() -> f64 {
    let said = std::fs::read_to_string("/proc/thread-self/schedstat").unwrap_or_default();
    said.split_whitespace().next().and_then(|ns| ns.parse::<f64>().ok()).unwrap_or(0.0) / 1e6
}
