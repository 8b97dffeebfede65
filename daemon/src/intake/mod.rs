//! The way of an export, one step a module: notice, settle, keep, read, place, file.

pub mod place;
pub mod read;
pub mod rules;
