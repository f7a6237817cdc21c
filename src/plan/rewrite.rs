//! A plan's text with other figures in it: the rest stays as it was typed.

use std::ops::Range;

use toml::de::{DeTable, DeValue};

/// A figure of a plan that can be put in place of the one there.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum Place {
    /// `level` of the anchor with this index from 0.
    AnchorLevel(usize),
    /// `detector.mismatch`.
    Mismatch,
    /// `detector.offset_current`.
    OffsetCurrent,
}

/// Returns the text with each place's value replaced by the given TOML; a place that the text does not hold is left out.
#[must_use]
pub fn rewritten(text: &str, changes: &[(Place, String)]) -> String {
    let (root, _) = DeTable::parse_recoverable(text);
    let mut spans: Vec<(Range<usize>, &str)> =
        changes.iter().filter_map(|(place, value)| Some((span_of(root.get_ref(), place)?, value.as_str()))).collect();
    // From the end, so that earlier places keep theirs.
    spans.sort_by_key(|(span, _)| std::cmp::Reverse(span.start));
    let mut out = text.to_owned();
    for (span, value) in spans {
        out.replace_range(span, value);
    }
    out
}

fn span_of(root: &DeTable, place: &Place) -> Option<Range<usize>> {
    match place {
        Place::AnchorLevel(index) => match root.get("anchor")?.get_ref() {
            DeValue::Array(anchors) => match anchors.get(*index)?.get_ref() {
                DeValue::Table(anchor) => Some(anchor.get("level")?.span()),
                _ => None,
            },
            _ => None,
        },
        Place::Mismatch => detector_span(root, "mismatch"),
        Place::OffsetCurrent => detector_span(root, "offset_current"),
    }
}

fn detector_span(root: &DeTable, key: &str) -> Option<Range<usize>> {
    match root.get("detector")?.get_ref() {
        DeValue::Table(detector) => Some(detector.get(key)?.span()),
        _ => None,
    }
}
