//! `[study]`, `[subject]` and `[[arm]]`.

use chrono_tz::Tz;
use regex::Regex;

use super::forms::{self, Form, clip};
use super::keys::{Check, Key, Kind, Tab, Table, key, needed, one_of, words};
use super::model::{Allocation, Anchor, Arm, Attribute, AttributeKind, Enrol, Study, SubjectRule, Tidy, Visit};
use super::written::Value;

words!(ALLOCATION: Allocation { "sealed" = Allocation::Sealed, "open" = Allocation::Open });
words!(TIDY: Tidy { "trim" = Tidy::Trim, "upper" = Tidy::Upper, "dash" = Tidy::Dash });
words!(ATTRIBUTE: () { "number" = () });

pub(crate) static STUDY: Table = Table {
    name: "[study]",
    doc: "What is studied, and where.",
    keys: &[
        needed("code", Kind::Text(Form::Filled), "The study's short code"),
        key("title", Kind::Text(Form::Any), "empty", "The study's title"),
        needed(
            "time_zone",
            Kind::Text(Form::Zone),
            "The IANA zone of the study centre, whose local day decides the visit",
        ),
        key("enrol", Kind::Table(&ENROL), "none", "Planned enrolment"),
        key(
            "allocation",
            Kind::Word(&ALLOCATION.words),
            "sealed",
            "With arms: whether the roster may say who is in which arm",
        ),
    ],
    one_of: &[],
};

static ENROL: Table = Table {
    name: "enrol",
    doc: "Planned enrolment.",
    keys: &[
        needed("target", Kind::Whole(1, 10_000_000), "The planned number of subjects"),
        needed("from", Kind::Date, "The first day of enrolment"),
        needed("until", Kind::Date, "The last day of enrolment"),
    ],
    one_of: &[],
};

pub(crate) static SUBJECT: Table = Table {
    name: "[subject]",
    doc: "How subjects are told apart, and where their days are counted from.",
    keys: &[
        needed("pattern", Kind::Text(Form::Whole), "What a whole subject code must match after it has been tidied"),
        key(
            "normalise",
            Kind::List(&Kind::Word(&TIDY.words), 0),
            "[]",
            "How a code as exported is tidied, in this order",
        ),
        needed("anchor", Kind::Text(Form::Filled), "Where day 0 lies: a visit's code, or \"enrolment\""),
        key(
            "attributes",
            Kind::Map(
                Form::Code,
                &Kind::Either(&[Kind::Word(&ATTRIBUTE.words), Kind::List(&Kind::Text(Form::Filled), 1)]),
            ),
            "none",
            "Roster columns that analyses may use, each with its levels or \"number\"",
        ),
    ],
    one_of: &[],
};

const CODE: Key = needed("code", Kind::Text(Form::Code), "The arm's code");

pub(crate) static ARM: Table = Table {
    name: "[[arm]]",
    doc: "One arm; who is in which is never in the plan.",
    keys: &[CODE, key("label", Kind::Text(Form::Any), "the code", "What people read")],
    one_of: &[],
};

/// `[study]`
pub(crate) fn study(check: &mut Check<'_>, tab: &Tab<'_>, arms: &[Arm]) -> Study {
    if tab.has("allocation") && arms.is_empty() {
        let (spot, path) = (tab.spot_of("allocation"), tab.path_of("allocation"));
        check.warn(&spot, &path, "There are no arms, so nothing is allocated.", "[[arm]] tables, or no allocation");
    }
    Study {
        code: tab.text("code").unwrap_or_default().to_owned(),
        title: tab.text("title").unwrap_or_default().to_owned(),
        time_zone: tab.formed("time_zone", forms::zone).unwrap_or(Tz::UTC),
        enrol: tab.table("enrol", &ENROL).and_then(|tab| enrol(check, &tab)),
        allocation: tab.word("allocation", &ALLOCATION).unwrap_or(Allocation::Sealed),
    }
}

fn enrol(check: &mut Check<'_>, tab: &Tab<'_>) -> Option<Enrol> {
    let target = u32::try_from(tab.whole("target")?).ok()?;
    let (from, until) = (tab.date("from")?, tab.date("until")?);
    if until < from {
        check.at(tab, "until", "Enrolment ends before it begins.", format!("a date not before {from}"));
    }
    Some(Enrol { target, from, until })
}

/// `[subject]`
pub(crate) fn subject(check: &mut Check<'_>, tab: &Tab<'_>, visits: &[Visit]) -> SubjectRule {
    let text = tab.text("pattern").unwrap_or_default();
    check.once(tab, "normalise");
    SubjectRule {
        pattern: forms::whole(text).unwrap_or_else(|_| nothing()),
        pattern_text: text.to_owned(),
        normalise: tab.texts("normalise").iter().filter_map(|(word, _)| tidy(word)).collect(),
        anchor: anchor(check, tab, visits),
        attributes: attributes(check, tab),
    }
}

fn tidy(word: &str) -> Option<Tidy> {
    TIDY.values.get(TIDY.words.position(word)?).copied()
}

/// An expression for where the plan's own is at fault.
pub(crate) fn nothing() -> Regex {
    #[expect(clippy::expect_used, reason = "a constant that every test of a faulty expression compiles")]
    Regex::new("a^").expect("a constant expression")
}

fn anchor(check: &mut Check<'_>, tab: &Tab<'_>, visits: &[Visit]) -> Anchor {
    let Some(code) = tab.text("anchor").filter(|code| *code != "enrolment") else { return Anchor::Enrolment };
    if visits.is_empty() {
        return Anchor::Enrolment;
    }
    let mut known: Vec<&str> = visits.iter().map(|visit| visit.code.as_str()).collect();
    known.push("enrolment");
    let (spot, path) = (tab.spot_of("anchor"), tab.path_of("anchor"));
    let Some(index) = check.refer(&spot, &path, code, "visit", &known) else { return Anchor::Enrolment };
    let Some(visit) = visits.get(index) else { return Anchor::Enrolment };
    if visit.day != 0 || visit.after.is_some() {
        let wrong = format!("Day 0 lies at the visit \"{code}\", but its own day is counted otherwise.");
        check.error(&spot, &path, wrong, "a visit with day = 0 and no \"after\"");
    }
    Anchor::Visit(index)
}

/// Columns of the roster and words of results that an attribute or condition cannot be named by.
pub(crate) const RESERVED: &[&str] =
    &["arm", "visit", "subject", "enrolled", "withdrawn", "replicate", "residual", "total"];

fn attributes(check: &mut Check<'_>, tab: &Tab<'_>) -> Vec<Attribute> {
    let mut attributes = vec![];
    for entry in tab.map("attributes") {
        let path = format!("{}.{}", tab.path_of("attributes"), entry.key);
        if RESERVED.contains(&entry.key.as_str()) {
            let wrong = format!("\"{}\" has a meaning of its own in rosters and results.", entry.key);
            check.error(&entry.spot, &path, wrong, format!("another name than {}", one_of(RESERVED)));
        }
        let kind = match &entry.node.value {
            Value::List(levels) => {
                let texts: Vec<&str> = levels.iter().filter_map(|level| level.text()).collect();
                for (index, level) in levels.iter().enumerate() {
                    if level.text().is_some_and(|text| texts[..index.min(texts.len())].contains(&text)) {
                        let wrong = format!("\"{}\" stands twice.", clip(level.text().unwrap_or_default()));
                        check.error(&level.spot, &path, wrong, "each level once");
                    }
                }
                AttributeKind::Levels(texts.into_iter().map(str::to_owned).collect())
            }
            _ => AttributeKind::Number,
        };
        attributes.push(Attribute { code: entry.key.clone(), kind });
    }
    attributes
}

/// `[[arm]]`
pub(crate) fn arms(check: &mut Check<'_>, tabs: &[Tab<'_>]) -> Vec<Arm> {
    check.unique(tabs, "code");
    let arm = |tab: &Tab<'_>| {
        let code = tab.text("code").unwrap_or_default().to_owned();
        Arm { label: tab.text("label").map_or_else(|| code.clone(), str::to_owned), code }
    };
    tabs.iter().map(arm).collect()
}
