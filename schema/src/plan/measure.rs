//! `[[measure]]`

use super::forms::{Form, clip};
use super::keys::{Bounds, Check, Kind, Tab, Table, key, needed, words};
use super::model::{ConditionFactor, LimitRule, Measure, Summary};
use super::study::RESERVED;
use super::written::Value;

words!(SUMMARY: Summary {
    "mean" = Summary::Mean,
    "median" = Summary::Median,
    "min" = Summary::Min,
    "max" = Summary::Max,
    "first" = Summary::First,
    "last" = Summary::Last,
});
words!(LIMIT: LimitRule {
    "hold" = LimitRule::Hold,
    "limit" = LimitRule::Limit,
    "half" = LimitRule::Half,
    "missing" = LimitRule::Missing,
});

/// More readings than this in one session and condition are no replicates.
const MOST: i64 = 10_000;

pub(crate) static MEASURE: Table = Table {
    name: "[[measure]]",
    doc: "What is measured.",
    keys: &[
        needed("code", Kind::Text(Form::Code), "The measure's code"),
        key("label", Kind::Text(Form::Any), "the code", "What people read"),
        needed("unit", Kind::Text(Form::Unit), "Its unit, as a UCUM code"),
        key(
            "plausible",
            Kind::Pair(&Kind::Number(Bounds::ANY)),
            "no bounds",
            "A value outside is held as implausible-value; both ends are in",
        ),
        key(
            "step",
            Kind::Number(Bounds::POSITIVE),
            "none",
            "A larger change since the subject's last session is flagged",
        ),
        key("replicates", Kind::Whole(1, MOST), "1", "Readings expected in a session, for each condition"),
        key("summary", Kind::Word(&SUMMARY.words), "mean", "How the replicates become one number"),
        key("at_least", Kind::Whole(1, MOST), "1", "Replicates without which a cell counts as missing in analyses"),
        key(
            "conditions",
            Kind::Map(Form::Code, &Kind::List(&Kind::Text(Form::Code), 1)),
            "none",
            "Within-session factors, each with its levels",
        ),
        key("below_limit", Kind::Word(&LIMIT.words), "hold", "What becomes of a value such as \"<0.05\""),
        key("above_limit", Kind::Word(&LIMIT.words), "hold", "What becomes of a value such as \">500\""),
    ],
    one_of: &[],
};

/// `[[measure]]`
pub(crate) fn measures(check: &mut Check<'_>, tabs: &[Tab<'_>], attributes: &[String]) -> Vec<Measure> {
    check.unique(tabs, "code");
    tabs.iter().map(|tab| measure(check, tab, attributes)).collect()
}

fn measure(check: &mut Check<'_>, tab: &Tab<'_>, attributes: &[String]) -> Measure {
    let code = tab.text("code").unwrap_or_default().to_owned();
    let count = |name: &str| tab.whole(name).and_then(|it| u32::try_from(it).ok()).unwrap_or(1);
    let (replicates, at_least) = (count("replicates"), count("at_least"));
    if at_least > replicates {
        let wrong = format!("{at_least} replicates are needed, but only {replicates} are planned.");
        check.at(tab, "at_least", wrong, "at most as many as \"replicates\"");
    }
    let plausible = tab.pair("plausible");
    if plausible.is_some_and(|(low, high)| low > high) {
        check.at(tab, "plausible", "The lower bound is above the upper one.", "[lowest, highest]");
    }
    if tab.text("above_limit") == Some("half") {
        let (spot, path) = (tab.spot_of("above_limit"), tab.path_of("above_limit"));
        let wrong = "Half of an upper limit is a value that is known to be wrong.";
        check.warn(&spot, &path, wrong, "\"hold\", \"limit\" or \"missing\"");
    }
    Measure {
        label: tab.text("label").map_or_else(|| code.clone(), str::to_owned),
        code,
        unit: tab.text("unit").unwrap_or_default().to_owned(),
        plausible,
        step: tab.number("step"),
        replicates,
        summary: tab.word("summary", &SUMMARY).unwrap_or(Summary::Mean),
        at_least,
        conditions: conditions(check, tab, attributes),
        below_limit: tab.word("below_limit", &LIMIT).unwrap_or(LimitRule::Hold),
        above_limit: tab.word("above_limit", &LIMIT).unwrap_or(LimitRule::Hold),
    }
}

fn conditions(check: &mut Check<'_>, tab: &Tab<'_>, attributes: &[String]) -> Vec<ConditionFactor> {
    let mut factors = vec![];
    for entry in tab.map("conditions") {
        let path = format!("{}.{}", tab.path_of("conditions"), entry.key);
        if RESERVED.contains(&entry.key.as_str()) || attributes.contains(&entry.key) {
            let wrong = format!("\"{}\" means something else already in rosters and results.", entry.key);
            check.error(&entry.spot, &path, wrong, "another name for this condition");
        }
        let mut levels: Vec<String> = vec![];
        let Value::List(items) = &entry.node.value else { continue };
        for item in items {
            let Some(level) = item.text() else { continue };
            if levels.iter().any(|earlier| earlier == level) {
                check.error(&item.spot, &path, format!("\"{}\" stands twice.", clip(level)), "each level once");
            }
            levels.push(level.to_owned());
        }
        factors.push(ConditionFactor { code: entry.key.clone(), levels });
    }
    factors
}
