//! The second half of placing: whether a value has been filed before, and which replicate it is.
//!
//! Invariants: the same reading is never filed twice; what only looks the same is held, never swallowed; a replicate's
//! number is taken once in a session by one instrument.

use std::collections::{HashMap, HashSet};

use revisant_schema::hold::{Answer, INSTEAD_OF, Reason};
use revisant_schema::plan::{Changed, Instrument, Measure, ReExport};
use revisant_schema::records::intake::{Candidate, Identity, Slot};
use revisant_schema::records::texts::SessionId;
use revisant_schema::records::view::day_number;
use revisant_schema::records::{Records, Result};

use super::resolve::{Held, PlacedValue, Resolved};

/// What is to be done with a value.
#[derive(Debug, Clone, PartialEq)]
pub enum Verdict {
    /// File it.
    File(Slotted),
    /// This reading is it.
    Already(i64),
    /// A person has said that the old value stays.
    Left,
    /// Hold it.
    Held(Held),
}

/// Where a value goes.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Slotted {
    /// The replicate's number.
    pub replicate: u32,
    /// Whether that came from the export.
    pub labelled: bool,
    /// Hash of what identifies it.
    pub identity: i64,
    /// Its order among equals in the export.
    pub ordinal: i64,
    /// The reading whose place it takes.
    pub supersedes: Option<i64>,
}

/// What one export has shown so far.
pub struct Judge<'p> {
    instrument: &'p Instrument,
    capture: i64,
    seen: HashMap<i64, i64>,
    /// Replicates that stand in the cells met last, so that a row need not ask for them again.
    slots: HashMap<CellKey, Vec<Slot>>,
    at: Option<CellKey>,
    /// Readings filed before that this export holds too.
    pub matched: HashSet<i64>,
    /// Placing a row again later: its order among equals follows those that its export has filed.
    pub again: bool,
}

/// A cell of a session: the sessions that are one occasion, the measure's code, the condition's text.
type CellKey = ([Option<SessionId>; 2], String, String);

/// Cells remembered at once.
const MOST_CELLS: usize = 4096;

/// A value with its row, and the label of the other session that is the same occasion, if any.
pub struct Case<'c> {
    /// The row.
    pub row: &'c Resolved,
    /// The value.
    pub value: &'c PlacedValue,
    /// Its measure.
    pub measure: &'c Measure,
    /// A session of the same subject and day with this label lies at the same visit.
    pub twin: Option<&'c str>,
}

impl<'c> Case<'c> {
    fn label(&self) -> &'c str {
        self.row.label.as_deref().unwrap_or_default()
    }
}

impl<'p> Judge<'p> {
    /// Starts an export.
    pub fn new(instrument: &'p Instrument, capture: i64) -> Self {
        Self {
            instrument,
            capture,
            seen: HashMap::new(),
            slots: HashMap::new(),
            at: None,
            matched: HashSet::new(),
            again: false,
        }
    }

    /// The capture judged.
    pub fn capture(&self) -> i64 {
        self.capture
    }

    /// What identifies a value, whatever export it stands in.
    fn identity<'c>(instrument: &'c Instrument, case: &Case<'c>) -> Identity<'c> {
        Identity {
            instrument: &instrument.code,
            measure: &case.measure.code,
            condition: &case.value.condition,
            subject: &case.row.subject,
            written: &case.row.written,
        }
    }

    /// Whether an earlier export had a value that is identified alike.
    pub fn came_before(&self, records: &mut Records, case: &Case<'_>) -> Result<bool> {
        let candidates = records.candidates(&Self::identity(self.instrument, case))?;
        Ok(candidates.iter().any(|known| known.capture != Some(self.capture)))
    }

    /// Judges one value.
    pub fn judge(&mut self, records: &mut Records, case: &Case<'_>) -> Result<Verdict> {
        let identity = Self::identity(self.instrument, case);
        self.at = None;
        let candidates = records.candidates(&identity)?;
        let hash = identity.hash();
        let label = case.value.replicate.or(case.row.replicate);
        let label = match case.value.decided {
            Some(Answer::Replicate(number) | Answer::InsteadOf(number)) => Some(number),
            _ => label,
        };
        match label {
            Some(number) => self.labelled(records, case, &candidates, hash, number),
            None => self.unlabelled(records, case, &candidates, hash),
        }
    }

    fn labelled(
        &mut self,
        records: &mut Records,
        case: &Case<'_>,
        candidates: &[Candidate],
        identity: i64,
        number: u32,
    ) -> Result<Verdict> {
        let same = candidates.iter().rev().find(|known| known.labelled && known.replicate == number);
        if let Some(known) = same {
            return self.same_or_changed(records, case, known, identity);
        }
        let taken = self.slots(records, case)?.iter().find(|slot| slot.replicate == number).copied();
        let slotted = |supersedes| Slotted { replicate: number, labelled: true, identity, ordinal: 1, supersedes };
        match (&case.value.decided, taken) {
            (Some(Answer::InsteadOf(_)), taken) => Ok(Verdict::File(slotted(taken.map(|slot| slot.reading)))),
            (_, Some(taken)) => Ok(Verdict::Held(taken_already(case, number, &taken))),
            (Some(Answer::Replicate(_)), None) => Ok(Verdict::File(slotted(None))),
            _ if number == 0 || number > case.measure.replicates => Ok(Verdict::Held(beyond_plan(case, number))),
            _ => Ok(Verdict::File(slotted(None))),
        }
    }

    fn unlabelled(
        &mut self,
        records: &mut Records,
        case: &Case<'_>,
        candidates: &[Candidate],
        identity: i64,
    ) -> Result<Verdict> {
        let ordinal = self.ordinal(candidates, identity);
        let earlier = |known: &&Candidate| !known.labelled && known.capture != Some(self.capture);
        let proof = self.instrument.re_export != ReExport::New || case.row.finer;
        if proof {
            let free = |known: &&Candidate| earlier(known) && !self.matched.contains(&known.reading);
            let newest = candidates.iter().rev();
            let found = newest
                .clone()
                .find(|known| free(known) && known.ordinal == ordinal && equal(case.value, known))
                .or_else(|| newest.clone().find(|known| free(known) && equal(case.value, known)))
                .or_else(|| newest.clone().find(|known| free(known) && known.ordinal == ordinal));
            if let Some(known) = found {
                return self.same_or_changed(records, case, known, identity);
            }
        } else if let Some(known) = candidates.iter().find(|known| earlier(known) && equal(case.value, known)) {
            return Ok(Verdict::Held(looks_the_same(case, known)));
        }
        let number = 1 + self.slots(records, case)?.iter().map(|slot| slot.replicate).max().unwrap_or(0);
        if number > case.measure.replicates {
            return Ok(Verdict::Held(beyond_plan(case, number)));
        }
        Ok(Verdict::File(Slotted { replicate: number, labelled: false, identity, ordinal, supersedes: None }))
    }

    /// The value's order among equals in its export.
    fn ordinal(&mut self, candidates: &[Candidate], identity: i64) -> i64 {
        if self.again {
            let own = candidates.iter().filter(|known| known.capture == Some(self.capture));
            return 1 + own.map(|known| known.ordinal).max().unwrap_or(0);
        }
        let seen = self.seen.entry(identity).or_insert(0);
        *seen += 1;
        *seen
    }

    fn same_or_changed(
        &mut self,
        records: &mut Records,
        case: &Case<'_>,
        known: &Candidate,
        identity: i64,
    ) -> Result<Verdict> {
        self.matched.insert(known.reading);
        if equal(case.value, known) || known.exported.is_none() {
            return Ok(Verdict::Already(known.reading));
        }
        let slotted = Slotted {
            replicate: known.replicate,
            labelled: known.labelled,
            identity,
            ordinal: known.ordinal,
            // A person may have amended it since: the newest of its line is what a new value takes the place of.
            supersedes: Some(records.newest_of_line(known.reading)?),
        };
        match case.value.decided {
            Some(Answer::KeepOld) => return Ok(Verdict::Left),
            Some(Answer::TakeNew) => return Ok(Verdict::File(slotted)),
            _ => {}
        }
        let touched = records.touched_by_hand(known.reading)?;
        if self.instrument.changed == Changed::Supersede && !touched {
            return Ok(Verdict::File(slotted));
        }
        let was = known.exported.map(|number| number.to_string()).unwrap_or_default();
        let by_hand = if touched { ", which a person has struck or amended" } else { "" };
        let now = case.value.exported.map(|number| number.to_string()).unwrap_or_default();
        let wrong = format!("it is {now} now, and was {was} when first exported (reading {}){by_hand}", known.reading);
        Ok(Verdict::Held(Held::row(Reason::ChangedValue, wrong).on(&case.value.column).about(known.reading)))
    }

    /// The replicates of this instrument that stand in the cell already, over both sessions of the same occasion.
    fn slots(&mut self, records: &mut Records, case: &Case<'_>) -> Result<&[Slot]> {
        let day = day_number(case.row.day);
        let mut sessions = [None; 2];
        for (found, label) in sessions.iter_mut().zip([Some(case.label()), case.twin]) {
            if let Some(label) = label {
                *found = records.find_session(&case.row.subject, day, label)?;
            }
        }
        // One occasion has one key, whichever of its two sessions the row at hand is in.
        sessions.sort_unstable();
        let (measure, condition) = (&case.measure.code, &case.value.condition);
        let key = (sessions, measure.clone(), condition.clone());
        if !self.slots.contains_key(&key) {
            if self.slots.len() >= MOST_CELLS {
                self.slots.clear();
            }
            let mut slots = Vec::new();
            for session in sessions.into_iter().flatten() {
                slots.extend(records.slots(session, measure, condition, &self.instrument.code)?);
            }
            self.slots.insert(key.clone(), slots);
        }
        let slots = self.slots.get(&key).map_or(&[][..], Vec::as_slice);
        self.at = Some(key);
        Ok(slots)
    }

    /// Takes in that the value judged last was filed.
    pub fn filed(&mut self, reading: i64, slot: Slotted) {
        match self.at.take() {
            // A session that was not there before has a number now, under which it is looked up from now on.
            Some(([None, None], ..)) => {}
            Some(key) if slot.supersedes.is_none() => {
                self.slots.entry(key).or_default().push(Slot { reading, replicate: slot.replicate });
            }
            _ => self.slots.clear(),
        }
    }
}

fn equal(value: &PlacedValue, known: &Candidate) -> bool {
    known.exported == value.exported && known.unit == value.unit && known.mark.as_deref() == value.mark
}

fn beyond_plan(case: &Case<'_>, number: u32) -> Held {
    let planned = case.measure.replicates;
    let expects = if planned == 1 { "one".to_owned() } else { planned.to_string() };
    let wrong =
        format!("this is replicate {number} of {} in this session; the plan expects {expects}", case.measure.code);
    let instead = (1..=planned.min(6)).map(|number| format!("{INSTEAD_OF} {number}"));
    let likely = (number > 0).then(|| number.to_string()).into_iter().chain(instead).collect();
    Held::row(Reason::ExtraReplicate, wrong).on(&case.value.column).likely(likely)
}

fn taken_already(case: &Case<'_>, number: u32, taken: &Slot) -> Held {
    let wrong =
        format!("replicate {number} of this session is there already, with another time (reading {})", taken.reading);
    let likely = vec![format!("{INSTEAD_OF} {number}")];
    Held::row(Reason::ExtraReplicate, wrong).on(&case.value.column).about(taken.reading).likely(likely)
}

fn looks_the_same(case: &Case<'_>, known: &Candidate) -> Held {
    let wrong = format!(
        "the same value at the same time was filed from another export (reading {}), and the time is too coarse to tell \
         whether it is the same reading",
        known.reading
    );
    Held::row(Reason::ExtraReplicate, wrong).on(&case.value.column).about(known.reading)
}
