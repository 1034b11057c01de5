//! Turns an SVG into a PNG without the system's fonts: the two faces it needs are compiled in.
//! Owns the rasterising; never decides what is drawn.

use std::sync::{Arc, OnceLock};

use resvg::tiny_skia::{Color, Pixmap, Transform};
use resvg::usvg::{Options, Tree, fontdb};

/// DejaVu Sans 2.37, cut down to Latin-1, Greek and the signs used here; licence in `fonts/LICENSE`.
static REGULAR: &[u8] = include_bytes!("fonts/DejaVuSans-subset.ttf");
static BOLD: &[u8] = include_bytes!("fonts/DejaVuSans-Bold-subset.ttf");

/// Name of the compiled-in face.
pub const FONT_FAMILY: &str = "DejaVu Sans";

/// Why an SVG could not be turned into pixels.
#[derive(Debug, thiserror::Error)]
pub enum PngError {
    /// The text is no SVG.
    #[error("the drawing is not valid svg: {0}")]
    Svg(#[from] resvg::usvg::Error),
    /// The width is zero or the picture does not fit into memory.
    #[error("a picture {width} pixels wide is not possible")]
    Size {
        /// Pixels asked for.
        width: u32,
    },
    /// The pixels could not be packed.
    #[error("the picture could not be packed: {0}")]
    Pack(String),
}

/// The SVG as PNG bytes on white, `width` pixels wide, the height in proportion.
///
/// # Errors
/// When the text is no SVG, or the width is zero or too large.
pub fn png(svg: &str, width: u32) -> Result<Vec<u8>, PngError> {
    let options = Options {
        font_family: FONT_FAMILY.to_owned(),
        fontdb: fonts(),
        ..Options::default()
    };
    let tree = Tree::from_str(svg, &options)?;
    let scale = width as f32 / tree.size().width();
    let height = (tree.size().height() * scale).ceil() as u32;
    let mut pixels = Pixmap::new(width, height).ok_or(PngError::Size { width })?;
    pixels.fill(Color::WHITE);
    let transform = Transform::from_scale(scale, scale);
    resvg::render(&tree, transform, &mut pixels.as_mut());
    pixels
        .encode_png()
        .map_err(|error| PngError::Pack(error.to_string()))
}

fn fonts() -> Arc<fontdb::Database> {
    static FONTS: OnceLock<Arc<fontdb::Database>> = OnceLock::new();
    let load = || {
        let mut fonts = fontdb::Database::new();
        for face in [REGULAR, BOLD] {
            fonts.load_font_source(fontdb::Source::Binary(Arc::new(face)));
        }
        fonts.set_sans_serif_family(FONT_FAMILY);
        Arc::new(fonts)
    };
    Arc::clone(FONTS.get_or_init(load))
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Dark pixels of a small drawing.
    fn dark(svg: &str) -> usize {
        let bytes = png(svg, 100).unwrap();
        let pixels = Pixmap::decode_png(&bytes).unwrap();
        assert_eq!(pixels.width(), 100);
        pixels.pixels().iter().filter(|dot| dot.red() < 128).count()
    }

    #[test]
    fn text_is_drawn_from_the_compiled_in_faces_alone() {
        let drawing = |text: &str, weight: &str| {
            format!(
                "<svg xmlns='http://www.w3.org/2000/svg' width='50' height='20'>\
                 <text y='15' font-size='14' font-weight='{weight}'>{text}</text></svg>"
            )
        };
        let (empty, regular, bold) = (
            dark(&drawing("", "normal")),
            dark(&drawing("H", "normal")),
            dark(&drawing("H", "bold")),
        );
        assert_eq!(empty, 0);
        assert!(regular > 20 && bold > regular, "{regular} {bold}");
    }

    #[test]
    fn the_faces_hold_every_sign_the_report_uses() {
        // A missing sign is drawn as an empty box, the same for all of them.
        let drawing = |sign: char, weight: &str| {
            let svg = format!(
                "<svg xmlns='http://www.w3.org/2000/svg' width='20' height='20'>\
                 <text y='15' font-size='14' font-weight='{weight}'>{sign}</text></svg>"
            );
            png(&svg, 100).unwrap()
        };
        for weight in ["normal", "bold"] {
            let missing = drawing('\u{4e00}', weight);
            for sign in "±×·−µΩσχ²°≤≥…–".chars() {
                assert_ne!(drawing(sign, weight), missing, "{sign} {weight}");
            }
        }
    }

    #[test]
    fn what_is_no_svg_is_an_error() {
        assert!(matches!(png("no drawing", 100), Err(PngError::Svg(_))));
        let empty = "<svg xmlns='http://www.w3.org/2000/svg' width='9' height='9'/>";
        assert!(matches!(png(empty, 0), Err(PngError::Size { width: 0 })));
    }
}
