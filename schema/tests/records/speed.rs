//! How fast rows are filed and verified. Run by hand, in release:
//! `cargo test --release -p revisant-schema --test records speed -- --ignored --nocapture`

use std::sync::Arc;
use std::time::Instant;

use revisant_schema::records::{ActKind, Records};
use revisant_schema::world::RealWorld;

use super::study::{Study, capture, doer, plan, reading};

const ROWS: i64 = 1_000_000;
const BATCH: i64 = 10_000;

/// Rows that differ as an instrument's do: 200 subjects, 10 days, 4 measures, 2 conditions, some hundred replicates.
fn file_all(records: &mut Records) {
    let kept = records.keep_small(b"large".to_vec()).unwrap();
    records.begin().unwrap();
    let number = records.next_capture().unwrap();
    let mut filing = records.new_filing(Some(number)).unwrap();
    let subjects: Vec<String> = (0..200).map(|at| format!("S-{at:03}")).collect();
    for at in 0..ROWS {
        let text = format!("{}.{:02}", 20 + at % 37, at % 100);
        let written = format!("2026-03-{:02} 09:{:02}:{:02}", 1 + at % 10, at / 60 % 60, at % 60);
        let mut new = reading(&subjects[(at / 5000) as usize], (at % 60) as u32, text.parse().unwrap());
        new.measure = ["grip", "reach", "sway", "balance"][(at % 4) as usize];
        new.condition = ["hand=left", "hand=right"][(at / 4 % 2) as usize];
        new.day += at % 10;
        new.line = Some(at + 2);
        new.bytes = Some((at * 40, at * 40 + 39));
        new.text = &text;
        new.written = Some(&written);
        new.identity = Some(at.wrapping_mul(0x5851_f42d_4c95_7f2d));
        records.add_reading(&mut filing, &new).unwrap();
        if at % BATCH == BATCH - 1 {
            records.stage(&mut filing).unwrap();
        }
    }
    let published = records.act_within(ActKind::File, &doer(), |act| {
        capture(act, &kept, "large.csv")?;
        act.publish(filing)
    });
    published.unwrap();
    records.commit().unwrap();
}

#[test]
#[ignore = "measures; run it in release"]
fn speed_of_filing_and_verifying() {
    let study = Study::new();
    let mut records = Records::open_or_create(study.path(), Arc::new(RealWorld)).unwrap();
    plan(&mut records);
    let start = Instant::now();
    file_all(&mut records);
    let took = start.elapsed().as_secs_f64();
    println!("filed {ROWS} readings in {took:.1} s: {:.0} a second", ROWS as f64 / took);
    let start = Instant::now();
    let verified = records.verify(&mut |_, _| {}).unwrap();
    println!("verified them in {:.1} s", start.elapsed().as_secs_f64());
    assert_eq!(verified.faults, []);
    assert_eq!(verified.readings, ROWS as u64);
}
