//! Delimited exports: one sample for each thing that instruments do, and what must hold whatever the bytes are.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic, missing_docs)]

mod read_common;

use read_common::{Whole, ignore_equals, label, physical_lines, read_all, reader, regex, starts_with};
use revisant_daemon::intake::read::{self, FileFault, LineCounts, Row, RowFault};
use revisant_schema::plan::{Header, Ignore, LastLine, Reader};

const COLUMNS: [&str; 3] = ["id", "at", "kg"];

fn plain() -> Reader {
    reader(Some(b','), &COLUMNS)
}

fn whole(reader: &Reader, text: impl AsRef<[u8]>) -> Whole {
    read_all(reader, &text.as_ref().to_vec()).unwrap()
}

fn layout(reader: &Reader, text: &str) -> String {
    match read_all(reader, &text.as_bytes().to_vec()) {
        Err(FileFault::Layout(what)) => what,
        other => panic!("{other:?}"),
    }
}

fn unreadable(reader: &Reader, bytes: &[u8]) -> String {
    match read_all(reader, &bytes.to_vec()) {
        Err(FileFault::Unreadable(what)) => what,
        other => panic!("{other:?}"),
    }
}

fn utf16(text: &str, little: bool, mark: bool) -> Vec<u8> {
    let marked = if mark { format!("\u{feff}{text}") } else { text.to_owned() };
    marked.encode_utf16().flat_map(|unit| if little { unit.to_le_bytes() } else { unit.to_be_bytes() }).collect()
}

#[test]
fn a_plain_table_is_read() {
    let seen = whole(&plain(), "at,note,id,kg\n2025-03-01,x,S1,3.5\n2025-03-02,,S2,4\n");
    assert_eq!(seen.good(), [["S1", "2025-03-01", "3.5"], ["S2", "2025-03-02", "4"]]);
    assert_eq!(seen.counts, LineCounts { header: 1, ..LineCounts::default() });
    assert_eq!((seen.lines, seen.rows[1].line, seen.rows[1].bytes), (3, 3, Some((34, 50))));
    assert_eq!(seen.rows[1].raw, "2025-03-02,,S2,4");
}

#[test]
fn line_ends_may_be_mixed() {
    let seen = whole(&plain(), "id,at,kg\r\nS1,a,1\rS2,b,2\nS3,c,3\r\r\nS4,d,4\r");
    assert_eq!(seen.rows.iter().map(|row| row.line).collect::<Vec<_>>(), [2, 3, 4, 6]);
    assert_eq!((seen.counts.blank, seen.lines), (1, 6));
}

#[test]
fn a_preamble_and_a_footer_surround_the_table() {
    let mut reader = reader(Some(b';'), &["Code", "Datum", "Kraft (kg)"]);
    reader.header = starts_with("Code");
    reader.stop_at = Some(regex("^Ende der Liste"));
    reader.encoding = label("windows-1252");
    let text = "Gerät: Handkraft\r\nPrüfer: BÄ;;\r\n\r\nCode;Datum;Kraft (kg)\r\nP1;11.03.2025;30,9\r\nEnde der Liste\r\nP9;x;9\r\n";
    let bytes = encoding_rs::WINDOWS_1252.encode(text).0.into_owned();
    let seen = whole(&reader, &bytes);
    assert_eq!(seen.good(), [["P1", "11.03.2025", "30,9"]]);
    assert_eq!(seen.counts, LineCounts { preamble: 3, header: 1, footer: 2, ..LineCounts::default() });
    let rows = read::open(&reader, &bytes).unwrap();
    assert_eq!((rows.preamble("Prüfer"), rows.preamble("Gerät")), (Some("BÄ"), Some("Handkraft")));
    let (start, end) = seen.rows[0].bytes.unwrap();
    assert_eq!(&bytes[start as usize..end as usize], b"P1;11.03.2025;30,9");
}

#[test]
fn utf16_is_read_either_way() {
    let text = "id\tat\tkg µ\r\nS1\tzwölf\t3\r\n\"S\n2\"\ta\t4\r\n";
    let reader = reader(Some(b'\t'), &["id", "at", "kg \u{3bc}"]);
    for little in [true, false] {
        let bytes = utf16(text, little, true);
        let seen = whole(&reader, &bytes);
        assert_eq!(seen.good(), [["S1", "zwölf", "3"], ["S\n2", "a", "4"]]);
        assert_eq!((seen.rows[1].line, seen.rows[1].lines, seen.lines), (3, 2, 4));
        let (start, end) = seen.rows[1].bytes.unwrap();
        assert_eq!(bytes[start as usize..end as usize], utf16("\"S\n2\"\ta\t4", little, false));
        let mut named = reader.clone();
        named.encoding = label(if little { "utf-16le" } else { "utf-16be" });
        assert_eq!(whole(&named, utf16(text, little, false)).good(), seen.good());
        assert_eq!(whole(&named, &bytes).good(), seen.good());
        assert!(unreadable(&named, &utf16(text, !little, true)).contains("byte-order mark"));
    }
}

#[test]
fn half_a_code_unit_at_the_end_is_a_fault_of_its_line() {
    let reader = reader(Some(b'\t'), &COLUMNS);
    let mut bytes = utf16("id\tat\tkg\nS1\ta\t3\n", true, true);
    bytes.push(b'S');
    let seen = whole(&reader, &bytes);
    assert_eq!((seen.good().len(), seen.unreadable(), seen.lines), (1, vec![3], 3));
}

#[test]
fn encodings_are_named_or_refused() {
    let mut reader = plain();
    let text = b"id,at,kg\nS1,m\xE4n,3\n";
    assert!(unreadable(&reader, text).contains("line 2"));
    reader.encoding = label("windows-1252");
    assert_eq!(whole(&reader, text).good(), [["S1", "män", "3"]]);
    reader.encoding = label("utf-8");
    let seen = whole(&reader, b"id,at,kg\nS1,m\xE4n,3\nS2,a,4\n");
    assert_eq!((seen.good(), seen.unreadable()), (vec![vec!["S2", "a", "4"]], vec![2]));
    let Some(RowFault::Unreadable(what)) = &seen.rows[0].fault else { panic!() };
    assert!(what.contains("offset 13"), "{what}");
    assert_eq!(seen.rows[0].cells, ["", "", ""]);
}

#[test]
fn a_preamble_in_another_encoding_does_no_harm_to_a_table_of_ascii() {
    let mut reader = plain();
    reader.header = starts_with("id");
    let text = b"Place: Ward 1\nTester: B\xE4\nid,at,kg\nS1,a,1\n".to_vec();
    let seen = whole(&reader, &text);
    assert_eq!((seen.good(), seen.counts.preamble), (vec![vec!["S1", "a", "1"]], 2));
    let rows = read::open(&reader, &text).unwrap();
    assert_eq!((rows.preamble("Place"), rows.preamble("Tester")), (Some("Ward 1"), None));
    // But not to any other table, even if it happens to be valid UTF-8.
    let what = unreadable(&reader, b"Tester: B\xE4\nid,at,kg\nS1,\xC3\xA4,1\n");
    assert!(what.contains("line 1") && what.contains("offset 9"), "{what}");
    // A header that cannot be decoded is no header.
    let mut named = reader.clone();
    named.encoding = label("utf-8");
    assert!(unreadable(&named, b"Tester\nid,at,kg,\xB5\nS1,a,1,2\n").contains("line 2"));
}

#[test]
fn multi_byte_encodings_hide_delimiters_inside_characters() {
    let mut reader = reader(Some(b'|'), &COLUMNS);
    reader.encoding = label("shift_jis");
    // The second byte of U+30DD is 0x7C, the bar.
    let bytes = encoding_rs::SHIFT_JIS.encode("id|at|kg\nS1|ポ|3\n").0.into_owned();
    assert!(bytes.iter().filter(|byte| **byte == b'|').count() > 4);
    assert_eq!(whole(&reader, &bytes).good(), [["S1", "ポ", "3"]]);
}

#[test]
fn a_mark_is_no_part_of_the_first_label() {
    for label in ["id", "\"id\""] {
        let seen = whole(&plain(), format!("\u{feff}{label},at,kg\nS1,a,1\n"));
        assert_eq!(seen.good(), [["S1", "a", "1"]]);
    }
    let mut reader = plain();
    reader.header = starts_with("id");
    assert_eq!(whole(&reader, "\u{feff}\"id\",at,kg\nS1,a,1\n").counts.header, 1);
}

#[test]
fn nul_bytes_are_no_text() {
    assert!(unreadable(&plain(), b"id,at\0,kg\nS1,a,1\n").contains("NUL"));
    assert!(unreadable(&plain(), &utf16("id,at,kg\nS1,a,1\n", true, false)).contains("NUL"));
    let seen = whole(&plain(), b"id,at,kg\nS1,\0a,1\nS2,b,2\n");
    assert_eq!((seen.unreadable(), seen.good().len()), (vec![2], 1));
}

#[test]
fn quoted_cells_may_hold_anything() {
    let seen = whole(&plain(), "id,at,kg,note\nS1,\"a,b\",1,\"two\nlines, \"\"quoted\"\"\"\nS2,b,2,\n");
    assert_eq!(seen.good(), [["S1", "a,b", "1"], ["S2", "b", "2"]]);
    assert_eq!((seen.rows[0].lines, seen.rows[1].line, seen.lines), (2, 4, 4));
    assert_eq!(seen.rows[0].raw, "S1,\"a,b\",1,\"two\nlines, \"\"quoted\"\"\"");
}

#[test]
fn a_header_may_take_several_lines() {
    let quoted = reader(Some(b','), &["id", "at", "Concentration (ng/ul)"]);
    let seen = whole(&quoted, "id,at,\"Concentration\r\n(ng/ul)\"\r\nS1,a,1\r\n");
    assert_eq!((seen.good(), seen.counts.header), (vec![vec!["S1", "a", "1"]], 2));
    let mut double = reader(Some(b','), &["id", "at", "Grip left"]);
    double.header = Header::Row { row: 2, lines: 2 };
    let seen = whole(&double, "Clinic,,\nid,at,Grip\n,,left\nS1,a,1\n\nid,at,Grip\n,,left\nS2,b,2\n");
    assert_eq!(seen.good(), [["S1", "a", "1"], ["S2", "b", "2"]]);
    let counts = LineCounts { preamble: 1, header: 2, blank: 1, repeated_header: 2, ..LineCounts::default() };
    assert_eq!(seen.counts, counts);
    assert!(layout(&double, "Clinic\nid,at,Grip").contains("2 lines"));
}

#[test]
fn an_unclosed_quote_spoils_its_own_line_only() {
    let seen = whole(&plain(), "id,at,kg\nS1,a,1\nS2,\"b,2\nS3,c,3\nS4,d,4\n");
    assert_eq!((seen.unreadable(), seen.good().len(), seen.lines), (vec![3], 3, 5));
    // In the last column, too.
    let seen = whole(&plain(), "id,at,kg\nS1,a,1\nS2,b,\"2\nS3,c,3\nS4,d,4\n");
    assert_eq!((seen.unreadable(), seen.good().len()), (vec![3], 3));
}

#[test]
fn an_unclosed_quote_in_a_long_export_spoils_its_own_line_only() {
    let mut text = "id,at,kg\nS1,\"a,1\n".to_owned();
    (0..5000).for_each(|line| text.push_str(&format!("S{line},a,{line}\n")));
    let seen = whole(&plain(), &text);
    assert_eq!((seen.unreadable(), seen.good().len(), seen.lines), (vec![2], 5000, 5002));
}

#[test]
fn two_stray_quotes_do_not_swallow_what_stands_between() {
    let seen = whole(&plain(), "id,at,kg\nS1,\"a,1\nS2,b,2\nS3,\"c,3\nS4,d,4\n");
    assert_eq!((seen.unreadable(), seen.good().len()), (vec![2, 4], 2));
}

#[test]
fn lines_that_may_belong_to_a_cell_that_was_cut_are_held() {
    let seen = whole(&plain(), "id,at,kg,note\nS1,a,1,\"begins\nand goes on\nS2,b,2,x\n");
    assert_eq!((seen.unreadable(), seen.good().len()), (vec![2, 3], 1));
    // The quote's own line lacks cells, as the beginning of a row of several lines does.
    let seen = whole(&plain(), "id,at,kg\nS1,\"begins\nS2,b,2\nS3,c,3\n");
    assert_eq!((seen.unreadable(), seen.good().len()), (vec![2, 3, 4], 0));
}

#[test]
fn rows_that_two_stray_quotes_may_have_joined_are_held() {
    let seen = whole(&plain(), "id,at,kg\nS1,\"a,1\nS2,b\",2\nS3,c,3\n");
    assert_eq!((seen.unreadable(), seen.good().len(), seen.rows[0].lines), (vec![2], 1, 2));
}

#[test]
fn a_file_of_stray_quotes_is_read_in_linear_time() {
    let text = format!("id,at,kg\n{}", "S1,\"a\"\"\nx\"\"y\n".repeat(100_000));
    let begun = std::time::Instant::now();
    assert_eq!(whole(&plain(), &text).lines, 200_001);
    assert!(begun.elapsed().as_secs() < 30, "{:?}", begun.elapsed());
}

#[test]
fn text_after_a_closing_quote_spoils_its_own_line_only() {
    let seen = whole(&plain(), "id,at,kg\nS1,\"a\" b,1\nS2,b,2\n");
    assert_eq!((seen.unreadable(), seen.good().len()), (vec![2], 1));
}

#[test]
fn a_quote_inside_a_cell_is_a_character() {
    assert_eq!(whole(&plain(), "id,at,kg\nS1,5\" pipe,1\n").good(), [["S1", "5\" pipe", "1"]]);
}

#[test]
fn the_header_decides_about_the_delimiter() {
    let auto = reader(None, &COLUMNS);
    for delimiter in [",", ";", "\t", "|"] {
        let text = "id,at,kg\nS1,a,1\n".replace(',', delimiter);
        assert_eq!(whole(&auto, &text).good(), [["S1", "a", "1"]]);
    }
    assert!(layout(&auto, "id,at;kg\nS1,a;1\n").contains("no column \"kg\""));
    let single = reader(None, &["id", "id"]);
    assert!(layout(&single, "id\nS1\n").contains("more than one delimiter"));
}

#[test]
fn a_missing_or_doubled_column_is_named() {
    let what = layout(&plain(), "id,at,kilogram,weight kg\nS1,a,1,2\n");
    assert!(what.contains("no column \"kg\"") && what.contains("nearest"), "{what}");
    assert!(layout(&plain(), "id,at,kg,kg\nS1,a,1,2\n").contains("\"kg\" stands twice"));
    // Columns that the plan does not name may be doubled.
    assert_eq!(whole(&plain(), "x,id,at,x,kg\n9,S1,a,9,1\n").good(), [["S1", "a", "1"]]);
}

#[test]
fn a_header_that_is_not_there_is_sought_in_vain() {
    let mut reader = plain();
    reader.header = starts_with("Code");
    let what = layout(&reader, "Time;Channel 1\n0;1\n");
    assert!(what.contains("\"Code\"") && what.contains("Time;Channel 1"), "{what}");
    reader.header = Header::Row { row: 9, lines: 1 };
    assert!(layout(&reader, "a\nb\n").contains("line 9"));
    layout(&reader, "");
}

#[test]
fn without_a_header_columns_are_numbered() {
    let mut reader = reader(Some(b';'), &["1", "2", "4"]);
    reader.header = Header::None;
    let seen = whole(&reader, "\nS1;a;x;1\nS2;b\nS3;c;x;3;4\nS4;d;;4;\n");
    assert_eq!(seen.good(), [["S1", "a", "1"], ["S2", "b", ""], ["S4", "d", "4"]]);
    assert_eq!((seen.unreadable(), seen.counts.header, seen.counts.blank), (vec![4], 0, 1));
    assert!(layout(&reader, "S1;a;x\n").contains("no column \"4\""));
    reader.format = revisant_schema::plan::Format::Delimited { delimiter: None };
    assert_eq!(whole(&reader, "S1;a;x;1\n").good(), [["S1", "a", "1"]]);
    assert_eq!(whole(&reader, "").lines, 0);
    assert_eq!(whole(&reader, "\n\n").counts.blank, 2);
}

#[test]
fn units_are_read_under_the_header_and_under_its_repeats() {
    let mut reader = plain();
    reader.units_row = true;
    let text = "id,at,kg\n,,N\nS1,a,1\n\u{c}id,at,kg\n,,N\nS2,b,2\n".to_owned();
    let seen = whole(&reader, &text);
    assert_eq!(seen.good(), [["S1", "a", "1"], ["S2", "b", "2"]]);
    assert_eq!(seen.counts, LineCounts { header: 1, units: 2, repeated_header: 1, ..LineCounts::default() });
    let bytes = text.into_bytes();
    let rows = read::open(&reader, &bytes).unwrap();
    assert_eq!((rows.unit(0), rows.unit(2)), (Some(""), Some("N")));
    let bytes = b"id,at,kg".to_vec();
    assert_eq!(read::open(&reader, &bytes).unwrap().unit(2), Some(""));
    assert_eq!(read::open(&plain(), &bytes).unwrap().unit(2), None);
}

#[test]
fn rows_that_the_plan_ignores_are_counted() {
    let mut reader = plain();
    reader.ignore = vec![
        ignore_equals("kind", "QC"),
        Ignore::Matches { column: "id".into(), regex: regex("^X") },
        Ignore::Line(regex("^#")),
    ];
    let text = "id,at,kg,kind\nS1,a,1,\nQ1,a,1, QC \nX1,a,\"1\n2\",\n# a \"comment\nS2,b,2,QC2\n";
    let seen = whole(&reader, text);
    assert_eq!((seen.good().len(), seen.counts.ignored, seen.lines), (2, 4, 7));
}

#[test]
fn blank_lines_and_end_marks_are_blank() {
    let seen = whole(&plain(), "id,at,kg\n\n ,\t,\u{a0},,\n\"\",,\nS1,a,1\n\u{c}\n\u{1a}");
    assert_eq!((seen.good().len(), seen.counts.blank, seen.lines), (1, 5, 7));
}

#[test]
fn long_rows_are_held_and_short_ones_are_not() {
    let seen = whole(&plain(), "id,at,kg,\nS1,a,1,,,\nS2,a\nS3,a,1,5\n");
    assert_eq!(seen.good(), [["S1", "a", "1"], ["S2", "a", ""]]);
    assert_eq!(seen.unreadable(), [4]);
    // A column without a label is one all the same when another follows.
    assert_eq!(whole(&plain(), ",id,at,kg\n1,S1,a,1\n").good(), [["S1", "a", "1"]]);
}

#[test]
fn a_row_without_a_line_end_is_unfinished() {
    let mut reader = plain();
    let seen = whole(&reader, "id,at,kg\nS1,a,1\nS2,b,2");
    assert_eq!(seen.faults(), [(3, &RowFault::Unfinished)]);
    assert_eq!(seen.rows[1].cells, ["S2", "b", "2"]);
    reader.last_line = LastLine::Whole;
    assert_eq!(whole(&reader, "id,at,kg\nS1,a,1\nS2,b,2").good().len(), 2);
}

#[test]
fn a_last_line_that_is_no_row_needs_no_line_end() {
    let mut reader = plain();
    reader.stop_at = Some(regex("^Total"));
    reader.ignore = vec![ignore_equals("id", "QC")];
    for last in ["id,at,kg", "Total 5", "QC,a,1", ",,", "\u{1a}\u{1a}"] {
        let seen = whole(&reader, format!("id,at,kg\nS1,a,1\n{last}"));
        assert_eq!((seen.good().len(), seen.faults().len(), seen.lines), (1, 0, 3), "{last}");
    }
    assert_eq!(whole(&reader, "id,at,kg").lines, 1);
}

#[test]
fn a_line_of_a_mebibyte_is_held() {
    let text = format!("id,at,kg\nS1,{},1\nS2,b,2\n", "x".repeat(3 << 20));
    let seen = whole(&plain(), &text);
    assert_eq!((seen.unreadable(), seen.good()), (vec![2], vec![vec!["S2", "b", "2"]]));
    assert_eq!(seen.rows[0].bytes, Some((9, 15 + (3 << 20) - 1)));
}

mod whatever_the_bytes {
    use super::*;
    use proptest::prelude::*;

    /// Good exports that have all that a cut could break.
    fn samples() -> Vec<(Reader, Vec<u8>)> {
        let crlf = "Serial: A1\r\nid;at;kg;note\r\n;;N;\r\nS1;a;\"1,5\";\"two\r\nlines; \"\"quoted\"\"\"\r\nS2;b;2;µ\r\n\r\nQC;c;3;\r\nid;at;kg;note\r\nS3;d;44,4;\r\nTotal;3\r\nrest\r\n";
        let mut rich = reader(Some(b';'), &COLUMNS);
        rich.header = starts_with("id");
        rich.units_row = true;
        rich.stop_at = Some(regex("^Total"));
        rich.ignore = vec![ignore_equals("id", "QC")];
        let mut auto = rich.clone();
        auto.format = revisant_schema::plan::Format::Delimited { delimiter: None };
        let mut western = rich.clone();
        western.encoding = label("windows-1252");
        let mut headless = reader(Some(b'\t'), &["1", "2", "3"]);
        headless.header = Header::None;
        let middle = "id,note,at,kg\nS1,\"a\nb\n\nc\",x,1\nS2,\"d\",y,2\nS3,e\"e,z,3\n";
        let mut spoiled = plain();
        spoiled.header = starts_with("id");
        vec![
            (spoiled, b"Tester: B\xE4\r\nid,at,kg\r\nS1,a,1\r\nS2,b,22\r\n".to_vec()),
            (rich.clone(), crlf.into()),
            (auto.clone(), format!("\u{feff}{crlf}").into_bytes()),
            (auto, utf16(crlf, true, true)),
            (rich, utf16(crlf, false, true)),
            (western, encoding_rs::WINDOWS_1252.encode(crlf).0.into_owned()),
            (headless, b"S1\ta\t1\t\rS2\tb\t22\t\"n\ro\"\rS3\tc\t3\r".to_vec()),
            (plain(), middle.into()),
        ]
    }

    fn good_rows(seen: &Whole) -> Vec<&read_common::Kept> {
        seen.rows.iter().filter(|row| row.fault.is_none()).collect()
    }

    #[test]
    fn a_cut_export_gives_no_row_that_the_whole_one_does_not() {
        for (reader, bytes) in samples() {
            let all = read_all(&reader, &bytes).unwrap();
            assert!(all.faults().is_empty(), "{:?}", all.faults());
            for cut in 0..bytes.len() {
                let Ok(seen) = read_all(&reader, &bytes[..cut].to_vec()) else { continue };
                for row in good_rows(&seen) {
                    assert!(all.rows.contains(row), "cut at {cut}: {row:?}");
                }
            }
        }
    }

    #[test]
    fn a_cut_export_gives_every_row_that_stood_before_the_cut() {
        for (reader, bytes) in samples() {
            let all = read_all(&reader, &bytes).unwrap();
            for cut in 0..bytes.len() {
                let Ok(seen) = read_all(&reader, &bytes[..cut].to_vec()) else { continue };
                let before = |row: &&read_common::Kept| row.bytes.is_some_and(|(_, end)| end + 2 < cut as u64);
                let expected = all.rows.iter().filter(before).count();
                assert!(good_rows(&seen).len() >= expected, "cut at {cut}: {seen:?}");
            }
        }
    }

    fn any_reader() -> impl Strategy<Value = Reader> {
        (0..samples().len()).prop_map(|index| samples()[index].0.clone())
    }

    proptest! {
        #![proptest_config(ProptestConfig::with_cases(2000))]

        #[test]
        fn random_bytes_are_accounted_for(reader in any_reader(), bytes in prop::collection::vec(any::<u8>(), 0..300)) {
            let _ = read_all(&reader, &bytes);
        }

        #[test]
        fn random_tables_are_accounted_for(body in "([Sa1,;\"\t \n\r\u{c}\u{1a}µ]|id;at;kg;note\n|Total|QC;){0,120}") {
            let bytes = format!("id;at;kg;note\n;;N;\n{body}").into_bytes();
            for (reader, _) in samples() {
                if let Ok(seen) = read_all(&reader, &bytes) {
                    prop_assert_eq!(seen.lines, physical_lines(&bytes));
                }
            }
        }

        #[test]
        fn mutated_exports_are_accounted_for(
            which in 0..8_usize,
            edits in prop::collection::vec((any::<prop::sample::Index>(), any::<u8>(), 0..3_u8), 1..6),
        ) {
            let (reader, mut bytes) = samples().swap_remove(which);
            for (at, byte, kind) in edits {
                let at = at.index(bytes.len());
                match kind {
                    0 => bytes[at] = byte,
                    1 => bytes.insert(at, byte),
                    _ => drop(bytes.remove(at)),
                }
            }
            let _ = read_all(&reader, &bytes);
        }

        /// Without quotes nothing rests on a likelihood.
        #[test]
        fn random_tables_may_be_cut_anywhere(
            body in "([Sa1,; \t\n\r\u{c}\u{1a}µ]|id;at;kg;note\r\n|;;N;\n|Total|QC;|S1;a;12;\r\n){0,80}",
            cut in any::<prop::sample::Index>(),
        ) {
            let bytes = format!("id;at;kg;note\n;;N;\n{body}").into_bytes();
            let cut = bytes[..cut.index(bytes.len())].to_vec();
            for (reader, _) in samples().into_iter().skip(1) {
                if let (Ok(all), Ok(seen)) = (read_all(&reader, &bytes), read_all(&reader, &cut)) {
                    for row in good_rows(&seen) {
                        prop_assert!(all.rows.contains(row), "{:?}", row);
                    }
                }
            }
        }

        #[test]
        fn rows_stand_where_they_say(body in "([Sa1,;\"\n\r\u{c}µ]|S1;a;1\n){0,80}") {
            let bytes = format!("id;at;kg;note\n;;N;\n{body}").into_bytes();
            let (reader, _) = samples().swap_remove(1);
            if let Ok(seen) = read_all(&reader, &bytes) {
                for row in &seen.rows {
                    let (start, end) = row.bytes.unwrap();
                    prop_assert_eq!(row.raw.as_bytes(), &bytes[start as usize..end as usize]);
                    prop_assert_eq!(physical_lines(&bytes[..start as usize]) + 1, row.line);
                }
            }
        }
    }
}

/// How fast rows go through: `cargo test --release -p revisant-daemon --test read_delimited -- --ignored --nocapture`.
#[test]
#[ignore = "a measurement, not a check"]
fn throughput() {
    let mut text = "subject;visit;taken;hand;trial;kg;note\n".to_owned();
    for row in 0..1_000_000 {
        text.push_str(&format!(
            "QM-{:03};V{};2026-03-{:02} 10:{:02};left;{};{}.{};\n",
            row % 900,
            row % 5,
            row % 28 + 1,
            row % 60,
            row % 3,
            row % 70,
            row % 10
        ));
    }
    let quoted = text.lines().map(|line| format!("\"{}\"\n", line.replace(';', "\";\""))).collect::<String>();
    let mut reader = reader(Some(b';'), &["subject", "taken", "visit", "hand", "kg"]);
    reader.stop_at = Some(regex("^Total"));
    reader.ignore = vec![ignore_equals("note", "QC")];
    for (name, encoding, bytes) in [
        ("utf-8, encoding auto", revisant_schema::plan::Encoding::Auto, text.clone().into_bytes()),
        ("utf-8, encoding named", label("utf-8"), text.clone().into_bytes()),
        ("utf-8, all cells quoted", label("utf-8"), quoted.into_bytes()),
        ("windows-1252", label("windows-1252"), text.clone().into_bytes()),
        ("utf-16le", label("utf-16le"), utf16(&text, true, true)),
    ] {
        reader.encoding = encoding;
        let begun = std::time::Instant::now();
        let mut rows = read::open(&reader, &bytes).unwrap();
        let (mut row, mut count) = (Row::default(), 0_u32);
        while rows.next_row(&mut row).unwrap() {
            count += 1;
        }
        let taken = begun.elapsed();
        println!(
            "{name}: {count} rows, {} MB, {taken:?}, {:.0} ns a row",
            bytes.len() / 1_000_000,
            taken.as_nanos() as f64 / f64::from(count)
        );
    }
}
