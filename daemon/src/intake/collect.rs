//! Collect: everything that waits in the export folders, once, from notice to file.
//!
//! Invariants: day 0 comes from all exports of the collect before the first of them is placed; exports are filed by
//! instrument in the plan's order, then by file time, then by path; only one program files at a time.

use std::collections::{BTreeMap, HashMap};
use std::fs::File;
use std::path::{Path, PathBuf};
use std::time::{Duration, Instant};

use chrono::{DateTime, Utc};
use revisant_schema::plan::{Anchor, Plan};
use revisant_schema::records::exports::ExportState;
use revisant_schema::records::intake::Noticed;
use revisant_schema::records::raw::RawSource;
use revisant_schema::records::view::HoldRow;
use revisant_schema::records::{ActKind, Cell, Doer, Filing, Kept, Records, RecordsError};
use serde_json::json;

use super::error::{IntakeError, Result};
use super::file::{Continued, Export, Filer, Outcome, Placing, Scope, add_hold, reason_of, row_key, settle_holds};
use super::keep::{Keeping, keep};
use super::notice::{Found, Walk, walk};
use super::place::resolve::{Decided, Held, Resolver, RowOutcome, ValueOutcome, Whereabouts, path_facts};
use super::read::{self, At, FileFault, Row};
use super::rules::{Gathered, Rules};
use super::{plan, replace};

/// How often an export is placed anew because the rules changed meanwhile, before it is left to the next collect.
const TRIES: u32 = 20;

/// What a collect came to.
#[derive(Debug, Default, Clone, PartialEq)]
pub struct Report {
    /// How many exports came to which state.
    pub exports: BTreeMap<&'static str, u64>,
    /// Readings filed.
    pub filed: u64,
    /// Values that were filed before.
    pub already: u64,
    /// Holds opened.
    pub held: u64,
    /// Older holds that were settled.
    pub settled: u64,
    /// How long it took.
    pub seconds: f64,
    /// Export folders that could not be looked at: instrument and why.
    pub lost_folders: BTreeMap<String, String>,
    /// When the first of the files that are not at rest will have rested.
    pub next_rest: Option<DateTime<Utc>>,
}

impl Report {
    fn count(&mut self, state: ExportState) {
        *self.exports.entry(state.code()).or_default() += 1;
    }

    fn add(&mut self, outcome: &Outcome) {
        self.filed += outcome.filed;
        self.already += outcome.already;
        self.held += outcome.held;
        self.settled += outcome.settled;
    }

    /// A file that changes at this moment is to be looked at again once it may have rested.
    fn rests_from(&mut self, now: DateTime<Utc>, rest: Duration) {
        // Even where a file need not rest: else one that is written to all the time would be tried all the time.
        let rest = rest.max(Duration::from_millis(250));
        let until = chrono::TimeDelta::from_std(rest).ok().and_then(|rest| now.checked_add_signed(rest));
        self.next_rest = self.next_rest.into_iter().chain(until).min();
    }

    /// Whether nothing was filed, held or settled.
    pub fn is_quiet(&self) -> bool {
        self.filed + self.already + self.held + self.settled == 0
    }
}

/// How far a collect has come.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Progress {
    /// Exports done.
    pub done: u64,
    /// Exports in all.
    pub of: u64,
}

/// How often, and with what pauses, the lock is tried: who only looks whether it is held holds it for a moment.
const LOCK_TRIES: u32 = 10;
const LOCK_PAUSE: Duration = Duration::from_millis(20);

/// The lock that only the one program holds that files exports.
#[derive(Debug)]
pub struct IntakeLock {
    _file: File,
}

impl IntakeLock {
    /// Takes the lock of a study's records, or says who holds it.
    pub fn take(records: &Records, program: &str) -> Result<Self> {
        use std::io::{Read, Seek, Write};
        let path = records.folder().join("intake.lock");
        let failed = |error| RecordsError::file(&path, "taking the lock", error);
        let options = File::options().read(true).write(true).create(true).truncate(false).open(&path);
        let mut file = options.map_err(failed)?;
        match lock_patiently(&file) {
            Ok(()) => {
                let note = format!("{program}, process {}", std::process::id());
                file.set_len(0)
                    .and_then(|()| file.rewind())
                    .and_then(|()| file.write_all(note.as_bytes()))
                    .map_err(failed)?;
                Ok(Self { _file: file })
            }
            Err(std::fs::TryLockError::WouldBlock) => {
                let mut note = String::new();
                // Who holds it is a courtesy: an unreadable note is no reason to fail otherwise.
                let _ = file.read_to_string(&mut note);
                Err(IntakeError::Locked(if note.is_empty() { "its name is not known".to_owned() } else { note }))
            }
            Err(std::fs::TryLockError::Error(error)) => Err(failed(error).into()),
        }
    }

    /// Whether some program holds the lock of a study's records, and its note.
    pub fn holder(folder: &Path) -> Option<String> {
        let path = folder.join("intake.lock");
        let file = File::open(&path).ok()?;
        match file.try_lock_shared() {
            Ok(()) => None,
            Err(_) => Some(std::fs::read_to_string(&path).unwrap_or_default()),
        }
    }
}

fn lock_patiently(file: &File) -> std::result::Result<(), std::fs::TryLockError> {
    for _ in 1..LOCK_TRIES {
        match file.try_lock() {
            Err(std::fs::TryLockError::WouldBlock) => std::thread::sleep(LOCK_PAUSE),
            done => return done,
        }
    }
    file.try_lock()
}

/// Bytes of small exports that are held in memory between the survey of day 0 and the filing; what goes beyond is read
/// again from its file.
const IN_HAND: u64 = 24 * 1024 * 1024;

/// An export at rest.
pub(super) struct Ready {
    pub(super) found: Found,
    /// Of its bytes when it was surveyed.
    sha256: [u8; 32],
    hand: Option<Hand>,
    continues: Option<Continued>,
}

/// An export's bytes, kept or in hand to be kept with its filing.
struct Hand {
    kept: Kept,
    source: RawSource,
}

impl Hand {
    fn of(records: &Records, mut kept: Kept) -> Self {
        let source = records.kept_source(&mut kept);
        Self { kept, source }
    }
}

/// How a collect is to be done.
pub struct How<'h> {
    /// Wait for files that are not yet at rest.
    pub wait: bool,
    /// Told how far it has come.
    pub progress: &'h mut dyn FnMut(Progress),
    /// Asked between exports, and again and again within them, whether to stop: what is finished stays, the rest waits.
    pub stop: &'h dyn Fn() -> bool,
}

/// Files all that waits at this moment.
pub fn collect(records: &mut Records, study: &Path, doer: &Doer, how: How<'_>) -> Result<Report> {
    let start = Instant::now();
    let mut report = Report::default();
    match collect_into(&mut report, records, study, doer, how) {
        Ok(()) | Err(IntakeError::Records(RecordsError::Stopped)) => {
            report.seconds = start.elapsed().as_secs_f64();
            Ok(report)
        }
        Err(error) => Err(error),
    }
}

fn collect_into(report: &mut Report, records: &mut Records, study: &Path, doer: &Doer, how: How<'_>) -> Result<()> {
    let How { wait, progress, stop } = how;
    records.clear_unpublished()?;
    let rules = plan::in_force(records)?;
    replace::after_changes(records, &rules, doer, report, stop)?;
    let known = records.noticed()?;
    let walked = walk_until_rested(records, study, &rules.plan, &known, wait);
    note_walk(records, &rules.plan, &known, &walked, report)?;
    report.next_rest = walked.settling.iter().filter_map(|(_, until)| *until).min();
    file_all(records, rules, walked.ready, doer, report, progress, stop)
}

/// Walks, and with `wait` walks again until everything has rested that will within its time.
fn walk_until_rested(
    records: &Records,
    study: &Path,
    plan: &Plan,
    known: &HashMap<String, Noticed>,
    wait: bool,
) -> Walk {
    let world = records.world().clone();
    let longest = plan.instruments.iter().map(|instrument| instrument.rest).max().unwrap_or_default();
    let deadline = Instant::now() + longest * 2 + Duration::from_secs(10);
    loop {
        let walked = walk(world.as_ref(), study, plan, known);
        let next = walked.settling.iter().filter_map(|(_, until)| *until).min();
        match next {
            Some(until) if wait && Instant::now() < deadline => {
                let left = (until - world.now()).to_std().unwrap_or_default();
                std::thread::sleep(left.min(Duration::from_secs(5)) + Duration::from_millis(5));
            }
            _ => return walked,
        }
    }
}

/// Writes down what was seen of files that are not to be read now.
fn note_walk(
    records: &mut Records,
    plan: &Plan,
    known: &HashMap<String, Noticed>,
    walked: &Walk,
    report: &mut Report,
) -> Result<()> {
    let mut changes: Vec<(String, Option<Noticed>)> = Vec::new();
    let mut note = |found: &Found, state: &str, detail: Option<String>| {
        let instrument = plan.instruments[found.instrument].code.clone();
        let capture = known.get(&found.export).and_then(|before| before.capture);
        let seen = Noticed { instrument, state: state.to_owned(), stat: found.stat, capture, detail };
        if known.get(&found.export) != Some(&seen) {
            changes.push((found.export.clone(), Some(seen)));
        }
    };
    for (found, until) in &walked.settling {
        let detail = if until.is_none() { "it has no bytes yet" } else { "it has not rested yet" };
        note(found, "settling", Some(detail.to_owned()));
        report.count(ExportState::Settling);
    }
    for found in &walked.ignored {
        note(found, "ignored", Some("its name does not fit the plan's `files`".to_owned()));
        report.count(ExportState::Ignored);
    }
    for (export, index, why) in &walked.unreachable {
        let capture = known.get(export).and_then(|before| before.capture);
        let stat = revisant_schema::world::Stat { size: 0, modified: 0, changed: 0 };
        let instrument = plan.instruments[*index].code.clone();
        let seen = Noticed { instrument, state: "unreachable".into(), stat, capture, detail: Some(why.clone()) };
        changes.push((export.clone(), Some(seen)));
        report.count(ExportState::Unreachable);
    }
    let forgotten = walked.gone.iter().filter(|path| known.get(*path).is_some_and(|before| before.capture.is_none()));
    changes.extend(forgotten.map(|path| (path.clone(), None)));
    let lost: BTreeMap<String, String> =
        walked.lost_folders.iter().map(|(at, why)| (plan.instruments[*at].code.clone(), why.clone())).collect();
    report.lost_folders = lost.clone();
    let lost = serde_json::to_string(&lost).unwrap_or_default();
    if changes.is_empty() && records.working("lost_folders")?.as_deref() == Some(&lost) {
        return Ok(());
    }
    write_notes(records, &changes, &lost)
}

fn write_notes(records: &mut Records, changes: &[(String, Option<Noticed>)], lost: &str) -> Result<()> {
    records.begin()?;
    let write = || -> revisant_schema::records::Result<()> {
        for (path, seen) in changes {
            match seen {
                Some(seen) => records.set_noticed(path, seen)?,
                None => records.forget_noticed(path)?,
            }
        }
        records.set_working("lost_folders", lost)
    };
    let done = write();
    match done {
        Ok(()) => Ok(records.commit()?),
        Err(error) => {
            records.roll_back();
            Err(error.into())
        }
    }
}

/// Files the exports that are ready: first all of them are surveyed for day 0, then they are placed one by one.
fn file_all(
    records: &mut Records,
    mut rules: Rules,
    found: Vec<Found>,
    doer: &Doer,
    report: &mut Report,
    progress: &mut dyn FnMut(Progress),
    stop: &dyn Fn() -> bool,
) -> Result<()> {
    let of = found.len() as u64;
    progress(Progress { done: 0, of });
    let (mut ready, mut gathered) = survey(records, &rules, found, report, stop)?;
    let mut tries = 0;
    let mut next = 0;
    while next < ready.len() {
        let mut tell = |done| progress(Progress { done, of });
        let mut filer = Filer::new(records, &rules, gathered, doer)?;
        filer.stop = stop;
        let done = file_portion(filer, &mut ready, &mut next, report, &mut tell);
        match done {
            Ok(()) => {
                progress(Progress { done: of, of });
                return Ok(());
            }
            Err(IntakeError::Records(RecordsError::Moved)) if tries < TRIES => {
                tries += 1;
                rules = plan::in_force(records)?;
                let left = ready.split_off(next).into_iter().map(|one| one.found).collect();
                (ready, gathered) = survey(records, &rules, left, report, stop)?;
                next = 0;
            }
            Err(error) => return Err(error),
        }
    }
    Ok(())
}

/// Looks through all exports in hand: their hashes, and what they say about day 0.
pub(super) fn survey(
    records: &Records,
    rules: &Rules,
    found: Vec<Found>,
    report: &mut Report,
    stop: &dyn Fn() -> bool,
) -> Result<(Vec<Ready>, Gathered)> {
    let mut gathered = Gathered::default();
    let mut ready = Vec::with_capacity(found.len());
    let mut in_hand = 0;
    let needed = day0_is_to_be_found(&rules.plan);
    for found in found {
        if stop() {
            return Err(RecordsError::Stopped.into());
        }
        let Some(hand) = take(records, &rules.plan, &found, report)? else { continue };
        if needed {
            // A file that cannot be read adds no session; it is held when its turn comes.
            let _ = gather_one(rules, records.now(), &found, &hand.source, &mut gathered);
        }
        let sha256 = hand.kept.sha256;
        let small = hand.kept.stored.is_some();
        in_hand += if small { hand.kept.size } else { 0 };
        let hand = (!small || in_hand <= IN_HAND).then_some(hand);
        ready.push(Ready { found, sha256, hand, continues: None });
    }
    Ok((ready, gathered))
}

/// Takes an export's bytes in hand; `None` when it changes meanwhile or cannot be read now.
fn take(records: &Records, plan: &Plan, found: &Found, report: &mut Report) -> Result<Option<Hand>> {
    let world = records.world().clone();
    match keep(world.as_ref(), records, found)? {
        Keeping::Kept(kept) => Ok(Some(Hand::of(records, kept))),
        Keeping::Changed => {
            report.count(ExportState::Settling);
            report.rests_from(records.now(), plan.instruments[found.instrument].rest);
            Ok(None)
        }
        Keeping::Unreachable(why) => {
            unreachable(records, plan, found, &why)?;
            report.count(ExportState::Unreachable);
            Ok(None)
        }
    }
}

/// Whether anything depends on what the exports in hand say about day 0: only a label can disagree with a date, and
/// only days that are counted from sessions can move.
fn day0_is_to_be_found(plan: &Plan) -> bool {
    let labelled = plan.instruments.iter().any(|instrument| instrument.reader.visit.is_some());
    let from_sessions =
        matches!(plan.subject.anchor, Anchor::Visit(_)) || plan.visits.iter().any(|visit| visit.after.is_some());
    labelled && from_sessions
}

fn unreachable(records: &Records, plan: &Plan, found: &Found, why: &str) -> Result<()> {
    let seen = Noticed {
        instrument: plan.instruments[found.instrument].code.clone(),
        state: "unreachable".to_owned(),
        stat: found.stat,
        capture: None,
        detail: Some(why.to_owned()),
    };
    Ok(records.set_noticed(&found.export, &seen)?)
}

/// Notes what an export says about day 0; one that turns out to be unsound, on whatever row, says nothing.
fn gather_one(
    rules: &Rules,
    now: DateTime<Utc>,
    found: &Found,
    source: &RawSource,
    gathered: &mut Gathered,
) -> std::result::Result<(), FileFault> {
    let instrument = &rules.plan.instruments[found.instrument];
    let wanted = read::wanted(&instrument.reader);
    let name = file_name(&found.export);
    let whereabouts = Whereabouts { file_name: &name, folder: &found.below };
    let resolver = Resolver::new(&rules.plan, instrument, &rules.roster, now, &wanted, whereabouts);
    let resolver = resolver.map_err(FileFault::Layout)?;
    let mut rows = read::open(&instrument.reader, source)?;
    let mut row = Row::default();
    let none = Decided::default();
    let mut own = Gathered::default();
    while rows.next_row(&mut row)? {
        let RowOutcome::Ready(resolved) = resolver.resolve(&row, rows.as_ref(), &none) else { continue };
        if resolved.outside.is_some() {
            continue;
        }
        for value in &resolved.values {
            if let ValueOutcome::Number(value) = value {
                let label = resolved.label.as_deref();
                own.see(&rules.plan, &resolved.subject, resolved.day, label, value.measure);
            }
        }
    }
    gathered.join(own);
    Ok(())
}

fn file_portion(
    mut filer: Filer<'_>,
    ready: &mut [Ready],
    next: &mut usize,
    report: &mut Report,
    progress: &mut dyn FnMut(u64),
) -> Result<()> {
    // What is not committed when something fails was not filed: the report counts only what was.
    let mut uncommitted: Vec<(Option<Outcome>, ExportState)> = Vec::new();
    for at in *next..ready.len() {
        let done = file_one(&mut filer, &mut ready[at], report);
        match done {
            Ok(done) => uncommitted.extend(done),
            Err(error) => {
                filer.give_up();
                return Err(error);
            }
        }
        let stopped = (filer.stop)();
        filer.commit(stopped || at + 1 == ready.len())?;
        if !filer.is_open() {
            *next = at + 1;
            for (outcome, state) in uncommitted.drain(..) {
                report.count(state);
                outcome.iter().for_each(|outcome| report.add(outcome));
            }
            progress(*next as u64);
        }
        if stopped {
            return Err(RecordsError::Stopped.into());
        }
    }
    Ok(())
}

/// Files one export; nothing when its bytes are those that its path held already.
pub(super) fn file_one(
    filer: &mut Filer<'_>,
    ready: &mut Ready,
    report: &mut Report,
) -> Result<Option<(Option<Outcome>, ExportState)>> {
    filer.begin()?;
    let hand = match ready.hand.take() {
        Some(hand) => hand,
        None => match take(filer.records, &filer.rules.plan, &ready.found, report)? {
            // Other bytes than those surveyed: the next collect sees to them.
            Some(hand) if hand.kept.sha256 != ready.sha256 => {
                report.count(ExportState::Settling);
                report.rests_from(filer.records.now(), filer.rules.plan.instruments[ready.found.instrument].rest);
                return Ok(None);
            }
            Some(hand) => hand,
            None => return Ok(None),
        },
    };
    let last = filer.records.last_capture(&ready.found.export)?;
    if let Some(last) = &last
        && last.sha256 == ready.sha256
    {
        // Touched, not changed.
        note_captured(filer, ready, last.capture)?;
        return Ok(None);
    }
    if let Some(same) = known_bytes(filer, ready)? {
        let capture = file_repeat(filer, ready, &hand, same)?;
        note_captured(filer, ready, capture)?;
        return Ok(Some((None, ExportState::Repeat)));
    }
    if let Some(last) = last {
        ready.continues = continued(filer.records, &last, &hand)?;
    }
    let (capture, outcome) = file_new(filer, ready, hand)?;
    note_captured(filer, ready, capture)?;
    let state = outcome.state();
    Ok(Some((Some(outcome), state)))
}

fn note_captured(filer: &Filer<'_>, ready: &Ready, capture: i64) -> revisant_schema::records::Result<()> {
    let seen = Noticed {
        instrument: filer.rules.plan.instruments[ready.found.instrument].code.clone(),
        state: "captured".to_owned(),
        stat: ready.found.stat,
        capture: Some(capture),
        detail: None,
    };
    filer.records.set_noticed(&ready.found.export, &seen)
}

/// A capture of the same bytes by the same instrument, whose path says the same: unless this path held them before and
/// other bytes since, in which case they are news.
fn known_bytes(filer: &Filer<'_>, ready: &Ready) -> revisant_schema::records::Result<Option<i64>> {
    let instrument = &filer.rules.plan.instruments[ready.found.instrument];
    let same = filer.records.captures_of_bytes(&instrument.code, &ready.sha256)?;
    if same.iter().any(|(_, path)| *path == ready.found.export) {
        return Ok(None);
    }
    let below = |path: &str| {
        let folder = PathBuf::from(path).parent().map(Path::to_path_buf).unwrap_or_default();
        let folder = folder.strip_prefix(&instrument.folder).map(Path::to_path_buf).unwrap_or(folder);
        folder.to_string_lossy().into_owned()
    };
    let facts = |path: &str, below: &str| path_facts(&instrument.reader, &file_name(path), below);
    let own = facts(&ready.found.export, &ready.found.below);
    Ok(same.into_iter().find(|(_, path)| facts(path, &below(path)) == own).map(|(capture, _)| capture))
}

/// The file's name in an export's path.
pub fn file_name(export: &str) -> String {
    export.rsplit('/').next().unwrap_or(export).to_owned()
}

/// What the path held before, when the new bytes begin with it.
fn continued(
    records: &Records,
    last: &revisant_schema::records::intake::LastCapture,
    hand: &Hand,
) -> revisant_schema::records::Result<Option<Continued>> {
    if last.size <= 0 || last.size.unsigned_abs() >= hand.kept.size {
        return Ok(None);
    }
    let older = records.raw_source(&last.sha256)?;
    let newer = hand.source.open();
    let failed = |error: std::io::Error| RecordsError::Damaged(format!("a raw copy could not be read back: {error}"));
    if !begins_with(newer.map_err(failed)?, older.open().map_err(failed)?).map_err(failed)? {
        return Ok(None);
    }
    let chain = records.chain_of(last.capture)?;
    let mut holds: HashMap<Option<At>, Vec<HoldRow>> = HashMap::new();
    for hold in records.view()?.holds(true)? {
        if chain.contains(&hold.capture) {
            holds.entry(hold.line.map(|line| At::of(line, hold.bytes))).or_default().push(hold);
        }
    }
    Ok(Some(Continued { capture: last.capture, size: last.size, read: last.read, holds }))
}

/// Whether the bytes of `newer` begin with all of `older`.
fn begins_with(
    mut newer: Box<dyn std::io::Read + '_>,
    mut older: Box<dyn std::io::Read + '_>,
) -> std::io::Result<bool> {
    use std::io::Read;
    let (mut one, mut other) = (vec![0; 64 * 1024], Vec::with_capacity(64 * 1024));
    loop {
        other.clear();
        let count = older.by_ref().take(64 * 1024).read_to_end(&mut other)?;
        if count == 0 {
            return Ok(true);
        }
        if newer.read_exact(&mut one[..count]).is_err() || one[..count] != other {
            return Ok(false);
        }
    }
}

fn file_repeat(filer: &mut Filer<'_>, ready: &Ready, hand: &Hand, same: i64) -> revisant_schema::records::Result<i64> {
    let (rules, doer) = (filer.rules, filer.doer);
    filer.records.act_within(ActKind::File, doer, |act| {
        let capture = add_capture(act, rules, ready, &hand.kept, Some(same))?;
        act.objects.insert("export".into(), json!(ready.found.export));
        act.objects.insert("repeat_of".into(), json!(same));
        Ok(capture)
    })
}

fn add_capture(
    act: &mut revisant_schema::records::Act<'_>,
    rules: &Rules,
    ready: &Ready,
    kept: &Kept,
    repeat_of: Option<i64>,
) -> revisant_schema::records::Result<i64> {
    act.add_raw(kept)?;
    let continues = ready.continues.as_ref().map(|before| before.capture);
    act.add(
        "capture",
        &[
            Cell::Term(&rules.plan.instruments[ready.found.instrument].code),
            Cell::Text(&ready.found.export),
            Cell::Int(ready.found.stat.modified),
            Cell::Int(kept.size as i64),
            Cell::Bytes(&kept.sha256),
            Cell::Int(rules.version),
            Cell::int_or_null(repeat_of),
            Cell::int_or_null(continues),
        ],
    )
}

fn file_new(filer: &mut Filer<'_>, ready: &Ready, hand: Hand) -> revisant_schema::records::Result<(i64, Outcome)> {
    let Hand { kept, source } = hand;
    let capture = filer.records.next_capture()?;
    let export = Export {
        instrument: ready.found.instrument,
        path: ready.found.export.clone(),
        file_name: file_name(&ready.found.export),
        below: ready.found.below.clone(),
        capture,
        source,
        size: kept.size,
        continues: ready.continues.clone(),
        accept_serial: false,
    };
    let largest = filer.rules.plan.instruments[export.instrument].largest;
    let (mut filing, placed) = if export.size > largest {
        let wrong = format!("it has {} bytes; the plan's `largest` allows {largest}", export.size);
        (filer.records.new_filing(Some(capture))?, Err(FileFault::TooLarge(wrong)))
    } else {
        filer.place(&export, &Scope::Whole)?
    };
    let outcome = match placed {
        Ok(mut placing) => {
            filer.note_gone(&export, &mut filing, &mut placing)?;
            publish_rows(filer, ready, &kept, filing, placing)?
        }
        Err(fault) => publish_fault(filer, ready, &kept, filing, &fault)?,
    };
    Ok((capture, outcome))
}

fn publish_rows(
    filer: &mut Filer<'_>,
    ready: &Ready,
    kept: &Kept,
    filing: Filing,
    mut placing: Placing,
) -> revisant_schema::records::Result<Outcome> {
    let (rules, doer) = (filer.rules, filer.doer);
    if let Some(before) = &ready.continues {
        // The file as a whole, which older bytes of the path broke off in, reads well now.
        placing.settle.extend(before.holds.get(&None).into_iter().flatten().map(|hold| hold.hold));
    }
    let account = serde_json::to_string(&placing.account).unwrap_or_default();
    filer.records.act_within(ActKind::File, doer, |act| {
        let capture = add_capture(act, rules, ready, kept, None)?;
        act.add("account", &[Cell::Int(capture), Cell::Text(&account)])?;
        settle_holds(act, &placing.settle)?;
        act.objects.insert("export".into(), json!(ready.found.export));
        act.objects.insert("capture".into(), json!(capture));
        act.objects.insert("readings".into(), json!(filing.readings()));
        act.objects.insert("holds".into(), json!(filing.holds()));
        act.publish(filing)?;
        Ok(())
    })?;
    placing.outcome.settled = placing.settle.len() as u64;
    placing.outcome.known_lines = placing.account.filed + placing.account.already;
    Ok(placing.outcome)
}

fn publish_fault(
    filer: &mut Filer<'_>,
    ready: &Ready,
    kept: &Kept,
    mut filing: Filing,
    fault: &FileFault,
) -> revisant_schema::records::Result<Outcome> {
    let (rules, doer) = (filer.rules, filer.doer);
    let held = Held::row(reason_of(fault), fault.to_string());
    let key = row_key(kept.sha256.first_chunk().copied().unwrap_or_default(), 0);
    add_hold(filer.records, &mut filing, None, &held, &key)?;
    filer.records.act_within(ActKind::File, doer, |act| {
        let capture = add_capture(act, rules, ready, kept, None)?;
        act.objects.insert("export".into(), json!(ready.found.export));
        act.objects.insert("capture".into(), json!(capture));
        act.objects.insert("held".into(), json!(held.reason.code()));
        act.publish(filing)?;
        Ok(())
    })?;
    Ok(Outcome { held: 1, file_held: true, ..Outcome::default() })
}
