//! XML exports: what the recommendation asks, one sample for each thing, and what must hold whatever the bytes are.
//!
//! Sections are those of "Extensible Markup Language (XML) 1.0 (Fifth Edition)", W3C Recommendation of 26 November 2008,
//! and of "Namespaces in XML 1.0 (Third Edition)", W3C Recommendation of 8 December 2009.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic, missing_docs)]

mod read_common;

use std::io::{self, Read};

use read_common::{Whole, ignore_equals, label, read_all, regex};
use revisant_daemon::intake::read::{self, Bytes, FileFault, Row, RowFault};
use revisant_schema::plan::{Format, Ignore, Reader};

/// A reader of rows at this path; slots are in the order of `columns`.
fn reader(rows: &str, columns: &[&str]) -> Reader {
    let mut reader = read_common::reader(None, columns);
    reader.format = Format::Xml { rows: rows.to_owned() };
    reader
}

/// The subject, the moment and one value of each `r` in `d`.
fn plain() -> Reader {
    reader("/d/r", &["id", "at", "kg"])
}

fn whole(reader: &Reader, text: impl AsRef<[u8]>) -> Whole {
    read_all(reader, &text.as_ref().to_vec()).unwrap()
}

/// The one cell of the one row.
fn cell(path: &str, text: &str) -> String {
    let seen = whole(&reader("/d/r", &[path, path]), text);
    assert_eq!(seen.faults(), [], "{text}");
    assert_eq!(seen.rows.len(), 1, "{text}");
    seen.rows[0].cells[0].clone()
}

fn unreadable(reader: &Reader, bytes: &[u8]) -> String {
    match read_all(reader, &bytes.to_vec()) {
        Err(FileFault::Unreadable(what)) => what,
        other => panic!("{:?}: {other:?}", String::from_utf8_lossy(bytes)),
    }
}

fn layout(reader: &Reader, text: &str) -> String {
    match read_all(reader, &text.as_bytes().to_vec()) {
        Err(FileFault::Layout(what)) => what,
        other => panic!("{text}: {other:?}"),
    }
}

fn row_fault(reader: &Reader, text: &str) -> String {
    let seen = whole(reader, text);
    match seen.faults().as_slice() {
        [(_, RowFault::Unreadable(what))] => what.clone(),
        other => panic!("{text}: {other:?}"),
    }
}

fn utf16(text: &str, little: bool, mark: bool) -> Vec<u8> {
    let marked = if mark { format!("\u{feff}{text}") } else { text.to_owned() };
    marked.encode_utf16().flat_map(|unit| if little { unit.to_le_bytes() } else { unit.to_be_bytes() }).collect()
}

/// Hands out so many bytes at a time.
struct Drip<'a>(&'a [u8], usize);

impl Bytes for Drip<'_> {
    fn open(&self) -> io::Result<Box<dyn Read + '_>> {
        Ok(Box::new(DripStream(self.0, self.1)))
    }
}

struct DripStream<'a>(&'a [u8], usize);

impl Read for DripStream<'_> {
    fn read(&mut self, into: &mut [u8]) -> io::Result<usize> {
        let count = self.1.min(into.len()).min(self.0.len());
        into[..count].copy_from_slice(&self.0[..count]);
        self.0 = &self.0[count..];
        Ok(count)
    }
}

/// A beginning, then a piece many times over, then an end.
struct Long<'a> {
    begin: &'a str,
    piece: &'a str,
    times: u64,
    end: &'a str,
}

impl Bytes for Long<'_> {
    fn open(&self) -> io::Result<Box<dyn Read + '_>> {
        let many = Many { piece: self.piece.as_bytes(), left: self.times, rest: &[] };
        Ok(Box::new(self.begin.as_bytes().chain(many).chain(self.end.as_bytes())))
    }
}

struct Many<'a> {
    piece: &'a [u8],
    left: u64,
    rest: &'a [u8],
}

impl Read for Many<'_> {
    fn read(&mut self, into: &mut [u8]) -> io::Result<usize> {
        if self.rest.is_empty() && self.left > 0 {
            self.left -= 1;
            self.rest = self.piece;
        }
        let count = into.len().min(self.rest.len());
        into[..count].copy_from_slice(&self.rest[..count]);
        self.rest = &self.rest[count..];
        Ok(count)
    }
}

#[test]
fn rows_stand_where_they_say() {
    let text = "<?xml version=\"1.0\" encoding=\"UTF-8\"?>\r\n<!-- r -->\r<d>\n <r><id>S1</id><at>a</at>\n  <kg> 3.5 </kg></r>\n <r><id>S2</id></r><r\n/></d>\n";
    let seen = whole(&plain(), text);
    assert_eq!(seen.good(), [["S1", "a", "3.5"], ["S2", "", ""], ["", "", ""]]);
    assert_eq!(seen.rows.iter().map(|row| row.line).collect::<Vec<_>>(), [4, 6, 6]);
    assert_eq!((seen.lines, seen.counts.total()), (3, 0));
    for row in &seen.rows {
        let (start, end) = row.bytes.unwrap();
        assert_eq!(row.raw.as_bytes(), &text.as_bytes()[start as usize..end as usize]);
        assert!(row.raw.starts_with("<r") && row.raw.ends_with('>') && row.lines == 1);
    }
}

#[test]
fn rows_are_where_the_path_leads() {
    let text = "<d><r><id>1</id></r><x><r><id>2</id></r></x><y><r><id>3</id><r><id>4</id></r></r></y></d>";
    let ids = |rows: &str| {
        let seen = whole(&reader(rows, &["id", "id"]), text);
        seen.good().iter().map(|row| row[0].to_owned()).collect::<Vec<_>>()
    };
    assert_eq!(ids("/d/r"), ["1"]);
    assert_eq!(ids("/d/x/r"), ["2"]);
    assert_eq!(ids("/d/*/r"), ["2", "3"]);
    assert_eq!(ids("/*/*/*/r"), ["4"]);
    assert_eq!(whole(&reader("/", &["r/id", "x/r/id"]), text).good(), [["1", "2"]]);
    assert_eq!(whole(&reader("/d", &["r/id", "x/r/id"]), text).good(), [["1", "2"]]);
}

#[test]
fn paths_lead_inside_a_row_and_out_of_it() {
    let text = "<d v='7'><h><at>t1</at></h><g n='a'><r k='1'><p q='x'><id>S1</id></p>own</r><place>north</place></g>\
                <g n='b'><r k='2'><p><id>S2</id></p></r><place c='3'>south</place></g><serial>A1</serial></d>";
    let columns = ["p/id", "@k", "p/@q", "../@n", "../../@v", "../place", "../place/@c", "../../serial", "../../h/at"];
    let seen = whole(&reader("/d/g/r", &columns), text);
    assert_eq!(
        seen.good(),
        [["S1", "1", "x", "a", "7", "north", "", "A1", "t1"], ["S2", "2", "", "b", "7", "south", "3", "A1", "t1"]]
    );
    let seen = whole(&reader("/d/g/r", &["p/id", "../../../d/serial", "../../../d/@v"]), text);
    assert_eq!(seen.good(), [["S1", "A1", "7"], ["S2", "A1", "7"]]);
    assert_eq!(whole(&reader("/d/g/place", &["../r/p/id", "."]), text).good(), [["S1", "north"], ["S2", "south"]]);
    for outside in ["..", "../..", "../../..", "../../../@v", "../../../../x", "p//q"] {
        layout(&reader("/d/g/r", &["p/id", outside]), text);
    }
}

#[test]
fn the_text_of_an_element_is_all_of_its_characters() {
    // Sections 2.4, 2.5, 2.6, 2.7, 4.1, 4.6.
    let text = "<d><r><a>1<!-- 9 -->2<?x 9?>3<![CDATA[4<]]>5&lt;&#54;&#x37;&amp;&gt;&apos;&quot;\u{e9}</a></r></d>";
    assert_eq!(cell("a", text), "1234<5<67&>'\"\u{e9}");
    assert_eq!(cell("a", "<d><r><a><![CDATA[]]></a></r></d>"), "");
    assert_eq!(cell("a", "<d><r><a><!----></a></r></d>"), "");
    assert_eq!(cell("a", "<d><r><a><![CDATA[]]]]><![CDATA[>]]></a></r></d>"), "]]>");
    assert_eq!(cell("a", "<d><r><!-- <a>9</a> --><a> 1 </a></r></d>"), "1");
    assert_eq!(cell("a", "<d><r><a>1</a ></r></d>"), "1");
    assert_eq!(cell("a", "<d><r><a\n/></r></d>"), "");
    assert_eq!(cell(".", "<d><r> 3<!-- -->4 </r></d>"), "34");
}

#[test]
fn line_ends_and_attributes_are_normalised() {
    // Section 2.11.
    assert_eq!(cell("a", "<d><r><a>1\r\n2\r3\n4\r\r\n5<![CDATA[\r\n]]>6&#13;7</a></r></d>"), "1\n2\n3\n4\n\n5\n6\r7");
    assert_eq!(cell("a", "<d><r><a>1\r2</a></r></d>"), "1\n2");
    // Section 3.3.3, with its examples for attributes of the type CDATA.
    assert_eq!(cell("@a", "<d><r a=\"x\r\n\t y&#10;z&#xd;&#9;w\ru\"/></d>"), "x   y\nz\r\tw u");
    assert_eq!(cell("@a", "<d><r a='\"&lt;&quot;&apos;>'/></d>"), "\"<\"'>");
    assert_eq!(cell("@a", "<d><r b = \"1\" a\n=\n'2'/></d>"), "2");
}

#[test]
fn names_are_compared_without_prefixes() {
    // Namespaces, sections 3 to 6.
    let text = "<n:d xmlns:n='urn:a' xmlns:m='urn:b'><n:r m:k='1' xmlns:k='2' xmlns='3'><m:a>4</m:a></n:r></n:d>";
    assert_eq!(cell("a", text), "4");
    assert_eq!(cell("@k", text), "1");
    assert_eq!(cell("@xmlns", text), "");
    assert_eq!(whole(&reader("/x:d/x:r", &["y:a", "@z:k"]), text).good(), [["4", "1"]]);
    // A name is the same however its characters are composed.
    let text = "<d><r><Gro\u{308}\u{df}e \u{3bc}='2'>1</Gro\u{308}\u{df}e></r></d>";
    let seen = whole(&reader("/d/r", &["Gr\u{f6}\u{df}e", "Gr\u{f6}\u{df}e/@\u{b5}"]), text);
    assert_eq!(seen.good(), [["1", "2"]]);
}

#[test]
fn an_element_with_elements_of_its_own_has_no_text() {
    assert_eq!(cell("a", "<d><r><a>3<b>4</b>5</a></r></d>"), "3<b>4</b>5");
    assert_eq!(cell("a", "<d><r><a> <b/> </a></r></d>"), "<b/>");
    assert_eq!(cell("a/b", "<d><r><a> <b>4&amp;</b> </a></r></d>"), "4&");
    assert_eq!(cell(".", "<d><r>3<b/>4</r></d>"), "3<b/>4");
    assert_eq!(cell("../a", "<d><r/><a>x<b>4</b></a></d>"), "x<b>4</b>");
    let both = whole(&reader("/d/r", &["a", "a/b"]), "<d><r><a> <b>4</b> </a></r></d>");
    assert_eq!(both.good(), [["<b>4</b>", "4"]]);
}

#[test]
fn what_stands_twice_is_not_chosen_among() {
    let reader = |path: &str| reader("/d/g/r", &["id", path]);
    for (path, text) in [
        ("a", "<d><g><r><id>S</id><a>1</a><a>1</a></r></g></d>"),
        ("a", "<d><g><r><id>S</id><a/><a>1</a></r></g></d>"),
        ("a/b", "<d><g><r><id>S</id><a><b>1</b></a><a><b>1</b></a></r></g></d>"),
        ("@k", "<d><g><r p:k='1' q:k='2'><id>S</id></r></g></d>"),
        ("a/@k", "<d><g><r><id>S</id><a k='1'/><a k='2'/></r></g></d>"),
        ("../a", "<d><g><a>1</a><r><id>S</id></r><a>1</a></g></d>"),
        ("../../g/@k", "<d><g k='1'><r><id>S</id></r></g><g k='2'/></d>"),
    ] {
        let what = row_fault(&reader(path), text);
        assert!(what.contains(&format!("\"{path}\" stands twice")), "{what}");
    }
    // One that is in another element, or is not wanted.
    for text in [
        "<d><g><r><id>S</id><a><b>1</b></a><a/><x/><x/></r></g></d>",
        "<d><g><r><id>S</id><a><b>1</b></a></r></g><g><r><id>S</id><a><b>1</b></a></r></g></d>",
    ] {
        assert_eq!(whole(&reader("a/b"), text).good()[0], ["S", "1"]);
    }
}

#[test]
fn nil_is_empty() {
    // XML Schema Part 1: Structures, section 2.6.2.
    let nil = "<d xmlns:xsi='http://www.w3.org/2001/XMLSchema-instance'><r><a xsi:nil='true'";
    assert_eq!(cell("a", &format!("{nil}/></r></d>")), "");
    assert_eq!(cell("a", &format!("{nil}> </a></r></d>")), "");
    let what = row_fault(&reader("/d/r", &["a", "a"]), &format!("{nil}>5</a></r></d>"));
    assert!(what.contains("nil"), "{what}");
    assert_eq!(cell("a", "<d><r><a xsi:nil='false'>5</a></r></d>"), "5");
}

#[test]
fn another_layout_is_told_by_what_the_document_has() {
    let wanted = reader("/scan/plants/plant", &["id", "at"]);
    for (text, parts) in [
        ("<scn><plants><plant/></plants><x/></scn>", &["\"scn\"", "\"plants\", \"x\"", "\"/scan/plants/plant\""][..]),
        ("<scan><a/><b/><a/></scan>", &["\"/scan\"", "no element \"plants\"", "\"a\", \"b\""]),
        ("<scan/>", &["\"plants\"", "nothing"]),
    ] {
        let what = layout(&wanted, text);
        assert!(parts.iter().all(|part| what.contains(part)), "{what}");
    }
    for text in ["<scan><plants/></scan>", "<scan><a/><plants><b/></plants></scan>"] {
        assert_eq!(whole(&wanted, text).lines, 0, "{text}");
    }
    layout(&reader("/r", &["id", "at"]), "<x/>");
    layout(&reader("/d/*/r", &["id", "at"]), "<d>text</d>");
}

#[test]
fn rows_that_the_plan_ignores_are_counted() {
    let mut reader = plain();
    reader.ignore = vec![ignore_equals("@kind", " QC "), Ignore::Matches { column: "id".into(), regex: regex("^X") }];
    let text = "<d><r kind='QC'/><r><id>S1</id></r><r><id> X1</id></r><r kind='QC2'/>\
                <r kind='QC' n:kind='QC'/><r kind=' QC'><at/><at/></r></d>";
    let seen = whole(&reader, text);
    assert_eq!((seen.good().len(), seen.faults().len(), seen.counts.ignored, seen.lines), (2, 1, 3, 6));
    // A text that cannot be told is not an empty one.
    reader.ignore = vec![ignore_equals("id", "")];
    let seen = whole(&reader, "<d><r><id>1</id><id>2</id></r><r/><r><id>3</id></r></d>");
    assert_eq!((seen.good().len(), seen.faults().len(), seen.counts.ignored), (1, 1, 1));
}

/// Documents that are not well-formed, with the section that says so.
const ILL_FORMED: &[(&str, &str)] = &[
    ("2.1", ""),
    ("2.1", " \n"),
    ("2.1", "<?xml version='1.0'?>"),
    ("2.1", "<!-- only -->"),
    ("2.1", "text"),
    ("2.1", "<d/>text"),
    ("2.1", "text<d/>"),
    ("2.1", "<d/><d/>"),
    ("2.1", "<d></d><e></e>"),
    ("2.1", "<d>"),
    ("2.1", "<d><r></d>"),
    ("2.1", "<d><r></d></r>"),
    ("2.1", "<d></d></d>"),
    ("2.1", "</d>"),
    ("2.1", "<d/>&amp;"),
    ("2.1", "<![CDATA[]]><d/>"),
    ("2.2", "<d>\0</d>"),
    ("2.2", "<d>\u{1}</d>"),
    ("2.2", "<d a='\u{1f}'/>"),
    ("2.2", "<d><!--\u{b}--></d>"),
    ("2.2", "<d>\u{ffff}</d>"),
    ("2.2", "<d>\u{fffe}</d>"),
    ("2.2", "\u{feff}\u{feff}<d/>"),
    ("2.3", "<1d/>"),
    ("2.3", "<-d/>"),
    ("2.3", "<d 1a='1'/>"),
    ("2.3", "<d\u{d7}/>"),
    ("2.3", "< d/>"),
    ("2.3", "<></>"),
    ("2.4", "<d>]]></d>"),
    ("2.4", "<d>a & b</d>"),
    ("2.4", "<d>a &b</d>"),
    ("2.4", "<d>&</d>"),
    ("2.4", "<d>1 < 2</d>"),
    ("2.4", "<d>1<2</d>"),
    ("2.5", "<d><!-- a -- b --></d>"),
    ("2.5", "<d><!-- a ---></d>"),
    ("2.5", "<d><!--></d>"),
    ("2.5", "<d><!-></d>"),
    ("2.5", "<d><!-- a </d>"),
    ("2.6", "<d><??></d>"),
    ("2.6", "<d><? x?></d>"),
    ("2.6", "<d><?XML x?></d>"),
    ("2.6", "<d><?x</d>"),
    ("2.7", "<d><![CDATA[</d>"),
    ("2.7", "<d><![cdata[]]></d>"),
    ("2.7", "<d><![CDATA]]></d>"),
    ("2.8", " <?xml version='1.0'?><d/>"),
    ("2.8", "<d><?xml version='1.0'?></d>"),
    ("2.8", "<?xml version='1.0'?><?xml version='1.0'?><d/>"),
    ("2.8", "<?xml?><d/>"),
    ("2.8", "<?xml encoding='UTF-8'?><d/>"),
    ("2.8", "<?xml version='1.0'encoding='UTF-8'?><d/>"),
    ("2.8", "<?xml version='1.0' standalone='yes' encoding='UTF-8'?><d/>"),
    ("2.8", "<?xml version='1.0' encoding=''?><d/>"),
    ("2.8", "<?xml version='2.0'?><d/>"),
    ("2.8", "<?xml version='1.0' extra='1'?><d/>"),
    ("2.8", "<?xml version=1.0?><d/>"),
    ("2.8", "<!DOCTYPE d><!DOCTYPE d><d/>"),
    ("2.8", "<d/><!DOCTYPE d>"),
    ("2.8", "<d><!DOCTYPE d></d>"),
    ("2.8", "<!DOCTYPE><d/>"),
    ("2.8", "<!doctype d><d/>"),
    ("2.8", "<!DOCTYPEd><d/>"),
    ("2.8", "<!DOCTYPE d SYSTEM><d/>"),
    ("2.8", "<!DOCTYPE d PUBLIC 'p'><d/>"),
    ("2.8", "<!DOCTYPE d x><d/>"),
    ("2.8", "<!DOCTYPE d [<d/>"),
    ("2.8", "<!DOCTYPE d [] x><d/>"),
    ("2.8", "<!DOCTYPE d [<!-- -- -->]><d/>"),
    ("2.8", "<!DOCTYPE d [<?xml x?>]><d/>"),
    ("2.9", "<?xml version='1.0' standalone='maybe'?><d/>"),
    ("3.1", "<d a='1' a='2'/>"),
    ("3.1", "<d a='1' b='1' c='1' a='1'></d>"),
    ("3.1", "<d a='<'/>"),
    ("3.1", "<d a='1'b='2'/>"),
    ("3.1", "<d a=1/>"),
    ("3.1", "<d a/>"),
    ("3.1", "<d a='1/>"),
    ("3.1", "<d a='&'/>"),
    ("3.1", "<d a='&b'/>"),
    ("3.1", "<d a='&nbsp;'/>"),
    ("3.1", "<d / >"),
    ("3.1", "<d></d x>"),
    ("3.1", "<d></ d>"),
    ("3.1", "<d></D>"),
    ("3.1", "<d a='1' /b>"),
    ("4.1", "<d>&nbsp;</d>"),
    ("4.1", "<d>&#0;</d>"),
    ("4.1", "<d>&#x1F;</d>"),
    ("4.1", "<d>&#xD800;</d>"),
    ("4.1", "<d>&#x110000;</d>"),
    ("4.1", "<d>&#99999999999;</d>"),
    ("4.1", "<d>&#;</d>"),
    ("4.1", "<d>&#x;</d>"),
    ("4.1", "<d>&#X41;</d>"),
    ("4.1", "<d>&#+65;</d>"),
    ("4.1", "<d>&#xFFFF;</d>"),
    ("4.1", "<d>& amp;</d>"),
    ("4.1", "<d>&amp ;</d>"),
    ("4.1", "<d>&AMP;</d>"),
    ("4.3.3", "<?xml version='1.0' encoding='UTF-16'?><d/>"),
    ("4.3.3", "<?xml version='1.0' encoding='nobody-knows'?><d/>"),
    ("4.3.3", "\u{feff}<?xml version='1.0' encoding='ISO-8859-1'?><d/>"),
    ("Namespaces 4", "<a:b:c/>"),
    ("Namespaces 4", "<:d/>"),
    ("Namespaces 4", "<d:/>"),
    ("Namespaces 4", "<a:1/>"),
];

#[test]
fn what_is_not_well_formed_is_not_read() {
    let reader = reader("/d", &["a", "@a"]);
    for (section, text) in ILL_FORMED {
        for drip in [1, 2, 3, 64] {
            match read_all(&reader, &Drip(text.as_bytes(), drip)) {
                Err(FileFault::Unreadable(what)) => {
                    assert!(
                        what.contains("line ") && what.contains("column ") || what.contains("declaration"),
                        "{what}"
                    );
                }
                other => panic!("section {section}: {text:?} gives {other:?}"),
            }
        }
    }
}

#[test]
fn what_is_well_formed_is_read() {
    let reader = reader("/d", &["a", "@a"]);
    for text in [
        "<d/>",
        "\u{feff}<d/>",
        "<?xml version='1.0'?>\n<d/>\n",
        "<?xml version=\"1.0\" encoding=\"utf-8\" standalone='no' ?><d/>",
        "<?xml version='1.0' standalone='yes'?><d/>",
        "<?xml version='1.7'?><d/>",
        "<?xml version\n=\n'1.0'?><d/>",
        "<!-- a --><?p?><d/><!-- b - - --><?q r?> ",
        "<?xml-stylesheet href='x'?><d/>",
        "<!DOCTYPE d><d/>",
        "<!DOCTYPE d SYSTEM \"d.dtd\"><d/>",
        "<!DOCTYPE d PUBLIC '-//X//Y' 'd.dtd' ><d/>",
        "<?xml version='1.0'?><!-- a --><!DOCTYPE d [ <!-- [ENTITY] --> <?p ]?> <!ELEMENT d (#PCDATA)> ]> <d/>",
        "<d>>]]&gt;]] ></d>",
        "<d a='>' b=\"'\" c='\"' ></d >",
        "<d><?x?><?x y??></d>",
        "<d\u{b7}/>",
        "<d>\u{7f}\u{85}\u{fffd}\u{10ffff}</d>",
        "<d>&#x9;&#x10FFFF;&#0065;</d>",
        "<d><x.y-z_1/></d>",
        "<d a:x='1' b:x='2' x='3'/>",
    ] {
        let reader = if text.contains('\u{b7}') { self::reader("/*", &["a", "@a"]) } else { reader.clone() };
        for drip in [1, 2, 3, 5, 64] {
            let seen = read_all(&reader, &Drip(text.as_bytes(), drip));
            assert!(seen.as_ref().is_ok_and(|seen| seen.rows.len() == 1), "{text}: {seen:?}");
        }
    }
}

#[test]
fn nothing_is_expanded() {
    let lol = "<!DOCTYPE d [<!ENTITY a 'x'><!ENTITY b '&a;&a;'>]><d><r><id>&b;</id></r></d>";
    let what = unreadable(&plain(), lol.as_bytes());
    assert!(what.contains("entities") && what.contains("line 1"), "{what}");
    // An attribute's default would be a text that stands nowhere in the row.
    unreadable(&plain(), b"<!DOCTYPE d [<!ATTLIST r kg CDATA '5'>]><d><r/></d>");
    unreadable(&plain(), b"<!DOCTYPE d [%e;]><d><r/></d>");
    unreadable(&plain(), b"<!DOCTYPE d [<!ENTITY % e SYSTEM 'file:///etc/hosts'>%e;]><d><r/></d>");
    // What an external document type declares is unknown.
    unreadable(&plain(), b"<!DOCTYPE d SYSTEM 'd.dtd'><d><r><id>&mine;</id></r></d>");
}

#[test]
fn faults_are_told_by_line_and_column() {
    for (text, place) in [
        ("<d>\n\r\n <r a='1' \u{e9}='&x;'/></d>", "line 3, column 14: \"&x;\""),
        ("<d>\r\u{e4}]]></d>", "line 2, column 2: \"]]>\""),
        ("<d>\n<r></d>", "line 2, column 4: the end tag \"d\""),
        ("<d>\n<!-- \n- -- -->", "line 3, column 3: two hyphens"),
        ("<d>\n\u{e4}\u{1}", "line 2, column 2: the character U+0001"),
        ("<d>\n<r>\n", "line 3, column 1: the export ends, and 2 elements are not closed"),
        ("<d>\n<r a=\"1\n", "line 2, column 1: the value of an attribute does not end"),
        ("<d>\n<r a='1'\na='2'/>", "line 3, column 1: the attribute \"a\" stands twice"),
    ] {
        let what = unreadable(&plain(), text.as_bytes());
        assert!(what.contains(place), "{what}");
    }
}

#[test]
fn encodings_are_taken_from_mark_plan_and_declaration() {
    // Section 4.3.3 and appendix F.
    let declared = |name: &str| {
        format!(
            "<?xml version=\"1.0\" encoding=\"{name}\"?>\n<d><r><id>m\u{e4}n</id></r>\r\n<r><id>\u{20ac}</id></r></d>"
        )
    };
    let good = [["m\u{e4}n", "", ""], ["\u{20ac}", "", ""]];
    let check = |reader: &Reader, bytes: &[u8], encoding: &'static encoding_rs::Encoding| {
        for drip in [1, 2, 3, 7, 1000] {
            let seen = read_all(reader, &Drip(bytes, drip)).unwrap();
            assert_eq!(seen.good(), good);
            assert_eq!(seen.rows.iter().map(|row| row.line).collect::<Vec<_>>(), [2, 3]);
            for row in &seen.rows {
                let (start, end) = row.bytes.unwrap();
                let bytes = &bytes[start as usize..end as usize];
                assert_eq!(encoding.decode_without_bom_handling(bytes).0, row.raw);
            }
        }
    };
    let western = |name: &str| encoding_rs::WINDOWS_1252.encode(&declared(name)).0.into_owned();
    check(&plain(), &western("ISO-8859-1"), encoding_rs::WINDOWS_1252);
    check(&plain(), &western("windows-1252"), encoding_rs::WINDOWS_1252);
    check(&plain(), declared("UTF-8").as_bytes(), encoding_rs::UTF_8);
    check(&plain(), format!("\u{feff}{}", declared("utf-8")).as_bytes(), encoding_rs::UTF_8);
    check(&plain(), &utf16(&declared("UTF-16"), true, true), encoding_rs::UTF_16LE);
    check(&plain(), &utf16(&declared("UTF-16"), false, true), encoding_rs::UTF_16BE);
    check(&plain(), &utf16(&declared("UTF-16BE"), false, true), encoding_rs::UTF_16BE);
    for multi in [encoding_rs::GB18030, encoding_rs::GBK] {
        check(&plain(), &multi.encode(&declared(multi.name())).0, multi);
    }
    let mut named = plain();
    named.encoding = label("windows-1252");
    check(&named, &western("iso-8859-1"), encoding_rs::WINDOWS_1252);
    // The plan knows what an unknown name means.
    check(&named, &western("ANSI"), encoding_rs::WINDOWS_1252);
    named.encoding = label("utf-16be");
    check(&named, &utf16(&declared("UTF-16"), false, false), encoding_rs::UTF_16BE);
}

#[test]
fn encodings_that_disagree_are_not_read() {
    let declared = |name: &str| format!("<?xml version=\"1.0\" encoding=\"{name}\"?>\n<d/>");
    let mut named = plain();
    named.encoding = label("windows-1252");
    let what = unreadable(&named, declared("UTF-8").as_bytes());
    assert!(what.contains("UTF-8") && what.contains("the plan says windows-1252"), "{what}");
    let what = unreadable(&named, format!("\u{feff}{}", declared("windows-1252")).as_bytes());
    assert!(what.contains("the byte-order mark says UTF-8, the plan says windows-1252"), "{what}");
    let what = unreadable(&plain(), &utf16(&declared("UTF-8"), true, true));
    assert!(what.contains("UTF-8") && what.contains("the byte-order mark says UTF-16LE"), "{what}");
    let what = unreadable(&plain(), &utf16(&declared("UTF-16LE"), false, true));
    assert!(what.contains("UTF-16BE"), "{what}");
    assert!(unreadable(&plain(), declared("UTF-16").as_bytes()).contains("UTF-16"));
    assert!(unreadable(&plain(), declared("nothing").as_bytes()).contains("\"nothing\""));
    assert!(unreadable(&plain(), &utf16("<d/>", true, false)).contains("NUL"));
    let what = unreadable(&plain(), b"<d>\n<r>m\xE4n</r></d>");
    assert!(what.contains("line 2") && what.contains("offset 8") && what.contains("must name the encoding"), "{what}");
    let what = unreadable(&plain(), b"<?xml version='1.0' encoding='utf-8'?>\n<d>\xE4</d>");
    assert!(what.contains("line 2, column 4") && what.contains("offset 42 is not UTF-8"), "{what}");
    unreadable(&plain(), b"<d>\xC3");
    unreadable(&plain(), &utf16("<d>\u{10000}</d>", true, true)[..10]);
}

#[test]
fn rows_of_a_stateful_encoding_stand_at_places_of_their_own() {
    let mut reader = plain();
    reader.encoding = label("iso-2022-jp");
    // In U+30BC and its like the bytes of "<" and ">" are halves of characters.
    let row = "<r><id>\u{30bc}\u{30be}\u{30bc}</id></r>";
    let bytes = encoding_rs::ISO_2022_JP.encode(&format!("<d>{row}{row} {row}</d>")).0.into_owned();
    for drip in [1, 2, 3, 64] {
        let seen = read_all(&reader, &Drip(&bytes, drip)).unwrap();
        assert_eq!(seen.good(), [["\u{30bc}\u{30be}\u{30bc}", "", ""]; 3]);
        let places: Vec<_> = seen.rows.iter().map(|row| row.bytes.unwrap()).collect();
        assert!(places.windows(2).all(|pair| pair[0].0 < pair[0].1 && pair[0].1 <= pair[1].0), "{places:?}");
    }
}

#[test]
fn depth_is_bounded() {
    let nested = |depth: usize| format!("{}{}", "<d>".repeat(depth), "</d>".repeat(depth));
    assert_eq!(whole(&reader("/d", &["a", "b"]), nested(256)).rows.len(), 1);
    assert!(unreadable(&reader("/d", &["a", "b"]), nested(257).as_bytes()).contains("256"));
    assert!(unreadable(&reader("/d", &["a", "b"]), "<d>".repeat(100_000).as_bytes()).contains("256"));
}

#[test]
fn what_has_no_end_is_too_large() {
    let times = 20 << 10;
    let piece = &"x".repeat(1024);
    let tag = &format!("<x a='{piece}'>{piece}</x>");
    let attributes = &" a='1'".repeat(200);
    for (begin, piece, end) in [
        ("<d><r><id>1</id></r><!--", piece, "--></d>"),
        ("<d><r><id>1</id></r>", piece, "</d>"),
        ("<d><r>", tag, "</r></d>"),
        ("<d><r a='", piece, "'/></d>"),
        ("<d><r", attributes, "/></d>"),
        ("<d><?p ", piece, "?></d>"),
        ("<d><![CDATA[", piece, "]]></d>"),
        ("<!DOCTYPE d [", piece, "]><d/>"),
        ("<d>&", piece, ";</d>"),
        ("<", piece, "/>"),
        ("<d></", piece, ">"),
    ] {
        let seen = read_all(&plain(), &Long { begin, piece, times, end });
        assert!(matches!(seen, Err(FileFault::TooLarge(_))), "{begin}: {:?}", seen.map(|seen| seen.lines));
    }
    let many = read_all(&plain(), &Long { begin: "<d>", piece: tag, times, end: "<r/></d>" }).unwrap();
    assert_eq!(many.rows.len(), 1);
}

#[test]
fn what_encloses_rows_is_bounded() {
    let wanted = reader("/d/g/r", &["id", "../a"]);
    let piece = &format!("<g><a>{}</a></g>", "x".repeat(1 << 20));
    assert!(read_all(&wanted, &Long { begin: "<d>", piece, times: 60, end: "<g/></d>" }).is_ok());
    let seen = read_all(&wanted, &Long { begin: "<d>", piece, times: 70, end: "<g/></d>" });
    assert!(matches!(seen, Err(FileFault::TooLarge(_))), "{seen:?}");
    // So many that even nothing of each is much.
    let wanted = reader("/d/g/r", &["../a", "../b", "../c", "../e", "../f", "../g", "../h", "../i"]);
    let small = &"<g/>".repeat(1000);
    let seen = read_all(&wanted, &Long { begin: "<d>", piece: small, times: 1100, end: "</d>" });
    assert!(matches!(seen, Err(FileFault::TooLarge(_))), "{seen:?}");
}

#[test]
fn an_export_that_changes_between_the_passes_is_not_read() {
    /// Another document each time.
    struct Turning(std::cell::Cell<usize>);
    impl Bytes for Turning {
        fn open(&self) -> io::Result<Box<dyn Read + '_>> {
            let first = "<d><g><a>1</a></g></d>";
            let then = "<d><g><r/></g><g><r/></g></d>";
            let turn = self.0.replace(self.0.get() + 1);
            Ok(Box::new(if turn < 3 { first } else { then }.as_bytes()))
        }
    }
    let wanted = reader("/d/g/r", &["../a", "id"]);
    assert!(matches!(read_all(&wanted, &Turning(0.into())), Err(FileFault::Io(_))));
}

#[test]
fn after_a_fault_there_is_no_good_end() {
    let reader = plain();
    let bytes = b"<d><r><id>S1</id></r></d>x".to_vec();
    let mut rows = read::open(&reader, &bytes).unwrap();
    let mut row = Row::default();
    assert!(rows.next_row(&mut row).unwrap());
    for _ in 0..3 {
        assert!(matches!(rows.next_row(&mut row), Err(FileFault::Unreadable(_))));
    }
    assert_eq!((rows.lines(), rows.counts().total()), (1, 0));
}

mod whatever_the_bytes {
    use super::*;
    use proptest::prelude::*;

    const RICH: &str = "<?xml version=\"1.0\" encoding=\"UTF-8\"?>\r\n<!-- by the scanner -->\n<!DOCTYPE d>\n<d v='7'>\n \
        <r k=\"1&lt;\"><id>S1</id><at>\u{e4}&amp;&#65;</at><kg>3<!-- . -->.5</kg></r><g><r><kg><![CDATA[<9>]]></kg></r>\
        </g>\r<r><id>S2</id><kg/><?p q?></r>\n <r kind='QC'/><serial>A1</serial></d>\n<!-- end -->\n\n";

    fn samples() -> Vec<(Reader, Vec<u8>)> {
        let mut near = reader("/d/r", &["id", "at", "kg", "@k"]);
        near.ignore = vec![ignore_equals("@kind", "QC")];
        let far = reader("/d/r", &["id", "at", "kg", "../serial", "../@v"]);
        let deep = reader("/d/*/r", &["kg", "../../serial"]);
        let western = RICH.replace("UTF-8", "ISO-8859-1");
        let unsaid = RICH.replace(" encoding=\"UTF-8\"", "");
        vec![
            (near.clone(), RICH.into()),
            (far.clone(), format!("\u{feff}{RICH}").into_bytes()),
            (deep, RICH.into()),
            (near.clone(), encoding_rs::WINDOWS_1252.encode(&western).0.into_owned()),
            (far, utf16(&unsaid, true, true)),
            (near, utf16(&unsaid, false, true)),
        ]
    }

    /// The bytes of what stands behind the root element, comments included.
    fn tail(bytes: &[u8]) -> (usize, usize) {
        let wide = bytes.starts_with(b"\xFF\xFE") || bytes.starts_with(b"\xFE\xFF");
        let width = if wide { 2 } else { 1 };
        (bytes.len() - "\n<!-- end -->\n\n".len() * width, bytes.len() - "\n\n".len() * width)
    }

    #[test]
    fn a_document_cut_anywhere_is_not_read() {
        for (reader, bytes) in samples() {
            let all = read_all(&reader, &bytes).unwrap();
            assert!(all.faults().is_empty() && !all.rows.is_empty());
            let (root, end) = tail(&bytes);
            let wide = usize::from(bytes.starts_with(b"\xFF\xFE") || bytes.starts_with(b"\xFE\xFF")) + 1;
            for cut in 0..bytes.len() {
                // Behind the root element there is nothing that must be there: a comment may be cut off as a whole.
                let whole = (cut == root || cut == root + wide || cut >= end) && cut % wide == 0;
                for drip in [1, 3, 1000] {
                    match read_all(&reader, &Drip(&bytes[..cut], drip)) {
                        Ok(seen) => assert!(whole && seen.rows == all.rows, "cut at {cut}"),
                        Err(FileFault::Unreadable(what)) => assert!(!whole, "cut at {cut}: {what}"),
                        Err(other) => panic!("cut at {cut}: {other:?}"),
                    }
                }
            }
        }
    }

    #[test]
    fn however_few_bytes_come_at_a_time_all_is_the_same() {
        for (reader, bytes) in samples() {
            let all = read_all(&reader, &bytes).unwrap();
            for drip in 1..6 {
                assert_eq!(read_all(&reader, &Drip(&bytes, drip)).unwrap().rows, all.rows);
            }
        }
    }

    /// An element of a random document.
    #[derive(Debug, Clone)]
    struct Element {
        name: String,
        attributes: Vec<(String, String)>,
        text: String,
        children: Vec<Element>,
    }

    fn name() -> impl Strategy<Value = String> {
        prop_oneof![3 => "[abc]", 1 => "[a-c][a-c\u{e4}._0-9-]{0,3}"]
    }

    fn value() -> impl Strategy<Value = String> {
        "[ab<>&'\"\u{e4}\u{20ac}\u{10000}\t\n\r \\]]{0,8}"
    }

    fn element() -> impl Strategy<Value = Element> {
        let attributes = || prop::collection::btree_map(name(), value(), 0..3);
        let leaf = (name(), attributes(), value()).prop_map(|(name, attributes, text)| Element {
            name,
            attributes: attributes.into_iter().collect(),
            text,
            children: vec![],
        });
        leaf.prop_recursive(3, 20, 4, move |inner| {
            (name(), prop::collection::btree_map(name(), value(), 0..3), prop::collection::vec(inner, 1..4)).prop_map(
                |(name, attributes, children)| Element {
                    name,
                    attributes: attributes.into_iter().collect(),
                    text: String::new(),
                    children,
                },
            )
        })
    }

    /// Choices of how to write a thing, from random bytes.
    struct Ways<'a>(&'a [u8], usize);

    impl Ways<'_> {
        fn one_of(&mut self, count: u8) -> u8 {
            self.1 += 1;
            self.0.get(self.1 % self.0.len().max(1)).copied().unwrap_or_default().wrapping_add(self.1 as u8) % count
        }

        fn noise(&mut self) -> &'static str {
            ["", "", "", "<!-- <a>9</a> - -->", "<?p ?9>?>", "<!---->"][usize::from(self.one_of(6))]
        }

        fn blank(&mut self) -> &'static str {
            ["", " ", "\n", "\r\n\t"][usize::from(self.one_of(4))]
        }

        /// Text that reads as `text`, given that line ends and blanks in it may be normalised if they stand as they are.
        fn write_text(&mut self, text: &str, out: &mut String) {
            for character in text.chars() {
                out.push_str(self.noise());
                let plain = !matches!(character, '<' | '&' | '\r' | ']' | '>');
                match (self.one_of(4), character) {
                    (0, _) => out.push_str(&format!("&#{};", u32::from(character))),
                    (1, _) => out.push_str(&format!("&#x{:X};", u32::from(character))),
                    (2, '\n') => out.push_str("\r\n"),
                    (2, character) if character != '\r' => out.push_str(&format!("<![CDATA[{character}]]>")),
                    (_, '<') => out.push_str("&lt;"),
                    (_, '>') => out.push_str("&gt;"),
                    (_, '&') => out.push_str("&amp;"),
                    (_, character) if plain => out.push(character),
                    (_, character) => out.push_str(&format!("&#{};", u32::from(character))),
                }
            }
            out.push_str(self.noise());
        }

        fn write_value(&mut self, value: &str, out: &mut String) {
            let quote = if self.one_of(2) == 0 { '"' } else { '\'' };
            out.push(quote);
            for character in value.chars() {
                let must = matches!(character, '<' | '&' | '\t' | '\n' | '\r') || character == quote;
                match (self.one_of(3), character) {
                    // A line feed behind a carriage return would be one line end with it.
                    (0, ' ') if out.ends_with('\r') => out.push('\t'),
                    (0, ' ') => out.push_str(["\n", "\t", "\r\n", "\r"][usize::from(self.one_of(4))]),
                    (1, '"') => out.push_str("&quot;"),
                    (1, '\'') => out.push_str("&apos;"),
                    (0, _) => out.push_str(&format!("&#{};", u32::from(character))),
                    _ if must => out.push_str(&format!("&#x{:x};", u32::from(character))),
                    _ => out.push(character),
                }
            }
            out.push(quote);
        }

        fn write(&mut self, element: &Element, out: &mut String) {
            let prefix = ["", "", "p:"][usize::from(self.one_of(3))];
            out.push_str(&format!("<{prefix}{}", element.name));
            for (name, value) in &element.attributes {
                out.push_str([" ", "\n", "\r\n "][usize::from(self.one_of(3))]);
                out.push_str(&format!(
                    "{}{name}{}={}",
                    ["", "q:"][usize::from(self.one_of(2))],
                    self.blank(),
                    self.blank()
                ));
                self.write_value(value, out);
            }
            out.push_str(self.blank());
            if element.text.is_empty() && element.children.is_empty() && self.one_of(2) == 0 {
                out.push_str("/>");
                return;
            }
            out.push('>');
            self.write_text(&element.text, out);
            for child in &element.children {
                out.push_str(self.blank());
                out.push_str(self.noise());
                self.write(child, out);
            }
            if !element.children.is_empty() {
                out.push_str(self.blank());
            }
            out.push_str(&format!("</{prefix}{}{}>", element.name, self.blank()));
        }
    }

    /// What the paths lead to, from the tree itself: `None` where it must be a fault of the row.
    fn expected(element: &Element, path: &[&str]) -> Option<String> {
        let mut found = Vec::new();
        seek(element, path, &mut found);
        match found.as_slice() {
            [] => Some(String::new()),
            [one] => Some(one.clone()),
            _ => None,
        }
    }

    fn seek(element: &Element, path: &[&str], found: &mut Vec<String>) {
        match path {
            [] if element.children.is_empty() => found.push(element.text.trim().to_owned()),
            [] => found.push("<".to_owned()),
            [last] if last.starts_with('@') => {
                let named = element.attributes.iter().filter(|(name, _)| *name == last[1..]);
                found.extend(named.map(|(_, value)| value.trim().to_owned()));
            }
            [first, rest @ ..] => {
                element.children.iter().filter(|child| child.name == *first).for_each(|child| seek(child, rest, found));
            }
        }
    }

    const PATHS: [&str; 8] = [".", "a", "b", "a/b", "a/b/c", "@a", "a/@b", "../h/a"];

    proptest! {
        #![proptest_config(ProptestConfig { cases: 1000, failure_persistence: None, ..ProptestConfig::default() })]

        #[test]
        fn random_bytes_are_accounted_for(which in 0..6_usize, bytes in prop::collection::vec(any::<u8>(), 0..300)) {
            let (reader, _) = samples().swap_remove(which);
            let _ = read_all(&reader, &bytes);
        }

        #[test]
        fn random_markup_is_accounted_for(
            which in 0..6_usize,
            body in "(<|>|/|<d>|</d>|<r>|</r>|<r k='|'/>|<!--|-->|<!DOCTYPE d|\\[|\\]>|<!E|<!ELEMENT|<\\?|\\?>|<!\\[CDATA\\[|\\]\\]>|&|;|amp|#x41| |a|'|\"|=|\r|\n|-|\u{e4}){0,60}",
            drip in 1..6_usize,
        ) {
            let (reader, _) = samples().swap_remove(which);
            let plain = read_all(&reader, &body.clone().into_bytes()).map(|seen| seen.rows);
            let dripped = read_all(&reader, &Drip(body.as_bytes(), drip)).map(|seen| seen.rows);
            prop_assert_eq!(format!("{:?}", plain), format!("{:?}", dripped));
        }

        #[test]
        fn mutated_documents_are_accounted_for(
            which in 0..6_usize,
            edits in prop::collection::vec((any::<prop::sample::Index>(), any::<u8>(), 0..3_u8), 1..6),
            drip in 1..6_usize,
        ) {
            let (reader, mut bytes) = samples().swap_remove(which);
            let all = read_all(&reader, &bytes).unwrap().lines;
            for (at, byte, kind) in edits {
                let at = at.index(bytes.len());
                match kind {
                    0 => bytes[at] = byte,
                    1 => bytes.insert(at, byte),
                    _ => drop(bytes.remove(at)),
                }
            }
            let plain = read_all(&reader, &bytes);
            prop_assert!(plain.as_ref().map_or(0, |seen| seen.lines) <= all);
            let dripped = read_all(&reader, &Drip(&bytes, drip)).map(|seen| seen.rows);
            prop_assert_eq!(format!("{:?}", plain.map(|seen| seen.rows)), format!("{:?}", dripped));
        }

        #[test]
        fn random_documents_say_what_their_trees_say(
            rows in prop::collection::vec(element(), 0..4),
            head in element(),
            ways in prop::collection::vec(any::<u8>(), 1..60),
            drip in 1..6_usize,
        ) {
            let mut ways = Ways(&ways, 0);
            let mut text = "<?xml version='1.0'?><d>".to_owned();
            let behind = ways.one_of(2) == 0;
            let head = Element { name: "h".into(), ..head };
            if !behind {
                ways.write(&head, &mut text);
            }
            for row in &rows {
                text.push_str(ways.blank());
                ways.write(&Element { name: "r".into(), ..row.clone() }, &mut text);
            }
            if behind {
                ways.write(&head, &mut text);
            }
            text.push_str("</d>");
            let reader = reader("/d/r", &PATHS);
            let seen = read_all(&reader, &Drip(text.as_bytes(), drip)).map_err(|fault| {
                TestCaseError::fail(format!("{fault} in {text}"))
            })?;
            prop_assert_eq!(seen.rows.len(), rows.len());
            for (row, element) in seen.rows.iter().zip(&rows) {
                let wanted: Vec<Option<String>> = PATHS.iter().map(|path| match path.strip_prefix("../h/") {
                    Some(path) => expected(&head, &[path]),
                    None if *path == "." => expected(element, &[]),
                    None => expected(element, &path.split('/').collect::<Vec<_>>()),
                }).collect();
                prop_assert_eq!(row.fault.is_some(), wanted.iter().any(Option::is_none), "{}", text);
                for (cell, wanted) in row.cells.iter().zip(&wanted) {
                    match wanted.as_deref() {
                        None => prop_assert_eq!(cell, ""),
                        Some("<") if cell.starts_with('<') => {}
                        Some(wanted) => prop_assert_eq!(cell, wanted, "{}", text),
                    }
                }
                let (start, end) = row.bytes.unwrap();
                prop_assert_eq!(row.raw.as_bytes(), &text.as_bytes()[start as usize..end as usize]);
                prop_assert_eq!(read_common::physical_lines(format!("{}.", &text[..start as usize]).as_bytes()), row.line);
            }
        }
    }
}
