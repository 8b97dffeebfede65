//! Placing filed rows over, after a reader was wrong: each new reading supersedes the one that it corrects.
//!
//! Invariants: a row that the mended reader cannot place leaves its readings as they are; what a person has struck or
//! amended is not changed, its new value is held; any other reading that the mended reader no longer gives is
//! superseded without a successor; nothing is overwritten.

use std::collections::{HashMap, HashSet};

use revisant_schema::hold::Reason;
use revisant_schema::reading::ReadingState;
use revisant_schema::records::intake::Identity;
use revisant_schema::records::view::ReadingRow;
use revisant_schema::records::{Filing, RecordsError, Result};

use super::account::{Account, Class};
use super::file::{Export, Filer, Here, Placing, add_hold, new_reading, row_key};
use super::place::identity::{Case, Judge, Slotted, Verdict};
use super::place::resolve::{Decided, Held, Resolved, Resolver, RowOutcome, ValueOutcome, Whereabouts};
use super::read::{self, At, FileFault, Row};

/// What placing over gave, and the readings that have no successor.
pub type Over = std::result::Result<(Placing, Vec<i64>), FileFault>;

struct Pass<'p> {
    judge: Judge<'p>,
    placing: Placing,
    ended: Vec<i64>,
    orders: HashMap<i64, i64>,
    held_rows: HashSet<At>,
    /// Physical lines that are held now and were not.
    moved: u64,
}

impl Pass<'_> {
    /// Readings without a successor, but for those that a person has seen to.
    fn end(&mut self, olds: &[ReadingRow]) {
        self.ended.extend(olds.iter().filter(|reading| !by_hand(reading)).map(|reading| reading.reading));
    }
}

/// Whether a person has struck or amended it.
fn by_hand(reading: &ReadingRow) -> bool {
    reading.source != 0 || reading.state == ReadingState::Struck
}

impl Filer<'_> {
    /// Places the lines of an export over; `old` are its readings that no other has superseded, by row.
    pub fn place_over(
        &mut self,
        export: &Export,
        lines: &[At],
        mut old: HashMap<At, Vec<ReadingRow>>,
    ) -> Result<(Filing, Over)> {
        let mut filing = self.records.new_filing(Some(export.capture))?;
        let rules = self.rules;
        let instrument = &rules.plan.instruments[export.instrument];
        let wanted = read::wanted(&instrument.reader);
        let whereabouts = Whereabouts { file_name: &export.file_name, folder: &export.below };
        let resolver = Resolver::new(&rules.plan, instrument, &rules.roster, self.now, &wanted, whereabouts);
        let mut resolver = resolver.map_err(RecordsError::Refused)?;
        if let Err(fault) = super::plan::settle_doubled(&mut resolver, instrument, &export.source) {
            return Ok((filing, Err(fault)));
        }
        let mut rows = match read::open(&instrument.reader, &export.source) {
            Ok(rows) => rows,
            Err(fault) => return Ok((filing, Err(fault))),
        };
        let wanted_rows: HashSet<At> = lines.iter().copied().collect();
        let mut pass = Pass {
            judge: Judge::new(instrument, export.capture),
            placing: Placing::default(),
            ended: vec![],
            orders: HashMap::new(),
            held_rows: HashSet::new(),
            moved: 0,
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
            if wanted_rows.contains(&row.at()) {
                let olds = old.remove(&row.at()).unwrap_or_default();
                let outcome = resolver.resolve(&row, rows.as_ref(), &Decided::default());
                let here = Here { resolver: &resolver, row: &row, rows: rows.as_ref() };
                self.row_over(&mut filing, export, &here, outcome, olds, &mut pass)?;
            }
        }
        for line in lines {
            pass.end(&old.remove(line).unwrap_or_default());
        }
        let before = self.records.account_of(export.capture)?;
        let before: Account = before.and_then(|text| serde_json::from_str(&text).ok()).unwrap_or_default();
        pass.placing.account.take(rows.counts(), rows.lines());
        pass.placing.account.rest_as(&before);
        pass.placing.account.hold(pass.moved);
        Ok((filing, Ok((pass.placing, pass.ended))))
    }

    fn row_over(
        &mut self,
        filing: &mut Filing,
        export: &Export,
        here: &Here<'_>,
        outcome: RowOutcome,
        mut olds: Vec<ReadingRow>,
        pass: &mut Pass<'_>,
    ) -> Result<()> {
        let resolved = match outcome {
            RowOutcome::Held(_) => return Ok(()),
            RowOutcome::NoValue => {
                pass.end(&olds);
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
                Some(reading) if by_hand(&reading) => {
                    self.hold_over(filing, here, &case, &reading, pass)?;
                    continue;
                }
                Some(reading) => Some(self.slot_over(export, &case, &reading, pass)),
                None => match pass.judge.judge(self.records, &case)? {
                    Verdict::File(slot) => Some(slot),
                    Verdict::Already(_) | Verdict::Left | Verdict::Held(_) => None,
                },
            };
            if let Some(slot) = slot {
                let instrument = &self.rules.plan.instruments[export.instrument];
                let cell = here.cell(&value.column);
                let new = new_reading(self.rules, instrument, (here.row, cell.as_deref()), &case, slot);
                let reading = self.records.add_reading(filing, &new)?;
                pass.judge.filed(reading, slot);
                pass.placing.outcome.filed += 1;
            }
        }
        if !any_held {
            pass.end(&olds);
        }
        Ok(())
    }

    /// Holds the new value of a reading that a person has struck or amended.
    fn hold_over(
        &mut self,
        filing: &mut Filing,
        here: &Here<'_>,
        case: &Case<'_>,
        old: &ReadingRow,
        pass: &mut Pass<'_>,
    ) -> Result<()> {
        let wrong = format!(
            "the mended reader gives {} {}; a person has struck or amended reading {}",
            case.value.number, case.measure.unit, old.reading
        );
        let held = Held::row(Reason::ChangedValue, wrong).on(&case.value.column).about(old.reading);
        let cell = here.cell(&case.value.column);
        let key = row_key(here.resolver.row_hash(here.row, here.rows), 1);
        add_hold(self.records, filing, Some((here.row, cell.as_deref())), &held, &key)?;
        pass.placing.outcome.held += 1;
        if pass.held_rows.insert(here.row.at()) {
            pass.moved += here.row.lines;
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
