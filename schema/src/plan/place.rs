//! Places: `{ column = "…" }` and the other ways of saying where a text is found.

use std::collections::BTreeMap;

use super::forms::{self, Form};
use super::keys::{Bounds, Check, Key, Kind, Tab, Table, key, needed};
use super::model::{Place, Source, Stamp};
use super::written::{Spot, Value};

const COLUMN: Key = key("column", Kind::Text(Form::Filled), "", "A column, or a path inside a row");
const COLUMNS: Key =
    key("columns", Kind::List(&Kind::Text(Form::Filled), 1), "", "Several columns, whose texts are joined by a space");
const PREAMBLE: Key = key("preamble", Kind::Text(Form::Filled), "", "The value of a key above the header");
const FILE_NAME: Key =
    key("file_name", Kind::Text(Form::OneGroup), "", "The group of an expression in the file's name");
const FOLDER: Key =
    key("folder", Kind::Text(Form::OneGroup), "", "The group of an expression in the folder below the instrument's");
const FIXED: Key = key("fixed", Kind::Text(Form::Any), "", "Always this text");
static PART_KIND: Kind = Kind::Table(&PART);
const PARTS: Key = key("parts", Kind::List(&PART_KIND, 1), "", "Several places, whose texts are joined by a space");
const MAP: Key = key(
    "map",
    Kind::Map(Form::Any, &Kind::Either(&[Kind::Text(Form::Any), Kind::Whole(1, 1_000_000)])),
    "each text stands for itself",
    "Texts as written, and what they are in the plan",
);
const TIMES: Key = key("times", Kind::Number(Bounds::ANY), "the known conversion", "The factor to the measure's unit");
const PLUS: Key = key("plus", Kind::Number(Bounds::ANY), "0", "What is added, in the measure's unit");

const WAYS: &[&str] = &["column", "columns", "preamble", "file_name", "folder", "fixed", "parts"];

static PART: Table = Table {
    name: "one of \"parts\"",
    doc: "One part of a text.",
    keys: &[COLUMN, COLUMNS, PREAMBLE, FILE_NAME, FOLDER, FIXED, MAP],
    one_of: &["column", "columns", "preamble", "file_name", "folder", "fixed"],
};

pub(crate) static PLACE: Table = Table {
    name: "a place",
    doc: "Where a text is found.",
    keys: &[COLUMN, COLUMNS, PREAMBLE, FILE_NAME, FOLDER, FIXED, PARTS, MAP],
    one_of: WAYS,
};

pub(crate) static STAMP_PLACE: Table = Table {
    name: "taken_at",
    doc: "Where the moment is found, and how it is written.",
    keys: &[
        COLUMN,
        COLUMNS,
        PREAMBLE,
        FILE_NAME,
        FOLDER,
        FIXED,
        PARTS,
        MAP,
        needed(
            "format",
            Kind::Text(Form::Stamp),
            "A strftime pattern, \"iso\", or \"serial\" for a workbook's day numbers",
        ),
    ],
    one_of: WAYS,
};

pub(crate) static UNIT: Table = Table {
    name: "unit",
    doc: "The unit of a value as exported.",
    keys: &[
        key("code", Kind::Text(Form::Unit), "", "Always this unit, as a UCUM code"),
        COLUMN,
        COLUMNS,
        PREAMBLE,
        FILE_NAME,
        FOLDER,
        FIXED,
        PARTS,
        MAP,
        TIMES,
        PLUS,
    ],
    one_of: &["code", "column", "columns", "preamble", "file_name", "folder", "fixed", "parts"],
};

/// A column that the plan names, and where it does.
pub(crate) struct Named {
    pub column: String,
    pub spot: Spot,
    pub path: String,
}

/// Reads a place; the columns that it names are added to `named`.
pub(crate) fn place(tab: &Tab<'_>, named: &mut Vec<Named>) -> Place {
    Place { source: source(tab, named), map: map(tab) }
}

fn source(tab: &Tab<'_>, named: &mut Vec<Named>) -> Source {
    // A place that says nothing has been found at fault.
    let Some(way) = tab.def.one_of.iter().find(|way| tab.has(way)).copied() else {
        return Source::Fixed(String::new());
    };
    let text = || tab.text(way).unwrap_or_default().to_owned();
    let mut name = |column: &str, spot: &Spot| {
        named.push(Named { column: column.to_owned(), spot: spot.clone(), path: tab.path_of(way) });
        column.to_owned()
    };
    let group = || tab.formed(way, forms::one_group).unwrap_or_else(super::study::nothing);
    match way {
        "column" => Source::Column(name(&text(), &tab.spot_of(way))),
        "columns" => Source::Columns(tab.texts(way).iter().map(|(text, spot)| name(text, spot)).collect()),
        "preamble" => Source::Preamble(text()),
        "file_name" => Source::FileName(group()),
        "folder" => Source::Folder(group()),
        "parts" => Source::Parts(tab.tables(way, &PART).iter().map(|part| place(part, named)).collect()),
        _ => Source::Fixed(text()),
    }
}

fn map(tab: &Tab<'_>) -> BTreeMap<String, String> {
    let target = |value: &Value| match value {
        Value::Text(text) => Some(text.clone()),
        Value::Whole(whole) => Some(whole.to_string()),
        _ => None,
    };
    tab.map("map").iter().filter_map(|entry| Some((entry.key.clone(), target(&entry.node.value)?))).collect()
}

/// How a moment is written.
pub(crate) fn stamp(tab: &Tab<'_>) -> Stamp {
    tab.formed("format", forms::stamp).unwrap_or(Stamp::Iso)
}

/// Says of every target of the map, and of a fixed text, that is not among the known codes.
pub(crate) fn targets(check: &mut Check<'_>, tab: &Tab<'_>, what: &str, known: &[&str]) {
    for entry in tab.map("map") {
        if let Some(text) = entry.node.text() {
            check.refer(&entry.node.spot, &format!("{}.{}", tab.path_of("map"), entry.key), text, what, known);
        }
    }
    let mapped = |text: &str| tab.map("map").iter().any(|entry| entry.key == text);
    if let Some(text) = tab.text("fixed").filter(|text| !mapped(text)) {
        check.refer(&tab.spot_of("fixed"), &tab.path_of("fixed"), text, what, known);
    }
}

/// A preamble is above a header; formats without one have none.
pub(crate) fn no_preamble(check: &mut Check<'_>, tab: &Tab<'_>, format: &str) {
    if tab.has("preamble") {
        let wrong = format!("An export of the format \"{format}\" has no preamble.");
        check.at(tab, "preamble", wrong, "a column: the path inside a row, such as \"../serial\"");
    }
    for part in if tab.def.key("parts").is_some() { tab.tables("parts", &PART) } else { vec![] } {
        no_preamble(check, &part, format);
    }
}
