//! `[[analysis]]`

use super::forms::Form;
use super::keys::{Bounds, Check, Kind, Tab, Table, key, needed, one_of, words};
use super::model::{
    AgreeOver, Analysis, Arm, Attribute, AttributeKind, ContrastKind, Covariance, DegreesOfFreedom, Instrument,
    Measure, MeasureRule, Method, Mixed, Multiplicity, OffWindow, Sensitivity, SensitivityKind, Sums, Time, Visit,
    VisitIx,
};

words!(METHOD: Method {
    "repeated-measures" = Method::RepeatedMeasures,
    "friedman" = Method::Friedman,
    "mixed-model" = Method::MixedModel,
    "agreement" = Method::Agreement,
} older { "rm-anova" = "repeated-measures" });
words!(OFF_WINDOW: OffWindow { "use" = OffWindow::Use, "leave" = OffWindow::Leave });
words!(CONTRAST: ContrastKind {
    "pairwise" = ContrastKind::Pairwise,
    "each-vs-first" = ContrastKind::EachVsFirst,
    "polynomial" = ContrastKind::Polynomial,
    "simple" = ContrastKind::Simple,
});
words!(MULTIPLICITY: Multiplicity {
    "none" = Multiplicity::None,
    "bonferroni" = Multiplicity::Bonferroni,
    "holm" = Multiplicity::Holm,
    "benjamini-hochberg" = Multiplicity::BenjaminiHochberg,
});
words!(SUMS: Sums { "type-3" = Sums::Type3, "type-2" = Sums::Type2 });
words!(AGREE_OVER: AgreeOver {
    "visits" = AgreeOver::Visits,
    "replicates" = AgreeOver::Replicates,
    "instruments" = AgreeOver::Instruments,
});
words!(TIME: bool { "visit" = false, "days" = true });
words!(SESSIONS: bool { "chosen" = false, "all" = true });
words!(COVARIANCE: Covariance {
    "unstructured" = Covariance::Unstructured,
    "toeplitz" = Covariance::Toeplitz,
    "ar1" = Covariance::Ar1,
    "compound-symmetry" = Covariance::CompoundSymmetry,
    "heterogeneous-compound-symmetry" = Covariance::HeterogeneousCompoundSymmetry,
    "heterogeneous-ar1" = Covariance::HeterogeneousAr1,
    "heterogeneous-toeplitz" = Covariance::HeterogeneousToeplitz,
    "exponential-in-days" = Covariance::ExponentialInDays,
    "random-intercept" = Covariance::RandomIntercept,
    "random-slope" = Covariance::RandomSlope,
});
words!(DF: DegreesOfFreedom {
    "kenward-roger" = DegreesOfFreedom::KenwardRoger,
    "satterthwaite" = DegreesOfFreedom::Satterthwaite,
    "between-within" = DegreesOfFreedom::BetweenWithin,
});
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(crate) enum Assumption {
    Jump,
    Copy,
    Delta,
}
words!(ASSUMPTION: Assumption {
    "jump-to-reference" = Assumption::Jump,
    "copy-increments" = Assumption::Copy,
    "delta" = Assumption::Delta,
});

const NAMES: Kind = Kind::List(&Kind::Text(Form::Filled), 0);

pub(crate) static ANALYSIS: Table = Table {
    name: "[[analysis]]",
    doc: "An analysis that the protocol names.",
    keys: &[
        needed("code", Kind::Text(Form::Code), "The analysis' code"),
        needed("measure", Kind::Text(Form::Filled), "The measure analysed"),
        needed("method", Kind::Word(&METHOD.words), "The method"),
        key(
            "within",
            Kind::List(&Kind::Text(Form::Filled), 1),
            "[\"visit\"]",
            "Within factors: visit and/or conditions",
        ),
        key("between", NAMES, "none", "Between factors: arm and/or attributes"),
        key("visits", Kind::List(&Kind::Text(Form::Filled), 1), "all", "The visits used"),
        key("average", NAMES, "none", "Conditions averaged over first"),
        key("off_window", Kind::Word(&OFF_WINDOW.words), "use", "What becomes of sessions outside their window"),
        key("contrasts", Kind::List(&Kind::Word(&CONTRAST.words), 0), "none", "The contrasts wanted"),
        super::keys::Key {
            older: Some("adjust"),
            ..key("multiplicity", Kind::Word(&MULTIPLICITY.words), "holm", "Adjustment of the contrasts' p values")
        },
        key("confidence", Kind::Number(Bounds::SHARE), "0.95", "Coverage of intervals"),
        key("agree_over", Kind::Word(&AGREE_OVER.words), "visits", "agreement only: over what readings are to agree"),
        key("sums", Kind::Word(&SUMS.words), "type-3", "Sums of squares for unbalanced groups"),
        key(
            "baseline",
            Kind::Text(Form::Filled),
            "none",
            "mixed-model only: a visit used as covariate instead of response",
        ),
        key("covariates", NAMES, "none", "mixed-model only: attributes that are numbers"),
        key(
            "time",
            Kind::Word(&TIME.words),
            "visit",
            "mixed-model only: time as visits, or as real days from the anchor",
        ),
        key("degree", Kind::Whole(1, 6), "1", "With time = \"days\": the degree of the polynomial"),
        key(
            "sessions",
            Kind::Word(&SESSIONS.words),
            "chosen",
            "With time = \"days\": every session, or the one that counts",
        ),
        key(
            "covariance",
            Kind::List(&Kind::Word(&COVARIANCE.words), 1),
            "unstructured, toeplitz, ar1, compound-symmetry; with time = \"days\": random-slope, random-intercept",
            "mixed-model only: structures of the within-subject covariance, tried in this order",
        ),
        key(
            "covariance_by",
            Kind::Text(Form::Filled),
            "one for all",
            "mixed-model only: one covariance for each level of this",
        ),
        key("df", Kind::Word(&DF.words), "kenward-roger", "mixed-model only: degrees of freedom"),
        key("sensitivity", Kind::Table(&SENSITIVITY), "none", "mixed-model only: readings missing not at random"),
    ],
    one_of: &[],
};

static SENSITIVITY: Table = Table {
    name: "sensitivity",
    doc: "An assumption about readings that were not seen.",
    keys: &[
        needed("kind", Kind::Word(&ASSUMPTION.words), "The assumption"),
        key("reference", Kind::Text(Form::Filled), "", "The reference arm, of jump-to-reference and copy-increments"),
        key("by", Kind::Number(Bounds::ANY), "", "The step of delta, in the measure's unit"),
        key("imputations", Kind::Whole(2, 100_000), "200", "The number of imputations"),
        key("seed", Kind::Whole(0, i64::MAX), "1", "The seed of the random numbers"),
    ],
    one_of: &[],
};

/// Keys of one method only.
const ONLY: &[(&str, &[Method])] = &[
    ("agree_over", &[Method::Agreement]),
    ("sums", &[Method::RepeatedMeasures]),
    ("between", &[Method::RepeatedMeasures, Method::MixedModel]),
    ("contrasts", &[Method::RepeatedMeasures, Method::MixedModel, Method::Friedman]),
    ("baseline", &[Method::MixedModel]),
    ("covariates", &[Method::MixedModel]),
    ("time", &[Method::MixedModel]),
    ("degree", &[Method::MixedModel]),
    ("sessions", &[Method::MixedModel]),
    ("covariance", &[Method::MixedModel]),
    ("covariance_by", &[Method::MixedModel]),
    ("df", &[Method::MixedModel]),
    ("sensitivity", &[Method::MixedModel]),
];

/// What an analysis may refer to.
pub(crate) struct Known<'a> {
    pub measures: &'a [Measure],
    pub visits: &'a [Visit],
    pub arms: &'a [Arm],
    pub attributes: &'a [Attribute],
    pub instruments: &'a [Instrument],
}

impl Known<'_> {
    fn visits(&self) -> Vec<&str> {
        self.visits.iter().map(|visit| visit.code.as_str()).collect()
    }

    fn arms(&self) -> Vec<&str> {
        self.arms.iter().map(|arm| arm.code.as_str()).collect()
    }
}

/// `[[analysis]]`
pub(crate) fn analyses(check: &mut Check<'_>, tabs: &[Tab<'_>], known: &Known<'_>) -> Vec<Analysis> {
    check.unique(tabs, "code");
    tabs.iter().map(|tab| analysis(check, tab, known)).collect()
}

fn analysis(check: &mut Check<'_>, tab: &Tab<'_>, known: &Known<'_>) -> Analysis {
    let codes: Vec<&str> = known.measures.iter().map(|measure| measure.code.as_str()).collect();
    let index = tab
        .text("measure")
        .and_then(|code| check.refer(&tab.spot_of("measure"), &tab.path_of("measure"), code, "measure", &codes));
    let method = tab.word("method", &METHOD);
    if let Some(method) = method {
        other_methods(check, tab, method);
    }
    let measure = index.and_then(|index| known.measures.get(index));
    let (within, average) = factors(check, tab, measure);
    let between = between(check, tab, known);
    let mixed = (method == Some(Method::MixedModel)).then(|| mixed(check, tab, known, &between));
    let visits = visits(check, tab, known, index, mixed.as_ref().and_then(|mixed| mixed.baseline));
    if let Some(method) = method {
        shape(check, tab, method, &within, &visits);
    }
    agreement(check, tab, known, measure, index);
    check.once(tab, "contrasts");
    let contrasts = tab.texts("contrasts");
    Analysis {
        code: tab.text("code").unwrap_or_default().to_owned(),
        measure: index.unwrap_or(0),
        method: method.unwrap_or(Method::RepeatedMeasures),
        within,
        between,
        visits,
        average,
        off_window: tab.word("off_window", &OFF_WINDOW).unwrap_or(OffWindow::Use),
        contrasts: contrasts.iter().filter_map(|(word, _)| one(&CONTRAST, word)).collect(),
        multiplicity: tab.word("multiplicity", &MULTIPLICITY).unwrap_or(Multiplicity::Holm),
        confidence: tab.number("confidence").unwrap_or(0.95),
        sums: tab.word("sums", &SUMS).unwrap_or(Sums::Type3),
        agree_over: tab.word("agree_over", &AGREE_OVER).unwrap_or(AgreeOver::Visits),
        mixed,
    }
}

fn one<T: Copy>(words: &super::keys::Words<T>, word: &str) -> Option<T> {
    words.values.get(words.words.position(word)?).copied()
}

fn other_methods(check: &mut Check<'_>, tab: &Tab<'_>, method: Method) {
    for (key, methods) in ONLY.iter().filter(|(key, methods)| tab.has(key) && !methods.contains(&method)) {
        // An empty list says what holds anyway.
        if tab.list(key).is_empty() && matches!(tab.def.key(key).map(|key| key.kind), Some(Kind::List(..))) {
            continue;
        }
        let names: Vec<&str> = methods.iter().map(|method| method.name()).collect();
        let wrong = format!("\"{key}\" means nothing for the method \"{}\".", method.name());
        check.at(tab, key, wrong, format!("{key} only with the method {}", one_of(&names)));
    }
}

/// `within` and `average`: between them, every condition of the measure.
fn factors(check: &mut Check<'_>, tab: &Tab<'_>, measure: Option<&Measure>) -> (Vec<String>, Vec<String>) {
    check.once(tab, "within");
    check.once(tab, "average");
    let owned = |name: &str| tab.texts(name).iter().map(|(text, _)| (*text).to_owned()).collect::<Vec<_>>();
    let within = if tab.has("within") { owned("within") } else { vec!["visit".to_owned()] };
    let average = owned("average");
    let Some(measure) = measure else { return (within, average) };
    let conditions: Vec<&str> = measure.conditions.iter().map(|factor| factor.code.as_str()).collect();
    let mut known = conditions.clone();
    known.push("visit");
    for (text, spot) in tab.texts("within") {
        check.refer(spot, &tab.path_of("within"), text, "within factor", &known);
    }
    for (text, spot) in tab.texts("average") {
        if conditions.is_empty() {
            let wrong = format!("The measure \"{}\" has no conditions.", measure.code);
            check.error(spot, &tab.path_of("average"), wrong, "no \"average\"");
        } else {
            check.refer(spot, &tab.path_of("average"), text, "condition of the measure", &conditions);
        }
        if within.iter().any(|factor| factor == text) {
            let wrong = format!("\"{text}\" stands in \"within\" too.");
            check.error(spot, &tab.path_of("average"), wrong, "each condition in one of the two");
        }
    }
    let named = |code: &str| {
        let near = |listed: &String| super::diagnostics::nearest(listed, [code]).is_some();
        within.iter().chain(&average).any(|listed| listed == code || near(listed))
    };
    for code in conditions.iter().filter(|code| !named(code)) {
        let wrong = format!("The condition \"{code}\" stands neither in \"within\" nor in \"average\".");
        let right = format!("average = [\"{code}\"] to average over it first, or within = [\"visit\", \"{code}\"]");
        check.error(&tab.spot, &tab.path_of("average"), wrong, right);
    }
    (within, average)
}

fn between(check: &mut Check<'_>, tab: &Tab<'_>, known: &Known<'_>) -> Vec<String> {
    check.once(tab, "between");
    let path = tab.path_of("between");
    let mut factors = vec![];
    for (text, spot) in tab.texts("between") {
        factors.push(text.to_owned());
        if text == "arm" {
            if known.arms.is_empty() {
                check.error(spot, &path, "The plan has no arms.", "[[arm]] tables, or other factors");
            }
            continue;
        }
        let levels = |it: &&Attribute| matches!(it.kind, AttributeKind::Levels(_));
        let mut names: Vec<&str> = known.attributes.iter().filter(levels).map(|it| it.code.as_str()).collect();
        if !names.contains(&text) && known.attributes.iter().any(|it| it.code == text) {
            let wrong = format!("\"{text}\" is a number and makes no groups.");
            check.error(spot, &path, wrong, "an attribute with levels; of a mixed model, covariates = […]");
            continue;
        }
        names.push("arm");
        check.refer(spot, &path, text, "between factor", &names);
    }
    factors
}

/// The visits of the response, in the order of the plan; the baseline is none of them. Without a list, those at which
/// the measure is due.
fn visits(
    check: &mut Check<'_>,
    tab: &Tab<'_>,
    known: &Known<'_>,
    measure: Option<usize>,
    baseline: Option<VisitIx>,
) -> Vec<VisitIx> {
    let codes = known.visits();
    let due = |visit: &VisitIx| measure.is_none_or(|measure| known.visits[*visit].measures.contains(&measure));
    let path = tab.path_of("visits");
    check.once(tab, "visits");
    let mut visits: Vec<VisitIx> = if tab.has("visits") {
        let texts = tab.texts("visits");
        let mut listed = vec![];
        for (code, spot) in texts {
            let Some(visit) = check.refer(spot, &path, code, "visit", &codes) else { continue };
            if !due(&visit) {
                let wrong = format!("The measure is not due at \"{code}\".");
                check.warn(spot, &path, wrong, "visits whose \"measures\" hold it");
            }
            listed.push(visit);
        }
        listed
    } else {
        (0..codes.len()).filter(due).collect()
    };
    visits.sort_unstable();
    visits.dedup();
    visits.retain(|visit| Some(*visit) != baseline);
    visits
}

/// What a method can take at all.
fn shape(check: &mut Check<'_>, tab: &Tab<'_>, method: Method, within: &[String], visits: &[VisitIx]) {
    let by_visit = within.iter().any(|factor| factor == "visit");
    let conditions = within.len() - usize::from(by_visit);
    let spot = tab.spot_of("within");
    let path = tab.path_of("within");
    if method == Method::Friedman && within.len() > 1 {
        check.error(&spot, &path, "Friedman's test has one within factor.", "one factor; \"average\" for the others");
    }
    if matches!(method, Method::MixedModel | Method::Agreement) && conditions > 0 {
        let wrong = format!("The method \"{}\" takes no condition as a factor.", method.name());
        check.error(&spot, &path, wrong, "within = [\"visit\"], and the conditions in \"average\"");
    }
    if by_visit && visits.len() < 2 && tab.has("visits") && method != Method::Agreement && method != Method::MixedModel
    {
        check.at(tab, "visits", "One visit alone makes no factor.", "at least two visits");
    }
    if !by_visit && visits.len() > 1 {
        let wrong = "\"visit\" is no within factor, yet there are several visits.";
        check.error(&tab.spot_of("visits"), &tab.path_of("visits"), wrong, "visits = […] with the one that is meant");
    }
    for (word, spot) in tab.texts("contrasts") {
        if word == "polynomial" && !by_visit {
            let wrong = "A trend needs visits, whose days give the spacing.";
            check.error(spot, &tab.path_of("contrasts"), wrong, "\"visit\" in \"within\"");
        }
    }
}

fn agreement(check: &mut Check<'_>, tab: &Tab<'_>, known: &Known<'_>, measure: Option<&Measure>, index: Option<usize>) {
    match tab.word("agree_over", &AGREE_OVER) {
        Some(AgreeOver::Replicates) if measure.is_some_and(|measure| measure.replicates < 2) => {
            check.at(tab, "agree_over", "The measure has one replicate.", "a measure with replicates = 2 or more");
        }
        Some(AgreeOver::Instruments) => {
            let gives = |it: &&Instrument| {
                it.reader.values.iter().any(|value| match value.measure {
                    MeasureRule::Fixed(measure) => Some(measure) == index,
                    MeasureRule::Found(_) => true,
                })
            };
            if known.instruments.iter().filter(gives).count() < 2 {
                let wrong = "Fewer than two instruments give this measure.";
                check.at(tab, "agree_over", wrong, "at least two instruments with the measure");
            }
        }
        _ => {}
    }
}

fn mixed(check: &mut Check<'_>, tab: &Tab<'_>, known: &Known<'_>, between: &[String]) -> Mixed {
    let by_days = tab.word("time", &TIME).unwrap_or(false);
    let all_sessions = tab.word("sessions", &SESSIONS).unwrap_or(false);
    if all_sessions && !by_days {
        check.at(tab, "sessions", "Every session can only be used with its real day.", "time = \"days\" as well");
    }
    if tab.has("degree") && !by_days {
        check.at(tab, "degree", "Visits have no degree.", "time = \"days\" as well");
    }
    let baseline = tab.text("baseline").and_then(|code| {
        check.refer(&tab.spot_of("baseline"), &tab.path_of("baseline"), code, "visit", &known.visits())
    });
    Mixed {
        baseline,
        covariates: covariates(check, tab, known),
        time: if by_days {
            Time::Days { degree: tab.whole("degree").and_then(|it| u32::try_from(it).ok()).unwrap_or(1) }
        } else {
            Time::Visit
        },
        all_sessions,
        covariance: covariance(check, tab, by_days, all_sessions),
        covariance_by: covariance_by(check, tab, between),
        df: tab.word("df", &DF).unwrap_or(DegreesOfFreedom::KenwardRoger),
        sensitivity: tab.table("sensitivity", &SENSITIVITY).and_then(|tab| sensitivity(check, &tab, known, between)),
    }
}

fn covariates(check: &mut Check<'_>, tab: &Tab<'_>, known: &Known<'_>) -> Vec<String> {
    check.once(tab, "covariates");
    let path = tab.path_of("covariates");
    let number = |it: &&Attribute| it.kind == AttributeKind::Number;
    let numbers: Vec<&str> = known.attributes.iter().filter(number).map(|it| it.code.as_str()).collect();
    let mut covariates = vec![];
    for (text, spot) in tab.texts("covariates") {
        covariates.push(text.to_owned());
        if !numbers.contains(&text) && known.attributes.iter().any(|it| it.code == text) {
            check.error(spot, &path, format!("\"{text}\" has levels."), "an attribute that is a number; between = […]");
        } else if numbers.is_empty() {
            let wrong = "The plan has no attribute that is a number.";
            check.error(spot, &path, wrong, "attributes = { age = \"number\" } in [subject]");
        } else {
            check.refer(spot, &path, text, "attribute", &numbers);
        }
    }
    covariates
}

fn covariance(check: &mut Check<'_>, tab: &Tab<'_>, by_days: bool, all_sessions: bool) -> Vec<Covariance> {
    use Covariance::{CompoundSymmetry, ExponentialInDays, RandomIntercept, RandomSlope};
    check.once(tab, "covariance");
    if !tab.has("covariance") {
        return if by_days {
            vec![RandomSlope, RandomIntercept]
        } else {
            vec![Covariance::Unstructured, Covariance::Toeplitz, Covariance::Ar1, CompoundSymmetry]
        };
    }
    let mut structures = vec![];
    for (word, spot) in tab.texts("covariance") {
        let Some(structure) = one(&COVARIANCE, word) else { continue };
        let by_visit = !matches!(structure, CompoundSymmetry | ExponentialInDays | RandomIntercept | RandomSlope);
        if all_sessions && by_visit {
            let wrong = format!("\"{word}\" goes from visit to visit; with every session there are no such steps.");
            let right = "\"random-slope\", \"random-intercept\", \"exponential-in-days\" or \"compound-symmetry\"";
            check.error(spot, &tab.path_of("covariance"), wrong, right);
        }
        structures.push(structure);
    }
    structures
}

fn covariance_by(check: &mut Check<'_>, tab: &Tab<'_>, between: &[String]) -> Option<String> {
    let by = tab.text("covariance_by")?;
    let known: Vec<&str> = between.iter().map(String::as_str).collect();
    if known.is_empty() {
        check.at(tab, "covariance_by", "The analysis has no between factor.", "between = […] as well");
    } else {
        check.refer(&tab.spot_of("covariance_by"), &tab.path_of("covariance_by"), by, "between factor", &known);
    }
    Some(by.to_owned())
}

fn sensitivity(check: &mut Check<'_>, tab: &Tab<'_>, known: &Known<'_>, between: &[String]) -> Option<Sensitivity> {
    let assumption = tab.word("kind", &ASSUMPTION)?;
    let (wanted, other) = if assumption == Assumption::Delta { ("by", "reference") } else { ("reference", "by") };
    let word = tab.text("kind").unwrap_or_default();
    if !tab.has(wanted) {
        check.error(
            &tab.spot,
            &tab.path_of(wanted),
            format!("\"{word}\" needs \"{wanted}\"."),
            format!("{wanted} = …"),
        );
    }
    if tab.has(other) {
        check.at(tab, other, format!("\"{other}\" means nothing for \"{word}\"."), format!("no \"{other}\""));
    }
    let reference = tab.text("reference").unwrap_or_default().to_owned();
    if assumption != Assumption::Delta && tab.has("reference") {
        check.refer(&tab.spot_of("reference"), &tab.path_of("reference"), &reference, "arm", &known.arms());
        if !between.iter().any(|factor| factor == "arm") {
            check.at(tab, "reference", "The analysis is not by arm.", "between = [\"arm\"] as well");
        }
    }
    Some(Sensitivity {
        kind: match assumption {
            Assumption::Jump => SensitivityKind::JumpToReference { reference },
            Assumption::Copy => SensitivityKind::CopyIncrements { reference },
            Assumption::Delta => SensitivityKind::Delta { by: tab.number("by").unwrap_or(0.0) },
        },
        imputations: tab.whole("imputations").and_then(|it| u32::try_from(it).ok()).unwrap_or(200),
        seed: tab.whole("seed").and_then(|it| u64::try_from(it).ok()).unwrap_or(1),
    })
}
