//! Drawings, each made once as SVG and used three ways: on the page, in the report, and (as a PNG) in a mail.
//!
//! Black on white with words and weight; nothing depends on colour, so a grey print says the same.

mod beats;
mod paper;
mod png;
mod tide;

pub use beats::beats;
pub use paper::{PAPER_MM_PER_MV, PAPER_MM_PER_S, paper};
pub use png::{CannotDraw, png};
pub use tide::tide;

use std::fmt::Write;

/// A polyline through finite points; a gap where a value is missing. Coordinates in the drawing's own units,
/// kept to hundredths, which is finer than any printer at the sizes used here.
fn path(points: impl Iterator<Item = (f64, f64)>) -> String {
    let mut d = String::new();
    let mut pen_down = false;
    for (x, y) in points {
        if !(x.is_finite() && y.is_finite()) {
            pen_down = false;
            continue;
        }
        let _ = write!(d, "{}{x:.2} {y:.2}", if pen_down { "L" } else { "M" }); // a String can't fail
        pen_down = true;
    }
    d
}
