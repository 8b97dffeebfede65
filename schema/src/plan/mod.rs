//! The plan `study.toml`: as written, checked, used.

pub mod model;
pub mod stamp;
pub mod units;
pub mod windows;
pub use model::*;

/// temp
#[derive(Debug, Clone, serde::Serialize, serde::Deserialize)]
pub struct PlanFiles {
    /// temp
    pub main: String,
    /// temp
    pub readers: Vec<(String, String)>,
}
