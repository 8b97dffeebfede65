//! From an instrument's local time to the moment.
//!
//! Invariants: a local time that does not exist becomes no moment; one that exists twice becomes one only when the
//! order of the export's rows leaves a single choice for it.

use std::collections::HashMap;

use chrono::{DateTime, NaiveDate, NaiveDateTime, TimeDelta, Utc};
use chrono::{MappedLocalTime, Offset, TimeZone};
use chrono_tz::Tz;
use revisant_schema::plan::{ClockError, Instrument};

use crate::intake::read::At;

/// What a local time is in a zone.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Local {
    /// This moment.
    Once(DateTime<Utc>),
    /// Either of these, the earlier first: clocks went back over it.
    Twice(DateTime<Utc>, DateTime<Utc>),
    /// None: clocks went forward over it.
    Never,
}

/// What a local time is in a zone.
pub fn in_zone(zone: Tz, local: NaiveDateTime) -> Local {
    let moment = |offset: <Tz as TimeZone>::Offset| local.checked_sub_offset(offset.fix()).map(|utc| utc.and_utc());
    match zone.offset_from_local_datetime(&local) {
        MappedLocalTime::Single(offset) => moment(offset).map_or(Local::Never, Local::Once),
        MappedLocalTime::Ambiguous(one, other) => match (moment(one), moment(other)) {
            (Some(one), Some(other)) => Local::Twice(one.min(other), one.max(other)),
            _ => Local::Never,
        },
        MappedLocalTime::None => Local::Never,
    }
}

/// What a local time that does not exist may have been: by a clock that was not put forward yet, and by one that had
/// been put forward before its time.
pub fn around_gap(zone: Tz, local: NaiveDateTime) -> [Option<DateTime<Utc>>; 2] {
    let day = TimeDelta::days(1);
    // The offsets of the day before and of the day after are those on both sides of the gap.
    let offset = |aside: Option<NaiveDateTime>| {
        let there = zone.from_local_datetime(&aside?).earliest()?;
        Some(there.naive_local() - there.naive_utc())
    };
    let by = |offset: Option<TimeDelta>| Some(local.checked_sub_signed(offset?)?.and_utc());
    [by(offset(local.checked_sub_signed(day))), by(offset(local.checked_add_signed(day)))]
}

/// The error of the instrument's clock on a day of that clock: the last entry not after it.
pub fn error_on(instrument: &Instrument, day: NaiveDate) -> TimeDelta {
    let entry = instrument.clock.iter().rev().find(|ClockError { from, .. }| *from <= day);
    entry.map_or(TimeDelta::zero(), |entry| entry.add)
}

/// Settles, by the order of an export's rows, which of two moments a doubled local time is.
///
/// A choice of moments is good when it makes all rows of the export non-decreasing in time. A row's moment is settled
/// when it is the same in every good choice; when there is no good choice, nothing is. Rows are put in one by one;
/// only doubled ones are kept.
#[derive(Debug, Default)]
pub struct Folds {
    /// The least moment that the rows so far can end on; `None` before the first.
    floor: Option<DateTime<Utc>>,
    disordered: bool,
    doubled: Vec<Doubled>,
    /// The least of the unambiguous moments since the last doubled row.
    ceiling: Option<DateTime<Utc>>,
}

#[derive(Debug, Clone, Copy)]
struct Doubled {
    at: At,
    early: DateTime<Utc>,
    late: DateTime<Utc>,
    /// The least moment on which the rows before it can end.
    floor: Option<DateTime<Utc>>,
    /// The least unambiguous moment between it and the next doubled row.
    ceiling: Option<DateTime<Utc>>,
}

impl Folds {
    /// A row with one moment.
    pub fn once(&mut self, moment: DateTime<Utc>) {
        self.disordered |= self.floor.is_some_and(|floor| moment < floor);
        self.floor = Some(self.floor.map_or(moment, |floor| floor.max(moment)));
        self.ceiling = Some(self.ceiling.map_or(moment, |ceiling| ceiling.min(moment)));
    }

    /// A row with two.
    pub fn twice(&mut self, at: At, early: DateTime<Utc>, late: DateTime<Utc>) {
        if let Some(last) = self.doubled.last_mut() {
            last.ceiling = self.ceiling.take();
        }
        self.ceiling = None;
        self.doubled.push(Doubled { at, early, late, floor: self.floor, ceiling: None });
        let fits = |moment: DateTime<Utc>| self.floor.is_none_or(|floor| moment >= floor);
        match (fits(early), fits(late)) {
            (true, _) => self.floor = Some(early),
            (false, true) => self.floor = Some(late),
            (false, false) => self.disordered = true,
        }
    }

    /// The settled moments, by row.
    pub fn settle(mut self) -> HashMap<At, DateTime<Utc>> {
        if let Some(last) = self.doubled.last_mut() {
            last.ceiling = self.ceiling;
        }
        if self.disordered {
            return HashMap::new();
        }
        let mut settled = HashMap::new();
        // Backwards: the greatest moment on which the rows from here on can begin.
        let mut roof: Option<DateTime<Utc>> = None;
        for row in self.doubled.iter().rev() {
            roof = [roof, row.ceiling].into_iter().flatten().min();
            let fits = |moment: &DateTime<Utc>| {
                row.floor.is_none_or(|floor| *moment >= floor) && roof.is_none_or(|roof| *moment <= roof)
            };
            let good: Vec<DateTime<Utc>> = [row.early, row.late].into_iter().filter(fits).collect();
            if let [only] = good.as_slice() {
                settled.insert(row.at, *only);
            }
            let below_roof = |moment: &DateTime<Utc>| roof.is_none_or(|roof| *moment <= roof);
            match [row.late, row.early].into_iter().find(below_roof) {
                Some(latest) => roof = Some(latest),
                None => return HashMap::new(),
            }
        }
        settled
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn at(minute: i64) -> DateTime<Utc> {
        DateTime::from_timestamp(minute * 60, 0).unwrap()
    }

    proptest::proptest! {
        /// A local time's day is the day of each of its moments in the same zone, however clocks change.
        #[test]
        fn a_moment_is_on_the_day_it_was_written_on(minute in 0_i64..80_000_000, which in 0..chrono_tz::TZ_VARIANTS.len()) {
            let (zone, local) = (chrono_tz::TZ_VARIANTS[which], at(minute).naive_utc());
            let moments = match in_zone(zone, local) {
                Local::Once(moment) => vec![moment],
                Local::Twice(early, late) => vec![early, late],
                Local::Never => vec![],
            };
            for moment in moments {
                proptest::prop_assert_eq!(moment.with_timezone(&zone).naive_local(), local);
            }
        }
    }

    /// Rows as (early, late), equal when there is one moment only; every good choice by trying all.
    fn by_trying(rows: &[(i64, i64)]) -> Vec<Option<i64>> {
        let mut good: Vec<Vec<i64>> = vec![];
        for bits in 0..1_u32 << rows.len() {
            let choice: Vec<i64> =
                rows.iter().enumerate().map(|(at, row)| if bits >> at & 1 == 0 { row.0 } else { row.1 }).collect();
            if choice.windows(2).all(|pair| pair[0] <= pair[1]) && !good.contains(&choice) {
                good.push(choice);
            }
        }
        (0..rows.len())
            .map(|row| {
                let first = good.first()?[row];
                good.iter().all(|choice| choice[row] == first).then_some(first)
            })
            .collect()
    }

    #[test]
    fn settling_agrees_with_trying_every_choice() {
        // Minutes of an hour that exists twice: 120 to 179 early, 180 to 239 late.
        let mut state = 12_345_u64;
        let mut next = |below: u64| {
            state = state.wrapping_mul(6_364_136_223_846_793_005).wrapping_add(1_442_695_040_888_963_407);
            (state >> 33) % below
        };
        for _ in 0..5_000 {
            let count = 1 + next(6) as usize;
            let rows: Vec<(i64, i64)> = (0..count)
                .map(|_| match next(3) {
                    0 => {
                        let moment = 60 + next(240) as i64;
                        (moment, moment)
                    }
                    _ => {
                        let minute = 120 + next(60) as i64;
                        (minute, minute + 60)
                    }
                })
                .collect();
            let mut folds = Folds::default();
            for (line, (early, late)) in rows.iter().enumerate() {
                if early == late {
                    folds.once(at(*early));
                } else {
                    folds.twice(At { line: line as u64, from: 0 }, at(*early), at(*late));
                }
            }
            let settled = folds.settle();
            for (line, (row, expected)) in rows.iter().zip(by_trying(&rows)).enumerate() {
                if row.0 != row.1 {
                    let found = settled.get(&At { line: line as u64, from: 0 }).map(|moment| moment.timestamp() / 60);
                    assert_eq!(found, expected, "row {line} of {rows:?}");
                }
            }
        }
    }
}
