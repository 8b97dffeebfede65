//! The plan, the records and completeness of a repeated-measurement study.
//!
//! This crate knows no other crate of the project, and it alone names the database or a table.

pub mod completeness;
pub mod hold;
pub mod plan;
pub mod reading;
pub mod records;
pub mod roster;
pub mod session;
pub mod world;
