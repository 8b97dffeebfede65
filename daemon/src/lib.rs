//! The intake of instrument exports, and the service that watches export folders.

pub mod intake;
pub mod service;
