//! What stands around every picture: title, what was found, who was left out.
//!
//! Invariant: everything that comes from the study is escaped.

use std::fmt::Write as _;

use super::escape;
use crate::report::analysis::{Analysed, CAUTION};
use crate::report::text::{count, wrap};

pub(super) const WIDTH: f64 = 760.0;
pub(super) const LEFT: f64 = 68.0;
pub(super) const RIGHT: f64 = 20.0;
pub(super) const LINE_HEIGHT: f64 = 15.0;
/// Characters of the small text that fit into a line.
const FOOT_COLUMNS: usize = 112;
/// Characters of a sentence that fit into a line.
const SENTENCE_COLUMNS: usize = 100;
/// Lines of sentences that a picture has room for.
const SENTENCE_LINES: usize = 14;

pub(super) fn text(svg: &mut String, (x, y): (f64, f64), anchor: &str, size: u32, words: &str) {
    let words = escape(words);
    // Writing into a string cannot fail.
    let _ = writeln!(svg, r#"<text x="{x:.1}" y="{y:.1}" text-anchor="{anchor}" font-size="{size}">{words}</text>"#);
}

/// A sheet of paper with its words; the picture goes between `top` and `bottom`.
pub(super) struct Sheet {
    title: String,
    under: String,
    said: String,
    sentences: Vec<String>,
    foot: Vec<String>,
    /// Where the words above the picture end.
    pub top: f64,
}

impl Sheet {
    pub fn of(analysed: &Analysed<'_>, title: String) -> Self {
        let standing = &analysed.standing;
        let cut = standing.cut.as_ref().map_or(String::new(), |cut| format!(", cut {cut}"));
        let day = standing.moment.get(..10).unwrap_or_default();
        let under = format!(
            "{}, analysis {}; records at trail {} of {day}{cut}, plan version {}",
            analysed.study, analysed.analysis.code, standing.trail, analysed.plan.version
        );
        let said = analysed.sentences();
        let sentences = said.iter().map(|sentence| wrap(sentence, SENTENCE_COLUMNS, ""));
        let lines = sentences.collect::<Vec<_>>().join("\n");
        let sentences = shortened(lines.lines().map(str::to_owned).collect(), SENTENCE_LINES);
        let top = 72.0 + LINE_HEIGHT * sentences.len().max(2) as f64;
        Self { title, under, said: said.join(" "), sentences, foot: foot(analysed), top }
    }

    /// The whole document around a picture that ends at `bottom`.
    pub fn around(&self, picture: &str, bottom: f64) -> String {
        let height = bottom + LINE_HEIGHT * (self.foot.len() as f64 + 1.0);
        let mut svg = format!(
            r##"<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 {WIDTH} {height}" width="{WIDTH}" height="{height}" role="img" font-family="Helvetica, Arial, 'DejaVu Sans', sans-serif" fill="#111">
<title>{}</title>
<desc>{}</desc>
<rect width="{WIDTH}" height="{height}" fill="#fff"/>
"##,
            escape(&self.title),
            escape(&self.said)
        );
        text(&mut svg, (LEFT, 26.0), "start", 17, &self.title);
        text(&mut svg, (LEFT, 46.0), "start", 11, &self.under);
        for (at, line) in self.sentences.iter().enumerate() {
            text(&mut svg, (LEFT, 66.0 + LINE_HEIGHT * at as f64), "start", 12, line);
        }
        svg.push_str(picture);
        for (at, line) in self.foot.iter().enumerate() {
            text(&mut svg, (LEFT, bottom + LINE_HEIGHT * (at as f64 + 1.0)), "start", 11, line);
        }
        svg.push_str("</svg>\n");
        svg
    }
}

fn shortened(mut lines: Vec<String>, most: usize) -> Vec<String> {
    if lines.len() > most {
        lines.truncate(most.saturating_sub(1));
        lines.push("… and more; the result itself lists all.".to_owned());
    }
    lines
}

/// What stands under the picture: who was left out and why, and the caution.
fn foot(analysed: &Analysed<'_>) -> Vec<String> {
    let left = analysed.data.left_out().len();
    let who = match left {
        0 => "Nobody was left out.".to_owned(),
        _ => format!("{left} of {} left out: {}.", count(analysed.enrolled as u64, "subject"), analysed.left_out()),
    };
    let mut lines = shortened(wrap(&who, FOOT_COLUMNS, "").lines().map(str::to_owned).collect(), 6);
    lines.push(CAUTION.to_owned());
    lines
}
