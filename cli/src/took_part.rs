//! Which instruments gave the readings that stand in a result, and what is to be known of them.
//!
//! Invariant: only readings of cells that hold a number are counted, each once, under the instrument that gave it.

use std::collections::{BTreeMap, HashMap};

use chrono::NaiveDate;
use revisant_schema::plan::{self, Correction, Instrument, Plan, VisitIx};
use revisant_schema::records::View;
use serde_json::{Value as Json, json};

use crate::error::Failure;
use crate::report::text::{count, list};

/// Corrections as they stood in the plan versions that placed readings.
pub struct Corrections(HashMap<i64, Plan>);

impl Corrections {
    /// Those of some plan versions of the records.
    pub fn of(view: &View<'_>, versions: impl Iterator<Item = i64>) -> Result<Self, Failure> {
        let mut plans = HashMap::new();
        let mut last = None;
        for version in versions {
            // Readings come in long runs of one version.
            if last.replace(version) == Some(version) || plans.contains_key(&version) {
                continue;
            }
            let files = view.plan_version(version)?.map(|found| found.files);
            plans.extend(files.and_then(|files| plan::parse(&files).ok()).map(|(plan, _)| (version, plan)));
        }
        Ok(Self(plans))
    }

    /// The correction that the number of a reading of a day carries; `None` for one as exported.
    pub fn find(&self, version: i64, instrument: &str, measure: &str, day: NaiveDate) -> Option<&Correction> {
        let plan = self.0.get(&version)?;
        let (measure, _) = plan.measure(measure)?;
        let (_, instrument) = plan.instrument(instrument)?;
        instrument.correction(measure, day).filter(|it| it.times != 1.0 || it.plus != 0.0)
    }
}

/// Whether a reading was taken outside the dates between which the plan has its instrument in use.
pub fn outside_use(plan: &Plan, instrument: &str, day: NaiveDate) -> bool {
    plan.instrument(instrument).is_some_and(|(_, instrument)| !instrument.in_use_on(day))
}

/// What one instrument gave.
#[derive(Debug, Clone, Default, PartialEq, Eq)]
struct Part {
    visits: BTreeMap<VisitIx, usize>,
    corrected: usize,
    outside_use: usize,
}

/// What every instrument gave, by its code; the empty one: by hand.
#[derive(Debug, Clone, Default, PartialEq, Eq)]
pub struct TookPart(BTreeMap<String, Part>);

impl TookPart {
    /// Counts one reading.
    pub fn see(&mut self, instrument: &str, visit: VisitIx, corrected: bool, outside_use: bool) {
        let part = self.0.entry(instrument.to_owned()).or_default();
        *part.visits.entry(visit).or_default() += 1;
        part.corrected += usize::from(corrected);
        part.outside_use += usize::from(outside_use);
    }

    /// For machines.
    pub fn json(&self, plan: &Plan) -> Vec<Json> {
        let part = |(instrument, part): (&String, &Part)| {
            let visits: BTreeMap<&str, usize> =
                part.visits.iter().map(|(visit, number)| (visit_code(plan, *visit), *number)).collect();
            let instrument = (!instrument.is_empty()).then_some(instrument);
            json!({
                "instrument": instrument, "readings": visits, "corrected": part.corrected,
                "outside_use": part.outside_use
            })
        };
        self.0.iter().map(part).collect()
    }

    /// What a reader of the result should know, one sentence each.
    pub fn sentences(&self, plan: &Plan) -> Vec<String> {
        let instruments = self.0.keys().filter(|code| !code.is_empty()).count();
        let mut sentences = Vec::new();
        if instruments > 1 {
            let parts: Vec<String> = self.0.iter().map(|(code, part)| part.say(plan, &name(code))).collect();
            let how_many = NUMBERS.get(instruments).map_or_else(|| instruments.to_string(), |word| (*word).to_owned());
            sentences.push(format!("{how_many} instruments took part; readings of each: {}.", parts.join(", ")));
        } else if let Some(part) = self.0.get("") {
            let by_hand = count(part.visits.values().sum::<usize>() as u64, "reading");
            sentences.push(format!("{by_hand} entered by hand."));
        }
        sentences.extend(self.about("corrected by the plan's `correct`", |part| part.corrected));
        let outside: Vec<String> = self.0.iter().filter_map(|(code, part)| part.say_outside(plan, code)).collect();
        if !outside.is_empty() {
            sentences.push(format!("Taken outside the instrument's use, and used: {}.", list(&outside)));
        }
        sentences
    }

    fn about(&self, what: &str, of: impl Fn(&Part) -> usize) -> Option<String> {
        let parts: Vec<String> = self
            .0
            .iter()
            .filter(|(_, part)| of(part) > 0)
            .map(|(code, part)| format!("{} of {}", count(of(part) as u64, "reading"), name(code)))
            .collect();
        (!parts.is_empty()).then(|| format!("The numbers of {} are {what}.", list(&parts)))
    }
}

const NUMBERS: [&str; 7] = ["No", "One", "Two", "Three", "Four", "Five", "Six"];

fn name(code: &str) -> String {
    if code.is_empty() { "by hand".to_owned() } else { code.to_owned() }
}

fn visit_code(plan: &Plan, visit: VisitIx) -> &str {
    plan.visits.get(visit).map_or("", |visit| visit.code.as_str())
}

impl Part {
    fn say(&self, plan: &Plan, name: &str) -> String {
        let visits: Vec<String> =
            self.visits.iter().map(|(visit, number)| format!("{} {number}", visit_code(plan, *visit))).collect();
        format!("{name} ({})", visits.join(", "))
    }

    fn say_outside(&self, plan: &Plan, code: &str) -> Option<String> {
        let (_, instrument) = plan.instrument(code).filter(|_| self.outside_use > 0)?;
        Some(format!("{} of {code} ({})", count(self.outside_use as u64, "reading"), dates(instrument)))
    }
}

/// `in use 2026-01-10 to 2026-06-30`
pub fn dates(instrument: &Instrument) -> String {
    let (from, until) = instrument.used.unwrap_or_default();
    match (from, until) {
        (Some(from), Some(until)) => format!("in use {from} to {until}"),
        (Some(from), None) => format!("in use from {from}"),
        (None, Some(until)) => format!("in use until {until}"),
        (None, None) => "always in use".to_owned(),
    }
}
