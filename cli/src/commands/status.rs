//! `status`: what became of every export, and which instrument is quiet.

use std::collections::{BTreeMap, HashMap};

use chrono::{DateTime, NaiveDate, SecondsFormat, Utc};
use chrono_tz::Tz;
use revisant_schema::plan::Instrument;
use revisant_schema::records::codec::hex;
use revisant_schema::records::exports::{ExportRow, ExportState};
use revisant_schema::records::{ActKind, View};
use serde::Serialize;
use serde_json::{Value as Json, json};

use super::Done;
use crate::args::Status;
use crate::error::{Exit, Failure};
use crate::intake;
use crate::report::table::{Left, Table, Whole};
use crate::report::text::count;
use crate::report::when;
use crate::study::{Basis, Context};
use crate::took_part;

/// An instrument, and whether it is heard of.
#[derive(Debug, Clone, Serialize)]
pub struct InstrumentLine {
    /// Its code.
    pub instrument: String,
    /// When its newest export was written.
    pub last_export: Option<String>,
    /// It has exported nothing for longer than the plan allows, while sessions took place.
    pub silent: bool,
    /// Its folder, or an export in it, cannot be read now.
    pub unreachable: bool,
    /// Current readings taken outside the dates between which the plan has it in use.
    pub outside_use: u64,
}

/// Runs it.
pub fn run(context: &mut Context<'_, '_>, args: &Status) -> Done {
    let records = context.records()?;
    let view = records.view()?;
    let basis = Basis::of(&view)?;
    let exports = view.exports()?;
    let instruments = instruments(context, &view, &basis, &exports)?;
    let running = intake::service_running(&context.study);
    let result = json!({
        "service": { "running": running, "since": since(&view, running)? },
        "plan": { "version": basis.version, "state": plan_state(context, &basis) },
        "exports": totals(&exports),
        "readings": readings(&view, &exports)?,
        "files": exports.iter().map(file_json).collect::<Vec<_>>(),
        "holds": { "open": view.holds(true)?.len() },
        "instruments": instruments,
    });
    match context.out.json {
        true => context.out.json(&result)?,
        false => text(context, &result, &exports, &instruments, basis.zone())?,
    }
    let quiet = instruments.iter().any(|line| line.silent || line.unreachable);
    Ok(if args.strict && (!running || quiet) { Exit::Found } else { Exit::Done })
}

/// Whether the plan on disk is the one in force, or else what it is.
fn plan_state(context: &Context<'_, '_>, basis: &Basis) -> &'static str {
    match intake::load(context.world.as_ref(), &context.study) {
        Ok(loaded) if loaded.files.sha256() == hex(&basis.sha256) => "in-force",
        Ok(_) => "changed",
        Err(failure) if failure.kind == "unsound-plan" => "unsound",
        Err(_) => "unreadable",
    }
}

/// The same in words, where it needs any.
fn plan_words(state: &str, version: i64) -> Option<String> {
    let stays = format!("version {version} stays in force");
    match state {
        "changed" => Some(format!("The plan on disk has changed; {stays} until the next collect.")),
        "unsound" => Some(format!("The plan on disk is unsound; {stays}. See `revisant check`.")),
        "unreadable" => Some(format!("The plan on disk cannot be read; {stays}. See `revisant check`.")),
        _ => None,
    }
}

fn since(view: &View<'_>, running: bool) -> Result<Option<String>, Failure> {
    let starts = if running { view.acts_on(ActKind::Start, "")? } else { vec![] };
    Ok(starts.into_iter().next_back().map(|(_, at, _)| at))
}

fn totals(exports: &[ExportRow]) -> BTreeMap<&'static str, u64> {
    let mut totals: BTreeMap<&str, u64> = ExportState::ALL.iter().map(|state| (state.code(), 0)).collect();
    for export in exports {
        *totals.entry(export.state.code()).or_default() += 1;
    }
    totals
}

/// All readings ever filed, lines that were there already, and what is held now.
fn readings(view: &View<'_>, exports: &[ExportRow]) -> Result<Json, Failure> {
    let current: u64 = view.cells()?.iter().map(|cell| u64::from(cell.current)).sum();
    let filed = current + view.reading_states()?.len() as u64;
    let lines = exports.iter().filter_map(|export| export.lines.as_ref()?["already"].as_u64());
    Ok(json!({ "filed": filed, "already": lines.sum::<u64>(), "held": view.holds(true)?.len() }))
}

fn file_json(export: &ExportRow) -> Json {
    json!({
        "export": export.export, "instrument": export.instrument, "state": export.state.code(),
        "lines": export.lines, "at": export.at, "detail": export.detail
    })
}

/// Every instrument of the plan.
pub fn instruments(
    context: &Context<'_, '_>,
    view: &View<'_>,
    basis: &Basis,
    exports: &[ExportRow],
) -> Result<Vec<InstrumentLine>, Failure> {
    let mut newest: BTreeMap<String, i64> = BTreeMap::new();
    for capture in view.captures()? {
        let kept = newest.entry(capture.instrument).or_insert(i64::MIN);
        *kept = (*kept).max(capture.modified);
    }
    let courses = basis.courses.by_subject.values();
    let days: Vec<NaiveDate> =
        courses.flat_map(|course| course.sessions.iter().map(|session| session.facts.day)).collect();
    let outside = outside_use(view, basis)?;
    let line = |instrument: &Instrument| {
        let last = newest.get(&instrument.code).map(|nanos| when::of_nanos(*nanos));
        let lost = !context.study.join(&instrument.folder).is_dir();
        let unreadable =
            |export: &ExportRow| export.instrument == instrument.code && export.state == ExportState::Unreachable;
        InstrumentLine {
            instrument: instrument.code.clone(),
            last_export: last.map(|at| at.to_rfc3339_opts(SecondsFormat::Secs, true)),
            silent: silent(instrument, last, &days, context.world.now()),
            unreachable: lost || exports.iter().any(unreadable),
            outside_use: outside.get(&instrument.code).copied().unwrap_or(0),
        }
    };
    Ok(basis.plan.instruments.iter().map(line).collect())
}

/// Current readings by instrument that were taken outside its use.
fn outside_use(view: &View<'_>, basis: &Basis) -> Result<BTreeMap<String, u64>, Failure> {
    let mut outside = BTreeMap::new();
    if basis.plan.instruments.iter().all(|instrument| instrument.used.is_none()) {
        return Ok(outside);
    }
    let days: HashMap<i64, NaiveDate> = view.all_sessions()?.into_iter().map(|row| (row.session, row.day)).collect();
    for cell in view.cells()? {
        let day = days.get(&cell.session);
        if day.is_some_and(|day| took_part::outside_use(&basis.plan, &cell.instrument, *day)) {
            *outside.entry(cell.instrument.to_string()).or_default() += u64::from(cell.current);
        }
    }
    Ok(outside)
}

/// Nothing for longer than allowed, while it is in use and sessions took place since.
fn silent(instrument: &Instrument, last: Option<DateTime<Utc>>, days: &[NaiveDate], now: DateTime<Utc>) -> bool {
    let Some(allowed) = instrument.silent else { return false };
    let day = |moment: DateTime<Utc>| moment.with_timezone(&instrument.time_zone).date_naive();
    let (from, _) = instrument.used.unwrap_or_default();
    let in_use = instrument.in_use_on(day(now));
    let since = last.map(day).or(from).or_else(|| days.iter().min().copied());
    let overdue = since.is_some_and(|since| (day(now) - since) > allowed);
    in_use && overdue && days.iter().any(|session| since.is_some_and(|since| *session > since))
}

fn text(
    context: &mut Context<'_, '_>,
    result: &Json,
    exports: &[ExportRow],
    instruments: &[InstrumentLine],
    zone: Tz,
) -> Result<(), Failure> {
    let running = result["service"]["running"].as_bool() == Some(true);
    let service = if running { "The service is running." } else { "No service is running." };
    let states = totals(exports).into_iter().filter(|(_, number)| *number > 0);
    let states: Vec<String> = states.map(|(state, number)| format!("{number} {state}")).collect();
    let holds = count(result["holds"]["open"].as_u64().unwrap_or(0), "open hold");
    let shown = if states.is_empty() { "none yet".to_owned() } else { states.join(", ") };
    context.out.text(&format!("{service}\nExports: {shown}.\n{holds}."))?;
    let plan = &result["plan"];
    let words = plan_words(plan["state"].as_str().unwrap_or_default(), plan["version"].as_i64().unwrap_or_default());
    words.map_or(Ok(()), |words| context.out.say(&words))?;
    let mut table = Table::new(&[("instrument", Whole), ("last export", Whole), ("", Left)]);
    for line in instruments {
        let flags = [(line.silent, "quiet"), (line.unreachable, "unreachable")];
        let mut flags: Vec<String> =
            flags.iter().filter(|(flag, _)| *flag).map(|(_, word)| (*word).to_owned()).collect();
        flags.extend((line.outside_use > 0).then(|| format!("{} outside its use", count(line.outside_use, "reading"))));
        let last = line.last_export.as_deref().map_or_else(|| "none".to_owned(), |at| when::written(at, zone));
        table.row([line.instrument.clone(), last, flags.join(", ")]);
    }
    context.out.text("").and_then(|()| context.out.table(&table))?;
    wanting(context, exports)
}

/// The exports that are not simply filed, with the reason where there is one.
fn wanting(context: &mut Context<'_, '_>, exports: &[ExportRow]) -> Result<(), Failure> {
    const REPEATS: usize = 10;
    let mut table = Table::new(&[("export", Left), ("state", Whole), ("", Left)]);
    let (repeats, others): (Vec<&ExportRow>, Vec<&ExportRow>) = exports
        .iter()
        .filter(|export| export.state != ExportState::Filed)
        .partition(|export| export.state == ExportState::Repeat);
    for export in others.into_iter().chain(repeats.iter().copied().take(REPEATS)) {
        let row = [export.export.clone(), export.state.code().to_owned(), export.detail.clone().unwrap_or_default()];
        table.row(row);
    }
    if table.is_empty() {
        return Ok(());
    }
    context.out.text("").and_then(|()| context.out.table(&table))?;
    match repeats.len().saturating_sub(REPEATS) {
        0 => Ok(()),
        more => context.out.say(&format!("and {} more; --json lists all of them.", count(more as u64, "repeat"))),
    }
}
