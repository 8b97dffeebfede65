//! The plan `study.toml`: as written, checked, used.

pub mod model;
pub use model::*;
