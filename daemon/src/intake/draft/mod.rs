//! Drafting: from sample exports of one instrument to its part of the plan.
//!
//! Invariants: pure (bytes in, a draft out); what is ambiguous is said and never decided, so that no reading is filed
//! wrongly by a draft; a draft with a gap is no sound plan, and files nothing until a person has answered.
//!
//! The way of a draft: the format's own module proposes a layout, the instrument's reader reads the samples under it
//! (`grid`), and one module a question says which column is what: `place` whose and when, `labels` and `values` what,
//! `rest` the visit, the replicate, and what nobody has accounted for.

// In tests a panic is how a failure is said.
#![cfg_attr(test, allow(clippy::unwrap_used, clippy::expect_used, clippy::panic, clippy::indexing_slicing))]

mod book;
mod compose;
mod grid;
pub mod into;
mod labels;
mod lines;
mod nested;
mod numbers;
mod place;
mod preview;
mod rest;
mod stamps;
mod text;
mod told;
mod units;
mod values;
mod when;
mod words;

use chrono::{DateTime, Utc};
use revisant_schema::plan::Plan;
use revisant_schema::roster::Roster;

pub use preview::PreviewRow;
pub use told::{Told, ToldColumn};

/// One sample export.
#[derive(Debug, Clone)]
pub struct Sample {
    /// As the person named it.
    pub shown: String,
    /// Its file's name.
    pub file_name: String,
    /// Its folder below the instrument's, with `/`; empty for none.
    pub folder: String,
    /// Its bytes.
    pub bytes: Vec<u8>,
}

/// What a draft is made from.
#[derive(Debug, Clone)]
pub struct Asked<'a> {
    /// The samples, one at least.
    pub samples: &'a [Sample],
    /// The instrument's code.
    pub code: &'a str,
    /// Its export folder, as the plan would name it.
    pub folder: &'a str,
    /// The plan that the columns are held against.
    pub plan: Option<&'a Plan>,
    /// The plan's text, for looking ahead.
    pub plan_text: Option<&'a str>,
    /// Who is enrolled.
    pub roster: Option<&'a Roster>,
    /// The clock.
    pub now: DateTime<Utc>,
}

/// A remark about a key of the draft.
#[derive(Debug, Clone, PartialEq, Eq, serde::Serialize)]
pub struct Remark {
    /// The key.
    pub key: String,
    /// What is to be said of it.
    pub text: String,
}

/// A sample that the draft does not read.
#[derive(Debug, Clone, PartialEq, Eq, serde::Serialize)]
pub struct Misfit {
    /// The sample, as the person named it.
    pub sample: String,
    /// Why.
    pub why: String,
}

/// A drafted instrument.
#[derive(Debug, Clone)]
pub struct Draft {
    /// The `[[instrument]]` table, with its comments.
    pub toml: String,
    /// What a person must fill in.
    pub gaps: Vec<Remark>,
    /// What is likely and not certain.
    pub unsure: Vec<Remark>,
    /// Samples that it does not read.
    pub misfits: Vec<Misfit>,
    /// The first rows as they would be filed.
    pub preview: Vec<PreviewRow>,
    /// What was found, for machines.
    pub told: Told,
}

/// Why nothing can be drafted.
#[derive(Debug, Clone, PartialEq, Eq, thiserror::Error)]
pub enum DraftFault {
    /// No sample can be read.
    #[error("none of the samples can be read as an export: {0}")]
    Unreadable(String),
}

/// Drafts an instrument.
pub fn draft(asked: &Asked<'_>) -> Result<Draft, DraftFault> {
    compose::compose(asked)
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;
    use revisant_schema::plan::{PlanFiles, parse};

    const PLAN: &str = "[study]\ncode = \"P\"\ntime_zone = \"Europe/London\"\n[subject]\npattern = 'P-\\d{3}'\n\
        normalise = [\"trim\", \"upper\"]\nanchor = \"first\"\n[[measure]]\ncode = \"grip\"\nunit = \"kg\"\n\
        plausible = [2, 95]\nreplicates = 2\n[[visit]]\ncode = \"first\"\nday = 0\n";

    const EXPORTS: [&str; 5] = [
        "Tester: A\nSubject;Visit;Time;Trial;Grip (kg)\nP-001;first;2025-03-03 09:10;1;31,5\nP-002;first;2025-03-14 \
         09:40;1;27,0\n",
        "[{\"s\": \"P-001\", \"v\": \"first\", \"t\": \"2025-03-03T09:10\", \"grip\": 31.5}]",
        "{\"s\": \"P-001\", \"t\": \"2025-03-03T09:10\", \"grip\": 31.5}\n{\"s\": \"P-002\", \"t\": \"\", \"grip\": null}\n",
        "<a><r s='P-001'><t>2025-03-03T09:10</t><grip>31.5</grip></r><r s='P-002'><t/><grip>30</grip></r></a>",
        "Subject    Visit    Time              Grip\nP-001      first    2025-03-03T09:10  31.5\nP-002      first    \
         2025-03-04T09:10  30.5\n",
    ];

    /// Drafts from these bytes; what comes of it holds together.
    fn holds(bytes: &[&[u8]]) {
        let (plan, _) = parse(&PlanFiles { main: PLAN.to_owned(), readers: vec![] }).unwrap();
        let sample = |bytes: &&[u8]| Sample {
            shown: "a.csv".to_owned(),
            file_name: "a.csv".to_owned(),
            folder: String::new(),
            bytes: bytes.to_vec(),
        };
        let samples: Vec<Sample> = bytes.iter().map(sample).collect();
        for plan in [Some(&plan), None] {
            let asked = Asked {
                samples: &samples,
                code: "dyn",
                folder: "exports/dyn",
                plan,
                plan_text: plan.map(|_| PLAN),
                roster: None,
                now: "2026-12-01T12:00:00Z".parse().unwrap(),
            };
            let Ok(draft) = draft(&asked) else { continue };
            let main = into::insert(PLAN, &draft.toml, "dyn").unwrap();
            let sound = parse(&PlanFiles { main, readers: vec![] });
            let faults = sound.as_ref().err().map(ToString::to_string).unwrap_or_default();
            assert_eq!(sound.is_ok(), draft.gaps.is_empty(), "{}\n{faults}", draft.toml);
            assert!(!faults.contains("This is not TOML"), "{}\n{faults}", draft.toml);
        }
    }

    #[test]
    fn without_a_roster_whoever_fits_the_pattern_is_shown() {
        let (plan, _) = parse(&PlanFiles { main: PLAN.to_owned(), readers: vec![] }).unwrap();
        let samples = [Sample {
            shown: "a.csv".to_owned(),
            file_name: "a.csv".to_owned(),
            folder: String::new(),
            bytes: EXPORTS[0].as_bytes().to_vec(),
        }];
        let asked = Asked {
            samples: &samples,
            code: "dyn",
            folder: "exports/dyn",
            plan: Some(&plan),
            plan_text: Some(PLAN),
            roster: None,
            now: "2026-12-01T12:00:00Z".parse().unwrap(),
        };
        let draft = draft(&asked).unwrap();
        assert!(draft.gaps.is_empty(), "{}", draft.toml);
        let first = &draft.preview[0];
        assert_eq!((first.subject.as_str(), first.value.as_str(), first.held.as_str()), ("P-001", "31.5 kg", ""));
    }

    #[test]
    fn every_kind_of_export_is_drafted() {
        for text in EXPORTS {
            holds(&[text.as_bytes()]);
        }
        holds(&[]);
        holds(&[EXPORTS[0].as_bytes(), EXPORTS[1].as_bytes(), b""]);
    }

    proptest! {
        #![proptest_config(ProptestConfig { cases: 64, ..ProptestConfig::default() })]

        #[test]
        fn no_bytes_make_it_panic(bytes in proptest::collection::vec(any::<u8>(), 0..400)) {
            holds(&[&bytes]);
        }

        #[test]
        fn mutated_exports_give_drafts_that_hold_together(
            which in 0..EXPORTS.len(),
            cut in any::<prop::sample::Index>(),
            put in "[;,\\t\"'{}<>/ \\n.a0-]{0,6}",
            keep in any::<bool>(),
        ) {
            let text = EXPORTS[which].as_bytes();
            let at = cut.index(text.len() + 1);
            let mut bytes = text[..at].to_vec();
            bytes.extend_from_slice(put.as_bytes());
            if keep {
                bytes.extend_from_slice(&text[at..]);
            }
            holds(&[&bytes, text]);
            holds(&[&bytes]);
        }
    }
}
