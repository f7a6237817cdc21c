//! The colours of plots and page: one table, light and dark, that the drawing backend turns into classes.

use plotters::style::RGBColor;

/// What a colour means; shapes and words carry the same meaning, so no reader depends on the colour.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(crate) enum Paint {
    Ink,
    Faint,
    Grid,
    Clear,
    Marginal,
    Bad,
    Guard,
    Edge,
    Sequence,
    Formula,
    Modulator,
    Total,
    Unknown,
    /// Step of the level scale, 0 the weakest.
    Level(u8),
}

/// Number of steps of the level scale.
pub(crate) const LEVEL_STEPS: u8 = 8;

/// (paint, class, light, dark, more rules for lines).
const TABLE: [(Paint, &str, &str, &str, &str); 21] = [
    (Paint::Ink, "ink", "#1b2126", "#e6e3db", ""),
    (Paint::Faint, "faint", "#566069", "#a3acb1", ""),
    (Paint::Grid, "grid", "#e2dfd6", "#2d353a", ""),
    (Paint::Clear, "clear", "#5f93b3", "#6ea6c8", ""),
    (Paint::Marginal, "marginal", "#c08210", "#e0a93b", ""),
    (Paint::Bad, "bad", "#9c1341", "#f4708f", ""),
    (Paint::Guard, "guard", "#1b2126", "#e6e3db", "stroke-dasharray:6 3"),
    (Paint::Edge, "edge", "#5a4a8c", "#b5a6ea", ""),
    (Paint::Sequence, "sequence", "#86a3b5", "#5d7f94", ""),
    (Paint::Formula, "formula", "#1b2126", "#e6e3db", "stroke-dasharray:7 3"),
    (Paint::Modulator, "modulator", "#a5531b", "#e39a63", ""),
    (Paint::Total, "total", "#5a4a8c", "#b5a6ea", ""),
    (Paint::Unknown, "unknown", "#c4b3c0", "#6a5866", ""),
    // Lightness falls in even steps on light paper and rises on dark paper; samples of the cividis map, which was made
    // for colour-blind readers (Nuñez, Anderton & Renslow 2018, doi 10.1371/journal.pone.0199239; from memory).
    (Paint::Level(0), "v0", "#f3e68c", "#16335f", ""),
    (Paint::Level(1), "v1", "#dcca5c", "#33446b", ""),
    (Paint::Level(2), "v2", "#bfae6d", "#4e576c", ""),
    (Paint::Level(3), "v3", "#a19575", "#676a70", ""),
    (Paint::Level(4), "v4", "#837f78", "#827e78", ""),
    (Paint::Level(5), "v5", "#666970", "#a09576", ""),
    (Paint::Level(6), "v6", "#47536d", "#c4b06b", ""),
    (Paint::Level(7), "v7", "#0f2a5c", "#f5e04a", ""),
];

impl Paint {
    fn row(self) -> usize {
        TABLE.iter().position(|(paint, ..)| *paint == self).unwrap_or(0)
    }

    /// Returns the colour that stands for the paint inside the drawing crate: the row of the table, no real colour.
    pub(crate) fn token(self) -> RGBColor {
        RGBColor(u8::try_from(self.row()).unwrap_or(0), 0, 0)
    }
}

/// Returns the class that a stand-in colour means.
pub(crate) fn class_of(token: (u8, u8, u8)) -> &'static str {
    TABLE.get(usize::from(token.0)).map_or("ink", |row| row.1)
}

/// Returns the rules for every class on light paper.
pub(crate) fn plain_css() -> String {
    let mut css = String::from(
        ".plot{font-family:\"DejaVu Sans\",Verdana,\"Segoe UI\",system-ui,sans-serif}.plot path{stroke-linejoin:round}",
    );
    for (_, class, light, _, more) in TABLE {
        css.push_str(&format!(".f-{class}{{fill:{light}}}.s-{class}{{fill:none;stroke:{light};{more}}}"));
    }
    css
}

/// Returns the rules for every class, light and dark, as used inside each plot file and once in the page.
pub(crate) fn plot_css() -> String {
    let mut css = plain_css();
    css.push_str("@media screen and (prefers-color-scheme:dark){");
    for (_, class, _, dark, _) in TABLE {
        css.push_str(&format!(".f-{class}{{fill:{dark}}}.s-{class}{{stroke:{dark}}}"));
    }
    css.push('}');
    css
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Relative luminance as WCAG 2.1 defines it.
    fn luminance(hex: &str) -> f64 {
        let part = |at: usize| {
            let value = f64::from(u8::from_str_radix(&hex[at..at + 2], 16).unwrap()) / 255.0;
            if value <= 0.04045 { value / 12.92 } else { ((value + 0.055) / 1.055).powf(2.4) }
        };
        0.2126 * part(1) + 0.7152 * part(3) + 0.0722 * part(5)
    }

    #[test]
    fn every_step_of_the_level_scale_differs_in_grey() {
        let rows: Vec<_> = TABLE.iter().filter(|row| matches!(row.0, Paint::Level(_))).collect();
        assert_eq!(rows.len(), usize::from(LEVEL_STEPS));
        for pair in rows.windows(2) {
            assert!(luminance(pair[0].2) > 1.15 * luminance(pair[1].2), "light {} {}", pair[0].1, pair[1].1);
            assert!(luminance(pair[1].3) > 1.15 * luminance(pair[0].3), "dark {} {}", pair[0].1, pair[1].1);
        }
    }

    #[test]
    fn text_keeps_its_contrast_on_paper() {
        for (paint, light, dark) in TABLE.map(|row| (row.0, row.2, row.3)) {
            if matches!(paint, Paint::Ink | Paint::Faint | Paint::Bad | Paint::Edge) {
                // 4.5 is the contrast that WCAG 2.1 (1.4.3) asks of text.
                assert!((luminance("#fdfcf9") + 0.05) / (luminance(light) + 0.05) >= 4.5, "{paint:?} on light");
                assert!((luminance(dark) + 0.05) / (luminance("#14191c") + 0.05) >= 4.5, "{paint:?} on dark");
            }
        }
    }

    #[test]
    fn tokens_lead_back_to_their_class() {
        for (paint, class, ..) in TABLE {
            let RGBColor(r, g, b) = paint.token();
            assert_eq!(class_of((r, g, b)), class);
        }
    }
}
