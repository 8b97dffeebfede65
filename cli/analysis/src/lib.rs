//! Within-subject analyses of repeated measurements: numbers in, typed results out.
//!
//! Two invariants hold for the whole crate.
//!
//! 1. **Pure.** No clock, file, environment or printing; the same design gives the same result everywhere.
//! 2. **Never a NaN, an infinity or a panic.** A value that the readings do not define is `None`, and a [`Note`]
//!    says why; a value that the method makes infinite (an *F* over a residual of zero) is `None` with its *p* 0.
//!
//! The way through: readings, summarised over replicates, become a [`design::Design`] of any number of factors, or a
//! [`design::OneWithin`] of one; an analysis such as [`anova::factorial`] or [`anova::repeated_measures`] takes the design
//! and its [`Settings`] and returns a result that the caller prints, draws or stores, and [`checks::checks`] what it rests
//! on. Factors, levels and subjects are known by index only, in the order in which the caller gave them.
//!
//! ```
//! use revisant_analysis::anova::repeated_measures;
//! use revisant_analysis::contrasts::{Family, Multiplicity};
//! use revisant_analysis::design::{DesignError, OneWithin};
//! use revisant_analysis::Settings;
//!
//! let rows = [
//!     [Some(31.0), Some(33.5), Some(36.0)],
//!     [Some(28.5), Some(30.0), Some(30.5)],
//!     [Some(40.0), Some(41.5), Some(45.0)],
//!     [Some(35.0), None, Some(37.5)], // left out of the analysis of variance, used by the pair that it has
//! ];
//! let design = OneWithin::from_rows(&rows)?.with_positions(vec![0.0, 14.0, 42.0])?;
//! let contrasts = vec![Family::Pairwise, Family::Polynomial];
//! let result = repeated_measures(&design, &Settings { contrasts, multiplicity: Multiplicity::Holm, ..Settings::default() });
//!
//! assert_eq!(result.incomplete, [3]);
//! assert_eq!(result.contrasts.iter().map(|contrast| contrast.n).collect::<Vec<_>>(), [3, 4, 3, 3, 3]);
//! # Ok::<(), DesignError>(())
//! ```

#![forbid(unsafe_code)]

pub mod agreement;
pub mod anova;
pub mod checks;
pub mod contrasts;
pub mod design;
pub mod distributions;
mod moments;
mod note;
pub mod power;
pub mod ranks;
mod settings;

pub use note::Note;
pub use settings::{Confidence, Interval, NotAConfidence, Settings, Sums};
