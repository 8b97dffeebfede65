//! Placing: finding a row's subject, session, measure, condition and replicate.

pub mod clock;
pub mod identity;
pub mod number;
pub mod resolve;
