//! Days and windows: the arithmetic of visits.
//!
//! Invariants: pure; days are local calendar dates; nothing here can panic, dates beyond the calendar stop at its ends.

use chrono::{NaiveDate, TimeDelta};

use super::model::{Plan, Visit, VisitIx};

/// The dates of one visit of one subject; all ends are in.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Span {
    /// The planned day.
    pub target: NaiveDate,
    /// First day on time.
    pub from: NaiveDate,
    /// Last day on time.
    pub until: NaiveDate,
    /// First day that still counts as this visit.
    pub counts_from: NaiveDate,
    /// Last day that still counts as this visit.
    pub counts_until: NaiveDate,
}

impl Span {
    /// Whether the day is on time.
    pub fn on_time(&self, date: NaiveDate) -> bool {
        self.from <= date && date <= self.until
    }

    /// Whether the day still counts as this visit.
    pub fn counts(&self, date: NaiveDate) -> bool {
        self.counts_from <= date && date <= self.counts_until
    }

    /// Days between the planned day and this one, whichever is later.
    pub fn distance(&self, date: NaiveDate) -> u64 {
        days_between(self.target, date).unsigned_abs()
    }
}

/// Days from `anchor` to `date`; negative when `date` is earlier.
pub fn days_between(anchor: NaiveDate, date: NaiveDate) -> i64 {
    date.signed_duration_since(anchor).num_days()
}

/// The trade's study day, which has no day 0: the reference day is day 1, the day before it day -1 (CDISC's rule).
pub fn study_day(anchor: NaiveDate, date: NaiveDate) -> i64 {
    let days = days_between(anchor, date);
    if days >= 0 { days + 1 } else { days }
}

/// The day that lies `days` after `date`, or the calendar's end on that side.
pub fn plus_days(date: NaiveDate, days: i64) -> NaiveDate {
    let end = if days < 0 { NaiveDate::MIN } else { NaiveDate::MAX };
    TimeDelta::try_days(days).and_then(|delta| date.checked_add_signed(delta)).unwrap_or(end)
}

/// The dates of a visit whose days are counted from `day0`: the subject's day 0, or for a visit with `after` the date
/// of that visit's session.
pub fn span(visit: &Visit, day0: NaiveDate) -> Span {
    let on = |offset: i64| plus_days(day0, visit.day.saturating_add(offset));
    Span {
        target: on(0),
        from: on(visit.window.0),
        until: on(visit.window.1),
        counts_from: on(visit.counts.0),
        counts_until: on(visit.counts.1),
    }
}

/// The visit whose `counts` hold the date, and whether the date lies outside its window.
///
/// `day0` gives the date from which a visit's days are counted for this subject; `None` when it is not known. Visits
/// counted from the same day never overlap in a sound plan. Two that are counted from different sessions may: then one
/// that is on time goes before one that is not, the nearer before the farther, the earlier of the plan before the later.
pub fn visit_on(plan: &Plan, date: NaiveDate, day0: impl Fn(VisitIx) -> Option<NaiveDate>) -> Option<(VisitIx, bool)> {
    plan.visits
        .iter()
        .enumerate()
        .filter_map(|(index, visit)| Some((index, span(visit, day0(index)?))))
        .filter(|(_, span)| span.counts(date))
        .map(|(index, span)| (!span.on_time(date), span.distance(date), index))
        .min()
        .map(|(off_window, _, index)| (index, off_window))
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::plan::{Choose, Tie};

    fn day(text: &str) -> NaiveDate {
        text.parse().unwrap()
    }

    fn visit(day: i64, window: (i64, i64), counts: (i64, i64)) -> Visit {
        Visit {
            code: format!("d{day}"),
            label: String::new(),
            day,
            window,
            counts,
            measures: vec![],
            choose: Choose::Nearest,
            tie: Tie::Later,
            after: None,
        }
    }

    /// CDISC's study day rule, with the check values of its published examples.
    #[test]
    fn study_day_has_no_day_zero() {
        let anchor = day("2025-03-10");
        for (date, study, elapsed) in [
            ("2025-02-28", -10, -10),
            ("2025-03-09", -1, -1),
            ("2025-03-10", 1, 0),
            ("2025-03-11", 2, 1),
            ("2025-03-24", 15, 14),
        ] {
            assert_eq!(study_day(anchor, day(date)), study, "{date}");
            assert_eq!(days_between(anchor, day(date)), elapsed, "{date}");
        }
        // The leap day counts.
        assert_eq!(days_between(day("2024-02-28"), day("2024-03-01")), 2);
    }

    /// Study days [-7..1], [12..18], [25..33], [50..64] about targets 1, 15, 29, 57, as elapsed days.
    #[test]
    fn which_visit_a_date_belongs_to() {
        let plan = crate::plan::model::tests::empty(vec![
            visit(0, (-7, 0), (-7, 0)),
            visit(14, (-3, 3), (-3, 3)),
            visit(28, (-4, 4), (-4, 6)),
            visit(56, (-7, 7), (-7, 7)),
        ]);
        let anchor = day("2025-03-10");
        let on = |date: &str| visit_on(&plan, day(date), |_| Some(anchor));
        assert_eq!(on("2025-03-03"), Some((0, false)), "the first day of the window is in");
        assert_eq!(on("2025-03-02"), None);
        assert_eq!(on("2025-03-09"), Some((0, false)));
        assert_eq!(on("2025-03-11"), None);
        assert_eq!(on("2025-03-20"), None);
        assert_eq!(on("2025-03-21"), Some((1, false)));
        assert_eq!(on("2025-03-27"), Some((1, false)), "the last day of the window is in");
        assert_eq!(on("2025-03-28"), None);
        assert_eq!(on("2025-04-04"), Some((2, false)));
        assert_eq!(on("2025-04-12"), Some((2, true)), "late: still this visit, but off-window");
        assert_eq!(on("2026-03-24"), None, "a wrong year is in no window");
        assert_eq!(visit_on(&plan, day("2025-03-10"), |_| None), None, "no day 0, no visit");
        // Day 0 corrected by two days: the session of the 21st leaves its window.
        let moved = |date: &str| visit_on(&plan, day(date), |_| Some(day("2025-03-12")));
        assert_eq!(moved("2025-03-21"), None);
        assert_eq!(moved("2025-04-07"), Some((2, false)));
    }

    #[test]
    fn distances_and_edges() {
        let anchor = day("2025-03-10");
        let late = span(&visit(28, (-4, 4), (-4, 6)), anchor);
        assert_eq!(late.target, day("2025-04-07"));
        assert_eq!((late.distance(day("2025-04-04")), late.distance(day("2025-04-08"))), (3, 1));
        assert_eq!((late.distance(day("2025-04-05")), late.distance(day("2025-04-09"))), (2, 2));
        // B = A's session and 14 days, two days either way; A was held on the 27th.
        let rolling = span(&visit(14, (-2, 2), (-2, 2)), day("2025-03-27"));
        assert_eq!(
            (rolling.from, rolling.target, rolling.until),
            (day("2025-04-08"), day("2025-04-10"), day("2025-04-12"))
        );
        // Beyond the calendar nothing panics.
        let far = span(&visit(i64::MAX, (i64::MIN, i64::MAX), (i64::MIN, i64::MAX)), anchor);
        assert_eq!(far.target, NaiveDate::MAX);
        assert_eq!(far.until, NaiveDate::MAX);
        assert_eq!(plus_days(anchor, i64::MIN), NaiveDate::MIN);
    }
}
