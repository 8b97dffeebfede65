//! What a new plan means for what an older one has filed.
//!
//! Invariants: pure; only plans are compared, never records: whether there are data is for the records to say.

use std::collections::BTreeMap;
use std::fmt::{self, Debug, Write};

use serde::Serialize;
use sha2::{Digest, Sha256};

use super::analysis::{self, CONTRAST, COVARIANCE, DF, METHOD, MULTIPLICITY, OFF_WINDOW, SUMS};
use super::model::{
    Analysis, Anchor, AssumedCorrelation, AssumedMeans, AttributeKind, Boundary, Effect, Information, Instrument,
    Interim, LevelRule, Measure, MeasureRule, Mixed, Plan, Reader, SensitivityKind, Spending, Tidy, Time, ValueRule,
    Visit,
};
use super::study::TIDY;

/// A change of the plan that would give filed readings another meaning, with the codes that it touches.
#[derive(Debug, Clone, PartialEq, Eq, Serialize)]
#[serde(tag = "change", rename_all = "kebab-case")]
#[expect(missing_docs, reason = "the fields are the codes, and what stood and stands in the plan")]
pub enum Change {
    /// A measure is gone.
    MeasureRemoved { measure: String },
    /// A measure has another unit.
    UnitChanged { measure: String, old: String, new: String },
    /// A within-session factor of a measure is gone.
    ConditionRemoved { measure: String, condition: String },
    /// A measure has a new within-session factor, whose level the readings there do not say.
    ConditionAdded { measure: String, condition: String },
    /// A level of a within-session factor is gone.
    LevelRemoved { measure: String, condition: String, level: String },
    /// A visit is gone.
    VisitRemoved { visit: String },
    /// An instrument is gone.
    InstrumentRemoved { instrument: String },
    /// Subject codes must match something else.
    SubjectPattern { old: String, new: String },
    /// Subject codes are tidied otherwise.
    SubjectNormalise { old: String, new: String },
    /// The study's local day is another.
    StudyZone { old: String, new: String },
    /// Day 0 lies elsewhere.
    AnchorMoved { old: String, new: String },
    /// An arm is gone.
    ArmRemoved { arm: String },
    /// An attribute of the roster is gone.
    AttributeRemoved { attribute: String },
    /// A level of an attribute is gone, or it is now a number.
    AttributeLevelRemoved { attribute: String, level: String },
    /// An attribute that was a number has levels now.
    AttributeHasLevels { attribute: String },
}

impl fmt::Display for Change {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self {
            Self::MeasureRemoved { measure } => write!(f, "the measure \"{measure}\" is gone"),
            Self::UnitChanged { measure, old, new } => {
                write!(f, "the unit of \"{measure}\" changes from \"{old}\" to \"{new}\"")
            }
            Self::ConditionRemoved { measure, condition } => {
                write!(f, "the condition \"{condition}\" of \"{measure}\" is gone")
            }
            Self::ConditionAdded { measure, condition } => {
                write!(f, "\"{measure}\" has the new condition \"{condition}\", which earlier readings do not say")
            }
            Self::LevelRemoved { measure, condition, level } => {
                write!(f, "the level \"{level}\" of the condition \"{condition}\" of \"{measure}\" is gone")
            }
            Self::VisitRemoved { visit } => write!(f, "the visit \"{visit}\" is gone"),
            Self::InstrumentRemoved { instrument } => write!(f, "the instrument \"{instrument}\" is gone"),
            Self::SubjectPattern { old, new } => {
                write!(f, "the pattern of subject codes changes from '{old}' to '{new}'")
            }
            Self::SubjectNormalise { old, new } => {
                write!(f, "the tidying of subject codes changes from [{old}] to [{new}]")
            }
            Self::StudyZone { old, new } => write!(f, "the study's zone changes from {old} to {new}"),
            Self::AnchorMoved { old, new } => write!(f, "day 0 moves from \"{old}\" to \"{new}\""),
            Self::ArmRemoved { arm } => write!(f, "the arm \"{arm}\" is gone"),
            Self::AttributeRemoved { attribute } => write!(f, "the attribute \"{attribute}\" is gone"),
            Self::AttributeLevelRemoved { attribute, level } => {
                write!(f, "the level \"{level}\" of the attribute \"{attribute}\" is gone")
            }
            Self::AttributeHasLevels { attribute } => {
                write!(f, "the attribute \"{attribute}\" was a number and has levels now")
            }
        }
    }
}

/// What the new plan changes in the meaning of what may have been filed under the old one.
pub fn changes(old: &Plan, new: &Plan) -> Vec<Change> {
    let mut changes = vec![];
    for before in &old.measures {
        match new.measure(&before.code) {
            None => changes.push(Change::MeasureRemoved { measure: before.code.clone() }),
            Some((_, after)) => measure_changes(before, after, &mut changes),
        }
    }
    for visit in old.visits.iter().filter(|visit| new.visit(&visit.code).is_none()) {
        changes.push(Change::VisitRemoved { visit: visit.code.clone() });
    }
    for it in old.instruments.iter().filter(|it| new.instrument(&it.code).is_none()) {
        changes.push(Change::InstrumentRemoved { instrument: it.code.clone() });
    }
    for arm in old.arms.iter().filter(|arm| !new.arms.iter().any(|other| other.code == arm.code)) {
        changes.push(Change::ArmRemoved { arm: arm.code.clone() });
    }
    subject_changes(old, new, &mut changes);
    let (old_zone, new_zone) = (old.study.time_zone, new.study.time_zone);
    if old_zone != new_zone {
        changes.push(Change::StudyZone { old: old_zone.name().into(), new: new_zone.name().into() });
    }
    changes
}

fn measure_changes(before: &Measure, after: &Measure, changes: &mut Vec<Change>) {
    let measure = || before.code.clone();
    if before.unit != after.unit {
        changes.push(Change::UnitChanged { measure: measure(), old: before.unit.clone(), new: after.unit.clone() });
    }
    for factor in &before.conditions {
        let Some(now) = after.conditions.iter().find(|other| other.code == factor.code) else {
            changes.push(Change::ConditionRemoved { measure: measure(), condition: factor.code.clone() });
            continue;
        };
        for level in factor.levels.iter().filter(|level| !now.levels.contains(level)) {
            let condition = factor.code.clone();
            changes.push(Change::LevelRemoved { measure: measure(), condition, level: level.clone() });
        }
    }
    for factor in after.conditions.iter().filter(|it| !before.conditions.iter().any(|other| other.code == it.code)) {
        changes.push(Change::ConditionAdded { measure: measure(), condition: factor.code.clone() });
    }
}

fn subject_changes(old: &Plan, new: &Plan, changes: &mut Vec<Change>) {
    let (before, after) = (&old.subject, &new.subject);
    if before.pattern_text != after.pattern_text {
        let (old, new) = (before.pattern_text.clone(), after.pattern_text.clone());
        changes.push(Change::SubjectPattern { old, new });
    }
    if before.normalise != after.normalise {
        changes.push(Change::SubjectNormalise { old: tidying(&before.normalise), new: tidying(&after.normalise) });
    }
    let (old_anchor, new_anchor) = (anchor(old), anchor(new));
    if old_anchor != new_anchor {
        changes.push(Change::AnchorMoved { old: old_anchor.into(), new: new_anchor.into() });
    }
    for attribute in &before.attributes {
        let code = || attribute.code.clone();
        match (after.attributes.iter().find(|it| it.code == attribute.code).map(|it| &it.kind), &attribute.kind) {
            (None, _) => changes.push(Change::AttributeRemoved { attribute: code() }),
            (Some(AttributeKind::Levels(_)), AttributeKind::Number) => {
                changes.push(Change::AttributeHasLevels { attribute: code() });
            }
            (Some(now), AttributeKind::Levels(levels)) => {
                let kept = |level: &String| matches!(now, AttributeKind::Levels(now) if now.contains(level));
                for level in levels.iter().filter(|level| !kept(level)) {
                    changes.push(Change::AttributeLevelRemoved { attribute: code(), level: level.clone() });
                }
            }
            (Some(AttributeKind::Number), AttributeKind::Number) => {}
        }
    }
}

fn tidying(steps: &[Tidy]) -> String {
    steps.iter().map(|step| TIDY.name(step)).collect::<Vec<_>>().join(", ")
}

fn anchor(plan: &Plan) -> &str {
    match plan.subject.anchor {
        Anchor::Enrolment => "enrolment",
        Anchor::Visit(index) => plan.visits.get(index).map_or("enrolment", |visit| &visit.code),
    }
}

// ---- how an instrument's exports are read and placed ----

/// Everything that decides how this instrument's exports are read and placed, as a text: equal for two plans exactly
/// when nothing of it differs. Windows are not in it: to which visit a session belongs is derived anew each time.
///
/// The text is for comparing plans within one version of the program; it is not kept.
pub fn placing_sections(plan: &Plan, instrument: &Instrument) -> String {
    let mut text = String::new();
    let mut say = |name: &str, value: &dyn Debug| {
        // Writing to a text cannot fail.
        let _ = writeln!(text, "{name}: {value:?}");
    };
    let subject = &plan.subject;
    say("study zone", &plan.study.time_zone);
    say("subject", &(&subject.pattern_text, &subject.normalise, anchor(plan)));
    say("visits", &plan.visits.iter().map(|visit| &visit.code).collect::<Vec<_>>());
    // Each field by name, so that a new one cannot be forgotten here.
    let Instrument {
        code,
        label: _,
        folder,
        files,
        files_glob: _,
        rest: _,
        used: _,
        serial,
        largest,
        correct,
        silent: _,
        re_export,
        changed,
        time_zone,
        clock,
        reader,
    } = instrument;
    say("instrument", &(code, folder, files, serial, largest, re_export, changed, time_zone, clock));
    for it in correct {
        let measure = it.measure.map(|index| &plan.measures[index].code);
        say("correct", &(measure, it.from, it.times, it.plus));
    }
    reader_sections(plan, reader, &mut say);
    for measure in given(plan, reader) {
        let Measure {
            code,
            label: _,
            unit,
            plausible,
            step: _,
            replicates,
            summary: _,
            at_least: _,
            conditions,
            below_limit,
            above_limit,
        } = measure;
        say("measure", &(code, unit, plausible, replicates, conditions, below_limit, above_limit));
    }
    text
}

/// SHA-256 of [`placing_sections`], in lower-case hexadecimal digits.
pub fn placing_hash(plan: &Plan, instrument: &Instrument) -> String {
    let digest = Sha256::digest(placing_sections(plan, instrument).as_bytes());
    digest.iter().map(|byte| format!("{byte:02x}")).collect()
}

fn reader_sections(plan: &Plan, reader: &Reader, say: &mut dyn FnMut(&str, &dyn Debug)) {
    let Reader {
        format,
        encoding,
        decimal_mark,
        group_mark,
        header,
        last_line,
        units_row,
        stop_at,
        missing,
        ignore,
        subject,
        taken_at,
        stamp,
        visit,
        replicate,
        operator,
        values,
    } = reader;
    say("reader", &(format, encoding, decimal_mark, group_mark, header, last_line, units_row, stop_at, missing));
    say("ignore", ignore);
    say("places", &(subject, taken_at, stamp, visit, replicate, operator));
    for ValueRule { measure, column, unit, condition, replicate } in values {
        // By code: a position moves when measures are added before it.
        let measure: &dyn Debug = match measure {
            MeasureRule::Fixed(index) => &plan.measures[*index].code,
            MeasureRule::Found(place) => place,
        };
        let mut condition: Vec<&(String, LevelRule)> = condition.iter().collect();
        condition.sort_by(|a, b| a.0.cmp(&b.0));
        say("value", &(measure, column, unit, condition, replicate));
    }
}

/// The measures that a reader can give: those it names, or all where a place says which.
fn given<'a>(plan: &'a Plan, reader: &Reader) -> Vec<&'a Measure> {
    let fixed = |index: usize| {
        reader.values.iter().any(|value| match value.measure {
            MeasureRule::Fixed(measure) => measure == index,
            MeasureRule::Found(_) => true,
        })
    };
    plan.measures.iter().enumerate().filter(|(index, _)| fixed(*index)).map(|(_, measure)| measure).collect()
}

// ---- what the planned effect depends on ----

/// A change of something that the planned effect depends on.
#[derive(Debug, Clone, PartialEq, Eq, Serialize)]
pub struct GuardedChange {
    /// The dotted path of the key, such as `visit[week-4].window`.
    pub key: String,
    /// What stood there; `None` when nothing did.
    pub old: Option<String>,
    /// What stands there; `None` when nothing does.
    pub new: Option<String>,
}

/// What the new plan changes in what the planned effect depends on: `[interim]`, the analysis that it names, `[assume]`,
/// and what decides which readings of its measure and visits are used. Without `[interim]` nothing is guarded.
pub fn guarded(old: &Plan, new: &Plan) -> Vec<GuardedChange> {
    let (before, after) = (facts(old), facts(new));
    if before.is_empty() != after.is_empty() {
        let there = |facts: &BTreeMap<String, String>| (!facts.is_empty()).then(|| "planned".to_owned());
        return vec![GuardedChange { key: "interim".into(), old: there(&before), new: there(&after) }];
    }
    let keys: std::collections::BTreeSet<&String> = before.keys().chain(after.keys()).collect();
    keys.into_iter()
        .filter(|key| before.get(*key) != after.get(*key))
        .map(|key| GuardedChange { key: key.clone(), old: before.get(key).cloned(), new: after.get(key).cloned() })
        .collect()
}

/// Each guarded key and its value as text; empty without `[interim]`.
fn facts(plan: &Plan) -> BTreeMap<String, String> {
    let mut facts = BTreeMap::new();
    let Some(interim) = &plan.interim else { return facts };
    let mut say = |key: String, value: String| {
        facts.insert(key, value);
    };
    interim_facts(plan, interim, &mut say);
    if let Some(analysis) = plan.analyses.get(interim.analysis) {
        analysis_facts(plan, analysis, &mut say);
        measure_facts(&plan.measures[analysis.measure], &mut say);
        let baseline = analysis.mixed.as_ref().and_then(|mixed| mixed.baseline);
        for index in analysis.visits.iter().copied().chain(baseline) {
            visit_facts(plan, &plan.visits[index], &mut say);
        }
    }
    assume_facts(plan, &mut say);
    facts
}

type Say<'a> = &'a mut dyn FnMut(String, String);

fn interim_facts(plan: &Plan, interim: &Interim, say: Say<'_>) {
    let visit = |index: usize| plan.visits[index].code.as_str();
    say("interim.analysis".into(), plan.analyses[interim.analysis].code.clone());
    say(
        "interim.effect".into(),
        match &interim.effect {
            Effect::Arms { arm, against, visit: at } => {
                format!("\"{arm}\" against \"{against}\" at \"{}\"", visit(*at))
            }
            Effect::Visits { visit: at, against } => format!("\"{}\" against \"{}\"", visit(*at), visit(*against)),
        },
    );
    say("interim.alpha".into(), interim.alpha.to_string());
    say("interim.sides".into(), interim.sides.to_string());
    match interim.boundary {
        Boundary::Spending(it) => say("interim.spending".into(), spending(it)),
        Boundary::Shape(shape) => say("interim.boundary".into(), format!("shape {shape}")),
    }
    let looks = interim.looks.iter().map(|look| format!("\"{}\" at {}", look.name, look.at)).collect::<Vec<_>>();
    say("interim.looks".into(), looks.join(", "));
    say(
        "interim.information".into(),
        match interim.information {
            Information::Variance(max) => format!("variance, at most {max}"),
            Information::Subjects(max) => format!("subjects, at most {max}"),
        },
    );
    if let Some(it) = interim.futility {
        let binding = if it.binding { "binding" } else { "not binding" };
        say("interim.futility".into(), format!("{}, power {}, {binding}", spending(it.spending), it.power));
    }
}

fn spending(it: Spending) -> String {
    match it {
        Spending::ObrienFlemingType => "obrien-fleming-type".into(),
        Spending::PocockType => "pocock-type".into(),
        Spending::KimDemets(parameter) => format!("kim-demets, parameter {parameter}"),
        Spending::HwangShihDecani(parameter) => format!("hwang-shih-decani, parameter {parameter}"),
    }
}

fn analysis_facts(plan: &Plan, analysis: &Analysis, say: Say<'_>) {
    let Analysis {
        code,
        measure,
        method,
        within,
        between,
        visits,
        average,
        off_window,
        contrasts,
        multiplicity,
        confidence,
        sums,
        agree_over: _,
        mixed,
    } = analysis;
    let mut own = |name: &str, value: String| say(format!("analysis[{code}].{name}"), value);
    own("measure", plan.measures[*measure].code.clone());
    own("method", METHOD.name(method).into());
    own("within", within.join(", "));
    own("between", between.join(", "));
    own("visits", visits.iter().map(|index| plan.visits[*index].code.as_str()).collect::<Vec<_>>().join(", "));
    own("average", average.join(", "));
    own("off_window", OFF_WINDOW.name(off_window).into());
    own("contrasts", contrasts.iter().map(|it| CONTRAST.name(it)).collect::<Vec<_>>().join(", "));
    own("multiplicity", MULTIPLICITY.name(multiplicity).into());
    own("confidence", confidence.to_string());
    own("sums", SUMS.name(sums).into());
    if let Some(mixed) = mixed {
        mixed_facts(plan, mixed, &mut own);
    }
}

fn mixed_facts(plan: &Plan, mixed: &Mixed, own: &mut dyn FnMut(&str, String)) {
    let Mixed { baseline, covariates, time, all_sessions, covariance, covariance_by, df, sensitivity } = mixed;
    own("baseline", baseline.map_or(String::new(), |index| plan.visits[index].code.clone()));
    own("covariates", covariates.join(", "));
    own(
        "time",
        match time {
            Time::Visit => "visit".into(),
            Time::Days { degree } => format!("days, degree {degree}"),
        },
    );
    own("sessions", analysis::SESSIONS.name(all_sessions).into());
    own("covariance", covariance.iter().map(|it| COVARIANCE.name(it)).collect::<Vec<_>>().join(", "));
    own("covariance_by", covariance_by.clone().unwrap_or_default());
    own("df", DF.name(df).into());
    if let Some(it) = sensitivity {
        let kind = match &it.kind {
            SensitivityKind::JumpToReference { reference } => format!("jump-to-reference \"{reference}\""),
            SensitivityKind::CopyIncrements { reference } => format!("copy-increments \"{reference}\""),
            SensitivityKind::Delta { by } => format!("delta by {by}"),
        };
        own("sensitivity", format!("{kind}, {} imputations, seed {}", it.imputations, it.seed));
    }
}

fn measure_facts(measure: &Measure, say: Say<'_>) {
    let mut own = |name: &str, value: String| say(format!("measure[{}].{name}", measure.code), value);
    own("summary", super::measure::SUMMARY.name(&measure.summary).into());
    own("at_least", measure.at_least.to_string());
    own("plausible", measure.plausible.map_or(String::new(), |(low, high)| format!("[{low}, {high}]")));
    own("below_limit", super::measure::LIMIT.name(&measure.below_limit).into());
    own("above_limit", super::measure::LIMIT.name(&measure.above_limit).into());
}

fn visit_facts(plan: &Plan, visit: &Visit, say: Say<'_>) {
    let mut own = |name: &str, value: String| say(format!("visit[{}].{name}", visit.code), value);
    own("day", visit.day.to_string());
    own("window", format!("[{}, {}]", visit.window.0, visit.window.1));
    own("counts", format!("[{}, {}]", visit.counts.0, visit.counts.1));
    own("choose", super::visit::CHOOSE.name(&visit.choose).into());
    own("tie", super::visit::TIE.name(&visit.tie).into());
    own("after", visit.after.map_or(String::new(), |index| plan.visits[index].code.clone()));
}

fn assume_facts(plan: &Plan, say: Say<'_>) {
    let Some(assume) = &plan.assume else { return };
    match &assume.means {
        AssumedMeans::OneGroup(means) => say("assume.means".into(), format!("{means:?}")),
        AssumedMeans::ByArm(arms) => {
            arms.iter().for_each(|(arm, means)| say(format!("assume.means.{arm}"), format!("{means:?}")));
        }
    }
    say("assume.sd".into(), format!("{:?}", assume.sd));
    say(
        "assume.correlation".into(),
        match &assume.correlation {
            AssumedCorrelation::Ar1(rho) => format!("ar1 {rho}"),
            AssumedCorrelation::CompoundSymmetry(rho) => format!("compound_symmetry {rho}"),
            AssumedCorrelation::Matrix(matrix) => format!("{matrix:?}"),
        },
    );
    say("assume.dropout".into(), assume.dropout.to_string());
    say("assume.power".into(), assume.power.to_string());
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::plan::{PlanFiles, parse};

    const BASE: &str = include_str!("../../tests/plans/sound/every-key.toml");
    const READER: &str = include_str!("../../tests/plans/sound/readers/balance.toml");

    fn plan(edits: &[(&str, &str)]) -> Plan {
        let mut main = BASE.to_owned();
        for (from, to) in edits {
            assert!(main.contains(from), "{from}");
            main = main.replacen(from, to, 1);
        }
        let readers = vec![("readers/balance.toml".to_owned(), READER.to_owned())];
        parse(&PlanFiles { main, readers }).unwrap_or_else(|faults| panic!("{faults}")).0
    }

    #[test]
    fn nothing_changed() {
        let (old, new) = (plan(&[]), plan(&[("title     = ", "# a remark\ntitle = ")]));
        assert_eq!(changes(&old, &new), []);
        assert_eq!(guarded(&old, &new), []);
        for (a, b) in old.instruments.iter().zip(&new.instruments) {
            assert_eq!(placing_sections(&old, a), placing_sections(&new, b));
        }
    }

    #[test]
    fn what_readings_mean() {
        let old = plan(&[]);
        let code = |text: &str| text.to_owned();
        for (edit, expected) in [
            (
                ("unit       = \"kg\"", "unit = \"g\""),
                Change::UnitChanged { measure: code("grip"), old: code("kg"), new: code("g") },
            ),
            (("'MH-\\d{3}'", "'MH-\\d{4}'"), Change::SubjectPattern { old: code(r"MH-\d{3}"), new: code(r"MH-\d{4}") }),
            (
                ("[\"trim\", \"upper\", \"dash\"]", "[\"trim\"]"),
                Change::SubjectNormalise { old: code("trim, upper, dash"), new: code("trim") },
            ),
            (
                ("time_zone = \"Europe/London\"              #", "time_zone = \"Europe/Oslo\" #"),
                Change::StudyZone { old: code("Europe/London"), new: code("Europe/Oslo") },
            ),
            (
                ("anchor     = \"baseline\"", "anchor = \"enrolment\""),
                Change::AnchorMoved { old: code("baseline"), new: code("enrolment") },
            ),
            (
                ("site = [\"north\", \"south\"]", "site = [\"north\"]"),
                Change::AttributeLevelRemoved { attribute: code("site"), level: code("south") },
            ),
        ] {
            assert_eq!(changes(&old, &plan(&[edit])), [expected], "{edit:?}");
        }
        let pair = [
            ("[[measure]]\ncode = \"height\"\nunit = \"cm\"\n", ""),
            ("[[visit]]\ncode = \"follow-up\"\nday = 30\nafter = \"week-12\"\n", ""),
        ];
        let gone = changes(&old, &plan(&pair));
        let expected =
            [Change::MeasureRemoved { measure: code("height") }, Change::VisitRemoved { visit: code("follow-up") }];
        assert_eq!(gone, expected);
        assert_eq!(gone[0].to_string(), "the measure \"height\" is gone");
    }

    #[test]
    fn how_exports_are_placed() {
        let old = plan(&[]);
        let differing = |edits: &[(&str, &str)]| -> Vec<String> {
            let new = plan(edits);
            let pairs = old.instruments.iter().zip(&new.instruments);
            pairs.filter(|(a, b)| placing_hash(&old, a) != placing_hash(&new, b)).map(|(a, _)| a.code.clone()).collect()
        };
        assert_eq!(differing(&[("label     = \"Hand dynamometer, room 2\"", "label = \"Room 3\"")]), [""; 0]);
        assert_eq!(differing(&[("window   = [-3, 7]", "window = [-3, 6]")]), [""; 0]);
        assert_eq!(differing(&[("changed   = \"hold\"", "changed = \"supersede\"")]), ["dyn-2"]);
        assert_eq!(differing(&[("plausible  = [2, 95]", "plausible = [2, 96]")]), ["dyn-2", "panel"]);
        assert_eq!(differing(&[("times = 0.1019716", "times = 0.1019717")]), ["dyn-2"]);
        assert_eq!(differing(&[("'^Total'", "'^Totals'")]), ["dyn-2"]);
        // A measure before the others moves their positions, and only matters where a place says which measure.
        let more = "[[measure]]\ncode = \"new\"\nunit = \"m\"\n\n[[measure]]\ncode       = \"grip\"";
        assert_eq!(differing(&[("[[measure]]\ncode       = \"grip\"", more)]), ["panel"]);
    }

    #[test]
    fn what_is_guarded() {
        let old = plan(&[]);
        let changed = |edits: &[(&str, &str)]| -> Vec<String> {
            guarded(&old, &plan(edits)).into_iter().map(|change| change.key).collect()
        };
        assert_eq!(changed(&[("alpha       = 0.05", "alpha = 0.04")]), ["interim.alpha"]);
        assert_eq!(changed(&[("summary    = \"max\"", "summary = \"median\"")]), ["measure[grip].summary"]);
        assert_eq!(changed(&[("window   = [-3, 7]", "window = [-3, 6]")]), ["visit[week-4].window"]);
        assert_eq!(changed(&[("dropout     = 0.15", "dropout = 0.2")]), ["assume.dropout"]);
        assert_eq!(changed(&[("title     = ", "title = \"x\" #")]), [""; 0]);
        assert_eq!(changed(&[("code = \"mood\"\nunit = \"{score}\"", "code = \"mood\"\nunit = \"1\"")]), [""; 0]);
        let without: Vec<&str> = BASE.split("[interim]").collect();
        let rest = without[1].split("[assume]").next().unwrap();
        let section = format!("[interim]{rest}");
        assert_eq!(changed(&[(section.as_str(), "")]), ["interim"]);
    }
}
