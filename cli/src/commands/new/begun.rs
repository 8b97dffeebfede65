//! What a plan is begun with, and its text.
//!
//! Invariant: whether an answer is right is what the plan's reader says of a plan that holds it; no rule is written
//! here a second time.

use std::path::Path;

use revisant_schema::plan::{self, Fault, PlanFiles, Severity};
use revisant_schema::roster::tidy;

use crate::args::New;

/// What a plan is begun with. What is empty is not known yet.
#[derive(Debug, Default, Clone, PartialEq)]
pub struct Begun {
    /// The study's code.
    pub code: String,
    /// Its title.
    pub title: String,
    /// The zone of the study centre.
    pub zone: String,
    /// What a subject's code looks like.
    pub pattern: String,
    /// What is measured.
    pub measures: Vec<Measure>,
    /// When.
    pub visits: Vec<Visit>,
    /// With what.
    pub instruments: Vec<Instrument>,
    /// That there are no instruments yet is known.
    pub no_instruments: bool,
}

/// A measure.
#[derive(Debug, Default, Clone, PartialEq)]
pub struct Measure {
    /// Its code.
    pub code: String,
    /// Its unit.
    pub unit: String,
    /// How many are expected in a session.
    pub replicates: Option<u32>,
    /// Between which values it must lie.
    pub plausible: Option<(f64, f64)>,
    /// Factors and their levels.
    pub conditions: Vec<(String, Vec<String>)>,
}

/// A visit.
#[derive(Debug, Default, Clone, PartialEq)]
pub struct Visit {
    /// Its code.
    pub code: String,
    /// Days after day 0.
    pub day: i64,
    /// Days around that, both ends in.
    pub window: Option<(i64, i64)>,
}

/// An instrument.
#[derive(Debug, Default, Clone, PartialEq)]
pub struct Instrument {
    /// Its code.
    pub code: String,
    /// Where it exports to.
    pub folder: String,
}

fn whole<T: std::str::FromStr>(text: &str) -> Result<T, String> {
    text.trim().parse().map_err(|_| format!("\"{text}\" is no whole number"))
}

fn number(text: &str) -> Result<f64, String> {
    text.trim().parse().map_err(|_| format!("\"{text}\" is no number; write it as 12.5"))
}

impl Measure {
    /// `CODE:UNIT`, `CODE:UNIT:REPLICATES` or `CODE:UNIT:REPLICATES:LOW:HIGH`.
    pub fn parse(text: &str) -> Result<Self, String> {
        let parts: Vec<&str> = text.split(':').map(str::trim).collect();
        let (code, unit, more) = match parts.as_slice() {
            [code, unit, more @ ..] if !code.is_empty() && !unit.is_empty() => (*code, *unit, more),
            _ => return Err(format!("\"{text}\" is no measure; write it as CODE:UNIT, such as grip:kg")),
        };
        let (replicates, plausible) = match more {
            [] => (None, None),
            [replicates] => (Some(whole(replicates)?), None),
            [replicates, low, high] => (Some(whole(replicates)?), Some((number(low)?, number(high)?))),
            _ => return Err(format!("\"{text}\" is no measure; write it as CODE:UNIT:REPLICATES:LOW:HIGH")),
        };
        let (code, unit) = (code.to_owned(), unit.to_owned());
        Ok(Self { code, unit, replicates, plausible, conditions: vec![] })
    }

    /// This one with so many replicates.
    pub fn with_replicates(&self, text: &str) -> Result<u32, String> {
        whole(text)
    }

    /// This one between `LOW:HIGH`; empty: nothing is implausible.
    pub fn with_plausible(&self, text: &str, known: &Begun) -> Result<Option<(f64, f64)>, String> {
        if text.is_empty() {
            return Ok(None);
        }
        let (low, high) = text.split_once(':').ok_or("write the two values as LOW:HIGH, such as 2:95")?;
        let plausible = Some((number(low)?, number(high)?));
        known.with_measure(Self { plausible, ..self.clone() }).map(|_| plausible)
    }

    /// This one under `FACTOR=LEVEL,LEVEL`, several with blanks between; empty: none.
    pub fn with_conditions(&self, text: &str, known: &Begun) -> Result<Vec<(String, Vec<String>)>, String> {
        let conditions: Vec<(String, Vec<String>)> =
            text.split_whitespace().map(condition).collect::<Result<_, String>>()?;
        known.with_measure(Self { conditions: conditions.clone(), ..self.clone() }).map(|_| conditions)
    }
}

fn condition(text: &str) -> Result<(String, Vec<String>), String> {
    let wrong = || format!("\"{text}\" is no condition; write it as FACTOR=LEVEL,LEVEL, such as hand=left,right");
    let (factor, levels) = text.split_once('=').ok_or_else(wrong)?;
    Ok((factor.to_owned(), levels.split(',').map(|level| level.trim().to_owned()).collect()))
}

impl Visit {
    /// `CODE:DAY` or `CODE:DAY:FROM:UNTIL`.
    pub fn parse(text: &str) -> Result<Self, String> {
        let parts: Vec<&str> = text.split(':').map(str::trim).collect();
        match parts.as_slice() {
            [code, day] if !code.is_empty() => Ok(Self { code: (*code).to_owned(), day: whole(day)?, window: None }),
            [code, day, from, until] if !code.is_empty() => {
                Ok(Self { code: (*code).to_owned(), day: whole(day)?, window: Some((whole(from)?, whole(until)?)) })
            }
            _ => Err(format!(
                "\"{text}\" is no visit; write it as CODE:DAY or CODE:DAY:FROM:UNTIL, such as week-4:28:-3:7"
            )),
        }
    }
}

impl Instrument {
    /// `CODE:FOLDER`.
    pub fn parse(text: &str) -> Result<Self, String> {
        match text.split_once(':') {
            Some((code, folder)) if !code.trim().is_empty() && !folder.trim().is_empty() => {
                Ok(Self { code: code.trim().to_owned(), folder: folder.trim().to_owned() })
            }
            _ => Err(format!("\"{text}\" is no instrument; write it as CODE:FOLDER, such as dyn-1:exports/dyn-1")),
        }
    }
}

/// The zone that this machine is set to, where it says one.
pub fn default_zone() -> Option<String> {
    let target = std::fs::read_link(Path::new("/etc/localtime")).ok()?;
    let name = target.to_str()?.split_once("zoneinfo/")?.1.to_owned();
    Begun::default().with_zone(&name).ok()
}

/// The pattern of codes like an example: its digits may be others, the rest stays.
pub fn pattern_of(example: &str) -> Result<String, String> {
    let steps = [plan::Tidy::Trim, plan::Tidy::Upper, plan::Tidy::Dash];
    let example = tidy(example, &steps);
    if !example.chars().any(|c| c.is_ascii_digit()) {
        return Err(format!("\"{example}\" has no number in it; write a whole code, such as QM-012"));
    }
    if let Some(odd) = example.chars().find(|c| c.is_control() || *c == '\'') {
        return Err(format!("{odd:?} cannot stand in a code"));
    }
    let mut pattern = String::new();
    let mut digits = 0;
    for c in example.chars() {
        if c.is_ascii_digit() {
            digits += 1;
            continue;
        }
        push_digits(&mut pattern, &mut digits);
        if "\\.+*?()|[]{}^$#&~".contains(c) {
            pattern.push('\\');
        }
        pattern.push(c);
    }
    push_digits(&mut pattern, &mut digits);
    Ok(pattern)
}

fn push_digits(pattern: &mut String, digits: &mut u32) {
    match std::mem::take(digits) {
        0 => {}
        1 => pattern.push_str("\\d"),
        many => pattern.push_str(&format!("\\d{{{many}}}")),
    }
}

// ---- whether it is right ----

impl Begun {
    /// This with another code, if it may be one; the same for what follows.
    pub fn with_code(&self, code: &str) -> Result<String, String> {
        Self { code: code.to_owned(), ..self.clone() }.sound().map(|()| code.to_owned())
    }

    /// With another zone.
    pub fn with_zone(&self, zone: &str) -> Result<String, String> {
        Self { zone: zone.to_owned(), ..self.clone() }.sound().map(|()| zone.to_owned())
    }

    /// With one more measure.
    pub fn with_measure(&self, measure: Measure) -> Result<Measure, String> {
        let mut more = self.clone();
        more.measures.push(measure.clone());
        more.sound().map(|()| measure)
    }

    /// A measure's number of replicates.
    pub fn holds(&self, measure: &Measure, replicates: u32) -> Result<u32, String> {
        self.with_measure(Measure { replicates: Some(replicates), ..measure.clone() }).map(|_| replicates)
    }

    /// With one more visit.
    pub fn with_visit(&self, visit: Visit) -> Result<Visit, String> {
        let mut more = self.clone();
        more.visits.push(visit.clone());
        more.sound().map(|()| visit)
    }

    /// With one more instrument.
    pub fn with_instrument(&self, instrument: Instrument) -> Result<Instrument, String> {
        let mut more = self.clone();
        more.instruments.push(instrument.clone());
        more.sound().map(|()| instrument)
    }

    /// Whether what is known is sound, the rest filled in with what is; else what is wrong first.
    fn sound(&self) -> Result<(), String> {
        let mut filled = self.clone();
        let fill = |text: &mut String, with: &str| {
            if text.is_empty() {
                *text = with.to_owned();
            }
        };
        fill(&mut filled.code, "S-1");
        fill(&mut filled.title, "A study");
        fill(&mut filled.zone, "UTC");
        if filled.measures.is_empty() {
            let (code, unit) = ("some-measure".to_owned(), "1".to_owned());
            filled.measures.push(Measure { code, unit, ..Measure::default() });
        }
        if filled.visits.is_empty() {
            filled.visits.push(Visit { code: "some-visit".to_owned(), ..Visit::default() });
        }
        match plan::parse(&PlanFiles { main: filled.text(), readers: vec![] }) {
            Ok(_) => Ok(()),
            Err(faults) => {
                Err(faults.0.iter().find(|fault| fault.severity == Severity::Error).map_or_else(String::new, said))
            }
        }
    }

    /// What the options say, and what is wrong with those that cannot be taken, each by itself.
    pub fn from_options(args: &New) -> (Self, Vec<String>) {
        let mut begun = Self { no_instruments: args.no_instrument, ..Self::default() };
        let mut wrong = Vec::new();
        let mut note = |option: &str, why: String| wrong.push(format!("--{option}: {why}"));
        if let Some(code) = &args.code {
            begun.with_code(code).map_or_else(|why| note("code", why), |code| begun.code = code);
        }
        begun.title = args.title.clone().unwrap_or_default();
        if let Some(zone) = &args.zone {
            begun.with_zone(zone).map_or_else(|why| note("zone", why), |zone| begun.zone = zone);
        }
        if let Some(example) = &args.subject {
            pattern_of(example).map_or_else(|why| note("subject", why), |pattern| begun.pattern = pattern);
        }
        for text in args.measure.iter().flat_map(|text| text.split_whitespace()) {
            match Measure::parse(text).and_then(|measure| begun.with_measure(measure)) {
                Ok(measure) => begun.measures.push(measure),
                Err(why) => note("measure", why),
            }
        }
        for text in &args.condition {
            match begun.add_condition(text) {
                Ok(()) => {}
                Err(why) => note("condition", why),
            }
        }
        for text in args.visit.iter().flat_map(|text| text.split_whitespace()) {
            match Visit::parse(text).and_then(|visit| begun.with_visit(visit)) {
                Ok(visit) => begun.visits.push(visit),
                Err(why) => note("visit", why),
            }
        }
        for text in &args.instrument {
            match Instrument::parse(text).and_then(|instrument| begun.with_instrument(instrument)) {
                Ok(instrument) => begun.instruments.push(instrument),
                Err(why) => note("instrument", why),
            }
        }
        (begun, wrong)
    }

    /// `MEASURE:FACTOR=LEVEL,LEVEL`
    fn add_condition(&mut self, text: &str) -> Result<(), String> {
        let (code, levels) = text
            .split_once(':')
            .ok_or_else(|| format!("\"{text}\" names no measure; write it as MEASURE:FACTOR=LEVEL,LEVEL"))?;
        let known: Vec<&str> = self.measures.iter().map(|measure| measure.code.as_str()).collect();
        let there = known.join(", ");
        let condition = condition(levels)?;
        let mut more = self.clone();
        let measure = more.measures.iter_mut().find(|measure| measure.code == code);
        let measure = measure.ok_or_else(|| format!("\"{code}\" is none of the measures ({there})"))?;
        measure.conditions.push(condition);
        more.sound()?;
        *self = more;
        Ok(())
    }

    /// The options that are needed and not given.
    pub fn missing(&self) -> Vec<String> {
        let needed = [
            ("--code", self.code.is_empty()),
            ("--zone", self.zone.is_empty()),
            ("--measure", self.measures.is_empty()),
            ("--visit", self.visits.is_empty()),
        ];
        needed.iter().filter(|(_, missing)| *missing).map(|(option, _)| (*option).to_owned()).collect()
    }
}

/// What is wrong, and the nearest that would be right.
fn said(fault: &Fault) -> String {
    let near = match &fault.nearest {
        Some(nearest) => format!("Did you mean {nearest}?"),
        None => format!("Right would be: {}.", fault.right.trim_end_matches('.')),
    };
    format!("{} {near}", fault.wrong)
}

// ---- the plan ----

impl Begun {
    /// The plan.
    pub fn text(&self) -> String {
        let mut text = self.head();
        self.measures.iter().for_each(|measure| text.push_str(&measure.text()));
        text.push_str("# When: days after day 0. A session in a visit's window belongs to that visit.\n");
        self.visits.iter().for_each(|visit| text.push_str(&self.visit(visit)));
        self.instruments.iter().for_each(|instrument| text.push_str(&self.instrument(instrument)));
        if self.instruments.is_empty() {
            text.push_str(NO_INSTRUMENT);
        }
        text.push_str(&self.analysis());
        text
    }

    fn head(&self) -> String {
        let anchor = self.visits.first().map_or("enrolment", |visit| visit.code.as_str());
        let pattern = if self.pattern.is_empty() { "[A-Z]+-\\d{3}" } else { &self.pattern };
        let title = if self.title.is_empty() { format!("Study {}", self.code) } else { self.title.clone() };
        format!(
            "# The plan of a study: all that the program may assume. `revisant check` says what is wrong with it.\n\n\
             [study]\ncode = {}\ntitle = {}\n\
             time_zone = {}      # an IANA zone: its local day decides the visit\n\
             # enrol = {{ target = 48, from = 2026-02-02, until = 2026-08-31 }}     # to see how enrolment goes\n\n\
             [subject]\n\
             pattern = '{pattern}'        # the whole code must match, after tidying\n\
             normalise = [\"trim\", \"upper\", \"dash\"]     # no blanks around it, in capitals, - for _ and blanks\n\
             anchor = {}        # where day 0 lies: a visit's code, or \"enrolment\"\n\
             # attributes = {{ sex = [\"F\", \"M\"], age = \"number\" }}     # columns of the roster that analyses may use\n\n",
            basic(&self.code),
            basic(&title),
            basic(&self.zone),
            basic(anchor)
        )
    }

    fn visit(&self, visit: &Visit) -> String {
        let usual = self.usual_window(visit).map(|days| (-days, days));
        let window = match visit.window.or(usual) {
            Some((from, until)) => {
                format!("window = [{from}, {until}]        # on time, in days around `day`, both ends in\n")
            }
            None => String::new(),
        };
        format!("[[visit]]\ncode = {}\nday = {}\n{window}\n", basic(&visit.code), visit.day)
    }

    /// Days on either side of a visit for which nobody said a window: none for the first, where day 0 lies, else three,
    /// or fewer where its neighbours are near.
    fn usual_window(&self, visit: &Visit) -> Option<i64> {
        let others = self.visits.iter().filter(|other| other.code != visit.code);
        let room = others.map(|other| {
            let reach = other.window.map_or(0, |(from, until)| from.saturating_abs().max(until.saturating_abs()));
            (other.day.saturating_sub(visit.day).saturating_abs().saturating_sub(reach).saturating_sub(1)) / 2
        });
        let days = room.min().unwrap_or(3).min(3);
        (visit.day != 0 && days > 0).then_some(days)
    }

    fn instrument(&self, instrument: &Instrument) -> String {
        let (code, folder) = (basic(&instrument.code), basic(&instrument.folder));
        let shown: String = instrument.folder.chars().filter(|c| !c.is_control()).collect();
        let only = self.measures.len() == 1;
        let values: String = self.measures.iter().map(|measure| measure.placeholder(only)).collect();
        format!(
            "# An instrument and its folder of exports.\n[[instrument]]\ncode = {code}\nfolder = {folder}\n\
             files = \"*.csv\"\n# silent = \"7d\"          # flagged when it exports nothing for so long while sessions take place\n\
             # serial = {{ preamble = \"Serial\", is = \"A1703\" }}     # another instrument's file is then held\n\n\
             # PLACEHOLDER: how its exports are read is not known yet. With an export at hand,\n\
             #     revisant probe {shown}/FILE --into study.toml\n\
             # drafts this part from it; `revisant check --sample {shown}/FILE` then shows what comes of it.\n\
             [instrument.reader]\nformat = \"delimited\"\nheader = {{ row = 1 }}\n\
             subject = {{ column = \"Subject\" }}\n\
             taken_at = {{ column = \"Time\", format = \"iso\" }}     # or a pattern such as \"%d/%m/%Y %H:%M\"\n\
             # visit = {{ column = \"Visit\", map = {{ \"V1\" = \"baseline\" }} }}     # without it the date decides\n\n{values}"
        )
    }

    fn analysis(&self) -> String {
        let Some(measure) = self.measures.first().filter(|_| self.visits.len() > 1) else { return String::new() };
        let factors: Vec<String> = measure.conditions.iter().map(|(factor, _)| basic(factor)).collect();
        let average = match factors.is_empty() {
            true => String::new(),
            false => format!("average = [{}]        # conditions to average over\n", factors.join(", ")),
        };
        format!(
            "# An analysis named beforehand.\n[[analysis]]\ncode = {}\nmeasure = {}\nmethod = \"repeated-measures\"\n\
             within = [\"visit\"]\n{average}contrasts = [\"each-vs-first\"]\nmultiplicity = \"holm\"\n",
            basic(&format!("{}-over-visits", measure.code)),
            basic(&measure.code)
        )
    }
}

const NO_INSTRUMENT: &str = "# Each instrument, its folder of exports, and how they are read:\n\
                             # [[instrument]]\n# code = \"dyn-1\"\n# folder = \"exports/dyn-1\"\n\
                             # With an export at hand, `revisant probe FILE --into study.toml` drafts how it is read.\n\n";

impl Measure {
    fn text(&self) -> String {
        let said = |said: bool, line: String| if said { format!("{line}\n") } else { format!("# {line}\n") };
        let (low, high) = self.plausible.unwrap_or((2.0, 95.0));
        let levels = |levels: &[String]| levels.iter().map(|level| basic(level)).collect::<Vec<_>>().join(", ");
        let factors: Vec<String> =
            self.conditions.iter().map(|(factor, list)| format!("{factor} = [{}]", levels(list))).collect();
        let factors = if factors.is_empty() { "hand = [\"left\", \"right\"]".to_owned() } else { factors.join(", ") };
        [
            "# What is measured; the unit is a UCUM code.\n[[measure]]\n".to_owned(),
            format!("code = {}\nunit = {}\n", basic(&self.code), basic(&self.unit)),
            said(self.plausible.is_some(), format!("plausible = [{low}, {high}]     # what lies outside is held")),
            said(
                self.replicates.is_some_and(|number| number != 1),
                format!(
                    "replicates = {}          # expected in a session",
                    self.replicates.filter(|it| *it != 1).unwrap_or(3)
                ),
            ),
            "# summary = \"mean\"        # how replicates become one number: mean, median, min, max, first or last\n"
                .to_owned(),
            said(!self.conditions.is_empty(), format!("conditions = {{ {factors} }}     # within a session")),
            "\n".to_owned(),
        ]
        .concat()
    }

    /// Where a value of it may stand, until that is known.
    fn placeholder(&self, only: bool) -> String {
        let conditions: Vec<String> = self
            .conditions
            .iter()
            .map(|(factor, _)| format!("{factor} = {{ column = {} }}", basic(&capital(factor))))
            .collect();
        let conditions = match conditions.is_empty() {
            true => String::new(),
            false => format!("condition = {{ {} }}\n", conditions.join(", ")),
        };
        let column = if only { "Value".to_owned() } else { capital(&self.code) };
        format!(
            "[[instrument.reader.value]]\nmeasure = {}\ncolumn = {}\n{conditions}\n",
            basic(&self.code),
            basic(&column)
        )
    }
}

fn capital(text: &str) -> String {
    let mut chars = text.chars();
    chars.next().map_or_else(String::new, |first| first.to_uppercase().chain(chars).collect())
}

/// A basic string of TOML.
fn basic(text: &str) -> String {
    let mut quoted = String::from("\"");
    for c in text.chars() {
        match c {
            '"' | '\\' => quoted.extend(['\\', c]),
            c if c.is_control() => quoted.push_str(&format!("\\u{:04X}", u32::from(c))),
            c => quoted.push(c),
        }
    }
    quoted.push('"');
    quoted
}

#[cfg(test)]
#[allow(clippy::unwrap_used, reason = "tests may")]
mod tests {
    use super::*;

    #[test]
    fn what_is_written_passes_check() {
        let begun = Begun {
            code: "GR-1".to_owned(),
            title: "Grip \"strong\" \\ hold".to_owned(),
            zone: "Europe/London".to_owned(),
            pattern: pattern_of("gr 012").unwrap(),
            measures: vec![
                Measure {
                    conditions: vec![("hand".to_owned(), vec!["left".to_owned(), "right".to_owned()])],
                    ..Measure::parse("grip:kg:3:2:95").unwrap()
                },
                Measure::parse("gait:m/s").unwrap(),
            ],
            visits: ["baseline:0", "day-2:2", "week-4:28:-3:7", "week-5:36"]
                .map(|text| Visit::parse(text).unwrap())
                .to_vec(),
            instruments: vec![Instrument::parse("dyn-1:exports/dyn-1").unwrap()],
            no_instruments: false,
        };
        let files = PlanFiles { main: begun.text(), readers: vec![] };
        let (plan, warnings) = plan::parse(&files).map_err(|faults| faults.to_string()).unwrap();
        assert_eq!((plan.measures.len(), plan.visits.len(), plan.analyses.len()), (2, 4, 1));
        assert_eq!(warnings, vec![]);
        assert!(begun.text().contains("revisant probe exports/dyn-1/FILE --into study.toml"));
        let bare = Begun { instruments: vec![], visits: begun.visits[..1].to_vec(), ..begun };
        plan::parse(&PlanFiles { main: bare.text(), readers: vec![] }).map_err(|faults| faults.to_string()).unwrap();
    }

    #[test]
    fn codes_like_an_example() {
        for (example, pattern) in [
            ("QM-012", "QM-\\d{3}"),
            ("qm_012", "QM-\\d{3}"),
            ("S1", "S\\d"),
            ("A.7-x", "A\\.\\d-X"),
            ("07/2026", "\\d{2}/\\d{4}"),
        ] {
            assert_eq!(pattern_of(example).as_deref(), Ok(pattern), "{example}");
        }
        assert!(pattern_of("ABC").is_err() && pattern_of("").is_err());
    }
}
