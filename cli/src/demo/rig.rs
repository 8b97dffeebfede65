//! The rig: writes what the four instruments of the invented study would, over some seconds, mishaps included.
//!
//! Invariants: the steps come from the seed alone; a step only ever writes, appends or renames under the export
//! folders, as an instrument's own program would; nothing here knows how the exports will be read.

use std::collections::BTreeMap;
use std::fs;
use std::io::{self, Write};
use std::path::{Path, PathBuf};
use std::time::{Duration, Instant};

use chrono::{Datelike, Days, NaiveDate, NaiveTime, TimeDelta, Weekday};

use super::values::{Shown, VISITS, of_subject};
use super::{ROSTER, TODAY};
use crate::chance::Chance;

/// The export folders, from the study's folder.
pub const FOLDERS: [&str; 4] = [GRIP, PLATE, TIMER, SCALE];
const GRIP: &str = "exports/gauge";
const PLATE: &str = "exports/plate";
const TIMER: &str = "exports/timer";
const SCALE: &str = "exports/scale";

/// The days of the visits after the first session.
const VISIT_DAYS: [u64; VISITS] = [0, 28, 56, 84];
/// Sessions that are not about where the plan has them: subject, visit, days from the planned day.
const IRREGULAR: [(&str, usize, i64); 3] = [("QR-123", 2, 8), ("QR-213", 3, -4), ("QR-224", 3, -3)];
/// A visit that did not take place.
const MISSED: (&str, usize) = ("QR-134", 2);
/// A code misread at the grip gauge: subject, visit, as typed.
const MISREAD: (&str, usize, &str) = ("QR-156", 1, "QR-158");
/// A decimal comma forgotten at the grip gauge.
const NO_COMMA: (&str, usize) = ("QR-202", 1);
/// A left hand in plaster.
const PLASTER: (&str, usize) = ("QR-145", 2);
/// A balance plate whose program was set to other headings.
const OTHER_HEADINGS: (&str, usize) = ("QR-178", 2);
/// A weight that was corrected at the scale afterwards.
const CORRECTED: (&str, usize) = ("QR-112", 0);
/// The subject and visit whose day's file of the tablet was cut off for a while.
const CUT_OFF: (&str, usize) = ("QR-190", 1);
/// The subject and visit whose day's file of the tablet was copied by hand.
const COPIED: (&str, usize) = ("QR-167", 0);

/// How long the rig writes.
pub const LENGTH: Duration = Duration::from_millis(9000);
/// How long a part-written file waits for its rest: less than an instrument's `rest`.
const PAUSE: Duration = Duration::from_millis(350);
/// How long the cut-off file stays cut off: more than an instrument's `rest`.
const LONG_PAUSE: Duration = Duration::from_millis(3500);

/// What an instrument's program does to its folder.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum What {
    /// Writes a file anew.
    Write(Vec<u8>),
    /// Writes on at the end of one.
    Append(Vec<u8>),
    /// Gives one this name, which replaces what had it.
    Rename(PathBuf),
}

/// One step.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Step {
    /// When, from the start.
    pub at: Duration,
    /// The file, from the study's folder.
    pub file: PathBuf,
    /// What is done to it.
    pub what: What,
}

/// All that the instruments will write.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Rig {
    steps: Vec<Step>,
}

/// One subject at one visit.
#[derive(Debug, Clone)]
struct Sitting {
    code: String,
    visit: usize,
    day: NaiveDate,
    from: NaiveTime,
    shown: Shown,
}

impl Sitting {
    fn is(&self, (code, visit): (&str, usize)) -> bool {
        self.code == code && self.visit == visit
    }

    fn minute(&self, minutes: i64) -> NaiveTime {
        self.from + TimeDelta::minutes(minutes)
    }
}

impl Rig {
    /// What the instruments write under a seed.
    pub fn new(seed: u64) -> Self {
        let sittings = sittings(seed);
        let mut days: BTreeMap<NaiveDate, Vec<&Sitting>> = BTreeMap::new();
        for sitting in &sittings {
            days.entry(sitting.day).or_default().push(sitting);
        }
        let mut steps = Steps::default();
        let slice = (LENGTH - PAUSE) / (days.len().max(1) as u32);
        let last = days.len().saturating_sub(1);
        let mut weighed: Vec<&Sitting> = Vec::new();
        for (number, (day, sitting)) in days.iter().enumerate() {
            steps.now = slice * number as u32;
            steps.grip(number, *day, sitting);
            sitting.iter().for_each(|sitting| steps.plate(sitting));
            steps.timer(*day, sitting);
            weighed.extend(sitting);
            if number.is_multiple_of(5) || number == last {
                steps.scale(&weighed, number == last);
            }
        }
        steps.all.sort_by_key(|step| step.at);
        Self { steps: steps.all }
    }

    /// The steps, in order.
    pub fn steps(&self) -> &[Step] {
        &self.steps
    }

    /// Does all of it, each step at its time; `progress` hears how many are done.
    pub fn play(&self, study: &Path, progress: &mut dyn FnMut(u64)) -> io::Result<()> {
        let start = Instant::now();
        for (done, step) in self.steps.iter().enumerate() {
            progress(done as u64);
            std::thread::sleep(step.at.saturating_sub(start.elapsed()));
            step.apply(study)?;
        }
        progress(self.steps.len() as u64);
        Ok(())
    }
}

impl Step {
    fn apply(&self, study: &Path) -> io::Result<()> {
        let file = study.join(&self.file);
        match &self.what {
            What::Write(bytes) => fs::write(file, bytes),
            What::Append(bytes) => fs::OpenOptions::new().append(true).open(file)?.write_all(bytes),
            What::Rename(name) => fs::rename(file, study.join(name)),
        }
    }
}

// ---- who comes when ----

fn sittings(seed: u64) -> Vec<Sitting> {
    let today: NaiveDate = TODAY.parse().unwrap_or(NaiveDate::MAX);
    let mut all: Vec<Sitting> = ROSTER.lines().skip(1).flat_map(|line| subject(seed, line, today)).collect();
    all.sort_by(|one, other| (one.day, &one.code).cmp(&(other.day, &other.code)));
    let mut before: Option<(NaiveDate, i64)> = None;
    for sitting in &mut all {
        let place = before.filter(|(day, _)| *day == sitting.day).map_or(0, |(_, place)| place + 1);
        before = Some((sitting.day, place));
        sitting.from += TimeDelta::minutes(45 * place);
    }
    all
}

/// The sessions of one line of the roster.
fn subject(seed: u64, line: &str, today: NaiveDate) -> Vec<Sitting> {
    let cells: Vec<&str> = line.split(',').collect();
    let [code, enrolled, withdrawn, sex, ..] = cells[..] else { return vec![] };
    let Ok(enrolled) = enrolled.parse::<NaiveDate>() else { return vec![] };
    let until = withdrawn.parse().map_or(today, |withdrawn: NaiveDate| withdrawn.min(today));
    let mut chance = Chance::new(seed ^ 0x5ca1_ab1e, code);
    let shown = of_subject(seed, code, sex == "M");
    let from = NaiveTime::from_hms_opt(9, 10, 0).unwrap_or_default();
    let sittings = shown.into_iter().enumerate().map(|(visit, shown)| {
        let day = session_day(&mut chance, code, visit, enrolled);
        Sitting { code: code.to_owned(), visit, day, from, shown }
    });
    sittings.filter(|sitting| sitting.day <= until && !sitting.is(MISSED)).collect()
}

fn session_day(chance: &mut Chance, code: &str, visit: usize, enrolled: NaiveDate) -> NaiveDate {
    let planned = enrolled.checked_add_days(Days::new(VISIT_DAYS[visit])).unwrap_or(enrolled);
    let some = i64::try_from(chance.below(5)).unwrap_or(0) - 2;
    let irregular = IRREGULAR.iter().find(|(who, when, _)| (*who, *when) == (code, visit));
    let days = match irregular {
        Some((_, _, days)) => *days,
        None if visit == 0 => 0,
        None => some,
    };
    let day = planned + TimeDelta::days(days);
    match day.weekday() {
        Weekday::Sat => day - TimeDelta::days(1),
        Weekday::Sun => day + TimeDelta::days(1),
        _ => day,
    }
}

// ---- what they write ----

#[derive(Default)]
struct Steps {
    now: Duration,
    all: Vec<Step>,
}

impl Steps {
    fn add(&mut self, at: Duration, file: &str, what: What) {
        self.all.push(Step { at, file: PathBuf::from(file), what });
    }

    /// In one go.
    fn at_once(&mut self, file: &str, bytes: Vec<u8>) {
        self.add(self.now, file, What::Write(bytes));
    }

    /// Under another name first.
    fn renamed(&mut self, file: &str, bytes: Vec<u8>) {
        let other = format!("{file}.part");
        self.add(self.now, &other, What::Write(bytes));
        self.add(self.now + PAUSE / 4, &other, What::Rename(PathBuf::from(file)));
    }

    /// In two goes, the first of which ends in the middle of a line.
    fn part_written(&mut self, file: &str, mut bytes: Vec<u8>, at: usize, pause: Duration) {
        let rest = bytes.split_off(at.min(bytes.len()));
        self.add(self.now, file, What::Write(bytes));
        self.add(self.now + pause, file, What::Append(rest));
    }

    fn grip(&mut self, number: usize, day: NaiveDate, sittings: &[&Sitting]) {
        let tester = ["nb", "jo", "ts"][number % 3];
        let degrees = if number.is_multiple_of(2) { "20,5" } else { "21,0" };
        let mut text = format!("Grip gauge report\nSerial: HG-2209\nRoom: {degrees} °C\nTester: {tester}\n\n");
        text.push_str("Subject;Date;Time;Trial;Left [kg];Right [kg]\n");
        let mut rows = 0;
        for sitting in sittings {
            for (trial, [left, right]) in sitting.shown.grip.iter().enumerate() {
                let code = if sitting.is((MISREAD.0, MISREAD.1)) { MISREAD.2 } else { &sitting.code };
                let left = if sitting.is(PLASTER) { "--".to_owned() } else { comma(*left) };
                let right = comma(*right);
                let right = if trial == 1 && sitting.is(NO_COMMA) { right.replace(',', "") } else { right };
                let (time, trial) = (sitting.minute(2 * trial as i64).format("%H:%M"), trial + 1);
                text.push_str(&format!("{code};{};{time};{trial};{left};{right}\n", day.format("%d.%m.%Y")));
                rows += 1;
            }
        }
        text.push_str(&format!("End of report\nRows: {rows}\n"));
        // In Windows-1252 the degree sign is the one byte B0; all else is ASCII.
        let bytes: Vec<u8> = text.chars().map(|c| u8::try_from(u32::from(c)).unwrap_or(b'?')).collect();
        let file = format!("{GRIP}/{day}.csv");
        match number % 3 {
            0 => self.renamed(&file, bytes),
            1 => self.part_written(&file, bytes.clone(), bytes.len() * 2 / 3, PAUSE),
            _ => self.at_once(&file, bytes),
        }
    }

    fn plate(&mut self, sitting: &Sitting) {
        let heads = if sitting.is(OTHER_HEADINGS) { "Path open\tPath closed" } else { "Open\tClosed" };
        let day = sitting.day.format("%d/%m/%Y");
        let mut text = format!("Balance plate\t30 s\r\nDate\t{day}\r\n\r\nTime\tRun\t{heads}\r\nhh:mm\t\tcm\tcm\r\n");
        for (run, [open, closed]) in sitting.shown.sway.iter().enumerate() {
            let time = sitting.minute(8 + 2 * run as i64).format("%H:%M");
            text.push_str(&format!("{time}\t{}\t{open:.2}\t{closed:.2}\r\n", run + 1));
        }
        let bytes = std::iter::once(0xfeff).chain(text.encode_utf16()).flat_map(u16::to_le_bytes).collect();
        let file = format!("{PLATE}/{}_{:02}.txt", sitting.code, sitting.visit + 1);
        match sitting.visit {
            1 => self.renamed(&file, bytes),
            _ => self.at_once(&file, bytes),
        }
    }

    fn timer(&mut self, day: NaiveDate, sittings: &[&Sitting]) {
        let mut text = format!("when,who,visit,test,result,unit,by\n{day}T08:40:00,,,CHECK,10.00,s,ts\n");
        for sitting in sittings {
            let (code, visit) = (&sitting.code, sitting.visit + 1);
            let tests = [("RISE5", sitting.shown.rise, "s", 14, 20), ("WALK4M", sitting.shown.walk, "m/s", 18, 45)];
            for (test, value, unit, minute, second) in tests {
                let time = sitting.minute(minute).format("%H:%M");
                text.push_str(&format!("{day}T{time}:{second},{code},V{visit},{test},{value:.2},{unit},jo\n"));
            }
        }
        let (file, bytes) = (format!("{TIMER}/{day}.csv"), text.into_bytes());
        let any = |which| sittings.iter().any(|sitting| sitting.is(which));
        if any(CUT_OFF) {
            // Within the last result: read too early, it would be another number.
            let cut = bytes.len() - ",m/s,jo\n".len() - 1;
            return self.part_written(&file, bytes, cut, LONG_PAUSE);
        }
        if any(COPIED) {
            let copy = format!("{TIMER}/{day}-copy.csv");
            self.add(self.now + LONG_PAUSE, &copy, What::Write(bytes.clone()));
        }
        self.at_once(&file, bytes);
    }

    /// The whole log once more.
    fn scale(&mut self, weighed: &[&Sitting], last: bool) {
        let mut text = String::from("date|time|code|kg|note\n");
        for sitting in weighed {
            let (kg, note) = match last && sitting.is(CORRECTED) {
                true => (sitting.shown.weight - 1.8, "shoes off"),
                false => (sitting.shown.weight, ""),
            };
            let code =
                if sitting.visit == 1 { sitting.code.to_lowercase().replace('-', " ") } else { sitting.code.clone() };
            let time = sitting.minute(-6).format("%H:%M");
            text.push_str(&format!("{}|{time}|{code}|{kg:.1}|{note}\n", sitting.day));
        }
        if last {
            self.at_once(&format!("{SCALE}/battery.txt"), b"battery 41 %\n".to_vec());
        }
        self.renamed(&format!("{SCALE}/scale.log"), text.into_bytes());
    }
}

/// With a decimal comma.
fn comma(value: f64) -> String {
    format!("{value:.1}").replace('.', ",")
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_seed_settles_every_step() {
        assert_eq!(Rig::new(7), Rig::new(7));
        assert_ne!(Rig::new(7), Rig::new(8));
    }

    #[test]
    fn it_stays_within_its_time_and_folders() {
        for seed in 0..20 {
            let rig = Rig::new(seed);
            assert!(rig.steps().len() > 100);
            for step in rig.steps() {
                assert!(step.at <= LENGTH, "{seed}: {step:?}");
                assert!(FOLDERS.iter().any(|folder| step.file.starts_with(folder)), "{step:?}");
            }
        }
    }

    #[test]
    fn every_mishap_has_its_sitting() {
        for seed in 0..20 {
            let sittings = sittings(seed);
            let misread = (MISREAD.0, MISREAD.1);
            for which in [misread, NO_COMMA, PLASTER, OTHER_HEADINGS, CORRECTED, CUT_OFF, COPIED] {
                assert!(sittings.iter().any(|sitting| sitting.is(which)), "{seed}: {which:?}");
            }
            assert!(!sittings.iter().any(|sitting| sitting.is(MISSED)));
        }
    }
}
