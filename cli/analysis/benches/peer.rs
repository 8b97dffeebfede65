//! The analysis of variance beside a Python peer, computing alone, on the same readings.
//!
//! `cargo bench -p revisant-analysis --bench peer`; the interpreter is `PYTHON`, or else `python3`. The peer is pingouin
//! (`pip install pingouin`); where the interpreter has none, only our own times are shown, with how to get it.

#![allow(
    clippy::unwrap_used,
    clippy::disallowed_methods,
    clippy::disallowed_macros,
    reason = "a measurement has to read the clock, write the readings for the peer, and say what it found"
)]

use std::fmt::Write as _;
use std::hint::black_box;
use std::path::{Path, PathBuf};
use std::process::Command;
use std::time::Instant;

use revisant_analysis::Settings;
use revisant_analysis::anova::{Term, factorial};
use revisant_analysis::checks::checks;
use revisant_analysis::design::{Design, Factor, FactorId};

/// One design, and how the peer is to analyse it.
struct Bench {
    name: &'static str,
    /// What the peer computes, as an argument of `peer.py`.
    peer: &'static str,
    within: Vec<usize>,
    groups: usize,
    subjects: usize,
}

fn main() {
    let one = |name, peer, within: &[usize], groups, subjects| Bench {
        name,
        peer,
        within: within.to_vec(),
        groups,
        subjects,
    };
    let benches = [
        one("10,000 subjects x 10 visits", "one", &[10], 1, 10_000),
        one("1,000 subjects x 10 visits", "one", &[10], 1, 1_000),
        one("1,000 subjects x 4 x 3", "two", &[4, 3], 1, 1_000),
        one("1,000 subjects x 4 x 2 groups", "mixed", &[4], 2, 1_000),
        one("1,000 subjects x 4 x 3 x 2 groups (the peer: means over the 3)", "mixed", &[4, 3], 2, 1_000),
    ];
    benches.iter().for_each(run);
}

fn run(bench: &Bench) {
    let rows = rows(bench);
    let factors = || bench.within.iter().map(|&levels| Factor::of(levels).unwrap()).collect();
    let between = if bench.groups > 1 { vec![bench.groups] } else { vec![] };
    let design = Design::new(factors(), between, &rows).unwrap();
    let settings = Settings::default();
    let own = fastest(51, || factorial(&design, &settings));
    let f = factorial(&design, &settings).effect(Term::main(FactorId::Within(0))).unwrap().f.unwrap();
    println!("{}: {:.3} ms, F of the first within factor {f:.9}", bench.name, own * 1e3);
    println!("  with all checks besides: {:.3} ms", fastest(11, || checks(&design, &settings)) * 1e3);
    match peer(bench, &rows) {
        Ok((seconds, theirs)) => {
            println!("  peer: {:.1} ms, F {theirs:.9}: {:.0} times as long", seconds * 1e3, seconds / own);
            assert!((f - theirs).abs() <= 1e-6 * f, "the two do not analyse the same readings");
        }
        Err(why) => println!("  no peer: {why}"),
    }
}

/// Readings with an effect, subjects that differ, and noise; the same on every machine.
fn rows(bench: &Bench) -> Vec<(Vec<usize>, Vec<Option<f64>>)> {
    let mut state = 1_u64;
    let mut next = || {
        state = state.wrapping_mul(6_364_136_223_846_793_005).wrapping_add(1_442_695_040_888_963_407);
        (state >> 40) as f64 / (1_u64 << 24) as f64
    };
    let width: usize = bench.within.iter().product();
    (0..bench.subjects)
        .map(|subject| {
            let own = 10.0 * next();
            let cells = (0..width).map(|cell| Some(own + 0.01 * cell as f64 + next())).collect();
            (if bench.groups > 1 { vec![subject % bench.groups] } else { vec![] }, cells)
        })
        .collect()
}

/// The fastest of so many, in seconds: on a busy machine the others measure what else is running, ours and the peer's alike.
fn fastest<T>(times: usize, work: impl Fn() -> T) -> f64 {
    let once = |_| {
        let start = Instant::now();
        black_box(work());
        start.elapsed().as_secs_f64()
    };
    (0..times).map(once).fold(f64::INFINITY, f64::min)
}

/// Seconds and *F* of the peer.
fn peer(bench: &Bench, rows: &[(Vec<usize>, Vec<Option<f64>>)]) -> Result<(f64, f64), String> {
    let readings = written(bench, rows);
    let python = std::env::var("PYTHON").unwrap_or_else(|_| "python3".to_owned());
    let script = Path::new(env!("CARGO_MANIFEST_DIR")).join("benches/peer.py");
    let output = Command::new(&python).arg(script).arg(bench.peer).arg(&readings).output();
    let output = output.map_err(|error| format!("{python} does not run ({error}); set PYTHON to an interpreter"))?;
    let _ = std::fs::remove_file(readings);
    if !output.status.success() {
        let why = String::from_utf8_lossy(&output.stderr).lines().last().unwrap_or_default().to_owned();
        return Err(format!("{python}: {why}; `{python} -m pip install pingouin` gets it"));
    }
    let text = String::from_utf8_lossy(&output.stdout).into_owned();
    let mut numbers = text.split_whitespace().map(|number| number.parse::<f64>());
    match (numbers.next(), numbers.next()) {
        (Some(Ok(seconds)), Some(Ok(f))) => Ok((seconds, f)),
        _ => Err(format!("{python} answered {text:?}")),
    }
}

/// The readings in long layout.
fn written(bench: &Bench, rows: &[(Vec<usize>, Vec<Option<f64>>)]) -> PathBuf {
    let mut text = String::from("subject,group,a,b,value\n");
    let inner = bench.within.get(1).copied().unwrap_or(1);
    for (subject, (groups, cells)) in rows.iter().enumerate() {
        let group = groups.first().copied().unwrap_or(0);
        for (cell, value) in cells.iter().enumerate() {
            writeln!(text, "{subject},{group},{},{},{}", cell / inner, cell % inner, value.unwrap()).unwrap();
        }
    }
    let path = std::env::temp_dir().join(format!("peer-{}-{}.csv", std::process::id(), bench.subjects));
    std::fs::write(&path, text).unwrap();
    path
}
