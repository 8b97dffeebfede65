//! A workbook of 100,000 rows and 8 columns read to its end, against calamine's bare reader of cells, opening
//! included, alternately in the same run. Wanted: at most 1.5 times the time.
//!
//! Where other programs are busy, the ratio of time on the processors is the one to go by: rows are read by two threads
//! and bare cells by one, so that the ratio of wall times says as much about who else is waiting.
//!
//! `cargo bench -p revisant-tests --bench workbook`
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic, reason = "a bench that cannot go on stops")]

use std::fmt::Write as _;
use std::fs;
use std::io::{Cursor, Write as _};
use std::time::Instant;

use calamine::Reader as _;
use revisant_daemon::intake::read::{self, Row};
use revisant_schema::plan::{self, Reader};
use revisant_tests::bench::{machine, median};
use zip::ZipWriter;
use zip::write::SimpleFileOptions;

const ROWS: usize = 100_000;
const COLUMNS: [&str; 8] = ["Subject", "Visit", "Taken", "Trial", "Left", "Right", "Note", "Tester"];
const ROUNDS: usize = 7;

fn main() {
    let workbook = workbook();
    println!("{}; {ROWS} rows of {} cells, {:.1} MB", machine(), COLUMNS.len(), workbook.len() as f64 / 1e6);
    let reader = reader();
    let (mut ours, mut bare, mut busy) = (vec![], vec![], vec![]);
    for round in 1..=ROUNDS {
        let (theirs, their_busy) = timed(|| cells_of(&workbook));
        let (mine, my_busy) = timed(|| rows_of(&reader, &workbook));
        println!(
            "round {round}: rows {mine:.3} s, bare cells {theirs:.3} s, ratio {:.2}; busy {my_busy:.2} s and {their_busy:.2} s",
            mine / theirs
        );
        ours.push(mine);
        bare.push(theirs);
        busy.push(my_busy / their_busy);
    }
    println!("workbook: ratio of medians {:.2} (wanted 1.5 or less)", median(ours) / median(bare));
    println!("workbook: median ratio of time on the processors {:.2} (wanted 1.5 or less)", median(busy));
    println!("workbook: peak memory {}, with the making of the workbook and both readers", peak());
}

/// Wall time, and time on the processors where the kernel tells it.
fn timed(work: impl FnOnce() -> usize) -> (f64, f64) {
    let (busy, start) = (ticks(), Instant::now());
    let count = work();
    let seconds = start.elapsed().as_secs_f64();
    assert!(count >= ROWS, "{count} rows or cells");
    (seconds, (ticks() - busy) as f64 / 100.0)
}

/// This process's time on the processors, in hundredths of a second (proc(5): fields 14 and 15 of stat).
fn ticks() -> u64 {
    let stat = fs::read_to_string("/proc/self/stat").unwrap_or_default();
    let fields = stat.rsplit_once(')').map(|(_, rest)| rest.split_whitespace().collect::<Vec<_>>()).unwrap_or_default();
    fields.iter().skip(11).take(2).filter_map(|field| field.parse::<u64>().ok()).sum()
}

fn peak() -> String {
    let status = fs::read_to_string("/proc/self/status").unwrap_or_default();
    let peak = status.lines().find_map(|line| line.strip_prefix("VmHWM:")).unwrap_or("not known");
    peak.trim().to_owned()
}

fn rows_of(reader: &Reader, workbook: &Vec<u8>) -> usize {
    let mut rows = read::open(reader, workbook).expect("the table");
    let (mut row, mut count) = (Row::default(), 0);
    while rows.next_row(&mut row).expect("a row") {
        assert!(row.fault.is_none() && !row.cell(0).is_empty());
        count += 1;
    }
    count
}

fn cells_of(workbook: &[u8]) -> usize {
    let mut book: calamine::Xlsx<_> = calamine::open_workbook_from_rs(Cursor::new(workbook)).expect("a workbook");
    let name = book.sheet_names()[0].clone();
    let mut cells = book.worksheet_cells_reader(&name).expect("a sheet");
    let mut count = 0;
    while let Some(cell) = cells.next_cell().expect("a cell") {
        count += usize::from(!matches!(cell.get_value(), calamine::DataRef::Empty));
    }
    count
}

fn reader() -> Reader {
    let text = "[study]\ncode = \"BOOK\"\ntitle = \"A large workbook\"\ntime_zone = \"Europe/London\"\n\
         [subject]\npattern = 'S-\\d{3}'\nnormalise = [\"trim\"]\nanchor = \"enrolment\"\n\
         [[measure]]\ncode = \"grip\"\nunit = \"kg\"\nreplicates = 100\nconditions = { hand = [\"left\", \"right\"] }\n\
         [[visit]]\ncode = \"week-1\"\nday = 0\n\
         [[instrument]]\ncode = \"grip\"\nfolder = \"exports\"\n\
         [instrument.reader]\nformat = \"workbook\"\nheader = { row = 1 }\nsubject = { column = \"Subject\" }\n\
         visit = { column = \"Visit\" }\ntaken_at = { column = \"Taken\", format = \"serial\" }\n\
         replicate = { column = \"Trial\" }\noperator = { column = \"Tester\" }\n\
         [[instrument.reader.value]]\nmeasure = \"grip\"\ncolumn = \"Left\"\ncondition = { hand = \"left\" }\n\
         [[instrument.reader.value]]\nmeasure = \"grip\"\ncolumn = \"Right\"\ncondition = { hand = \"right\" }\n";
    let files = plan::PlanFiles { main: text.to_owned(), readers: vec![] };
    let (mut plan, _) = plan::parse(&files).expect("a sound plan");
    plan.instruments.swap_remove(0).reader
}

/// As the usual programs write it: texts shared, dates as day numbers with a format, every cell with its name.
fn workbook() -> Vec<u8> {
    const MAIN: &str = "http://schemas.openxmlformats.org/spreadsheetml/2006/main";
    const OFFICE: &str = "http://schemas.openxmlformats.org/officeDocument/2006/relationships";
    let relations = |list: &str| {
        format!(
            "<Relationships xmlns=\"http://schemas.openxmlformats.org/package/2006/relationships\">{list}</Relationships>"
        )
    };
    let relation = |id: &str, kind: &str, target: &str| {
        format!("<Relationship Id=\"{id}\" Type=\"{OFFICE}/{kind}\" Target=\"{target}\"/>")
    };
    let (sheet, texts) = sheet_and_texts();
    let parts = [
        ("_rels/.rels", relations(&relation("r", "officeDocument", "xl/workbook.xml"))),
        (
            "xl/_rels/workbook.xml.rels",
            relations(
                &(relation("a", "worksheet", "worksheets/sheet1.xml")
                    + &relation("b", "sharedStrings", "sharedStrings.xml")),
            ),
        ),
        (
            "xl/workbook.xml",
            format!(
                "<workbook xmlns=\"{MAIN}\" xmlns:r=\"{OFFICE}\"><sheets><sheet name=\"S\" sheetId=\"1\" r:id=\"a\"/></sheets></workbook>"
            ),
        ),
        ("xl/sharedStrings.xml", format!("<sst xmlns=\"{MAIN}\">{texts}</sst>")),
        (
            "xl/styles.xml",
            format!(
                "<styleSheet xmlns=\"{MAIN}\"><cellXfs><xf numFmtId=\"0\"/><xf numFmtId=\"22\"/></cellXfs></styleSheet>"
            ),
        ),
        (
            "xl/worksheets/sheet1.xml",
            format!(
                "<worksheet xmlns=\"{MAIN}\"><dimension ref=\"A1:H{}\"/><sheetData>{sheet}</sheetData></worksheet>",
                ROWS + 1
            ),
        ),
    ];
    let mut writer = ZipWriter::new(Cursor::new(vec![]));
    for (name, text) in parts {
        writer.start_file(name, SimpleFileOptions::default()).expect("a part");
        writer.write_all(text.as_bytes()).expect("its bytes");
    }
    writer.finish().expect("an archive").into_inner()
}

/// The rows, and the texts that they share: labels, 500 subjects, 20 visits and 1,000 notes.
fn sheet_and_texts() -> (String, String) {
    let (mut sheet, mut texts) = (String::new(), String::new());
    for label in COLUMNS {
        let _ = write!(texts, "<si><t>{label}</t></si>");
    }
    (0..500).for_each(|subject| {
        let _ = write!(texts, "<si><t>S-{subject:03}</t></si>");
    });
    (0..20).for_each(|visit| {
        let _ = write!(texts, "<si><t>week-{visit}</t></si>");
    });
    (0..1000).for_each(|note| {
        let _ = write!(texts, "<si><t xml:space=\"preserve\">note number {note} </t></si>");
    });
    sheet.push_str("<row r=\"1\">");
    for (text, letter) in ('A'..='H').enumerate() {
        let _ = write!(sheet, "<c r=\"{letter}1\" t=\"s\"><v>{text}</v></c>");
    }
    sheet.push_str("</row>");
    for row in 2..ROWS + 2 {
        let (subject, visit, note) = (8 + row % 500, 508 + row % 20, 528 + row * 7 % 1000);
        let (day, left, right) =
            (45_000.0 + row as f64 / 1440.0, 20.0 + (row % 397) as f64 / 10.0, 21.0 + (row % 211) as f64 / 7.0);
        let _ = write!(
            sheet,
            "<row r=\"{row}\" spans=\"1:8\"><c r=\"A{row}\" t=\"s\"><v>{subject}</v></c><c r=\"B{row}\" t=\"s\"><v>{visit}</v></c>\
             <c r=\"C{row}\" s=\"1\"><v>{day}</v></c><c r=\"D{row}\"><v>{}</v></c><c r=\"E{row}\"><v>{left}</v></c>\
             <c r=\"F{row}\"><v>{right}</v></c><c r=\"G{row}\" t=\"s\"><v>{note}</v></c><c r=\"H{row}\" t=\"s\"><v>{note}</v></c></row>",
            1 + row % 100
        );
    }
    (sheet, texts)
}
