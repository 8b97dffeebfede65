//! What the parts of an analysis of variance are called.
//!
//! Invariant: factors and levels have the codes of the plan; between factors come first, each kind in the plan's order.

use revisant_analysis::Note;
use revisant_analysis::anova::{About, FactorSet, Factorial, Remark, Term};
use revisant_analysis::contrasts::{Compared, Comparison, SimpleEffect};
use revisant_analysis::design::{At, Design, FactorId};

use super::super::text::{count, list};
use crate::dataset::{Dataset, Factor};

/// The names of a design.
#[derive(Clone, Copy)]
pub(super) struct Names<'a> {
    data: &'a Dataset,
    design: &'a Design,
}

impl<'a> Names<'a> {
    pub fn new(data: &'a Dataset, design: &'a Design) -> Self {
        Self { data, design }
    }

    fn factor(self, factor: FactorId) -> Option<&'a Factor> {
        match factor {
            FactorId::Between(at) => self.data.between.get(at),
            FactorId::Within(at) => self.data.within.get(at),
        }
    }

    pub fn code(self, factor: FactorId) -> &'a str {
        self.factor(factor).map_or("", |factor| factor.code.as_str())
    }

    pub fn level(self, factor: FactorId, level: usize) -> &'a str {
        self.factor(factor).and_then(|factor| factor.levels.get(level)).map_or("", String::as_str)
    }

    pub fn codes(self, term: Term) -> Vec<&'a str> {
        term.factors().map(|factor| self.code(factor)).collect()
    }

    /// `arm:visit`
    pub fn source(self, term: Term) -> String {
        self.codes(term).join(":")
    }

    /// `subject`, `visit:subject`; of one factor alone `residual`.
    pub fn error(self, within: FactorSet) -> String {
        if self.data.only().is_some() && !within.is_empty() {
            return "residual".to_owned();
        }
        let codes = within.iter().map(|factor| self.code(FactorId::Within(factor)));
        codes.chain(["subject"]).collect::<Vec<_>>().join(":")
    }

    /// Which factor a comparison is about.
    pub fn compared(self, compared: Compared) -> FactorId {
        match compared {
            Compared::Pairwise { factor, .. }
            | Compared::EachVsFirst { factor, .. }
            | Compared::Polynomial { factor, .. } => FactorId::Within(factor),
            Compared::Effect { factor, .. } => FactorId::Between(factor),
        }
    }

    /// `week-4 − baseline`, `linear trend`.
    pub fn contrast(self, compared: Compared) -> String {
        let factor = self.compared(compared);
        match compared {
            Compared::Pairwise { level, against, .. }
            | Compared::EachVsFirst { level, against, .. }
            | Compared::Effect { level, against, .. } => {
                format!("{} − {}", self.level(factor, level), self.level(factor, against))
            }
            Compared::Polynomial { degree, .. } => degree_name(degree),
        }
    }

    /// `arm A`
    pub fn at(self, at: &[At]) -> String {
        let one = |at: &At| format!("{} {}", self.code(at.factor), self.level(at.factor, at.level));
        list(&at.iter().map(one).collect::<Vec<_>>())
    }

    /// The levels of a group.
    pub fn group(self, group: usize) -> Vec<&'a str> {
        let levels = self.design.group_levels(group).into_iter().enumerate();
        levels.map(|(factor, level)| self.level(FactorId::Between(factor), level)).collect()
    }

    /// The levels of a cell.
    pub fn cell(self, cell: usize) -> Vec<&'a str> {
        let levels = self.design.cell_levels(cell).into_iter().enumerate();
        levels.map(|(factor, level)| self.level(FactorId::Within(factor), level)).collect()
    }

    /// A remark in words, with what it is about.
    pub fn remark(self, remark: &Remark, result: &Factorial) -> String {
        let text = self.note(remark.note, result);
        match remark.about {
            About::Design => text,
            About::Term(_) if self.data.only().is_some() => text,
            About::Term(term) => format!("effect of {}: {text}", self.source(term)),
            About::Contrast(index) => match result.contrasts.get(index) {
                Some(found) => format!("{}: {text}", self.whole_contrast(found)),
                None => text,
            },
            About::Simple(index) => match result.simple.get(index) {
                Some(found) => format!("{}: {text}", self.simple(found)),
                None => text,
            },
        }
    }

    fn whole_contrast(self, found: &Comparison) -> String {
        let contrast = self.contrast(found.compared);
        let trend = matches!(found.compared, Compared::Polynomial { .. }) && self.data.only().is_none();
        let over = if trend { format!(" over {}", self.code(self.compared(found.compared))) } else { String::new() };
        match found.at.is_empty() {
            true => format!("{contrast}{over}"),
            false => format!("{contrast}{over} at {}", self.at(&found.at)),
        }
    }

    /// `visit at arm A`
    pub fn simple(self, found: &SimpleEffect) -> String {
        format!("{} at {}", self.code(found.factor), self.at(&found.at))
    }

    fn note(self, note: Note, result: &Factorial) -> String {
        match note {
            Note::TooFewForComparison { subjects } => {
                let who = count(subjects as u64, "subject");
                format!("{who} with all that it needs, so it has no standard error")
            }
            Note::NoSpread if self.data.between.is_empty() => {
                "it is the same for all subjects, so t is not defined".to_owned()
            }
            Note::TooFewErrorDf { contrasts, .. } if self.data.only().is_some() => {
                Note::TooFewSubjectsForMauchly { subjects: result.used.len(), levels: contrasts + 1 }.to_string()
            }
            Note::EmptyLevel { factor, level } => {
                let factor = FactorId::Between(factor);
                let (code, level) = (self.code(factor), self.level(factor, level));
                format!("nobody of {code} {level} is complete, so it is not compared")
            }
            Note::EmptyGroup { group } => {
                format!("nobody of {} is complete, so effects are not defined", self.group(group).join(" "))
            }
            Note::GroupOfOne { group } => {
                format!("of {} only one subject is complete", self.group(group).join(" "))
            }
            Note::TrendsNeedPositions => "trends need visits, whose days they follow".to_owned(),
            other => other.to_string(),
        }
    }
}

fn degree_name(degree: usize) -> String {
    match degree {
        1 => "linear trend".to_owned(),
        2 => "quadratic trend".to_owned(),
        3 => "cubic trend".to_owned(),
        degree => format!("trend of degree {degree}"),
    }
}
