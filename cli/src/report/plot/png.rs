//! A picture as PNG.
//!
//! Invariant: its letters come from a font that is compiled in, so that it looks the same on every machine and no word is
//! lost where there is no font; its memory is bounded.

use resvg::{tiny_skia, usvg};

/// Pixels to a unit of the SVG.
const SCALE: f32 = 2.0;
/// The most pixels that are held at once, four bytes each.
const MOST_PIXELS: u64 = 100_000_000;
/// The family to which the condensed face belongs.
const FAMILY: &str = "DejaVu Sans";

/// An SVG document of our own as the bytes of a PNG file.
///
/// # Errors
/// What is wrong, in words: the picture is too large to be held.
pub fn png(svg: &str) -> Result<Vec<u8>, String> {
    let mut options = usvg::Options { font_family: FAMILY.to_owned(), ..usvg::Options::default() };
    let fonts = options.fontdb_mut();
    fonts.load_font_data(dejavu::sans_condensed::regular().to_vec());
    fonts.set_sans_serif_family(FAMILY);
    let tree = usvg::Tree::from_str(svg, &options).map_err(|error| error.to_string())?;
    let size = tree.size().to_int_size().scale_by(SCALE).ok_or(TOO_LARGE)?;
    if u64::from(size.width()) * u64::from(size.height()) > MOST_PIXELS {
        return Err(TOO_LARGE.to_owned());
    }
    let mut pixels = tiny_skia::Pixmap::new(size.width(), size.height()).ok_or(TOO_LARGE)?;
    resvg::render(&tree, tiny_skia::Transform::from_scale(SCALE, SCALE), &mut pixels.as_mut());
    pixels.encode_png().map_err(|error| error.to_string())
}

const TOO_LARGE: &str = "it would be too large; an SVG file has no such limit";

#[cfg(test)]
mod tests {
    use super::*;

    fn document(height: u32) -> String {
        let name = r#"xmlns="http://www.w3.org/2000/svg" font-family="Helvetica, sans-serif""#;
        format!(r#"<svg {name} width="100" height="{height}"><text x="5" y="20">partial η² − χ²</text></svg>"#)
    }

    #[test]
    fn letters_are_drawn_whatever_fonts_the_machine_has() {
        let (with, without) = (png(&document(40)).unwrap(), png(&document(40).replace("partial η² − χ²", "")).unwrap());
        assert!(with.len() > without.len() + 200, "{} and {}", with.len(), without.len());
    }

    #[test]
    fn a_picture_too_large_to_be_held_is_refused() {
        assert_eq!(png(&document(1_000_000)), Err(TOO_LARGE.to_owned()));
    }
}
