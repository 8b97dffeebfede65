//! The plot of differences against means: one panel a pair of levels, one circle a subject.
//!
//! Invariants: everything that comes from the study is escaped; bias and limits tell by line, not by colour, so that the
//! plot reads in grey; a pair that does not fit into the picture is named in it.

use std::fmt::Write as _;

use revisant_analysis::Interval;
use revisant_analysis::agreement::{Limits, Point};

use super::escape;
use super::frame::{decimals_of, extent, nice_step, padded};
use super::sheet::{LEFT, LINE_HEIGHT, Sheet, WIDTH, text};
use crate::method::Agreeing;
use crate::report::analysis::Analysed;
use crate::report::number::{decimals_for, fixed, percent, plain};
use crate::report::text::{clip, count};

/// Room for the names of lines.
const RIGHT: f64 = 132.0;
const PANEL: f64 = 300.0;
/// From a panel's axis to the next panel: ticks and the axis's name.
const UNDER: f64 = 62.0;
/// A picture of more panels than this is too long to be read.
const MOST_PANELS: usize = 6;

/// The picture as an SVG document.
pub(super) fn draw(analysed: &Analysed<'_>, found: &Agreeing) -> String {
    let who = count(analysed.data.subjects().len() as u64, "subject");
    let title = format!("{} ({}): differences against means of {who}", analysed.label, analysed.unit);
    let sheet = Sheet::of(analysed, title);
    let pairs = found.result.limits.get(..MOST_PANELS.min(found.result.limits.len())).unwrap_or_default();
    let mut svg = String::new();
    if pairs.is_empty() {
        text(&mut svg, (WIDTH / 2.0, sheet.top + PANEL / 2.0), "middle", 14, "There are no pairs of levels.");
    }
    let scales = Scales::of(found, pairs);
    for (at, pair) in pairs.iter().enumerate() {
        panel(&mut svg, (analysed, found), pair, scales, sheet.top + at as f64 * (PANEL + UNDER));
    }
    let mut bottom = sheet.top + pairs.len().max(1) as f64 * (PANEL + UNDER);
    for line in [Some(legend(analysed)), left_aside(analysed, found)].into_iter().flatten() {
        text(&mut svg, (LEFT, bottom), "start", 11, &line);
        bottom += LINE_HEIGHT;
    }
    sheet.around(&svg, bottom)
}

fn legend(analysed: &Analysed<'_>) -> String {
    let level = plain(percent(analysed.analysis.confidence));
    format!(
        "One circle a subject. Solid: bias; dashed: limits of agreement, bias ± 1.96 SD; bands: {level} % confidence \
         intervals."
    )
}

fn left_aside(analysed: &Analysed<'_>, found: &Agreeing) -> Option<String> {
    let more: Vec<String> =
        found.result.limits.iter().skip(MOST_PANELS).map(|pair| difference(analysed, pair)).collect();
    (!more.is_empty()).then(|| format!("Not drawn: {}.", clip(&more.join(", "), 96)))
}

/// `week-4 − baseline`
fn difference(analysed: &Analysed<'_>, pair: &Limits) -> String {
    let factor = analysed.data.within.first();
    let label = |level: usize| factor.and_then(|factor| factor.labels.get(level)).map_or("", String::as_str);
    format!("{} − {}", label(pair.level), label(pair.against))
}

fn panel(
    svg: &mut String,
    (analysed, found): (&Analysed<'_>, &Agreeing),
    pair: &Limits,
    scales: Option<Scales>,
    top: f64,
) {
    let points = found.points(pair);
    let Some(scales) = scales.filter(|_| !points.is_empty()) else {
        let words = format!("{}: nobody has both.", difference(analysed, pair));
        return text(svg, (WIDTH / 2.0, top + PANEL / 2.0), "middle", 14, &words);
    };
    let frame = Frame { top, scales };
    frame.axes(svg, &format!("{} / {}", difference(analysed, pair), analysed.unit), analysed.unit);
    frame.lines(svg, pair);
    for point in &points {
        let who = found.subjects.get(point.subject).and_then(|row| analysed.data.rows.get(*row));
        frame.point(svg, point, who.map_or("", |row| row.subject.as_str()));
    }
}

/// The scales of all panels, so that what looks larger is larger.
#[derive(Debug, Clone, Copy)]
struct Scales {
    x: (f64, f64),
    y: (f64, f64),
    steps: (f64, f64),
}

impl Scales {
    /// `None` where nobody has both readings of any pair.
    fn of(found: &Agreeing, pairs: &[Limits]) -> Option<Self> {
        // The line of no difference is always in the picture.
        let (mut means, mut values) = (Vec::new(), vec![0.0]);
        for pair in pairs {
            for point in found.points(pair) {
                means.push(point.mean);
                values.push(point.difference);
            }
            let intervals = [pair.bias_ci, pair.lower_ci, pair.upper_ci].into_iter().flatten();
            values.extend(intervals.flat_map(|interval| [interval.lower, interval.upper]));
            values.extend([pair.lower, pair.upper].into_iter().flatten());
        }
        let (x, y) = (padded(extent(&means)?), padded(extent(&values)?));
        Some(Self { x, y, steps: (nice_step(x.1 - x.0), nice_step(y.1 - y.0)) })
    }
}

/// A panel.
struct Frame {
    top: f64,
    scales: Scales,
}

impl Frame {
    fn at_x(&self, mean: f64) -> f64 {
        LEFT + (mean - self.scales.x.0) / (self.scales.x.1 - self.scales.x.0) * (WIDTH - LEFT - RIGHT)
    }

    fn at_y(&self, difference: f64) -> f64 {
        self.top + PANEL * (1.0 - (difference - self.scales.y.0) / (self.scales.y.1 - self.scales.y.0))
    }

    fn axes(&self, svg: &mut String, name: &str, unit: &str) {
        let (end, base) = (WIDTH - RIGHT, self.top + PANEL);
        for value in ticks(self.scales.y, self.scales.steps.1) {
            let y = self.at_y(value);
            let _ = writeln!(svg, r##"<line x1="{LEFT}" x2="{end:.1}" y1="{y:.1}" y2="{y:.1}" stroke="#ddd"/>"##);
            text(svg, (LEFT - 8.0, y + 4.0), "end", 11, &fixed(value, decimals_of(self.scales.steps.1)));
        }
        for value in ticks(self.scales.x, self.scales.steps.0) {
            let (x, low) = (self.at_x(value), base + 5.0);
            let _ = writeln!(svg, r##"<line x1="{x:.1}" x2="{x:.1}" y1="{base:.1}" y2="{low:.1}" stroke="#111"/>"##);
            text(svg, (x, base + 19.0), "middle", 11, &fixed(value, decimals_of(self.scales.steps.0)));
        }
        let _ = writeln!(svg, r##"<line x1="{LEFT}" x2="{end:.1}" y1="{base:.1}" y2="{base:.1}" stroke="#111"/>"##);
        let (middle, name) = (self.top + PANEL / 2.0, escape(name));
        let _ = writeln!(
            svg,
            r#"<text transform="translate(18 {middle:.1}) rotate(-90)" text-anchor="middle" font-size="12">{name}</text>"#
        );
        text(svg, ((LEFT + end) / 2.0, base + 37.0), "middle", 12, &format!("mean of the two / {unit}"));
    }

    fn lines(&self, svg: &mut String, pair: &Limits) {
        let decimals = decimals_for(pair.sd.unwrap_or(0.0));
        self.line(svg, Some(0.0), ZERO);
        let lines = [
            ("upper limit", pair.upper, pair.upper_ci, LIMIT),
            ("bias", pair.bias, pair.bias_ci, BIAS),
            ("lower limit", pair.lower, pair.lower_ci, LIMIT),
        ];
        for (.., ci, _) in lines {
            self.band(svg, ci);
        }
        // Names that would run into one another move down.
        let mut free = f64::NEG_INFINITY;
        for (name, value, _, style) in lines {
            self.line(svg, value, style);
            if let Some(value) = value {
                let y = (self.at_y(value) + 4.0).max(free);
                free = y + 13.0;
                text(svg, (WIDTH - RIGHT + 8.0, y), "start", 11, &format!("{name} {}", fixed(value, decimals)));
            }
        }
    }

    fn line(&self, svg: &mut String, value: Option<f64>, style: &str) {
        let (Some(value), end) = (value, WIDTH - RIGHT) else { return };
        let y = self.at_y(value);
        let _ = writeln!(svg, r#"<line x1="{LEFT}" x2="{end:.1}" y1="{y:.1}" y2="{y:.1}" {style}/>"#);
    }

    fn band(&self, svg: &mut String, ci: Option<Interval>) {
        let Some(ci) = ci else { return };
        let (y, width) = (self.at_y(ci.upper), WIDTH - RIGHT - LEFT);
        let height = self.at_y(ci.lower) - y;
        let _ = writeln!(
            svg,
            r##"<rect x="{LEFT}" y="{y:.1}" width="{width:.1}" height="{height:.1}" fill="#111" fill-opacity="0.09"/>"##
        );
    }

    fn point(&self, svg: &mut String, point: &Point, who: &str) {
        let (x, y, who) = (self.at_x(point.mean), self.at_y(point.difference), escape(who));
        let _ = writeln!(
            svg,
            r##"<circle cx="{x:.1}" cy="{y:.1}" r="3.4" fill="none" stroke="#333" stroke-width="1.2"><title>{who}</title></circle>"##
        );
    }
}

const ZERO: &str = r##"stroke="#999" stroke-width="0.8""##;
const BIAS: &str = r##"stroke="#111" stroke-width="2""##;
const LIMIT: &str = r##"stroke="#111" stroke-width="1.6" stroke-dasharray="7 4""##;

/// The multiples of a step within an extent.
fn ticks((low, high): (f64, f64), step: f64) -> Vec<f64> {
    let first = (low / step).ceil();
    let count = ((high / step).floor() - first).clamp(0.0, 40.0) as u32;
    (0..=count).map(|at| (first + f64::from(at)) * step).filter(|tick| *tick <= high).collect()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn ticks_lie_within() {
        assert_eq!(ticks((-2.1, 4.9), 2.0), [-2.0, 0.0, 2.0, 4.0]);
        assert!(ticks((0.2, 0.9), 1.0).is_empty());
    }
}
