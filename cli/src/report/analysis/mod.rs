//! The result of an analysis: for machines, and for people.
//!
//! Invariants: both forms come from one [`Analysed`], so that they cannot disagree; what was left out stands right
//! under what was found. What is the same for every method stands here, the rest in one module a method.

mod agreement;
mod checks;
mod names;
mod ranks;
mod repeated;

use revisant_analysis::Interval;
use revisant_schema::plan::{Analysis, Method, Multiplicity, Plan};
use revisant_schema::records::codec::{Hash, hex};
use revisant_schema::records::view::Standing;
use serde_json::{Map, Value as Json, json};

use super::number;
use super::text::{clean_lines, count, list, wrap};
use crate::commands::InstrumentLine;
use crate::dataset::{Dataset, Factor, VISIT};
use crate::looked::Looked;
use crate::method::Outcome;

/// A result with all that stands beside it.
pub struct Analysed<'a> {
    /// The study's code.
    pub study: &'a str,
    /// The analysis, as planned.
    pub analysis: &'a Analysis,
    /// The measure's code.
    pub measure: &'a str,
    /// What people read.
    pub label: &'a str,
    /// The measure's unit.
    pub unit: &'a str,
    /// Where the records stand.
    pub standing: Standing,
    /// The plan under which the readings were placed.
    pub plan: PlanUsed,
    /// That plan itself.
    pub placed_by: &'a Plan,
    /// The plan from which the analysis comes, where that is another.
    pub analysis_plan: Option<PlanUsed>,
    /// How many subjects are on the roster.
    pub enrolled: usize,
    /// The data.
    pub data: Dataset,
    /// What came out.
    pub outcome: Outcome,
    /// Open holds that may concern the measure.
    pub open_holds: usize,
    /// The instruments that measure it.
    pub instruments: Vec<InstrumentLine>,
    /// How often this has been looked at.
    pub looked: Looked,
}

/// A plan version.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct PlanUsed {
    /// From 1.
    pub version: i64,
    /// Of its files.
    pub sha256: Hash,
}

impl PlanUsed {
    fn json(self) -> Json {
        json!({ "version": self.version, "sha256": hex(&self.sha256) })
    }
}

/// What a method says beside what every result says.
trait Findings {
    /// How many subjects it used.
    fn used(&self) -> usize;

    /// Its fields for machines, `cells` first.
    fn fields(&self) -> Vec<(&'static str, Json)>;

    /// Its tables, with what is to be read beside them.
    fn tables(&self, width: usize) -> Vec<String>;

    /// What was found, one sentence each; at least one.
    fn sentences(&self) -> Vec<String>;

    /// What follows right under who was left out.
    fn beside(&self) -> Vec<String>;

    /// What it rests on, where that is wanted.
    fn checks(&self, width: usize) -> Vec<String>;

    /// Why something is not defined, or needs a word of caution.
    fn notes(&self) -> Vec<String>;
}

impl Analysed<'_> {
    fn findings(&self) -> Box<dyn Findings + '_> {
        match &self.outcome {
            Outcome::RepeatedMeasures(repeated) => Box::new(repeated::Findings::new(self, repeated)),
            Outcome::Ranks(found) => Box::new(ranks::Findings::new(self, found)),
            Outcome::Agreement(found) => Box::new(agreement::Findings::new(self, found)),
        }
    }

    /// How many subjects the result uses.
    pub fn used(&self) -> usize {
        self.findings().used()
    }
}

// ---- for machines ----

impl Analysed<'_> {
    /// The whole result.
    pub fn json(&self) -> Json {
        let findings = self.findings();
        let Standing { trail, hash, moment, cut } = &self.standing;
        let mut json = Map::new();
        let mut put = |name: &str, value: Json| json.insert(name.to_owned(), value);
        put("program", json!({ "name": "revisant", "version": env!("CARGO_PKG_VERSION") }));
        put("study", json!(self.study));
        put("analysis", json!(self.analysis.code));
        put("method", json!(self.analysis.method.name()));
        put("measure", json!(self.measure));
        put("unit", json!(self.unit));
        put("as_of", json!({ "trail": trail, "hash": hex(hash), "cut": cut, "moment": moment }));
        put("plan", self.plan.json());
        put("analysis_plan", json!(self.analysis_plan.map(PlanUsed::json)));
        put("subjects", self.subjects_json());
        for (name, value) in findings.fields() {
            put(name, value);
        }
        put("data_state", self.state_json());
        put("looked", self.looked.json());
        put("sentence", json!(self.sentence()));
        put("sentences", json!(findings.sentences()));
        put("notes", json!(self.notes()));
        Json::Object(json)
    }

    fn subjects_json(&self) -> Json {
        let left_out = self.data.left_out();
        let left_out: Vec<Json> = left_out.iter().map(|(who, why)| json!({ "subject": who, "why": why })).collect();
        json!({
            "enrolled": self.enrolled,
            "with_any": self.data.with_any(),
            "used": self.used(),
            "left_out": left_out,
            "mixed_model_would_use": self.data.mixed_model_would_use(),
        })
    }

    fn state_json(&self) -> Json {
        let care = &self.data.care;
        json!({
            "open_holds": self.open_holds,
            "instruments": self.instruments,
            "spread": care.spread,
            "off_window": care.off_window,
            "fewer_replicates": care.fewer_replicates,
            "accounted": care.accounted,
            "at_limit": care.at_limit,
            "several_instruments": care.several_instruments,
            "took_part": care.took_part.json(self.placed_by),
        })
    }
}

/// `[lower, upper]`, or null.
fn interval(interval: Option<Interval>) -> Json {
    json!(interval.map(|it| [it.lower, it.upper]))
}

// ---- words for both ----

impl Analysed<'_> {
    /// What was found, one sentence each.
    pub fn sentences(&self) -> Vec<String> {
        self.findings().sentences()
    }

    /// What was found, as one text.
    pub fn sentence(&self) -> String {
        self.sentences().join(" ")
    }

    /// `visits`, or `visits and hand by arm`.
    pub fn over(&self) -> String {
        if let (Some(visit), [repeats]) = (&self.data.repeats_at, self.data.within.as_slice()) {
            return format!("{}s at {visit}", repeats.code);
        }
        let name = |factor: &Factor| if factor.code == VISIT { "visits".to_owned() } else { factor.code.clone() };
        let names = |factors: &[Factor]| list(&factors.iter().map(name).collect::<Vec<_>>());
        match self.data.between.is_empty() {
            true => names(&self.data.within),
            false => format!("{} by {}", names(&self.data.within), names(&self.data.between)),
        }
    }

    /// What a reader should know, one sentence each.
    pub fn notes(&self) -> Vec<String> {
        let mut notes: Vec<String> = self.findings().notes().iter().map(|note| sentence_case(note)).collect();
        notes.extend(self.care_notes());
        notes.extend(self.looked.sentences());
        notes
    }

    fn care_notes(&self) -> Vec<String> {
        let care = &self.data.care;
        let mut notes = Vec::new();
        if care.at_limit > 0 {
            notes.push(format!("{} lie at a limit of detection.", count(care.at_limit as u64, "reading")));
        }
        notes.extend(care.took_part.sentences(self.placed_by));
        if care.several_instruments > 0 {
            let cells = count(care.several_instruments as u64, "cell");
            notes.push(format!("In {cells} several instruments gave readings; all of them make up the cell's number."));
        }
        if let Some(plan) = self.analysis_plan {
            notes.push(format!(
                "The readings are placed under plan version {}; the analysis comes from version {}.",
                self.plan.version, plan.version
            ));
        }
        notes
    }

    /// Who was left out and why, grouped by the reason.
    pub fn left_out(&self) -> String {
        let mut reasons: Vec<(String, Vec<String>)> = Vec::new();
        for (who, why) in self.data.left_out() {
            match reasons.iter_mut().find(|(reason, _)| *reason == why) {
                Some((_, subjects)) => subjects.push(who.to_owned()),
                None => reasons.push((why, vec![who.to_owned()])),
            }
        }
        let parts: Vec<String> = reasons.iter().map(|(why, who)| format!("{}: {why}", list(who))).collect();
        parts.join("; ")
    }
}

/// What is to be noted about pairs of levels: once, with all pairs that it is about.
#[derive(Default)]
struct PairNotes(Vec<(String, Vec<String>)>);

impl PairNotes {
    fn add(&mut self, pair: String, text: String) {
        match self.0.iter_mut().find(|(known, _)| *known == text) {
            Some((_, pairs)) if pairs.contains(&pair) => {}
            Some((_, pairs)) => pairs.push(pair),
            None => self.0.push((text, vec![pair])),
        }
    }

    fn said(self) -> impl Iterator<Item = String> {
        self.0.into_iter().map(|(text, pairs)| match pairs.as_slice() {
            [pair] => format!("the pair {pair}: {text}"),
            pairs => format!("the pairs {}: {text}", list(pairs)),
        })
    }
}

fn sentence_case(text: &str) -> String {
    let mut chars = text.chars();
    let first = chars.next().map(|c| c.to_uppercase().to_string()).unwrap_or_default();
    format!("{first}{}.", chars.as_str().trim_end_matches('.'))
}

// ---- for people ----

impl Analysed<'_> {
    /// The whole result, laid out for a width.
    pub fn text(&self, width: usize) -> String {
        let say = |text: String| wrap(&clean_lines(&text), width, "");
        let findings = self.findings();
        let mut parts = vec![say(self.title())];
        parts.extend(findings.tables(width));
        parts.extend(findings.sentences().into_iter().map(say));
        parts.push(say(self.who()));
        parts.extend(findings.beside().into_iter().map(say));
        parts.push(say(self.state()));
        parts.extend(self.notes().into_iter().map(say));
        parts.extend(findings.checks(width));
        parts.push(say(CAUTION.to_owned()));
        parts.join("\n\n")
    }

    fn title(&self) -> String {
        let Standing { trail, moment, cut, .. } = &self.standing;
        let cut = cut.as_ref().map_or(String::new(), |cut| format!(", cut {cut}"));
        let over = self.over();
        format!(
            "{} in {} over {over}: {} ({}), study {}.\nRecords at trail {trail} ({moment}){cut}; plan version {}.",
            self.label,
            self.unit,
            self.analysis.code,
            self.analysis.method.name(),
            self.study,
            self.plan.version
        )
    }

    /// `95 % CI`
    fn interval_name(&self) -> String {
        format!("{} % CI", number::plain(number::percent(self.analysis.confidence)))
    }

    fn interval(&self, interval: Option<Interval>, decimals: usize) -> String {
        interval.map_or_else(number::dash, |it| {
            format!("{} to {}", number::fixed(it.lower, decimals), number::fixed(it.upper, decimals))
        })
    }

    /// `p (Holm)`
    fn adjusted_name(&self) -> &'static str {
        match self.analysis.multiplicity {
            Multiplicity::None => "p (none)",
            Multiplicity::Bonferroni => "p (Bonferroni)",
            Multiplicity::Holm => "p (Holm)",
            Multiplicity::BenjaminiHochberg => "p (B & H)",
        }
    }

    fn who(&self) -> String {
        let left_out = self.data.left_out().len();
        let used = self.used();
        let head = format!("{used} of {} used", count(self.enrolled as u64, "subject"));
        match left_out {
            0 => format!("{head}; nobody was left out."),
            _ if self.analysis.method == Method::Agreement => {
                format!("{head}; {left_out} left out: {}.", self.left_out())
            }
            _ => format!(
                "{head}; {left_out} left out: {}. A mixed model would use {}.",
                self.left_out(),
                self.data.mixed_model_would_use()
            ),
        }
    }

    /// The state of the data, in one line.
    fn state(&self) -> String {
        let care = &self.data.care;
        let quiet: Vec<String> =
            self.instruments.iter().filter(|line| line.silent).map(|it| it.instrument.clone()).collect();
        let lost: Vec<String> =
            self.instruments.iter().filter(|line| line.unreachable).map(|it| it.instrument.clone()).collect();
        let parts = [
            (self.open_holds > 0).then(|| count(self.open_holds as u64, "open hold")),
            (!quiet.is_empty()).then(|| format!("{} quiet", list(&quiet))),
            (!lost.is_empty()).then(|| format!("{} unreachable", list(&lost))),
            (!care.spread.is_empty())
                .then(|| format!("{} spread over several sessions", count(care.spread.len() as u64, "visit"))),
            (!care.off_window.is_empty()).then(|| self.off_window()),
            (!care.fewer_replicates.is_empty()).then(|| {
                format!("{} with fewer replicates than planned", count(care.fewer_replicates.len() as u64, "cell"))
            }),
            (!care.accounted.is_empty())
                .then(|| format!("{} accounted for", count(care.accounted.len() as u64, "visit"))),
        ];
        let parts: Vec<String> = parts.into_iter().flatten().collect();
        match parts.is_empty() {
            true => "State of the data: nothing is held, quiet, off-window or short of replicates.".to_owned(),
            false => format!("State of the data: {}.", parts.join("; ")),
        }
    }

    fn off_window(&self) -> String {
        let all = &self.data.care.off_window;
        let used = if all.iter().all(|cell| cell.used) { "used" } else { "left out" };
        format!("{} off-window, {used}", count(all.len() as u64, "session"))
    }
}

/// What stands under every result.
pub const CAUTION: &str = "This program is no medical device and is not validated for any regulated use; see the \
                           cautions in the README.";
