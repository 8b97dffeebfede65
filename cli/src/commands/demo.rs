//! `demo`: the invented study on a fresh copy, with the real service at work.
//!
//! Invariant: all that is shown comes from the commands that anyone can type, and each is shown as it is typed.

use std::ffi::OsString;
use std::path::{Path, PathBuf};
use std::time::{Duration, Instant};

use indicatif::{ProgressBar, ProgressDrawTarget, ProgressStyle};
use serde_json::{Map, Value as Json, json};

use super::Done;
use crate::args::Demo;
use crate::demo::rig::{FOLDERS, Rig};
use crate::demo::service::{self, Running};
use crate::demo::{SEED, TODAY, write_study};
use crate::error::{Exit, Failure};
use crate::output::Out;
use crate::report::text::{count, list};
use crate::study::Context;

/// Where the demo goes when nothing else is said.
const USUAL: &str = "revisant-demo";
/// How long the service may take for what is left when the rig has done.
const PATIENCE: Duration = Duration::from_secs(20);
/// The analysis that is shown, and its plot.
const ANALYSIS: &str = "rise-over-visits";
const PLOT: &str = "rise-over-visits.svg";

/// Runs it.
pub fn run(context: &mut Context<'_, '_>, args: &Demo) -> Done {
    let started = Instant::now();
    let folder = args.into.clone().unwrap_or_else(|| PathBuf::from(USUAL));
    let seed = args.seed.unwrap_or(SEED);
    fresh(&folder)?;
    write_study(&folder).map_err(|error| unwritable(&folder, &error))?;
    context.study = folder;
    introduce(context)?;
    let roster = context.study.join("roster.csv").display().to_string();
    asked(context, &["roster", "import", &roster, "--why", "enrolments of the demo"])?;
    let written = play(context, seed)?;
    let shown = if context.out.json { tell_machines(context)? } else { tell_people(context)? };
    if context.out.json {
        let mut result = json!({ "folder": context.study.display().to_string(), "seed": seed, "on": TODAY });
        if let Some(fields) = result.as_object_mut() {
            fields.insert("steps".to_owned(), json!(written));
            fields.extend(shown);
            fields.insert("plot".to_owned(), json!(PLOT));
            fields.insert("seconds".to_owned(), json!(started.elapsed().as_secs_f64()));
        }
        context.out.json(&result)?;
    } else {
        what_next(context)?;
        context.out.say(&format!("\nAll of this took {:.0} s.", started.elapsed().as_secs_f64()))?;
    }
    Ok(Exit::Done)
}

/// The folder must not be there, or be empty.
fn fresh(folder: &Path) -> Result<(), Failure> {
    let shown = folder.display().to_string();
    match std::fs::read_dir(folder) {
        Ok(mut entries) => match entries.next() {
            None => Ok(()),
            Some(_) => Err(Failure::refused(format!("the folder {shown} is not empty, and nothing is overwritten"))
                .at(shown)
                .then("name a new one with --into DIR")),
        },
        Err(error) if error.kind() == std::io::ErrorKind::NotFound => Ok(()),
        Err(error) => Err(unwritable(folder, &error)),
    }
}

fn unwritable(folder: &Path, error: &std::io::Error) -> Failure {
    let shown = folder.display().to_string();
    Failure::new("file", format!("the demo cannot be written into {shown} ({error})"))
        .at(shown)
        .then("name another folder with --into DIR")
}

fn introduce(context: &mut Context<'_, '_>) -> Result<(), Failure> {
    if context.out.json {
        return Ok(());
    }
    let folder = context.study.display().to_string();
    context.out.heading("An invented study: sixteen subjects, four visits, four instruments")?;
    context.out.say(&format!(
        "Its plan and roster are in {folder}. The service now watches the folders into which the four \
         instruments export; a rig writes their files, as instruments do: in parts, under temporary names, twice, \
         and with a slip here and there. The study's calendar lies in 2025; its today is {TODAY}."
    ))?;
    context.out.finish()
}

// ---- the rig and the service ----

/// Lets the rig write while the service runs; gives the number of steps.
fn play(context: &mut Context<'_, '_>, seed: u64) -> Result<u64, Failure> {
    let rig = Rig::new(seed);
    let steps = rig.steps().len() as u64;
    let bar = bar(context, steps);
    let service = service::start(&context.study, context.world.clone())?;
    let show = |done: u64| {
        let (filed, held) = service.done.so_far();
        bar.set_position(done);
        bar.set_message(format!("{filed} filed, {held} held"));
    };
    let played = rig.play(&context.study, &mut |done| show(done));
    let read = match played {
        Ok(()) => wait(&service, &mut || show(steps)),
        Err(error) => Err(unwritable(&context.study, &error)),
    };
    bar.finish_and_clear();
    service.stop().and(read).map(|()| steps)
}

/// On standard error, where a terminal reads it.
fn bar(context: &Context<'_, '_>, steps: u64) -> ProgressBar {
    if !context.out.terminal || context.out.quiet || context.out.json {
        return ProgressBar::hidden();
    }
    let bar = ProgressBar::with_draw_target(Some(steps), ProgressDrawTarget::stderr());
    let template = "{bar:24} {pos} of {len} steps of the rig, {elapsed}; {msg}";
    if let Ok(style) = ProgressStyle::with_template(template) {
        bar.set_style(style);
    }
    bar
}

/// Waits until the service has read everything that is at rest.
fn wait(service: &Running, show: &mut dyn FnMut()) -> Result<(), Failure> {
    let (start, rounds) = (Instant::now(), service.rounds());
    while start.elapsed() < PATIENCE {
        show();
        if service.has_read_all(rounds) {
            return Ok(());
        }
        if !service.is_alive() {
            return Err(Failure::new("service", "the service broke down"));
        }
        std::thread::sleep(Duration::from_millis(100));
    }
    Err(Failure::new("service", format!("exports are still unread after {} s", PATIENCE.as_secs())))
}

// ---- what is shown ----

/// A command that is shown: its words after the program's name, what it answers, and its name in the JSON.
struct Asked {
    title: &'static str,
    name: &'static str,
    words: &'static [&'static str],
    after: &'static str,
}

const SHOWN: [Asked; 6] = [
    Asked {
        title: "What became of the exports",
        name: "status",
        words: &["status"],
        after: "`held` and `part-filed` exports have something that waits for a person. A `repeat` holds bytes that \
                were there already; an `ignored` one does not fit the plan's `files`.",
    },
    Asked {
        title: "What waits for a person, and why",
        name: "holds",
        words: &["holds"],
        after: "Nothing is guessed: the likeliest answers are suggested, a person decides, and the decision is \
                recorded with its reason.",
    },
    Asked { title: "Who is incomplete", name: "completeness", words: &["completeness", "--on", TODAY], after: "" },
    Asked { title: "Who is due within a week", name: "due", words: &["due", "--on", TODAY, "--days", "7"], after: "" },
    Asked { title: "The interim analysis", name: "analysis", words: &["analyse", ANALYSIS, "--plot", PLOT], after: "" },
    Asked {
        title: "Whether the records are whole",
        name: "verified",
        words: &["trail", "verify"],
        after: "The head hash is short enough for a paper notebook: written down there, it shows later that the trail \
                was not rebuilt.",
    },
];

fn tell_people(context: &mut Context<'_, '_>) -> Result<Map<String, Json>, Failure> {
    in_short(context)?;
    for shown in &SHOWN {
        context.out.heading(&format!("\n{}", shown.title))?;
        context.out.say(&format!("$ revisant {}\n", shown.words.join(" ")))?;
        let words = in_folder(&context.study, shown.words);
        run_command(&context.study, &words, context.world.clone(), context.out)?;
        if !shown.after.is_empty() {
            context.out.say(&format!("\n{}", shown.after))?;
        }
    }
    context.out.say(&format!("\nThe plot of it is {}.", context.study.join(PLOT).display()))?;
    Ok(Map::new())
}

/// What came of it, in two sentences.
fn in_short(context: &mut Context<'_, '_>) -> Result<(), Failure> {
    let status = asked(context, &["status"])?;
    let number = |of: &str, what: &str| status[of][what].as_u64().unwrap_or(0);
    let exports: u64 = status["exports"].as_object().map_or(0, |states| states.values().filter_map(Json::as_u64).sum());
    let holds = asked(context, &["holds", "list", "--all"])?;
    let holds = holds.as_array().map_or(&[][..], Vec::as_slice);
    let by_itself = holds.iter().filter(|hold| hold["state"] == "decided").count() as u64;
    let settled = match by_itself {
        0 => String::new(),
        some => format!(
            " {} that an unfinished last line had opened settled by itself when the rest of the line came.",
            count(some, "more hold")
        ),
    };
    context.out.say(&format!(
        "\n{} were written; {} are filed, each once, and {} wait for a person.{settled}",
        count(exports, "export"),
        count(number("readings", "filed"), "reading"),
        count(number("holds", "open"), "hold")
    ))
}

fn tell_machines(context: &mut Context<'_, '_>) -> Result<Map<String, Json>, Failure> {
    let mut all = Map::new();
    for shown in &SHOWN {
        all.insert(shown.name.to_owned(), asked(context, shown.words)?);
    }
    Ok(all)
}

/// The words, with files that a command writes meant in the study's folder.
fn in_folder(study: &Path, words: &[&str]) -> Vec<OsString> {
    let word = |word: &&str| if *word == PLOT { study.join(PLOT).into_os_string() } else { OsString::from(word) };
    words.iter().map(word).collect()
}

fn run_command(
    study: &Path,
    words: &[OsString],
    world: std::sync::Arc<dyn revisant_schema::world::World>,
    out: &mut Out<'_>,
) -> Result<(), Failure> {
    let (json, quiet) = (out.json, out.quiet);
    let mut line: Vec<OsString> = vec!["revisant".into()];
    line.extend(words.iter().cloned());
    line.extend(["--study".into(), study.as_os_str().to_owned()]);
    line.extend(json.then(|| "--json".into()));
    line.extend(quiet.then(|| "--quiet".into()));
    let exit = crate::run(line, out, world);
    (out.json, out.quiet) = (json, quiet);
    match exit {
        Exit::Done | Exit::Found => Ok(()),
        Exit::Failed | Exit::Usage => {
            let words: Vec<_> = words.iter().map(|word| word.to_string_lossy()).collect();
            Err(Failure { exit, ..Failure::new("demo", format!("`revisant {}` failed", words.join(" "))) })
        }
    }
}

/// What a command answers to a machine.
fn asked(context: &Context<'_, '_>, words: &[&str]) -> Result<Json, Failure> {
    let (mut answer, mut wrong) = (Vec::new(), Vec::new());
    let mut out = Out::new(Box::new(&mut answer), Box::new(&mut wrong));
    out.json = true;
    let done = run_command(&context.study, &in_folder(&context.study, words), context.world.clone(), &mut out);
    drop(out);
    done.map_err(|failure| {
        let said: Json = serde_json::from_slice(&wrong).unwrap_or_default();
        let said = said["error"]["message"].as_str().unwrap_or_default().to_owned();
        Failure { what: format!("{}: {said}", failure.what), ..failure }
    })?;
    serde_json::from_slice(&answer)
        .map_err(|error| Failure::new("demo", format!("`revisant {}` gave no JSON ({error})", words.join(" "))))
}

// ---- what to try next ----

fn what_next(context: &mut Context<'_, '_>) -> Result<(), Failure> {
    let holds = asked(context, &["holds"])?;
    let number = |reason: &str| {
        let found = holds.as_array()?.iter().find(|hold| hold["reason"] == *reason)?;
        found["hold"].as_i64()
    };
    let folder = context.study.display().to_string();
    context.out.heading("\nWhat to try next")?;
    context.out.say("Each line can be pasted.\n")?;
    let alias = alias();
    // Built from source, the service may not have been built yet.
    let service = alias.as_ref().is_none_or(|alias| alias.contains("revisantd="));
    let mut lines = vec![format!("cd {folder}")];
    lines.extend(alias);
    if let Some(hold) = number("unknown-subject") {
        lines.push(format!("revisant holds show {hold}"));
        lines.push(format!("revisant holds decide {hold} --subject QR-156 --all-like-it 2 --why \"misread\""));
    }
    if let Some(hold) = number("changed-value") {
        lines.push(format!("revisant holds decide {hold} --take-new --why \"weighed without shoes\""));
    }
    if let Some(hold) = number("implausible-value") {
        lines.push(format!("revisant holds show {hold}"));
    }
    lines.push("revisant account QR-145 week-8 --measure grip --why \"left wrist in plaster\"".to_owned());
    lines.push(format!("revisant completeness --on {TODAY} --strict"));
    lines.push("revisant analyse grip-over-visits --plot grip.svg".to_owned());
    let readings = asked(context, &["readings", "--subject", "QR-101", "--measure", "rise"])?;
    if let Some(reading) = readings[0]["reading"].as_i64() {
        lines.push(format!("revisant provenance {reading}"));
    }
    lines.push("revisant trail list --last 10".to_owned());
    lines.push("revisant check".to_owned());
    if service {
        lines.push("revisantd --study .      # the service; write an export and see".to_owned());
    }
    for line in lines {
        context.out.text(&format!("  {line}"))?;
    }
    context.out.say(&format!(
        "\nThe exports lie in {}; the plan is study.toml: change it, and see what `revisant check` says.",
        list(&FOLDERS.map(str::to_owned))
    ))
}

/// How this program is called, where its name alone would not find it.
fn alias() -> Option<String> {
    let called = std::env::args_os().next()?;
    let called = Path::new(&called);
    called.parent().filter(|folder| !folder.as_os_str().is_empty())?;
    let whole = std::path::absolute(called).ok()?;
    let service = whole.with_file_name("revisantd");
    let service = if service.exists() { format!(" revisantd={}", service.display()) } else { String::new() };
    Some(format!("alias revisant={}{service}", whole.display()))
}
