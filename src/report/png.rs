//! Plots as pictures of dots: the same SVG, drawn with a font of our own so that every machine draws the same.

use std::sync::{Arc, OnceLock};

use resvg::tiny_skia::{Pixmap, Transform};
use resvg::usvg::{Options, Tree, fontdb};

use super::ReportError;
use super::paint::plain_css;
use super::plots::Plot;

/// Dots per unit of the picture: sharp on paper at the width of a page.
const DOTS_PER_UNIT: u16 = 2;

/// Latin, Greek, arrows and mathematical signs of DejaVu Sans; its licence stands beside it.
const FONT: &[u8] = include_bytes!("../../assets/DejaVuSans-subset.ttf");

fn fonts() -> Arc<fontdb::Database> {
    static FONTS: OnceLock<Arc<fontdb::Database>> = OnceLock::new();
    let load = || {
        let mut fonts = fontdb::Database::new();
        fonts.load_font_data(FONT.to_vec());
        fonts.set_sans_serif_family("DejaVu Sans");
        Arc::new(fonts)
    };
    FONTS.get_or_init(load).clone()
}

/// Returns a plot as PNG, on light paper.
///
/// # Errors
/// `Plot` where the picture cannot be drawn.
pub(crate) fn png(plot: &Plot) -> Result<Vec<u8>, ReportError> {
    let failed = |found: String| ReportError::Plot { plot: plot.name, found };
    let options = Options { fontdb: fonts(), font_family: "DejaVu Sans".to_owned(), ..Options::default() };
    // Screens of both kinds are for browsers: here the light colours stand alone.
    let svg = plot.file_with(&plain_css());
    let tree = Tree::from_str(&svg, &options).map_err(|error| failed(error.to_string()))?;
    let (wide, high) = (plot.size.0 * u32::from(DOTS_PER_UNIT), plot.size.1 * u32::from(DOTS_PER_UNIT));
    let mut dots = Pixmap::new(wide, high).ok_or_else(|| failed("no room for the picture".to_owned()))?;
    resvg::render(&tree, Transform::from_scale(DOTS_PER_UNIT.into(), DOTS_PER_UNIT.into()), &mut dots.as_mut());
    dots.encode_png().map_err(|error| failed(error.to_string()))
}
