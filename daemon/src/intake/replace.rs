//! Placing again: held rows after a change of plan or roster or a person's decision, and filed rows after a reader was
//! wrong.
//!
//! Invariants: only what is held is tried again, a filed reading never turns back into a hold; what a decision or a
//! change settles is settled by the act that files it; adopting supersedes, it never overwrites.

use std::collections::{BTreeMap, HashMap};
use std::path::Path;

use revisant_schema::hold::{Answer, HoldState, Reason};
use revisant_schema::plan::units;
use revisant_schema::reading::ReadingState;
use revisant_schema::records::view::{CaptureRow, HoldRow, ReadingFilter, ReadingRow};
use revisant_schema::records::{Act, ActKind, Cell, Doer, Filing, Records, RecordsError};
use revisant_schema::roster::tidy;
use serde_json::json;

use super::account::Account;
use super::collect::{Report, file_name};
use super::error::Result;
use super::file::{Export, Filer, Moved, Outcome, Placing, Scope, add_hold, reason_of, settle_holds};
use super::place::number;
use super::place::resolve::{Held, nearest};
use super::plan::{below, differing_lines, in_force};
use super::read::{self, At, FileFault};
use super::rules::{Gathered, Rules};

type Done<T> = revisant_schema::records::Result<T>;

/// The note of how far changes of plan and roster have been followed up.
const FOLLOWED: &str = "placed_again_after";
/// The note of which readers last tried the files that are held.
pub const READ_BY: &str = "read_again_by";

/// Tries held rows again if the plan or the roster has changed since that was last done, and held files also if the
/// program reads them in another way since. When it is stopped, the next collect begins anew.
pub fn after_changes(
    records: &mut Records,
    rules: &Rules,
    doer: &Doer,
    report: &mut Report,
    stop: &dyn Fn() -> bool,
) -> Result<()> {
    let head = records.rules_head()?;
    let followed: i64 = records.working(FOLLOWED)?.and_then(|text| text.parse().ok()).unwrap_or(0);
    let same_rules = head <= followed;
    if same_rules && records.working(READ_BY)?.as_deref() == Some(read::READERS) {
        return Ok(());
    }
    let mut open = records.view()?.holds(true)?;
    if same_rules {
        open.retain(|hold| hold.reason.accepts_nothing());
    }
    let captures: HashMap<i64, CaptureRow> =
        records.view()?.captures()?.into_iter().map(|capture| (capture.capture, capture)).collect();
    for (capture, holds) in by_capture(open) {
        let Some(capture) = captures.get(&capture) else { continue };
        if stop() {
            return Err(RecordsError::Stopped.into());
        }
        let mut filer = Filer::new(records, rules, Gathered::default(), doer)?;
        filer.stop = stop;
        let done = try_again(&mut filer, capture, &holds);
        match done {
            Ok(outcome) => {
                filer.commit(true)?;
                report.filed += outcome.filed;
                report.already += outcome.already;
                report.held += outcome.held;
                report.settled += outcome.settled;
            }
            Err(error) => {
                filer.give_up();
                return Err(error.into());
            }
        }
    }
    records.set_working(READ_BY, read::READERS)?;
    Ok(records.set_working(FOLLOWED, &head.to_string())?)
}

fn by_capture(holds: Vec<HoldRow>) -> BTreeMap<i64, Vec<HoldRow>> {
    let mut grouped: BTreeMap<i64, Vec<HoldRow>> = BTreeMap::new();
    for hold in holds {
        grouped.entry(hold.capture).or_default().push(hold);
    }
    grouped
}

/// A capture as an export to be placed again; `None` when its instrument is no longer in the plan.
fn again(records: &Records, rules: &Rules, capture: &CaptureRow) -> Done<Option<Export>> {
    let Some((instrument, _)) = rules.plan.instrument(&capture.instrument) else { return Ok(None) };
    Ok(Some(Export {
        instrument,
        path: capture.path.clone(),
        file_name: file_name(&capture.path),
        below: below(&rules.plan, instrument, &capture.path),
        capture: capture.capture,
        source: records.raw_source(&capture.sha256)?,
        size: capture.size.unsigned_abs(),
        continues: None,
        accept_serial: false,
    }))
}

fn by_row(holds: &[HoldRow]) -> HashMap<At, Vec<HoldRow>> {
    let mut lines: HashMap<At, Vec<HoldRow>> = HashMap::new();
    for hold in holds {
        if let Some(line) = hold.line {
            lines.entry(At::of(line, hold.bytes)).or_default().push(hold.clone());
        }
    }
    lines
}

fn try_again(filer: &mut Filer<'_>, capture: &CaptureRow, holds: &[HoldRow]) -> Done<Outcome> {
    filer.begin()?;
    let Some(export) = again(filer.records, filer.rules, capture)? else { return Ok(Outcome::default()) };
    let on_file: Vec<&HoldRow> = holds.iter().filter(|hold| hold.line.is_none()).collect();
    if let Some(hold) = on_file.first() {
        return whole_again(filer, capture, &export, hold);
    }
    let lines = by_row(holds);
    let (filing, placed) = filer.place(&export, &Scope::Lines { lines: &lines, decided: false })?;
    let Ok(mut placing) = placed else {
        filer.records.clear_filing(filing.id)?;
        return Ok(Outcome::default());
    };
    // A row that the plan of now does not hand out is none any more.
    let unmet = holds.iter().filter(|hold| !placing.tried.contains(&hold.hold));
    let unmet: Vec<&HoldRow> = unmet.collect();
    let mut unmet_lines: Vec<At> = unmet.iter().filter_map(|hold| Some(At::of(hold.line?, hold.bytes))).collect();
    unmet_lines.sort_unstable();
    unmet_lines.dedup();
    placing.moved.ignored += unmet_lines.len() as u64;
    placing.settle.extend(unmet.iter().map(|hold| hold.hold));
    if placing.settle.is_empty() && placing.outcome.held == 0 {
        filer.records.clear_filing(filing.id)?;
        return Ok(Outcome::default());
    }
    let doer = filer.doer;
    filer.records.act_within(ActKind::Replace, doer, |act| {
        settle_holds(act, &placing.settle)?;
        end_lines(act, capture, filing, &placing)
    })?;
    placing.outcome.settled = placing.settle.len() as u64;
    Ok(placing.outcome)
}

/// The common end of every act that places lines again: the new accounts, and the filing.
fn end_lines(act: &mut Act<'_>, capture: &CaptureRow, filing: Filing, placing: &Placing) -> Done<()> {
    reaccount(act, capture.capture, placing.moved)?;
    reaccount_sightings(act, capture.capture, &placing.settle)?;
    act.objects.insert("export".into(), json!(capture.path));
    act.objects.insert("capture".into(), json!(capture.capture));
    act.objects.insert("readings".into(), json!(filing.readings()));
    act.objects.insert("holds".into(), json!(filing.holds()));
    act.publish(filing)?;
    Ok(())
}

fn reaccount(act: &mut Act<'_>, capture: i64, moved: Moved) -> Done<()> {
    let Some(lines) = act.records().account_of(capture)? else { return Ok(()) };
    let account: Account = serde_json::from_str(&lines)
        .map_err(|error| RecordsError::Damaged(format!("the account of capture {capture}: {error}")))?;
    let after = moved.apply(account);
    if after != account {
        let text = serde_json::to_string(&after).unwrap_or_default();
        act.add("account", &[Cell::Int(capture), Cell::Text(&text)])?;
    }
    Ok(())
}

/// In later captures that hold the same rows, the settled ones are now there already.
fn reaccount_sightings(act: &mut Act<'_>, capture: i64, settled: &[i64]) -> Done<()> {
    let mut lines: BTreeMap<i64, u64> = BTreeMap::new();
    for hold in settled {
        for other in act.records().sightings_of(*hold)? {
            if other != capture {
                *lines.entry(other).or_default() += 1;
            }
        }
    }
    for (other, count) in lines {
        reaccount(act, other, Moved { already: count, ..Moved::default() })?;
    }
    Ok(())
}

/// A file that was held is tried again as a whole.
fn whole_again(filer: &mut Filer<'_>, capture: &CaptureRow, export: &Export, hold: &HoldRow) -> Done<Outcome> {
    let largest = filer.rules.plan.instruments[export.instrument].largest;
    if export.size > largest {
        return Ok(Outcome::default());
    }
    let (mut filing, placed) = filer.place(export, &Scope::Whole)?;
    let (doer, path) = (filer.doer, capture.path.clone());
    match placed {
        Ok(mut placing) => {
            let text = serde_json::to_string(&placing.account).unwrap_or_default();
            filer.records.act_within(ActKind::Replace, doer, |act| {
                settle_holds(act, &[hold.hold])?;
                act.add("account", &[Cell::Int(capture.capture), Cell::Text(&text)])?;
                act.objects.insert("export".into(), json!(path));
                act.objects.insert("capture".into(), json!(capture.capture));
                act.objects.insert("readings".into(), json!(filing.readings()));
                act.publish(filing)?;
                Ok(())
            })?;
            placing.outcome.settled = 1;
            Ok(placing.outcome)
        }
        Err(fault) if reason_of(&fault) == hold.reason && fault.to_string() == hold.wrong => {
            filer.records.clear_filing(filing.id)?;
            Ok(Outcome::default())
        }
        Err(fault) => {
            hold_file_again(filer, &mut filing, &fault, hold)?;
            filer.records.act_within(ActKind::Replace, doer, |act| {
                settle_holds(act, &[hold.hold])?;
                act.objects.insert("export".into(), json!(path));
                act.objects.insert("capture".into(), json!(capture.capture));
                act.publish(filing)?;
                Ok(())
            })?;
            Ok(Outcome { held: 1, settled: 1, file_held: true, ..Outcome::default() })
        }
    }
}

fn hold_file_again(filer: &mut Filer<'_>, filing: &mut Filing, fault: &FileFault, hold: &HoldRow) -> Done<i64> {
    let held = Held::row(reason_of(fault), fault.to_string());
    let key = hold.row_key.as_slice().try_into().unwrap_or([0; 24]);
    add_hold(filer.records, filing, None, &held, &key)
}

/// What deciding holds came to.
#[derive(Debug, Clone, Default, PartialEq, Eq)]
pub struct Decision {
    /// Holds that were decided or dismissed.
    pub ended: Vec<i64>,
    /// Readings filed.
    pub filed: u64,
    /// Values that turned out to be there already.
    pub already: u64,
    /// New holds on the same rows, for what else is wrong with them.
    pub held: u64,
}

/// Open holds that the same answer may be given to: those of the same export with the same reason and column, and, for
/// a text that the plan does not know, with the same text.
pub fn like(records: &Records, hold: &HoldRow) -> Result<Vec<HoldRow>> {
    let open = records.view()?.holds(true)?;
    let same = |other: &HoldRow| {
        other.capture == hold.capture
            && other.reason == hold.reason
            && other.column == hold.column
            && (other.wrong == hold.wrong || !says_the_same(hold.reason))
    };
    Ok(open.into_iter().filter(same).collect())
}

/// Whether one answer fits all rows with this reason only if what is wrong with them is the same.
fn says_the_same(reason: Reason) -> bool {
    use Reason::*;
    matches!(
        reason,
        UnknownSubject
            | UnknownVisit
            | UnknownMeasure
            | UnknownCondition
            | UnknownUnit
            | UnreadableStamp
            | VisitDisagrees
    )
}

/// Decides holds of one export, and files what their rows then come to, in one act.
pub fn decide(records: &mut Records, holds: &[HoldRow], answer: &Answer, doer: &Doer) -> Result<Decision> {
    let rules = in_force(records)?;
    for hold in holds {
        check_open(hold)?;
        check_answer(&rules, hold, answer)?;
    }
    let Some(first) = holds.first() else { return Ok(Decision::default()) };
    let capture = capture_of(records, first)?;
    let mut filer = Filer::new(records, &rules, Gathered::default(), doer)?;
    filer.in_one = true;
    holds.iter().for_each(|hold| filer.held.decide(hold.hold, answer));
    let done = decide_within(&mut filer, &capture, holds, answer);
    match done {
        Ok(decision) => {
            filer.commit(true)?;
            Ok(decision)
        }
        Err(error) => {
            filer.give_up();
            Err(error.into())
        }
    }
}

fn capture_of(records: &Records, hold: &HoldRow) -> Result<CaptureRow> {
    let found = records.view()?.captures()?.into_iter().find(|capture| capture.capture == hold.capture);
    Ok(found.ok_or_else(|| RecordsError::Damaged(format!("hold {} is on no export", hold.hold)))?)
}

fn decide_within(filer: &mut Filer<'_>, capture: &CaptureRow, holds: &[HoldRow], answer: &Answer) -> Done<Decision> {
    filer.begin()?;
    let Some(mut export) = again(filer.records, filer.rules, capture)? else {
        let instrument = &capture.instrument;
        return Err(RecordsError::Refused(format!("the instrument {instrument} is no longer in the plan")));
    };
    let lines = by_row(holds);
    let whole = holds.iter().any(|hold| hold.line.is_none());
    export.accept_serial = whole;
    let scope = if whole { Scope::Whole } else { Scope::Lines { lines: &lines, decided: true } };
    let (filing, placed) = filer.place(&export, &scope)?;
    let mut placing = placed.map_err(|fault| RecordsError::Refused(format!("the export cannot be read: {fault}")))?;
    let text = serde_json::to_string(answer).unwrap_or_default();
    // The holds end by this decision, not by themselves.
    placing.settle.clear();
    let doer = filer.doer;
    let ended: Vec<i64> = holds.iter().map(|hold| hold.hold).collect();
    filer.records.act_within(ActKind::Decide, doer, |act| {
        for hold in &ended {
            act.add("hold_event", &[Cell::Int(*hold), Cell::Text(HoldState::Decided.code()), Cell::Text(&text)])?;
        }
        act.objects.insert("decided".into(), json!(ended));
        if whole {
            let account = serde_json::to_string(&placing.account).unwrap_or_default();
            act.add("account", &[Cell::Int(capture.capture), Cell::Text(&account)])?;
        }
        placing.settle.extend(&ended);
        end_lines(act, capture, filing, &placing)
    })?;
    let Outcome { filed, already, held, .. } = placing.outcome;
    Ok(Decision { ended, filed, already, held })
}

/// Dismisses holds: their rows are left out, with a reason.
pub fn dismiss(records: &mut Records, holds: &[HoldRow], doer: &Doer) -> Result<Decision> {
    for hold in holds {
        check_open(hold)?;
    }
    let ended: Vec<i64> = holds.iter().map(|hold| hold.hold).collect();
    records.act(ActKind::Dismiss, doer, |act| {
        for hold in &ended {
            act.add("hold_event", &[Cell::Int(*hold), Cell::Text(HoldState::Dismissed.code()), Cell::Null])?;
        }
        act.objects.insert("dismissed".into(), json!(ended));
        Ok(())
    })?;
    Ok(Decision { ended, ..Decision::default() })
}

fn check_open(hold: &HoldRow) -> Done<()> {
    match hold.state {
        HoldState::Open => Ok(()),
        state => Err(RecordsError::Refused(format!("hold {} is {} already", hold.hold, state.code()))),
    }
}

/// Whether an answer can be given: of the right kind, and known to plan and roster.
fn check_answer(rules: &Rules, hold: &HoldRow, answer: &Answer) -> Done<()> {
    let refused = |text: String| Err(RecordsError::Refused(text));
    if !hold.reason.accepts(answer) {
        let (reason, answers) = (hold.reason, hold.reason.answers());
        return refused(format!("hold {} is {reason}; its answers are {answers}", hold.hold));
    }
    let plan = &rules.plan;
    let unknown = |what: &str, code: &str, known: Vec<&str>| {
        let near = nearest(code, known.into_iter());
        let near = near.first().map(|code| format!("; did you mean {code}?")).unwrap_or_default();
        refused(format!("\"{code}\" is no {what} of this study{near}"))
    };
    match answer {
        Answer::Subject(code) if !rules.roster.subjects.contains_key(&tidy(code, &plan.subject.normalise)) => {
            unknown("subject", code, rules.roster.subjects.keys().map(String::as_str).collect())
        }
        Answer::Visit(code) if code != "unscheduled" && plan.visit(code).is_none() => {
            unknown("visit", code, plan.visits.iter().map(|visit| visit.code.as_str()).collect())
        }
        Answer::Measure(code) if plan.measure(code).is_none() => {
            unknown("measure", code, plan.measures.iter().map(|measure| measure.code.as_str()).collect())
        }
        Answer::Unit(code) if !plan.measures.iter().any(|measure| units::convert(code, &measure.unit).is_some()) => {
            refused(format!("\"{code}\" converts to the unit of no measure of the plan"))
        }
        Answer::Condition(levels) => {
            let known = |factor: &str, level: &str| {
                let mut factors = plan.measures.iter().flat_map(|measure| &measure.conditions);
                factors.any(|it| it.code == factor && it.levels.iter().any(|other| other == level))
            };
            match levels.iter().find(|(factor, level)| !known(factor, level)) {
                Some((factor, level)) => refused(format!("\"{factor}={level}\" is no condition of the plan")),
                None => Ok(()),
            }
        }
        Answer::Value(text) => {
            let reader = plan.instrument(&hold.instrument).map(|(_, instrument)| &instrument.reader);
            let parsed = number::parse(text, '.', None)
                .or_else(|| reader.and_then(|it| number::parse(text, it.decimal_mark, it.group_mark)));
            match parsed {
                Some(_) => Ok(()),
                None => refused(format!("\"{text}\" is no number; write it as 12.5")),
            }
        }
        Answer::Moment(text) => {
            let stamp = revisant_schema::plan::stamp::read(&revisant_schema::plan::Stamp::Iso, text);
            match stamp {
                Some(_) => Ok(()),
                None => refused(format!("\"{text}\" is no moment; write it as 2026-02-28T14:05")),
            }
        }
        _ => Ok(()),
    }
}

/// Reads filed exports again with the plan of now, after a reader was wrong, and supersedes what comes out differently:
/// one act an export. The plan must already be in force; `old` is the version before it.
pub fn adopt(records: &mut Records, study: &Path, doer: &Doer) -> Result<(Rules, Report)> {
    let before = Rules::load(records)?;
    let mut report = Report::default();
    let old = before.clone();
    let rules = super::plan::bring_into_force(records, study, doer, true)?;
    let Some(old) = old.filter(|old| old.hash != rules.hash) else { return Ok((rules, report)) };
    let captures = records.view()?.captures()?;
    for capture in captures.iter().filter(|capture| capture.repeat_of.is_none() && capture.lines.is_some()) {
        let places = old.plan.instrument(&capture.instrument).zip(rules.plan.instrument(&capture.instrument));
        let Some(((old_at, _), (new_at, _))) = places else { continue };
        let lines = differing_lines(records, &rules, (old_at, &old.plan), (new_at, &rules.plan), capture)?;
        if !lines.is_empty() {
            let lines: Vec<At> = lines.into_iter().map(|(at, _)| at).collect();
            adopt_one(records, &rules, capture, &lines, doer, &mut report)?;
        }
    }
    Ok((rules, report))
}

fn adopt_one(
    records: &mut Records,
    rules: &Rules,
    capture: &CaptureRow,
    lines: &[At],
    doer: &Doer,
    report: &mut Report,
) -> Result<()> {
    let filter = ReadingFilter { capture: Some(capture.capture), ..ReadingFilter::default() };
    let mut old: HashMap<At, Vec<ReadingRow>> = HashMap::new();
    for reading in records.view()?.readings(&filter)? {
        if let (Some(line), true) = (reading.line, reading.state != ReadingState::Superseded) {
            old.entry(At::of(line, reading.bytes)).or_default().push(reading);
        }
    }
    let mut filer = Filer::new(records, rules, Gathered::default(), doer)?;
    let done = adopt_within(&mut filer, capture, lines, old);
    match done {
        Ok(outcome) => {
            filer.commit(true)?;
            report.filed += outcome.filed;
            report.held += outcome.held;
            Ok(())
        }
        Err(error) => {
            filer.give_up();
            Err(error.into())
        }
    }
}

fn adopt_within(
    filer: &mut Filer<'_>,
    capture: &CaptureRow,
    lines: &[At],
    old: HashMap<At, Vec<ReadingRow>>,
) -> Done<Outcome> {
    filer.begin()?;
    let Some(export) = again(filer.records, filer.rules, capture)? else { return Ok(Outcome::default()) };
    let (filing, placed) = filer.place_over(&export, lines, old)?;
    let (placing, ended) = match placed {
        Ok(placed) => placed,
        Err(fault) => {
            filer.records.clear_filing(filing.id)?;
            return Err(RecordsError::Refused(format!("{} cannot be read by the new plan: {fault}", capture.path)));
        }
    };
    let doer = filer.doer;
    filer.records.act_within(ActKind::Adopt, doer, |act| {
        for reading in &ended {
            act.add("reading_event", &[Cell::Int(*reading), Cell::Text("superseded")])?;
        }
        act.objects.insert("lines".into(), json!(lines.len()));
        act.objects.insert("superseded_without_successor".into(), json!(ended));
        let text = serde_json::to_string(&placing.account).unwrap_or_default();
        act.add("account", &[Cell::Int(capture.capture), Cell::Text(&text)])?;
        act.objects.insert("export".into(), json!(capture.path));
        act.objects.insert("capture".into(), json!(capture.capture));
        act.objects.insert("readings".into(), json!(filing.readings()));
        act.publish(filing)?;
        Ok(())
    })?;
    Ok(placing.outcome)
}
