//! The words and fields of an analysis by ranks.
//!
//! Invariant: a pair's estimate, interval and p come from the same differences, and stand in one row.

use revisant_analysis::Note;
use revisant_analysis::contrasts::ContrastKind;
use revisant_analysis::ranks::{Friedman, SignedRank};
use serde_json::{Map, Value as Json, json};

use super::{Analysed, PairNotes, interval, repeated};
use crate::dataset::Factor;
use crate::method::{RankChecks, Ranks};
use crate::report::number::{self, df, fixed_or_dash, p_or_dash, p_said, share};
use crate::report::sentence;
use crate::report::table::{Left, Right, Table};
use crate::report::text::{count, wrap};

/// An analysis by ranks with what stands beside it.
pub(super) struct Findings<'a> {
    about: &'a Analysed<'a>,
    found: &'a Ranks,
}

impl<'a> Findings<'a> {
    pub fn new(about: &'a Analysed<'a>, found: &'a Ranks) -> Self {
        Self { about, found }
    }

    fn factor(&self) -> Option<&'a Factor> {
        self.about.data.within.first()
    }

    fn code(&self) -> &'a str {
        self.factor().map_or("", |factor| factor.code.as_str())
    }

    fn level(&self, level: usize) -> &'a str {
        self.factor().and_then(|factor| factor.levels.get(level)).map_or("", String::as_str)
    }

    fn pair(&self, kind: ContrastKind) -> String {
        match kind {
            ContrastKind::Pairwise { level, against } | ContrastKind::EachVsFirst { level, against } => {
                format!("{} − {}", self.level(level), self.level(against))
            }
            ContrastKind::Polynomial { degree } => format!("trend of degree {degree}"),
        }
    }

    /// By level: the mean of the ranks within subjects.
    fn mean_rank(&self, level: usize) -> Option<f64> {
        let sum = self.found.result.effect.as_ref()?.rank_sums.get(level)?;
        Some(sum / self.found.result.used.len() as f64)
    }
}

impl super::Findings for Findings<'_> {
    fn used(&self) -> usize {
        self.found.result.used.len()
    }

    fn fields(&self) -> Vec<(&'static str, Json)> {
        let result = &self.found.result;
        let mut fields = vec![
            ("cells", Json::Array(self.cells_json())),
            ("effects", result.effect.iter().map(|effect| self.effect_json(effect)).collect()),
            ("contrasts", result.contrasts.iter().map(|pair| self.pair_json(pair)).collect()),
        ];
        fields.extend(self.found.checks.as_ref().and_then(|checks| self.checks_json(checks)));
        fields
    }

    fn tables(&self, width: usize) -> Vec<String> {
        let mut parts = vec![self.cells_table().render(width)];
        if !self.found.result.contrasts.is_empty() {
            parts.push(self.pairs_table().render(width));
            parts.extend(self.how().map(|text| wrap(&text, width, "")));
        }
        parts
    }

    fn sentences(&self) -> Vec<String> {
        let label = self.about.label;
        vec![match &self.found.result.effect {
            Some(effect) => self.sentence(effect),
            None => format!("Nobody has a reading of {label} at every level, so there is nothing to test."),
        }]
    }

    fn beside(&self) -> Vec<String> {
        vec![]
    }

    fn checks(&self, width: usize) -> Vec<String> {
        let Some(checks) = &self.found.checks else { return vec![] };
        let mut parts = repeated::Findings::new(self.about, &checks.design).checks(width);
        parts.extend(self.influence(checks).map(|text| wrap(&text, width, "")));
        parts
    }

    fn notes(&self) -> Vec<String> {
        let mut pairs = PairNotes::default();
        let mut notes: Vec<String> = Vec::new();
        for note in &self.found.result.notes {
            match self.pair_note(note) {
                Some((kind, text)) => pairs.add(self.pair(kind), text),
                None => notes.push(self.note(note)),
            }
        }
        if self.about.data.steps.grain().is_none() {
            notes.push(NO_STEP.to_owned());
        }
        notes.dedup();
        notes.into_iter().chain(pairs.said()).collect()
    }
}

const NO_STEP: &str = "the numbers are not whole multiples of one decimal step, as after a conversion, so those count as \
                       tied that rounding alone can have parted";

// ---- for machines ----

impl Findings<'_> {
    fn cells_json(&self) -> Vec<Json> {
        let medians = self.found.medians();
        let cell = |(level, cell): (usize, &revisant_analysis::anova::Cell)| {
            let mut fields = Map::new();
            fields.insert(self.code().to_owned(), json!(self.level(level)));
            fields.insert("n".to_owned(), json!(cell.n));
            let median = medians.get(level).copied().flatten();
            let numbers = [("mean", cell.mean), ("sd", cell.sd), ("se", cell.se), ("median", median)];
            fields.extend(numbers.map(|(name, value)| (name.to_owned(), json!(value))));
            fields.insert("mean_rank".to_owned(), json!(self.mean_rank(level)));
            fields.insert("ci".to_owned(), interval(cell.ci));
            Json::Object(fields)
        };
        self.found.cells.iter().enumerate().map(cell).collect()
    }

    /// As those of an analysis of variance, without residuals, and the influence on χ² instead of F.
    fn checks_json(&self, checks: &RankChecks) -> Option<(&'static str, Json)> {
        let (name, mut json) = repeated::Findings::new(self.about, &checks.design).checks_json()?;
        let one = |(row, effect): &(usize, Friedman)| json!({ "subject": self.subject(*row), "chi2": effect.chi2, "p": effect.p });
        let without: Vec<Json> = checks.without.iter().map(one).collect();
        let chi2 = self.found.result.effect.as_ref().and_then(|effect| effect.chi2);
        let influence = json!([{ "source": self.code(), "chi2": chi2, "without": without }]);
        json.as_object_mut()?.insert("influence".to_owned(), influence);
        Some((name, json))
    }

    fn subject(&self, row: usize) -> &str {
        self.about.data.rows.get(row).map_or("", |row| row.subject.as_str())
    }

    fn effect_json(&self, effect: &Friedman) -> Json {
        json!({
            "source": self.code(),
            "chi2": effect.chi2,
            "df": effect.df,
            "p": effect.p,
            "kendall_w": effect.kendall_w,
            "iman_davenport": effect.iman_davenport.map(|it| json!({
                "f": it.f, "df": it.df, "error_df": it.error_df, "p": it.p
            })),
        })
    }

    fn pair_json(&self, pair: &SignedRank) -> Json {
        let (kind, levels) = match pair.kind {
            ContrastKind::Pairwise { level, against } => ("pairwise", Some((level, against))),
            ContrastKind::EachVsFirst { level, against } => ("each-vs-first", Some((level, against))),
            ContrastKind::Polynomial { .. } => ("polynomial", None),
        };
        json!({
            "kind": kind,
            "factor": self.code(),
            "level": levels.map(|(level, _)| self.level(level)),
            "against": levels.map(|(_, against)| self.level(against)),
            "degree": null,
            "at": {},
            "n": pair.n,
            "nonzero": pair.nonzero,
            "positive_rank_sum": pair.positive_rank_sum,
            "exact": pair.exact,
            "estimate": pair.estimate,
            "ci": interval(pair.ci),
            "ci_confidence": pair.ci_confidence,
            "p": pair.p,
            "p_adjusted": pair.p_adjusted,
        })
    }
}

// ---- for people ----

impl Findings<'_> {
    fn sentence(&self, effect: &Friedman) -> String {
        let label = self.about.label;
        let factors = [self.code()];
        let about = sentence::Subject { measure: label, factors: &factors, confidence: self.about.analysis.confidence };
        match effect.chi2.zip(effect.p).zip(effect.kendall_w) {
            Some(((chi2, p), w)) => format!(
                "{}, Friedman's χ²({}) = {}, {}, Kendall's W = {}.",
                sentence::finding(&about, p),
                df(effect.df),
                number::fixed(chi2, 2),
                p_said(p),
                share(w, 2)
            ),
            None => format!("The readings of {label} that there are do not allow a test over {}.", self.about.over()),
        }
    }

    fn decimals(&self) -> usize {
        let sds = self.found.cells.iter().filter_map(|cell| cell.sd).filter(|sd| *sd > 0.0);
        number::decimals_for(sds.fold(f64::INFINITY, f64::min))
    }

    fn cells_table(&self) -> Table {
        let (decimals, medians) = (self.decimals(), self.found.medians());
        let columns =
            [("level", Left), ("n", Right), ("median", Right), ("mean", Right), ("SD", Right), ("mean rank", Right)];
        let mut table = Table::new(&columns);
        for (level, cell) in self.found.cells.iter().enumerate() {
            table.row([
                self.level(level).to_owned(),
                cell.n.to_string(),
                fixed_or_dash(medians.get(level).copied().flatten(), decimals),
                fixed_or_dash(cell.mean, decimals),
                fixed_or_dash(cell.sd, decimals),
                fixed_or_dash(self.mean_rank(level), 2),
            ]);
        }
        table
    }

    fn pairs_table(&self) -> Table {
        let interval = self.about.interval_name();
        let columns = [
            ("pair", Left),
            ("n", Right),
            ("estimate", Right),
            (interval.as_str(), Right),
            ("W+", Right),
            ("p", Right),
            (self.about.adjusted_name(), Right),
        ];
        let mut table = Table::new(&columns);
        let decimals = self.decimals();
        for pair in &self.found.result.contrasts {
            table.row([
                self.pair(pair.kind),
                pair.n.to_string(),
                fixed_or_dash(pair.estimate, decimals),
                self.about.interval(pair.ci, decimals),
                pair.positive_rank_sum.map_or_else(number::dash, number::plain),
                p_or_dash(pair.p),
                p_or_dash(pair.p_adjusted),
            ]);
        }
        table
    }

    /// How far the test hangs on one subject.
    fn influence(&self, checks: &RankChecks) -> Option<String> {
        let all: Vec<(&str, f64)> =
            checks.without.iter().filter_map(|(row, effect)| Some((self.subject(*row), effect.chi2?))).collect();
        let least = all.iter().min_by(|(_, one), (_, other)| one.total_cmp(other))?;
        let most = all.iter().max_by(|(_, one), (_, other)| one.total_cmp(other))?;
        Some(format!(
            "An analysis by ranks has no residuals. Without one subject χ² would lie between {} (without {}) and {} \
             (without {}).",
            number::fixed(least.1, 2),
            least.0,
            number::fixed(most.1, 2),
            most.0
        ))
    }

    /// What the columns of the pairs are, where there is something in them.
    fn how(&self) -> Option<String> {
        let exact = |exact: bool| self.found.result.contrasts.iter().any(|pair| pair.exact == Some(exact));
        let p = match (exact(true), exact(false)) {
            (true, true) => "p is exact up to 50 differences other than zero, and above by the normal distribution",
            (false, true) => "p is by the normal distribution, corrected for ties and continuity",
            (true, false) => "p is exact",
            (false, false) => return None,
        };
        Some(format!(
            "Pairs by Wilcoxon's signed ranks, over all subjects that have both: the estimate is Hodges and Lehmann's, \
             without differences of zero; W+ is the sum of the positive ranks; {p}."
        ))
    }

    fn note(&self, note: &Note) -> String {
        match note {
            Note::NoCompleteSubject => {
                "no subject has a reading at every level, so there is no test over all".to_owned()
            }
            Note::OneSubject => "only one subject is complete, so nothing tells a level from chance".to_owned(),
            Note::OffGrain => NO_STEP.to_owned(),
            Note::OnlyPairsByRanks => {
                "an analysis by ranks compares pairs of levels only; the other contrasts of the plan are not made"
                    .to_owned()
            }
            other => other.to_string(),
        }
    }

    /// A note on one pair.
    fn pair_note(&self, note: &Note) -> Option<(ContrastKind, String)> {
        match note {
            Note::NoDifference { contrast } => {
                Some((*contrast, "all differences are zero, so there is nothing to rank".to_owned()))
            }
            Note::TooFewForContrast { contrast, .. } => Some((*contrast, "nobody has both".to_owned())),
            Note::ConfidenceNotReached { contrast, differences } => {
                let few = count(*differences as u64, "difference");
                let text = format!(
                    "with {few} other than zero even the widest interval, which is given, has less \
                                    confidence than was asked for"
                );
                Some((*contrast, text))
            }
            _ => None,
        }
    }
}
