//! The words and fields of an analysis of variance.
//!
//! Invariant: one table a stratum, one sentence an effect, in the order of the analysis; the p that is said is that of
//! the Greenhouse-Geisser correction, where there is one.

use revisant_analysis::anova::{Cell, Corrected, CorrectedTest, Effect, Epsilon, Line, Mauchly, Term, TermEffect};
use revisant_analysis::contrasts::{Compared, Comparison, SimpleEffect};
use revisant_analysis::design::FactorId;
use revisant_schema::plan::{ContrastKind, Sums};
use serde_json::{Map, Value as Json, json};

use super::names::Names;
use super::{Analysed, checks, interval};
use crate::dataset::Factor;
use crate::method::Repeated;
use crate::report::number::{self, df, fixed_or_dash, p_or_dash, statistic, statistic_or_dash};
use crate::report::sentence;
use crate::report::table::{Left, Right, Table};
use crate::report::text::wrap;

/// An analysis of variance with what stands beside it.
pub(super) struct Findings<'a> {
    about: &'a Analysed<'a>,
    found: &'a Repeated,
    names: Names<'a>,
}

impl<'a> Findings<'a> {
    pub fn new(about: &'a Analysed<'a>, found: &'a Repeated) -> Self {
        Self { about, found, names: Names::new(&about.data, &found.design) }
    }

    /// Every effect; of one factor with one level the one that cannot be tested.
    fn effects(&self) -> Vec<TermEffect> {
        let result = &self.found.result;
        let effects: Vec<TermEffect> = result.effects().copied().collect();
        if effects.is_empty() && result.total.is_some() && self.about.data.only().is_some() {
            let term = Term::main(FactorId::Within(0));
            return vec![TermEffect { term, effect: untestable() }];
        }
        effects
    }

    fn only(&self) -> Option<&'a Factor> {
        self.about.data.only()
    }
}

/// The effect of a factor with one level.
fn untestable() -> Effect {
    Effect {
        ss: 0.0,
        df: 0.0,
        ms: None,
        error_ss: 0.0,
        error_df: 0.0,
        error_ms: None,
        f: None,
        p: None,
        mauchly: Some(Mauchly::default()),
        epsilon: None,
        corrected: None,
        partial_eta_sq: None,
        partial_eta_sq_ci: None,
        generalized_eta_sq: None,
        partial_omega_sq: None,
    }
}

impl super::Findings for Findings<'_> {
    fn used(&self) -> usize {
        self.found.result.used.len()
    }

    fn fields(&self) -> Vec<(&'static str, Json)> {
        let result = &self.found.result;
        let effects = self.effects();
        let effects: Vec<Json> = effects.iter().map(|it| self.effect_json(it.term, &it.effect)).collect();
        let unlinked = result.if_unlinked.map(|it| {
            json!({ "f": it.f, "df": it.df, "error_df": it.error_df, "p": it.p, "variance_ratio": it.variance_ratio })
        });
        let mut fields = vec![
            ("cells", Json::Array(self.cells_json())),
            ("decomposition", Json::Array(self.decomposition_json())),
            ("effects", Json::Array(effects)),
            ("if_unlinked", json!(unlinked)),
            ("contrasts", result.contrasts.iter().map(|it| self.contrast_json(it)).collect()),
        ];
        if self.only().is_none() {
            fields.push(("simple_effects", result.simple.iter().map(|it| self.simple_json(it)).collect()));
            fields.push(("sums", json!(self.sums())));
        }
        fields.extend(self.checks_json());
        fields
    }

    fn tables(&self, width: usize) -> Vec<String> {
        let mut parts = vec![self.cells_table().render(width)];
        parts.extend(self.strata_tables().iter().map(|table| table.render(width)));
        parts.extend(self.corrections_table().map(|table| table.render(width)));
        parts.extend(self.sphericity().map(|text| wrap(&text, width, "")));
        parts.extend(self.simple_table().map(|table| table.render(width)));
        parts.extend(self.contrast_tables(width));
        parts.extend(self.pairs_use_more().map(|text| wrap(&text, width, "")));
        parts
    }

    fn sentences(&self) -> Vec<String> {
        let effects = self.effects();
        if effects.is_empty() {
            let label = self.about.label;
            return vec![match self.found.result.total {
                Some(_) => format!("No factor has two levels with complete readings of {label} to compare."),
                None => format!("Nobody has a reading of {label} at every level, so there is nothing to test."),
            }];
        }
        effects.iter().map(|it| self.sentence(it)).collect()
    }

    fn beside(&self) -> Vec<String> {
        self.linked().into_iter().collect()
    }

    fn checks(&self, width: usize) -> Vec<String> {
        self.found.checks.as_ref().map_or_else(Vec::new, |found| self.checks_of(found).text(width))
    }

    fn notes(&self) -> Vec<String> {
        let result = &self.found.result;
        let mut notes: Vec<String> = Vec::new();
        for note in result.remarks.iter().map(|remark| self.names.remark(remark, result)) {
            if !notes.contains(&note) {
                notes.push(note);
            }
        }
        if self.about.analysis.contrasts.contains(&ContrastKind::Simple) && result.simple.is_empty() {
            notes.push("simple effects need a second factor of more than one level, and complete readings".to_owned());
        }
        if !self.about.data.between.is_empty() {
            notes.push(match self.about.analysis.sums {
                Sums::Type3 => "sums of squares are of type III: of the unweighted means of the groups".to_owned(),
                Sums::Type2 => {
                    "sums of squares are of type II: each effect beside all that do not contain it".to_owned()
                }
            });
        }
        notes
    }
}

// ---- for machines ----

impl Findings<'_> {
    fn sums(&self) -> &'static str {
        match self.about.analysis.sums {
            Sums::Type3 => "type-3",
            Sums::Type2 => "type-2",
        }
    }

    /// Every group and cell, with its levels: those within subjects first.
    fn cells(&self) -> impl Iterator<Item = (Vec<(&str, &str)>, Cell)> {
        let data = &self.about.data;
        self.found.result.cells.iter().enumerate().flat_map(move |(group, cells)| {
            cells.iter().enumerate().map(move |(at, cell)| {
                let within = data.within.iter().map(|it| it.code.as_str()).zip(self.names.cell(at));
                let between = data.between.iter().map(|it| it.code.as_str()).zip(self.names.group(group));
                (within.chain(between).collect(), *cell)
            })
        })
    }

    fn cells_json(&self) -> Vec<Json> {
        let one = |(levels, cell): (Vec<(&str, &str)>, Cell)| {
            let mut fields: Map<String, Json> =
                levels.into_iter().map(|(code, level)| (code.to_owned(), json!(level))).collect();
            fields.insert("n".to_owned(), json!(cell.n));
            for (name, value) in [("mean", cell.mean), ("sd", cell.sd), ("se", cell.se)] {
                fields.insert(name.to_owned(), json!(value));
            }
            fields.insert("ci".to_owned(), interval(cell.ci));
            Json::Object(fields)
        };
        self.cells().map(one).collect()
    }

    /// The lines of the decomposition: of one factor the factor first, then `subject`; else by strata.
    fn lines(&self) -> Vec<(String, Line)> {
        let result = &self.found.result;
        let Some(total) = result.total else { return vec![] };
        let mut lines = Vec::new();
        match (self.only(), result.strata.as_slice()) {
            (Some(factor), [subject, rest @ ..]) => {
                let none = Line { ss: 0.0, df: 0.0, ms: None };
                let effect = rest.first().and_then(|stratum| stratum.effects.first());
                let effect = effect.map_or(none, |it| line_of(&it.effect));
                lines.push((factor.code.clone(), effect));
                lines.push(("subject".to_owned(), subject.error));
                lines.push(("residual".to_owned(), rest.first().map_or(none, |stratum| stratum.error)));
            }
            (_, strata) => {
                for stratum in strata {
                    let effects = stratum.effects.iter().map(|it| (self.names.source(it.term), line_of(&it.effect)));
                    lines.extend(effects);
                    lines.push((self.names.error(stratum.within), stratum.error));
                }
            }
        }
        lines.push(("total".to_owned(), total));
        lines
    }

    fn decomposition_json(&self) -> Vec<Json> {
        let line =
            |(source, line): (String, Line)| json!({ "source": source, "ss": line.ss, "df": line.df, "ms": line.ms });
        self.lines().into_iter().map(line).collect()
    }

    fn effect_json(&self, term: Term, effect: &Effect) -> Json {
        let mut fields = Map::new();
        fields.insert("source".to_owned(), json!(self.names.source(term)));
        fields.insert("error".to_owned(), json!(self.names.error(term.within)));
        fields.extend(test_json(effect));
        Json::Object(fields)
    }

    fn contrast_json(&self, found: &Comparison) -> Json {
        let factor = self.names.compared(found.compared);
        let (kind, levels, degree) = match found.compared {
            Compared::Pairwise { level, against, .. } => ("pairwise", Some((level, against)), None),
            Compared::EachVsFirst { level, against, .. } => ("each-vs-first", Some((level, against)), None),
            Compared::Polynomial { degree, .. } => ("polynomial", None, Some(degree)),
            Compared::Effect { level, against, .. } => ("effect", Some((level, against)), None),
        };
        json!({
            "kind": kind,
            "factor": self.names.code(factor),
            "level": levels.map(|(level, _)| self.names.level(factor, level)),
            "against": levels.map(|(_, against)| self.names.level(factor, against)),
            "degree": degree,
            "at": self.at_json(&found.at),
            "n": found.n, "estimate": found.estimate, "se": found.se, "df": found.df,
            "t": found.t, "p": found.p, "p_adjusted": found.p_adjusted, "ci": interval(found.ci),
            "ci_simultaneous": interval(found.simultaneous),
            "dz": found.dz, "dav": found.dav,
        })
    }

    fn at_json(&self, at: &[revisant_analysis::design::At]) -> Json {
        let one = |at: &revisant_analysis::design::At| {
            (self.names.code(at.factor).to_owned(), json!(self.names.level(at.factor, at.level)))
        };
        Json::Object(at.iter().map(one).collect())
    }

    fn simple_json(&self, found: &SimpleEffect) -> Json {
        let mut fields = Map::new();
        fields.insert("source".to_owned(), json!(self.names.code(found.factor)));
        fields.insert("at".to_owned(), self.at_json(&found.at));
        fields.insert("n".to_owned(), json!(found.n));
        fields.extend(test_json(&found.effect));
        Json::Object(fields)
    }
}

fn line_of(effect: &Effect) -> Line {
    Line { ss: effect.ss, df: effect.df, ms: effect.ms }
}

/// The fields of a test.
fn test_json(effect: &Effect) -> Map<String, Json> {
    let test =
        |test: Option<CorrectedTest>| test.map(|test| json!({ "df": test.df, "error_df": test.error_df, "p": test.p }));
    let fields = json!({
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
        "partial_eta_sq_ci": interval(effect.partial_eta_sq_ci),
        "generalized_eta_sq": effect.generalized_eta_sq,
        "partial_omega_sq": effect.partial_omega_sq,
    });
    match fields {
        Json::Object(fields) => fields,
        _ => Map::new(),
    }
}

// ---- for people ----

impl Findings<'_> {
    fn sentence(&self, it: &TermEffect) -> String {
        let factors = self.names.codes(it.term);
        let confidence = self.about.analysis.confidence;
        sentence::effect(&sentence::Subject { measure: self.about.label, factors: &factors, confidence }, &it.effect)
    }

    fn decimals(&self) -> usize {
        let sds = self.found.result.cells.iter().flatten().filter_map(|cell| cell.sd).filter(|sd| *sd > 0.0);
        number::decimals_for(sds.fold(f64::INFINITY, f64::min))
    }

    fn cells_table(&self) -> Table {
        let decimals = self.decimals();
        let interval = self.about.interval_name();
        let data = &self.about.data;
        let mut columns: Vec<(&str, _)> = match self.only() {
            Some(_) => vec![("level", Left)],
            None => data.between.iter().chain(&data.within).map(|factor| (factor.code.as_str(), Left)).collect(),
        };
        let numbers = [("n", Right), ("mean", Right), ("SD", Right), ("SE", Right), (interval.as_str(), Right)];
        columns.extend(numbers);
        let mut table = Table::new(&columns);
        for (mut levels, cell) in self.cells() {
            levels.rotate_left(data.within.len());
            let levels = levels.into_iter().map(|(_, level)| level.to_owned());
            table.row(levels.chain([
                cell.n.to_string(),
                fixed_or_dash(cell.mean, decimals),
                fixed_or_dash(cell.sd, decimals),
                fixed_or_dash(cell.se, decimals),
                self.about.interval(cell.ci, decimals),
            ]));
        }
        table
    }

    /// One table a stratum; of one factor alone one for all.
    fn strata_tables(&self) -> Vec<Table> {
        let result = &self.found.result;
        if result.total.is_none() {
            return vec![];
        }
        if self.only().is_some() {
            let mut table = anova_table("source");
            let effects = self.effects();
            let tested = effects.first().map(|it| (it.effect.f, it.effect.p));
            for (at, (source, line)) in self.lines().into_iter().enumerate() {
                table.row(anova_row(&source, line, tested.filter(|_| at == 0)));
            }
            return vec![table];
        }
        let last = result.strata.len().saturating_sub(1);
        let strata = result.strata.iter().enumerate().map(|(at, stratum)| {
            let over: Vec<&str> = stratum.within.iter().map(|it| self.names.code(FactorId::Within(it))).collect();
            let name =
                if over.is_empty() { "between subjects".to_owned() } else { format!("within: {}", over.join(" × ")) };
            let mut table = anova_table(&name);
            for it in &stratum.effects {
                let tested = Some((it.effect.f, it.effect.p));
                table.row(anova_row(&self.names.source(it.term), line_of(&it.effect), tested));
            }
            table.row(anova_row(&self.names.error(stratum.within), stratum.error, None));
            if let Some(total) = result.total.filter(|_| at == last) {
                table.row(anova_row("total", total, None));
            }
            table
        });
        strata.collect()
    }

    fn corrections_table(&self) -> Option<Table> {
        let effects = self.effects();
        let corrected: Vec<(&TermEffect, Epsilon, Corrected)> = effects
            .iter()
            .filter(|it| it.effect.epsilon.is_some_and(|epsilon| epsilon.lower_bound < 1.0))
            .filter_map(|it| Some((it, it.effect.epsilon?, it.effect.corrected?)))
            .collect();
        match (self.only(), corrected.as_slice()) {
            (_, []) => None,
            (Some(_), [(_, epsilon, corrected), ..]) => Some(corrections_of_one(*epsilon, *corrected)),
            (_, all) => Some(self.corrections_of_several(all)),
        }
    }

    fn corrections_of_several(&self, all: &[(&TermEffect, Epsilon, Corrected)]) -> Table {
        let mut table = Table::new(&[
            ("effect", Left),
            ("ε G–G", Right),
            ("p", Right),
            ("ε H–F", Right),
            ("p", Right),
            ("ε Lec.", Right),
            ("p", Right),
            ("ε least", Right),
            ("p", Right),
        ]);
        for (it, epsilon, corrected) in all {
            let mut row = vec![self.names.source(it.term)];
            for (_, epsilon, test) in by_correction(*epsilon, *corrected) {
                row.push(fixed_or_dash(epsilon, 3));
                row.push(p_or_dash(test.and_then(|test| test.p)));
            }
            table.row(row);
        }
        table
    }

    fn sphericity(&self) -> Option<String> {
        let effects = self.effects();
        let mut tests = Vec::new();
        for it in effects.iter().filter(|it| it.term.between.is_empty()) {
            let Some(words) = it.effect.mauchly.and_then(mauchly) else { continue };
            tests.push(match self.only() {
                Some(_) => words,
                None => format!("{}: {words}", self.names.source(it.term)),
            });
        }
        let several = match self.only() {
            Some(_) => "",
            None => " G–G: Greenhouse–Geisser; H–F: Huynh–Feldt; Lec.: Lecoutre; least: lower bound.",
        };
        (!tests.is_empty()).then(|| {
            let tests = tests.join("; ");
            format!(
                "An epsilon above 1 counts as 1.{several} Mauchly's test of sphericity: {tests}. It is reported, and does \
                 not choose which p is shown."
            )
        })
    }

    fn simple_table(&self) -> Option<Table> {
        let simple = &self.found.result.simple;
        let mut table = Table::new(&[
            ("simple effect", Left),
            ("n", Right),
            ("df", Right),
            ("error df", Right),
            ("F", Right),
            ("p (G–G)", Right),
            ("partial η²", Right),
        ]);
        for found in simple {
            let effect = &found.effect;
            let corrected = effect.corrected.and_then(|it| it.greenhouse_geisser);
            let (d1, d2, p) = corrected.map_or((effect.df, effect.error_df, effect.p), |it| (it.df, it.error_df, it.p));
            table.row([
                self.names.simple(found),
                found.n.to_string(),
                df(d1),
                df(d2),
                fixed_or_dash(effect.f, 2),
                p_or_dash(p),
                effect.partial_eta_sq.map_or_else(number::dash, |eta| number::share(eta, 2)),
            ]);
        }
        (!simple.is_empty()).then_some(table)
    }

    /// Of one factor one table; else one for each family, under its name.
    fn contrast_tables(&self, width: usize) -> Vec<String> {
        let contrasts = &self.found.result.contrasts;
        if self.only().is_some() {
            let all: Vec<&Comparison> = contrasts.iter().collect();
            return if all.is_empty() { vec![] } else { vec![self.contrast_table("contrast", &all).render(width)] };
        }
        let mut families: Vec<(String, Vec<&Comparison>)> = Vec::new();
        for found in contrasts {
            let family = self.family(found);
            match families.last_mut() {
                Some((last, members)) if *last == family => members.push(found),
                _ => families.push((family, vec![found])),
            }
        }
        let render = |(name, members): (String, Vec<&Comparison>)| {
            let table = self.contrast_table("contrast", &members).render(width);
            format!("{}\n{table}", wrap(&name, width, ""))
        };
        families.into_iter().map(render).collect()
    }

    fn family(&self, found: &Comparison) -> String {
        let code = self.names.code(self.names.compared(found.compared));
        let what = match found.compared {
            Compared::Pairwise { .. } => format!("Pairs of {code}"),
            Compared::EachVsFirst { .. } => format!("Each {code} against the first"),
            Compared::Polynomial { .. } => format!("Trends over {code}"),
            Compared::Effect { .. } => format!("Differences by {code}"),
        };
        match found.at.first() {
            None => format!("{what}:"),
            Some(at) => format!("{what} at each level of {}:", self.names.code(at.factor)),
        }
    }

    fn contrast_table(&self, head: &str, contrasts: &[&Comparison]) -> Table {
        let interval = self.about.interval_name();
        let within = contrasts.iter().any(|it| !matches!(it.compared, Compared::Effect { .. }));
        let last = if within { "d_z" } else { "df" };
        let mut table = Table::new(&[
            (head, Left),
            ("n", Right),
            ("estimate", Right),
            (interval.as_str(), Right),
            ("t", Right),
            ("p", Right),
            (self.about.adjusted_name(), Right),
            (last, Right),
        ]);
        let decimals = self.decimals();
        for found in contrasts {
            let at = found.at.iter().map(|at| format!(", {}", self.names.level(at.factor, at.level)));
            table.row([
                format!("{}{}", self.names.contrast(found.compared), at.collect::<String>()),
                found.n.to_string(),
                fixed_or_dash(found.estimate, decimals),
                self.about.interval(found.ci, decimals),
                fixed_or_dash(found.t, 2),
                p_or_dash(found.p),
                p_or_dash(found.p_adjusted),
                if within { fixed_or_dash(found.dz, 2) } else { found.df.map_or_else(number::dash, df) },
            ]);
        }
        table
    }

    /// Why pairs may count more subjects than the effect does.
    fn pairs_use_more(&self) -> Option<String> {
        let used = self.found.result.used.len();
        let more = self.found.result.contrasts.iter().any(|contrast| contrast.n > used);
        more.then(|| match self.only() {
            Some(_) => "A pair uses all subjects complete on that pair; the effect and trends those complete on all."
                .to_owned(),
            None => "A contrast uses all subjects with what it needs; the effects those complete on all.".to_owned(),
        })
    }

    /// What following the same subjects has bought.
    fn linked(&self) -> Option<String> {
        let unlinked = self.found.result.if_unlinked?;
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

    /// What it rests on, for machines, where that is wanted.
    pub fn checks_json(&self) -> Option<(&'static str, Json)> {
        self.found.checks.as_ref().map(|found| ("checks", self.checks_of(found).json()))
    }

    fn checks_of<'f>(&'f self, found: &'f revisant_analysis::checks::Checks) -> checks::Checked<'f> {
        checks::Checked { about: self.about, found, repeated: self.found, names: self.names }
    }
}

fn anova_table(first: &str) -> Table {
    Table::new(&[
        (first, Left),
        ("sum of squares", Right),
        ("df", Right),
        ("mean square", Right),
        ("F", Right),
        ("p", Right),
    ])
}

fn anova_row(source: &str, line: Line, tested: Option<(Option<f64>, Option<f64>)>) -> [String; 6] {
    [
        source.to_owned(),
        statistic(line.ss),
        df(line.df),
        statistic_or_dash(line.ms),
        tested.map_or(String::new(), |(f, _)| statistic_or_dash(f)),
        tested.map_or(String::new(), |(_, p)| p_or_dash(p)),
    ]
}

type ByCorrection = [(&'static str, Option<f64>, Option<CorrectedTest>); 4];

fn by_correction(epsilon: Epsilon, corrected: Corrected) -> ByCorrection {
    [
        ("Greenhouse–Geisser", epsilon.greenhouse_geisser, corrected.greenhouse_geisser),
        ("Huynh–Feldt", epsilon.huynh_feldt, corrected.huynh_feldt),
        ("Lecoutre", epsilon.lecoutre, corrected.lecoutre),
        ("lower bound", Some(epsilon.lower_bound), corrected.lower_bound),
    ]
}

fn corrections_of_one(epsilon: Epsilon, corrected: Corrected) -> Table {
    let mut table =
        Table::new(&[("correction", Left), ("epsilon", Right), ("df", Right), ("error df", Right), ("p", Right)]);
    for (name, epsilon, test) in by_correction(epsilon, corrected) {
        table.row([
            name.to_owned(),
            fixed_or_dash(epsilon, 3),
            fixed_or_dash(test.map(|test| test.df), 2),
            fixed_or_dash(test.map(|test| test.error_df), 2),
            p_or_dash(test.and_then(|test| test.p)),
        ]);
    }
    table
}

fn mauchly(test: Mauchly) -> Option<String> {
    let (w, chi2, degrees, p) = (test.w?, test.chi2?, test.df?, test.p?);
    let (w, chi2) = (number::share(w, 3), number::fixed(chi2, 2));
    Some(format!("W = {w}, χ²({}) = {chi2}, {}", df(degrees), number::p_said(p)))
}
