//! Readings: what one is, and what has become of it.

use std::collections::BTreeMap;
use std::fmt;

use serde::Serialize;

use crate::plan::Measure;

/// The levels of a reading's within-session factors, by the factor's code. Its text is `factor=level` joined by commas
/// in the order of the codes, which never hold `=` or `,`.
#[derive(Debug, Clone, Default, PartialEq, Eq, PartialOrd, Ord, Hash, Serialize)]
#[serde(transparent)]
pub struct Condition(pub BTreeMap<String, String>);

impl Condition {
    /// From its text.
    pub fn parse(text: &str) -> Self {
        let levels = text.split(',').filter_map(|pair| pair.split_once('='));
        Self(levels.map(|(factor, level)| (factor.to_owned(), level.to_owned())).collect())
    }

    /// The combination of levels that `cell` stands for in `measure` (see [`Measure::cells`]).
    pub fn of_cell(measure: &Measure, cell: &[usize]) -> Self {
        let pairs = measure.conditions.iter().zip(cell);
        Self(pairs.map(|(factor, level)| (factor.code.clone(), factor.levels[*level].clone())).collect())
    }
}

impl fmt::Display for Condition {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        for (at, (factor, level)) in self.0.iter().enumerate() {
            let comma = if at == 0 { "" } else { "," };
            write!(f, "{comma}{factor}={level}")?;
        }
        Ok(())
    }
}

/// What has become of a reading.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum ReadingState {
    /// In use.
    Current,
    /// A newer one has taken its place.
    Superseded,
    /// Taken out of use with a reason.
    Struck,
}

impl ReadingState {
    /// The code that people and files use.
    pub fn code(self) -> &'static str {
        match self {
            Self::Current => "current",
            Self::Superseded => "superseded",
            Self::Struck => "struck",
        }
    }
}

/// How many decimals a number as exported shows: `12.50` has two. An exponent shifts them.
pub fn decimals(text: &str, decimal_mark: char) -> u32 {
    let (mantissa, exponent) = text.split_once(['e', 'E']).unwrap_or((text, "0"));
    let shown = mantissa.rsplit_once(decimal_mark).map_or(0, |(_, fraction)| fraction.chars().count() as i64);
    let exponent: i64 = exponent.trim_start_matches('+').parse().unwrap_or(0);
    u32::try_from(shown.saturating_sub(exponent)).unwrap_or(0)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_condition_is_its_text() {
        let text = "eyes=open,hand=left";
        assert_eq!(Condition::parse(text).to_string(), text);
        assert_eq!(Condition::parse("").to_string(), "");
    }

    #[test]
    fn decimals_are_those_shown() {
        assert_eq!(decimals("12.50", '.'), 2);
        assert_eq!(decimals("12,5", ','), 1);
        assert_eq!(decimals("7", '.'), 0);
        assert_eq!(decimals("1.5e-3", '.'), 4);
        assert_eq!(decimals("1.5e2", '.'), 0);
    }
}
