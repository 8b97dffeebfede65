//! JSON documents and JSON lines: one sample for each thing that instruments do, and what must hold whatever the bytes
//! are. What is JSON and what is not follows RFC 8259.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic, missing_docs)]

mod read_common;

use std::io::Read;

use read_common::{Kept, Whole, ignore_equals, label, read_all, regex};
use revisant_daemon::intake::read::{self, Bytes, FileFault, LineCounts, Row, RowFault};
use revisant_schema::plan::{Format, Ignore, LastLine, Reader};

const COLUMNS: [&str; 3] = ["id", "at", "kg"];

fn reader(format: Format, columns: &[&str]) -> Reader {
    Reader { format, ..read_common::reader(None, columns) }
}

fn json(rows: &str, columns: &[&str]) -> Reader {
    reader(Format::Json { rows: rows.to_owned() }, columns)
}

fn lines(rows: &str, columns: &[&str]) -> Reader {
    reader(Format::JsonLines { rows: rows.to_owned() }, columns)
}

/// Hands out so many bytes at a time.
struct Drip(Vec<u8>, usize);

impl Bytes for Drip {
    fn open(&self) -> std::io::Result<Box<dyn Read + '_>> {
        Ok(Box::new(DripStream(&self.0, self.1)))
    }
}

struct DripStream<'a>(&'a [u8], usize);

impl Read for DripStream<'_> {
    fn read(&mut self, into: &mut [u8]) -> std::io::Result<usize> {
        let count = self.1.min(into.len()).min(self.0.len());
        into[..count].copy_from_slice(&self.0[..count]);
        self.0 = &self.0[count..];
        Ok(count)
    }
}

/// What reading came to, in a form that can be compared.
fn outcome(reader: &Reader, bytes: &dyn Bytes) -> Result<(Vec<Kept>, LineCounts), String> {
    read_all(reader, bytes).map(|seen| (seen.rows, seen.counts)).map_err(|fault| format!("{fault:?}"))
}

/// Reads it, and sees that it is the same however few bytes come at a time.
fn try_read(reader: &Reader, bytes: impl AsRef<[u8]>) -> Result<Whole, FileFault> {
    let bytes = bytes.as_ref().to_vec();
    let expected = outcome(reader, &bytes);
    for drip in 1..=5 {
        assert_eq!(outcome(reader, &Drip(bytes.clone(), drip)), expected, "{drip} at a time");
    }
    read_all(reader, &bytes)
}

fn whole(reader: &Reader, bytes: impl AsRef<[u8]>) -> Whole {
    try_read(reader, bytes).unwrap()
}

fn unreadable(reader: &Reader, bytes: impl AsRef<[u8]>) -> String {
    match try_read(reader, bytes) {
        Err(FileFault::Unreadable(what)) => what,
        other => panic!("{other:?}"),
    }
}

fn layout(reader: &Reader, bytes: impl AsRef<[u8]>) -> String {
    match try_read(reader, bytes) {
        Err(FileFault::Layout(what)) => what,
        other => panic!("{other:?}"),
    }
}

/// What is said of the only row.
fn spoilt(reader: &Reader, bytes: impl AsRef<[u8]>) -> String {
    let seen = whole(reader, bytes);
    match &seen.rows[..] {
        [Kept { fault: Some(RowFault::Unreadable(what)), .. }] => what.clone(),
        other => panic!("{other:?}"),
    }
}

fn utf16(text: &str, little: bool, mark: bool) -> Vec<u8> {
    let marked = if mark { format!("\u{feff}{text}") } else { text.to_owned() };
    marked.encode_utf16().flat_map(|unit| if little { unit.to_le_bytes() } else { unit.to_be_bytes() }).collect()
}

fn says(what: &str, parts: &[&str]) {
    for part in parts {
        assert!(what.contains(part), "{what:?} lacks {part:?}");
    }
}

#[test]
fn rows_of_a_document_are_read() {
    let text = "{\n \"made\": {\"by\": [1, {\"x\": null}]},\r\n \"results\": [\r  {\"id\": \"S1\", \"kg\": 0.850, \"at\": \"2025-03-01\"},\n  {\"kg\": -1E+2, \"id\": 7, \"more\": [{}]} , {}\n ]\n}\n";
    let seen = whole(&json("/results/*", &COLUMNS), text);
    assert_eq!(seen.good(), [["S1", "2025-03-01", "0.850"], ["7", "", "-1E+2"], ["", "", ""]]);
    assert_eq!(seen.rows.iter().map(|row| (row.line, row.lines)).collect::<Vec<_>>(), [(4, 1), (5, 1), (5, 1)]);
    assert_eq!((seen.lines, seen.counts), (3, LineCounts::default()));
    assert_eq!(seen.rows[1].raw, "{\"kg\": -1E+2, \"id\": 7, \"more\": [{}]}");
    for row in &seen.rows {
        let (start, end) = row.bytes.unwrap();
        assert_eq!(&text[start as usize..end as usize], row.raw);
    }
}

#[test]
fn each_kind_of_value_is_its_text() {
    let columns = ["a", "b", "c", "d", "e", "f", "g"];
    let text = r#"[{"a": "\u00e9\n\"x\" ", "b": true, "c": false, "d": null, "e": {"z": [1]}, "f": [ 1 ], "g": 1.50}]"#;
    let reader = json("/*", &columns);
    let seen = whole(&reader, text);
    assert_eq!(seen.good(), [["é\n\"x\"", "true", "false", "", "{\"z\": [1]}", "[ 1 ]", "1.50"]]);
    let bytes = text.as_bytes().to_vec();
    let mut rows = read::open(&reader, &bytes).unwrap();
    let mut row = Row::default();
    assert!(rows.next_row(&mut row).unwrap());
    assert_eq!((0..7).filter(|slot| row.is_number(*slot)).collect::<Vec<_>>(), [6]);
    assert_eq!((rows.preamble("a"), rows.unit(0), rows.cell_name(1, 0)), (None, None, None));
}

#[test]
fn paths_lead_into_rows() {
    let text = r#"[{"who": {"code": "S1", "at": {"0": "x"}}, "samples": [5, {"kg": 1}, [2, 3]]}, {"who": 3, "samples": {"0": 4}}]"#;
    let columns = ["who/code", "samples/0", "samples/1/kg", "samples/2/1", "samples/3", "who/at/0", "samples/00"];
    let seen = whole(&json("/*", &columns), text);
    assert_eq!(seen.good(), [["S1", "5", "1", "3", "", "x", ""], ["", "4", "", "", "", "", ""]]);
}

#[test]
fn rows_may_be_anywhere() {
    let at = |rows: &str, text: &str| {
        let seen = whole(&json(rows, &[".", "a"]), text);
        seen.rows.into_iter().map(|row| row.cells.concat()).collect::<Vec<_>>()
    };
    assert_eq!(at("/*", "[1,2.0,\"x\",null]"), ["1", "2.0", "x", ""]);
    assert_eq!(at("/", "{\"a\":1}"), ["{\"a\":1}1"]);
    assert_eq!(at("", "[1]"), ["[1]"]);
    assert_eq!(at("/", "\"x\""), ["x"]);
    assert_eq!(at("/*", "{\"p\":1,\"q\":[2]}"), ["1", "[2]"]);
    assert_eq!(at("/a/*/b/*", "{\"a\":[{\"b\":[1,2]},{\"c\":[3]},4,{\"b\":{\"x\":5}}]}"), ["1", "2", "5"]);
    assert_eq!(at("/a/1/*", "{\"a\":[[1],[2,3],[4]],\"b\":[[],[5]]}"), ["2", "3"]);
    assert_eq!(at("/a", "{\"b\":0,\"a\":{\"a\":9}}"), ["{\"a\":9}9"]);
    assert_eq!(at("/*/*", "[[1],[],[2,3]]"), ["1", "2", "3"]);
}

#[test]
fn what_encloses_a_row_may_stand_behind_it() {
    let text = r#"{"sessions": [
        {"trials": [{"id": "S1"}, {"id": "S2"}], "date": "d1", "who": {"by": 1}},
        {"date": "d2", "trials": [{"id": "S3"}]},
        {"trials": {"x": {"id": "S4"}, "y": {"id": "S5"}}, "date": "d3"}
    ], "place": "p\u0041", "who": {"by": 2.50}}"#;
    let columns = ["id", "../date", "../../place", "../who/by", "../../who/by"];
    let mut reader = json("/sessions/*/trials/*", &columns);
    let seen = whole(&reader, text);
    let expected = [
        ["S1", "d1", "pA", "1", "2.50"],
        ["S2", "d1", "pA", "1", "2.50"],
        ["S3", "d2", "pA", "", "2.50"],
        // Here an object encloses the rows more closely.
        ["S4", "", "", "", ""],
        ["S5", "", "", "", ""],
    ];
    assert_eq!(seen.good(), expected);
    reader.ignore = vec![ignore_equals("../date", "d1")];
    let seen = whole(&reader, text);
    assert_eq!((seen.good(), seen.counts.ignored, seen.lines), (expected[2..].iter().map(Vec::from).collect(), 2, 5));
}

#[test]
fn what_encloses_a_row_may_be_reached_through_the_rows_themselves() {
    let text = r#"{"trials": [{"id": "S1", "zero": 4}, {"id": "S2"}], "n": {"k": [1, {"z": 2}]}}"#;
    let seen = whole(&json("/trials/*", &["id", "../trials/0/zero", "../n/k/1/z", "../trials/0", "../n/k"]), text);
    let first = "{\"id\": \"S1\", \"zero\": 4}";
    assert_eq!(seen.good(), [["S1", "4", "2", first, "[1, {\"z\": 2}]"], ["S2", "4", "2", first, "[1, {\"z\": 2}]"]]);
}

#[test]
fn nothing_encloses_rows_farther_out_than_the_document() {
    says(&layout(&json("/a/*", &["id", "../../../x"]), "{\"a\":[{}]}"), &["../../../x", "so far out"]);
    says(&layout(&json("/a/*", &["id", "../../x"]), "{\"a\":[\n{}]}"), &["../../x", "line 2"]);
    says(&layout(&json("/*", &["id", "../x"]), "[{}]"), &["../x"]);
    says(&layout(&json("/*", &["id", ".."]), "{\"a\":{}}"), &["\"..\""]);
    says(&layout(&lines("", &["id", "../x"]), "{}\n"), &["../x"]);
}

#[test]
fn attributes_are_xmls() {
    says(&layout(&json("/*", &["id", "@at"]), "[]"), &["@at", "XML"]);
    says(&layout(&lines("", &["id", "a/@at"]), "{}"), &["a/@at", "XML"]);
    says(&layout(&json("/*", &["id", "a//b"]), "[]"), &["a//b"]);
}

#[test]
fn a_key_that_stands_twice_is_a_fault_of_its_row() {
    let text =
        r#"[{"id":"S1","kg":1},{"id":"S2","kg":2,"kg":2},{"id":"S3","x":1,"x":2},{"id":"S4","y":{"z":1,"z":2}}]"#;
    let seen = whole(&json("/*", &COLUMNS), text);
    assert_eq!(seen.good(), [["S1", "", "1"], ["S4", "", ""]]);
    let [(1, RowFault::Unreadable(one)), (1, RowFault::Unreadable(other))] = seen.faults()[..] else { panic!() };
    says(one, &["\"kg\"", "twice"]);
    says(other, &["\"x\"", "twice"]);
    assert_eq!((seen.rows[1].cells.concat(), &*seen.rows[1].raw), (String::new(), r#"{"id":"S2","kg":2,"kg":2}"#));
    // However it is written, and wherever something is wanted.
    let columns = ["id", "y/µ", "y/é"];
    for twice in [r#"{"y":{"\u00b5":1,"μ":2}}"#, "{\"y\":{\"e\u{301}\":1,\"é\":2}}", r#"{"y":{"µ":1},"\u0079":{}}"#]
    {
        says(&spoilt(&lines("", &columns), twice), &["twice"]);
    }
}

#[test]
fn a_key_that_stands_twice_outside_the_rows_is_a_fault_too() {
    let text = r#"[{"rows":[1],"d":1,"d":1},{"rows":[2],"d":{"e":1},"d":2},{"rows":[3],"d":3}]"#;
    let seen = whole(&json("/*/rows/*", &[".", "../d"]), text);
    assert_eq!((seen.good(), seen.unreadable()), (vec![vec!["3", "3"]], vec![1, 1]));
    let seen = whole(&json("/*/rows/*", &[".", "../d/e"]), text);
    assert_eq!((seen.good(), seen.unreadable()), (vec![vec!["3", ""]], vec![1, 1]));
    // However often, it takes no more memory and no more time than it must.
    let text =
        format!("{{\"a\":[1],{}\"d\":0}}", format!("\"d\":\"{}\",", "x".repeat(1000)).repeat(100_000)).into_bytes();
    assert_eq!(read_all(&json("/a/*", &[".", "../d"]), &text).unwrap().unreadable(), [1]);
    // The rows themselves twice: nobody can say which.
    for reader in [json("/a/*", &[".", "x"]), json("/a/*", &[".", "../x"])] {
        says(&unreadable(&reader, r#"{"a":[1],"a":[2]}"#), &["\"a\"", "twice", "line 1, column 14"]);
    }
    let text = "{\"a\":[1]}\n{\"a\":[1],\"a\":[2]}\n{\"a\":[3,4]}\n";
    let seen = whole(&lines("/a/*", &[".", "x"]), text);
    assert_eq!((seen.good().len(), seen.unreadable()), (3, vec![2]));
}

#[test]
fn keys_are_compared_as_labels_are() {
    let text = "[{\"Gera\u{308}t\": 1, \"\\u00b5g\": 2, \" kg \": 3}]";
    assert_eq!(whole(&json("/*", &["Gerät", "\u{3bc}g", "kg"]), text).good(), [["1", "2", "3"]]);
    let rows = json("/Gera\u{308}te/*", &["Gerät", "x"]);
    assert_eq!(whole(&rows, "{\"Geräte\": [{\"Gerät\": 1}]}").good(), [["1", ""]]);
}

#[test]
fn a_path_that_leads_nowhere_is_another_layout() {
    let reader = json("/session/blocks/*", &COLUMNS);
    let text = "{\n\"version\": 3, \"session\":\n {\"room\": 1, \"block\": [{}]}}";
    says(&layout(&reader, text), &["/session/blocks/*", "line 3", "no key \"blocks\"", "\"room\", \"block\""]);
    says(&layout(&reader, "{\"sessions\": 1}"), &["no key \"session\"", "\"sessions\""]);
    says(&layout(&reader, "{\"session\":\n null}"), &["line 2", "null"]);
    says(&layout(&reader, "{\"session\": {\"blocks\": 7}}"), &["a number"]);
    says(&layout(&reader, "[{}]"), &["the list on line 1", "no \"session\""]);
    says(&layout(&reader, "{}"), &["no keys"]);
    says(&layout(&json("/*", &COLUMNS), "7 "), &["\"/*\"", "a number"]);
    says(&layout(&json("/reading", &COLUMNS), "{\"readings\": {}}"), &["\"readings\""]);
    let many: Vec<String> = (0..100).map(|key| format!("\"k{key}\":0")).collect();
    says(&layout(&reader, format!("{{{}}}", many.join(","))), &["\"k0\"", "\"k11\", …"]);
}

#[test]
fn where_all_is_empty_there_are_no_rows() {
    for (rows, text) in [
        ("/*", "[]"),
        ("/*", " { } "),
        ("/a/*", "{\"a\":[]}"),
        ("/a/*/b/*", "{\"a\":[]}"),
        ("/a/0", "{\"a\":[]}"),
        ("/a/*/b/*", "{\"a\":[{\"c\":1},{\"b\":[]}]}"),
    ] {
        let seen = whole(&json(rows, &COLUMNS), text);
        assert_eq!((seen.rows.len(), seen.lines), (0, 0), "{rows} in {text}");
    }
}

#[test]
fn rows_are_ignored_by_what_they_hold() {
    let mut reader = json("/*", &COLUMNS);
    let at = Ignore::Matches { column: "at".into(), regex: regex("^x") };
    reader.ignore = vec![ignore_equals("type", " QC "), at, Ignore::Line(regex("."))];
    let text = r#"[{"id":1,"type":" QC"},{"id":2,"at":" xy"},{"id":3,"at":"yx"},{"id":4,"type":"QC","id":4}]"#;
    let seen = whole(&reader, text);
    assert_eq!(seen.counts, LineCounts { ignored: 2, ..LineCounts::default() });
    assert_eq!((seen.good(), seen.unreadable(), seen.lines), (vec![vec!["3", "yx", "", ""]], vec![1], 4));
}

#[test]
fn what_is_no_json_is_unreadable() {
    let reader = json("/a/*", &COLUMNS);
    for (text, parts) in [
        ("", &["line 1, column 1", "the document ends", "cut off"][..]),
        (" \r\n\t\r ", &["line 3, column 2", "cut off"]),
        ("{\"a\":[]\n", &["line 2, column 1", "\",\" or \"}\"", "cut off"]),
        ("{\"a\":[]} x", &["line 1, column 10", "more text"]),
        ("{\"a\":[]}\n{\"a\":[]}", &["line 2, column 1", "more text"]),
        ("{\"a\":[{}\r\n\r{}]}", &["line 3, column 1", "\"{\" stands where \",\" or \"]\""]),
        ("{\"é\":1,\"a\":[01]}", &["line 1, column 14", "\"1\""]),
        ("{\"a\":[]}\0", &["NUL"]),
        ("\0", &["NUL"]),
        ("{'a':[]}", &["a key in quotes"]),
        ("{\"a\":[],}", &["a key in quotes"]),
        ("{\"a\" []}", &["\":\""]),
        ("// no comment\n{\"a\":[]}", &["\"/\" stands where a value"]),
        ("\u{feff}\u{feff}{\"a\":[]}", &["a value"]),
        ("{\"a\":[]}\u{1a}", &["more text"]),
        ("{\"a\":[]}\u{a0}", &["more text"]),
    ] {
        says(&unreadable(&reader, text), parts);
    }
    for wrong in [
        "+1",
        ".5",
        "1.",
        "-",
        "1e",
        "1e+",
        "0x1",
        "NaN",
        "Infinity",
        "-Infinity",
        "tru",
        "truee",
        "nul",
        "True",
        "1 2",
        "\"a\u{1}\"",
        "\"a\tb\"",
        "\"a\nb\"",
        "\"\\x\"",
        "\"\\u12\"",
        "\"\\u123g\"",
        "\"\\ud800\"",
        "\"\\ud800x\"",
        "\"\\ud800\\n\"",
        "\"\\ud800\\u0041\"",
        "\"\\udc00\"",
        "\"\\",
        "[",
        "]",
        "[,1]",
        "[1,]",
        "[1,,2]",
        "{\"a\"}",
        "{1:2}",
        "{\"a\":}",
        "'a'",
        "\"\\ud800\\ud800\"",
    ] {
        // Inside a row, in what is wanted of it, and in what is passed over.
        for around in ["{\"a\":[@]}", "{\"a\":[{\"id\":@}]}", "{\"b\":@,\"a\":[]}", "{\"a\":[],\"b\":[[@]]}"] {
            unreadable(&reader, around.replace('@', wrong));
        }
        for around in ["@", "{\"id\":@}", "{\"x\":@}"].iter().filter(|_| !wrong.contains('\n')) {
            spoilt(&lines("", &COLUMNS), around.replace('@', wrong));
        }
    }
}

#[test]
fn what_is_json_is_read() {
    for (right, cell) in [
        ("-0", "-0"),
        ("0.0", "0.0"),
        ("1e999", "1e999"),
        ("-1.5E-07", "-1.5E-07"),
        ("123456789012345678901234567890.10", "123456789012345678901234567890.10"),
        ("\"\\ud83d\\ude00\\/\\b\\f\"", "\u{1f600}/\u{8}"),
        ("\"\u{7f}\u{10ffff}\"", "\u{7f}\u{10ffff}"),
        ("\"\"", ""),
        ("\"null\"", "null"),
    ] {
        let text = format!("\u{feff}\t[ {right} ]\r");
        assert_eq!(whole(&json("/*", &[".", "a"]), text).good(), [[cell, ""]], "{right}");
    }
}

#[test]
fn a_nul_that_is_escaped_spoils_its_row_where_it_is_wanted() {
    let seen = whole(&json("/*", &COLUMNS), r#"[{"id":"a\u0000"},{"id":"b","x":"\u0000"}]"#);
    assert_eq!((seen.good(), seen.unreadable()), (vec![vec!["b", "", ""]], vec![1]));
}

#[test]
fn nothing_nests_without_end() {
    let deep = |depth: usize| format!("{}{}", "[".repeat(depth), "]".repeat(depth));
    let reader = json("/a/*", &["id", "x/0/0", "../b"]);
    for around in ["{\"a\":[@]}", "{\"b\":{\"@\":@}}", "{\"a\":[],\"b\":[@]}", "{\"a\":[{\"x\":@}]}"] {
        let fits = around.replace('@', &deep(125));
        assert!(
            !matches!(try_read(&reader, fits.replace("\"[", "\"")), Err(FileFault::Unreadable(what)) if what.contains("128"))
        );
        let text = around.replace("\"@\"", "\"c\"").replace('@', &deep(100_000));
        says(&unreadable(&reader, text), &["128"]);
    }
    assert_eq!(whole(&json("/", &[".", "a"]), deep(128)).good().len(), 1);
    says(&unreadable(&json("/", &[".", "a"]), deep(129)), &["128", "column 129"]);
    let far = format!("/{}", "*/".repeat(200));
    says(&unreadable(&json(&far, &[".", "a"]), deep(300)), &["128"]);
    says(&spoilt(&lines("", &COLUMNS), deep(10_000)), &["128"]);
}

#[test]
fn a_document_of_one_number_may_have_lost_digits() {
    let mut reader = json("/", &[".", "a"]);
    assert_eq!(whole(&reader, "12").rows[0].fault, Some(RowFault::Unfinished));
    assert_eq!(whole(&reader, "12\n").rows[0].fault, None);
    assert_eq!(whole(&reader, "\"12\"").rows[0].fault, None);
    reader.last_line = LastLine::Whole;
    assert_eq!(whole(&reader, "12").good(), [["12", ""]]);
}

#[test]
fn every_encoding_is_read() {
    let text = "{\"é\":\"ü\",\r\n \"a\":[{\"id\":\"µ𝄞\",\"kg\":1},\r{\"id\":\"é\"}]}";
    let check = |reader: &Reader, bytes: Vec<u8>, encode: &dyn Fn(&str) -> Vec<u8>| {
        let seen = whole(reader, &bytes);
        assert_eq!(seen.rows.iter().map(|row| row.line).collect::<Vec<_>>(), [2, 3]);
        assert_eq!(seen.rows[1].cells[0], "é");
        for row in seen.rows {
            let (start, end) = row.bytes.unwrap();
            assert_eq!(bytes[start as usize..end as usize], encode(&row.raw));
        }
    };
    let mut reader = json("/a/*", &COLUMNS);
    check(&reader, text.into(), &|text| text.into());
    check(&reader, format!("\u{feff}{text}").into(), &|text| text.into());
    for little in [true, false] {
        let encode = |text: &str| utf16(text, little, false);
        check(&reader, utf16(text, little, true), &encode);
        let mut named = reader.clone();
        named.encoding = label(if little { "utf-16le" } else { "utf-16be" });
        check(&named, utf16(text, little, false), &encode);
        check(&named, utf16(text, little, true), &encode);
        says(&unreadable(&named, utf16(text, !little, true)), &["byte-order mark"]);
        says(&unreadable(&reader, utf16("{\"a\":[]}", little, false)), &["NUL"]);
    }
    for (name, text) in [("windows-1252", text.replace('𝄞', "ß")), ("gb18030", text.into()), ("shift_jis", jis(text))]
    {
        reader.encoding = label(name);
        let encoding = encoding_rs::Encoding::for_label(name.as_bytes()).unwrap();
        let encode = |text: &str| encoding.encode(text).0.into_owned();
        if name != "shift_jis" {
            check(&reader, encode(&text), &encode);
        } else {
            let seen = whole(&reader, encode(&text));
            assert_eq!(seen.rows[0].cells[0], "ポソ");
        }
    }
}

fn jis(text: &str) -> String {
    text.replace(['é', 'ü'], "ポ").replace("µ𝄞", "ポソ")
}

#[test]
fn bytes_that_say_nothing_are_named() {
    let mut reader = json("/*", &COLUMNS);
    let bytes = b"[{},\r\n {\"id\":\"m\xE4n\"}]";
    says(&unreadable(&reader, bytes), &["line 2", "offset 15", "UTF-8", "encoding"]);
    reader.encoding = label("utf-8");
    says(&unreadable(&reader, bytes), &["line 2, column 10", "offset 15", "not UTF-8"]);
    says(&unreadable(&reader, &bytes[..16]), &["line 2, column 10", "not UTF-8"]);
    // What is wrong before it is said first.
    says(&unreadable(&reader, b"[{},,\xFF"), &["column 5", "\",\" stands"]);
    reader.encoding = label("utf-16le");
    let mut bytes = utf16("[\"a", true, false);
    bytes.extend([0x00, 0xDC]);
    bytes.extend(utf16("b\"]", true, false));
    says(&unreadable(&reader, &bytes), &["column 4", "offset 6", "not UTF-16LE"]);
    reader.encoding = label("windows-1252");
    assert_eq!(whole(&reader, b"[{\"id\":\"m\xE4n\"}]").good(), [["män", "", ""]]);
}

#[test]
fn too_large_a_row_is_a_fault_and_anything_larger_is_passed_over() {
    let large = "x".repeat((16 << 20) + 1);
    let reader = json("/a/*", &COLUMNS);
    let read = |text: String| read_all(&reader, &text.into_bytes());
    for text in [format!("{{\"a\":[{{}},\"{large}\"]}}"), format!("{{\"{large}\":1,\"a\":[]}}")] {
        assert!(matches!(read(text), Err(FileFault::TooLarge(what)) if what.contains("16 MiB")));
    }
    // It need not end for that: no more than this is kept.
    assert!(matches!(read(format!("{{\"a\":[\"{large}{large}")), Err(FileFault::TooLarge(_))));
    let passed = format!("{{\"b\":\"{large}\",\"c\":[{{\"{large}\":{}}}],\"a\":[{{\"id\":1}}]}}", "7".repeat(17 << 20));
    assert_eq!(read(passed).unwrap().good(), [["1", "", ""]]);
    let outer = json("/a/*", &["id", "../b", "x"]);
    let text = format!("{{\"b\":\"{large}\",\"a\":[{{\"id\":1}}]}}").into_bytes();
    assert!(matches!(read_all(&outer, &text), Err(FileFault::TooLarge(_))));
    // Many texts that are each small enough.
    let one = format!("{{\"b\":\"{}\",\"a\":[1]}}", "y".repeat(5 << 20));
    let text = format!("[{}]", vec![one; 13].join(","));
    let outer = json("/*/a/*", &["id", "../b", "x"]);
    assert!(matches!(read_all(&outer, &text.into_bytes()), Err(FileFault::TooLarge(what)) if what.contains("64 MiB")));
}

#[test]
fn each_line_stands_alone() {
    let text = "\u{feff}{\"id\":\"S1\",\"kg\":0.10}\r\n\r\n  {\"id\":\"S2\"}\t\r{\"id\":\n \t\n{\"id\":\"S3\"}}\n[1]\n{\"id\":\"S4\"}";
    let seen = whole(&lines("", &COLUMNS), text);
    assert_eq!(seen.good(), [["S1", "", "0.10"], ["S2", "", ""], ["", "", ""], ["S4", "", ""]]);
    assert_eq!(seen.rows.iter().map(|row| row.line).collect::<Vec<_>>(), [1, 3, 4, 6, 7, 8]);
    assert_eq!((seen.unreadable(), seen.counts.blank, seen.lines), (vec![4, 6], 2, 8));
    let [(_, RowFault::Unreadable(cut)), (_, RowFault::Unreadable(more))] = seen.faults()[..] else { panic!() };
    says(cut, &["line 4, column 7", "the line ends", "cut off"]);
    says(more, &["line 6, column 12", "more text"]);
    for row in &seen.rows {
        let (start, end) = row.bytes.unwrap();
        assert_eq!(&text[start as usize..end as usize], row.raw);
    }
}

#[test]
fn a_last_line_may_be_cut() {
    let last = |text: &str, last_line| {
        let mut reader = lines("", &[".", "hr"]);
        reader.last_line = last_line;
        let seen = whole(&reader, format!("{{\"hr\":60}}\n{text}"));
        seen.rows[1].fault.clone()
    };
    let unreadable = |fault: Option<RowFault>| matches!(fault, Some(RowFault::Unreadable(_)));
    for whole in [LastLine::Finished, LastLine::Whole] {
        assert!(unreadable(last("{\"hr\": 6", whole)));
        assert!(unreadable(last("tru", whole)));
        assert!(unreadable(last("\"12", whole)));
        for complete in ["{\"hr\": 61}", "true", "\"12\"", "[12]", "12\n", "12 ", "null"] {
            assert_eq!(last(complete, whole), None, "{complete}");
        }
    }
    assert_eq!(last("12", LastLine::Finished), Some(RowFault::Unfinished));
    assert_eq!(last("12", LastLine::Whole), None);
}

#[test]
fn a_line_may_hold_several_rows() {
    let reader = lines("/r/*", &["id", "../at", "kg"]);
    let text = "{\"r\":[{\"id\":1},{\"id\":2}],\"at\":\"a\"}\n{\"r\":[]}\n\n{\"x\":[]}\n {\"at\":\"b\",\"r\":{\"k\":{\"id\":3}}} \n{\"at\":\"c\",\"r\":[{\"id\":4},{\"id\":]}\n";
    let seen = whole(&reader, text);
    assert_eq!(seen.good(), [["1", "a", ""], ["2", "a", ""], ["3", "", ""]]);
    assert_eq!((seen.unreadable(), seen.counts.blank, seen.lines), (vec![4, 6], 2, 7));
    let Some(RowFault::Unreadable(what)) = &seen.rows[2].fault else { panic!() };
    says(what, &["\"/r/*\"", "line 4", "no key \"r\"", "\"x\""]);
    // Each begins where it stands, and ends with the line's value: it was not whole before that was.
    assert_eq!(seen.rows[..2].iter().map(|row| row.bytes).collect::<Vec<_>>(), [Some((6, 34)), Some((15, 34))]);
    assert_eq!(seen.rows[1].raw, "{\"id\":2}");
}

#[test]
fn a_row_of_a_line_that_does_not_lie_deep_enough_is_a_fault_of_its_own() {
    let seen =
        whole(&lines("/*/*", &["id", "../../at", "kg"]), "{\"a\":[{\"id\":1}],\"at\":7,\"b\":{\"k\":{\"id\":2}}}\n");
    assert_eq!((seen.good(), seen.unreadable(), seen.lines), (vec![vec!["2", "7", ""]], vec![1], 2));
}

#[test]
fn lines_are_ignored_by_how_they_read() {
    let mut reader = lines("/*", &[".", "x"]);
    reader.ignore = vec![Ignore::Line(regex("^#")), ignore_equals(".", "QC")];
    let seen = whole(&reader, "# made by hand\n[1,\"QC\"]\n[\"QC\"]\n[]\n\u{1a}");
    assert_eq!(seen.good(), [["1", ""]]);
    assert_eq!((seen.counts.ignored, seen.counts.blank, seen.lines), (3, 2, 6));
}

#[test]
fn a_line_that_is_too_long_or_no_text_is_a_fault_of_its_own() {
    let long = format!("{{\"id\":\"{}\"}}", "x".repeat(3 << 20));
    let bytes = format!("{{\"id\":1}}\n{long}\n{{\"id\":2}}\n").into_bytes();
    let seen = read_all(&lines("", &COLUMNS), &bytes).unwrap();
    assert_eq!((seen.good().len(), seen.unreadable(), seen.lines), (2, vec![2], 3));
    let mut reader = lines("", &COLUMNS);
    let bytes = b"{\"id\":1}\n{\"id\":\"\xE4\"}\n{\"id\":\"\0\"}\n{\"id\":2}\n";
    says(&unreadable(&reader, bytes), &["line 2", "offset 16", "encoding"]);
    reader.encoding = label("utf-8");
    let seen = whole(&reader, bytes);
    assert_eq!((seen.good().len(), seen.unreadable()), (2, vec![2, 3]));
}

#[test]
fn lines_of_utf16_stand_where_they_say() {
    let text = "{\"id\":\"𝄞\"}\r\n[[1],[\"é\"]] \n";
    let bytes = utf16(text, true, true);
    let seen = whole(&lines("", &[".", "id"]), &bytes);
    for row in &seen.rows {
        let (start, end) = row.bytes.unwrap();
        assert_eq!(bytes[start as usize..end as usize], utf16(&row.raw, true, false));
    }
    let seen = whole(&lines("/*", &["0", "id"]), utf16("{}\n[[1],[\"é\"]] \n", true, true));
    assert_eq!(seen.rows.iter().map(|row| row.bytes).collect::<Vec<_>>(), [Some((10, 30)), Some((18, 30))]);
    assert_eq!(seen.good(), [["1", ""], ["é", ""]]);
}

mod whatever_the_bytes {
    use proptest::prelude::*;
    use serde_json::Value;

    use super::*;

    /// A document as it is written: numbers as texts, members in an order of their own.
    #[derive(Debug, Clone)]
    enum Written {
        Word(&'static str),
        Number(String),
        Text(String),
        List(Vec<Written>),
        Object(Vec<(String, Written)>),
    }

    impl Written {
        fn get(&self, path: &[&str]) -> Option<&Written> {
            let Some((first, rest)) = path.split_first() else { return Some(self) };
            let child = match self {
                Self::List(items) => items.get(first.parse::<usize>().ok()?),
                Self::Object(members) => members.iter().find(|(key, _)| key == first).map(|(_, value)| value),
                _ => None,
            };
            child?.get(rest)
        }

        /// What is to stand in a cell; `None` for what has no text of its own.
        fn cell(&self) -> Option<String> {
            match self {
                Self::Word(word) => Some(if *word == "null" { String::new() } else { (*word).to_owned() }),
                Self::Number(number) => Some(number.clone()),
                Self::Text(text) => Some(text.trim().to_owned()),
                Self::List(_) | Self::Object(_) => None,
            }
        }
    }

    fn number() -> impl Strategy<Value = Written> {
        "-?(0|[1-9][0-9]{0,12})(\\.[0-9]{1,6})?([eE][+-]?[0-9]{1,2})?".prop_map(Written::Number)
    }

    fn text() -> impl Strategy<Value = String> {
        "([ -~]|[\n\t\r\u{1}\u{7f}\u{2028}\u{feff}éµ𝄞\u{301}]){0,8}"
            .prop_filter("a NUL is another matter", |text| !text.contains('\0'))
    }

    fn scalar() -> impl Strategy<Value = Written> {
        let words = prop::sample::select(vec!["true", "false", "null"]).prop_map(Written::Word);
        prop_oneof![words, number(), text().prop_map(Written::Text)]
    }

    fn key() -> impl Strategy<Value = String> {
        prop_oneof![
            prop::sample::select(vec!["id", "at", "kg", "rows", "date", "0", "1", "a", "b"]).prop_map(str::to_owned),
            "[a-d\"\\\\µ]{1,2}"
        ]
    }

    fn object(value: impl Strategy<Value = Written>) -> impl Strategy<Value = Written> {
        prop::collection::vec((key(), value), 0..7).prop_map(|members| {
            let mut once: Vec<(String, Written)> = vec![];
            for (key, value) in members {
                if once.iter().all(|(known, _)| *known != key) {
                    once.push((key, value));
                }
            }
            Written::Object(once)
        })
    }

    fn anything() -> impl Strategy<Value = Written> {
        scalar().prop_recursive(4, 24, 6, |inner| {
            prop_oneof![prop::collection::vec(inner.clone(), 0..5).prop_map(Written::List), object(inner)]
        })
    }

    /// `{…, "sessions": [{…, "date": …, "rows": […], …}, …], …}`, with the members of every object in any order.
    fn document() -> impl Strategy<Value = Written> {
        let session = (prop::collection::vec(anything(), 0..5), object(anything()), any::<prop::sample::Index>());
        let session = session.prop_map(|(rows, rest, at)| with(rest, "rows", Written::List(rows), at));
        let rest = (prop::collection::vec(session, 0..4), object(anything()), any::<prop::sample::Index>());
        rest.prop_map(|(sessions, rest, at)| with(rest, "sessions", Written::List(sessions), at))
    }

    fn with(object: Written, key: &str, value: Written, at: prop::sample::Index) -> Written {
        let Written::Object(mut members) = object else { return object };
        members.retain(|(known, _)| known != key);
        members.insert(at.index(members.len() + 1), (key.to_owned(), value));
        Written::Object(members)
    }

    /// Writes a document with white space and escapes as `chance` has it.
    struct Writer<'a> {
        text: String,
        chance: std::iter::Cycle<std::slice::Iter<'a, u8>>,
        /// Line ends may stand in it.
        lines: bool,
    }

    impl Writer<'_> {
        fn write(written: &Written, chance: &[u8], lines: bool) -> String {
            let mut writer = Writer { text: String::new(), chance: chance.iter().cycle(), lines };
            writer.space();
            writer.value(written);
            writer.space();
            writer.text
        }

        fn next(&mut self) -> u8 {
            self.chance.next().copied().unwrap_or_default()
        }

        fn space(&mut self) {
            let spaces: &[&str] = if self.lines {
                &["", "", "", " ", "\n", "\r", "\r\n", "\t ", "\r\r\n\n"]
            } else {
                &["", "", " ", "\t "]
            };
            let space = spaces[usize::from(self.next()) % spaces.len()];
            self.text.push_str(space);
        }

        fn mark(&mut self, mark: &str) {
            self.space();
            self.text.push_str(mark);
            self.space();
        }

        fn value(&mut self, written: &Written) {
            match written {
                Written::Word(word) => self.text.push_str(word),
                Written::Number(number) => self.text.push_str(number),
                Written::Text(text) => self.string(text),
                Written::List(items) => {
                    self.mark("[");
                    for (index, item) in items.iter().enumerate() {
                        if index > 0 {
                            self.mark(",");
                        }
                        self.value(item);
                    }
                    self.mark("]");
                }
                Written::Object(members) => {
                    self.mark("{");
                    for (index, (key, value)) in members.iter().enumerate() {
                        if index > 0 {
                            self.mark(",");
                        }
                        self.string(key);
                        self.mark(":");
                        self.value(value);
                    }
                    self.mark("}");
                }
            }
        }

        fn string(&mut self, text: &str) {
            self.text.push('"');
            for character in text.chars() {
                if self.next().is_multiple_of(8) || character.is_ascii_control() || matches!(character, '"' | '\\') {
                    for unit in character.encode_utf16(&mut [0; 2]) {
                        self.text.push_str(&format!("\\u{unit:04x}"));
                    }
                } else {
                    self.text.push(character);
                }
            }
            self.text.push('"');
        }
    }

    fn chance() -> impl Strategy<Value = Vec<u8>> {
        prop::collection::vec(any::<u8>(), 1..40)
    }

    const WANTED: [&str; 7] = [".", "id", "kg", "a/b", "b/1/kg", "../date", "../../a/1"];

    /// The cells that the rows of `sessions` are to have; of values without a text of their own only that they are some.
    fn expected(document: &Written) -> Vec<Vec<Option<String>>> {
        let list = |written: Option<&Written>| match written {
            Some(Written::List(items)) => items.clone(),
            _ => vec![],
        };
        let mut rows = vec![];
        for session in list(document.get(&["sessions"])) {
            for row in list(session.get(&["rows"])) {
                let found = WANTED.map(|path| {
                    let (from, path) = match path.strip_prefix("../../") {
                        Some(path) => (document, path),
                        None => path.strip_prefix("../").map_or((&row, path), |path| (&session, path)),
                    };
                    let steps: Vec<&str> = path.split('/').filter(|step| *step != ".").collect();
                    from.get(&steps).map_or(Some(String::new()), Written::cell)
                });
                rows.push(found.to_vec());
            }
        }
        rows
    }

    fn same(rows: &[Kept], expected: &[Vec<Option<String>>]) -> Result<(), TestCaseError> {
        prop_assert_eq!(rows.len(), expected.len());
        for (row, expected) in rows.iter().zip(expected) {
            prop_assert_eq!(&row.fault, &None);
            for (cell, expected) in row.cells.iter().zip(expected) {
                match expected {
                    Some(text) => prop_assert_eq!(cell, text),
                    None => prop_assert!(cell.starts_with(['[', '{']), "{}", cell),
                }
            }
        }
        Ok(())
    }

    fn nested() -> Reader {
        json("/sessions/*/rows/*", &WANTED)
    }

    /// Good documents that have all that a cut could break, with whether they are lines.
    fn samples() -> Vec<(Reader, Vec<u8>)> {
        let document = "{\"made\": [1, {\"é\": \"\\ud834\\udd1e\"}],\r\n\"sessions\": [\r{\"rows\": [{\"id\": \"µ\\n\", \"kg\": -1.50e+10}, [], true],\n \"date\": null}], \"a\": [0, 12]}\n \t";
        let body = "{\"id\": \"S1\", \"kg\": 61}\r\n\n{\"id\": [1, {\"x\": \"é\"}]}\r{\"kg\": 1.5, \"id\": \"S2\"}\n12\n\"x\"\n{\"id\": \"𝄞\\u00e9\"}\n";
        let several =
            "{\"r\": [{\"id\": 1}, {\"id\": 2}], \"at\": \"a\"}\n {\"r\": [3, 45], \"at\": \"é\"} \r\n{\"r\": []}\n";
        let within = lines("/r/*", &["id", "../at", "."]);
        let mut western = lines("", &COLUMNS);
        western.encoding = label("windows-1252");
        let latin = encoding_rs::WINDOWS_1252.encode(&body.replace('𝄞', "ß")).0.into_owned();
        vec![
            (nested(), document.into()),
            (nested(), utf16(document, true, true)),
            (json("/made/*", &[".", "é"]), document.into()),
            (json("/", &[".", "a/1"]), document.into()),
            (lines("", &COLUMNS), body.into()),
            (lines("", &[".", "id"]), format!("\u{feff}{body}").into()),
            (lines("", &COLUMNS), utf16(body, false, true)),
            (western, latin),
            (within.clone(), several.into()),
            (within, utf16(several, true, true)),
        ]
    }

    #[test]
    fn a_document_cut_anywhere_is_unreadable() {
        for (reader, bytes) in samples().into_iter().take(4) {
            assert!(whole(&reader, &bytes).faults().is_empty());
            let end = bytes.iter().rposition(|byte| *byte == b'}').unwrap() + 1;
            for cut in 0..end {
                let outcome = try_read(&reader, &bytes[..cut]);
                assert!(matches!(outcome, Err(FileFault::Unreadable(_))), "{outcome:?} at {cut}");
            }
        }
    }

    #[test]
    fn lines_cut_anywhere_give_the_rows_before_the_cut() {
        for (reader, bytes) in samples().into_iter().skip(4) {
            let all = whole(&reader, &bytes);
            assert!(all.faults().is_empty());
            for cut in 0..bytes.len() {
                // A mark that is cut is no mark, and nobody knows the encoding then.
                let Ok(seen) = try_read(&reader, &bytes[..cut]) else {
                    assert!(cut < 4);
                    continue;
                };
                let good: Vec<&Kept> = seen.rows.iter().filter(|row| row.fault.is_none()).collect();
                assert!(seen.rows.len() - good.len() <= 1, "{seen:?}");
                assert!(good.iter().zip(&all.rows).all(|(one, other)| **one == *other), "{seen:?} at {cut}");
                // Each line that is whole has given all its rows (blanks, and half a code unit, may follow its value).
                let whole = all.rows.iter().filter(|row| row.bytes.unwrap().1 + 4 <= cut as u64).count();
                assert!(good.len() >= whole, "{seen:?} at {cut}");
            }
        }
    }

    fn any_reader() -> impl Strategy<Value = Reader> {
        let rows = prop::sample::select(vec!["", "/", "/*", "/a/*", "/*/*", "/0/a", "/a/*/b/*"]);
        let outer = prop::sample::select(vec!["x", "../a", "../../b/0", "."]);
        let encoding = prop::sample::select(vec!["auto", "utf-8", "utf-16le", "windows-1252", "iso-2022-jp", "big5"]);
        (rows, outer, encoding, any::<bool>(), any::<bool>()).prop_map(|(rows, outer, encoding, one, finished)| {
            let columns = ["id", outer, "a"];
            let mut reader = if one { json(rows, &columns) } else { lines(rows, &columns) };
            if encoding != "auto" {
                reader.encoding = label(encoding);
            }
            if !finished {
                reader.last_line = LastLine::Whole;
            }
            reader
        })
    }

    /// Places of rows rise; lines never fall.
    fn in_order(seen: &Whole) -> Result<(), TestCaseError> {
        for pair in seen.rows.windows(2) {
            prop_assert!(pair[0].bytes.unwrap().0 < pair[1].bytes.unwrap().0 && pair[0].line <= pair[1].line);
        }
        Ok(())
    }

    proptest! {
        #![proptest_config(ProptestConfig::with_cases(400))]

        #[test]
        fn random_bytes_do_no_harm(reader in any_reader(), bytes in prop::collection::vec(any::<u8>(), 0..200)) {
            if let Ok(seen) = try_read(&reader, &bytes) {
                in_order(&seen)?;
            }
        }

        #[test]
        fn random_marks_do_no_harm(reader in any_reader(), body in "([{}\\[\\],:\" \n\r0-9e.ab-]|\"id\":|\"a\":|\\{\"a\":\\[|\\[\\{|1,|\\},|null|\\\\u00e9|µ){0,60}") {
            if let Ok(seen) = try_read(&reader, &body) {
                in_order(&seen)?;
            }
        }

        #[test]
        fn mutated_exports_do_no_harm(
            which in 0..10_usize,
            edits in prop::collection::vec((any::<prop::sample::Index>(), any::<u8>(), 0..4_u8), 1..6),
        ) {
            let (reader, mut bytes) = samples().swap_remove(which);
            for (at, byte, kind) in edits {
                let at = at.index(bytes.len());
                match kind {
                    0 => bytes[at] = byte,
                    1 => bytes.insert(at, byte),
                    2 => bytes.insert(at, b"{}[],:\"\\ \r\n0-e"[usize::from(byte) % 14]),
                    _ => drop(bytes.remove(at)),
                }
            }
            if let Ok(seen) = try_read(&reader, &bytes) {
                in_order(&seen)?;
            }
        }

        /// What is taken for JSON is what another reader takes for it.
        #[test]
        fn what_is_json_is_agreed_upon(
            document in anything(),
            chance in chance(),
            edits in prop::collection::vec((any::<prop::sample::Index>(), any::<prop::sample::Index>(), 0..3_u8), 0..3),
        ) {
            let mut text: Vec<char> = Writer::write(&document, &chance, true).chars().collect();
            let pool: Vec<char> = "{}[],:\"\\ \r\n\t01-+.eEudD8afntx\0\u{1}é".chars().collect();
            for (at, pick, kind) in edits {
                let (at, pick) = (at.index(text.len()), *pick.get(&pool));
                match kind {
                    0 => text[at] = pick,
                    1 => text.insert(at, pick),
                    _ if text.len() > 1 => drop(text.remove(at)),
                    _ => {}
                }
            }
            let text: String = text.into_iter().collect();
            let outcome = try_read(&json("/", &["id", "a"]), &text);
            match serde_json::from_str::<Value>(&text) {
                Ok(_) => prop_assert!(outcome.is_ok(), "{:?} of {:?}", outcome, text),
                Err(fault) if fault.to_string().contains("out of range") => {}
                Err(fault) => prop_assert!(matches!(outcome, Err(FileFault::Unreadable(_))), "{} in {:?}", fault, text),
            }
        }

        #[test]
        fn rows_are_what_was_written(document in document(), chance in chance()) {
            let text = Writer::write(&document, &chance, true);
            let seen = whole(&nested(), &text);
            same(&seen.rows, &expected(&document))?;
            for row in &seen.rows {
                let (start, end) = row.bytes.unwrap();
                let (start, end) = (start as usize, end as usize);
                prop_assert_eq!(&row.raw, &text[start..end]);
                let ends = text[..start].replace("\r\n", "\n").matches(['\r', '\n']).count();
                prop_assert_eq!(row.line, 1 + ends as u64);
            }
            // Another reader finds the same rows at the same places.
            let value: Value = serde_json::from_str(&text).unwrap();
            let sessions = value["sessions"].as_array().unwrap().iter();
            let rows: Vec<&Value> = sessions.flat_map(|session| session["rows"].as_array().unwrap()).collect();
            prop_assert_eq!(rows.len(), seen.rows.len());
            for (row, value) in seen.rows.iter().zip(rows) {
                prop_assert_eq!(&serde_json::from_str::<Value>(&row.raw).unwrap(), value);
            }
        }

        #[test]
        fn rows_of_lines_are_what_was_written(
            documents in prop::collection::vec((document(), chance()), 1..4),
            ending in prop::sample::select(vec!["\n", "\r", "\r\n"]),
        ) {
            let mut text = String::new();
            let mut rows = vec![];
            for (document, chance) in &documents {
                text.push_str(&Writer::write(document, chance, false));
                text.push_str(ending);
                rows.extend(expected(document));
            }
            let reader = lines("/sessions/*/rows/*", &WANTED);
            let seen = whole(&reader, &text);
            same(&seen.rows, &rows)?;
            let blank = documents.iter().filter(|(document, _)| expected(document).is_empty()).count() as u64;
            prop_assert_eq!((seen.counts.blank, seen.lines), (blank, blank + rows.len() as u64));
        }

        #[test]
        fn a_random_document_cut_anywhere_is_unreadable(document in document(), chance in chance(), cut in any::<prop::sample::Index>()) {
            let text = Writer::write(&document, &chance, true);
            let cut = cut.index(text.trim_end().len());
            let outcome = try_read(&nested(), &text.as_bytes()[..cut]);
            prop_assert!(matches!(outcome, Err(FileFault::Unreadable(_))), "{:?}", outcome);
        }
    }
}

/// How fast rows go through, beside a reader that keeps everything or nothing, and how much memory that takes:
/// `cargo test --release -p revisant-daemon --test read_json -- --ignored --nocapture`.
#[test]
#[ignore = "a measurement, not a check"]
fn throughput() {
    use std::io::{BufRead, BufReader, Write};
    use std::time::Instant;

    struct File(tempfile::NamedTempFile);

    impl Bytes for File {
        fn open(&self) -> std::io::Result<Box<dyn Read + '_>> {
            Ok(Box::new(self.0.reopen()?))
        }
    }

    let peak = || {
        let status = std::fs::read_to_string("/proc/self/status").unwrap_or_default();
        status.lines().find(|line| line.starts_with("VmHWM")).unwrap_or("VmHWM unknown").to_owned()
    };
    let made = |begin: &str, between: &str, end: &str| {
        let mut file = std::io::BufWriter::new(tempfile::NamedTempFile::new().unwrap());
        write!(file, "{begin}").unwrap();
        for row in 0..800_000 {
            let between = if row == 0 { "" } else { between };
            let (subject, day, value) = (row % 900, row % 28 + 1, row % 70);
            write!(file, "{between}{{\"who\": \"FH-{subject:04}\", \"occasion\": {}, \"start\": \"2025-07-{day:02}T06:05:30\", \"hr\": {value}.50, \"rmssd\": 0.0765, \"battery\": {{\"v\": 3.1, \"low\": false}}}}", row % 3).unwrap();
        }
        write!(file, "{end}").unwrap();
        File(file.into_inner().unwrap())
    };
    let took = |name: &str, begun: Instant, count: u64| {
        println!("{name}: {count} rows, {:?}, {}", begun.elapsed(), peak());
    };
    let columns = ["who", "start", "occasion", "hr", "rmssd"];
    let document = made("{\"sessions\": [{\"trials\": [", ",\n ", "], \"date\": \"x\"}]}");
    let body = made("", "\n", "\n");
    println!(
        "{} bytes, {} bytes",
        document.0.as_file().metadata().unwrap().len(),
        body.0.as_file().metadata().unwrap().len()
    );
    let outer = ["who", "start", "occasion", "hr", "rmssd", "../date"];
    for encoding in ["auto", "utf-8"] {
        for (name, mut reader, bytes) in [
            ("document", json("/sessions/*/trials/*", &columns), &document),
            ("document with what encloses", json("/sessions/*/trials/*", &outer), &document),
            ("document, nothing but passed over", json("/sessions/0/date", &columns), &document),
            ("lines", lines("", &columns), &body),
        ] {
            if encoding != "auto" {
                reader.encoding = label(encoding);
            }
            let begun = Instant::now();
            let mut rows = read::open(&reader, bytes).unwrap();
            let (mut row, mut count) = (Row::default(), 0);
            while rows.next_row(&mut row).unwrap() {
                count += 1;
            }
            took(&format!("{name}, encoding {encoding}"), begun, count);
        }
    }
    let begun = Instant::now();
    let _: serde::de::IgnoredAny = serde_json::from_reader(BufReader::new(document.open().unwrap())).unwrap();
    took("serde_json, document from a reader, ignored", begun, 0);
    let begun = Instant::now();
    let mut count = 0;
    for line in BufReader::new(body.open().unwrap()).lines() {
        let value: serde_json::Value = serde_json::from_str(&line.unwrap()).unwrap();
        count += u64::from(value.is_object());
    }
    took("serde_json, lines as values", begun, count);
    let begun = Instant::now();
    let text = std::fs::read_to_string(document.0.path()).unwrap();
    let _: serde::de::IgnoredAny = serde_json::from_str(&text).unwrap();
    took("serde_json, document in memory, ignored", begun, 0);
    let begun = Instant::now();
    let value: serde_json::Value = serde_json::from_str(&text).unwrap();
    took("serde_json, document in memory, as a value", begun, u64::from(value.is_object()));
}
