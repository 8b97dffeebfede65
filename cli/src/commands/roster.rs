//! `roster`: who is enrolled.
//!
//! Invariant: a roster with a fault changes nothing; a cell that changes owes a reason.

use std::path::Path;

use chrono::NaiveDate;
use revisant_schema::plan::Plan;
use revisant_schema::records::{ActKind, ActNumber, Records};
use revisant_schema::roster::{self, CellChange, Enrolled, Roster, RosterFault};
use serde_json::{Value as Json, json};

use super::Done;
use crate::args::{Data, Roster as Args, Then};
use crate::error::{Exit, Failure};
use crate::intake;
use crate::report::table::{Left, Table, Whole};
use crate::report::text::{count, list};
use crate::study::{Basis, Context, reason, view};

/// Runs it.
pub fn run(context: &mut Context<'_, '_>, args: &Args) -> Done {
    match args {
        Args::Import { file, why } => import(context, file, why.as_deref()),
        Args::Add { subject, enrolled, set, why } => add(context, subject, *enrolled, set, why),
        Args::Withdraw { subject, on, data, why } => withdraw(context, subject, *on, *data, why),
        Args::List { then } => show(context, then),
    }
}

fn import(context: &mut Context<'_, '_>, file: &Path, why: Option<&str>) -> Done {
    let shown = file.display().to_string();
    let bytes = std::fs::read(file)
        .map_err(|error| Failure::new("file", format!("the roster {shown} cannot be read ({error})")).at(&*shown))?;
    let text = String::from_utf8(bytes).map_err(|_| {
        Failure::new("roster", format!("the roster {shown} is not in UTF-8"))
            .at(&*shown)
            .then("save it as CSV in UTF-8")
    })?;
    let why = why.map(reason).transpose()?;
    // A roster with faults must leave no trace, so it is held against the plan before any records are made.
    let known = known_roster(context)?;
    let plan = intake::load(context.world.as_ref(), &context.study)?.plan;
    known.changes(&plan, &text).map_err(|faults| faulty(&shown, &faults))?;
    let mut records = context.records_or_new()?;
    let plan = intake::bring_plan_into_force(&mut records, &context.study, &context.doer(why))?.plan;
    let known = records.view()?.roster()?;
    let changes = known.changes(&plan, &text).map_err(|faults| faulty(&shown, &faults))?;
    write(context, &mut records, &known, &changes, why)
}

fn known_roster(context: &Context<'_, '_>) -> Result<Roster, Failure> {
    context.folder()?;
    match Records::folder_of(&context.study).join("records.sqlite").exists() {
        true => Ok(context.records()?.view()?.roster()?),
        false => Ok(Roster::default()),
    }
}

fn faulty(file: &str, faults: &[RosterFault]) -> Failure {
    let what = format!("the roster has {}; nothing was changed", count(faults.len() as u64, "fault"));
    let text: Vec<String> = faults.iter().map(|fault| format!("{file}: {fault}")).collect();
    let list: Vec<Json> = faults.iter().map(|fault| json!({ "line": fault.line, "wrong": fault.wrong })).collect();
    let place = faults.first().map_or(file.to_owned(), |fault| format!("{file}, line {}", fault.line));
    Failure::new("roster", what).at(place).with_faults(text.join("\n"), Json::Array(list))
}

/// Writes the changes as one act, or says whose reason is owed.
fn write(
    context: &mut Context<'_, '_>,
    records: &mut Records,
    known: &Roster,
    changes: &[CellChange],
    why: Option<&str>,
) -> Done {
    let owing: Vec<&CellChange> = changes.iter().filter(|change| change.owes_reason()).collect();
    if why.is_none() && !owing.is_empty() {
        return Err(owed(&owing));
    }
    let trail = match changes {
        [] => None,
        _ => Some(write_act(context, records, changes, why)?),
    };
    report(context, known, changes, trail)
}

fn write_act(
    context: &Context<'_, '_>,
    records: &mut Records,
    changes: &[CellChange],
    why: Option<&str>,
) -> Result<ActNumber, Failure> {
    let mut subjects: Vec<&str> = changes.iter().map(|change| change.subject.as_str()).collect();
    subjects.dedup();
    Ok(records.act(ActKind::Roster, &context.doer(why), |act| {
        act.objects.insert("subjects".to_owned(), json!(subjects));
        roster::write(act, changes)?;
        Ok(act.number())
    })?)
}

fn field(change: &CellChange) -> &str {
    change.field.trim_start_matches('.')
}

fn owed(owing: &[&CellChange]) -> Failure {
    let line = |change: &&CellChange| {
        let after = change.after.as_deref().unwrap_or("blank");
        let before = change.before.as_deref().unwrap_or("blank");
        format!("{}: {} would change from {before} to {after}", change.subject, field(change))
    };
    let text: Vec<String> = owing.iter().map(line).collect();
    let what = format!("{} would change, which owes a reason; nothing was changed", count(owing.len() as u64, "cell"));
    let list: Vec<Json> = owing.iter().map(|change| change_json(change)).collect();
    Failure::new("reason-owed", what).then("say --why TEXT").with_faults(text.join("\n"), Json::Array(list))
}

fn change_json(change: &CellChange) -> Json {
    json!({ "subject": change.subject, "field": field(change), "before": change.before, "after": change.after })
}

fn report(context: &mut Context<'_, '_>, known: &Roster, changes: &[CellChange], trail: Option<ActNumber>) -> Done {
    let is_new = |change: &&CellChange| change.field == "enrolled" && !known.subjects.contains_key(&change.subject);
    let new: Vec<String> = changes.iter().filter(is_new).map(|change| change.subject.clone()).collect();
    let subjects = known.subjects.len() + new.len();
    let changed = changes.iter().filter(|change| known.subjects.contains_key(&change.subject)).count();
    if context.out.json {
        let changes: Vec<Json> = changes.iter().map(change_json).collect();
        context.out.json(&json!({ "trail": trail, "subjects": subjects, "new": new, "changes": changes }))?;
        return Ok(Exit::Done);
    }
    let text = match (new.len(), changed) {
        (0, 0) => format!("Nothing changed. The roster holds {}.", count(subjects as u64, "subject")),
        _ => format!(
            "{} new, {} changed. The roster holds {}.",
            count(new.len() as u64, "subject"),
            count(changed as u64, "cell"),
            count(subjects as u64, "subject")
        ),
    };
    context.out.say(&text)?;
    Ok(Exit::Done)
}

fn add(context: &mut Context<'_, '_>, subject: &str, enrolled: NaiveDate, set: &[(String, String)], why: &str) -> Done {
    let why = reason(why)?;
    let mut records = context.records_or_new()?;
    let plan = intake::bring_plan_into_force(&mut records, &context.study, &context.doer(Some(why)))?.plan;
    let known = records.view()?.roster()?;
    let tidy = roster::tidy(subject, &plan.subject.normalise);
    if known.subjects.contains_key(&tidy) {
        return Err(Failure::refused(format!("subject {tidy} is on the roster already"))
            .then("change a cell with `revisant roster import FILE --why TEXT`"));
    }
    let changes = one_row(&known, &plan, &tidy, &enrolled.to_string(), set)?;
    write(context, &mut records, &known, &changes, Some(why))
}

/// The changes of one row, by way of the rules for files, so that there is one set of rules.
fn one_row(
    known: &Roster,
    plan: &Plan,
    subject: &str,
    enrolled: &str,
    set: &[(String, String)],
) -> Result<Vec<CellChange>, Failure> {
    let names = ["subject", "enrolled"].into_iter().chain(set.iter().map(|(name, _)| name.as_str()));
    let cells = [subject, enrolled].into_iter().chain(set.iter().map(|(_, value)| value.as_str()));
    let line = |cells: Vec<String>| cells.join(",");
    let text = format!("{}\n{}\n", line(names.map(quoted).collect()), line(cells.map(quoted).collect()));
    known.changes(plan, &text).map_err(|faults| {
        let wrong: Vec<String> = faults.into_iter().map(|fault| fault.wrong).collect();
        Failure::new("roster", list(&wrong)).at(subject)
    })
}

fn quoted(cell: &str) -> String {
    format!("\"{}\"", cell.replace('"', "\"\""))
}

fn withdraw(context: &mut Context<'_, '_>, subject: &str, on: NaiveDate, data: Data, why: &str) -> Done {
    if data == Data::Remove {
        return Err(Failure::not_yet("removing a subject's data comes with a later version")
            .then("withdraw with --data keep for now; the data can be removed later"));
    }
    let why = reason(why)?;
    let mut records = context.records()?;
    let basis = Basis::of(&records.view()?)?;
    let subject = basis.subject(subject)?;
    let entry = basis.roster.subjects.get(&subject).cloned().unwrap_or_default();
    if let Some(enrolled) = entry.enrolled.filter(|enrolled| on < *enrolled) {
        return Err(Failure::refused(format!(
            "{subject} cannot be withdrawn on {on}, before the enrolment on {enrolled}"
        )));
    }
    let change = |field: &str, before: Option<String>, after: String| CellChange {
        subject: subject.clone(),
        field: field.to_owned(),
        before,
        after: Some(after),
    };
    let changes = [
        change("withdrawn", entry.withdrawn.map(|day| day.to_string()), on.to_string()),
        change("data", entry.data, "keep".to_owned()),
    ];
    let changes: Vec<CellChange> = changes.into_iter().filter(|change| change.before != change.after).collect();
    let trail = match changes.as_slice() {
        [] => None,
        changes => Some(write_act(context, &mut records, changes, Some(why))?),
    };
    if context.out.json || changes.is_empty() {
        return report(context, &basis.roster, &changes, trail);
    }
    let before = entry.withdrawn.map(|day| format!(" (before: on {day})")).unwrap_or_default();
    context.out.say(&format!("{subject} is withdrawn on {on}{before}; the data that are there are kept."))?;
    Ok(Exit::Done)
}

fn show(context: &mut Context<'_, '_>, then: &Then) -> Done {
    let records = context.records()?;
    let view = view(&records, then)?;
    let (plan, _) = Basis::plan(&view)?;
    let roster = view.roster()?;
    match context.out.json {
        true => context.out.json(&roster.subjects.iter().map(subject_json).collect::<Vec<_>>())?,
        false => context.out.table(&table(&plan, &roster))?,
    }
    Ok(Exit::Done)
}

fn subject_json((code, entry): (&String, &Enrolled)) -> Json {
    json!({
        "subject": code, "enrolled": entry.enrolled, "withdrawn": entry.withdrawn, "arm": entry.arm,
        "attributes": entry.attributes, "data": entry.data
    })
}

fn table(plan: &Plan, roster: &Roster) -> Table {
    let mut table = Table::new(&[
        ("subject", Whole),
        ("enrolled", Whole),
        ("withdrawn", Whole),
        ("arm", Left),
        ("attributes", Left),
    ]);
    let day = |day: Option<NaiveDate>| day.map_or(String::new(), |day| day.to_string());
    for (code, entry) in &roster.subjects {
        let shown = plan.subject.attributes.iter().filter_map(|attribute| {
            entry.attributes.get(&attribute.code).map(|value| format!("{}={value}", attribute.code))
        });
        let attributes: Vec<String> = shown.collect();
        let arm = entry.arm.clone().unwrap_or_default();
        table.row([code.clone(), day(entry.enrolled), day(entry.withdrawn), arm, attributes.join(" ")]);
    }
    table
}
