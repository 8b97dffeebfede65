//! Stamps: in which columns the moment is, and how it is written.
//!
//! Invariant: of two ways of reading that differ on what the samples hold, one is taken only when rows speak for it that
//! the other cannot read; otherwise both are said.

use std::collections::BTreeMap;
use std::sync::LazyLock;

use chrono::{DateTime, Days, Utc};
use revisant_schema::plan::Stamp;
use revisant_schema::plan::stamp::{CompiledStamp, Read, Written};

/// Ways of writing a day.
const DAYS: &[&str] = &[
    "%Y-%m-%d",
    "%d.%m.%Y",
    "%d/%m/%Y",
    "%m/%d/%Y",
    "%d-%m-%Y",
    "%m-%d-%Y",
    "%Y/%m/%d",
    "%Y.%m.%d",
    "%d %m %Y",
    "%d %b %Y",
    "%d-%b-%Y",
    "%d.%b.%Y",
    "%d/%b/%Y",
    "%d %B %Y",
    "%b %d, %Y",
    "%B %d, %Y",
    "%b %d %Y",
    "%d%b%Y",
    "%Y%m%d",
    "%d%m%Y",
    "%m%d%Y",
    "%d.%m.%y",
    "%d/%m/%y",
    "%m/%d/%y",
    "%y/%m/%d",
    "%y-%m-%d",
    "%d-%m-%y",
    "%m-%d-%y",
    "%d %b %y",
    "%d-%b-%y",
    "%y%m%d",
    "%d. %B %Y",
    "%a %d %b %Y",
    "%a, %d %b %Y",
];
/// Ways of writing a time of day.
const TIMES: &[&str] = &[
    "%H:%M:%S",
    "%H:%M",
    "%I:%M:%S %p",
    "%I:%M %p",
    "%I:%M:%S%p",
    "%I:%M%p",
    "%H:%M:%S%.f",
    "%H.%M",
    "%H.%M.%S",
    "%H%M",
    "%H%M%S",
    "%H:%M:%S%z",
    "%H:%M:%S %z",
    "%Hh%M",
];
/// What stands between them.
const JOINS: &[&str] = &[" ", "T", ", ", "_", "-"];

/// How many distinct texts are tried.
const MOST_TEXTS: usize = 4000;
/// So many times as many rows must speak for a way of reading as against it.
const OUTWEIGHS: usize = 20;

/// What the texts of one column, or of several joined, come to.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Found {
    /// The format, as the plan writes it; several when the texts do not settle which.
    pub formats: Vec<String>,
    /// Rows that only the first of them reads, against the nearest rival that reads others; `None` without a rival.
    pub settled_by: Option<usize>,
    /// Rows whose text no way reads.
    pub unread: usize,
    /// Rows with a text.
    pub rows: usize,
    /// Whether there is a time of day.
    pub timed: bool,
}

/// Whether a text is a time of day and nothing else.
pub fn is_time(text: &str) -> bool {
    static STAMPS: LazyLock<Vec<CompiledStamp>> =
        LazyLock::new(|| TIMES.iter().filter_map(|time| compile(&format!("%Y-%m-%d {time}"))).collect());
    let dated = format!("2000-01-01 {}", text.trim());
    text.contains(':') && STAMPS.iter().any(|stamp| stamp.read(&dated).is_some())
}

fn compile(format: &str) -> Option<CompiledStamp> {
    CompiledStamp::new(&match format {
        "iso" => Stamp::Iso,
        "serial" => Stamp::Serial,
        pattern => Stamp::Pattern(pattern.to_owned()),
    })
    .ok()
}

/// Every way of writing that is tried, the likelier first.
fn ways() -> Vec<String> {
    let mut ways = vec!["iso".to_owned()];
    for day in DAYS {
        let timed = TIMES.iter().flat_map(|time| JOINS.iter().map(move |join| format!("{day}{join}{time}")));
        ways.extend(timed);
    }
    ways.extend(DAYS.iter().map(|day| (*day).to_owned()));
    ways.push("%s".to_owned());
    ways
}

/// One way of writing, and what it reads of each distinct text.
struct Way {
    format: String,
    reads: Vec<Option<Read>>,
    count: usize,
}

/// How the moment is written in these texts, one a row; `None` when most of them are no stamps.
pub fn find<'a>(texts: impl Iterator<Item = &'a str>, serial: bool, now: DateTime<Utc>) -> Option<Found> {
    let mut distinct: BTreeMap<&str, usize> = BTreeMap::new();
    for text in texts.map(str::trim).filter(|text| !text.is_empty()) {
        if distinct.len() < MOST_TEXTS || distinct.contains_key(text) {
            *distinct.entry(text).or_default() += 1;
        }
    }
    let rows: usize = distinct.values().sum();
    let counts: Vec<usize> = distinct.values().copied().collect();
    let texts: Vec<&str> = distinct.into_keys().collect();
    let formats = if serial { vec!["serial".to_owned()] } else { ways() };
    let mut ways: Vec<Way> = formats.into_iter().filter_map(|format| try_way(format, &texts, &counts, now)).collect();
    let best = ways.iter().map(|way| way.count).max()?;
    if best * 10 < rows * 6 {
        return None;
    }
    ways.sort_by_key(|way| std::cmp::Reverse(way.count));
    let first = ways.first()?;
    let mut found = Found {
        formats: vec![first.format.clone()],
        settled_by: None,
        unread: rows - best,
        rows,
        timed: first.reads.iter().flatten().any(|read| !matches!(read.written, Written::Date(_))),
    };
    for rival in &ways[1..] {
        weigh(first, rival, &counts, &mut found);
    }
    Some(found)
}

/// Adds a rival that the texts do not rule out.
fn weigh(first: &Way, rival: &Way, counts: &[usize], found: &mut Found) {
    let rows = |fits: &dyn Fn(&Option<Read>, &Option<Read>) -> bool| -> usize {
        let pairs = first.reads.iter().zip(&rival.reads).zip(counts);
        pairs.filter(|((one, other), _)| fits(one, other)).map(|(_, count)| count).sum()
    };
    let differ = rows(&|one, other| matches!((one, other), (Some(one), Some(other)) if one.written != other.written));
    if differ == 0 {
        return;
    }
    let only_first = rows(&|one, other| one.is_some() && other.is_none());
    let only_rival = rows(&|one, other| one.is_none() && other.is_some());
    if only_first > only_rival * OUTWEIGHS && only_first > 0 {
        found.settled_by = Some(found.settled_by.map_or(only_first, |least| least.min(only_first)));
    } else if !found.formats.contains(&rival.format) {
        found.formats.push(rival.format.clone());
    }
}

fn try_way(format: String, texts: &[&str], counts: &[usize], now: DateTime<Utc>) -> Option<Way> {
    let stamp = compile(&format)?;
    // Most ways read none of the first texts, and need not be tried on all.
    if !texts.iter().take(40).any(|text| stamp.read(text).is_some()) {
        return None;
    }
    let reads: Vec<Option<Read>> =
        texts.iter().map(|text| stamp.read(text).filter(|read| is_possible(&read.written, now))).collect();
    let count = reads.iter().zip(counts).filter(|(read, _)| read.is_some()).map(|(_, count)| count).sum();
    (count > 0).then_some(Way { format, reads, count })
}

/// No export holds a moment that has not come yet, nor one from before instruments wrote files.
fn is_possible(written: &Written, now: DateTime<Utc>) -> bool {
    let day = match written {
        Written::Date(day) => *day,
        Written::Local(local) => local.date(),
        Written::Moment(moment) => moment.date_naive(),
    };
    let tomorrow = now.date_naive().checked_add_days(Days::new(1)).unwrap_or(now.date_naive());
    day <= tomorrow && chrono::Datelike::year(&day) >= 1980
}

#[cfg(test)]
mod tests {
    use super::*;

    fn formats(texts: &[&str]) -> Option<Vec<String>> {
        let now = "2026-12-01T12:00:00Z".parse().unwrap();
        find(texts.iter().copied(), false, now).map(|found| found.formats)
    }

    #[test]
    fn a_day_beyond_twelve_settles_the_order_and_nothing_else_does() {
        assert_eq!(formats(&["03/04/2025 10:00", "13/04/2025 10:00"]).unwrap(), ["%d/%m/%Y %H:%M"]);
        assert_eq!(formats(&["03/04/2025", "04/13/2025"]).unwrap(), ["%m/%d/%Y"]);
        let open = formats(&["03/04/2025", "04/04/2025", "05/04/2025"]).unwrap();
        assert_eq!(open, ["%d/%m/%Y", "%m/%d/%Y"]);
        // One row for each of two ways settles nothing.
        assert_eq!(formats(&["03/04/2025", "13/04/2025", "04/13/2025"]).unwrap().len(), 2);
    }

    #[test]
    fn short_years_have_three_orders() {
        assert!(formats(&["05/06/07 10:00"]).unwrap().len() >= 3);
        // 2031 has not come yet.
        assert_eq!(formats(&["31/12/25 10:00", "30/11/25 10:00"]).unwrap(), ["%d/%m/%y %H:%M"]);
    }

    #[test]
    fn common_ways_are_found() {
        assert_eq!(formats(&["2025-03-10T10:32"]).unwrap()[0], "iso");
        assert_eq!(formats(&["10 Mar 2025 10:32"]).unwrap(), ["%d %b %Y %H:%M"]);
        assert_eq!(formats(&["03/14/2025 04:00:28 PM"]).unwrap(), ["%m/%d/%Y %I:%M:%S %p"]);
        assert_eq!(formats(&["12.5", "13.25"]), None);
        assert!(is_time("09:30") && is_time("4:05:10 PM") && !is_time("12.5") && !is_time("2025-01-01"));
    }
}
