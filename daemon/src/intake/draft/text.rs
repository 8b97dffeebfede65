//! Delimited text: encoding, delimiter, header, row of units, preamble and footer of the samples.
//!
//! Invariant: what is found is only proposed; every sample is read again by the reader itself under what was found, and
//! one that it cannot read is named.

use std::collections::BTreeMap;

use csv_nose::{SampleSize, Sniffer};
use revisant_schema::plan::{Encoding, Format, Header, units};

use super::grid::Layout;
use super::words::fold;
use super::{Sample, units::unit_code};
use crate::intake::read::cells::{Cells, Split};

/// How much of each sample is looked at for its dialect.
const SNIFFED: usize = 256 * 1024;
/// Lines among which the header is looked for.
const HEAD: usize = 200;

/// A sample's text, and how it was decoded.
pub struct Decoded {
    /// The text.
    pub text: String,
    /// The encoding to be named in the plan.
    pub encoding: Encoding,
    /// Nobody said what it is: the encoding is a supposition.
    pub supposed: bool,
}

/// Decodes a sample: by its mark, as UTF-8 or UTF-16, else as Windows-1252, which is a supposition. `None` when it is
/// no text.
pub fn decode(bytes: &[u8]) -> Option<Decoded> {
    let auto = |text: String| Some(Decoded { text, encoding: Encoding::Auto, supposed: false });
    if let Some((encoding, mark)) = encoding_rs::Encoding::for_bom(bytes) {
        let (text, faulty) = encoding.decode_without_bom_handling(bytes.get(mark..)?);
        return if faulty { None } else { auto(text.into_owned()) };
    }
    if let Some(encoding) = wide(bytes) {
        let (text, _) = encoding.decode_without_bom_handling(bytes);
        return Some(Decoded { text: text.into_owned(), encoding: Encoding::Label(encoding), supposed: false });
    }
    if bytes.contains(&0) {
        return None;
    }
    if let Ok(text) = std::str::from_utf8(bytes) {
        return auto(text.to_owned());
    }
    let (text, _) = encoding_rs::WINDOWS_1252.decode_without_bom_handling(bytes);
    // What is no text in any encoding has control characters all over.
    let controls = text.chars().filter(|c| c.is_control() && !"\r\n\t\u{c}\u{1a}".contains(*c)).count();
    if controls * 100 > text.chars().count() {
        return None;
    }
    Some(Decoded { text: text.into_owned(), encoding: Encoding::Label(encoding_rs::WINDOWS_1252), supposed: true })
}

/// UTF-16 without a mark: every other byte is mostly zero.
fn wide(bytes: &[u8]) -> Option<&'static encoding_rs::Encoding> {
    let head = bytes.get(..bytes.len().min(4096) & !1)?;
    if head.len() < 8 {
        return None;
    }
    let zeros = |odd: usize| head.iter().skip(odd).step_by(2).filter(|byte| **byte == 0).count() * 2;
    match (zeros(0) * 10 > head.len() * 7, zeros(1) * 10 > head.len() * 7) {
        (false, true) => Some(encoding_rs::UTF_16LE),
        (true, false) => Some(encoding_rs::UTF_16BE),
        _ => None,
    }
}

/// A delimiter that can part cells, as the method of table uniformity finds it in one text.
pub fn sniff(text: &str) -> Option<u8> {
    let mut end = text.len().min(SNIFFED);
    while !text.is_char_boundary(end) {
        end -= 1;
    }
    let mut sniffer = Sniffer::new();
    sniffer.sample_size(SampleSize::Bytes(SNIFFED));
    let text = text.get(..end)?;
    let found = sniffer.sniff_bytes(text.as_bytes()).ok()?.dialect.delimiter;
    found.is_ascii().then(|| overruled(text, found).unwrap_or(found))
}

/// The delimiters that instruments use.
const USUAL: [u8; 4] = [b';', b'\t', b',', b'|'];

/// Another delimiter than the one found, when a header of labels and nearly all lines under it have the same, larger
/// number of cells by it, while by the one found the header has not as many cells as its rows. The method of table
/// uniformity looks at rows alone, and so takes the decimal commas of a table parted by semicolons for its delimiter.
fn overruled(text: &str, found: u8) -> Option<u8> {
    let lines: Vec<&str> = physical(text).filter(|line| !line.trim().is_empty()).collect();
    let by_found = cell_counts(&lines, found);
    let usual = |counts: &[usize]| {
        let mut tally: BTreeMap<usize, usize> = BTreeMap::new();
        counts.iter().filter(|count| **count > 1).for_each(|count| *tally.entry(*count).or_default() += 1);
        tally.into_iter().max_by_key(|(_, lines)| *lines).map_or(0, |(width, _)| width)
    };
    let found_width = usual(&by_found);
    USUAL.into_iter().filter(|other| *other != found).find(|other| {
        let counts = cell_counts(&lines, *other);
        let width = usual(&counts);
        let Some(first) = counts.iter().position(|count| *count == width) else { return false };
        let below = counts.get(first..).unwrap_or_default();
        let alike = below.iter().filter(|count| **count == width).count();
        let labels = split(lines.get(first).copied().unwrap_or_default(), *other).concat();
        let is_header = labels.len() >= 2 && labels.iter().all(|label| !is_datum(label));
        width >= 3
            && width > found_width
            && alike >= 3
            && alike * 10 >= below.len() * 8
            && is_header
            && by_found.get(first).is_some_and(|count| *count != found_width)
    })
}

/// How many cells each line has, empty ones too.
fn cell_counts(lines: &[&str], delimiter: u8) -> Vec<usize> {
    let mut cells = Cells::new(delimiter);
    lines
        .iter()
        .map(|line| {
            cells.split(line, 0);
            cells.count()
        })
        .collect()
}

/// The physical lines.
pub fn physical(text: &str) -> impl Iterator<Item = &str> {
    text.split('\n').flat_map(|line| line.strip_suffix('\r').unwrap_or(line).split('\r'))
}

/// The cells of each line, quotes over several lines aside.
pub fn split(text: &str, delimiter: u8) -> Vec<Vec<String>> {
    let mut cells = Cells::new(delimiter);
    physical(text)
        .map(|line| {
            let line = line.trim_start_matches(['\u{feff}', '\u{c}']);
            if cells.split(line, 0) == Split::Whole { cells.texts(line) } else { vec![] }
        })
        .collect()
}

/// Where the header of one sample stands, and what it says.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Head {
    /// Its line, from 0; `None`: there is no header.
    pub line: Option<usize>,
    /// Its labels.
    pub labels: Vec<String>,
}

/// The usual number of cells in a line that has several.
fn width(lines: &[Vec<String>]) -> usize {
    let mut counts: BTreeMap<usize, usize> = BTreeMap::new();
    for line in lines.iter().filter(|line| line.len() > 1) {
        *counts.entry(line.len()).or_default() += 1;
    }
    // Cells at the end may be empty, so a wide line speaks for itself and for the narrower ones.
    counts.into_iter().max_by_key(|(width, count)| (*count, *width)).map_or(0, |(width, _)| width)
}

/// Whether a text is a number, a date or a time rather than a label.
pub fn is_datum(text: &str) -> bool {
    let digits = text.chars().filter(char::is_ascii_digit).count();
    let letters = text.chars().filter(|c| c.is_alphabetic()).count();
    digits > 0 && digits > letters * 2 && (letters == 0 || digits >= 4)
}

/// Finds the header: the first line that fills the table's width with labels that differ.
pub fn head(lines: &[Vec<String>]) -> Option<Head> {
    let width = width(lines);
    if width < 2 {
        return None;
    }
    let wide = |line: &Vec<String>| line.iter().filter(|cell| !cell.is_empty()).count() * 5 >= width * 3;
    let labels = |line: &Vec<String>| {
        let filled: Vec<&String> = line.iter().filter(|cell| !cell.is_empty()).collect();
        let distinct: std::collections::BTreeSet<String> = filled.iter().map(|cell| fold(cell)).collect();
        filled.iter().all(|cell| !is_datum(cell)) && distinct.len() * 10 >= filled.len() * 7
    };
    let first = lines.iter().take(HEAD).position(wide)?;
    let line = lines.get(first)?;
    if labels(line) {
        return Some(Head { line: Some(first), labels: line.clone() });
    }
    Some(Head { line: None, labels: (1..=width).map(|number| number.to_string()).collect() })
}

/// Whether a line under the header is a row of units: what stands in it are units or nothing, and there is one.
pub fn is_units_row(line: &[String], below: &[Vec<String>]) -> bool {
    let filled: Vec<(usize, &String)> = line.iter().enumerate().filter(|(_, cell)| !cell.is_empty()).collect();
    let unit = |text: &str| unit_code(text).is_some_and(|code| units::is_ucum(&code));
    let above_numbers = |column: usize| {
        let cells = below.iter().take(20).filter_map(|line| line.get(column)).filter(|cell| !cell.is_empty());
        cells.clone().count() > 0 && cells.clone().filter(|cell| is_datum(cell)).count() * 2 > cells.count()
    };
    let units = filled.iter().filter(|(column, cell)| unit(cell) && above_numbers(*column)).count();
    units > 0 && units * 2 >= filled.len() && filled.iter().all(|(_, cell)| !is_datum(cell))
}

/// What a line below the table begins with, when the same ends the table in every sample that has one.
pub fn footer(samples: &[(&[Vec<String>], &[String])]) -> Option<String> {
    let mut found: Option<(String, usize)> = None;
    for (rows, lines) in samples {
        let Some(at) = rows.iter().rposition(|row| !row.is_empty()) else { continue };
        let start = foot_of(rows, at, lines)?;
        match &found {
            Some((known, _)) if *known != start => return None,
            Some((_, count)) => found = Some((start, count + 1)),
            None => found = Some((start, 1)),
        }
    }
    found.map(|(start, _)| start)
}

/// The words with which the last line begins, when it stands out from the rows above it.
fn foot_of(rows: &[Vec<String>], at: usize, lines: &[String]) -> Option<String> {
    let filled = |row: &Vec<String>| row.iter().filter(|cell| !cell.is_empty()).count();
    let last = rows.get(at)?;
    let usual = rows.iter().take(at).map(filled).max().unwrap_or(0);
    let line = lines.get(at)?;
    if filled(last) * 2 > usual || !line.starts_with(|c: char| !c.is_ascii_digit()) {
        return None;
    }
    let words: Vec<&str> = last.first()?.split_whitespace().take_while(|word| !is_datum(word)).take(4).collect();
    let start = words.join(" ");
    let alone = rows.iter().take(at).all(|row| row.first().is_none_or(|cell| !cell.starts_with(&start)));
    (start.chars().count() >= 3 && alone).then_some(start)
}

/// What the delimited samples have in common.
pub struct Delimited {
    /// The layout.
    pub layout: Layout,
    /// The columns of each sample; empty for one that is laid out otherwise.
    pub columns: Vec<Vec<String>>,
    /// Samples that are no such text, and why.
    pub refused: Vec<(usize, String)>,
    /// The encoding is a supposition.
    pub supposed: bool,
    /// Samples for which another delimiter seemed likelier.
    pub other_delimiter: Vec<usize>,
}

/// One sample taken apart.
struct Parsed {
    sample: usize,
    rows: Vec<Vec<String>>,
    lines: Vec<String>,
    head: Head,
}

/// Finds the layout of those samples that `which` names; `None` when none of them is a table.
pub fn delimited(samples: &[Sample], which: &[usize]) -> Option<Delimited> {
    let mut refused = vec![];
    let mut texts = vec![];
    for (index, sample) in which.iter().filter_map(|at| Some((*at, samples.get(*at)?))) {
        match decode(&sample.bytes) {
            Some(decoded) if !decoded.text.trim().is_empty() => texts.push((index, decoded)),
            Some(_) => refused.push((index, "it is empty".to_owned())),
            None => refused.push((index, "it is no text".to_owned())),
        }
    }
    let named = texts.iter().find(|(_, decoded)| decoded.encoding != Encoding::Auto);
    let (encoding, supposed) = named.map_or((Encoding::Auto, false), |(_, it)| (it.encoding, it.supposed));
    if texts.iter().filter(|(_, it)| is_fixed_width(&it.text)).count() * 2 > texts.len() {
        return fixed_width(samples, &texts, encoding, supposed, refused);
    }
    let votes: Vec<(usize, Option<u8>)> = texts.iter().map(|(index, it)| (*index, sniff(&it.text))).collect();
    let delimiter = elect(&votes, &texts)?;
    let mut parsed = vec![];
    for (index, decoded) in &texts {
        let rows = split(&decoded.text, delimiter);
        let lines: Vec<String> = physical(&decoded.text).map(str::to_owned).collect();
        match head(&rows) {
            Some(head) => parsed.push(Parsed { sample: *index, rows, lines, head }),
            None => refused.push((*index, "no table is found in it".to_owned())),
        }
    }
    let common = common_labels(&parsed)?;
    let fits = |it: &Parsed| it.head.labels.iter().any(|label| !label.is_empty() && common.contains(label));
    let alike: Vec<&Parsed> = parsed.iter().filter(|it| it.head.labels == common).collect();
    let layout = layout(delimiter, encoding, &alike, &common);
    let mut columns = vec![vec![]; samples.len()];
    for it in parsed.iter().filter(|it| fits(it)) {
        if let Some(place) = columns.get_mut(it.sample) {
            // A column that only an odd one out has is no column of the instrument.
            *place = nameable(&it.head.labels).into_iter().filter(|label| common.contains(label)).collect();
        }
    }
    let laid_out_otherwise = parsed.iter().filter(|it| !fits(it));
    refused.extend(laid_out_otherwise.map(|it| (it.sample, "its header is another one".to_owned())));
    let other_delimiter =
        votes.iter().filter(|(_, vote)| vote.is_some_and(|vote| vote != delimiter)).map(|(index, _)| *index).collect();
    Some(Delimited { layout, columns, refused, supposed, other_delimiter })
}

/// The texts of a line that are parted by two or more blanks.
fn parted(line: &str) -> Vec<String> {
    line.split("  ").map(str::trim).filter(|part| !part.is_empty()).map(str::to_owned).collect()
}

/// Whether most lines are texts in columns that blanks part, and no delimiter parts more.
fn is_fixed_width(text: &str) -> bool {
    let lines: Vec<&str> = physical(text).filter(|line| !line.trim().is_empty()).take(400).collect();
    let columns = lines.iter().filter(|line| parted(line).len() >= 3).count();
    let by_mark = |mark: u8| {
        let counts = cell_counts(&lines, mark);
        counts.iter().filter(|count| **count >= 3).count()
    };
    columns * 10 >= lines.len() * 5 && USUAL.iter().all(|mark| by_mark(*mark) * 2 < columns)
}

/// Finds the layout of text in columns: the header is the line with most labels.
fn fixed_width(
    samples: &[Sample],
    texts: &[(usize, Decoded)],
    encoding: Encoding,
    supposed: bool,
    mut refused: Vec<(usize, String)>,
) -> Option<Delimited> {
    let mut parsed = vec![];
    for (index, decoded) in texts {
        let lines: Vec<String> = physical(&decoded.text).map(str::to_owned).collect();
        let rows: Vec<Vec<String>> = lines.iter().map(|line| parted(line)).collect();
        match head(&rows) {
            Some(head) => parsed.push(Parsed { sample: *index, rows, lines, head }),
            None => refused.push((*index, "no table is found in it".to_owned())),
        }
    }
    let common = common_labels(&parsed)?;
    let alike: Vec<&Parsed> = parsed.iter().filter(|it| it.head.labels == common && it.head.line.is_some()).collect();
    if alike.is_empty() {
        return None;
    }
    let layout = Layout {
        format: Format::FixedWidth { columns: vec![] },
        units_row: false,
        ..layout(b' ', encoding, &alike, &common)
    };
    let mut columns = vec![vec![]; samples.len()];
    for it in &parsed {
        match columns.get_mut(it.sample) {
            Some(place) if it.head.labels == common => *place = nameable(&it.head.labels),
            _ => refused.push((it.sample, "its header is another one".to_owned())),
        }
    }
    Some(Delimited { layout, columns, refused, supposed, other_delimiter: vec![] })
}

/// The delimiter that most samples have; among equals the one under which more lines have the same number of cells.
fn elect(votes: &[(usize, Option<u8>)], texts: &[(usize, Decoded)]) -> Option<u8> {
    let mut counts: BTreeMap<u8, usize> = BTreeMap::new();
    votes.iter().filter_map(|(_, vote)| *vote).for_each(|vote| *counts.entry(vote).or_default() += 1);
    let uniform = |delimiter: u8| -> usize {
        let agree = |text: &str| {
            let lines = split(text, delimiter);
            let width = width(&lines);
            lines.iter().filter(|line| line.len() == width).count() * usize::from(width > 1)
        };
        texts.iter().map(|(_, decoded)| agree(&decoded.text)).sum()
    };
    counts.into_iter().max_by_key(|(delimiter, count)| (*count, uniform(*delimiter))).map(|(delimiter, _)| delimiter)
}

/// The labels that most samples have.
fn common_labels(parsed: &[Parsed]) -> Option<Vec<String>> {
    let mut counts: Vec<(&Vec<String>, usize)> = vec![];
    for it in parsed {
        match counts.iter_mut().find(|(labels, _)| **labels == it.head.labels) {
            Some((_, count)) => *count += 1,
            None => counts.push((&it.head.labels, 1)),
        }
    }
    // The first of those that stand equally often.
    let most = counts.iter().map(|(_, count)| *count).max()?;
    counts.into_iter().find(|(_, count)| *count == most).map(|(labels, _)| labels.clone())
}

/// Labels by which a plan can name a column: not empty, and there once.
pub fn nameable(labels: &[String]) -> Vec<String> {
    let once = |label: &String| {
        let folded = crate::intake::read::heading::fold(label);
        labels.iter().filter(|other| crate::intake::read::heading::fold(other) == folded).count() == 1
    };
    labels.iter().filter(|label| !label.trim().is_empty() && once(label)).cloned().collect()
}

fn layout(delimiter: u8, encoding: Encoding, alike: &[&Parsed], common: &[String]) -> Layout {
    let below = |it: &Parsed| it.head.line.map_or(0, |line| line + 1);
    let with_rows = alike.iter().filter(|it| it.rows.len() > below(it));
    let mut units = with_rows.map(|it| {
        let rest = it.rows.get(below(it)..).unwrap_or_default();
        it.head.line.is_some() && rest.first().is_some_and(|line| is_units_row(line, rest.get(1..).unwrap_or_default()))
    });
    let units_row = units.by_ref().next().unwrap_or(false) && units.all(|it| it);
    let bodies: Vec<(&[Vec<String>], &[String])> =
        alike.iter().filter_map(|it| Some((it.rows.get(below(it)..)?, it.lines.get(below(it)..)?))).collect();
    let above: Vec<Vec<String>> = alike
        .iter()
        .map(|it| keys_above(it.lines.get(..it.head.line.unwrap_or(0)).unwrap_or_default(), delimiter))
        .collect();
    let every = |key: &&String| above.iter().all(|keys| keys.contains(key));
    Layout {
        format: Format::Delimited { delimiter: Some(delimiter) },
        encoding,
        header: header(alike, common),
        units_row,
        stop_at: footer(&bodies).map(|start| format!("^{}", regex::escape(&start))),
        ignored_lines: vec![],
        preamble: above.first().map(|keys| keys.iter().filter(every).cloned().collect()).unwrap_or_default(),
    }
}

/// By its line where that is always the same and the first; else by its first label, unless a line above begins so.
fn header(alike: &[&Parsed], common: &[String]) -> Header {
    let lines: Vec<Option<usize>> = alike.iter().map(|it| it.head.line).collect();
    let Some(Some(first)) = lines.first().copied() else { return Header::None };
    let same = lines.iter().all(|line| *line == Some(first));
    let start = common.first().cloned().unwrap_or_default();
    let before = |it: &&Parsed| {
        let above = it.lines.get(..it.head.line.unwrap_or(0)).unwrap_or_default();
        above.iter().any(|line| line.trim_start_matches(['"', '\u{feff}']).starts_with(&start))
    };
    if (same && first == 0) || start.is_empty() || alike.iter().any(before) {
        return Header::Row { row: first as u64 + 1, lines: 1 };
    }
    Header::StartsWith(start)
}

/// The keys of `key: value`, `key,value` or `key<tab>value` lines.
fn keys_above(lines: &[String], delimiter: u8) -> Vec<String> {
    let mark = char::from(delimiter);
    let key = |line: &String| {
        let at = line.find([':', '\t', mark])?;
        let key = line.get(..at)?.trim().trim_matches('"').trim();
        (!key.is_empty() && key.chars().count() <= 60).then(|| key.to_owned())
    };
    lines.iter().filter_map(key).collect()
}

#[cfg(test)]
mod tests {
    use super::*;

    fn rows(text: &str) -> Vec<Vec<String>> {
        split(text, b',')
    }

    #[test]
    fn the_header_is_the_first_wide_line_of_labels() {
        let found = head(&rows("Station 4,,,,\nId,Day,Left,Right\nA1,2025-01-02,3.4,5.6\n")).unwrap();
        assert_eq!((found.line, found.labels[0].as_str()), (Some(1), "Id"));
        let found = head(&rows("A1,2025-01-02,3.4,5.6\nA1,2025-01-02,3.4,5.6\n")).unwrap();
        assert_eq!((found.line, found.labels.len()), (None, 4));
    }

    #[test]
    fn a_row_of_units_is_told_from_a_row() {
        let below = rows("A1,3.4,5\nA2,3.5,6");
        assert!(is_units_row(&rows(",kg,cm")[0], &below));
        assert!(!is_units_row(&rows("A0,3.3,4")[0], &below));
        assert!(!is_units_row(&rows("left,right,left")[0], &below));
    }

    #[test]
    fn decimal_commas_part_no_cells() {
        let rows = "PW-007;T1;26.02.2025;links;1;31,8;\nPW-002;T1;27.02.2025;rechts;2;35,1;\n".repeat(20);
        let text = format!("Tester: B\n\nCode;Termin;Datum;Seite;Versuch;Kraft (kg);Bemerkung\n{rows}");
        assert_eq!(sniff(&text), Some(b';'));
        assert_eq!(overruled(&text, b','), Some(b';'));
        assert_eq!(overruled("a,b,c\n1,2,3\n1,2,3\n", b','), None);
    }

    #[test]
    fn encodings_are_told() {
        assert_eq!(decode(b"Pr\xfcfer;1\n").unwrap().encoding, Encoding::Label(encoding_rs::WINDOWS_1252));
        assert_eq!(decode("Prüfer".as_bytes()).unwrap().encoding, Encoding::Auto);
        assert_eq!(decode(b"a\0b\0c\0d\0e\0").unwrap().encoding, Encoding::Label(encoding_rs::UTF_16LE));
        assert!(decode(&[0, 1, 2, 3, 0, 0, 9, 9, 1]).is_none());
    }
}
