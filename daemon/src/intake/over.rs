//! Placing filed rows over, after a reader was wrong: each new reading supersedes the one that it corrects.
//!
//! Invariants: a row that the mended reader cannot place leaves its readings as they are; a reading that the mended
//! reader no longer gives is superseded without a successor; nothing is overwritten.

use std::collections::{HashMap, HashSet};

use revisant_schema::records::intake::Identity;
use revisant_schema::records::view::ReadingRow;
use revisant_schema::records::{Filing, RecordsError, Result};

use super::account::{Account, Class};
use super::file::{Export, Filer, Placing, new_reading};
use super::place::identity::{Case, Judge, Slotted, Verdict};
use super::place::resolve::{Decided, Resolved, Resolver, RowOutcome, ValueOutcome, Whereabouts};
use super::read::{self, FileFault, Row};

/// What placing over gave, and the readings that have no successor.
pub type Over = std::result::Result<(Placing, Vec<i64>), FileFault>;

struct Pass<'p> {
    judge: Judge<'p>,
    placing: Placing,
    ended: Vec<i64>,
    orders: HashMap<i64, i64>,
}

impl Filer<'_> {
    /// Places the lines of an export over; `old` are its readings that no other has superseded, by line.
    pub fn place_over(
        &mut self,
        export: &Export,
        lines: &[u64],
        mut old: HashMap<i64, Vec<ReadingRow>>,
    ) -> Result<(Filing, Over)> {
        let mut filing = self.records.new_filing(Some(export.capture))?;
        let rules = self.rules;
        let instrument = &rules.plan.instruments[export.instrument];
        let wanted = read::wanted(&instrument.reader);
        let whereabouts = Whereabouts { file_name: &export.file_name, folder: &export.below };
        let resolver = Resolver::new(&rules.plan, instrument, &rules.roster, self.now, &wanted, whereabouts);
        let resolver = resolver.map_err(RecordsError::Refused)?;
        let mut rows = match read::open(&instrument.reader, &export.source) {
            Ok(rows) => rows,
            Err(fault) => return Ok((filing, Err(fault))),
        };
        let wanted_lines: HashSet<u64> = lines.iter().copied().collect();
        let mut pass = Pass {
            judge: Judge::new(instrument, export.capture),
            placing: Placing::default(),
            ended: vec![],
            orders: HashMap::new(),
        };
        let mut row = Row::default();
        loop {
            match rows.next_row(&mut row) {
                Ok(true) => {}
                Ok(false) => break,
                Err(fault) => return Ok((filing, Err(fault))),
            }
            if resolver.nothing_there(&row, rows.as_ref()) {
                pass.placing.account.add(Class::NoValue, row.lines);
            }
            if wanted_lines.contains(&row.line) {
                let olds = old.remove(&(row.line as i64)).unwrap_or_default();
                let outcome = resolver.resolve(&row, rows.as_ref(), &Decided::default());
                self.row_over(&mut filing, export, &row, outcome, olds, &mut pass)?;
            }
        }
        for line in lines {
            let olds = old.remove(&(*line as i64)).unwrap_or_default();
            pass.ended.extend(olds.iter().map(|reading| reading.reading));
        }
        let before = self.records.account_of(export.capture)?;
        let before: Account = before.and_then(|text| serde_json::from_str(&text).ok()).unwrap_or_default();
        pass.placing.account.take(rows.counts(), rows.lines());
        pass.placing.account.rest_as(&before);
        Ok((filing, Ok((pass.placing, pass.ended))))
    }

    fn row_over(
        &mut self,
        filing: &mut Filing,
        export: &Export,
        row: &Row,
        outcome: RowOutcome,
        mut olds: Vec<ReadingRow>,
        pass: &mut Pass<'_>,
    ) -> Result<()> {
        let resolved = match outcome {
            RowOutcome::Held(_) => return Ok(()),
            RowOutcome::NoValue => {
                pass.ended.extend(olds.iter().map(|reading| reading.reading));
                return Ok(());
            }
            RowOutcome::Ready(resolved) if resolved.outside.is_some() => return Ok(()),
            RowOutcome::Ready(resolved) => resolved,
        };
        let any_held = resolved.values.iter().any(|value| matches!(value, ValueOutcome::Held(_)));
        for value in &resolved.values {
            let ValueOutcome::Number(value) = value else { continue };
            let measure = &self.rules.plan.measures[value.measure];
            let case = Case { row: &resolved, value, measure, twin: None };
            let same = |reading: &ReadingRow| {
                reading.measure == measure.code && reading.condition.to_string() == value.condition
            };
            let at = olds.iter().position(same).or((!olds.is_empty()).then_some(0));
            let slot = match at.map(|at| olds.remove(at)) {
                Some(reading) if unchanged(&reading, &case) => continue,
                Some(reading) => Some(self.slot_over(export, &case, &reading, pass)),
                None => match pass.judge.judge(self.records, &case)? {
                    Verdict::File(slot) => Some(slot),
                    Verdict::Already(_) | Verdict::Left | Verdict::Held(_) => None,
                },
            };
            if let Some(slot) = slot {
                let instrument = &self.rules.plan.instruments[export.instrument];
                let new = new_reading(self.rules, instrument, row, &case, slot);
                let reading = self.records.add_reading(filing, &new)?;
                pass.judge.filed(reading, slot);
                pass.placing.outcome.filed += 1;
            }
        }
        if !any_held {
            pass.ended.extend(olds.iter().map(|reading| reading.reading));
        }
        Ok(())
    }

    fn slot_over(&self, export: &Export, case: &Case<'_>, old: &ReadingRow, pass: &mut Pass<'_>) -> Slotted {
        let identity = Identity {
            instrument: &self.rules.plan.instruments[export.instrument].code,
            measure: &case.measure.code,
            condition: &case.value.condition,
            subject: &case.row.subject,
            written: &case.row.written,
        };
        let identity = identity.hash();
        let order = pass.orders.entry(identity).or_insert(0);
        *order += 1;
        let label = case.value.replicate.or(case.row.replicate);
        Slotted {
            replicate: label.unwrap_or(old.replicate),
            labelled: label.is_some(),
            identity,
            ordinal: *order,
            supersedes: Some(old.reading),
        }
    }
}

/// Whether a reading already says what the mended reader says.
fn unchanged(reading: &ReadingRow, case: &Case<'_>) -> bool {
    let Resolved { subject, day, moment, label, replicate, .. } = case.row;
    reading.session.subject == *subject
        && reading.session.day == *day
        && reading.session.label == *label
        && reading.moment == *moment
        && reading.measure == case.measure.code
        && reading.condition.to_string() == case.value.condition
        && reading.number == Some(case.value.number)
        && reading.mark.as_deref() == case.value.mark
        && case.value.replicate.or(*replicate).is_none_or(|number| number == reading.replicate)
}
