//! `[[instrument.reader.value]]`: which column holds which measure, in which unit and condition.

use super::forms::{self, Form};
use super::instrument::Known;
use super::keys::{Check, Kind, Tab, Table, join, key, needed};
use super::model::{Affine, ConditionFactor, LevelRule, Measure, MeasureRule, UnitRule, ValueRule};
use super::place::{self, Named, PLACE, UNIT};
use super::units;
use super::written::{Spot, Value};

pub(crate) static VALUE: Table = Table {
    name: "[[instrument.reader.value]]",
    doc: "One value of a row: one entry for each value column, or one for all in the long layout.",
    keys: &[
        needed(
            "measure",
            Kind::Either(&[Kind::Text(Form::Filled), Kind::Table(&PLACE)]),
            "The measure, or where it is found",
        ),
        needed("column", Kind::Text(Form::Filled), "The column, or the path inside a row, that holds the value"),
        key(
            "unit",
            Kind::Table(&UNIT),
            "the measure's, or what the units row says",
            "The unit of the value as exported",
        ),
        key(
            "condition",
            Kind::Map(Form::Filled, &Kind::Either(&[Kind::Text(Form::Filled), Kind::Table(&PLACE)])),
            "none",
            "The level of each of the measure's conditions, or where it is found",
        ),
        key("replicate", Kind::Whole(1, 10_000), "as the reader says", "The replicate's number, for a column a trial"),
    ],
    one_of: &[],
};

/// `[[instrument.reader.value]]`
pub(crate) fn values(
    check: &mut Check<'_>,
    tabs: &[Tab<'_>],
    known: &Known<'_>,
    named: &mut Vec<Named>,
) -> Vec<ValueRule> {
    let rules: Vec<ValueRule> = tabs.iter().map(|tab| value(check, tab, known, named)).collect();
    for (index, rule) in rules.iter().enumerate() {
        if let Some(earlier) = rules[..index].iter().position(|earlier| same(earlier, rule)) {
            let wrong = format!("Value {} says the same of the same measure.", earlier + 1);
            check.error(&tabs[index].spot, &tabs[index].path, wrong, "another column, condition or replicate");
        }
    }
    rules
}

/// Whether two rules read the same cell for the same, or put two cells in one place.
fn same(a: &ValueRule, b: &ValueRule) -> bool {
    let (MeasureRule::Fixed(one), MeasureRule::Fixed(other)) = (&a.measure, &b.measure) else { return false };
    let level = |rule: &ValueRule| -> Option<Vec<String>> {
        let fixed = |(factor, level): &(String, LevelRule)| match level {
            LevelRule::Fixed(level) => Some(format!("{factor}={level}")),
            LevelRule::Found(_) => None,
        };
        rule.condition.iter().map(fixed).collect()
    };
    let one_place = a.replicate.is_some() && a.replicate == b.replicate;
    one == other && level(a).is_some() && level(a) == level(b) && (a.column == b.column || one_place)
}

fn value(check: &mut Check<'_>, tab: &Tab<'_>, known: &Known<'_>, named: &mut Vec<Named>) -> ValueRule {
    let column = tab.text("column").unwrap_or_default().to_owned();
    named.push(Named { column: column.clone(), spot: tab.spot_of("column"), path: tab.path_of("column") });
    let codes: Vec<&str> = known.measures.iter().map(|measure| measure.code.as_str()).collect();
    let (measure, possible) = match tab.table("measure", &PLACE) {
        Some(found) => {
            place::targets(check, &found, "measure", &codes);
            let targets: Vec<usize> = mapped(&found, &codes);
            (MeasureRule::Found(place::place(&found, named)), targets)
        }
        None => {
            let code = tab.text("measure");
            let index = code.and_then(|code| {
                check.refer(&tab.spot_of("measure"), &tab.path_of("measure"), code, "measure", &codes)
            });
            (MeasureRule::Fixed(index.unwrap_or(0)), index.into_iter().collect())
        }
    };
    let is_fixed = matches!(measure, MeasureRule::Fixed(_));
    let possible: Vec<&Measure> = possible.iter().filter_map(|index| known.measures.get(*index)).collect();
    let unit = unit(check, tab, &possible, is_fixed, named);
    let all: Vec<&Measure> = if is_fixed { possible.clone() } else { known.measures.iter().collect() };
    let condition = conditions(check, tab, &possible, &all, named);
    ValueRule { measure, column, unit, condition, replicate: replicate(check, tab, &possible) }
}

/// The measures that a map names.
fn mapped(tab: &Tab<'_>, codes: &[&str]) -> Vec<usize> {
    let named = |code: &&str| tab.map("map").iter().any(|entry| entry.node.text() == Some(code));
    (0..codes.len()).filter(|index| named(&codes[*index])).collect()
}

fn replicate(check: &mut Check<'_>, tab: &Tab<'_>, possible: &[&Measure]) -> Option<u32> {
    let number = tab.whole("replicate").and_then(|it| u32::try_from(it).ok())?;
    if let Some(measure) = possible.iter().find(|measure| measure.replicates < number) {
        let wrong = format!("\"{}\" has {} replicates.", measure.code, measure.replicates);
        check.at(tab, "replicate", wrong, "a number that the measure's \"replicates\" reach");
    }
    Some(number)
}

/// The unit of a value; `possible` are the measures that it may be of.
fn unit(
    check: &mut Check<'_>,
    tab: &Tab<'_>,
    possible: &[&Measure],
    is_fixed: bool,
    named: &mut Vec<Named>,
) -> UnitRule {
    let Some(tab) = tab.table("unit", &UNIT) else { return UnitRule::Unsaid };
    let convert = (tab.has("times") || tab.has("plus"))
        .then(|| Affine { times: tab.number("times").unwrap_or(1.0), plus: tab.number("plus").unwrap_or(0.0) });
    if tab.number("times") == Some(0.0) {
        check.at(&tab, "times", "Times 0 would make every value the same.", "a factor other than 0");
    }
    // Without a factor of its own the unit must be one that converts.
    let measures = if convert.is_none() { possible } else { &[] };
    let Some(code) = tab.text("code") else {
        unit_targets(check, &tab, measures, is_fixed);
        return UnitRule::Found { place: place::place(&tab, named), convert };
    };
    if tab.has("map") {
        check.at(
            &tab,
            "map",
            "A unit that is always the same has nothing to map.",
            "code alone, or a place with a map",
        );
    }
    reaches(check, &tab.spot_of("code"), &tab.path_of("code"), code, measures, is_fixed);
    UnitRule::Fixed { code: code.to_owned(), convert }
}

/// Says so when a unit converts to none of the measures' units; of a value that is always of one measure, to its unit.
fn reaches(check: &mut Check<'_>, spot: &Spot, path: &str, code: &str, measures: &[&Measure], is_fixed: bool) {
    // Of a code that is none, that has been said.
    let converts = |it: &&Measure| !units::is_ucum(&it.unit) || units::convert(code, &it.unit).is_some();
    let Some(measure) = measures.iter().find(|it| !converts(it)).filter(|_| units::is_ucum(code)) else { return };
    if is_fixed || !measures.iter().any(converts) {
        let unit = &measure.unit;
        let why = units::apart(code, unit).map(|why| format!(": {why}")).unwrap_or_default();
        let wrong = format!("\"{code}\" does not convert to \"{unit}\", the unit of \"{}\"{why}.", measure.code);
        let right = format!("times = … beside it: a number in \"{code}\" times this is one in \"{unit}\"");
        check.error(spot, path, wrong, right);
    }
}

/// The units that a map leads to, and a fixed text.
fn unit_targets(check: &mut Check<'_>, tab: &Tab<'_>, measures: &[&Measure], is_fixed: bool) {
    let fixed = tab.text("fixed").map(|text| (text, tab.spot_of("fixed"), tab.path_of("fixed")));
    let mapped = |text: &str| tab.map("map").iter().any(|entry| entry.key == text);
    let targets = tab.map("map").iter().filter_map(|entry| {
        Some((entry.node.text()?, entry.node.spot.clone(), format!("{}.{}", tab.path_of("map"), entry.key)))
    });
    for (text, spot, path) in targets.chain(fixed.filter(|(text, ..)| !mapped(text))) {
        if let Err(misfit) = forms::unit(text) {
            check.error_near(&spot, &path, misfit.wrong, misfit.right, misfit.nearest);
        }
        reaches(check, &spot, &path, text, measures, is_fixed);
    }
}

/// The levels; `must` are the measures whose conditions all have to be there, `may` those it may be of.
fn conditions(
    check: &mut Check<'_>,
    tab: &Tab<'_>,
    must: &[&Measure],
    may: &[&Measure],
    named: &mut Vec<Named>,
) -> Vec<(String, LevelRule)> {
    let mut rules = vec![];
    let base = tab.path_of("condition");
    for entry in tab.map("condition") {
        let path = join(&base, &entry.key);
        let mut factors: Vec<&str> = vec![];
        may.iter().flat_map(|it| &it.conditions).for_each(|it| factors.push(&it.code));
        if !factors.is_empty() || may.is_empty() {
            check.refer(&entry.spot, &path, &entry.key, "condition of the measure", &factors);
        } else {
            check.error(&entry.spot, &path, format!("The measure has no condition \"{}\".", entry.key), "no condition");
        }
        let levels = levels(may, &entry.key);
        let rule = match (&entry.node.value, Tab::new(&PLACE, &entry.node, path.clone())) {
            (_, Some(found)) => {
                place::targets(check, &found, "level of the condition", &levels);
                LevelRule::Found(place::place(&found, named))
            }
            (Value::Text(level), None) => {
                check.refer(&entry.node.spot, &path, level, "level of the condition", &levels);
                LevelRule::Fixed(level.clone())
            }
            _ => continue,
        };
        rules.push((entry.key.clone(), rule));
    }
    for (measure, factor) in must.iter().flat_map(|it| it.conditions.iter().map(move |factor| (it, factor))) {
        if !rules.iter().any(|(code, _)| *code == factor.code) && !near(tab, factor) {
            let wrong =
                format!("\"{}\" is measured by \"{}\", but the value does not say which.", measure.code, factor.code);
            let right = format!("condition = {{ {} = … }}", factor.code);
            check.error(&tab.spot_of("condition"), &join(&base, &factor.code), wrong, right);
        }
    }
    rules
}

/// Whether the factor is there under a name that has been said to be wrong.
fn near(tab: &Tab<'_>, factor: &ConditionFactor) -> bool {
    tab.map("condition").iter().any(|entry| super::diagnostics::nearest(&entry.key, [factor.code.as_str()]).is_some())
}

fn levels<'a>(measures: &[&'a Measure], factor: &str) -> Vec<&'a str> {
    let mut levels: Vec<&str> = vec![];
    for level in measures.iter().flat_map(|it| &it.conditions).filter(|it| it.code == factor).flat_map(|it| &it.levels)
    {
        if !levels.contains(&level.as_str()) {
            levels.push(level);
        }
    }
    levels
}
