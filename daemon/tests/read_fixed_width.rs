//! Fixed-width exports: one sample for each thing that instruments do, and what must hold whatever the bytes are.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic, missing_docs)]

mod read_common;

use read_common::{Whole, ignore_equals, label, physical_lines, read_all, reader, regex, starts_with};
use revisant_daemon::intake::read::{self, FileFault, LineCounts, RowFault};
use revisant_schema::plan::{FixedColumn, Format, Header, Ignore, LastLine, Reader};

const COLUMNS: [&str; 3] = ["id", "at", "kg"];

/// The header shows where columns begin.
fn shown(columns: &[&str]) -> Reader {
    given(columns, &[])
}

/// The plan gives the columns, which are `columns` in their order; the header is on line 1.
fn given(columns: &[&str], places: &[(&str, usize, usize)]) -> Reader {
    let column = |(name, from, to): &(&str, usize, usize)| FixedColumn { name: (*name).into(), from: *from, to: *to };
    let format = Format::FixedWidth { columns: places.iter().map(column).collect() };
    Reader { format, ..reader(None, columns) }
}

fn plain() -> Reader {
    shown(&COLUMNS)
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

/// What is said of the only row that cannot be read.
fn said(seen: &Whole) -> &str {
    match seen.faults().as_slice() {
        [(_, RowFault::Unreadable(what))] => what,
        other => panic!("{other:?}"),
    }
}

#[test]
fn the_header_shows_where_columns_begin() {
    let seen =
        whole(&plain(), "id    at          kg    note\nS1    2025-03-01  3.5   of two  words\nS2    2025-03-02  4\n");
    assert_eq!(seen.good(), [["S1", "2025-03-01", "3.5"], ["S2", "2025-03-02", "4"]]);
    assert_eq!(seen.counts, LineCounts { header: 1, ..LineCounts::default() });
    assert_eq!((seen.lines, seen.rows[1].line, seen.rows[1].bytes), (3, 3, Some((67, 86))));
    assert_eq!(seen.rows[1].raw, "S2    2025-03-02  4");
}

#[test]
fn a_label_may_hold_single_blanks_and_the_order_is_free() {
    let reader = shown(&["Person", "Date", "One leg (s)"]);
    let seen = whole(&reader, "Date        One leg (s)  Person\r\n01.02.2025  5.7          OAK204\r\n");
    assert_eq!(seen.good(), [["OAK204", "01.02.2025", "5.7"]]);
    let what = layout(&reader, "Date One leg (s)  Person\n");
    assert!(what.contains("no column \"Date\"") && what.contains("\"Date One leg (s)\""), "{what}");
    assert!(layout(&reader, "Date  One leg (s)  Person  Date\n").contains("\"Date\" stands twice"));
}

#[test]
fn values_may_stand_anywhere_in_their_column() {
    let rows = "  S1        a      1\n S2            b    2\nS3          c       \u{a0}  3  \n";
    let seen = whole(&plain(), format!("  id        at     kg\n{rows}"));
    assert_eq!(seen.good(), [["S1", "a", "1"], ["S2", "b", "2"], ["S3", "c", "3"]]);
}

#[test]
fn a_text_that_crosses_into_a_column_is_not_cut() {
    let seen = whole(&plain(), "id    at        kg\nS1    a     1234.5\nS2    a         12.5\nS3    a       1.5\n");
    assert_eq!((seen.good(), seen.unreadable()), (vec![vec!["S2", "a", "12.5"]], vec![2, 4]));
    let Some(RowFault::Unreadable(what)) = &seen.rows[0].fault else { panic!() };
    for part in ["\"at\" into the column \"kg\" (character 17)", "\"columns\""] {
        assert!(what.contains(part), "{what}");
    }
    assert_eq!(seen.rows[0].cells, ["", "", ""]);
}

#[test]
fn a_value_in_its_neighbour_s_column_is_not_lost() {
    let seen = whole(&plain(), "id    at        kg\nS1    a      12\nS2    a         12\n");
    assert_eq!(seen.good(), [["S2", "a", "12"]]);
    assert!(said(&seen).contains("two texts stand in the column \"at\""), "{seen:?}");
    // Nor in a neighbour's that the plan does not name.
    let seen = whole(&plain(), "id    at    note      kg\nS1    a     x    12\nS2    a     of two    12\n");
    assert_eq!((seen.good(), seen.unreadable()), (vec![vec!["S2", "a", "12"]], vec![2]));
}

#[test]
fn columns_that_the_plan_does_not_name_are_left_alone() {
    let seen =
        whole(&plain(), "id    at    kg    n1  n2  n1\nS1    a     1     xyzxyzxyz\nS2    a     2     x   y  z\n");
    assert_eq!(seen.good(), [["S1", "a", "1"], ["S2", "a", "2"]]);
    // But not where they reach into one that it names.
    let seen = whole(&shown(&["id", "at", "n2"]), "id    at    kg    n1  n2  n3\nS1    a     1     xyzxyzxyz\n");
    assert!(said(&seen).contains("\"n1\" into the column \"n2\""), "{seen:?}");
}

#[test]
fn characters_are_counted_as_scalar_values() {
    let header = "id    at    kg µ\n";
    let reader = shown(&["id", "at", "kg \u{3bc}"]);
    let seen = whole(&reader, format!("{header}漢     a     1\ne\u{301}    ä\u{a0}\u{a0}\u{a0}  2\n"));
    assert_eq!(seen.good(), [["漢", "a", "1"], ["e\u{301}", "ä", "2"]]);
    // Aligned by what a wide or a combined character takes on a screen.
    let seen = whole(&reader, format!("{header}漢    a     1\n"));
    assert!(said(&seen).contains("two texts"), "{seen:?}");
    let seen = whole(&reader, format!("{header}S1    a    e\u{301}1\n"));
    assert!(said(&seen).contains("\"at\" into"), "{seen:?}");
}

#[test]
fn a_tab_moves_what_follows_it() {
    let seen = whole(&plain(), "id    at    kg    note\nS1\ta     1\nS2    a     2     x\ty\nS3    a     3\t\n\t \t\n");
    assert_eq!(seen.good(), [["S2", "a", "2"], ["S3", "a", "3"]]);
    assert_eq!(seen.counts.blank, 1);
    assert!(said(&seen).contains("a tab stands in it"), "{seen:?}");
    // In the last column too, when the plan names it.
    let seen = whole(&plain(), "id    at    kg\nS1    a     1\t2\n");
    assert_eq!(seen.unreadable(), [2]);
    assert!(layout(&plain(), "id\tat    kg\n").contains("tab"));
    let seen =
        whole(&given(&COLUMNS, &[("id", 1, 4), ("at", 5, 8), ("kg", 9, 12)]), "id\nS1  a   1   \tx\nS2  a\t  2\n");
    assert_eq!((seen.good().len(), seen.unreadable()), (1, vec![3]));
}

#[test]
fn the_plan_may_give_the_columns() {
    let places = [("kg", 13, 18), ("id", 1, 5), ("at", 6, 10), ("note", 30, 40)];
    let mut reader = given(&COLUMNS, &places);
    let rows = "S0001day-1  12.5  rest\nS2   day-1  1  2\nS3\nS4   day-1      12   other  things\n";
    let seen = whole(&reader, format!("Person of the day\n{rows}"));
    // Columns that touch are cut where the plan says, and two texts in one are the value's fault, not the row's.
    assert_eq!(
        seen.good(),
        [["S0001", "day-1", "12.5"], ["S2", "day-1", "1  2"], ["S3", "", ""], ["S4", "day-1", "12"]]
    );
    for (row, part) in [
        ("S0001day-1  12.567rest", "the end of the column \"kg\" (character 18)"),
        ("S0001day-1 112.5", "the beginning of the column \"kg\" (character 13)"),
        ("S0001day-1x 12.5", "the end of the column \"at\" (character 10)"),
    ] {
        assert!(said(&whole(&reader, format!("x\n{row}\n"))).contains(part), "{row}");
    }
    reader.header = Header::Row { row: 3, lines: 2 };
    let seen = whole(&reader, format!("Serial: A1\n\none\ntwo\n{rows}two\n"));
    assert_eq!(seen.good().len(), 4);
    let counts = LineCounts { preamble: 2, header: 2, repeated_header: 1, ..LineCounts::default() };
    assert_eq!(seen.counts, counts);
    reader.header = starts_with("Per");
    assert_eq!(whole(&reader, format!("x\nPerson\n{rows}")).counts.preamble, 1);
    reader.header = Header::None;
    assert_eq!(whole(&reader, rows).good().len(), 4);
    assert_eq!(whole(&reader, "").lines, 0);
    reader.values[0].column = "missing".into();
    assert!(layout(&reader, rows).contains("\"missing\""));
}

#[test]
fn without_a_header_the_plan_must_give_the_columns() {
    let mut reader = shown(&["1", "2", "3"]);
    reader.header = Header::None;
    assert!(layout(&reader, "S1  a  1\n").contains("\"columns\""));
}

#[test]
fn a_preamble_and_a_footer_surround_the_table() {
    let mut reader = shown(&["Code", "Datum", "Kraft (kg)"]);
    reader.header = starts_with("Code");
    reader.stop_at = Some(regex("^Ende der Liste"));
    reader.encoding = label("windows-1252");
    let text = "Gerät: Handkraft\r\nPrüfer\tBÄ\r\n\r\nCode  Datum       Kraft (kg)\r\nPÄ    11.03.2025        30,9\r\n\
                Ende der Liste\r\nP9    x     9\r\n";
    let bytes = encoding_rs::WINDOWS_1252.encode(text).0.into_owned();
    let seen = whole(&reader, &bytes);
    assert_eq!(seen.good(), [["PÄ", "11.03.2025", "30,9"]]);
    assert_eq!(seen.counts, LineCounts { preamble: 3, header: 1, footer: 2, ..LineCounts::default() });
    let rows = read::open(&reader, &bytes).unwrap();
    assert_eq!((rows.preamble("Prüfer"), rows.preamble("Gerät")), (Some("BÄ"), Some("Handkraft")));
}

#[test]
fn utf16_is_read_either_way() {
    let text = "id    at    kg\r\nSµ    zwölf   3\r\n";
    for little in [true, false] {
        let bytes = utf16(text, little);
        let seen = whole(&plain(), &bytes);
        assert_eq!(seen.good(), [["Sµ", "zwölf", "3"]]);
        let (start, end) = seen.rows[0].bytes.unwrap();
        assert_eq!(bytes[start as usize..end as usize], utf16("Sµ    zwölf   3", little)[2..]);
    }
}

fn utf16(text: &str, little: bool) -> Vec<u8> {
    let units = format!("\u{feff}{text}");
    units.encode_utf16().flat_map(|unit| if little { unit.to_le_bytes() } else { unit.to_be_bytes() }).collect()
}

#[test]
fn what_is_no_text_is_a_fault_of_its_line() {
    let mut reader = plain();
    reader.encoding = label("utf-8");
    let mut bytes = b"id    at    kg\nS1    \xE4     1\nS2    \0     2\n".to_vec();
    bytes.extend(vec![b'x'; 3 << 20]);
    bytes.extend(b"\nS4    a     4\n");
    let seen = whole(&reader, &bytes);
    assert_eq!((seen.good(), seen.unreadable()), (vec![vec!["S4", "a", "4"]], vec![2, 3, 4]));
    assert!(matches!(read_all(&plain(), &b"id    at\0    kg\n".to_vec()), Err(FileFault::Unreadable(_))));
    let auto = given(&COLUMNS, &[("id", 1, 4), ("at", 5, 8), ("kg", 9, 12)]);
    let headless = Reader { header: Header::None, ..auto };
    assert!(matches!(read_all(&headless, &b"S1  a   1\nS\xE4\n".to_vec()), Err(FileFault::Unreadable(_))));
}

#[test]
fn page_headers_are_passed_over() {
    let mut reader = plain();
    reader.units_row = true;
    let text = "\u{feff}id    at    kg \n            N\n------------\nS1    a     1\n\u{c}id    at    kg\n\n            N\nS2    b     2\n";
    let seen = whole(&reader, text);
    // A ruled line is a row unless the plan ignores it.
    assert_eq!(seen.unreadable(), [3]);
    reader.ignore = vec![Ignore::Line(regex("^-+$"))];
    let seen = whole(&reader, text);
    assert_eq!(seen.good(), [["S1", "a", "1"], ["S2", "b", "2"]]);
    let counts = LineCounts { header: 1, units: 2, ignored: 1, repeated_header: 1, blank: 1, ..LineCounts::default() };
    assert_eq!(seen.counts, counts);
    let bytes = text.as_bytes().to_vec();
    let rows = read::open(&reader, &bytes).unwrap();
    assert_eq!((rows.unit(0), rows.unit(2)), (Some(""), Some("N")));
    // What equals the units elsewhere is a row.
    assert_eq!(whole(&reader, "id    at    kg\n            N\n            N\n").rows.len(), 1);
}

#[test]
fn a_row_of_units_is_not_cut_either() {
    let mut reader = plain();
    reader.units_row = true;
    let what = layout(&reader, "id    at    kg\n           (N)\n");
    assert!(what.contains("units on line 2") && what.contains("\"kg\""), "{what}");
    let bytes = b"id    at    kg".to_vec();
    assert_eq!(read::open(&reader, &bytes).unwrap().unit(2), Some(""));
    assert_eq!(read::open(&plain(), &bytes).unwrap().unit(2), None);
}

#[test]
fn a_header_may_take_several_lines() {
    let mut reader = shown(&["Person", "Date", "Grip right"]);
    reader.header = Header::Row { row: 2, lines: 2 };
    let header = "Person  Grip      Grip\n        left      right  Date\n";
    let seen =
        whole(&reader, format!("Clinic\n{header}S1      12        13     a\n{header}S2                       b\n"));
    assert_eq!(seen.good(), [["S1", "a", "13"], ["S2", "b", ""]]);
    let counts = LineCounts { preamble: 1, header: 2, repeated_header: 2, ..LineCounts::default() };
    assert_eq!(seen.counts, counts);
    // Under a label that spans them, nothing shows where columns begin.
    let what = layout(&reader, "Clinic\nPerson  Grip strength  Date\n        left    right\n");
    assert!(what.contains("no column \"Grip right\"") && what.contains("Grip strength left right"), "{what}");
    assert!(layout(&reader, "Clinic\nPerson  Grip").contains("2 lines"));
}

#[test]
fn rows_that_the_plan_ignores_are_counted() {
    let mut reader = plain();
    reader.ignore = vec![
        ignore_equals("kind", "QC"),
        Ignore::Matches { column: "id".into(), regex: regex("^Page") },
        Ignore::Line(regex("^#")),
    ];
    let head = "id      at    kg    kind\n";
    let rows =
        "S1      a     1\nS2      a     2     QC\nPage 1\n# a text that goes on and on\nS3      a     3     QC2\n";
    let seen = whole(&reader, format!("{head}{rows}"));
    assert_eq!((seen.good().len(), seen.counts.ignored, seen.lines), (2, 3, 6));
    // It is known what the column holds, though not what all others do.
    let seen = whole(&reader, format!("{head}S1      a    12     QC\n"));
    assert_eq!((seen.rows.len(), seen.counts.ignored), (0, 1));
    // It is not known.
    for row in ["Page 1 of 3", "S1      a     1   XQC", "Page\t1"] {
        assert_eq!(whole(&reader, format!("{head}{row}\n")).unreadable(), [2], "{row}");
    }
}

#[test]
fn blank_lines_and_end_marks_are_blank() {
    let seen = whole(&plain(), "id    at    kg\n\n \u{a0} \nS1    a     1\n\u{c}\n\u{1a}");
    assert_eq!((seen.good().len(), seen.counts.blank, seen.lines), (1, 4, 6));
}

#[test]
fn line_ends_may_be_mixed() {
    let seen = whole(&plain(), "id    at    kg\r\nS1    a     1\rS2    b     2\nS3    c     3\r\r\nS4    d     4\r");
    assert_eq!(seen.rows.iter().map(|row| row.line).collect::<Vec<_>>(), [2, 3, 4, 6]);
    assert_eq!((seen.good().len(), seen.counts.blank, seen.lines), (4, 1, 6));
}

#[test]
fn a_row_without_a_line_end_is_unfinished() {
    let mut reader = plain();
    let seen = whole(&reader, "id    at    kg\nS1    a     1\nS2    b     2");
    assert_eq!(seen.faults(), [(3, &RowFault::Unfinished)]);
    assert_eq!(seen.rows[1].cells, ["S2", "b", "2"]);
    assert_eq!(whole(&reader, "id    at    kg\nS1    a     1\nid    at    kg").faults(), []);
    reader.last_line = LastLine::Whole;
    assert_eq!(whole(&reader, "id    at    kg\nS1    a     1\nS2    b     2\u{1a}").good()[1], ["S2", "b", "2"]);
}

mod whatever_the_bytes {
    use super::*;
    use proptest::prelude::*;

    const PLACES: [(&str, usize, usize); 3] = [("id", 1, 6), ("at", 7, 16), ("kg", 17, 24)];

    /// Good exports that have all that a cut could break.
    fn samples() -> Vec<(Reader, Vec<u8>)> {
        let text = "Serial: A1\r\nid    at      kg        note\r\n              N\r\nS1    a       1,5       two words\r\n\
                    S2    b           2     µ\r\n\r\nQC    c       3\r\nid    at      kg        note\r\n              N\r\n\
                    S3    d       44,4      \r\nTotal   3\r\nrest\r\n";
        let mut rich = plain();
        rich.header = starts_with("id");
        rich.units_row = true;
        rich.stop_at = Some(regex("^Total"));
        rich.ignore = vec![ignore_equals("id", "QC")];
        let mut western = rich.clone();
        western.encoding = label("windows-1252");
        let mut headless = given(&COLUMNS, &PLACES);
        headless.header = Header::None;
        let mut double = shown(&["id", "at", "Grip left"]);
        double.header = Header::Row { row: 2, lines: 2 };
        vec![
            (rich.clone(), text.into()),
            (rich.clone(), format!("\u{feff}{text}").into_bytes()),
            (rich.clone(), utf16(text, true)),
            (rich, utf16(text, false)),
            (western, encoding_rs::WINDOWS_1252.encode(text).0.into_owned()),
            (headless, b"S1    2025-03-01    12.5  x\rS00022025-03-0112345678\rS3    2025-03-02       1\r".to_vec()),
            (double, "x\nid  at  Grip   Grip\n        left   right\nS1  ä   12.25  13\nS2  b          2\n".into()),
        ]
    }

    fn good_rows(seen: &Whole) -> Vec<&read_common::Kept> {
        seen.rows.iter().filter(|row| row.fault.is_none()).collect()
    }

    #[test]
    fn a_cut_export_gives_no_row_that_the_whole_one_does_not() {
        for (reader, bytes) in samples() {
            let all = read_all(&reader, &bytes).unwrap();
            assert!(all.faults().is_empty() && all.rows.len() >= 2, "{:?}", all.faults());
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
                assert!(good_rows(&seen).len() >= all.rows.iter().filter(before).count(), "cut at {cut}: {seen:?}");
            }
        }
    }

    /// A text between blanks of a row's line.
    fn stands_by_itself(line: &str, cell: &str) -> bool {
        let blank = |character: Option<char>| character.is_none_or(|it| matches!(it, ' ' | '\u{a0}' | '\u{c}'));
        line.match_indices(cell)
            .any(|(at, _)| blank(line[..at].chars().next_back()) && blank(line[at + cell.len()..].chars().next()))
    }

    proptest! {
        #![proptest_config(ProptestConfig::with_cases(2000))]

        #[test]
        fn random_bytes_are_accounted_for(which in 0..7_usize, bytes in prop::collection::vec(any::<u8>(), 0..300)) {
            let _ = read_all(&samples()[which].0, &bytes);
        }

        #[test]
        fn random_tables_are_accounted_for(body in "([Sa1µ漢\t \n\r\u{c}\u{1a}\u{301}]|  |id    at      kg        note\n|Total|QC  ){0,120}") {
            let bytes = format!("id    at      kg        note\n              N\n{body}").into_bytes();
            for (reader, _) in samples() {
                if let Ok(seen) = read_all(&reader, &bytes) {
                    prop_assert_eq!(seen.lines, physical_lines(&bytes));
                }
            }
        }

        /// Where the header shows the columns, no cell is a part of a text.
        #[test]
        fn no_text_is_cut(body in "([Sa1µ漢\u{a0} \n]|   |S1    a       1\n){0,120}") {
            let bytes = format!("id    at      kg        note\n{body}").into_bytes();
            if let Ok(seen) = read_all(&plain(), &bytes) {
                for row in good_rows(&seen) {
                    for cell in row.cells.iter().filter(|cell| !cell.is_empty()) {
                        prop_assert!(stands_by_itself(&row.raw, cell), "{:?}", row);
                    }
                }
            }
        }

        #[test]
        fn mutated_exports_are_accounted_for(
            which in 0..7_usize,
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

        #[test]
        fn random_tables_may_be_cut_anywhere(
            body in "([Sa1µ\t \n\r\u{c}\u{1a}]|  |id    at      kg        note\r\n|              N\n|Total|QC  |S1    a       1,5\r\n){0,80}",
            cut in any::<prop::sample::Index>(),
        ) {
            let bytes = format!("id    at      kg        note\n              N\n{body}").into_bytes();
            let cut = bytes[..cut.index(bytes.len())].to_vec();
            for (reader, _) in samples() {
                if let (Ok(all), Ok(seen)) = (read_all(&reader, &bytes), read_all(&reader, &cut)) {
                    for row in good_rows(&seen) {
                        prop_assert!(all.rows.contains(row), "{:?}", row);
                    }
                }
            }
        }

        #[test]
        fn rows_stand_where_they_say(body in "([Sa1 \n\r\u{c}µ]|  |S1    a       1\n){0,80}") {
            let bytes = format!("id    at      kg        note\n              N\n{body}").into_bytes();
            if let Ok(seen) = read_all(&samples()[0].0, &bytes) {
                for row in &seen.rows {
                    let (start, end) = row.bytes.unwrap();
                    prop_assert_eq!(row.raw.as_bytes(), &bytes[start as usize..end as usize]);
                    prop_assert_eq!(physical_lines(&bytes[..start as usize]) + 1, row.line);
                }
            }
        }
    }
}
