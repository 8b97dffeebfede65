//! `[interim]`: the planned looks.

use super::forms::Form;
use super::keys::{Bounds, Check, Kind, Tab, Table, key, needed, words};
use super::model::{
    Analysis, Arm, Boundary, Effect, Futility, Information, Interim, Method, PlannedLook, Spending, Visit, VisitIx,
};

#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(crate) enum Family {
    ObrienFleming,
    Pocock,
    Kim,
    Hwang,
}
words!(SPENDING: Family {
    "obrien-fleming-type" = Family::ObrienFleming,
    "pocock-type" = Family::Pocock,
    "kim-demets" = Family::Kim,
    "hwang-shih-decani" = Family::Hwang,
});
words!(INFORMATION: bool { "variance" = false, "subjects" = true });

const PARAMETER_DOC: &str = "The parameter of kim-demets and hwang-shih-decani";

pub(crate) static INTERIM: Table = Table {
    name: "[interim]",
    doc: "The planned looks at one effect.",
    keys: &[
        needed("analysis", Kind::Text(Form::Filled), "The analysis that is looked at"),
        needed(
            "effect",
            Kind::Table(&EFFECT),
            "The planned effect: only one of one degree of freedom can be tested again and again by these boundaries",
        ),
        needed(
            "alpha",
            Kind::Number(Bounds { low: 0.0, low_in: false, high: 0.5, high_in: true }),
            "The error rate, over all sides",
        ),
        key("sides", Kind::Whole(1, 2), "2", "1 or 2"),
        key("spending", Kind::Word(&SPENDING.words), "", "The spending function"),
        key("parameter", Kind::Number(Bounds::ANY), "none", PARAMETER_DOC),
        key(
            "boundary",
            Kind::Table(&BOUNDARY),
            "",
            "Instead of spending, for planned looks only (Wang & Tsiatis 1987)",
        ),
        needed("looks", Kind::List(&Kind::Table(&LOOK), 1), "The planned looks, by rising information"),
        needed("information", Kind::Table(&INFORMATION_TABLE), "How information is counted"),
        key("futility", Kind::Table(&FUTILITY), "none", "Stopping for futility"),
    ],
    one_of: &["spending", "boundary"],
};

static EFFECT: Table = Table {
    name: "effect",
    doc: "Between two arms at a visit, or in one group between two visits.",
    keys: &[
        key("arm", Kind::Text(Form::Filled), "in one group: none", "The arm"),
        needed("against", Kind::Text(Form::Filled), "The arm, or in one group the visit, that it is held against"),
        needed("visit", Kind::Text(Form::Filled), "The visit"),
    ],
    one_of: &[],
};

static BOUNDARY: Table = Table {
    name: "boundary",
    doc: "A boundary with a constant.",
    keys: &[needed(
        "shape",
        Kind::Number(Bounds { low: -10.0, low_in: true, high: 10.0, high_in: true }),
        "Its shape: 0.5 is Pocock's, 0 O'Brien & Fleming's",
    )],
    one_of: &[],
};

static LOOK: Table = Table {
    name: "one of \"looks\"",
    doc: "A planned look.",
    keys: &[
        needed("name", Kind::Text(Form::Filled), "Its name"),
        needed("at", Kind::Number(Bounds::SHARE_OR_ALL), "The share of the information at which it is planned"),
    ],
    one_of: &[],
};

static INFORMATION_TABLE: Table = Table {
    name: "information",
    doc: "How information is counted.",
    keys: &[
        needed(
            "from",
            Kind::Word(&INFORMATION.words),
            "From the effect's variance, or from subjects with the endpoint",
        ),
        needed("max", Kind::Number(Bounds::POSITIVE), "The planned maximum"),
    ],
    one_of: &[],
};

static FUTILITY: Table = Table {
    name: "futility",
    doc: "Stopping for futility by spending beta.",
    keys: &[
        needed("spending", Kind::Word(&SPENDING.words), "The spending function"),
        key("parameter", Kind::Number(Bounds::ANY), "none", PARAMETER_DOC),
        needed("power", Kind::Number(Bounds::SHARE), "The power that defines beta"),
        key("binding", Kind::Truth, "false", "Whether crossing it obliges to stop"),
    ],
    one_of: &[],
};

/// What the looks may refer to.
pub(crate) struct Known<'a> {
    pub analyses: &'a [Analysis],
    pub visits: &'a [Visit],
    pub arms: &'a [Arm],
}

/// `[interim]`; `None` where a part without a stand-in is at fault, which has been said.
pub(crate) fn interim(check: &mut Check<'_>, tab: &Tab<'_>, known: &Known<'_>) -> Option<Interim> {
    let codes: Vec<&str> = known.analyses.iter().map(|analysis| analysis.code.as_str()).collect();
    let (spot, path) = (tab.spot_of("analysis"), tab.path_of("analysis"));
    if codes.is_empty() && tab.has("analysis") {
        check.error(&spot, &path, "The plan has no analysis.", "the code of an [[analysis]]");
    }
    let index = tab.text("analysis").and_then(|code| check.refer(&spot, &path, code, "analysis", &codes));
    let analysis = index.and_then(|index| known.analyses.get(index));
    if let Some(analysis) = analysis.filter(|it| matches!(it.method, Method::Friedman | Method::Agreement)) {
        let wrong =
            format!("The method \"{}\" has no effect of one degree of freedom to look at.", analysis.method.name());
        check.error(&spot, &path, wrong, "an analysis by \"mixed-model\" or \"repeated-measures\"");
    }
    let effect = tab.table("effect", &EFFECT).and_then(|tab| effect(check, &tab, known, analysis));
    let looks = looks(check, &tab.tables("looks", &LOOK));
    let boundary = match tab.table("boundary", &BOUNDARY) {
        Some(inner) => {
            if tab.has("parameter") {
                check.at(tab, "parameter", "A boundary with a shape has no parameter.", "no \"parameter\"");
            }
            inner.number("shape").map(Boundary::Shape)
        }
        None => spending(check, tab).map(Boundary::Spending),
    };
    let information = tab.table("information", &INFORMATION_TABLE).and_then(|tab| information(check, &tab));
    let futility = tab.table("futility", &FUTILITY).and_then(|tab| {
        Some(Futility {
            spending: spending(check, &tab)?,
            power: tab.number("power")?,
            binding: tab.truth("binding").unwrap_or(false),
        })
    });
    Some(Interim {
        analysis: index?,
        effect: effect?,
        alpha: tab.number("alpha")?,
        sides: if tab.whole("sides") == Some(1) { 1 } else { 2 },
        boundary: boundary?,
        looks,
        information: information?,
        futility,
    })
}

/// A spending function with its parameter, where it has one.
fn spending(check: &mut Check<'_>, tab: &Tab<'_>) -> Option<Spending> {
    let family = tab.word("spending", &SPENDING)?;
    let word = tab.text("spending").unwrap_or_default();
    let parameter = tab.number("parameter");
    match family {
        Family::ObrienFleming | Family::Pocock if tab.has("parameter") => {
            let wrong = format!("\"{word}\" has no parameter.");
            check.at(tab, "parameter", wrong, "no \"parameter\", or \"kim-demets\" or \"hwang-shih-decani\"");
        }
        Family::Kim | Family::Hwang if !tab.has("parameter") => {
            let wrong = format!("\"{word}\" needs its parameter.");
            check.error(&tab.spot_of("spending"), &tab.path_of("parameter"), wrong, "parameter = a number");
        }
        Family::Kim if parameter.is_some_and(|it| it <= 0.0) => {
            check.at(tab, "parameter", "The power of \"kim-demets\" is above 0.", "a number above 0");
        }
        _ => {}
    }
    Some(match family {
        Family::ObrienFleming => Spending::ObrienFlemingType,
        Family::Pocock => Spending::PocockType,
        Family::Kim => Spending::KimDemets(parameter.unwrap_or(1.0)),
        Family::Hwang => Spending::HwangShihDecani(parameter.unwrap_or(1.0)),
    })
}

fn effect(check: &mut Check<'_>, tab: &Tab<'_>, known: &Known<'_>, analysis: Option<&Analysis>) -> Option<Effect> {
    let visit = visit_code(check, tab, "visit", known, analysis);
    let by_arm = analysis.is_some_and(|it| it.between.iter().any(|factor| factor == "arm"));
    if !tab.has("arm") {
        if let Some(analysis) = analysis.filter(|it| !it.between.is_empty()) {
            let wrong = format!("\"{}\" has groups, so a difference between visits has more than one.", analysis.code);
            check.error(
                &tab.spot,
                &tab.path,
                wrong,
                "{ arm = …, against = …, visit = … }, or an analysis of one group",
            );
        }
        let against = visit_code(check, tab, "against", known, analysis);
        let (visit, against) = (visit?, against?);
        if visit == against {
            check.at(tab, "against", "A visit cannot be held against itself.", "another visit");
        }
        return Some(Effect::Visits { visit, against });
    }
    let arms: Vec<&str> = known.arms.iter().map(|arm| arm.code.as_str()).collect();
    if arms.is_empty() {
        check.at(tab, "arm", "The plan has no arms.", "[[arm]] tables, or { visit = …, against = … } with two visits");
    } else if analysis.is_some() && !by_arm {
        check.at(tab, "arm", "The analysis is not by arm.", "between = [\"arm\"] in the analysis");
    }
    let mut arm = |name: &str| {
        let code = tab.text(name)?;
        check.refer(&tab.spot_of(name), &tab.path_of(name), code, "arm", &arms)?;
        Some(code.to_owned())
    };
    let (one, against) = (arm("arm")?, arm("against")?);
    if one == against {
        check.at(tab, "against", "An arm cannot be held against itself.", "another arm");
    }
    Some(Effect::Arms { arm: one, against, visit: visit? })
}

/// A visit that the analysis uses as response.
fn visit_code(
    check: &mut Check<'_>,
    tab: &Tab<'_>,
    name: &str,
    known: &Known<'_>,
    analysis: Option<&Analysis>,
) -> Option<VisitIx> {
    let codes: Vec<&str> = known.visits.iter().map(|visit| visit.code.as_str()).collect();
    let code = tab.text(name)?;
    let index = check.refer(&tab.spot_of(name), &tab.path_of(name), code, "visit", &codes)?;
    if let Some(analysis) = analysis.filter(|it| !it.visits.contains(&index)) {
        let wrong = format!("\"{}\" does not use the visit \"{code}\" as a response.", analysis.code);
        check.at(tab, name, wrong, "a visit of the analysis");
    }
    Some(index)
}

fn looks(check: &mut Check<'_>, tabs: &[Tab<'_>]) -> Vec<PlannedLook> {
    check.unique(tabs, "name");
    for pair in tabs.windows(2) {
        if let [before, tab] = pair
            && before.number("at").zip(tab.number("at")).is_some_and(|(before, at)| at <= before)
        {
            check.at(tab, "at", "A look comes after the one before it.", "shares that rise from look to look");
        }
    }
    let look = |tab: &Tab<'_>| Some(PlannedLook { name: tab.text("name")?.to_owned(), at: tab.number("at")? });
    tabs.iter().filter_map(look).collect()
}

fn information(check: &mut Check<'_>, tab: &Tab<'_>) -> Option<Information> {
    let max = tab.number("max")?;
    if !tab.word("from", &INFORMATION)? {
        return Some(Information::Variance(max));
    }
    if max.fract() != 0.0 || max > 1e7 {
        check.at(tab, "max", "Subjects are counted in whole numbers.", "a whole number of subjects");
    }
    Some(Information::Subjects(max as u32))
}
