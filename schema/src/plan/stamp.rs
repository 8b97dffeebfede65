//! Stamps: reading the texts in which instruments write dates and times.
//!
//! Invariants: pure; the whole text must match (blanks around it aside); a text that names no day or time that exists
//! (31 April, 24:00, second 60) is no stamp; nothing depends on the machine's language or zone; no midnight is made
//! up for a date alone.
//!
//! A pattern is compiled once and then walked over each text: an export has a million of them.

use chrono::format::{Fixed, Item, Numeric, StrftimeItems};
use chrono::{DateTime, Datelike, FixedOffset, NaiveDate, NaiveDateTime, NaiveTime, TimeDelta, Weekday};

use super::model::Stamp;

/// What a stamp says.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Written {
    /// A day, without a time.
    Date(NaiveDate),
    /// A local time, whose zone the text does not say.
    Local(NaiveDateTime),
    /// A moment, as the text carries its offset.
    Moment(DateTime<FixedOffset>),
}

/// A stamp as read.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Read {
    /// What it says.
    pub written: Written,
    /// Whether it is finer than the minute: the text carries seconds; for a day number, the time is no whole minute.
    pub finer: bool,
}

/// A way of writing stamps, made ready for many texts.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct CompiledStamp(Kind);

#[derive(Debug, Clone, PartialEq, Eq)]
enum Kind {
    Iso,
    Serial,
    Pattern(Vec<Step>),
}

/// One step of a pattern.
#[derive(Debug, Clone, PartialEq, Eq)]
enum Step {
    /// Exactly this.
    Text(String),
    /// White space, at least one.
    Blank,
    /// Four digits.
    Year,
    /// Two digits: 70 to 99 are the 1900s, 00 to 69 the 2000s (POSIX says 69; chrono, whose notation this is, 70).
    ShortYear,
    Month,
    Day,
    DayOfYear,
    MonthName {
        /// Whether the full name may stand as well as the first three letters.
        full: bool,
    },
    WeekdayName,
    Hour,
    Hour12,
    HalfDay,
    Minute,
    Second,
    /// Digits behind the point.
    Fraction,
    /// A point with digits, or nothing.
    PointFraction,
    Offset,
    /// Seconds since 1970 in UTC.
    UnixSeconds,
}

/// Reads one text. For many texts of one kind, compile the stamp once instead.
pub fn read(stamp: &Stamp, text: &str) -> Option<Read> {
    CompiledStamp::new(stamp).ok()?.read(text)
}

impl CompiledStamp {
    /// Makes a stamp ready; the error says what is wrong with its pattern.
    pub fn new(stamp: &Stamp) -> Result<Self, String> {
        match stamp {
            Stamp::Iso => Ok(Self(Kind::Iso)),
            Stamp::Serial => Ok(Self(Kind::Serial)),
            Stamp::Pattern(pattern) => compile(pattern).map(Kind::Pattern).map(Self),
        }
    }

    /// Reads one text.
    pub fn read(&self, text: &str) -> Option<Read> {
        self.read_in(text, false)
    }

    /// Reads one text of a workbook whose day numbers may count from 1904.
    pub fn read_in(&self, text: &str, since_1904: bool) -> Option<Read> {
        let text = text.trim();
        match &self.0 {
            Kind::Iso => iso(text),
            Kind::Serial => serial(day_number(text)?, since_1904),
            Kind::Pattern(steps) => {
                let mut scan = Scan(text.as_bytes());
                let mut parts = Parts::default();
                for step in steps {
                    parts.take(step, &mut scan)?;
                }
                scan.0.is_empty().then(|| parts.finish())?
            }
        }
    }
}

// ---- patterns ----

fn compile(pattern: &str) -> Result<Vec<Step>, String> {
    let mut steps = vec![];
    for item in StrftimeItems::new(pattern) {
        match step(&item, pattern)? {
            // Neighbouring blanks are one.
            Step::Blank if steps.last() == Some(&Step::Blank) => {}
            step => steps.push(step),
        }
    }
    let has = |wanted: &Step| steps.contains(wanted);
    let month = has(&Step::Month) || steps.iter().any(|step| matches!(step, Step::MonthName { .. }));
    let dated = (has(&Step::Year) || has(&Step::ShortYear)) && (month && has(&Step::Day) || has(&Step::DayOfYear));
    if !dated && !has(&Step::UnixSeconds) {
        return Err("it does not say the day: a year, a month and a day are needed".into());
    }
    if has(&Step::Hour12) != has(&Step::HalfDay) && !has(&Step::Hour) {
        let absent = if has(&Step::Hour12) { "%I needs %p" } else { "%p needs %I" };
        return Err(format!("the hour is not clear: {absent}"));
    }
    if (has(&Step::Minute) || has(&Step::Second)) && !has(&Step::Hour) && !has(&Step::Hour12) {
        return Err("it has minutes or seconds, but no hour".into());
    }
    if has(&Step::Second) && !has(&Step::Minute) {
        return Err("it has seconds, but no minutes".into());
    }
    if (has(&Step::Fraction) || has(&Step::PointFraction)) && !has(&Step::Second) && !has(&Step::UnixSeconds) {
        return Err("it has a fraction, but no seconds".into());
    }
    let timed = has(&Step::Hour) || has(&Step::Hour12) || has(&Step::UnixSeconds);
    if has(&Step::Offset) && !timed {
        return Err("it has an offset, but no time".into());
    }
    Ok(steps)
}

fn step(item: &Item<'_>, pattern: &str) -> Result<Step, String> {
    Ok(match item {
        Item::Literal(text) => Step::Text((*text).to_owned()),
        Item::OwnedLiteral(text) => Step::Text(text.to_string()),
        Item::Space(_) | Item::OwnedSpace(_) => Step::Blank,
        Item::Numeric(numeric, _) => match numeric {
            Numeric::Year => Step::Year,
            Numeric::YearMod100 => Step::ShortYear,
            Numeric::Month => Step::Month,
            Numeric::Day => Step::Day,
            Numeric::Ordinal => Step::DayOfYear,
            Numeric::Hour => Step::Hour,
            Numeric::Hour12 => Step::Hour12,
            Numeric::Minute => Step::Minute,
            Numeric::Second => Step::Second,
            Numeric::Nanosecond => Step::Fraction,
            Numeric::Timestamp => Step::UnixSeconds,
            _ => return Err("weeks, centuries and quarters cannot be read".into()),
        },
        Item::Fixed(fixed) => match fixed {
            Fixed::ShortMonthName => Step::MonthName { full: false },
            Fixed::LongMonthName => Step::MonthName { full: true },
            Fixed::ShortWeekdayName | Fixed::LongWeekdayName => Step::WeekdayName,
            Fixed::LowerAmPm | Fixed::UpperAmPm => Step::HalfDay,
            Fixed::Nanosecond | Fixed::Nanosecond3 | Fixed::Nanosecond6 | Fixed::Nanosecond9 => Step::PointFraction,
            Fixed::TimezoneOffset
            | Fixed::TimezoneOffsetColon
            | Fixed::TimezoneOffsetZ
            | Fixed::TimezoneOffsetColonZ => Step::Offset,
            Fixed::RFC3339 => return Err("for ISO 8601, say \"iso\"".into()),
            Fixed::TimezoneName => return Err("names of zones (%Z) cannot be read, offsets (%z) can".into()),
            _ => return Err(format!("\"{pattern}\" has a part that cannot be read")),
        },
        Item::Error => return Err(format!("\"{}\" is no part of a date or time", unknown_part(pattern))),
    })
}

/// The first part that the notation does not know, to be shown.
fn unknown_part(pattern: &str) -> String {
    let parts: Vec<&str> = pattern.split_inclusive('%').collect();
    for (at, _) in pattern.match_indices('%') {
        let part: String = pattern[at..].chars().take(2).collect();
        if matches!(StrftimeItems::new(&part).next(), Some(Item::Error) | None) {
            return part;
        }
    }
    parts.concat()
}

/// What is left of a text.
struct Scan<'a>(&'a [u8]);

impl Scan<'_> {
    /// Between `least` and `most` digits.
    fn digits(&mut self, least: usize, most: usize) -> Option<u32> {
        let (mut value, mut count) = (0_u32, 0);
        while let Some(digit) = self.0.get(count).filter(|byte| count < most && byte.is_ascii_digit()) {
            value = value.checked_mul(10)?.checked_add(u32::from(digit - b'0'))?;
            count += 1;
        }
        self.skip(count);
        (count >= least).then_some(value)
    }

    /// One or two digits, with one blank before a single one.
    fn one_or_two(&mut self) -> Option<u32> {
        if self.0.first() == Some(&b' ') && self.0.get(1).is_some_and(u8::is_ascii_digit) {
            self.skip(1);
        }
        self.digits(1, 2)
    }

    fn skip(&mut self, count: usize) {
        self.0 = self.0.get(count..).unwrap_or_default();
    }

    fn eat(&mut self, byte: u8) -> bool {
        let there = self.0.first() == Some(&byte);
        if there {
            self.skip(1);
        }
        there
    }

    fn text(&mut self, wanted: &str) -> Option<()> {
        match wanted.as_bytes() {
            // Nearly all texts between numbers are one character.
            [byte] => self.eat(*byte).then_some(()),
            bytes => self.0.strip_prefix(bytes).map(|rest| self.0 = rest),
        }
    }

    /// At least one blank; the no-break spaces of office programs are blanks too.
    fn blanks(&mut self) -> Option<()> {
        let text = std::str::from_utf8(self.0).ok()?;
        let rest = text.trim_start();
        (rest.len() < text.len()).then(|| self.0 = rest.as_bytes())
    }

    /// One of twelve months or seven days by name, in any case; its position from 0.
    fn name(&mut self, names: &[&str], full: bool) -> Option<usize> {
        let begins = |name: &str| self.0.get(..name.len()).is_some_and(|it| it.eq_ignore_ascii_case(name.as_bytes()));
        let whole = if full { names.iter().position(|name| begins(name)) } else { None };
        let (index, length) = match whole {
            Some(index) => (index, names[index].len()),
            None => (names.iter().position(|name| begins(&name[..3]))?, 3),
        };
        self.skip(length);
        Some(index)
    }

    /// Digits behind a point, as nanoseconds; what is finer is cut off.
    fn fraction(&mut self) -> Option<u32> {
        let (mut nanos, mut unit, mut count) = (0, 100_000_000, 0);
        while let Some(digit) = self.0.get(count).filter(|byte| byte.is_ascii_digit()) {
            nanos += u32::from(digit - b'0') * unit;
            unit /= 10;
            count += 1;
        }
        self.skip(count);
        (count > 0).then_some(nanos)
    }

    /// `Z`, `+01`, `+0100` or `+01:00`, in seconds east of UTC.
    fn offset(&mut self) -> Option<i32> {
        if self.eat(b'Z') || self.eat(b'z') {
            return Some(0);
        }
        let sign = if self.eat(b'+') {
            1
        } else if self.eat(b'-') || self.text("\u{2212}").is_some() {
            -1
        } else {
            return None;
        };
        let hours = self.digits(2, 2)?;
        let colon = self.eat(b':');
        let minutes = if colon || self.0.first().is_some_and(u8::is_ascii_digit) { self.digits(2, 2)? } else { 0 };
        (hours < 24 && minutes < 60).then(|| sign * i32::try_from(hours * 3600 + minutes * 60).unwrap_or(0))
    }
}

const MONTHS: [&str; 12] = [
    "january",
    "february",
    "march",
    "april",
    "may",
    "june",
    "july",
    "august",
    "september",
    "october",
    "november",
    "december",
];
const WEEKDAYS: [&str; 7] = ["monday", "tuesday", "wednesday", "thursday", "friday", "saturday", "sunday"];

/// What has been read of one stamp.
#[derive(Debug, Default)]
struct Parts {
    year: Option<i32>,
    month: Option<u32>,
    day: Option<u32>,
    day_of_year: Option<u32>,
    weekday: Option<usize>,
    hour: Option<u32>,
    hour12: Option<u32>,
    afternoon: bool,
    minute: Option<u32>,
    second: Option<u32>,
    nanos: u32,
    offset: Option<i32>,
    unix: Option<i64>,
}

impl Parts {
    fn take(&mut self, step: &Step, scan: &mut Scan<'_>) -> Option<()> {
        match step {
            Step::Text(text) => scan.text(text)?,
            Step::Blank => scan.blanks()?,
            Step::Year => self.year = Some(i32::try_from(scan.digits(4, 4)?).ok()?),
            Step::ShortYear => {
                let year = i32::try_from(scan.digits(2, 2)?).ok()?;
                self.year = Some(if year < 70 { 2000 + year } else { 1900 + year });
            }
            Step::Month => self.month = Some(scan.one_or_two()?),
            Step::Day => self.day = Some(scan.one_or_two()?),
            Step::DayOfYear => self.day_of_year = Some(scan.digits(1, 3)?),
            Step::MonthName { full } => self.month = Some(u32::try_from(scan.name(&MONTHS, *full)?).ok()? + 1),
            Step::WeekdayName => self.weekday = Some(scan.name(&WEEKDAYS, true)?),
            Step::Hour => self.hour = Some(scan.one_or_two()?),
            Step::Hour12 => self.hour12 = Some(scan.one_or_two().filter(|hour| (1..=12).contains(hour))?),
            Step::HalfDay => {
                self.afternoon = scan.0.first()?.eq_ignore_ascii_case(&b'p');
                let known = self.afternoon || scan.0.first()?.eq_ignore_ascii_case(&b'a');
                let second = scan.0.get(1)?.eq_ignore_ascii_case(&b'm');
                scan.skip(2);
                return (known && second).then_some(());
            }
            Step::Minute => self.minute = Some(scan.digits(2, 2)?),
            Step::Second => self.second = Some(scan.digits(2, 2)?),
            Step::Fraction => self.nanos = scan.fraction()?,
            Step::PointFraction => {
                if scan.eat(b'.') {
                    self.nanos = scan.fraction()?;
                }
            }
            Step::Offset => self.offset = Some(scan.offset()?),
            Step::UnixSeconds => {
                let sign = if scan.eat(b'-') { -1 } else { 1 };
                let high = i64::from(scan.digits(1, 9)?);
                let more = scan.0.iter().take_while(|byte| byte.is_ascii_digit()).count();
                let low = if more > 0 { i64::from(scan.digits(more, 3)?) } else { 0 };
                self.unix = Some(sign * (high * 10_i64.pow(u32::try_from(more).ok()?) + low));
            }
        }
        Some(())
    }

    fn finish(self) -> Option<Read> {
        if let Some(unix) = self.unix {
            let moment = DateTime::from_timestamp(unix, self.nanos)?.fixed_offset();
            return Some(Read { written: Written::Moment(moment), finer: true });
        }
        let date = match self.day_of_year {
            Some(day) => NaiveDate::from_yo_opt(self.year?, day)?,
            None => NaiveDate::from_ymd_opt(self.year?, self.month?, self.day?)?,
        };
        if self.weekday.is_some_and(|day| date.weekday() != Weekday::try_from(day as u8).unwrap_or(Weekday::Mon)) {
            return None;
        }
        let twelve = self.hour12.map(|hour| hour % 12 + if self.afternoon { 12 } else { 0 });
        let time = self.hour.or(twelve).map(|hour| (hour, self.minute.unwrap_or(0)));
        finish(date, time, self.second, self.nanos, self.offset)
    }
}

/// Puts a stamp together.
fn finish(
    date: NaiveDate,
    time: Option<(u32, u32)>,
    second: Option<u32>,
    nanos: u32,
    offset: Option<i32>,
) -> Option<Read> {
    let Some((hour, minute)) = time else {
        return Some(Read { written: Written::Date(date), finer: false });
    };
    let time = NaiveTime::from_hms_nano_opt(hour, minute, second.unwrap_or(0), nanos)?;
    let local = NaiveDateTime::new(date, time);
    let written = match offset {
        None => Written::Local(local),
        Some(seconds) => Written::Moment(local.and_local_timezone(FixedOffset::east_opt(seconds)?).single()?),
    };
    Some(Read { written, finer: second.is_some() })
}

// ---- ISO 8601 ----

/// A date, a local time or a moment of ISO 8601, extended (`2025-03-24T07:30`) or basic (`20250324T0730`), with `T` or
/// one blank between, a point or a comma before the fraction, and one blank allowed before the offset.
fn iso(text: &str) -> Option<Read> {
    let mut scan = Scan(text.as_bytes());
    let year = i32::try_from(scan.digits(4, 4)?).ok()?;
    let dashes = scan.eat(b'-');
    let month = scan.digits(2, 2)?;
    if dashes && !scan.eat(b'-') {
        return None;
    }
    let date = NaiveDate::from_ymd_opt(year, month, scan.digits(2, 2)?)?;
    if scan.0.is_empty() {
        return finish(date, None, None, 0, None);
    }
    if !(scan.eat(b'T') || scan.eat(b't') || scan.eat(b' ')) {
        return None;
    }
    let hour = scan.digits(2, 2)?;
    let colons = scan.eat(b':');
    let minute = scan.digits(2, 2)?;
    let more = if colons { scan.eat(b':') } else { scan.0.first().is_some_and(u8::is_ascii_digit) };
    let second = if more { Some(scan.digits(2, 2)?) } else { None };
    let nanos = if more && (scan.eat(b'.') || scan.eat(b',')) { scan.fraction()? } else { 0 };
    let offset = if scan.0.is_empty() {
        None
    } else {
        scan.eat(b' ');
        Some(scan.offset()?)
    };
    scan.0.is_empty().then(|| finish(date, Some((hour, minute)), second, nanos, offset))?
}

// ---- day numbers of workbooks ----

/// The number of a text: one, or a whole day and, after a blank, the part of a day that stood in a cell of its own.
fn day_number(text: &str) -> Option<f64> {
    let Some((day, part)) = text.split_once(char::is_whitespace) else { return text.parse().ok() };
    let (day, part): (f64, f64) = (day.parse().ok()?, part.trim_start().parse().ok()?);
    (day.fract() == 0.0 && (0.0..1.0).contains(&part)).then_some(day + part)
}

/// A workbook's day number: days since the end of 1899, with the 29 February 1900 that never was, or since 1904.
///
/// A whole number is a date; a fraction is rounded to the nearest millisecond. Numbers below 1 (a time alone), 60 of
/// the older system and what lies beyond the year 9999 are no stamps.
pub fn serial(number: f64, since_1904: bool) -> Option<Read> {
    const LAST: f64 = 2_958_466.0;
    let least = if since_1904 { 0.0 } else { 1.0 };
    if !(number >= least && number < LAST) {
        return None;
    }
    let whole = number.floor();
    // A millisecond is 1.16e-8 of a day; at these sizes a double still tells 5e-10 apart.
    let millis = ((number - whole) * 86_400_000.0).round() as i64;
    let day = whole as i64;
    let start = match (since_1904, day) {
        (true, _) => NaiveDate::from_ymd_opt(1904, 1, 1)?,
        (false, 60) => return None,
        (false, ..60) => NaiveDate::from_ymd_opt(1899, 12, 31)?,
        (false, _) => NaiveDate::from_ymd_opt(1899, 12, 30)?,
    };
    let date = start.checked_add_signed(TimeDelta::try_days(day)?)?;
    if whole == number {
        return Some(Read { written: Written::Date(date), finer: false });
    }
    let local = date.and_time(NaiveTime::MIN).checked_add_signed(TimeDelta::milliseconds(millis))?;
    Some(Read { written: Written::Local(local), finer: millis % 60_000 != 0 })
}

#[cfg(test)]
mod tests {
    use super::*;

    fn shown(read: Option<Read>) -> String {
        match read {
            None => "none".into(),
            Some(read) => {
                let text = match read.written {
                    Written::Date(date) => date.to_string(),
                    Written::Local(local) => format!("{local:?}"),
                    Written::Moment(moment) => moment.to_rfc3339(),
                };
                format!("{text}{}", if read.finer { " finer" } else { "" })
            }
        }
    }

    fn pattern(pattern: &str, text: &str) -> String {
        shown(CompiledStamp::new(&Stamp::Pattern(pattern.into())).unwrap().read(text))
    }

    #[test]
    fn patterns() {
        for (format, text, expected) in [
            ("%d/%m/%Y %H:%M", "24/03/2025 07:30", "2025-03-24T07:30:00"),
            ("%d/%m/%Y %H:%M", " 24/03/2025  07:30 ", "2025-03-24T07:30:00"),
            ("%d/%m/%Y %H:%M", "4/3/2025 7:30", "2025-03-04T07:30:00"),
            ("%d/%m/%Y %H:%M", "24/03/2025 07:30:00", "none"),
            ("%d/%m/%Y %H:%M", "24/03/2025", "none"),
            ("%d/%m/%Y %H:%M", "31/04/2025 07:30", "none"),
            ("%d/%m/%Y %H:%M", "29/02/2024 07:30", "2024-02-29T07:30:00"),
            ("%d/%m/%Y %H:%M", "29/02/2025 07:30", "none"),
            ("%d/%m/%Y %H:%M", "24/03/2025 24:00", "none"),
            ("%d/%m/%Y %H:%M", "24/03/2025 07:60", "none"),
            ("%d/%m/%Y %H:%M", "24/13/2025 07:30", "none"),
            ("%d/%m/%Y %H:%M", "24/03/25 07:30", "none"),
            ("%d/%m/%Y %H:%M", "", "none"),
            ("%d/%m/%y %H:%M", "24/03/25 07:30", "2025-03-24T07:30:00"),
            ("%d/%m/%y", "24/03/69", "2069-03-24"),
            ("%d/%m/%y", "24/03/70", "1970-03-24"),
            ("%d.%m.%Y %H:%M:%S", "24.03.2025 07:30:05", "2025-03-24T07:30:05 finer"),
            ("%d.%m.%Y %H:%M:%S", "24.03.2025 07:30:60", "none"),
            ("%Y-%m-%dT%H:%M", "2025-03-24T07:30", "2025-03-24T07:30:00"),
            ("%Y%m%d%H%M", "202503240730", "2025-03-24T07:30:00"),
            ("%Y-%m-%d", "2025-03-24", "2025-03-24"),
            ("%F %T", "2025-03-24 07:30:05", "2025-03-24T07:30:05 finer"),
            ("%d %b %Y %H:%M", "24 mar 2025 07:30", "2025-03-24T07:30:00"),
            ("%d %b %Y %H:%M", "24 MAR 2025 07:30", "2025-03-24T07:30:00"),
            ("%d %b %Y %H:%M", "24 March 2025 07:30", "none"),
            ("%d %b %Y %H:%M", "24 Mär 2025 07:30", "none"),
            ("%d %B %Y", "24 March 2025", "2025-03-24"),
            ("%d %B %Y", "24 Mar 2025", "2025-03-24"),
            ("%d %B %Y", "4 May 2025", "2025-05-04"),
            ("%a %d %b %Y", "Mon 24 Mar 2025", "2025-03-24"),
            ("%a %d %b %Y", "Tue 24 Mar 2025", "none"),
            ("%A, %d %b %Y", "Monday, 24 Mar 2025", "2025-03-24"),
            ("%m/%d/%Y %I:%M:%S %p", "03/24/2025 12:05:00 AM", "2025-03-24T00:05:00 finer"),
            ("%m/%d/%Y %I:%M:%S %p", "03/24/2025 12:05:00 pm", "2025-03-24T12:05:00 finer"),
            ("%m/%d/%Y %I:%M:%S %p", "03/24/2025 1:05:00 Pm", "2025-03-24T13:05:00 finer"),
            ("%m/%d/%Y %I:%M:%S %p", "03/24/2025 13:05:00 PM", "none"),
            ("%m/%d/%Y %I:%M:%S %p", "03/24/2025 00:05:00 AM", "none"),
            ("%m/%d/%Y %I:%M:%S %p", "03/24/2025 1:05:00", "none"),
            ("%Y-%m-%d %H:%M:%S.%f", "2025-03-24 07:30:05.5", "2025-03-24T07:30:05.500 finer"),
            ("%Y-%m-%d %H:%M:%S%.f", "2025-03-24 07:30:05.250", "2025-03-24T07:30:05.250 finer"),
            ("%Y-%m-%d %H:%M:%S%.f", "2025-03-24 07:30:05", "2025-03-24T07:30:05 finer"),
            ("%Y-%m-%d %H:%M %z", "2025-03-24 07:30 +0100", "2025-03-24T07:30:00+01:00"),
            ("%Y-%m-%d %H:%M%z", "2025-03-24 07:30-05:30", "2025-03-24T07:30:00-05:30"),
            ("%Y %j", "2024 366", "2024-12-31"),
            ("%Y %j", "2025 366", "none"),
            ("%s", "1742801400", "2025-03-24T07:30:00+00:00 finer"),
            ("%Hh%M, %d.%m.%Y", "7h30, 24.3.2025", "2025-03-24T07:30:00"),
            ("%e %b %Y %k:%M", " 4 Mar 2025  7:30", "2025-03-04T07:30:00"),
            ("%d/%m/%Y 100%%", "24/03/2025 100%", "2025-03-24"),
        ] {
            assert_eq!(pattern(format, text), expected, "{format} on {text}");
        }
    }

    #[test]
    fn patterns_that_are_faults() {
        for bad in [
            "%d/%m %H:%M",
            "%H:%M",
            "",
            "%d/%m/%Y %I:%M",
            "%d/%m/%Y %M",
            "%d/%m/%Y %H:%S",
            "%d/%m/%Y %p",
            "%d/%m/%Y %Q",
            "%d/%m/%Y %",
            "%Y-W%W-%u",
            "%d/%m/%Y %H:%M %Z",
            "%+",
            "%d/%m/%Y %z",
            "%d/%m/%Y %H:%M%.f",
            "DD/MM/YYYY",
        ] {
            assert!(CompiledStamp::new(&Stamp::Pattern(bad.into())).is_err(), "{bad}");
        }
        assert!(compile("%d/%m/%Y %Q").unwrap_err().contains("%Q"));
    }

    #[test]
    fn iso_texts() {
        for (text, expected) in [
            ("2025-03-24", "2025-03-24"),
            ("20250324", "2025-03-24"),
            ("2025-03-24T07:30", "2025-03-24T07:30:00"),
            ("2025-03-24 07:30", "2025-03-24T07:30:00"),
            ("2025-03-24T07:30:05", "2025-03-24T07:30:05 finer"),
            ("2025-03-24T07:30:05.125", "2025-03-24T07:30:05.125 finer"),
            ("2025-03-24T07:30:05,5", "2025-03-24T07:30:05.500 finer"),
            ("2025-03-24T07:30:05.1234567891234", "2025-03-24T07:30:05.123456789 finer"),
            ("2025-03-24T00:10+01:00", "2025-03-24T00:10:00+01:00"),
            ("2025-03-24T00:10Z", "2025-03-24T00:10:00+00:00"),
            ("2025-03-24 00:10:00 +0100", "2025-03-24T00:10:00+01:00 finer"),
            ("2025-03-24T00:10:00-08", "2025-03-24T00:10:00-08:00 finer"),
            ("20250324T073005Z", "2025-03-24T07:30:05+00:00 finer"),
            ("2025-04-31", "none"),
            ("2025-03-24T24:00", "none"),
            ("2025-03-24T07", "none"),
            ("2025-03-24T", "none"),
            ("2025-03", "none"),
            ("2025-3-24", "none"),
            ("24-03-2025", "none"),
            ("2025-03-24T07:30:60", "none"),
            ("2025-03-24T07:30 Europe/London", "none"),
            ("2025-03-24T07:30:05.", "none"),
            ("2025-03-24T07:30+25:00", "none"),
            ("soon", "none"),
            ("", "none"),
        ] {
            assert_eq!(shown(CompiledStamp::new(&Stamp::Iso).unwrap().read(text)), expected, "{text}");
        }
    }

    /// 45292 = 2024-01-01 in the 1900 system, 2028-01-02 in that of 1904.
    #[test]
    fn serial_texts() {
        for (text, expected) in [
            ("45292", "2024-01-01"),
            ("45292.75", "2024-01-01T18:00:00"),
            ("45292.0", "2024-01-01"),
            ("45740.3125", "2025-03-24T07:30:00"),
            ("45740.31255787037", "2025-03-24T07:30:05 finer"),
            ("45740.312557870", "2025-03-24T07:30:05 finer"),
            ("45740 0.3125", "2025-03-24T07:30:00"),
            ("45740.5 0.3125", "none"),
            ("45740 1.3125", "none"),
            ("45740.999999999", "2025-03-25T00:00:00"),
            ("1", "1900-01-01"),
            ("59", "1900-02-28"),
            ("60", "none"),
            ("60.5", "none"),
            ("61", "1900-03-01"),
            ("0.5", "none"),
            ("-3", "none"),
            ("2958465", "9999-12-31"),
            ("2958466", "none"),
            ("NaN", "none"),
            ("inf", "none"),
            ("2024-01-01", "none"),
        ] {
            assert_eq!(shown(CompiledStamp::new(&Stamp::Serial).unwrap().read(text)), expected, "{text}");
        }
        assert_eq!(shown(serial(45292.0, true)), "2028-01-02");
        assert_eq!(shown(serial(0.0, true)), "1904-01-01");
    }

    proptest::proptest! {
        /// What the pattern's own notation writes is read back.
        #[test]
        fn written_and_read_back(seconds in 0_i64..4_000_000_000, which in 0_usize..8) {
            let local = DateTime::from_timestamp(seconds, 0).unwrap().naive_utc();
            let (pattern, unit) = [
                ("%d/%m/%Y %H:%M", 60),
                ("%m/%d/%Y %I:%M:%S %p", 1),
                ("%Y%m%d%H%M%S", 1),
                ("%a, %e %B %Y %k:%M", 60),
                ("%-d.%-m.%Y %-H:%M", 60),
                ("%A %d-%b-%Y %l:%M %P", 60),
                ("%F %T%.3f", 1),
                ("%Y/%j %R", 60),
            ][which];
            let read = read(&Stamp::Pattern(pattern.into()), &local.format(pattern).to_string());
            let expected = local - TimeDelta::seconds(seconds % unit);
            proptest::prop_assert_eq!(read, Some(Read { written: Written::Local(expected), finer: unit == 1 }));
        }

        #[test]
        fn no_text_does_harm(text in ".{0,24}", digits in "[0-9TZ:.+ -]{0,30}") {
            for text in [&text, &digits] {
                for pattern in ["%s", "%d %b %Y %I:%M %p", "%Y-%m-%d %H:%M:%S.%f %z"] {
                    let _ = read(&Stamp::Pattern(pattern.into()), text);
                }
                let _ = read(&Stamp::Iso, text);
                let _ = read(&Stamp::Serial, text);
            }
        }
    }

    #[test]
    fn odd_texts_do_no_harm() {
        let compiled = CompiledStamp::new(&Stamp::Pattern("%d %b %Y %I:%M %p".into())).unwrap();
        for text in ["é", "24 é", "24 M", "24 Mar 2025 1:05 é", "24 Mar 2025 1:05 p", "99999999999999999999", "\u{0}"]
        {
            assert_eq!(compiled.read(text), None, "{text}");
            assert_eq!(read(&Stamp::Iso, text), None, "{text}");
            assert_eq!(read(&Stamp::Serial, "24 é"), None);
        }
    }
}
