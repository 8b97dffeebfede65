//! `probe`: an instrument's reader, drafted from its sample exports.
//!
//! Invariants: what is printed without `--json` is TOML as a whole, so that it can be kept in a file; a plan is only
//! added to, and gets its new text at once or not at all.

use std::ffi::OsStr;
use std::fs;
use std::io::{Read, Write};
use std::path::{Component, Path, PathBuf};

use revisant_schema::plan::{self, Plan, PlanFiles};
use revisant_schema::records::Records;
use revisant_schema::roster::Roster;
use serde_json::json;

use super::Done;
use crate::args::Probe;
use crate::error::{Exit, Failure, unsound};
use crate::intake::{self, Asked, Draft, SampleExport};
use crate::report::table::{Left, Table, Whole};
use crate::report::text::{clean, count, wrap};
use crate::study::Context;

/// A larger sample is not read, nor more in all: a smaller export says as much, and drafting looks at all at once.
const LARGEST: u64 = 16 << 20;
const LARGEST_TOGETHER: usize = 64 << 20;

/// Runs it.
pub fn run(context: &mut Context<'_, '_>, args: &Probe) -> Done {
    let base = base(context, args);
    let folder = folder(args);
    let code = code(args, &folder)?;
    let samples: Vec<SampleExport> =
        args.files.iter().map(|file| sample(context, file, &folder)).collect::<Result<_, _>>()?;
    if samples.iter().map(|it| it.bytes.len()).sum::<usize>() > LARGEST_TOGETHER {
        return Err(Failure::refused("the samples are larger than 64 MiB together").then("give fewer of them"));
    }
    let known = Known::load(context, args, &base)?;
    let named = named_folder(args, &folder, &base);
    let asked = Asked {
        samples: &samples,
        code: &code,
        folder: &named,
        plan: known.plan.as_ref(),
        plan_text: known.text.as_deref(),
        roster: known.roster.as_ref(),
        now: context.world.now(),
    };
    let draft = intake::draft(&asked)?;
    let into = args.into.as_deref().map(|file| put(context, file, &draft, &code)).transpose()?;
    if context.out.json {
        context.out.json(&as_json(&draft, &code, into.as_deref()))?;
    } else {
        text(context, &draft, into.as_deref(), &code)?;
    }
    let found = !draft.gaps.is_empty() || !draft.misfits.is_empty();
    Ok(if found { Exit::Found } else { Exit::Done })
}

fn as_json(draft: &Draft, code: &str, into: Option<&Path>) -> serde_json::Value {
    let told = &draft.told;
    // What a person must fill in is not sure either, and comes first.
    let unsure: Vec<String> =
        draft.gaps.iter().chain(&draft.unsure).map(|remark| format!("{}: {}", remark.key, remark.text)).collect();
    json!({
        "code": code, "format": told.format, "encoding": told.encoding, "delimiter": told.delimiter,
        "quote": told.quote, "header_row": told.header_row, "units_row": told.units_row, "decimal": told.decimal,
        "stamp": told.stamp, "columns": told.columns, "unsure": unsure, "reader": draft.toml, "gaps": draft.gaps,
        "misfits": draft.misfits, "preview": draft.preview, "into": into.map(|file| file.display().to_string())
    })
}

/// What the samples are held against.
struct Known {
    plan: Option<Plan>,
    text: Option<String>,
    roster: Option<Roster>,
}

impl Known {
    /// The plan that is named, or the study's if there is one; and the roster of the study's records.
    fn load(context: &Context<'_, '_>, args: &Probe, base: &Path) -> Result<Self, Failure> {
        let file = args.into.clone().unwrap_or_else(|| base.join(plan::MAIN));
        if !file.exists() && args.into.is_none() {
            return Ok(Self { plan: None, text: None, roster: None });
        }
        let text = fs::read_to_string(&file).map_err(|error| unreadable(&file, &error))?;
        // Instruments that still have gaps must not keep one more from being drafted.
        let rest = intake::without_instruments(&text).unwrap_or_else(|| text.clone());
        let files = PlanFiles { main: rest, readers: vec![] };
        let (plan, _) = plan::parse(&files).map_err(|faults| unsound(&faults))?;
        let records = Records::folder_of(&context.study).join("records.sqlite");
        let roster = if records.exists() { Some(context.records()?.view()?.roster()?) } else { None };
        Ok(Self { plan: Some(plan), text: Some(text), roster })
    }
}

fn unreadable(file: &Path, error: &std::io::Error) -> Failure {
    let shown = file.display().to_string();
    Failure::new("file", format!("{shown} cannot be read ({error})")).at(shown)
}

/// The folder to which the plan's paths are relative.
fn base(context: &Context<'_, '_>, args: &Probe) -> PathBuf {
    let parent = args.into.as_deref().and_then(Path::parent).filter(|parent| *parent != Path::new(""));
    match &args.into {
        Some(_) => parent.map_or_else(|| PathBuf::from("."), Path::to_path_buf),
        None => context.study.clone(),
    }
}

/// The folder that holds all samples.
fn folder(args: &Probe) -> PathBuf {
    let parents: Vec<PathBuf> =
        args.files.iter().map(|file| absolute(file)).filter_map(|file| file.parent().map(Path::to_path_buf)).collect();
    if let Some(folder) = &args.folder {
        // A sample may have been copied from elsewhere; then its own folder says nothing.
        let named = parents.iter().find_map(|parent| parent.ancestors().find(|above| above.ends_with(folder)));
        if let Some(named) = named {
            return named.to_path_buf();
        }
    }
    let first = parents.first().cloned().unwrap_or_default();
    let holds_all = |above: &&Path| parents.iter().all(|parent| parent.starts_with(above));
    first.ancestors().find(holds_all).map_or_else(PathBuf::new, Path::to_path_buf)
}

/// A path from the root, by its true name where that can be told.
fn absolute(path: &Path) -> PathBuf {
    path.canonicalize().or_else(|_| std::path::absolute(path)).unwrap_or_else(|_| path.to_path_buf())
}

/// The folder as the plan names it: relative to the plan where it lies below.
fn named_folder(args: &Probe, folder: &Path, base: &Path) -> String {
    if let Some(folder) = &args.folder {
        return folder.display().to_string();
    }
    let below = folder.strip_prefix(absolute(base)).unwrap_or(folder);
    let shown = below.display().to_string();
    if shown.is_empty() { ".".to_owned() } else { shown }
}

/// The code that is given, or the folder's name as a code.
fn code(args: &Probe, folder: &Path) -> Result<String, Failure> {
    let given = args.code.clone();
    let name = args.folder.as_deref().unwrap_or(folder).file_name().map(OsStr::to_string_lossy).unwrap_or_default();
    let wanted = given.clone().unwrap_or_else(|| name.into_owned());
    let words = wanted.to_lowercase().replace(|c: char| !c.is_ascii_lowercase() && !c.is_ascii_digit(), "-");
    let words: Vec<&str> = words.split('-').filter(|word| !word.is_empty()).collect();
    let code = words.join("-");
    match given {
        Some(given) if given != code => Err(Failure::usage(format!("--code {given} is no code"))
            .then("write lower-case letters and digits, words joined by \"-\"")),
        _ if code.is_empty() => Ok("instrument".to_owned()),
        _ => Ok(code),
    }
}

fn sample(context: &Context<'_, '_>, file: &Path, folder: &Path) -> Result<SampleExport, Failure> {
    let mut bytes = vec![];
    let opened = context.world.open(file).map_err(|error| unreadable(file, &error))?;
    opened.take(LARGEST + 1).read_to_end(&mut bytes).map_err(|error| unreadable(file, &error))?;
    let shown = file.display().to_string();
    if bytes.len() as u64 > LARGEST {
        return Err(Failure::refused(format!("{shown} is larger than 16 MiB"))
            .at(shown)
            .then("give a smaller export of the same instrument"));
    }
    let whole = absolute(file);
    let below = whole.parent().and_then(|parent| parent.strip_prefix(folder).ok()).map_or(String::new(), slashed);
    let file_name = file.file_name().map(OsStr::to_string_lossy).unwrap_or_default().into_owned();
    Ok(SampleExport { shown, file_name, folder: below, bytes })
}

fn slashed(path: &Path) -> String {
    let parts = path.components().filter_map(|part| match part {
        Component::Normal(name) => Some(name.to_string_lossy().into_owned()),
        _ => None,
    });
    parts.collect::<Vec<_>>().join("/")
}

/// Adds the draft to a plan's file.
fn put(context: &Context<'_, '_>, file: &Path, draft: &Draft, code: &str) -> Result<PathBuf, Failure> {
    let shown = file.display().to_string();
    let failed =
        |error: std::io::Error| Failure::new("file", format!("{shown} cannot be written ({error})")).at(shown.clone());
    let before = fs::read_to_string(file).map_err(|error| unreadable(file, &error))?;
    let after = intake::draft_into(&before, draft, code).map_err(|failure| failure.at(shown.clone()))?;
    // A link stays a link: what it leads to is written.
    let whole = file.canonicalize().map_err(failed)?;
    let folder = whole.parent().unwrap_or(Path::new("."));
    let rights = fs::metadata(&whole).map_err(failed)?.permissions();
    let mut new = context.world.create(folder).map_err(failed)?;
    new.write_all(after.as_bytes()).map_err(failed)?;
    new.finish(&whole).map_err(failed)?;
    fs::set_permissions(&whole, rights).map_err(failed)?;
    Ok(file.to_path_buf())
}

fn text(context: &mut Context<'_, '_>, draft: &Draft, into: Option<&Path>, code: &str) -> Result<(), Failure> {
    let Some(file) = into else {
        context.out.text(&draft.toml)?;
        return comments(context, draft);
    };
    context.out.say(&format!("Added the instrument {code} to {}; all else in it is as before.", file.display()))?;
    let width = context.out.width;
    let list = |title: &str, remarks: Vec<String>| {
        let items: Vec<String> =
            remarks.iter().map(|remark| wrap(&format!("- {}", clean(remark)), width, "  ")).collect();
        format!("\n{title}\n{}", items.join("\n"))
    };
    let keyed = |remarks: &[(&str, &str)]| remarks.iter().map(|(key, text)| format!("{key}: {text}")).collect();
    if !draft.gaps.is_empty() {
        let gaps: Vec<(&str, &str)> = draft.gaps.iter().map(|it| (it.key.as_str(), it.text.as_str())).collect();
        let title = format!("To be filled in ({}; `revisant check` names each):", count(gaps.len() as u64, "gap"));
        context.out.text(&list(&title, keyed(&gaps)))?;
    }
    if !draft.misfits.is_empty() {
        let misfits: Vec<(&str, &str)> = draft.misfits.iter().map(|it| (it.sample.as_str(), it.why.as_str())).collect();
        context.out.text(&list("Samples that it does not read:", keyed(&misfits)))?;
    }
    if let Some(table) = table(draft) {
        context.out.say(&format!("\n{}", heading(draft)))?;
        context.out.table(&table)?;
    }
    Ok(())
}

/// What else is to be said, as comments of TOML.
fn comments(context: &mut Context<'_, '_>, draft: &Draft) -> Result<(), Failure> {
    if context.out.quiet {
        return Ok(());
    }
    let width = context.out.width.saturating_sub(2);
    let mut lines: Vec<String> = vec![];
    for misfit in &draft.misfits {
        let said = format!("{} is not read by this draft: {}", clean(&misfit.sample), clean(&misfit.why));
        lines.push(wrap(&said, width, "  "));
    }
    if let Some(table) = table(draft) {
        lines.push(format!("\n{}", wrap(heading(draft), width, "")));
        lines.push(table.render(width));
    }
    let commented: Vec<String> =
        lines.iter().flat_map(|text| text.split('\n')).map(|line| format!("# {line}").trim_end().to_owned()).collect();
    if commented.is_empty() { Ok(()) } else { context.out.text(&format!("\n{}", commented.join("\n"))) }
}

fn heading(draft: &Draft) -> &'static str {
    match draft.gaps.is_empty() {
        true => "The first rows as they would be filed:",
        false => "What the first rows hold; nothing is filed before the gaps are filled in:",
    }
}

/// The first rows.
fn table(draft: &Draft) -> Option<Table> {
    let mut table = Table::new(&[
        ("where", Left),
        ("subject", Whole),
        ("taken", Left),
        ("visit", Left),
        ("measure", Left),
        ("value", Left),
        ("held", Left),
    ]);
    for row in &draft.preview {
        let measure = [row.measure.as_str(), row.condition.as_str(), row.replicate.as_str()];
        let measure: Vec<&str> = measure.into_iter().filter(|part| !part.is_empty()).collect();
        table.row([
            row.place.clone(),
            row.subject.clone(),
            row.taken_at.clone(),
            row.visit.clone(),
            measure.join(" "),
            row.value.clone(),
            row.held.clone(),
        ]);
    }
    (!table.is_empty()).then_some(table)
}
