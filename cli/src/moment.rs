//! A MOMENT of the command line: a date, a moment of RFC 3339, or a local time of the study's zone.
//!
//! Invariants: a bare date means a day of the study's own zone: its end for `--as-of`, the day itself for `--on`; a
//! local time that does not exist, or exists twice, is no moment ([`Moment::exact`]).

use std::str::FromStr;

use chrono::{DateTime, Days, NaiveDate, NaiveDateTime, NaiveTime, TimeDelta, TimeZone, Utc};
use chrono_tz::Tz;

/// A date, or a moment.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Moment {
    /// A day; its hour is not said.
    Day(NaiveDate),
    /// A local time of the study's zone.
    Local(NaiveDateTime),
    /// A moment.
    Instant(DateTime<Utc>),
}

impl FromStr for Moment {
    type Err = String;

    fn from_str(text: &str) -> Result<Self, String> {
        let day = NaiveDate::parse_from_str(text, "%Y-%m-%d").ok();
        if let Some(day) = day.filter(|day| day.to_string() == text) {
            return Ok(Self::Day(day));
        }
        let local = ["%Y-%m-%dT%H:%M", "%Y-%m-%dT%H:%M:%S"].iter();
        if let Some(local) = local.filter_map(|pattern| NaiveDateTime::parse_from_str(text, pattern).ok()).next() {
            return Ok(Self::Local(local));
        }
        DateTime::parse_from_rfc3339(text).map(|moment| Self::Instant(moment.to_utc())).map_err(|_| {
            "write a date such as 2026-03-31, a local time such as 2026-03-31T14:00, or a moment with its offset such as \
             2026-03-31T14:00:00+01:00"
                .to_owned()
        })
    }
}

impl Moment {
    /// The last millisecond that belongs to it: of a day, its end.
    pub fn end(self, zone: Tz) -> DateTime<Utc> {
        match self {
            Self::Instant(moment) => moment,
            Self::Local(local) => {
                let there = zone.from_local_datetime(&local);
                there.latest().map_or_else(|| local.and_utc(), |moment| moment.to_utc())
            }
            Self::Day(day) => {
                let next = day.checked_add_days(Days::new(1)).unwrap_or(NaiveDate::MAX);
                start_of(next, zone) - TimeDelta::milliseconds(1)
            }
        }
    }

    /// Its local day.
    pub fn day(self, zone: Tz) -> NaiveDate {
        match self {
            Self::Day(day) => day,
            Self::Local(local) => local.date(),
            Self::Instant(moment) => moment.with_timezone(&zone).date_naive(),
        }
    }
}

impl Moment {
    /// The moment that it is, without any doubt; `Ok(None)`: a day whose hour is not said.
    pub fn exact(self, zone: Tz) -> Result<Option<DateTime<Utc>>, String> {
        match self {
            Self::Day(_) => Ok(None),
            Self::Instant(moment) => Ok(Some(moment)),
            Self::Local(local) => match zone.from_local_datetime(&local).single() {
                Some(moment) => Ok(Some(moment.to_utc())),
                None => Err(format!(
                    "{local} does not exist, or exists twice, in {}: clocks changed; give the moment with its offset",
                    zone.name()
                )),
            },
        }
    }
}

/// When a local day begins: midnight, or the first half hour that exists where clocks go forward over it.
pub fn start_of(day: NaiveDate, zone: Tz) -> DateTime<Utc> {
    let midnight = day.and_time(NaiveTime::MIN);
    let tries = (0..48).filter_map(|half_hours| midnight.checked_add_signed(TimeDelta::minutes(30 * half_hours)));
    let found = tries.filter_map(|local| zone.from_local_datetime(&local).earliest()).next();
    found.map_or_else(|| midnight.and_utc(), |moment| moment.to_utc())
}

#[cfg(test)]
mod tests {
    use super::*;

    fn london(text: &str) -> DateTime<Utc> {
        text.parse::<Moment>().unwrap().end(chrono_tz::Europe::London)
    }

    #[test]
    fn a_date_ends_with_its_local_day() {
        assert_eq!(london("2026-01-31").to_rfc3339(), "2026-01-31T23:59:59.999+00:00");
        assert_eq!(london("2026-07-31").to_rfc3339(), "2026-07-31T22:59:59.999+00:00");
        assert_eq!(london("2026-03-28").to_rfc3339(), "2026-03-28T23:59:59.999+00:00", "the eve of the clock change");
    }

    #[test]
    fn a_moment_stands_for_itself() {
        assert_eq!(london("2026-03-31T14:00:00+01:00").to_rfc3339(), "2026-03-31T13:00:00+00:00");
        let late = "2026-03-31T23:30:00Z".parse::<Moment>().unwrap();
        assert_eq!(late.day(chrono_tz::Europe::Berlin).to_string(), "2026-04-01");
    }

    #[test]
    fn a_local_time_is_of_the_zone_and_never_guessed() {
        let exact = |text: &str| text.parse::<Moment>().unwrap().exact(chrono_tz::Europe::London);
        assert_eq!(exact("2026-07-31T14:00").unwrap().unwrap().to_rfc3339(), "2026-07-31T13:00:00+00:00");
        assert_eq!(exact("2026-07-31").unwrap(), None);
        assert!(exact("2026-03-29T01:30").is_err(), "clocks went forward over it");
        assert!(exact("2026-10-25T01:30").is_err(), "clocks went back over it");
    }

    #[test]
    fn a_midnight_that_does_not_exist_is_passed_over() {
        let day = NaiveDate::from_ymd_opt(2026, 3, 29).unwrap();
        let zone = chrono_tz::Asia::Beirut;
        assert_eq!(start_of(day, zone).with_timezone(&zone).format("%H:%M").to_string(), "01:00");
    }

    #[test]
    fn other_texts_are_refused() {
        for text in ["", "31/03/2026", "2026-3-1", "2026-03-31 2 pm", "yesterday", "2026-02-30"] {
            assert!(text.parse::<Moment>().is_err(), "{text}");
        }
    }
}
