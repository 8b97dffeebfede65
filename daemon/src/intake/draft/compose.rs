//! Composing: the questions asked in their order, and the lines written in theirs.

use std::collections::BTreeSet;

use revisant_schema::plan::{Encoding, Format, Header, Measure, Plan, PlanFiles, Sheet, parse};

use super::grid::{self, Grid, Layout};
use super::labels;
use super::lines::{BLANK, Line, Mark, Notes, literal, quote, some};
use super::nested::{self, Nested};
use super::numbers::{self, Marks, Settled};
use super::place::{self, Against, Taken};
use super::rest::{self, Keys};
use super::told::{self, Answers, Told};
use super::values::{self, Entry, Hints, Numeric};
use super::when;
use super::words;
use super::{Asked, Draft, DraftFault, Misfit, Remark, book, into, preview, text, units};

/// The samples under one layout.
struct Laid {
    layout: Layout,
    grid: Grid,
    misfits: Vec<Misfit>,
    notes: Vec<Line>,
}

/// Drafts an instrument.
pub fn compose(asked: &Asked<'_>) -> Result<Draft, DraftFault> {
    let laid = lay_out(asked)?;
    let found = Found::look(asked, &laid.grid);
    let lines = Written::of(asked, &laid, &found);
    Ok(lines.finish(asked, laid, &found))
}

/// What kind of file a sample is.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord)]
enum Kind {
    Text,
    Workbook,
    Nested(Nested),
}

impl Kind {
    fn of(bytes: &[u8]) -> Self {
        if bytes.starts_with(b"PK\x03\x04") || bytes.starts_with(&[0xD0, 0xCF, 0x11, 0xE0]) {
            return Self::Workbook;
        }
        text::decode(bytes).and_then(|it| nested::kind(&it.text)).map_or(Self::Text, Self::Nested)
    }

    fn called(self) -> &'static str {
        match self {
            Self::Text => "text",
            Self::Workbook => "a workbook",
            Self::Nested(Nested::Json) => "JSON",
            Self::Nested(Nested::Lines) => "JSON lines",
            Self::Nested(Nested::Xml) => "XML",
        }
    }
}

/// The layout that most samples have, with the columns of each.
struct Proposed {
    layout: Layout,
    columns: Vec<Vec<String>>,
    refused: Vec<(usize, String)>,
    notes: Vec<Line>,
}

fn lay_out(asked: &Asked<'_>) -> Result<Laid, DraftFault> {
    let kinds: Vec<Kind> = asked.samples.iter().map(|it| Kind::of(&it.bytes)).collect();
    let count = |kind: &Kind| kinds.iter().filter(|other| *other == kind).count();
    // Of kinds that stand equally often, the first sample's.
    let most = kinds.iter().map(count).max().unwrap_or(0);
    let kind = kinds.iter().find(|kind| count(kind) == most).copied().unwrap_or(Kind::Text);
    let which: Vec<usize> = (0..kinds.len()).filter(|at| kinds.get(*at) == Some(&kind)).collect();
    let mut refused: Vec<(usize, String)> = kinds
        .iter()
        .enumerate()
        .filter(|(_, other)| **other != kind)
        .map(|(at, other)| (at, format!("it is {}, the others are {}", other.called(), kind.called())))
        .collect();
    let none = |why: String| DraftFault::Unreadable(why);
    let proposed = propose(asked, kind, &which).ok_or_else(|| none(why_none(asked, kind)))?;
    let (grid, more) = grid::read_all(&proposed.layout, asked.samples, &proposed.columns);
    refused.extend(proposed.refused.into_iter().chain(more));
    refused.sort();
    if grid.samples.is_empty() {
        return Err(none(refused.first().map_or("no table is found in them".to_owned(), |(_, why)| why.clone())));
    }
    let misfit = |(at, why): (usize, String)| Some(Misfit { sample: asked.samples.get(at)?.shown.clone(), why });
    Ok(Laid {
        layout: proposed.layout,
        grid,
        misfits: refused.into_iter().filter_map(misfit).collect(),
        notes: proposed.notes,
    })
}

/// Why nothing is proposed, where a module can say no more than that it finds nothing.
fn why_none(asked: &Asked<'_>, kind: Kind) -> String {
    let first = asked.samples.first();
    let fault = first
        .filter(|_| kind == Kind::Workbook)
        .and_then(|it| crate::intake::read::workbook::glance(&it.bytes, 1).err().map(|fault| fault.to_string()));
    fault.unwrap_or_else(|| "no table is found in them".to_owned())
}

fn propose(asked: &Asked<'_>, kind: Kind, which: &[usize]) -> Option<Proposed> {
    let against = Against { plan: asked.plan, roster: asked.roster, now: asked.now };
    let shown = |at: &usize| asked.samples.get(*at).map(|it| it.shown.as_str());
    let mut notes = vec![];
    match kind {
        Kind::Text => {
            let found = text::delimited(asked.samples, which)?;
            if found.supposed {
                let why = "the bytes are no UTF-8; this is the commonest other encoding";
                notes.push(Line::remark("encoding", why));
            }
            if !found.other_delimiter.is_empty() {
                let names = some(found.other_delimiter.iter().filter_map(shown));
                notes.push(Line::remark("delimiter", format!("another one seems likelier in {names}")));
            }
            Some(Proposed { layout: found.layout, columns: found.columns, refused: found.refused, notes })
        }
        Kind::Workbook => {
            let found = book::workbooks(asked.samples, which, against)?;
            Some(Proposed { layout: found.layout, columns: found.columns, refused: found.refused, notes })
        }
        Kind::Nested(kind) => {
            let found = nested::nested(asked.samples, which, kind, against)?;
            if !found.rivals.is_empty() {
                let paths = some(found.rivals.iter().map(String::as_str));
                notes.push(Line::remark("rows", format!("rows may also be at {paths}")));
            }
            Some(Proposed { layout: found.layout, columns: found.columns, refused: found.refused, notes })
        }
    }
}

/// What each question came to.
struct Found {
    subject: Taken,
    taken_at: Taken,
    visit: Option<Line>,
    replicate: Option<Line>,
    operator: Option<Line>,
    entries: Vec<Entry>,
    marks: Settled,
    ignore: Vec<(String, Mark)>,
    left: Vec<String>,
    missing: (Vec<String>, Vec<String>, Vec<String>),
    grows: Option<(String, String)>,
    visit_column: Option<usize>,
    replicate_column: Option<usize>,
    operator_column: Option<usize>,
    /// The plan's measures that no column is taken for.
    unmatched: Vec<String>,
    /// The columns that the draft names.
    needed: Vec<String>,
}

impl Found {
    fn look(asked: &Asked<'_>, all: &Grid) -> Self {
        let against = Against { plan: asked.plan, roster: asked.roster, now: asked.now };
        let subject = place::subject(all, asked.samples, against);
        // Rows of controls and totals say nothing about where a subject's readings stand.
        let of_subjects = |row: &grid::GridRow| against.plan.is_none() || against.is_subject(&subject.spot.text(row));
        let subjects = all.only(of_subjects);
        let rows = if subjects.rows.is_empty() { all } else { &subjects };
        let mut used: BTreeSet<usize> = subject.spot.columns().iter().copied().collect();
        let taken_at = place::taken_at(rows, &|at| !used.contains(&at), against);
        used.extend(taken_at.spot.columns());
        let marks = marks(rows, &used);
        let mut found = Self {
            subject,
            taken_at,
            visit: None,
            replicate: None,
            operator: None,
            entries: vec![],
            marks,
            ignore: vec![],
            left: vec![],
            missing: Default::default(),
            grows: rest::grows(all, asked.samples),
            visit_column: None,
            replicate_column: None,
            operator_column: None,
            unmatched: vec![],
            needed: vec![],
        };
        match asked.plan {
            Some(plan) => found.with_plan(asked, all, rows, plan, &mut used),
            None => found.without_plan(rows, &mut used),
        }
        let columns: Vec<usize> = found.entries.iter().map(|it| it.column).collect();
        found.missing = rest::missing(rows, &columns);
        found
    }

    fn with_plan(&mut self, asked: &Asked<'_>, all: &Grid, rows: &Grid, plan: &Plan, used: &mut BTreeSet<usize>) {
        let long = long_column(rows, plan, used);
        used.extend(long.as_ref().map(|(column, _)| *column));
        let unit = unit_column(rows, plan, used);
        used.extend(unit.as_ref().map(|it| it.column));
        let levels = values::level_columns(rows, plan, &|at| !used.contains(&at));
        used.extend(levels.iter().map(|it| it.column));
        self.look_for_visit(asked, rows, plan, used);
        self.settle_days(asked, rows, plan);
        let telling: Vec<usize> = long
            .iter()
            .map(|(column, _)| *column)
            .chain(levels.iter().map(|it| it.column))
            .chain(self.visit_column)
            .collect();
        let expected = plan.measures.iter().map(|it| it.replicates).max().unwrap_or(1);
        let (subject, taken_at) = (self.subject.spot.clone(), self.taken_at.spot.clone());
        let session = move |row: &grid::GridRow| rest::session_key(row, &subject, &taken_at);
        let keys = Keys { session: &session, columns: &telling, expected };
        if let Some(replicate) = rest::replicate(rows, &|at| !used.contains(&at), &keys) {
            used.extend(replicate.column);
            self.replicate_column = replicate.column;
            self.replicate = Some(replicate.line);
        }
        let mut numeric = values::numeric(rows, &|at| !used.contains(&at), self.marks.marks);
        values::name_before_unit(&mut numeric, rows, plan);
        let surroundings = surroundings(asked);
        self.entries = match &long {
            Some((column, meeting)) => long_entries(rows, plan, (*column, meeting), &numeric, unit.as_ref(), &levels),
            None => wide_entries(rows, plan, &numeric, unit.as_ref(), &levels, &surroundings),
        };
        used.extend(self.entries.iter().map(|it| it.column));
        self.unmatched = unmatched(plan, rows, long.as_ref(), &self.entries);
        self.look_for_operator(rows, used);
        self.needed = used.iter().filter_map(|at| all.columns.get(*at)).cloned().collect();
        // Here all rows count: a control's rows are told by what they hold.
        let last = rest::unaccounted(all, &|at| !used.contains(&at), &keys, self.visit.is_some());
        self.needed.extend(last.columns);
        (self.ignore, self.left) = (last.ignore, last.left);
    }

    fn look_for_visit(&mut self, asked: &Asked<'_>, rows: &Grid, plan: &Plan, used: &mut BTreeSet<usize>) {
        let visit = rest::visit(rows, &|at| !used.contains(&at), plan);
        if let Some(visit) = visit {
            used.extend(visit.column);
            self.visit_column = visit.column;
            self.visit = Some(visit.line);
        } else {
            let against = Against { plan: Some(plan), roster: asked.roster, now: asked.now };
            let format = self.taken_at.formats.first().filter(|_| self.taken_at.formats.len() == 1);
            let agree = |label: &rest::VisitOf<'_>| {
                let (subject, taken_at) = (&self.subject.spot, &self.taken_at.spot);
                format.is_some_and(|it| when::dates_agree(rows, plan, against, (subject, taken_at, it.as_str()), label))
            };
            self.visit = rest::visit_elsewhere(rows, asked.samples, plan, &agree);
        }
    }

    fn look_for_operator(&mut self, rows: &Grid, used: &mut BTreeSet<usize>) {
        if let Some(operator) = rest::operator(rows, &|at| !used.contains(&at)) {
            used.extend(operator.column);
            self.operator_column = operator.column;
            self.operator = Some(operator.line);
        }
    }

    /// Where the texts leave open how days are written, the visits' windows may say.
    fn settle_days(&mut self, asked: &Asked<'_>, rows: &Grid, plan: &Plan) {
        let (Some(visit), true) = (self.visit_column, self.taken_at.formats.len() > 1) else { return };
        let against = Against { plan: Some(plan), roster: asked.roster, now: asked.now };
        let spots = when::Spots { subject: &self.subject.spot, taken_at: &self.taken_at.spot, visit };
        let formats = self.taken_at.formats.clone();
        if let Some((format, subjects)) = when::settled_by_windows(rows, plan, against, &spots, &formats) {
            let why = format!("only so do the labelled sessions of {subjects} subjects lie in their visits' windows");
            self.taken_at.settle(format, why);
        }
    }

    /// What was found, column by column.
    fn tell(&self, asked: &Asked<'_>, laid: &Laid) -> Told {
        let measure = |at: usize| {
            let entry = self.entries.iter().find(|entry| entry.column == at)?;
            let code = entry.measure.and_then(|ix| Some(asked.plan?.measures.get(ix)?.code.clone()));
            Some(code.unwrap_or_else(|| "value".to_owned()))
        };
        let taken_for = |at: usize| match at {
            _ if self.subject.spot.columns().contains(&at) => Some("subject".to_owned()),
            _ if self.taken_at.spot.columns().contains(&at) => Some("taken_at".to_owned()),
            _ if self.visit_column == Some(at) => Some("visit".to_owned()),
            _ if self.replicate_column == Some(at) => Some("replicate".to_owned()),
            _ if self.operator_column == Some(at) => Some("operator".to_owned()),
            _ => measure(at),
        };
        let stamp = match self.taken_at.formats.as_slice() {
            [one] => Some(one.clone()),
            _ => None,
        };
        let decimal = self.marks.open.is_none().then_some(self.marks.marks.decimal);
        told::tell(asked.samples, &laid.layout, &laid.grid, Answers { taken_for: &taken_for, decimal, stamp })
    }

    fn without_plan(&mut self, rows: &Grid, used: &mut BTreeSet<usize>) {
        let numeric = values::numeric(rows, &|at| !used.contains(&at), self.marks.marks);
        self.entries = numeric.iter().filter(|it| !it.is_small).map(|it| values::unknown_entry(rows, it)).collect();
        used.extend(self.entries.iter().map(|it| it.column));
        if self.entries.is_empty() {
            self.entries = numeric.iter().map(|it| values::unknown_entry(rows, it)).collect();
        }
        if self.entries.is_empty() {
            self.entries.push(no_value("which column holds the values? None of the samples' columns holds numbers"));
        }
        self.look_for_operator(rows, used);
        let rest = (0..rows.columns.len()).filter(|at| !used.contains(at) && !rows.distinct(*at).is_empty());
        self.left = rest.filter_map(|at| rows.columns.get(at)).cloned().collect();
    }
}

/// The marks of all texts that are like numbers and no part of a stamp or code.
fn marks(rows: &Grid, used: &BTreeSet<usize>) -> Settled {
    let free = (0..rows.columns.len()).filter(|at| !used.contains(at));
    let columns: Vec<usize> = free
        .filter(|at| {
            let texts = rows.distinct(*at);
            let like = texts.iter().filter(|(text, _)| numbers::is_like_a_number(text)).count();
            like * 2 > texts.len()
        })
        .collect();
    let texts = rows.rows.iter().flat_map(|row| columns.iter().filter_map(|at| row.cells.get(*at)));
    numbers::settle(
        texts.filter(|cell| !cell.number && numbers::is_like_a_number(&cell.text)).map(|cell| cell.text.as_str()),
    )
}

/// The column that names each row's measure.
fn long_column(rows: &Grid, plan: &Plan, used: &BTreeSet<usize>) -> Option<(usize, labels::Meeting)> {
    let known = values::known_measures(plan);
    let free = |at: usize| !used.contains(&at);
    let mut met = labels::meeting_columns(rows, &free, &known, 0.3);
    if met.len() == 1 {
        return met.pop();
    }
    None
}

/// The plan's measures that no entry is for.
fn unmatched(plan: &Plan, rows: &Grid, long: Option<&(usize, labels::Meeting)>, entries: &[Entry]) -> Vec<String> {
    let present = long.map_or(vec![], |(column, meeting)| values::measures_present(plan, rows, *column, meeting));
    let is_there = |at: usize| present.contains(&at) || entries.iter().any(|it| it.measure == Some(at));
    plan.measures.iter().enumerate().filter(|(at, _)| !is_there(*at)).map(|(_, it)| it.code.clone()).collect()
}

/// The column of units. One that is not called so must hold units of the plan's measures, and no code of the plan: a
/// visit may be called "in".
fn unit_column(rows: &Grid, plan: &Plan, used: &BTreeSet<usize>) -> Option<values::UnitColumn> {
    let all: Vec<&Measure> = plan.measures.iter().collect();
    let factors = plan.measures.iter().flat_map(|it| &it.conditions).map(|it| it.code.as_str());
    let mut codes = rest::known_visits(plan);
    codes.extend(factors.flat_map(|factor| values::levels(&all, factor)));
    let is_plain = |texts: &[(&str, usize)]| labels::Meeting::of(texts, &codes).met() == 0;
    let converts = |texts: &[(&str, usize)]| {
        let unit = texts.first().and_then(|(text, _)| units::unit_code(text));
        unit.is_some_and(|code| all.iter().any(|it| revisant_schema::plan::units::convert(&code, &it.unit).is_some()))
    };
    let mut found = (0..rows.columns.len()).filter(|at| !used.contains(at)).filter(|at| {
        let texts = rows.distinct(*at);
        rows.columns.get(*at).is_some_and(|name| {
            let called = words::UNIT.names(name.rsplit('/').next().unwrap_or(name));
            units::are_units(&texts, called) && (called || is_plain(&texts) && converts(&texts))
        })
    });
    match (found.next(), found.next()) {
        (Some(one), None) => Some(values::unit_column(rows, one)),
        _ => None,
    }
}

/// Words of file names, folders and the instrument's own name.
fn surroundings(asked: &Asked<'_>) -> Vec<String> {
    let names = asked.samples.iter().flat_map(|it| [it.file_name.as_str(), it.folder.as_str()]);
    names.chain([asked.code, asked.folder]).flat_map(words::words).collect()
}

fn long_entries(
    rows: &Grid,
    plan: &Plan,
    named: (usize, &labels::Meeting),
    numeric: &[Numeric],
    unit: Option<&values::UnitColumn>,
    levels: &[values::LevelColumn],
) -> Vec<Entry> {
    let called: Vec<&Numeric> =
        numeric.iter().filter(|it| rows.columns.get(it.column).is_some_and(|name| words::VALUE.names(name))).collect();
    let able: Vec<&Numeric> = numeric.iter().filter(|it| !it.is_small).collect();
    let one = match (called.as_slice(), able.as_slice(), numeric) {
        ([one], _, _) | ([], [one], _) => Some(*one),
        ([], [], [one]) => Some(one),
        _ => None,
    };
    match one {
        Some(one) => vec![values::long_entry(rows, plan, named, one, unit, levels)],
        None => vec![no_value("which column holds the values of the measures that stand in a column?")],
    }
}

/// An entry that a person must write.
fn no_value(what: &str) -> Entry {
    let lines = vec![Line::gap("measure", &quote(BLANK), what), Line::sure("column", &quote(BLANK))];
    Entry { lines, column: usize::MAX, measure: None }
}

fn wide_entries(
    rows: &Grid,
    plan: &Plan,
    numeric: &[Numeric],
    unit: Option<&values::UnitColumn>,
    levels: &[values::LevelColumn],
    surroundings: &[String],
) -> Vec<Entry> {
    let conditions_found = |at: usize| {
        plan.measures.get(at).is_some_and(|measure| {
            !measure.conditions.is_empty()
                && measure.conditions.iter().all(|factor| levels.iter().any(|it| it.factor == factor.code))
        })
    };
    let hints = Hints { conditions_found: &conditions_found, surroundings };
    let matched = values::match_columns(rows, plan, numeric, &hints);
    // One column of units beside several values says of which of them only when there is one.
    let unit = unit.filter(|_| matched.len() == 1);
    let mut entries: Vec<Entry> = matched
        .iter()
        .filter_map(|it| Some(values::wide_entry(rows, plan, numeric.get(it.index)?, it, unit, levels)))
        .collect();
    if entries.is_empty() {
        return vec![no_value("no column is told to hold a measure of the plan")];
    }
    same_place(rows, plan, &mut entries);
    entries
}

/// A label without what may number replicates: digits and single letters.
fn unnumbered(label: &str) -> String {
    let words =
        words::words(label).into_iter().map(|word| word.trim_end_matches(|c: char| c.is_ascii_digit()).to_owned());
    words.filter(|word| word.chars().count() > 1).collect::<Vec<_>>().join(" ")
}

/// Several columns of one measure and condition are replicates, when the plan expects so many.
fn same_place(rows: &Grid, plan: &Plan, entries: &mut [Entry]) {
    let key = |entry: &Entry| {
        let condition = entry.lines.iter().find(|line| line.key == "condition").map(|line| line.text.clone());
        entry.measure.map(|measure| (measure, condition))
    };
    let keys: Vec<_> = entries.iter().map(key).collect();
    let labels: Vec<String> =
        entries.iter().map(|it| unnumbered(rows.columns.get(it.column).map_or("", String::as_str))).collect();
    for (index, entry) in entries.iter_mut().enumerate() {
        let Some(Some((measure, _))) = keys.get(index) else { continue };
        let count = keys.iter().filter(|other| Some(*other) == keys.get(index)).count();
        let alike = keys.iter().zip(&labels).filter(|(other, _)| Some(*other) == keys.get(index));
        let alike = alike.filter(|(_, label)| Some(*label) == labels.get(index)).count();
        let expected = plan.measures.get(*measure).map_or(1, |it: &Measure| it.replicates as usize);
        let Some(line) = entry.lines.first_mut() else { continue };
        if count > expected {
            line.mark = Mark::Gap(format!(
                "{count} columns are taken for this measure, the plan expects {expected}: take out those that are not meant"
            ));
        } else if count > alike {
            // "Max force" and "Mean force" are no replicates of a force.
            line.mark = Mark::Gap(format!(
                "{count} columns are taken for this measure, but their labels differ: take out those that are not meant"
            ));
        } else if count > 1 && line.mark == Mark::Sure {
            line.mark = Mark::Unsure(format!("{count} columns are replicates in this order"));
        }
    }
}

/// The lines of the draft, table by table.
struct Written {
    instrument: Vec<Line>,
    reader: Vec<Line>,
    ignore: Vec<(String, Mark)>,
}

impl Written {
    fn of(asked: &Asked<'_>, laid: &Laid, found: &Found) -> Self {
        let mut reader = format_lines(laid);
        reader.extend(mark_lines(&laid.layout, &found.marks));
        reader.extend(layout_lines(&laid.layout));
        reader.push(missing_line(found));
        reader.push(found.subject.line.clone());
        reader.push(found.taken_at.line.clone());
        match &found.visit {
            Some(line) => reader.push(line.clone()),
            None => reader.push(Line::remark("visit", "no labels of visits are found; the date decides")),
        }
        reader.extend(found.replicate.clone());
        reader.extend(found.operator.clone());
        if !found.left.is_empty() {
            let names = found.left.iter().map(|name| quote(name)).collect::<Vec<_>>().join(", ");
            let more = match found.unmatched.as_slice() {
                [] => String::new(),
                codes => format!("; no column is taken for {}", some(codes.iter().map(String::as_str))),
            };
            reader.push(Line::remark("columns", format!("these columns are not read: {names}{more}")));
        }
        Self { instrument: instrument_lines(asked, found), reader, ignore: found.ignore.clone() }
    }

    fn finish(self, asked: &Asked<'_>, laid: Laid, found: &Found) -> Draft {
        let mut toml = String::from("[[instrument]]\n");
        self.instrument.iter().for_each(|line| line.write(&mut toml));
        toml.push_str("\n[instrument.reader]\n");
        self.reader.iter().for_each(|line| line.write(&mut toml));
        write_ignore(&self.ignore, &mut toml);
        for entry in &found.entries {
            toml.push_str("\n[[instrument.reader.value]]\n");
            entry.lines.iter().for_each(|line| line.write(&mut toml));
        }
        let rules: Vec<Line> = self
            .ignore
            .iter()
            .map(|(rule, mark)| Line { key: "ignore".into(), text: rule.clone(), mark: mark.clone() })
            .collect();
        let lines = || {
            self.instrument
                .iter()
                .chain(&self.reader)
                .chain(&rules)
                .chain(found.entries.iter().flat_map(|it| &it.lines))
        };
        let remark = |line: &Line, text: &str| Remark { key: line.key.clone(), text: text.to_owned() };
        let gaps: Vec<Remark> = lines()
            .filter_map(|line| if let Mark::Gap(text) = &line.mark { Some(remark(line, text)) } else { None })
            .collect();
        let unsure = lines()
            .filter_map(|line| if let Mark::Unsure(text) = &line.mark { Some(remark(line, text)) } else { None })
            .collect();
        let (toml, gaps) = held_together(asked, toml, gaps);
        let spots = preview::Spots {
            subject: &found.subject.spot,
            taken_at: &found.taken_at.spot,
            visit: found.visit_column,
            values: found.entries.iter().map(|it| (it.column, it.measure)).collect(),
        };
        let preview = preview::preview(asked, &toml, gaps.is_empty(), &laid.grid, &spots);
        let told = found.tell(asked, &laid);
        Draft { toml, gaps, unsure, misfits: misfits(asked, laid, &found.needed), preview, told }
    }
}

/// Sees to it that a draft with gaps is no sound plan, and that one without is: whatever an export's labels made of it.
fn held_together(asked: &Asked<'_>, toml: String, mut gaps: Vec<Remark>) -> (String, Vec<Remark>) {
    let Some(main) = asked.plan_text.and_then(|text| into::alone(text, &toml)) else { return (toml, gaps) };
    let faults = parse(&PlanFiles { main, readers: vec![] }).err();
    let put = |line: Line| {
        let mut text = String::new();
        line.write(&mut text);
        toml.replacen("[[instrument]]\n", &format!("[[instrument]]\n{text}"), 1)
    };
    match (faults, gaps.is_empty()) {
        (None, false) => (put(Line::gap("fill_in", "true", "take this line out when all else is filled in")), gaps),
        (Some(faults), true) => {
            let wrong = faults.0.first().map(|fault| format!("{}: {}", fault.key, fault.wrong)).unwrap_or_default();
            let line = Line { key: String::new(), text: String::new(), mark: Mark::Gap(wrong.clone()) };
            gaps.push(Remark { key: "reader".to_owned(), text: wrong });
            (put(line), gaps)
        }
        _ => (toml, gaps),
    }
}

/// The samples that were refused, and those that lack a column that the draft names. A nested document may leave out
/// what a row does not have.
fn misfits(asked: &Asked<'_>, laid: Laid, needed: &[String]) -> Vec<Misfit> {
    let mut misfits = laid.misfits;
    if matches!(laid.layout.format, Format::Json { .. } | Format::JsonLines { .. } | Format::Xml { .. }) {
        return misfits;
    }
    for sample in laid.grid.samples.iter().filter_map(|at| asked.samples.get(*at)) {
        if let Err(why) = grid::has_columns(&laid.layout, needed, sample) {
            misfits.push(Misfit { sample: sample.shown.clone(), why });
        }
    }
    misfits
}

fn write_ignore(rules: &[(String, Mark)], toml: &mut String) {
    if rules.is_empty() {
        return;
    }
    toml.push_str("ignore = [\n");
    for (rule, mark) in rules {
        Line { key: "ignore".into(), text: format!("    {rule},"), mark: mark.clone() }.write(toml);
    }
    toml.push_str("]\n");
}

fn instrument_lines(asked: &Asked<'_>, found: &Found) -> Vec<Line> {
    let mut lines = vec![Line::sure("code", &quote(asked.code)), Line::sure("folder", &quote(asked.folder))];
    let mut endings: Vec<&str> =
        asked.samples.iter().map(|it| it.file_name.rsplit_once('.').map_or("", |(_, ending)| ending)).collect();
    endings.sort_unstable();
    endings.dedup();
    match endings.as_slice() {
        [one] if !one.is_empty() => lines.push(Line::sure("files", &quote(&format!("*.{one}")))),
        _ => {}
    }
    if let Some((small, large)) = &found.grows {
        let why = format!("{large} holds the rows of {small} again, and more");
        lines.push(Line::unsure("re_export", "\"grows\"", why));
    }
    lines
}

fn format_lines(laid: &Laid) -> Vec<Line> {
    let layout = &laid.layout;
    let mut lines = vec![Line::sure("format", &quote(layout.format.name()))];
    let noted = |key: &str, value: String| {
        let note = laid.notes.iter().find(|line| line.key == key);
        match note.map(|line| line.mark.clone()) {
            Some(mark) => Line { mark, ..Line::sure(key, &value) },
            None => Line::sure(key, &value),
        }
    };
    if let Encoding::Label(encoding) = layout.encoding {
        lines.push(noted("encoding", quote(&encoding.name().to_lowercase())));
    }
    match &layout.format {
        Format::Delimited { delimiter: Some(delimiter) } => {
            lines.push(noted("delimiter", quote(&char::from(*delimiter).to_string())));
        }
        Format::Workbook { sheet: Sheet::Named(name) } => lines.push(noted("sheet", quote(name))),
        Format::Workbook { sheet: Sheet::Number(number) } => lines.push(noted("sheet", number.to_string())),
        Format::Json { rows } | Format::Xml { rows } => lines.push(noted("rows", quote(rows))),
        Format::JsonLines { rows } if !rows.is_empty() => lines.push(noted("rows", quote(rows))),
        _ => {}
    }
    lines
}

fn mark_lines(layout: &Layout, settled: &Settled) -> Vec<Line> {
    if matches!(layout.format, Format::Json { .. } | Format::JsonLines { .. } | Format::Workbook { .. })
        && settled.open.is_none()
        && settled.marks.decimal == '.'
    {
        return vec![];
    }
    let Marks { decimal, group } = settled.marks;
    let mut notes = Notes::default();
    if let Some((text, count)) = &settled.against {
        notes.doubt(format!("{count} numbers such as \"{text}\" do not fit, and will be held"));
    }
    let mut lines = vec![];
    if let Some(open) = &settled.open {
        notes.gap(format!(
            "\".\" or \",\": \"{open}\" may be about one or about a thousand; name the other as group_mark if it is one"
        ));
        lines.push(Line::with("decimal_mark", &quote(BLANK), &notes));
        return lines;
    }
    if decimal != '.' || !notes.doubts.is_empty() {
        lines.push(Line::with("decimal_mark", &quote(&decimal.to_string()), &notes));
    }
    lines.extend(group.map(|group| Line::sure("group_mark", &quote(&group.to_string()))));
    lines
}

fn layout_lines(layout: &Layout) -> Vec<Line> {
    let mut lines = vec![];
    match &layout.header {
        _ if matches!(layout.format, Format::Json { .. } | Format::JsonLines { .. } | Format::Xml { .. }) => {}
        Header::Row { row, .. } => lines.push(Line::sure("header", &format!("{{ row = {row} }}"))),
        Header::StartsWith(start) => lines.push(Line::sure("header", &format!("{{ starts_with = {} }}", quote(start)))),
        Header::None => lines.push(Line::unsure("header", "{ none = true }", "the first line looks like data")),
    }
    if layout.units_row {
        lines.push(Line::sure("units_row", "true"));
    }
    if let Some(stop) = &layout.stop_at {
        lines.push(Line::unsure("stop_at", &literal(stop), "the samples that end so end with it"));
    }
    lines
}

fn missing_line(found: &Found) -> Line {
    let (known, supposed, held) = &found.missing;
    let texts: Vec<String> =
        std::iter::once("").chain(known.iter().chain(supposed).map(String::as_str)).map(quote).collect();
    let mut notes = Notes::default();
    if !supposed.is_empty() {
        notes.doubt(format!("{} taken for no value", some(supposed.iter().map(String::as_str))));
    }
    if !held.is_empty() {
        notes.doubt(format!("{} will be held as unreadable-value", some(held.iter().map(String::as_str))));
    }
    Line::with("missing", &format!("[{}]", texts.join(", ")), &notes)
}
