//! Workbooks: one sample for each thing that they do, and what must hold whatever the bytes are.
//!
//! The workbooks are made here, part by part, after ECMA-376 part 1 (SpreadsheetML) and part 2 (the archive).
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic, missing_docs)]

mod read_common;

use std::io::{Cursor, Write};

use read_common::{Whole, ignore_equals, read_all, reader, regex, starts_with};
use revisant_daemon::intake::read::workbook::{Limits, Workbook};
use revisant_daemon::intake::read::{self, FileFault, LineCounts, Row, RowFault};
use revisant_schema::plan::{Format, Header, Reader, Sheet};
use zip::write::SimpleFileOptions;
use zip::{CompressionMethod, ZipWriter};

const MAIN: &str = "http://schemas.openxmlformats.org/spreadsheetml/2006/main";
const KIND: &str = "http://schemas.openxmlformats.org/officeDocument/2006/relationships";
const COLUMNS: [&str; 3] = ["id", "at", "kg"];

/// A workbook to be made.
#[derive(Clone)]
struct Book {
    /// Name, kind and rows of each sheet.
    sheets: Vec<(String, &'static str, String)>,
    /// The texts that cells share, as XML.
    texts: Vec<String>,
    /// How many of them it says there are.
    declared: u64,
    properties: &'static str,
    method: CompressionMethod,
    /// More parts.
    more: Vec<(String, Vec<u8>)>,
    /// Parts that are left out.
    without: Vec<&'static str>,
}

impl Book {
    /// One sheet of these rows.
    fn of(rows: &str) -> Self {
        Self {
            sheets: vec![("Results".into(), "worksheet", rows.into())],
            texts: vec![],
            declared: 3,
            properties: "<workbookPr/>",
            method: CompressionMethod::Deflated,
            more: vec![],
            without: vec![],
        }
    }

    fn texts(mut self, texts: &[&str]) -> Self {
        self.texts = texts.iter().map(|text| (*text).to_owned()).collect();
        self
    }

    fn sheet(mut self, name: &str, kind: &'static str, rows: &str) -> Self {
        self.sheets.push((name.into(), kind, rows.into()));
        self
    }

    fn parts(&self) -> Vec<(String, Vec<u8>)> {
        let head = "<?xml version=\"1.0\" encoding=\"UTF-8\" standalone=\"yes\"?>\n";
        let relations = |of: &str| {
            format!(
                "{head}<Relationships xmlns=\"http://schemas.openxmlformats.org/package/2006/relationships\">{of}</Relationships>"
            )
        };
        let mut list = String::new();
        let mut related =
            format!("<Relationship Id=\"rIdT\" Type=\"{KIND}/sharedStrings\" Target=\"sharedStrings.xml\"/>");
        let mut parts = Vec::new();
        for (index, (name, kind, rows)) in self.sheets.iter().enumerate() {
            let id = index + 1;
            list.push_str(&format!("<sheet name=\"{name}\" sheetId=\"{id}\" r:id=\"rId{id}\"/>"));
            related.push_str(&format!(
                "<Relationship Id=\"rId{id}\" Type=\"{KIND}/{kind}\" Target=\"{kind}s/sheet{id}.xml\"/>"
            ));
            let sheet = format!(
                "{head}<{kind} xmlns=\"{MAIN}\"><dimension ref=\"A1\"/><sheetData>{rows}</sheetData><pageMargins left=\"0.7\"/></{kind}>"
            );
            parts.push((format!("xl/{kind}s/sheet{id}.xml"), sheet.into_bytes()));
        }
        let texts: String = self.texts.iter().map(|text| format!("<si>{text}</si>")).collect();
        let office = format!("<Relationship Id=\"r1\" Type=\"{KIND}/officeDocument\" Target=\"xl/workbook.xml\"/>");
        let workbook = format!(
            "{head}<workbook xmlns=\"{MAIN}\" xmlns:r=\"{KIND}\">{}<sheets>{list}</sheets></workbook>",
            self.properties
        );
        parts.push(("_rels/.rels".into(), relations(&office).into_bytes()));
        parts.push(("xl/_rels/workbook.xml.rels".into(), relations(&related).into_bytes()));
        parts.push(("xl/workbook.xml".into(), workbook.into_bytes()));
        let texts = format!("{head}<sst xmlns=\"{MAIN}\" uniqueCount=\"{}\">{texts}</sst>", self.declared);
        parts.push(("xl/sharedStrings.xml".into(), texts.into_bytes()));
        for (name, bytes) in &self.more {
            parts.retain(|(known, _)| known != name);
            parts.push((name.clone(), bytes.clone()));
        }
        parts.retain(|(name, _)| !self.without.contains(&name.as_str()));
        parts
    }

    fn bytes(&self) -> Vec<u8> {
        archive(&self.parts(), self.method)
    }
}

fn archive(parts: &[(String, Vec<u8>)], method: CompressionMethod) -> Vec<u8> {
    let mut writer = ZipWriter::new(Cursor::new(vec![]));
    for (name, bytes) in parts {
        writer.start_file(name.as_str(), SimpleFileOptions::default().compression_method(method)).unwrap();
        writer.write_all(bytes).unwrap();
    }
    writer.finish().unwrap().into_inner()
}

/// A row of cells, each a kind (`n`, `t` for own text, or XML as it stands with `<`) and what it holds.
fn cells(number: u32, cells: &[&str]) -> String {
    let cell = |(column, cell): (usize, &&str)| {
        let at = format!("{}{number}", char::from(b'A' + column as u8));
        if cell.is_empty() {
            String::new()
        } else if cell.starts_with('<') {
            cell.replace("@", &at)
        } else if cell.parse::<f64>().is_ok() {
            format!("<c r=\"{at}\"><v>{cell}</v></c>")
        } else {
            format!("<c r=\"{at}\" t=\"inlineStr\"><is><t xml:space=\"preserve\">{cell}</t></is></c>")
        }
    };
    let cells: String = cells.iter().enumerate().map(cell).collect();
    format!("<row r=\"{number}\">{cells}</row>")
}

/// Rows from 1 on.
fn table(rows: &[&[&str]]) -> String {
    (1..).zip(rows).map(|(number, row)| cells(number, row)).collect()
}

fn plain() -> Reader {
    let mut reader = reader(None, &COLUMNS);
    reader.format = Format::Workbook { sheet: Sheet::Number(1) };
    reader
}

fn on(sheet: Sheet) -> Reader {
    let mut reader = plain();
    reader.format = Format::Workbook { sheet };
    reader
}

fn whole(reader: &Reader, book: &Book) -> Whole {
    read_all(reader, &book.bytes()).unwrap()
}

fn layout(reader: &Reader, book: &Book) -> String {
    match read_all(reader, &book.bytes()) {
        Err(FileFault::Layout(what)) => what,
        other => panic!("{other:?}"),
    }
}

fn unreadable(bytes: &[u8]) -> String {
    match read_all(&plain(), &bytes.to_vec()) {
        Err(FileFault::Unreadable(what)) => what,
        other => panic!("{other:?}"),
    }
}

/// The texts of the third column, with what is a number marked.
fn values(rows: &[&str]) -> Vec<String> {
    values_of(rows, &[])
}

fn values_of(written: &[&str], texts: &[&str]) -> Vec<String> {
    let mut rows = table(&[&COLUMNS]);
    for (number, written) in (2..).zip(written) {
        rows.push_str(&cells(number, &["S", "1", written]));
    }
    let (reader, bytes) = (plain(), Book::of(&rows).texts(texts).bytes());
    let mut opened = read::open(&reader, &bytes).unwrap();
    let (mut row, mut seen) = (Row::default(), vec![]);
    while opened.next_row(&mut row).unwrap() {
        assert_eq!(row.fault, None);
        seen.push(format!("{}{}", if row.is_number(2) { "#" } else { "" }, row.cell(2)));
    }
    seen
}

#[test]
fn a_plain_table_is_read() {
    let rows = table(&[&["at", "note", "id", "kg"], &["45000.5", "x", "S1", "3.5"], &["45001", "", "S2", "4"]]);
    let seen = whole(&plain(), &Book::of(&rows));
    assert_eq!(seen.good(), [["S1", "45000.5", "3.5"], ["S2", "45001", "4"]]);
    assert_eq!(seen.counts, LineCounts { header: 1, ..LineCounts::default() });
    assert_eq!((seen.lines, seen.rows[1].line, seen.rows[1].lines, seen.rows[1].bytes), (3, 3, 1, None));
    assert_eq!(seen.rows[1].raw, "45001\t\tS2\t4");
}

#[test]
fn a_cell_s_place_is_its_sheet_and_name() {
    let rows = table(&[&["", "at", "id", "kg"], &["", "1", "S1", "3"]]);
    let (reader, bytes) = (plain(), Book::of(&rows).bytes());
    let opened = read::open(&reader, &bytes).unwrap();
    let names: Vec<_> = (0..4).map(|slot| opened.cell_name(7, slot).unwrap()).collect();
    assert_eq!(names, ["Results!C7", "Results!B7", "Results!D7", "Results!A7"]);
}

#[test]
fn numbers_are_in_their_shortest_form_and_no_texts() {
    let written = ["37.299999999999997", "1.0", "-0", "1E3", "<c r=\"@\" t=\"n\"><v> 7 </v></c>"];
    assert_eq!(values(&written), ["#37.3", "#1", "#0", "#1000", "#7"]);
    // A date is a number with a format.
    assert_eq!(values(&["<c r=\"@\" s=\"3\"><v>45915.670138888898</v></c>"]), ["#45915.6701388889"]);
    // What stands where a number should is shown as it is.
    assert_eq!(values(&["<c r=\"@\"><v>1,5</v></c>", "<c r=\"@\"><v>INF</v></c>"]), ["1,5", "INF"]);
}

#[test]
fn texts_stand_as_they_are() {
    let own = |text: &str| format!("<c r=\"@\" t=\"inlineStr\"><is>{text}</is></c>");
    let written = [
        own("<t>12,5</t>"),
        own("<t>007</t>"),
        own("<t xml:space=\"preserve\"> a </t>"),
        own("<r><rPr><b/></rPr><t>bo</t></r><r><t xml:space=\"preserve\">ld </t></r><r><t>er</t></r>"),
        own("<t>東京</t><rPh sb=\"0\" eb=\"2\"><t>トウキョウ</t></rPh><phoneticPr fontId=\"1\"/>"),
        own("<t>a &lt;&amp;&gt; &quot;b&apos; &#xB5;&#181;</t>"),
        own("<t><![CDATA[<x> & y]]></t>"),
        own("<t>one_x000A_two_x005F_x000A_</t>"),
        "<c r=\"@\" t=\"str\"><f>A1</f><v>x&amp;y</v></c>".to_owned(),
        "<c r=\"@\" t=\"d\"><v>2025-03-01T10:00:00</v></c>".to_owned(),
        "<c r=\"@\" t=\"inlineStr\"><v>no</v><is><t>yes</t></is></c>".to_owned(),
    ];
    let written: Vec<&str> = written.iter().map(String::as_str).collect();
    let expected = [
        "12,5",
        "007",
        "a",
        "bold er",
        "東京",
        "a <&> \"b' µµ",
        "<x> & y",
        "one\ntwo_x000A_",
        "x&y",
        "2025-03-01T10:00:00",
        "yes",
    ];
    assert_eq!(values(&written), expected);
    let rows = table(&[&COLUMNS, &["S", " two words ", "1"]]);
    let seen = whole(&plain(), &Book::of(&rows));
    assert_eq!((seen.rows[0].cells[1].as_str(), seen.rows[0].raw.as_str()), ("two words", "S\t two words \t1"));
}

#[test]
fn shared_texts_are_found_by_number() {
    let texts = ["<t>zero</t>", "<r><t>o</t></r><r><t>ne</t></r>", "", "<t> three </t>", "<t>1</t>"];
    let shared = |index: &str| format!("<c r=\"@\" t=\"s\"><v>{index}</v></c>");
    let written: Vec<String> = ["1", "4", "0", "3", "2"].iter().map(|index| shared(index)).collect();
    let written: Vec<&str> = written.iter().map(String::as_str).collect();
    assert_eq!(values_of(&written, &texts), ["one", "1", "zero", "three", ""]);
    for index in ["5", "-1", "x", "4294967295", "99999999999999999999"] {
        let rows = table(&[&COLUMNS, &["S", "1", &shared(index)]]);
        let what = unreadable(&Book::of(&rows).texts(&texts).bytes());
        assert!(what.contains("row 2") && what.contains(index), "{what}");
    }
}

#[test]
fn truth_values_and_errors_are_texts() {
    let written = ["b\"><v>1</v>", "b\"><v>0</v>", "b\"><v>true</v>", "e\"><v>#N/A</v>", "e\"><v>#DIV/0!</v>"];
    let written: Vec<String> = written.iter().map(|cell| format!("<c r=\"@\" t=\"{cell}</c>")).collect();
    let written: Vec<&str> = written.iter().map(String::as_str).collect();
    assert_eq!(values(&written), ["TRUE", "FALSE", "TRUE", "#N/A", "#DIV/0!"]);
}

#[test]
fn a_formula_gives_its_value_and_without_one_a_text_that_is_no_number() {
    let value = ["<f>1+1</f><v>2</v>", "<f t=\"shared\" si=\"0\"/><v>3.50</v>"];
    let value: Vec<String> = value.iter().map(|cell| format!("<c r=\"@\">{cell}</c>")).collect();
    assert_eq!(values(&value.iter().map(String::as_str).collect::<Vec<_>>()), ["#2", "#3.5"]);
    let none = ["<f>1+1</f>", "<f>1+1</f><v></v>", "<f>1+1</f><v/>", "<f t=\"shared\" si=\"0\"/>", "<f/><v> </v>"];
    for cell in none {
        for kind in ["", " t=\"n\"", " t=\"b\""] {
            assert_eq!(values(&[&format!("<c r=\"@\"{kind}>{cell}</c>")]), ["(formula without a value)"], "{cell}");
        }
    }
    assert_eq!(values(&["<c r=\"@\" t=\"str\"><f>A1</f></c>"]), ["(formula without a value)"]);
    // A formula whose result is an empty text has been calculated.
    assert_eq!(values(&["<c r=\"@\" t=\"str\"><f>A1</f><v></v></c>"]), [""]);
}

#[test]
fn cells_without_text_are_empty() {
    let written = ["<c r=\"@\" s=\"1\"/>", "<c r=\"@\"><v/></c>", "<c r=\"@\" t=\"s\"><v></v></c>", " \u{a0} "];
    assert_eq!(values(&written), ["", "", "", ""]);
}

#[test]
fn cells_and_rows_may_leave_out_where_they_stand() {
    let rows = "<row><c t=\"str\"><v>id</v></c><c t=\"str\"><v>at</v></c><c t=\"str\"><v>kg</v></c></row>\
                <row r=\"4\"><c t=\"str\"><v>S1</v></c><c r=\"C4\"><v>5</v></c></row>\
                <row><c t=\"str\"><v>S2</v></c></row>";
    let seen = whole(&plain(), &Book::of(rows));
    assert_eq!(seen.good(), [["S1", "", "5"], ["S2", "", ""]]);
    assert_eq!((seen.rows[0].line, seen.rows[1].line, seen.counts.blank, seen.lines), (4, 5, 2, 5));
}

#[test]
fn every_row_down_to_the_last_with_a_cell_counts_once() {
    let rows = cells(3, &COLUMNS)
        + &cells(5, &["S1", "1", "2"])
        + &cells(7, &["<c r=\"@\" s=\"1\"/>"])
        + &cells(9, &["S2", "1", "2"])
        + &cells(10, &["", " ", ""])
        + &cells(500, &["<c r=\"@\" s=\"1\"/>"]);
    let mut reader = plain();
    reader.header = starts_with("id");
    let seen = whole(&reader, &Book::of(&rows));
    assert_eq!(seen.counts, LineCounts { preamble: 2, header: 1, blank: 4, ..LineCounts::default() });
    assert_eq!((seen.lines, seen.rows.len()), (9, 2));
}

#[test]
fn a_preamble_a_units_row_and_a_footer_surround_the_table() {
    let rows = table(&[
        &["Serial: A1703", "", "Tester", "", "B. Ä", "Room:", "4"],
        &["Rate", "100"],
        &[],
        &["", "id", "at", "kg"],
        &["", "", "", "g"],
        &["", "S1", "1", "2"],
        &["", "id", "at", "kg"],
        &["", "", "", "g"],
        &["", "QC", "1", "9"],
        &["", "S2", "2", "3"],
        &[],
        &["", "Total", "", "5"],
        &[],
        &["", "S9", "1", "9"],
    ]);
    let mut reader = plain();
    reader.header = starts_with("id");
    reader.units_row = true;
    reader.stop_at = Some(regex("^Total"));
    reader.ignore = vec![ignore_equals("id", "QC")];
    let book = Book::of(&rows);
    let seen = whole(&reader, &book);
    assert_eq!(seen.good(), [["S1", "1", "2"], ["S2", "2", "3"]]);
    let counts = LineCounts { preamble: 3, header: 1, units: 2, blank: 1, repeated_header: 1, ignored: 1, footer: 3 };
    assert_eq!((seen.counts, seen.lines), (counts, 14));
    let bytes = book.bytes();
    let opened = read::open(&reader, &bytes).unwrap();
    for (key, value) in [("Serial", "A1703"), ("Tester", "B. Ä"), ("Room", "4"), ("Rate", "100")] {
        assert_eq!(opened.preamble(key), Some(value), "{key}");
    }
    assert_eq!((opened.unit(0), opened.unit(2), opened.preamble("Nothing")), (Some(""), Some("g"), None));
}

#[test]
fn a_footer_is_known_by_the_whole_row_too() {
    let rows = table(&[&COLUMNS, &["S1", "1", "2"], &["", "end", "of list"], &["S2", "1", "2"]]);
    for pattern in ["^\tend\tof", "^end\tof list$", "list"] {
        let mut reader = plain();
        reader.stop_at = Some(regex(pattern));
        assert_eq!(whole(&reader, &Book::of(&rows)).counts.footer, 2, "{pattern}");
    }
}

#[test]
fn a_header_may_take_two_rows() {
    let rows = table(&[&["Trial"], &["id", "Hand", "Hand"], &["", "left", "right"], &["S1", "1", "2"]]);
    let mut reader = reader(None, &["id", "Hand left", "Hand right"]);
    reader.format = plain().format;
    reader.header = Header::Row { row: 2, lines: 2 };
    let seen = whole(&reader, &Book::of(&rows));
    assert_eq!(seen.good(), [["S1", "1", "2"]]);
    assert_eq!(seen.counts, LineCounts { preamble: 1, header: 2, ..LineCounts::default() });
    reader.header = Header::Row { row: 4, lines: 2 };
    assert!(layout(&reader, &Book::of(&rows)).contains("row 4 is the last"));
    reader.header = Header::Row { row: 9, lines: 1 };
    assert!(layout(&reader, &Book::of(&rows)).contains("has only 4 rows"));
}

#[test]
fn without_a_header_columns_are_counted_from_a() {
    let mut reader = reader(None, &["2", "3", "5"]);
    reader.format = plain().format;
    reader.header = Header::None;
    let seen = whole(&reader, &Book::of(&table(&[&[], &["", "S1", "1"], &["", "S2", "1", "", "7"]])));
    assert_eq!(seen.good(), [["S1", "1", ""], ["S2", "1", "7"]]);
    assert_eq!((seen.counts.blank, seen.lines), (1, 3));
    assert_eq!(whole(&reader, &Book::of("")).lines, 0);
}

#[test]
fn a_header_that_is_not_there_is_an_unknown_layout() {
    let book = Book::of(&table(&[&["id", "at", "weight (kg)"], &["S1", "1", "2"]]));
    assert!(layout(&plain(), &book).contains("no column \"kg\" (the nearest is \"weight (kg)\")"));
    let mut reader = plain();
    reader.header = starts_with("Patient");
    assert!(layout(&reader, &book).contains("begins with \"Patient\""));
    assert!(layout(&plain(), &Book::of("")).contains("has only 0 rows"));
}

#[test]
fn a_row_with_more_cells_than_the_header_is_held() {
    let rows = table(&[&["id", "at", "kg", " "], &["S1", "1", "2", "note"], &["S2", "1", "2", " "]]);
    let seen = whole(&plain(), &Book::of(&rows));
    let RowFault::Unreadable(what) = seen.faults()[0].1 else { panic!() };
    assert!(what.contains("cell D2") && what.contains("column C"), "{what}");
    assert_eq!(seen.good(), [["S2", "1", "2"]]);
}

#[test]
fn a_header_alone_is_no_fault() {
    let mut reader = plain();
    reader.units_row = true;
    let seen = whole(&reader, &Book::of(&table(&[&COLUMNS])));
    assert_eq!((seen.rows.len(), seen.counts.units, seen.lines), (0, 0, 1));
}

#[test]
fn the_sheet_is_the_one_that_the_plan_names() {
    let rows = |id| table(&[&COLUMNS, &[id, "1", "2"]]);
    let mut book =
        Book::of("").sheet("Diagram", "chartsheet", "").sheet("Pru\u{308}fung &amp; mehr", "worksheet", &rows("P"));
    book.sheets[0].2 = rows("R");
    for (sheet, id) in [
        (Sheet::Number(1), "R"),
        (Sheet::Number(2), "P"),
        (Sheet::Named("Results".into()), "R"),
        (Sheet::Named("Prüfung & mehr".into()), "P"),
    ] {
        assert_eq!(whole(&on(sheet.clone()), &book).good(), [[id, "1", "2"]], "{sheet:?}");
    }
    for sheet in [Sheet::Number(0), Sheet::Number(3), Sheet::Named("results".into()), Sheet::Named("Diagram".into())] {
        let what = layout(&on(sheet), &book);
        assert!(what.contains("\"Results\", \"Pru\u{308}fung & mehr\""), "{what}");
    }
}

#[test]
fn days_may_count_from_1904() {
    let rows = table(&[&COLUMNS]);
    for (properties, expected) in [
        ("<workbookPr date1904=\"1\"/>", true),
        ("<workbookPr date1904=\"true\"/>", true),
        ("<workbookPr date1904=\"0\"/>", false),
        ("<workbookPr/>", false),
        ("<extLst><ext><workbookPr date1904=\"1\"/></ext></extLst>", false),
    ] {
        let (reader, bytes) = (plain(), Book { properties, ..Book::of(&rows) }.bytes());
        assert_eq!(read::open(&reader, &bytes).unwrap().since_1904(), expected, "{properties}");
    }
    let book = Book { properties: "<workbookPr date1904=\"maybe\"/>", ..Book::of(&rows) };
    assert!(unreadable(&book.bytes()).contains("maybe"));
}

#[test]
fn names_of_elements_and_parts_may_differ() {
    let strict = "http://purl.oclc.org/ooxml";
    let sheet = format!(
        "<x:worksheet xmlns:x=\"{strict}/spreadsheetml/main\"><x:sheetData><x:row r=\"1\"><x:c r=\"A1\" t=\"str\"><x:v>id</x:v></x:c>\
         <x:c r=\"B1\" t=\"str\"><x:v>at</x:v></x:c><x:c r=\"C1\" t=\"str\"><x:v>kg</x:v></x:c></x:row>\
         <x:row r=\"2\"><x:c r=\"A2\"><x:v>7</x:v></x:c></x:row></x:sheetData></x:worksheet>"
    );
    let kind = format!("{strict}/officeDocument/relationships");
    let mut book = Book::of("");
    book.without = vec!["xl/workbook.xml", "xl/_rels/workbook.xml.rels", "xl/worksheets/sheet1.xml"];
    book.more = vec![
        (
            "_rels/.rels".into(),
            format!("<Relationships><Relationship Id=\"r1\" Type=\"{kind}/officeDocument\" Target=\"/book.xml\"/></Relationships>").into(),
        ),
        (
            "_rels/book.xml.rels".into(),
            format!("<Relationships><Relationship Id=\"a\" Type=\"{kind}/worksheet\" Target=\"Data/Sheet.XML\"/></Relationships>").into(),
        ),
        (
            "book.xml".into(),
            "<x:workbook xmlns:x=\"m\" xmlns:q=\"r\"><x:sheets><x:sheet name=\"S\" sheetId=\"1\" q:id=\"a\"/></x:sheets></x:workbook>".into(),
        ),
        ("Data\\sheet.xml".into(), sheet.into()),
    ];
    assert_eq!(whole(&plain(), &book).good(), [["7", "", ""]]);
}

#[test]
fn an_archive_that_was_written_as_a_stream_is_read() {
    let mut writer = ZipWriter::new_stream(vec![]);
    for (name, bytes) in Book::of(&table(&[&COLUMNS, &["S1", "1", "2"]])).parts() {
        writer.start_file(name, SimpleFileOptions::default()).unwrap();
        writer.write_all(&bytes).unwrap();
    }
    let bytes = writer.finish().unwrap().into_inner();
    assert_eq!(read_all(&plain(), &bytes).unwrap().good(), [["S1", "1", "2"]]);
}

#[test]
fn what_is_no_such_workbook_is_said_in_plain_words() {
    let ole = b"\xD0\xCF\x11\xE0\xA1\xB1\x1A\xE1".to_vec();
    let protected: Vec<u8> = "EncryptedPackage".encode_utf16().flat_map(u16::to_le_bytes).collect();
    assert!(unreadable(&[ole.clone(), vec![0; 600], protected].concat()).contains("protected by a password"));
    assert!(unreadable(&[ole, vec![0; 600]].concat()).contains("(.xls) is not read; save it as .xlsx"));
    assert!(unreadable(b"").contains("empty"));
    assert!(unreadable(b"id,at,kg\n").contains("not those of a workbook"));
    assert!(unreadable(b"PK\x03\x04 and no more").contains("damaged or was cut off"));
    let ods = ("mimetype".to_owned(), b"application/vnd.oasis.opendocument.spreadsheet".to_vec());
    assert!(unreadable(&archive(&[ods], CompressionMethod::Stored)).contains("(.ods) is not read"));
    let other = ("readme.txt".to_owned(), b"x".to_vec());
    assert!(unreadable(&archive(&[other], CompressionMethod::Stored)).contains("no workbook in it"));
    let main = |target: &str| {
        let relation = format!(
            "<Relationships><Relationship Id=\"r\" Type=\"{KIND}/officeDocument\" Target=\"{target}\"/></Relationships>"
        );
        let document = ("word/document.xml".to_owned(), b"<w:document xmlns:w=\"w\"/>".to_vec());
        archive(&[("_rels/.rels".to_owned(), relation.into_bytes()), document], CompressionMethod::Stored)
    };
    assert!(unreadable(&main("xl/workbook.bin")).contains("(.xlsb) is not read"));
    assert!(unreadable(&main("word/document.xml")).contains("no workbook but \"document\""));
    assert!(unreadable(&main("xl/workbook.xml")).contains("no such part"));
}

#[test]
fn protected_parts_are_a_fault() {
    use zip::unstable::write::FileOptionsExt;
    let options = SimpleFileOptions::default().with_deprecated_encryption(b"secret").unwrap();
    let mut writer = ZipWriter::new(Cursor::new(vec![]));
    for (name, bytes) in Book::of(&table(&[&COLUMNS])).parts() {
        writer.start_file(name, options).unwrap();
        writer.write_all(&bytes).unwrap();
    }
    assert!(unreadable(&writer.finish().unwrap().into_inner()).contains("protected by a password"));
}

/// Sheets whose rows or cells cannot be trusted.
#[test]
fn a_sheet_out_of_order_is_a_fault() {
    let header = table(&[&COLUMNS]);
    for (rows, said) in [
        ("<row r=\"3\"/><row r=\"2\"/>", "row 2 follows"),
        ("<row r=\"1\"/>", "row 1 follows"),
        ("<row r=\"1048577\"/>", "no row's number"),
        ("<row r=\"0\"/>", "no row's number"),
        ("<row r=\"x\"/>", "no row's number"),
        ("<row r=\"2\" r=\"3\"/>", "two numbers"),
        ("<row r=\"2\"><c r=\"B2\"/><c r=\"A2\"/></row>", "order"),
        ("<row r=\"2\"><c r=\"A2\"/><c r=\"A2\"/></row>", "order"),
        ("<row r=\"2\"><c r=\"A3\"/></row>", "names itself"),
        ("<row r=\"2\"><c r=\"XFE2\"/></row>", "order"),
        ("<row r=\"2\"><c r=\"ZZZZZZZZZZ2\"/></row>", "names itself"),
        ("<row r=\"2\"><c r=\"2\"/></row>", "names itself"),
        ("<row><c r=\"A\"/></row>", "names itself"),
        ("<row r=\"2\"><c t=\"z\"/></row>", "unknown kind"),
        ("<row r=\"2\"><c><v>1</v><v>2</v></c></row>", "two values"),
        ("<row r=\"2\"><c><v>1<x/></v></c></row>", "where it should not"),
        ("<row r=\"2\"><x/></row>", "where it should not"),
        ("<c><v>1</v></c>", "where it should not"),
        ("</sheetData><sheetData>", "two tables"),
        ("<row r=\"2\"><c t=\"str\"><v>&who;</v></c></row>", "&who;"),
        ("<row r=\"2\"><c></row>", "expected"),
    ] {
        let what = unreadable(&Book::of(&format!("{header}{rows}")).bytes());
        assert!(what.contains(said), "{rows}: {what}");
    }
}

#[test]
fn xml_that_is_not_whole_or_not_plain_is_a_fault() {
    let sheet = String::from_utf8(Book::of(&table(&[&COLUMNS, &["S1", "1", "2"]])).parts()[0].1.clone()).unwrap();
    let with = |part: Vec<u8>| {
        let mut book = Book::of("");
        book.more = vec![("xl/worksheets/sheet1.xml".into(), part)];
        book.bytes()
    };
    assert_eq!(read_all(&plain(), &with(sheet.clone().into())).unwrap().rows.len(), 1);
    for end in 0..sheet.len() {
        unreadable(&with(sheet.as_bytes()[..end].to_vec()));
    }
    unreadable(&with(sheet.replace("UTF-8", "windows-1252").into()));
    unreadable(&with(sheet.replace("<worksheet", "<!DOCTYPE a [<!ENTITY b \"c\">]><worksheet").into()));
    unreadable(&with([sheet.as_bytes(), b"<worksheet/>"].concat()));
    unreadable(&with(
        sheet.replace("S1", "\u{1}").into_bytes().iter().map(|&byte| if byte == 1 { 0xFF } else { byte }).collect(),
    ));
    let wide: Vec<u8> = format!("\u{feff}{sheet}").encode_utf16().flat_map(u16::to_le_bytes).collect();
    unreadable(&with(wide));
}

#[test]
fn two_parts_of_one_name_are_a_fault() {
    let mut parts = Book::of(&table(&[&COLUMNS])).parts();
    parts.push(("XL\\workbook.xml".into(), b"<workbook/>".to_vec()));
    assert!(unreadable(&archive(&parts, CompressionMethod::Stored)).contains("two parts named"));
}

/// A workbook that is stored in another one is never read in its place.
#[test]
fn a_workbook_inside_another_is_not_read_for_it() {
    let inner = Book::of(&table(&[&COLUMNS, &["inner", "1", "2"]])).bytes();
    let outer = Book {
        method: CompressionMethod::Stored,
        more: vec![("xl/embeddings/other.xlsx".into(), inner.clone())],
        ..Book::of(&table(&[&COLUMNS, &["outer", "1", "2"]]))
    };
    assert_eq!(whole(&plain(), &outer).good(), [["outer", "1", "2"]]);
    let bytes = outer.bytes();
    let end = bytes.windows(inner.len()).position(|window| window == inner).unwrap() + inner.len();
    for more in 0..40 {
        unreadable(&bytes[..end + more]);
    }
}

mod bounds {
    use super::*;

    fn small() -> Limits {
        Limits { file: 1 << 20, entries: 50, small: 4096, texts: 16 * 1024, text_count: 1000, inflated: 256 * 1024 }
    }

    fn read_within(bytes: &[u8], limits: Limits) -> Result<u64, FileFault> {
        let (reader, bytes) = (plain(), bytes.to_vec());
        let mut opened = Workbook::open_within(&reader, &Sheet::Number(1), &bytes, limits)?;
        let (mut row, mut count) = (Row::default(), 0);
        while read::Rows::next_row(&mut opened, &mut row)? {
            count += 1;
        }
        Ok(count)
    }

    fn too_large(bytes: &[u8], limits: Limits) -> String {
        match read_within(bytes, limits) {
            Err(FileFault::TooLarge(what)) => what,
            other => panic!("{other:?}"),
        }
    }

    fn good() -> Book {
        Book::of(&table(&[&COLUMNS, &["S1", "1", "2"]]))
    }

    #[test]
    fn a_sound_workbook_is_within_them() {
        assert_eq!(read_within(&good().bytes(), small()).unwrap(), 1);
    }

    #[test]
    fn the_file_and_its_directory_are_bounded() {
        let bytes = good().bytes();
        assert!(too_large(&bytes, Limits { file: bytes.len() as u64 - 1, ..small() }).contains("file"));
        assert!(too_large(&bytes, Limits { entries: 4, ..small() }).contains("more than 4 parts"));
        assert_eq!(read_within(&bytes, Limits { file: bytes.len() as u64, entries: 5, ..small() }).unwrap(), 1);
        let mut many = good();
        for index in 0..10_000 {
            many.more.push((format!("xl/worksheets/sheet{}.xml", index + 2), vec![]));
        }
        assert!(too_large(&many.bytes(), Limits::default()).contains("more than 10000 parts"));
    }

    /// The directory's end as very large archives have it (APPNOTE.TXT 6.3.9, 4.3.14 to 4.3.16).
    #[test]
    fn so_many_entries_are_not_made_room_for() {
        let with = |entries: u64| {
            let mut bytes = good().bytes();
            let end = bytes.split_off(bytes.len() - 22);
            let word = |at: usize| u64::from(u32::from_le_bytes(end[at..at + 4].try_into().unwrap()));
            let record = bytes.len() as u64;
            bytes.extend(b"PK\x06\x06");
            bytes.extend(44_u64.to_le_bytes());
            bytes.extend([45, 0, 45, 0, 0, 0, 0, 0, 0, 0, 0, 0]);
            [entries, entries, word(12), word(16)].iter().for_each(|word| bytes.extend(word.to_le_bytes()));
            bytes.extend(b"PK\x06\x07\0\0\0\0");
            bytes.extend(record.to_le_bytes());
            bytes.extend([1, 0, 0, 0]);
            bytes.extend(b"PK\x05\x06\0\0\0\0\xFF\xFF\xFF\xFF");
            bytes.extend([0xFF; 8]);
            bytes.extend([0, 0]);
            bytes
        };
        assert_eq!(read_within(&with(5), small()).unwrap(), 1);
        for entries in [51, 1 << 40, u64::MAX] {
            assert!(too_large(&with(entries), small()).contains("more than 50 parts"));
        }
    }

    #[test]
    fn ten_thousand_sheets_of_one_part_are_no_matter() {
        let mut book = good();
        let rows: String =
            (1..=10_000).map(|id| format!("<sheet name=\"s{id}\" sheetId=\"{id}\" r:id=\"rId1\"/>")).collect();
        let main = format!("<workbook xmlns:r=\"r\"><sheets>{rows}</sheets></workbook>");
        book.more = vec![("xl/workbook.xml".into(), main.into_bytes())];
        assert_eq!(read_within(&book.bytes(), Limits::default()).unwrap(), 1);
        assert!(too_large(&book.bytes(), small()).contains("xl/workbook.xml expands beyond 4096 bytes"));
    }

    #[test]
    fn a_bomb_is_defused_whatever_its_archive_declares() {
        let rows = format!("{}{}", table(&[&COLUMNS]), " ".repeat(40 << 20));
        let bomb = Book::of(&rows).bytes();
        assert!(bomb.len() < 100_000);
        assert!(too_large(&bomb, small()).contains("sheet1.xml expands beyond"));
        // The sizes that its directory declares become lies.
        let mut lying = bomb;
        let size = (Book::of(&rows).parts()[0].1.len() as u32).to_le_bytes();
        while let Some(at) = lying.windows(4).position(|window| window == size) {
            lying[at..at + 4].copy_from_slice(&100_u32.to_le_bytes());
        }
        assert!(read_within(&lying, small()).is_err());
    }

    #[test]
    fn texts_are_bounded_in_size_and_count() {
        let text = format!("<t>{}</t>", "x".repeat(20_000));
        assert!(too_large(&good().texts(&[&text]).bytes(), small()).contains("sharedStrings.xml expands beyond"));
        let long = format!("<r><t>{}</t></r>", "x".repeat(1 << 19)).repeat(3);
        assert!(too_large(&good().texts(&[&long]).bytes(), Limits::default()).contains("a text that cells share"));
        let many = vec![""; 1001];
        assert!(too_large(&good().texts(&many).bytes(), small()).contains("more than 1000 texts"));
        assert_eq!(read_within(&good().texts(&many[1..]).bytes(), small()).unwrap(), 1);
    }

    /// Readers that make room for what is declared abort here.
    #[test]
    fn what_a_workbook_declares_makes_no_room() {
        let book = Book { declared: u64::MAX / 32, ..good() };
        assert_eq!(read_within(&book.bytes(), small()).unwrap(), 1);
    }

    #[test]
    fn parts_that_nobody_asks_for_are_not_inflated() {
        let mut book = good();
        book.more = vec![("xl/media/image1.png".into(), vec![0; 10 << 20])];
        assert_eq!(read_within(&book.bytes(), small()).unwrap(), 1);
    }

    #[test]
    fn a_far_cell_takes_no_room() {
        let rows = format!("{}<row r=\"1048576\"><c r=\"XFD1048576\"><v>1</v></c></row>", table(&[&COLUMNS]));
        let seen = whole(&plain(), &Book::of(&rows));
        assert_eq!((seen.lines, seen.counts.blank, seen.unreadable()), (1_048_576, 1_048_574, vec![1_048_576]));
        assert_eq!(seen.rows[0].raw.len(), 16_384);
    }

    #[test]
    fn a_row_is_bounded_however_often_it_names_one_text() {
        let text = format!("<t>{}</t>", "x".repeat(100_000));
        let cells: String = (0..16_384).map(|_| "<c t=\"s\"><v>0</v></c>").collect();
        let rows = format!("{}<row>{cells}</row>{}", table(&[&COLUMNS]), super::cells(3, &["S1", "1", "2"]));
        let seen = whole(&plain(), &Book::of(&rows).texts(&[&text]));
        assert_eq!((seen.unreadable(), seen.rows[0].raw.len(), seen.good().len()), (vec![2], 0, 1));
        // Above the header nobody knows what it may have been.
        let rows = format!("<row>{cells}</row>{}", super::cells(2, &COLUMNS));
        assert!(unreadable(&Book::of(&rows).texts(&[&text]).bytes()).contains("row 1 holds more text"));
    }

    #[test]
    fn a_text_of_a_cell_is_bounded() {
        let long = "x&amp;".repeat(3 << 20);
        let rows = format!("{}{}", table(&[&COLUMNS]), cells(2, &["S1", "1", &long]));
        assert_eq!(whole(&plain(), &Book::of(&rows)).unreadable(), [2]);
        for long in ["x".repeat(5 << 20), format!("<!--{}-->", "x".repeat(5 << 20))] {
            let rows = format!("{}<row><c t=\"str\"><v>{long}</v></c></row>", table(&[&COLUMNS]));
            assert!(too_large(&Book::of(&rows).bytes(), Limits::default()).contains("cell or tag"));
        }
    }

    #[test]
    fn deep_elements_are_too_large() {
        let deep = "<a>".repeat(3_000_000);
        assert!(too_large(&Book::of(&format!("</sheetData>{deep}")).bytes(), Limits::default()).contains("too deep"));
        let mut book = good();
        book.more = vec![("xl/workbook.xml".into(), format!("<workbook>{deep}").into_bytes())];
        assert!(too_large(&book.bytes(), Limits::default()).contains("too deep"));
    }

    #[test]
    fn a_tag_of_many_attributes_takes_no_time() {
        let many: String = (0..200_000).map(|index| format!(" a{index}=\"\"")).collect();
        let mut book = good();
        book.more = vec![("xl/workbook.xml".into(), format!("<workbook><workbookPr{many}/></workbook>").into_bytes())];
        assert!(unreadable(&book.bytes()).contains("too many attributes"));
    }
}

mod properties {
    use calamine::{Data, DataRef, Reader as _};
    use proptest::prelude::*;

    use super::*;

    /// All that the reader knows, in a few bytes.
    fn sample() -> (Reader, Book) {
        let mut reader = plain();
        reader.header = starts_with("id");
        reader.units_row = true;
        reader.stop_at = Some(regex("^Total"));
        reader.ignore = vec![ignore_equals("id", "QC")];
        let rows = table(&[
            &["Serial: A1"],
            &["<c r=\"@\" t=\"s\"><v>0</v></c>", "at", "kg"],
            &["", "", "g"],
            &["S1", "45000.25", "<c r=\"@\"><f>A1</f><v>2.5</v></c>"],
            &["S2", "45001", "<c r=\"@\"><f>A1</f></c>"],
            &["QC", "1", "2"],
            &["S3", "<c r=\"@\" t=\"e\"><v>#N/A</v></c>", "<c r=\"@\" t=\"b\"><v>1</v></c>"],
            &["Total", "", "9"],
        ]);
        (reader, Book::of(&rows).texts(&["<r><t>i</t></r><r><t>d</t></r>"]))
    }

    #[test]
    fn a_workbook_cut_anywhere_is_a_fault() {
        let (reader, book) = sample();
        for method in [CompressionMethod::Deflated, CompressionMethod::Stored] {
            let bytes = Book { method, ..book.clone() }.bytes();
            assert_eq!(read_all(&reader, &bytes).unwrap().rows.len(), 3);
            for cut in 0..bytes.len() {
                let seen = read_all(&reader, &bytes[..cut].to_vec());
                assert!(matches!(seen, Err(FileFault::Unreadable(_))), "cut at {cut}: {seen:?}");
            }
        }
    }

    /// A damaged byte either does no harm (in a time, or in what is not read) or is a fault.
    #[test]
    fn a_changed_byte_gives_no_other_rows() {
        let (reader, book) = sample();
        for method in [CompressionMethod::Deflated, CompressionMethod::Stored] {
            let bytes = Book { method, ..book.clone() }.bytes();
            let sound = read_all(&reader, &bytes).unwrap();
            for at in 0..bytes.len() {
                for flip in [0x01, 0xFF] {
                    let mut changed = bytes.clone();
                    changed[at] ^= flip;
                    if let Ok(seen) = read_all(&reader, &changed) {
                        assert_eq!((&seen.rows, seen.counts), (&sound.rows, sound.counts), "byte {at} ^ {flip}");
                    }
                }
            }
        }
    }

    proptest! {
        #![proptest_config(ProptestConfig::with_cases(500))]

        #[test]
        fn random_bytes_are_a_fault(mut bytes in prop::collection::vec(any::<u8>(), 0..400), archive in any::<bool>()) {
            if archive {
                bytes.splice(0..0, *b"PK\x03\x04");
            }
            prop_assert!(read_all(&plain(), &bytes).is_err());
        }

        /// Parts that are damaged before they are packed, so that every checksum is right. [`read_all`] checks that
        /// all rows are accounted for.
        #[test]
        fn mutated_parts_are_accounted_for(
            which in any::<prop::sample::Index>(),
            edits in prop::collection::vec((any::<prop::sample::Index>(), any::<prop::sample::Index>(), 0..4_u8), 1..5),
        ) {
            let (reader, book) = sample();
            let mut parts = book.parts();
            let which = which.index(parts.len());
            let part = &mut parts[which].1;
            for (at, other, kind) in edits {
                let (at, other) = (at.index(part.len().max(1)), other.index(part.len().max(1)));
                match kind {
                    0 if at < part.len() => part[at] = b"<>/\"=&;0129ABvcrft \xC3"[other % 20],
                    1 => part.insert(at, b"<>/\"=&;0129ABvcrft \xC3"[other % 20]),
                    2 => drop(part.drain(at.min(other)..at.max(other).min(at.min(other) + 20))),
                    _ => {
                        let copied = part[at.min(other)..at.max(other).min(at.min(other) + 40)].to_vec();
                        part.splice(at..at, copied);
                    }
                }
            }
            let _ = read_all(&reader, &archive(&parts, CompressionMethod::Stored));
        }

        /// Random sheets, against calamine.
        #[test]
        fn an_independent_reader_sees_the_same_cells(
            rows in prop::collection::vec((1..4_u32, prop::collection::vec(cell(), 0..6)), 1..12),
        ) {
            let mut number = 0;
            let mut sheet = String::new();
            for (step, row) in &rows {
                number += step;
                let cells: Vec<&str> = row.iter().map(String::as_str).collect();
                sheet.push_str(&super::cells(number, &cells));
            }
            let texts = ["<t>alpha</t>", "<r><t>be</t></r><r><t xml:space=\"preserve\">ta </t></r>", "<t>_x0041_&lt;</t>"];
            let bytes = Book::of(&sheet).texts(&texts).bytes();
            let mut reader = reader(None, &["1", "2", "3", "4", "5", "6"]);
            reader.format = plain().format;
            reader.header = Header::None;
            let seen = read_all(&reader, &bytes).unwrap();
            prop_assert_eq!(seen.rows.iter().map(|row| (row.line, row.cells.clone())).collect::<Vec<_>>(), theirs(&bytes));
        }
    }

    fn cell() -> impl Strategy<Value = String> {
        prop_oneof![
            Just(String::new()),
            (-1000..1000_i32, 0..4_u32)
                .prop_map(|(number, places)| format!("{}", f64::from(number) / 10_f64.powi(places as i32))),
            any::<f64>().prop_filter("finite", |number| number.is_finite()).prop_map(|number| format!("{number:e}")),
            "[a-zä µ]{1,8}",
            (0..3_u32).prop_map(|index| format!("<c r=\"@\" t=\"s\"><v>{index}</v></c>")),
            any::<bool>().prop_map(|truth| format!("<c r=\"@\" t=\"b\"><v>{}</v></c>", u8::from(truth))),
            Just("<c r=\"@\" t=\"e\"><v>#REF!</v></c>".to_owned()),
            Just("<c r=\"@\" t=\"str\"><f>A1</f><v>a&amp;b</v></c>".to_owned()),
        ]
    }

    /// The rows with a cell that is not empty, as calamine reads them.
    fn theirs(bytes: &[u8]) -> Vec<(u64, Vec<String>)> {
        let mut book: calamine::Xlsx<_> = calamine::open_workbook_from_rs(Cursor::new(bytes)).unwrap();
        let name = book.sheet_names()[0].clone();
        let mut reader = book.worksheet_cells_reader(&name).unwrap();
        let mut rows: Vec<(u64, Vec<String>)> = vec![];
        while let Some(cell) = reader.next_cell().unwrap() {
            let (row, column) = (u64::from(cell.get_position().0) + 1, cell.get_position().1 as usize);
            let text = match cell.get_value() {
                DataRef::Bool(truth) => truth.to_string().to_uppercase(),
                DataRef::Error(error) => error.to_string(),
                other => Data::from(other.clone()).to_string(),
            };
            let text = match text.parse::<f64>() {
                Ok(number) if matches!(cell.get_value(), DataRef::Float(_)) => usual(number),
                _ => text.trim().to_owned(),
            };
            if text.is_empty() {
                continue;
            }
            if rows.last().is_none_or(|(last, _)| *last != row) {
                rows.push((row, vec![String::new(); 6]));
            }
            rows.last_mut().unwrap().1[column] = text;
        }
        rows
    }

    /// The shortest text of a number, as the reader's own tests have it.
    fn usual(number: f64) -> String {
        match number.abs() {
            0.0 => "0".to_owned(),
            1e-15..1e21 => format!("{number}"),
            _ => format!("{number:e}"),
        }
    }
}
