//! The words and fields of an analysis of agreement.
//!
//! Invariant: over how many subjects a number is stands beside it: intraclass correlations are over the complete ones,
//! the error within subjects over all with two readings, and limits over those who have both.

use revisant_analysis::agreement::{Form, Icc, Limits};
use revisant_analysis::contrasts::ContrastKind;
use revisant_analysis::{Interval, Note};
use revisant_schema::plan::AgreeOver;
use serde_json::{Map, Value as Json, json};

use super::{Analysed, PairNotes, interval, repeated};
use crate::dataset::Factor;
use crate::method::Agreeing;
use crate::report::number::{self, df, fixed, fixed_or_dash, p_or_dash, percent, plain, share};
use crate::report::table::{Left, Right, Table, Whole};
use crate::report::text::{count, list, wrap};

/// An analysis of agreement with what stands beside it.
pub(super) struct Findings<'a> {
    about: &'a Analysed<'a>,
    found: &'a Agreeing,
}

impl<'a> Findings<'a> {
    pub fn new(about: &'a Analysed<'a>, found: &'a Agreeing) -> Self {
        Self { about, found }
    }

    fn factor(&self) -> Option<&'a Factor> {
        self.about.data.within.first()
    }

    fn level(&self, level: usize) -> &'a str {
        self.factor().and_then(|factor| factor.levels.get(level)).map_or("", String::as_str)
    }

    /// `week-4`, `replicate 2`
    fn named(&self, level: usize) -> String {
        let code = self.factor().filter(|_| self.about.data.repeats_at.is_some()).map(|factor| factor.code.as_str());
        code.map_or_else(|| self.level(level).to_owned(), |code| format!("{code} {}", self.level(level)))
    }

    fn pair(&self, level: usize, against: usize) -> String {
        format!("{} − {}", self.level(level), self.level(against))
    }
}

impl super::Findings for Findings<'_> {
    fn used(&self) -> usize {
        self.found.result.used.len()
    }

    fn fields(&self) -> Vec<(&'static str, Json)> {
        let (result, within) = (&self.found.result, &self.found.result.within);
        let over = match self.about.analysis.agree_over {
            AgreeOver::Visits => "visits",
            AgreeOver::Replicates => "replicates",
            AgreeOver::Instruments => "instruments",
        };
        let mut fields = vec![
            ("agree_over", json!(over)),
            ("cells", Json::Array(self.cells_json())),
            ("icc", result.icc.iter().map(icc_json).collect()),
            ("within_sd", json!(within.sd)),
            ("within_sd_ci", interval(within.sd_ci)),
            ("within_df", json!(within.df)),
            ("repeatability", json!(within.repeatability)),
            ("within_cv", json!(within.cv)),
            (
                "one_way",
                json!(within.one_way.map(|it| json!({
                    "subjects": it.subjects, "readings": it.readings, "n0": it.n0, "icc": it.icc
                }))),
            ),
            ("smallest_detectable_change", json!(result.smallest_detectable_change)),
            ("limits", result.limits.iter().map(|pair| self.limits_json(pair)).collect()),
        ];
        let two_way = self.found.two_way.as_ref();
        fields.extend(two_way.and_then(|found| repeated::Findings::new(self.about, found).checks_json()));
        fields
    }

    fn tables(&self, width: usize) -> Vec<String> {
        let mut parts = vec![self.cells_table().render(width), self.icc_table().render(width)];
        if !self.found.result.limits.is_empty() {
            parts.push(self.limits_table().render(width));
            parts.push(wrap("Differences are the later minus the earlier; limits are bias ± 1.96 SD.", width, ""));
        }
        parts
    }

    fn sentences(&self) -> Vec<String> {
        let mut said = vec![self.reliability()];
        said.extend(self.error());
        said.extend(self.change());
        if let [pair] = self.found.result.limits.as_slice() {
            said.extend(self.limits(pair));
        }
        said
    }

    fn beside(&self) -> Vec<String> {
        let one_way = self.found.result.within.one_way.filter(|it| it.subjects > self.found.result.used.len());
        let more = one_way.map(|it| {
            format!(
                "Intraclass correlations and the smallest detectable change are over complete subjects; the \
                 within-subject SD is over {} of {}, and each pair's limits over those who have both.",
                count(it.readings as u64, "reading"),
                count(it.subjects as u64, "subject")
            )
        });
        more.into_iter().collect()
    }

    fn checks(&self, width: usize) -> Vec<String> {
        let two_way = self.found.two_way.as_ref();
        two_way.map_or_else(Vec::new, |found| repeated::Findings::new(self.about, found).checks(width))
    }

    fn notes(&self) -> Vec<String> {
        let mut notes: Vec<String> = self.one_session().into_iter().collect();
        let undefined: Vec<String> = self.found.result.notes.iter().filter_map(undefined_form).collect();
        if !undefined.is_empty() {
            notes.push(format!(
                "{} or {} interval cannot be worked out for readings that vary like this",
                list(&undefined),
                if undefined.len() == 1 { "its" } else { "their" }
            ));
        }
        let mut pairs = PairNotes::default();
        for note in self.found.result.notes.iter().filter(|note| undefined_form(note).is_none()) {
            match note {
                Note::TooFewForContrast { contrast: ContrastKind::Pairwise { level, against }, subjects } => {
                    let who = if *subjects == 0 { "nobody has" } else { "only one subject has" };
                    pairs.add(self.pair(*level, *against), format!("{who} both, so there are no limits"));
                }
                note => notes.push(self.note(note)),
            }
        }
        notes.dedup();
        notes.into_iter().chain(pairs.said()).collect()
    }
}

fn undefined_form(note: &Note) -> Option<String> {
    match note {
        Note::IccUndefined { form } => Some(form.name().to_owned()),
        _ => None,
    }
}

// ---- for machines ----

fn icc_json(icc: &Icc) -> Json {
    json!({
        "form": icc.form.name(), "value": icc.value, "ci": interval(icc.ci),
        "f": icc.f, "df": icc.df, "error_df": icc.error_df, "p": icc.p,
    })
}

impl Findings<'_> {
    fn cells_json(&self) -> Vec<Json> {
        let code = self.factor().map_or("", |factor| factor.code.as_str());
        let cell = |(level, cell): (usize, &revisant_analysis::anova::Cell)| {
            let mut fields = Map::new();
            if let Some(visit) = &self.about.data.repeats_at {
                fields.insert("visit".to_owned(), json!(visit));
            }
            fields.insert(code.to_owned(), json!(self.level(level)));
            fields.insert("n".to_owned(), json!(cell.n));
            let numbers = [("mean", cell.mean), ("sd", cell.sd), ("se", cell.se)];
            fields.extend(numbers.map(|(name, value)| (name.to_owned(), json!(value))));
            fields.insert("ci".to_owned(), interval(cell.ci));
            Json::Object(fields)
        };
        self.found.cells.iter().enumerate().map(cell).collect()
    }

    fn limits_json(&self, pair: &Limits) -> Json {
        json!({
            "level": self.level(pair.level), "against": self.level(pair.against), "n": pair.n,
            "bias": pair.bias, "sd": pair.sd, "lower": pair.lower, "upper": pair.upper,
            "bias_ci": interval(pair.bias_ci), "lower_ci": interval(pair.lower_ci), "upper_ci": interval(pair.upper_ci),
        })
    }
}

// ---- for people ----

impl Findings<'_> {
    fn unit(&self, value: f64, decimals: usize) -> String {
        format!("{} {}", fixed(value, decimals), self.about.unit)
    }

    fn reliability(&self) -> String {
        let (label, over) = (self.about.label, self.about.over());
        let of = |form: Form| self.found.result.icc.iter().find(|icc| icc.form == form);
        let Some((icc, value)) = of(Form::Agreement).and_then(|icc| Some((icc, icc.value?))) else {
            return format!(
                "The readings of {label} that there are do not allow an intraclass correlation over {over}."
            );
        };
        let name = self.about.interval_name();
        let ci =
            icc.ci.map_or(String::new(), |ci| format!(", {name} {} to {}", share(ci.lower, 2), share(ci.upper, 2)));
        format!("Single readings of {label} agree over {over} with ICC(A,1) = {}{ci}.", share(value, 2))
    }

    fn error(&self) -> Option<String> {
        let within = self.found.result.within;
        let (sd, repeatability) = within.sd.zip(within.repeatability)?;
        let decimals = number::decimals_for(sd);
        let name = self.about.interval_name();
        let ci = within.sd_ci.map_or(String::new(), |ci| {
            format!(" ({name} {} to {})", fixed(ci.lower, decimals), fixed(ci.upper, decimals))
        });
        let cv =
            within.cv.map_or(String::new(), |cv| format!("; the within-subject CV is {} %", fixed(percent(cv), 1)));
        Some(format!(
            "The within-subject SD is {}{ci}: two readings of one subject differ by less than {} 95 times in 100 \
             (repeatability){cv}.",
            self.unit(sd, decimals),
            self.unit(repeatability, decimals)
        ))
    }

    fn change(&self) -> Option<String> {
        let change = self.found.result.smallest_detectable_change?;
        Some(format!(
            "The smallest detectable change is {}.",
            self.unit(change, number::decimals_for(self.found.result.within.sd.unwrap_or(change)))
        ))
    }

    fn limits(&self, pair: &Limits) -> Option<String> {
        let (bias, lower, upper) = (pair.bias?, pair.lower?, pair.upper?);
        let decimals = self.decimals();
        Some(format!(
            "On average {} differs from {} by {}, and 95 in 100 such differences lie between {} and {}.",
            self.named(pair.level),
            self.named(pair.against),
            fixed(bias, decimals),
            fixed(lower, decimals),
            self.unit(upper, decimals)
        ))
    }

    /// Which visit's session is looked at, where there are others.
    fn one_session(&self) -> Option<String> {
        let visit = self.about.data.repeats_at.as_ref()?;
        let visits = self.about.analysis.visits.len();
        let what = self.factor().map_or("", |factor| factor.code.as_str());
        (visits > 1).then(|| {
            format!(
                "Agreement over {what}s is that of one session: of the {visits} visits of the analysis the first, {visit}, \
                 is used."
            )
        })
    }

    fn decimals(&self) -> usize {
        let sds = self.found.result.limits.iter().filter_map(|pair| pair.sd).filter(|sd| *sd > 0.0);
        number::decimals_for(sds.fold(f64::INFINITY, f64::min))
    }

    fn cells_table(&self) -> Table {
        let name = self.about.interval_name();
        let sds = self.found.cells.iter().filter_map(|cell| cell.sd).filter(|sd| *sd > 0.0);
        let decimals = number::decimals_for(sds.fold(f64::INFINITY, f64::min));
        let level = if self.about.data.repeats_at.is_some() {
            self.factor().map_or("level", |factor| factor.code.as_str())
        } else {
            "level"
        };
        let columns =
            [(level, Left), ("n", Right), ("mean", Right), ("SD", Right), ("SE", Right), (name.as_str(), Right)];
        let mut table = Table::new(&columns);
        for (level, cell) in self.found.cells.iter().enumerate() {
            table.row([
                self.level(level).to_owned(),
                cell.n.to_string(),
                fixed_or_dash(cell.mean, decimals),
                fixed_or_dash(cell.sd, decimals),
                fixed_or_dash(cell.se, decimals),
                self.about.interval(cell.ci, decimals),
            ]);
        }
        table
    }

    fn icc_table(&self) -> Table {
        let name = self.about.interval_name();
        let columns = [
            ("correlation", Whole),
            ("what for", Left),
            ("ICC", Right),
            (name.as_str(), Right),
            ("F", Right),
            ("df", Right),
            ("p", Right),
        ];
        let mut table = Table::new(&columns);
        for icc in &self.found.result.icc {
            let ci = icc.ci.map_or_else(number::dash, |it| format!("{} to {}", share(it.lower, 3), share(it.upper, 3)));
            table.row([
                icc.form.name().to_owned(),
                what_for(icc.form).to_owned(),
                icc.value.map_or_else(number::dash, |value| share(value, 3)),
                ci,
                fixed_or_dash(icc.f, 2),
                format!("{}, {}", df(icc.df), df(icc.error_df)),
                p_or_dash(icc.p),
            ]);
        }
        table
    }

    fn limits_table(&self) -> Table {
        let name = self.about.interval_name();
        let columns =
            [("pair", Left), ("n", Right), ("SD", Right), ("", Left), ("estimate", Right), (name.as_str(), Right)];
        let mut table = Table::new(&columns);
        let decimals = self.decimals();
        for pair in &self.found.result.limits {
            let mut row = |head: [String; 3], what: &str, value: Option<f64>, ci: Option<Interval>| {
                let [name, n, sd] = head;
                let value = fixed_or_dash(value, decimals);
                table.row([name, n, sd, what.to_owned(), value, self.about.interval(ci, decimals)]);
            };
            let none = || [String::new(), String::new(), String::new()];
            let head = [self.pair(pair.level, pair.against), plain(pair.n as f64), fixed_or_dash(pair.sd, decimals)];
            row(head, "bias", pair.bias, pair.bias_ci);
            row(none(), "lower limit", pair.lower, pair.lower_ci);
            row(none(), "upper limit", pair.upper, pair.upper_ci);
        }
        table
    }

    fn note(&self, note: &Note) -> String {
        match note {
            Note::NoCompleteSubject => {
                "no subject has a reading at every level, so there are no intraclass correlations".to_owned()
            }
            Note::OneSubject => "only one subject is complete, so there are no intraclass correlations".to_owned(),
            Note::OneLevel => "there is only one level, so there is nothing to agree with".to_owned(),
            other => other.to_string(),
        }
    }
}

fn what_for(form: Form) -> &'static str {
    match form {
        Form::OneWay => "single, one-way",
        Form::Agreement => "single, agreement",
        Form::Consistency => "single, consistency",
        Form::OneWayMean => "mean, one-way",
        Form::AgreementMean => "mean, agreement",
        Form::ConsistencyMean => "mean, consistency",
    }
}
