//! `[instrument.reader]`: how an instrument's exports are read.

use super::forms::{self, Form};
use super::instrument::Known;
use super::keys::{Check, Kind, Tab, Table, key, needed, one_of, words};
use super::model::{Encoding, FixedColumn, Format, Header, Ignore, LastLine, Place, Reader, Sheet, Source};
use super::place::{self, Named, PLACE, STAMP_PLACE};
use super::value::{self, VALUE};
use super::written::Value;

words!(LAST_LINE: LastLine { "finished" = LastLine::Finished, "whole" = LastLine::Whole });

/// The formats, as the plan names them.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(crate) enum FormatName {
    Delimited,
    FixedWidth,
    Workbook,
    Json,
    JsonLines,
    Xml,
}
use FormatName::{Delimited, FixedWidth, Json, JsonLines, Workbook, Xml};

words!(FORMAT: FormatName {
    "delimited" = Delimited,
    "fixed-width" = FixedWidth,
    "workbook" = Workbook,
    "json" = Json,
    "json-lines" = JsonLines,
    "xml" = Xml,
});

/// No export has more columns, lines of header or sheets.
const MANY: i64 = 1_000_000;

pub(crate) static READER: Table = Table {
    name: "[instrument.reader]",
    doc: "How an instrument's exports are read.",
    keys: &[
        needed("format", Kind::Word(&FORMAT.words), "The kind of file"),
        key("encoding", Kind::Text(Form::Encoding), "\"auto\"", "How bytes become text"),
        key(
            "delimiter",
            Kind::Text(Form::Delimiter),
            "\"auto\"",
            "What parts the cells of a delimited export: one character, or \"tab\"",
        ),
        key("decimal_mark", Kind::Text(Form::Mark), "\".\"", "The decimal mark of numbers"),
        key("group_mark", Kind::Text(Form::Mark), "none", "The thousands mark of numbers"),
        key("header", Kind::Table(&HEADER), "{ row = 1 }", "Where the header of a table is"),
        key("last_line", Kind::Word(&LAST_LINE.words), "finished", "What a last line without a line end means"),
        key(
            "columns",
            Kind::List(&Kind::Table(&COLUMN), 1),
            "where the header's labels begin",
            "The columns of a fixed-width export, by characters from 1, both ends in",
        ),
        key("units_row", Kind::Truth, "false", "Whether a row of units stands under the header"),
        key("stop_at", Kind::Text(Form::Regex), "none", "A line that ends the table"),
        key("missing", Kind::List(&Kind::Text(Form::Any), 0), "[\"\"]", "Texts that stand for no value"),
        key("ignore", Kind::List(&Kind::Table(&IGNORE), 0), "none", "Rows that are no readings"),
        key(
            "sheet",
            Kind::Either(&[Kind::Text(Form::Filled), Kind::Whole(1, MANY)]),
            "the first",
            "The sheet of a workbook, by name or number",
        ),
        key(
            "rows",
            Kind::Text(Form::Rows),
            "none; each line itself in json-lines",
            "Where the rows of a json or xml export are",
        ),
        needed("subject", Kind::Table(&PLACE), "Where the subject is found"),
        needed("taken_at", Kind::Table(&STAMP_PLACE), "Where the moment is found, and how it is written"),
        key("visit", Kind::Table(&PLACE), "the date decides", "Where the visit's label is found"),
        key("replicate", Kind::Table(&PLACE), "the order in the file", "Where the replicate's number is found"),
        key("operator", Kind::Table(&PLACE), "none", "Where the operator is found"),
        needed("value", Kind::Tables(&VALUE), "The values of a row"),
    ],
    one_of: &[],
};

static HEADER: Table = Table {
    name: "header",
    doc: "Where a table's header is.",
    keys: &[
        key("starts_with", Kind::Text(Form::Filled), "", "The first line that begins so"),
        key("row", Kind::Whole(1, MANY), "", "The header's line, from 1"),
        key("lines", Kind::Whole(1, 20), "1", "With row: how many lines the header takes"),
        key("none", Kind::Truth, "", "There is no header: columns are \"1\", \"2\", …"),
    ],
    one_of: &["starts_with", "row", "none"],
};

static COLUMN: Table = Table {
    name: "one of \"columns\"",
    doc: "A column of a fixed-width export.",
    keys: &[
        needed("name", Kind::Text(Form::Filled), "The column's name"),
        needed("from", Kind::Whole(1, MANY), "Its first character, from 1"),
        needed("to", Kind::Whole(1, MANY), "Its last character, included"),
    ],
    one_of: &[],
};

static IGNORE: Table = Table {
    name: "one of \"ignore\"",
    doc: "A rule for rows that are no readings.",
    keys: &[
        key("column", Kind::Text(Form::Filled), "", "The column looked at"),
        key("equals", Kind::Text(Form::Any), "", "The row is ignored when the column holds this text"),
        key("matches", Kind::Text(Form::Regex), "", "The row is ignored when the column matches this"),
        key("line", Kind::Text(Form::Regex), "", "The line is ignored when it matches this"),
    ],
    one_of: &["equals", "matches", "line"],
};

/// Keys that only some formats have, and whether it is an error elsewhere or merely without effect.
const ONLY: &[(&str, &[FormatName], bool)] = &[
    ("delimiter", &[Delimited], true),
    ("columns", &[FixedWidth], true),
    ("sheet", &[Workbook], true),
    ("rows", &[Json, JsonLines, Xml], true),
    ("header", &TABLES, true),
    ("units_row", &TABLES, true),
    ("stop_at", &TABLES, true),
    ("last_line", &[Delimited, FixedWidth, JsonLines], false),
    ("encoding", &[Delimited, FixedWidth, Json, JsonLines, Xml], false),
];
const TABLES: [FormatName; 3] = [Delimited, FixedWidth, Workbook];

/// `[instrument.reader]`
pub(crate) fn reader(check: &mut Check<'_>, tab: &Tab<'_>, known: &Known<'_>) -> Reader {
    let name = tab.word("format", &FORMAT);
    if let Some(name) = name {
        misplaced(check, tab, name);
    }
    let mut named = vec![];
    let columns = columns(check, tab);
    let header = header(check, tab, name, !columns.is_empty());
    let ignore = ignore(check, tab, name, &mut named);
    let subject = spot(tab, "subject", &mut named);
    let (taken_at, stamp) = match tab.table("taken_at", &STAMP_PLACE) {
        Some(tab) => (place::place(&tab, &mut named), place::stamp(&tab)),
        None => (nowhere(), super::model::Stamp::Iso),
    };
    subject_targets(check, tab);
    let optional = |name: &str, named: &mut Vec<Named>| tab.has(name).then(|| spot(tab, name, named));
    let visit = optional("visit", &mut named);
    visit_targets(check, tab, known);
    let replicate = optional("replicate", &mut named);
    replicate_targets(check, tab);
    let operator = optional("operator", &mut named);
    let values = value::values(check, &tab.tables("value", &VALUE), known, &mut named);
    absent_columns(check, &named, &columns, &header, name);
    let (decimal_mark, group_mark) = marks(check, tab);
    Reader {
        format: format(tab, name, columns),
        encoding: tab.formed("encoding", forms::encoding).unwrap_or(Encoding::Auto),
        decimal_mark,
        group_mark,
        header,
        last_line: last_line(check, tab),
        units_row: tab.truth("units_row").unwrap_or(false),
        stop_at: tab.formed("stop_at", forms::regex),
        missing: missing(tab),
        ignore,
        subject,
        taken_at,
        stamp,
        visit,
        replicate,
        operator,
        values,
    }
}

fn nowhere() -> Place {
    Place { source: Source::Fixed(String::new()), map: Default::default() }
}

fn spot(tab: &Tab<'_>, name: &str, named: &mut Vec<Named>) -> Place {
    tab.table(name, &PLACE).map_or_else(nowhere, |tab| place::place(&tab, named))
}

/// Keys that the format does not have, and preambles of formats without a header.
fn misplaced(check: &mut Check<'_>, tab: &Tab<'_>, name: FormatName) {
    let written = tab.text("format").unwrap_or_default();
    for (key, formats, error) in ONLY.iter().filter(|(key, formats, _)| tab.has(key) && !formats.contains(&name)) {
        let names: Vec<&str> = FORMAT
            .words
            .names
            .iter()
            .zip(FORMAT.values)
            .filter(|(_, it)| formats.contains(it))
            .map(|(it, _)| *it)
            .collect();
        let wrong = format!("\"{key}\" means nothing for the format \"{written}\".");
        let right = format!("{key} only with the format {}", one_of(&names));
        if *error {
            check.at(tab, key, wrong, right);
        } else {
            check.warn(&tab.spot_of(key), &tab.path_of(key), wrong, right);
        }
    }
    if matches!(name, Json | Xml) && !tab.has("rows") && !check.torn {
        let wrong = format!("[instrument.reader] lacks the key \"rows\", which the format \"{written}\" needs.");
        check.error(&tab.spot, &tab.path_of("rows"), wrong, "rows = a path in quotes, such as \"/results/*\"");
    }
    if !TABLES.contains(&name) {
        let places = ["subject", "visit", "replicate", "operator"].iter().filter_map(|key| tab.table(key, &PLACE));
        for tab in places.chain(tab.table("taken_at", &STAMP_PLACE)) {
            place::no_preamble(check, &tab, written);
        }
    }
}

fn format(tab: &Tab<'_>, name: Option<FormatName>, columns: Vec<FixedColumn>) -> Format {
    let rows = tab.text("rows").unwrap_or_default().to_owned();
    match name.unwrap_or(Delimited) {
        Delimited => Format::Delimited { delimiter: tab.formed("delimiter", forms::delimiter).flatten() },
        FixedWidth => Format::FixedWidth { columns },
        Workbook => Format::Workbook {
            sheet: match tab.node("sheet").map(|node| &node.value) {
                Some(Value::Text(name)) => Sheet::Named(name.clone()),
                Some(Value::Whole(number)) => Sheet::Number(usize::try_from(*number).unwrap_or(1)),
                _ => Sheet::Number(1),
            },
        },
        Json => Format::Json { rows },
        JsonLines => Format::JsonLines { rows },
        Xml => Format::Xml { rows },
    }
}

fn columns(check: &mut Check<'_>, tab: &Tab<'_>) -> Vec<FixedColumn> {
    let tabs = tab.tables("columns", &COLUMN);
    check.unique(&tabs, "name");
    let mut columns: Vec<FixedColumn> = vec![];
    for tab in &tabs {
        let place = |name: &str| tab.whole(name).and_then(|it| usize::try_from(it).ok());
        let (Some(name), Some(from), Some(to)) = (tab.text("name"), place("from"), place("to")) else { continue };
        if to < from {
            check.at(tab, "to", "The column ends before it begins.", "from <= to");
        }
        if let Some(other) = columns.iter().find(|other| other.from <= to && from <= other.to) {
            let wrong = format!("\"{name}\" and \"{}\" share characters.", other.name);
            check.at(tab, "from", wrong, "columns that do not overlap");
        }
        columns.push(FixedColumn { name: name.to_owned(), from, to });
    }
    columns
}

fn header(check: &mut Check<'_>, tab: &Tab<'_>, name: Option<FormatName>, given: bool) -> Header {
    let unit_row = tab.truth("units_row") == Some(true);
    let Some(tab) = tab.table("header", &HEADER) else {
        let is_table = name.is_none_or(|name| TABLES.contains(&name));
        return if is_table && !given { Header::Row { row: 1, lines: 1 } } else { Header::None };
    };
    let count = |name: &str| tab.whole(name).and_then(|it| u64::try_from(it).ok()).unwrap_or(1);
    if tab.has("lines") && !tab.has("row") {
        check.at(&tab, "lines", "\"lines\" stands without \"row\".", "{ row = …, lines = … }");
    }
    if tab.truth("none") == Some(false) {
        check.at(&tab, "none", "This does not say where the header is.", "none = true, or row, or starts_with");
    }
    if tab.has("none") && unit_row {
        check.at(&tab, "none", "A row of units stands under the header, but there is none.", "units_row = false");
    }
    if let Some(start) = tab.text("starts_with") {
        return Header::StartsWith(start.to_owned());
    }
    if tab.has("row") { Header::Row { row: count("row"), lines: count("lines") } } else { Header::None }
}

fn last_line(check: &mut Check<'_>, tab: &Tab<'_>) -> LastLine {
    let said = tab.word("last_line", &LAST_LINE).unwrap_or(LastLine::Finished);
    if said == LastLine::Whole {
        let wrong = "A file cut inside its last row would be read as it stands: 12.5 may have been 12.57.";
        let right = "\"finished\", unless the instrument never ends its last line";
        check.warn(&tab.spot_of("last_line"), &tab.path_of("last_line"), wrong, right);
    }
    said
}

fn missing(tab: &Tab<'_>) -> Vec<String> {
    if !tab.has("missing") {
        return vec![String::new()];
    }
    tab.texts("missing").iter().map(|(text, _)| text.trim().to_owned()).collect()
}

fn marks(check: &mut Check<'_>, tab: &Tab<'_>) -> (char, Option<char>) {
    let decimal = tab.formed("decimal_mark", forms::mark).unwrap_or('.');
    let group = tab.formed("group_mark", forms::mark);
    if group == Some(decimal) {
        let wrong = format!("\"{decimal}\" is the decimal mark already.");
        check.at(tab, "group_mark", wrong, "another mark for thousands than for decimals");
    }
    if tab.formed("delimiter", forms::delimiter).flatten().map(char::from) == Some(decimal) {
        let (spot, path) = (tab.spot_of("delimiter"), tab.path_of("delimiter"));
        let wrong = format!("\"{decimal}\" is the decimal mark too: numbers with decimals must then stand in quotes.");
        check.warn(&spot, &path, wrong, "another delimiter or decimal mark, unless the export quotes its numbers");
    }
    (decimal, group)
}

fn ignore(check: &mut Check<'_>, tab: &Tab<'_>, format: Option<FormatName>, named: &mut Vec<Named>) -> Vec<Ignore> {
    let mut rules = vec![];
    for tab in tab.tables("ignore", &IGNORE) {
        let column = tab.text("column").unwrap_or_default().to_owned();
        if let Some(expression) = tab.formed("line", forms::regex) {
            if tab.has("column") {
                check.at(&tab, "column", "\"line\" looks at the whole line.", "no column");
            }
            if matches!(format, Some(Workbook | Json | Xml)) {
                check.at(&tab, "line", "Only text that is read line by line has lines.", "{ column = …, matches = … }");
            }
            rules.push(Ignore::Line(expression));
            continue;
        }
        if !tab.has("column") && !tab.has("line") && !check.torn {
            check.error(&tab.spot, &tab.path_of("column"), "Of which column?", "{ column = …, equals = … }");
        }
        named.push(Named { column: column.clone(), spot: tab.spot_of("column"), path: tab.path_of("column") });
        if let Some(text) = tab.text("equals") {
            rules.push(Ignore::Equals { column, text: text.trim().to_owned() });
        } else if let Some(regex) = tab.formed("matches", forms::regex) {
            rules.push(Ignore::Matches { column, regex });
        }
    }
    rules
}

fn subject_targets(check: &mut Check<'_>, tab: &Tab<'_>) {
    let Some(tab) = tab.table("subject", &PLACE) else { return };
    if tab.has("fixed") {
        let (spot, path) = (tab.spot_of("fixed"), tab.path_of("fixed"));
        check.warn(
            &spot,
            &path,
            "Every reading of this instrument is of one subject.",
            "a place that says whose it is",
        );
    }
}

fn visit_targets(check: &mut Check<'_>, tab: &Tab<'_>, known: &Known<'_>) {
    let Some(tab) = tab.table("visit", &PLACE) else { return };
    if known.visits.is_empty() {
        return;
    }
    let mut codes: Vec<&str> = known.visits.iter().map(|visit| visit.code.as_str()).collect();
    codes.push("unscheduled");
    place::targets(check, &tab, "visit", &codes);
}

/// Replicates are numbers from 1.
fn replicate_targets(check: &mut Check<'_>, tab: &Tab<'_>) {
    let Some(tab) = tab.table("replicate", &PLACE) else { return };
    for entry in tab.map("map") {
        let Some(text) = entry.node.text() else { continue };
        if text.parse::<u32>().map_or(true, |number| number == 0) {
            let path = format!("{}.{}", tab.path_of("map"), entry.key);
            check.error(&entry.node.spot, &path, "This is no replicate's number.", "a whole number from 1");
        }
    }
}

/// Where the plan itself says which columns there are, no other can be named.
fn absent_columns(
    check: &mut Check<'_>,
    named: &[Named],
    columns: &[FixedColumn],
    header: &Header,
    format: Option<FormatName>,
) {
    let by_number = matches!(header, Header::None) && matches!(format, Some(Delimited | Workbook));
    let names: Vec<&str> = columns.iter().map(|column| column.name.as_str()).collect();
    for it in named.iter().filter(|it| !it.column.is_empty()) {
        if format == Some(FixedWidth) && !names.is_empty() {
            check.refer(&it.spot, &it.path, &it.column, "column given in \"columns\"", &names);
        } else if by_number && it.column.parse::<u32>().map_or(true, |number| number == 0) {
            let wrong = format!("Without a header there is no column \"{}\".", forms::clip(&it.column));
            check.error(&it.spot, &it.path, wrong, "a column's number in quotes, from \"1\"");
        }
    }
}
