//! What else a row may say: its visit, its replicate, who measured, and whether it is a reading at all.
//!
//! Invariant: a column of few texts that nobody has accounted for is asked about, since it may say that a row is no
//! reading, or of another visit or condition.

use std::collections::{BTreeMap, BTreeSet};

use revisant_schema::plan::Plan;

use super::Sample;
use super::grid::{Grid, GridRow};
use super::labels::{self, Known, Meeting};
use super::lines::{Line, Mark, Notes, clip, literal, quote, rows, some};
use super::place::{Part, Spot, column};
use super::words::{self, fold};

/// Texts of a column that can still be looked through by a person.
const FEW: usize = 12;

/// The visits as codes.
pub fn known_visits(plan: &Plan) -> Vec<Known> {
    let visits = plan.visits.iter().map(|it| Known { code: it.code.clone(), label: it.label.clone() });
    visits.chain(std::iter::once(Known { code: "unscheduled".to_owned(), label: "unscheduled".to_owned() })).collect()
}

/// A drafted line, and the column it takes.
pub struct Drafted {
    /// The line.
    pub line: Line,
    /// The column.
    pub column: Option<usize>,
}

const HELD: &str = "such rows are held as unknown-visit";

/// The column of visit labels: by what it holds, else by its name.
pub fn visit(grid: &Grid, free: &dyn Fn(usize) -> bool, plan: &Plan) -> Option<Drafted> {
    let known = known_visits(plan);
    let met = labels::meeting_columns(grid, free, &known, 0.5);
    let by_content: Vec<usize> = met.iter().map(|(column, _)| *column).collect();
    if let [(column, meeting)] = met.as_slice() {
        return Some(Drafted {
            line: labels::line("visit", grid, *column, meeting, &known, HELD),
            column: Some(*column),
        });
    }
    let named = |at: &usize| {
        let texts = grid.distinct(*at);
        let name = grid.columns.get(*at).map_or("", String::as_str);
        let few = !texts.is_empty() && texts.len() <= FEW.max(plan.visits.len() * 2);
        let last = name.rsplit('/').next().unwrap_or(name);
        few && words::VISIT.names(last) && !words::HARMLESS.names(name)
    };
    let candidates: Vec<usize> = if by_content.is_empty() {
        (0..grid.columns.len()).filter(|at| free(*at)).filter(named).collect()
    } else {
        by_content
    };
    match candidates.as_slice() {
        [] => None,
        [one] => {
            let meeting = Meeting::of(&grid.distinct(*one), &known);
            Some(Drafted { line: labels::line("visit", grid, *one, &meeting, &known, HELD), column: Some(*one) })
        }
        several => {
            let names = some(several.iter().filter_map(|at| grid.columns.get(*at)).map(String::as_str));
            let line = Line::gap("visit", "{}", format!("which of {names} is the visit? {{ column = \"…\" }}"));
            Some(Drafted { line, column: None })
        }
    }
}

/// The visit that a row's sample names.
pub type VisitOf<'a> = dyn Fn(&GridRow) -> Option<usize> + 'a;

/// Labels of visits outside the rows. Whether they are meant is for a person to say: the date may be what decides.
/// `agree` says whether the dates of all rows say the same as the labels of their samples.
pub fn visit_elsewhere(
    grid: &Grid,
    samples: &[Sample],
    plan: &Plan,
    agree: &dyn Fn(&VisitOf<'_>) -> bool,
) -> Option<Line> {
    let known = known_visits(plan);
    for (key, values) in &grid.preamble {
        let texts = super::grid::tally(values.iter().map(String::as_str));
        let meeting = Meeting::of(&texts, &known);
        let called = words::VISIT.names(key) && texts.len() <= FEW.max(plan.visits.len() * 2);
        if meeting.met() > 0 && meeting.met() >= meeting.unmet() || called {
            let (place, mut notes) = meeting.place(&format!("preamble = {}", quote(key)), "visit", &known, HELD);
            notes.doubt("above the header");
            return Some(Line::with("visit", &place, &notes));
        }
    }
    visit_in_path(grid, samples, plan, agree)
}

/// Labels of visits in the names of files and folders.
fn visit_in_path(grid: &Grid, samples: &[Sample], plan: &Plan, agree: &dyn Fn(&VisitOf<'_>) -> bool) -> Option<Line> {
    let known = known_visits(plan);
    let files: Vec<&Sample> = grid.samples.iter().filter_map(|at| samples.get(*at)).collect();
    for (key, part) in [("file_name", Part::Name), ("folder", Part::Folder)] {
        let found: BTreeSet<String> = files.iter().flat_map(|it| visit_words(part.of(it), &known)).collect();
        if found.is_empty() {
            continue;
        }
        let visit_of = |row: &GridRow| {
            let words = visit_words(part.of(samples.get(row.sample)?), &known);
            let word = words.first()?;
            plan.visits.iter().position(|it| fold(&it.code) == fold(word) || fold(&it.label) == fold(word))
        };
        let names = some(found.iter().map(String::as_str));
        if agree(&visit_of) {
            return Some(Line::remark(
                "visit",
                format!("the date decides; {names} in the names of exports say the same"),
            ));
        }
        let alternatives: Vec<String> = found.iter().map(|word| regex::escape(word)).collect();
        let pattern = format!("(?:^|[^A-Za-z0-9])({})(?:[^A-Za-z0-9]|$)", alternatives.join("|"));
        let texts: Vec<(&str, usize)> = found.iter().map(|word| (word.as_str(), 1)).collect();
        let (place, _) =
            Meeting::of(&texts, &known).place(&format!("{key} = {}", literal(&pattern)), "visit", &known, HELD);
        let what = match part {
            Part::Name => "file names",
            Part::Folder => "folders",
        };
        let ask = format!("{what} hold {}: {place}, or take this line out where the date alone decides", names);
        return Some(Line::gap("visit", "{}", ask));
    }
    None
}

/// Words of a path that are a visit's code or label.
fn visit_words(text: &str, known: &[Known]) -> Vec<String> {
    let parts =
        text.split(|c: char| !c.is_alphanumeric() && c != '-').chain(text.split(|c: char| !c.is_alphanumeric()));
    let is_visit = |part: &str| {
        part.chars().any(char::is_alphabetic)
            && known.iter().any(|it| fold(&it.code) == fold(part) || fold(&it.label) == fold(part))
    };
    parts.filter(|part| is_visit(part)).map(str::to_owned).collect()
}

// ---- replicates ----

/// What tells the rows of one session apart from those of another.
pub struct Keys<'a> {
    /// The row's subject and day.
    pub session: &'a dyn Fn(&GridRow) -> String,
    /// Columns that tell readings of one session apart: measure, conditions, visit.
    pub columns: &'a [usize],
    /// The largest number of replicates that the plan expects.
    pub expected: u32,
}

/// The column of replicates' numbers: whole numbers that differ within a session, measure and condition.
pub fn replicate(grid: &Grid, free: &dyn Fn(usize) -> bool, keys: &Keys<'_>) -> Option<Drafted> {
    let mut by_name = vec![];
    let mut by_content = vec![];
    for at in (0..grid.columns.len()).filter(|at| free(*at)) {
        let Some(counts) = counts(grid, at, keys) else { continue };
        let name = grid.columns.get(at).map_or("", String::as_str);
        if words::REPLICATE.names(name.rsplit('/').next().unwrap_or(name)) {
            by_name.push((at, counts));
        } else if keys.expected > 1 && counts.is_counting {
            by_content.push((at, counts));
        }
    }
    match (by_name.as_slice(), by_content.as_slice()) {
        ([], []) => None,
        ([(one, counts)], []) if counts.tells_apart && counts.counts_from_one(keys.expected) => {
            let mut notes = Notes::default();
            if counts.largest > keys.expected {
                notes.doubt(format!("numbers reach {}, the plan expects {}", counts.largest, keys.expected));
            }
            Some(Drafted { line: Line::with("replicate", &column(grid, *one), &notes), column: Some(*one) })
        }
        // A number that stands twice in a session, or runs on from one session to the next, is none of a replicate,
        // and a name alone is no proof of the contrary.
        ([(one, _)], []) => {
            let name = grid.columns.get(*one).map_or("", String::as_str);
            let what = format!(
                "does \"{}\" number the replicates? If so {}, else take this line out: the order in the file decides",
                clip(name),
                column(grid, *one)
            );
            Some(Drafted { line: Line::gap("replicate", "{}", what), column: Some(*one) })
        }
        _ => {
            let all = by_name.iter().chain(&by_content).map(|(at, _)| *at);
            let names = some(all.filter_map(|at| grid.columns.get(at)).map(String::as_str));
            let what = format!(
                "does {names} number the replicates? If so {{ column = \"…\" }}, else take this line out: \
                 the order in the file decides"
            );
            Some(Drafted { line: Line::gap("replicate", "{}", what), column: None })
        }
    }
}

struct Counts {
    largest: u32,
    /// Hardly a number stands twice in a session.
    tells_apart: bool,
    /// In most sessions of several rows the numbers are 1, 2, …
    is_counting: bool,
    /// There are sessions of several rows.
    several: bool,
}

impl Counts {
    /// Whether the numbers begin with 1 in each session, as far as that can be seen.
    fn counts_from_one(&self, expected: u32) -> bool {
        self.is_counting || (!self.several && self.largest <= expected)
    }
}

fn counts(grid: &Grid, at: usize, keys: &Keys<'_>) -> Option<Counts> {
    let mut groups: BTreeMap<String, Vec<u32>> = BTreeMap::new();
    let (mut numbers, mut filled, mut largest) = (0, 0, 0);
    for row in &grid.rows {
        let text = row.cells.get(at).map_or("", |cell| cell.text.as_str());
        if text.is_empty() {
            continue;
        }
        filled += 1;
        let Some(number) = text.parse::<u32>().ok().filter(|number| (1..=50).contains(number)) else { continue };
        numbers += 1;
        largest = largest.max(number);
        let others = keys.columns.iter().filter_map(|column| row.cells.get(*column)).map(|cell| cell.text.as_str());
        // The same rows may stand in several exports.
        let session = format!("{}\u{1f}{}", row.sample, (keys.session)(row));
        let key = std::iter::once(session).chain(others.map(str::to_owned)).collect::<Vec<_>>().join("\u{1f}");
        groups.entry(key).or_default().push(number);
    }
    if filled == 0 || numbers * 10 < filled * 9 {
        return None;
    }
    let several: Vec<&mut Vec<u32>> = groups.values_mut().filter(|group| group.len() > 1).collect();
    let (all, mut twice, mut counting) = (several.len(), 0, 0);
    for group in several {
        group.sort_unstable();
        let whole = group.len();
        let is_counting = group.iter().enumerate().all(|(index, number)| *number as usize == index + 1);
        group.dedup();
        twice += usize::from(group.len() < whole);
        counting += usize::from(is_counting);
    }
    let tells_apart = twice * 4 <= all;
    Some(Counts { largest, tells_apart, is_counting: tells_apart && all > 0 && counting * 2 >= all, several: all > 0 })
}

// ---- who measured ----

/// The operator, in a column or above the header.
pub fn operator(grid: &Grid, free: &dyn Fn(usize) -> bool) -> Option<Drafted> {
    let mut named = (0..grid.columns.len()).filter(|at| {
        free(*at)
            && grid.columns.get(*at).is_some_and(|name| words::OPERATOR.names(name))
            && !grid.distinct(*at).is_empty()
    });
    if let (Some(one), None) = (named.next(), named.next()) {
        return Some(Drafted { line: Line::sure("operator", &column(grid, one)), column: Some(one) });
    }
    let key = grid.preamble.keys().find(|key| words::OPERATOR.names(key))?;
    Some(Drafted { line: Line::sure("operator", &format!("{{ preamble = {} }}", quote(key))), column: None })
}

// ---- what nobody has accounted for ----

/// What the columns that no line names may still say.
#[derive(Default)]
pub struct Unaccounted {
    /// Rules for rows that are no readings, each with its rows.
    pub ignore: Vec<(String, Mark)>,
    /// The columns that those rules name.
    pub columns: Vec<String>,
    /// Columns that are left alone.
    pub left: Vec<String>,
}

/// Looks through the columns that no line names.
pub fn unaccounted(grid: &Grid, free: &dyn Fn(usize) -> bool, keys: &Keys<'_>, has_visit: bool) -> Unaccounted {
    let mut all = Unaccounted::default();
    for at in (0..grid.columns.len()).filter(|at| free(*at)) {
        let texts = grid.distinct(at);
        let name = grid.columns.get(at).map_or("", String::as_str);
        let judged = judge(grid, at, name, &texts, keys, has_visit);
        if matches!(judged, Judged::NoReadings(_) | Judged::Asked(_)) {
            all.columns.push(name.to_owned());
        }
        match judged {
            Judged::Nothing => {}
            Judged::Left => all.left.push(name.to_owned()),
            Judged::NoReadings(found) => all.ignore.extend(found.into_iter().map(|(text, count)| {
                let rule = format!("{{ column = {}, equals = {} }}", quote(name), quote(&text));
                (
                    rule,
                    Mark::Unsure(format!("\"{}\" ({}) looks like no reading of a subject", clip(&text), rows(count))),
                )
            })),
            Judged::Asked(what) => {
                all.ignore.push((format!("{{ column = {} }}", quote(name)), Mark::Gap(what)));
            }
        }
    }
    all
}

enum Judged {
    /// It is empty.
    Nothing,
    /// It says nothing about whether and where a row is filed.
    Left,
    /// Some of its texts mark rows that are no readings.
    NoReadings(Vec<(String, usize)>),
    /// A person must say.
    Asked(String),
}

fn judge(grid: &Grid, at: usize, name: &str, texts: &[(&str, usize)], keys: &Keys<'_>, has_visit: bool) -> Judged {
    let last = name.rsplit('/').next().unwrap_or(name);
    if texts.is_empty() {
        return Judged::Nothing;
    }
    let is_type = words::TYPE.names(last);
    let shown = || some(texts.iter().map(|(text, _)| *text));
    let ask = || {
        Judged::Asked(format!(
            "does \"{}\" ({}) say that a row is no reading, or of another visit or condition? Then add equals = \"…\" \
             here or a line for it; else take this entry out",
            clip(name),
            shown()
        ))
    };
    if words::REMARK.names(last) {
        return Judged::Left;
    }
    let no_reading = |text: &str| words::NO_READING.names(text);
    let (marked, others): (Vec<_>, Vec<_>) = texts.iter().partition(|(text, _)| no_reading(text));
    let numbers = texts.iter().filter(|(text, _)| super::numbers::is_like_a_number(text)).count();
    if !marked.is_empty() && others.len() == 1 && texts.len() <= FEW {
        return Judged::NoReadings(marked.iter().map(|(text, count)| ((*text).to_owned(), *count)).collect());
    }
    if !marked.is_empty() {
        return ask();
    }
    if numbers == texts.len() {
        return judge_numbers(grid, at, texts, is_type, keys, has_visit, &ask);
    }
    if is_type || (texts.len() == 2 && texts.iter().all(|(text, _)| words::is_answer(text))) {
        return ask();
    }
    let harmless = words::HARMLESS.names(name) || words::OPERATOR.names(name);
    // A text that never changes says nothing, but for the answer to a question that may once be answered otherwise.
    let constant = texts.len() == 1 && texts.iter().all(|(text, _)| !words::is_answer(text));
    if harmless || constant || texts.len() > FEW.max(grid.rows.len() / 20) { Judged::Left } else { ask() }
}

/// Numbers may be another measurement, which is left alone, or say what kind of row it is.
fn judge_numbers(
    grid: &Grid,
    at: usize,
    texts: &[(&str, usize)],
    is_type: bool,
    keys: &Keys<'_>,
    has_visit: bool,
    ask: &dyn Fn() -> Judged,
) -> Judged {
    let small =
        texts.len() <= FEW && texts.iter().all(|(text, _)| text.parse::<i64>().is_ok_and(|it| (0..=200).contains(&it)));
    let two = texts.len() == 2 && texts.iter().all(|(text, _)| words::is_answer(text));
    if two || (is_type && small) {
        return ask();
    }
    // A number that is the same throughout a session and differs between sessions may number the visits.
    if small && texts.len() > 1 && !has_visit && is_constant_in_sessions(grid, at, keys) {
        return ask();
    }
    Judged::Left
}

fn is_constant_in_sessions(grid: &Grid, at: usize, keys: &Keys<'_>) -> bool {
    let mut seen: BTreeMap<String, BTreeSet<&str>> = BTreeMap::new();
    for row in &grid.rows {
        let text = row.cells.get(at).map_or("", |cell| cell.text.as_str());
        seen.entry((keys.session)(row)).or_default().insert(text);
    }
    seen.values().all(|texts| texts.len() == 1)
}

// ---- several exports ----

/// Whether exports hold the rows of earlier ones again: two samples, the rows of one of which are in the other.
pub fn grows(grid: &Grid, samples: &[Sample]) -> Option<(String, String)> {
    let mut rows: BTreeMap<usize, BTreeMap<Vec<&str>, usize>> = BTreeMap::new();
    for row in &grid.rows {
        let cells = row.cells.iter().map(|cell| cell.text.as_str()).collect();
        *rows.entry(row.sample).or_default().entry(cells).or_default() += 1;
    }
    let bytes = |at: &usize| samples.get(*at).map(|sample| &sample.bytes);
    for (small, few) in &rows {
        for (large, many) in rows.iter().filter(|(large, _)| *large != small) {
            // Of what is not there at all, the first rows say so.
            if few.keys().take(5).all(|cells| !many.contains_key(cells)) {
                continue;
            }
            let count: usize = few.values().sum();
            let again: usize =
                few.iter().map(|(cells, count)| many.get(cells).map_or(0, |more| *more.min(count))).sum();
            let larger = many.values().sum::<usize>() > count;
            if larger && count >= 2 && again * 10 >= count * 8 && bytes(small) != bytes(large) {
                let name = |at: &usize| samples.get(*at).map_or(String::new(), |sample| sample.file_name.clone());
                return Some((name(small), name(large)));
            }
        }
    }
    None
}

/// The texts of value columns that are no numbers: words for a missing value, and others that will be held.
pub fn missing(grid: &Grid, columns: &[usize]) -> (Vec<String>, Vec<String>, Vec<String>) {
    let mut texts: BTreeMap<&str, usize> = BTreeMap::new();
    for row in &grid.rows {
        for text in columns.iter().filter_map(|at| row.cells.get(*at)).map(|cell| cell.text.as_str()) {
            if !text.is_empty() && !super::numbers::is_like_a_number(text) {
                *texts.entry(text).or_default() += 1;
            }
        }
    }
    let (mut known, mut supposed, mut held) = (vec![], vec![], vec![]);
    for (text, count) in texts {
        if words::says_missing(text) {
            known.push(text.to_owned());
        } else if count > 2 && text.chars().count() <= 30 && !text.chars().any(|c| c.is_ascii_digit()) {
            supposed.push(text.to_owned());
        } else {
            held.push(text.to_owned());
        }
    }
    (known, supposed, held)
}

/// The subject and day of a row as one text, for telling sessions apart.
pub fn session_key(row: &GridRow, subject: &Spot, taken_at: &Spot) -> String {
    let stamp = match taken_at {
        Spot::Columns(columns) => {
            columns.first().and_then(|at| row.cells.get(*at)).map_or("", |cell| cell.text.as_str())
        }
        _ => "",
    };
    // The day is what stands before the time of day, in every way of writing but the longest.
    let day = stamp.split(['T']).next().unwrap_or_default();
    let day = match day.rsplit_once(' ') {
        Some((day, time)) if time.contains(':') => day,
        _ => day,
    };
    let day = day.split_once('.').filter(|(whole, _)| whole.len() == 5).map_or(day, |(whole, _)| whole);
    format!("{}\u{1f}{day}", subject.text(row).to_uppercase())
}
