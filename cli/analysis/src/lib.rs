//! Within-subject analyses of repeated measurements: numbers in, typed results out.
//!
//! Two invariants hold for the whole crate.
//!
//! 1. **Pure.** No clock, file, environment or printing; the same design gives the same result everywhere.
//! 2. **Never a NaN, an infinity or a panic.** A value that the readings do not define is `None`, and a [`Note`]
//!    says why; a value that the method makes infinite (an *F* over a residual of zero) is `None` with its *p* 0.
//!
//! The way through: readings, summarised over replicates, become a [`design::OneWithin`]; an analysis such as
//! [`anova::repeated_measures`] takes the design and its [`Settings`] and returns a result that the caller prints,
//! draws or stores. Levels and subjects are known by index only, in the order in which the caller gave them.

#![forbid(unsafe_code)]

pub mod anova;
pub mod contrasts;
pub mod design;
pub mod distributions;
mod moments;
mod note;
mod settings;

pub use note::Note;
pub use settings::{Confidence, Interval, NotAConfidence, Settings};
