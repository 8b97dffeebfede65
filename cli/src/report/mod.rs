//! Results to tables, sentences, plots and JSON: the only place that formats numbers and dates.

pub mod analysis;
pub mod json;
pub mod number;
pub mod plot;
pub mod rehearse;
pub mod sentence;
pub mod table;
pub mod text;
pub mod when;
