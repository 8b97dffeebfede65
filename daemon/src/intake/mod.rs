//! The way of an export, one step a module: notice, settle, keep, read, place, file.

pub mod account;
pub mod collect;
pub mod draft;
pub mod error;
pub mod file;
pub mod keep;
pub mod notice;
pub mod over;
pub mod place;
pub mod plan;
pub mod read;
pub mod replace;
pub mod rules;
pub mod sample;
