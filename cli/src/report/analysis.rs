//! The result of an analysis: for machines, and for people.
//!
//! Invariant: both forms come from one [`Analysed`], so that they cannot disagree; what was left out stands right
//! under what was found.

use revisant_analysis::anova::{CorrectedTest, Effect, RepeatedMeasures};
use revisant_analysis::contrasts::{Contrast, ContrastKind};
use revisant_analysis::{Interval, Note};
use revisant_schema::plan::{Analysis, Multiplicity, Plan};
use revisant_schema::records::codec::{Hash, hex};
use revisant_schema::records::view::Standing;
use serde_json::{Map, Value as Json, json};

use super::number::{self, df, fixed_or_dash, p_or_dash, statistic, statistic_or_dash};
use super::sentence;
use super::table::{Left, Right, Table};
use super::text::{clean_lines, count, list, wrap};
use crate::commands::InstrumentLine;
use crate::dataset::{Dataset, VISIT};
use crate::looked::Looked;

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
    pub result: RepeatedMeasures,
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

// ---- for machines ----

impl Analysed<'_> {
    /// The whole result.
    pub fn json(&self) -> Json {
        let Standing { trail, hash, moment, cut } = &self.standing;
        json!({
            "program": { "name": "revisant", "version": env!("CARGO_PKG_VERSION") },
            "study": self.study,
            "analysis": self.analysis.code,
            "method": self.analysis.method.name(),
            "measure": self.measure,
            "unit": self.unit,
            "as_of": { "trail": trail, "hash": hex(hash), "cut": cut, "moment": moment },
            "plan": self.plan.json(),
            "analysis_plan": self.analysis_plan.map(PlanUsed::json),
            "subjects": self.subjects_json(),
            "cells": self.cells_json(),
            "decomposition": self.decomposition_json(),
            "effects": self.result.effect.iter().map(|effect| self.effect_json(effect)).collect::<Vec<_>>(),
            "if_unlinked": self.result.if_unlinked.map(|it| json!({
                "f": it.f, "df": it.df, "error_df": it.error_df, "p": it.p, "variance_ratio": it.variance_ratio
            })),
            "contrasts": self.result.contrasts.iter().map(|it| self.contrast_json(it)).collect::<Vec<_>>(),
            "data_state": self.state_json(),
            "looked": self.looked.json(),
            "sentence": self.sentence(),
            "notes": self.notes(),
        })
    }

    fn subjects_json(&self) -> Json {
        let left_out = self.data.left_out();
        let left_out: Vec<Json> = left_out.iter().map(|(who, why)| json!({ "subject": who, "why": why })).collect();
        json!({
            "enrolled": self.enrolled,
            "with_any": self.data.with_any(),
            "used": self.result.used.len(),
            "left_out": left_out,
            "mixed_model_would_use": self.data.mixed_model_would_use(),
        })
    }

    fn cells_json(&self) -> Vec<Json> {
        let cells = self.result.cells.iter().zip(&self.data.factor.levels);
        cells
            .map(|(cell, level)| {
                let mut fields = Map::new();
                fields.insert(self.data.factor.code.clone(), json!(level));
                fields.insert("n".to_owned(), json!(cell.n));
                for (name, value) in [("mean", cell.mean), ("sd", cell.sd), ("se", cell.se)] {
                    fields.insert(name.to_owned(), json!(value));
                }
                fields.insert("ci".to_owned(), interval(cell.ci));
                Json::Object(fields)
            })
            .collect()
    }

    fn decomposition_json(&self) -> Vec<Json> {
        let Some(parts) = self.result.decomposition else { return vec![] };
        let lines = [
            (self.data.factor.code.as_str(), parts.effect),
            ("subject", parts.subject),
            ("residual", parts.residual),
            ("total", parts.total),
        ];
        let line = |(source, line): (&str, revisant_analysis::anova::Line)| json!({ "source": source, "ss": line.ss, "df": line.df, "ms": line.ms });
        lines.into_iter().map(line).collect()
    }

    fn effect_json(&self, effect: &Effect) -> Json {
        let test = |test: Option<CorrectedTest>| {
            test.map(|test| json!({ "df": test.df, "error_df": test.error_df, "p": test.p }))
        };
        json!({
            "source": self.data.factor.code,
            "error": "residual",
            "ss": effect.ss, "df": effect.df, "ms": effect.ms,
            "error_ss": effect.error_ss, "error_df": effect.error_df, "error_ms": effect.error_ms,
            "f": effect.f, "p": effect.p,
            "mauchly": effect.mauchly.map(|it| json!({ "w": it.w, "chi2": it.chi2, "df": it.df, "p": it.p })),
            "epsilon": effect.epsilon.map(|it| json!({
                "greenhouse_geisser": it.greenhouse_geisser, "huynh_feldt": it.huynh_feldt,
                "lecoutre": it.lecoutre, "lower_bound": it.lower_bound
            })),
            "corrected": effect.corrected.map(|it| json!({
                "greenhouse_geisser": test(it.greenhouse_geisser), "huynh_feldt": test(it.huynh_feldt),
                "lecoutre": test(it.lecoutre), "lower_bound": test(it.lower_bound)
            })),
            "partial_eta_sq": effect.partial_eta_sq,
            "generalized_eta_sq": effect.generalized_eta_sq,
            "partial_omega_sq": effect.partial_omega_sq,
        })
    }

    fn contrast_json(&self, contrast: &Contrast) -> Json {
        let (kind, level, against, degree) = match contrast.kind {
            ContrastKind::Pairwise { level, against } => ("pairwise", Some(level), Some(against), None),
            ContrastKind::EachVsFirst { level, against } => ("each-vs-first", Some(level), Some(against), None),
            ContrastKind::Polynomial { degree } => ("polynomial", None, None, Some(degree)),
        };
        json!({
            "kind": kind,
            "factor": self.data.factor.code,
            "level": level.map(|level| self.level(level)),
            "against": against.map(|level| self.level(level)),
            "degree": degree,
            "at": {},
            "n": contrast.n, "estimate": contrast.estimate, "se": contrast.se, "df": contrast.df,
            "t": contrast.t, "p": contrast.p, "p_adjusted": contrast.p_adjusted, "ci": interval(contrast.ci),
            "dz": contrast.dz, "dav": contrast.dav,
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

    fn level(&self, level: usize) -> &str {
        self.data.factor.levels.get(level).map_or("", String::as_str)
    }
}

fn interval(interval: Option<Interval>) -> Json {
    json!(interval.map(|it| [it.lower, it.upper]))
}

// ---- words for both ----

impl Analysed<'_> {
    /// The one sentence.
    pub fn sentence(&self) -> String {
        let over = if self.data.factor.code == VISIT { "visits" } else { self.data.factor.code.as_str() };
        let subject = sentence::Subject { measure: self.label, over, alpha: 1.0 - self.analysis.confidence };
        match &self.result.effect {
            Some(effect) => sentence::effect(&subject, effect),
            None => format!("Nobody has a reading of {} at every level, so there is nothing to test.", self.label),
        }
    }

    /// What a reader should know, one sentence each.
    pub fn notes(&self) -> Vec<String> {
        let mut notes: Vec<String> = self.result.notes.iter().map(|note| sentence_case(&self.note(note))).collect();
        notes.extend(self.care_notes());
        notes.extend(self.looked.sentences());
        notes
    }

    /// A note of the analysis, with the names of levels.
    fn note(&self, note: &Note) -> String {
        match note {
            Note::TooFewForContrast { contrast, subjects } => {
                let who = count(*subjects as u64, "subject");
                format!("{}: {who} with all that it needs, so it has no standard error", self.contrast(*contrast))
            }
            Note::NoSpreadInContrast { contrast } => {
                format!("{}: it is the same for all subjects, so t is not defined", self.contrast(*contrast))
            }
            Note::TrendsNeedPositions => "trends need visits, whose days they follow".to_owned(),
            other => other.to_string(),
        }
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

    fn contrast(&self, kind: ContrastKind) -> String {
        match kind {
            ContrastKind::Pairwise { level, against } | ContrastKind::EachVsFirst { level, against } => {
                format!("{} − {}", self.level(level), self.level(against))
            }
            ContrastKind::Polynomial { degree } => degree_name(degree),
        }
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

fn degree_name(degree: usize) -> String {
    match degree {
        1 => "linear trend".to_owned(),
        2 => "quadratic trend".to_owned(),
        3 => "cubic trend".to_owned(),
        degree => format!("trend of degree {degree}"),
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
        let mut parts = vec![say(self.title()), self.cells_table().render(width)];
        parts.extend(self.decomposition_table().map(|table| table.render(width)));
        parts.extend(self.corrections_table().map(|table| table.render(width)));
        parts.extend(self.sphericity().map(say));
        parts.extend(self.contrasts_table().map(|table| table.render(width)));
        parts.extend(self.pairs_use_more().map(say));
        parts.push(say(self.sentence()));
        parts.push(say(self.who()));
        parts.extend(self.linked().map(say));
        parts.push(say(self.state()));
        parts.extend(self.notes().into_iter().map(say));
        parts.push(say(CAUTION.to_owned()));
        parts.join("\n\n")
    }

    fn title(&self) -> String {
        let Standing { trail, moment, cut, .. } = &self.standing;
        let cut = cut.as_ref().map_or(String::new(), |cut| format!(", cut {cut}"));
        let over = if self.data.factor.code == VISIT { "visits" } else { self.data.factor.code.as_str() };
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

    fn spread_decimals(&self) -> usize {
        let sds = self.result.cells.iter().filter_map(|cell| cell.sd).filter(|sd| *sd > 0.0);
        number::decimals_for(sds.fold(f64::INFINITY, f64::min))
    }

    fn interval(&self, interval: Option<Interval>, decimals: usize) -> String {
        interval.map_or_else(number::dash, |it| {
            format!("{} to {}", number::fixed(it.lower, decimals), number::fixed(it.upper, decimals))
        })
    }

    fn cells_table(&self) -> Table {
        let decimals = self.spread_decimals();
        let interval = self.interval_name();
        let mut table = Table::new(&[
            ("level", Left),
            ("n", Right),
            ("mean", Right),
            ("SD", Right),
            ("SE", Right),
            (interval.as_str(), Right),
        ]);
        for (cell, level) in self.result.cells.iter().zip(&self.data.factor.levels) {
            table.row([
                level.clone(),
                cell.n.to_string(),
                fixed_or_dash(cell.mean, decimals),
                fixed_or_dash(cell.sd, decimals),
                fixed_or_dash(cell.se, decimals),
                self.interval(cell.ci, decimals),
            ]);
        }
        table
    }

    fn decomposition_table(&self) -> Option<Table> {
        let parts = self.result.decomposition?;
        let mut table = Table::new(&[
            ("source", Left),
            ("sum of squares", Right),
            ("df", Right),
            ("mean square", Right),
            ("F", Right),
            ("p", Right),
        ]);
        let effect = self.result.effect.as_ref();
        let tested = effect.map(|effect| (effect.f, effect.p));
        let lines = [
            (self.data.factor.code.as_str(), parts.effect, tested),
            ("subject", parts.subject, None),
            ("residual", parts.residual, None),
            ("total", parts.total, None),
        ];
        for (source, line, tested) in lines {
            table.row([
                source.to_owned(),
                statistic(line.ss),
                df(line.df),
                statistic_or_dash(line.ms),
                tested.map_or(String::new(), |(f, _)| statistic_or_dash(f)),
                tested.map_or(String::new(), |(_, p)| p_or_dash(p)),
            ]);
        }
        Some(table)
    }

    fn corrections_table(&self) -> Option<Table> {
        let effect = self.result.effect.as_ref().filter(|effect| effect.df > 1.0)?;
        let (epsilon, corrected) = effect.epsilon.zip(effect.corrected)?;
        let mut table =
            Table::new(&[("correction", Left), ("epsilon", Right), ("df", Right), ("error df", Right), ("p", Right)]);
        let lines = [
            ("Greenhouse–Geisser", epsilon.greenhouse_geisser, corrected.greenhouse_geisser),
            ("Huynh–Feldt", epsilon.huynh_feldt, corrected.huynh_feldt),
            ("Lecoutre", epsilon.lecoutre, corrected.lecoutre),
            ("lower bound", Some(epsilon.lower_bound), corrected.lower_bound),
        ];
        for (name, epsilon, test) in lines {
            table.row([
                name.to_owned(),
                fixed_or_dash(epsilon, 3),
                fixed_or_dash(test.map(|test| test.df), 2),
                fixed_or_dash(test.map(|test| test.error_df), 2),
                p_or_dash(test.and_then(|test| test.p)),
            ]);
        }
        Some(table)
    }

    /// Why pairs may count more subjects than the effect does.
    fn pairs_use_more(&self) -> Option<String> {
        let used = self.result.used.len();
        let more = self.result.contrasts.iter().any(|contrast| contrast.n > used);
        more.then(|| {
            "A pair uses all subjects complete on that pair; the effect and trends those complete on all.".into()
        })
    }

    fn sphericity(&self) -> Option<String> {
        let mauchly = self.result.effect.as_ref()?.mauchly?;
        let (w, chi2, degrees, p) = (mauchly.w?, mauchly.chi2?, mauchly.df?, mauchly.p?);
        Some(format!(
            "An epsilon above 1 counts as 1. Mauchly's test of sphericity: W = {}, χ²({}) = {}, {}. It is reported, and \
             does not choose which p is shown.",
            number::share(w, 3),
            df(degrees),
            number::fixed(chi2, 2),
            number::p_said(p)
        ))
    }

    fn contrasts_table(&self) -> Option<Table> {
        if self.result.contrasts.is_empty() {
            return None;
        }
        let adjusted = match self.analysis.multiplicity {
            Multiplicity::None => "p (none)",
            Multiplicity::Bonferroni => "p (Bonferroni)",
            Multiplicity::Holm => "p (Holm)",
            Multiplicity::BenjaminiHochberg => "p (B & H)",
        };
        let interval = self.interval_name();
        let mut table = Table::new(&[
            ("contrast", Left),
            ("n", Right),
            ("estimate", Right),
            (interval.as_str(), Right),
            ("t", Right),
            ("p", Right),
            (adjusted, Right),
            ("d_z", Right),
        ]);
        let decimals = self.spread_decimals();
        for contrast in &self.result.contrasts {
            table.row([
                self.contrast(contrast.kind),
                contrast.n.to_string(),
                fixed_or_dash(contrast.estimate, decimals),
                self.interval(contrast.ci, decimals),
                fixed_or_dash(contrast.t, 2),
                p_or_dash(contrast.p),
                p_or_dash(contrast.p_adjusted),
                fixed_or_dash(contrast.dz, 2),
            ]);
        }
        Some(table)
    }

    fn who(&self) -> String {
        let left_out = self.data.left_out().len();
        let used = self.result.used.len();
        let head = format!("{used} of {} used", count(self.enrolled as u64, "subject"));
        match left_out {
            0 => format!("{head}; nobody was left out."),
            _ => format!(
                "{head}; {left_out} left out: {}. A mixed model would use {}.",
                self.left_out(),
                self.data.mixed_model_would_use()
            ),
        }
    }

    /// What following the same subjects has bought.
    fn linked(&self) -> Option<String> {
        let unlinked = self.result.if_unlinked?;
        let (f, p, ratio) = (unlinked.f?, unlinked.p?, unlinked.variance_ratio?);
        Some(format!(
            "Had nobody known who was who, the same readings would have given F({}, {}) = {}, {}, over an error variance \
             {} times that of following the same subjects.",
            df(unlinked.df),
            df(unlinked.error_df),
            number::fixed(f, 2),
            number::p_said(p),
            number::fixed(ratio, if ratio < 10.0 { 2 } else { 0 })
        ))
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
