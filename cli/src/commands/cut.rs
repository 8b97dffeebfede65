//! `cut`: named cut-offs of the data.

use std::collections::HashMap;

use revisant_schema::reading::ReadingState;
use revisant_schema::records::codec::hex;
use revisant_schema::records::trail::short;
use revisant_schema::records::view::{CutRow, ReadingFilter, ReadingRow};
use revisant_schema::records::{ActKind, AsOf, Cell, Records};
use serde_json::{Value as Json, json};

use super::Done;
use super::readings::{table as readings_table, zone_note};
use crate::args::Cut;
use crate::error::{Exit, Failure};
use crate::report::json;
use crate::report::table::{Left, Right, Table, Whole};
use crate::report::text::{count, wrap};
use crate::report::when;
use crate::study::{Basis, Context, reason};

/// Runs it.
pub fn run(context: &mut Context<'_, '_>, args: &Cut) -> Done {
    match args {
        Cut::Make { name, why } => make(context, name, why),
        Cut::List => list(context),
        Cut::Compare { from, to } => compare(context, from, to),
    }
}

fn make(context: &mut Context<'_, '_>, name: &str, why: &str) -> Done {
    let why = reason(why)?;
    let words = name
        .split('-')
        .all(|word| !word.is_empty() && word.bytes().all(|b| b.is_ascii_lowercase() || b.is_ascii_digit()));
    if !words {
        return Err(Failure::usage(format!("\"{name}\" is no name for a cut"))
            .then("write lower-case words with -, such as interim-1"));
    }
    let mut records = context.records()?;
    let cuts = records.view()?.cuts()?;
    if let Some(known) = cuts.iter().find(|cut| cut.name == name) {
        return Err(Failure::refused(format!("there is a cut {name} already, at trail {}", known.trail))
            .then("give it another name"));
    }
    records.act(ActKind::Cut, &context.doer(Some(why)), |act| {
        // The records as they stood when the cut was asked for: before its own act.
        let trail = act.number() - 1;
        act.objects.insert("name".to_owned(), json!(name));
        act.objects.insert("trail".to_owned(), json!(trail));
        act.add("cut", &[Cell::Text(name), Cell::Int(trail)])
    })?;
    let made = records.view()?.cuts()?.into_iter().find(|cut| cut.name == name);
    let Some(made) = made else { return Err(Failure::refused("the cut just made is not there")) };
    match context.out.json {
        true => context.out.json(&cut_json(&made))?,
        false => {
            let text = format!("Cut {name} stands at trail {}. Its hash begins {}.", made.trail, short(&made.hash));
            context.out.say(&text)?;
        }
    }
    Ok(Exit::Done)
}

fn cut_json(cut: &CutRow) -> Json {
    json!({
        "name": cut.name, "trail": cut.trail, "hash": hex(&cut.hash), "at": cut.at, "who": cut.who, "why": cut.why
    })
}

fn list(context: &mut Context<'_, '_>) -> Done {
    let records = context.records()?;
    let view = records.view()?;
    let cuts = view.cuts()?;
    if context.out.json {
        context.out.json(&cuts.iter().map(cut_json).collect::<Vec<_>>())?;
    } else if cuts.is_empty() {
        context.out.say("There are no cuts; `revisant cut make NAME --why TEXT` makes one.")?;
    } else {
        let zone = Basis::plan(&view)?.0.study.time_zone;
        let mut table = Table::new(&[
            ("cut", Whole),
            ("trail", Right),
            ("made", Whole),
            ("who", Left),
            ("hash", Whole),
            ("why", Left),
        ]);
        for cut in cuts {
            let why = cut.why.unwrap_or_default();
            table.row([cut.name, cut.trail.to_string(), when::written(&cut.at, zone), cut.who, short(&cut.hash), why]);
        }
        context.out.table(&table)?;
    }
    Ok(Exit::Done)
}

/// The readings in use at a cut.
struct At {
    basis: Basis,
    current: HashMap<i64, ReadingRow>,
    /// Every reading that was ever superseded by then, with its successor.
    successors: HashMap<i64, i64>,
}

impl At {
    fn load(records: &Records, cut: &str) -> Result<Self, Failure> {
        let view = records.view_as_of(&AsOf::Cut(cut.to_owned()))?;
        let basis = Basis::of(&view)?;
        let rows = view.readings(&ReadingFilter::default())?;
        let successors = rows.iter().filter_map(|row| Some((row.supersedes?, row.reading))).collect();
        let current = rows.into_iter().filter(|row| row.state == ReadingState::Current);
        Ok(Self { basis, current: current.map(|row| (row.reading, row)).collect(), successors })
    }

    /// What stands now in the place of a reading.
    fn heir(&self, reading: i64) -> Option<&ReadingRow> {
        let mut at = reading;
        while let Some(next) = self.successors.get(&at) {
            at = *next;
        }
        self.current.get(&at)
    }
}

/// What is different between two cuts.
#[derive(Default)]
struct Difference<'a> {
    new: Vec<&'a ReadingRow>,
    changed: Vec<(&'a ReadingRow, &'a ReadingRow)>,
    gone: Vec<&'a ReadingRow>,
    moved: Vec<&'a ReadingRow>,
}

fn difference<'a>(from: &'a At, to: &'a At) -> Difference<'a> {
    let mut found = Difference::default();
    let mut heirs: Vec<i64> = Vec::new();
    for (reading, before) in &from.current {
        match to.heir(*reading) {
            None => found.gone.push(before),
            Some(after) if after.reading != *reading => {
                heirs.push(after.reading);
                found.changed.push((before, after));
            }
            Some(after) if visit(&from.basis, before) != visit(&to.basis, after) => found.moved.push(after),
            Some(_) => {}
        }
    }
    let new =
        to.current.values().filter(|row| !from.current.contains_key(&row.reading) && !heirs.contains(&row.reading));
    found.new.extend(new);
    found.new.sort_by_key(|row| row.reading);
    found.gone.sort_by_key(|row| row.reading);
    found.moved.sort_by_key(|row| row.reading);
    found.changed.sort_by_key(|(before, _)| before.reading);
    found
}

fn visit<'b>(basis: &'b Basis, row: &ReadingRow) -> Option<&'b str> {
    basis.visit_code(basis.place(&row.session).visit)
}

fn compare(context: &mut Context<'_, '_>, from: &str, to: &str) -> Done {
    let records = context.records()?;
    let (before, after) = (At::load(&records, from)?, At::load(&records, to)?);
    let found = difference(&before, &after);
    if context.out.json {
        let now = |row: &ReadingRow| json!(json::Reading::new(&after.basis, row));
        let then = |row: &ReadingRow| json!(json::Reading::new(&before.basis, row));
        let changed = found.changed.iter().map(|(one, two)| json!({ "before": then(one), "after": now(two) }));
        context.out.json(&json!({
            "from": from, "to": to,
            "new": found.new.iter().map(|row| now(row)).collect::<Vec<_>>(),
            "changed": changed.collect::<Vec<_>>(),
            "gone": found.gone.iter().map(|row| then(row)).collect::<Vec<_>>(),
            "moved": found.moved.iter().map(|row| now(row)).collect::<Vec<_>>(),
        }))?;
    } else {
        text(context, (from, &before), (to, &after), &found)?;
    }
    Ok(Exit::Done)
}

fn text(
    context: &mut Context<'_, '_>,
    (from, before): (&str, &At),
    (to, after): (&str, &At),
    found: &Difference<'_>,
) -> Result<(), Failure> {
    let changed: Vec<ReadingRow> =
        found.changed.iter().flat_map(|(one, two)| [(*one).clone(), (*two).clone()]).collect();
    let owned = |rows: &[&ReadingRow]| rows.iter().map(|row| (*row).clone()).collect::<Vec<_>>();
    let all = format!(
        "From {from} to {to}: {} new, {} changed, {} gone, {} at another visit.",
        count(found.new.len() as u64, "reading"),
        found.changed.len(),
        found.gone.len(),
        found.moved.len()
    );
    context.out.text(&wrap(&all, context.out.width, ""))?;
    let parts = [
        ("New", &after.basis, owned(&found.new)),
        ("Changed, before and after", &after.basis, changed),
        ("Gone", &before.basis, owned(&found.gone)),
        ("At another visit", &after.basis, owned(&found.moved)),
    ];
    for (title, basis, rows) in parts.iter().filter(|(_, _, rows)| !rows.is_empty()) {
        context.out.heading(&format!("\n{title}"))?;
        context.out.table(&readings_table(basis, rows))?;
    }
    context.out.say(&format!("\n{}", zone_note(&after.basis)))
}
