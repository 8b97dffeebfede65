//! Rows for machines: the shapes that acceptance checks read.
//!
//! Invariant: a shape changes only by gaining fields.

use std::collections::BTreeMap;

use revisant_schema::records::view::{HoldRow, ReadingRow};
use serde::Serialize;

use super::when;
use crate::study::Basis;

/// A reading.
#[derive(Debug, Serialize)]
pub struct Reading<'a> {
    reading: i64,
    subject: &'a str,
    visit: Option<&'a str>,
    session: i64,
    off_window: bool,
    measure: &'a str,
    condition: &'a BTreeMap<String, String>,
    replicate: u32,
    value: Option<f64>,
    unit: &'a str,
    as_written: Option<&'a str>,
    limit: Option<&'a str>,
    taken_at: String,
    state: &'static str,
    instrument: Option<&'a str>,
    export: Option<&'a str>,
    #[serde(rename = "where")]
    place: Option<String>,
    operator: Option<&'a str>,
    source: &'static str,
    supersedes: Option<i64>,
}

/// Where a reading came from, by its number in the records.
pub fn source(number: i64) -> &'static str {
    match number {
        0 => "export",
        1 => "by-hand",
        _ => "amended",
    }
}

fn said(text: &str) -> Option<&str> {
    (!text.is_empty()).then_some(text)
}

impl<'a> Reading<'a> {
    /// From its row.
    pub fn new(basis: &'a Basis, row: &'a ReadingRow) -> Self {
        let place = basis.place(&row.session);
        Self {
            reading: row.reading,
            subject: &row.session.subject,
            visit: basis.visit_code(place.visit),
            session: place.session,
            off_window: place.off_window,
            measure: &row.measure,
            condition: &row.condition.0,
            replicate: row.replicate,
            value: row.number,
            unit: basis.plan.measure(&row.measure).map_or("", |(_, measure)| measure.unit.as_str()),
            as_written: row.text.as_deref(),
            limit: row.mark.as_deref(),
            taken_at: when::taken_json(row.moment, row.session.day, basis.zone()),
            state: row.state.code(),
            instrument: said(&row.instrument),
            export: row.export.as_deref(),
            place: row.place(),
            operator: said(&row.operator),
            source: source(row.source),
            supersedes: row.supersedes,
        }
    }
}

/// A hold.
#[derive(Debug, Serialize)]
pub struct Hold<'a> {
    hold: i64,
    reason: &'static str,
    state: &'static str,
    export: &'a str,
    #[serde(rename = "where")]
    place: Option<String>,
    row: Option<&'a str>,
    likely: &'a [String],
    since: &'a str,
    wrong: &'a str,
}

impl<'a> Hold<'a> {
    /// From its row.
    pub fn new(row: &'a HoldRow) -> Self {
        Self {
            hold: row.hold,
            reason: row.reason.code(),
            state: row.state.code(),
            export: &row.export,
            place: row.place(),
            row: row.row.as_deref(),
            likely: &row.likely,
            since: &row.since,
            wrong: &row.wrong,
        }
    }
}
