//! How often an analysis has been looked at, and what that does to its error rate.
//!
//! Invariants: a look is counted by the state of the data that it saw, so that running the same analysis again on the
//! same readings is one look; what is said about error rates is read from a published table and never interpolated.

use revisant_schema::plan::{self, Analysis};
use revisant_schema::records::{ActKind, ActNumber, Records, TrailRow, View};
use serde_json::{Value as Json, json};

use crate::error::Failure;

/// How often one analysis was run before, and now.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Looked {
    /// The last act that changed the data, as this run sees them.
    pub stood_at: ActNumber,
    /// States of the data looked at, this one included.
    pub times: usize,
    /// Runs, this one included.
    pub runs: usize,
    /// Whether the analysis stood in the plan, as it is, before any result was seen.
    pub planned: bool,
    /// Whether the analysis tests at the 5 % level, for which the table holds.
    pub five_percent: bool,
}

/// By the number of equally spaced looks at accruing normal data, the chance to find at the 5 % level at least once a
/// difference that is not there, in per cent (Armitage, McPherson & Rowe 1969, Journal of the Royal Statistical
/// Society A 132:235, table 2).
const REPEATED: &[(usize, f64)] = &[(1, 5.0), (2, 8.3), (3, 10.7), (4, 12.6), (5, 14.2), (10, 19.3), (20, 24.8)];

impl Looked {
    /// As it stands when an analysis is about to be run on a view.
    pub fn before(records: &Records, view: &View<'_>, analysis: &Analysis) -> Result<Self, Failure> {
        let stood_at = last_change(records, view.upto())?;
        let now = records.view()?;
        let key = format!("\"analysis\":{}", json!(analysis.code));
        let earlier = now.acts_on(ActKind::Analyse, &key)?;
        let mut states = vec![stood_at];
        for (number, _, _) in &earlier {
            states.extend(records.trail(*number, *number)?.iter().filter_map(stood));
        }
        states.sort_unstable();
        states.dedup();
        Ok(Self {
            stood_at,
            times: states.len(),
            runs: earlier.len() + 1,
            planned: planned(&now, analysis)?,
            five_percent: (analysis.confidence - 0.95).abs() < 1e-9,
        })
    }

    /// For machines.
    pub fn json(&self) -> Json {
        json!({
            "times": self.times, "runs": self.runs, "planned_before_results": self.planned,
            "error_rate": self.error_rate().map(|(looks, percent)| json!({ "looks": looks, "rate": percent / 100.0 }))
        })
    }

    /// From the second look on: the table's entry for as many looks or the nearest fewer.
    fn error_rate(&self) -> Option<(usize, f64)> {
        let fits = REPEATED.iter().filter(|(looks, _)| *looks <= self.times && self.times > 1 && self.five_percent);
        fits.copied().next_back()
    }

    /// For people.
    pub fn sentences(&self) -> Vec<String> {
        let planned = match self.planned {
            true => "The analysis stood in the plan before any result was seen.",
            false => "The analysis came into the plan, or was changed, after a result had been seen.",
        };
        let mut sentences = vec![planned.to_owned()];
        if self.times > 1 {
            let rate = self.error_rate().map_or(String::new(), |(looks, percent)| {
                format!(
                    " Testing at the 5 % level each time finds a difference that is not there in about {percent} % of \
                     studies at {looks} equally spaced looks (Armitage, McPherson & Rowe 1969)."
                )
            });
            sentences.push(format!(
                "This analysis has been looked at {} times as the data grew; no p value here allows for that.{rate}",
                self.times
            ));
        }
        sentences
    }
}

fn stood(row: &TrailRow) -> Option<ActNumber> {
    let objects: Json = serde_json::from_str(&row.objects).ok()?;
    objects["stood_at"].as_i64()
}

/// Acts that leave the data as they are.
fn leaves_data(row: &TrailRow) -> bool {
    [ActKind::Analyse, ActKind::Cut, ActKind::Start, ActKind::Stop].iter().any(|kind| kind.code() == row.act)
}

/// The last act up to a number that may have changed the data.
fn last_change(records: &Records, upto: ActNumber) -> Result<ActNumber, Failure> {
    const STEP: ActNumber = 64;
    let mut last = upto;
    while last > 0 {
        let rows = records.trail((last - STEP + 1).max(1), last)?;
        if let Some(row) = rows.iter().rev().find(|row| !leaves_data(row)) {
            return Ok(row.number);
        }
        last -= STEP;
    }
    Ok(0)
}

/// Whether the analysis stood, as it is, in the plan that was in force when the first result was seen.
fn planned(now: &View<'_>, analysis: &Analysis) -> Result<bool, Failure> {
    let Some((first, _, _)) = now.acts_on(ActKind::Analyse, "")?.into_iter().next() else { return Ok(true) };
    let mut version = 1;
    let mut same = false;
    while let Some(found) = now.plan_version(version)?.filter(|found| found.act < first) {
        same = plan::parse(&found.files)
            .is_ok_and(|(plan, _)| plan.analysis(&analysis.code).is_some_and(|it| alike(it, analysis)));
        version += 1;
    }
    Ok(same)
}

/// Two analyses are alike when everything that they say is.
fn alike(one: &Analysis, other: &Analysis) -> bool {
    format!("{one:?}") == format!("{other:?}")
}

#[cfg(test)]
mod tests {
    use super::*;

    fn looked(times: usize) -> Looked {
        Looked { stood_at: 1, times, runs: times, planned: true, five_percent: true }
    }

    #[test]
    fn the_table_is_never_interpolated() {
        assert_eq!(looked(1).error_rate(), None);
        assert_eq!(looked(2).error_rate(), Some((2, 8.3)));
        assert_eq!(looked(7).error_rate(), Some((5, 14.2)));
        assert_eq!(looked(300).error_rate(), Some((20, 24.8)));
        assert_eq!(Looked { five_percent: false, ..looked(3) }.error_rate(), None);
    }

    #[test]
    fn the_first_look_is_not_called_one_of_many() {
        assert_eq!(looked(1).sentences().len(), 1);
        assert!(looked(3).sentences()[1].contains("about 10.7 % of studies at 3 equally spaced looks"));
    }
}
