//! Sample: what the plan on disk would do with a file, with nothing filed.
//!
//! Invariants: the file goes the way of every export, from keep to file, on throw-away records; the study's own are
//! only read, and the file is only read; the plan is that on disk, whether or not it is in force.

use std::cell::Cell as Count;
use std::path::{Path, PathBuf};
use std::sync::Arc;

use revisant_schema::plan::{Instrument, Loaded, Plan};
use revisant_schema::records::exports::ExportState;
use revisant_schema::records::view::{HoldRow, ReadingFilter, ReadingRow};
use revisant_schema::records::{ActKind, Cell, Doer, Records, RecordsError, Scratch};
use revisant_schema::roster::Roster;
use revisant_schema::session::SessionFacts;
use revisant_schema::world::World;
use sha2::{Digest, Sha256};

use super::account::Account;
use super::collect::{Report, file_name, file_one, survey};
use super::error::Result;
use super::file::{Filer, Outcome};
use super::notice::{Found, fits, is_passing, name_of};
use super::place::resolve::{Resolver, Whereabouts};
use super::plan::from_hex;
use super::read::{self, Bytes, Row};
use super::rules::{Gathered, Rules};

/// Subjects that are taken as enrolled where there is no roster yet; rows of more of them are held.
const MOST_ASSUMED: usize = 10_000;

/// A file of somebody's own.
struct OnDisk<'w> {
    world: &'w dyn World,
    path: &'w Path,
}

impl Bytes for OnDisk<'_> {
    fn open(&self) -> std::io::Result<Box<dyn std::io::Read + '_>> {
        Ok(self.world.open(self.path)?)
    }
}

/// Where a file would stand as an export.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Standing {
    /// The instrument's place in the plan.
    pub instrument: usize,
    /// It lies in that instrument's export folder.
    pub in_folder: bool,
    /// `collect` would take it there by its name.
    pub by_name: bool,
    found: Found,
}

/// Why a file's instrument is not known.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum Undecided {
    /// The plan has no instrument of that code.
    Unknown,
    /// It may be an export of each of these.
    Several(Vec<String>),
    /// It is an export of none: each instrument, and why not.
    None(Vec<(String, String)>),
}

/// Finds whose export a file is: the instrument that is named; else the one in whose folder it lies; else the one that
/// takes its name and whose reader reads it.
pub fn standing(
    world: &dyn World,
    study: &Path,
    plan: &Plan,
    file: &Path,
    named: Option<&str>,
) -> Result<std::result::Result<Standing, Undecided>> {
    let stat = world.stat(file).map_err(|error| RecordsError::file(file, "reading the sample", error))?;
    let stand = |instrument: usize| place_of(study, plan, instrument, file, stat);
    if let Some(code) = named {
        return Ok(plan.instrument(code).map(|(at, _)| stand(at)).ok_or(Undecided::Unknown));
    }
    let all: Vec<Standing> = (0..plan.instruments.len()).map(stand).collect();
    let inside: Vec<&Standing> = all.iter().filter(|standing| standing.in_folder).collect();
    let taken: Vec<&Standing> = inside.iter().copied().filter(|standing| standing.by_name).collect();
    let likely = match (taken.as_slice(), inside.as_slice()) {
        ([one], _) | ([], [one]) => return Ok(Ok((*one).clone())),
        ([], []) => all.iter().filter(|standing| standing.by_name).collect(),
        ([], _) => inside,
        _ => taken,
    };
    Ok(by_reader(world, plan, file, &all, &likely))
}

fn by_reader(
    world: &dyn World,
    plan: &Plan,
    file: &Path,
    all: &[Standing],
    likely: &[&Standing],
) -> std::result::Result<Standing, Undecided> {
    let source = OnDisk { world, path: file };
    let tried: Vec<(&Standing, Option<String>)> =
        likely.iter().map(|one| (*one, misfit(&plan.instruments[one.instrument], &source))).collect();
    let fitting: Vec<&Standing> = tried.iter().filter(|(_, why)| why.is_none()).map(|(one, _)| *one).collect();
    match (fitting.as_slice(), all) {
        ([one], _) => Ok((*one).clone()),
        // Whatever is wrong with it, there is no other whose it could be.
        ([], [only]) => Ok(only.clone()),
        ([], _) => {
            Err(Undecided::None(all.iter().map(|one| (code_of(plan, one), why_not(one, plan, &tried))).collect()))
        }
        _ => Err(Undecided::Several(fitting.iter().map(|one| code_of(plan, one)).collect())),
    }
}

fn code_of(plan: &Plan, standing: &Standing) -> String {
    plan.instruments[standing.instrument].code.clone()
}

fn why_not(standing: &Standing, plan: &Plan, tried: &[(&Standing, Option<String>)]) -> String {
    let why = tried.iter().find(|(one, _)| one.instrument == standing.instrument).and_then(|(_, why)| why.clone());
    why.unwrap_or_else(|| format!("its name does not fit \"{}\"", plan.instruments[standing.instrument].files))
}

/// Why an instrument's reader does not read the file as far as its first row.
fn misfit(instrument: &Instrument, source: &dyn Bytes) -> Option<String> {
    let mut rows = match read::open(&instrument.reader, source) {
        Ok(rows) => rows,
        Err(fault) => return Some(fault.to_string()),
    };
    if let Err(fault) = rows.next_row(&mut Row::default()) {
        return Some(fault.to_string());
    }
    let serial = instrument.serial.as_ref()?;
    let found = rows.preamble(&serial.preamble).unwrap_or_default().trim();
    (found != serial.is).then(|| format!("its serial number is {found}, and not {}", serial.is))
}

/// Where the file stands, or would stand, below an instrument's folder.
fn place_of(study: &Path, plan: &Plan, at: usize, file: &Path, stat: revisant_schema::world::Stat) -> Standing {
    let instrument = &plan.instruments[at];
    let root = study.join(&instrument.folder);
    let whole = |path: &Path| path.canonicalize().unwrap_or_else(|_| path.to_path_buf());
    let inside = whole(file).strip_prefix(whole(&root)).ok().map(Path::to_path_buf);
    let in_folder = inside.is_some();
    let relative = inside.unwrap_or_else(|| file.file_name().map(PathBuf::from).unwrap_or_default());
    let below = relative.parent().map(|below| below.to_string_lossy().into_owned()).unwrap_or_default();
    let export = name_of(study, &root.join(&relative));
    let name = file_name(&export);
    let by_name = fits(instrument, &name, &below) && !is_passing(&name);
    let found = Found { instrument: at, export, path: file.to_path_buf(), below, stat };
    Standing { instrument: at, in_folder, by_name, found }
}

/// What the plan would do with a file.
pub struct Sample {
    /// The export's path as the records would name it.
    pub export: String,
    /// Where the same bytes were filed before. Then they are shown as if they had never come: without what people have
    /// decided about them since.
    pub filed_before: Option<String>,
    /// There is no roster: whoever's code fits the plan's pattern was taken as enrolled.
    pub without_roster: bool,
    /// The state that the export would have.
    pub state: ExportState,
    /// The account of its lines; `None`: held as a whole.
    pub account: Option<Account>,
    /// What would be filed and held.
    pub outcome: Outcome,
    /// The first readings that would be filed, in the order of the file.
    pub readings: Vec<ReadingRow>,
    /// Every hold that would be opened.
    pub holds: Vec<HoldRow>,
    /// Holds that are open already on rows of it.
    pub held_before: Vec<HoldRow>,
    /// The roster that it was placed by.
    pub roster: Roster,
    /// The sessions that there would be.
    pub facts: Vec<SessionFacts>,
}

/// How a sample is to be made.
pub struct How<'h> {
    /// Clock and files.
    pub world: Arc<dyn World>,
    /// The plan on disk.
    pub plan: &'h Loaded,
    /// Who asks.
    pub doer: &'h Doer,
    /// How many readings are wanted.
    pub readings: u64,
    /// Told how many rows have been placed.
    pub progress: &'h dyn Fn(u64),
}

/// Shows what the plan would do with a file; `records` are the study's, if it has any.
pub fn sample(records: Option<&Records>, standing: &Standing, how: &How<'_>) -> Result<Sample> {
    let found = &standing.found;
    if found.stat.size == 0 {
        let what = format!("{} has no bytes yet; `revisant collect` waits for them", found.path.display());
        return Err(RecordsError::Refused(what).into());
    }
    let filed_before = match records {
        Some(records) => filed_before(records, how, found)?,
        None => None,
    };
    let real = records.map(Records::view).transpose()?;
    let roster = real.map(|view| view.roster()).transpose()?.unwrap_or_default();
    let mut facts = real.map(|view| view.session_facts()).transpose()?.unwrap_or_default();
    let mut scratch = match records {
        Some(records) if filed_before.is_none() => Scratch::copy_of(records)?,
        _ => Scratch::empty(how.world.clone())?,
    };
    if records.is_some() && filed_before.is_none() {
        // The copy has them itself.
        facts.clear();
    }
    bring_older_bytes(records, &scratch, &found.export)?;
    let without_roster = roster.subjects.is_empty();
    let roster = if without_roster { assumed(how, found)? } else { roster };
    let rules = rules(&mut scratch.records, how, roster)?;
    let outcome = file(&mut scratch.records, &rules, found, &facts, how)?;
    let shown = Shown { filed_before, without_roster, outcome, facts };
    shown.of(&scratch.records, found, rules.roster.clone(), how.readings)
}

/// Where the same instrument's same bytes were filed before.
fn filed_before(records: &Records, how: &How<'_>, found: &Found) -> Result<Option<String>> {
    let failed = |error| RecordsError::file(&found.path, "reading the sample", error);
    let source = how.world.open(&found.path).map_err(failed)?;
    let code = &how.plan.plan.instruments[found.instrument].code;
    let same = records.captures_of_bytes(code, &hash_of(source).map_err(failed)?)?;
    Ok(same.into_iter().next().map(|(_, path)| path))
}

fn hash_of(mut source: impl std::io::Read) -> std::io::Result<[u8; 32]> {
    let mut hasher = Sha256::new();
    let mut buffer = vec![0; 64 * 1024];
    loop {
        match source.read(&mut buffer)? {
            0 => return Ok(hasher.finalize().into()),
            count => hasher.update(buffer.get(..count).unwrap_or_default()),
        }
    }
}

/// What the path held before may lie in a file of its own; the copy of the records reads it where it is.
fn bring_older_bytes(records: Option<&Records>, scratch: &Scratch, export: &str) -> Result<()> {
    let Some(records) = records else { return Ok(()) };
    let Some(last) = scratch.records.last_capture(export)? else { return Ok(()) };
    let (there, here) = (records.raw_file(&last.sha256), scratch.records.raw_file(&last.sha256));
    if !there.exists() {
        return Ok(());
    }
    let whole = std::path::absolute(&there).unwrap_or_else(|_| there.clone());
    let linked = std::os::unix::fs::symlink(whole, &here);
    Ok(linked.map_err(|error| RecordsError::file(&here, "linking to a raw copy", error))?)
}

/// Everybody in the file whose code fits the plan's pattern, enrolled on a day that is not known.
fn assumed(how: &How<'_>, found: &Found) -> Result<Roster> {
    let plan = &how.plan.plan;
    let instrument = &plan.instruments[found.instrument];
    let mut roster = Roster::default();
    let source = OnDisk { world: how.world.as_ref(), path: &found.path };
    let wanted = read::wanted(&instrument.reader);
    let name = file_name(&found.export);
    let whereabouts = Whereabouts { file_name: &name, folder: &found.below };
    let none = Roster::default();
    let resolver = Resolver::new(plan, instrument, &none, how.world.now(), &wanted, whereabouts);
    let resolver = resolver.map_err(RecordsError::Refused)?;
    // What cannot be read is held when it is filed.
    let Ok(mut rows) = read::open(&instrument.reader, &source) else { return Ok(roster) };
    let mut row = Row::default();
    while roster.subjects.len() < MOST_ASSUMED && rows.next_row(&mut row).unwrap_or(false) {
        let code = resolver.subject_code(&row, rows.as_ref());
        if plan.subject.pattern.is_match(&code) {
            roster.subjects.entry(code).or_default();
        }
    }
    Ok(roster)
}

/// Brings the plan on disk into force in the throw-away records, whatever it would change there.
fn rules(records: &mut Records, how: &How<'_>, roster: Roster) -> Result<Rules> {
    let files = &how.plan.files;
    if Rules::load(records)?.is_none_or(|rules| rules.hash != files.sha256()) {
        let hash = from_hex(&files.sha256());
        let text = serde_json::to_string(files).unwrap_or_default();
        records
            .act(ActKind::Plan, how.doer, |act| act.add("plan_version", &[Cell::Bytes(&hash), Cell::Text(&text)]))?;
    }
    let rules = super::plan::in_force(records)?;
    Ok(Rules { roster, ..rules })
}

fn file(records: &mut Records, rules: &Rules, found: &Found, facts: &[SessionFacts], how: &How<'_>) -> Result<Outcome> {
    let mut report = Report::default();
    let (mut ready, mut gathered) = survey(records, rules, vec![found.clone()], &mut report, &|| false)?;
    gather_facts(rules, facts, &mut gathered);
    let moved = || RecordsError::Refused(format!("{} changes while it is read; try again", found.path.display()));
    let ready = ready.first_mut().ok_or_else(moved)?;
    let placed = Count::new(0);
    let tick = || {
        (how.progress)(placed.get());
        placed.set(placed.get() + super::file::ASK);
        false
    };
    let mut filer = Filer::new(records, rules, gathered, how.doer)?;
    filer.stop = &tick;
    let done = file_one(&mut filer, ready, &mut report)?;
    filer.commit(true)?;
    Ok(done.and_then(|(outcome, _)| outcome).ok_or_else(moved)?)
}

/// Sessions that the throw-away records do not have count for day 0 as if they were in hand.
fn gather_facts(rules: &Rules, facts: &[SessionFacts], gathered: &mut Gathered) {
    for fact in facts {
        for measure in fact.measures.iter().filter_map(|code| rules.plan.measure(code)) {
            gathered.see(&rules.plan, &fact.subject, fact.day, fact.label.as_deref(), measure.0);
        }
    }
}

/// What is known before the records are asked.
struct Shown {
    filed_before: Option<String>,
    without_roster: bool,
    outcome: Outcome,
    facts: Vec<SessionFacts>,
}

impl Shown {
    fn of(self, records: &Records, found: &Found, roster: Roster, most: u64) -> Result<Sample> {
        let Self { filed_before, without_roster, outcome, mut facts } = self;
        let view = records.view()?;
        let lost = || RecordsError::Damaged("the sample just filed is not there".to_owned());
        let capture = records.last_capture(&found.export)?.ok_or_else(lost)?.capture;
        let account = records.account_of(capture)?.and_then(|text| serde_json::from_str(&text).ok());
        let filter = ReadingFilter { capture: Some(capture), most: Some(most), ..ReadingFilter::default() };
        let sighted: Vec<i64> =
            view.sightings()?.into_iter().filter(|(on, _)| *on == capture).map(|(_, it)| it).collect();
        let (holds, others): (Vec<HoldRow>, Vec<HoldRow>) =
            view.holds(true)?.into_iter().partition(|hold| hold.capture == capture);
        // Numbers of the study's own sessions must not be taken for those of the throw-away records.
        facts.iter_mut().for_each(|fact| fact.session = -fact.session);
        facts.extend(view.session_facts()?);
        Ok(Sample {
            export: found.export.clone(),
            filed_before,
            without_roster,
            state: outcome.state(),
            account,
            outcome,
            readings: view.readings(&filter)?,
            holds,
            held_before: others.into_iter().filter(|hold| sighted.contains(&hold.hold)).collect(),
            roster,
            facts,
        })
    }
}
