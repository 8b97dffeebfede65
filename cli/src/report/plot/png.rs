//! A picture as PNG.
//!
//! Invariant: its letters come from a font that is compiled in, so that it looks the same on every machine and no word is
//! lost where there is no font.

use resvg::{tiny_skia, usvg};

/// Pixels to a unit of the SVG.
const SCALE: f32 = 2.0;
const FAMILY: &str = "DejaVu Sans Condensed";

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
    let size = tree.size().to_int_size().scale_by(SCALE).ok_or("the picture is too large")?;
    let mut pixels = tiny_skia::Pixmap::new(size.width(), size.height()).ok_or("the picture is too large")?;
    resvg::render(&tree, tiny_skia::Transform::from_scale(SCALE, SCALE), &mut pixels.as_mut());
    pixels.encode_png().map_err(|error| error.to_string())
}
