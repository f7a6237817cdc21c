//! A drawing backend that writes SVG with a tenth of a pixel, text as text and colours as classes.
//!
//! The drawing crate counts whole pixels; every length given to it is ten times the length in the picture.

use std::convert::Infallible;
use std::fmt::Write;

use plotters_backend::text_anchor::{HPos, VPos};
use plotters_backend::{
    BackendColor, BackendCoord, BackendStyle, BackendTextStyle, DrawingBackend, DrawingErrorKind, FontStyle,
    FontTransform,
};

use super::paint::{class_of, plot_css};

/// Steps of the drawing crate per unit of the picture.
pub(crate) const SCALE: i32 = 10;

type Drawn = Result<(), DrawingErrorKind<Infallible>>;

/// Writes the body of a picture into a string.
pub(crate) struct SvgBackend<'a> {
    body: &'a mut String,
    size: (u32, u32),
    /// Shapes in one style that follow each other become one path: (opening of the element, path data).
    pending: Option<(String, String)>,
}

impl<'a> SvgBackend<'a> {
    /// Returns a backend for a picture of `size` units; `body` receives its elements.
    pub(crate) fn new(body: &'a mut String, size: (u32, u32)) -> Self {
        Self { body, size, pending: None }
    }

    fn flush(&mut self) {
        if let Some((open, data)) = self.pending.take() {
            self.body.push_str(&open);
            self.body.push_str(&data);
            self.body.push_str("\"/>\n");
        }
    }

    fn add(&mut self, open: String, data: &str) {
        match &mut self.pending {
            Some((current, collected)) if *current == open => collected.push_str(data),
            _ => {
                self.flush();
                self.pending = Some((open, data.to_owned()));
            }
        }
    }

    fn shape<S: BackendStyle>(&mut self, style: &S, filled: bool, data: &str) {
        let color = style.color();
        if color.alpha <= 0.0 {
            return;
        }
        let class = class_of(color.rgb);
        let opacity = if color.alpha < 1.0 { format!(" opacity=\"{:.2}\"", color.alpha) } else { String::new() };
        let open = if filled {
            format!("<path class=\"f-{class}\"{opacity} d=\"")
        } else {
            let width = tenths(i32::try_from(style.stroke_width()).unwrap_or(SCALE));
            format!("<path class=\"s-{class}\" stroke-width=\"{width}\"{opacity} d=\"")
        };
        self.add(open, data);
    }
}

impl Drop for SvgBackend<'_> {
    fn drop(&mut self) {
        self.flush();
    }
}

/// Returns a length in picture units, without a needless decimal.
fn tenths(length: i32) -> String {
    let sign = if length < 0 { "-" } else { "" };
    let (whole, tenth) = (length.unsigned_abs() / SCALE.unsigned_abs(), length.unsigned_abs() % SCALE.unsigned_abs());
    if tenth == 0 { format!("{sign}{whole}") } else { format!("{sign}{whole}.{tenth}") }
}

fn polyline(points: impl IntoIterator<Item = BackendCoord>) -> String {
    let mut data = String::new();
    let mut last = None;
    for (x, y) in points {
        // Relative steps are shorter; the tenths are integers, so nothing adds up to an error.
        match last {
            None => drop(write!(data, "M{} {}", tenths(x), tenths(y))),
            Some((lx, ly)) => drop(write!(data, "l{} {}", tenths(x - lx), tenths(y - ly))),
        }
        last = Some((x, y));
    }
    data
}

/// Returns text that is safe inside an element or a quoted attribute.
pub(crate) fn escaped(text: &str) -> String {
    let mut out = String::with_capacity(text.len());
    for c in text.chars() {
        match c {
            '&' => out.push_str("&amp;"),
            '<' => out.push_str("&lt;"),
            '>' => out.push_str("&gt;"),
            '"' => out.push_str("&quot;"),
            '\'' => out.push_str("&#39;"),
            // XML has no form for control characters.
            c if c.is_control() => out.push('\u{fffd}'),
            c => out.push(c),
        }
    }
    out
}

impl DrawingBackend for SvgBackend<'_> {
    type ErrorType = Infallible;

    fn get_size(&self) -> (u32, u32) {
        (self.size.0 * SCALE.unsigned_abs(), self.size.1 * SCALE.unsigned_abs())
    }

    fn ensure_prepared(&mut self) -> Drawn {
        Ok(())
    }

    fn present(&mut self) -> Drawn {
        self.flush();
        Ok(())
    }

    fn draw_pixel(&mut self, (x, y): BackendCoord, color: BackendColor) -> Drawn {
        self.draw_rect((x, y), (x + 1, y + 1), &color, true)
    }

    fn draw_line<S: BackendStyle>(&mut self, from: BackendCoord, to: BackendCoord, style: &S) -> Drawn {
        self.draw_path([from, to], style)
    }

    fn draw_rect<S: BackendStyle>(&mut self, from: BackendCoord, to: BackendCoord, style: &S, fill: bool) -> Drawn {
        let (wide, high) = (to.0 - from.0, to.1 - from.1);
        let (x, y) = (tenths(from.0), tenths(from.1));
        self.shape(style, fill, &format!("M{x} {y}h{}v{}h{}z", tenths(wide), tenths(high), tenths(-wide)));
        Ok(())
    }

    fn draw_path<S: BackendStyle, I: IntoIterator<Item = BackendCoord>>(&mut self, path: I, style: &S) -> Drawn {
        self.shape(style, false, &polyline(path));
        Ok(())
    }

    fn draw_circle<S: BackendStyle>(&mut self, (x, y): BackendCoord, radius: u32, style: &S, fill: bool) -> Drawn {
        let radius = i32::try_from(radius).unwrap_or(SCALE);
        let (r, left, top) = (tenths(radius), tenths(x - radius), tenths(y));
        let (there, back) = (tenths(2 * radius), tenths(-2 * radius));
        self.shape(style, fill, &format!("M{left} {top}a{r} {r} 0 1 0 {there} 0a{r} {r} 0 1 0 {back} 0z"));
        Ok(())
    }

    fn fill_polygon<S: BackendStyle, I: IntoIterator<Item = BackendCoord>>(&mut self, corners: I, style: &S) -> Drawn {
        let data = polyline(corners);
        self.shape(style, true, &format!("{data}z"));
        Ok(())
    }

    fn draw_text<T: BackendTextStyle>(&mut self, text: &str, style: &T, (x, y): BackendCoord) -> Drawn {
        self.flush();
        let size = style.size() / f64::from(SCALE);
        // The anchor is a baseline in SVG: capitals reach about 0.72 of the size above it.
        let drop = match style.anchor().v_pos {
            VPos::Top => 0.74 * size,
            VPos::Center => 0.36 * size,
            VPos::Bottom => -0.1 * size,
        };
        let anchor = match style.anchor().h_pos {
            HPos::Left => "",
            HPos::Center => " text-anchor=\"middle\"",
            HPos::Right => " text-anchor=\"end\"",
        };
        let turn = match style.transform() {
            FontTransform::None => String::new(),
            FontTransform::Rotate90 => format!(" transform=\"rotate(90 {} {})\"", tenths(x), tenths(y)),
            FontTransform::Rotate180 => format!(" transform=\"rotate(180 {} {})\"", tenths(x), tenths(y)),
            FontTransform::Rotate270 => format!(" transform=\"rotate(-90 {} {})\"", tenths(x), tenths(y)),
        };
        let weight = if matches!(style.style(), FontStyle::Bold) { " font-weight=\"600\"" } else { "" };
        let class = class_of(style.color().rgb);
        let _ = writeln!(
            self.body,
            "<text class=\"f-{class}\" x=\"{}\" y=\"{}\" dy=\"{drop:.1}\" font-size=\"{size}\"{anchor}{weight}{turn}>{}</text>",
            tenths(x),
            tenths(y),
            escaped(text)
        );
        Ok(())
    }

    fn estimate_text_size<T: BackendTextStyle>(
        &self,
        text: &str,
        style: &T,
    ) -> Result<(u32, u32), DrawingErrorKind<Infallible>> {
        // The reader's own font is unknown; 0.6 of the size a letter is wider than most, so labels keep apart.
        let letters = u32::try_from(text.chars().count()).unwrap_or(u32::MAX / 1000);
        let tenth_size = (1..=1000u32).find(|size| f64::from(*size) >= style.size()).unwrap_or(1000);
        Ok((letters.saturating_mul(tenth_size) * 6 / 10, tenth_size))
    }
}

/// Returns a whole picture; `title` and `description` are what a screen reader says.
pub(crate) fn picture(size: (u32, u32), id: &str, title: &str, description: &str, body: &str) -> String {
    let (wide, high) = size;
    format!(
        "<svg xmlns=\"http://www.w3.org/2000/svg\" class=\"plot\" viewBox=\"0 0 {wide} {high}\" role=\"img\" \
         aria-labelledby=\"{id}-title {id}-text\">\n<title id=\"{id}-title\">{}</title>\n<desc id=\"{id}-text\">{}</desc>\n{body}</svg>\n",
        escaped(title),
        escaped(description)
    )
}

/// Returns the picture as a file of its own: with its size, its colours and a sheet of paper behind it.
pub(crate) fn standalone(size: (u32, u32), picture: &str) -> String {
    let dark = "@media screen and (prefers-color-scheme:dark){.paper{fill:#14191c}}";
    on_paper(size, picture, &format!("{}{dark}", plot_css()))
}

/// Returns the picture with its size, the given colours and a sheet of light paper behind it.
pub(crate) fn on_paper(size: (u32, u32), picture: &str, css: &str) -> String {
    let (wide, high) = size;
    let head = format!("<svg width=\"{wide}\" height=\"{high}\" ");
    let sheet = format!(
        "<style>.paper{{fill:#fdfcf9}}{css}</style>\n<path class=\"paper\" d=\"M0 0h{wide}v{high}h-{wide}z\"/>\n"
    );
    picture.replacen("<svg ", &head, 1).replacen("</desc>\n", &format!("</desc>\n{sheet}"), 1)
}

#[cfg(test)]
mod tests {
    use plotters::prelude::*;

    use super::*;
    use crate::report::paint::Paint;

    #[test]
    fn writes_tenths_and_merges_shapes_of_one_style() {
        assert_eq!(["0", "1", "1.5", "-0.3", "-12"], [0, 10, 15, -3, -120].map(tenths).each_ref().map(|s| s.as_str()));
        let mut body = String::new();
        {
            let area = SvgBackend::new(&mut body, (100, 50)).into_drawing_area();
            assert_eq!(area.dim_in_pixel(), (1000, 500));
            for x in [10, 25] {
                area.draw(&Rectangle::new([(x, 10), (x + 5, 20)], Paint::Bad.token().filled())).unwrap();
            }
            area.draw(&PathElement::new(
                vec![(0, 0), (15, 7)],
                plotters::style::Color::stroke_width(&Paint::Edge.token(), 12),
            ))
            .unwrap();
        }
        assert_eq!(
            body,
            "<path class=\"f-bad\" d=\"M1 1h0.5v1h-0.5zM2.5 1h0.5v1h-0.5z\"/>\n\
             <path class=\"s-edge\" stroke-width=\"1.2\" d=\"M0 0l1.5 0.7\"/>\n"
        );
    }

    #[test]
    fn text_stays_text_and_inert() {
        let mut body = String::new();
        {
            let area = SvgBackend::new(&mut body, (100, 50)).into_drawing_area();
            let style = ("sans-serif", 110).into_font().color(&Paint::Ink.token());
            area.draw(&Text::new("</text><script>&\"'\u{1}", (10, 20), style)).unwrap();
        }
        assert!(body.contains(">&lt;/text&gt;&lt;script&gt;&amp;&quot;&#39;\u{fffd}</text>"), "{body}");
        assert!(body.contains("font-size=\"11\""));
    }
}
