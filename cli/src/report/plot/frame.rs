//! Scales and axes.
//!
//! Invariant: every frame of a picture has the same scales, so that what looks larger is larger.

use std::fmt::Write as _;

use super::sheet::text;
use crate::report::number::{fixed, plain};

/// A rectangle on the sheet.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct Area {
    pub left: f64,
    pub top: f64,
    pub width: f64,
    pub height: f64,
}

/// The scales of a picture.
#[derive(Debug, Clone, PartialEq)]
pub(super) struct Scales {
    /// Where each level stands.
    pub positions: Vec<f64>,
    /// What each level is called.
    pub labels: Vec<String>,
    /// The positions are days.
    pub days: bool,
    /// What the axis shows.
    pub name: String,
    /// The measure and its unit.
    pub measure: String,
    x: (f64, f64),
    y: (f64, f64),
    step: f64,
}

impl Scales {
    /// Scales that hold all positions and values; `None` without a value. The words are put in by the caller.
    pub fn of(positions: Vec<f64>, values: &[f64]) -> Option<Self> {
        let (low, high) = extent(values)?;
        let step = nice_step(if high > low { high - low } else { high.abs().max(1.0) });
        let y = ((low / step).floor() * step, (high / step).ceil() * step);
        let y = if y.0 < y.1 { y } else { (y.0 - step, y.1 + step) };
        let x = padded(extent(&positions)?);
        let (name, measure) = (String::new(), String::new());
        Some(Self { positions, labels: vec![], days: false, name, measure, x, y, step })
    }
}

/// A rectangle with scales.
#[derive(Clone, Copy)]
pub(super) struct Frame<'a> {
    pub area: Area,
    pub scales: &'a Scales,
}

impl Frame<'_> {
    pub fn at_x(&self, position: f64) -> f64 {
        let (low, high) = self.scales.x;
        self.area.left + (position - low) / (high - low) * self.area.width
    }

    pub fn at_y(&self, value: f64) -> f64 {
        let (low, high) = self.scales.y;
        self.area.top + self.area.height * (1.0 - (value - low) / (high - low))
    }

    pub fn point(&self, position: f64, value: f64) -> String {
        format!("{:.1},{:.1}", self.at_x(position), self.at_y(value))
    }

    fn right(&self) -> f64 {
        self.area.left + self.area.width
    }

    /// Lines across at round values; their numbers and the measure only where asked for.
    pub fn y_axis(&self, svg: &mut String, named: bool) {
        let Scales { y, step, measure, .. } = self.scales;
        let (left, decimals) = (self.area.left, decimals_of(*step));
        let steps = ((y.1 - y.0) / step).round() as u32;
        for tick in 0..=steps.min(40) {
            let value = y.0 + f64::from(tick) * step;
            let at = self.at_y(value);
            let _ = writeln!(
                svg,
                r##"<line x1="{left:.1}" x2="{:.1}" y1="{at:.1}" y2="{at:.1}" stroke="#ddd"/>"##,
                self.right()
            );
            if named {
                text(svg, (left - 8.0, at + 4.0), "end", 11, &fixed(value, decimals));
            }
        }
        if named {
            let middle = self.area.top + self.area.height / 2.0;
            let measure = super::escape(measure);
            let _ = writeln!(
                svg,
                r#"<text transform="translate(18 {middle:.1}) rotate(-90)" text-anchor="middle" font-size="12">{measure}</text>"#
            );
        }
    }

    /// The levels; with their days and what they are where there is room for it.
    pub fn x_axis(&self, svg: &mut String, roomy: bool) {
        let base = self.area.top + self.area.height;
        let (left, right) = (self.area.left, self.right());
        let _ =
            writeln!(svg, r##"<line x1="{left:.1}" x2="{right:.1}" y1="{base:.1}" y2="{base:.1}" stroke="#111"/>"##);
        let mut ends = [f64::NEG_INFINITY; 3];
        for (position, label) in self.scales.positions.iter().zip(&self.scales.labels) {
            let x = self.at_x(*position);
            let _ = writeln!(
                svg,
                r##"<line x1="{x:.1}" x2="{x:.1}" y1="{base:.1}" y2="{:.1}" stroke="#111"/>"##,
                base + 5.0
            );
            let days = self.scales.days && roomy;
            let words = if days { format!("{label} · {}", plain(*position)) } else { label.clone() };
            let half = words.chars().count() as f64 * 3.2;
            // A panel's outer labels stay within it: the next panel's begin right there.
            let (low, high) = if roomy { (4.0, super::sheet::WIDTH - 4.0) } else { (left - 4.0, right + 4.0) };
            let x = if high - low > 2.0 * half { x.clamp(low + half, high - half) } else { x };
            // Labels that would run into one another go one row down; one that fits nowhere is left to its tick.
            if let Some(row) = ends.iter().position(|end| x - half > *end) {
                ends[row] = x + half + 6.0;
                text(svg, (x, base + 19.0 + 13.0 * row as f64), "middle", 11, &words);
            }
        }
        let rows = ends.iter().filter(|end| end.is_finite()).count();
        if roomy {
            let middle = f64::midpoint(left, right);
            text(svg, (middle, base + 25.0 + 13.0 * rows as f64), "middle", 12, &self.scales.name);
        }
    }
}

pub(super) fn extent(values: &[f64]) -> Option<(f64, f64)> {
    let finite = values.iter().copied().filter(|value| value.is_finite());
    finite.fold(None, |found, value| match found {
        None => Some((value, value)),
        Some((low, high)) => Some((low.min(value), high.max(value))),
    })
}

/// With a little room at both ends.
pub(super) fn padded((low, high): (f64, f64)) -> (f64, f64) {
    let room = if high > low { (high - low) * 0.04 } else { 1.0 };
    (low - room, high + room)
}

/// A step of 1, 2 or 5 times a power of ten that makes four to eight steps of a span.
pub(super) fn nice_step(span: f64) -> f64 {
    let rough = span / 6.0;
    let power = 10_f64.powf(rough.log10().floor());
    let factor = rough / power;
    let nice = if factor < 1.5 {
        1.0
    } else if factor < 3.5 {
        2.0
    } else if factor < 7.5 {
        5.0
    } else {
        10.0
    };
    nice * power
}

pub(super) fn decimals_of(step: f64) -> usize {
    // The cast cannot go wrong: steps are finite.
    let size = step.log10().floor() as i32;
    usize::try_from((-size).clamp(0, 8)).unwrap_or(0)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn steps_are_round() {
        for (span, step) in [(10.0, 2.0), (1.0, 0.2), (100.0, 20.0), (37.0, 5.0), (0.0031, 0.0005)] {
            assert!((nice_step(span) / step - 1.0).abs() < 1e-9, "{span}: {}", nice_step(span));
        }
        assert_eq!((decimals_of(0.2), decimals_of(5.0), decimals_of(0.0005)), (1, 0, 4));
    }
}
