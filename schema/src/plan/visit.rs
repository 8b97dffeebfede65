//! `[[visit]]`

use super::forms::Form;
use super::keys::{Check, Kind, Tab, Table, key, needed, one_of, words};
use super::model::{Choose, Measure, MeasureIx, Tie, Visit, VisitIx};

words!(CHOOSE: Choose { "nearest" = Choose::Nearest, "first" = Choose::First, "last" = Choose::Last });
words!(TIE: Tie { "later" = Tie::Later, "earlier" = Tie::Earlier });

/// Days either way that a plan may reach: a thousand years, so that a slip of the finger is seen.
const FAR: i64 = 365_250;
const DAYS: Kind = Kind::Whole(-FAR, FAR);

/// Words that stand where a visit's code could, and mean something else.
const RESERVED: &[&str] = &["enrolment", "unscheduled"];

pub(crate) static VISIT: Table = Table {
    name: "[[visit]]",
    doc: "A planned time point.",
    keys: &[
        needed("code", Kind::Text(Form::Code), "The visit's code"),
        key("label", Kind::Text(Form::Any), "the code", "What people read"),
        needed("day", DAYS, "Days after the anchor, or after the session of \"after\""),
        key("window", Kind::Pair(&DAYS), "[0, 0]", "On time: days about \"day\", both ends in"),
        key(
            "counts",
            Kind::Pair(&DAYS),
            "the window",
            "Still this visit, but off-window: days about \"day\", both ends in",
        ),
        key("measures", Kind::List(&Kind::Text(Form::Filled), 1), "all", "The measures that are due"),
        key("choose", Kind::Word(&CHOOSE.words), "nearest", "Which of several sessions counts, measure by measure"),
        key("tie", Kind::Word(&TIE.words), "later", "For \"nearest\": which of two equally near sessions counts"),
        key(
            "after",
            Kind::Text(Form::Filled),
            "the anchor",
            "The visit from whose actual session the days are counted; it stands earlier in the plan",
        ),
    ],
    one_of: &[],
};

/// `[[visit]]`. `anchor` is the code of the visit at which day 0 lies, if it lies at one.
pub(crate) fn visits(
    check: &mut Check<'_>,
    tabs: &[Tab<'_>],
    measures: &[Measure],
    anchor: Option<&str>,
) -> Vec<Visit> {
    check.unique(tabs, "code");
    let codes: Vec<&str> = tabs.iter().map(|tab| tab.text("code").unwrap_or_default()).collect();
    let visits: Vec<Visit> =
        tabs.iter().enumerate().map(|(index, tab)| visit(check, tab, index, &codes, measures)).collect();
    overlaps(check, tabs, &visits, anchor);
    visits
}

fn visit(check: &mut Check<'_>, tab: &Tab<'_>, index: VisitIx, codes: &[&str], measures: &[Measure]) -> Visit {
    let code = codes[index].to_owned();
    if RESERVED.contains(&codes[index]) {
        let wrong = format!("\"{code}\" means something else where a visit is named.");
        check.at(tab, "code", wrong, format!("another code than {}", one_of(RESERVED)));
    }
    let window = span(check, tab, "window").unwrap_or((0, 0));
    let counts = span(check, tab, "counts").unwrap_or(window);
    if counts.0 > window.0 || counts.1 < window.1 {
        let wrong = format!("Days [{}, {}] of the window would not count.", window.0, window.1);
        check.at(tab, "counts", wrong, "days that hold the whole window");
    }
    let day = tab.whole("day").unwrap_or(0);
    Visit {
        label: tab.text("label").map_or_else(|| code.clone(), str::to_owned),
        code,
        day,
        window,
        counts,
        measures: due(check, tab, measures),
        choose: tab.word("choose", &CHOOSE).unwrap_or(Choose::Nearest),
        tie: tab.word("tie", &TIE).unwrap_or(Tie::Later),
        after: after(check, tab, index, codes, day.saturating_add(counts.0)),
    }
}

/// A pair of days, the earlier first.
fn span(check: &mut Check<'_>, tab: &Tab<'_>, name: &str) -> Option<(i64, i64)> {
    let (from, until) = tab.pair(name)?;
    if from > until {
        check.at(tab, name, "The first day comes after the last.", "[first, last]");
        return None;
    }
    let whole = |days: f64| Some(days as i64).filter(|days| (-FAR..=FAR).contains(days));
    Some((whole(from)?, whole(until)?))
}

fn due(check: &mut Check<'_>, tab: &Tab<'_>, measures: &[Measure]) -> Vec<MeasureIx> {
    if !tab.has("measures") {
        return (0..measures.len()).collect();
    }
    check.once(tab, "measures");
    let codes: Vec<&str> = measures.iter().map(|measure| measure.code.as_str()).collect();
    let path = tab.path_of("measures");
    let texts = tab.texts("measures");
    let mut due: Vec<MeasureIx> =
        texts.iter().filter_map(|(code, spot)| check.refer(spot, &path, code, "measure", &codes)).collect();
    due.sort_unstable();
    due.dedup();
    due
}

fn after(check: &mut Check<'_>, tab: &Tab<'_>, index: VisitIx, codes: &[&str], from: i64) -> Option<VisitIx> {
    let code = tab.text("after")?;
    let (spot, path) = (tab.spot_of("after"), tab.path_of("after"));
    let found = check.refer(&spot, &path, code, "visit", codes)?;
    if found >= index {
        let wrong = format!("The visit \"{code}\" does not stand before this one in the plan.");
        check.error(&spot, &path, wrong, "a visit that stands earlier in the plan");
        return None;
    }
    if from <= 0 {
        let wrong = format!("The days of this visit would hold the session of \"{code}\" itself, or lie before it.");
        check.error(&spot, &path, wrong, "days that begin after that session");
    }
    Some(found)
}

/// Visits whose days are counted from the same session must not share a day.
fn overlaps(check: &mut Check<'_>, tabs: &[Tab<'_>], visits: &[Visit], anchor: Option<&str>) {
    // A visit after the anchor visit is counted from day 0 like all others.
    let from = |visit: &Visit| visit.after.filter(|after| Some(visits[*after].code.as_str()) != anchor);
    let dated = |tab: &Tab<'_>| {
        let readable = |name: &str| !tab.has(name) || tab.pair(name).is_some();
        tab.whole("day").is_some() && readable("window") && readable("counts")
    };
    let days = |visit: &Visit| (visit.day + visit.counts.0, visit.day + visit.counts.1);
    for (index, visit) in visits.iter().enumerate() {
        // A visit whose code or day is at fault would only repeat it.
        if !dated(&tabs[index]) {
            continue;
        }
        for (earlier, tab) in visits[..index].iter().zip(tabs) {
            let ((from_a, until_a), (from_b, until_b)) = (days(earlier), days(visit));
            if !dated(tab) || from(earlier) != from(visit) || from_a > until_b || from_b > until_a {
                continue;
            }
            let shared = match (from_a.max(from_b), until_a.min(until_b)) {
                (first, last) if first == last => format!("day {first}"),
                (first, last) => format!("days {first} to {last}"),
            };
            let name = ["counts", "window", "day"].into_iter().find(|name| tabs[index].has(name)).unwrap_or("day");
            let wrong = format!("The visits \"{}\" and \"{}\" share {shared}.", earlier.code, visit.code);
            check.at(&tabs[index], name, wrong, "days that belong to one visit each");
        }
    }
}
