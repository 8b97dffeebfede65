//! A number of subjects: for machines, and for people.
//!
//! Invariant: what the formula says never stands without what simulated studies say of it, or why there are none.

use revisant_analysis::Note;
use revisant_analysis::power::{PlannedEffect, Power};
use revisant_schema::plan::AssumedCorrelation;
use serde_json::{Value as Json, json};

use super::number::{df, fixed, fixed_or_dash, percent, plain, share};
use super::table::{Left, Right, Table};
use super::text::{clean_lines, count, list, wrap};
use crate::simulate::Simulated;

/// The answer with all that it rests on.
pub struct Sized {
    /// The study's code.
    pub study: String,
    /// The analysis named.
    pub analysis: Option<String>,
    /// It is a mixed model.
    pub mixed: bool,
    /// It does not compare the arms for which means are assumed.
    pub ignores_arms: bool,
    /// The unit of its measure.
    pub unit: Option<String>,
    /// The effect to be shown.
    pub effect: PlannedEffect,
    /// The error rate.
    pub alpha: f64,
    /// The visits' codes.
    pub visits: Vec<String>,
    /// The arms' codes; none in one group.
    pub arms: Vec<String>,
    /// Assumed means, by group and visit.
    pub means: Vec<Vec<f64>>,
    /// Assumed SDs, by visit.
    pub sds: Vec<f64>,
    /// Assumed correlation, as planned.
    pub correlation: AssumedCorrelation,
    /// Assumed dropout.
    pub dropout: f64,
    /// Wanted power.
    pub power: f64,
    /// The number for the wanted power, by the formula.
    pub wanted: Number,
    /// The number that simulated studies ask for instead.
    pub by_simulation: Option<Number>,
    /// The number planned.
    pub planned: Option<Number>,
}

/// A number of subjects and its power.
pub struct Number {
    /// Subjects to enrol in all.
    pub enrolled: usize,
    /// Complete subjects, by group.
    pub sizes: Vec<usize>,
    /// By the formula.
    pub formula: Power,
    /// By simulation; `None` where a study is too large for it.
    pub simulated: Option<Simulated>,
}

/// The effect's name, as options and results have it.
pub fn name(effect: PlannedEffect) -> &'static str {
    match effect {
        PlannedEffect::Within => "visit",
        PlannedEffect::Interaction => "arm:visit",
        PlannedEffect::Between => "arm",
    }
}

/// `90 %`
pub fn percent_text(share: f64) -> String {
    format!("{} %", plain(percent(share)))
}

impl Number {
    fn complete(&self) -> usize {
        self.sizes.iter().sum()
    }

    /// Complete subjects in each group, where all are of one size.
    fn each(&self) -> Option<usize> {
        let first = self.sizes.first().copied()?;
        self.sizes.iter().all(|size| *size == first).then_some(first)
    }

    /// The same of those to enrol.
    fn enrolled_each(&self) -> Option<usize> {
        let groups = self.sizes.len();
        (groups > 0 && self.enrolled.is_multiple_of(groups)).then(|| self.enrolled / groups)
    }

    /// `93 complete subjects in each of 2 arms (110 in each, 220 in all to be enrolled)`
    fn said(&self) -> String {
        let each = count(self.each().unwrap_or(0) as u64, "complete subject");
        match self.sizes.len() {
            0 | 1 => format!("{each} ({} to be enrolled)", self.enrolled),
            arms => format!(
                "{each} in each of {arms} arms ({} in each, {} in all to be enrolled)",
                self.enrolled_each().unwrap_or(0),
                self.enrolled
            ),
        }
    }

    fn json(&self) -> Json {
        json!({
            "enrolled": self.enrolled,
            "enrolled_per_group": self.enrolled_each(),
            "complete": self.complete(),
            "per_group": self.each(),
            "sizes": self.sizes,
            "formula": {
                "power": self.formula.power,
                "noncentrality": self.formula.noncentrality,
                "df": self.formula.df,
                "error_df": self.formula.error_df,
                "critical_f": self.formula.critical,
            },
            "simulation": self.simulated.map(|it| {
                let (lower, upper) = it.interval();
                json!({
                    "runs": it.runs, "seed": it.seed, "rejected": it.rejected, "power": it.power(), "ci": [lower, upper]
                })
            }),
        })
    }

    fn row(&self, what: String) -> [String; 8] {
        let simulated = self.simulated.map_or_else(super::number::dash, |it| {
            let (lower, upper) = it.interval();
            format!("{} ({} to {})", share(it.power(), 3), share(lower, 3), share(upper, 3))
        });
        [
            what,
            self.enrolled.to_string(),
            self.complete().to_string(),
            fixed_or_dash(self.formula.noncentrality, 2),
            degrees(self.formula.df),
            degrees(self.formula.error_df),
            self.formula.power.map_or_else(super::number::dash, |power| share(power, 3)),
            simulated,
        ]
    }
}

impl Sized {
    /// For machines.
    pub fn json(&self, plan: &str) -> Json {
        let mut wanted = self.wanted.json();
        if let Some(fields) = wanted.as_object_mut() {
            fields.insert("power".to_owned(), json!(self.power));
        }
        let correlation = match &self.correlation {
            AssumedCorrelation::Ar1(rho) => json!({ "ar1": rho }),
            AssumedCorrelation::CompoundSymmetry(rho) => json!({ "compound_symmetry": rho }),
            AssumedCorrelation::Matrix(matrix) => json!(matrix),
        };
        json!({
            "program": { "name": "revisant", "version": env!("CARGO_PKG_VERSION") },
            "study": self.study,
            "plan": { "sha256": plan },
            "analysis": self.analysis,
            "effect": name(self.effect),
            "alpha": self.alpha,
            "visits": self.visits,
            "groups": self.arms,
            "assumed": {
                "means": self.means, "sd": self.sds, "correlation": correlation, "dropout": self.dropout,
            },
            "epsilon": self.wanted.formula.epsilon,
            "wanted": wanted,
            "by_simulation": self.by_simulation.as_ref().map(Number::json),
            "planned": self.planned.as_ref().map(Number::json),
            "sentences": self.sentences(),
            "notes": self.notes(),
        })
    }

    /// For people, laid out for a width.
    pub fn text(&self, width: usize) -> String {
        let say = |text: String| wrap(&clean_lines(&text), width, "");
        let mut parts = vec![say(self.title()), self.assumed_table().render(width), say(self.assumptions())];
        parts.push(self.numbers_table().render(width));
        parts.extend(self.sentences().into_iter().map(say));
        parts.extend(self.notes().into_iter().map(say));
        parts.push(say(super::analysis::CAUTION.to_owned()));
        parts.join("\n\n")
    }

    fn title(&self) -> String {
        let analysis = self.analysis.as_ref().map_or(String::new(), |code| format!(" of {code}"));
        let groups = match self.arms.len() {
            0 | 1 => "one group".to_owned(),
            arms => format!("{arms} arms"),
        };
        format!(
            "Subjects for the effect {}{analysis} at alpha {}: {groups}, {}; study {}.",
            name(self.effect),
            plain(self.alpha),
            count(self.visits.len() as u64, "visit"),
            self.study
        )
    }

    fn assumed_table(&self) -> Table {
        let unit = self.unit.as_ref().map_or(String::new(), |unit| format!(" ({unit})"));
        let mut columns = vec![(format!("assumed{unit}"), Left)];
        columns.extend((0..self.means.len()).map(|group| (format!("mean{}", self.of_arm(group)), Right)));
        columns.push(("SD".to_owned(), Right));
        let columns: Vec<(&str, super::table::Align)> = columns.iter().map(|(name, at)| (name.as_str(), *at)).collect();
        let mut table = Table::new(&columns);
        for (at, visit) in self.visits.iter().enumerate() {
            let number = |value: Option<&f64>| value.map_or_else(super::number::dash, |it| trimmed(*it));
            let means = self.means.iter().map(|own| number(own.get(at)));
            table.row([visit.clone()].into_iter().chain(means).chain([number(self.sds.get(at))]));
        }
        table
    }

    fn of_arm(&self, group: usize) -> String {
        self.arms.get(group).map_or(String::new(), |arm| format!(", {arm}"))
    }

    fn assumptions(&self) -> String {
        let correlation = match &self.correlation {
            AssumedCorrelation::Ar1(rho) => format!("a correlation of {} from visit to visit (ar1)", plain(*rho)),
            AssumedCorrelation::CompoundSymmetry(rho) => {
                format!("a correlation of {} between all visits", plain(*rho))
            }
            AssumedCorrelation::Matrix(_) => "the plan's matrix of correlations".to_owned(),
        };
        let epsilon = match self.wanted.formula.epsilon {
            Some(epsilon) => format!("; epsilon {}", fixed(epsilon, 3)),
            None => String::new(),
        };
        format!(
            "With {correlation}, and {} of the subjects gone by the last visit{epsilon}.",
            percent_text(self.dropout)
        )
    }

    fn numbers_table(&self) -> Table {
        let mut table = Table::new(&[
            ("number", Left),
            ("enrolled", Right),
            ("complete", Right),
            ("λ", Right),
            ("df", Right),
            ("error df", Right),
            ("power", Right),
            ("simulated (95 % CI)", Right),
        ]);
        table.row(self.wanted.row("formula".to_owned()));
        if let Some(other) = &self.by_simulation {
            table.row(other.row("simulation".to_owned()));
        }
        if let Some(planned) = &self.planned {
            table.row(planned.row("planned".to_owned()));
        }
        table
    }

    /// What was found, one sentence each.
    fn sentences(&self) -> Vec<String> {
        let power = share(self.power, 2);
        let mut said = vec![format!("By the formula a power of {power} takes {}.", self.wanted.said())];
        if let Some(other) = &self.by_simulation {
            said.push(format!("Simulated studies ask for about {}.", other.said()));
        }
        match &self.planned {
            Some(planned) => {
                let found = planned.formula.power.map_or("no power that can be worked out".to_owned(), |power| {
                    format!("a power of {} by the formula", share(power, 3))
                });
                let sizes: Vec<String> = planned.sizes.iter().map(usize::to_string).collect();
                let by_arm = if sizes.len() > 1 { format!(" ({})", list(&sizes)) } else { String::new() };
                said.push(format!(
                    "The {} planned, of whom {} would be complete{by_arm}, have {found}.",
                    count(planned.enrolled as u64, "subject"),
                    planned.complete(),
                ));
            }
            None => said.push("The plan names no number of subjects (enrol in [study]).".to_owned()),
        }
        said.push(self.simulated());
        said
    }

    fn simulated(&self) -> String {
        let Some(found) = self.wanted.simulated else {
            return "A study of that size is too large to be simulated thousands of times.".to_owned();
        };
        let corrected = match self.effect {
            PlannedEffect::Between => "",
            _ => " with the Greenhouse–Geisser correction by the estimated epsilon",
        };
        format!(
            "Simulated: {} studies of normal readings from seed {}, each tested{corrected}; the interval is what chance \
             leaves open.",
            found.runs, found.seed
        )
    }

    /// Words of caution.
    fn notes(&self) -> Vec<String> {
        let mut notes = Vec::new();
        if self.wanted.formula.notes.contains(&Note::PowerOptimistic) {
            notes.push(
                "The assumed readings are not spherical (epsilon below 1). The formula is then an approximation, and \
                 mostly promises more power than the corrected test has: with few subjects, and with any number where \
                 means change in the way in which readings vary most. Where the two differ, go by the simulated studies."
                    .to_owned(),
            );
        }
        let others = self.planned.iter().flat_map(|number| &number.formula.notes);
        notes.extend(
            others.filter(|note| **note != Note::PowerOptimistic).map(|note| format!("The planned number: {note}.")),
        );
        if self.mixed {
            notes.push(
                "This is the power of repeated-measures analysis of variance over complete subjects; the planned mixed \
                 model uses incomplete subjects too."
                    .to_owned(),
            );
        }
        if self.ignores_arms {
            notes.push(
                "The analysis does not compare arms; this is the power of one that takes what arms differ by out of the \
                 error."
                    .to_owned(),
            );
        }
        notes
    }
}

/// Degrees of freedom; an epsilon that is 1 but for rounding leaves whole ones.
fn degrees(value: f64) -> String {
    df((value * 1e9).round() / 1e9)
}

/// Without what the arithmetic of doubles adds to it.
fn trimmed(value: f64) -> String {
    let short: f64 = format!("{value:.9e}").parse().unwrap_or(value);
    super::number::fixed(short, decimals(short))
}

fn decimals(value: f64) -> usize {
    plain(value).split_once('.').map_or(0, |(_, after)| after.len())
}
