//! The profile plot: each subject's line, and the mean with its within-subject band.
//!
//! Invariants: everything that comes from the study is escaped; shapes tell by line and weight, not by colour, so that
//! the plot reads in grey; what was left out is said in the picture, and drawn where there is something to draw.

use std::fmt::Write as _;

use revisant_analysis::anova::Band;

use super::analysis::Analysed;
use super::differences;
use super::number::{fixed, percent, plain};
use super::text::{clean, count, wrap};
use crate::dataset::{Row, VISIT};
use crate::method::Outcome;

const WIDTH: f64 = 760.0;
const LEFT: f64 = 68.0;
const RIGHT: f64 = 20.0;
const TOP: f64 = 102.0;
const PLOT_HEIGHT: f64 = 340.0;
/// From the axis down: ticks, up to three rows of labels, the axis's name, the legend.
const UNDER: f64 = 104.0;
const LINE_HEIGHT: f64 = 15.0;
/// Characters of the small text that fit into a line.
const FOOT_COLUMNS: usize = 112;
/// Characters of the sentence that fit into a line.
const SENTENCE_COLUMNS: usize = 100;

/// The picture as an SVG document.
pub fn profiles(analysed: &Analysed<'_>) -> String {
    if let Outcome::Agreement(agreeing) = &analysed.outcome {
        return differences::picture(analysed, agreeing);
    }
    let foot = foot(analysed);
    let height = TOP + PLOT_HEIGHT + UNDER + LINE_HEIGHT * (foot.len() as f64 + 1.0);
    let mut svg = head(analysed, height);
    match Frame::of(analysed) {
        Some(frame) => {
            frame.axes(&mut svg, analysed);
            frame.lines(&mut svg, &analysed.data.rows);
            frame.mean(&mut svg, &band(analysed));
            legend(&mut svg, analysed);
        }
        None => text(&mut svg, (WIDTH / 2.0, TOP + PLOT_HEIGHT / 2.0), "middle", 14, "There are no readings."),
    }
    for (at, line) in foot.iter().enumerate() {
        let y = TOP + PLOT_HEIGHT + UNDER + LINE_HEIGHT * (at as f64 + 1.0);
        text(&mut svg, (LEFT, y), "start", 11, line);
    }
    svg.push_str("</svg>\n");
    svg
}

/// Text for XML, with nothing in it that steers anything.
pub fn escape(text: &str) -> String {
    let mut escaped = String::with_capacity(text.len());
    for c in clean(text).chars() {
        match c {
            '&' => escaped.push_str("&amp;"),
            '<' => escaped.push_str("&lt;"),
            '>' => escaped.push_str("&gt;"),
            '"' => escaped.push_str("&quot;"),
            '\'' => escaped.push_str("&#39;"),
            '\u{fffe}' | '\u{ffff}' => escaped.push('\u{fffd}'),
            c => escaped.push(c),
        }
    }
    escaped
}

pub(super) fn text(svg: &mut String, (x, y): (f64, f64), anchor: &str, size: u32, words: &str) {
    let words = escape(words);
    // Writing into a string cannot fail.
    let _ = writeln!(svg, r#"<text x="{x:.1}" y="{y:.1}" text-anchor="{anchor}" font-size="{size}">{words}</text>"#);
}

fn title(analysed: &Analysed<'_>) -> String {
    let who = count(analysed.used() as u64, "subject");
    let what = match analysed.outcome {
        Outcome::Agreement(_) => "differences against means",
        _ => "profiles",
    };
    format!("{} ({}): {what} of {who}", analysed.label, analysed.unit)
}

pub(super) fn head(analysed: &Analysed<'_>, height: f64) -> String {
    let standing = &analysed.standing;
    let cut = standing.cut.as_ref().map_or(String::new(), |cut| format!(", cut {cut}"));
    let day = standing.moment.get(..10).unwrap_or_default();
    let under = format!(
        "{}, analysis {}; records at trail {} of {day}{cut}, plan version {}",
        analysed.study, analysed.analysis.code, standing.trail, analysed.plan.version
    );
    let title_text = title(analysed);
    let mut svg = format!(
        r##"<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 {WIDTH} {height}" width="{WIDTH}" height="{height}" role="img" font-family="Helvetica, Arial, 'DejaVu Sans', sans-serif" fill="#111">
<title>{}</title>
<desc>{}</desc>
<rect width="{WIDTH}" height="{height}" fill="#fff"/>
"##,
        escape(&title_text),
        escape(&analysed.sentence())
    );
    text(&mut svg, (LEFT, 26.0), "start", 17, &title_text);
    text(&mut svg, (LEFT, 46.0), "start", 11, &under);
    for (at, line) in wrap(&analysed.sentence(), SENTENCE_COLUMNS, "").lines().take(2).enumerate() {
        text(&mut svg, (LEFT, 66.0 + LINE_HEIGHT * at as f64), "start", 12, line);
    }
    svg
}

/// What stands under the picture: who was left out and why, and the caution.
pub(super) fn foot(analysed: &Analysed<'_>) -> Vec<String> {
    let left = analysed.data.left_out().len();
    let who = match left {
        0 => "Nobody was left out.".to_owned(),
        _ => format!("{left} of {} left out: {}.", count(analysed.enrolled as u64, "subject"), analysed.left_out()),
    };
    let lines = wrap(&who, FOOT_COLUMNS, "");
    let mut lines: Vec<String> = lines.lines().map(str::to_owned).collect();
    if lines.len() > 6 {
        lines.truncate(5);
        lines.push("… and more; the result itself lists all.".to_owned());
    }
    lines.push(super::analysis::CAUTION.to_owned());
    lines
}

fn band(analysed: &Analysed<'_>) -> Vec<Band> {
    match &analysed.outcome {
        Outcome::RepeatedMeasures(repeated) => repeated.bands().into_iter().next().unwrap_or_default(),
        Outcome::Ranks(ranks) => ranks.bands(),
        // Agreement has a picture of its own.
        Outcome::Agreement(_) => vec![],
    }
}

/// The scales of the picture.
struct Frame {
    positions: Vec<f64>,
    x: (f64, f64),
    y: (f64, f64),
    step: f64,
}

impl Frame {
    fn of(analysed: &Analysed<'_>) -> Option<Self> {
        let levels = analysed.data.within[0].levels.len();
        let positions =
            analysed.data.positions.clone().unwrap_or_else(|| (0..levels).map(|level| level as f64).collect());
        let values = analysed.data.rows.iter().flat_map(|row| &row.cells).filter_map(|cell| cell.as_ref().ok());
        let mut values: Vec<f64> = values.copied().collect();
        for band in band(analysed) {
            values.extend(band.ci.map(|ci| [ci.lower, ci.upper]).into_iter().flatten());
        }
        let (low, high) = extent(&values)?;
        let step = nice_step(if high > low { high - low } else { high.abs().max(1.0) });
        let y = ((low / step).floor() * step, (high / step).ceil() * step);
        let y = if y.0 < y.1 { y } else { (y.0 - step, y.1 + step) };
        Some(Self { x: padded(extent(&positions)?), positions, y, step })
    }

    fn at_x(&self, position: f64) -> f64 {
        LEFT + (position - self.x.0) / (self.x.1 - self.x.0) * (WIDTH - LEFT - RIGHT)
    }

    fn at_y(&self, value: f64) -> f64 {
        TOP + PLOT_HEIGHT * (1.0 - (value - self.y.0) / (self.y.1 - self.y.0))
    }

    fn axes(&self, svg: &mut String, analysed: &Analysed<'_>) {
        let decimals = decimals_of(self.step);
        let steps = ((self.y.1 - self.y.0) / self.step).round() as u32;
        for tick in 0..=steps.min(40) {
            let value = self.y.0 + f64::from(tick) * self.step;
            let y = self.at_y(value);
            let _ = writeln!(
                svg,
                r##"<line x1="{LEFT}" x2="{:.1}" y1="{y:.1}" y2="{y:.1}" stroke="#ddd"/>"##,
                WIDTH - RIGHT
            );
            text(svg, (LEFT - 8.0, y + 4.0), "end", 11, &fixed(value, decimals));
        }
        let middle = TOP + PLOT_HEIGHT / 2.0;
        let name = escape(&format!("{} / {}", analysed.label, analysed.unit));
        let _ = writeln!(
            svg,
            r#"<text transform="translate(18 {middle:.1}) rotate(-90)" text-anchor="middle" font-size="12">{name}</text>"#
        );
        self.x_axis(svg, analysed);
    }

    fn x_axis(&self, svg: &mut String, analysed: &Analysed<'_>) {
        let base = TOP + PLOT_HEIGHT;
        let _ = writeln!(
            svg,
            r##"<line x1="{LEFT}" x2="{:.1}" y1="{base:.1}" y2="{base:.1}" stroke="#111"/>"##,
            WIDTH - RIGHT
        );
        let by_visit = analysed.data.within[0].code == VISIT;
        let mut ends = [f64::NEG_INFINITY; 3];
        for (position, label) in self.positions.iter().zip(&analysed.data.within[0].labels) {
            let x = self.at_x(*position);
            let _ = writeln!(
                svg,
                r##"<line x1="{x:.1}" x2="{x:.1}" y1="{base:.1}" y2="{:.1}" stroke="#111"/>"##,
                base + 5.0
            );
            let words = if by_visit { format!("{label} · {}", plain(*position)) } else { label.clone() };
            let half = words.chars().count() as f64 * 3.2;
            let x = x.clamp(half + 4.0, WIDTH - half - 4.0);
            // Labels that would run into one another go one row down; one that fits nowhere is left to its tick.
            if let Some(row) = ends.iter().position(|end| x - half > *end) {
                ends[row] = x + half + 6.0;
                text(svg, (x, base + 19.0 + 13.0 * row as f64), "middle", 11, &words);
            }
        }
        let rows = ends.iter().filter(|end| end.is_finite()).count();
        let name = if by_visit { "visit · days after day 0" } else { analysed.data.within[0].code.as_str() };
        text(svg, ((LEFT + WIDTH - RIGHT) / 2.0, base + 25.0 + 13.0 * rows as f64), "middle", 12, name);
    }

    fn point(&self, position: f64, value: f64) -> String {
        format!("{:.1},{:.1}", self.at_x(position), self.at_y(value))
    }

    fn lines(&self, svg: &mut String, rows: &[Row]) {
        for row in rows {
            let cells = row.cells.iter().zip(&self.positions);
            let points: Vec<Option<String>> =
                cells.map(|(cell, position)| Some(self.point(*position, *cell.as_ref().ok()?))).collect();
            let style = if row.complete() { COMPLETE } else { INCOMPLETE };
            let who = escape(&row.subject);
            // A line across a visit that is missing would look like a reading there.
            for run in points.split(Option::is_none) {
                stretch(svg, &run.iter().flatten().map(String::as_str).collect::<Vec<_>>(), style, &who);
            }
        }
    }

    fn mean(&self, svg: &mut String, bands: &[Band]) {
        let along = || bands.iter().zip(&self.positions);
        let upper = along().filter_map(|(band, position)| Some(self.point(*position, band.ci?.upper)));
        let lower = along().rev().filter_map(|(band, position)| Some(self.point(*position, band.ci?.lower)));
        let outline: Vec<String> = upper.chain(lower).collect();
        if outline.len() > 2 {
            let _ = writeln!(svg, r##"<polygon points="{}" fill="#111" fill-opacity="0.16"/>"##, outline.join(" "));
        }
        let means: Vec<String> =
            along().filter_map(|(band, position)| Some(self.point(*position, band.mean?))).collect();
        if means.len() > 1 {
            let _ = writeln!(svg, r#"<polyline points="{}" {MEAN}/>"#, means.join(" "));
        }
        for mean in &means {
            let (x, y) = mean.split_once(',').unwrap_or_default();
            let _ = writeln!(svg, r##"<circle cx="{x}" cy="{y}" r="4" fill="#111"/>"##);
        }
    }
}

const COMPLETE: &str = r##"fill="none" stroke="#777" stroke-width="0.9" stroke-opacity="0.75""##;
const INCOMPLETE: &str = r##"fill="none" stroke="#777" stroke-width="0.9" stroke-dasharray="2 3""##;
const MEAN: &str = r##"fill="none" stroke="#111" stroke-width="2.6""##;

fn legend(svg: &mut String, analysed: &Analysed<'_>) {
    let y = TOP + PLOT_HEIGHT + 88.0;
    let level = plain(percent(analysed.analysis.confidence));
    let mean = format!("mean with {level} % within-subject band (Morey 2008)");
    let left = analysed.data.rows.iter().any(|row| !row.complete() && row.cells.iter().any(Result::is_ok));
    let mut x = LEFT;
    let mut entry = |svg: &mut String, style: &str, words: &str| {
        let _ = writeln!(svg, r#"<line x1="{x:.1}" x2="{:.1}" y1="{y:.1}" y2="{y:.1}" {style}/>"#, x + 26.0);
        text(svg, (x + 32.0, y + 4.0), "start", 11, words);
        x += 56.0 + words.chars().count() as f64 * 5.8;
    };
    let one = if left { "one subject, complete" } else { "one subject" };
    entry(svg, COMPLETE, one);
    if left {
        entry(svg, INCOMPLETE, "one subject, left out");
    }
    entry(svg, MEAN, &mean);
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

/// One stretch of a subject's line: visits that follow one another without a gap.
fn stretch(svg: &mut String, points: &[&str], style: &str, who: &str) {
    match points {
        [] => {}
        [one] => {
            let (x, y) = one.split_once(',').unwrap_or_default();
            let _ = writeln!(
                svg,
                r##"<circle cx="{x}" cy="{y}" r="2.2" fill="none" stroke="#777"><title>{who}</title></circle>"##
            );
        }
        points => {
            let points = points.join(" ");
            let _ = writeln!(svg, r#"<polyline points="{points}" {style}><title>{who}</title></polyline>"#);
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn nothing_from_the_study_becomes_markup() {
        assert_eq!(
            escape("<script>\"a\" & 'b'</script>"),
            "&lt;script&gt;&quot;a&quot; &amp; &#39;b&#39;&lt;/script&gt;"
        );
        assert_eq!(escape("a\u{0}b\u{1b}"), "a\u{fffd}b\u{fffd}");
    }

    #[test]
    fn steps_are_round() {
        for (span, step) in [(10.0, 2.0), (1.0, 0.2), (100.0, 20.0), (37.0, 5.0), (0.0031, 0.0005)] {
            assert!((nice_step(span) / step - 1.0).abs() < 1e-9, "{span}: {}", nice_step(span));
        }
        assert_eq!((decimals_of(0.2), decimals_of(5.0), decimals_of(0.0005)), (1, 0, 4));
    }
}
