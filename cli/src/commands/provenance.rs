//! `provenance`: the way back from a reading to its bytes, and all that was done to it.

use std::io::Read;

use revisant_schema::plan::{self, Correction, Encoding};
use revisant_schema::records::codec::hex;
use revisant_schema::records::view::{ReadingFilter, ReadingRow};
use revisant_schema::records::{ActKind, ActNumber, Records, RecordsError, TrailRow, View};
use serde::Serialize;
use serde_json::{Value as Json, json};

use super::Done;
use crate::args::Provenance;
use crate::error::{Exit, Failure};
use crate::report::json;
use crate::report::number::{plain, plain_or_dash};
use crate::report::table::{Left, Right, Table, Whole};
use crate::report::text::clean;
use crate::report::when;
use crate::study::{Basis, Context};
use crate::took_part::Corrections;

/// A row as exported is shown up to so many bytes.
const MOST: u64 = 64 * 1024;

/// One act that touched a reading.
#[derive(Debug, Serialize)]
struct Touched {
    trail: ActNumber,
    at: String,
    who: String,
    act: String,
    why: Option<String>,
    /// The reading that it touched: this one, or one before or after it.
    reading: i64,
}

/// Where the bytes are.
#[derive(Debug, Default)]
struct Source {
    sha256: Option<String>,
    text: Option<String>,
}

/// Runs it.
pub fn run(context: &mut Context<'_, '_>, args: &Provenance) -> Done {
    let records = context.records()?;
    let view = records.view()?;
    let basis = Basis::of(&view)?;
    let row = view.reading(args.reading)?;
    let source = source(&records, &view, &row)?;
    let history = history(&records, &view, &row)?;
    let corrections = Corrections::of(&view, std::iter::once(row.plan))?;
    let correction = corrections.find(row.plan, &row.instrument, &row.measure, row.session.day);
    // One that a person has amended or entered is as that person said.
    let correction = correction.filter(|_| row.source == 0);
    match context.out.json {
        true => context.out.json(&whole_json(&basis, &row, &source, correction, &history))?,
        false => text(context, &basis, &row, &source, correction, &history)?,
    }
    Ok(Exit::Done)
}

fn source(records: &Records, view: &View<'_>, row: &ReadingRow) -> Result<Source, Failure> {
    let Some(capture) = row.capture else { return Ok(Source::default()) };
    let sha256 = view.bytes_of(capture)?;
    let text = match row.bytes {
        Some(span) => Some(decoded(view, row, &bytes(records, &sha256, span)?)?),
        None => None,
    };
    Ok(Source { sha256: Some(hex(&sha256)), text })
}

fn bytes(
    records: &Records,
    sha256: &revisant_schema::records::codec::Hash,
    (from, to): (i64, i64),
) -> Result<Vec<u8>, Failure> {
    let failed = |error| Failure::from(RecordsError::file(&records.raw_file(sha256), "reading a raw copy", error));
    let mut raw = records.open_raw(sha256)?;
    let (from, length) = (from.unsigned_abs(), (to - from).unsigned_abs().min(MOST));
    std::io::copy(&mut raw.by_ref().take(from), &mut std::io::sink()).map_err(failed)?;
    let mut bytes = Vec::new();
    raw.take(length).read_to_end(&mut bytes).map_err(failed)?;
    Ok(bytes)
}

/// The row's bytes as text, in the encoding of the plan that read them.
fn decoded(view: &View<'_>, row: &ReadingRow, bytes: &[u8]) -> Result<String, Failure> {
    let plan = view.plan_version(row.plan)?.and_then(|version| plan::parse(&version.files).ok());
    let encoding = plan.and_then(|(plan, _)| Some(plan.instrument(&row.instrument)?.1.reader.encoding));
    let text = match encoding {
        Some(Encoding::Label(label)) => label.decode_without_bom_handling(bytes).0.into_owned(),
        _ => utf8_or_utf16(bytes),
    };
    Ok(text.trim_end_matches(['\r', '\n']).to_owned())
}

fn utf8_or_utf16(bytes: &[u8]) -> String {
    let zeros = |odd: usize| bytes.iter().skip(odd).step_by(2).filter(|byte| **byte == 0).count();
    let (even, odd) = (zeros(0), zeros(1));
    if even + odd == 0 {
        return String::from_utf8_lossy(bytes).into_owned();
    }
    let unit = |pair: &[u8]| match pair {
        [one, two] if odd > even => u16::from_le_bytes([*one, *two]),
        [one, two] => u16::from_be_bytes([*one, *two]),
        _ => 0xfffd,
    };
    char::decode_utf16(bytes.chunks(2).map(unit)).map(|c| c.unwrap_or('\u{fffd}')).collect()
}

/// Every act that touched the reading, those whose place it took, and those that took its place.
fn history(records: &Records, view: &View<'_>, row: &ReadingRow) -> Result<Vec<Touched>, Failure> {
    let measure = Some(row.measure.clone());
    let all = view.readings(&ReadingFilter { measure, ..ReadingFilter::default() })?;
    let mut touched = Vec::new();
    for link in chain(&all, row) {
        touched.push((link.act, link.reading));
        for kind in [ActKind::Strike, ActKind::Restore, ActKind::Adopt] {
            touched.extend(acts_naming(records, view, kind, link.reading)?);
        }
    }
    touched.sort_unstable();
    touched.dedup();
    let mut history = Vec::with_capacity(touched.len());
    for (number, reading) in touched {
        let act = records.trail(number, number)?.into_iter().next();
        history.extend(act.map(|act| touched_by(act, reading)));
    }
    Ok(history)
}

/// The readings that superseded one another up to this one and on from it.
fn chain<'a>(all: &'a [ReadingRow], row: &ReadingRow) -> Vec<&'a ReadingRow> {
    let mut links: Vec<&ReadingRow> = all.iter().filter(|other| other.reading == row.reading).collect();
    let mut earlier = row.supersedes;
    while let Some(link) = earlier.and_then(|number| all.iter().find(|other| other.reading == number)) {
        earlier = link.supersedes.filter(|number| *number < link.reading);
        links.push(link);
    }
    let mut later = vec![row.reading];
    while let Some(number) = later.pop() {
        for link in all.iter().filter(|other| other.supersedes == Some(number) && other.reading > number) {
            later.push(link.reading);
            links.push(link);
        }
    }
    links
}

/// The acts of a kind that name a reading.
fn acts_naming(
    records: &Records,
    view: &View<'_>,
    kind: ActKind,
    reading: i64,
) -> Result<Vec<(ActNumber, i64)>, Failure> {
    let mut found = Vec::new();
    for (number, _, _) in view.acts_on(kind, &reading.to_string())? {
        let rows = records.trail(number, number)?;
        let objects = rows.first().and_then(|row| serde_json::from_str::<Json>(&row.objects).ok()).unwrap_or_default();
        let lists = ["readings", "superseded_without_successor"];
        if lists.iter().any(|name| objects[name].as_array().is_some_and(|list| list.contains(&json!(reading)))) {
            found.push((number, reading));
        }
    }
    Ok(found)
}

fn touched_by(act: TrailRow, reading: i64) -> Touched {
    Touched { trail: act.number, at: act.at, who: act.who, act: act.act, why: act.reason, reading }
}

fn whole_json(
    basis: &Basis,
    row: &ReadingRow,
    source: &Source,
    correction: Option<&Correction>,
    history: &[Touched],
) -> Json {
    let mut whole = json!(json::Reading::new(basis, row));
    if let Some(fields) = whole.as_object_mut() {
        let more = [
            ("sha256", json!(source.sha256)),
            ("bytes", json!(row.bytes.map(|(from, to)| [from, to]))),
            ("line", json!(row.line)),
            ("text", json!(source.text)),
            ("written", json!(row.written)),
            ("plan", json!(row.plan)),
            ("exported", json!(row.exported)),
            ("exported_unit", json!((!row.unit.is_empty()).then_some(&row.unit))),
            ("correction", json!(correction.map(|it| json!({ "from": it.from, "times": it.times, "plus": it.plus })))),
            ("history", json!(history)),
        ];
        fields.extend(more.map(|(name, value)| (name.to_owned(), value)));
    }
    whole
}

fn text(
    context: &mut Context<'_, '_>,
    basis: &Basis,
    row: &ReadingRow,
    source: &Source,
    correction: Option<&Correction>,
    history: &[Touched],
) -> Result<(), Failure> {
    let unit = basis.plan.measure(&row.measure).map_or("", |(_, measure)| measure.unit.as_str());
    let visit = basis.visit_code(basis.place(&row.session).visit).unwrap_or("unscheduled");
    let lines = [
        Some(format!(
            "Reading {}, {}: {} {} of {}, {} at {visit}, replicate {}",
            row.reading,
            row.state.code(),
            plain_or_dash(row.number),
            unit,
            row.session.subject,
            row.measure,
            row.replicate
        )),
        Some(format!("Taken:     {}", when::taken(row.moment, row.session.day, basis.zone()))),
        row.text.as_ref().map(|text| format!("Written:   {text} {}", row.unit)),
        correction.map(|it| corrected(it, unit)),
        Some(format!("Source:    {}", json::source(row.source))),
        row.export.as_ref().map(|export| format!("Export:    {export}, {}", row.place().unwrap_or_default())),
        source.sha256.as_ref().map(|hash| format!("SHA-256:   {hash}")),
        row.bytes.map(|(from, to)| format!("Bytes:     {from} to {to}")),
        source.text.as_ref().map(|text| format!("Row:       {text}")),
        Some(format!("Placed by: plan version {}", row.plan)),
    ];
    let lines: Vec<String> = lines.into_iter().flatten().map(|line| clean(&line).trim_end().to_owned()).collect();
    context.out.text(&lines.join("\n"))?;
    let mut table = Table::new(&[
        ("trail", Right),
        ("when", Whole),
        ("who", Left),
        ("act", Whole),
        ("reading", Right),
        ("why", Left),
    ]);
    for act in history {
        let why = act.why.clone().unwrap_or_default();
        let at = when::written(&act.at, basis.zone());
        table.row([act.trail.to_string(), at, act.who.clone(), act.act.clone(), act.reading.to_string(), why]);
    }
    context.out.text("").and_then(|()| context.out.table(&table))
}

/// `Corrected: × 1.002, + 0.5 kg (the plan's correction from 2026-03-01)`
fn corrected(correction: &Correction, unit: &str) -> String {
    let Correction { from, times, plus, .. } = correction;
    let plus = if *plus == 0.0 { String::new() } else { format!(", + {} {unit}", plain(*plus)) };
    format!("Corrected: × {}{plus} (the plan's correction from {from} on)", plain(*times))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn text_in_either_unicode_form_is_read() {
        assert_eq!(utf8_or_utf16("Größe;1".as_bytes()), "Größe;1");
        let little: Vec<u8> = "Kraft 1".encode_utf16().flat_map(u16::to_le_bytes).collect();
        let big: Vec<u8> = "Kraft 1".encode_utf16().flat_map(u16::to_be_bytes).collect();
        assert_eq!((utf8_or_utf16(&little), utf8_or_utf16(&big)), ("Kraft 1".to_owned(), "Kraft 1".to_owned()));
        assert_eq!(utf8_or_utf16(&[0xff]), "\u{fffd}");
    }
}
