//! Who and when: the subject and the moment of a row.
//!
//! Invariant: where two columns may both be meant, neither is taken.

use chrono::{DateTime, NaiveDate, Utc};
use regex::Regex;
use revisant_schema::plan::Plan;
use revisant_schema::roster::{Roster, tidy};

use super::Sample;
use super::grid::{Grid, GridRow};
use super::lines::{BLANK, Line, Notes, literal, quote, rows, some};
use super::stamps::{self, Found};
use super::when::Days;
use super::words;

/// Where the text of a row is taken from, for what is concluded from it here.
#[derive(Debug, Clone, PartialEq)]
pub enum Spot {
    /// These columns, joined by a space.
    Columns(Vec<usize>),
    /// The same for a whole sample, by sample.
    Sample(Vec<String>),
    /// Nowhere that is known.
    Unknown,
}

impl Spot {
    /// The text of a row.
    pub fn text(&self, row: &GridRow) -> String {
        match self {
            Self::Columns(columns) => {
                let cells: Vec<&str> =
                    columns.iter().filter_map(|column| row.cells.get(*column)).map(|cell| cell.text.as_str()).collect();
                cells.join(" ").trim().to_owned()
            }
            Self::Sample(texts) => texts.get(row.sample).cloned().unwrap_or_default(),
            Self::Unknown => String::new(),
        }
    }

    /// The columns it takes.
    pub fn columns(&self) -> &[usize] {
        if let Self::Columns(columns) = self { columns } else { &[] }
    }
}

/// What the samples are held against.
#[derive(Debug, Clone, Copy)]
pub struct Against<'a> {
    /// The plan.
    pub plan: Option<&'a Plan>,
    /// The roster.
    pub roster: Option<&'a Roster>,
    /// The clock.
    pub now: DateTime<Utc>,
}

impl Against<'_> {
    /// Whether a text is a subject's code.
    pub fn is_subject(&self, text: &str) -> bool {
        self.code(text).is_some()
    }

    /// The code as the roster has it.
    pub fn code(&self, text: &str) -> Option<String> {
        let plan = self.plan?;
        let code = tidy(text, &plan.subject.normalise);
        (!code.is_empty() && plan.subject.pattern.is_match(&code)).then_some(code)
    }

    fn is_enrolled(&self, text: &str) -> bool {
        let code = self.code(text);
        self.roster.zip(code).is_some_and(|(roster, code)| roster.subjects.contains_key(&code))
    }
}

/// A line, and what it takes.
pub struct Taken {
    /// The line.
    pub line: Line,
    /// Where the text is.
    pub spot: Spot,
    /// Of a moment: the ways in which it may be written.
    pub formats: Vec<String>,
    /// Of a moment: the place as TOML, without the format.
    pub place: String,
}

impl Taken {
    fn new(line: Line, spot: Spot) -> Self {
        Self { line, spot, formats: vec![], place: String::new() }
    }

    /// Decides between ways of writing that the texts leave open.
    pub fn settle(&mut self, format: &str, why: impl Into<String>) {
        let value = format!("{{ {}, format = {} }}", self.place, quote(format));
        let rest = self.formats.iter().filter(|it| *it != format).map(|it| quote(it)).collect::<Vec<_>>().join(", ");
        let why = format!("the texts alone may also be {rest}; {}", why.into());
        self.line = Line::unsure("taken_at", &value, why);
        self.formats = vec![format.to_owned()];
    }
}

/// A place that is one column, as TOML.
pub fn column(grid: &Grid, column: usize) -> String {
    format!("{{ column = {} }}", quote(grid.columns.get(column).map_or("", String::as_str)))
}

// ---- whose it is ----

/// Where the subject is.
pub fn subject(grid: &Grid, samples: &[Sample], against: Against<'_>) -> Taken {
    if against.plan.is_none() {
        return subject_by_name(grid);
    }
    let share = |column: usize, fits: &dyn Fn(&str) -> bool| {
        let (mut all, mut fit) = (0, 0);
        for text in grid.texts(column).filter(|text| !text.is_empty()) {
            all += 1;
            fit += usize::from(fits(text));
        }
        (fit, all)
    };
    let mostly = |(fit, all): (usize, usize)| fit > 0 && fit * 2 >= all;
    let mut fitting: Vec<usize> =
        (0..grid.columns.len()).filter(|column| mostly(share(*column, &|text| against.is_subject(text)))).collect();
    if fitting.len() > 1 && against.roster.is_some_and(|roster| !roster.subjects.is_empty()) {
        fitting.retain(|column| mostly(share(*column, &|text| against.is_enrolled(text))));
    }
    match fitting.as_slice() {
        [] => subject_elsewhere(grid, samples, against),
        [one] => {
            let (fit, all) = share(*one, &|text| against.is_subject(text));
            let mut notes = Notes::default();
            if fit < all {
                notes.doubt(format!("{} of {} hold no code of the plan's pattern", all - fit, rows(all)));
            }
            Taken::new(Line::with("subject", &column(grid, *one), &notes), Spot::Columns(vec![*one]))
        }
        several => {
            let names = some(several.iter().filter_map(|at| grid.columns.get(*at)).map(String::as_str));
            let what = format!("which column is the subject? The plan's pattern fits {names}: {{ column = \"…\" }}");
            Taken::new(Line::gap("subject", "{}", what), Spot::Unknown)
        }
    }
}

fn subject_by_name(grid: &Grid) -> Taken {
    let mut named =
        (0..grid.columns.len()).filter(|at| grid.columns.get(*at).is_some_and(|it| words::SUBJECT.names(it)));
    match (named.next(), named.next()) {
        (Some(one), None) => Taken::new(
            Line::unsure("subject", &column(grid, one), "by its name alone; there is no plan to hold it against"),
            Spot::Columns(vec![one]),
        ),
        _ => Taken::new(Line::gap("subject", "{}", "which column is the subject? { column = \"…\" }"), Spot::Unknown),
    }
}

/// In a preamble, the file's name or the folder, when every sample has it there.
fn subject_elsewhere(grid: &Grid, samples: &[Sample], against: Against<'_>) -> Taken {
    for (key, values) in &grid.preamble {
        if values.len() == grid.samples.len() && values.iter().all(|value| against.is_subject(value)) {
            let place = format!("{{ preamble = {} }}", quote(key));
            let spot = by_sample(grid, values, samples.len());
            return Taken::new(Line::unsure("subject", &place, "above the header of every sample"), spot);
        }
    }
    for (key, part) in [("file_name", Part::Name), ("folder", Part::Folder)] {
        if let Some((pattern, codes)) = code_in_path(grid, samples, part, against) {
            let place = format!("{{ {key} = {} }}", literal(&pattern));
            let why = "no column holds codes of the plan's pattern; every sample's name does here";
            let spot = by_sample(grid, &codes, samples.len());
            return Taken::new(Line::unsure("subject", &place, why), spot);
        }
    }
    let what = "where is the subject? No column, preamble or file name holds codes of the plan's pattern: \
                { column = \"…\" }, { preamble = \"…\" } or { file_name = '…(…)…' }";
    Taken::new(Line::gap("subject", "{}", what), Spot::Unknown)
}

fn by_sample(grid: &Grid, values: &[String], count: usize) -> Spot {
    let mut texts = vec![String::new(); count];
    for (sample, value) in grid.samples.iter().zip(values) {
        if let Some(text) = texts.get_mut(*sample) {
            text.clone_from(value);
        }
    }
    Spot::Sample(texts)
}

/// A part of a sample's path.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Part {
    /// The file's name.
    Name,
    /// The folder below the instrument's.
    Folder,
}

impl Part {
    /// That part of a sample's path.
    pub fn of(self, sample: &Sample) -> &str {
        match self {
            Self::Name => &sample.file_name,
            Self::Folder => &sample.folder,
        }
    }
}

/// An expression that finds the subject's code in every sample's name, and what it finds.
fn code_in_path(grid: &Grid, samples: &[Sample], part: Part, against: Against<'_>) -> Option<(String, Vec<String>)> {
    let mut shapes: Vec<String> = vec![];
    let mut at_start = true;
    for sample in grid.samples.iter().filter_map(|index| samples.get(*index)) {
        let text = part.of(sample);
        let (from, to) = code_span(text, against)?;
        at_start &= from == 0;
        let shape = shape(text.get(from..to)?);
        if !shapes.contains(&shape) {
            shapes.push(shape);
        }
    }
    let start = if at_start { "^" } else { "(?:^|[^A-Za-z0-9])" };
    let pattern = format!("{start}({})(?:[^A-Za-z0-9]|$)", shapes.join("|"));
    let regex = Regex::new(&pattern).ok()?;
    let code = |index: &usize| Some(regex.captures(part.of(samples.get(*index)?))?.get(1)?.as_str().to_owned());
    let codes: Vec<String> = grid.samples.iter().filter_map(code).collect();
    let all = codes.len() == grid.samples.len() && codes.iter().all(|code| against.is_subject(code));
    (all && !codes.is_empty() && shapes.len() <= 4).then_some((pattern, codes))
}

/// The one part of a text that is a subject's code and is bounded by no letter or digit.
fn code_span(text: &str, against: Against<'_>) -> Option<(usize, usize)> {
    let chars: Vec<(usize, char)> = text.char_indices().collect();
    let word = |at: Option<usize>| at.and_then(|at| chars.get(at)).is_some_and(|(_, c)| c.is_alphanumeric());
    let mut found: Option<(usize, usize)> = None;
    for from in (0..chars.len()).filter(|at| word(Some(*at)) && !word(at.checked_sub(1))) {
        for to in (from + 1..=chars.len()).filter(|at| word(at.checked_sub(1)) && !word(Some(*at))) {
            let (start, end) = (chars.get(from)?.0, chars.get(to).map_or(text.len(), |(at, _)| *at));
            if to - from <= 40 && against.is_subject(text.get(start..end)?) {
                if found.is_some_and(|known| known != (start, end)) {
                    return None;
                }
                found = Some((start, end));
            }
        }
    }
    found
}

/// An expression for texts of the same build: as many letters, as many digits.
fn shape(text: &str) -> String {
    let class = |c: char| match c {
        c if c.is_ascii_alphabetic() => "[A-Za-z]".to_owned(),
        c if c.is_ascii_digit() => r"\d".to_owned(),
        ' ' | '_' | '-' => "[ _-]".to_owned(),
        other => regex::escape(&other.to_string()),
    };
    let mut parts: Vec<(String, usize)> = vec![];
    for class in text.chars().map(class) {
        match parts.last_mut() {
            Some((last, count)) if *last == class => *count += 1,
            _ => parts.push((class, 1)),
        }
    }
    parts.into_iter().map(|(class, count)| if count == 1 { class } else { format!("{class}{{{count}}}") }).collect()
}

// ---- when it was ----

/// One column that may hold moments or parts of them.
struct Candidate {
    column: usize,
    found: Found,
}

/// Where the moment is, and how it is written. `rows` are those of subjects.
pub fn taken_at(grid: &Grid, free: &dyn Fn(usize) -> bool, against: Against<'_>) -> Taken {
    let mut whole = vec![];
    let mut days = vec![];
    let mut times = vec![];
    for column in (0..grid.columns.len()).filter(|column| free(*column)) {
        if is_time_column(grid, column) {
            times.push(column);
            continue;
        }
        let Some(found) = stamp_of(grid, &[column], against.now) else { continue };
        if found.timed { whole.push(Candidate { column, found }) } else { days.push(Candidate { column, found }) }
    }
    whole.retain(|it| !is_birth(grid, it, against));
    days.retain(|it| !is_birth(grid, it, against));
    if let [one] = whole.as_slice() {
        days.retain(|day| !same_days(grid, one, day));
    }
    match (whole.as_slice(), days.as_slice(), times.as_slice()) {
        ([one], [], _) => stamped(grid, vec![one.column], &one.found),
        ([], [day], [time]) => joined(grid, day, *time, against.now),
        ([], [day], []) => {
            let mut taken = stamped(grid, vec![day.column], &day.found);
            let why = "no time of day is found; several sessions on one day cannot be told apart";
            if taken.line.mark == super::lines::Mark::Sure {
                taken.line.mark = super::lines::Mark::Unsure(why.to_owned());
            }
            taken
        }
        ([], [], []) => stamp_elsewhere(grid, against),
        ([], [], [time]) => date_above(grid, *time, against),
        _ => {
            let columns = whole.iter().chain(&days).map(|it| it.column).chain(times.iter().copied());
            let names = some(columns.filter_map(|at| grid.columns.get(at)).map(String::as_str));
            let what = format!(
                "which of {names} says when it was measured? {{ column = \"…\", format = \"…\" }} or \
                 {{ columns = [\"day\", \"time\"], format = \"…\" }}"
            );
            Taken::new(Line::gap("taken_at", &format!("{{ format = {} }}", quote(BLANK)), what), Spot::Unknown)
        }
    }
}

/// How the texts of columns, joined, are written as stamps.
fn stamp_of(grid: &Grid, columns: &[usize], now: DateTime<Utc>) -> Option<Found> {
    let spot = Spot::Columns(columns.to_vec());
    let numbers = columns.iter().all(|column| grid.is_number(*column));
    if let (true, [one]) = (numbers, columns) {
        let days = |text: &str| text.parse::<f64>().is_ok_and(|number| (20_000.0..80_000.0).contains(&number));
        let filled = grid.texts(*one).filter(|text| !text.is_empty()).count();
        // Another number in a document may be seconds since 1970, which is a way of writing of its own.
        if filled > 0 && grid.texts(*one).filter(|text| days(text)).count() * 10 >= filled * 6 {
            return stamps::find(grid.texts(*one), true, now);
        }
    }
    let texts: Vec<String> = grid.rows.iter().map(|row| spot.text(row)).collect();
    stamps::find(texts.iter().map(String::as_str), false, now)
}

fn is_time_column(grid: &Grid, column: usize) -> bool {
    let texts = grid.distinct(column);
    let times = texts.iter().filter(|(text, _)| stamps::is_time(text)).count();
    times > 0 && times * 10 >= texts.len() * 6
}

/// The days of a column, by row.
fn days_of(grid: &Grid, candidate: &Candidate) -> Vec<Option<NaiveDate>> {
    let format = candidate.found.formats.first().map(String::as_str).unwrap_or_default();
    let Some(days) = Days::new(format) else { return vec![] };
    grid.texts(candidate.column).map(|text| days.read(text)).collect()
}

/// Whether two columns always say the same day, so that one of them says nothing new.
fn same_days(grid: &Grid, one: &Candidate, other: &Candidate) -> bool {
    let (one, other) = (days_of(grid, one), days_of(grid, other));
    one.iter().zip(&other).all(|(one, other)| other.is_none() || one == other)
}

/// Dates of birth lie years before anybody was enrolled.
fn is_birth(grid: &Grid, candidate: &Candidate, against: Against<'_>) -> bool {
    let rostered = against.roster.and_then(|roster| roster.subjects.values().filter_map(|it| it.enrolled).min());
    let planned = against.plan.and_then(|plan| plan.study.enrol).map(|enrol| enrol.from);
    let Some(start) = rostered.or(planned) else { return false };
    let days = days_of(grid, candidate);
    let mut known = days.iter().flatten().peekable();
    known.peek().is_some() && known.all(|day| (start - *day).num_days() > 3 * 365)
}

fn joined(grid: &Grid, day: &Candidate, time: usize, now: DateTime<Utc>) -> Taken {
    let columns = vec![day.column, time];
    match stamp_of(grid, &columns, now) {
        Some(found) => stamped(grid, columns, &found),
        None => stamped(grid, vec![day.column], &day.found),
    }
}

/// The line of columns whose way of writing was found.
fn stamped(grid: &Grid, columns: Vec<usize>, found: &Found) -> Taken {
    let names: Vec<String> = columns.iter().filter_map(|at| grid.columns.get(*at)).map(|name| quote(name)).collect();
    let place = match names.as_slice() {
        [one] => format!("column = {one}"),
        several => format!("columns = [{}]", several.join(", ")),
    };
    let example = grid.rows.iter().map(|row| Spot::Columns(columns.clone()).text(row)).find(|text| !text.is_empty());
    let line = stamp_line(&place, found, &example.unwrap_or_default());
    Taken { line, spot: Spot::Columns(columns), formats: found.formats.clone(), place }
}

fn stamp_line(place: &str, found: &Found, example: &str) -> Line {
    let mut notes = Notes::default();
    let format = match found.formats.as_slice() {
        [one] => one.as_str(),
        several => {
            let shown: Vec<String> = several.iter().map(|format| quote(format)).collect();
            notes.gap(format!("{}: \"{example}\" may be read in more than one way", shown.join(" or ")));
            BLANK
        }
    };
    if found.settled_by == Some(1) {
        notes.doubt("one row alone settles the order of day and month");
    }
    if found.unread > 0 {
        notes.doubt(format!("{} of {} cannot be read so, and will be held", found.unread, rows(found.rows)));
    }
    Line::with("taken_at", &format!("{{ {place}, format = {} }}", quote(format)), &notes)
}

/// In the preamble.
fn stamp_elsewhere(grid: &Grid, against: Against<'_>) -> Taken {
    for (key, values) in &grid.preamble {
        let all = values.len() == grid.samples.len() && !values.is_empty();
        let found = stamps::find(values.iter().map(String::as_str), false, against.now).filter(|it| it.unread == 0);
        if let (true, Some(found)) = (all, found) {
            let line = stamp_line(&format!("preamble = {}", quote(key)), &found, values.first().map_or("", |it| it));
            return Taken::new(line, Spot::Unknown);
        }
    }
    let what = "when was it measured? No column or preamble holds dates: \
                { column = \"…\", format = \"…\" } or { file_name = '…(…)…', format = \"…\" }";
    Taken::new(Line::gap("taken_at", &format!("{{ format = {} }}", quote(BLANK)), what), Spot::Unknown)
}

/// The day above the header, the time in a column.
fn date_above(grid: &Grid, time: usize, against: Against<'_>) -> Taken {
    for (key, values) in grid.preamble.iter().filter(|(_, values)| values.len() == grid.samples.len()) {
        let value = |row: &GridRow| {
            let at = grid.samples.iter().position(|sample| *sample == row.sample);
            at.and_then(|at| values.get(at)).cloned().unwrap_or_default()
        };
        let texts: Vec<String> = grid
            .rows
            .iter()
            .map(|row| format!("{} {}", value(row), row.cells.get(time).map_or("", |cell| cell.text.as_str())))
            .collect();
        if let Some(found) = stamps::find(texts.iter().map(String::as_str), false, against.now).filter(|it| it.timed) {
            let place = format!("parts = [{{ preamble = {} }}, {}]", quote(key), column(grid, time));
            let line = stamp_line(&place, &found, texts.first().map_or("", |it| it));
            return Taken::new(line, Spot::Columns(vec![time]));
        }
    }
    let name = grid.columns.get(time).map_or("", String::as_str);
    let what = format!(
        "on which day was it measured? \"{name}\" holds only times: \
         {{ parts = [{{ file_name = '…(…)…' }}, {{ column = {} }}], format = \"…\" }}",
        quote(name)
    );
    let value = format!("{{ format = {} }}", quote(BLANK));
    Taken::new(Line::gap("taken_at", &value, what), Spot::Columns(vec![time]))
}
