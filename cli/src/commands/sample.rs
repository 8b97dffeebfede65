//! `check --sample`: what the plan on disk would do with a file.
//!
//! Invariant: nothing of the study changes; numbers of throw-away readings and holds are never shown, since nobody can
//! ask for them.

use std::collections::BTreeMap;
use std::path::Path;
use std::time::{Duration, Instant};

use revisant_schema::hold::Reason;
use revisant_schema::plan::{Anchor, Loaded};
use revisant_schema::records::Records;
use revisant_schema::records::view::{HoldRow, ReadingRow};
use revisant_schema::session::Courses;
use serde_json::{Value as Json, json};

use super::Done;
use super::collect::counter;
use super::holds::options;
use crate::error::{Exit, Failure};
use crate::intake::{self, Sample, Standing, Undecided};
use crate::report::json;
use crate::report::number::{dash, plain_or_dash};
use crate::report::table::{Left, Right, Table, Whole};
use crate::report::text::{clean, clip, count, list, wrap};
use crate::report::when;
use crate::study::{Basis, Context};

/// So many of the readings that would be filed are shown.
const READINGS: u64 = 12;
/// So many holds are shown in full.
const HOLDS: usize = 40;
/// As long as it takes no longer than this, nothing is said on the way.
const PATIENCE: Duration = Duration::from_secs(1);
/// A row as exported is shown up to so many characters.
const ROW: usize = 400;

/// Runs it.
pub fn run(context: &mut Context<'_, '_>, loaded: &Loaded, file: &Path, named: Option<&str>) -> Done {
    let standing = standing(context, loaded, file, named)?;
    let there = Records::folder_of(&context.study).join("records.sqlite").exists();
    let records = if there { Some(context.records()?) } else { None };
    let (bar, start) = (counter(context, "rows placed"), Instant::now());
    let progress = |done: u64| {
        if start.elapsed() > PATIENCE {
            bar.set_position(done);
        }
    };
    let doer = context.doer(None);
    let done = intake::sample(records.as_ref(), &context.world, loaded, &standing, &doer, READINGS, &progress);
    bar.finish_and_clear();
    let sample = done?;
    let shown = Shown { loaded, basis: basis(loaded, &sample), standing: &standing, sample: &sample };
    match context.out.json {
        true => context.out.json(&shown.json())?,
        false => shown.text(context)?,
    }
    let held = sample.outcome.file_held || !sample.holds.is_empty() || !sample.held_before.is_empty();
    Ok(if held { Exit::Found } else { Exit::Done })
}

fn standing(context: &Context<'_, '_>, loaded: &Loaded, file: &Path, named: Option<&str>) -> Result<Standing, Failure> {
    let shown = file.display().to_string();
    if !file.is_file() {
        return Err(Failure::new("file", format!("there is no file {shown}"))
            .at(&*shown)
            .then("--sample takes one file as the instrument wrote it"));
    }
    let found = intake::standing(context.world.as_ref(), &context.study, &loaded.plan, file, named)?;
    found.map_err(|undecided| match undecided {
        Undecided::Unknown => {
            let known: Vec<String> = loaded.plan.instruments.iter().map(|it| it.code.clone()).collect();
            let code = named.unwrap_or_default();
            Failure::usage(format!("the plan has no instrument \"{code}\"")).then(format!("it has {}", list(&known)))
        }
        Undecided::Several(codes) => Failure::usage(format!("{shown} may be an export of {}", list(&codes)))
            .at(shown)
            .then("say which with --instrument CODE"),
        Undecided::None(why) => {
            let text: Vec<String> = why.iter().map(|(code, why)| format!("{code}: {}", clean(why))).collect();
            let json = why.iter().map(|(code, why)| json!({ "instrument": code, "wrong": why })).collect();
            Failure::usage(format!("{shown} is an export of no instrument of the plan"))
                .at(shown)
                .then("--instrument CODE shows what one of them would do with it all the same")
                .with_faults(text.join("\n"), json)
        }
    })
}

/// What the sample's sessions are to the plan.
fn basis(loaded: &Loaded, sample: &Sample) -> Basis {
    let courses = Courses::derive(&loaded.plan, &sample.roster, sample.facts.clone());
    Basis { plan: loaded.plan.clone(), version: 0, sha256: [0; 32], roster: sample.roster.clone(), courses }
}

struct Shown<'s> {
    loaded: &'s Loaded,
    basis: Basis,
    standing: &'s Standing,
    sample: &'s Sample,
}

impl Shown<'_> {
    fn instrument(&self) -> &revisant_schema::plan::Instrument {
        &self.loaded.plan.instruments[self.standing.instrument]
    }

    // ---- for machines ----

    fn json(&self) -> Json {
        let sample = self.sample;
        json!({
            "export": sample.export, "instrument": self.instrument().code,
            "in_folder": self.standing.in_folder, "collected": self.standing.by_name,
            "filed_before": sample.filed_before, "without_roster": sample.without_roster,
            "state": sample.state.code(), "lines": sample.account,
            "readings": {
                "filed": sample.outcome.filed, "already": sample.outcome.already, "held": sample.outcome.held,
                "gone": sample.outcome.gone
            },
            "first": sample.readings.iter().map(|row| self.reading_json(row)).collect::<Vec<_>>(),
            "holds": sample.holds.iter().map(hold_json).collect::<Vec<_>>(),
            "held_before": sample.held_before.iter().map(json::Hold::new).collect::<Vec<_>>(),
        })
    }

    fn reading_json(&self, row: &ReadingRow) -> Json {
        let mut shown = json!(json::Reading::new(&self.basis, row));
        if let Some(fields) = shown.as_object_mut() {
            for number in ["reading", "session", "state", "source"] {
                fields.remove(number);
            }
        }
        shown
    }

    // ---- for people ----

    fn text(&self, context: &mut Context<'_, '_>) -> Result<(), Failure> {
        let sample = self.sample;
        let head = format!("{}, as an export of {}: {}", sample.export, self.instrument().code, self.coming());
        context.out.text(&wrap(&clean(&head), context.out.width, "  "))?;
        for note in self.notes() {
            context.out.say(&clean(&note))?;
        }
        if let Some(account) = &sample.account {
            context.out.text("")?;
            context.out.table(&account_table(&json!(account)))?;
        }
        self.readings_text(context)?;
        self.holds_text(context)
    }

    /// What would come of it, in a sentence.
    fn coming(&self) -> String {
        let Sample { outcome, holds, .. } = self.sample;
        if outcome.file_held {
            return "it would be held as a whole.".to_owned();
        }
        let mut parts = vec![format!("{} would be filed", count(outcome.filed, "reading"))];
        parts.extend((outcome.already > 0).then(|| format!("{} are there already", outcome.already)));
        parts.push(match holds.len() {
            0 => "nothing held".to_owned(),
            held => format!("{} opened", count(held as u64, "hold")),
        });
        parts.extend((outcome.settled > 0).then(|| format!("{} settled", count(outcome.settled, "older hold"))));
        format!("{}.", list(&parts))
    }

    fn notes(&self) -> Vec<String> {
        let (sample, instrument) = (self.sample, self.instrument());
        let folder = instrument.folder.display();
        let mut notes = Vec::new();
        if !self.standing.in_folder {
            notes.push(format!("It does not lie in {folder}; shown is what would come of it there."));
        }
        if !self.standing.by_name {
            let files = &instrument.files;
            notes.push(format!(
                "`revisant collect` would leave it out there: its name does not fit files = \"{files}\"."
            ));
        }
        if let Some(path) = &sample.filed_before {
            notes.push(format!(
                "The same bytes are filed already, as {path}, so that `revisant collect` would file nothing. Shown is \
                 what the plan on disk makes of them by itself, without what was decided about them since."
            ));
        }
        if sample.without_roster {
            notes.push(
                "No roster is imported yet: whoever's code fits the plan's pattern is taken as enrolled here."
                    .to_owned(),
            );
        }
        if self.days_unknown() {
            notes.push(
                "Days count from enrolment, which is not known without a roster; a row without a visit's label \
                        then has no visit here."
                    .to_owned(),
            );
        }
        if sample.outcome.gone > 0 {
            let gone = count(sample.outcome.gone, "reading");
            notes.push(format!("{gone} filed before would be noted as gone from the source; they stay."));
        }
        notes
    }

    fn days_unknown(&self) -> bool {
        self.sample.without_roster && self.loaded.plan.subject.anchor == Anchor::Enrolment
    }

    fn readings_text(&self, context: &mut Context<'_, '_>) -> Result<(), Failure> {
        let (rows, all) = (&self.sample.readings, self.sample.outcome.filed);
        if rows.is_empty() {
            return Ok(());
        }
        let shown = rows.len() as u64;
        let of = if shown < all { format!("The first {shown} of {all} readings") } else { "The readings".to_owned() };
        let head = format!("\n{of} that would be filed; times are those of {}:", self.basis.zone());
        context.out.text(&wrap(&head, context.out.width, ""))?;
        let mut table = Table::new(&[
            ("where", Whole),
            ("subject", Whole),
            ("visit", Left),
            ("measure", Left),
            ("condition", Left),
            ("no.", Right),
            ("value", Right),
            ("taken", Left),
        ]);
        rows.iter().for_each(|row| table.row(self.reading_cells(row)));
        context.out.table(&table)
    }

    fn reading_cells(&self, row: &ReadingRow) -> [String; 8] {
        let place = self.basis.place(&row.session);
        let visit = match self.basis.visit_code(place.visit) {
            Some(code) if place.off_window => format!("{code} (off-window)"),
            Some(code) => code.to_owned(),
            None if row.session.label.is_none() && self.days_unknown() => dash(),
            None => "unscheduled".to_owned(),
        };
        let levels: Vec<&str> = row.condition.0.values().map(String::as_str).collect();
        let unit = self.basis.plan.measure(&row.measure).map_or("", |(_, measure)| measure.unit.as_str());
        let mark = row.mark.as_deref().unwrap_or_default();
        [
            row.place().unwrap_or_else(dash),
            row.session.subject.clone(),
            visit,
            row.measure.clone(),
            levels.join(" "),
            row.replicate.to_string(),
            format!("{mark}{} {unit}", plain_or_dash(row.number)),
            when::taken_here(row.moment, row.session.day, self.basis.zone()),
        ]
    }

    fn holds_text(&self, context: &mut Context<'_, '_>) -> Result<(), Failure> {
        let Sample { holds, held_before, .. } = self.sample;
        if !holds.is_empty() {
            context.out.text(&format!("\n{} would be opened:", count(holds.len() as u64, "hold")))?;
        }
        for hold in holds.iter().take(HOLDS) {
            context.out.text(&hold_text(hold, context.out.width))?;
        }
        if holds.len() > HOLDS {
            let more =
                format!("\nand {} more; --json lists all of them. In all: {}.", holds.len() - HOLDS, reasons(holds));
            context.out.say(&more)?;
        }
        if !held_before.is_empty() {
            let numbers: Vec<String> = held_before.iter().map(|hold| hold.hold.to_string()).collect();
            context.out.text("")?;
            context
                .out
                .say(&format!("Rows that are held already: see `revisant holds show N` for {}.", list(&numbers)))?;
        }
        Ok(())
    }
}

/// How many holds there are for each reason: `3 no-subject, 12 unknown-unit`.
fn reasons(holds: &[HoldRow]) -> String {
    let mut counts: BTreeMap<Reason, usize> = BTreeMap::new();
    holds.iter().for_each(|hold| *counts.entry(hold.reason).or_default() += 1);
    let words: Vec<String> = counts.iter().map(|(reason, number)| format!("{number} {reason}")).collect();
    words.join(", ")
}

fn hold_text(hold: &HoldRow, width: usize) -> String {
    let place = hold.place().unwrap_or_else(|| "the whole file".to_owned());
    let on = if hold.column.is_empty() { String::new() } else { format!(", column \"{}\"", hold.column) };
    let mut lines = vec![format!("\n{place}{on}, {}: {}", hold.reason, clean(&hold.wrong))];
    let row = hold.row.as_deref().map(str::trim_end).filter(|row| !row.is_empty());
    lines.extend(row.map(|row| format!("  as exported: {}", clip(row, ROW))));
    let options = options(hold.reason, &hold.likely);
    lines.push(match options.as_slice() {
        [] => "  settled by a mended plan, or by exporting the file again".to_owned(),
        options => format!("  answers: {}", options.join(", or ")),
    });
    let wrapped: Vec<String> = lines.iter().map(|line| wrap(line, width, "    ")).collect();
    wrapped.join("\n")
}

fn hold_json(hold: &HoldRow) -> Json {
    json!({
        "reason": hold.reason.code(), "meaning": hold.reason.meaning(), "where": hold.place(), "column": hold.column,
        "row": hold.row, "wrong": hold.wrong, "likely": hold.likely, "answers": hold.reason.answers()
    })
}

/// Every class of lines, with what it means; those without a line too, so that nobody wonders.
fn account_table(account: &Json) -> Table {
    const CLASSES: [(&str, &str); 12] = [
        ("preamble", "above the header"),
        ("header", "the header"),
        ("units", "the row of units"),
        ("blank", "empty"),
        ("repeated_header", "the header again"),
        ("ignored", "left out by a rule of the plan"),
        ("footer", "after the table"),
        ("no_value", "every value is missing by the plan"),
        ("filed", "something of it would be filed"),
        ("already", "filed before"),
        ("held", "something of it is held"),
        ("lines", "in all"),
    ];
    let mut table = Table::new(&[("lines", Right), ("are", Left), ("", Left)]);
    for (class, meaning) in CLASSES {
        let lines = account[class].as_u64().unwrap_or(0);
        let name = if class == "lines" { String::new() } else { class.replace('_', " ") };
        table.row([lines.to_string(), name, meaning.to_owned()]);
    }
    table
}
