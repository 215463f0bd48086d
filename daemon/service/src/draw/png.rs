//! The same drawing as a picture, for readers of mail that show no SVG.

use resvg::tiny_skia::{Pixmap, Transform};
use resvg::usvg::{Options, Tree, fontdb};
use std::sync::{Arc, OnceLock};

/// Why a drawing could not become a picture.
#[derive(Debug, thiserror::Error)]
pub enum CannotDraw {
    /// The drawing is not what it should be: a fault of ours.
    #[error("cannot read the drawing")]
    Drawing(#[from] resvg::usvg::Error),
    /// No room for the picture.
    #[error("cannot make a picture of {0} by {1} points")]
    Size(u32, u32),
    /// Encoding failed.
    #[error("cannot encode the picture: {0}")]
    Encoding(String),
}

/// The one font that is always there, because a server often has none.
fn fonts() -> Arc<fontdb::Database> {
    static FONTS: OnceLock<Arc<fontdb::Database>> = OnceLock::new();
    FONTS
        .get_or_init(|| {
            let mut fonts = fontdb::Database::new();
            fonts.load_font_data(dejavu::sans::regular().to_vec());
            fonts.load_font_data(dejavu::sans::bold().to_vec());
            fonts.set_sans_serif_family("DejaVu Sans");
            Arc::new(fonts)
        })
        .clone()
}

/// Renders an SVG drawing at `scale` points per unit.
pub fn png(svg: &str, scale: f32) -> Result<Vec<u8>, CannotDraw> {
    let tree = Tree::from_str(svg, &Options { fontdb: fonts(), ..Options::default() })?;
    let size = tree.size().to_int_size().scale_by(scale).ok_or(CannotDraw::Size(0, 0))?;
    let mut picture = Pixmap::new(size.width(), size.height())
        .ok_or(CannotDraw::Size(size.width(), size.height()))?;
    resvg::render(&tree, Transform::from_scale(scale, scale), &mut picture.as_mut());
    picture.encode_png().map_err(|error| CannotDraw::Encoding(error.to_string()))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn words_are_drawn_without_any_font_installed() {
        let with = |text: &str| {
            png(&format!("<svg xmlns='http://www.w3.org/2000/svg' viewBox='0 0 200 40' width='200' height='40'>\
                 <rect width='200' height='40' fill='#fff'/><text x='5' y='30' font-family='DejaVu Sans'>{text}</text></svg>"), 1.0)
            .unwrap()
        };
        assert_ne!(with("QT 412 ms"), with(""), "the text left no ink");
    }

    #[test]
    fn a_broken_drawing_is_an_error() {
        assert!(png("<svg", 1.0).is_err());
    }
}
