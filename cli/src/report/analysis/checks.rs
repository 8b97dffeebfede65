//! The checks of an analysis of variance: what it rests on, and on whom it hangs.
//!
//! Invariant: all of it stands in the fields for machines; the text shows the largest and says how many there are.

use revisant_analysis::anova::Term;
use revisant_analysis::checks::{Checks, Influence, Missing, Thin, Without};
use serde_json::{Map, Value as Json, json};

use super::Analysed;
use super::names::Names;
use crate::method::Repeated;
use crate::report::number::{self, decimals_for, fixed, fixed_or_dash, p_or_dash};
use crate::report::table::{Left, Right, Table};
use crate::report::text::{count, list, wrap};

/// How many subjects the text names for each effect.
const MOVERS: usize = 3;
/// How many subjects of a pattern the text names.
const NAMED: usize = 6;

/// The checks with the names that they need.
pub(super) struct Checked<'a> {
    pub about: &'a Analysed<'a>,
    pub found: &'a Checks,
    pub repeated: &'a Repeated,
    pub names: Names<'a>,
}

impl Checked<'_> {
    fn subject(&self, subject: usize) -> &str {
        let row = self.repeated.subjects.get(subject).and_then(|at| self.about.data.rows.get(*at));
        row.map_or("", |row| row.subject.as_str())
    }

    fn f(&self, term: Term) -> Option<f64> {
        self.repeated.result.effect(term)?.f
    }

    fn missing(&self) -> Option<&Missing> {
        self.found.missing.as_ref().filter(|_| !self.repeated.subjects.is_empty())
    }

    fn thin(&self) -> &[Thin] {
        if self.repeated.subjects.is_empty() { &[] } else { &self.found.thin }
    }
}

// ---- for machines ----

impl Checked<'_> {
    pub fn json(&self) -> Json {
        let residual = |it: &revisant_analysis::checks::Residual| {
            json!({
                "subject": self.subject(it.subject), "cell": self.levels(None, it.cell), "fitted": it.fitted,
                "residual": it.residual, "quantile": it.quantile
            })
        };
        let subject = |it: &revisant_analysis::checks::SubjectEffect| {
            json!({
                "subject": self.subject(it.subject), "effect": it.effect, "fitted": it.fitted, "quantile": it.quantile
            })
        };
        let influence = |it: &Influence| {
            json!({
                "source": self.names.source(it.term), "f": self.f(it.term),
                "without": it.without.iter().map(|it| self.without_json(it)).collect::<Vec<_>>()
            })
        };
        let thin = |it: &Thin| {
            json!({
                "cell": self.levels(Some(it.group), it.cell), "complete": it.complete, "available": it.available
            })
        };
        json!({
            "residuals": self.found.residuals.iter().map(residual).collect::<Vec<_>>(),
            "subjects": self.found.subjects.iter().map(subject).collect::<Vec<_>>(),
            "influence": self.found.influence.iter().map(influence).collect::<Vec<_>>(),
            "missing": self.missing().map(|missing| self.missing_json(missing)),
            "thin_cells": self.thin().iter().map(thin).collect::<Vec<_>>(),
        })
    }

    fn without_json(&self, it: &Without) -> Json {
        json!({
            "subject": self.subject(it.subject), "f": it.f, "p": it.p, "p_greenhouse_geisser": it.p_greenhouse_geisser
        })
    }

    fn levels(&self, group: Option<usize>, cell: usize) -> Json {
        let data = &self.about.data;
        let within = data.within.iter().zip(self.names.cell(cell));
        let groups = group.map_or_else(Vec::new, |group| self.names.group(group));
        let levels = within.chain(data.between.iter().zip(groups));
        Json::Object(levels.map(|(factor, level)| (factor.code.clone(), json!(level))).collect())
    }

    fn missing_json(&self, missing: &Missing) -> Json {
        let Some(factor) = self.about.data.within.get(missing.factor) else { return Json::Null };
        let patterns = missing.patterns.iter().map(|pattern| {
            let present: Map<String, Json> =
                factor.levels.iter().cloned().zip(pattern.present.iter().map(|it| json!(it))).collect();
            let subjects: Vec<&str> = pattern.subjects.iter().map(|it| self.subject(*it)).collect();
            json!({ "present": present, "subjects": subjects, "monotone": pattern.monotone })
        });
        json!({
            "factor": factor.code, "monotone": missing.monotone, "patterns": patterns.collect::<Vec<_>>()
        })
    }
}

// ---- for people ----

impl Checked<'_> {
    /// One part for each check.
    pub fn text(&self, width: usize) -> Vec<String> {
        let say = |text: String| wrap(&text, width, "");
        let mut parts = Vec::new();
        if let Some(table) = self.quantiles() {
            parts.push(format!("{}\n{}", say(QUANTILES.to_owned()), table.render(width)));
        }
        parts.extend(self.largest().map(say));
        if let Some(table) = self.movers() {
            parts.push(format!("{}\n{}", say(INFLUENCE.to_owned()), table.render(width)));
        }
        if let Some(missing) = self.missing() {
            parts.push(format!("{}\n{}", say(self.monotone(missing)), self.patterns(missing).render(width)));
        }
        parts.push(say(self.thin_cells()));
        parts
    }

    /// Residuals, and what subjects are above their groups, beside what a normal distribution would give.
    fn quantiles(&self) -> Option<Table> {
        let residuals: Vec<(f64, f64)> = self.found.residuals.iter().map(|it| (it.residual, it.quantile)).collect();
        let subjects: Vec<(f64, f64)> = self.found.subjects.iter().map(|it| (it.effect, it.quantile)).collect();
        let mut table = Table::new(&[
            ("check", Left),
            ("n", Right),
            ("SD", Right),
            ("least", Right),
            ("quarter", Right),
            ("median", Right),
            ("3 quarters", Right),
            ("most", Right),
            ("r normal", Right),
        ]);
        for (name, pairs) in [("residuals", residuals), ("subjects", subjects)] {
            if let Some(row) = summary(pairs) {
                table.row([name.to_owned()].into_iter().chain(row));
            }
        }
        (!table.is_empty()).then_some(table)
    }

    /// The reading that the model fits worst.
    fn largest(&self) -> Option<String> {
        let largest = self.found.residuals.iter().max_by(|a, b| a.residual.abs().total_cmp(&b.residual.abs()))?;
        let decimals = decimals_for(largest.residual.abs());
        Some(format!(
            "The largest residual is {} {}: subject {} at {}, where {} is fitted.",
            fixed(largest.residual, decimals),
            self.about.unit,
            self.subject(largest.subject),
            self.names.cell(largest.cell).join(" "),
            fixed(largest.fitted, decimals)
        ))
    }

    fn movers(&self) -> Option<Table> {
        let mut table = Table::new(&[
            ("effect", Left),
            ("F of all", Right),
            ("without", Left),
            ("F", Right),
            ("p", Right),
            ("p (G–G)", Right),
        ]);
        for influence in &self.found.influence {
            let all = self.f(influence.term);
            for (at, it) in largest_movers(all, &influence.without).into_iter().enumerate() {
                let first = at == 0;
                table.row([
                    if first { self.names.source(influence.term) } else { String::new() },
                    if first { fixed_or_dash(all, 2) } else { String::new() },
                    self.subject(it.subject).to_owned(),
                    fixed_or_dash(it.f, 2),
                    p_or_dash(it.p),
                    p_or_dash(it.p_greenhouse_geisser),
                ]);
            }
        }
        (!table.is_empty()).then_some(table)
    }

    fn monotone(&self, missing: &Missing) -> String {
        let code = self.about.data.within.get(missing.factor).map_or("", |factor| factor.code.as_str());
        let nothing = missing.patterns.iter().all(|pattern| pattern.present.iter().all(|there| *there));
        let how = match (nothing, missing.monotone) {
            (true, _) => "nothing is missing",
            (_, true) => "monotone: nobody comes back after a gap",
            (_, false) => "not monotone: somebody comes back after a gap",
        };
        format!("Patterns of missing levels of {code}, {how} (● all cells there, · not):")
    }

    fn patterns(&self, missing: &Missing) -> Table {
        let levels = self.about.data.within.get(missing.factor).map_or(&[][..], |factor| &factor.levels);
        let order = list(levels);
        let mut table = Table::new(&[(order.as_str(), Left), ("subjects", Right), ("who", Left)]);
        for pattern in &missing.patterns {
            let marks: String = pattern.present.iter().map(|there| if *there { "● " } else { "· " }).collect();
            let whole = pattern.present.iter().all(|there| *there);
            let mut who: Vec<&str> = pattern.subjects.iter().take(NAMED).map(|it| self.subject(*it)).collect();
            if pattern.subjects.len() > NAMED {
                who.push("…");
            }
            let who = if whole { String::new() } else { who.join(", ") };
            table.row([marks.trim_end().to_owned(), pattern.subjects.len().to_string(), who]);
        }
        table
    }

    fn thin_cells(&self) -> String {
        let thin = self.thin();
        if thin.is_empty() {
            return "No cell has fewer than two complete subjects.".to_owned();
        }
        let name = |it: &Thin| {
            let levels: Vec<&str> = self.names.group(it.group).into_iter().chain(self.names.cell(it.cell)).collect();
            format!("{} ({})", levels.join(" "), it.complete)
        };
        let mut names: Vec<String> = thin.iter().take(NAMED).map(name).collect();
        if thin.len() > NAMED {
            names.push("more".to_owned());
        }
        format!("{} with fewer than two complete subjects: {}.", count(thin.len() as u64, "cell"), list(&names))
    }
}

const QUANTILES: &str = "What the model leaves over, and what subjects are above their groups; r is the correlation with \
                         the quantiles of a normal distribution, 1 where they lie on a line:";
const INFLUENCE: &str = "The effects without one subject, for those without whom F changes most:";

/// Count, SD, five points of the distribution, and the correlation with the normal quantiles.
fn summary(mut pairs: Vec<(f64, f64)>) -> Option<[String; 8]> {
    pairs.sort_by(|a, b| a.0.total_cmp(&b.0));
    let n = pairs.len();
    let point = |share: f64| pairs.get(((n.checked_sub(1)?) as f64 * share).round() as usize).map(|pair| pair.0);
    let (least, most) = (point(0.0)?, point(1.0)?);
    let mean = pairs.iter().map(|pair| pair.0).sum::<f64>() / n as f64;
    let squares: f64 = pairs.iter().map(|pair| (pair.0 - mean).powi(2)).sum();
    let normal: f64 = pairs.iter().map(|pair| pair.1.powi(2)).sum();
    let both: f64 = pairs.iter().map(|pair| (pair.0 - mean) * pair.1).sum();
    let sd = (n > 1).then(|| (squares / (n as f64 - 1.0)).sqrt());
    let r = Some(both / (squares * normal).sqrt()).filter(|r| r.is_finite());
    let decimals = decimals_for(sd.unwrap_or(0.0));
    let at = |share: f64| fixed_or_dash(point(share), decimals);
    Some([
        n.to_string(),
        fixed_or_dash(sd, decimals),
        fixed(least, decimals),
        at(0.25),
        at(0.5),
        at(0.75),
        fixed(most, decimals),
        r.map_or_else(number::dash, |r| number::share(r, 3)),
    ])
}

/// Those without whom F differs most, the largest first; one whose F is not defined counts as the largest.
fn largest_movers(all: Option<f64>, without: &[Without]) -> Vec<&Without> {
    let Some(all) = all else { return vec![] };
    let moved = |it: &Without| it.f.map_or(f64::INFINITY, |f| (f - all).abs());
    let mut order: Vec<&Without> = without.iter().collect();
    order.sort_by(|a, b| moved(b).total_cmp(&moved(a)).then(a.subject.cmp(&b.subject)));
    order.truncate(MOVERS);
    order
}

#[cfg(test)]
mod tests {
    use super::*;

    fn without(subject: usize, f: Option<f64>) -> Without {
        Without { subject, f, p: None, p_greenhouse_geisser: None }
    }

    #[test]
    fn the_largest_movers_come_first() {
        let all = [without(0, Some(4.9)), without(1, Some(9.0)), without(2, None), without(3, Some(3.0))];
        let order: Vec<usize> = largest_movers(Some(5.0), &all).iter().map(|it| it.subject).collect();
        assert_eq!(order, [2, 1, 3]);
        assert!(largest_movers(None, &all).is_empty());
    }

    #[test]
    fn values_on_a_line_with_the_normal_ones_have_a_correlation_of_one() {
        let pairs = [-1.0, -0.5, 0.0, 0.5, 1.0].map(|z| (2.0 * z, z)).to_vec();
        assert_eq!(summary(pairs).unwrap()[7], "1.000");
        assert_eq!(summary(vec![(0.0, 0.0); 3]).unwrap()[7], "–");
        assert_eq!(summary(vec![]), None);
    }
}
