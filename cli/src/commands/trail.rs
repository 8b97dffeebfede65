//! `trail`: the audit trail, listed and verified.

use indicatif::ProgressBar;
use revisant_schema::records::codec::hex;
use revisant_schema::records::trail::short;
use revisant_schema::records::{TrailRow, Verified};
use serde_json::{Value as Json, json};

use super::Done;
use super::collect::progress_bar;
use crate::args::{Trail, TrailAct, TrailList};
use crate::error::{Exit, Failure};
use crate::report::table::{Left, Right, Table, Whole};
use crate::report::text::count;
use crate::report::when;
use crate::study::{Basis, Context};

/// Runs it.
pub fn run(context: &mut Context<'_, '_>, args: &Trail) -> Done {
    match &args.act {
        None => list(context, &args.list),
        Some(TrailAct::List(args)) => list(context, args),
        Some(TrailAct::Verify { head }) => verify(context, head.as_deref()),
    }
}

fn list(context: &mut Context<'_, '_>, args: &TrailList) -> Done {
    let records = context.records()?;
    let view = records.view()?;
    let from = args.last.map_or(1, |last| (view.upto() - i64::from(last) + 1).max(1));
    let rows = records.trail(from, view.upto())?;
    if context.out.json {
        context.out.json(&rows.iter().map(row_json).collect::<Vec<_>>())?;
        return Ok(Exit::Done);
    }
    let zone = Basis::plan(&view)?.0.study.time_zone;
    let mut table =
        Table::new(&[("no.", Right), ("when", Whole), ("who", Left), ("act", Whole), ("what", Left), ("why", Left)]);
    for row in rows {
        let why = row.reason.clone().unwrap_or_default();
        let what = objects_words(&row.objects);
        table.row([row.number.to_string(), when::written(&row.at, zone), row.who.clone(), row.act.clone(), what, why]);
    }
    context.out.table(&table)?;
    Ok(Exit::Done)
}

fn parsed(text: &str) -> Json {
    serde_json::from_str(text).unwrap_or_else(|_| Json::String(text.to_owned()))
}

fn row_json(row: &TrailRow) -> Json {
    json!({
        "trail": row.number, "at": row.at, "who": row.who, "program": row.program, "act": row.act,
        "objects": parsed(&row.objects), "before": row.before.as_deref().map(parsed),
        "after": row.after.as_deref().map(parsed), "why": row.reason, "hash": hex(&row.hash)
    })
}

/// What an act was about, in words: `exports/dyn-2/a.csv, 12 readings, 1 hold opened`. Numbers that only the records
/// use among themselves are left out; `--json` has them.
fn objects_words(objects: &str) -> String {
    let Json::Object(fields) = parsed(objects) else { return String::new() };
    // What it was done to comes first.
    const FIRST: [&str; 6] = ["export", "analysis", "name", "subject", "subjects", "visit"];
    let place = |name: &String| FIRST.iter().position(|first| first == name).unwrap_or(FIRST.len());
    let mut names: Vec<&String> = fields.keys().collect();
    names.sort_by_key(|name| (place(name), *name));
    let words: Vec<String> = names.into_iter().filter_map(|name| object_words(name, fields.get(name)?)).collect();
    words.join(", ")
}

fn object_words(name: &str, value: &Json) -> Option<String> {
    let some = |value: &Json| value.as_u64().filter(|number| *number > 0);
    match name {
        "capture" | "stood_at" => None,
        "export" | "analysis" | "name" | "subject" | "subjects" | "visit" => word(value),
        "repeat_of" => Some("the same bytes as before".to_owned()),
        "held" => Some(format!("held: {}", word(value)?)),
        "readings" if value.is_number() => some(value).map(|number| count(number, "reading")),
        "holds" => some(value).map(|number| format!("{} opened", count(number, "hold"))),
        "lines" => some(value).map(|number| format!("{} read anew", count(number, "line"))),
        "superseded_without_successor" => {
            let ended = value.as_array().map_or(0, Vec::len) as u64;
            (ended > 0).then(|| format!("{} that the reader no longer gives", count(ended, "reading")))
        }
        "decided" | "dismissed" => Some(format!("hold {}", word(value)?)),
        "trail" => Some(format!("records at act {}", word(value)?)),
        "plan" => Some(format!("plan version {}", word(value)?)),
        "sha256" => word(value),
        other => Some(format!("{other} {}", word(value)?)),
    }
}

fn word(value: &Json) -> Option<String> {
    match value {
        Json::Null => None,
        Json::String(text) if text.len() == 64 && text.bytes().all(|b| b.is_ascii_hexdigit()) => {
            Some(format!("{}…", text.get(..8)?))
        }
        Json::String(text) => Some(text.clone()),
        Json::Array(items) if items.len() > 4 => {
            let first = items.first().and_then(word)?;
            Some(format!("{first} and {} more", items.len() - 1))
        }
        Json::Array(items) => Some(items.iter().filter_map(word).collect::<Vec<_>>().join(" ")),
        Json::Object(fields) => match (fields.get("reading"), fields.get("supersedes")) {
            (Some(reading), Some(old)) => Some(format!("{reading} for {old}")),
            _ => Some(value.to_string()),
        },
        other => Some(other.to_string()),
    }
}

fn verify(context: &mut Context<'_, '_>, head: Option<&str>) -> Done {
    let records = context.records()?;
    let bar: ProgressBar = progress_bar(context, "rows");
    let mut progress = |done: u64, of: u64| {
        bar.set_length(of);
        bar.set_position(done);
    };
    let done = match head {
        Some(head) => records.verify_against(head, &mut progress),
        None => records.verify(&mut progress),
    };
    bar.finish_and_clear();
    let verified = done?;
    match context.out.json {
        true => context.out.json(&verified_json(&verified))?,
        false => verified_text(context, &verified)?,
    }
    Ok(if verified.faults.is_empty() { Exit::Done } else { Exit::Found })
}

fn verified_json(verified: &Verified) -> Json {
    let faults = verified.faults.iter().map(|fault| json!({ "trail": fault.act(), "wrong": fault.to_string() }));
    let notes = verified.notes.iter().map(|note| json!(note.to_string()));
    json!({
        "sound": verified.faults.is_empty(),
        "rows": verified.rows, "readings": verified.readings, "raw_copies": verified.raw_copies,
        "head": verified.head.map(|(trail, hash)| json!({ "trail": trail, "hash": hex(&hash), "short": short(&hash) })),
        "noted": verified.noted,
        "faults": faults.collect::<Vec<_>>(),
        "notes": notes.collect::<Vec<_>>(),
    })
}

fn verified_text(context: &mut Context<'_, '_>, verified: &Verified) -> Result<(), Failure> {
    let what = format!(
        "{} computed again, {} among them, and {}",
        count(verified.rows, "row"),
        count(verified.readings, "reading"),
        if verified.raw_copies == 1 { "1 raw copy".to_owned() } else { format!("{} raw copies", verified.raw_copies) }
    );
    context.out.say(&format!("{what}."))?;
    match verified.faults.as_slice() {
        [] => context.out.text("Nothing is wrong.")?,
        [first, rest @ ..] => {
            context.out.text(&format!("The first fault: {first}"))?;
            for fault in rest.iter().take(19) {
                context.out.text(&format!("- {fault}"))?;
            }
            if rest.len() > 19 {
                context.out.text(&format!("and {} more.", rest.len() - 19))?;
            }
        }
    }
    for note in &verified.notes {
        context.out.say(&format!("Note: {note}"))?;
    }
    if let Some(act) = verified.noted {
        context.out.say(&format!("The head hash given is that of act {act}."))?;
    }
    if let Some((trail, hash)) = verified.head {
        context.out.text(&format!("Head: act {trail}, {}", short(&hash)))?;
        context.out.say(
            "Write the head down elsewhere; whoever owns this machine could rebuild the trail, but not that note.",
        )?;
    }
    Ok(())
}
