//! The questions of `new`.
//!
//! Invariants: an answer is held against the plan's rules before the next question; a wrong one is asked again and
//! costs none of those before it; the end of the input ends the asking.

use std::io::{self, BufRead, Write};

use super::begun::{Begun, Instrument, Measure, Visit, default_zone, pattern_of};

/// Why the asking ended.
#[derive(Debug)]
pub enum Ended {
    /// There were no more answers.
    NoMore,
    /// The terminal failed.
    Broken(io::Error),
}

/// Who asks: where answers come from, and where questions go.
pub struct Asking<'a> {
    /// Answers, a line each.
    pub input: &'a mut dyn BufRead,
    /// Questions.
    pub output: &'a mut dyn Write,
}

impl Asking<'_> {
    /// Asks for all that is not known yet.
    pub fn complete(&mut self, begun: &mut Begun) -> Result<(), Ended> {
        self.say("Press Enter to take what stands in [brackets]. Everything can be changed in study.toml later.\n")?;
        if begun.code.is_empty() {
            let known = begun.clone();
            begun.code = self.ask("The study's code, such as GR-1", None, |text| known.with_code(text))?;
        }
        if begun.title.is_empty() {
            let title = format!("Study {}", begun.code);
            begun.title = self.ask("Its title", Some(&title), |text| Ok(text.to_owned()))?;
        }
        if begun.zone.is_empty() {
            let known = begun.clone();
            let usual = default_zone();
            begun.zone = self.ask("The zone of the study centre, such as Europe/London", usual.as_deref(), |text| {
                known.with_zone(text)
            })?;
        }
        if begun.pattern.is_empty() {
            begun.pattern = self.pattern()?;
        }
        if begun.measures.is_empty() {
            self.measures(begun)?;
        }
        if begun.visits.is_empty() {
            self.visits(begun)?;
        }
        if begun.instruments.is_empty() && !begun.no_instruments {
            self.instruments(begun)?;
        }
        Ok(())
    }

    /// From an example, shown before it is taken.
    fn pattern(&mut self) -> Result<String, Ended> {
        let mut pattern = self.ask("A subject's code, as an example (such as QM-012)", None, pattern_of)?;
        loop {
            let question = format!("Codes then look like {pattern}. Enter if that is right, else another example");
            let answer = self.ask(&question, Some("right"), |text| match text {
                "right" | "yes" | "y" => Ok(None),
                example => pattern_of(example).map(Some),
            })?;
            match answer {
                None => return Ok(pattern),
                Some(other) => pattern = other,
            }
        }
    }

    fn measures(&mut self, begun: &mut Begun) -> Result<(), Ended> {
        loop {
            let question = match begun.measures.is_empty() {
                true => "A measure and its unit, as CODE:UNIT (such as grip:kg)",
                false => "Another measure, or Enter if there is none",
            };
            let usual = (!begun.measures.is_empty()).then_some("");
            let known = begun.clone();
            let measure = self.ask(question, usual, |text| match text {
                "" => Ok(None),
                text => Measure::parse(text).and_then(|measure| known.with_measure(measure)).map(Some),
            })?;
            let Some(mut measure) = measure else { return Ok(()) };
            self.about(&known, &mut measure)?;
            begun.measures.push(measure);
        }
    }

    /// What is usually said about a measure besides its unit.
    fn about(&mut self, known: &Begun, measure: &mut Measure) -> Result<(), Ended> {
        let named = measure.clone();
        if measure.replicates.is_none() {
            let question = format!("How many readings of {} are expected in a session", named.code);
            measure.replicates = Some(self.ask(&question, Some("1"), |text| {
                named.with_replicates(text).and_then(|it| known.holds(&named, it))
            })?);
        }
        if measure.plausible.is_none() {
            let question =
                format!("Between which values in {} it must lie, as LOW:HIGH, or Enter for none", named.unit);
            measure.plausible = self.ask(&question, Some(""), |text| named.with_plausible(text, known))?;
        }
        if measure.conditions.is_empty() {
            let question = "Under which conditions in a session, as FACTOR=LEVEL,LEVEL (such as hand=left,right), or \
                            Enter for none";
            measure.conditions = self.ask(question, Some(""), |text| named.with_conditions(text, known))?;
        }
        Ok(())
    }

    fn visits(&mut self, begun: &mut Begun) -> Result<(), Ended> {
        loop {
            let question = match begun.visits.is_empty() {
                true => "The first visit, as CODE:DAY or CODE:DAY:FROM:UNTIL (such as baseline:0)",
                false => {
                    "The next visit (such as week-4:28, or week-4:28:-3:7 with its window), or Enter if that is all"
                }
            };
            let usual = (!begun.visits.is_empty()).then_some("");
            let known = begun.clone();
            let visit = self.ask(question, usual, |text| match text {
                "" => Ok(None),
                text => Visit::parse(text).and_then(|visit| known.with_visit(visit)).map(Some),
            })?;
            match visit {
                Some(visit) => begun.visits.push(visit),
                None => return Ok(()),
            }
        }
    }

    fn instruments(&mut self, begun: &mut Begun) -> Result<(), Ended> {
        loop {
            let question = match begun.instruments.is_empty() {
                true => {
                    "An instrument and the folder it exports into, as CODE:FOLDER (such as dyn-1:exports/dyn-1), \
                         or Enter if none is known yet"
                }
                false => "Another instrument, or Enter if that is all",
            };
            let known = begun.clone();
            let instrument = self.ask(question, Some(""), |text| match text {
                "" => Ok(None),
                text => Instrument::parse(text).and_then(|instrument| known.with_instrument(instrument)).map(Some),
            })?;
            match instrument {
                Some(instrument) => begun.instruments.push(instrument),
                None => return Ok(()),
            }
        }
    }

    /// Asks until the answer can be taken.
    fn ask<T>(
        &mut self,
        question: &str,
        usual: Option<&str>,
        take: impl Fn(&str) -> Result<T, String>,
    ) -> Result<T, Ended> {
        loop {
            let shown = usual.filter(|usual| !usual.is_empty()).map(|usual| format!(" [{usual}]")).unwrap_or_default();
            self.say(&format!("{question}{shown}: "))?;
            let line = self.line()?;
            let answer = match (line.trim(), usual) {
                ("", Some(usual)) => usual,
                ("", None) => {
                    self.say("  An answer is needed here.\n")?;
                    continue;
                }
                (answer, _) => answer,
            };
            match take(answer) {
                Ok(taken) => return Ok(taken),
                Err(wrong) => self.say(&format!("  {wrong}\n"))?,
            }
        }
    }

    fn line(&mut self) -> Result<String, Ended> {
        let mut line = Vec::new();
        // Far more than any answer; a file without line ends does not fill the memory.
        let mut bounded = io::Read::take(&mut *self.input, 64 * 1024);
        match bounded.read_until(b'\n', &mut line).map_err(Ended::Broken)? {
            0 => {
                self.say("\n")?;
                Err(Ended::NoMore)
            }
            _ => Ok(String::from_utf8_lossy(&line).into_owned()),
        }
    }

    fn say(&mut self, text: &str) -> Result<(), Ended> {
        self.output.write_all(text.as_bytes()).and_then(|()| self.output.flush()).map_err(Ended::Broken)
    }
}

#[cfg(test)]
#[allow(clippy::unwrap_used, reason = "tests may")]
mod tests {
    use super::*;
    use revisant_schema::plan::{self, PlanFiles};

    fn asked(answers: &str) -> (Result<Begun, Ended>, String) {
        let mut begun = Begun::default();
        let (mut input, mut output) = (answers.as_bytes(), Vec::new());
        let done = Asking { input: &mut input, output: &mut output }.complete(&mut begun);
        (done.map(|()| begun), String::from_utf8(output).unwrap())
    }

    #[test]
    fn a_wrong_answer_is_asked_again_and_costs_none_of_the_others() {
        let answers = "GR-1\nGrip\nEurope/Lodnon\nEurope/London\nGR\ngr_012\n\nGrip:kg\ngrip:KG\ngrip:kg\nmany\n3\n95:2\n2:95\n\
                       hand\nhand=left,right\n\nbaseline:zero\nbaseline:0\nweek-4:28:7:-3\nweek-4:28:-3:7\nweek-4:56\n\n\
                       dyn-1\ndyn-1:exports/dyn-1\n\n";
        let (begun, said) = asked(answers);
        let begun = begun.unwrap();
        for wrong in [
            "\"Europe/Lodnon\" is no zone",
            "Did you mean Europe/London?",
            "has no number in it",
            "\"Grip\" is no code",
            "Did you mean grip?",
            "\"KG\" is no UCUM code",
            "Did you mean kg?",
            "\"many\" is no whole number",
            "\"zero\" is no whole number",
        ] {
            assert!(said.contains(wrong), "{wrong}\n{said}");
        }
        assert!(said.contains("Codes then look like GR-\\d{3}."), "{said}");
        let (plan, _) = plan::parse(&PlanFiles { main: begun.text(), readers: vec![] }).unwrap();
        assert_eq!((plan.study.code.as_str(), plan.study.time_zone.name()), ("GR-1", "Europe/London"));
        assert_eq!((plan.measures[0].replicates, plan.measures[0].plausible), (3, Some((2.0, 95.0))));
        assert_eq!(plan.measures[0].conditions[0].levels, ["left", "right"]);
        assert_eq!((plan.visits.len(), plan.instruments.len()), (2, 1));
        assert!(plan.subject.pattern.is_match("GR-123") && !plan.subject.pattern.is_match("GR-12"));
    }

    #[test]
    fn the_end_of_the_answers_ends_the_asking() {
        let all = "GR-1\n\nEurope/London\nGR-012\n\ngrip:kg\n\n\n\n\nbaseline:0\n\n\n";
        assert!(asked(all).0.is_ok());
        let lines: Vec<&str> = all.split_inclusive('\n').collect();
        for most in 0..lines.len() {
            assert!(matches!(asked(&lines[..most].concat()).0, Err(Ended::NoMore)), "{most}");
        }
    }

    #[test]
    fn what_is_known_is_not_asked() {
        let mut begun = Begun { code: "A".to_owned(), zone: "UTC".to_owned(), ..Begun::default() };
        let (mut input, mut output) = ("\nA-1\n\ngrip:kg:2:1:9\n\n\nv:0\n\n\n".as_bytes(), Vec::new());
        Asking { input: &mut input, output: &mut output }.complete(&mut begun).unwrap();
        let said = String::from_utf8(output).unwrap();
        assert!(!said.contains("zone") && !said.contains("How many"), "{said}");
        assert_eq!(begun.measures[0].replicates, Some(2));
    }
}
