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
mod units;
mod values;
mod when;
mod words;

use chrono::{DateTime, Utc};
use revisant_schema::plan::Plan;
use revisant_schema::roster::Roster;

pub use preview::PreviewRow;

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
