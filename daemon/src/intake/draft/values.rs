//! Values: which column holds which measure, in which unit and condition.
//!
//! Invariant: a column is given to a measure only when no other measure of the plan may be meant; a unit that is
//! nowhere stated is only taken for the plan's when the numbers lie where the plan says they may.

use revisant_schema::plan::{Measure, Plan, units};

use super::grid::Grid;
use super::labels::{Known, Meeting};
use super::lines::{BLANK, Line, Notes, clip, quote, some};
use super::numbers::{self, Marks};
use super::units::{Labelled, labelled, unit_code};
use super::words::{self, fold, words as split_words};

/// A share of values outside the plausible range from which on the unit is hardly the one supposed.
const PLAUSIBLE: f64 = 0.9;

/// One drafted `[[instrument.reader.value]]`.
#[derive(Debug, Clone, Default)]
pub struct Entry {
    /// Its lines.
    pub lines: Vec<Line>,
    /// Its column.
    pub column: usize,
    /// The measure, where it is fixed and known.
    pub measure: Option<usize>,
}

/// A column of numbers.
pub struct Numeric {
    /// The column.
    pub column: usize,
    /// Its label and the unit in it.
    pub label: Labelled,
    /// The row of units' text.
    pub units_row: Option<String>,
    /// Its numbers.
    pub numbers: Vec<f64>,
    /// Its numbers are few whole ones, as codes and counters are.
    pub is_small: bool,
}

/// The columns of numbers among those that are free.
pub fn numeric(grid: &Grid, free: &dyn Fn(usize) -> bool, marks: Marks) -> Vec<Numeric> {
    (0..grid.columns.len()).filter(|column| free(*column)).filter_map(|it| numeric_column(grid, it, marks)).collect()
}

fn numeric_column(grid: &Grid, column: usize, marks: Marks) -> Option<Numeric> {
    let filled = || grid.rows.iter().filter_map(|row| row.cells.get(column)).filter(|cell| !cell.text.is_empty());
    let numbers: Vec<f64> = filled().filter_map(|cell| numbers::parse(&cell.text, cell.number, marks)).collect();
    // Words for "missing" may stand in most cells of a measure that few subjects had.
    let words = filled().filter(|cell| words::says_missing(&cell.text)).count();
    if numbers.is_empty() || numbers.len() * 10 < (filled().count() - words) * 6 {
        return None;
    }
    let name = grid.columns.get(column)?;
    let mut distinct: Vec<f64> = numbers.clone();
    distinct.sort_by(f64::total_cmp);
    distinct.dedup();
    let is_small = numbers.iter().all(|it| it.fract() == 0.0 && (0.0..=20.0).contains(it)) && distinct.len() <= 12;
    let units_row = grid.units.get(column).cloned().flatten().filter(|text| !text.trim().is_empty());
    Some(Numeric { column, label: labelled(name), units_row, numbers, is_small })
}

/// What is known of a value's unit.
#[derive(Debug, Clone, PartialEq)]
enum Unit {
    /// Stated: in brackets, in the row of units, or as the whole label.
    Stated(String),
    /// The last word of the label may be one.
    Perhaps(String),
    /// Something is stated that is no unit known.
    Unknown(String),
    /// Nothing.
    Unsaid,
}

impl Numeric {
    fn unit(&self) -> Unit {
        if let Some(text) = &self.units_row {
            return unit_code(text).map_or_else(|| Unit::Unknown(text.clone()), Unit::Stated);
        }
        match (&self.label.unit, self.label.stated, &self.label.unknown) {
            (Some(code), true, _) => Unit::Stated(code.clone()),
            (Some(code), false, _) => Unit::Perhaps(code.clone()),
            (None, _, Some(unknown)) => Unit::Unknown(unknown.clone()),
            (None, _, None) => Unit::Unsaid,
        }
    }

    /// The share of its numbers that are plausible for a measure, once converted; `None` without bounds or conversion.
    fn plausible(&self, measure: &Measure, code: Option<&str>) -> Option<f64> {
        let (low, high) = measure.plausible?;
        let convert = units::convert(code.unwrap_or(&measure.unit), &measure.unit)?;
        let fits = |number: &&f64| (low..=high).contains(&(**number * convert.times + convert.plus));
        Some(self.numbers.iter().filter(fits).count() as f64 / self.numbers.len().max(1) as f64)
    }
}

/// How a label names a measure.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord)]
enum Named {
    Not,
    Perhaps,
    Certainly,
}

fn named(label: &str, whole: &str, measure: &Measure) -> Named {
    let is_level =
        |word: &String| measure.conditions.iter().flat_map(|it| &it.levels).any(|level| fold(level) == *word);
    let plain = |word: String| word.trim_end_matches(|c: char| c.is_ascii_digit()).to_owned();
    let mine: Vec<String> =
        split_words(label).into_iter().filter(|word| !is_level(word)).map(plain).filter(|it| !it.is_empty()).collect();
    let (code, called) = (split_words(&measure.code), split_words(&measure.label));
    let same = |text: &str| [&measure.code, &measure.label].iter().any(|it| fold(it) == fold(text));
    if same(label) || same(whole) || mine == code || mine == called || (!mine.is_empty() && same(&mine.concat())) {
        return Named::Certainly;
    }
    if !code.is_empty() && code.iter().all(|word| mine.contains(word)) {
        return Named::Certainly;
    }
    let initials: String = code.iter().filter_map(|word| word.chars().next()).collect();
    let long = |word: &str| word.chars().count() >= 3;
    // A label that is nothing but a level: "Left (N)" of a grip that is measured left and right.
    if mine.is_empty() && split_words(label).iter().any(is_level) {
        return Named::Perhaps;
    }
    let shares = mine.iter().any(|word| {
        long(word)
            && code
                .iter()
                .chain(&called)
                .any(|other| long(other) && (other.starts_with(word.as_str()) || word.starts_with(other.as_str())))
    });
    let initialled = code.len() > 1 && mine.contains(&initials);
    if shares || initialled { Named::Perhaps } else { Named::Not }
}

/// What speaks for a measure being a column's.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord)]
struct Speaks {
    named: Named,
    unit: bool,
}

fn speaks(it: &Numeric, whole: &str, measure: &Measure) -> Speaks {
    let named = named(&it.label.name, whole, measure);
    let unit = match it.unit() {
        Unit::Stated(code) | Unit::Perhaps(code) => {
            units::convert(&code, &measure.unit).is_some() && (code != "1" && measure.unit != "1")
        }
        _ => false,
    };
    Speaks { named, unit }
}

/// Whether a stated unit rules a measure out that the label does not name.
fn is_ruled_out(it: &Numeric, speaks: Speaks, measure: &Measure) -> bool {
    let foreign = matches!(it.unit(), Unit::Stated(code) if units::convert(&code, &measure.unit).is_none());
    foreign && speaks.named == Named::Not
}

/// The columns' measures, by column; several where it cannot be told.
pub struct Matched {
    /// The column among [`Numeric`].
    pub index: usize,
    /// The measures that may be meant.
    pub measures: Vec<usize>,
    /// Neither its name nor a unit says so.
    pub by_elimination: bool,
}

/// What else speaks for a measure.
pub struct Hints<'a> {
    /// The measures whose conditions are all found in columns.
    pub conditions_found: &'a dyn Fn(usize) -> bool,
    /// Words of file names, folders, preambles and the instrument's name.
    pub surroundings: &'a [String],
}

/// A label that is a unit as a whole and a measure's name as well is taken for the name: "hr" for a heart rate.
pub fn name_before_unit(numeric: &mut [Numeric], grid: &Grid, plan: &Plan) {
    for it in numeric.iter_mut().filter(|it| it.label.name.is_empty()) {
        let whole = grid.columns.get(it.column).map_or("", String::as_str);
        let last = whole.rsplit('/').next().unwrap_or(whole);
        if plan.measures.iter().any(|measure| named(last, last, measure) > Named::Not) {
            it.label = Labelled { name: last.to_owned(), unit: None, stated: false, unknown: None };
        }
    }
}

/// Matches columns of numbers with measures.
pub fn match_columns(grid: &Grid, plan: &Plan, numeric: &[Numeric], hints: &Hints<'_>) -> Vec<Matched> {
    let mut matched: Vec<Matched> = vec![];
    for (index, it) in numeric.iter().enumerate() {
        let whole = grid.columns.get(it.column).map_or("", String::as_str);
        let all: Vec<(usize, Speaks)> = plan
            .measures
            .iter()
            .enumerate()
            .map(|(at, measure)| (at, speaks(it, whole, measure), measure))
            .filter(|(_, speaks, measure)| !is_ruled_out(it, *speaks, measure))
            .map(|(at, speaks, _)| (at, speaks))
            .filter(|(_, speaks)| speaks.named > Named::Not || (speaks.unit && !it.is_small))
            .collect();
        let Some(best) = all.iter().map(|(_, speaks)| *speaks).max() else { continue };
        let measures: Vec<usize> = all.iter().filter(|(_, speaks)| *speaks == best).map(|(at, _)| *at).collect();
        let measures = narrowed(it, plan, measures, hints);
        matched.push(Matched { index, measures, by_elimination: false });
    }
    unit_alone_yields(plan, grid, numeric, &mut matched);
    if matched.is_empty() { eliminated(grid, plan, numeric, hints) } else { matched }
}

/// A column that only its unit speaks for yields to one that the same measure's name speaks for.
fn unit_alone_yields(plan: &Plan, grid: &Grid, numeric: &[Numeric], matched: &mut Vec<Matched>) {
    let by_name = |it: &Matched, at: usize| {
        let (Some(column), Some(measure)) = (numeric.get(it.index), plan.measures.get(at)) else { return false };
        let whole = grid.columns.get(column.column).map_or("", String::as_str);
        speaks(column, whole, measure).named > Named::Not
    };
    let claimed: Vec<usize> =
        matched.iter().flat_map(|it| it.measures.iter().copied().filter(|at| by_name(it, *at))).collect();
    matched.retain(|it| it.measures.iter().any(|at| by_name(it, *at) || !claimed.contains(at)));
}

/// Among measures that a label speaks for alike, those that the numbers, conditions and surroundings speak for.
fn narrowed(it: &Numeric, plan: &Plan, mut measures: Vec<usize>, hints: &Hints<'_>) -> Vec<usize> {
    let unit = match it.unit() {
        Unit::Stated(code) | Unit::Perhaps(code) => Some(code),
        _ => None,
    };
    let share = |at: usize| plan.measures.get(at).and_then(|measure| it.plausible(measure, unit.as_deref()));
    let mut keep = |fits: &dyn Fn(usize) -> bool| {
        let kept: Vec<usize> = measures.iter().copied().filter(|at| fits(*at)).collect();
        if !kept.is_empty() && measures.len() > 1 {
            measures = kept;
        }
    };
    keep(&|at| share(at).is_none_or(|share| share >= 0.5));
    keep(&|at| plan.measures.get(at).is_some_and(|it| it.conditions.is_empty()) || (hints.conditions_found)(at));
    keep(&|at| plan.measures.get(at).is_some_and(|it| !it.conditions.is_empty()) && (hints.conditions_found)(at));
    keep(&|at| {
        plan.measures.get(at).is_some_and(|it| {
            let words = [split_words(&it.code), split_words(&it.label)].concat();
            words
                .iter()
                .any(|word| word.chars().count() >= 4 && hints.surroundings.iter().any(|it| it.starts_with(word)))
        })
    });
    measures
}

/// Where no label and no unit speaks for any measure: the one column of numbers that can be a value, and the measures
/// that nothing speaks against.
fn eliminated(grid: &Grid, plan: &Plan, numeric: &[Numeric], hints: &Hints<'_>) -> Vec<Matched> {
    let mut able: Vec<usize> =
        (0..numeric.len()).filter(|at| numeric.get(*at).is_some_and(|it| !it.is_small)).collect();
    let called = |at: &usize| {
        numeric.get(*at).and_then(|it| grid.columns.get(it.column)).is_some_and(|name| words::VALUE.names(name))
    };
    let values: Vec<usize> = (0..numeric.len()).filter(called).collect();
    if let [_] = values.as_slice() {
        able = values;
    }
    let [one] = able.as_slice() else { return vec![] };
    let Some(it) = numeric.get(*one) else { return vec![] };
    let possible = |(at, measure): (usize, &Measure)| {
        let plausible = it.plausible(measure, None).is_none_or(|share| share >= 0.5);
        let conditions = measure.conditions.is_empty() || (hints.conditions_found)(at);
        let foreign = matches!(it.unit(), Unit::Stated(code) if units::convert(&code, &measure.unit).is_none());
        (plausible && conditions && !foreign).then_some(at)
    };
    let measures: Vec<usize> = plan.measures.iter().enumerate().filter_map(possible).collect();
    let measures = narrowed(it, plan, measures, hints);
    vec![Matched { index: *one, measures, by_elimination: true }]
}

/// A column that says the unit of the values beside it.
pub struct UnitColumn {
    /// The column.
    pub column: usize,
    /// Its place, as TOML, and what is to be said of it.
    pub place: String,
    /// What is to be said of it.
    pub notes: Notes,
}

/// The column of units, its texts as UCUM codes where that is certain.
pub fn unit_column(grid: &Grid, at: usize) -> UnitColumn {
    let name = grid.columns.get(at).map_or("", String::as_str);
    let (mut pairs, mut notes) = (vec![], Notes::default());
    for (text, _) in grid.distinct(at) {
        match unit_code(text) {
            Some(code) if code == text => {}
            Some(code) => pairs.push((text.to_owned(), code)),
            None => {
                notes.gap(format!(
                    "the UCUM code that {} means, or take the entry out: its rows are held",
                    some([text])
                ));
                pairs.push((text.to_owned(), BLANK.to_owned()));
            }
        }
    }
    if pairs.iter().any(|(_, code)| code != BLANK) {
        notes.doubt("units as they are usually meant");
    }
    let map = if pairs.is_empty() { String::new() } else { format!(", map = {}", super::lines::map(&pairs)) };
    UnitColumn { column: at, place: format!("{{ column = {}{map} }}", quote(name)), notes }
}

/// A column of a condition's levels.
pub struct LevelColumn {
    /// The condition's code.
    pub factor: String,
    /// The column.
    pub column: usize,
    /// How its texts meet the levels.
    pub meeting: Meeting,
}

/// The levels of a condition as codes.
pub fn levels(measures: &[&Measure], factor: &str) -> Vec<Known> {
    let mut known: Vec<Known> = vec![];
    for level in measures.iter().flat_map(|it| &it.conditions).filter(|it| it.code == factor).flat_map(|it| &it.levels)
    {
        if !known.iter().any(|it| it.code == *level) {
            known.push(Known { code: level.clone(), label: level.clone() });
        }
    }
    known
}

/// The columns in which the levels of the plan's conditions stand; several for one condition where it cannot be told.
pub fn level_columns(grid: &Grid, plan: &Plan, free: &dyn Fn(usize) -> bool) -> Vec<LevelColumn> {
    let all: Vec<&Measure> = plan.measures.iter().collect();
    let mut factors: Vec<&str> =
        plan.measures.iter().flat_map(|it| &it.conditions).map(|it| it.code.as_str()).collect();
    factors.sort_unstable();
    factors.dedup();
    let mut found = vec![];
    for factor in factors {
        let known = levels(&all, factor);
        for column in (0..grid.columns.len()).filter(|column| free(*column)) {
            let texts = grid.distinct(column);
            let meeting = Meeting::of(&texts, &known);
            let met = meeting.met() * 2 >= meeting.met() + meeting.unmet() && meeting.met() > 0;
            let called = grid.columns.get(column).is_some_and(|name| {
                let name = name.rsplit('/').next().unwrap_or(name);
                fold(name) == fold(factor) && !texts.is_empty() && texts.len() <= known.len() * 2 + 2
            });
            if met || called || begin_alike(&texts, &known) {
                found.push(LevelColumn { factor: factor.to_owned(), column, meeting });
            }
        }
    }
    found
}

/// Whether as many texts as there are levels begin with the same letters as those: "L" and "R" for left and right. What
/// each of them means is still for a person to say.
fn begin_alike(texts: &[(&str, usize)], known: &[Known]) -> bool {
    let first = |text: &str| text.chars().find(|c| c.is_alphabetic()).map(|c| c.to_lowercase().to_string());
    let initials = |texts: Vec<&str>| -> Vec<String> {
        let mut all: Vec<String> = texts.into_iter().filter_map(first).collect();
        all.sort();
        all
    };
    let mine = initials(texts.iter().map(|(text, _)| *text).collect());
    let theirs = initials(known.iter().map(|it| it.code.as_str()).collect());
    let differ = theirs.windows(2).all(|pair| matches!(pair, [one, other] if one != other));
    known.len() > 1 && differ && mine == theirs
}

/// The `condition` line of a value; `None` when the measures have no conditions.
pub fn condition_line(grid: &Grid, measures: &[&Measure], label: &str, levels_in: &[LevelColumn]) -> Option<Line> {
    let mut factors: Vec<&str> = measures.iter().flat_map(|it| &it.conditions).map(|it| it.code.as_str()).collect();
    factors.dedup();
    let (mut parts, mut notes) = (vec![], Notes::default());
    for factor in factors {
        let known = levels(measures, factor);
        let words = split_words(label);
        let here: Vec<&Known> = known.iter().filter(|it| words.contains(&fold(&it.code))).collect();
        let columns: Vec<&LevelColumn> = levels_in.iter().filter(|it| it.factor == factor).collect();
        let codes = some(known.iter().map(|it| it.code.as_str()));
        let part = match (here.as_slice(), columns.as_slice()) {
            ([level], _) => quote(&level.code),
            (_, [one]) => {
                let name = grid.columns.get(one.column).map_or("", String::as_str);
                let held = "such values are held as unknown-condition";
                let source = format!("column = {}", quote(name));
                let (place, more) = one.meeting.place(&source, factor, &known, held);
                notes.doubts.extend(more.doubts);
                notes.gaps.extend(more.gaps);
                place
            }
            (_, []) => {
                notes.gap(format!("which {factor} ({codes}) this value is of"));
                quote(BLANK)
            }
            (_, several) => {
                let names = some(several.iter().filter_map(|it| grid.columns.get(it.column)).map(String::as_str));
                notes.gap(format!("which of {names} says the {factor} ({codes}): {{ column = \"…\" }}"));
                quote(BLANK)
            }
        };
        parts.push(format!("{factor} = {part}"));
    }
    (!parts.is_empty()).then(|| Line::with("condition", &format!("{{ {} }}", parts.join(", ")), &notes))
}

/// The entry of a column that is always of one measure.
pub fn wide_entry(
    grid: &Grid,
    plan: &Plan,
    it: &Numeric,
    matched: &Matched,
    unit: Option<&UnitColumn>,
    levels_in: &[LevelColumn],
) -> Entry {
    let name = grid.columns.get(it.column).map_or("", String::as_str);
    let column_line = Line::sure("column", &quote(name));
    let [at] = matched.measures.as_slice() else {
        let codes = matched.measures.iter().filter_map(|at| plan.measures.get(*at)).map(|it| it.code.as_str());
        let what = match matched.measures.is_empty() {
            true => "which measure is this? Nothing speaks for one of the plan's".to_owned(),
            false => format!("which measure is this: {}?", some(codes)),
        };
        let lines = vec![Line::gap("measure", &quote(BLANK), what), column_line];
        return Entry { lines, column: it.column, measure: None };
    };
    let Some(measure) = plan.measures.get(*at) else { return Entry::default() };
    let mut lines = vec![measure_line(it, name, measure, matched), column_line];
    lines.extend(unit_line(it, measure, unit));
    lines.extend(condition_line(grid, &[measure], name, levels_in));
    Entry { lines, column: it.column, measure: Some(*at) }
}

fn measure_line(it: &Numeric, name: &str, measure: &Measure, matched: &Matched) -> Line {
    let mut notes = Notes::default();
    if matched.by_elimination {
        notes.doubt("no name says so; it is the one column of values that nothing speaks against");
    } else {
        match named(&it.label.name, name, measure) {
            Named::Certainly => {}
            Named::Perhaps => notes.doubt(format!("the label \"{}\" only resembles it", clip(name))),
            Named::Not => notes.doubt("by its unit"),
        }
    }
    Line::with("measure", &quote(&measure.code), &notes)
}

/// The `unit` line of a value of one measure; `None` when nothing needs to be said.
fn unit_line(it: &Numeric, measure: &Measure, column: Option<&UnitColumn>) -> Option<Line> {
    if let Some(unit) = column {
        let mut notes = unit.notes.clone();
        // A map to what does not convert is refused by the plan's own check; a text that does not is held.
        notes.doubts.dedup();
        return Some(Line::with("unit", &unit.place, &notes));
    }
    let share = |code: Option<&str>| it.plausible(measure, code);
    match it.unit() {
        Unit::Stated(code) | Unit::Perhaps(code)
            if units::convert(&code, &measure.unit).is_none()
                && is_annotation(&measure.unit)
                && !code.contains('/') =>
        {
            unsaid(it, measure, share(None))
        }
        Unit::Stated(code) if code == measure.unit && it.units_row.as_deref().is_none_or(|text| text == code) => None,
        Unit::Stated(code) => Some(stated(&code, measure, share(Some(&code)), "")),
        Unit::Perhaps(code)
            if units::convert(&code, &measure.unit).is_some() || code.contains('/') || code.contains('[') =>
        {
            Some(stated(&code, measure, share(Some(&code)), "by the last word of the label"))
        }
        Unit::Perhaps(_) | Unit::Unsaid => unsaid(it, measure, share(None)),
        Unit::Unknown(_) if is_annotation(&measure.unit) => unsaid(it, measure, share(None)),
        Unit::Unknown(text) => {
            let what = format!(
                "the UCUM code of \"{}\", and times = … where it does not convert to {}",
                clip(&text),
                measure.unit
            );
            Some(Line::gap("unit", &format!("{{ code = {} }}", quote(BLANK)), what))
        }
    }
}

/// Units that count things and are not converted.
fn is_annotation(unit: &str) -> bool {
    unit.starts_with('{') || matches!(unit, "1" | "%")
}

fn stated(code: &str, measure: &Measure, share: Option<f64>, doubt: &str) -> Line {
    let value = format!("{{ code = {} }}", quote(code));
    let mut notes = Notes::default();
    if !doubt.is_empty() {
        notes.doubt(doubt);
    }
    if units::convert(code, &measure.unit).is_none() {
        notes.gap(format!("times = … (the factor from {code} to {}), which does not convert by itself", measure.unit));
    } else if share.is_some_and(|share| share < PLAUSIBLE) {
        notes.doubt("some values lie outside the plausible range even so");
    }
    Line::with("unit", &value, &notes)
}

/// No unit is stated: the plan's is supposed only where the numbers bear it out.
fn unsaid(it: &Numeric, measure: &Measure, share: Option<f64>) -> Option<Line> {
    let unit = &measure.unit;
    let value = format!("{{ code = {} }}", quote(unit));
    match share {
        Some(share) if share >= PLAUSIBLE => {
            let why = format!("no unit is stated; {unit} is supposed, since the values are plausible so");
            (!is_annotation(unit)).then(|| Line::unsure("unit", &value, why))
        }
        None if is_annotation(unit) => None,
        None => Some(Line::gap(
            "unit",
            &format!("{{ code = {} }}", quote(BLANK)),
            format!(
                "no unit is stated, and the plan has no plausible range to hold the values against; the plan's is {unit}"
            ),
        )),
        Some(_) => {
            let example = it.numbers.first().copied().unwrap_or_default();
            let what = format!(
                "the unit: none is stated, and values such as {example} lie outside the plausible range in {unit}; \
                 times = … where it does not convert"
            );
            Some(Line::gap("unit", &format!("{{ code = {} }}", quote(BLANK)), what))
        }
    }
}

/// The measures as codes.
pub fn known_measures(plan: &Plan) -> Vec<Known> {
    plan.measures.iter().map(|it| Known { code: it.code.clone(), label: it.label.clone() }).collect()
}

/// The one entry of the long layout.
pub fn long_entry(
    grid: &Grid,
    plan: &Plan,
    (named_in, meeting): (usize, &Meeting),
    value: &Numeric,
    unit: Option<&UnitColumn>,
    levels_in: &[LevelColumn],
) -> Entry {
    let known = known_measures(plan);
    let source = format!("column = {}", quote(grid.columns.get(named_in).map_or("", String::as_str)));
    let (place, notes) = meeting.place(&source, "measure", &known, "such values are held as unknown-measure");
    let mut lines = vec![
        Line::with("measure", &place, &notes),
        Line::sure("column", &quote(grid.columns.get(value.column).map_or("", String::as_str))),
    ];
    let present: Vec<usize> = measures_present(plan, grid, named_in, meeting);
    let measures: Vec<&Measure> = present.iter().filter_map(|at| plan.measures.get(*at)).collect();
    match unit {
        Some(unit) => lines.push(Line::with("unit", &unit.place, &unit.notes)),
        None => lines.extend(long_unit(grid, named_in, value, meeting, &measures)),
    }
    lines.extend(condition_line(grid, &measures, "", levels_in));
    Entry { lines, column: value.column, measure: None }
}

/// The measures that a column of their names holds.
pub fn measures_present(plan: &Plan, grid: &Grid, named_in: usize, meeting: &Meeting) -> Vec<usize> {
    let texts = grid.distinct(named_in);
    let is_there = |measure: &Measure| {
        texts.iter().any(|(text, _)| *text == measure.code)
            || meeting.alike.iter().any(|(_, code)| *code == measure.code)
    };
    plan.measures.iter().enumerate().filter(|(_, measure)| is_there(measure)).map(|(at, _)| at).collect()
}

/// In the long layout without a column of units: each measure's values must be plausible in the plan's unit.
fn long_unit(grid: &Grid, named_in: usize, value: &Numeric, meeting: &Meeting, measures: &[&Measure]) -> Option<Line> {
    if let Unit::Stated(code) | Unit::Perhaps(code) = value.unit() {
        return (!measures.iter().all(|it| it.unit == code))
            .then(|| Line::unsure("unit", &format!("{{ code = {} }}", quote(&code)), "by the label"));
    }
    let of = |measure: &Measure| -> Vec<f64> {
        let is_its = |text: &str| {
            text == measure.code || meeting.alike.iter().any(|(from, code)| from == text && *code == measure.code)
        };
        let rows = grid.rows.iter().filter(|row| row.cells.get(named_in).is_some_and(|cell| is_its(&cell.text)));
        let marks = Marks { decimal: '.', group: None };
        rows.filter_map(|row| row.cells.get(value.column))
            .filter_map(|cell| numbers::parse(&cell.text.replace(',', "."), cell.number, marks))
            .collect()
    };
    let supposed = |measure: &&&Measure| {
        let numbers = of(measure);
        let fits = |(low, high): (f64, f64)| numbers.iter().filter(|it| (low..=high).contains(*it)).count();
        let plausible = measure.plausible.map(|bounds| fits(bounds) as f64 >= PLAUSIBLE * numbers.len() as f64);
        !plausible.unwrap_or_else(|| is_annotation(&measure.unit))
    };
    let doubtful: Vec<&str> = measures.iter().filter(supposed).map(|it| it.code.as_str()).collect();
    if doubtful.is_empty() {
        return Some(Line::remark(
            "unit",
            "no unit is stated; the plan's are supposed, since the values are plausible so",
        ));
    }
    let what = format!("the unit of {}: none is stated, and the plan's is not borne out by the values", some(doubtful));
    Some(Line::gap("unit", &format!("{{ code = {} }}", quote(BLANK)), what))
}

/// An entry whose measure nobody knows, for drafting without a plan.
pub fn unknown_entry(grid: &Grid, it: &Numeric) -> Entry {
    let name = grid.columns.get(it.column).map_or("", String::as_str);
    let what = "which measure of the plan this is, or take this value out";
    let mut lines = vec![Line::gap("measure", &quote(BLANK), what), Line::sure("column", &quote(name))];
    if let Unit::Stated(code) | Unit::Perhaps(code) = it.unit() {
        lines.push(Line::unsure("unit", &format!("{{ code = {} }}", quote(&code)), "by the label or the row of units"));
    }
    Entry { lines, column: it.column, measure: None }
}
