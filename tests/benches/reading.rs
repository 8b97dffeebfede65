//! One export of 1,000,000 rows read and placed by the plan and the roster, without records, against the bare `csv`
//! crate that reads the same bytes and turns the time into a moment and two columns into numbers, alternately in the
//! same run. Wanted: at most 2.5 times the time; where the kernel says it, that is time on the processor, since both do
//! nothing but compute and other programs on the machine then change it less.
//!
//! `cargo bench -p revisant-tests --bench reading`; a number behind `--` is the number of rounds.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic, reason = "a bench that cannot go on stops")]

use std::fmt::Write as _;
use std::hint::black_box;
use std::process::ExitCode;
use std::time::Instant;

use chrono::{DateTime, Days, NaiveDate, NaiveDateTime, TimeDelta, TimeZone, Utc};
use revisant_daemon::intake::place::resolve::{Decided, Resolver, RowOutcome, ValueOutcome, Whereabouts};
use revisant_daemon::intake::read::{self, Row};
use revisant_schema::plan::{self, Plan, PlanFiles};
use revisant_schema::roster::Roster;
use revisant_tests::bench::{busy, machine, median};

const SUBJECTS: u32 = 500;
const VISITS: u32 = 20;
const TRIALS: u32 = 100;
const ROWS: usize = (SUBJECTS * VISITS * TRIALS) as usize;
const ROUNDS: usize = 7;
const TIME: &str = "%d/%m/%Y %H:%M:%S";

const PLAN: &str = r#"
[study]
code = "READ"
title = "A million pairs of squeezes"
time_zone = "Europe/London"

[subject]
pattern = 'S-\d{3}'
normalise = ["trim", "upper", "dash"]
anchor = "enrolment"

[[measure]]
code = "grip"
unit = "kg"
plausible = [0, 95]
replicates = 100
conditions = { hand = ["left", "right"] }

[[instrument]]
code = "grip"
folder = "exports/grip"

[instrument.reader]
format = "delimited"
delimiter = ";"
subject = { column = "Subject" }
taken_at = { column = "Taken", format = "%d/%m/%Y %H:%M:%S" }
visit = { column = "Visit" }
replicate = { column = "Trial" }
operator = { column = "Tester" }
missing = ["", "NA"]
ignore = [{ column = "Tester", equals = "QC" }]
stop_at = '^Total'

[[instrument.reader.value]]
measure = "grip"
column = "Left"
condition = { hand = "left" }
[[instrument.reader.value]]
measure = "grip"
column = "Right"
condition = { hand = "right" }
"#;

/// What a reading of the whole export comes to, so that both sides can be seen to have read the same.
#[derive(Debug, Clone, Copy, PartialEq)]
struct Sum {
    rows: usize,
    numbers: f64,
    seconds: i64,
}

fn main() -> ExitCode {
    let (plan, roster, export) = (plan(), roster(), export().into_bytes());
    let asked = std::env::args().skip(1).find_map(|word| word.parse().ok());
    println!("{}; {ROWS} rows, {:.1} MB", machine(), export.len() as f64 / 1e6);
    let (mut ours, mut bare, mut ratios) = (vec![], vec![], vec![]);
    for round in 1..=asked.unwrap_or(ROUNDS) {
        let (peer, peer_sum) = timed(|| read_bare(&export, plan.study.time_zone));
        let (own, own_sum) = timed(|| read_and_place(&plan, &roster, &export));
        assert_eq!(own_sum, peer_sum);
        println!(
            "round {round}: read and placed {own:.3} s ({:.0} ns a row), bare csv {peer:.3} s ({:.0} ns a row), ratio {:.2}",
            own * 1e9 / ROWS as f64,
            peer * 1e9 / ROWS as f64,
            own / peer
        );
        ours.push(own);
        bare.push(peer);
        ratios.push(own / peer);
    }
    let least = |times: &[f64]| times.iter().copied().fold(f64::INFINITY, f64::min);
    println!(
        "reading: ratio of the shortest times {:.2}, of the medians {:.2}, median of the ratios {:.2} (wanted 2.5 or less)",
        least(&ours) / least(&bare),
        median(ours) / median(bare),
        median(ratios)
    );
    ExitCode::SUCCESS
}

fn timed(read: impl FnOnce() -> Sum) -> (f64, Sum) {
    let (start, begun) = (Instant::now(), busy());
    let sum = read();
    let wall = start.elapsed().as_secs_f64();
    (busy().zip(begun).map_or(wall, |(end, begun)| end - begun), sum)
}

/// The yardstick: what the fewest lines of a program do that trusts its export.
fn read_bare(export: &[u8], zone: chrono_tz::Tz) -> Sum {
    let mut reader = csv::ReaderBuilder::new().delimiter(b';').from_reader(export);
    let mut record = csv::StringRecord::new();
    let mut sum = Sum { rows: 0, numbers: 0.0, seconds: 0 };
    while reader.read_record(&mut record).expect("a row") {
        let local = NaiveDateTime::parse_from_str(&record[1], TIME).expect("a time");
        let moment = zone.from_local_datetime(&local).single().expect("a moment").to_utc();
        let (left, right): (f64, f64) = (record[5].parse().expect("a number"), record[6].parse().expect("a number"));
        black_box(&record);
        sum.rows += 1;
        sum.numbers += left + right;
        sum.seconds = sum.seconds.wrapping_add(moment.timestamp());
    }
    sum
}

/// The way of every row up to the records: read, checked, and placed by the plan and the roster.
fn read_and_place(plan: &Plan, roster: &Roster, export: &Vec<u8>) -> Sum {
    let instrument = &plan.instruments[0];
    let wanted = read::wanted(&instrument.reader);
    let whereabouts = Whereabouts { file_name: "all.csv", folder: "" };
    let resolver = Resolver::new(plan, instrument, roster, now(), &wanted, whereabouts).expect("a resolver");
    let mut rows = read::open(&instrument.reader, export).expect("the header");
    let (mut row, none) = (Row::default(), Decided::default());
    let mut sum = Sum { rows: 0, numbers: 0.0, seconds: 0 };
    while rows.next_row(&mut row).expect("a row") {
        let RowOutcome::Ready(resolved) = resolver.resolve(&row, rows.as_ref(), &none) else { panic!("{row:?}") };
        assert!(resolved.outside.is_none());
        let number = |value: &ValueOutcome| match value {
            ValueOutcome::Number(placed) => placed.number,
            other => panic!("{other:?}"),
        };
        sum.rows += 1;
        sum.numbers += resolved.values.iter().map(number).sum::<f64>();
        sum.seconds = sum.seconds.wrapping_add(resolved.moment.expect("a moment").timestamp());
    }
    sum
}

fn plan() -> Plan {
    let mut main = PLAN.to_owned();
    for visit in 0..VISITS {
        let _ = write!(main, "\n[[visit]]\ncode = \"week-{visit}\"\nday = {}\nwindow = [-3, 3]\n", visit * 7);
    }
    plan::parse(&PlanFiles { main, readers: vec![] }).unwrap_or_else(|faults| panic!("{faults}")).0
}

fn now() -> DateTime<Utc> {
    DateTime::from_timestamp(1_800_000_000, 0).expect("a moment")
}

fn roster() -> Roster {
    let mut roster = Roster::default();
    (0..SUBJECTS).for_each(|subject| roster.apply(&format!("S-{subject:03}"), "enrolled", Some("2024-01-08")));
    roster
}

/// As a logging instrument writes it: week by week, subject by subject, a pair of squeezes every ten seconds.
fn export() -> String {
    let day0 = NaiveDate::from_ymd_opt(2024, 1, 8).expect("a date");
    let mut export = "Subject;Taken;Visit;Trial;Tester;Left;Right\n".to_owned();
    for visit in 0..VISITS {
        for subject in 0..SUBJECTS {
            let day = day0 + Days::new(u64::from(visit * 7 + subject % 3));
            let start = day.and_hms_opt(9, subject % 60, 0).expect("a time");
            for trial in 1..=TRIALS {
                let at = (start + TimeDelta::seconds(i64::from(trial * 10))).format(TIME);
                let tenths = |salt: u32| 150 + (subject * 7 + visit * 13 + trial * salt) % 400;
                let (left, right) = (tenths(31), tenths(37));
                let _ = writeln!(
                    export,
                    "S-{subject:03};{at};week-{visit};{trial};AB;{}.{};{}.{}",
                    left / 10,
                    left % 10,
                    right / 10,
                    right % 10
                );
            }
        }
    }
    export
}
