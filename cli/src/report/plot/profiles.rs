//! Profiles: each subject's line and the mean with its within-subject band, a panel for each group and each combination
//! of the other within factors; below, where there are several, their means together.
//!
//! Invariants: shapes tell by line, weight and mark, not by colour, so that the plot reads in grey; what was left out is
//! drawn where there is something to draw and a group to draw it in.

use std::fmt::Write as _;

use revisant_analysis::anova::Band;

use super::escape;
use super::frame::{Area, Frame, Scales};
use super::sheet::{LEFT, RIGHT, Sheet, WIDTH, text};
use crate::dataset::{Dataset, Factor, Row, VISIT, product};
use crate::report::analysis::Analysed;
use crate::report::number::{percent, plain};
use crate::report::text::count;

const INSIDE: f64 = WIDTH - LEFT - RIGHT;
/// From an axis down: ticks, up to three rows of labels, the axis's name, the legend.
const UNDER: f64 = 104.0;
/// The height of the one panel, and of the means together.
const TALL: f64 = 340.0;
/// The height of one of several panels.
const LOW: f64 = 190.0;
/// From the bottom of a panel to the top of the next: labels, and the next one's title.
const BETWEEN: f64 = 78.0;
const GAP: f64 = 16.0;
/// How many lines of means a frame holds.
const SERIES_IN_A_FRAME: usize = 6;

/// The picture as an SVG document.
pub(super) fn draw(analysed: &Analysed<'_>, bands: &[Vec<Band>]) -> String {
    let who = count(analysed.used() as u64, "subject");
    let sheet = Sheet::of(analysed, format!("{} ({}): profiles of {who}", analysed.label, analysed.unit));
    let mut svg = String::new();
    let picture = Picture::of(analysed, bands);
    let bottom = match (scales(analysed, bands, &picture), picture.panels.len()) {
        (None, _) => {
            text(&mut svg, (WIDTH / 2.0, sheet.top + TALL / 2.0), "middle", 14, "There are no readings.");
            sheet.top + TALL + UNDER
        }
        (Some(scales), 0 | 1) => picture.one(&mut svg, sheet.top, &scales),
        (Some(scales), _) => picture.several(&mut svg, sheet.top, &scales),
    };
    sheet.around(&svg, bottom)
}

/// One group at one combination of the levels of the within factors that are not on the axis.
struct Panel {
    title: String,
    group: Vec<usize>,
    /// What its group, and its other within levels, are called.
    named: (String, String),
    /// By level on the axis: which cell.
    cells: Vec<usize>,
    bands: Vec<Band>,
}

struct Picture<'a> {
    data: &'a Dataset,
    panels: Vec<Panel>,
    mean: String,
}

/// The factor on the axis: the visits, or the first.
fn axis(data: &Dataset) -> usize {
    data.within.iter().position(|factor| factor.code == VISIT).unwrap_or(0)
}

impl<'a> Picture<'a> {
    fn of(analysed: &'a Analysed<'_>, bands: &[Vec<Band>]) -> Self {
        let data = &analysed.data;
        let x = axis(data);
        let cells = product(&data.within);
        let mut others: Vec<Vec<usize>> = Vec::new();
        for cell in &cells {
            let other = without(cell, x);
            if !others.contains(&other) {
                others.push(other);
            }
        }
        let factors: Vec<&Factor> =
            data.within.iter().enumerate().filter(|(at, _)| *at != x).map(|(_, factor)| factor).collect();
        let mut panels = Vec::new();
        for (group, bands) in product(&data.between).into_iter().zip(bands) {
            for other in &others {
                let own: Vec<usize> =
                    cells.iter().enumerate().filter(|(_, cell)| without(cell, x) == *other).map(|(at, _)| at).collect();
                let bands = own.iter().filter_map(|cell| bands.get(*cell).copied()).collect();
                let named = (levels(data.between.iter().zip(&group)), levels(factors.iter().copied().zip(other)));
                let title = [named.0.as_str(), named.1.as_str()].into_iter().filter(|name| !name.is_empty());
                let title = title.collect::<Vec<_>>().join(", ");
                panels.push(Panel { title, group: group.clone(), named, cells: own, bands });
            }
        }
        let level = plain(percent(analysed.analysis.confidence));
        Self { data, panels, mean: format!("mean with {level} % within-subject band (Morey 2008)") }
    }

    /// One panel over the whole width; where it ends.
    fn one(&self, svg: &mut String, top: f64, scales: &Scales) -> f64 {
        let frame = Frame { area: Area { left: LEFT, top, width: INSIDE, height: TALL }, scales };
        frame.y_axis(svg, true);
        frame.x_axis(svg, true);
        if let Some(panel) = self.panels.first() {
            self.panel(svg, frame, panel);
        }
        self.legend(svg, top + TALL + 88.0);
        top + TALL + UNDER
    }

    /// A panel for each, then their means together; where it ends.
    fn several(&self, svg: &mut String, top: f64, scales: &Scales) -> f64 {
        let grid = Grid::of(self.panels.len(), top);
        for (at, panel) in self.panels.iter().enumerate() {
            let frame = Frame { area: grid.area(at), scales };
            frame.y_axis(svg, grid.first(at));
            frame.x_axis(svg, false);
            self.panel(svg, frame, panel);
            let who = self.rows(panel).filter(|row| row.complete()).count();
            let title = format!("{} (n = {who})", panel.title);
            text(svg, (frame.area.left, frame.area.top - 6.0), "start", 12, &title);
        }
        let bottom = grid.bottom();
        self.legend(svg, bottom);
        self.together(svg, bottom + 46.0, scales)
    }

    fn rows<'p>(&'p self, panel: &'p Panel) -> impl Iterator<Item = &'p Row> {
        let own = |row: &&Row| row.group.iter().zip(&panel.group).all(|(level, own)| *level == Some(*own));
        self.data.rows.iter().filter(own)
    }

    fn panel(&self, svg: &mut String, frame: Frame<'_>, panel: &Panel) {
        for row in self.rows(panel) {
            let value = |cell: &usize| row.cells.get(*cell)?.as_ref().ok().copied();
            let along = panel.cells.iter().zip(&frame.scales.positions);
            let points: Vec<Option<String>> =
                along.map(|(cell, position)| Some(frame.point(*position, value(cell)?))).collect();
            let style = if row.complete() { COMPLETE } else { INCOMPLETE };
            let who = escape(&row.subject);
            // A line across a visit that is missing would look like a reading there.
            for run in points.split(Option::is_none) {
                stretch(svg, &run.iter().flatten().map(String::as_str).collect::<Vec<_>>(), style, &who);
            }
        }
        mean(svg, frame, &panel.bands);
    }

    /// The means of the panels in one frame, told apart by dash and mark; more than can be told apart in a frame for each
    /// combination of the other within factors. Where it ends.
    fn together(&self, svg: &mut String, top: f64, scales: &Scales) -> f64 {
        text(svg, (LEFT, top - 8.0), "start", 13, "Means together, with their within-subject bands");
        let mut names: Vec<&str> = self.panels.iter().map(|panel| panel.named.0.as_str()).collect();
        names.dedup();
        if self.panels.len() <= SERIES_IN_A_FRAME || names.len() == self.panels.len() || names.len() < 2 {
            let frame = Frame { area: Area { left: LEFT, top, width: INSIDE, height: TALL - 60.0 }, scales };
            frame.y_axis(svg, true);
            frame.x_axis(svg, true);
            for (at, panel) in self.panels.iter().enumerate() {
                series(svg, frame, &panel.bands, at, self.panels.len());
            }
            let names: Vec<&str> = self.panels.iter().map(|panel| panel.title.as_str()).collect();
            return marks(svg, top + frame.area.height + 88.0, &names);
        }
        let others = self.panels.len() / names.len();
        let grid = Grid::of(others, top);
        for at in 0..others {
            let frame = Frame { area: grid.area(at), scales };
            frame.y_axis(svg, grid.first(at));
            frame.x_axis(svg, false);
            let own: Vec<&Panel> = self.panels.iter().skip(at).step_by(others).collect();
            for (at, panel) in own.iter().enumerate() {
                series(svg, frame, &panel.bands, at, own.len());
            }
            let title = own.first().map_or("", |panel| panel.named.1.as_str());
            text(svg, (frame.area.left, frame.area.top - 6.0), "start", 12, title);
        }
        marks(svg, grid.bottom(), &names)
    }

    fn legend(&self, svg: &mut String, y: f64) {
        let left = self.data.rows.iter().any(|row| !row.complete() && row.some());
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
        entry(svg, MEAN, &self.mean);
    }
}

/// `band, left`
fn levels<'f>(named: impl Iterator<Item = (&'f Factor, &'f usize)>) -> String {
    named.filter_map(|(factor, level)| factor.labels.get(*level).cloned()).collect::<Vec<_>>().join(", ")
}

/// Several frames below and beside one another.
struct Grid {
    across: usize,
    frames: usize,
    top: f64,
}

impl Grid {
    fn of(frames: usize, top: f64) -> Self {
        let across = if matches!(frames, 1 | 2 | 4) { 2 } else { 3 };
        Self { across, frames, top: top + 20.0 }
    }

    fn area(&self, at: usize) -> Area {
        let width = (INSIDE - GAP * (self.across as f64 - 1.0)) / self.across as f64;
        let left = LEFT + (at % self.across) as f64 * (width + GAP);
        Area { left, top: self.top + (at / self.across) as f64 * (LOW + BETWEEN), width, height: LOW }
    }

    /// Whether a frame stands first in its row.
    fn first(&self, at: usize) -> bool {
        at.is_multiple_of(self.across)
    }

    /// Below the labels of the last row.
    fn bottom(&self) -> f64 {
        self.top + self.frames.div_ceil(self.across) as f64 * (LOW + BETWEEN) - 22.0
    }
}

/// The levels of a cell but that on the axis.
fn without(cell: &[usize], x: usize) -> Vec<usize> {
    cell.iter().enumerate().filter(|(at, _)| *at != x).map(|(_, level)| *level).collect()
}

/// Scales that hold every line and band.
fn scales(analysed: &Analysed<'_>, bands: &[Vec<Band>], picture: &Picture<'_>) -> Option<Scales> {
    let data = picture.data;
    let factor = data.within.get(axis(data))?;
    let days = factor.code == VISIT;
    let evenly = || (0..factor.levels.len()).map(|level| level as f64).collect();
    let positions = data.positions.clone().filter(|_| days).unwrap_or_else(evenly);
    let drawn = data.rows.iter().filter(|row| row.some());
    let mut values: Vec<f64> =
        drawn.flat_map(|row| &row.cells).filter_map(|cell| cell.as_ref().ok()).copied().collect();
    for band in bands.iter().flatten() {
        values.extend(band.ci.map(|ci| [ci.lower, ci.upper]).into_iter().flatten());
    }
    let mut scales = Scales::of(positions, &values)?;
    scales.name = if days { "visit · days after day 0".to_owned() } else { factor.code.clone() };
    scales.measure = format!("{} / {}", analysed.label, analysed.unit);
    (scales.labels, scales.days) = (factor.labels.clone(), days);
    Some(scales)
}

const COMPLETE: &str = r##"fill="none" stroke="#777" stroke-width="0.9" stroke-opacity="0.75""##;
const INCOMPLETE: &str = r##"fill="none" stroke="#777" stroke-width="0.9" stroke-dasharray="2 3""##;
const MEAN: &str = r##"fill="none" stroke="#111" stroke-width="2.6""##;
const SERIES: &str = r##"fill="none" stroke="#111" stroke-width="1.8""##;

fn mean(svg: &mut String, frame: Frame<'_>, bands: &[Band]) {
    let along = || bands.iter().zip(&frame.scales.positions);
    let upper = along().filter_map(|(band, position)| Some(frame.point(*position, band.ci?.upper)));
    let lower = along().rev().filter_map(|(band, position)| Some(frame.point(*position, band.ci?.lower)));
    let outline: Vec<String> = upper.chain(lower).collect();
    if outline.len() > 2 {
        let _ = writeln!(svg, r##"<polygon points="{}" fill="#111" fill-opacity="0.16"/>"##, outline.join(" "));
    }
    let means: Vec<String> = along().filter_map(|(band, position)| Some(frame.point(*position, band.mean?))).collect();
    if means.len() > 1 {
        let _ = writeln!(svg, r#"<polyline points="{}" {MEAN}/>"#, means.join(" "));
    }
    for mean in &means {
        let (x, y) = mean.split_once(',').unwrap_or_default();
        let _ = writeln!(svg, r##"<circle cx="{x}" cy="{y}" r="4" fill="#111"/>"##);
    }
}

/// One line of means, moved a little aside so that the bands of several can be told apart.
fn series(svg: &mut String, frame: Frame<'_>, bands: &[Band], at: usize, of: usize) {
    let aside = (at as f64 - (of as f64 - 1.0) / 2.0) * (12.0 / of as f64).min(5.0);
    let place = |position: f64| frame.at_x(position) + aside;
    let along = || bands.iter().zip(&frame.scales.positions);
    let means: Vec<(f64, f64)> =
        along().filter_map(|(band, position)| Some((place(*position), frame.at_y(band.mean?)))).collect();
    for (band, position) in along() {
        let Some(ci) = band.ci else { continue };
        let (x, upper, lower) = (place(*position), frame.at_y(ci.upper), frame.at_y(ci.lower));
        let _ = writeln!(
            svg,
            r##"<path d="M{x:.1} {upper:.1}V{lower:.1}M{:.1} {upper:.1}h6M{:.1} {lower:.1}h6" stroke="#777" fill="none"/>"##,
            x - 3.0,
            x - 3.0
        );
    }
    let line: Vec<String> = means.iter().map(|(x, y)| format!("{x:.1},{y:.1}")).collect();
    if line.len() > 1 {
        let _ = writeln!(svg, r#"<polyline points="{}" {SERIES} stroke-dasharray="{}"/>"#, line.join(" "), dash(at));
    }
    for point in means {
        mark(svg, point, at);
    }
}

/// What each dash and mark is; where that ends.
fn marks(svg: &mut String, top: f64, names: &[&str]) -> f64 {
    let (mut x, mut y) = (LEFT, top);
    for (at, name) in names.iter().enumerate() {
        let wide = 56.0 + name.chars().count() as f64 * 6.2;
        if x > LEFT && x + wide > WIDTH - RIGHT {
            (x, y) = (LEFT, y + 18.0);
        }
        let _ = writeln!(
            svg,
            r#"<line x1="{x:.1}" x2="{:.1}" y1="{y:.1}" y2="{y:.1}" {SERIES} stroke-dasharray="{}"/>"#,
            x + 30.0,
            dash(at)
        );
        mark(svg, (x + 15.0, y), at);
        text(svg, (x + 36.0, y + 4.0), "start", 11, name);
        x += wide;
    }
    y + 16.0
}

/// With five marks and four dashes twenty lines can be told apart.
fn dash(at: usize) -> &'static str {
    ["none", "8 4", "2 3", "10 3 2 3"][at % 4]
}

fn mark(svg: &mut String, (x, y): (f64, f64), at: usize) {
    let shape = match at % 5 {
        0 => format!(r##"<circle cx="{x:.1}" cy="{y:.1}" r="4" fill="#111"/>"##),
        1 => format!(
            r##"<rect x="{:.1}" y="{:.1}" width="8" height="8" fill="#fff" stroke="#111" stroke-width="1.5"/>"##,
            x - 4.0,
            y - 4.0
        ),
        2 => format!(r##"<path d="M{x:.1} {:.1}l5 9h-10z" fill="#fff" stroke="#111" stroke-width="1.5"/>"##, y - 5.5),
        3 => format!(r##"<path d="M{x:.1} {:.1}l5 5l-5 5l-5 -5z" fill="#111"/>"##, y - 5.0),
        _ => format!(
            r##"<path d="M{:.1} {:.1}l8 8m-8 0l8 -8" fill="none" stroke="#111" stroke-width="1.8"/>"##,
            x - 4.0,
            y - 4.0
        ),
    };
    svg.push_str(&shape);
    svg.push('\n');
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
