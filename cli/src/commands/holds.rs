//! `holds`: what waits for a person, and deciding it.
//!
//! Invariant: an answer that goes for many holds at once is given only with their number, so that nobody decides more
//! than was seen.

use std::collections::BTreeMap;

use chrono_tz::Tz;
use revisant_schema::hold::{Answer, INSTEAD_OF, Reason};
use revisant_schema::records::Records;
use revisant_schema::records::view::HoldRow;
use serde_json::{Value as Json, json};

use super::Done;
use crate::args::{AnswerOptions, Decide, Holds, HoldsAct, HoldsList};
use crate::error::{Exit, Failure};
use crate::intake::{self, Decided};
use crate::report::json;
use crate::report::table::{Left, Right, Table, Whole};
use crate::report::text::{clean, clip, count, wrap};
use crate::report::when;
use crate::study::{Basis, Context, reason, view};

/// Runs it.
pub fn run(context: &mut Context<'_, '_>, args: &Holds) -> Done {
    match &args.act {
        None => list(context, &args.list),
        Some(HoldsAct::List(args)) => list(context, args),
        Some(HoldsAct::Show { hold }) => show(context, *hold),
        Some(HoldsAct::Decide(args)) => decide(context, args),
        Some(HoldsAct::Dismiss { hold, all_like_it, why }) => end(context, *hold, None, *all_like_it, why.as_deref()),
    }
}

// ---- list ----

fn list(context: &mut Context<'_, '_>, args: &HoldsList) -> Done {
    let records = context.records()?;
    let holds = view(&records, &args.then)?.holds(!args.all)?;
    match context.out.json {
        true => context.out.json(&holds.iter().map(json::Hold::new).collect::<Vec<_>>())?,
        false if holds.is_empty() => context.out.say("Nothing is held.")?,
        false => {
            context.out.table(&table(&holds, args.all))?;
            context.out.say("\n`revisant holds show N` shows one, with the commands that answer it.")?;
        }
    }
    Ok(Exit::Done)
}

fn table(holds: &[HoldRow], all: bool) -> Table {
    let mut columns = vec![("hold", Right), ("reason", Whole), ("where", Left), ("as exported", Left)];
    if all {
        columns.push(("state", Left));
    }
    let mut table = Table::new(&columns);
    for hold in holds {
        let row = hold.row.as_deref().unwrap_or("(removed)");
        let row = if hold.reason.of_file() { hold.wrong.as_str() } else { row };
        let mut cells = vec![hold.hold.to_string(), hold.reason.code().to_owned(), whereabouts(hold), clip(row, 120)];
        cells.extend(all.then(|| hold.state.code().to_owned()));
        table.row(cells);
    }
    table
}

fn whereabouts(hold: &HoldRow) -> String {
    let place = hold.place().map_or(String::new(), |place| format!(", {place}"));
    format!("{}{place}", hold.export)
}

// ---- show ----

fn show(context: &mut Context<'_, '_>, hold: i64) -> Done {
    let records = context.records()?;
    let view = records.view()?;
    let zone = Basis::plan(&view)?.0.study.time_zone;
    let hold = view.hold(hold)?;
    let open = hold.state == revisant_schema::hold::HoldState::Open;
    let like = if open { intake::like(&records, &hold)?.len() } else { 0 };
    let commands = if open { commands(context, &hold) } else { vec![] };
    if context.out.json {
        context.out.json(&shown_json(&hold, like, &commands))?;
        return Ok(Exit::Done);
    }
    let width = context.out.width;
    context.out.text(&labelled(&facts(&hold, zone), width))?;
    if like > 1 {
        context
            .out
            .say(&format!("{like} open holds of this export are alike; --all-like-it {like} answers all of them."))?;
    }
    if !commands.is_empty() {
        context.out.text("\nWhat can be done:")?;
    }
    if open && hold.reason.accepts_nothing() {
        let by_itself = format!(
            "  It settles by itself once the plan can read the file (`revisant check --sample FILE` shows whether it does), \
             or once {} holds other bytes that it can.",
            hold.export
        );
        context.out.text(&wrap(&clean(&by_itself), width, "  "))?;
    }
    let options = options(hold.reason, &hold.likely);
    let deeds = options.iter().map(|option| deed(hold.reason, option)).chain([leaving(hold.reason)]);
    let mut before = "";
    for (what, command) in deeds.zip(&commands) {
        if what != before {
            context.out.text(&format!("  {what}:"))?;
            before = what;
        }
        context.out.text(&format!("    {command}"))?;
    }
    Ok(Exit::Done)
}

/// What dismissing does, in words.
fn leaving(reason: Reason) -> &'static str {
    match (reason.of_file(), reason.of_value()) {
        (true, _) => "leave the file out for good",
        (false, true) => "leave the value out for good",
        (false, false) => "leave the row out for good",
    }
}

/// What is known of a hold, each with its label.
fn facts(hold: &HoldRow, zone: Tz) -> Vec<(&'static str, String)> {
    let on = if hold.column.is_empty() { String::new() } else { format!(", column \"{}\"", hold.column) };
    let mut facts = vec![
        ("Hold", format!("{}, {}", hold.hold, hold.state.code())),
        ("Where", format!("{}{on}", whereabouts(hold))),
        ("Instrument", format!("{}; held since {}", hold.instrument, when::written(&hold.since, zone))),
        ("Reason", format!("{}: {}", hold.reason, hold.reason.meaning())),
        ("What is wrong", hold.wrong.clone()),
    ];
    let row = hold.row.as_deref().map(str::trim_end).filter(|row| !row.is_empty());
    facts.extend(row.map(|row| ("As exported", row.to_owned())));
    facts.extend((!hold.likely.is_empty()).then(|| ("Likeliest", hold.likely.join(", "))));
    facts.extend(hold.answer.as_ref().map(|answer| ("Answer", answer.say())));
    facts
}

/// Labels and what belongs to each, in two columns.
fn labelled(facts: &[(&str, String)], width: usize) -> String {
    const LABEL: usize = 15;
    let indent = " ".repeat(LABEL);
    let lines: Vec<String> = facts
        .iter()
        .map(|(label, text)| wrap(&format!("{:LABEL$}{}", format!("{label}:"), clean(text)), width, &indent))
        .collect();
    lines.join("\n")
}

/// What an option of `decide` does, in words.
fn deed(reason: Reason, option: &str) -> &'static str {
    let name = option.split(' ').next().unwrap_or_default();
    match name {
        "--subject" if matches!(reason, Reason::BeforeEnrolment | Reason::AfterWithdrawal) => {
            "say whose it is, all the same"
        }
        "--subject" => "say whose it is",
        "--moment" => "say when it was taken",
        "--date" => "say on which day it was taken, if that is all that is known",
        "--visit" if option.ends_with("unscheduled") => "say that it belongs to no visit",
        "--visit" => "say to which visit it belongs",
        "--measure" => "say what was measured",
        "--condition" => "say under which condition",
        "--unit" => "say in which unit it is",
        "--value" => "say what the value is",
        "--keep-old" => "let the old value stand",
        "--take-new" => "let the new value take its place",
        "--replicate" => "file it as this replicate",
        "--instead-of" => "file it in the place of this replicate",
        _ if matches!(reason, Reason::BelowLimit | Reason::AboveLimit) => "file the limit itself, marked as such",
        _ => "file it as it stands",
    }
}

fn shown_json(hold: &HoldRow, like: usize, commands: &[String]) -> Json {
    let mut shown = json!(json::Hold::new(hold));
    if let Some(fields) = shown.as_object_mut() {
        let more = [
            ("instrument", json!(hold.instrument)),
            ("column", json!(hold.column)),
            ("meaning", json!(hold.reason.meaning())),
            ("answers", json!(hold.reason.answers())),
            ("commands", json!(commands)),
            ("like_it", json!(like)),
            ("answer", json!(hold.answer.as_ref().map(Answer::say))),
            ("about", json!(hold.about)),
        ];
        fields.extend(more.map(|(name, value)| (name.to_owned(), value)));
    }
    shown
}

/// The command lines that answer a hold: one for each likely answer, or one for each kind of answer.
fn commands(context: &Context<'_, '_>, hold: &HoldRow) -> Vec<String> {
    let number = hold.hold;
    let study = match context.study.to_str() {
        Some(".") | None => String::new(),
        Some(folder) => format!(" --study {}", quoted(folder)),
    };
    let mut lines: Vec<String> = options(hold.reason, &hold.likely)
        .iter()
        .map(|option| format!("revisant holds decide {number} {option}{study} --why \"…\""))
        .collect();
    lines.push(format!("revisant holds dismiss {number}{study} --why \"…\""));
    lines
}

/// The options of `decide` that answer a hold: one for each likely answer, or one for each kind of answer.
pub(super) fn options(reason: Reason, likely: &[String]) -> Vec<String> {
    let kinds = reason.answers().split(" or ").filter(|kind| kind.starts_with("--"));
    let mut options = Vec::new();
    for kind in kinds {
        match kind.split_once(' ') {
            Some((option, "CODE" | "MOMENT" | "FACTOR=LEVEL")) if !likely.is_empty() => {
                options.extend(likely.iter().map(|answer| format!("{option} {}", quoted(answer))));
            }
            Some((option, "NUMBER")) if option != "--value" && !likely.is_empty() => {
                options.extend(numbers(option, likely).map(|number| format!("{option} {number}")));
            }
            _ => options.push(kind.to_owned()),
        }
    }
    options
}

/// The likely numbers that belong to an option.
fn numbers<'l>(option: &str, likely: &'l [String]) -> impl Iterator<Item = &'l str> {
    let instead = option == "--instead-of";
    likely.iter().filter_map(move |answer| match answer.strip_prefix(INSTEAD_OF) {
        Some(number) => instead.then_some(number.trim()),
        None => (!instead).then_some(answer.as_str()),
    })
}

/// Quoted for a shell where it has to be.
fn quoted(text: &str) -> String {
    let plain = |c: char| c.is_ascii_alphanumeric() || "-_./:=+,".contains(c);
    let text = clean(text);
    if !text.is_empty() && text.chars().all(plain) { text } else { format!("'{}'", text.replace('\'', "'\\''")) }
}

// ---- decide and dismiss ----

fn decide(context: &mut Context<'_, '_>, args: &Decide) -> Done {
    let answer = answer(&args.answer)?;
    end(context, args.hold, Some(&answer), args.all_like_it, args.why.as_deref())
}

/// The one answer that was given.
fn answer(options: &AnswerOptions) -> Result<Answer, Failure> {
    let conditions: BTreeMap<String, String> = options.condition.iter().cloned().collect();
    let given = [
        options.subject.clone().map(Answer::Subject),
        options.moment.clone().map(Answer::Moment),
        options.date.map(Answer::Date),
        options.visit.clone().map(Answer::Visit),
        options.measure.clone().map(Answer::Measure),
        (!conditions.is_empty()).then_some(Answer::Condition(conditions)),
        options.unit.clone().map(Answer::Unit),
        options.value.clone().map(Answer::Value),
        options.as_it_stands.then_some(Answer::AsItStands),
        options.keep_old.then_some(Answer::KeepOld),
        options.take_new.then_some(Answer::TakeNew),
        options.replicate.map(Answer::Replicate),
        options.instead_of.map(Answer::InsteadOf),
    ];
    let mut given: Vec<Answer> = given.into_iter().flatten().collect();
    match (given.pop(), given.len()) {
        (Some(answer), 0) => Ok(answer),
        _ => Err(Failure::usage("one answer at a time").then("`revisant holds show N` lists those that fit")),
    }
}

fn end(
    context: &mut Context<'_, '_>,
    hold: i64,
    answer: Option<&Answer>,
    all_like_it: Option<Option<u64>>,
    why: Option<&str>,
) -> Done {
    let mut records = context.records()?;
    let hold = records.view()?.hold(hold)?;
    if let Some(answer) = answer.filter(|answer| !hold.reason.accepts(answer)) {
        let what = format!("hold {} is {}, which \"{}\" does not answer", hold.hold, hold.reason, answer.say());
        return Err(Failure::usage(what).then(format!("it takes {}", hold.reason.answers())));
    }
    let holds = wanted(&records, &hold, all_like_it)?;
    let Some(why) = why else {
        return Err(Failure::usage("a reason is owed").then("say --why TEXT"));
    };
    let doer = context.doer(Some(reason(why)?));
    let decided = intake::decide(&mut records, &holds, answer, &doer)?;
    let trail = records.view()?.upto();
    report(context, answer, &decided, trail)
}

/// The holds that are meant: this one, or all like it once their number was said.
fn wanted(records: &Records, hold: &HoldRow, all_like_it: Option<Option<u64>>) -> Result<Vec<HoldRow>, Failure> {
    let Some(said) = all_like_it else { return Ok(vec![hold.clone()]) };
    let like = intake::like(records, hold)?;
    let there = like.len() as u64;
    let look = format!("look at them with `revisant holds`, then say --all-like-it {there}");
    let alike = if there == 1 { "hold is" } else { "holds are" };
    match said {
        Some(said) if said == there => Ok(like),
        Some(said) => {
            Err(Failure::usage(format!("{there} open {alike} like hold {}, not {said}", hold.hold)).then(look))
        }
        None => {
            Err(Failure::usage(format!("{there} open {alike} like hold {} in {}", hold.hold, hold.export)).then(look))
        }
    }
}

fn report(context: &mut Context<'_, '_>, answer: Option<&Answer>, decided: &Decided, trail: i64) -> Done {
    if context.out.json {
        context.out.json(&json!({
            "trail": trail, "holds": decided.holds, "filed": decided.filed, "already": decided.already,
            "held": decided.held
        }))?;
        return Ok(Exit::Done);
    }
    let what = count(decided.holds.len() as u64, "hold");
    let text = match answer {
        None => format!("{what} dismissed."),
        Some(answer) => format!(
            "{what} decided: {}. {} filed, {} there already.",
            clean(&answer.say()),
            count(decided.filed, "reading"),
            decided.already
        ),
    };
    context.out.say(&text)?;
    if decided.held > 0 {
        let more = format!(
            "{} opened, for what else is wrong with the same rows; see `revisant holds`.",
            count(decided.held, "hold")
        );
        context.out.say(&more)?;
    }
    Ok(Exit::Done)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn likely_answers_become_commands() {
        let likely = ["QM-011".to_owned(), "it's".to_owned()];
        assert_eq!(options(Reason::UnknownSubject, &likely), ["--subject QM-011", "--subject 'it'\\''s'"]);
        assert_eq!(options(Reason::ChangedValue, &likely), ["--keep-old", "--take-new"]);
        assert_eq!(options(Reason::ImplausibleValue, &[]), ["--value NUMBER", "--as-it-stands"]);
        assert!(options(Reason::UnreadableFile, &[]).is_empty());
        let likely = ["4".to_owned(), "instead of 2".to_owned()];
        assert_eq!(options(Reason::ExtraReplicate, &likely), ["--replicate 4", "--instead-of 2"]);
        assert_eq!(options(Reason::ExtraReplicate, &likely[1..]), ["--instead-of 2"]);
        assert_eq!(options(Reason::UnknownCondition, &["hand=left".to_owned()]), ["--condition hand=left"]);
    }

    #[test]
    fn one_answer_at_a_time() {
        let both = AnswerOptions { keep_old: true, take_new: true, ..AnswerOptions::default() };
        assert!(answer(&both).is_err());
        let one = AnswerOptions { keep_old: true, ..AnswerOptions::default() };
        assert_eq!(answer(&one), Ok(Answer::KeepOld));
    }
}
