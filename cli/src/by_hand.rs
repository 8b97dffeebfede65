//! Readings that a person writes: entered, or amended from others.
//!
//! Invariants: what a person writes is held to the same rules as what an instrument exports (roster, conditions,
//! plausible bounds, replicates), and is refused rather than held; an amended reading keeps the provenance of the one
//! that it supersedes and has no identity in any export.

use chrono::{DateTime, NaiveDate, Utc};
use revisant_schema::plan::Measure;
use revisant_schema::reading::{Condition, ReadingState};
use revisant_schema::records::view::{ReadingFilter, ReadingRow, day_number};
use revisant_schema::records::{Act, NewReading, Result as RecordsResult, View};
use revisant_schema::session::UNSCHEDULED;

use crate::error::Failure;
use crate::report::number::plain;
use crate::study::Basis;

/// A reading as a person writes it, owned so that it can be checked before anything is written.
#[derive(Debug, Clone, PartialEq)]
pub struct Written {
    /// The capture it is from, for an amended one.
    pub capture: Option<i64>,
    /// Where in that.
    pub line: Option<i64>,
    /// First byte and the one after the last.
    pub bytes: Option<(i64, i64)>,
    /// A workbook's cell.
    pub cell: Option<String>,
    /// Empty for one entered by hand.
    pub instrument: String,
    /// The measure's code.
    pub measure: String,
    /// Its condition.
    pub condition: Condition,
    /// The replicate's number.
    pub replicate: u32,
    /// Whether that was said.
    pub labelled: bool,
    /// Whose.
    pub subject: String,
    /// The local day.
    pub day: NaiveDate,
    /// The visit's label.
    pub label: Option<String>,
    /// The value as written.
    pub text: String,
    /// The number as written, in `unit`.
    pub exported: Option<f64>,
    /// Empty: the measure's.
    pub unit: String,
    /// In the measure's unit.
    pub number: f64,
    /// `<` or `>`.
    pub mark: Option<String>,
    /// The time as written.
    pub written: Option<String>,
    /// The moment.
    pub moment: Option<DateTime<Utc>>,
    /// Empty when not said.
    pub operator: String,
    /// The reading whose place it takes.
    pub supersedes: Option<i64>,
}

impl Written {
    /// A reading like another, which it is to supersede.
    pub fn like(row: &ReadingRow) -> Result<Self, Failure> {
        let Some(number) = row.number else {
            return Err(Failure::refused(format!("the value of reading {} was removed", row.reading)));
        };
        current(row)?;
        Ok(Self {
            capture: row.capture,
            line: row.line,
            bytes: row.bytes,
            cell: row.cell.clone(),
            instrument: row.instrument.clone(),
            measure: row.measure.clone(),
            condition: row.condition.clone(),
            replicate: row.replicate,
            labelled: row.labelled,
            subject: row.session.subject.clone(),
            day: row.session.day,
            label: row.session.label.clone(),
            text: row.text.clone().unwrap_or_default(),
            exported: row.exported,
            unit: row.unit.clone(),
            number,
            mark: row.mark.clone(),
            written: row.written.clone(),
            moment: row.moment,
            operator: row.operator.clone(),
            supersedes: Some(row.reading),
        })
    }

    /// The same with another value, in the measure's unit.
    pub fn with_value(mut self, text: &str, number: f64) -> Self {
        self.text = text.trim().to_owned();
        self.exported = Some(number);
        self.unit = String::new();
        self.number = number;
        self.mark = None;
        self
    }

    /// Adds them to an act, in as many filings as there are captures; gives their numbers in the order given.
    pub fn file(act: &mut Act<'_>, written: &[Self], plan: i64, source: i64) -> RecordsResult<Vec<i64>> {
        let mut captures: Vec<Option<i64>> = written.iter().map(|it| it.capture).collect();
        captures.sort_unstable();
        captures.dedup();
        let mut numbers = vec![0; written.len()];
        for capture in captures {
            let mut filing = act.records().new_filing(capture)?;
            for (at, one) in written.iter().enumerate().filter(|(_, one)| one.capture == capture) {
                numbers[at] = one.add(act, &mut filing, plan, source)?;
            }
            act.publish(filing)?;
        }
        Ok(numbers)
    }

    fn add(
        &self,
        act: &mut Act<'_>,
        filing: &mut revisant_schema::records::Filing,
        plan: i64,
        source: i64,
    ) -> RecordsResult<i64> {
        let condition = self.condition.to_string();
        let new = NewReading {
            line: self.line,
            bytes: self.bytes,
            cell: self.cell.as_deref(),
            instrument: &self.instrument,
            measure: &self.measure,
            condition: &condition,
            replicate: self.replicate,
            labelled: self.labelled,
            subject: &self.subject,
            day: day_number(self.day),
            label: self.label.as_deref().unwrap_or(""),
            text: &self.text,
            exported: self.exported,
            unit: &self.unit,
            number: self.number,
            mark: self.mark.as_deref(),
            written: self.written.as_deref(),
            moment: self.moment.map(|moment| moment.timestamp_millis()),
            operator: &self.operator,
            plan,
            identity: None,
            ordinal: 0,
            supersedes: self.supersedes,
            source,
        };
        act.records().add_reading(filing, &new)
    }
}

/// Refuses a reading that is no longer in use.
pub fn current(row: &ReadingRow) -> Result<(), Failure> {
    match row.state {
        ReadingState::Current => Ok(()),
        state => Err(Failure::refused(format!("reading {} is {}", row.reading, state.code()))
            .then(format!("`revisant provenance {}` shows its history", row.reading))),
    }
}

/// A number in a person's writing.
pub fn number(text: &str) -> Result<f64, Failure> {
    let parsed = text.trim().parse::<f64>().ok().filter(|number| number.is_finite());
    let plain = text.trim().chars().all(|c| c.is_ascii_digit() || "+-.eE".contains(c));
    parsed.filter(|_| plain).ok_or_else(|| Failure::usage(format!("\"{text}\" is no number")).then("write it as 31.5"))
}

/// Refuses a value outside the plan's bounds, unless it is said to be right.
pub fn plausible(measure: &Measure, number: f64, as_it_stands: bool) -> Result<(), Failure> {
    match measure.plausible {
        Some((low, high)) if !(low..=high).contains(&number) && !as_it_stands => {
            let bounds = format!("{} to {} {}", plain(low), plain(high), measure.unit);
            let what = format!("{} lies outside the plausible bounds of {}, {bounds}", plain(number), measure.code);
            Err(Failure::new("implausible-value", what).then("if it is right all the same, add --as-it-stands"))
        }
        _ => Ok(()),
    }
}

/// The visit's label that a person gave, checked.
pub fn label(basis: &Basis, visit: &str) -> Result<String, Failure> {
    match visit {
        UNSCHEDULED => Ok(UNSCHEDULED.to_owned()),
        code => Ok(basis.plan.visits[basis.visit(code)?].code.clone()),
    }
}

/// Refuses a day on which the subject was not in the study.
pub fn in_study(basis: &Basis, subject: &str, day: NaiveDate) -> Result<(), Failure> {
    let Some(entry) = basis.roster.subjects.get(subject) else { return Ok(()) };
    if let Some(enrolled) = entry.enrolled.filter(|enrolled| day < *enrolled) {
        return Err(Failure::refused(format!("{day} lies before the enrolment of {subject} on {enrolled}")));
    }
    if let Some(withdrawn) = entry.withdrawn.filter(|withdrawn| day > *withdrawn) {
        return Err(Failure::refused(format!("{day} lies after the withdrawal of {subject} on {withdrawn}")));
    }
    Ok(())
}

/// The condition that a person gave: one level of every factor of the measure, and nothing else.
pub fn condition(measure: &Measure, given: &[(String, String)]) -> Result<Condition, Failure> {
    for (factor, level) in given {
        let known = measure.conditions.iter().find(|it| it.code == *factor);
        let fits = known.is_some_and(|known| known.levels.contains(level));
        if !fits {
            let right =
                known.map_or_else(|| factors(measure), |known| format!("{factor} is {}", known.levels.join(" or ")));
            return Err(Failure::refused(format!("{factor}={level} is no condition of {}", measure.code)).then(right));
        }
    }
    let condition = Condition(given.iter().cloned().collect());
    match measure.conditions.iter().find(|factor| !condition.0.contains_key(&factor.code)) {
        Some(missing) => {
            Err(Failure::usage(format!("the condition {} of {} is not given", missing.code, measure.code)).then(
                format!("add --condition {}={}", missing.code, missing.levels.join(&format!(" or {}=", missing.code))),
            ))
        }
        None => Ok(condition),
    }
}

fn factors(measure: &Measure) -> String {
    let codes: Vec<&str> = measure.conditions.iter().map(|factor| factor.code.as_str()).collect();
    if codes.is_empty() { "it has none".to_owned() } else { format!("it has {}", codes.join(", ")) }
}

/// Current readings of a measure and condition in the session that a subject, day and label make.
pub fn in_the_cell(
    view: &View<'_>,
    basis: &Basis,
    measure: &str,
    condition: &Condition,
    session: &revisant_schema::records::view::SessionRow,
) -> Result<Vec<ReadingRow>, Failure> {
    let (subject, measure) = (Some(session.subject.clone()), Some(measure.to_owned()));
    let rows = view.readings(&ReadingFilter { subject, measure, ..ReadingFilter::default() })?;
    let place = basis.place(session);
    let same = |row: &ReadingRow| {
        let there = basis.place(&row.session);
        row.state == ReadingState::Current
            && row.condition == *condition
            && row.session.day == session.day
            && there.visit == place.visit
    };
    Ok(rows.into_iter().filter(same).collect())
}

/// Refuses a reading whose replicate's number is taken by another current one of its instrument, unless that one is
/// superseded at the same time.
pub fn refuse_taken(view: &View<'_>, basis: &Basis, new: &[Written]) -> Result<(), Failure> {
    let leaving: Vec<i64> = new.iter().filter_map(|one| one.supersedes).collect();
    for one in new {
        let session = revisant_schema::records::view::SessionRow {
            session: 0,
            subject: one.subject.clone(),
            day: one.day,
            label: one.label.clone(),
        };
        let there = in_the_cell(view, basis, &one.measure, &one.condition, &session)?;
        let taken = there.iter().find(|row| {
            row.replicate == one.replicate && row.instrument == one.instrument && !leaving.contains(&row.reading)
        });
        if let Some(row) = taken {
            let what = format!(
                "replicate {} of {} stands there already, as reading {}",
                one.replicate, one.measure, row.reading
            );
            return Err(
                Failure::refused(what).then("give another number with --replicate, or strike that reading first")
            );
        }
    }
    Ok(())
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn numbers_are_numbers() {
        assert_eq!(number(" 31.5 ").unwrap(), 31.5);
        assert_eq!(number("-1e3").unwrap(), -1000.0);
        for text in ["", "nan", "inf", "31,5", "31.5 kg", "1e999"] {
            assert!(number(text).is_err(), "{text}");
        }
    }
}
