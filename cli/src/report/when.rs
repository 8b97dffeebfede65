//! Dates and moments, in the study's zone with the zone shown.

use chrono::{DateTime, NaiveDate, SecondsFormat, Utc};
use chrono_tz::Tz;

/// A moment for people: `2026-03-31 14:05 BST`.
pub fn moment(moment: DateTime<Utc>, zone: Tz) -> String {
    moment.with_timezone(&zone).format("%Y-%m-%d %H:%M %Z").to_string()
}

/// A moment as the trail writes it, for people.
pub fn written(text: &str, zone: Tz) -> String {
    DateTime::parse_from_rfc3339(text).map_or_else(|_| text.to_owned(), |at| moment(at.to_utc(), zone))
}

/// When a reading was taken, for people; a bare day where only that is known.
pub fn taken(at: Option<DateTime<Utc>>, day: NaiveDate, zone: Tz) -> String {
    at.map_or_else(|| day.to_string(), |at| moment(at, zone))
}

/// The same where the zone is shown once for all, as in a table's heading.
pub fn taken_here(at: Option<DateTime<Utc>>, day: NaiveDate, zone: Tz) -> String {
    at.map_or_else(|| day.to_string(), |at| at.with_timezone(&zone).format("%Y-%m-%d %H:%M").to_string())
}

/// When a reading was taken, for machines.
pub fn taken_json(at: Option<DateTime<Utc>>, day: NaiveDate, zone: Tz) -> String {
    at.map_or_else(|| day.to_string(), |at| at.with_timezone(&zone).to_rfc3339_opts(SecondsFormat::AutoSi, true))
}

/// Nanoseconds since 1970, for machines.
pub fn of_nanos(nanos: i64) -> DateTime<Utc> {
    DateTime::from_timestamp_nanos(nanos)
}

/// `2 to 9 March`-like spans would need a language's rules: both ends in full.
pub fn span(from: Option<NaiveDate>, until: Option<NaiveDate>) -> String {
    match (from, until) {
        (Some(from), Some(until)) if from == until => from.to_string(),
        (Some(from), Some(until)) => format!("{from} to {until}"),
        _ => "not known yet".to_owned(),
    }
}
