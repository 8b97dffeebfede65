//! Pictures of a result.
//!
//! Invariants: everything that comes from the study is escaped; nothing is told by colour alone; what was left out is
//! said in the picture.

mod differences;
mod frame;
mod png;
mod profiles;
mod sheet;

pub use png::png;

use super::analysis::Analysed;
use super::text::clean;
use crate::method::Outcome;

/// The picture that belongs to a result, as an SVG document.
pub fn svg(analysed: &Analysed<'_>) -> String {
    match &analysed.outcome {
        Outcome::RepeatedMeasures(found) => profiles::draw(analysed, &found.bands()),
        Outcome::Ranks(found) => profiles::draw(analysed, &[found.bands()]),
        Outcome::Agreement(found) => differences::draw(analysed, found),
    }
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
}
