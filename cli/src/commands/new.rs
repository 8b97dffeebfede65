//! `new`: a plan to begin with.
//!
//! Invariants: what is written passes `check`; a plan that is there is never overwritten.

use std::fs;
use std::io::{BufRead, IsTerminal, Write};
use std::path::Path;

use revisant_schema::plan::{self, PlanFiles};
use serde_json::json;

use super::Done;
use crate::args::New;
use crate::error::{Exit, Failure, unsound};
use crate::study::Context;

/// What a plan is begun with.
#[derive(Debug, Default, PartialEq)]
struct Begun {
    code: String,
    title: String,
    zone: String,
    measures: Vec<(String, String)>,
    visits: Vec<(String, i64)>,
    instruments: Vec<(String, String)>,
}

/// Runs it.
pub fn run(context: &mut Context<'_, '_>, args: &New) -> Done {
    let file = context.study.join(plan::MAIN);
    if file.exists() {
        let shown = file.display().to_string();
        return Err(Failure::refused(format!("there is a plan {shown} already, which is never overwritten")).at(shown));
    }
    let begun = begun(args)?;
    let text = begun.text();
    // A plan at fault is said to be so before anything is written.
    plan::parse(&PlanFiles { main: text.clone(), readers: vec![] }).map_err(|faults| unsound(&faults))?;
    write(context, &file, &text)?;
    let folders: Vec<&str> = begun.instruments.iter().map(|(_, folder)| folder.as_str()).collect();
    for folder in &folders {
        made(&context.study.join(folder))?;
    }
    if context.out.json {
        context.out.json(&json!({ "plan": file.display().to_string(), "folders": folders }))?;
    } else {
        let shown = file.display();
        context.out.say(&format!(
            "Wrote {shown}. Adapt it to what the instruments write, above all the readers, and run `revisant check`."
        ))?;
    }
    Ok(Exit::Done)
}

fn failed(path: &Path) -> impl Fn(std::io::Error) -> Failure + '_ {
    move |error| {
        let shown = path.display().to_string();
        Failure::new("file", format!("{shown} cannot be written ({error})")).at(shown)
    }
}

fn made(folder: &Path) -> Result<(), Failure> {
    fs::create_dir_all(folder).map_err(failed(folder))
}

fn write(context: &Context<'_, '_>, file: &Path, text: &str) -> Result<(), Failure> {
    made(&context.study)?;
    let mut new = fs::OpenOptions::new().write(true).create_new(true).open(file).map_err(failed(file))?;
    new.write_all(text.as_bytes()).and_then(|()| new.sync_all()).map_err(failed(file))
}

fn begun(args: &New) -> Result<Begun, Failure> {
    let mut ask = Asking::new();
    let code = ask.or("code", "The study's code", args.code.as_deref(), "STUDY-1")?;
    let title = ask.or("title", "Its title", args.title.as_deref(), "A study of repeated measurements")?;
    let zone = ask.or("zone", "The zone of the study centre", args.zone.as_deref(), "Europe/London")?;
    let measures = ask.list("measure", "Measures, as CODE:UNIT", &args.measure, "grip:kg")?;
    let visits = ask.list("visit", "Visits, as CODE:DAY", &args.visit, "baseline:0 week-4:28")?;
    let instruments = ask.list("instrument", "Instruments, as CODE:FOLDER", &args.instrument, "dyn-1:exports/dyn-1")?;
    let visits = visits.into_iter().map(|(code, day)| {
        let day = day
            .trim()
            .parse()
            .map_err(|_| Failure::usage(format!("the day \"{day}\" of {code} is no whole number")))?;
        Ok((code, day))
    });
    Ok(Begun { code, title, zone, measures, visits: visits.collect::<Result<_, Failure>>()?, instruments })
}

/// Asks on a terminal for what was not given; elsewhere says which option is missing.
struct Asking {
    terminal: bool,
}

impl Asking {
    fn new() -> Self {
        Self { terminal: std::io::stdin().is_terminal() && std::io::stderr().is_terminal() }
    }

    fn or(&mut self, option: &str, question: &str, given: Option<&str>, usual: &str) -> Result<String, Failure> {
        match given {
            Some(given) => Ok(given.to_owned()),
            None if self.terminal => Self::ask(question, usual),
            None => Err(Failure::usage(format!("--{option} is not given, and there is no terminal to ask on"))
                .then("`revisant new --help` has an example")),
        }
    }

    fn list(
        &mut self,
        option: &str,
        question: &str,
        given: &[String],
        usual: &str,
    ) -> Result<Vec<(String, String)>, Failure> {
        let answer = match given {
            [] => self.or(option, &format!("{question}, blanks between"), None, usual)?,
            given => given.join(" "),
        };
        answer.split_whitespace().map(|item| pair(option, item)).collect()
    }

    fn ask(question: &str, usual: &str) -> Result<String, Failure> {
        let failed = |error: std::io::Error| Failure::new("terminal", format!("nothing can be asked ({error})"));
        let mut stderr = std::io::stderr();
        write!(stderr, "{question} [{usual}]: ").and_then(|()| stderr.flush()).map_err(failed)?;
        let mut line = String::new();
        std::io::stdin().lock().read_line(&mut line).map_err(failed)?;
        Ok(if line.trim().is_empty() { usual.to_owned() } else { line.trim().to_owned() })
    }
}

fn pair(option: &str, item: &str) -> Result<(String, String), Failure> {
    match item.split_once(':') {
        Some((code, rest)) if !code.is_empty() && !rest.is_empty() => Ok((code.to_owned(), rest.to_owned())),
        _ => Err(Failure::usage(format!("--{option} {item} has no second part"))
            .then("write it with a colon, as in the help's example")),
    }
}

impl Begun {
    fn text(&self) -> String {
        let mut text = self.head();
        for (code, unit) in &self.measures {
            text.push_str(&measure(code, unit));
        }
        text.push_str(VISITS);
        for (code, day) in &self.visits {
            let window =
                if *day == 0 { "" } else { "window = [-3, 3]        # on time, in days around `day`, both ends in\n" };
            text.push_str(&format!("[[visit]]\ncode = {}\nday = {day}\n{window}\n", basic(code)));
        }
        for (code, folder) in &self.instruments {
            text.push_str(&self.instrument(code, folder));
        }
        if let Some((code, _)) = self.measures.first() {
            text.push_str(&analysis(code));
        }
        text
    }

    fn head(&self) -> String {
        let anchor = self.visits.first().map_or("enrolment", |(code, _)| code.as_str());
        format!(
            "# The plan of a study: all that the program may assume. `revisant check` says what is wrong with it.\n\n\
             [study]\ncode = {}\ntitle = {}\ntime_zone = {}      # an IANA zone: its local day decides the visit\n\n\
             [subject]\npattern = '[A-Z]+-\\d{{3}}'        # the whole code must match, after tidying\n\
             normalise = [\"trim\", \"upper\", \"dash\"]\n\
             anchor = {}        # where day 0 lies: a visit's code, or \"enrolment\"\n\
             # attributes = {{ sex = [\"F\", \"M\"], age = \"number\" }}\n\n",
            basic(&self.code),
            basic(&self.title),
            basic(&self.zone),
            basic(anchor)
        )
    }

    fn instrument(&self, code: &str, folder: &str) -> String {
        let first = self.measures.first().map_or("", |(code, _)| code.as_str());
        format!(
            "# An instrument, its folder of exports, and how they are to be read.\n\
             [[instrument]]\ncode = {}\nfolder = {}\nfiles = \"*.csv\"\n\n\
             [instrument.reader]\nformat = \"delimited\"\nheader = {{ row = 1 }}\n\
             subject = {{ column = \"Subject\" }}\n\
             taken_at = {{ column = \"Time\", format = \"iso\" }}     # or a pattern such as \"%d/%m/%Y %H:%M\"\n\
             # visit = {{ column = \"Visit\", map = {{ \"V1\" = \"baseline\" }} }}     # without it the date decides\n\n\
             [[instrument.reader.value]]\nmeasure = {}\ncolumn = \"Value\"\n\n",
            basic(code),
            basic(folder),
            basic(first)
        )
    }
}

fn measure(code: &str, unit: &str) -> String {
    format!(
        "# What is measured; the unit is a UCUM code.\n[[measure]]\ncode = {}\nunit = {}\n\
         # plausible = [2, 95]     # what lies outside is held\n\
         # replicates = 3          # expected in a session\n# summary = \"mean\"\n\n",
        basic(code),
        basic(unit)
    )
}

fn analysis(measure: &str) -> String {
    format!(
        "# An analysis named beforehand.\n[[analysis]]\ncode = {}\nmeasure = {}\nmethod = \"repeated-measures\"\n\
         within = [\"visit\"]\ncontrasts = [\"each-vs-first\"]\nmultiplicity = \"holm\"\n",
        basic(&format!("{measure}-over-visits")),
        basic(measure)
    )
}

const VISITS: &str = "# When: days after day 0.\n";

/// A basic string of TOML.
fn basic(text: &str) -> String {
    let mut quoted = String::from("\"");
    for c in text.chars() {
        match c {
            '"' | '\\' => quoted.extend(['\\', c]),
            c if c.is_control() => quoted.push_str(&format!("\\u{:04X}", u32::from(c))),
            c => quoted.push(c),
        }
    }
    quoted.push('"');
    quoted
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn what_is_written_passes_check() {
        let two = |pairs: &[(&str, &str)]| pairs.iter().map(|(a, b)| ((*a).to_owned(), (*b).to_owned())).collect();
        let begun = Begun {
            code: "GR-1".to_owned(),
            title: "Grip \"strong\" \\ hold".to_owned(),
            zone: "Europe/London".to_owned(),
            measures: two(&[("grip", "kg"), ("gait", "m/s")]),
            visits: vec![("baseline".to_owned(), 0), ("week-4".to_owned(), 28)],
            instruments: two(&[("dyn-1", "exports/dyn-1")]),
        };
        let files = PlanFiles { main: begun.text(), readers: vec![] };
        let (plan, _) = plan::parse(&files).map_err(|faults| faults.to_string()).unwrap();
        assert_eq!((plan.measures.len(), plan.visits.len(), plan.analyses.len()), (2, 2, 1));
    }
}
